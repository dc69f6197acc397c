package history

import (
	"crypto/sha256"
	"strings"

	"tailbell/ingest/bus"
)

// copies tells the copies of an act apart that partitions have of it: one on series
// of several was given to each, byte for byte. Those that one partition has are
// different acts.
type copies struct {
	seen map[copyOf]int
	most map[[sha256.Size]byte]int
}

type copyOf struct {
	subject string
	digest  [sha256.Size]byte
}

func newCopies() *copies { return &copies{map[copyOf]int{}, map[[sha256.Size]byte]int{}} }

// known reports whether the message is a copy of an act that another partition had
// before.
func (c *copies) known(raw *bus.Raw) bool {
	if !strings.HasSuffix(raw.Subject, "."+bus.Act.String()) {
		return false
	}
	digest := sha256.Sum256(raw.Data)
	mine := copyOf{raw.Subject, digest}
	c.seen[mine]++
	if c.seen[mine] <= c.most[digest] {
		return true
	}
	c.most[digest]++
	return false
}
