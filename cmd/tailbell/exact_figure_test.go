package main

import (
	"image/png"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

const wardsTable = "unit,events,exposure\n" +
	"Ward 1,8,800\nWard 2,14,1600\nWard 3,31,2400\nWard 4,22,3200\nWard 5,2,4000\nWard 6,40,4800\n<Ward 7>,90,5600\n"

func TestExactFigure(t *testing.T) {
	table := writeHistory(t, "wards.csv", wardsTable)
	folder := t.TempDir()
	svg, image := filepath.Join(folder, "wards.svg"), filepath.Join(folder, "wards.png")
	says(t, 0, []string{"Ward 5"}, "exact", table, "--per", "1000", "--figure", svg)
	text := readText(t, svg)
	for _, part := range []string{"<svg", "per 1000 units of exposure", "&lt;Ward 7&gt;", "rate of all together"} {
		if !strings.Contains(text, part) {
			t.Errorf("%q is not in the picture", part)
		}
	}
	says(t, 0, nil, "exact", table, "--per", "1000", "--baseline", "6", "--figure", svg)
	text = readText(t, svg)
	for _, part := range []string{"against the known baseline", "with the known baseline, 6.0 per 1000", ">known 6.0<", "Silence is no proof of safety"} {
		if !strings.Contains(text, part) {
			t.Errorf("%q is not in the picture", part)
		}
	}
	if strings.Contains(text, "rate of all") {
		t.Error("a known baseline is called the rate of all")
	}
	says(t, 0, nil, "exact", table, "--figure", image)
	file, err := os.Open(image)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close() //nolint:errcheck // it was only read
	if picture, err := png.Decode(file); err != nil || picture.Bounds().Dx() < 1000 {
		t.Errorf("%v", err)
	}
	shares := writeHistory(t, "shares.csv", "unit,events,trials\nA,3,50\nB,9,60\nC,0,70\n")
	says(t, 0, nil, "exact", shares, "--figure", image)
	says(t, 2, []string{".svg or .png"}, "exact", table, "--figure", "x.gif")
	says(t, 2, []string{"--figure draws the units of a table"}, "exact", "--events", "3", "--exposure", "10", "--figure", svg)
	says(t, 1, []string{"no row that could be drawn"}, "exact", writeHistory(t, "none.csv", "unit,events,exposure\nA,x,1\n"), "--figure", svg)
}
