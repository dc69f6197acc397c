package resample

import (
	"context"
	"encoding/binary"
	"errors"
	"math/rand/v2"
	"runtime"
	"sync"
)

// Plan says how many draws are made, and from which seed.
type Plan struct {
	Draws int
	Seed  uint64
	// Workers is how many chunks are worked on at once; 0 means one for each
	// processor. It changes no result.
	Workers int
	// Progress, if not nil, is told how many draws are done, from one
	// goroutine at a time.
	Progress func(done int)
}

// ErrDraws is returned for a plan without draws.
var ErrDraws = errors.New("resample: the number of draws is not positive")

// chunkSize is the number of draws that share a source.
const chunkSize = 128

// Source returns the source of the given number under a seed: streams of
// different numbers are independent for all purposes (ChaCha8 under different
// keys).
func Source(seed, number uint64) *rand.Rand {
	var key [32]byte
	copy(key[:], "tailbell")
	binary.LittleEndian.PutUint64(key[8:], seed)
	binary.LittleEndian.PutUint64(key[16:], number)
	return rand.New(rand.NewChaCha8(key))
}

// each runs work over all chunks: [from, to) are the numbers of its draws.
// newWork is called once for every worker and holds its scratch space.
func (p Plan) each(ctx context.Context, newWork func() func(rng *rand.Rand, from, to int)) error {
	if p.Draws <= 0 {
		return ErrDraws
	}
	chunks := (p.Draws + chunkSize - 1) / chunkSize
	workers := p.Workers
	if workers <= 0 {
		workers = runtime.GOMAXPROCS(0)
	}
	workers = min(workers, chunks)
	var next, done int
	var mu sync.Mutex
	take := func() (int, bool) {
		mu.Lock()
		defer mu.Unlock()
		if next == chunks || ctx.Err() != nil {
			return 0, false
		}
		next++
		return next - 1, true
	}
	finish := func(n int) {
		mu.Lock()
		defer mu.Unlock()
		done += n
		if p.Progress != nil {
			p.Progress(done)
		}
	}
	var all sync.WaitGroup
	for range workers {
		all.Go(func() {
			work := newWork()
			for c, more := take(); more; c, more = take() {
				from := c * chunkSize
				to := min(from+chunkSize, p.Draws)
				work(Source(p.Seed, uint64(c)), from, to)
				finish(to - from)
			}
		})
	}
	all.Wait()
	if done < p.Draws {
		return ctx.Err()
	}
	return nil
}
