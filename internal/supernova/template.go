// Package supernova fits light curves with a template of supernovae of type Ia
// and gives date and brightness of the maximum, and how slow the decline is.
//
// # Template
//
// At a time τ [d] since the explosion, in the supernova's own time and for
// stretch 1, the light in a band is
//
//	L(τ) = (τ/19.5)² exp(−(τ/a)^b) + w (1 − exp(−(τ/c)^k)) exp(−τ/T)
//
// the expanding fireball, ∝ τ² at first (Riess et al. 1999, AJ 118, 2675), that
// becomes transparent, and the tail of radioactive decay. The five or six
// constants of each band are chosen so that L is largest 19.5 days after the
// explosion and follows the mean course of ordinary objects: for B a decline of
// 1.10 mag within the 15 days after the maximum, 2.6 mag after 30 days and then
// 0.016 mag a day; for V 0.65 mag and a shoulder. These courses are common
// practice and were written down from memory, to about 0.1 mag; the form and its
// constants are this project's own. K-corrections are not applied: a filter is
// taken for the band whose light it receives.
//
// # Width and brightness
//
// The time axis is multiplied by the stretch s (Perlmutter et al. 1997, ApJ 483,
// 565) and by 1+z. Δm15, the magnitudes lost in B within the 15 days after the
// maximum, follows from s and the template. The slower are the brighter
// (Phillips 1993, ApJ 413, L105); the coefficients used are those of Phillips et
// al. 1999 (AJ 118, 1766), see RelativePeak.
package supernova

import "math"

// Rise is the time [d] from the explosion to the maximum at stretch 1.
const Rise = 19.5

// Band is one of the template's bands.
type Band int

// The bands.
const (
	B Band = iota
	V
)

// Bands names the bands in order.
var Bands = []string{"B", "V"}

// shape holds the constants of a band.
type shape struct{ a, b, w, c, k, t float64 }

var shapes = [...]shape{
	B: {a: 20.312, b: 2.2233, w: 0.07089, c: 15.741, k: 6.363, t: 70},
	V: {a: 21.273, b: 2.6159, w: 0.46567, c: 29.609, k: 9.857, t: 32.596},
}

// light returns L and its derivative with τ.
func (s *shape) light(tau float64) (l, dl float64) {
	if tau <= 0 {
		return 0, 0
	}
	u := tau / Rise
	q := math.Pow(tau/s.a, s.b)
	fire := u * u * math.Exp(-q)
	g := math.Pow(tau/s.c, s.k)
	e := math.Exp(-g)
	tail := s.w * math.Exp(-tau/s.t)
	l = fire + tail*(1-e)
	dl = fire*(2-s.b*q)/tau + tail*(e*s.k*g/tau-(1-e)/s.t)
	return l, dl
}

// peak is where and how bright the bands' maxima are.
var peak = func() (p [len(shapes)]struct{ at, light float64 }) {
	for i := range shapes {
		lo, hi := Rise-5, Rise+5 // the derivative changes sign once in between
		for range 60 {
			mid := (lo + hi) / 2
			if _, d := shapes[i].light(mid); d > 0 {
				lo = mid
			} else {
				hi = mid
			}
		}
		p[i].at = (lo + hi) / 2
		p[i].light, _ = shapes[i].light(p[i].at)
	}
	return p
}()

// Light returns the light in a band, 1 at its maximum, and its derivative [1/d]
// at a phase [d] of stretch 1 from the maximum. It is 0 before the explosion.
func (b Band) Light(phase float64) (light, slope float64) {
	p := peak[b]
	l, d := shapes[b].light(phase + p.at)
	return l / p.light, d / p.light
}

// DeltaM15 returns Δm15 [mag] of the band for a stretch.
func (b Band) DeltaM15(stretch float64) float64 {
	l, _ := b.Light(15 / stretch)
	return -2.5 * math.Log10(l)
}

// StandardDeltaM15 is Δm15(B) of an ordinary object, to which RelativePeak refers.
const StandardDeltaM15 = 1.1

// StandardPeak is the absolute magnitude in B of an ordinary object at the
// maximum for H0 = 70 km/s/Mpc, without dust, a round value of common practice
// (five billion suns).
const StandardPeak = -19.5

// RelativePeak returns by how many magnitudes the maximum in B is fainter than
// StandardPeak: 0.786 (Δm15−1.1) + 0.633 (Δm15−1.1)² (Phillips et al. 1999, AJ
// 118, 1766, their section 5; coefficients from memory). It holds for Δm15 of
// 0.85 to 1.7 mag.
func RelativePeak(deltaM15 float64) float64 {
	d := deltaM15 - StandardDeltaM15
	return 0.786*d + 0.633*d*d
}
