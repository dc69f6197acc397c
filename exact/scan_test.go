package exact_test

import (
	"math"
	"math/bits"
	"strconv"
	"strings"
	"testing"

	"tailbell/exact"
)

// quietStrings counts the strings of zeros and ones of length n, for n up to most, of which no m in a row hold k ones or
// more: by the last m-1 digits, in whole numbers.
func quietStrings(most, m, k int) []uint64 {
	states := map[uint64]uint64{0: 1} // the digits before the first are zeros
	counts := []uint64{1}
	for range most {
		next := map[uint64]uint64{}
		for s, n := range states {
			for digit := range uint64(2) {
				if w := s<<1 | digit; bits.OnesCount64(w) < k {
					next[w&(1<<(m-1)-1)] += n
				}
			}
		}
		states = next
		sum := uint64(0)
		for _, n := range states {
			sum += n
		}
		counts = append(counts, sum)
	}
	return counts
}

// TestScanStrings holds the crossing rate of trials against published counts of
// strings: those of n+1 digits that stay quiet are those whose first window is
// quiet and whose second does not cross; in longer ones looks that cross bound
// what rings, which is what an allowance rests on.
func TestScanStrings(t *testing.T) {
	for _, c := range []struct {
		source string
		m, k   int
		from   int
		want   string
	}{
		{
			"F01a OEIS A118647: no 4 in a row hold 3 ones", 4, 3, 1,
			"2 4 7 11 19 33 57 97 166 285 489 838 1436 2462 4221 7236 12404 21264 36453 62491",
		},
		{"F02b Schilling 1990, College Math J 21:196: longest run at most 3 (from memory)", 4, 4, 0, "1 2 4 8 15 29 56 108 208"},
		{"F02b Fibonacci numbers: no two ones side by side (from memory)", 2, 2, 0, "1 2 3 5 8 13 21 34 55"},
	} {
		var want []uint64
		for _, w := range strings.Fields(c.want) {
			v, err := strconv.ParseUint(w, 10, 64)
			if err != nil {
				t.Fatal(err)
			}
			want = append(want, v)
		}
		counts := quietStrings(len(want)+c.from-1, c.m, c.k)
		m, k := int64(c.m), int64(c.k)
		first, crossing := exact.NewBinomial(m, 0.5).Lower(k-1), exact.TrialCrossing(0.5, m, k)
		for i, w := range want {
			n := i + c.from
			if counts[n] != w {
				t.Errorf("%s: %d strings of %d, published %d", c.source, counts[n], n, w)
			}
			all := math.Exp2(float64(n))
			bound := 1 - first + float64(n-c.m)*crossing
			switch rings := 1 - float64(w)/all; {
			case n == c.m || n == c.m+1:
				if math.Abs(all*(1-bound)-float64(w)) > 1e-12 {
					t.Errorf("%s: %v of %d digits by the crossing rate, published %d", c.source, all*(1-bound), n, w)
				}
			case n > c.m && rings > bound:
				t.Errorf("%s: of %d digits %v ring, the crossings bound it by %v", c.source, n, rings, bound)
			}
		}
	}
}

// TestScanRuns holds the mean wait for r ones in a row: a window of r trials that
// must all be events crosses once in each run that is long enough.
func TestScanRuns(t *testing.T) {
	src := "F02a Feller vol. 1, XIII.7, mean wait for a run (from memory)"
	for _, c := range []struct {
		r    int64
		p    float64
		want string
	}{{5, 1. / 2, "62"}, {3, 1. / 6, "258"}, {5, 1. / 6, "9330"}} {
		all := exact.NewBinomial(c.r, c.p).PMF(c.r)
		if got := (1 - all) / exact.TrialCrossing(c.p, c.r, c.r); math.Abs(got/decimal(t, c.want)-1) > 1e-12 {
			t.Errorf("%s: %d in a row at %v: %.12g, printed %s", src, c.r, c.p, got, c.want)
		}
	}
}

// maxUnder is the probability that of n things spread over the bins at random no
// bin holds k or more: counts of independent Poisson bins, given their sum.
func maxUnder(n, bins, k int) float64 {
	slot := exact.Poisson{Rate: float64(n) / float64(bins), Exposure: 1}
	sum := make([]float64, n+1)
	sum[0] = 1
	for range bins {
		for s := n; s >= 0; s-- {
			v := 0.0
			for j := 0; j < k && j <= s; j++ {
				v += sum[s-j] * slot.PMF(int64(j))
			}
			sum[s] = v
		}
	}
	return sum[n] / exact.Poisson{Rate: float64(n), Exposure: 1}.PMF(int64(n))
}

// TestScanCoincidences holds the most in any of 365 bins: windows that do not
// overlap.
func TestScanCoincidences(t *testing.T) {
	src := "F03a OEIS A014088; Diaconis & Mosteller 1989, JASA 84:853"
	for k, w := range map[int]struct {
		n int
		p string
	}{2: {23, "0.507297"}, 3: {88, "0.511065"}, 4: {187, "0.502685"}} {
		if before := 1 - maxUnder(w.n-1, 365, k); before >= 0.5 {
			t.Errorf("%s: %d things already reach %g", src, w.n-1, before)
		}
		printed(t, src, 1-maxUnder(w.n, 365, k), w.p)
	}
}

