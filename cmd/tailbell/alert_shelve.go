package main

import (
	"context"
	"errors"
	"fmt"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

func newShelveCommand() *cobra.Command {
	a := acting{act: monitor.Act{Kind: monitor.Shelve}}
	var until, span string
	c := newActing(&a, "Put an alert aside until a stated time",
		`Puts the alert aside until a stated time: it goes on being watched and recorded, but
outlets for people are not told. It comes back by itself when the time is over: if it
still signals, everybody is told again, and somebody has to acknowledge it. Shelved
again, it has the new time. An alert that rings anew after this one has returned is
another one, and is told.`)
	c.Flags().StringVar(&until, "until", "", "the `DATE` with which it comes back, 2026-03-09, or the time: 2026-03-09T08:00:00+01:00")
	c.Flags().StringVar(&span, "for", "", "or how `LONG` from now: 12h, 7d")
	c.MarkFlagsMutuallyExclusive("until", "for")
	c.PreRunE = func(*cobra.Command, []string) (err error) {
		switch {
		case until != "":
			if _, plain := time.Parse(time.DateOnly, until); plain == nil {
				a.date = until // in the zone of the alert
			} else if a.act.Until, err = wire.ParseTime(until); err != nil {
				return &usageError{fmt.Errorf("--until: %w", err)}
			}
		case span != "":
			if a.span, err = spanOf(span); err != nil {
				return &usageError{err}
			}
		default:
			return &usageError{errors.New("--until is missing: say when it comes back, by --until DATE or --for 7d")}
		}
		return nil
	}
	return c
}

// spanOf reads for how long something is to be, from --for.
func spanOf(text string) (time.Duration, error) {
	span, err := config.ParseDuration(text)
	switch {
	case err != nil:
		return 0, fmt.Errorf("--for %q: write a whole number and s, m, h, d (24 hours) or w (7 days)", text)
	case span <= 0:
		return 0, fmt.Errorf("--for %s: it must be longer than nothing, as 12h", text)
	}
	return span, nil
}

// shelveUntil completes an act that says a date, which begins in the zone of the
// alert, or for how long, from the clock of its partition: in history time that is
// not the machine's.
func (a *acting) shelveUntil(ctx context.Context, setup *config.Setup, r *life.Record) error {
	if a.date != "" {
		date, err := time.ParseInLocation(time.DateOnly, a.date, words.Zone(r))
		a.act.Until = monitor.InstantOf(date)
		return err
	}
	if a.span == 0 {
		return nil
	}
	var s statusReply
	if err := ask(ctx, setup, verbStatus, nil, &s); err != nil {
		return err
	}
	now := time.Now()
	p := setup.PartitionOf(r.Series)
	if p < len(s.Partitions) && s.Partitions[p].History && s.Partitions[p].Clock != nil {
		now = *s.Partitions[p].Clock
	}
	a.act.Until = monitor.InstantOf(now.Add(a.span))
	return nil
}
