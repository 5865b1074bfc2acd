package robust

import (
	"errors"
	"math"
)

// ErrSingular says that a fit's normal equations have no unique solution: too
// few points, or terms that depend on each other.
var ErrSingular = errors.New("robust: the fit has no unique solution: too few points or dependent terms")

// Fit is a robust linear fit.
type Fit struct {
	Coefficients []float64
	Sigma        float64 // robust standard deviation of the weighted residuals, √weight·(y − model)
	Rounds       int
	Kept         int // points with a weight above zero in the last round
}

// LinearFit solves y ≈ Σ coefficient_k · design[i*terms+k] for the
// coefficients with Tukey's biweight: points further than c robust standard
// deviations of the residuals have no influence; 4.685 is the usual c (95 %
// efficient for Gaussian errors; Holland & Welsch 1977, Comm. Stat. A6, 813).
// weight is the inverse variance of each y on any scale, or nil for equal
// weights. The first rounds pull wild points in by Huber's weights, whose
// problem is convex, before points lose all influence. Points with NaN in
// weight, or NaN or an infinity in y, are left out. Residuals that are zero for
// more than half of the points end the rounds.
func LinearFit(design []float64, terms int, y, weight []float64, c float64, rounds int) (Fit, error) {
	n := len(y)
	if len(design) != n*terms || (weight != nil && len(weight) != n) {
		panic("robust: LinearFit: lengths of design, y and weight do not agree")
	}
	root := make([]float64, n)
	for i := range root {
		root[i] = 1
		if weight != nil {
			root[i] = math.Sqrt(weight[i])
		}
		if y[i] != y[i] || root[i] != root[i] || math.IsInf(y[i], 0) {
			root[i] = 0
		}
	}
	influence := make([]float64, n)
	residual := make([]float64, 0, n)
	scratch := make([]float64, 0, n)
	f := Fit{Coefficients: make([]float64, terms)}
	normal := make([]float64, terms*terms)
	right := make([]float64, terms)
	for i := range influence {
		influence[i] = 1
	}
	for r := 1; r <= rounds; r++ {
		clear(normal)
		clear(right)
		f.Kept = 0
		for i := 0; i < n; i++ {
			w := influence[i] * root[i] * root[i]
			if !(w > 0) {
				continue
			}
			f.Kept++
			row := design[i*terms : (i+1)*terms]
			for a, va := range row {
				for b := 0; b <= a; b++ {
					normal[a*terms+b] += w * va * row[b]
				}
				right[a] += w * va * y[i]
			}
		}
		if f.Kept < terms || !cholesky(normal, right, terms) {
			return f, ErrSingular
		}
		change := 0.0
		for k, v := range right {
			change = max(change, math.Abs(v-f.Coefficients[k])/(math.Abs(v)+1e-300))
			f.Coefficients[k] = v
		}
		f.Rounds = r
		residual = residual[:0]
		for i := 0; i < n; i++ {
			if root[i] == 0 {
				continue
			}
			m := 0.0
			for k, v := range design[i*terms : (i+1)*terms] {
				m += v * f.Coefficients[k]
			}
			residual = append(residual, root[i]*(y[i]-m))
		}
		scratch = append(scratch[:0], residual...)
		for i, v := range scratch {
			scratch[i] = math.Abs(v)
		}
		f.Sigma = GaussianMAD * Median(scratch) * math.Sqrt(float64(len(residual))/float64(max(1, len(residual)-terms)))
		if !(f.Sigma > 0) || (r > 2 && change < 1e-10) {
			break
		}
		k := 0
		for i := 0; i < n; i++ {
			if root[i] == 0 {
				continue
			}
			u := math.Abs(residual[k]) / f.Sigma
			k++
			switch {
			case r <= 2: // Huber: bounded pull, still convex
				influence[i] = min(1, 1.345/u)
			case u < c:
				influence[i] = (1 - u*u/(c*c)) * (1 - u*u/(c*c))
			default:
				influence[i] = 0
			}
		}
	}
	return f, nil
}

// cholesky solves a·x = b in place for a symmetric positive definite a given
// by its lower triangle (n×n, row order). It reports false when a pivot
// vanishes against its diagonal.
func cholesky(a, b []float64, n int) bool {
	for i := 0; i < n; i++ {
		for j := 0; j <= i; j++ {
			s := a[i*n+j]
			for k := 0; k < j; k++ {
				s -= a[i*n+k] * a[j*n+k]
			}
			if i == j {
				if !(s > 1e-13*math.Abs(a[i*n+i])) {
					return false
				}
				a[i*n+i] = math.Sqrt(s)
			} else {
				a[i*n+j] = s / a[j*n+j]
			}
		}
	}
	for i := 0; i < n; i++ {
		for k := 0; k < i; k++ {
			b[i] -= a[i*n+k] * b[k]
		}
		b[i] /= a[i*n+i]
	}
	for i := n - 1; i >= 0; i-- {
		for k := i + 1; k < n; k++ {
			b[i] -= a[k*n+i] * b[k]
		}
		b[i] /= a[i*n+i]
	}
	return true
}
