package psf

import (
	"math"
)

const (
	nodesHalf  = 13 // nodes of the residual grid on each side of the centre
	nodesSide  = 2*nodesHalf + 1
	nodesAll   = nodesSide * nodesSide
	shiftOrder = 2
	maxTaps    = 8   // nodes that touch one pixel, along one axis
	maxReach   = 128 // columns touched by the residual grid, at most
)

// Model is a point spread function that varies over the field; the package
// comment gives its form. A Model is read-only after Fit and may be used by
// many goroutines at once.
type Model struct {
	Width, Height int // frame for which the model was made [px]

	ShapeOrder int     // order of the polynomial of the shape
	GridOrder  int     // order of the polynomial of the residual grid; -1: no grid
	Beta       float64 // exponent of the profile

	Stars     int     // stars in the last fit
	Rejected  int     // stars tried and set aside
	Chi2      float64 // median reduced χ² of the stars' cores, without error floor
	ModelFrac float64 // global fractional error of the model near the core, see Uncertainty

	radius      int
	minEigen    float64 // smallest allowed eigenvalue of S [px²]
	shape       [3][]float64
	prof        profile
	spacing     float64      // of the nodes [px]
	nodes       [][]float64  // for each term the nodesAll coefficients [1/px²]
	net         []float64    // for each term Σ coefficients · spacing²
	center      []float64    // mean of each term over the stars, subtracted (first is 0)
	shift       [2][]float64 // polynomial of order shiftOrder: where the centre is in the parts' own coordinates [px]
	shapeCov    []float64    // covariance of the shape's coefficients
	sensitivity [9]float64   // fractional error² = δᵀ·sensitivity·δ for an error δ of (Sxx,Syy,Sxy)
	gridFrac    float64      // fractional error without the shape's statistical part
}

// Radius returns the half size of the model's own stamps [px]: they have
// 2·Radius+1 pixels on a side.
func (m *Model) Radius() int { return m.radius }

// scaled returns field coordinates in [-1,1], clamped a little beyond the frame.
func (m *Model) scaled(x, y float64) (float64, float64) {
	const limit = 1.05
	sx := (2*x - float64(m.Width+1)) / float64(m.Width)
	sy := (2*y - float64(m.Height+1)) / float64(m.Height)
	return math.Max(-limit, math.Min(limit, sx)), math.Max(-limit, math.Min(limit, sy))
}

// local is the model at one field position. It lives on the stack.
type local struct {
	a, b, c float64 // S⁻¹ = [a c; c b]
	amp     float64 // 1/√det S, divided by 1+net
	smin    float64 // square root of the smallest eigenvalue of S
	limit   [4]float64
	ox, oy  float64 // add to an offset from the source to get the parts' own
	prof    *profile
	grid    bool
	scale   float64 // 1/(1+net)
	coef    [nodesAll]float32
}

// shapeAt returns S at scaled coordinates, kept positive definite.
func (m *Model) shapeAt(phi []float64) (sxx, syy, sxy float64) {
	for k, f := range phi {
		sxx += m.shape[0][k] * f
		syy += m.shape[1][k] * f
		sxy += m.shape[2][k] * f
	}
	mean := (sxx + syy) / 2
	half := math.Hypot((sxx-syy)/2, sxy)
	if mean-half < m.minEigen || math.IsNaN(mean-half) {
		mean = math.Max(mean, m.minEigen)
		f := 0.0
		if half > 0 {
			f = (mean - m.minEigen) / half
		}
		d := (sxx - syy) / 2 * f
		sxx, syy, sxy = mean+d, mean-d, sxy*f
	}
	return
}

// at fills l for field position (x,y).
func (m *Model) at(l *local, x, y float64) {
	var phi [10]float64
	sx, sy := m.scaled(x, y)
	monomials(phi[:], sx, sy, m.ShapeOrder)
	sxx, syy, sxy := m.shapeAt(phi[:terms(m.ShapeOrder)])
	l.prof = &m.prof
	l.setShape(sxx, syy, sxy)
	l.ox, l.oy = 0, 0
	if m.shift[0] != nil {
		monomials(phi[:], sx, sy, shiftOrder)
		for k, c := range m.shift[0] {
			l.ox += c * phi[k]
			l.oy += m.shift[1][k] * phi[k]
		}
	}
	l.grid = m.GridOrder >= 0
	l.scale = 1
	if l.grid {
		monomials(phi[:], sx, sy, m.GridOrder)
		net := 0.0
		for t, plane := range m.nodes {
			f := phi[t] - m.center[t]
			net += f * m.net[t]
			f32 := float32(f)
			if t == 0 {
				for k, v := range plane {
					l.coef[k] = float32(v)
				}
				continue
			}
			for k, v := range plane {
				l.coef[k] += f32 * float32(v)
			}
		}
		l.scale = 1 / (1 + net)
		l.amp *= l.scale
		for k := range l.coef {
			l.coef[k] *= float32(l.scale)
		}
	}
}

