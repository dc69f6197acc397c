package words

import (
	"testing"

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
			"*/*/fall", "all together", " Carried by Ward 3, Quillmere East (4).",
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 4}},
			0,
		},
		{
			"**/fall", "all together", " Carried by Ward 3, Quillmere East (4) and 7 others.",
			[]life.Carrier{{Series: "quillmere-east/ward-3/fall", Events: 4}},
			7,
		},
		{"quillmere-east/ward-3/fall", "Ward 3, Quillmere East", "", nil, 0},
	} {
		e := life.Evidence{EventNoun: "falls", Carriers: test.carriers, MoreCarriers: test.more}
		r := life.Record{Series: test.series, Indicator: "fall", Opening: e}
		if got := place(&r); got != test.place {
			t.Errorf("%s: place %q, want %q", test.series, got, test.place)
		}
		if got := carriers(&r, &e); got != test.carried {
			t.Errorf("%s: carriers %q, want %q", test.series, got, test.carried)
		}
	}
}
