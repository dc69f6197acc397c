package monitor

import (
	"encoding/binary"
	"math"
)

// news is what a member of gathered sums has to tell at the next boundary, and
// the sums that it tells it to.
type news struct {
	sums []*series
	// since is the latest boundary when it was noted: what was noted before the
	// latest boundary has been told since. It is maxBoundary before there is one.
	since int64
	// from and to bound the slots that changed, both included; from is beyond to
	// where none did. Those that had not ended by the latest boundary are still to
	// be told.
	from, to int64
	// head says that where the series begins changed, or the dates that hold for
	// it.
	head bool
	// why is what made it change, "" for data.
	why string
	// listed says that it stands in the list of those who have news.
	listed bool
}

// noNews are the bounds of no slots.
const noNewsFrom, noNewsTo = math.MaxInt64, math.MinInt64

// telling prepares the series to tell gathered sums of its changes.
func (s *series) telling() {
	if s.news == nil {
		s.news = &news{since: never, from: noNewsFrom, to: noNewsTo}
	}
}

// inform notes that slots of the series changed, or with head what holds for all of
// them, for the gathered sums that it is a member of.
func (e *Engine) inform(s *series, from, to int64, head bool, why string) {
	n := s.news
	if n == nil {
		return
	}
	s.refreshNews()
	switch {
	case !n.any():
		n.why = why
	case n.why != why:
		n.why = ""
	}
	n.from, n.to, n.head = min(n.from, from), max(n.to, to), n.head || head
	if n.since = s.indicator.looked; !s.indicator.started {
		n.since = maxBoundary
	}
	s.indicator.gathering.list(s)
	e.touch(s)
}

// any reports whether there is anything to tell.
func (n *news) any() bool { return n.head || n.from <= n.to }

// refreshNews forgets what was told since it was noted.
func (s *series) refreshNews() {
	n, looked := s.news, s.indicator.looked
	if n.since >= looked {
		return
	}
	n.since, n.head, n.why = looked, false, ""
	if n.from = max(n.from, looked); n.from > n.to {
		n.from, n.to = noNewsFrom, noNewsTo
	}
}

// encode appends what is still to be told.
func (n *news) encode(b []byte) []byte {
	b = binary.AppendVarint(b, n.since)
	b = binary.AppendVarint(b, n.from)
	b = binary.AppendVarint(b, n.to)
	return appendString(append(b, flag(n.head)), n.why)
}

func (r *reader) news(s *series) {
	s.telling()
	n := s.news
	n.since, n.from, n.to = r.int(), r.int(), r.int()
	n.head = r.flag()
	n.why = r.string()
}
