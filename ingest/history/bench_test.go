package history

import (
	"context"
	"fmt"
	"strings"
	"testing"
	"time"
)

func BenchmarkRead(b *testing.B) {
	const rows = 20_000
	var csv, ndjson strings.Builder
	csv.WriteString("series,start,end,events,exposure\n")
	for i := range rows {
		day := time.Date(2016, 1, 1, 0, 0, 0, 0, time.UTC).AddDate(0, 0, i/50)
		start, end := day.Format(time.RFC3339), day.AddDate(0, 0, 1).Format(time.RFC3339)
		fmt.Fprintf(&csv, "quillmere-east/ward-%d/falls,%s,%s,%d,%d.5\n", i%50, start, end, i%3, i%40)
		fmt.Fprintf(&ndjson, `{"series":"quillmere-east/ward-%d/falls","start":"%s","end":"%s","events":%d,"exposure":%d.5}`+"\n", i%50, start, end, i%3, i%40)
	}
	for _, c := range []struct {
		format Format
		text   string
	}{{CSV, csv.String()}, {NDJSON, ndjson.String()}} {
		b.Run(c.format.String(), func(b *testing.B) {
			b.SetBytes(int64(len(c.text)))
			b.ReportAllocs()
			for b.Loop() {
				h, err := Read(context.Background(), []string{"-"}, Options{Format: c.format, Stdin: strings.NewReader(c.text)})
				if err != nil || h.Counts.Observations != rows {
					b.Fatal(err, h)
				}
			}
		})
	}
}
