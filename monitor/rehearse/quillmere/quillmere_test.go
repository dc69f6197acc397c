package quillmere

import (
	"bytes"
	"crypto/sha256"
	"encoding/json"
	"strings"
	"testing"
	"time"
	"unicode/utf8"

	"tailbell/config"
	"tailbell/monitor/rehearse"
)

var written = map[uint64]*rehearse.Scenario{}

// scenario is that of a seed, written once; the tests only read it.
func scenario(t *testing.T, seed uint64) *rehearse.Scenario {
	t.Helper()
	if s := written[seed]; s != nil {
		return s
	}
	s, err := Generate(seed)
	written[seed] = s
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func digest(t *testing.T, s *rehearse.Scenario) [32]byte {
	t.Helper()
	h := sha256.New()
	for i := range s.Messages {
		m := &s.Messages[i]
		for _, part := range [][]byte{[]byte(m.Kind), m.Data, []byte(m.Time.Format(time.RFC3339Nano))} {
			if _, err := h.Write(append(part[:len(part):len(part)], 0)); err != nil {
				t.Fatal(err)
			}
		}
	}
	return [32]byte(h.Sum(nil))
}

func TestSameSeedSameMessages(t *testing.T) {
	again, err := Generate(*seed)
	if err != nil {
		t.Fatal(err)
	}
	first := digest(t, scenario(t, *seed))
	if first != digest(t, again) {
		t.Errorf("two scenarios of seed %d differ", *seed)
	}
	if first == digest(t, scenario(t, *seed+1)) {
		t.Errorf("seeds %d and %d give the same scenario", *seed, *seed+1)
	}
}

func TestSetupValidates(t *testing.T) {
	setup, err := config.Parse(scenario(t, 1).Setup, "setup.toml")
	if err != nil {
		t.Fatal(err)
	}
	if !setup.History || setup.Partitions != 1 {
		t.Errorf("history %v, %d partitions", setup.History, setup.Partitions)
	}
	for _, r := range rules(time.UTC) {
		i := indicator(setup, r.LastPart)
		if i == nil || i.Horizon != r.Horizon || i.Ahead != r.Ahead || i.KeepIDs == r.NoIDs || (i.Events == config.Each) != r.Each {
			t.Errorf("the publishers' rule for %s is not the set-up's", r.LastPart)
		}
	}
}

func indicator(setup *config.Setup, name string) *config.Indicator {
	for i := range setup.Indicators {
		if setup.Indicators[i].Name == name {
			return &setup.Indicators[i]
		}
	}
	return nil
}

func TestLedgerBalances(t *testing.T) {
	s := scenario(t, *seed)
	published := 0
	for i := range s.Messages {
		if s.Messages[i].Kind == rehearse.Observations {
			published += len(s.Messages[i].Lines)
		}
	}
	sum := 0
	for class, n := range s.Ledger.Count() {
		if n == 0 {
			t.Errorf("nothing is %s", class)
		}
		sum += n
	}
	if sum != published || sum != len(s.Ledger.Entries) {
		t.Errorf("%d elements published, %d in the ledger, %d in its classes", published, len(s.Ledger.Entries), sum)
	}
	acts := 0
	for i := range s.Messages {
		if s.Messages[i].Kind == rehearse.Act {
			acts++
		}
	}
	if acts != len(s.Ledger.Acts) {
		t.Errorf("%d acts published, %d in the ledger", acts, len(s.Ledger.Acts))
	}
	for _, class := range rehearse.Classes {
		if s.Ledger.Count()[class] == 0 {
			t.Errorf("nothing is %s", class)
		}
	}
	if n := len(s.Ledger.Entries); n < 150_000 || n > 400_000 {
		t.Errorf("%d elements", n)
	}
}

// TestMessagesHoldTheirLines checks that what is not rubbish is JSON, in each
// of the three forms, and that the lines say what the message says.
func TestMessagesHoldTheirLines(t *testing.T) {
	s := scenario(t, *seed)
	forms := map[string]int{}
	rubbish := map[int]bool{}
	for i := range s.Ledger.Entries {
		if e := &s.Ledger.Entries[i]; e.Reason == "not_json" || e.Reason == "not_utf8" {
			rubbish[e.Message] = true
		}
	}
	for i := range s.Messages {
		m := &s.Messages[i]
		if rubbish[i] {
			continue
		}
		form := "lines"
		switch {
		case m.Data[0] == '[':
			form = "array"
		case len(m.Lines) == 1:
			form = "single"
		}
		forms[form]++
		var elements []json.RawMessage
		if form == "array" {
			if err := json.Unmarshal(m.Data, &elements); err != nil {
				t.Fatalf("message %d: %v", i, err)
			}
		} else {
			for line := range bytes.Lines(m.Data) {
				elements = append(elements, bytes.TrimSuffix(line, []byte{'\n'}))
			}
		}
		if len(elements) != len(m.Lines) {
			t.Fatalf("message %d: %d elements, %d lines", i, len(elements), len(m.Lines))
		}
		for j, e := range elements {
			if !json.Valid(e) || !utf8.Valid(e) || !bytes.Equal(e, m.Lines[j]) {
				t.Fatalf("message %d, element %d: %s", i, j, e)
			}
		}
	}
	for _, form := range []string{"single", "array", "lines"} {
		if forms[form] < 100 {
			t.Errorf("only %d messages in the form %s", forms[form], form)
		}
	}
}

func TestHistoryTimeRuns(t *testing.T) {
	s := scenario(t, *seed)
	for i := 1; i < len(s.Messages); i++ {
		if s.Messages[i].Time.Before(s.Messages[i-1].Time) {
			t.Fatalf("message %d of %s comes after one of %s", i, s.Messages[i].Time, s.Messages[i-1].Time)
		}
	}
}

func TestEveryKindOfTroubleIsThere(t *testing.T) {
	s := scenario(t, *seed)
	reasons := s.Ledger.Reasons()
	for _, reason := range []string{
		"not_json", "not_utf8", "not_object", "unknown_field", "duplicate_field", "bad_time", "bad_events", "bad_exposure",
		"nothing_reported", "bad_interval", "bad_series", "bad_revision", "finer_than_grain", "instant_exposure",
		"beyond_horizon", "too_far_ahead", "spans_slots", "no_such_id", "conflict",
	} {
		if reasons[reason] < 5 {
			t.Errorf("refused as %s: %d", reason, reasons[reason])
		}
	}
	ratios := map[rehearse.Direction]map[float64]bool{rehearse.Upper: {}, rehearse.Lower: {}}
	for _, x := range s.Planted {
		ratios[x.Direction][x.Ratio] = true
		if !x.From.Before(x.To) || (x.Ratio > 1) != (x.Direction == rehearse.Upper) {
			t.Errorf("%+v", x)
		}
	}
	if len(ratios[rehearse.Upper]) < 5 || len(ratios[rehearse.Lower]) < 5 {
		t.Errorf("planted ratios: %v", ratios)
	}
	if len(s.Mistakes) < 8 {
		t.Errorf("%d mistakes", len(s.Mistakes))
	}
	silent, fractions := 0, 0
	for i := range s.Ledger.Slots {
		x := &s.Ledger.Slots[i]
		if x.Series == "quillmere-quay/ward-9/fall" && !x.HasExposure {
			silent++
		}
		if x.Exposure%rehearse.One != 0 {
			fractions++
		}
	}
	if silent < 3 {
		t.Errorf("the silent feed leaves only %d slots with falls and no bed-days", silent)
	}
	if fractions < 5000 {
		t.Errorf("only %d slots with a fraction", fractions)
	}
	if s.Ledger.Count()[rehearse.Replaced] < 200 {
		t.Errorf("only %d elements were replaced", s.Ledger.Count()[rehearse.Replaced])
	}
}

func TestMovesStayInTheirSite(t *testing.T) {
	s := scenario(t, *seed)
	moved := 0
	where := map[string]string{}
	for i := range s.Messages {
		for _, line := range s.Messages[i].Lines {
			var e struct {
				ID, Series string
			}
			if json.Unmarshal(line, &e) != nil || e.ID == "" {
				continue
			}
			site, _, _ := strings.Cut(e.Series, "/")
			if before, known := where[site+"/"+e.ID]; known && before != e.Series && strings.HasSuffix(e.Series, "/fall") {
				moved++
			}
			where[site+"/"+e.ID] = e.Series
		}
	}
	if moved < 30 {
		t.Errorf("only %d falls were moved", moved)
	}
}

func TestLinesHoldEveryElement(t *testing.T) {
	s := scenario(t, *seed)
	var b bytes.Buffer
	if err := s.WriteNDJSON(&b); err != nil {
		t.Fatal(err)
	}
	if got, want := bytes.Count(b.Bytes(), []byte{'\n'}), len(s.Ledger.Entries)+len(s.Ledger.Acts); got != want {
		t.Errorf("%d lines, %d elements and acts", got, want)
	}
}
