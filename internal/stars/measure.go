package stars

import (
	"math"

	"nightsift/internal/frame"
)

// stamp is a square cut-out around one source, with its scratch; one a
// goroutine.
type stamp struct {
	img  *frame.Image
	mask *frame.Mask

	i0, j0, size int
	pix          []float64 // NaN where the pixel carries no value
	bad          bool      // any NaN in it
	flags        frame.Flag
	gx, gy       []float64
}

// cut copies the square of the given radius around the 0-based pixel (i,j).
// Pixels outside the frame count as without value.
func (s *stamp) cut(i, j, radius int) {
	s.i0, s.j0, s.size = i-radius, j-radius, 2*radius+1
	if n := s.size * s.size; cap(s.pix) < n {
		s.pix = make([]float64, n)
		s.gx, s.gy = make([]float64, s.size), make([]float64, s.size)
	}
	s.pix = s.pix[:s.size*s.size]
	if cap(s.gx) < s.size {
		s.gx, s.gy = make([]float64, s.size), make([]float64, s.size)
	}
	s.gx, s.gy = s.gx[:s.size], s.gy[:s.size]
	s.bad, s.flags = false, 0
	w, h := s.img.Width, s.img.Height
	for b := 0; b < s.size; b++ {
		out := s.pix[b*s.size : (b+1)*s.size]
		y := s.j0 + b
		if y < 0 || y >= h {
			s.bad = true
			for a := range out {
				out[a] = math.NaN()
			}
			continue
		}
		for a := range out {
			x := s.i0 + a
			if x < 0 || x >= w {
				out[a] = math.NaN()
				s.bad = true
				continue
			}
			v := s.img.Pix[y*w+x]
			out[a] = float64(v)
			if s.mask != nil && s.mask.Bits[y*w+x]&frame.Unusable != 0 {
				out[a] = math.NaN()
			}
			if d := out[a]; !(d > -huge && d < huge) {
				out[a] = math.NaN()
				s.bad = true
			}
		}
	}
}

// window fills gx and gy with a Gaussian about (x,y) (0-based pixels).
func (s *stamp) window(x, y, sigma float64) {
	f := -1 / (2 * sigma * sigma)
	for a := 0; a < s.size; a++ {
		u, v := float64(s.i0+a)-x, float64(s.j0+a)-y
		s.gx[a] = math.Exp(f * u * u)
		s.gy[a] = math.Exp(f * v * v)
	}
}

// pair returns the value at stamp place (a,b) if it and the pixel opposite to
// it about (x,y) both carry a value; a hole is thus balanced by a hole on the
// other side, to within the half pixel that the sums wgu and wgv make good.
func (s *stamp) pair(a, b int, x, y float64) (float64, bool) {
	v := s.pix[b*s.size+a]
	if v != v {
		return 0, false
	}
	oa, ob := int(math.Round(2*(x-float64(s.i0))))-a, int(math.Round(2*(y-float64(s.j0))))-b
	if oa < 0 || ob < 0 || oa >= s.size || ob >= s.size {
		return v, true // opposite of the stamp's rim: the window is nil there
	}
	o := s.pix[ob*s.size+oa]
	return v, o == o
}

// sums of one window.
type sums struct {
	wI, wIx, wIy float64 // window × value, × offset
	wg, wgx, wgy float64 // window × g, × g × offset²
	wgu, wgv     float64 // window × g × offset: what holes leave unbalanced; 0 without holes
	n            int
}

// tally sums the stamp under the window w = (1+ρ)g/(1+ρg), where g is the
// Gaussian in gx, gy: the weight of least noise when the star's centre has ρ
// times the variance of the sky.
func (s *stamp) tally(x, y, rho float64) (t sums) {
	n := s.size
	if !s.bad {
		for b := 0; b < n; b++ {
			gy := s.gy[b]
			if gy < 1e-6 {
				continue
			}
			v := float64(s.j0+b) - y
			row := s.pix[b*n : (b+1)*n]
			gx := s.gx[:len(row)]
			var wI, wIx, wg, wgx float64
			u := float64(s.i0) - x
			for a, p := range row {
				g := gx[a] * gy
				w := g * (1 + rho) / (1 + rho*g)
				wp := w * p
				wI += wp
				wIx += wp * u
				w *= g
				wg += w
				wgx += w * u * u
				u++
			}
			t.wI += wI
			t.wIx += wIx
			t.wIy += wI * v
			t.wg += wg
			t.wgx += wgx
			t.wgy += wg * v * v
		}
		t.n = n * n
		return t
	}
	for b := 0; b < n; b++ {
		v := float64(s.j0+b) - y
		for a := 0; a < n; a++ {
			p, ok := s.pair(a, b, x, y)
			if !ok {
				continue
			}
			u := float64(s.i0+a) - x
			g := s.gx[a] * s.gy[b]
			w := g * (1 + rho) / (1 + rho*g)
			t.wI += w * p
			t.wIx += w * p * u
			t.wIy += w * p * v
			w *= g
			t.wg += w
			t.wgu += w * u
			t.wgv += w * v
			t.wgx += w * u * u
			t.wgy += w * v * v
			t.n++
		}
	}
	return t
}

