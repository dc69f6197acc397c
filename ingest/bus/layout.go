package bus

import (
	"fmt"
	"strconv"
	"strings"
	"time"

	"github.com/nats-io/nats.go/jetstream"

	"tailbell/ingest/wire"
)

// Keys of the input stream's metadata that a division leaves, and those that
// stand there while one is under way.
const (
	metaDivision      = "tailbell-division" // how often the stream was divided
	metaBegins        = "tailbell-begins"   // the first position of the present partitions
	metaCarried       = "tailbell-carried"  // the last position that was carried over
	metaHoles         = "tailbell-holes"    // positions that a division given up left empty
	metaDividing      = "tailbell-dividing" // into how many partitions
	metaDividingFirst = "tailbell-dividing-begins"
)

// StoredHeader holds when the bus first stored a message that a division
// carried over (RFC 3339). It means nothing on the subjects that publishers
// have.
const StoredHeader = "Tailbell-Stored"

// carriedToken stands in the subjects of messages that a division carried over,
// on which nobody else can publish.
const carriedToken = wire.CarriedToken

// layout says which part of the input stream its present partitions have.
type layout struct {
	division uint64 // how often the stream was divided; 0 for never
	begins   uint64 // the first position
	carried  uint64 // the last position that was carried over
	holes    []span // that never held a message of the partitions
}

// span is a range of positions, both ends included.
type span struct{ from, to uint64 }

// layoutOf reads the layout in the stream's metadata.
func layoutOf(meta map[string]string) (l layout, err error) {
	for _, field := range []struct {
		key string
		to  *uint64
	}{{metaDivision, &l.division}, {metaBegins, &l.begins}, {metaCarried, &l.carried}} {
		if text := meta[field.key]; text != "" && err == nil {
			*field.to, err = strconv.ParseUint(text, 10, 64)
		}
	}
	l.begins = max(1, l.begins)
	for text := range strings.FieldsSeq(meta[metaHoles]) {
		var s span
		if _, scanErr := fmt.Sscanf(text, "%d-%d", &s.from, &s.to); err == nil && scanErr != nil {
			err = scanErr
		}
		l.holes = append(l.holes, s)
	}
	if err != nil {
		return l, fmt.Errorf("%w: its metadata can't be read: %w", ErrStreamDiffers, err)
	}
	return l, nil
}

// empty counts the positions of a range that are known to be holes.
func (l *layout) empty(from, to uint64) uint64 {
	n := uint64(0)
	for _, h := range l.holes {
		if low, high := max(from, h.from), min(to, h.to); low <= high {
			n += high - low + 1
		}
	}
	return n
}

// carried is the subject of a kind of message that a division carried over.
func (n names) carried(division uint64, partition int, kind Kind) string {
	return n.carriedIn(division) + strconv.Itoa(partition) + "." + kind.String()
}

func (n names) carriedIn(division uint64) string {
	return n.deployment + "." + carriedToken + "." + strconv.FormatUint(division, 10) + "."
}

// carriedAll matches what a division carried over into a partition.
func (n names) carriedAll(division uint64, partition int) string {
	return n.carriedIn(division) + strconv.Itoa(partition) + ".*"
}

// stored is when the bus first stored the message: what it says itself if a
// division carried it over.
func (n names) stored(subject string, header map[string][]string, stored time.Time) time.Time {
	rest, ours := strings.CutPrefix(subject, n.deployment)
	if !ours || !strings.HasPrefix(rest, "."+carriedToken+".") {
		return stored.UTC()
	}
	if values := header[StoredHeader]; len(values) == 1 {
		if at, err := time.Parse(time.RFC3339Nano, values[0]); err == nil {
			return at.UTC()
		}
	}
	return stored.UTC()
}

// rawOf is a message as the readers of the stream see it.
func (b *Bus) rawOf(msg *jetstream.RawStreamMsg) Raw {
	return Raw{
		Position: msg.Sequence,
		Stored:   b.names.stored(msg.Subject, msg.Header, msg.Time),
		Subject:  msg.Subject,
		Header:   msg.Header,
		Data:     msg.Data,
	}
}

// Divisions is how often the stream was divided.
func (b *Bus) Divisions() uint64 { return b.layout.division }

// Begins is the first position of the present partitions: 1 unless the stream
// was divided.
func (b *Bus) Begins() uint64 { return b.layout.begins }
