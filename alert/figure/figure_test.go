package figure_test

import (
	"encoding/xml"
	"errors"
	"flag"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/alert/figure"
	"tailbell/config"
)

var update = flag.Bool("update", false, "write the pictures anew")

// sample is a ward over a year of weeks, with everything that a look can be.
func sample(t *testing.T) *figure.Series {
	t.Helper()
	zone, err := config.LoadZone("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	s := &figure.Series{
		Title: "quillmere-east/ward-3/line-infection, 28 days", Events: "line infections",
		Unit: "per 1,000 device-days", Window: "28 days",
	}
	counts := []int64{1, 1, 0, 0, 1, 2, 2, 1, 1, 0, 0, 0, 1, 1, 2, 3, 3, 5, 6, 7, 6, 4, 2, 1, 1, 0, 1, 1}
	for i, n := range counts {
		p := figure.Point{
			At: time.Date(2026, 1, 5+7*i, 0, 0, 0, 0, zone), Events: n, Exposure: "616", Expected: 1.1,
			Critical: 5, HasCritical: true, Made: i != 9, Why: "a count or an exposure is missing",
			Provisional: i > 25, Late: i == 17, Signals: n >= 5,
			Rate: float64(n) / 0.616, Lower: float64(n) * 0.4, Upper: float64(n)*3 + 5, Usual: 1.8,
		}
		if i > 12 {
			p.Critical = 6
			p.Signals = n >= 6
		}
		s.Points = append(s.Points, p)
	}
	s.Spans = []figure.Span{
		{Kind: figure.Alert, From: s.Points[18].At, To: s.Points[22].At},
		{Kind: figure.Real, From: s.Points[3].At, To: s.Points[5].At},
		{Kind: figure.Change, From: s.Points[12].At, Text: "setup version 2"},
	}
	return s
}

func TestPictures(t *testing.T) {
	s := sample(t)
	for name, svg := range map[string]string{"counts": s.SVG(), "rates": s.RateSVG(), "trend": s.TrendSVG()} {
		path := filepath.Join("testdata", name+".svg")
		if *update {
			if err := os.WriteFile(path, []byte(svg+"\n"), 0o644); err != nil {
				t.Fatal(err)
			}
		}
		want, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(string(want), svg+"\n"); diff != "" {
			t.Errorf("%s: -want +got:\n%s", name, diff)
		}
		checkXML(t, name, svg)
	}
	if again := sample(t).SVG(); again != s.SVG() {
		t.Error("the same values gave another picture")
	}
}

// checkXML takes the picture apart: one element svg, its title first, nothing
// that a strict content policy would block.
func checkXML(t *testing.T, name, svg string) {
	t.Helper()
	d := xml.NewDecoder(strings.NewReader(svg))
	var elements []string
	for {
		token, err := d.Token()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if e, ok := token.(xml.StartElement); ok {
			elements = append(elements, e.Name.Local)
			for _, a := range e.Attr {
				if n := a.Name.Local; n == "style" || n == "id" || n == "href" {
					t.Errorf("%s: attribute %s", name, n)
				}
			}
		}
	}
	if len(elements) < 2 || elements[0] != "svg" || elements[1] != "title" {
		t.Errorf("%s begins with %v", name, elements[:min(2, len(elements))])
	}
}

func TestTextAlternative(t *testing.T) {
	s := sample(t)
	for _, want := range []string{
		"Line infections in each window of 28 days, from 4 January 2026 to 12 July 2026: 28 looks.",
		"The latest is 1 on 12 July 2026 (it signals at 6 or more, about 1.1 would be usual); the highest 7 on 17 May 2026.",
		"3 of them signal. 1 look not made.",
	} {
		if !strings.Contains(s.Describe(), want) {
			t.Errorf("%q is not in %q", want, s.Describe())
		}
	}
	if got := s.TrendSVG(); !strings.Contains(got, "latest counts 6, 4, 2, 1, 1, 0, 1, 1; 3 of the 28 shown signal") {
		t.Error(got)
	}
}

func TestRowsSayWhatTheShapesSay(t *testing.T) {
	s := sample(t)
	rows := s.Rows()
	if len(rows) != len(s.Points) || len(rows[0]) != len(s.Columns()) {
		t.Fatalf("%d rows of %d", len(rows), len(rows[0]))
	}
	want := [][]string{
		{"12 July 2026", "1", "616", "1.1", "6 or more", "1.6", "0.40 to 8.0", "\u25cb provisional"},
		{"3 May 2026", "5", "616", "1.1", "6 or more", "8.1", "2.0 to 20.0", "\u25c6 holds late events"},
		{"8 March 2026", "", "", "", "", "", "", "no look: a count or an exposure is missing"},
	}
	for i, at := range []int{0, 10, 18} {
		if diff := cmp.Diff(want[i], rows[at]); diff != "" {
			t.Error(diff)
		}
	}
}

func TestOddValuesDraw(t *testing.T) {
	nan := math.NaN()
	at := time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)
	for name, s := range map[string]*figure.Series{
		"nothing":     {},
		"one":         {Points: []figure.Point{{At: at, Events: 3, Made: true, Expected: nan, Rate: nan, Lower: nan, Upper: nan, Usual: nan}}},
		"not made":    {Points: []figure.Point{{At: at}, {At: at.Add(time.Minute)}}},
		"huge":        {Points: []figure.Point{{At: at, Made: true, Events: 1 << 52, Expected: 1e300}, {At: at.AddDate(80, 0, 0), Made: true}}},
		"no usual":    {Points: []figure.Point{{At: at, Made: true, Expected: nan, Rate: 0, Lower: 0, Upper: math.Inf(1), Usual: nan}, {At: at.Add(time.Hour)}}},
		"fewer, many": {Points: []figure.Point{{At: at, Made: true, Floor: 2, HasFloor: true, SignalsLow: true}, {At: at.Add(time.Hour), Made: true, Floor: 3, HasFloor: true}}},
		"markup":      {Title: `<script>"&`, Points: []figure.Point{{At: at}}},
	} {
		for _, svg := range []string{s.SVG(), s.RateSVG(), s.TrendSVG()} {
			checkXML(t, name, svg)
			if strings.Contains(svg, "NaN") || strings.Contains(svg, "Inf") {
				t.Errorf("%s: %s", name, svg)
			}
		}
	}
}
