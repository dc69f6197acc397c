package exact

import (
	"math"
	"math/bits"
	"math/rand/v2"
	"testing"
	"time"
)

// TestCrossingReference holds the two figures that were confirmed by simulation
// before this was written: a window of 28 slots with mean 2 at 7, and spans of 2
// with rate 1 at 7.
func TestCrossingReference(t *testing.T) {
	slot, shared := Poisson{Rate: 2. / 28, Exposure: 1}, Poisson{Rate: 2. / 28, Exposure: 27}
	if got := CrossingUpper(slot, shared, slot, 7, 7); math.Abs(got-0.000750158) > 5e-10 {
		t.Errorf("slots: %v", got)
	}
	if got := ArrivalCrossings([]float64{1}, 2, 7); math.Abs(got-0.0120298) > 5e-8 {
		t.Errorf("arrivals: %v", got)
	}
}

// TestCrossingEnumerated adds up all states of small windows: slots with counts
// under 14 of the Poisson law, three to a window, one to leave and one to enter.
func TestCrossingEnumerated(t *testing.T) {
	const most = 14
	slot := Poisson{Rate: 0.7, Exposure: 1}
	shared := Poisson{Rate: 0.7, Exposure: 2}
	for before := int64(1); before < 7; before++ {
		for now := int64(1); now < 7; now++ {
			upper, lower := 0.0, 0.0
			for a := int64(0); a < most; a++ {
				for b := int64(0); b < most; b++ {
					for c := int64(0); c < most; c++ {
						for d := int64(0); d < most; d++ {
							p := slot.PMF(a) * slot.PMF(b) * slot.PMF(c) * slot.PMF(d)
							if a+b+c < before && b+c+d >= now {
								upper += p
							}
							if a+b+c > before && b+c+d <= now {
								lower += p
							}
						}
					}
				}
			}
			if got := CrossingUpper(slot, shared, slot, before, now); math.Abs(got-upper) > 1e-12 {
				t.Errorf("upper %d, %d: %v, enumerated %v", before, now, got, upper)
			}
			if got := CrossingLower(slot, shared, slot, before, now); math.Abs(got-lower) > 1e-12 {
				t.Errorf("lower %d, %d: %v, enumerated %v", before, now, got, lower)
			}
		}
	}
}

// TestTrialCrossingEnumerated goes through all strings of n+1 trials.
func TestTrialCrossingEnumerated(t *testing.T) {
	const theta = 0.3
	for n := int64(1); n <= 10; n++ {
		for k := int64(1); k <= n; k++ {
			want := 0.0
			for s := uint64(0); s < 1<<(n+1); s++ {
				ones := bits.OnesCount64(s)
				before, now := bits.OnesCount64(s>>1), bits.OnesCount64(s&(1<<n-1))
				if int64(before) < k && int64(now) >= k {
					want += math.Pow(theta, float64(ones)) * math.Pow(1-theta, float64(int(n)+1-ones))
				}
			}
			if got := TrialCrossing(theta, n, k); math.Abs(got-want) > 1e-14 {
				t.Errorf("n %d, k %d: %v, enumerated %v", n, k, got, want)
			}
		}
	}
}

// TestArrivalCrossingsSimulated plays a long stretch of messages of one, two
// and three events.
func TestArrivalCrossingsSimulated(t *testing.T) {
	seed := uint64(time.Now().UnixNano())
	r := rand.New(rand.NewPCG(seed, 0))
	rates, span, k := []float64{0.6, 0.2, 0.1}, 2.5, int64(6)
	const stretch = 400_000.0
	type arrival struct {
		at     float64
		events int64
	}
	var held []arrival
	var inside, crossings int64
	for at := r.ExpFloat64() / 0.9; at < stretch; at += r.ExpFloat64() / 0.9 {
		for len(held) > 0 && held[0].at <= at-span {
			inside -= held[0].events
			held = held[1:]
		}
		a := arrival{at, 1}
		switch u := r.Float64() * 0.9; {
		case u >= 0.8:
			a.events = 3
		case u >= 0.6:
			a.events = 2
		}
		if inside < k && inside+a.events >= k {
			crossings++
		}
		held, inside = append(held, a), inside+a.events
	}
	want := ArrivalCrossings(rates, span, k) * stretch
	// Crossings come in clumps; five times the error of independent ones.
	if d := math.Abs(float64(crossings) - want); d > 5*2*math.Sqrt(want) {
		t.Errorf("seed %d: %d crossings, expected %.1f", seed, crossings, want)
	}
}

// TestCrossingDomain checks that nonsense gives NaN, and a window that always
// signals no crossing.
func TestCrossingDomain(t *testing.T) {
	for _, got := range []float64{
		ArrivalCrossings([]float64{1}, 2, 0), ArrivalCrossings([]float64{-1, 1}, 2, 3), ArrivalCrossings([]float64{1}, -1, 3),
		ArrivalCrossings([]float64{1}, math.Inf(1), 3), TrialCrossing(0.5, 3, 4), TrialCrossing(2, 3, 1), TrialCrossing(math.NaN(), 3, 1),
	} {
		if !math.IsNaN(got) {
			t.Errorf("%v instead of NaN", got)
		}
	}
	slot, none := Poisson{Rate: 3, Exposure: 1}, Poisson{Rate: 3, Exposure: 0}
	if got := CrossingUpper(slot, none, slot, 0, 0); got != 0 {
		t.Errorf("a window that always signals crosses with %v", got)
	}
	if got, want := CrossingUpper(slot, none, slot, 5, 5), slot.Lower(4)*slot.Upper(5); math.Abs(got-want) > 1e-15 {
		t.Errorf("nothing shared: %v, want %v", got, want)
	}
}
