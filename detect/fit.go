package detect

import (
	"math"

	"nightsift/internal/frame"
)

// source is one point source of a joint fit.
type source struct {
	x0, y0 float64 // start: the peak, FITS px
	x, y   float64
	flux   float64
	cov    [6]float64 // flux², flux·x, flux·y, x², x·y, y²
	fixed  bool       // position held at the start: the fit would not settle
}

// fluxErr, xErr and yErr are 1 sigma.
func (s *source) fluxErr() float64 { return math.Sqrt(s.cov[0]) }
func (s *source) xErr() float64    { return math.Sqrt(s.cov[3]) }
func (s *source) yErr() float64    { return math.Sqrt(s.cov[5]) }

// window is a rectangle of the difference around a group: values, base
// variance and which pixels may be used.
type window struct {
	i0, j0, w, h int
	data         []float64
	base         []float64 // variance without the sources' own light
	use          []bool
	used         int
}

// fitter measures sources on one difference. It holds scratch: use one for
// each goroutine.
type fitter struct {
	image, variance *frame.Image
	reference       *frame.Image // nil: unknown
	flags           *frame.Mask
	gain            float64 // electron per count; +Inf or NaN: no source noise
	win             window
	patches         []patch
	model, vari     []float64
	normal, right   []float64
}

// excluded is the set of flags whose pixels do not enter a fit.
const excluded = frame.Unusable | frame.Edge

// open loads the window of pixels within radius of any of the sources'
// starts.
func (ft *fitter) open(src []source, radius float64) *window {
	x0, x1, y0, y1 := math.Inf(1), math.Inf(-1), math.Inf(1), math.Inf(-1)
	for k := range src {
		x0, x1 = math.Min(x0, src[k].x0), math.Max(x1, src[k].x0)
		y0, y1 = math.Min(y0, src[k].y0), math.Max(y1, src[k].y0)
	}
	w := &ft.win
	i0 := max(0, int(math.Ceil(x0-radius))-1)
	i1 := min(ft.image.Width, int(math.Floor(x1+radius)))
	j0 := max(0, int(math.Ceil(y0-radius))-1)
	j1 := min(ft.image.Height, int(math.Floor(y1+radius)))
	w.i0, w.j0, w.w, w.h = i0, j0, max(0, i1-i0), max(0, j1-j0)
	n := w.w * w.h
	w.data, w.base = resize(w.data, n), resize(w.base, n)
	if cap(w.use) < n {
		w.use = make([]bool, n)
	}
	w.use = w.use[:n]
	w.used = 0
	r2 := radius * radius
	for j := range w.h {
		o := j * w.w
		at := (j0+j)*ft.image.Width + i0
		d, v := ft.image.Pix[at:at+w.w], ft.variance.Pix[at:at+w.w]
		bits := ft.flags.Bits[at : at+w.w]
		y := float64(j0 + j + 1)
		for i := range w.w {
			x := float64(i0 + i + 1)
			value, variance := float64(d[i]), float64(v[i])
			ok := bits[i]&excluded == 0 && variance > 0 && !math.IsInf(variance, 0) && !math.IsNaN(value) && !math.IsInf(value, 0)
			if ok {
				ok = false
				for k := range src {
					dx, dy := x-src[k].x0, y-src[k].y0
					if dx*dx+dy*dy <= r2 {
						ok = true
						break
					}
				}
			}
			w.use[o+i] = ok
			if ok {
				w.used++
			} else {
				value, variance = 0, 1
			}
			w.data[o+i], w.base[o+i] = value, variance
		}
	}
	return w
}

// fitOutcome says how a joint fit ended.
type fitOutcome struct {
	chi2       float64
	dof        int
	iterations int
	stop       string // "converged", "iterations", "singular", "no pixels"
}

const maxIterations = 25

