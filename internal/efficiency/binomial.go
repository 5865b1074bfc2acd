package efficiency

import (
	"math"

	"gonum.org/v1/gonum/mathext"
	"gonum.org/v1/gonum/stat/distuv"

	"nightsift/internal/robust"
)

// OneSigma is the confidence of the intervals in tables and figures: that of one
// standard deviation of a Gaussian.
var OneSigma = math.Erf(1 / math.Sqrt2)

// Wilson returns the score interval of Wilson 1927 for k successes of n at a
// confidence between 0 and 1. Its coverage is near the confidence on average. For
// n = 0 it is 0 to 1.
func Wilson(k, n int, confidence float64) (low, high float64) {
	return robust.Wilson(float64(k), float64(n), distuv.UnitNormal.Quantile(0.5+confidence/2))
}

// ClopperPearson returns the exact interval of Clopper & Pearson 1934: its
// coverage is never below the confidence. For n = 0 it is 0 to 1.
func ClopperPearson(k, n int, confidence float64) (low, high float64) {
	low, high = 0, 1
	tail := (1 - confidence) / 2
	if n > 0 && k > 0 {
		low = mathext.InvRegIncBeta(float64(k), float64(n-k+1), tail)
	}
	if n > 0 && k < n {
		high = mathext.InvRegIncBeta(float64(k+1), float64(n-k), 1-tail)
	}
	return low, high
}
