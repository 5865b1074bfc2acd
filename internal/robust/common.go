package robust

import (
	"math"
	"slices"
)

// Common returns the value that the constant ones among n quantities share,
// where others may have any value, and may be the more.
//
// Each value is taken to be either the common one, measured with its error
// errs (1 sigma) and a scatter that all have, or to come from a broad uniform
// distribution; centre, scatter and the share of the latter are those of the
// largest likelihood (a mixture model, maximised by the EM algorithm: Dempster,
// Laird & Rubin 1977, J. R. Stat. Soc. B 39, 1). scatter is not below least.
// sigma is the 1 sigma error of centre; members is the number of values that
// rather belong to it than not. Without any finite value with a positive error, centre, sigma and
// scatter are NaN.
//
// values and errs are only read; the work is proportional to their number.
func Common(values, errs []float64, least float64) (centre, sigma, scatter float64, members int) {
	var v, e []float64
	for i, x := range values {
		if x-x == 0 && errs[i] > 0 && errs[i]-errs[i] == 0 {
			v, e = append(v, x), append(e, errs[i])
		}
	}
	n := len(v)
	if n == 0 {
		return math.NaN(), math.NaN(), math.NaN(), 0
	}
	sorted := slices.Clone(v)
	slices.Sort(sorted)
	typical := slices.Clone(e)
	slices.Sort(typical)
	width := math.Max(4*(sorted[n-1]-sorted[0]), 10*math.Max(least, typical[n/2]))
	broad := 1 / width
	const starts = 9
	best := math.Inf(-1)
	share := make([]float64, n)
	try := func(c, s float64) (float64, float64) {
		f := 0.3
		like := math.Inf(-1)
		for range 25 {
			before := like
			like = 0
			var sw, swv, in float64
			for i, x := range v {
				s2 := e[i]*e[i] + s*s
				d := x - c
				p := (1 - f) * math.Exp(-d*d/(2*s2)) / math.Sqrt(2*math.Pi*s2)
				q := f * broad
				like += math.Log(p + q)
				share[i] = p / (p + q)
				in += share[i]
				sw += share[i] / s2
				swv += share[i] / s2 * x
			}
			if !(sw > 0) {
				return c, like
			}
			c = swv / sw
			// Never wholly one or the other, as if one value of each kind had been seen before.
			f = (float64(n) - in + 1) / float64(n+2)
			if like-before < 1e-5*math.Abs(like) {
				break
			}
		}
		return c, like
	}
	for s := least; s < width/8; s *= 1.8 {
		last := math.NaN()
		for k := range starts {
			from := sorted[(2*k+1)*n/(2*starts)]
			if from == last {
				continue
			}
			last = from
			if c, like := try(from, s); like > best {
				best, centre, scatter = like, c, s
			}
		}
	}
	try(centre, scatter)
	var sw float64
	for i := range v {
		sw += share[i] / (e[i]*e[i] + scatter*scatter)
		if share[i] > 0.5 {
			members++
		}
	}
	return centre, 1 / math.Sqrt(sw), scatter, members
}
