package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor/store"
)

func newStoreAcceptCommand() *cobra.Command {
	var path string
	o := acceptOptions{partition: everyPartition}
	c := &cobra.Command{
		Use:   "accept",
		Short: "Take the bus's stream in place of the one that a store was filled from",
		Long: `Compares the stream on the bus with what the stores were filled from, while no
daemon runs, and says how they differ and how far. With --yes the stream is taken
as it is: reading goes on after the last message that the bus stored no later
than the last one counted; --after names another position. What was counted stays
counted, alerts and undelivered steps stay as they are.

A stream differs if the bus lost its power, was restored from a copy, or was made
anew. The other way out is to put back a copy of the store that fits the stream.
Before accepting, find out from the publishers what is missing: messages that the
stream lost and the store has not counted must be sent again. An observation with
an id may be sent again whether it was counted or not; one without is counted
twice.`,
		Args: cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			o.given = c.Flags().Changed("after")
			return acceptStreams(c.Context(), c.OutOrStdout(), setup, o)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&o.yes, "yes", false, "accept, instead of only saying what differs")
	c.Flags().Uint64Var(&o.after, "after", 0, "read on after this `POSITION`")
	c.Flags().IntVar(&o.partition, "partition", everyPartition, "only the partition of this `NUMBER`; -1 for all")
	return c
}

type acceptOptions struct {
	yes       bool
	after     uint64
	given     bool // after was given
	partition int
}

// acceptStreams compares each store with the bus's stream and takes it, if so
// asked. It fails if a difference is left.
func acceptStreams(ctx context.Context, w io.Writer, setup *config.Setup, o acceptOptions) (err error) {
	b, err := bus.Open(ctx, setup, bus.WithoutListener())
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	left := false
	for n := range setup.Partitions {
		if o.partition != everyPartition && o.partition != n {
			continue
		}
		differs, err := acceptStream(ctx, w, b, setup, n, o)
		if err != nil {
			return fmt.Errorf("partition %d: %w", n, err)
		}
		left = left || differs
	}
	if left {
		return errReported
	}
	return nil
}

func acceptStream(ctx context.Context, w io.Writer, b *bus.Bus, setup *config.Setup, n int, o acceptOptions) (left bool, err error) {
	path := storePath(setup, n)
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
		return false, say(w, "Partition %d has no store yet.", n)
	}
	st, err := store.Open(path, identityOf(setup, n), store.Options{})
	if err != nil {
		return false, err
	}
	defer func() { err = errors.Join(err, st.Close()) }()
	diff, err := intake.Compare(ctx, b, st)
	if err != nil {
		return false, err
	}
	if diff == nil {
		return false, say(w, "Partition %d: the stream is the one that the store was filled from.", n)
	}
	cut := o.after
	if !o.given {
		if cut, err = diff.Cut(ctx, b); err != nil {
			return false, err
		}
	}
	if cut > diff.Last {
		return false, fmt.Errorf("--after %d lies beyond the stream's end at %d", cut, diff.Last)
	}
	if err := say(w, "Partition %d: %v.\nThe stream holds positions %d to %d.", n, diff, diff.First, diff.Last); err != nil {
		return false, err
	}
	if !o.yes {
		return true, say(w, "With --yes reading would go on after position %d.", cut)
	}
	if err := st.AcceptStream(diff.Now, cut); err != nil {
		return false, err
	}
	return false, say(w, "Accepted: reading goes on after position %d.", cut)
}
