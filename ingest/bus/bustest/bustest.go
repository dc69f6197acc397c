// Package bustest opens buses for tests.
package bustest

import (
	"testing"

	"tailbell/config"
	"tailbell/ingest/bus"
)

// Setup is a small set-up with one partition in a folder of the test's own.
func Setup(t testing.TB) *config.Setup {
	t.Helper()
	return &config.Setup{
		Name:       "quillmere",
		Folder:     t.TempDir(),
		Partitions: 1,
		KeyParts:   1,
		Bus:        config.Bus{MaxBytes: 64 << 20},
	}
}

// Open opens the embedded bus without a listener, and closes it with the test.
// It works in a synctest bubble.
func Open(t testing.TB, setup *config.Setup, opts ...bus.Option) *bus.Bus {
	t.Helper()
	b, err := bus.Open(t.Context(), setup, append(opts, bus.WithoutListener())...)
	if err != nil {
		t.Fatalf("opening the bus: %v", err)
	}
	t.Cleanup(func() {
		if err := b.Close(); err != nil {
			t.Errorf("closing the bus: %v", err)
		}
	})
	return b
}
