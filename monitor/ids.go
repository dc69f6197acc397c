package monitor

import (
	"maps"
	"slices"
	"strings"
	"time"
)

// ids remembers what every observation with an id last said, in generations
// by the end of its last slot that are forgotten whole once they lie beyond
// the horizon.
type ids struct {
	byKey map[idKey]*identified
	// generations lists the keys by generation; a key stands in the list of
	// its entry's generation, and perhaps still in an older one's.
	generations map[int64][]idKey
	horizon     time.Duration // the longest of any indicator
	length      time.Duration // of a generation
	max         int
	oldest      int64
	hasOldest   bool
	// most is the largest number of ids that were kept at once.
	most int

	touched []*identified
	dropped []int64
	// written counts the entries that were handed over of each generation,
	// those that a later one replaced among them.
	written map[int64]int
}

// maxStale is how many replaced entries of a generation a store holds beside
// as many as still count, before the generation is written anew. Tests lower
// it.
var maxStale = 4096

// idKey is an id under its series' leading name part.
type idKey struct{ site, id string }

// identified is what an observation with an id last said.
type identified struct {
	key        idKey
	revision   int64
	retracted  bool
	said       contribution
	generation int64
}

// contribution is what one observation adds to the slots of a series.
type contribution struct {
	series      *series // nil if it adds nothing
	start, end  Instant
	events      int64
	exposure    Quantity
	hasEvents   bool
	hasExposure bool
	// late says that its first slot had settled when it was counted.
	late bool
}

func newIDs() ids {
	return ids{byKey: map[idKey]*identified{}, generations: map[int64][]idKey{}, written: map[int64]int{}}
}

// configure sets how long ids are kept: the longest horizon of any indicator,
// in generations of a sixteenth of it, a day at least.
func (x *ids) configure(horizon time.Duration, limit int) {
	x.horizon, x.max = horizon, limit
	if x.length == 0 {
		x.length = max(24*time.Hour, (horizon / 16).Truncate(time.Hour))
	}
}

func siteOf(series string) string {
	site, _, _ := strings.Cut(series, "/")
	return site
}

func (x *ids) generationOf(end Instant) int64 {
	return floorDiv(int64(end), int64(x.length/time.Microsecond))
}

// put remembers what the observation said.
func (x *ids) put(entry *identified) {
	old := x.byKey[entry.key]
	if old == nil || old.generation != entry.generation {
		x.generations[entry.generation] = append(x.generations[entry.generation], entry.key)
	}
	if !x.hasOldest || entry.generation < x.oldest {
		x.oldest, x.hasOldest = entry.generation, true
	}
	x.byKey[entry.key] = entry
	x.most = max(x.most, len(x.byKey))
	x.touched = append(x.touched, entry)
}

// drop forgets the generations that lie wholly beyond the horizon.
func (x *ids) drop(clock Instant) {
	if !x.hasOldest || x.length == 0 {
		return
	}
	keep := x.generationOf(clock.Add(-x.horizon))
	if x.oldest >= keep {
		return
	}
	for _, g := range slices.Sorted(maps.Keys(x.generations)) {
		if g >= keep {
			break
		}
		for _, key := range x.generations[g] {
			if entry := x.byKey[key]; entry != nil && entry.generation == g {
				delete(x.byKey, key)
			}
		}
		delete(x.generations, g)
		delete(x.written, g)
		x.dropped = append(x.dropped, g)
	}
	x.oldest, x.hasOldest = 0, false
	for g := range x.generations {
		if !x.hasOldest || g < x.oldest {
			x.oldest, x.hasOldest = g, true
		}
	}
}

// drain hands over the entries touched since the last one, and names the
// generations that are handed over whole, because most of what a store holds of
// them was replaced since.
func (x *ids) drain() (changes []IDChange, rewritten []int64) {
	for _, entry := range x.touched {
		if x.byKey[entry.key] != entry {
			continue
		}
		changes = append(changes, IDChange{entry.generation, entry.encode()})
		g := entry.generation
		if x.written[g]++; x.written[g] > 2*len(x.generations[g])+maxStale && !slices.Contains(rewritten, g) {
			rewritten = append(rewritten, g)
		}
	}
	x.touched = nil
	if len(rewritten) == 0 {
		return changes, nil
	}
	changes = slices.DeleteFunc(changes, func(c IDChange) bool { return slices.Contains(rewritten, c.Generation) })
	for _, g := range rewritten {
		x.written[g] = 0
		for _, key := range x.generations[g] {
			if entry := x.byKey[key]; entry != nil && entry.generation == g {
				changes = append(changes, IDChange{g, entry.encode()})
				x.written[g]++
			}
		}
	}
	return changes, rewritten
}