// maxRho bounds how flat the centroid's window gets: at 30 it still falls to
// a percent at four sigma, where neighbours begin.
const maxRho = 30

// centroid moves (x,y) (0-based pixels) to where the windowed first moment
// vanishes. Each step is Newton's for a Gaussian star of the window's sigma, so
// a star of another profile converges too, a little slower. It reports false
// when there is no light to centre on or the place runs further away than
// limit [px].
func (s *stamp) centroid(x, y, sigma, rho, limit float64) (cx, cy float64, ok bool) {
	x0, y0 := x, y
	for iter := 0; iter < 20; iter++ {
		s.window(x, y, sigma)
		t := s.tally(x, y, rho)
		if !(t.wg > 0) || !(t.wI > 0) {
			return x0, y0, false
		}
		amp := t.wI / t.wg
		dx := (t.wIx - amp*t.wgu) / (amp * t.wgx / (sigma * sigma))
		dy := (t.wIy - amp*t.wgv) / (amp * t.wgy / (sigma * sigma))
		step := math.Hypot(dx, dy)
		if !(step < 1e3) {
			return x0, y0, false
		}
		if most := 0.6 * sigma; step > most {
			dx, dy = dx*most/step, dy*most/step
		}
		x, y = x+dx, y+dy
		if math.Hypot(x-x0, y-y0) > limit {
			return x0, y0, false
		}
		if step < 2e-4 {
			return x, y, true
		}
	}
	return x, y, true
}

// shape is what the final window of one source shows.
type shape struct {
	amp              float64 // count: Σ g·I / Σ g²
	ampErr           float64
	mxx, myy, mxy    float64 // windowed moments, px²
	xErr, yErr       float64 // px, for a Gaussian star
	peak             float64
	usable           float64 // fraction of Σ g² on pixels with a value
	sky, sourceCount float64
}

// measure sums the stamp under the plain Gaussian window of the given sigma
// about (x,y) and, for the errors, under the centroid's window. variance is
// that of the sky [count²], gain may be NaN.
func (s *stamp) measure(x, y, sigma, rho, variance, gain float64) (q shape) {
	s.window(x, y, sigma)
	n := s.size
	var gI, gg, ggAll, ixx, iyy, ixy, gggg float64
	core := math.Max(1.5, 1.2*sigma)
	q.peak = math.NaN()
	for b := 0; b < n; b++ {
		gy := s.gy[b]
		v := float64(s.j0+b) - y
		if gy < 1e-7 {
			continue
		}
		for a := 0; a < n; a++ {
			g := s.gx[a] * gy
			ggAll += g * g
			p := s.pix[b*n+a]
			if p != p {
				continue
			}
			if s.bad {
				var ok bool
				if p, ok = s.pair(a, b, x, y); !ok {
					continue
				}
			}
			u := float64(s.i0+a) - x
			gp := g * p
			gI += gp
			gg += g * g
			gggg += g * g * g
			ixx += gp * u * u
			iyy += gp * v * v
			ixy += gp * u * v
			if u*u+v*v < core*core && !(p <= q.peak) {
				q.peak = p
			}
		}
	}
	q.usable = gg / ggAll
	if !(gg > 0) {
		q.amp = math.NaN()
		return q
	}
	q.amp = gI / gg
	q.mxx, q.myy, q.mxy = ixx/gI, iyy/gI, ixy/gI
	photons := 0.0
	if gain > 0 && q.amp > 0 {
		photons = q.amp / gain
	}
	q.ampErr = math.Sqrt(variance*gg+photons*gggg) / gg

	// Errors of the centroid: Var Σ w·u·I over the square of its slope.
	var ex, ey, dx, dy float64
	for b := 0; b < n; b++ {
		v := float64(s.j0+b) - y
		gy := s.gy[b]
		if gy < 1e-6 {
			continue
		}
		for a := 0; a < n; a++ {
			if s.bad {
				if _, ok := s.pair(a, b, x, y); !ok {
					continue
				}
			}
			u := float64(s.i0+a) - x
			g := s.gx[a] * gy
			w := g * (1 + rho) / (1 + rho*g)
			z := w * w * (variance + photons*g)
			ex += z * u * u
			ey += z * v * v
			dx += w * g * u * u
			dy += w * g * v * v
		}
	}
	k := sigma * sigma / q.amp
	q.xErr, q.yErr = math.Abs(k*math.Sqrt(ex)/dx), math.Abs(k*math.Sqrt(ey)/dy)
	return q
}

