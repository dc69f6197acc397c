package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

// askTime is how long a command waits for the daemon.
const askTime = 15 * time.Second

// ask asks the daemon that runs under the set-up. The error is a
// bus.ErrNoDaemon if none does.
func ask(ctx context.Context, setup *config.Setup, verb string, arg, result any) (err error) {
	ctx, cancel := context.WithTimeout(ctx, askTime)
	defer cancel()
	b, err := bus.Dial(ctx, setup)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	err = callDaemon(ctx, setup, b, verb, arg, result)
	if setup.Bus.URL != "" && unanswered(err) {
		// A remote bus is there without a daemon too.
		return fmt.Errorf("%w for %s on its remote bus", bus.ErrNoDaemon, setup.Name)
	}
	return err
}

// againTime is how long one try waits for an answer, where another process may
// be about to take over answering.
const againTime = 3 * time.Second

// callDaemon asks the daemon. Where processes share the partitions, what only reads is
// asked again as long as nobody answers.
func callDaemon(ctx context.Context, setup *config.Setup, b *bus.Bus, verb string, arg, result any) error {
	if !setup.Bus.Share || !slices.Contains([]string{verbStatus, verbAlerts, verbAlert, verbRefused, verbOutlets, verbExport, verbSeries, verbSetting}, verb) {
		return control.Call(ctx, b, verb, arg, result)
	}
	for {
		try, cancel := context.WithTimeout(ctx, againTime)
		err := control.Call(try, b, verb, arg, result)
		cancel()
		var answer *control.Error
		moving := errors.As(err, &answer) && (answer.Code == codeElsewhere || answer.Code == control.TimedOut) || errors.Is(err, context.DeadlineExceeded)
		if !moving || ctx.Err() != nil {
			return err
		}
		if pause(ctx, frontAgain) != nil {
			return err
		}
	}
}

// unanswered reports whether nobody on the bus answers the verb.
func unanswered(err error) bool {
	var answer *control.Error
	return errors.As(err, &answer) && answer.Code == control.NoAnswer
}

// sayNeverRan says of a daemon that does not run if it never did.
func sayNeverRan(setup *config.Setup, err error) error {
	if !errors.Is(err, bus.ErrNoDaemon) {
		return err
	}
	if setup.Bus.Share {
		return fmt.Errorf("%w, and no other process that shares its partitions: tailbell run starts one", err)
	}
	if _, statErr := os.Stat(storePath(setup, 0)); errors.Is(statErr, fs.ErrNotExist) {
		return fmt.Errorf("nothing has run yet in %s: tailbell run starts the daemon", setup.Folder)
	}
	return fmt.Errorf("%w: tailbell run starts it", err)
}

// lookAside reads what a verb would tell from the stores of a daemon that does
// not run.
func lookAside(setup *config.Setup, use func(*store.Store) error) (err error) {
	if setup.Bus.Share { // the stores are spread, and none here may be the last
		return sayNeverRan(setup, bus.ErrNoDaemon)
	}
	for n := range setup.Partitions {
		st, err := store.OpenReadOnly(storePath(setup, n), store.Options{})
		if errors.Is(err, fs.ErrNotExist) {
			return sayNeverRan(setup, bus.ErrNoDaemon)
		}
		if err != nil {
			return fmt.Errorf("no daemon runs, and its store can't be read: %w", err)
		}
		if found, want := st.Identity(), identityOf(setup, n); found != want {
			return errors.Join(wrongStore(st.Path(), found, want), st.Close())
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
