package monitor

import (
	"fmt"
	"runtime"
	"slices"
	"sync"
	"sync/atomic"

	"tailbell/monitor/life"
)

// restored is a series as it was read, before the engine takes it in.
type restored struct {
	series *series // nil for a stub
	stub   []byte
	err    error
}

// restoreStretch is how many series one goroutine reads at a time.
const restoreStretch = 512

// restoreAll reads all series, side by side on all processors since nothing that is
// read of one speaks of another, and then takes them in, in order of their numbers.
func (e *Engine) restoreAll(images []SeriesImage, record func(string) (life.Record, error)) error {
	all := make([]restored, len(images))
	var next atomic.Int64
	var readers sync.WaitGroup
	for range min(runtime.GOMAXPROCS(0), (len(images)+restoreStretch-1)/restoreStretch) {
		readers.Go(func() {
			var scratch cells
			for {
				from := int(next.Add(restoreStretch)) - restoreStretch
				if from >= len(images) {
					return
				}
				for n := from; n < min(from+restoreStretch, len(images)); n++ {
					all[n] = e.readSeries(uint32(n), &images[n], &scratch)
				}
			}
		})
	}
	readers.Wait()
	e.expectSeries(all)
	for n := range all {
		err := all[n].err
		switch x := &all[n]; {
		case err != nil:
		case x.series == nil:
			err = e.restoreStub(uint32(n), x.stub)
		default:
			err = e.takeIn(x.series, record)
		}
		if err != nil {
			return fmt.Errorf("monitor: restoring series %d: %w", n, err)
		}
	}
	return nil
}

// expectSeries makes room for what was read.
func (e *Engine) expectSeries(all []restored) {
	e.series = slices.Grow(e.series, len(all))
	count := map[*indicator]int{}
	for n := range all {
		if s := all[n].series; s != nil && !s.mirror {
			count[s.indicator]++
		}
	}
	for _, ix := range e.indicators {
		ix.series = slices.Grow(ix.series, count[ix])
	}
	if len(e.byName) == 0 {
		e.byName = make(map[string]*series, len(all))
	}
}

// readSeries lays the encodings of a series over each other. It changes nothing of
// the engine. Its cells lie in scratch until it is known how many they are.
func (e *Engine) readSeries(number uint32, image *SeriesImage, scratch *cells) restored {
	s := &series{number: number, cells: (*scratch)[:0]}
	layers := image.Patches
	if image.State != nil {
		layers = append([][]byte{image.State}, image.Patches...)
	}
	for i := len(layers) - 1; i > 0; i-- { // older ones may be of another series
		if l := layers[i]; len(l) > 1 && l[1]&flagNamed != 0 {
			layers = layers[i:]
			break
		}
	}
	if len(layers) == 1 && len(layers[0]) > 1 && layers[0][1]&flagRetired != 0 {
		return restored{stub: layers[0]}
	}
	for _, layer := range layers {
		if err := e.overlay(s, layer); err != nil {
			return restored{err: err}
		}
	}
	s.cells = slices.DeleteFunc(s.cells, func(c cell) bool { return c.slot < s.trimmed })
	if len(s.eventIDs) > 0 {
		s.eventIDs.forget(s.trimmed)
	}
	*scratch = s.cells[:0]
	s.array, s.cells = nil, s.cells.moved()
	s.array = s.cells
	return restored{series: s}
}

// moved returns the cells in a list of their own, with some room to grow.
func (cs cells) moved() cells {
	n := len(cs)
	if n == 0 {
		return nil
	}
	return append(make(cells, 0, n+n/4+1), cs...)
}

// takeIn puts a series that was read in its place.
func (e *Engine) takeIn(s *series, record func(string) (life.Record, error)) error {
	switch {
	case s.mirror:
		return e.restoreMirror(s)
	case s.name == "":
		return fmt.Errorf("it was never named: %w", errEncoding)
	case s.indicator == nil:
		return fmt.Errorf("%w: the indicator of %q is not in force", errEncoding, s.name)
	}
	for _, d := range [...]direction{upper, lower, silence} {
		if d == silence && s.silence == nil {
			continue
		}
		for _, a := range s.tail(d).all() {
			var err error
			if a.record, err = record(a.record.ID); err != nil {
				return fmt.Errorf("alert %s: %w", a.record.ID, err)
			}
			e.alerts[a.record.ID] = a
			if a.pending {
				e.pending = append(e.pending, a)
			}
		}
	}
	s.makePlaces()
	if !s.isGathered() || s.unsummed { // else they are stored: some acts may wait for it
		s.dates = e.datesOf(s.indicator, s.name)
	}
	s.derive()
	e.series = append(e.series, s)
	e.living++
	e.byName[s.name] = s
	s.indicator.series = append(s.indicator.series, s)
	s.indicator.resters.awake.add(s.number)
	s.alarm = noAlarm
	return nil
}
