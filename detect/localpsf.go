package detect

import "math"

// renderer draws the unit-flux point-spread function of frame position (x,y)
// into a size × size stamp, displaced by (dx,dy) pixels from the centre of the
// middle pixel. psf.Grid is one.
type renderer interface {
	Render(dst []float32, size int, x, y, dx, dy float64)
}

// localPSF is the point-spread function of one place as a cubic B-spline on a
// fine grid, so that shifted stamps and their derivatives cost a few
// nanoseconds a pixel. The derivatives are those of the spline, exact to its
// own accuracy (better than 1e-4 of the peak at FWHM ≥ 1.8 px).
//
// A localPSF is read-only after it is built; its stamp method writes to the
// caller's buffers only.
type localPSF struct {
	radius int       // stamps reach ±radius px
	over   int       // fine samples a pixel
	stride int       // of coef
	coef   []float64 // spline coefficients, with a margin of `pad` samples

	fwhm   float64    // px, of a round Gaussian with the same correlation curvature
	sum2   float64    // sum of P² over pixels, averaged over pixel phase
	curve  [3]float64 // xx, yy, xy: minus the second derivative of the autocorrelation at 0 [px⁻²]
	auto   []float64  // autocorrelation at whole-pixel lags, size², 1 at the middle; nil until correlate
	sigma2 float64    // px², variance of that Gaussian
}

const splinePad = 3

// newLocalPSF samples the renderer around frame position (x,y).
func newLocalPSF(r renderer, x, y, fwhmGuess float64, radius int) *localPSF {
	over := 1
	switch {
	case fwhmGuess < 3.6:
		over = 4
	case fwhmGuess < 7.2:
		over = 2
	}
	size := 2*radius + 1
	fine := size * over
	p := &localPSF{radius: radius, over: over, stride: fine + 2*splinePad}
	p.coef = make([]float64, p.stride*p.stride)
	stamp := make([]float32, size*size)
	for b := range over {
		for a := range over {
			r.Render(stamp, size, x, y, -float64(a)/float64(over), -float64(b)/float64(over))
			for j := range size {
				row := p.coef[(splinePad+j*over+b)*p.stride+splinePad:]
				for i, v := range stamp[j*size : (j+1)*size] {
					row[i*over+a] = float64(v)
				}
			}
		}
	}
	p.prefilter()
	p.characterise()
	return p
}

// prefilter turns samples into cubic B-spline coefficients, rows then columns,
// by the recursive filter of Unser, Aldroubi & Eden (1993, IEEE Trans. Signal
// Process. 41, 834). Beyond the stamp the PSF is taken as zero.
func (p *localPSF) prefilter() {
	n := p.stride
	line := make([]float64, n)
	for j := range n {
		row := p.coef[j*n : (j+1)*n]
		splineFilter(row)
	}
	for i := range n {
		for j := range n {
			line[j] = p.coef[j*n+i]
		}
		splineFilter(line)
		for j := range n {
			p.coef[j*n+i] = line[j]
		}
	}
}

func splineFilter(c []float64) {
	const pole = -0.26794919243112270647 // √3 − 2
	n := len(c)
	for i := 1; i < n; i++ {
		c[i] += pole * c[i-1]
	}
	c[n-1] *= -pole / (1 - pole*pole) // zeros follow
	for i := n - 2; i >= 0; i-- {
		c[i] = pole * (c[i+1] - c[i])
	}
	for i := range c {
		c[i] *= 6
	}
}

// splineWeights returns the four cubic B-spline weights, their first and
// second derivatives at fraction t in [0,1).
func splineWeights(t float64) (w, d, dd [4]float64) {
	s := 1 - t
	w = [4]float64{s * s * s / 6, 2.0/3 - t*t*(2-t)/2, 2.0/3 - s*s*(2-s)/2, t * t * t / 6}
	d = [4]float64{-s * s / 2, t * (3*t - 4) / 2, -s * (3*s - 4) / 2, t * t / 2}
	dd = [4]float64{s, 3*t - 2, 3*s - 2, t}
	return
}

