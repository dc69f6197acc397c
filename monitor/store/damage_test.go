package store

import (
	"bytes"
	"context"
	"errors"
	"flag"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"tailbell/monitor"

	"pgregory.net/rapid"
)

var (
	damageSeed  = flag.Uint64("store.damage-seed", 1, "seed of the bytes that TestDamage flips")
	damageFlips = flag.Int("store.damage-flips", 200, "how many bits TestDamage flips")
)

// filled makes a store file with everything in it and returns its bytes and
// its twin.
func filled(t *testing.T) ([]byte, *twin) {
	t.Helper()
	path := filepath.Join(t.TempDir(), "p0.db")
	if err := lay(path, testIdentity); err != nil {
		t.Fatal(err)
	}
	s, err := Open(path, testIdentity, Options{})
	if err != nil {
		t.Fatal(err)
	}
	quick(s)
	w := &twin{from: monitor.Beginning, outlets: map[string]uint64{"bus": 0, "terminal": 0}}
	if err := errors.Join(s.Outlets(FromEnd, "bus", "terminal"), s.SetStream(StreamIdentity{Name: "quillmere-in"})); err != nil {
		t.Fatal(err)
	}
	// One deterministic draw of a whole history.
	history := rapid.Custom(func(rt *rapid.T) []monitor.Changes {
		*w = twin{from: monitor.Beginning, outlets: w.outlets}
		var all []monitor.Changes
		for range 60 {
			all = append(all, w.batch(rt))
		}
		return all
	}).Example(7)
	for _, c := range history {
		mustCommit(t, s, c, Mark{Position: c.Position, Stored: monitor.Instant(c.Position)})
	}
	mustCommit(t, s, monitor.Changes{Position: w.position + 1, Header: bytes.Repeat([]byte("h"), 3*pageSize)}, Mark{})
	w.position++
	w.header = string(bytes.Repeat([]byte("h"), 3*pageSize))
	if err := s.Delivered("bus", 5, 0); err != nil {
		t.Fatal(err)
	}
	w.outlets["bus"] = 5
	if err := w.compare(s); err != nil {
		t.Fatal(err)
	}
	leave(t, s)
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return b, w
}

// TestDamage flips one bit at a time. Each must be named when the file is
// opened or checked, or change nothing that can be read; only where it spoils
// a meta page may the file stand at the commit before. A refused file is left
// as it is.
func TestDamage(t *testing.T) {
	sound, w := filled(t)
	seed := *damageSeed
	t.Logf("seed %d, a file of %d bytes", seed, len(sound))
	r := rand.New(rand.NewPCG(seed, 1))
	path := filepath.Join(t.TempDir(), "p0.db")
	verdicts := map[string]int{}
	for i := range *damageFlips {
		at := r.IntN(len(sound))
		switch i % 4 {
		case 0: // what holds a page together
			at = at/pageSize*pageSize + r.IntN(96)
		case 1:
			at = r.IntN(2*80) % 80 * pageSize / 40 // meta pages, thinly
		}
		at = min(at, len(sound)-1)
		bit := byte(1) << r.IntN(8)
		b := bytes.Clone(sound)
		b[at] ^= bit
		verdict, err := judge(path, b, w)
		if err != nil {
			t.Errorf("byte %d, bit %08b (seed %d, flip %d): %v", at, bit, seed, i, err)
		}
		verdicts[verdict]++
	}
	t.Log(verdicts)
	if verdicts["refused"] == 0 || verdicts["found"] == 0 || verdicts["harmless"] == 0 {
		t.Errorf("the flips did not reach everything: %v", verdicts)
	}
}

// judge says how a file with these bytes is received.
func judge(path string, b []byte, w *twin) (verdict string, err error) {
	if err := os.WriteFile(path, b, 0o600); err != nil {
		return "", err
	}
	s, err := OpenReadOnly(path, Options{})
	after, readErr := os.ReadFile(path)
	if readErr != nil {
		return "", readErr
	}
	if !bytes.Equal(after, b) {
		return "", errors.New("the file was touched")
	}
	if err != nil {
		if !errors.Is(err, ErrDamaged) && !errors.Is(err, ErrForeign) && !errors.Is(err, ErrFormatTooNew) {
			return "", fmt.Errorf("an error of no kind: %w", err)
		}
		return "refused", nil
	}
	defer func() { err = errors.Join(err, s.Close()) }()
	report, checked := s.Check(context.Background())
	if checked != nil {
		if !errors.Is(checked, ErrDamaged) && !errors.Is(checked, ErrFormatTooNew) {
			return "", fmt.Errorf("an error of no kind: %w", checked)
		}
		return "found", nil
	}
	if report.TornMeta {
		return "torn", nil
	}
	if err := w.compare(s); err != nil {
		return "", fmt.Errorf("not noticed: %w", err)
	}
	return "harmless", nil
}

// TestTruncated cuts the file off at many lengths.
func TestTruncated(t *testing.T) {
	sound, _ := filled(t)
	path := filepath.Join(t.TempDir(), "p0.db")
	lengths := []int{1, 100, pageSize, 2*pageSize - 1, 2 * pageSize, 3 * pageSize}
	for n := 4 * pageSize; n < len(sound); n += 3*pageSize + 17 {
		lengths = append(lengths, n)
	}
	for _, n := range lengths {
		if err := os.WriteFile(path, sound[:n], 0o600); err != nil {
			t.Fatal(err)
		}
		want := ErrDamaged
		if n < 80 {
			want = ErrForeign
		}
		refusedUnlessWhole(t, path, want)
	}
}

