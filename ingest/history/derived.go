package history

import (
	"crypto/sha256"
	"encoding/hex"
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

func (d derivedIDs) next(canonical []byte) string {
	sum := sha256.Sum256(canonical)
	key := [16]byte(sum[:16])
	d.seen[key]++
	id := make([]byte, 0, 48)
	id = hex.AppendEncode(append(id, "row-"...), key[:])
	if n := d.seen[key]; n > 1 {
		id = strconv.AppendInt(append(id, '-'), int64(n), 10)
	}
	return string(id)
}
