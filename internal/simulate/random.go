package simulate

import (
	"math"
	"math/rand/v2"
)

// stream returns a generator for one purpose. Streams of one seed with
// different salts are independent.
func stream(seed uint64, salt ...uint64) *rand.Rand {
	h := mix(seed)
	for _, s := range salt {
		h = mix(h ^ mix(s+0x9e3779b97f4a7c15))
	}
	return rand.New(rand.NewPCG(h, mix(h+1)))
}

// mix is the finaliser of SplitMix64 (Steele, Lea & Flood 2014).
func mix(z uint64) uint64 {
	z += 0x9e3779b97f4a7c15
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}

// poisson draws a Poisson number of mean mu. Small means use multiplication of
// uniforms, larger ones the transformed rejection with squeeze of Hörmann (1993,
// Insurance: Mathematics and Economics 12, 39). A mean that is not positive
// gives 0.
func poisson(r *rand.Rand, mu float64) float64 {
	if !(mu > 0) {
		return 0
	}
	if mu < 12 {
		limit, p, k := math.Exp(-mu), r.Float64(), 0.0
		for p > limit {
			p *= r.Float64()
			k++
		}
		return k
	}
	b := 0.931 + 2.53*math.Sqrt(mu)
	a := -0.059 + 0.02483*b
	vr := 0.9277 - 3.6224/(b-2)
	for {
		u := r.Float64() - 0.5
		v := r.Float64()
		us := 0.5 - math.Abs(u)
		k := math.Floor((2*a/us+b)*u + mu + 0.43)
		if us >= 0.07 && v <= vr {
			return k
		}
		if k < 0 || us < 0.013 && v > us {
			continue
		}
		lg, _ := math.Lgamma(k + 1)
		invAlpha := 1.1239 + 1.1328/(b-3.4)
		if math.Log(v*invAlpha/(a/(us*us)+b)) <= k*math.Log(mu)-mu-lg {
			return k
		}
	}
}

// uniform draws from [lo, hi).
func uniform(r *rand.Rand, lo, hi float64) float64 { return lo + (hi-lo)*r.Float64() }

// logUniform draws a positive number whose logarithm is uniform.
func logUniform(r *rand.Rand, lo, hi float64) float64 {
	return lo * math.Pow(hi/lo, r.Float64())
}
