package config

import (
	"bytes"
	"errors"
	"flag"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

var update = flag.Bool("update", false, "rewrite the expected texts under testdata")

// compareGolden compares text with a file, or rewrites the file.
func compareGolden(t *testing.T, file, text string) {
	t.Helper()
	if *update {
		if err := os.WriteFile(file, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	want, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(string(want), text); diff != "" {
		t.Errorf("%s differs (-want +got), -update rewrites it:\n%s", file, diff)
	}
}

// mustParse returns a set-up that has no fault.
func mustParse(t *testing.T, text string) *Setup {
	t.Helper()
	s, err := Parse([]byte(text), "test.toml")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// TestFaults compares the faults of each file under testdata/faults with the
// text beside it.
func TestFaults(t *testing.T) {
	files, err := filepath.Glob("testdata/faults/*.toml")
	if err != nil || len(files) == 0 {
		t.Fatal(files, err)
	}
	for _, file := range files {
		t.Run(strings.TrimSuffix(filepath.Base(file), ".toml"), func(t *testing.T) {
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			s, err := Parse(text, filepath.Base(file))
			if err == nil || s != nil {
				t.Fatalf("no fault found: %v", s)
			}
			compareGolden(t, strings.TrimSuffix(file, ".toml")+".txt", err.Error()+"\n")
		})
	}
}

// FuzzParse checks that no text makes Parse panic, that every fault has a
// problem and a line inside the file, and that what is accepted keeps what the
// rest of the program relies on.
func FuzzParse(f *testing.F) {
	f.Add(Sample())
	files, err := filepath.Glob("testdata/*/*.toml")
	if err != nil {
		f.Fatal(err)
	}
	files = append(files, "testdata/wide.toml")
	for _, file := range files {
		text, err := os.ReadFile(file)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		s, err := Parse(text, "fuzz.toml")
		var faults Faults
		switch {
		case errors.As(err, &faults):
			checkFaults(t, faults, bytes.Count(text, []byte("\n"))+1)
		case err != nil:
			t.Fatalf("not of type Faults: %v", err)
		default:
			checkSetup(t, s)
		}
	})
}

func checkFaults(t *testing.T, faults Faults, lines int) {
	t.Helper()
	if len(faults) == 0 {
		t.Error("an error without a fault")
	}
	last := 0
	for _, fault := range faults {
		if fault.Problem == "" || fault.File != "fuzz.toml" || fault.Line < last || fault.Line > lines || strings.ContainsAny(fault.String(), "\n\x00") {
			t.Errorf("a fault of %d lines: %+v", lines, fault)
		}
		last = fault.Line
	}
}

func checkSetup(t *testing.T, s *Setup) {
	t.Helper()
	if s.Name == "" || s.Partitions < 1 || len(s.Indicators) == 0 || s.Memory().Total > s.Limits.Memory {
		t.Errorf("accepted %+v", s)
	}
	for i := range s.Indicators {
		in := &s.Indicators[i]
		sound := len(in.Series) > 0 && len(in.Windows) > 0 && len(in.Baselines) > 0 && in.Zone != nil && in.Every.N > 0 &&
			in.Horizon >= in.Settle && (in.Upper || in.Lower) && (in.SlotLooks || in.ArrivalLooks) && in.PLimit < 0.5 &&
			(in.PLimit > 0) == (in.Allowance == nil) && (in.Exposure == Census) == (in.CensusExpiry > 0) && in.Alpha > 0 && in.Alpha <= 0.5 && in.Per > 0
		if !sound || in.BaselineFor("any/series") == nil {
			t.Errorf("accepted %+v", in)
		}
		for _, w := range in.Windows {
			trials := w.Trials > 0 && w.Slots == 0 && w.Step == 1 && in.Measure == Proportion && in.ArrivalLooks
			if !trials && (w.Trials != 0 || w.Slots < 1 || w.Step < 1 || w.Step > w.Slots) {
				t.Errorf("accepted %+v", w)
			}
		}
		for _, b := range in.Baselines {
			checkBaseline(t, in, &b)
		}
	}
	if err := s.Describe(io.Discard); err != nil {
		t.Error(err)
	}
	if changes := Compare(s, s); len(changes) > 0 {
		t.Errorf("differs from itself: %v", changes)
	}
	s.Doubts("fuzz.toml")
}

func checkBaseline(t *testing.T, in *Indicator, b *Baseline) {
	t.Helper()
	sound := b.Margin >= 1 && b.Spread >= 1 && (b.From.IsZero() || b.To.IsZero() || b.From.Before(b.To))
	switch b.Kind {
	case Known:
		sound = sound && b.Rate > 0
	case Reference:
		sound = sound && b.Exposure.Coef > 0 && b.Events >= 0
	case Trailing, Peers:
		sound = sound && b.SpanSlots > 0 && b.Refresh.N > 0 && (b.Kind == Trailing) == (b.GapSlots > 0) && in.keptSlots() >= b.SpanSlots+b.GapSlots
	}
	if st := b.Strata; st != nil {
		sound = sound && len(st.Factors) == strataCounts[st.By] && slices.Min(st.Factors) > 0 && st.within(in.Every)
	}
	if d := b.Delay; d != nil {
		sound = sound && len(d.Ages) == len(d.Reported) && d.Ages[0] >= 0 && d.Reported[0] > 0 && slices.IsSorted(d.Ages) &&
			slices.IsSorted(d.Reported) && d.At(in.Horizon) == 1 && in.Measure == Rate && b.Spread == 1
	}
	if !sound {
		t.Errorf("accepted %+v", b)
	}
}
