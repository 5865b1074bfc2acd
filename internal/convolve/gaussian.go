package convolve

import (
	"fmt"
	"math"
)

// Gaussian returns a normalised Gaussian of the given standard deviation [px],
// integrated over pixels (differences of the error function, not samples), cut
// at the given radius [px]. Its length is 2·radius+1 and its sum is 1. It
// panics unless sigma is positive and radius is not negative.
func Gaussian(sigma float64, radius int) []float32 {
	if !(sigma > 0) || radius < 0 {
		panic(fmt.Sprintf("convolve: Gaussian of sigma %g and radius %d: want sigma > 0, radius >= 0", sigma, radius))
	}
	k := make([]float64, 2*radius+1)
	var sum float64
	for i := range k {
		x := float64(i - radius)
		k[i] = math.Erf((x+0.5)/(sigma*math.Sqrt2)) - math.Erf((x-0.5)/(sigma*math.Sqrt2))
		sum += k[i]
	}
	out := make([]float32, len(k))
	for i := range k {
		out[i] = float32(k[i] / sum)
	}
	return out
}
