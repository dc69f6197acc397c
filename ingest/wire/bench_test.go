package wire

import (
	"bytes"
	"encoding/json"
	"fmt"
	"strings"
	"testing"
	"time"

	"tailbell/monitor"
)

var sink monitor.Message

func compactExample() []byte {
	return bytes.ReplaceAll([]byte(example), []byte("\n "), nil)
}

func BenchmarkDecode(b *testing.B) {
	stored := time.Date(2026, 3, 6, 0, 0, 0, 0, time.UTC)
	one := compactExample()
	array := []byte("[" + strings.TrimSuffix(strings.Repeat(string(one)+",", 100), ",") + "]")
	escaped := bytes.Replace(one, []byte("lab-"), []byte(`lab\u002d`), 1)
	refused := bytes.Replace(one, []byte(`"events":1`), []byte(`"events":-1`), 1)
	for _, c := range []struct {
		name     string
		data     []byte
		header   map[string][]string
		elements int
	}{
		{"one", one, nil, 1},
		{"one_with_time", one, map[string][]string{TimeHeader: {"2026-03-05T09:10:00Z"}}, 1},
		{"array_100", array, nil, 100},
		{"lines_100", []byte(strings.Repeat(string(one)+"\n", 100)), nil, 100},
		{"escaped", escaped, nil, 1},
		{"refused", refused, nil, 1},
	} {
		b.Run(c.name, func(b *testing.B) {
			d := NewDecoder(Limits{})
			r := Raw{Position: 1, Stored: stored, Subject: "quillmere.in.0.obs", Header: c.header, Data: c.data}
			b.ReportAllocs()
			for b.Loop() {
				sink = d.Decode(r)
			}
			if len(sink.Items) != c.elements {
				b.Fatal(len(sink.Items))
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*c.elements), "ns/observation")
		})
	}
}

// BenchmarkStandardLibrary is a yardstick: the same array decoded without any
// check of its content.
func BenchmarkStandardLibrary(b *testing.B) {
	type observation struct {
		ID, Series           string
		Start, End, Reported time.Time
		Events, Revision     int64
		Exposure             json.Number
	}
	array := []byte("[" + strings.TrimSuffix(strings.Repeat(string(compactExample())+",", 100), ",") + "]")
	b.ReportAllocs()
	for b.Loop() {
		var list []observation
		if err := json.Unmarshal(array, &list); err != nil || len(list) != 100 {
			b.Fatal(err, len(list))
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*100), "ns/observation")
}

func BenchmarkEncode(b *testing.B) {
	o := NewDecoder(Limits{}).Observation(compactExample()).Observation
	var buffer []byte
	b.ReportAllocs()
	for b.Loop() {
		buffer = EncodeObservation(buffer[:0], &o)
	}
	if len(buffer) == 0 {
		b.Fatal(fmt.Sprint(o))
	}
}
