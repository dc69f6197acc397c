package resample

import (
	"errors"
	"math"
)

// Statistic is an estimate from the data at the given positions, which may be
// repeated and missing. It must be pure: it is called from several goroutines.
type Statistic func(positions []int) float64

// Errors of the jackknife and the bootstrap.
var (
	ErrTooFew    = errors.New("resample: fewer than two parts to leave out")
	ErrUndefined = errors.New("resample: the statistic is not defined for all draws")
)

// Jackknifed is what leaving out each part in turn says of an estimate
// (Quenouille 1949; Tukey 1958; Efron 1982, The Jackknife, the Bootstrap and
// Other Resampling Plans).
type Jackknifed struct {
	// Estimate is that of all data, Without[i] that without part i.
	Estimate float64
	Without  []float64
	mean     float64
}

// Singles returns the parts of one position each.
func Singles(n int) [][]int { return Runs(n, 1) }

// Runs returns the parts of length consecutive positions each; the last one may
// be shorter.
func Runs(n, length int) [][]int {
	var parts [][]int
	for from := 0; from < n; from += length {
		var part []int
		for i := from; i < min(from+length, n); i++ {
			part = append(part, i)
		}
		parts = append(parts, part)
	}
	return parts
}

// Jackknife works out the statistic without each part in turn; the parts must
// divide all positions 0 to n-1 between them. ErrTooFew for fewer than two
// parts, ErrUndefined where the statistic is NaN or infinite.
func Jackknife(parts [][]int, s Statistic) (*Jackknifed, error) {
	if len(parts) < 2 {
		return nil, ErrTooFew
	}
	var all []int
	for _, p := range parts {
		all = append(all, p...)
	}
	j := &Jackknifed{Estimate: s(all), Without: make([]float64, len(parts))}
	kept := make([]int, 0, len(all))
	for i := range parts {
		kept = kept[:0]
		for k, p := range parts {
			if k != i {
				kept = append(kept, p...)
			}
		}
		j.Without[i] = s(kept)
		j.mean += j.Without[i] / float64(len(parts))
	}
	if !finite(j.Estimate) || !finite(j.mean) {
		return nil, ErrUndefined
	}
	return j, nil
}

// Error is the standard error, sqrt((n-1)/n sum (without - mean)^2).
func (j *Jackknifed) Error() float64 {
	n := float64(len(j.Without))
	sum := 0.0
	for _, t := range j.Without {
		sum += (t - j.mean) * (t - j.mean)
	}
	return math.Sqrt((n - 1) / n * sum)
}

// Bias is the estimate of bias, (n-1)(mean - estimate).
func (j *Jackknifed) Bias() float64 {
	return float64(len(j.Without)-1) * (j.mean - j.Estimate)
}

// Influence is that of each part on the estimate, (n-1)(mean - without): about
// n times what the part adds to it. It sums to zero.
func (j *Jackknifed) Influence() []float64 {
	influence := make([]float64, len(j.Without))
	for i, t := range j.Without {
		influence[i] = float64(len(j.Without)-1) * (j.mean - t)
	}
	return influence
}

// Infinitesimal is the infinitesimal jackknife (Jaeckel 1972): the influence of
// each position as the derivative of the statistic in its weight, and the
// standard error sqrt(sum influence^2)/n. The statistic is a function of
// weights that sum to 1.
func Infinitesimal(n int, s func(weights []float64) float64) (influence []float64, stderr float64, err error) {
	if n < 2 {
		return nil, 0, ErrTooFew
	}
	const step = 1e-4
	w := make([]float64, n)
	at := func(i int, e float64) float64 {
		for k := range w {
			w[k] = (1 - e) / float64(n)
		}
		w[i] += e
		return s(w)
	}
	influence = make([]float64, n)
	sum := 0.0
	for i := range influence {
		e := step / float64(n)
		influence[i] = (at(i, e) - at(i, -e)) / (2 * e)
		sum += influence[i] * influence[i]
	}
	if !finite(sum) {
		return nil, 0, ErrUndefined
	}
	return influence, math.Sqrt(sum) / float64(n), nil
}

// Acceleration is the skewness of an influence that BCa needs, sum l^3 /
// (6 (sum l^2)^(3/2)) (Efron 1987, JASA 82); 0 where there is no influence.
func Acceleration(influence []float64) float64 {
	var two, three float64
	for _, l := range influence {
		two += l * l
		three += l * l * l
	}
	if two == 0 {
		return 0
	}
	return three / (6 * math.Pow(two, 1.5))
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }
