package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/feed"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

func newFeedCommand() *cobra.Command {
	var path string
	var again bool
	var files historyFlags
	c := &cobra.Command{
		Use:   "feed FILE...",
		Short: "Publish files of observations and acts into the stream",
		Long: `Publishes CSV, newline-delimited JSON or Parquet files ("-" is standard input) into the
stream, in the order in which their rows became known. With or without a running
daemon: if one runs, feed waits until it has read them and says what became of
them; if none runs, feed starts the bus itself, and the daemon reads on when it is
started next. A daemon that goes away meanwhile is waited for, up to a minute.

Every row has an id, given or derived from its content, so that feeding a file
again counts nothing twice: its rows are repeats, or by then beyond the horizon and
refused. But a row without an id that was edited is another row: it is counted
beside the first. Data that are corrected need the columns id and
revision.

A row that can't be used is named with its file and line; the rest goes on, and
the exit code is 1.

A store that has not gone live takes its time from the data: feed years of
history before the first "tailbell run". Later rows older than the indicator's
horizon are refused. The looks that follow the last row are made when the clock
gets there; where nothing will follow, --until TIME moves the clock there.

Rows are counted under the set-up that is in force in the stream. Feed puts its own
into force in a stream that has none yet; later ones come into force by
"tailbell run". Rows that the two would count differently are not fed.`,
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			if !setup.History {
				files.latest = monitor.InstantOf(now())
			}
			h, err := files.read(c.Context(), setup, args, c.InOrStdin(), c.ErrOrStderr())
			if err != nil {
				return err
			}
			f := feeding{setup: setup, h: h, again: again, until: files.until, stdout: c.OutOrStdout(), stderr: c.ErrOrStderr()}
			return f.feed(c.Context())
		},
	}
	addConfigFlag(c, &path)
	files.add(c)
	c.Flags().BoolVar(&again, "accept-repeats", false, `feed series of indicators with ids = "none" too, though a second feeding counts twice`)
	return c
}

// feeding is one run of feed.
type feeding struct {
	setup          *config.Setup
	h              *history.History
	again          bool            // feed what a second feeding counts twice
	until          monitor.Instant // monitor.Beginning for none
	stdout, stderr io.Writer

	bus    *bus.Bus
	daemon bool        // one runs
	before statusReply // how it was before
	done   int         // entries that are stored for certain
}

func (f *feeding) feed(ctx context.Context) (err error) {
	if names := feed.Check(f.setup, f.h.Entries); len(names) > 0 && !f.again {
		return errors.New(`the files hold series of indicators that keep no ids (` + strings.Join(names, ", ") +
			`): feeding them a second time would count them twice. Feed them with --accept-repeats if they are new`)
	}
	if err := f.open(ctx); err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.bus.Close()) }()
	census, err := f.agree(ctx)
	if err != nil {
		return err
	}
	if f.daemon {
		if err := f.ask(ctx, &f.before); err != nil {
			return err
		}
	}
	if err := f.publish(ctx); err != nil {
		return f.broken(ctx, err)
	}
	if err := errors.Join(f.tell(), census.tell(f.stdout)); err != nil {
		return err
	}
	if f.daemon {
		if err := f.await(ctx); err != nil {
			return err
		}
	}
	if f.h.Counts.Faults > 0 {
		return errReported
	}
	return nil
}

// open finds the running daemon's bus, or starts it.
func (f *feeding) open(ctx context.Context) (err error) {
	f.bus, err = bus.Dial(ctx, f.setup)
	if errors.Is(err, bus.ErrNoDaemon) {
		if err := checkFolder(f.setup); err != nil {
			return err
		}
		f.bus, err = bus.Open(ctx, f.setup)
		return err
	}
	if err != nil {
		return err
	}
	f.daemon = true
	if f.setup.Bus.URL != "" { // which is there without a daemon too
		if err := f.ask(ctx, &statusReply{}); unanswered(err) {
			f.daemon = false
		}
	}
	return nil
}

// agree sees to it that the stream has a set-up: this one, if it has none yet.
// It refuses rows that the one in force would not count as this one does.
func (f *feeding) agree(ctx context.Context) (census, error) {
	rows := countSeries(f.h.Entries)
	force := f.setup
	for n := range f.setup.Partitions {
		raw, found, err := f.bus.LastSetting(ctx, n)
		if err != nil {
			return census{}, err
		}
		if !found {
			if err := announceSetup(ctx, f.bus, f.setup, n); err != nil {
				return census{}, err
			}
			continue
		}
		if force, err = config.Parse(raw.Data, "the set-up in force"); err != nil {
			return census{}, fmt.Errorf("the set-up in force in the stream can't be read by this program: %w", err)
		}
	}
	c := census{rows: rows, setup: force}
	if force.Digest == f.setup.Digest {
		return c, nil
	}
	if others := c.differing(f.setup); len(others) > 0 {
		return c, fmt.Errorf("another set-up is in force in the stream, which counts these series otherwise than this one: %s\n"+
			"Nothing was fed. Start tailbell run with this set-up, which puts it into force, and feed again", c.name(others))
	}
	return c, say(f.stderr, "Another set-up is in force in the stream, and the rows are counted under that one. It counts these series as this one\n"+
		"does; where else they differ, such as in limits, this one comes into force by tailbell run.")
}

// publish publishes what is not published yet, and the tick that ends it. A
// daemon that goes away is waited for.
func (f *feeding) publish(ctx context.Context) error {
	bar := newBar(f.stderr, int64(len(f.h.Entries)), "feeding")
	defer bar.end()
	for {
		rest, before := f.h.Entries[f.done:], f.done
		n, err := feed.Publish(ctx, f.bus, f.setup, rest, func(n int) { bar.set(int64(before+n), 0) })
		f.done += n
		if err == nil {
			err = f.tick(ctx)
		}
		if err == nil || !f.daemon || !errors.Is(err, bus.ErrClosed) || ctx.Err() != nil {
			return err
		}
		if err := f.redial(ctx); err != nil {
			return err
		}
	}
}

// tick moves the clock of every partition to the end of the history: where sums
// wait for all partitions, also of those that it does not reach by itself.
func (f *feeding) tick(ctx context.Context) error {
	if n := len(f.h.Entries); n > 0 && f.setup.TellsAcross() {
		f.until = max(f.until, f.h.Entries[n-1].Time)
	}
	if f.until == monitor.Beginning {
		return nil
	}
	header := map[string][]string{wire.TimeHeader: {wire.FormatTime(f.until)}}
	for n := range f.setup.Partitions {
		if _, err := f.bus.Publish(ctx, bus.Outgoing{Partition: n, Kind: bus.Tick, Header: header}); err != nil {
			return err
		}
	}
	return nil
}
