package counter

import "math/bits"

// Amount is a total or a difference, a whole number of 128 bits.
type Amount struct{ Hi, Lo uint64 }

// Less reports whether a is smaller than b.
func (a Amount) Less(b Amount) bool { return a.Hi < b.Hi || a.Hi == b.Hi && a.Lo < b.Lo }

// Minus returns a - b, which must not be larger.
func (a Amount) Minus(b Amount) Amount {
	lo, borrow := bits.Sub64(a.Lo, b.Lo, 0)
	hi, _ := bits.Sub64(a.Hi, b.Hi, borrow)
	return Amount{hi, lo}
}

// Side is the latest reading of one total; the zero value is none.
type Side struct {
	Known bool
	At    int64
	Total Amount
	// Clear is the first slot that is covered from its beginning on, as far as
	// the side alone must cover it.
	Clear int64
	// Said counts the readings that were counted in Slot, the latest of any.
	Slot int64
	Said uint32
}

// Reading is a total at an instant, and since when it was counted, if HasSince.
type Reading struct {
	At, Since int64
	HasSince  bool
	Total     Amount
}

// Kind says what a reading is beside the latest one.
type Kind int

// The kinds of reading.
const (
	First    Kind = iota // there was none: More came since Start, or nothing is known
	Later                // More came since Start, the latest reading
	Again                // counting began again: More came since Start
	Repeat               // it says the same as the latest
	Outdated             // the latest is of a later instant
	Conflict             // the latest says something else of the same instant
)

// Step is what a reading says beside the latest one.
type Step struct {
	Kind  Kind
	Start int64 // where what came begins; of a First without since, its own instant
	More  Amount
}

// New reports whether the reading is the latest one from now on.
func (s Step) New() bool { return s.Kind <= Again }

// Next compares a reading with the latest one. again says that counting is known
// to have begun again, since another total read with it did.
func (s *Side) Next(r Reading, again bool) Step {
	switch {
	case !s.Known && r.HasSince:
		return Step{First, r.Since, r.Total}
	case !s.Known:
		return Step{Kind: First, Start: r.At}
	case r.At < s.At:
		return Step{Kind: Outdated}
	case r.At == s.At && r.Total == s.Total:
		return Step{Kind: Repeat}
	case r.At == s.At:
		return Step{Kind: Conflict}
	case !again && !s.Restarted(r):
		return Step{Later, s.At, r.Total.Minus(s.Total)}
	case r.HasSince:
		return Step{Again, r.Since, r.Total}
	}
	return Step{Again, s.At, r.Total}
}

// Restarted reports whether a later reading shows that counting began again.
func (s *Side) Restarted(r Reading) bool {
	return s.Known && r.At > s.At && (r.Total.Less(s.Total) || r.HasSince && r.Since > s.At)
}

// Take makes the reading the latest one.
func (s *Side) Take(r Reading) { s.Known, s.At, s.Total = true, r.At, r.Total }
