package main

import (
	"context"
	"encoding/binary"
	"fmt"
	"sync"
	"time"

	bolt "go.etcd.io/bbolt"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor"
	"tailbell/monitor/partition"
)

// bareChain is the least that any monitor must do: it reads and decodes, counts
// in a map, and writes the changed counters with the position in one synced
// transaction; then it publishes a message for each batch. The stages overlap.
func bareChain(ctx context.Context, b *bus.Bus, setup *config.Setup, path string, after, end uint64) error {
	db, err := bolt.Open(path, 0o600, &bolt.Options{FreelistType: bolt.FreelistMapType, InitialMmapSize: 1 << 30})
	if err != nil {
		return err
	}
	c := &chain{db: db, bus: b, counts: map[string]int{}, batches: make(chan partition.Batch, 1), rows: make(chan chainRows), free: make(chan struct{}, 1)}
	c.free <- struct{}{}
	in, err := intake.Open(ctx, b, setup, 0, intake.Options{After: after, Stored: monitor.Beginning, Now: time.Now})
	if err != nil {
		return err
	}
	var wait sync.WaitGroup
	var failed [2]error
	wait.Go(func() { failed[0] = c.pull(ctx, in, end) })
	wait.Go(func() { failed[1] = c.commit(ctx) })
	c.count()
	wait.Wait()
	for _, err := range failed {
		if err != nil {
			return err
		}
	}
	if err := in.Close(); err != nil {
		return err
	}
	return db.Close()
}

type chain struct {
	db      *bolt.DB
	bus     *bus.Bus
	counts  map[string]int // the place of a series in totals
	totals  []chainTotal
	touched []int
	batches chan partition.Batch
	rows    chan chainRows
	free    chan struct{}
	next    uint64
}

type chainTotal struct {
	events, exposure uint64
	touched          bool
}

// chainRows is what one transaction writes.
type chainRows struct {
	position uint64
	values   [][16]byte
}

func (c *chain) pull(ctx context.Context, in *intake.Intake, end uint64) error {
	defer close(c.batches)
	for position := uint64(0); position < end; {
		batch, err := in.Next(ctx, 5000)
		if err != nil {
			return err
		}
		position = batch.Messages[len(batch.Messages)-1].Position
		c.batches <- batch
	}
	return nil
}

func (c *chain) count() {
	defer close(c.rows)
	var position uint64
	batches := c.batches
	for batches != nil || position > 0 {
		free := c.free
		if position == 0 {
			free = nil
		}
		select {
		case batch, open := <-batches:
			if !open {
				batches = nil
				continue
			}
			for i := range batch.Messages {
				for j := range batch.Messages[i].Items {
					c.add(&batch.Messages[i].Items[j].Observation)
				}
				position = batch.Messages[i].Position
			}
		case <-free:
			c.rows <- c.drain(position)
			position = 0
		}
	}
}

func (c *chain) add(o *monitor.Observation) {
	i, ok := c.counts[o.Series]
	if !ok {
		i = len(c.totals)
		c.counts[o.Series] = i
		c.totals = append(c.totals, chainTotal{})
	}
	t := &c.totals[i]
	t.events += uint64(o.Events)
	t.exposure += o.Exposure.Coef
	if !t.touched {
		t.touched = true
		c.touched = append(c.touched, i)
	}
}

func (c *chain) drain(position uint64) chainRows {
	r := chainRows{position: position, values: make([][16]byte, len(c.touched))}
	for n, i := range c.touched {
		t := &c.totals[i]
		t.touched = false
		binary.BigEndian.PutUint64(r.values[n][:8], t.events)
		binary.BigEndian.PutUint64(r.values[n][8:], t.exposure)
	}
	c.touched = c.touched[:0]
	return r
}

func (c *chain) commit(ctx context.Context) error {
	for r := range c.rows {
		if err := c.db.Update(func(tx *bolt.Tx) error { return c.write(tx, r) }); err != nil {
			return err
		}
		if _, err := c.bus.PublishAlert(ctx, 0, "upper", "bare", fmt.Sprint(time.Now().UnixNano()), []byte("{}"), nil); err != nil {
			return err
		}
		c.free <- struct{}{}
	}
	return nil
}

func (c *chain) write(tx *bolt.Tx, r chainRows) error {
	bucket, err := tx.CreateBucketIfNotExists([]byte("counts"))
	if err != nil {
		return err
	}
	bucket.FillPercent = 0.95
	for i := range r.values {
		c.next++
		if err := bucket.Put(binary.BigEndian.AppendUint64(nil, c.next), r.values[i][:]); err != nil {
			return err
		}
	}
	return bucket.Put([]byte("position"), binary.BigEndian.AppendUint64(nil, r.position))
}
