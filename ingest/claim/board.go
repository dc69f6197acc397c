package claim

import (
	"context"
	"encoding/json"
	"fmt"
	"maps"
	"slices"
	"strconv"
	"strings"
	"time"

	"tailbell/ingest/bus"
)

// Board is where claims are kept; a *bus.Bucket is one.
type Board interface {
	// All returns every entry; it may be a little old.
	All(ctx context.Context) ([]bus.Entry, error)
	// PutAll puts entries by compare-and-swap.
	PutAll(ctx context.Context, puts []bus.Put) []bus.Outcome
}

// The keys of the entries.
const (
	partitionKey = "p." // and the partition's number: a Holding
	memberKey    = "m." // and the member's name: a Presence
	settingKey   = "setting"
)

// Holding says who owns a partition.
type Holding struct {
	// Owner is the name of a member, "" while nobody owns the partition.
	Owner string `json:"owner"`
	// Epoch of the owner, or of the last one. It never falls, and every owner
	// has another.
	Epoch uint64 `json:"epoch"`
	// Stored is the epoch of the last owner that has opened its store: that store
	// is the last one. 0 for none.
	Stored uint64 `json:"stored"`
	// Digest is that of the owner's set-up.
	Digest string `json:"digest"`
	// Position is up to where the owner had stored the stream.
	Position uint64 `json:"position"`
	// Told are, by outlet, the numbers of the outbox up to which all was done
	// with, of the input stream that was made at Origin.
	Told   map[string]uint64 `json:"told,omitempty"`
	Origin string            `json:"origin,omitempty"`
}

// Presence says that a member is there.
type Presence struct {
	Digest string `json:"digest"`
	// Leaving says that it takes nothing any more.
	Leaving bool `json:"leaving,omitempty"`
}

// settingInForce is the set-up under which partitions may be owned.
type settingInForce struct {
	Digest string `json:"digest"`
}

// entry is an entry of the board, read.
type entry struct {
	revision  uint64
	partition int    // -1 for none
	member    string // "" for none
	holding   Holding
	presence  Presence
	setting   settingInForce
}

// board is what the board holds.
type board struct {
	partitions map[int]entry
	members    map[string]entry
	setting    entry // revision 0: there is none
}

func readBoard(entries []bus.Entry) (*board, error) {
	b := &board{partitions: map[int]entry{}, members: map[string]entry{}}
	for _, e := range entries {
		one := entry{revision: e.Revision, partition: -1}
		var into any
		var err error
		switch {
		case e.Key == settingKey:
			into = &one.setting
		case strings.HasPrefix(e.Key, memberKey):
			one.member, into = strings.TrimPrefix(e.Key, memberKey), &one.presence
		case strings.HasPrefix(e.Key, partitionKey):
			one.partition, err = strconv.Atoi(strings.TrimPrefix(e.Key, partitionKey))
			into = &one.holding
		default:
			continue // of a later version
		}
		if err == nil {
			err = json.Unmarshal(e.Value, into)
		}
		if err != nil {
			return nil, fmt.Errorf("the entry %s of the claims can't be read: %w", e.Key, err)
		}
		switch {
		case one.partition >= 0:
			b.partitions[one.partition] = one
		case one.member != "":
			b.members[one.member] = one
		default:
			b.setting = one
		}
	}
	return b, nil
}

// put makes the Put of a value.
func put(key string, value any, revision uint64, keep time.Duration) bus.Put {
	data, err := json.Marshal(value)
	if err != nil {
		panic("claim: " + err.Error()) // plain fields only
	}
	return bus.Put{Key: key, Value: data, Revision: revision, Keep: keep}
}

// Row is what the board says of a partition.
type Row struct {
	Partition int
	Holding
}

// Look reads who owns what. A partition that nobody has owned yet is missing.
func Look(ctx context.Context, from Board) ([]Row, error) {
	entries, err := from.All(ctx)
	if err != nil {
		return nil, err
	}
	b, err := readBoard(entries)
	if err != nil {
		return nil, err
	}
	return b.rows(), nil
}

func (b *board) rows() (rows []Row) {
	for _, n := range slices.Sorted(maps.Keys(b.partitions)) {
		rows = append(rows, Row{n, b.partitions[n].holding})
	}
	return rows
}
