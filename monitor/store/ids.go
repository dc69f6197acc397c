package store

import (
	"encoding/binary"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// The ids of a generation lie in a bucket of their own within the bucket ids,
// so that dropping them touches no value. They lie in packs, many to a value:
// the key is the running number of the pack's first id, over all generations,
// and the pack is
//
//	(steps from the number before | length | value)*
//
// with unsigned varints, the first step being 0. The bucket generations says
// beside it how many packs and ids there must be.

// census is what is known of one generation of ids.
type census struct {
	Packs uint64 `json:"packs"`
	IDs   uint64 `json:"ids"`
	// First and Last are the keys of the outermost packs.
	First uint64 `json:"first"`
	Last  uint64 `json:"last"`
}

// generationKey orders generations by number, negative ones first.
func generationKey(g int64) []byte { return number(uint64(g) ^ 1<<63) }

func generationOf(key []byte) int64 {
	return int64(binary.BigEndian.Uint64(key) ^ 1<<63)
}

// idShelf is the shelf of one generation: its checksums cover the generation.
func idShelf(key []byte) shelf {
	return newShelf(fmt.Sprintf("ids/%d", generationOf(key)))
}

// generation returns the bucket of a generation, nil if there is none.
func (r rack) generation(key []byte) *rack {
	b := r.Bucket.Bucket(key)
	if b == nil {
		return nil
	}
	b.FillPercent = appendFill
	return &rack{Bucket: b, shelf: idShelf(key)}
}

// writeIDs forgets the generations that are written anew, appends ids to theirs,
// and then forgets those that are dropped, even if they were touched.
func writeIDs(tx *bolt.Tx, h *head, changes *monitor.Changes) error {
	if len(changes.IDs) == 0 && len(changes.DroppedGenerations) == 0 {
		return nil
	}
	for _, g := range changes.RewrittenGenerations {
		if err := dropGeneration(tx, h, g); err != nil {
			return err
		}
	}
	// One packer for each generation touched, in the order of touching.
	var packers []*packer
	at := map[int64]*packer{}
	for _, id := range changes.IDs {
		h.IDs++
		p := at[id.Generation]
		if p == nil {
			p = &packer{generation: id.Generation}
			at[id.Generation] = p
			packers = append(packers, p)
		}
		p.add(h.IDs, id.Value)
	}
	for _, p := range packers {
		if err := p.write(tx, h); err != nil {
			return err
		}
	}
	for _, g := range changes.DroppedGenerations {
		if err := dropGeneration(tx, h, g); err != nil {
			return err
		}
	}
	return nil
}

// packer gathers the ids of one generation in a commit.
type packer struct {
	generation int64
	packs      []pack
	last       uint64
}

type pack struct {
	first, ids uint64
	payload    []byte
}

func (p *packer) add(n uint64, value []byte) {
	if len(p.packs) == 0 || len(p.packs[len(p.packs)-1].payload)+len(value) > partSize {
		p.packs = append(p.packs, pack{first: n})
		p.last = n
	}
	k := &p.packs[len(p.packs)-1]
	k.payload = binary.AppendUvarint(k.payload, n-p.last)
	k.payload = binary.AppendUvarint(k.payload, uint64(len(value)))
	k.payload = append(k.payload, value...)
	k.ids++
	p.last = n
}

func (p *packer) write(tx *bolt.Tx, h *head) error {
	ids, err := idsShelf.in(tx)
	if err != nil {
		return err
	}
	generations, err := generationsShelf.in(tx)
	if err != nil {
		return err
	}
	key := generationKey(p.generation)
	var g census
	known, err := generations.getJSON(key, &g)
	if err != nil {
		return err
	}
	if !known {
		h.Generations++
		g.First = p.packs[0].first
		if _, err := ids.CreateBucket(key); err != nil {
			return fmt.Errorf("ids, generation %d: %w", p.generation, err)
		}
	}
	r := ids.generation(key)
	if r == nil {
		return ids.damaged(key, "it is missing")
	}
	for _, k := range p.packs {
		if err := r.put(number(k.first), k.payload); err != nil {
			return err
		}
		g.Packs++
		g.IDs += k.ids
		g.Last = k.first
	}
	return generations.putJSON(key, g)
}

func dropGeneration(tx *bolt.Tx, h *head, g int64) error {
	ids, err := idsShelf.in(tx)
	if err != nil {
		return err
	}
	generations, err := generationsShelf.in(tx)
	if err != nil {
		return err
	}
	key := generationKey(g)
	if ids.Bucket.Bucket(key) == nil {
		return nil // none of its ids was ever stored
	}
	if err := ids.DeleteBucket(key); err != nil {
		return fmt.Errorf("ids, generation %d: %w", g, err)
	}
	h.Generations--
	return generations.remove(key)
}

// shelved is an id with its running number.
type shelved struct {
	number uint64
	id     monitor.IDChange
}

// eachGeneration calls use for the generations, oldest first, each checked
// against what is known of it.
func eachGeneration(tx *bolt.Tx, h *head, use func(g int64, ids []shelved) error) error {
	ids, err := idsShelf.in(tx)
	if err != nil {
		return err
	}
	generations, err := generationsShelf.in(tx)
	if err != nil {
		return err
	}
	buckets, count := ids.Cursor(), 0
	c := generations.Cursor()
	bucket, _ := buckets.First()
	for key, value := c.First(); key != nil; key, value = c.Next() {
		if len(key) != 8 || string(bucket) != string(key) {
			return generations.damaged(key, "it has no bucket of its own")
		}
		var want census
		if err := generations.openJSON(key, value, &want); err != nil {
			return err
		}
		found, err := readGeneration(ids, key, want, h.IDs)
		if err != nil {
			return err
		}
		if err := use(generationOf(key), found); err != nil {
			return err
		}
		count++
		bucket, _ = buckets.Next()
	}
	if bucket != nil || count != h.Generations {
		return generations.damaged(nil, fmt.Sprintf("%d generations instead of %d, or a bucket too many", count, h.Generations))
	}
	return nil
}

func readGeneration(ids rack, key []byte, want census, last uint64) ([]shelved, error) {
	r := ids.generation(key)
	if r == nil {
		return nil, ids.damaged(key, "it is no bucket")
	}
	if want.IDs > last {
		return nil, ids.damaged(key, "it counts more ids than there were")
	}
	found := make([]shelved, 0, want.IDs)
	var have census
	generation := generationOf(key)
	c := r.Cursor()
	for at, value := c.First(); at != nil; at, value = c.Next() {
		first, err := r.numberOf(at)
		if err != nil {
			return nil, err
		}
		payload, err := r.open(at, value)
		if err != nil {
			return nil, err
		}
		if have.Packs == 0 {
			have.First = first
		}
		have.Packs++
		have.Last = first
		n, f := first, fields{rest: append([]byte(nil), payload...)} // all of a pack lie in one copy
		for len(f.rest) > 0 {
			n += f.uvarint()
			id := f.bytes(f.uvarint())
			if f.bad || n > last {
				return nil, r.damaged(at, "an id makes no sense")
			}
			found = append(found, shelved{n, monitor.IDChange{
				Generation: generation, Value: id,
			}})
			have.IDs++
		}
	}
	if have != want {
		return nil, ids.damaged(key, fmt.Sprintf("it holds %+v instead of %+v", have, want))
	}
	return found, nil
}