// refusedUnlessWhole is refused, but for a file whose pages beyond the cut
// were never used.
func refusedUnlessWhole(t *testing.T, path string, want error) {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	_, whole := readPages(f)
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	if whole == nil {
		return
	}
	refused(t, path, testIdentity, want)
}

// TestTornCommit spoils the newer meta page, as a commit that broke off would:
// the file stands at the commit before, the report says so, and work goes on.
func TestTornCommit(t *testing.T) {
	s := create(t, Options{})
	for position := uint64(1); position <= 5; position++ {
		mustCommit(t, s, monitor.Changes{Position: position}, Mark{})
	}
	leave(t, s)
	b, err := os.ReadFile(s.path)
	if err != nil {
		t.Fatal(err)
	}
	newer := 0
	if order.Uint64(b[pageHeader+48:]) < order.Uint64(b[pageSize+pageHeader+48:]) {
		newer = pageSize
	}
	b[newer+pageHeader+40] ^= 1
	if err := os.WriteFile(s.path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	s, err = Open(s.path, testIdentity, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer leave(t, s)
	report, err := s.Check(context.Background())
	if err != nil || !report.TornMeta || report.Position != 4 {
		t.Errorf("Check gave %+v, %v", report, err)
	}
	mustCommit(t, s, monitor.Changes{Position: 5}, Mark{})
	if report, err := s.Check(context.Background()); err != nil || report.TornMeta || report.Position != 5 {
		t.Errorf("after the next commit Check gave %+v, %v", report, err)
	}
}

// TestCheckFindsContradictions edits values with valid checksums.
func TestCheckFindsContradictions(t *testing.T) {
	sound, _ := filled(t)
	for name, edit := range map[string]func(s *Store) error{
		"a head that counts too much": editHead(func(h *head) { h.Alerts++ }),
		"a lost state":                drop(statesShelf, true),
		"a lost last journal entry":   drop(journalShelf, false),
		"a lost first journal entry":  drop(journalShelf, true),
		"a lost alert":                drop(alertsShelf, false),
		"a lost alert id":             drop(alertIDsShelf, true),
		"a lost open alert":           drop(openAlertsShelf, true),
		"a lost refusal":              drop(refusedShelf, false),
		"lost refused bytes":          drop(refusedRawShelf, true),
		"a lost outbox row":           drop(outboxShelf, false),
		"a lost outlet":               drop(outletsShelf, true),
		"a lost set-up":               drop(settingsShelf, true),
		"a lost mark":                 drop(marksShelf, true),
		"a lost generation":           drop(generationsShelf, true),
		"a lost day of the archive":   dropDay,
		"a lost part of the archive":  dropPart,
		"a day nobody counted":        drop(daysShelf, false),
		"a slot too many":             editHead(func(h *head) { h.Archived-- }),
		"a lost header":               drop(headerShelf, true),
		"a lost summary to tell":      drop(toldShelf, false),
		"a lost summary that waits":   drop(waitingShelf, true),
		"an outlet too far":           editHead(func(h *head) { h.Outbox-- }),
		"another position":            editHead(func(h *head) { h.Position += 3 }),
		"a series too many":           editHead(func(h *head) { h.Series++ }),
		"more refused bytes":          editHead(func(h *head) { h.RawBytes++ }),
	} {
		t.Run(name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), "p0.db")
			if err := os.WriteFile(path, sound, 0o600); err != nil {
				t.Fatal(err)
			}
			s, err := Open(path, testIdentity, Options{})
			if err != nil {
				t.Fatal(err)
			}
			defer func() {
				if err := s.Close(); err != nil {
					t.Error(err)
				}
			}()
			if err := edit(s); err != nil {
				t.Fatal(err)
			}
			report, err := s.Check(context.Background())
			if !errors.Is(err, ErrDamaged) || len(report.Faults) == 0 {
				t.Errorf("Check gave %v", err)
			}
		})
	}
}

// TestPagesInACircle turns a branch page's child into the page itself, which
// would send bbolt round for ever.
func TestPagesInACircle(t *testing.T) {
	sound, _ := filled(t)
	path := filepath.Join(t.TempDir(), "p0.db")
	circles := 0
	for id := uint64(2); id < uint64(len(sound)/pageSize); id++ {
		page := sound[id*pageSize : (id+1)*pageSize]
		if order.Uint64(page) != id || order.Uint16(page[8:]) != flagBranch {
			continue
		}
		circles++
		b := bytes.Clone(sound)
		order.PutUint64(b[id*pageSize+pageHeader+8:], id)
		if err := os.WriteFile(path, b, 0o600); err != nil {
			t.Fatal(err)
		}
		refusedUnlessWhole(t, path, ErrDamaged) // a free page may hold an old branch
	}
	if circles == 0 {
		t.Error("the file has no branch page")
	}
}

// TestBrokenAssertions: what bbolt panics about is an error here.
func TestBrokenAssertions(t *testing.T) {
	if err := guard(func() error { panic("assertion failed: page 7") }); !errors.Is(err, ErrDamaged) {
		t.Errorf("a panic gave %v, want ErrDamaged", err)
	}
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1}, Mark{})
	s.fault = func(step string) error {
		if step == "commit written" {
			panic("page 7 already freed")
		}
		return nil
	}
	if err := s.Commit(monitor.Changes{Position: 2}, Mark{}); !errors.Is(err, ErrDamaged) {
		t.Errorf("a panic in a commit gave %v, want ErrDamaged", err)
	}
	s.fault = nil
	mustCommit(t, s, monitor.Changes{Position: 2}, Mark{}) // its locks were let go
}
