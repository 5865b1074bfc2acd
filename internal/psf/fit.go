package psf

import (
	"math"
	"runtime"
	"sync"
	"sync/atomic"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// What the profile's parameters are in a round of the global fit.
const (
	profileFixed  = iota
	profileBeta   // β is free
	profileRadial // the radial spline is free
)

const (
	localParams  = 4 // flux, x, y, sky
	shapeParams  = 3
	paramsBefore = localParams + shapeParams
	maxParams    = paramsBefore + radialTerms

	minTail = 1.35 // the profile falls at least like q^-2.7
)

// radialPrior is the inverse covariance of the c_k: each within radialSize of
// 0, second differences within radialRough of 0, the tail's slope within
// radialTail of 0.
var radialPrior = func() (p [radialTerms][radialTerms]float64) {
	const radialSize, radialRough, radialTail = 0.8, 0.3, 0.6
	for k := range splineTerms {
		p[k][k] += 1 / (radialSize * radialSize)
		if k > 0 && k < splineTerms-1 {
			c := [3]float64{1, -2, 1}
			for a := range 3 {
				for b := range 3 {
					p[k-1+a][k-1+b] += c[a] * c[b] / (radialRough * radialRough)
				}
			}
		}
	}
	p[splineTerms][splineTerms] = 1 / (radialTail * radialTail)
	return p
}()

// fitPixel is one pixel of one star.
type fitPixel struct {
	i, j   int16   // in the star's box
	value  float32 // sky-subtracted count
	sky    float32 // variance without the star [count²]
	other  float32 // light of neighbours [count]
	model  float32 // flux·P [count]
	weight float32 // 1/variance; 0: set aside
}

// normal holds a star's normal equations for its own and the global parameters.
type normal struct {
	a    [maxParams][maxParams]float64 // lower triangle
	b    [maxParams]float64
	chi2 float64
}

// fitStar is a star that takes part in the fit.
type fitStar struct {
	id             int // in field.all
	x, y           float64
	flux, sky      float64
	i0, j0, nx, ny int // box, 0-based in the frame
	px             []fitPixel
	phi            [10]float64
	skySigma       float64 // prior of the sky [count]
	noise          float64 // median sky noise [count]
	norm           [2]normal
	cur            int // which normal holds the current state
	old            [4]float64
	dropped        bool
	coreChi2       float64 // reduced, within 1.5 FWHM, with the weights' floor
	gx, gy, gv     []float32
}

// fitState is a fit in progress.
type fitState struct {
	f     *field
	m     *Model
	cfg   Config
	st    []*fitStar
	fwhm  float64 // of the pixel-integrated point spread function, about [px]
	floor float64 // fractional error of the model in the weights
	order int     // polynomial order of the shape
	mode  int

	radialInv float64 // factor on radialPrior

	rejected int
	gap      float64 // χ² that the grid loses on stars left out
	fixGap   float64
}

// Fit learns the point spread function of a sky-subtracted frame from its star
// list.
//
// variance is the variance of the sky part [count²]: the stars' own photon
// noise is added here from the model and gain [electron/count]; a gain that is
// not positive leaves it out. flags may be nil. Pixels with frame.Unusable
// flags, without finite values or without positive variance are not used.
//
// A frame that does not have cfg.MinStars usable stars gives a *frame.Problem
// too_few_stars. img, variance and list are only read.
func Fit(img, variance *frame.Image, flags *frame.Mask, list []stars.Star, gain float64, cfg Config) (*Model, error) {
	if !img.SameShape(variance) || (flags != nil && (flags.Width != img.Width || flags.Height != img.Height)) {
		panic("psf: image, variance and flags differ in shape")
	}
	if !(gain > 0) || math.IsInf(gain, 0) {
		gain = 0
	}
	f := &field{img: img, variance: variance, flags: flags, gain: gain}
	f.collect(list)
	chosen, sigma2 := f.selectStars(cfg)
	if len(chosen) < cfg.MinStars {
		return nil, tooFew(len(chosen), len(list), cfg.MinStars)
	}
	s := newState(f, chosen, sigma2, cfg)
	if len(s.st) < cfg.MinStars {
		return nil, tooFew(len(s.st), len(list), cfg.MinStars)
	}
	return s.run(len(list))
}

func tooFew(n, of, want int) error {
	return frame.Problemf(frame.ProblemTooFewStars,
		"%d of %d listed stars can teach the point spread function, %d are needed: give a deeper or less flagged frame", n, of, want)
}

// newState sets up model and stars for the first round.
func newState(f *field, chosen []int, sigma2 float64, cfg Config) *fitState {
	m := &Model{Width: f.img.Width, Height: f.img.Height, GridOrder: -1}
	fwhm0 := 2.3548 * math.Sqrt(sigma2)
	s := &fitState{f: f, m: m, cfg: cfg, fwhm: 2.3548 * math.Sqrt(sigma2+1./12), floor: 0.05, radialInv: 1}
	m.prof.build(3, [radialTerms]float64{})
	alpha2 := math.Pow(fwhm0/2/m.prof.qh, 2)
	m.minEigen = 0.1 * alpha2
	m.shape = [3][]float64{{alpha2}, {alpha2}, {0}}
	m.spacing = math.Max(0.3, math.Min(4, s.fwhm/5))
	m.radius = int(math.Ceil(math.Max(6, math.Min(cfg.FitRadius*s.fwhm, float64(cfg.MaxRadius)))))
	for _, id := range chosen {
		if st := s.newStar(id); st != nil {
			s.st = append(s.st, st)
		}
	}
	return s
}

// newStar cuts a star out of the frame; nil if too little of it is usable.
func (s *fitState) newStar(id int) *fitStar {
	f := s.f
	src := f.all[id]
	rad := s.cfg.FitRadius * s.fwhm
	if src.sn < 100 {
		rad = math.Min(rad, 3*s.fwhm)
	}
	rad = math.Max(5, math.Min(rad, float64(s.cfg.MaxRadius)))
	st := &fitStar{id: id, x: src.x, y: src.y}
	// Moments are the better start where the list's position is rough.
	ci, cj := int(math.Round(src.x))-1, int(math.Round(src.y))-1
	r := int(rad)
	st.i0, st.j0 = max(0, ci-r), max(0, cj-r)
	i1, j1 := min(f.img.Width-1, ci+r), min(f.img.Height-1, cj+r)
	st.nx, st.ny = i1-st.i0+1, j1-st.j0+1
	core := 0.8 * s.fwhm
	var coreAll, coreGood int
	var noise []float64
	for j := st.j0; j <= j1; j++ {
		for i := st.i0; i <= i1; i++ {
			dx, dy := float64(i+1)-src.x, float64(j+1)-src.y
			d := math.Hypot(dx, dy)
			if d > rad {
				continue
			}
			// In the wings of a broad profile every fourth pixel tells enough.
			if d > 8 && d > 2*s.fwhm && (i|j)&1 != 0 {
				continue
			}
			ok := f.usable(i, j)
			if d < core {
				coreAll++
				if ok {
					coreGood++
				}
			}
			if !ok {
				continue
			}
			k := j*f.img.Width + i
			st.px = append(st.px, fitPixel{i: int16(i - st.i0), j: int16(j - st.j0), value: f.img.Pix[k], sky: f.variance.Pix[k]})
			if len(st.px)%8 == 0 {
				noise = append(noise, float64(f.variance.Pix[k]))
			}
		}
	}
	want := int(math.Pi * core * core * 0.9)
	if coreGood < coreAll || coreAll < want || len(st.px) < 20 {
		return nil
	}
	st.noise = math.Sqrt(median(noise))
	st.skySigma = s.cfg.SkyPrior * st.noise
	st.flux = src.flux
	sx, sy := s.m.scaled(src.x, src.y)
	monomials(st.phi[:], sx, sy, 3)
	st.gv = make([]float32, st.nx*st.ny)
	st.gx = make([]float32, st.nx*st.ny)
	st.gy = make([]float32, st.nx*st.ny)
	return st
}

// each calls do for every star that is not dropped, on all processors. do must
// touch its own star only, so that the result does not depend on their number.
func (s *fitState) each(do func(st *fitStar)) {
	workers := min(runtime.GOMAXPROCS(0), len(s.st))
	var next atomic.Int64
	var wg sync.WaitGroup
	for range workers {
		wg.Go(func() {
			for {
				k := int(next.Add(1)) - 1
				if k >= len(s.st) {
					return
				}
				if !s.st[k].dropped {
					do(s.st[k])
				}
			}
		})
	}
	wg.Wait()
}

func (s *fitState) params() int {
	switch s.mode {
	case profileBeta:
		return paramsBefore + 1
	case profileRadial:
		return paramsBefore + radialTerms
	}
	return paramsBefore
}

// evaluate fills the normal equations of a star at the current parameters into
// norm[slot] and, at the same time, the pixels' model values.
func (s *fitState) evaluate(st *fitStar, slot int) {
	var l local
	m := s.m
	m.at(&l, st.x, st.y)
	n := &st.norm[slot]
	np := s.params()
	for a := range np {
		n.b[a] = 0
		for b := 0; b <= a; b++ {
			n.a[a][b] = 0
		}
	}
	u0, v0 := float64(st.i0+1)-st.x, float64(st.j0+1)-st.y
	if l.grid {
		clear(st.gv)
		clear(st.gx)
		clear(st.gy)
		l.addGrid(st.gv, st.nx, st.ny, u0, v0, m.spacing, 0, 1)
		l.addGrid(st.gx, st.nx, st.ny, u0, v0, m.spacing, 1, 1)
		l.addGrid(st.gy, st.nx, st.ny, u0, v0, m.spacing, 2, 1)
	}
	var jac [maxParams]float64
	var chi2 float64
	pixelQ := (l.a + l.b) / 12
	qh2 := m.prof.qh * m.prof.qh
	for k := range st.px {
		p := &st.px[k]
		u, v := u0+float64(p.i), v0+float64(p.j)
		e := l.pixelGradient(u, v)
		ell := e.p
		if l.grid {
			g := int(p.j)*st.nx + int(p.i)
			e.p += float64(st.gv[g])
			e.u += float64(st.gx[g])
			e.v += float64(st.gy[g])
		}
		model := st.flux * e.p
		p.model = float32(model)
		w := float64(p.weight)
		if w == 0 {
			continue
		}
		res := float64(p.value-p.other) - st.sky - model
		chi2 += w * res * res
		jac[0] = e.p
		jac[1] = -st.flux * e.u
		jac[2] = -st.flux * e.v
		jac[3] = 1
		jac[4] = st.flux * e.sxx
		jac[5] = st.flux * e.syy
		jac[6] = st.flux * e.sxy
		switch s.mode {
		case profileBeta:
			q2 := l.a*u*u + 2*l.c*u*v + l.b*v*v + pixelQ
			jac[7] = st.flux * ell * (m.prof.meanLog - math.Log1p(q2))
		case profileRadial:
			q2 := l.a*u*u + 2*l.c*u*v + l.b*v*v + pixelQ
			fe := st.flux * ell
			for a := range radialTerms {
				jac[paramsBefore+a] = -fe * m.prof.meanN[a]
			}
			sq := math.Log1p(q2 / qh2)
			a, nn := radialBasis(sq)
			jac[paramsBefore+splineTerms] += fe * radialRamp(sq)
			jac[paramsBefore+a] += fe * nn[0]
			jac[paramsBefore+a+1] += fe * nn[1]
			jac[paramsBefore+a+2] += fe * nn[2]
		}
		for a := range np {
			wa := w * jac[a]
			n.b[a] += wa * res
			row := n.a[a][:a+1]
			for b := range row {
				row[b] += wa * jac[b]
			}
		}
	}
	// Prior of the sky.
	t := 1 / (st.skySigma * st.skySigma)
	if !(st.skySigma > 0) {
		t = 1e12 / (st.noise*st.noise + 1e-30)
	}
	n.a[3][3] += t
	n.b[3] -= t * st.sky
	n.chi2 = chi2 + t*st.sky*st.sky
	if math.IsNaN(n.chi2) {
		n.chi2 = math.Inf(1)
	}
}

// reduced is a star's normal equation for shape and profile after its own four
// parameters are solved for.
type reduced struct {
	a    [shapeParams + radialTerms][shapeParams + radialTerms]float64
	b    [shapeParams + radialTerms]float64
	l    [localParams * localParams]float64 // Cholesky factor of the local block
	good bool
}

func (st *fitStar) reduce(np int, damping float64) (r reduced) {
	n := &st.norm[st.cur]
	for i := range localParams {
		for j := 0; j <= i; j++ {
			r.l[i*localParams+j] = n.a[i][j]
		}
		r.l[i*localParams+i] *= 1 + damping
	}
	if !cholesky(r.l[:], localParams) {
		return r
	}
	ng := np - localParams
	var z [shapeParams + radialTerms][localParams]float64 // L⁻¹ of the mixed block
	var y [localParams]float64
	forward := func(v *[localParams]float64) {
		for i := range localParams {
			x := v[i]
			for k := 0; k < i; k++ {
				x -= r.l[i*localParams+k] * v[k]
			}
			v[i] = x / r.l[i*localParams+i]
		}
	}
	copy(y[:], n.b[:localParams])
	forward(&y)
	for g := range ng {
		copy(z[g][:], n.a[localParams+g][:localParams])
		forward(&z[g])
	}
	for g := range ng {
		r.b[g] = n.b[localParams+g]
		for k := range localParams {
			r.b[g] -= z[g][k] * y[k]
		}
		for h := 0; h <= g; h++ {
			v := n.a[localParams+g][localParams+h]
			for k := range localParams {
				v -= z[g][k] * z[h][k]
			}
			r.a[g][h] = v
			r.a[h][g] = v
		}
	}
	r.good = true
	return r
}

// global assembles the equations of the shape's coefficients (for each of the
// three elements terms(order) of them) and the profile.
func (s *fitState) global(damping float64) (a, b []float64, nt, ng int) {
	nt = terms(s.order)
	ng = s.params() - paramsBefore
	n := 3*nt + ng
	a, b = make([]float64, n*n), make([]float64, n)
	for _, st := range s.st {
		if st.dropped {
			continue
		}
		r := st.reduce(s.params(), damping)
		if !r.good {
			continue
		}
		for p := range 3 {
			for k := range nt {
				row := p*nt + k
				b[row] += st.phi[k] * r.b[p]
				for q := 0; q <= p; q++ {
					w := st.phi[k] * r.a[p][q]
					for l := range nt {
						a[row*n+q*nt+l] += w * st.phi[l]
					}
				}
			}
		}
		for g := range ng {
			row := 3*nt + g
			b[row] += r.b[3+g]
			for q := range 3 {
				for l := range nt {
					a[row*n+q*nt+l] += r.a[3+g][q] * st.phi[l]
				}
			}
			for h := 0; h <= g; h++ {
				a[row*n+3*nt+h] += r.a[3+g][3+h]
			}
		}
	}
	if s.mode == profileRadial {
		for g := range ng {
			row := 3*nt + g
			for h := range ng {
				t := radialPrior[g][h] * s.radialInv
				if h <= g {
					a[row*n+3*nt+h] += t
				}
				b[row] -= t * s.m.prof.c[h]
			}
		}
	}
	return
}

func (s *fitState) total(slot func(st *fitStar) int) float64 {
	var sum float64
	for _, st := range s.st {
		if !st.dropped {
			sum += st.norm[slot(st)].chi2
		}
	}
	if s.mode == profileRadial {
		for g, c := range s.m.prof.c {
			for h, d := range s.m.prof.c {
				sum += c * d * radialPrior[g][h] * s.radialInv
			}
		}
	}
	return sum
}

// setOrder changes the polynomial's order, keeping what both have.
func (s *fitState) setOrder(order int) {
	n := terms(order)
	for p := range s.m.shape {
		c := make([]float64, n)
		copy(c, s.m.shape[p])
		s.m.shape[p] = c
	}
	s.order, s.m.ShapeOrder = order, order
}

// solve runs Levenberg-Marquardt rounds (Levenberg 1944, Marquardt 1963) on the
// global parameters and each star's own four at the weights as they are.
func (s *fitState) solve(mode, iterations int) {
	s.mode = mode
	s.each(func(st *fitStar) { s.evaluate(st, st.cur) })
	current := s.total(func(st *fitStar) int { return st.cur })
	damping := 1e-4
	refused := false
	defer func() {
		if refused {
			s.each(func(st *fitStar) { s.evaluate(st, st.cur) })
		}
	}()
	for it := 0; it < iterations; it++ {
		a, b, nt, ng := s.global(damping)
		n := 3*nt + ng
		for i := range n {
			a[i*n+i] *= 1 + damping
			if a[i*n+i] == 0 {
				a[i*n+i] = 1
			}
		}
		if !cholesky(a, n) {
			damping = math.Max(1e-3, damping*10)
			if damping > 1e6 {
				return
			}
			continue
		}
		choleskySolve(a, n, b)
		// A step stays within what the linearisation can mean.
		scale := 1.0
		if mode == profileBeta {
			if d := math.Abs(b[3*nt]); d > 0.4*s.m.prof.beta {
				scale = 0.4 * s.m.prof.beta / d
			}
		}
		size := s.m.shape[0][0] + s.m.shape[1][0]
		for p := range 3 {
			if d := math.Abs(b[p*nt]); d*scale > 0.3*size {
				scale = 0.3 * size / d
			}
		}
		for i := range b {
			b[i] *= scale
		}
		oldShape, oldProf := s.m.shape, s.m.prof
		for p := range 3 {
			c := make([]float64, nt)
			for k := range c {
				c[k] = oldShape[p][k] + b[p*nt+k]
			}
			s.m.shape[p] = c
		}
		switch mode {
		case profileBeta:
			s.m.prof.build(math.Max(minBeta, math.Min(maxBeta, oldProf.beta+b[3*nt])), oldProf.c)
		case profileRadial:
			c := oldProf.c
			for g := range c {
				c[g] = math.Max(-5, math.Min(5, c[g]+b[3*nt+g]))
			}
			c[splineTerms] = math.Min(c[splineTerms], (oldProf.beta-minTail)*radialSpacing)
			s.m.prof.build(oldProf.beta, c)
		}
		np := s.params()
		s.each(func(st *fitStar) {
			st.old = [4]float64{st.flux, st.x, st.y, st.sky}
			r := st.reduce(np, damping)
			if r.good {
				var rhs [localParams]float64
				nn := &st.norm[st.cur]
				copy(rhs[:], nn.b[:localParams])
				for p := range 3 {
					var d float64
					for k := range nt {
						d += st.phi[k] * b[p*nt+k]
					}
					for i := range localParams {
						rhs[i] -= nn.a[localParams+p][i] * d
					}
				}
				for g := range ng {
					for i := range localParams {
						rhs[i] -= nn.a[paramsBefore+g][i] * b[3*nt+g]
					}
				}
				choleskySolve(r.l[:], localParams, rhs[:])
				st.move(rhs, s.fwhm)
			}
			s.evaluate(st, 1-st.cur)
		})
		trial := s.total(func(st *fitStar) int { return 1 - st.cur })
		if trial < current {
			refused = false
			for _, st := range s.st {
				if !st.dropped {
					st.cur = 1 - st.cur
				}
			}
			gain := current - trial
			current = trial
			damping = math.Max(damping/10, 1e-7)
			if gain < 1e-5*current+0.1 {
				return
			}
			continue
		}
		// Not better: take back and try a shorter step. The pixels still hold
		// the model of the refused one.
		refused = true
		s.m.shape, s.m.prof = oldShape, oldProf
		for _, st := range s.st {
			if !st.dropped {
				st.flux, st.x, st.y, st.sky = st.old[0], st.old[1], st.old[2], st.old[3]
			}
		}
		if trial < current*(1+1e-6)+0.1 {
			return
		}
		damping = math.Max(damping, 1e-4) * 10
		if damping > 1e6 {
			return
		}
	}
}

// move changes a star's own parameters by d, within reason.
func (st *fitStar) move(d [localParams]float64, fwhm float64) {
	limit := 0.5 * fwhm
	if r := math.Hypot(d[1], d[2]); r > limit {
		d[1] *= limit / r
		d[2] *= limit / r
	}
	flux := st.flux + d[0]
	if !(flux > 0.2*st.flux) {
		flux = 0.2 * st.flux
	}
	st.flux = flux
	st.x += d[1]
	st.y += d[2]
	st.sky += d[3]
}

// weigh sets the pixels' weights from the model: sky, photons of the model,
// the fractional floor and what is uncertain in the neighbours. With clip > 0
// pixels further from the model than clip sigma are set aside.
func (s *fitState) weigh(floor, clip float64) {
	s.floor = floor
	inv := 0.0
	if s.f.gain > 0 {
		inv = 1 / s.f.gain
	}
	s.each(func(st *fitStar) {
		for k := range st.px {
			p := &st.px[k]
			model := math.Max(float64(p.model), 0)
			other := math.Max(float64(p.other), 0)
			v := float64(p.sky) + (model+other)*inv + floor*model*floor*model + 0.01*other*other
			p.weight = float32(1 / v)
			if clip > 0 {
				// While the model is rough, its slope makes large residuals.
				v += 4 * floor * model * floor * model
				res := float64(p.value-p.other) - st.sky - float64(p.model)
				if res*res > clip*clip*v || math.IsNaN(res) {
					p.weight = 0
				}
			}
		}
	})
}

// start gives fluxes for a first model: linear, positions as listed.
func (s *fitState) start() {
	s.each(func(st *fitStar) {
		var l local
		s.m.at(&l, st.x, st.y)
		u0, v0 := float64(st.i0+1)-st.x, float64(st.j0+1)-st.y
		var num, den float64
		lim := 1.5 * s.fwhm
		for k := range st.px {
			p := &st.px[k]
			u, v := u0+float64(p.i), v0+float64(p.j)
			e := l.pixel(u, v)
			p.model = float32(e)
			if u*u+v*v < lim*lim {
				num += e * float64(p.value)
				den += e * e
			}
		}
		if den > 0 && num > 0 {
			st.flux = num / den
		}
		for k := range st.px {
			st.px[k].model *= float32(st.flux)
		}
	})
}

// reject drops stars that the model describes much worse than the others, the
// worst fifth at most, and returns their number.
func (s *fitState) reject(minStars int) int {
	lim2 := math.Pow(1.5*s.fwhm, 2)
	s.each(func(st *fitStar) {
		var sum float64
		var n, lost, all int
		for k := range st.px {
			p := &st.px[k]
			u, v := float64(st.i0+1+int(p.i))-st.x, float64(st.j0+1+int(p.j))-st.y
			if u*u+v*v > lim2 {
				continue
			}
			all++
			if p.weight == 0 {
				lost++
				continue
			}
			res := float64(p.value-p.other) - st.sky - float64(p.model)
			sum += res * res * float64(p.weight)
			n++
		}
		st.coreChi2 = sum / math.Max(1, float64(n-3))
		if lost*7 > all || n < 5 {
			st.coreChi2 = math.Inf(1)
		}
		src := s.f.all[st.id]
		if math.Hypot(st.x-src.x, st.y-src.y) > 0.5*s.fwhm || !(st.flux > 0) {
			st.coreChi2 = math.Inf(1)
		}
	})
	var v []float64
	for _, st := range s.st {
		if !st.dropped {
			v = append(v, st.coreChi2)
		}
	}
	good := len(v)
	if good == 0 {
		return 0
	}
	scatter := mad(v)
	mid := median(v)
	if math.IsInf(mid, 0) || math.IsNaN(scatter) {
		mid, scatter = 1, 1
	}
	limit := math.Max(mid+5*math.Max(scatter, 0.15), 1.6*mid)
	room := max(good/5, 1)
	if good-minStars < room {
		room = max(0, good-minStars)
	}
	dropped := 0
	for dropped < room {
		worst := -1
		for k, st := range s.st {
			if !st.dropped && st.coreChi2 > limit && (worst < 0 || st.coreChi2 > s.st[worst].coreChi2) {
				worst = k
			}
		}
		if worst < 0 {
			break
		}
		s.st[worst].dropped = true
		dropped++
	}
	s.rejected += dropped
	return dropped
}

// compact forgets dropped stars.
func (s *fitState) compact() {
	var keep []*fitStar
	for _, st := range s.st {
		if !st.dropped {
			keep = append(keep, st)
		}
	}
	s.st = keep
}

// chooseOrder predicts stars left out of the fit with shapes of order 0 to 3
// and returns the lowest order that is about as good as the best: within 0.3
// standard errors of the difference, or 2 in χ². The stars' normal equations at hand make this a small linear problem.
func (s *fitState) chooseOrder(most int) int {
	const folds = 5
	type eq struct {
		a   [3][3]float64
		b   [3]float64 // a·S + gradient
		cur [3]float64
		g   [3]float64
	}
	eqs := make([]eq, len(s.st))
	for k, st := range s.st {
		r := st.reduce(paramsBefore, 0)
		if !r.good {
			continue
		}
		e := &eqs[k]
		for p := range 3 {
			for t, c := range s.m.shape[p] {
				e.cur[p] += c * st.phi[t]
			}
		}
		for p := range 3 {
			e.g[p] = r.b[p]
			e.b[p] = r.b[p]
			for q := range 3 {
				e.a[p][q] = r.a[p][q]
				e.b[p] += r.a[p][q] * e.cur[q]
			}
		}
	}
	scores := make([][]float64, most+1)
	for order := 0; order <= most; order++ {
		nt := terms(order)
		n := 3 * nt
		scores[order] = make([]float64, len(s.st))
		for fold := range folds {
			a, b := make([]float64, n*n), make([]float64, n)
			for k, st := range s.st {
				if k%folds == fold {
					continue
				}
				for p := range 3 {
					for i := range nt {
						b[p*nt+i] += st.phi[i] * eqs[k].b[p]
						for q := range 3 {
							for j := range nt {
								a[(p*nt+i)*n+q*nt+j] += st.phi[i] * st.phi[j] * eqs[k].a[p][q]
							}
						}
					}
				}
			}
			for i := range n {
				a[i*n+i] *= 1 + 1e-9
			}
			if !cholesky(a, n) {
				for k := range scores[order] {
					scores[order][k] = math.Inf(1)
				}
				break
			}
			choleskySolve(a, n, b)
			for k, st := range s.st {
				if k%folds != fold {
					continue
				}
				var d [3]float64
				for p := range 3 {
					d[p] = -eqs[k].cur[p]
					for i := range nt {
						d[p] += st.phi[i] * b[p*nt+i]
					}
				}
				var v float64
				for p := range 3 {
					v -= 2 * eqs[k].g[p] * d[p]
					for q := range 3 {
						v += d[p] * eqs[k].a[p][q] * d[q]
					}
				}
				scores[order][k] = v
			}
		}
	}
	best, bestSum := 0, math.Inf(1)
	for o := range scores {
		var sum float64
		for _, v := range scores[o] {
			sum += v
		}
		if sum < bestSum {
			best, bestSum = o, sum
		}
	}
	for o := range best {
		var sum, sq float64
		for k := range scores[o] {
			d := scores[o][k] - scores[best][k]
			sum += d
			sq += d * d
		}
		n := float64(len(s.st))
		if sum <= math.Max(2, 0.3*math.Sqrt(math.Max(0, sq-sum*sum/n))) {
			return o
		}
	}
	return best
}

// choosePrior sets the strength of the radial spline's prior to the one with
// the largest evidence (MacKay 1992, Neural Computation 4, 415) among a few:
// where a Moffat profile is enough the spline stays out, and its noise with it.
func (s *fitState) choosePrior() {
	s.mode = profileRadial
	s.each(func(st *fitStar) { s.evaluate(st, st.cur) })
	keep := s.radialInv
	s.radialInv = 0
	a, b, nt, ng := s.global(0)
	s.radialInv = keep
	n := 3*nt + ng
	// With the shape marginalised: the last block of the Cholesky factor is
	// the factor of the Schur complement.
	for i := range n {
		a[i*n+i] *= 1 + 1e-10
		if i >= 3*nt {
			a[i*n+i] += 1e-6
		}
	}
	if !cholesky(a, n) {
		return
	}
	m := 3 * nt
	for i := range m { // forward substitution through the shape's part
		v := b[i]
		for k := range i {
			v -= a[i*n+k] * b[k]
		}
		b[i] = v / a[i*n+i]
	}
	schur := make([]float64, ng*ng)
	rhs := make([]float64, ng)
	for g := range ng {
		rhs[g] = b[m+g]
		for k := range m {
			rhs[g] -= a[(m+g)*n+k] * b[k]
		}
		for h := range ng {
			for k := 0; k <= min(g, h); k++ {
				schur[g*ng+h] += a[(m+g)*n+m+k] * a[(m+h)*n+m+k]
			}
		}
	}
	for g := range ng {
		for h := range ng {
			rhs[g] += schur[g*ng+h] * s.m.prof.c[h]
		}
	}
	best := math.Inf(-1)
	for _, scale := range []float64{0.03, 0.1, 0.3, 1, 3} {
		inv := 1 / (scale * scale)
		t := make([]float64, ng*ng)
		for g := range ng {
			for h := range ng {
				t[g*ng+h] = schur[g*ng+h] + inv*radialPrior[g][h]
			}
		}
		if !cholesky(t, ng) {
			continue
		}
		x := append([]float64(nil), rhs...)
		choleskySolve(t, ng, x)
		var ev float64
		for g := range ng {
			ev += rhs[g]*x[g] - 2*math.Log(t[g*ng+g]) + math.Log(inv)
		}
		if ev > best {
			best, s.radialInv = ev, inv
		}
	}
}

// orderLimit is the highest order that so many stars can carry.
func orderLimit(n int) int {
	for o := 3; o > 0; o-- {
		if n >= 4*terms(o) {
			return o
		}
	}
	return 0
}

// run goes through the rounds of the fit.
func (s *fitState) run(listed int) (*Model, error) {
	minStars := s.cfg.MinStars
	check := func() error {
		s.compact()
		n := 0
		for _, st := range s.st {
			if !math.IsInf(st.coreChi2, 0) {
				n++
			}
		}
		if n < minStars {
			return tooFew(n, listed, minStars)
		}
		return nil
	}
	s.setOrder(0)
	s.start()
	s.neighbours(false)
	s.weigh(0.05, 0)

	// A constant shape from the brightest stars, then more and more of it.
	all := s.st
	s.st = all[:min(len(all), 120)]
	s.solve(profileBeta, 12)
	s.st = all
	if len(all) > 120 {
		s.start()
	}
	most := orderLimit(len(s.st))
	if s.cfg.ShapeOrder >= 0 {
		most = min(s.cfg.ShapeOrder, 3)
	}
	s.setOrder(min(most, 2))
	s.weigh(0.05, 8)
	s.solve(profileBeta, 8)
	s.weigh(math.Max(0.05, 1.5*s.excess()), 7)
	s.reject(minStars)
	if err := check(); err != nil {
		return nil, err
	}
	most = min(most, orderLimit(len(s.st)))
	s.setOrder(min(most, 2))
	s.solve(profileBeta, 4)
	s.neighbours(true)
	s.weigh(math.Max(0.03, 1.5*s.excess()), 6)
	s.reject(minStars)
	if err := check(); err != nil {
		return nil, err
	}
	s.solve(profileBeta, 4)
	order := most
	if s.cfg.ShapeOrder < 0 {
		order = s.chooseOrder(most)
	}
	s.setOrder(order)
	s.weigh(math.Max(0.02, s.excess()), 5.5)
	s.solve(profileBeta, 5)
	s.weigh(math.Max(0.02, 1.5*s.excess()), 5.5)
	s.reject(minStars)
	if err := check(); err != nil {
		return nil, err
	}

	// The profile's departure from Moffat's and the residual grid.
	s.weigh(0.015, 5.5)
	s.solve(profileRadial, 4)
	s.choosePrior()
	s.solve(profileRadial, 5)
	s.neighbours(true)
	if !s.cfg.NoGrid {
		s.fitGrid()
	}
	s.solve(profileRadial, 2)
	s.weigh(math.Max(0.003, math.Min(0.015, s.excess())), 5.5)
	s.reject(minStars)
	if err := check(); err != nil {
		return nil, err
	}
	s.choosePrior()
	s.solve(profileRadial, 4)
	if !s.cfg.NoGrid {
		s.fitGrid()
	}
	s.weigh(math.Max(0.002, math.Min(0.015, s.excess())), 5.5)
	s.solve(profileFixed, 2)
	if err := check(); err != nil {
		return nil, err
	}
	s.finish()
	return s.m, nil
}

// excess returns the fractional error of the model that the residuals in the
// stars' cores show beyond their noise.
func (s *fitState) excess() float64 {
	inv := 0.0
	if s.f.gain > 0 {
		inv = 1 / s.f.gain
	}
	lim2 := math.Pow(1.2*s.fwhm, 2)
	var vals, errs []float64
	for _, st := range s.st {
		var a, b, c float64
		var n int
		for k := range st.px {
			p := &st.px[k]
			if p.weight == 0 {
				continue
			}
			u, v := float64(st.i0+1+int(p.i))-st.x, float64(st.j0+1+int(p.j))-st.y
			if u*u+v*v > lim2 {
				continue
			}
			m2 := float64(p.model) * float64(p.model)
			noise := float64(p.sky) + math.Max(float64(p.model), 0)*inv
			res := float64(p.value-p.other) - st.sky - float64(p.model)
			a += m2 * (res*res - noise)
			b += m2 * m2
			c += 2 * m2 * m2 * noise * noise
			n++
		}
		if n < 6 || !(b > 0) {
			continue
		}
		// Three parameters of the star took their share of the noise.
		vals = append(vals, a/b)
		errs = append(errs, math.Sqrt(c)/b)
	}
	if len(vals) == 0 {
		return 0
	}
	// Weighted mean, with stars far above it held back.
	mid, wid := 0.0, math.Inf(1)
	for range 5 {
		var num, den float64
		for k := range vals {
			e := errs[k] + 1e-5
			w := 1 / (e*e + mid*mid)
			num += w * math.Min(vals[k], mid+4*(e+mid)+wid)
			den += w
		}
		mid = math.Max(0, num/den)
		wid = 0
	}
	return math.Sqrt(mid)
}

// finish sets what the model says about itself.
func (s *fitState) finish() {
	m := s.m
	m.Beta = m.prof.beta
	m.Stars, m.Rejected = len(s.st), s.rejected
	inv := 0.0
	if s.f.gain > 0 {
		inv = 1 / s.f.gain
	}
	lim2 := math.Pow(1.5*s.fwhm, 2)
	var chi []float64
	var signal float64
	s.mode = profileFixed
	s.each(func(st *fitStar) { s.evaluate(st, st.cur) })
	for _, st := range s.st {
		var sum, sn float64
		var n int
		for k := range st.px {
			p := &st.px[k]
			if p.weight == 0 {
				continue
			}
			sn += float64(p.model) * float64(p.model) * float64(p.weight)
			u, v := float64(st.i0+1+int(p.i))-st.x, float64(st.j0+1+int(p.j))-st.y
			if u*u+v*v > lim2 {
				continue
			}
			res := float64(p.value-p.other) - st.sky - float64(p.model)
			sum += res * res / (float64(p.sky) + math.Max(float64(p.model), 0)*inv)
			n++
		}
		signal += sn
		if n > 4 {
			chi = append(chi, sum/float64(n-3))
		}
		r := st.reduce(paramsBefore, 0)
		if r.good {
			for p := range 3 {
				for q := range 3 {
					m.sensitivity[p*3+q] += r.a[p][q]
				}
			}
		}
	}
	m.Chi2 = median(chi)
	if signal > 0 {
		for k := range m.sensitivity {
			m.sensitivity[k] /= signal
		}
	}
	a, _, nt, _ := s.global(0)
	n := 3 * nt
	for i := range n {
		a[i*n+i] *= 1 + 1e-9
	}
	if cholesky(a, n) {
		m.shapeCov = choleskyInverse(a, n)
	}
	e := s.excess()
	m.gridFrac = math.Sqrt(e*e + math.Max(0, s.gap)/math.Max(signal, 1) + 1e-8)
	// Global: mean over the stars.
	m.ModelFrac = m.gridFrac
	var sum float64
	for _, st := range s.st {
		u := m.Uncertainty(st.x, st.y)
		sum += u * u
	}
	m.ModelFrac = math.Sqrt(sum / float64(len(s.st)))
	m.recenter()
}
