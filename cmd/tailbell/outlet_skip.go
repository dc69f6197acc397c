package main

import (
	"context"
	"errors"

	"github.com/spf13/cobra"

	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

// skipRequest names a step that waits for an outlet.
type skipRequest struct {
	Outlet string `json:"outlet"`
	Step   string `json:"step"`
}

func newOutletSkipCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "skip NAME STEP",
		Short: "Let a single step go that an outlet always refuses",
		Long: `Lets a single step go that waits for an outlet, such as one that its receiver always
refuses and that holds up all that follow: it is not delivered there any more. STEP is
its key, as outlet list shows the first. The record of the alert keeps it, other
outlets get it, and outlet list counts what was let go.`,
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			if err := ask(c.Context(), setup, verbSkipStep, skipRequest{args[0], args[1]}, nil); err != nil {
				return sayNeverRan(setup, err)
			}
			return say(c.OutOrStdout(), "Outlet %s will not be told of step %s.", args[0], args[1])
		},
	}
	addConfigFlag(c, &path)
	return c
}

// skipStep lets a step go in the partition in which it waits.
func (d *daemon) skipStep(_ context.Context, req skipRequest) (any, error) {
	for _, p := range d.parts.all() {
		err := p.store.Skip(req.Outlet, req.Step)
		switch {
		case err == nil:
			d.log.Warn().Str("outlet", req.Outlet).Str("step", req.Step).Msg("let go by hand: not delivered")
			if q := p.queue(req.Outlet); q != nil {
				q.Again()
			}
			p.letGo()
			return nil, nil
		case !errors.Is(err, store.ErrNotFound) && !errors.Is(err, store.ErrNoOutlet):
			return nil, err
		}
	}
	return nil, control.Errorf(codeNotFound, "no step %q waits for an outlet %q: tailbell outlet list shows the first of each", req.Step, req.Outlet)
}
