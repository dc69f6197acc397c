package arrival

import (
	"encoding/binary"
	"errors"
	"fmt"
)

// The encoding of a Log, whole or as a patch: a version byte, a byte of flags,
// with flagFloor the floor, the number of instants, then each: how far it lies
// after the one before (the first: itself), its events, trials and late events.
// Numbers are varints. In a patch an instant without anything is one that is
// gone.
const encodingVersion = 1

const (
	flagFloor = 1
	flagPatch = 2
)

// ErrEncoding is returned for bytes that are no encoding of a Log.
var ErrEncoding = errors.New("arrival: not an encoding of arrivals")

// AppendBinary appends the encoding of the whole Log: the same Log has the same
// bytes. The error is always nil.
func (l *Log) AppendBinary(b []byte) ([]byte, error) {
	b = l.appendHead(b, 0, len(l.entries))
	last := int64(0)
	for i := range l.entries {
		b = appendCount(b, l.entries[i].at-last, l.own(i))
		last = l.entries[i].at
	}
	return b, nil
}

// AppendPatch appends what stands at the instants, which rise: all that another
// Log, alike but for changes there and for what it has not forgotten, needs to
// become like this one.
func (l *Log) AppendPatch(b []byte, instants []int64) []byte {
	b = l.appendHead(b, flagPatch, len(instants))
	last := int64(0)
	for _, at := range instants {
		b = appendCount(b, at-last, l.At(at))
		last = at
	}
	return b
}

func (l *Log) appendHead(b []byte, flags byte, n int) []byte {
	if l.forgot {
		flags |= flagFloor
	}
	b = append(b, encodingVersion, flags)
	if l.forgot {
		b = binary.AppendVarint(b, l.floor)
	}
	return binary.AppendUvarint(b, uint64(n))
}

func appendCount(b []byte, after int64, c Count) []byte {
	b = binary.AppendVarint(b, after)
	b = binary.AppendUvarint(b, uint64(c.Events))
	b = binary.AppendUvarint(b, uint64(c.Trials))
	return binary.AppendUvarint(b, uint64(c.Late))
}

// UnmarshalBinary makes the Log what AppendBinary wrote. On an error the Log is
// left as it was.
func (l *Log) UnmarshalBinary(b []byte) error {
	var next Log
	r, n := openReader(b, 0)
	r.floor(&next)
	next.entries = make([]entry, 0, min(n, len(b)/4+1))
	total := Count{}
	for i := 0; i < n && r.err == nil; i++ {
		at, c := r.count()
		if i > 0 {
			last := next.entries[i-1].at
			at += last
			if at <= last {
				r.fail("instants do not rise")
			}
		}
		if c == (Count{}) {
			r.fail("an instant holds nothing")
		}
		if at < next.Floor() {
			r.fail("an instant lies before the floor")
		}
		total = total.plus(c)
		if !total.valid() {
			r.fail("counts are too large")
		}
		next.entries = append(next.entries, entry{at, total})
	}
	if err := r.close(); err != nil {
		return err
	}
	*l = next
	return nil
}

// Patch makes at the instants of the patch stand what it says, and forgets what
// it has forgotten. On an error the Log is not to be used any more.
func (l *Log) Patch(b []byte) error {
	var head Log
	r, n := openReader(b, flagPatch)
	r.floor(&head)
	last := int64(0)
	for range n {
		at, c := r.count()
		if r.err != nil {
			break
		}
		at, last = at+last, at+last
		if at < head.Floor() || at < l.Floor() {
			continue // changed, then forgotten
		}
		if err := l.Change(at, c.minus(l.At(at))); err != nil {
			return err
		}
	}
	if err := r.close(); err != nil {
		return err
	}
	if head.forgot {
		l.Forget(head.floor)
	}
	return nil
}

// reader reads an encoding; after the first fault it returns zeros.
type reader struct {
	b     []byte
	flags byte
	err   error
	at    int64
}

// openReader reads the head up to the number of instants.
func openReader(b []byte, kind byte) (*reader, int) {
	r := &reader{b: b}
	switch {
	case len(b) < 2:
		r.fail("it ends too early")
		return r, 0
	case b[0] != encodingVersion:
		r.fail(fmt.Sprintf("version %d is not known", b[0]))
		return r, 0
	case b[1]&^flagFloor != kind:
		r.fail("a patch stands for a whole, or a whole for a patch")
		return r, 0
	}
	r.flags, r.b = b[1], b[2:]
	if r.flags&flagFloor != 0 {
		r.at = r.int()
	}
	n := r.uint()
	if n > int64(len(r.b)) {
		r.fail("there are more instants than bytes")
		return r, 0
	}
	return r, int(n)
}

func (r *reader) floor(l *Log) {
	l.floor, l.forgot = r.at, r.flags&flagFloor != 0
}

func (r *reader) fail(what string) {
	if r.err == nil {
		r.err = fmt.Errorf("%w: %s", ErrEncoding, what)
	}
	r.b = nil
}

func (r *reader) int() int64 {
	v, n := binary.Varint(r.b)
	if n <= 0 {
		r.fail("a number is cut off")
		return 0
	}
	r.b = r.b[n:]
	return v
}

func (r *reader) uint() int64 {
	v, n := binary.Uvarint(r.b)
	if n <= 0 || v > 1<<62 {
		r.fail("a number is cut off or too large")
		return 0
	}
	r.b = r.b[n:]
	return int64(v)
}

// count reads how far the next instant lies away, and what came at it.
func (r *reader) count() (after int64, c Count) {
	after = r.int()
	c = Count{r.uint(), r.uint(), r.uint()}
	if !c.valid() {
		r.fail("more events were late than came")
	}
	return after, c
}

func (r *reader) close() error {
	if r.err == nil && len(r.b) > 0 {
		r.fail("bytes follow its end")
	}
	return r.err
}
