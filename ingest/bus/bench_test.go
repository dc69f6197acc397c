package bus_test

import (
	"fmt"
	"testing"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
)

// observation is as long as a usual one.
const observation = `{"id":"lab-2026-03-0117","series":"quillmere-east/ward-3/line-infection",` +
	`"start":"2026-03-02T00:00:00+01:00","end":"2026-03-03T00:00:00+01:00","events":1,"exposure":22}`

func outgoing(n int) []bus.Outgoing {
	batch := make([]bus.Outgoing, n)
	for i := range batch {
		batch[i].Data = []byte(observation)
	}
	return batch
}

func benchSetup(b *testing.B) *bus.Bus {
	b.Helper()
	setup := bustest.Setup(b)
	setup.Bus.MaxBytes = 4 << 30
	return bustest.Open(b, setup)
}

func perSecond(b *testing.B, messages int) {
	b.Helper()
	b.ReportMetric(float64(messages)/b.Elapsed().Seconds(), "messages/s")
}

func BenchmarkPublish(b *testing.B) {
	d := benchSetup(b)
	for b.Loop() {
		if _, err := d.Publish(b.Context(), bus.Outgoing{Data: []byte(observation)}); err != nil {
			b.Fatal(err)
		}
	}
	perSecond(b, b.N)
}

func BenchmarkPublishBatch(b *testing.B) {
	for _, atomic := range []bool{true, false} {
		for _, size := range []int{100, 1000, 5000} {
			b.Run(fmt.Sprintf("atomic=%v/%d", atomic, size), func(b *testing.B) {
				d := benchSetup(b)
				d.SetAtomic(atomic)
				batch := outgoing(size)
				for b.Loop() {
					if done, err := d.PublishBatch(b.Context(), batch); err != nil {
						b.Fatal(done, err)
					}
				}
				perSecond(b, b.N*size)
			})
		}
	}
}

func BenchmarkSource(b *testing.B) {
	const n = 100_000
	d := benchSetup(b)
	if done, err := d.PublishBatch(b.Context(), outgoing(n)); err != nil {
		b.Fatal(done, err)
	}
	for _, limit := range []int{1, 100, 10_000} {
		b.Run(fmt.Sprint(limit), func(b *testing.B) {
			b.ReportAllocs()
			var dst []bus.Raw
			for b.Loop() {
				s, err := d.Source(b.Context(), 0, 0)
				if err != nil {
					b.Fatal(err)
				}
				for s.Position() < n {
					if dst, err = s.Next(b.Context(), dst[:0], limit, 16<<20); err != nil {
						b.Fatal(err)
					}
				}
				if err := s.Close(); err != nil {
					b.Fatal(err)
				}
			}
			perSecond(b, b.N*n)
		})
	}
}
