package subtract

import "math"

// A Kernel is the position-dependent convolution kernel that brings the
// reference to the new frame: at position (x,y) it is the sum of the basis
// elements, each weighted by its own polynomial in position (Alard 2000, A&AS
// 144, 363), plus a polynomial for the differential background.
type Kernel struct {
	basis         *basis
	used          []int // elements of the basis in use, 0 first
	order         []int // spatial order for each element in use
	coefficient   [][]float64
	skyOrder      int
	sky           []float64 // count
	width, height int
}

// Half returns the kernel's half size [px]: it is 2·Half+1 pixels wide.
func (k *Kernel) Half() int { return k.basis.half }

// polynomialCount returns the number of terms x^a y^b with a+b ≤ order.
func polynomialCount(order int) int { return (order + 1) * (order + 2) / 2 }

// normalise maps FITS pixel coordinates to [-1,1] over the frame.
func normalise(x, y float64, width, height int) (u, v float64) {
	return (2*x - float64(width) - 1) / float64(width), (2*y - float64(height) - 1) / float64(height)
}

// polynomials appends the Legendre products P_a(u)·P_b(v), a+b ≤ order, sorted
// by total degree, so that the terms of a lower order are the first ones of a
// higher order.
func polynomials(dst []float64, u, v float64, order int) []float64 {
	var pu, pv [8]float64
	legendre(pu[:order+1], u)
	legendre(pv[:order+1], v)
	for degree := 0; degree <= order; degree++ {
		for b := 0; b <= degree; b++ {
			dst = append(dst, pu[degree-b]*pv[b])
		}
	}
	return dst
}

func legendre(p []float64, t float64) {
	p[0] = 1
	if len(p) > 1 {
		p[1] = t
	}
	for n := 2; n < len(p); n++ {
		p[n] = (float64(2*n-1)*t*p[n-1] - float64(n-1)*p[n-2]) / float64(n)
	}
}

// Weights returns the weights of all basis elements at FITS position (x,y).
func (k *Kernel) weights(dst []float64, x, y float64) []float64 {
	if cap(dst) < k.basis.len() {
		dst = make([]float64, k.basis.len())
	}
	dst = dst[:k.basis.len()]
	clear(dst)
	var buffer [36]float64
	u, v := normalise(x, y, k.width, k.height)
	p := polynomials(buffer[:0], u, v, k.maxOrder())
	for n, element := range k.used {
		for t, c := range k.coefficient[n] {
			dst[element] += c * p[t]
		}
	}
	return dst
}

func (k *Kernel) maxOrder() int {
	m := k.skyOrder
	for _, o := range k.order {
		m = max(m, o)
	}
	return m
}

// At writes the kernel at FITS position (x,y) into dst, (2·Half+1)² values in
// row order, and returns it. dst may be nil.
func (k *Kernel) At(dst []float64, x, y float64) []float64 {
	n := k.basis.side()
	if dst == nil {
		dst = make([]float64, n*n)
	}
	k.basis.combine(dst, k.weights(nil, x, y))
	return dst
}

// slopes writes the kernel at (x,y) and its derivatives along x and y [per
// pixel], by differences over one tile, which keeps the joint between
// neighbouring tiles smooth.
func (k *Kernel) slopes(centre, dx, dy []float64, x, y, step float64) {
	wc := k.weights(nil, x, y)
	k.basis.combine(centre, wc)
	wp := k.weights(nil, x+step, y)
	wm := k.weights(nil, x-step, y)
	for i := range wp {
		wp[i] = (wp[i] - wm[i]) / (2 * step)
	}
	k.basis.combine(dx, wp)
	wp = k.weights(wp, x, y+step)
	wm = k.weights(wm, x, y-step)
	for i := range wp {
		wp[i] = (wp[i] - wm[i]) / (2 * step)
	}
	k.basis.combine(dy, wp)
}

// varies reports whether the kernel depends on position.
func (k *Kernel) varies() bool {
	for _, o := range k.order {
		if o > 0 {
			return true
		}
	}
	return false
}

// Sum returns the kernel's sum at (x,y): counts of the new frame for one count
// of the reference as given to the solve.
func (k *Kernel) Sum(x, y float64) float64 { return k.weights(nil, x, y)[0] }

// Sky returns the differential background at (x,y) [count].
func (k *Kernel) Sky(x, y float64) float64 {
	var buffer [36]float64
	u, v := normalise(x, y, k.width, k.height)
	s := 0.0
	for t, p := range polynomials(buffer[:0], u, v, k.skyOrder) {
		s += k.sky[t] * p
	}
	return s
}

// sumSpread returns the root mean square of the kernel's sum over the frame
// relative to its mean.
func (k *Kernel) sumSpread() (mean, relative float64) {
	var s, q float64
	const n = 7
	for j := range n {
		for i := range n {
			v := k.Sum((float64(i)+0.5)/n*float64(k.width), (float64(j)+0.5)/n*float64(k.height))
			s += v
			q += v * v
		}
	}
	mean = s / (n * n)
	return mean, math.Sqrt(max(0, q/(n*n)-mean*mean)) / math.Abs(mean)
}
