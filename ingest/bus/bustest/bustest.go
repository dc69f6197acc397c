// Package bustest opens buses for tests.
package bustest

import (
	"testing"

	"tailbell/config"
	"tailbell/ingest/bus"
)

// Setup is a small set-up with one partition in a folder of the test's own.
func Setup(tb testing.TB) *config.Setup {
	tb.Helper()
	return &config.Setup{
		Name:       "quillmere",
		Folder:     tb.TempDir(),
		Partitions: 1,
		KeyParts:   1,
		Bus:        config.Bus{MaxBytes: 64 << 20},
	}
}

// Open opens the embedded bus without a listener, and closes it with the test.
// It works in a synctest bubble.
func Open(tb testing.TB, setup *config.Setup, opts ...bus.Option) *bus.Bus {
	tb.Helper()
	b, err := bus.Open(tb.Context(), setup, append(opts, bus.WithoutListener())...)
	if err != nil {
		tb.Fatalf("opening the bus: %v", err)
	}
	tb.Cleanup(func() {
		if err := b.Close(); err != nil {
			tb.Errorf("closing the bus: %v", err)
		}
	})
	return b
}
