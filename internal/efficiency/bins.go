package efficiency

import (
	"math"
	"slices"
)

// Against is a property of sources with which the recovered fraction changes.
type Against struct {
	Name, Unit, Description string
	Value                   func(*Injection) float64
	edges                   func(values []float64) []float64
	leastSN                 float64 // sources with less signal to noise do not count
}

// brightSN is the signal to noise on empty sky from which on sources show what
// hosts and places on the chip take away, not what the sky's noise does.
const brightSN = 8

// Properties lists what recovered fractions are given against.
var Properties = []Against{
	{"magnitude", "mag", "magnitude of the source", func(s *Injection) float64 { return s.Mag }, evenEdges(0.25), 0},
	{"relative_magnitude", "mag", "magnitude relative to the frame's limit of five sigma", func(s *Injection) float64 { return s.Relative }, evenEdges(0.25), 0},
	{"signal_to_noise", "", "signal to noise on empty sky", func(s *Injection) float64 { return s.SN },
		func([]float64) []float64 { return []float64{0, 3, 4, 5, 6, 7, 8, 10, 13, 18, 25, 40, 70, 150} }, 0},
	{"host_brightness", "mag/arcsec2", "surface brightness of the reference under sources of S/N 8 and more", func(s *Injection) float64 { return s.HostBrightness },
		quantileEdges(8), brightSN},
	{"host_light", "count/pixel", "light of the reference under sources of S/N 8 and more", func(s *Injection) float64 { return s.HostLight },
		quantileEdges(8), brightSN},
	{"chip_x", "", "place along x, 0 to 1, of sources of S/N 8 and more", func(s *Injection) float64 { return s.U },
		func([]float64) []float64 { return []float64{0, 0.125, 0.25, 0.375, 0.5, 0.625, 0.75, 0.875, 1} }, brightSN},
	{"chip_y", "", "place along y, 0 to 1, of sources of S/N 8 and more", func(s *Injection) float64 { return s.V },
		func([]float64) []float64 { return []float64{0, 0.125, 0.25, 0.375, 0.5, 0.625, 0.75, 0.875, 1} }, brightSN},
}

// evenEdges gives edges at multiples of a step.
func evenEdges(step float64) func([]float64) []float64 {
	return func(values []float64) []float64 {
		if len(values) == 0 {
			return nil
		}
		first, last := math.Floor(slices.Min(values)/step), math.Floor(slices.Max(values)/step)+1
		var edges []float64
		for k := first; k <= last; k++ {
			edges = append(edges, k*step)
		}
		return edges
	}
}

// quantileEdges gives edges between n groups of equal number.
func quantileEdges(n int) func([]float64) []float64 {
	return func(values []float64) []float64 {
		if len(values) == 0 {
			return nil
		}
		v := slices.Clone(values)
		slices.Sort(v)
		edges := []float64{v[0]}
		for k := 1; k < n; k++ {
			if e := v[k*len(v)/n]; e > edges[len(edges)-1] {
				edges = append(edges, e)
			}
		}
		return append(edges, math.Nextafter(v[len(v)-1], math.Inf(1)))
	}
}

// Bin is the recovered fraction in a range of a property.
type Bin struct {
	Against         string
	Low, High       float64 // the value is at least Low and less than High
	Mean            float64 // of the sources in it
	Injected, Found int
	Fraction        float64
	// The intervals at the confidence of one sigma, OneSigma.
	WilsonLow, WilsonHigh float64
	ExactLow, ExactHigh   float64 // Clopper & Pearson
	Lost                  map[Fate]int
}

// Bins returns the recovered fractions against a property, without empty bins.
// Sources for which it is unknown do not count.
func (a *Against) Bins(list []Injection) []Bin {
	var values []float64
	var use []*Injection
	for i := range list {
		if v := a.Value(&list[i]); !math.IsNaN(v) && !math.IsInf(v, 0) && list[i].SN >= a.leastSN {
			values, use = append(values, v), append(use, &list[i])
		}
	}
	edges := a.edges(values)
	if len(edges) < 2 {
		return nil
	}
	bins := make([]Bin, len(edges)-1)
	for k := range bins {
		bins[k] = Bin{Against: a.Name, Low: edges[k], High: edges[k+1], Lost: map[Fate]int{}}
	}
	for i, s := range use {
		k, exact := slices.BinarySearch(edges, values[i])
		if !exact {
			k--
		}
		if k < 0 || k >= len(bins) {
			continue
		}
		b := &bins[k]
		b.Injected++
		b.Mean += values[i]
		if s.Fate == Found {
			b.Found++
		} else {
			b.Lost[s.Fate]++
		}
	}
	out := bins[:0]
	for _, b := range bins {
		if b.Injected == 0 {
			continue
		}
		b.Mean /= float64(b.Injected)
		b.Fraction = float64(b.Found) / float64(b.Injected)
		b.WilsonLow, b.WilsonHigh = Wilson(b.Found, b.Injected, OneSigma)
		b.ExactLow, b.ExactHigh = ClopperPearson(b.Found, b.Injected, OneSigma)
		out = append(out, b)
	}
	return out
}

// Count tells how many sources met each fate.
func Count(list []Injection) map[Fate]int {
	m := map[Fate]int{}
	for i := range list {
		m[list[i].Fate]++
	}
	return m
}
