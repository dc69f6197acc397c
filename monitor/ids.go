package monitor

import (
	"hash/maphash"
	"maps"
	"math"
	"math/bits"
	"slices"
	"strings"
	"time"
)

// ids remembers what every observation with an id last said, in generations
// by the end of its last slot that are forgotten whole once they lie beyond
// the horizon. There are millions of them: they lie in blocks of memory that
// hold no pointer, so that the garbage collector need not look into them.
type ids struct {
	// first is the place of the first entry whose key has a hash; those that
	// share it follow by next.
	first map[uint64]uint32
	seed  maphash.Seed
	// blocks hold the entries by place, free lists the places of none.
	blocks [][]idEntry
	free   []uint32
	places uint32
	count  int
	found  identified // what get returned last

	generations map[int64]*generation
	horizon     time.Duration // the longest of any indicator
	length      time.Duration // of a generation
	max         int
	oldest      int64
	hasOldest   bool
	// most is the largest number of ids that were kept at once.
	most int

	touched []touchedID
	puts    uint32
	dropped []int64
}

// generation is the ids of one span of time.
type generation struct {
	// places lists its entries, and perhaps some that have left it since.
	places []uint32
	// text holds the keys of those that were put here, in blocks.
	text [][]byte
	// written counts the entries that were handed over, those that a later one
	// replaced among them.
	written int
}

// idEntry is an identified as it is kept.
type idEntry struct {
	hash        uint64
	generation  int64 // noGeneration if the place is free
	revision    int64
	start, end  Instant
	events      int64
	exposure    Quantity
	next        uint32 // the place of the next one with this hash
	series      uint32 // noPlace if it adds nothing
	put         uint32 // the number of its last put
	block, at   uint32 // where its key lies in its generation's text
	id          uint32 // how long the key's parts are
	site        uint16
	retracted   bool
	hasEvents   bool
	hasExposure bool
	late        bool
}

type touchedID struct{ place, put uint32 }

const (
	noPlace      = math.MaxUint32
	noGeneration = math.MinInt64
	idBlock      = 1 << 10
	textBlock    = 16 << 10
)

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
	// stub is the number of the series that it speaks of, if that has ended.
	stub uint32
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
	return ids{first: map[uint64]uint32{}, seed: maphash.MakeSeed(), generations: map[int64]*generation{}}
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

func (x *ids) generation(number int64) *generation {
	g := x.generations[number]
	if g == nil {
		g = &generation{}
		x.generations[number] = g
	}
	return g
}

// hashOf differs from process to process: nothing that follows from it is seen.
func (x *ids) hashOf(key idKey) uint64 {
	return maphash.String(x.seed, key.id) ^ bits.RotateLeft64(maphash.String(x.seed, key.site), 32)
}

func (x *ids) entry(place uint32) *idEntry { return &x.blocks[place/idBlock][place%idBlock] }

// text is the key of an entry, both parts in one.
func (x *ids) text(c *idEntry) []byte {
	return x.generations[c.generation].text[c.block][c.at:][:int(c.site)+int(c.id)]
}

// find returns the place of the key, noPlace if there is none.
func (x *ids) find(key idKey, hash uint64) uint32 {
	place, ok := x.first[hash]
	if !ok {
		return noPlace
	}
	for place != noPlace {
		c := x.entry(place)
		if int(c.site) == len(key.site) && int(c.id) == len(key.id) {
			if text := x.text(c); string(text[:c.site]) == key.site && string(text[c.site:]) == key.id {
				return place
			}
		}
		place = c.next
	}
	return noPlace
}

// has reports whether the key is known.
func (x *ids) has(key idKey) bool { return x.find(key, x.hashOf(key)) != noPlace }

// get returns what is known of the key, nil if nothing is. It holds until the
// next call.
func (x *ids) get(key idKey, all []*series) *identified {
	return x.told(x.find(key, x.hashOf(key)), key, all)
}

