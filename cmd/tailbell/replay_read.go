package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"strconv"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor/replay"
)

// readHistory reads files, or the stream, onto the tape and tells what is wrong
// or odd about the rows.
func (o *replayOptions) readHistory(ctx context.Context, paths []string) error {
	read, err := o.files.readOptions()
	if err == nil {
		err = o.readFrom(read.Zone)
	}
	if err != nil {
		return &usageError{err}
	}
	setup := o.setups[0]
	o.tape = &replay.Tape{}
	read.Stdin, read.Tape = o.stdin, o.tape
	read.CheckUnit, read.Limits = unitChecker(setup), wire.Limits{Observations: setup.Limits.MaxObservations, MessageBytes: setup.Limits.MaxMessageBytes}
	read.KeepsIDs, read.ZoneOf = keepsIDs(o.setups), zoneOf(setup)
	bar := newBar(o.err, -1, "reading")
	read.Progress = func(p history.Progress) { bar.set(p.Read, p.Size) }
	if o.stream {
		o.read, err = readStream(ctx, setup, o.rangeOf, read)
	} else {
		o.read, err = history.Read(ctx, paths, read)
	}
	bar.end()
	if err != nil {
		return err
	}
	if o.tape.Len() > 0 {
		place, last := o.tape.Last()
		if err := o.files.checkUntil(last, place.File, place.Line); err != nil {
			return &usageError{err}
		}
	}
	o.remarks = replay.Inspect(setup, o.tape)
	return errors.Join(tellRowFaults(o.err, o.read), o.tellRemarks())
}

// readFrom reads where in the stream to begin.
func (o *replayOptions) readFrom(zone *time.Location) error {
	if o.from == "" {
		return nil
	}
	if n, err := strconv.ParseUint(o.from, 10, 64); err == nil {
		o.rangeOf.Position = n
		return nil
	}
	at, err := history.ParseTime(o.from, zone)
	if err != nil {
		return fmt.Errorf("--from is neither a position nor a time: %w", err)
	}
	o.rangeOf.Time, o.rangeOf.HasTime = at, true
	return nil
}

// readStream reads the stream of the daemon that runs, or of the bus at rest.
func readStream(ctx context.Context, setup *config.Setup, from history.Range, opts history.Options) (h *history.History, err error) {
	b, err := bus.Dial(ctx, setup)
	if errors.Is(err, bus.ErrNoDaemon) {
		if _, missing := os.Stat(setup.Folder); errors.Is(missing, fs.ErrNotExist) {
			return nil, fmt.Errorf("there is no stream to replay: the folder %s does not exist; is the set-up the right one?", setup.Folder)
		}
		b, err = bus.Open(ctx, setup, bus.WithoutListener())
	}
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	return history.ReadStream(ctx, b, setup, from, opts)
}

// keepsIDs says whether one of the set-ups keeps the ids of a series.
func keepsIDs(setups []*config.Setup) func(string) bool {
	known := map[string]bool{}
	return func(series string) bool {
		keeps, seen := known[series]
		if seen {
			return keeps
		}
		for _, setup := range setups {
			for _, in := range indicatorsOf(setup, series) {
				keeps = keeps || in.KeepIDs
			}
		}
		known[series] = keeps
		return keeps
	}
}

// zoneOf says in which zone a series is counted.
func zoneOf(setup *config.Setup) func(string) *time.Location {
	return func(series string) *time.Location {
		if list := indicatorsOf(setup, series); len(list) == 1 {
			return list[0].Zone
		}
		return nil
	}
}

// mostTold is how many remarks of a kind are told one by one.
const mostTold = 20

// tellRemarks names what is odd about rows.
func (o *replayOptions) tellRemarks() error {
	told := map[replay.RemarkKind]int{}
	for _, r := range o.remarks.List {
		if told[r.Kind]++; told[r.Kind] > mostTold {
			continue
		}
		if err := say(o.err, "%s", r); err != nil {
			return err
		}
	}
	for _, kind := range replay.RemarkKinds {
		if n := o.remarks.Counts[kind]; n > mostTold {
			if err := say(o.err, "... and %s more of %s", amount(n-mostTold, "rows"), kind); err != nil {
				return err
			}
		}
	}
	return nil
}