// fit solves for flux and position of all sources together by Gauss–Newton
// iteration on the window opened before. Weights are the inverse of the base
// variance plus the sources' own photon noise as the current model predicts
// it, never as the pixels show it, so that noise does not bias the flux.
//
// Positions stay within bound px of their starts. Errors come from the
// inverse of the final normal matrix. The noise bias of the flux of a maximum
// over position, +σ²/flux to first order for two coordinates, is removed.
func (ft *fitter) fit(psf *localPSF, src []source, bound float64) fitOutcome {
	w := &ft.win
	n := w.w * w.h
	m := 3 * len(src)
	if w.used < 4 || w.used <= m {
		ft.giveUp(src)
		return fitOutcome{stop: "no pixels"}
	}
	for len(ft.patches) < len(src) {
		ft.patches = append(ft.patches, patch{})
	}
	ft.model, ft.vari = resize(ft.model, n), resize(ft.vari, n)
	ft.normal, ft.right = resize(ft.normal, m*m), resize(ft.right, m)
	out := fitOutcome{dof: w.used - m, stop: "iterations"}
	sigma := math.Sqrt(psf.sigma2)
	maxStep := 0.5 * sigma

	for k := range src {
		src[k].x, src[k].y = src[k].x0, src[k].y0
		psf.draw(&ft.patches[k], src[k].x, src[k].y, w.i0, w.j0, w.w, w.h, false)
	}
	ft.weigh(src)
	if !ft.solveFluxes(src) {
		ft.giveUp(src)
		out.stop = "singular"
		return out
	}
	for out.iterations = 1; out.iterations <= maxIterations; out.iterations++ {
		ft.weigh(src)
		out.chi2 = ft.normalEquations(src)
		// Hold a position whose source is too faint to fix it: a prior of half
		// the bound keeps the matrix regular without touching bright ones.
		prior := 4 / (bound * bound)
		for k := range src {
			d := 3 * k
			ft.normal[(d+1)*m+d+1] += prior
			ft.normal[(d+2)*m+d+2] += prior
			ft.right[d+1] -= prior * (src[k].x - src[k].x0)
			ft.right[d+2] -= prior * (src[k].y - src[k].y0)
		}
		if !choleskySolve(ft.normal, ft.right, m) {
			ft.giveUp(src)
			out.stop = "singular"
			return out
		}
		settled := true
		for k := range src {
			s := &src[k]
			df, dx, dy := ft.right[3*k], ft.right[3*k+1], ft.right[3*k+2]
			if step := math.Hypot(dx, dy); step > maxStep {
				dx, dy = dx*maxStep/step, dy*maxStep/step
				settled = false
			}
			x, y := s.x+dx, s.y+dy
			if r := math.Hypot(x-s.x0, y-s.y0); r > bound {
				x, y = s.x0+(x-s.x0)*bound/r, s.y0+(y-s.y0)*bound/r
			}
			if math.Hypot(x-s.x, y-s.y) > 1e-4*sigma || math.Abs(df) > 1e-4*math.Abs(s.flux) {
				settled = false
			}
			s.x, s.y = x, y
			s.flux += df
			if math.IsNaN(s.flux) || math.IsNaN(x+y) {
				ft.giveUp(src)
				out.stop = "singular"
				return out
			}
			psf.draw(&ft.patches[k], x, y, w.i0, w.j0, w.w, w.h, false)
		}
		if settled {
			out.stop = "converged"
			break
		}
	}
	ft.weigh(src)
	out.chi2 = ft.normalEquations(src)
	if !invert(ft.normal, m) {
		ft.giveUp(src)
		out.stop = "singular"
		return out
	}
	for k := range src {
		s, d := &src[k], 3*k
		at := func(a, b int) float64 { return ft.normal[(d+a)*m+d+b] }
		s.cov = [6]float64{at(0, 0), at(0, 1), at(0, 2), at(1, 1), at(1, 2), at(2, 2)}
	}
	return out
}

// unbias removes the first-order noise bias of a flux that was maximised over
// two coordinates: the expected gain of the maximum is σ²/flux.
func (s *source) unbias() {
	if v := s.cov[0]; s.flux*s.flux > 4*v {
		s.flux -= v / s.flux
	}
}

// giveUp leaves sources with what a fit without pixels can say: nothing.
func (ft *fitter) giveUp(src []source) {
	nan := math.NaN()
	for k := range src {
		s := &src[k]
		s.x, s.y, s.fixed = s.x0, s.y0, true
		s.flux = nan
		s.cov = [6]float64{nan, nan, nan, nan, nan, nan}
	}
}

// weigh computes model and variance from the current parameters and patches.
func (ft *fitter) weigh(src []source) {
	w := &ft.win
	n := w.w * w.h
	model, vari := ft.model[:n], ft.vari[:n]
	clear(model)
	copy(vari, w.base[:n])
	photon := 0.0
	if ft.gain > 0 && !math.IsInf(ft.gain, 0) {
		photon = 1 / ft.gain
	}
	for k := range src {
		f := src[k].flux
		p := ft.patches[k].p
		own := math.Max(f, 0) * photon
		for i, v := range p {
			model[i] += f * v
			if v > 0 {
				vari[i] += own * v
			}
		}
	}
}

