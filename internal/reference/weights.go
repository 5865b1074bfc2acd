package reference

import (
	"math"
)

// depths compares the two ways to add frames of known point-spread functions
// and noise.
type depths struct {
	weights []float64 // of the best mean, sum 1
	mean    float64   // signal to noise squared of a point source of one count
	proper  float64
	best    float64 // of the best single frame
}

// predict finds the weights with which a mean of frames shows a point source
// best when it is searched with the point-spread function of that mean, and
// what that reaches. overlap[i][j] is Σ P_i P_j, variance[i] the variance of a
// pixel, all at one scale of fluxes.
//
// The first eigenvector of a matrix of positive elements is positive (Perron);
// it is found by power iteration.
func predict(overlap [][]float64, variance []float64) depths {
	n := len(variance)
	var d depths
	a := make([][]float64, n)
	for i := range n {
		a[i] = make([]float64, n)
		for j := range n {
			a[i][j] = overlap[i][j] / math.Sqrt(variance[i]*variance[j])
		}
		d.proper += a[i][i]
		d.best = max(d.best, a[i][i])
	}
	u := make([]float64, n)
	for i := range u {
		u[i] = 1 / math.Sqrt(variance[i])
	}
	next := make([]float64, n)
	for range 500 {
		norm := 0.0
		for i := range n {
			next[i] = 0
			for j := range n {
				next[i] += a[i][j] * u[j]
			}
			norm += next[i] * next[i]
		}
		norm = math.Sqrt(norm)
		change := 0.0
		for i := range n {
			next[i] /= norm
			change = max(change, math.Abs(next[i]-u[i]))
		}
		u, next = next, u
		d.mean = norm
		if change < 1e-12 {
			break
		}
	}
	d.weights = make([]float64, n)
	sum := 0.0
	for i := range n {
		d.weights[i] = u[i] / math.Sqrt(variance[i])
		sum += d.weights[i]
	}
	for i := range n {
		d.weights[i] /= sum
	}
	return d
}

// dot is the sum of products.
func dot(a, b []float32) float64 {
	s := 0.0
	for i, v := range a {
		s += float64(v) * float64(b[i])
	}
	return s
}