// patch is a rectangle of pixels with the PSF and its derivatives on it, all
// in row order. i0, j0 are the array indices of its first pixel.
type patch struct {
	i0, j0, w, h      int
	p, px, py         []float64
	pxx, pyy, pxy     []float64
	rowV, rowD, rowDD []float64
}

func resize(s []float64, n int) []float64 {
	if cap(s) < n {
		return make([]float64, n)
	}
	return s[:n]
}

// draw fills a patch with the PSF of a source at FITS position (x,y) on the
// rectangle of w × h pixels whose first array indices are (i0,j0). Derivatives
// are with respect to the source's position; pixels beyond the stamp get 0.
func (p *localPSF) draw(dst *patch, x, y float64, i0, j0, w, h int, second bool) {
	dst.i0, dst.j0, dst.w, dst.h = i0, j0, w, h
	n := w * h
	dst.p, dst.px, dst.py = resize(dst.p, n), resize(dst.px, n), resize(dst.py, n)
	if second {
		dst.pxx, dst.pyy, dst.pxy = resize(dst.pxx, n), resize(dst.pyy, n), resize(dst.pxy, n)
	}
	ov := float64(p.over)
	// Fine coordinate of pixel i: pad + (i+1-x+radius)·over.
	fx := splinePad + (float64(i0+1)-x+float64(p.radius))*ov
	fy := splinePad + (float64(j0+1)-y+float64(p.radius))*ov
	bx, by := int(math.Floor(fx)), int(math.Floor(fy))
	wx, dx, ddx := splineWeights(fx - float64(bx))
	wy, dy, ddy := splineWeights(fy - float64(by))
	for k := range 4 {
		dx[k] *= -ov // the source moves against the sample
		dy[k] *= -ov
		ddx[k] *= ov * ov
		ddy[k] *= ov * ov
	}
	span := (w-1)*p.over + 4
	rv, rd, rdd := resize(dst.rowV, span), resize(dst.rowD, span), resize(dst.rowDD, span)
	dst.rowV, dst.rowD, dst.rowDD = rv, rd, rdd
	lo, hi := max(0, 1-bx), min(span, p.stride+1-bx) // columns of the fine grid that exist
	for j := range h {
		o := j * w
		f := by + j*p.over - 1
		if f < 0 || f+3 >= p.stride {
			clear(dst.p[o : o+w])
			clear(dst.px[o : o+w])
			clear(dst.py[o : o+w])
			if second {
				clear(dst.pxx[o : o+w])
				clear(dst.pyy[o : o+w])
				clear(dst.pxy[o : o+w])
			}
			continue
		}
		clear(rv)
		clear(rd)
		clear(rdd)
		if lo < hi {
			r0 := p.coef[f*p.stride:]
			r1, r2, r3 := r0[p.stride:], r0[2*p.stride:], r0[3*p.stride:]
			for k := lo; k < hi; k++ {
				c := bx - 1 + k
				a, b, e, g := r0[c], r1[c], r2[c], r3[c]
				rv[k] = wy[0]*a + wy[1]*b + wy[2]*e + wy[3]*g
				rd[k] = dy[0]*a + dy[1]*b + dy[2]*e + dy[3]*g
				if second {
					rdd[k] = ddy[0]*a + ddy[1]*b + ddy[2]*e + ddy[3]*g
				}
			}
		}
		for i := range w {
			k := i * p.over
			v, d := rv[k:k+4:k+4], rd[k:k+4:k+4]
			dst.p[o+i] = wx[0]*v[0] + wx[1]*v[1] + wx[2]*v[2] + wx[3]*v[3]
			dst.px[o+i] = dx[0]*v[0] + dx[1]*v[1] + dx[2]*v[2] + dx[3]*v[3]
			dst.py[o+i] = wx[0]*d[0] + wx[1]*d[1] + wx[2]*d[2] + wx[3]*d[3]
			if second {
				dd := rdd[k : k+4 : k+4]
				dst.pxx[o+i] = ddx[0]*v[0] + ddx[1]*v[1] + ddx[2]*v[2] + ddx[3]*v[3]
				dst.pyy[o+i] = wx[0]*dd[0] + wx[1]*dd[1] + wx[2]*dd[2] + wx[3]*dd[3]
				dst.pxy[o+i] = dx[0]*d[0] + dx[1]*d[1] + dx[2]*d[2] + dx[3]*d[3]
			}
		}
	}
}