// setShape sets the elliptical part and how finely it must be sampled.
func (l *local) setShape(sxx, syy, sxy float64) {
	det := sxx*syy - sxy*sxy
	l.a, l.b, l.c = syy/det, sxx/det, -sxy/det
	l.amp = 1 / math.Sqrt(det)
	s2 := (sxx+syy)/2 - math.Hypot((sxx-syy)/2, sxy)
	l.smin = math.Sqrt(s2)
	// An n-point Gauss-Legendre rule errs by K_n f^(2n); for a Moffat profile
	// f^(2n) is below Π(2β+k) (1+q²)^-(β+n) / α^2n, which far out is its value
	// and in the core too much by an order of magnitude. limit[n-1] is q² from
	// which n points suffice. One point is asked for more: its errors have one
	// sign, and the pixels in the wings are many.
	beta := l.prof.beta
	const tolerance = 5e-5
	k := [4]float64{8. / 12, 1. / 2160 / 4, 1. / 1008000 / 10, 1. / 889056000 / 20}
	prod, pow := 1.0, 1.0
	for n := range 4 {
		prod *= (2*beta + float64(2*n)) * (2*beta + float64(2*n) + 1)
		pow *= s2
		q2 := math.Pow(k[n]*prod/pow/tolerance, 1/(beta+float64(n)+1)) - 1
		if q2 <= 0 {
			l.limit[n] = -1
			continue
		}
		q := math.Sqrt(q2) + 0.71/l.smin
		l.limit[n] = q * q
	}
}

// gauss holds abscissae (pixels from the centre) and weights of the 1 to 5
// point Gauss-Legendre rules on a pixel (Abramowitz & Stegun 1964, table 25.4).
var gauss = [5]struct {
	n    int
	x, w [5]float64
}{
	{1, [5]float64{0}, [5]float64{1}},
	{2, [5]float64{-0.28867513459481287, 0.28867513459481287}, [5]float64{0.5, 0.5}},
	{3, [5]float64{-0.3872983346207417, 0, 0.3872983346207417}, [5]float64{5. / 18, 8. / 18, 5. / 18}},
	{4, [5]float64{-0.43056815579702629, -0.16999052179242813, 0.16999052179242813, 0.43056815579702629},
		[5]float64{0.17392742256872692, 0.32607257743127307, 0.32607257743127307, 0.17392742256872692}},
	{5, [5]float64{-0.45308992296933200, -0.26923465505284155, 0, 0.26923465505284155, 0.45308992296933200},
		[5]float64{0.11846344252809454, 0.23931433524968324, 0.28444444444444444, 0.23931433524968324, 0.11846344252809454}},
}

// rule returns the rule for a pixel whose centre has the given q².
func (l *local) rule(q2 float64) int {
	switch {
	case q2 > l.limit[0]:
		return 0
	case q2 > l.limit[1]:
		return 1
	case q2 > l.limit[2]:
		return 2
	case q2 > l.limit[3]:
		return 3
	}
	return 4
}

// pixel returns the elliptical part in the pixel whose centre is at offset
// (u,v) from the source [px].
func (l *local) pixel(u, v float64) float64 {
	q2 := l.a*u*u + 2*l.c*u*v + l.b*v*v
	r := l.rule(q2)
	if r == 0 {
		return l.amp * l.prof.value(q2)
	}
	g := &gauss[r]
	var sum float64
	for j := 0; j < g.n; j++ {
		vv := v + g.x[j]
		bv, cv := l.b*vv*vv, 2*l.c*vv
		var row float64
		for i := 0; i < g.n; i++ {
			uu := u + g.x[i]
			row += g.w[i] * l.prof.value(uu*(l.a*uu+cv)+bv)
		}
		sum += g.w[j] * row
	}
	return l.amp * sum
}

// sample is the value of the elliptical part in one pixel with its derivatives
// with respect to the offset (u,v) and to the shape matrix.
type sample struct {
	p, u, v, sxx, syy, sxy float64
}

