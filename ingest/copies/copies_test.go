package copies_test

import (
	"bytes"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"testing"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
	"tailbell/ingest/copies"

	"github.com/nats-io/nats.go/jetstream"
)

func save(t *testing.T, shelf copies.Shelf, position uint64, data []byte) {
	t.Helper()
	file := filepath.Join(t.TempDir(), "store")
	if err := os.WriteFile(file, data, 0o600); err != nil {
		t.Fatal(err)
	}
	c := &copies.Copy{Partition: 3, Position: position, Epoch: 7, Origin: "then", Digest: "d", Made: time.Unix(1e9, 0)}
	if err := copies.Save(t.Context(), shelf, file, c); err != nil {
		t.Fatal(err)
	}
}

// TestKeepsTheNewest puts up more copies than are kept, of different lengths.
func TestKeepsTheNewest(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	shelf, err := b.Copies(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if list, err := copies.List(t.Context(), shelf, 3); err != nil || len(list) != 0 {
		t.Fatalf("%v, %v", list, err)
	}
	content := func(n uint64) []byte { return bytes.Repeat([]byte{byte(n)}, int(n)*200_000+1) }
	for n := uint64(1); n <= 5; n++ {
		save(t, shelf, n*100, content(n))
	}
	if list, err := copies.List(t.Context(), shelf, 2); err != nil || len(list) != 0 {
		t.Errorf("another partition's: %v, %v", list, err)
	}
	list, err := copies.List(t.Context(), shelf, 3)
	if err != nil || len(list) != copies.Kept {
		t.Fatalf("%v, %v", list, err)
	}
	for i, c := range list {
		n := uint64(5 - i)
		if c.Position != n*100 || c.Epoch != 7 || c.Origin != "then" || c.Digest != "d" || !c.Made.Equal(time.Unix(1e9, 0)) || c.Bytes != int64(len(content(n))) {
			t.Errorf("%d: %+v", i, c)
		}
		file := filepath.Join(t.TempDir(), "back")
		if err := copies.Fetch(t.Context(), shelf, &c, file); err != nil {
			t.Fatal(err)
		}
		if got, err := os.ReadFile(file); err != nil || !bytes.Equal(got, content(n)) {
			t.Errorf("%d: other bytes, %v", i, err)
		}
		if err := copies.Fetch(t.Context(), shelf, &c, file); !errors.Is(err, fs.ErrExist) {
			t.Errorf("over an existing file: %v", err)
		}
	}
	if err := copies.Drop(t.Context(), shelf, &list[0]); err != nil {
		t.Fatal(err)
	}
	save(t, shelf, 600, content(6))
	if list, err = copies.List(t.Context(), shelf, 3); err != nil || len(list) != copies.Kept || list[0].Position != 600 || list[1].Position != 400 {
		t.Errorf("%+v, %v", list, err)
	}
}

// TestDamagedCopiesAreRefused takes a part of a copy away, and changes what is
// said of another.
func TestDamagedCopiesAreRefused(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	shelf, err := b.Copies(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for n := range uint64(3) {
		save(t, shelf, n, bytes.Repeat([]byte("x"), 1_000_000))
	}
	js, err := jetstream.New(b.Conn())
	if err != nil {
		t.Fatal(err)
	}
	s, err := js.Stream(t.Context(), "OBJ_quillmere-copies")
	if err != nil {
		t.Fatal(err)
	}
	if err := s.DeleteMsg(t.Context(), 2); err != nil { // of the first
		t.Fatal(err)
	}
	list, err := copies.List(t.Context(), shelf, 3)
	if err != nil || len(list) != 3 {
		t.Fatalf("%v, %v", list, err)
	}
	list[1].SHA256 = list[1].SHA256[1:] + "0"
	for i, damaged := range []bool{false, true, true} {
		file := filepath.Join(t.TempDir(), "back")
		err := copies.Fetch(t.Context(), shelf, &list[i], file)
		if errors.Is(err, copies.ErrDamaged) != damaged || (err != nil) != damaged {
			t.Errorf("%d: %v", i, err)
		}
		if _, statErr := os.Stat(file); errors.Is(statErr, fs.ErrNotExist) != damaged {
			t.Errorf("%d: %v", i, statErr)
		}
	}
	list[0].Partition = 5
	if err := copies.Fetch(t.Context(), shelf, &list[0], filepath.Join(t.TempDir(), "back")); err == nil || errors.Is(err, copies.ErrDamaged) {
		t.Errorf("one that is not there: %v", err)
	}
	if _, err := shelf.Facts(t.Context(), "nothing"); !errors.Is(err, bus.ErrNoObject) {
		t.Errorf("facts of nothing: %v", err)
	}
}

// TestSweepsStrays leaves a part of a copy that never became whole.
func TestSweepsStrays(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	shelf, err := b.Copies(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	save(t, shelf, 1, bytes.Repeat([]byte("x"), 1_000_000))
	js, err := jetstream.New(b.Conn())
	if err != nil {
		t.Fatal(err)
	}
	for range 3 {
		if _, err := js.Publish(t.Context(), "$O.quillmere-copies.C.dead", []byte("part")); err != nil {
			t.Fatal(err)
		}
	}
	var strays map[string]bool
	for i, want := range []struct{ strays, gone int }{{1, 0}, {1, 1}, {0, 0}} {
		var gone int
		strays, gone, err = copies.Sweep(t.Context(), shelf, 4, strays)
		if err != nil || len(strays) != want.strays || gone != want.gone {
			t.Errorf("%d: %v, %d gone, %v", i, strays, gone, err)
		}
	}
	list, err := copies.List(t.Context(), shelf, 3)
	if err != nil || len(list) != 1 {
		t.Fatalf("%v, %v", list, err)
	}
	if err := copies.Fetch(t.Context(), shelf, &list[0], filepath.Join(t.TempDir(), "back")); err != nil {
		t.Error(err)
	}
}
