package main

import (
	"context"
	"errors"
	"fmt"
	"io"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
)

func newPartitionsDivideCommand() *cobra.Command {
	var path string
	o := divideOptions{}
	c := &cobra.Command{
		Use:   "divide",
		Short: "Carry the stream over into another number of partitions, while no daemon runs",
		Long: `Carries everything that the partitions were told over into --into partitions, each
message with the time at which it was first stored, and makes the new partitions'
stores from it. No daemon may run, and nobody can publish meanwhile: publishers get
an error, and must publish to the new partitions afterwards.

Nothing is put in place before the account balances: elements, events and exposure
of every series before and after, and every alert's record. What differs is told.
Outlets go on with the first step that they have yet to deliver.

It may be interrupted at any time: give the same command again and it goes on, or
--give-up, and all is as it was. The old messages stay in the stream, before those
that were carried over, until "tailbell stream trim" removes them; the old stores
are kept in a folder beside the new ones. The stream must still hold everything from
its beginning, and have room for as much again.

When it is done, write the new number into the set-up and start the daemon.`,
		RunE: func(c *cobra.Command, _ []string) error {
			o.progress = c.ErrOrStderr()
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			if o.giveUp {
				return giveUpDivision(c.Context(), c.OutOrStdout(), setup)
			}
			next, err := o.check(setup)
			if err != nil {
				return &usageError{err}
			}
			return divideStream(c.Context(), c.OutOrStdout(), setup, next, o)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().IntVar(&o.into, "into", 0, "into this `NUMBER` of partitions")
	c.Flags().BoolVar(&o.giveUp, "give-up", false, "give up a division that was interrupted: remove what was carried over")
	c.Flags().BoolVar(&o.accept, "accept", false, "put the new partitions in place though records of alerts differ")
	c.Flags().BoolVar(&o.asJSON, "json", false, "as JSON, with the account of every series")
	c.MarkFlagsMutuallyExclusive("into", "give-up")
	return c
}

type divideOptions struct {
	into                   int
	giveUp, accept, asJSON bool
	progress               io.Writer
}

// check returns the set-up with the new number of partitions.
func (o *divideOptions) check(setup *config.Setup) (*config.Setup, error) {
	if o.into < 1 {
		return nil, errors.New("--into is missing: say into how many partitions, as --into 16")
	}
	if err := fitsPartitions(setup.Text, o.into); err != nil {
		return nil, err
	}
	next := *setup
	next.Partitions = o.into
	return &next, nil
}

// fitsPartitions reports whether a set-up may have so many partitions.
func fitsPartitions(text []byte, into int) error {
	if _, err := config.Parse(config.WithPartitions(text, into), "the set-up"); err != nil {
		return fmt.Errorf("the set-up can't have %s:\n%w", amount(into, "partitions"), err)
	}
	return nil
}

// openToDivide opens the bus of a deployment that no daemon serves.
func openToDivide(ctx context.Context, setup *config.Setup) (*bus.Bus, error) {
	b, err := bus.Open(ctx, setup, bus.WithoutListener(), bus.ToDivide())
	if err != nil || setup.Bus.URL == "" {
		return b, err
	}
	// The lock is of this folder only; a remote bus may serve a daemon elsewhere.
	var s statusReply
	asking, cancel := context.WithTimeout(ctx, askTime)
	defer cancel()
	err = control.Call(asking, b, verbStatus, nil, &s)
	if unanswered(err) {
		return b, nil
	}
	if err == nil {
		err = fmt.Errorf("a daemon runs for %s on its remote bus: stop every one first", setup.Name)
	}
	return nil, errors.Join(err, b.Close())
}

func giveUpDivision(ctx context.Context, w io.Writer, setup *config.Setup) (err error) {
	b, err := openToDivide(ctx, setup)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	_, dividing, err := bus.PartitionsOf(ctx, b)
	if err != nil {
		return err
	}
	if dividing == 0 {
		return say(w, "No division is under way.")
	}
	n, err := b.GiveUpDivision(ctx)
	if err != nil {
		return err
	}
	if err := placeOf(setup, b.Divisions()+1).clear(); err != nil {
		return err
	}
	return say(w, "Gave up: %s carried over %s removed, and all is as it was.", amount(n, "messages"), wasWere(n))
}

func wasWere(n int) string {
	if n == 1 {
		return "was"
	}
	return "were"
}

func divideStream(ctx context.Context, w io.Writer, setup, next *config.Setup, o divideOptions) (err error) {
	b, err := openToDivide(ctx, setup)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	now, _, err := bus.PartitionsOf(ctx, b)
	switch {
	case err != nil:
		return err
	case now == next.Partitions:
		if err := settleOwners(ctx, b, next, placeOf(setup, b.Divisions()), b.Divisions()); err != nil {
			return err
		}
		return finishMoving(w, setup, next, placeOf(setup, b.Divisions()))
	case now != setup.Partitions:
		return fmt.Errorf("the stream has %s, the set-up says %d: write partitions = %d first",
			amount(now, "partitions"), setup.Partitions, now)
	}
	v := &division{bus: b, setup: setup, next: next, options: o}
	defer func() { err = errors.Join(err, v.close()) }()
	if err := v.carry(ctx); err != nil {
		return err
	}
	if err := v.fill(ctx); err != nil {
		return err
	}
	if err := v.tell(w); err != nil {
		return err
	}
	if !v.alerts.Balanced() && !o.accept {
		return fmt.Errorf("records of alerts differ, so nothing was put in place: --accept puts it in place all the same, --give-up takes it back")
	}
	if err := v.move.Finish(ctx); err != nil {
		return err
	}
	if err := v.close(); err != nil {
		return err
	}
	if err := settleOwners(ctx, b, next, v.place, v.move.Number()); err != nil {
		return err
	}
	if o.asJSON {
		_, err := v.place.swap(setup, next)
		return err
	}
	return finishMoving(w, setup, next, v.place)
}

// finishMoving puts the stores that belong to the stream's new partitions in
// place, unless that is done.
func finishMoving(w io.Writer, setup, next *config.Setup, place divisionPlace) error {
	aside, err := place.swap(setup, next)
	if err != nil {
		return err
	}
	if !aside {
		return say(w, "The stream has %s already. Write partitions = %d in the set-up.", amount(next.Partitions, "partitions"), next.Partitions)
	}
	return say(w, `The stores of before lie in %s: remove them when all is well.
Now write partitions = %d in the set-up, tell publishers, and start the daemon.`, place.aside(), next.Partitions)
}