func (l *local) pixelGradient(u, v float64) (s sample) {
	q2 := l.a*u*u + 2*l.c*u*v + l.b*v*v
	g := &gauss[l.rule(q2)]
	for j := 0; j < g.n; j++ {
		vv := v + g.x[j]
		for i := 0; i < g.n; i++ {
			uu := u + g.x[i]
			w1 := l.a*uu + l.c*vv
			w2 := l.c*uu + l.b*vv
			f, d := l.prof.at(uu*w1 + vv*w2)
			w := g.w[i] * g.w[j]
			d *= w
			s.p += w * f
			s.u += w1 * d
			s.v += w2 * d
			s.sxx += w1 * w1 * d
			s.syy += w2 * w2 * d
			s.sxy += w1 * w2 * d
		}
	}
	s.sxx = l.amp * (-s.sxx - 0.5*l.a*s.p)
	s.syy = l.amp * (-s.syy - 0.5*l.b*s.p)
	s.sxy = l.amp * (-2*s.sxy - l.c*s.p)
	s.u *= 2 * l.amp
	s.v *= 2 * l.amp
	s.p *= l.amp
	return s
}

// taps are the weights with which nodes k0… of the residual grid enter a
// pixel, along one axis.
type taps struct {
	k0, n int
	w     [maxTaps]float32
}

// tapsAt fills t for a pixel at offset u; derivative true gives d/du instead.
func tapsAt(t *taps, u, spacing float64, derivative bool) {
	hi, lo := (u+0.5)/spacing, (u-0.5)/spacing
	first := int(math.Floor(lo-1.5)) + 1
	last := int(math.Ceil(hi+1.5)) - 1
	first, last = max(first, -nodesHalf), min(last, nodesHalf)
	t.k0, t.n = first+nodesHalf, max(0, last-first+1)
	for k := 0; k < t.n; k++ {
		c := float64(first + k)
		if derivative {
			t.w[k] = float32(quadraticSpline(hi-c) - quadraticSpline(lo-c))
		} else {
			t.w[k] = float32(spacing * (quadraticSplineIntegral(hi-c) - quadraticSplineIntegral(lo-c)))
		}
	}
}

// addGrid adds the residual grid, or one of its derivatives (axis 1: d/du, 2:
// d/dv, 0: value), times sign to the nx×ny pixels of dst, the first of which is
// at offset (u0,v0).
func (l *local) addGrid(dst []float32, nx, ny int, u0, v0, spacing float64, axis int, sign float32) {
	reach := (nodesHalf+1.5)*spacing + 0.5
	i0 := max(0, int(math.Ceil(-reach-u0)))
	i1 := min(nx-1, int(math.Floor(reach-u0)))
	j0 := max(0, int(math.Ceil(-reach-v0)))
	j1 := min(ny-1, int(math.Floor(reach-v0)))
	if i1 < i0 || j1 < j0 {
		return
	}
	var cols [maxReach]taps
	i1 = min(i1, i0+maxReach-1)
	for i := i0; i <= i1; i++ {
		tapsAt(&cols[i-i0], u0+float64(i), spacing, axis == 1)
	}
	for j := j0; j <= j1; j++ {
		var t taps
		tapsAt(&t, v0+float64(j), spacing, axis == 2)
		var row [nodesSide]float32
		for k := 0; k < t.n; k++ {
			w := t.w[k] * sign
			for n, v := range l.coef[(t.k0+k)*nodesSide : (t.k0+k+1)*nodesSide] {
				row[n] += w * v
			}
		}
		out := dst[j*nx+i0 : j*nx+i1+1]
		for i := range out {
			c := &cols[i]
			var s float32
			for k := 0; k < c.n; k++ {
				s += c.w[k] * row[c.k0+k]
			}
			out[i] += s
		}
	}
}

// side returns the odd side of a square stamp with n pixels.
func side(n int) int {
	s := int(math.Sqrt(float64(n)) + 0.5)
	if s*s != n || s%2 == 0 {
		panic("psf: stamp is not a square with an odd side")
	}
	return s
}

// Render writes the point spread function at field position (x,y), shifted by
// (dx,dy) px from the centre of the stamp, into dst. len(dst) must be the
// square of an odd number, any size. The sum over the plane is 1, over the
// stamp therefore a little less. Nothing is allocated.
func (m *Model) Render(dst []float32, x, y, dx, dy float64) {
	size := side(len(dst))
	var l local
	m.at(&l, x, y)
	half := float64(size-1) / 2
	dx, dy = dx-l.ox, dy-l.oy
	for j := range size {
		v := float64(j) - half - dy
		row := dst[j*size : (j+1)*size]
		for i := range row {
			row[i] = float32(l.pixel(float64(i)-half-dx, v))
		}
	}
	if l.grid {
		l.addGrid(dst, size, size, -half-dx, -half-dy, m.spacing, 0, 1)
	}
}

