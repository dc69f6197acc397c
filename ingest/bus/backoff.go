package bus

import (
	"context"
	"crypto/rand"
	"encoding/binary"
	mrand "math/rand/v2"
	"time"
)

const (
	firstWait = 50 * time.Millisecond
	longWait  = 5 * time.Second
)

// backoff spaces out attempts: 50 ms doubling to 5 s, each wait drawn from its
// upper half so that many clients don't return at once.
type backoff struct {
	tries int
	rng   *mrand.Rand
}

func newBackoff() *backoff {
	var seed [16]byte
	rand.Read(seed[:]) // never fails, see crypto/rand
	a, b := binary.LittleEndian.Uint64(seed[:8]), binary.LittleEndian.Uint64(seed[8:])
	return &backoff{rng: mrand.New(mrand.NewPCG(a, b))}
}

// delay is how long to wait before attempt n, counted from 1.
func (b *backoff) delay(n int) time.Duration {
	full := longWait
	if n < 8 {
		full = min(longWait, firstWait<<max(n-1, 0))
	}
	return full/2 + time.Duration(b.rng.Int64N(int64(full/2)+1))
}

// wait waits before the next attempt, or returns the context's error.
func (b *backoff) wait(ctx context.Context) error {
	b.tries++
	return pause(ctx, b.delay(b.tries))
}
