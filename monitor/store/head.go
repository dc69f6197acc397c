package store

import (
	"fmt"
	"time"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// head says where everything begins and ends. It changes with every write.
type head struct {
	// Position of the last message committed, Commit the number of the last
	// commit, Stored the greatest bus time seen and FirstStored the first one:
	// what is older than that is reckoned from there.
	Position    uint64          `json:"position"`
	Commit      uint64          `json:"commit"`
	Stored      monitor.Instant `json:"stored"`
	FirstStored monitor.Instant `json:"first_stored"`
	// Epoch of the owner; Accepted counts the streams accepted in place of another.
	// Renumbered says that nothing was committed since the last one was.
	Epoch      uint64 `json:"epoch"`
	Accepted   uint64 `json:"accepted"`
	Renumbered bool   `json:"renumbered,omitempty"`
	// Cycle is the round of the checkpoint, Series the number of series,
	// States how many have been written whole, JournalFirst the first commit
	// kept in the journal.
	Cycle        uint64 `json:"cycle"`
	Series       uint32 `json:"series"`
	States       uint32 `json:"states"`
	JournalFirst uint64 `json:"journal_first"`
	HeaderParts  uint32 `json:"header_parts"`
	// IDs is the running number of the last id, Generations how many are kept.
	IDs         uint64 `json:"ids"`
	Generations int    `json:"generations"`
	// Alerts is the number of the last alert, Open how many are not done.
	Alerts uint64 `json:"alerts"`
	Open   uint64 `json:"open"`
	// Refused is the number of the last refusal, RefusedFirst the first one
	// kept, RawFirst the first whose bytes may be kept; Raw counts those that
	// are, RawBytes their bytes.
	Refused      uint64 `json:"refused"`
	RefusedFirst uint64 `json:"refused_first"`
	RawFirst     uint64 `json:"raw_first"`
	Raw          uint64 `json:"raw"`
	RawBytes     uint64 `json:"raw_bytes"`
	// Archived counts the archived slots that are kept, ArchiveParts the values they
	// lie in. LetGo is nil while all are kept.
	Archived     uint64   `json:"archived"`
	ArchiveParts uint64   `json:"archive_parts"`
	LetGo        *letGone `json:"let_go,omitempty"`
	// Outbox is the number of the last step, OutboxFirst the first one kept.
	Outbox      uint64 `json:"outbox"`
	OutboxFirst uint64 `json:"outbox_first"`
	Outlets     int    `json:"outlets"`
	Settings    int    `json:"settings"`
	Marks       int    `json:"marks"`
	// Told is the number of the last summary for another partition, ToldThrough
	// that up to which all were told; Waiting counts the summaries that wait.
	Told        uint64 `json:"told,omitempty"`
	ToldThrough uint64 `json:"told_through,omitempty"`
	Waiting     uint64 `json:"waiting,omitempty"`
}

func newHead() head {
	return head{
		JournalFirst: 1, RefusedFirst: 1, RawFirst: 1, OutboxFirst: 1,
		Stored: monitor.Beginning, FirstStored: monitor.Beginning,
	}
}

// The keys of the head's bucket.
var (
	headKey    = []byte("head")
	streamKey  = []byte("stream")
	reasonsKey = []byte("reasons")
)

func readHead(tx *bolt.Tx) (head, error) {
	var h head
	r, err := headShelf.in(tx)
	if err != nil {
		return h, err
	}
	found, err := r.getJSON(headKey, &h)
	if err == nil && !found {
		err = r.damaged(headKey, "it is missing")
	}
	return h, err
}

func writeHead(tx *bolt.Tx, h *head) error {
	r, err := headShelf.in(tx)
	if err != nil {
		return err
	}
	return r.putJSON(headKey, h)
}

// Position returns the position of the last message committed, 0 for none.
func (s *Store) Position() (uint64, error) {
	h, err := s.head()
	return h.Position, err
}

// Epoch returns the owner epoch, 0 if none was set.
func (s *Store) Epoch() (uint64, error) {
	h, err := s.head()
	return h.Epoch, err
}

// SetEpoch stores a new owner epoch. It fails with ErrEpoch unless the epoch
// lies beyond the stored one.
func (s *Store) SetEpoch(epoch uint64) error {
	return s.update("epoch", func(_ *bolt.Tx, h *head) error {
		if epoch <= h.Epoch {
			return fmt.Errorf("epoch %d, stored is %d: %w", epoch, h.Epoch, ErrEpoch)
		}
		h.Epoch = epoch
		return nil
	})
}

func (s *Store) head() (head, error) {
	var h head
	err := s.view(func(tx *bolt.Tx) error {
		var err error
		h, err = readHead(tx)
		return err
	})
	return h, err
}

// StreamIdentity says which stream a store was filled from.
type StreamIdentity struct {
	Name    string    `json:"name"`
	Created time.Time `json:"created"`
}

// Equal reports whether both name the same stream.
func (a StreamIdentity) Equal(b StreamIdentity) bool {
	return a.Name == b.Name && a.Created.Equal(b.Created)
}

// Stream returns the stream that the store is filled from, and whether one
// was set.
func (s *Store) Stream() (id StreamIdentity, known bool, err error) {
	err = s.view(func(tx *bolt.Tx) error {
		r, err := headShelf.in(tx)
		if err != nil {
			return err
		}
		known, err = r.getJSON(streamKey, &id)
		return err
	})
	return id, known, err
}

// SetStream names the stream that the store is filled from. Setting the same
// again does nothing; another one fails with ErrStream.
func (s *Store) SetStream(id StreamIdentity) error {
	was, known, err := s.Stream()
	if err != nil || (known && was.Equal(id)) {
		return err
	}
	return s.update("stream", func(tx *bolt.Tx, h *head) error {
		if known || h.Position != 0 {
			return fmt.Errorf("%s of %s instead of %s of %s: %w", id.Name, id.Created.UTC().Format(time.RFC3339Nano),
				was.Name, was.Created.UTC().Format(time.RFC3339Nano), ErrStream)
		}
		return putStream(tx, id)
	})
}

// AcceptStream takes another stream in place of the known one, because a
// person said so: reading goes on after position, and the marks of the old
// stream are forgotten. Counts, alerts and outbox stay as they are.
func (s *Store) AcceptStream(id StreamIdentity, position uint64) error {
	return s.update("accept", func(tx *bolt.Tx, h *head) error {
		if err := clearMarks(tx, h); err != nil {
			return err
		}
		h.Position = position
		h.Accepted++
		h.Renumbered = true
		return putStream(tx, id)
	})
}

func putStream(tx *bolt.Tx, id StreamIdentity) error {
	r, err := headShelf.in(tx)
	if err != nil {
		return err
	}
	return r.putJSON(streamKey, id)
}
