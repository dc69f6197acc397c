package main

import (
	"errors"
	"sync"

	"tailbell/ingest/control"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// partSet are the partitions that are open here. They come and go where several
// processes share them.
type partSet struct {
	mu sync.RWMutex
	of []*part // by number, nil for those that are not
}

// all returns those that are open, in order.
func (s *partSet) all() []*part {
	s.mu.RLock()
	defer s.mu.RUnlock()
	var parts []*part
	for _, p := range s.of {
		if p != nil {
			parts = append(parts, p)
		}
	}
	return parts
}

// get returns a partition, nil if it is not open.
func (s *partSet) get(number int) *part {
	s.mu.RLock()
	defer s.mu.RUnlock()
	return s.of[number]
}

func (s *partSet) put(p *part) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.of[p.number] = p
}

func (s *partSet) remove(number int) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.of[number] = nil
}

// part returns the partition with a number, if it is open here.
func (d *daemon) part(number int) (*part, error) {
	if number < 0 || number >= d.setup.Partitions {
		return nil, control.Errorf(codeNotFound, "no partition %d: there are %d", number, d.setup.Partitions)
	}
	p := d.parts.get(number)
	if p == nil {
		return nil, control.Errorf(codeElsewhere, "partition %d is not this process's, or not yet: try again", number)
	}
	return p, nil
}

// numberOf is the number of the partition that a series, or a sum, belongs to.
func (d *daemon) numberOf(series string) int { return d.setup.PartitionOf(series) }

// partOf returns the partition that a series belongs to, if it is open here.
func (d *daemon) partOf(series string) (*part, error) { return d.part(d.numberOf(series)) }

// find returns an alert and the partition that holds it.
func (d *daemon) find(id string) (life.Record, *part, error) {
	for _, p := range d.parts.all() {
		row, err := p.store.Alert(id)
		if err == nil {
			return row.Record, p, nil
		}
		if !errors.Is(err, store.ErrNotFound) {
			return life.Record{}, nil, err
		}
	}
	return life.Record{}, nil, control.Errorf(codeNotFound, "no alert %q: tailbell alert list shows them", id)
}