// RenderGradient writes the values as Render does and their derivatives with
// respect to dx and dy [1/px]. The three slices have equal lengths.
func (m *Model) RenderGradient(dst, gx, gy []float32, x, y, dx, dy float64) {
	size := side(len(dst))
	if len(gx) != len(dst) || len(gy) != len(dst) {
		panic("psf: gradient stamps differ in length from the value's")
	}
	var l local
	m.at(&l, x, y)
	half := float64(size-1) / 2
	dx, dy = dx-l.ox, dy-l.oy
	for j := range size {
		v := float64(j) - half - dy
		for i := range size {
			s := l.pixelGradient(float64(i)-half-dx, v)
			k := j*size + i
			dst[k], gx[k], gy[k] = float32(s.p), float32(-s.u), float32(-s.v)
		}
	}
	if l.grid {
		l.addGrid(dst, size, size, -half-dx, -half-dy, m.spacing, 0, 1)
		l.addGrid(gx, size, size, -half-dx, -half-dy, m.spacing, 1, -1)
		l.addGrid(gy, size, size, -half-dx, -half-dy, m.spacing, 2, -1)
	}
}

// value returns the point spread function at a single pixel offset.
func (m *Model) value(l *local, u, v float64) float64 {
	u, v = u+l.ox, v+l.oy
	p := l.pixel(u, v)
	if l.grid {
		var d [1]float32
		l.addGrid(d[:], 1, 1, u, v, m.spacing, 0, 1)
		p += float64(d[0])
	}
	return p
}

// FWHM returns the diameter [px] of the circle whose area is that inside half
// of the central value, for the pixel-integrated point spread function at
// (x,y).
func (m *Model) FWHM(x, y float64) float64 {
	var l local
	m.at(&l, x, y)
	half := m.value(&l, 0, 0) / 2
	var sum float64
	const rays = 12
	far := 4*l.smin*l.prof.qh + 2
	if s := math.Max(l.a, l.b); s > 0 {
		far = math.Max(far, 4*l.prof.qh*math.Sqrt(math.Max(l.a, l.b)/(l.a*l.b-l.c*l.c))+2)
	}
	for k := range rays {
		sin, cos := math.Sincos(2 * math.Pi * (float64(k) + 0.5) / rays)
		lo, hi := 0.0, far
		for range 20 {
			mid := (lo + hi) / 2
			if m.value(&l, mid*cos, mid*sin) > half {
				lo = mid
			} else {
				hi = mid
			}
		}
		sum += lo * lo
	}
	return 2 * math.Sqrt(sum/rays)
}

// Moments returns the second moments [px²] at (x,y) under an elliptical
// Gaussian weight that matches the point spread function itself (adaptive
// moments: Bernstein & Jarvis 2002, AJ 123, 583). They include the pixel, exist
// for any wings, and for a Gaussian equal its plain second moments.
func (m *Model) Moments(x, y float64) (xx, yy, xy float64) {
	radius := min(m.radius, 30)
	size := 2*radius + 1
	stamp := make([]float32, size*size)
	m.Render(stamp, x, y, 0, 0)
	f := m.FWHM(x, y)
	mom, ok := adaptiveMoments(stamp, nil, size, size, float64(radius), float64(radius), f*f/5.545, 40)
	if !ok {
		g := f * f / 5.545
		return g, g, 0
	}
	return mom.xx, mom.yy, mom.xy
}

// EffectiveArea returns 1/ΣP² [px] at (x,y) for a source in the middle of a
// pixel: the number of sky pixels whose noise enters the best flux.
func (m *Model) EffectiveArea(x, y float64) float64 {
	size := 2*m.radius + 1
	stamp := make([]float32, size*size)
	m.Render(stamp, x, y, 0, 0)
	return effectiveArea(stamp)
}

func effectiveArea(stamp []float32) float64 {
	var s float64
	for _, v := range stamp {
		s += float64(v) * float64(v)
	}
	return 1 / s
}

// Uncertainty returns the fractional error of the model near the core at
// (x,y): the root mean square of model error over model, weighted by the
// square of the model. It comes from residuals of stars left out of the fit
// and, where the field is badly covered, from the covariance of the shape's
// polynomial.
func (m *Model) Uncertainty(x, y float64) float64 {
	n := terms(m.ShapeOrder)
	v := m.gridFrac * m.gridFrac
	if len(m.shapeCov) == 9*n*n {
		var phi [10]float64
		sx, sy := m.scaled(x, y)
		monomials(phi[:], sx, sy, m.ShapeOrder)
		for a := range 3 {
			for b := range 3 {
				var c float64
				for i := range n {
					for j := range n {
						c += phi[i] * phi[j] * m.shapeCov[(a*n+i)*3*n+b*n+j]
					}
				}
				v += c * m.sensitivity[a*3+b]
			}
		}
	}
	if !(v > 0) {
		return m.ModelFrac
	}
	return math.Sqrt(v)
}

