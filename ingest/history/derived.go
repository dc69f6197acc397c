package history

import (
	"crypto/sha256"
	"encoding/hex"
	"slices"
	"strconv"
)

// derivedIDs gives ids to the rows of one file that have none: "row-" and the
// first 16 bytes of the SHA-256 of the row's canonical JSON, in hexadecimal;
// from the second of equal rows on, "-" and its number among them.
type derivedIDs struct {
	seen map[[16]byte]int
}

func newDerivedIDs() derivedIDs {
	return derivedIDs{seen: make(map[[16]byte]int)}
}

// identify puts an id into the canonical JSON of an observation without one.
func (d derivedIDs) identify(canonical []byte) []byte {
	id := d.next(canonical)
	return slices.Insert(canonical, 1, id...)
}

// next returns the field id with its comma.
func (d derivedIDs) next(canonical []byte) []byte {
	sum := sha256.Sum256(canonical)
	key := [16]byte(sum[:16])
	d.seen[key]++
	field := hex.AppendEncode([]byte(`"id":"row-`), key[:])
	if n := d.seen[key]; n > 1 {
		field = strconv.AppendInt(append(field, '-'), int64(n), 10)
	}
	return append(field, `",`...)
}
