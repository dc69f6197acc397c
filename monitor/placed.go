package monitor

import (
	"fmt"
	"math"
	"slices"

	"tailbell/config"
)

// placed is a window in force, with its place in the state of every series. A
// window is the same under the next set-up if it is as long and looks as often:
// it keeps its place wherever it stands in the list, so that what its looks have
// found stays its own.
type placed struct {
	*config.Window
	place int
	// since is the first boundary at which it looks since it came into force.
	since int64
	// whole is the slot from which on everything was still kept then: what
	// reaches before it is filling.
	whole int64
}

// maxPlaces is how many places there are: an alert has a bit for each of them.
const maxPlaces = 64

// begin is the slot before which no look of the window in that place reaches.
func (ep *epoch) begin(s *series, place int) int64 {
	p := ep.placed(place)
	if p == nil {
		return unborn // it is not in force
	}
	return max(s.birth, p.whole)
}

// placed returns the window in that place, nil if it is not in force.
func (ep *epoch) placed(place int) *placed {
	if place < len(ep.windows) && ep.windows[place].place == place {
		return &ep.windows[place]
	}
	for i := range ep.windows {
		if ep.windows[i].place == place {
			return &ep.windows[i]
		}
	}
	return nil
}

// now is the version of the stanza that is in force for the looks to come.
func (ix *indicator) now() *epoch {
	if ix.of != nil {
		return ix.epochAt(ix.since)
	}
	return &ix.epochs[len(ix.epochs)-1]
}

// named returns the window in force of that name, nil for none.
func (ix *indicator) named(window string) *placed {
	windows := ix.now().windows
	if i := slices.IndexFunc(windows, func(p placed) bool { return p.Name == window }); i >= 0 {
		return &windows[i]
	}
	return nil
}

// arrange gives the windows of a stanza that comes into force with the boundary
// their places; false if there are not enough of them.
func (ix *indicator) arrange(cfg *config.Indicator, boundary int64) ([]placed, bool) {
	windows := make([]placed, len(cfg.Windows))
	var taken []int
	for i := range cfg.Windows {
		w := &cfg.Windows[i]
		windows[i] = placed{Window: w, place: -1, since: boundary, whole: ix.kept}
		if len(ix.epochs) == 0 {
			windows[i].since, windows[i].whole = math.MinInt64, math.MinInt64
			continue
		}
		for _, p := range ix.now().windows {
			if sameWindow(*p.Window, *w) {
				windows[i].place, windows[i].since, windows[i].whole = p.place, p.since, p.whole
				taken = append(taken, p.place)
			}
		}
	}
	for i := range windows {
		if windows[i].place >= 0 {
			continue
		}
		windows[i].place = ix.free(windows[i].Window, taken)
		if windows[i].place < 0 {
			return nil, false
		}
		taken = append(taken, windows[i].place)
	}
	return windows, true
}

// free finds a place for a window that comes into force: the one that it had
// before, a new one, or at last one that nothing speaks of any more.
func (ix *indicator) free(w *config.Window, taken []int) int {
	for place := range ix.places {
		if sameWindow(ix.places[place], *w) && !slices.Contains(taken, place) {
			return place
		}
	}
	for place := range maxPlaces {
		if slices.Contains(taken, place) {
			continue
		}
		if place >= len(ix.places) || len(ix.places) == maxPlaces && !ix.speaksOf(place) {
			return place
		}
	}
	return -1
}

// speaksOf reports whether a version of the stanza or an alert still needs to
// know which window has the place.
func (ix *indicator) speaksOf(place int) bool {
	if g := ix.gathering; g != nil && g.sums != nil && g.sums.speaksOf(place) {
		return true
	}
	for i := range ix.epochs {
		if ix.epochs[i].placed(place) != nil {
			return true
		}
	}
	for _, s := range ix.series {
		for d := range s.tails {
			for _, a := range s.tails[d].all() {
				if a.windows&(1<<place) != 0 && !a.gone() {
					return true
				}
			}
		}
	}
	return false
}

// occupy puts the windows in their places, and takes their say from those that
// are in force no longer.
func (e *Engine) occupy(ix *indicator, windows []placed) {
	for _, p := range windows {
		for len(ix.places) <= p.place {
			ix.places = append(ix.places, config.Window{})
		}
		ix.places[p.place] = *p.Window
	}
	e.vacate(ix, windows)
}

