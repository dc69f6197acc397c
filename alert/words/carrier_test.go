package words

import (
	"strings"
	"testing"
	"time"

	"tailbell/monitor/life"
)

func TestSumsAreNamedWithTheirCarriers(t *testing.T) {
	for _, test := range []struct {
		series, place, carried string
		carriers               []life.Carrier
		more                   int
	}{
		{
			"quillmere-east/*/fall", "Quillmere East, all together", " Carried by Ward 3 (4) and Ward 1 (1).",
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 4}, {Series: "quillmere-east/ward-1/fall", Events: 1}},
			0,
		},
		{
			"*/*/fall", "All together", " Carried by Ward 3, Quillmere East (4).",
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 4}},
			0,
		},
		{
			"**/fall", "All together", " Carried by Ward 3, Quillmere East (4) and 7 others.",
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 4}},
			7,
		},
		{
			"quillmere-east/*/fall", "Quillmere East, all together", " All that was counted is Ward 3's: it is the same finding as in that series itself.",
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 5, Exposure: "170"}},
			0,
		},
		{
			"quillmere-east/*/fall", "Quillmere East, all together", " Carried by Ward 3 (5).", // others had none in some of the exposure
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 5, Exposure: "160"}},
			0,
		},
		{"quillmere-east/ward-3/fall", "Ward 3, Quillmere East", "", nil, 0},
	} {
		e := life.Evidence{EventNoun: "falls", Events: 5, Exposure: "170", Carriers: test.carriers, MoreCarriers: test.more}
		r := life.Record{Series: test.series, Indicator: "fall", Opening: e}
		if got := place(&r); got != test.place {
			t.Errorf("%s: place %q, want %q", test.series, got, test.place)
		}
		if got := carriers(&r, &e); got != test.carried {
			t.Errorf("%s: carriers %q, want %q", test.series, got, test.carried)
		}
	}
}

func TestDatedActsAreTold(t *testing.T) {
	at := time.Date(2026, 3, 20, 0, 0, 0, 0, time.UTC)
	e := life.Evidence{
		EventNoun: "falls", Unit: "bed-days", Events: 9, Exposure: "170", Expected: 1.7, P: 7e-5, Log10P: -4.15, Window: "60d",
		From: at, To: at.AddDate(0, 0, 17), Shortened: 43, SignedOff: true, AfterSignOff: 1,
	}
	r := life.Record{Series: "a/fall", Indicator: "fall", Direction: life.Upper, Opening: e, Zone: "UTC"}
	const want = "9 falls in the time from 20 March 2026 to 5 April 2026 (170 bed-days, signed off; 1 slot changed after it was signed off)"
	if got := Sentence(&r, &e); !strings.Contains(got, want) {
		t.Errorf("%q does not say %q", got, want)
	}
}