// unwindow frees windowed moments from a round Gaussian window of the given
// sigma: C = (M⁻¹ − 1/sigma²)⁻¹. It reports false if the result is no ellipse.
func unwindow(mxx, myy, mxy, sigma float64) (cxx, cyy, cxy float64, ok bool) {
	det := mxx*myy - mxy*mxy
	if !(det > 0) || !(mxx > 0) {
		return 0, 0, 0, false
	}
	w := 1 / (sigma * sigma)
	a, b, c := myy/det-w, mxx/det-w, -mxy/det
	d := a*b - c*c
	if !(d > 0) || !(a > 0) {
		return 0, 0, 0, false
	}
	return b / d, a / d, -c / d, true
}

// adapt finds the round Gaussian that fits a source best: centroid and sigma
// such that the windowed moments under a window of that same sigma give it
// back. It returns the geometric-mean sigma and minor/major axis.
func (s *stamp) adapt(x, y float64) (cx, cy, sigma, axis float64, ok bool) {
	sigma = 1.5
	radius := (s.size - 1) / 2
	limit := math.Max(4, float64(radius)/2)
	for iter := 0; iter < 25; iter++ {
		s.window(x, y, sigma)
		t := s.tally(x, y, 0)
		if !(t.wI > 0) || t.n == 0 {
			return x, y, 0, 0, false
		}
		var ixx, iyy, ixy float64
		for b := 0; b < s.size; b++ {
			gy := s.gy[b]
			if gy < 1e-6 {
				continue
			}
			v := float64(s.j0+b) - y
			for a, p := range s.pix[b*s.size : (b+1)*s.size] {
				if p == p {
					u := float64(s.i0+a) - x
					gp := s.gx[a] * gy * p
					ixx += gp * u * u
					iyy += gp * v * v
					ixy += gp * u * v
				}
			}
		}
		mx, my := t.wIx/t.wI, t.wIy/t.wI
		cxx, cyy, cxy, fine := unwindow(ixx/t.wI-mx*mx, iyy/t.wI-my*my, ixy/t.wI-mx*my, sigma)
		var next float64
		if fine {
			next = math.Sqrt(math.Sqrt(cxx*cyy - cxy*cxy))
			axis = axisRatio(cxx, cyy, cxy)
		} else if ixx+iyy > t.wI*sigma*sigma {
			next, axis = 1.5*sigma, 1
		} else {
			next, axis = 0.7*sigma, 1
		}
		next = math.Min(next, 1.5*sigma)
		x, y = x+1.5*mx, y+1.5*my
		if math.Abs(x-float64(s.i0+radius)) > limit || math.Abs(y-float64(s.j0+radius)) > limit {
			return x, y, 0, 0, false
		}
		if next < 0.35 || 3*next > float64(radius) {
			return x, y, next, axis, next < 0.35
		}
		done := math.Abs(next-sigma) < 1e-3*sigma && math.Hypot(mx, my) < 0.01
		sigma = next
		if done {
			return x, y, sigma, axis, true
		}
	}
	return x, y, sigma, axis, true
}

// axisRatio is minor over major axis of an ellipse of second moments.
func axisRatio(xx, yy, xy float64) float64 {
	mean, diff := (xx+yy)/2, math.Hypot((xx-yy)/2, xy)
	return math.Sqrt(math.Max(0, mean-diff) / (mean + diff))
}

// aperture sums the values within r [px] of (x,y), each pixel weighted by how
// far it lies inside a soft rim one pixel wide. It reports false if a pixel in
// it carries no value.
func (s *stamp) aperture(x, y, r float64) (float64, bool) {
	sum := 0.0
	for b := 0; b < s.size; b++ {
		v := float64(s.j0+b) - y
		for a := 0; a < s.size; a++ {
			u := float64(s.i0+a) - x
			w := math.Min(1, r+0.5-math.Hypot(u, v))
			if w <= 0 {
				continue
			}
			p := s.pix[b*s.size+a]
			if p != p {
				return 0, false
			}
			sum += w * p
		}
	}
	return sum, true
}