// recenter chooses the model's centre so that the adaptively weighted centroid
// of a star at (x,y) is (x,y), as it is for windowed centroids. It only
// matters for lopsided images.
func (m *Model) recenter() {
	size := 2*min(m.radius, 20) + 1
	stamp := make([]float32, size*size)
	half := float64(size-1) / 2
	nt := terms(shiftOrder)
	const n = 5
	m.shift = [2][]float64{make([]float64, nt), make([]float64, nt)}
	for range 2 {
		a := make([]float64, nt*nt)
		var b [2][]float64
		b[0], b[1] = make([]float64, nt), make([]float64, nt)
		var phi [10]float64
		for j := range n {
			for i := range n {
				x := 1 + float64(m.Width-1)*(float64(i)+0.5)/n
				y := 1 + float64(m.Height-1)*(float64(j)+0.5)/n
				m.Render(stamp, x, y, 0, 0)
				f := m.FWHM(x, y)
				mom, ok := adaptiveMoments(stamp, nil, size, size, half, half, f*f/5.545, 40)
				if !ok {
					continue
				}
				sx, sy := m.scaled(x, y)
				monomials(phi[:], sx, sy, shiftOrder)
				for p := range nt {
					b[0][p] += phi[p] * (mom.x - half)
					b[1][p] += phi[p] * (mom.y - half)
					for q := range nt {
						a[p*nt+q] += phi[p] * phi[q]
					}
				}
			}
		}
		if !cholesky(a, nt) {
			m.shift = [2][]float64{}
			return
		}
		for axis := range 2 {
			choleskySolve(a, nt, b[axis])
			for p, v := range b[axis] {
				m.shift[axis][p] += v
			}
		}
	}
}

// moments holds a centroid and second moments.
type moments struct {
	x, y, xx, yy, xy float64 // x, y: 0-based in the stamp
	flux             float64 // under the weight
}

// adaptiveMoments finds centroid and second moments of a w×h stamp under a
// matched Gaussian weight, starting at (x,y) with variance start [px²]. Pixels
// with bad set are skipped. It reports false if it does not converge.
func adaptiveMoments(pix []float32, bad []bool, w, h int, x, y, start float64, iterations int) (moments, bool) {
	mom := moments{x: x, y: y, xx: start, yy: start}
	x0, y0 := x, y
	for it := range iterations {
		det := mom.xx*mom.yy - mom.xy*mom.xy
		if !(det > 1e-4) {
			return mom, false
		}
		a, b, c := mom.yy/det, mom.xx/det, -mom.xy/det
		reach := 4*math.Sqrt(math.Max(mom.xx, mom.yy)) + 1
		i0, i1 := max(0, int(mom.x-reach)), min(w-1, int(mom.x+reach)+1)
		j0, j1 := max(0, int(mom.y-reach)), min(h-1, int(mom.y+reach)+1)
		var s, sx, sy, sxx, syy, sxy float64
		for j := j0; j <= j1; j++ {
			v := float64(j) - mom.y
			for i := i0; i <= i1; i++ {
				if bad != nil && bad[j*w+i] {
					continue
				}
				u := float64(i) - mom.x
				q := a*u*u + 2*c*u*v + b*v*v
				if q > 16 {
					continue
				}
				g := math.Exp(-q/2) * float64(pix[j*w+i])
				s += g
				sx += g * u
				sy += g * v
				sxx += g * u * u
				syy += g * v * v
				sxy += g * u * v
			}
		}
		if !(s > 0) {
			return mom, false
		}
		cx, cy := sx/s, sy/s
		mom.x += 2 * cx
		mom.y += 2 * cy
		if !(math.Hypot(mom.x-x0, mom.y-y0) < 3+math.Sqrt(start)) {
			return mom, false
		}
		nxx, nyy, nxy := 2*(sxx/s-cx*cx), 2*(syy/s-cy*cy), 2*(sxy/s-cx*cy)
		change := math.Abs(nxx-mom.xx) + math.Abs(nyy-mom.yy) + math.Abs(nxy-mom.xy)
		mom.xx, mom.yy, mom.xy, mom.flux = nxx, nyy, nxy, s
		if !(nxx > 0 && nyy > 0 && nxx*nyy > nxy*nxy) || nxx > 400 || nyy > 400 {
			return mom, false
		}
		if it > 2 && change < 1e-4*(nxx+nyy) {
			return mom, true
		}
	}
	return mom, true
}
