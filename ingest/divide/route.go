package divide

import (
	"bytes"
	"crypto/sha256"
	"encoding/json"
	"strings"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// router knows where things belong.
type router struct {
	keyParts int
	from, to int // numbers of partitions
	// group is the greatest common divisor of the two: old partition p feeds
	// new partition q if both leave the same rest.
	group int
	// alertSeries names the series of an alert of an old partition.
	alertSeries func(partition int, id string) (string, bool)

	copies  map[copyOf]int     // seen in an old partition
	carried map[carriedKey]int // carried over into a group
	leftOut int                // elements and acts
}

// copyOf is an act or a set-up, byte for byte, in one old partition.
type copyOf struct {
	partition int
	digest    [sha256.Size]byte
}

type carriedKey struct {
	group  int
	digest [sha256.Size]byte
}

func newRouter(from, to, keyParts int, alertSeries func(int, string) (string, bool)) *router {
	a, b := from, to
	for b > 0 {
		a, b = b, a%b
	}
	return &router{
		keyParts: keyParts, from: from, to: to, group: a, alertSeries: alertSeries,
		copies: map[copyOf]int{}, carried: map[carriedKey]int{},
	}
}

// of returns the new partition of a series.
func (r *router) of(series string) int { return config.PartitionOf(series, r.keyParts, r.to) }

// strays reports whether the series came to an old partition that it does not
// belong to.
func (r *router) strays(series string, partition int) bool {
	return r.from > 1 && config.PartitionOf(series, r.keyParts, r.from) != partition
}

// wrong returns a new partition in which the series strays again, false if
// there is none.
func (r *router) wrong(series string) (int, bool) { return (r.of(series) + 1) % r.to, r.to > 1 }

// lost reports whether what came of a series to an old partition is left out.
func (r *router) lost(series string, partition int) bool {
	return r.to == 1 && r.strays(series, partition)
}

// parcel is a message for a new partition.
type parcel struct {
	partition int
	kind      bus.Kind
	data      []byte
	whole     bool // the message as it was, with its headers
	// blind says that nothing in it moves a clock: it is refused whole.
	blind bool
}

// parcels are what a piece becomes.
func (r *router) parcels(p *piece) []parcel {
	switch p.message.Kind {
	case monitor.Observations:
		return r.observations(p)
	case monitor.ActMessage:
		return r.act(p)
	case monitor.SettingMessage:
		return r.once(p, bus.Setting, r.fed(p.lane.number))
	case monitor.Rejected:
		return []parcel{{p.lane.number % r.to, kindOf(p.raw), p.raw.Data, true, true}}
	case monitor.Tick, monitor.Live, monitor.SummaryMessage: // the new partitions tell each other themselves
	}
	return nil
}

// kindOf is what a message that was rejected claims to be.
func kindOf(raw *bus.Raw) bus.Kind {
	for _, kind := range []bus.Kind{bus.Act, bus.Setting, bus.Tick} {
		if strings.HasSuffix(raw.Subject, "."+kind.String()) {
			return kind
		}
	}
	return bus.Observation
}

// fed are the new partitions that an old one feeds.
func (r *router) fed(partition int) []int {
	var all []int
	for q := partition % r.group; q < r.to; q += r.group {
		all = append(all, q)
	}
	return all
}

// observations sends elements to the partitions of their series: the message
// as it is, if one partition will do.
func (r *router) observations(p *piece) []parcel {
	items := p.message.Items
	targets := make([]int, len(items))
	home := -1 // of the first element that is understood
	whole := !p.part
	for i := range items {
		targets[i] = r.element(&items[i], p.lane.number)
		if items[i].Reason == "" && home < 0 {
			home = targets[i]
		}
	}
	blind := home < 0
	if blind {
		home = p.lane.number % r.to
	}
	for i := range items {
		if items[i].Reason != "" {
			targets[i] = home
		}
		whole = whole && targets[i] == home
	}
	if whole {
		return []parcel{{home, bus.Observation, p.raw.Data, true, blind}}
	}
	return r.split(items, targets)
}

// element returns where an element goes, -1 for nowhere.
func (r *router) element(it *monitor.Item, partition int) int {
	series := it.Observation.Series
	if it.Reason != "" || !r.strays(series, partition) {
		return r.of(series)
	}
	wrong, ok := r.wrong(series)
	if !ok {
		r.leftOut++
		return -1
	}
	return wrong
}

// split makes one message a partition of the elements that are understood, one
// a line, and one each of the others.
func (r *router) split(items []monitor.Item, targets []int) []parcel {
	var all []parcel
	open := map[int]int{} // by partition, its parcel that takes more
	for i := range items {
		it, to := &items[i], targets[i]
		if to < 0 {
			continue
		}
		if it.Reason != "" {
			all = append(all, parcel{to, bus.Observation, alone(it.Raw), false, true})
			continue
		}
		line := oneLine(it.Raw)
		if n, ok := open[to]; ok {
			all[n].data = append(append(all[n].data, '\n'), line...)
			continue
		}
		open[to] = len(all)
		all = append(all, parcel{to, bus.Observation, bytes.Clone(line), false, false})
	}
	return all
}

// oneLine writes an element that is understood on one line.
func oneLine(raw []byte) []byte {
	if !bytes.ContainsAny(raw, "\n\r") {
		return raw
	}
	var line bytes.Buffer
	if err := json.Compact(&line, raw); err != nil {
		return raw // it was understood, so it is JSON
	}
	return line.Bytes()
}

// alone writes an element that is refused so that it stays one element.
func alone(raw []byte) []byte {
	if !bytes.ContainsAny(raw, "\n\r") {
		return raw
	}
	return append(append([]byte{'['}, raw...), ']')
}

// act sends an act where its series, or those that it may mean, are.
func (r *router) act(p *piece) []parcel {
	act, partition := &p.message.Act, p.lane.number
	series := act.Series
	if act.Alert != "" {
		known := false
		if series, known = r.alertSeries(partition, act.Alert); !known {
			return []parcel{{partition % r.to, bus.Act, p.raw.Data, true, false}} // refused there as here
		}
	}
	if r.many(series) {
		return r.once(p, bus.Act, r.fed(partition))
	}
	to, ok := r.of(series), true
	if act.Alert == "" && r.strays(series, partition) {
		to, ok = r.wrong(series)
	}
	if !ok {
		r.leftOut++
		return nil
	}
	return []parcel{{to, bus.Act, p.raw.Data, true, false}}
}

// many reports whether series of several partitions may be meant.
func (r *router) many(pattern string) bool {
	lead := strings.Split(pattern, "/")
	for _, part := range lead[:min(r.keyParts, len(lead))] {
		if strings.ContainsAny(part, "*{") {
			return true
		}
	}
	return false
}

// once carries over what several old partitions have a copy of: the first of
// the same copies in the feeders of a new partition.
func (r *router) once(p *piece, kind bus.Kind, to []int) []parcel {
	digest := sha256.Sum256(p.raw.Data)
	mine, ours := copyOf{p.lane.number, digest}, carriedKey{p.lane.number % r.group, digest}
	r.copies[mine]++
	if r.copies[mine] <= r.carried[ours] {
		return nil
	}
	r.carried[ours]++
	all := make([]parcel, len(to))
	for i, q := range to {
		all[i] = parcel{q, kind, p.raw.Data, true, false}
	}
	return all
}

// header is what a parcel carries besides the time at which it was stored. In
// history time, the clock is told.
func (p *piece) header(whole, history bool) map[string][]string {
	header := map[string][]string{}
	if whole {
		for key, values := range p.raw.Header {
			header[key] = values
		}
	}
	if p.message.Kind == monitor.Rejected || !history || p.clock == monitor.Beginning {
		return header
	}
	for key := range header {
		if strings.EqualFold(key, wire.TimeHeader) {
			delete(header, key)
		}
	}
	header[wire.TimeHeader] = []string{wire.FormatTime(p.clock)}
	return header
}
