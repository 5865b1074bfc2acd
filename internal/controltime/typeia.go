package controltime

import (
	"math"

	"nightsift/internal/supernova"
)

// TypeIa returns supernovae of type Ia: the template of package supernova, a rise
// of about 20 days, and a Gaussian spread of the stretch about 1, taken at five
// places. The slower are the brighter.
func TypeIa(peak, spread float64) *Kind {
	k := &Kind{Peak: peak, Template: Template{First: -25, Last: 120,
		Light: func(phase float64) float64 { l, _ := supernova.B.Light(phase); return l }}}
	// Places and weights of the Gauss-Hermite rule of five points (Abramowitz &
	// Stegun 1964, table 25.10), for a Gaussian of unit spread.
	places := []float64{-2.856970, -1.355626, 0, 1.355626, 2.856970}
	weights := []float64{0.011257411327721, 0.222075922005613, 0.533333333333333, 0.222075922005613, 0.011257411327721}
	if spread == 0 {
		places, weights = []float64{0}, []float64{1}
	}
	for i, p := range places {
		s := math.Max(0.6, 1+spread*p)
		k.Stretches = append(k.Stretches, s)
		k.Shares = append(k.Shares, weights[i])
		k.Fainter = append(k.Fainter, supernova.RelativePeak(supernova.B.DeltaM15(s)))
	}
	return k
}
