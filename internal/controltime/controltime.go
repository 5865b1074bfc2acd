// Package controltime says for how long a survey watched a field for supernovae,
// and how many it should have found.
//
// The control time of a survey for an object of known light curve is the time
// during which such an object, had it appeared, would have been found (Zwicky
// 1938, ApJ 88, 529; with efficiencies between 0 and 1 as in Cappellaro et al.
// 1997, A&A 322, 431):
//
//	T(z) = ∫ P(t₀, z) dt₀
//
// over all dates t₀ of the maximum. P is the chance that at least k of the visits
// find it. A visit i at date t_i, with the efficiency ε_i(m) of its frame, does so
// with the chance ε_i(m(t_i)), independent of the others, and
//
//	m(t) = M + μ(z) − 2.5 log L((t − t₀)/(s(1+z)))
//
// with M the absolute magnitude at the maximum, μ the distance modulus of a flat
// universe, L the light relative to the maximum and s the stretch of the time
// axis. Rates hold for the supernovae's own time, so that a rate r for each galaxy
// and year gives N = n r T/(1+z) events in n galaxies, and a rate R for each cubic
// megaparsec (comoving) and year gives
//
//	N = Ω ∫ R(z) T(z)/(1+z) dV/(dΩ dz) dz.
//
// Neither dust nor K-corrections are applied.
package controltime

import (
	"math"
	"sort"

	"nightsift/internal/cosmology"
)

// DaysInYear is the Julian year.
const DaysInYear = 365.25

// Visit is one searched frame of a field.
type Visit struct {
	MJD        float64                   // d, middle of the exposure
	Efficiency func(mag float64) float64 // fraction of sources that is found, 0 to 1
}

// Template is a light curve at stretch 1 and redshift 0.
type Template struct {
	Light       func(phase float64) float64 // relative to the maximum, which is at phase 0 [d]
	First, Last float64                     // d, phases between which it is looked at
}

// Object is a kind of supernova.
type Object struct {
	Template Template
	Stretch  float64 // of the time axis
}

// Watch is a field's visits in the order of time, with how many of them must find
// an object.
type Watch struct {
	Visits []Visit
	Needed int // 1 or more
}

// NewWatch sorts visits.
func NewWatch(visits []Visit, needed int) *Watch {
	w := &Watch{append([]Visit(nil), visits...), max(1, needed)}
	sort.SliceStable(w.Visits, func(a, b int) bool { return w.Visits[a].MJD < w.Visits[b].MJD })
	return w
}

// step is that of the integral over dates [d]: a fortieth of a rise.
const step = 0.5

// ForPeak returns the control time [d of the observer] for objects of an apparent
// magnitude at the maximum, at a redshift that only stretches the light curve.
//
// The integral is a midpoint sum over dates; steps of half a day are small against
// the light curve.
func (w *Watch) ForPeak(o Object, peakMag, z float64) float64 {
	if len(w.Visits) == 0 {
		return 0
	}
	stretch := o.Stretch * (1 + z)
	first := w.Visits[0].MJD - o.Template.Last*stretch
	last := w.Visits[len(w.Visits)-1].MJD - o.Template.First*stretch
	n := max(1, int(math.Ceil((last-first)/step)))
	width := (last - first) / float64(n)
	sum := 0.0
	chance := make([]float64, w.Needed) // of k finds so far
	for i := range n {
		t0 := first + (float64(i)+0.5)*width
		from := sort.Search(len(w.Visits), func(k int) bool { return w.Visits[k].MJD >= t0+o.Template.First*stretch })
		clear(chance)
		chance[0] = 1
		for _, v := range w.Visits[from:] {
			phase := (v.MJD - t0) / stretch
			if phase > o.Template.Last {
				break
			}
			light := o.Template.Light(phase)
			if !(light > 0) {
				continue
			}
			e := v.Efficiency(peakMag - 2.5*math.Log10(light))
			if !(e > 0) {
				continue
			}
			for k := w.Needed - 1; k > 0; k-- {
				chance[k] = chance[k]*(1-e) + chance[k-1]*e
			}
			chance[0] *= 1 - e
		}
		missed := 0.0
		for _, c := range chance {
			missed += c
		}
		sum += 1 - missed
	}
	return sum * width
}

// Kind is a population of objects: shares of stretches with their brightness.
type Kind struct {
	Template Template
	Peak     float64 // absolute magnitude at the maximum, at stretch 1
	// Stretches and their shares, which sum to 1, and by how many magnitudes each
	// is fainter than Peak.
	Stretches, Shares, Fainter []float64
}

// AtRedshift returns the control time [d of the observer] of a population.
func (w *Watch) AtRedshift(k *Kind, c cosmology.Flat, z float64) float64 {
	sum := 0.0
	for i, s := range k.Stretches {
		sum += k.Shares[i] * w.ForPeak(Object{k.Template, s}, k.Peak+k.Fainter[i]+c.Modulus(z), z)
	}
	return sum
}

// InGalaxies returns the number of events expected in galaxies at a redshift for a
// rate for each galaxy and year of its own time.
func (w *Watch) InGalaxies(k *Kind, c cosmology.Flat, z, galaxies, rate float64) float64 {
	return galaxies * rate * w.AtRedshift(k, c, z) / DaysInYear / (1 + z)
}

// InVolume returns the number of events expected on an area of the sky [sr] out to
// a redshift for a rate for each comoving Mpc³ and year, R(z) = rate·(1+z)^evolution.
// The trapezium rule in z has the number of cells given.
func (w *Watch) InVolume(k *Kind, c cosmology.Flat, area, farthest, rate, evolution float64, cells int) float64 {
	sum := 0.0
	for i := 1; i <= cells; i++ {
		z := farthest * float64(i) / float64(cells)
		weight := 1.0
		if i == cells {
			weight = 0.5
		}
		// At z = 0 there is no volume.
		sum += weight * rate * math.Pow(1+z, evolution) * w.AtRedshift(k, c, z) / DaysInYear / (1 + z) * c.VolumeElement(z)
	}
	return area * sum * farthest / float64(cells)
}
