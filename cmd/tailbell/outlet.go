package main

import (
	"context"
	"errors"

	"github.com/spf13/cobra"

	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

// newOutletCommand returns "tailbell outlet": what a person does about a way
// out.
func newOutletCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "outlet",
		Short: "List and try the ways out, and let go of what waits for one",
		Args:  cobra.NoArgs,
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newOutletListCommand(), newOutletTryCommand(), newOutletSkipCommand(), newOutletDropCommand())
	return c
}

func newOutletDropCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "drop NAME",
		Short: "Forget an outlet that the set-up no longer names, with the steps that wait for it",
		Long: `Forgets an outlet that the set-up no longer names. Steps are kept until every
outlet has delivered them: one that is gone keeps them for ever, and status shows
them as not delivered until this is said.`,
		Args: cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var waited uint64
			if err := ask(c.Context(), setup, verbDropOutlet, args[0], &waited); err != nil {
				return sayNeverRan(setup, err)
			}
			return say(c.OutOrStdout(), "Outlet %s is forgotten; %s waited for it.", args[0], amount(waited, "steps"))
		},
	}
	addConfigFlag(c, &path)
	return c
}

// dropOutlet forgets an outlet in every partition and returns how many steps
// waited for it.
func (d *daemon) dropOutlet(_ context.Context, name string) (any, error) {
	var waited uint64
	found := false
	for _, p := range d.parts.all() {
		for _, q := range p.queues {
			if q.Name() == name {
				return nil, control.Errorf(codeRefused, "outlet %q is in use: take it out of the set-up first, and start again", name)
			}
		}
		outlets, err := p.store.OutletState()
		if err != nil {
			return nil, err
		}
		for _, o := range outlets {
			if o.Name == name {
				waited += o.Depth
			}
		}
		err = p.store.DropOutlet(name)
		if err != nil && !errors.Is(err, store.ErrNoOutlet) {
			return nil, err
		}
		if err == nil {
			found = true
			p.letGo()
		}
	}
	if !found {
		return nil, control.Errorf(codeNotFound, "no outlet %q: tailbell status shows them", name)
	}
	return waited, nil
}