// told is get where the key's place is known.
func (x *ids) told(place uint32, key idKey, all []*series) *identified {
	if place == noPlace {
		return nil
	}
	c := x.entry(place)
	x.found = identified{key: key, revision: c.revision, retracted: c.retracted, generation: c.generation}
	if c.series != noPlace {
		x.found.said = contribution{
			series: all[c.series], start: c.start, end: c.end, events: c.events, exposure: c.exposure,
			hasEvents: c.hasEvents, hasExposure: c.hasExposure, late: c.late,
		}
	}
	return &x.found
}

// put remembers what the observation said.
func (x *ids) put(entry *identified) {
	hash := x.hashOf(entry.key)
	x.putAt(x.find(entry.key, hash), hash, entry)
}

// putAt is put where the key's hash and its place, if it has one, are known.
func (x *ids) putAt(place uint32, hash uint64, entry *identified) {
	if place == noPlace {
		place = x.take(hash)
	}
	c := x.entry(place)
	if c.generation != entry.generation {
		c.generation = entry.generation
		g := x.generation(c.generation)
		g.places = append(g.places, place)
		c.block, c.at = g.write(entry.key)
		c.site, c.id = uint16(len(entry.key.site)), uint32(len(entry.key.id))
	}
	if !x.hasOldest || entry.generation < x.oldest {
		x.oldest, x.hasOldest = entry.generation, true
	}
	said := &entry.said
	c.revision, c.retracted, c.series = entry.revision, entry.retracted, noPlace
	c.start, c.end, c.events, c.exposure = said.start, said.end, said.events, said.exposure
	c.hasEvents, c.hasExposure, c.late = said.hasEvents, said.hasExposure, said.late
	switch {
	case said.series == nil:
	case said.series.retired:
		c.series = entry.stub
	default:
		c.series = said.series.number
	}
	x.most = max(x.most, x.count)
	x.puts++
	c.put = x.puts
	x.touched = append(x.touched, touchedID{place, c.put})
}

// take makes an entry for a key that has none; it stands in no generation yet.
func (x *ids) take(hash uint64) uint32 {
	place := x.places
	if n := len(x.free); n > 0 {
		place = x.free[n-1]
		x.free = x.free[:n-1]
	} else {
		if place%idBlock == 0 {
			x.blocks = append(x.blocks, make([]idEntry, idBlock))
		}
		x.places++
	}
	next, ok := x.first[hash]
	if !ok {
		next = noPlace
	}
	*x.entry(place) = idEntry{hash: hash, generation: noGeneration, next: next}
	x.first[hash] = place
	x.count++
	return place
}

// write keeps the text of a key, and returns the block and the place in it.
func (g *generation) write(key idKey) (block, at uint32) {
	n := len(g.text)
	if size := len(key.site) + len(key.id); n == 0 || cap(g.text[n-1])-len(g.text[n-1]) < size {
		g.text = append(g.text, make([]byte, 0, max(size, min(textBlock, 16*size<<min(2*n, 16)))))
		n++
	}
	b := g.text[n-1]
	at = uint32(len(b))
	g.text[n-1] = append(append(b, key.site...), key.id...)
	return uint32(n - 1), at
}

// release frees the place of an entry.
func (x *ids) release(place uint32) {
	c := x.entry(place)
	switch before := x.first[c.hash]; {
	case before != place:
		for x.entry(before).next != place {
			before = x.entry(before).next
		}
		x.entry(before).next = c.next
	case c.next != noPlace:
		x.first[c.hash] = c.next
	default:
		delete(x.first, c.hash)
	}
	c.generation, c.put = noGeneration, 0
	x.free = append(x.free, place)
	x.count--
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
		for _, place := range x.generations[g].places {
			if x.entry(place).generation == g {
				x.release(place)
			}
		}
		delete(x.generations, g)
		x.dropped = append(x.dropped, g)
	}
	x.oldest, x.hasOldest = 0, false
	for g := range x.generations {
		if !x.hasOldest || g < x.oldest {
			x.oldest, x.hasOldest = g, true
		}
	}
}
