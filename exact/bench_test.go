package exact_test

import (
	"testing"

	"gonum.org/v1/gonum/mathext"

	"tailbell/exact"
)

var sink float64

// work is one column of the speed table: the same calls of this package and of gonum.
type work struct {
	name        string
	ours, gonum func(i int) float64
}

func sum(a, b float64) float64 { return a + b }

var typicalMeans = []float64{0.5, 1, 2, 3.7, 5, 8, 12, 20, 33, 50}

var works = []work{
	{
		"Poisson tail mu 0.5-50",
		func(i int) float64 {
			mu := typicalMeans[i%10]
			return exact.Poisson{Rate: mu, Exposure: 1}.Upper(int64(mu) + int64(i%7))
		},
		func(i int) float64 {
			mu := typicalMeans[i%10]
			return mathext.GammaIncReg(max(1, float64(int(mu)+i%7)), mu)
		},
	},
	{
		"mu = 1e6",
		func(i int) float64 { return exact.Poisson{Rate: 1e6, Exposure: 1}.Upper(1e6 + int64(i%7)*1000) },
		func(i int) float64 { return mathext.GammaIncReg(1e6+float64(i%7)*1000, 1e6) },
	},
	{
		"binomial n = 1e3",
		func(i int) float64 { return exact.NewBinomial(1000, 0.01).Upper(8 + int64(i%12)) },
		func(i int) float64 { return mathext.RegIncBeta(8+float64(i%12), 993-float64(i%12), 0.01) },
	},
	{
		"n = 1e9",
		func(i int) float64 { return exact.NewBinomial(1e9, 0.01).Upper(1e7 + int64(i%12)*1000) },
		func(i int) float64 {
			k := 1e7 + float64(i%12)*1000
			return mathext.RegIncBeta(k, 1e9-k+1, 0.01)
		},
	},
	{
		"Garwood pair k <= 100",
		func(i int) float64 { return sum(exact.Garwood(int64(1+i%100), 0.001)) },
		func(i int) float64 {
			k := float64(1 + i%100)
			return mathext.GammaIncRegInv(k, 0.0005) + mathext.GammaIncRegCompInv(k+1, 0.0005)
		},
	},
	{
		"k = 1e6",
		func(int) float64 { return sum(exact.Garwood(1e6, 0.001)) },
		func(int) float64 {
			return mathext.GammaIncRegInv(1e6, 0.0005) + mathext.GammaIncRegCompInv(1e6+1, 0.0005)
		},
	},
	{
		"Clopper-Pearson pair n = 1e3",
		func(i int) float64 { return sum(exact.ClopperPearson(int64(1+i%100), 1000, 0.001)) },
		func(i int) float64 {
			k := float64(1 + i%100)
			return mathext.InvRegIncBeta(k, 1000-k+1, 0.0005) + mathext.InvRegIncBeta(k+1, 1000-k, 0.9995)
		},
	},
	{
		"n = 1e9",
		func(int) float64 { return sum(exact.ClopperPearson(1e7, 1e9, 0.001)) },
		func(int) float64 {
			return mathext.InvRegIncBeta(1e7, 1e9-1e7+1, 0.0005) + mathext.InvRegIncBeta(1e7+1, 1e9-1e7, 0.9995)
		},
	},
}

func BenchmarkTable(b *testing.B) {
	for _, w := range works {
		for name, f := range map[string]func(int) float64{"ours": w.ours, "gonum": w.gonum} {
			b.Run(w.name+"/"+name, func(b *testing.B) {
				b.ReportAllocs()
				for i := 0; b.Loop(); i++ {
					sink += f(i)
				}
			})
		}
	}
}

func TestNothingAllocates(t *testing.T) {
	for _, w := range works {
		i := 0
		if n := testing.AllocsPerRun(100, func() { sink += w.ours(i); i++ }); n != 0 {
			t.Errorf("%s: %v allocations a call", w.name, n)
		}
	}
	rate := exact.TwoRate{RefEvents: 21, Exposure: 800, RefExposure: 3011, Margin: 1.2}
	prop := exact.TwoProportion{RefEvents: 21, RefTrials: 3011, Trials: 800, Margin: 1.2}
	nb := exact.NegativeBinomial{Rate: 3, Exposure: 400, Size: 2.5}
	h := exact.Hypergeometric{White: 300, Black: 4000, Draws: 500}
	pb, err := exact.NewPoissonBinomial([]float64{0.1, 0.2, 0.3})
	if err != nil {
		t.Fatal(err)
	}
	for name, f := range map[string]func() float64{
		"critical counts": func() float64 {
			k, size, _ := exact.Poisson{Rate: 2, Exposure: 3}.CriticalUpper(1e-3)
			l, _, _ := exact.NewBinomial(1e6, 0.01).CriticalLower(1e-3)
			m, _, _ := rate.CriticalUpper(1e-3)
			n, _, _ := prop.CriticalUpper(1e-3)
			return float64(k+l+m+n) + size
		},
		"two samples": func() float64 {
			l, u := rate.RatioBounds(11, 0.05)
			m, v := prop.OddsRatioBounds(11, 0.05)
			return l + u + m + v + rate.LogUpper(11) + prop.LogMidLower(11)
		},
		"two-sided": func() float64 {
			return rate.TwoSided(11, exact.MinLike) + h.TwoSided(20, exact.Blaker) + nb.TwoSided(9, exact.Central) + pb.TwoSided(2, exact.MinLike)
		},
		"other laws": func() float64 {
			return nb.LogUpper(1500) + nb.Lower(200) + h.MidUpper(44) + pb.Upper(2) + exact.BetaBinomial{N: 50, A: 2, B: 9}.LogLower(3)
		},
		"plans and waits": func() float64 {
			p, _ := exact.NeededExposure(0.2, 2, 1e-3, 0.9)
			return p.Least + exact.Wait{Events: 3, Rate: 2}.Late(0.01)
		},
		"accepted sets": func() float64 { return sum(exact.MeanBounds(20, 0.05, exact.Blaker)) },
	} {
		if n := testing.AllocsPerRun(20, func() { sink += f() }); n != 0 {
			t.Errorf("%s: %v allocations a call", name, n)
		}
	}
}
