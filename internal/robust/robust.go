// Package robust holds statistics that a few wild values do not disturb:
// order statistics, clipped moments, biweights and robust linear fits.
//
// The rule for NaN, everywhere in this package: NaN values are left out, as if
// they were not in the sample. Infinite values are ordinary, very wild values.
// A statistic of an empty sample is NaN.
//
// Functions keep no state: any number of goroutines may call them, each on its
// own slices.
package robust

import (
	"math"
	"math/bits"
)

// Float is a sample's element type. Sums are always float64.
type Float interface{ ~float32 | ~float64 }

// GaussianMAD is the standard deviation of a Gaussian in units of its median
// absolute deviation, 1/Φ⁻¹(3/4).
const GaussianMAD = 1.482602218505602

// DropNaN moves the values of x that are numbers to its front, in order, and
// returns that front part. It shares x's memory.
func DropNaN[T Float](x []T) []T {
	n := 0
	for _, v := range x {
		if v == v {
			x[n] = v
			n++
		}
	}
	return x[:n]
}

// Select returns the k-th smallest value (k from 0) and reorders x so that no
// value before place k is larger and none behind it smaller. x must not hold
// NaN. Expected time is linear (Hoare 1961, CACM 4, 321; pivot: median of
// three); on an input that defeats the pivots it falls back to a heap, so the
// worst case is n log n.
func Select[T Float](x []T, k int) T {
	if k < 0 || k >= len(x) {
		panic("robust: Select: k out of range")
	}
	lo, hi := 0, len(x)-1
	budget := 4 * bits.Len(uint(len(x)))
	for hi-lo > 12 {
		if budget--; budget < 0 {
			heapSelect(x[lo:hi+1], k-lo)
			return x[k]
		}
		mid := int(uint(lo+hi) >> 1)
		a, b, c := x[lo], x[mid], x[hi]
		if a > b {
			a, b = b, a
		}
		if b > c {
			b = c
		}
		if a > b {
			b = a
		}
		pivot := b
		i, j := lo, hi
		for i <= j {
			for x[i] < pivot {
				i++
			}
			for x[j] > pivot {
				j--
			}
			if i <= j {
				x[i], x[j] = x[j], x[i]
				i++
				j--
			}
		}
		switch {
		case k <= j:
			hi = j
		case k >= i:
			lo = i
		default:
			return x[k]
		}
	}
	for i := lo + 1; i <= hi; i++ {
		v := x[i]
		j := i - 1
		for j >= lo && x[j] > v {
			x[j+1] = x[j]
			j--
		}
		x[j+1] = v
	}
	return x[k]
}

// heapSelect sorts x by heap sort; k is then in its place.
func heapSelect[T Float](x []T, k int) {
	down := func(i, n int) {
		for {
			c := 2*i + 1
			if c >= n {
				return
			}
			if c+1 < n && x[c+1] > x[c] {
				c++
			}
			if x[i] >= x[c] {
				return
			}
			x[i], x[c] = x[c], x[i]
			i = c
		}
	}
	for i := len(x)/2 - 1; i >= 0; i-- {
		down(i, len(x))
	}
	for n := len(x) - 1; n > 0; n-- {
		x[0], x[n] = x[n], x[0]
		down(0, n)
	}
}

// Median returns the median, the mean of the two middle values for an even
// number. It reorders x.
func Median[T Float](x []T) float64 {
	x = DropNaN(x)
	n := len(x)
	if n == 0 {
		return math.NaN()
	}
	m := Select(x, n/2)
	if n%2 == 1 {
		return float64(m)
	}
	below := x[0]
	for _, v := range x[1 : n/2] {
		if v > below {
			below = v
		}
	}
	return middle(float64(below), float64(m))
}

func middle(a, b float64) float64 {
	if a == b { // also for equal infinities
		return a
	}
	return a + (b-a)/2
}

// MedianOf is Median on a copy: x stays as it is. scratch is used if it is
// large enough and may be nil.
func MedianOf[T Float](x, scratch []T) float64 {
	return Median(append(scratch[:0], x...))
}

// MedianMAD returns the median and the Gaussian-equivalent standard deviation
// GaussianMAD·median|x−median|. It overwrites x. For a sample more than half
// of which is one value the second result is 0.
func MedianMAD[T Float](x []T) (median, sigma float64) {
	x = DropNaN(x)
	median = Median(x)
	for i, v := range x {
		x[i] = T(math.Abs(float64(v) - median))
	}
	return median, GaussianMAD * Median(x)
}

