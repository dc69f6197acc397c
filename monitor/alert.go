package monitor

import (
	"crypto/sha256"
	"encoding/base32"
	"fmt"
	"math"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// alert is one alert at work: its record, and what the engine must know of
// the run of looks behind it.
type alert struct {
	record life.Record
	series *series
	tail   direction
	// first and last bound its own span of boundaries; last is the far
	// future while it signals.
	first, last int64
	// windows has a bit for each window that has signalled in it.
	windows uint64
	// frozen says that a look of it lies beyond the horizon: it can't be
	// withdrawn any more.
	frozen bool
	// opening and worst are the looks whose evidence the record holds.
	opening, worst lookKey
	// openingAt and worstAt are what those were made at.
	openingAt, worstAt occasion
	worstLog10P        float64
	// pending says that its evidence was corrected at the present moment: the
	// step is taken when the clock moves, one for all that came at once.
	pending bool
	// wake is when something happens to it by itself.
	wake Instant
	// dirty says that the record changed since the last drain.
	dirty bool
}

// lookKey names a look of a series and direction.
type lookKey struct {
	boundary int64
	window   int
}

const ongoing = math.MaxInt64

// Caution stands on every alert record.
const Caution = "A signal is a statistical finding: it diagnoses nothing and names no cause. " +
	"Silence is no proof of safety. Local policy, local codes and licensed practice decide."

// maxIDs is how many observation ids a record lists.
const maxIDs = 20

// open opens an alert on the strongest of the looks and gives it all of them.
func (e *Engine) open(s *series, d direction, looks []look, opening look, at Instant, late bool) {
	ix := s.indicator
	t := &s.tails[d]
	t.opened++
	t.quiet = 0
	due := ix.dueOf(&opening).Time()
	a := &alert{
		series: s, tail: d, first: opening.boundary, last: ongoing,
		opening: lookKey{opening.boundary, opening.window}, openingAt: opening.occasion,
		record: life.Record{
			ID:        alertID(s.name, d, due, int(t.opened)),
			Indicator: ix.cfg.Name, Title: ix.cfg.Title, Series: s.name, Direction: d.name(),
			Number: int(t.opened), Opened: due, Late: late, Zone: ix.cfg.ZoneName, Caution: Caution,
		},
	}
	a.record.Opening = e.evidenceOf(s, d, a.opening, a.openingAt)
	a.record.IDs, a.record.MoreIDs = e.idsOf(s, &opening)
	for i := range looks {
		t.join(&looks[i], a, d)
	}
	e.revalue(a)
	t.current = a
	e.alerts[a.record.ID] = a
	evidence := a.record.Opening // as it was when it opened
	e.step(a, life.Step{Kind: life.StepOpened, At: at.Time(), Evidence: &evidence})
}

// alertID is short, stable, and the same wherever the stream is read.
func alertID(series string, d direction, opened time.Time, number int) string {
	sum := sha256.Sum256(fmt.Appendf(nil, "%s\x00%s\x00%s\x00%d", series, d.name(), opened.Format(time.RFC3339Nano), number))
	return strings.ToLower(base32.StdEncoding.EncodeToString(sum[:])[:10])
}

// join notes that the lit look belongs to the alert.
func (t *tail) join(l *look, a *alert, d direction) {
	a.windows |= 1 << l.window
	a.first = min(a.first, l.boundary)
	t.set(l.asLit(d, a))
}

// asLit is what is kept of a look that signals.
func (l *look) asLit(d direction, a *alert) litLook {
	return litLook{
		boundary: l.boundary, occasion: l.occasion, window: l.window, events: l.events, exposure: l.exposure,
		log10p: l.log10p[d], at: l.at, alert: a,
	}
}

// revalue makes the record's worst evidence that of the strongest look of the
// alert, and its opening evidence that of the opening look or, where that one
// signals no more, of the earliest that does. Evidence from beyond the horizon
// stays as it was.
func (e *Engine) revalue(a *alert) {
	t := a.series.tail(a.tail)
	frozen := a.series.indicator.frozenAt
	worst, first := -1, -1
	openingLit := a.opening.boundary <= frozen
	for i := range t.lit {
		l := &t.lit[i]
		if l.alert != a || l.boundary <= frozen {
			continue
		}
		if first < 0 {
			first = i
		}
		if worst < 0 || l.log10p < t.lit[worst].log10p {
			worst = i
		}
		if (lookKey{l.boundary, l.window}) == a.opening && l.occasion == a.openingAt {
			openingLit = true
			a.record.Opening = e.evidenceOf(a.series, a.tail, a.opening, a.openingAt)
		}
	}
	if worst < 0 {
		if a.worst.boundary > frozen && openingLit {
			a.worst, a.worstAt, a.worstLog10P, a.record.Worst = a.opening, a.openingAt, a.record.Opening.Log10P, a.record.Opening
		}
		return
	}
	if !openingLit {
		a.opening, a.openingAt = lookKey{t.lit[first].boundary, t.lit[first].window}, t.lit[first].occasion
		a.record.Opening = e.evidenceOf(a.series, a.tail, a.opening, a.openingAt)
	}
	if l := &t.lit[worst]; a.worst.boundary > frozen || l.log10p < a.worstLog10P {
		a.worst, a.worstAt, a.worstLog10P = lookKey{l.boundary, l.window}, l.occasion, l.log10p
		a.record.Worst = e.evidenceOf(a.series, a.tail, a.worst, a.worstAt)
	}
}

// step takes a step of the alert that the engine knows to be allowed.
func (e *Engine) step(a *alert, s life.Step) {
	if err := e.take(a, s); err != nil {
		panic(err) // the transition table and the engine disagree
	}
}

// take takes a step of the alert, if its condition allows.
func (e *Engine) take(a *alert, s life.Step) error {
	if !a.record.Allows(s.Kind) {
		_, err := a.record.Take(s) // says why not, and changes nothing
		return err
	}
	if a.pending && s.Kind != life.StepWithdrawn {
		e.settle(a)
	}
	a.pending = false
	if a.tail != silence {
		a.record.Since = e.since(a)
	}
	waited := waitsOf(&a.record)
	notices, err := a.record.Take(s)
	if err != nil {
		return err
	}
	for i := range notices {
		notices[i].History = e.history
	}
	e.steps = append(e.steps, notices...)
	if waitsOf(&a.record) != waited {
		e.rewake(a, e.clock)
	}
	e.touchAlert(a)
	e.touch(a.series)
	return nil
}

// leave ends the alert's run: it signals no more, or nobody wants it to.
func (t *tail) leave(boundary int64) {
	t.current.last = boundary
	t.current.series.extend(t.current, boundary)
	t.past = append(t.past, t.current)
	t.current = nil
	t.quiet = 0
}
