package monitor

import (
	"math"
	"math/big"
)

// fixedBits is how many bits of a fraction are told.
const fixedBits = 40

// fixed is the number in fixed point, rounded once: sums of such do not depend on
// their order.
func fixed(x float64) *big.Int {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return new(big.Int) // out of nothing
	}
	f := new(big.Float).SetPrec(53).SetFloat64(x)
	f.SetMantExp(f, fixedBits)
	n, accuracy := f.Int(nil)
	if accuracy == big.Exact {
		return n
	}
	rest := new(big.Float).SetPrec(200).Sub(f, new(big.Float).SetPrec(200).SetInt(n))
	if rest.Cmp(big.NewFloat(0.5)) >= 0 { // what is told is never negative
		n.Add(n, big.NewInt(1))
	}
	return n
}

// unfixed is the number nearest to one in fixed point.
func unfixed(n *big.Int) float64 {
	if n == nil {
		return 0
	}
	f := new(big.Float).SetPrec(uint(max(64, n.BitLen()))).SetInt(n)
	x, _ := f.SetMantExp(f, -fixedBits).Float64()
	return x
}
