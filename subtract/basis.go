package subtract

import "math"

// A basis is the set of functions whose weighted sum is the matching kernel
// (Alard & Lupton 1998, ApJ 503, 325, section 2): Gaussians times polynomials
// u^p v^q with p+q up to a degree, and one single pixel. Each is a square of
// side 2·half+1 pixels.
//
// Element 0 sums to one and all others sum to zero, so that the coefficient of
// element 0 alone is the kernel's sum, the photometric scale.
type basis struct {
	half  int
	terms []basisTerm
	// x and y hold the one-dimensional factors: terms[k] is the outer product
	// of y[terms[k].column] and x[terms[k].row], unless it is the single pixel.
	factors [][]float64
	penalty []float64 // of a pixel basis: see newPixelBasis
}

type basisTerm struct {
	pixel    bool    // a single pixel
	dx, dy   int     // px from the centre, of a single pixel
	row      int     // index of the factor along x
	column   int     // index of the factor along y
	sum      float64 // of the bare product
	gaussian int     // index of the Gaussian
	degree   int     // p+q
}

// gaussianTerm says which polynomials go with one Gaussian.
type gaussianTerm struct {
	sigma  float64 // px
	degree int
}

// newBasis builds a basis. The first Gaussian gives element 0.
func newBasis(half int, gaussians []gaussianTerm) *basis {
	b := &basis{half: half}
	for g, t := range gaussians {
		first := len(b.factors)
		for p := 0; p <= t.degree; p++ {
			b.factors = append(b.factors, gaussianFactor(half, t.sigma, p))
		}
		for q := 0; q <= t.degree; q++ {
			for p := 0; p+q <= t.degree; p++ {
				sum := total(b.factors[first+p]) * total(b.factors[first+q])
				if p%2 == 1 || q%2 == 1 {
					sum = 0 // odd by symmetry; keep rounding out of the scale
				}
				b.terms = append(b.terms, basisTerm{row: first + p, column: first + q, sum: sum, gaussian: g, degree: p + q})
			}
		}
		if g == 0 {
			b.terms = append(b.terms, basisTerm{pixel: true, sum: 1})
		}
	}
	return b
}

// gaussianFactor samples exp(-u²/2σ²)·H_p(u/σ), with H_p the Hermite
// polynomial of degree p: it spans the same space as u^p and keeps the normal
// equations better conditioned. Samples are integrated over the pixel by
// Gauss-Legendre quadrature, so that a Gaussian narrower than a pixel stays
// smooth under a change of σ. The factor is scaled to unit absolute sum.
func gaussianFactor(half int, sigma float64, degree int) []float64 {
	f := make([]float64, 2*half+1)
	// Three-point rule on [-1/2, 1/2].
	nodes := [3]float64{-0.5 * math.Sqrt(0.6), 0, 0.5 * math.Sqrt(0.6)}
	weights := [3]float64{5.0 / 18, 8.0 / 18, 5.0 / 18}
	var absolute float64
	for i := range f {
		for n, node := range nodes {
			u := (float64(i-half) + node) / sigma
			f[i] += weights[n] * hermite(degree, u) * math.Exp(-u*u/2)
		}
		absolute += math.Abs(f[i])
	}
	for i := range f {
		f[i] /= absolute
	}
	return f
}

func hermite(n int, u float64) float64 {
	h0, h1 := 1.0, u
	if n == 0 {
		return h0
	}
	for k := 1; k < n; k++ {
		h0, h1 = h1, u*h1-float64(k)*h0
	}
	return h1
}

func total(f []float64) float64 {
	s := 0.0
	for _, v := range f {
		s += v
	}
	return s
}

// len returns the number of elements.
func (b *basis) len() int { return len(b.terms) }

// side returns the number of pixels along an edge.
func (b *basis) side() int { return 2*b.half + 1 }

// bare writes the plain product of term k into dst (side², row order).
func (b *basis) bare(dst []float64, k int) {
	t := b.terms[k]
	n := b.side()
	if t.pixel {
		clear(dst)
		dst[(b.half+t.dy)*n+b.half+t.dx] = 1
		return
	}
	fx, fy := b.factors[t.row], b.factors[t.column]
	for j, vy := range fy {
		for i, vx := range fx {
			dst[j*n+i] = vx * vy
		}
	}
}

// combine writes Σ weights[k]·element k into dst (side², row order).
func (b *basis) combine(dst []float64, weights []float64) {
	n := b.side()
	clear(dst)
	// Element k is bare k less its sum times element 0: gather the weight of
	// the bare product 0 first.
	w0 := weights[0]
	for k := 1; k < len(weights); k++ {
		w0 -= weights[k] * b.terms[k].sum
	}
	w0 /= b.terms[0].sum
	for k, w := range weights {
		t := b.terms[k]
		if k == 0 {
			w = w0
		}
		if w == 0 {
			continue
		}
		if t.pixel {
			dst[(b.half+t.dy)*n+b.half+t.dx] += w
			continue
		}
		fx, fy := b.factors[t.row], b.factors[t.column]
		for j, vy := range fy {
			row := dst[j*n : (j+1)*n]
			a := w * vy
			for i, vx := range fx {
				row[i] += a * vx
			}
		}
	}
}

// apply convolves a square window with every element. window has the side
// 2·(half+reach)+1; out[k] gets the side 2·reach+1. scratch is grown as needed
// and returned for the next call.
func (b *basis) apply(out [][]float32, window []float32, reach int, scratch []float32) []float32 {
	outer := 2*(b.half+reach) + 1
	inner := 2*reach + 1
	taps := b.side()
	if len(window) != outer*outer {
		panic("subtract: window does not fit the basis")
	}
	if cap(scratch) < inner*outer {
		scratch = make([]float32, inner*outer)
	}
	scratch = scratch[:inner*outer]
	column := -1
	for k, t := range b.terms {
		dst := out[k][:inner*inner]
		if t.pixel {
			for j := range inner {
				copy(dst[j*inner:(j+1)*inner], window[(j+b.half-t.dy)*outer+b.half-t.dx:])
			}
			continue
		}
		if t.column != column {
			// Along y: sum over rows of the window. A convolution turns the
			// kernel round, hence the falling index.
			fy := b.factors[t.column]
			for j := range inner {
				row := scratch[j*outer : (j+1)*outer]
				clear(row)
				for m := range taps {
					w := float32(fy[taps-1-m])
					src := window[(j+m)*outer : (j+m+1)*outer]
					for i, v := range src {
						row[i] += w * v
					}
				}
			}
			column = t.column
		}
		fx := b.factors[t.row]
		for j := range inner {
			row := dst[j*inner : (j+1)*inner]
			clear(row)
			src := scratch[j*outer : (j+1)*outer]
			for m := range taps {
				w := float32(fx[taps-1-m])
				part := src[m : m+inner]
				for i, v := range part {
					row[i] += w * v
				}
			}
		}
	}
	// Bare products to elements: sum one for the first, zero for the rest.
	first := out[0][:inner*inner]
	scale := float32(1 / b.terms[0].sum)
	for i := range first {
		first[i] *= scale
	}
	for k := 1; k < len(b.terms); k++ {
		s := float32(b.terms[k].sum)
		if s == 0 {
			continue
		}
		dst := out[k][:inner*inner]
		for i, v := range first {
			dst[i] -= s * v
		}
	}
	return scratch
}
