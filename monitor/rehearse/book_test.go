package rehearse

import (
	"bytes"
	"math"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

func berlin(t *testing.T) *time.Location {
	t.Helper()
	zone, err := config.LoadZone("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	return zone
}

// desk is a book of one daily rate and the calendar to fill it.
type desk struct {
	*book
	t    *testing.T
	zone *time.Location
}

func newDesk(t *testing.T, each bool) desk {
	t.Helper()
	zone := berlin(t)
	return desk{newBook([]Rule{{LastPart: "fall", Slots: Daily, Zone: zone, Each: each, Grain: Millionth, Horizon: 240 * time.Hour, Ahead: 48 * time.Hour}}), t, zone}
}

func (d desk) date(day int) time.Time { return time.Date(2024, 3, day, 0, 0, 0, 0, d.zone) }

func (d desk) count(id string, revision int64, day int, events int64) Element {
	return Element{
		Series: "site/ward/fall", ID: id, Revision: revision, Start: d.date(day), End: d.date(day + 1),
		Events: events, HasEvents: true, Reported: d.date(day + 1),
	}
}

func (d desk) beds(id string, from, to int, amount Amount) Element {
	return Element{
		Series: "site/ward/fall", ID: id, Revision: 1, Start: d.date(from), End: d.date(to),
		Exposure: amount, HasExposure: true, Reported: d.date(to),
	}
}

// enterAs enters an element that must be judged so.
func (d desk) enterAs(e Element, class Class, reason string) {
	d.t.Helper()
	e.Meant = class
	if err := d.enter(&e, 0, len(d.entries)); err != nil {
		d.t.Fatal(err)
	}
	if got := d.entries[len(d.entries)-1].Reason; got != reason {
		d.t.Fatalf("refused as %q, want %q", got, reason)
	}
}

func (d desk) finalClasses() string {
	ledger := d.close()
	var words []string
	for _, e := range ledger.Entries {
		words = append(words, e.Class.String())
	}
	return strings.Join(words, " ")
}

func TestBookJudges(t *testing.T) {
	d := newDesk(t, false)
	first := d.count("a", 1, 5, 2)
	d.enterAs(d.beds("b", 5, 6, 217*Tenth), Counted, "")
	d.enterAs(first, Counted, "")
	d.enterAs(first, Repeat, "")
	other := first
	other.Events = 3
	d.enterAs(other, Refused, "conflict")
	other.Revision = 2
	d.enterAs(other, Counted, "")
	d.enterAs(first, Outdated, "")
	gone := Element{Series: first.Series, ID: "a", Revision: 3, Retracted: true, Reported: d.date(7)}
	d.enterAs(gone, Counted, "")
	gone.ID = "never"
	d.enterAs(gone, Refused, "no_such_id")
	d.enterAs(d.count("c", 1, 5, 1), Counted, "")
	d.enterAs(Element{Series: "site/ward/fire", ID: "a", Start: d.date(5), End: d.date(6), HasEvents: true, Reported: d.date(6)}, Unmonitored, "")
	const want = "counted replaced repeat refused replaced outdated counted refused counted unmonitored"
	ledger := d.close()
	if got := d.finalClasses(); got != want {
		t.Errorf("classes:\n got %s\nwant %s", got, want)
	}
	if len(ledger.Slots) != 1 || ledger.Slots[0].Events != 1 || ledger.Slots[0].Exposure.String() != "21.7" {
		t.Errorf("slots %+v", ledger.Slots)
	}
}

func TestBookMovesAndWithholds(t *testing.T) {
	d := newDesk(t, true)
	e := d.count("a", 1, 5, 1)
	e.End = e.Start // an instant
	d.enterAs(d.beds("b", 5, 6, 20*One), Counted, "")
	d.enterAs(e, Counted, "")
	e.Revision, e.Series = 2, "site/other-ward/fall"
	d.enterAs(e, Counted, "")
	if got, want := d.finalClasses(), "counted replaced withheld"; got != want {
		t.Errorf("classes %s, want %s", got, want)
	}
	for _, s := range d.close().Slots {
		if moved := strings.Contains(s.Series, "other"); moved != (s.Events == 1) || moved == s.HasExposure {
			t.Errorf("%+v", s)
		}
	}
}

func TestBookReach(t *testing.T) {
	d := newDesk(t, false)
	d.enterAs(d.count("clock", 1, 19, 0), Counted, "") // the clock stands at 20 March
	late := d.count("late", 1, 9, 0)                   // its slot ended ten days before
	late.Reported = d.date(20)
	d.enterAs(late, Counted, "")
	late = d.count("late", 1, 8, 0)
	late.Reported = d.date(20)
	d.enterAs(late, Refused, "beyond_horizon")
	ahead := d.count("ahead", 1, 21, 0) // ends on 22 March, 48 hours ahead
	ahead.Reported = d.date(20)
	d.enterAs(ahead, Counted, "")
	ahead.ID, ahead.Start, ahead.End = "further", d.date(22), d.date(23)
	d.enterAs(ahead, Refused, "too_far_ahead")
	wide := d.count("wide", 1, 18, 1)
	wide.End = d.date(20)
	d.enterAs(wide, Refused, "spans_slots")
	fault := d.count("fault", 1, 19, 1)
	fault.Fault, fault.Reported = "not_json", d.date(30)
	d.enterAs(fault, Refused, "not_json")
	if d.clock.After(d.date(20)) {
		t.Error("rubbish moved the clock")
	}
}

// TestBookSpreads holds a sum over the change of clocks against the numbers
// worked out by hand: 30 to 31 March 2024 last 24 and 23 hours, so that 100
// millionths go as 51.06... and 48.93..., the one left over to the larger
// remainder.
func TestBookSpreads(t *testing.T) {
	d := newDesk(t, false)
	d.enterAs(d.beds("b", 30, 32, 100*Millionth), Counted, "")
	slots := d.close().Slots
	if len(slots) != 2 || slots[0].Exposure != 51 || slots[1].Exposure != 49 {
		t.Errorf("%+v", slots)
	}
	if got := slots[1].End.Sub(slots[1].Start); got != 23*time.Hour {
		t.Errorf("31 March lasts %s", got)
	}
}

func TestBookSeesWhatWasNotMeant(t *testing.T) {
	d := newDesk(t, false)
	e := d.count("a", 1, 5, 1)
	e.Meant = Repeat
	if err := d.enter(&e, 3, 4); err == nil || !strings.Contains(err.Error(), "message 3, element 4, meant to be repeat, is counted") {
		t.Errorf("got %v", err)
	}
}

func TestWeeksBeginOnMonday(t *testing.T) {
	zone := berlin(t)
	r := Rule{Slots: Weekly, Zone: zone}
	start, end := r.slot(time.Date(2024, 3, 31, 23, 59, 0, 0, zone))
	if start.Format(time.RFC3339) != "2024-03-25T00:00:00+01:00" || end.Format(time.RFC3339) != "2024-04-01T00:00:00+02:00" {
		t.Errorf("%s to %s", start, end)
	}
	r.Slots = Hourly
	start, end = r.slot(time.Date(2024, 10, 27, 0, 30, 0, 0, time.UTC)) // the first of two hours from 2 to 3
	if start.UTC().Format(time.RFC3339) != "2024-10-27T00:00:00Z" || end.Sub(start) != time.Hour {
		t.Errorf("%s to %s", start, end)
	}
}

func TestAmounts(t *testing.T) {
	for a, want := range map[Amount]string{0: "0", 217 * Tenth: "21.7", One: "1", 1: "0.000001", -15 * Tenth: "-1.5", 1234567 * One: "1234567"} {
		if got := a.String(); got != want {
			t.Errorf("%d is %q, want %q", int64(a), got, want)
		}
	}
}

// TestDraws compares means and variances with their expectation; the seeds are
// fixed, and five standard errors are allowed.
func TestDraws(t *testing.T) {
	const n = 20000
	for _, mu := range []float64{0.05, 3, 15.9, 16.1, 80} {
		r := Source(1, "draws")
		var sum, squares float64
		for range n {
			x := float64(Poisson(r, mu))
			sum, squares = sum+x, squares+x*x
		}
		mean := sum / n
		if math.Abs(mean-mu) > 5*math.Sqrt(mu/n) {
			t.Errorf("Poisson(%v): mean %v", mu, mean)
		}
		if v := squares/n - mean*mean; math.Abs(v-mu) > 5*math.Sqrt((mu+2*mu*mu)/n) {
			t.Errorf("Poisson(%v): variance %v", mu, v)
		}
	}
	r := Source(2, "draws")
	var sum int64
	for range n {
		sum += Binomial(r, 40, 0.025)
	}
	if mean := float64(sum) / n; math.Abs(mean-1) > 5*math.Sqrt(0.975/n) {
		t.Errorf("Binomial(40, 0.025): mean %v", mean)
	}
	if Source(1, "a").Uint64() == Source(1, "b").Uint64() {
		t.Error("two purposes draw the same")
	}
}

func TestPublisherKeepsOrderAndTwins(t *testing.T) {
	d := newDesk(t, false)
	var p Publisher
	for day := 1; day <= 25; day++ {
		for ward := range 40 {
			e := d.count(strings.Repeat("x", ward+1)+string(rune('a'+day)), 1, day, 1)
			e.Sent = e.Reported.Add(time.Duration(ward) * time.Second)
			e.Alone = ward%4 == 0
			p.Send(e)
		}
	}
	if err := p.PersonActs(d.date(12).Add(time.Hour), map[string]string{"act": "note"}, "bad_act"); err != nil {
		t.Fatal(err)
	}
	twins := 0
	for seed := range uint64(40) {
		messages, ledger, err := p.Publish(Source(seed, "packing"), d.rules, "")
		if err != nil {
			t.Fatal(err)
		}
		if len(ledger.Acts) != 1 || ledger.Acts[0].Reason != "bad_act" || messages[ledger.Acts[0].Message].Kind != Act {
			t.Fatalf("seed %d: acts %+v", seed, ledger.Acts)
		}
		n := ledger.Count()
		if n[Withheld] != 1000 || n[Withheld]+n[Repeat] != len(ledger.Entries) {
			t.Fatalf("seed %d: %v", seed, n)
		}
		if n[Repeat] > 0 {
			twins++
		}
		s := Scenario{Messages: messages}
		var b bytes.Buffer
		if err := s.WriteNDJSON(&b); err != nil {
			t.Fatal(err)
		}
		if got := bytes.Count(b.Bytes(), []byte{'\n'}); got != len(ledger.Entries)+1 {
			t.Fatalf("seed %d: %d lines", seed, got)
		}
	}
	if twins == 0 {
		t.Error("no message was ever sent twice")
	}
}