// at returns the PSF at an offset (dx,dy) px from the source's centre.
func (p *localPSF) at(dx, dy float64) float64 {
	ov := float64(p.over)
	fx := splinePad + (dx+float64(p.radius))*ov
	fy := splinePad + (dy+float64(p.radius))*ov
	bx, by := int(math.Floor(fx)), int(math.Floor(fy))
	if bx < 1 || by < 1 || bx+2 >= p.stride || by+2 >= p.stride {
		return 0
	}
	wx, _, _ := splineWeights(fx - float64(bx))
	wy, _, _ := splineWeights(fy - float64(by))
	var sum float64
	for b := range 4 {
		row := p.coef[(by-1+b)*p.stride+bx-1:]
		sum += wy[b] * (wx[0]*row[0] + wx[1]*row[1] + wx[2]*row[2] + wx[3]*row[3])
	}
	return sum
}

// characterise measures what the detector needs to know about the PSF:
// its sum of squares, autocorrelation, and the curvature of that.
func (p *localPSF) characterise() {
	// Average over pixel phases, because a matched-filter response between the
	// pixels is meant.
	const phases = 2
	var q patch
	size := 2*p.radius + 1
	var xx, yy, xy float64
	for b := range phases {
		for a := range phases {
			x := float64(p.radius+1) + (float64(a)+0.5)/phases - 0.5
			y := float64(p.radius+1) + (float64(b)+0.5)/phases - 0.5
			p.draw(&q, x, y, 0, 0, size, size, false)
			for k, v := range q.p {
				p.sum2 += v * v
				xx += q.px[k] * q.px[k]
				yy += q.py[k] * q.py[k]
				xy += q.px[k] * q.py[k]
			}
		}
	}
	p.curve = [3]float64{xx / p.sum2, yy / p.sum2, xy / p.sum2}
	p.sum2 /= phases * phases
	// A Gaussian of sigma s has an autocorrelation with curvature 1/(2 s²).
	det := p.curve[0]*p.curve[1] - p.curve[2]*p.curve[2]
	curve := math.Sqrt(math.Max(det, 1e-12))
	p.sigma2 = 1 / (2 * curve)
	p.fwhm = 2.3548200450309493 * math.Sqrt(p.sigma2)
}

// correlate tabulates the autocorrelation out to lags of radius pixels. It
// costs (2·radius+1)⁴ operations, so it is done once a frame.
func (p *localPSF) correlate() {
	var q patch
	size := 2*p.radius + 1
	p.draw(&q, float64(p.radius+1), float64(p.radius+1), 0, 0, size, size, false)
	lag := p.radius
	side := 2*lag + 1
	p.auto = make([]float64, side*side)
	for dj := 0; dj <= lag; dj++ {
		for di := -lag; di <= lag; di++ {
			var s float64
			for j := dj; j < size; j++ {
				i0, i1 := max(0, di), min(size, size+di)
				a := q.p[j*size+i0 : j*size+i1]
				b := q.p[(j-dj)*size+i0-di : (j-dj)*size+i1-di]
				for k, v := range a {
					s += v * b[k]
				}
			}
			p.auto[(lag+dj)*side+lag+di] = s
			p.auto[(lag-dj)*side+lag-di] = s
		}
	}
	norm := p.auto[lag*side+lag]
	for k := range p.auto {
		p.auto[k] /= norm
	}
}

// correlation returns the matched-filter response (1 at the source) at a lag,
// bilinear between whole pixels; 0 beyond the table.
func (p *localPSF) correlation(dx, dy float64) float64 {
	lag := p.radius
	side := 2*lag + 1
	fx, fy := dx+float64(lag), dy+float64(lag)
	if !(fx >= 0 && fy >= 0 && fx < float64(side-1) && fy < float64(side-1)) {
		return 0
	}
	i, j := int(fx), int(fy)
	u, v := fx-float64(i), fy-float64(j)
	r0, r1 := p.auto[j*side+i:], p.auto[(j+1)*side+i:]
	return (1-v)*((1-u)*r0[0]+u*r0[1]) + v*((1-u)*r1[0]+u*r1[1])
}
