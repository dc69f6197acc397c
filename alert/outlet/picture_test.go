package outlet_test

import (
	"bytes"
	"encoding/xml"
	"errors"
	"image/png"
	"io"
	"strings"
	"testing"

	"tailbell/alert/outlet"
	"tailbell/alert/outlet/outlettest"
	"tailbell/config"
	"tailbell/monitor/life"
)

// TestPictures draws small and large counts, in both tails, and reads what was
// drawn.
func TestPictures(t *testing.T) {
	small := outlettest.Step("ward-3", life.StepOpened).Record
	large := small
	large.Direction = life.Lower
	large.Opening.Events, large.Opening.Expected, large.Opening.Critical = 12_000, 12_711.5, 12_300
	large.Worst = large.Opening
	large.Worst.Due, large.Worst.Events = large.Worst.Due.AddDate(0, 0, 7), 11_900
	for name, c := range map[string]struct {
		record *life.Record
		says   []string
	}{
		"small": {&small, []string{"usual about 1.1", "4 counted", "signals at 4", "opened: 28 days to 3 March 2026", "line infections"}},
		"large": {&large, []string{"usual about 12,712", "12,000 counted", "11,900 counted", "signals at 12,300", "strongest"}},
	} {
		svg, err := outlet.Picture(c.record, config.SVG)
		if err != nil {
			t.Fatal(err)
		}
		words := textOf(t, svg)
		for _, want := range c.says {
			if !strings.Contains(words, want) {
				t.Errorf("%s: the picture lacks %q: %q", name, want, words)
			}
		}
		again, err := outlet.Picture(c.record, config.SVG)
		if err != nil || !bytes.Equal(svg, again) {
			t.Errorf("%s: drawn again it is another picture, %v", name, err)
		}
		raster, err := outlet.Picture(c.record, config.PNG)
		if err != nil {
			t.Fatal(err)
		}
		if p, err := png.Decode(bytes.NewReader(raster)); err != nil || p.Bounds().Dx() < 600 {
			t.Errorf("%s: %v", name, err)
		}
	}
	none := life.Record{}
	if p, err := outlet.Picture(&none, config.PNG); p != nil || err != nil {
		t.Errorf("a record without a look: %d bytes, %v", len(p), err)
	}
	if got, want := outlet.PictureText(&small), "opened, 28 days to 3 March 2026: counted 4, usual about 1.1, signals at 4. "; got != want {
		t.Errorf("in words: %q, want %q", got, want)
	}
}

// textOf is all text of an SVG that is well-formed.
func textOf(t *testing.T, svg []byte) string {
	t.Helper()
	d := xml.NewDecoder(bytes.NewReader(svg))
	var words []string
	for {
		token, err := d.Token()
		if errors.Is(err, io.EOF) {
			return strings.Join(words, "|")
		}
		if err != nil {
			t.Fatal(err)
		}
		if text, ok := token.(xml.CharData); ok {
			words = append(words, strings.TrimSpace(string(text)))
		}
	}
}
