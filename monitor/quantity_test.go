package monitor

import (
	"fmt"
	"math/big"
	"math/rand/v2"
	"testing"
	"time"

	"tailbell/config"
)

func randomQuantity(rng *rand.Rand) Quantity {
	q := Quantity{Hi: rng.Uint64() >> (40 + rng.IntN(24)), Lo: rng.Uint64() >> rng.IntN(64)}
	if rng.IntN(3) > 0 {
		q.Hi = 0
	}
	return q
}

func bigOf(q Quantity) *big.Int {
	n, ok := new(big.Int).SetString(fmt.Sprintf("%016x%016x", q.Hi, q.Lo), 16)
	if !ok {
		panic("not a number")
	}
	return n
}

func TestQuantitySums(t *testing.T) {
	const seed = 11
	rng := rand.New(rand.NewPCG(seed, 1))
	for range 50_000 {
		a, b := randomQuantity(rng), randomQuantity(rng)
		sum := a.add(b)
		if want := new(big.Int).Add(bigOf(a), bigOf(b)); bigOf(sum).Cmp(want) != 0 {
			t.Fatalf("seed %d: %v + %v = %v, want %s", seed, a, b, sum, want)
		}
		if got := sum.sub(b); got != a {
			t.Fatalf("seed %d: %v + %v - the latter = %v", seed, a, b, got)
		}
		if got := a.signed(b, 1).signed(b, -1); got != a {
			t.Fatalf("seed %d: signed: %v becomes %v", seed, a, got)
		}
	}
}

// TestQuantityFloat compares with big.Rat, which rounds to the nearest.
func TestQuantityFloat(t *testing.T) {
	const seed = 12
	rng := rand.New(rand.NewPCG(seed, 1))
	check := func(q Quantity, digits int) {
		t.Helper()
		scale := new(big.Int).Exp(big.NewInt(10), big.NewInt(int64(digits)), nil)
		want, _ := new(big.Rat).SetFrac(bigOf(q), scale).Float64()
		if got := q.Float(digits); got != want {
			t.Fatalf("seed %d: %v with %d digits is %v, got %v", seed, q, digits, want, got)
		}
	}
	for digits := range 10 {
		for _, q := range []Quantity{{}, {Lo: 1}, {Lo: 1<<53 - 1}, {Lo: 1 << 53}, {Lo: 1<<53 + 1}, {Lo: 1<<64 - 1}, {Hi: 1}, {Hi: 1, Lo: 1}, {Hi: 1<<64 - 1, Lo: 1<<64 - 1}} {
			check(q, digits)
		}
	}
	for range 50_000 {
		check(randomQuantity(rng), rng.IntN(10))
	}
}

func TestQuantityDecimal(t *testing.T) {
	tests := []struct {
		q      Quantity
		digits int
		want   string
	}{
		{Quantity{}, 6, "0"},
		{Quantity{Lo: 1}, 6, "0.000001"},
		{Quantity{Lo: 22_000_000}, 6, "22"},
		{Quantity{Lo: 500_000}, 6, "0.5"},
		{Quantity{Lo: 1_000_001}, 6, "1.000001"},
		{Quantity{Lo: 7}, 0, "7"},
		{Quantity{Lo: 100}, 0, "100"},
		{Quantity{Hi: 1}, 9, "18446744073.709551616"},
	}
	for _, tt := range tests {
		if got := tt.q.decimal(tt.digits); got != tt.want {
			t.Errorf("%v with %d digits: %s, want %s", tt.q, tt.digits, got, tt.want)
		}
	}
}

// TestQuantityRoundTrip writes quantities and reads them again.
func TestQuantityRoundTrip(t *testing.T) {
	const seed = 13
	rng := rand.New(rand.NewPCG(seed, 1))
	for range 20_000 {
		q, digits := Quantity{Lo: rng.Uint64() >> (1 + rng.IntN(63))}, rng.IntN(10)
		d, err := config.ParseDecimal(q.decimal(digits))
		if err != nil {
			t.Fatalf("seed %d: %v: %v", seed, q, err)
		}
		if got, reason := quantityOf(d, digits); got != q || reason != "" {
			t.Fatalf("seed %d: %v with %d digits is written %s and read as %v (%s)", seed, q, digits, d, got, reason)
		}
	}
}

