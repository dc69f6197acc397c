package main

import (
	"context"
	"errors"
	"fmt"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
)

func newOutletTryCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "try NAME",
		Short: "Send a marked test through an outlet, and say what became of it",
		Long: `Sends a test, marked as one, through the outlet: the running daemon does it, on the
way that its alerts take, past what waits. Without a daemon this command does it
itself, by the set-up; the bus can't be tried then.`,
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var key string
			err = ask(c.Context(), setup, verbTryOutlet, args[0], &key)
			if errors.Is(err, bus.ErrNoDaemon) {
				key, err = tryAside(c.Context(), setup, args[0])
			}
			if err != nil {
				return err
			}
			return say(c.OutOrStdout(), "Outlet %s took the test %s. Look whether it got where it should.", args[0], key)
		},
	}
	addConfigFlag(c, &path)
	return c
}

// tryAside tries an outlet without a daemon.
func tryAside(ctx context.Context, setup *config.Setup, name string) (string, error) {
	for i := range setup.Outlets {
		if setup.Outlets[i].Name != name {
			continue
		}
		out, err := newOutlet(setup, &setup.Outlets[i], nil)
		if err != nil {
			return "", err
		}
		n := outlet.Trial(name, setup.Indicators[0].ZoneName, time.Now())
		return n.Key, out.Deliver(ctx, n)
	}
	if kindOf(setup, name) != "" {
		return "", fmt.Errorf("outlet %s is the running daemon's: tailbell run starts it", name)
	}
	return "", fmt.Errorf("no outlet %q in the set-up", name)
}

// tryOutlet sends a test through an outlet of the first partition that is open.
func (d *daemon) tryOutlet(ctx context.Context, name string) (any, error) {
	parts := d.parts.all()
	if len(parts) == 0 {
		return nil, control.Errorf(codeElsewhere, "this process owns no partition at present, through whose outlet a test could go: try again")
	}
	q := parts[0].queue(name)
	if q == nil {
		return nil, control.Errorf(codeNotFound, "no outlet %q: tailbell outlet list shows them", name)
	}
	n := outlet.Trial(name, d.setup.Indicators[0].ZoneName, time.Now())
	if err := q.Try(ctx, n); err != nil {
		return nil, control.Errorf(codeRefused, "outlet %s did not take the test: %v", name, err)
	}
	return n.Key, nil
}
