package psf

import "math"

// cholesky factors the symmetric n×n matrix a (row order, lower triangle read)
// in place into L with a = L·Lᵀ. It reports false if a is not positive
// definite.
func cholesky(a []float64, n int) bool {
	for j := range n {
		rj := a[j*n : j*n+n]
		d := rj[j]
		for _, v := range rj[:j] {
			d -= v * v
		}
		if !(d > 0) || math.IsInf(d, 0) {
			return false
		}
		d = math.Sqrt(d)
		rj[j] = d
		for i := j + 1; i < n; i++ {
			ri := a[i*n : i*n+n]
			s := ri[j]
			for k, v := range rj[:j] {
				s -= ri[k] * v
			}
			ri[j] = s / d
		}
	}
	return true
}

// choleskySolve solves L·Lᵀ x = b in place, with L from cholesky.
func choleskySolve(l []float64, n int, b []float64) {
	for i := range n {
		s := b[i]
		for k, v := range l[i*n : i*n+i] {
			s -= v * b[k]
		}
		b[i] = s / l[i*n+i]
	}
	for i := n - 1; i >= 0; i-- {
		s := b[i]
		for k := i + 1; k < n; k++ {
			s -= l[k*n+i] * b[k]
		}
		b[i] = s / l[i*n+i]
	}
}

// choleskyInverse returns the inverse of L·Lᵀ as a full matrix.
func choleskyInverse(l []float64, n int) []float64 {
	inv := make([]float64, n*n)
	col := make([]float64, n)
	for j := range n {
		clear(col)
		col[j] = 1
		choleskySolve(l, n, col)
		for i := range n {
			inv[i*n+j] = col[i]
		}
	}
	return inv
}

// banded is a symmetric n×n matrix of which the elements with i-band <= j <= i
// are kept: element (i,j) is v[i*(band+1)+j-i+band].
type banded struct {
	n, band int
	v       []float64
}

func newBanded(n, band int) *banded {
	return &banded{n: n, band: band, v: make([]float64, n*(band+1))}
}

// row returns the kept part of row i; its last element is the diagonal.
func (b *banded) row(i int) []float64 { return b.v[i*(b.band+1) : (i+1)*(b.band+1)] }

// factor replaces the matrix by its Cholesky factor; false if not positive
// definite.
func (b *banded) factor() bool {
	w := b.band
	for i := range b.n {
		ri := b.row(i)
		lo := max(0, i-w)
		for j := lo; j < i; j++ {
			rj := b.row(j)
			// Common columns from k0 to j-1.
			k0 := max(lo, j-w)
			x := ri[k0-i+w : j-i+w]
			y := rj[k0-j+w:]
			y = y[:len(x)]
			var s0, s1, s2, s3 float64
			k := 0
			for ; k+4 <= len(x); k += 4 {
				s0 += x[k] * y[k]
				s1 += x[k+1] * y[k+1]
				s2 += x[k+2] * y[k+2]
				s3 += x[k+3] * y[k+3]
			}
			for ; k < len(x); k++ {
				s0 += x[k] * y[k]
			}
			ri[j-i+w] = (ri[j-i+w] - (s0 + s1 + s2 + s3)) / rj[w]
		}
		d := ri[w]
		for _, v := range ri[lo-i+w : w] {
			d -= v * v
		}
		if !(d > 0) || math.IsInf(d, 0) {
			return false
		}
		ri[w] = math.Sqrt(d)
	}
	return true
}

// solve solves in place after factor.
func (b *banded) solve(x []float64) {
	w := b.band
	for i := range b.n {
		ri := b.row(i)
		s := x[i]
		for j := max(0, i-w); j < i; j++ {
			s -= ri[j-i+w] * x[j]
		}
		x[i] = s / ri[w]
	}
	for i := b.n - 1; i >= 0; i-- {
		ri := b.row(i)
		x[i] /= ri[w]
		xi := x[i]
		for j := max(0, i-w); j < i; j++ {
			x[j] -= ri[j-i+w] * xi
		}
	}
}

// quadratic returns xᵀ B x.
func (b *banded) quadratic(x []float64) float64 {
	w := b.band
	var sum float64
	for i := range b.n {
		ri := b.row(i)
		var s float64
		for j := max(0, i-w); j < i; j++ {
			s += ri[j-i+w] * x[j]
		}
		sum += x[i] * (2*s + ri[w]*x[i])
	}
	return sum
}

// terms is the number of monomials of two variables up to a total order.
func terms(order int) int { return (order + 1) * (order + 2) / 2 }

// monomials writes 1, X, Y, X², XY, Y², X³, … up to the order into dst.
func monomials(dst []float64, x, y float64, order int) {
	k := 0
	for o := 0; o <= order; o++ {
		for b := 0; b <= o; b++ {
			v := 1.0
			for range o - b {
				v *= x
			}
			for range b {
				v *= y
			}
			dst[k] = v
			k++
		}
	}
}
