package exact_test

import (
	"testing"

	"tailbell/exact"
)

var sink float64

func BenchmarkPoissonTypical(b *testing.B) {
	mus := []float64{0.5, 1, 2, 3.7, 5, 8, 12, 20, 33, 50}
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		mu := mus[i%10]
		k := int64(mu) + int64(i%7)
		sink += exact.Poisson{Rate: mu, Exposure: 1}.Upper(k)
		i++
	}
}

func BenchmarkPoissonLarge(b *testing.B) {
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		sink += exact.Poisson{Rate: 1e6, Exposure: 1}.Upper(1e6 + int64(i%7)*1000)
		i++
	}
}

func BenchmarkBinomialTypical(b *testing.B) {
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		sink += exact.NewBinomial(1000, 0.01).Upper(8 + int64(i%12))
		i++
	}
}

func BenchmarkBinomialLarge(b *testing.B) {
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		sink += exact.NewBinomial(1e9, 0.01).Upper(1e7 + int64(i%12)*1000)
		i++
	}
}

func BenchmarkGarwoodSmall(b *testing.B) {
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		l, u := exact.Garwood(int64(i%100), 0.001)
		sink += l + u
		i++
	}
}

func BenchmarkGarwoodLarge(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		l, u := exact.Garwood(1e6, 0.001)
		sink += l + u
	}
}

func BenchmarkClopperPearsonSmall(b *testing.B) {
	b.ReportAllocs()
	i := 0
	for b.Loop() {
		l, u := exact.ClopperPearson(int64(i%100), 1000, 0.001)
		sink += l + u
		i++
	}
}

func BenchmarkClopperPearsonLarge(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		l, u := exact.ClopperPearson(1e7, 1e9, 0.001)
		sink += l + u
	}
}
