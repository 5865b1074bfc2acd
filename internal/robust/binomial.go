package robust

import "math"

// Wilson returns the score interval for k of n with an error of z standard
// deviations (Wilson 1927, J. Am. Stat. Assoc. 22, 209):
//
//	(p + z²/2n ± z √(p(1-p)/n + z²/4n²)) / (1 + z²/n),  p = k/n
//
// n may be a sum of weights. For n = 0 it is 0 to 1.
func Wilson(k, n, z float64) (low, high float64) {
	if !(n > 0) {
		return 0, 1
	}
	p := k / n
	middle := (p + z*z/(2*n)) / (1 + z*z/n)
	half := z * math.Sqrt(math.Max(0, p*(1-p))/n+z*z/(4*n*n)) / (1 + z*z/n)
	low, high = math.Max(0, middle-half), math.Min(1, middle+half)
	// Rounding must not leave a hair at the ends.
	if k <= 0 {
		low = 0
	}
	if k >= n {
		high = 1
	}
	return low, high
}
