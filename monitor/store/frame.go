package store

import (
	"encoding/binary"
	"encoding/json"
	"fmt"
	"hash/crc32"

	bolt "go.etcd.io/bbolt"
)

// frameVersion is the first byte of every value. A value is
//
//	version (1 byte) | payload | CRC-32C (4 bytes, big endian)
//
// and the checksum covers the bucket's name, the key, the version and the
// payload, so that a value under the wrong key is noticed too.
const frameVersion = 1

const frameOverhead = 5

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// shelf is a bucket of framed values.
type shelf struct {
	name string
	seed uint32
}

func newShelf(name string) shelf {
	return shelf{name: name, seed: crc32.Checksum([]byte(name), castagnoli)}
}

// The buckets of a store; README.md draws them.
var (
	metaShelf        = newShelf("meta")
	headShelf        = newShelf("head")
	headerShelf      = newShelf("header")
	journalShelf     = newShelf("journal")
	statesShelf      = newShelf("states")
	idsShelf         = newShelf("ids")
	generationsShelf = newShelf("generations")
	alertsShelf      = newShelf("alerts")
	alertIDsShelf    = newShelf("alert-ids")
	openAlertsShelf  = newShelf("open-alerts")
	refusedShelf     = newShelf("refused")
	refusedRawShelf  = newShelf("refused-raw")
	outboxShelf      = newShelf("outbox")
	outletsShelf     = newShelf("outlets")
	settingsShelf    = newShelf("settings")
	marksShelf       = newShelf("marks")
	archiveShelf     = newShelf("archive")
)

func allShelves() []shelf {
	return []shelf{
		metaShelf, headShelf, headerShelf, journalShelf, statesShelf, idsShelf, generationsShelf,
		alertsShelf, alertIDsShelf, openAlertsShelf, refusedShelf, refusedRawShelf,
		outboxShelf, outletsShelf, settingsShelf, marksShelf, archiveShelf,
	}
}

// in returns the bucket in a transaction. Appended values fill their pages.
func (s shelf) in(tx *bolt.Tx) (rack, error) {
	b := tx.Bucket([]byte(s.name))
	if b == nil {
		return rack{}, fmt.Errorf("bucket %s is missing: %w", s.name, ErrDamaged)
	}
	b.FillPercent = appendFill
	return rack{Bucket: b, shelf: s}, nil
}

// appendFill is the share of a page that appended values fill.
const appendFill = 0.9

// rack is a shelf within a transaction.
type rack struct {
	*bolt.Bucket
	shelf
}

// put writes a framed value. The payload is copied.
func (r rack) put(key, payload []byte) error {
	if err := r.Put(key, r.seal(key, payload)); err != nil {
		return fmt.Errorf("bucket %s: %w", r.name, err)
	}
	return nil
}

// putFramed ends a value that begins with the version, and writes it. The value
// is bbolt's from then on.
func (r rack) putFramed(key, value []byte) error {
	if err := r.Put(key, r.close(key, value)); err != nil {
		return fmt.Errorf("bucket %s: %w", r.name, err)
	}
	return nil
}

func (r rack) putJSON(key []byte, v any) error {
	payload, err := json.Marshal(v)
	if err != nil {
		return fmt.Errorf("bucket %s, key %s: %w", r.name, showKey(key), err)
	}
	return r.put(key, payload)
}

// get returns a payload, valid during the transaction, and nil if there is none.
func (r rack) get(key []byte) ([]byte, error) {
	value := r.Get(key)
	if value == nil {
		return nil, nil
	}
	return r.open(key, value)
}

func (r rack) getJSON(key []byte, v any) (found bool, err error) {
	payload, err := r.get(key)
	if err != nil || payload == nil {
		return false, err
	}
	return true, r.parse(key, payload, v)
}

func (r rack) openJSON(key, value []byte, v any) error {
	payload, err := r.open(key, value)
	if err != nil {
		return err
	}
	return r.parse(key, payload, v)
}

func (s shelf) parse(key, payload []byte, v any) error {
	if err := json.Unmarshal(payload, v); err != nil {
		return s.damaged(key, err.Error())
	}
	return nil
}

func (r rack) remove(keys ...[]byte) error {
	for _, key := range keys {
		if err := r.Delete(key); err != nil {
			return fmt.Errorf("bucket %s: %w", r.name, err)
		}
	}
	return nil
}

// seal returns the framed value.
func (s shelf) seal(key, payload []byte) []byte {
	value := make([]byte, 0, len(payload)+frameOverhead)
	value = append(value, frameVersion)
	value = append(value, payload...)
	return s.close(key, value)
}

// close ends a value that was begun with the version and holds the payload.
func (s shelf) close(key, value []byte) []byte {
	return binary.BigEndian.AppendUint32(value, s.sum(key, value))
}

// open checks a framed value and returns its payload, which shares its memory.
func (s shelf) open(key, value []byte) ([]byte, error) {
	if len(value) < frameOverhead {
		return nil, s.damaged(key, "the value is too short")
	}
	body, sum := value[:len(value)-4], binary.BigEndian.Uint32(value[len(value)-4:])
	if s.sum(key, body) != sum {
		return nil, s.damaged(key, "the checksum differs")
	}
	if body[0] != frameVersion {
		return nil, fmt.Errorf("bucket %s, key %s has version %d: %w", s.name, showKey(key), body[0], ErrFormatTooNew)
	}
	return body[1:], nil
}

func (s shelf) sum(key, body []byte) uint32 {
	return crc32.Update(crc32.Update(s.seed, castagnoli, key), castagnoli, body)
}

func (s shelf) damaged(key []byte, what string) error {
	return fmt.Errorf("bucket %s, key %s: %s: %w", s.name, showKey(key), what, ErrDamaged)
}

// showKey prints a key for people: numbers as numbers, names quoted.
func showKey(key []byte) string {
	switch len(key) {
	case 4:
		return fmt.Sprint(binary.BigEndian.Uint32(key))
	case 8:
		return fmt.Sprint(binary.BigEndian.Uint64(key))
	case 12:
		return fmt.Sprintf("%d.%d", binary.BigEndian.Uint64(key), binary.BigEndian.Uint32(key[8:]))
	}
	return fmt.Sprintf("%.64q", key)
}

// number is the key of a running number.
func number(n uint64) []byte { return binary.BigEndian.AppendUint64(nil, n) }

// numberOf reads the key of a running number.
func (s shelf) numberOf(key []byte) (uint64, error) {
	if len(key) != 8 {
		return 0, s.damaged(key, "the key is no number")
	}
	return binary.BigEndian.Uint64(key), nil
}
