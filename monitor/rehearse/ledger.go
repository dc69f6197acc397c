package rehearse

import (
	"fmt"
	"strconv"
	"strings"
	"time"
)

// Class is what becomes of one published element.
type Class int

// The classes. Every element is in exactly one.
const (
	// Counted: it is part of what its slot holds, and the slot has both sides.
	// A retraction that did its work is counted too.
	Counted Class = iota
	// Repeat: same id, same revision, same content as one before.
	Repeat
	// Replaced: counted at first, then replaced by a higher revision or
	// retracted.
	Replaced
	// Outdated: a lower revision than the one that counts.
	Outdated
	// Refused, with a reason.
	Refused
	// Unmonitored: of a series that no indicator watches.
	Unmonitored
	// Withheld: counted, but its slot lacks the other side (events or
	// exposure) at the end, so that no look can use it. Decided by the slot in
	// which the element starts.
	Withheld
)

// Classes are all classes, in order.
var Classes = []Class{Counted, Repeat, Replaced, Outdated, Refused, Unmonitored, Withheld}

// String returns the class as one word.
func (c Class) String() string {
	switch c {
	case Counted:
		return "counted"
	case Repeat:
		return "repeat"
	case Replaced:
		return "replaced"
	case Outdated:
		return "outdated"
	case Refused:
		return "refused"
	case Unmonitored:
		return "unmonitored"
	case Withheld:
		return "withheld"
	}
	return fmt.Sprintf("Class(%d)", int(c))
}

// Entry is one published element and what becomes of it.
type Entry struct {
	// Message and Index say where it stands: the message's place in the
	// scenario and the element's in the message, both from 0.
	Message, Index int
	Series         string
	Class          Class
	// Reason is the stable code of a refusal, else "".
	Reason string
}

// ActEntry is one published act. Whether it meets an open alert is nothing
// that a publisher can know.
type ActEntry struct {
	Message int
	// Reason is the code by which it must be refused however the alerts stand,
	// or "".
	Reason string
}

// SlotTotal is what a series should hold in one slot at the end.
type SlotTotal struct {
	Series     string
	Start, End time.Time
	Events     int64
	Exposure   Amount
	// HasEvents and HasExposure say which sides were reported. Where each
	// event is a message of its own, silence is zero and HasEvents is true.
	HasEvents, HasExposure bool
}

// Ledger is what the publishers hold to be true of what they published.
type Ledger struct {
	// Entries are in publishing order.
	Entries []Entry
	Acts    []ActEntry
	// Slots are ordered by series and start; a slot about which nothing
	// counted is said is not there.
	Slots []SlotTotal
}

// Count returns how many elements are in each class.
func (l *Ledger) Count() map[Class]int {
	n := make(map[Class]int, len(Classes))
	for i := range l.Entries {
		n[l.Entries[i].Class]++
	}
	return n
}

// Reasons returns how many elements were refused for each reason.
func (l *Ledger) Reasons() map[string]int {
	n := make(map[string]int)
	for i := range l.Entries {
		if l.Entries[i].Class == Refused {
			n[l.Entries[i].Reason]++
		}
	}
	return n
}

// Amount is an exact amount of exposure in millionths of a unit.
type Amount int64

// The amounts that people report.
const (
	Millionth Amount = 1
	Tenth     Amount = 100_000
	One       Amount = 1_000_000
)

// String returns the amount as the shortest plain decimal.
func (a Amount) String() string {
	sign := ""
	if a < 0 {
		sign, a = "-", -a
	}
	text := sign + strconv.FormatInt(int64(a/One), 10)
	if frac := a % One; frac != 0 {
		text += "." + strings.TrimRight(fmt.Sprintf("%06d", int64(frac)), "0")
	}
	return text
}