// solveFluxes does one linear solve of the fluxes alone at the current
// positions.
func (ft *fitter) solveFluxes(src []source) bool {
	w := &ft.win
	m := len(src)
	a, b := make([]float64, m*m), make([]float64, m)
	for i := range w.data {
		if !w.use[i] {
			continue
		}
		wt := 1 / w.base[i]
		for k := range src {
			pk := ft.patches[k].p[i] * wt
			b[k] += pk * w.data[i]
			for l := 0; l <= k; l++ {
				a[k*m+l] += pk * ft.patches[l].p[i]
			}
		}
	}
	for k := range m {
		a[k*m+k] *= 1 + 1e-9
		for l := range k {
			a[l*m+k] = a[k*m+l]
		}
	}
	if !choleskySolve(a, b, m) {
		return false
	}
	for k := range src {
		src[k].flux = b[k]
	}
	return true
}

// normalEquations fills the normal matrix and the gradient and returns
// chi-square.
func (ft *fitter) normalEquations(src []source) (chi2 float64) {
	w := &ft.win
	m := 3 * len(src)
	a, b := ft.normal[:m*m], ft.right[:m]
	clear(a)
	clear(b)
	var g [3 * 16]float64
	for i := range w.data {
		if !w.use[i] {
			continue
		}
		wt := 1 / ft.vari[i]
		r := w.data[i] - ft.model[i]
		chi2 += r * r * wt
		for k := range src {
			q := &ft.patches[k]
			f := src[k].flux
			g[3*k], g[3*k+1], g[3*k+2] = q.p[i], f*q.px[i], f*q.py[i]
		}
		for k := range m {
			gk := g[k] * wt
			b[k] += gk * r
			row := a[k*m : k*m+k+1]
			for l := range row {
				row[l] += gk * g[l]
			}
		}
	}
	for k := range m {
		for l := range k {
			a[l*m+k] = a[k*m+l]
		}
	}
	return chi2
}

// choleskySolve solves a·x = b for a symmetric positive definite m × m matrix,
// overwriting a with its factor and b with x. It works on the matrix scaled to
// a unit diagonal and returns false when that is not positive definite.
func choleskySolve(a, b []float64, m int) bool {
	var scaleArray [48]float64
	scale := scaleArray[:m]
	if !choleskyFactor(a, scale, m) {
		return false
	}
	for k := range m {
		s := b[k] * scale[k]
		for l := range k {
			s -= a[k*m+l] * b[l]
		}
		b[k] = s / a[k*m+k]
	}
	for k := m - 1; k >= 0; k-- {
		s := b[k]
		for l := k + 1; l < m; l++ {
			s -= a[l*m+k] * b[l]
		}
		b[k] = s / a[k*m+k]
	}
	for k := range m {
		b[k] *= scale[k]
	}
	return true
}

func choleskyFactor(a, scale []float64, m int) bool {
	for k := range m {
		d := a[k*m+k]
		if !(d > 0) || math.IsInf(d, 0) {
			return false
		}
		scale[k] = 1 / math.Sqrt(d)
	}
	for k := range m {
		for l := range m {
			a[k*m+l] *= scale[k] * scale[l]
		}
	}
	for k := range m {
		for l := 0; l <= k; l++ {
			s := a[k*m+l]
			for q := range l {
				s -= a[k*m+q] * a[l*m+q]
			}
			if k == l {
				if !(s > 1e-12) {
					return false
				}
				a[k*m+k] = math.Sqrt(s)
			} else {
				a[k*m+l] = s / a[l*m+l]
			}
		}
	}
	return true
}

// invert replaces a symmetric positive definite matrix by its inverse.
func invert(a []float64, m int) bool {
	inv := make([]float64, m*m)
	scale := make([]float64, m)
	if !choleskyFactor(a, scale, m) {
		return false
	}
	col := make([]float64, m)
	for c := range m {
		clear(col)
		col[c] = 1
		for k := range m {
			s := col[k]
			for l := range k {
				s -= a[k*m+l] * col[l]
			}
			col[k] = s / a[k*m+k]
		}
		for k := m - 1; k >= 0; k-- {
			s := col[k]
			for l := k + 1; l < m; l++ {
				s -= a[l*m+k] * col[l]
			}
			col[k] = s / a[k*m+k]
		}
		for k := range m {
			inv[k*m+c] = col[k] * scale[k] * scale[c]
		}
	}
	copy(a, inv)
	return true
}