// Percentile returns the p-th percentile, p in 0…100, by linear interpolation
// between order statistics at (n−1)·p/100. It reorders x.
func Percentile[T Float](x []T, p float64) float64 {
	x = DropNaN(x)
	n := len(x)
	if n == 0 || !(p >= 0 && p <= 100) {
		return math.NaN()
	}
	place := float64(n-1) * p / 100
	k := int(place)
	v := float64(Select(x, k))
	f := place - float64(k)
	if f == 0 || k+1 >= n {
		return v
	}
	above := x[k+1]
	for _, w := range x[k+2:] {
		if w < above {
			above = w
		}
	}
	return v + f*(float64(above)-v)
}

// Clipped is the result of clipping a sample.
type Clipped struct {
	Mean   float64
	Std    float64 // freed from the truncation bias for Gaussian data; n−1 in the denominator
	N      int     // values kept
	Rounds int     // rounds until nothing changed, or the limit
}

// ClipFactor returns the standard deviation of a unit Gaussian cut at ±k:
// sqrt(1 − 2kφ(k)/(2Φ(k)−1)). Dividing by it frees a clipped standard
// deviation from its bias.
func ClipFactor(k float64) float64 {
	if k <= 0 {
		return math.NaN()
	}
	phi := math.Exp(-k*k/2) / math.Sqrt(2*math.Pi)
	return math.Sqrt(1 - 2*k*phi/math.Erf(k/math.Sqrt2))
}

// Clip returns mean and standard deviation of the values within ±k sigma,
// repeated with the new mean and sigma until nothing changes or rounds are
// used up. It starts from median and MAD. Each round's sigma is divided by
// ClipFactor(k), so that Gaussian data give their own sigma without bias. If
// the MAD is zero (more than half of the values equal) the first sigma is
// that of all finite values. x stays as it is; scratch may be nil.
func Clip[T Float](x, scratch []T, k float64, rounds int) Clipped {
	scratch = append(scratch[:0], x...)
	centre, sigma := MedianMAD(scratch)
	if sigma == 0 {
		var n, s float64
		for _, v := range x {
			d := float64(v) - centre
			if d-d == 0 {
				n++
				s += d * d
			}
		}
		if n > 0 {
			sigma = math.Sqrt(s / n)
		}
	}
	return ClipFrom(x, centre, sigma, k, rounds)
}

// ClipFrom is Clip with a centre and sigma to start from, which saves the
// order statistics. If no value lies within ±k sigma the result has N = 0 and
// NaN for mean and sigma.
func ClipFrom[T Float](x []T, centre, sigma, k float64, rounds int) Clipped {
	factor := ClipFactor(k)
	c := Clipped{Mean: math.NaN(), Std: math.NaN()}
	for r := 1; r <= rounds; r++ {
		limit := k * sigma
		var sum, sq float64
		n := 0
		for _, v := range x {
			d := float64(v) - centre
			if d >= -limit && d <= limit {
				sum += d
				sq += d * d
				n++
			}
		}
		if n == 0 {
			return Clipped{Mean: math.NaN(), Std: math.NaN(), Rounds: r}
		}
		m := sum / float64(n)
		std := 0.0
		if n > 1 {
			std = math.Sqrt(max(0, (sq-sum*m)/float64(n-1))) / factor
		}
		same := n == c.N && r > 1
		c = Clipped{Mean: centre + m, Std: std, N: n, Rounds: r}
		if same || std == 0 {
			break
		}
		centre, sigma = c.Mean, std
	}
	return c
}

// Biweight returns Tukey's biweight location with tuning constant c and the
// biweight scale (square root of the biweight midvariance) with tuning
// constant 9; the usual c is 6 (Beers, Flynn & Gebhardt 1990, AJ 100, 32,
// their equations 5 and 9). If the MAD is zero the location is the median and
// the scale 0. x stays as it is; scratch may be nil.
func Biweight[T Float](x, scratch []T, c float64) (location, scale float64) {
	scratch = append(scratch[:0], x...)
	m, sigma := MedianMAD(scratch)
	mad := sigma / GaussianMAD
	if !(mad > 0) {
		if m != m {
			return m, math.NaN()
		}
		return m, 0
	}
	var num, den, vn, vd float64
	n := 0
	for _, v := range x {
		d := float64(v) - m
		if d != d {
			continue
		}
		n++
		u := d / (c * mad)
		if u > -1 && u < 1 {
			w := (1 - u*u) * (1 - u*u)
			num += w * d
			den += w
		}
		u = d / (9 * mad)
		if u > -1 && u < 1 {
			w := 1 - u*u
			vn += d * d * w * w * w * w
			vd += w * (1 - 5*u*u)
		}
	}
	return m + num/den, math.Sqrt(float64(n)*vn) / math.Abs(vd)
}
