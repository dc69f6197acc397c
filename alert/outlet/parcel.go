package outlet

import (
	"slices"

	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// together is how many steps one notice tells of at most.
const together = 100

// parcel is what is delivered at once: one step, or several for people.
type parcel struct {
	notices []*life.Notice
	numbers []uint64
	// before is the number of the last step of which all up to it are done,
	// when all parcels before this one were delivered; 0 if that is not known.
	before uint64
}

// pack makes parcels of the steps that wait, in the order of delivery, and
// returns the number up to which all is done when they were delivered. What the
// outlet is not told is passed over.
//
// Steps are only gathered from a run: steps that lie next to each other, taken
// at the same time on alerts of one indicator. All of a run lie in one commit,
// so the same parcels come out whenever a delivery is repeated.
func (q *Queue) pack(rows []store.Row) (parcels []parcel, through uint64) {
	full := len(rows) == chunk
	_, gathers := q.outlet.(Gatherer)
	for i := 0; i < len(rows); {
		if !q.opts.Wants(&rows[i].Notice) {
			through = rows[i].Number
			i++
			continue
		}
		run, next := []store.Row{rows[i]}, i+1
		if gathers {
			run, next = q.run(rows, i)
		}
		if next == len(rows) && full && len(run) < together && i > 0 && gathers {
			break // it may go on behind the chunk: it is the first of the next
		}
		for _, p := range split(run) {
			p.before = through
			parcels = append(parcels, p)
		}
		through = rows[next-1].Number
		i = next
	}
	return parcels, through
}

// run returns the steps from the i-th on that may be gathered, and where it
// ends.
func (q *Queue) run(rows []store.Row, i int) (run []store.Row, next int) {
	first := &rows[i].Notice
	for next = i; next < len(rows) && len(run) < together; next++ {
		n := &rows[next].Notice
		if !q.opts.Wants(n) {
			continue
		}
		if len(run) > 0 && !alike(first, n) {
			break
		}
		run = append(run, rows[next])
	}
	return run, next
}

// alike reports whether two steps may be gathered, but for their kind. What
// people did stands alone.
func alike(a, b *life.Notice) bool {
	return a.Step.By == "" && b.Step.By == "" && a.Step.At.Equal(b.Step.At) &&
		a.Record.Indicator == b.Record.Indicator && a.To == b.To && a.History == b.History
}

// split makes parcels of the steps of a run, one a kind and direction; more
// where an alert has several steps, which keep their order.
func split(run []store.Row) []parcel {
	var parcels []parcel
	latest := map[string]int{} // by alert, the parcel after that of its last step
	for i := range run {
		n := &run[i].Notice
		at := slices.IndexFunc(parcels[latest[n.Record.ID]:], func(p parcel) bool {
			first := p.notices[0]
			return first.Step.Kind == n.Step.Kind && first.Record.Direction == n.Record.Direction && first.Record.Late == n.Record.Late
		})
		if at += latest[n.Record.ID]; at < latest[n.Record.ID] {
			at = len(parcels)
			parcels = append(parcels, parcel{})
		}
		p := &parcels[at]
		p.notices = append(p.notices, n)
		p.numbers = append(p.numbers, run[i].Number)
		latest[n.Record.ID] = at + 1
	}
	return parcels
}