// vacate takes the say of windows that are in force no longer.
func (e *Engine) vacate(ix *indicator, windows []placed) {
	if len(ix.epochs) == 0 {
		return
	}
	next := epoch{windows: windows}
	for _, s := range ix.series {
		s.makePlaces()
		for _, p := range ix.now().windows {
			if next.placed(p.place) == nil {
				s.windows[p.place], s.runnings = windowState{}, nil
				e.touch(s)
			}
		}
	}
}

// makePlaces makes room for what the looks of every place find.
func (s *series) makePlaces() {
	if n := len(s.indicator.places) - len(s.windows); n > 0 {
		s.windows = append(s.windows, make([]windowState, n)...)
	}
}

// measure takes how far looks read that may still be made or made again.
func (ix *indicator) measure() {
	ix.longest, ix.reach = 0, 0
	for i := range ix.epochs {
		for _, p := range ix.epochs[i].windows {
			ix.longest = max(ix.longest, int64(p.Slots))
			ix.reach = max(ix.reach, int64(p.Slots+p.Step))
		}
		if ofTrials(ix.epochs[i].cfg) {
			ix.reach = max(ix.reach, ix.cal.fourWeeks()) // which tell how many trials come
		}
		if ix.epochs[i].cfg.ArrivalLooks && ix.cal.length == 0 {
			ix.reach++ // a span of days may be an hour longer than they were
		}
	}
}

// longestOf is the length of the longest window of a stanza, in slots.
func longestOf(cfg *config.Indicator) int64 {
	var slots int64
	for i := range cfg.Windows {
		slots = max(slots, int64(cfg.Windows[i].Slots))
	}
	return slots
}

func sameWindow(a, b config.Window) bool {
	return a.Slots == b.Slots && a.Step == b.Step && a.Trials == b.Trials
}

// encodePlaces writes the versions of the stanza that are kept, and the places
// of their windows unless they are those of a stanza that always had the same.
func (ih *indicatorHeader) encodePlaces(ix *indicator) {
	plain := true
	for i := range ix.epochs {
		ep := &ix.epochs[i]
		h := epochHeader{From: ep.from, Version: ep.version}
		plain = plain && len(ep.windows) == len(ix.places)
		for at, p := range ep.windows {
			h.Windows = append(h.Windows, windowHeader{p.place, p.since, p.whole})
			plain = plain && p.place == at && p.since == never && p.whole == never
		}
		ih.Epochs = append(ih.Epochs, h)
	}
	if ix.kept != never {
		ih.Kept, ih.Floor = &ix.kept, &ix.floor
	}
	if plain {
		for i := range ih.Epochs {
			ih.Epochs[i].Windows = nil
		}
		return
	}
	for _, w := range ix.places {
		ih.Places = append(ih.Places, placeHeader{w.Name, w.Slots, w.Step, w.Trials})
	}
}

func (h *epochHeader) restoreWindows(ix *indicator, cfg *config.Indicator) ([]placed, error) {
	if len(h.Windows) == 0 {
		windows, _ := ix.arrange(cfg, never) // those that always were
		return windows, nil
	}
	if len(h.Windows) != len(cfg.Windows) {
		return nil, fmt.Errorf("monitor: set-up %d has %d windows of indicator %q, and %d places for them: %w", h.Version, len(cfg.Windows), cfg.Name, len(h.Windows), errEncoding)
	}
	windows := make([]placed, len(cfg.Windows))
	for i, w := range h.Windows {
		windows[i] = placed{&cfg.Windows[i], w.Place, w.Since, w.Whole}
	}
	return windows, nil
}

func (ih *indicatorHeader) restorePlaces(ix *indicator) error {
	for _, p := range ih.Places {
		ix.places = append(ix.places, config.Window{Name: p.Name, Slots: p.Slots, Step: p.Step, Trials: p.Trials})
	}
	if len(ih.Places) == 0 {
		ix.places = slices.Clone(ix.cfg.Windows)
	}
	for i := range ix.epochs {
		for _, p := range ix.epochs[i].windows {
			if p.place < 0 || p.place >= min(len(ix.places), maxPlaces) || !sameWindow(ix.places[p.place], *p.Window) {
				return fmt.Errorf("monitor: window %q of indicator %q has no place: %w", p.Name, ix.cfg.Name, errEncoding)
			}
		}
	}
	return nil
}
