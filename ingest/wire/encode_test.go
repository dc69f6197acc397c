package wire

import (
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/monitor"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// instantGen gives moments of the whole range, many of them round.
func instantGen() *rapid.Generator[monitor.Instant] {
	return rapid.Custom(func(t *rapid.T) monitor.Instant {
		grain := rapid.SampledFrom([]int64{1, 1000, 1e6, 3600e6}).Draw(t, "grain")
		return monitor.Instant(rapid.Int64Range(-62135596800e6/grain, lastInstant/grain).Draw(t, "at") * grain)
	})
}

// lastInstant is the last moment that can be held.
const lastInstant = 253370764799999999

func observationGen() *rapid.Generator[monitor.Observation] {
	return rapid.Custom(func(t *rapid.T) monitor.Observation {
		o := monitor.Observation{
			Series: rapid.SampledFrom([]string{"a", "quillmere-east/ward-3/line-infection", "Ω/й.1", strings.Repeat("x", 64)}).Draw(t, "series"),
		}
		if rapid.Bool().Draw(t, "has id") {
			o.ID = rapid.SampledFrom([]string{"x", "lab-1", "é\"\\ /", "😀\u2028"}).Draw(t, "id")
			o.Revision = rapid.Int64Range(0, MaxEvents).Draw(t, "revision")
		}
		if o.HasReported = rapid.Bool().Draw(t, "has reported"); o.HasReported {
			o.Reported = instantGen().Draw(t, "reported")
		}
		if o.ID != "" && o.Revision > 0 && rapid.Bool().Draw(t, "retracted") {
			o.Retracted = true
			return o
		}
		if o.ID == "" && rapid.IntRange(0, 3).Draw(t, "reading") == 0 {
			o.Reading, o.Instant, o.Start = true, true, instantGen().Draw(t, "at")
			o.End = o.Start
			if o.HasSince = rapid.Bool().Draw(t, "has since"); o.HasSince {
				o.Since = min(o.Start, instantGen().Draw(t, "since"))
			}
			o.HasEvents = rapid.Bool().Draw(t, "has total")
			if o.HasExposure = !o.HasEvents || rapid.Bool().Draw(t, "has exposure total"); o.HasExposure {
				o.Exposure = decimalGen().Draw(t, "exposure")
			}
			if o.HasEvents {
				o.Events = rapid.Int64Range(0, MaxEvents).Draw(t, "total")
			}
			return o
		}
		o.Start = instantGen().Draw(t, "start")
		o.End = instantGen().Draw(t, "end")
		switch {
		case o.Start > o.End:
			o.Start, o.End = o.End, o.Start
		case o.Start == o.End:
			o.Instant = true
		}
		if o.HasEvents = rapid.Bool().Draw(t, "has events"); o.HasEvents {
			o.Events = rapid.Int64Range(0, MaxEvents).Draw(t, "events")
		}
		if o.HasExposure = !o.HasEvents || rapid.Bool().Draw(t, "has exposure"); o.HasExposure {
			o.Exposure = decimalGen().Draw(t, "exposure")
		}
		return o
	})
}

func decimalGen() *rapid.Generator[config.Decimal] {
	return rapid.Custom(func(t *rapid.T) config.Decimal {
		d := config.Decimal{Coef: rapid.Uint64().Draw(t, "coef"), Digits: rapid.Uint8Range(0, 18).Draw(t, "digits")}
		for d.Digits > 0 && d.Coef%10 == 0 {
			d.Coef, d.Digits = d.Coef/10, d.Digits-1
		}
		return d
	})
}

func TestObservationRoundTrip(t *testing.T) {
	d := NewDecoder(Limits{})
	rapid.Check(t, func(rt *rapid.T) {
		o := observationGen().Draw(rt, "observation")
		data := EncodeObservation(nil, &o)
		diff, item := disagreement(d, data)
		if diff != "" || item.Reason != "" {
			rt.Fatalf("%s: %s %s %s", data, item.Reason, item.Detail, diff)
		}
		if diff := cmp.Diff(o, item.Observation); diff != "" {
			rt.Fatalf("%s: %s", data, diff)
		}
		if again := EncodeObservation(nil, &item.Observation); string(again) != string(data) {
			rt.Fatalf("%s, again %s", data, again)
		}
	})
}

func TestEncodeIsCanonical(t *testing.T) {
	item := NewDecoder(Limits{}).Observation([]byte(example))
	want := `{"id":"lab-2026-03-0117","series":"quillmere-east/ward-3/line-infection",` +
		`"start":"2026-03-01T23:00:00Z","end":"2026-03-02T23:00:00Z","events":1,"exposure":22,"revision":2,"reported":"2026-03-05T08:10:00Z"}`
	if got := string(EncodeObservation(nil, &item.Observation)); got != want {
		t.Errorf("%s\nwant %s", got, want)
	}
}