// apart is the probability that of n things on a circle of days no two lie within
// d days: the others must stay clear of the first, and of each other. Days are
// independent Poisson slots, given their sum.
func apart(n, days, d int) float64 {
	slot := exact.Poisson{Rate: float64(n-1) / float64(days), Exposure: 1}
	none, one := slot.PMF(0), slot.PMF(1)
	// by things placed and days since the last of them, d+1 for longer ago
	state := make([][]float64, n)
	for i := range state {
		state[i] = make([]float64, d+2)
	}
	state[0][0] = none // day 0 holds the first, and none of the others
	for day := 1; day < days; day++ {
		for i := n - 1; i >= 0; i-- {
			free := 0.0
			if i > 0 && day < days-d {
				free = state[i-1][d] + state[i-1][d+1]
			}
			state[i][d+1] += state[i][d]
			for since := d; since > 0; since-- {
				state[i][since] = state[i][since-1]
			}
			for since := 1; since <= d+1; since++ {
				state[i][since] *= none
			}
			state[i][0] = free * one
		}
	}
	sum := 0.0
	for _, p := range state[n-1] {
		sum += p
	}
	return sum / exact.Poisson{Rate: float64(n - 1), Exposure: 1}.PMF(int64(n-1))
}

// TestScanNeighbours holds two within d days anywhere: windows that overlap.
func TestScanNeighbours(t *testing.T) {
	src := "F04a Abramson & Moser 1970, Amer Math Monthly 77:856 (from memory)"
	for d, n := range []int{23, 14, 11, 9} {
		if d == 0 { // the same day: bins
			if 1-maxUnder(n, 365, 2) < 0.5 || 1-maxUnder(n-1, 365, 2) >= 0.5 {
				t.Errorf("%s: d = 0", src)
			}
			continue
		}
		// n things: 364-nd over 365^(n-1) ways, in falling factorials
		logWays := 0.0
		for i := range n - 1 {
			logWays += math.Log(float64(364-n*d-i) / 365)
		}
		if got, want := apart(n, 365, d), math.Exp(logWays); math.Abs(got/want-1) > 1e-12 {
			t.Errorf("%s: %d within %d days: %v by slots, %v by their formula", src, n, d, got, want)
		}
		if p, before := 1-apart(n, 365, d), 1-apart(n-1, 365, d); p < 0.5 || before >= 0.5 {
			t.Errorf("%s: %d reach %v and %d reach %v, printed %d", src, n, p, n-1, before, n)
		}
	}
}

// TestScanContinuous holds the chance that some span w of a unit holds k of n
// points, in the cases in which two binomial terms give it exactly.
func TestScanContinuous(t *testing.T) {
	src := "F05a Naus 1965, JASA 60:532, exact for k > n/2 (form of Wallenstein & Neff 1987)"
	for _, c := range []struct {
		k, n int64
		w    float64
		want string
	}{{4, 4, 0.3, "0.0837"}, {5, 8, 1. / 6, "0.0967"}} {
		x := exact.NewBinomial(c.n, c.w)
		printed(t, src, (float64(c.k)/c.w-float64(c.n)-1)*x.PMF(c.k)+2*x.Upper(c.k), c.want)
	}
}

// scanned is the probability that some m of n trials in a row hold k events.
func scanned(n, m, k int, theta float64) float64 {
	states := make([]float64, 1<<(m-1))
	states[0] = 1
	for range n {
		next := make([]float64, len(states))
		for s, p := range states {
			if p == 0 {
				continue
			}
			next[s<<1&(len(states)-1)] += p * (1 - theta)
			if bits.OnesCount(uint(s))+1 < k {
				next[(s<<1|1)&(len(states)-1)] += p * theta
			}
		}
		states = next
	}
	quiet := 0.0
	for _, p := range states {
		quiet += p
	}
	return 1 - quiet
}

// TestScanTrials holds a moving window of 10 of 100 trials, and that the first
// look's cost and the crossings bound it closely.
func TestScanTrials(t *testing.T) {
	src := "F06a by definition, exact rational arithmetic (Markov chain of Fu 2001, J Appl Probab 38:908)"
	for k, w := range map[int64]string{4: "0.031126441684766", 5: "0.002531957971835"} {
		got := scanned(100, 10, int(k), 0.05)
		if want, err := strconv.ParseFloat(w, 64); err != nil || math.Abs(got/want-1) > 1e-11 {
			t.Errorf("%s: k = %d: %.15g, want %s", src, k, got, w)
		}
		most := exact.NewBinomial(10, 0.05).Upper(k) + 90*exact.TrialCrossing(0.05, 10, k)
		if !(got <= most && most < 1.6*got) {
			t.Errorf("%s: k = %d: %v ring, the crossings come to %v", src, k, got, most)
		}
	}
}
