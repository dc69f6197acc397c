package main

import (
	"context"
	"errors"
	"fmt"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

// askTime is how long a command waits for the daemon.
const askTime = 15 * time.Second

// ask asks the daemon that runs under the set-up.
func ask(ctx context.Context, setup *config.Setup, verb string, arg, result any) (err error) {
	ctx, cancel := context.WithTimeout(ctx, askTime)
	defer cancel()
	b, err := bus.Dial(ctx, setup)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	return control.Call(ctx, b, verb, arg, result)
}

// lookAside reads what a verb would tell from the stores of a daemon that does
// not run.
func lookAside(setup *config.Setup, use func(*store.Store) error) (err error) {
	for n := range setup.Partitions {
		st, err := store.OpenReadOnly(storePath(setup, n), store.Options{})
		if err != nil {
			return fmt.Errorf("no daemon runs, and its store can't be read: %w", err)
		}
		err = errors.Join(use(st), st.Close())
		if err != nil {
			return err
		}
	}
	return nil
}

// askOrLook asks the daemon, or if none runs reads its stores.
func askOrLook(ctx context.Context, path, verb string, arg, result any, use func(*store.Store) error) error {
	setup, err := loadSetup(path)
	if err != nil {
		return err
	}
	err = ask(ctx, setup, verb, arg, result)
	if errors.Is(err, bus.ErrNoDaemon) {
		return lookAside(setup, use)
	}
	return err
}
