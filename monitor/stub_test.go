package monitor

import (
	"encoding/binary"
	"testing"
)

// Stubs that were written before series retired told no times, and only of
// indicators that went: their ids are forgotten, and they are written anew.
func TestStubsOfOldAreRead(t *testing.T) {
	b := binary.AppendVarint(appendString([]byte{3, flagNamed | flagRetired}, "quillmere/a/fall"), 4)
	for _, n := range []uint64{2, 0, 1} {
		b = binary.AppendUvarint(b, n)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	e.clock = 77
	if err := e.restoreAll([]SeriesImage{{State: b}}, nil); err != nil {
		t.Fatal(err)
	}
	x := e.stubs.byName["quillmere/a/fall"]
	if x == nil || x.opened != [3]int32{2, 0, 1} || x.unpaired != 4 || !x.dismissed || x.keep != 77 || e.series[0] != forgotten || len(e.stubs.touched) != 1 {
		t.Fatalf("%+v", x)
	}
	again := New(Partition{Of: 1, KeyParts: 1})
	if err := again.restoreAll([]SeriesImage{{State: x.encode(nil)}}, nil); err != nil {
		t.Fatal(err)
	}
	x.touched = false
	if y := again.stubs.byName["quillmere/a/fall"]; *y != *x {
		t.Fatalf("written %+v, read %+v", *x, *y)
	}
	if err := e.restoreAll([]SeriesImage{{State: b[:len(b)-1]}}, nil); err == nil {
		t.Error("half a stub is read")
	}
}
