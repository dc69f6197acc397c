package exact

import "testing"

var sk float64

func BenchmarkMicroPMF(b *testing.B) {
	for b.Loop() {
		sk += Poisson{8.3, 1}.PMF(12)
	}
}
func BenchmarkMicroBPMF(b *testing.B) {
	for b.Loop() {
		sk += NewBinomial(1000, .01).PMF(12)
	}
}
func BenchmarkMicroLog(b *testing.B) {
	x := dd{3.3, 0}
	for b.Loop() {
		sk += x.log().hi
	}
}
func BenchmarkMicroDiv(b *testing.B) {
	x := dd{3.3, 0}
	y := dd{7.1, 1e-17}
	for b.Loop() {
		sk += x.div(y).hi
	}
}
func BenchmarkMicroExp(b *testing.B) {
	for b.Loop() {
		sk += expTwo(-3.3, 1e-17)
	}
}
func BenchmarkMicroUpR(b *testing.B) {
	for b.Loop() {
		sk += poissonUpperRatio(12, dd{8.3, 0})
	}
}
func BenchmarkMicroLoR(b *testing.B) {
	for b.Loop() {
		sk += poissonLowerRatio(5, dd{8.3, 0})
	}
}
func BenchmarkMicroUpR50(b *testing.B) {
	for b.Loop() {
		sk += poissonUpperRatio(55, dd{50.3, 0})
	}
}
func BenchmarkMicroBUpR(b *testing.B) {
	for b.Loop() {
		sk += binomialUpperRatio(12, 1000, dd{.01, 0}, dd{.99, 0})
	}
}
func BenchmarkMicroG(b *testing.B) {
	for b.Loop() {
		sk += logLess1(.01)
	}
}
func BenchmarkMicroPanel(b *testing.B) {
	for b.Loop() {
		sk += panel(100, 1e6, -1, 0, 0, .008)
	}
}