func TestQuantityOf(t *testing.T) {
	tests := []struct {
		text   string
		digits int
		want   Quantity
		reason Reason
	}{
		{"22", 6, Quantity{Lo: 22_000_000}, ""},
		{"0", 0, Quantity{}, ""},
		{"0.000001", 6, Quantity{Lo: 1}, ""},
		{"0.0000001", 6, Quantity{}, FinerThanGrain},
		{"0.5", 0, Quantity{}, FinerThanGrain},
		{"1.50", 1, Quantity{Lo: 15}, ""},
		{"9223372036854775807", 0, Quantity{Lo: 1<<63 - 1}, ""},
		{"9223372036854775808", 0, Quantity{}, TooBig},
		{"9223372036854.775807", 6, Quantity{Lo: 1<<63 - 1}, ""},
		{"9223372036854.775808", 6, Quantity{}, TooBig},
		{"18446744073709551615", 9, Quantity{}, TooBig},
	}
	for _, tt := range tests {
		d, err := config.ParseDecimal(tt.text)
		if err != nil {
			t.Fatal(err)
		}
		if got, reason := quantityOf(d, tt.digits); got != tt.want || reason != tt.reason {
			t.Errorf("%s in grains of %d digits: %v %q, want %v %q", tt.text, tt.digits, got, reason, tt.want, tt.reason)
		}
	}
}

// TestSpread checks that spreading loses nothing, that no part is further than
// a grain from its share, and that the rest goes to the largest remainders.
func TestSpread(t *testing.T) {
	const seed = 14
	rng := rand.New(rand.NewPCG(seed, 1))
	for range 5_000 {
		q := Quantity{Lo: rng.Uint64() >> (1 + rng.IntN(63))}
		weights := make([]uint64, 1+rng.IntN(30))
		lengths := make([]int64, len(weights))
		for i := range weights {
			weights[i] = rng.Uint64N(1<<40) >> rng.IntN(40)
			lengths[i] = int64(weights[i])
		}
		weights[rng.IntN(len(weights))] += 1
		for i := range weights {
			lengths[i] = int64(weights[i])
		}
		var sum Quantity
		want := twinSpread(int64(q.Lo), lengths)
		for i, part := range q.spread(weights) {
			sum = sum.add(part)
			if part.Lo != uint64(want[i]) || part.Hi != 0 {
				t.Fatalf("seed %d: %v over %v: part %d is %v, want %d", seed, q, weights, i, part, want[i])
			}
		}
		if sum != q {
			t.Fatalf("seed %d: %v over %v sums to %v", seed, q, weights, sum)
		}
	}
	for _, tt := range []struct {
		grains  uint64
		weights []uint64
		want    string
	}{
		{10, []uint64{1, 1, 1}, "[4 3 3]"}, // ties go to the earlier part
		{1, []uint64{1, 1}, "[1 0]"},
		{7, []uint64{0, 5, 0}, "[0 7 0]"},
		{22, []uint64{23, 25}, "[11 11]"}, // 10.54 and 11.46
		{1<<63 - 1, []uint64{1 << 62, 1 << 62}, "[4611686018427387904 4611686018427387903]"},
	} {
		var got []uint64
		for _, q := range (Quantity{Lo: tt.grains}).spread(tt.weights) {
			got = append(got, q.Lo)
		}
		if fmt.Sprint(got) != tt.want {
			t.Errorf("%d over %v: %d, want %s", tt.grains, tt.weights, got, tt.want)
		}
	}
}

// TestClockExposure checks that exposure by the clock adds up.
func TestClockExposure(t *testing.T) {
	const seed = 15
	rng := rand.New(rand.NewPCG(seed, 1))
	for _, tt := range []struct {
		size string
		per  time.Duration
	}{{"12", 24 * time.Hour}, {"1", 3 * time.Second}, {"0.333333", 7 * 24 * time.Hour}, {"0.0000001", time.Hour}, {"250000", time.Minute}} {
		size, err := config.ParseDecimal(tt.size)
		if err != nil {
			t.Fatal(err)
		}
		rule := newClockRule(config.ClockExposure{Size: size, Per: tt.per}, 6)
		exact, ok := new(big.Rat).SetString(tt.size)
		if !ok {
			t.Fatal(tt.size)
		}
		exact.Mul(exact, big.NewRat(1_000_000, tt.per.Microseconds()))
		for range 2_000 {
			a := InstantOf(time.Date(rng.IntN(9999), 1, 1+rng.IntN(365), 0, 0, 0, 0, time.UTC))
			b := a + Instant(rng.Int64N(400*day))
			c := b + Instant(rng.Int64N(400*day))
			whole := rule.between(a, c)
			if got := rule.between(a, b).add(rule.between(b, c)); got != whole {
				t.Fatalf("seed %d: %s per %s: parts sum to %v, the whole is %v", seed, tt.size, tt.per, got, whole)
			}
			want := new(big.Rat).Mul(exact, big.NewRat(int64(c-a), 1))
			off := want.Sub(want, new(big.Rat).SetInt(bigOf(whole)))
			if off.Abs(off).Cmp(big.NewRat(1, 1)) >= 0 {
				t.Fatalf("seed %d: %s per %s over %d µs: %v is off by %s grains", seed, tt.size, tt.per, c-a, whole, off)
			}
		}
	}
}
