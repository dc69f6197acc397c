package main

import (
	"context"
	"errors"
	"io"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/feed"
	"tailbell/ingest/history"
)

func newFeedCommand() *cobra.Command {
	var path string
	var again bool
	var files historyFlags
	c := &cobra.Command{
		Use:   "feed FILE...",
		Short: "Publish files of observations and acts into the stream",
		Long: `Publishes CSV or newline-delimited JSON files ("-" is standard input) into the
stream, in the order in which their rows became known. With or without a running
daemon: if none runs, feed starts the bus itself, and the daemon reads on when it
is started next.

Every row has an id, given or derived from its content, so that feeding a file
again counts nothing twice. A row that can't be used is named with its file and
line; the rest goes on, and the exit code is 1.

A store that has not gone live takes its time from the data: feed years of
history before the first "tailbell run". Later rows older than the indicator's
horizon are refused.`,
		Args: cobra.MinimumNArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			h, err := files.read(c.Context(), setup, args, c.InOrStdin(), c.ErrOrStderr())
			if err != nil {
				return err
			}
			return feedHistory(c.Context(), setup, h, again, c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	addConfigFlag(c, &path)
	files.add(c)
	c.Flags().BoolVar(&again, "accept-repeats", false, `feed series of indicators with ids = "none" too, though a second feeding counts twice`)
	return c
}

func feedHistory(ctx context.Context, setup *config.Setup, h *history.History, again bool, stdout, stderr io.Writer) (err error) {
	if names := feed.Check(setup, h.Entries); len(names) > 0 && !again {
		return errors.New(`the files hold series of indicators that keep no ids (` + strings.Join(names, ", ") +
			`): feeding them a second time would count them twice. Feed them with --accept-repeats if they are new`)
	}
	b, how, err := busToFeed(ctx, setup)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	bar := newBar(stderr, int64(len(h.Entries)), "feeding")
	done, err := feed.Publish(ctx, b, setup, h.Entries, func(n int) { bar.set(int64(n), 0) })
	bar.end()
	said := say(stdout, "%d rows in %d files: %d observations and %d acts published (%s), %d not usable.",
		h.Counts.Rows, h.Counts.Files, h.Counts.Observations-max(0, len(h.Entries)-done-h.Counts.Acts), h.Counts.Acts, how, h.Counts.Faults)
	if err != nil {
		return errors.Join(err, said, say(stderr, "Published %d of %d; feeding again counts nothing twice.", done, len(h.Entries)))
	}
	if h.Counts.OutOfOrder > 0 {
		said = errors.Join(said, say(stdout, "%d rows stood before an earlier one and were put in order.", h.Counts.OutOfOrder))
	}
	if h.Counts.Faults > 0 {
		return errors.Join(said, errReported)
	}
	return said
}

// busToFeed returns the running daemon's bus, or starts it.
func busToFeed(ctx context.Context, setup *config.Setup) (b *bus.Bus, how string, err error) {
	b, err = bus.Dial(ctx, setup)
	if err == nil {
		return b, "to the running daemon", nil
	}
	if !errors.Is(err, bus.ErrNoDaemon) {
		return nil, "", err
	}
	b, err = bus.Open(ctx, setup)
	if err != nil {
		return nil, "", err
	}
	for n := range setup.Partitions {
		if err := announceSetup(ctx, b, setup, n); err != nil {
			return nil, "", errors.Join(err, b.Close())
		}
	}
	return b, "no daemon runs: they wait in the stream", nil
}
