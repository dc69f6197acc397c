package monitor

import "fmt"

// inboundHeader is how far partitions have told of an indicator, as stored.
type inboundHeader struct {
	Indicator string       `json:"indicator"`
	Life      string       `json:"life"`
	Lanes     []laneHeader `json:"lanes"`
}

type laneHeader struct {
	Partition int   `json:"partition"`
	Ended     bool  `json:"ended,omitempty"`
	First     int64 `json:"first"`
	Complete  int64 `json:"complete"`
	Through   int64 `json:"through"`
	Parts     int   `json:"parts"`
	Open      bool  `json:"open,omitempty"`
}

func (e *Engine) inboundHeaders() []inboundHeader {
	var list []inboundHeader
	for _, in := range e.inbounds {
		h := inboundHeader{Indicator: in.indicator, Life: in.life}
		for p := range in.lanes {
			if l := &in.lanes[p]; l.begun {
				h.Lanes = append(h.Lanes, laneHeader{p, l.ended, l.first, l.complete, l.through, l.parts, l.open})
			}
		}
		list = append(list, h)
	}
	return list
}

// restoreInbounds restores how far partitions had told, and what waits.
func (e *Engine) restoreInbounds(h *header, waiting []WaitingSummary) error {
	e.waiting, e.deferrals = h.Waiting, h.Deferrals
	for _, ih := range h.Inbound {
		in := e.inboundOf(ih.Indicator, ih.Life)
		for _, l := range ih.Lanes {
			if l.Partition < 0 || l.Partition >= len(in.lanes) {
				return fmt.Errorf("monitor: partition %d told of indicator %q, and there are %d: %w", l.Partition, ih.Indicator, len(in.lanes), errEncoding)
			}
			in.lanes[l.Partition] = lane{
				begun: true, ended: l.Ended, first: l.First, complete: l.Complete, through: l.Through, parts: l.Parts, open: l.Open,
			}
		}
	}
	for _, w := range waiting {
		s, err := DecodeSummary(w.Data)
		if err != nil {
			return fmt.Errorf("monitor: restoring summary %d: %w", w.Number, err)
		}
		s.number = w.Number
		if s.Partition >= e.partition.Of {
			return fmt.Errorf("monitor: restoring summary %d: %w", w.Number, errEncoding)
		}
		l := &e.inboundOf(s.Indicator, s.life).lanes[s.Partition]
		l.waiting = append(l.waiting, s)
	}
	return nil
}

// drainWaiting hands over the summaries that began to wait, and the numbers of
// those that do no longer.
func (e *Engine) drainWaiting() (added []WaitingSummary, gone []uint64) {
	for _, s := range e.kept {
		added = append(added, WaitingSummary{s.number, s.encode()})
	}
	gone = e.released
	e.kept, e.released = nil, nil
	return added, gone
}
