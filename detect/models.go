package detect

import "math"

// evidence is what the pixels around one source say about its form. All
// chi-squares use the noise variance plus (modelError·flux·PSF)², so that a
// very bright source is not condemned for the last percent of the PSF model.
// The information criteria are chi² + parameters·ln(pixels) (Schwarz 1978,
// Ann. Statist. 6, 461); a difference of 10 is strong.
type evidence struct {
	pixels    int
	chi2      float64 // of the point source
	reduced   float64 // chi2 per degree of freedom
	bicPoint  float64
	bicHit    float64
	bicBroad  float64
	bicTrail  float64 // +Inf where not tried
	bicDipole float64 // +Inf where there is nothing of the other sign

	hitPixels int     // pixels in the best hit model
	hitRest   float64 // chi² per degree of freedom of what the hit leaves
	hitMinor  float64 // px², variance of the hit's light along its shorter axis

	sigma float64 // count, 1 sigma of a faint source's flux here: without its own light

	// Linear shape terms: excess variance along both axes and the excess of
	// one axis over the other, in units of the PSF's variance, with their
	// significances (size: signed; elongation: of two components).
	size, sizeSig   float64
	elong, elongSig float64
	angle           float64 // rad, of the longer axis from +x towards +y

	broad       float64 // best extra width, in units of the PSF's sigma
	oppose      float64 // strength of the other sign nearby: |flux of that| / |flux|
	dipoleSum   float64 // |f₁+f₂| / (|f₁|+|f₂|) of the dipole fit: 0 for a pure one
	trail       trailFit
	residue     residue
	contradicts float64 // fraction of the core's pixels beyond 3 sigma of the other sign
	flagged     float64 // fraction of PSF² under excluded pixels
}

// trailFit is a point source drawn along a line during the exposure.
type trailFit struct {
	ok           bool
	x, y, flux   float64
	lx, ly       float64 // px, end minus start
	fluxErr      float64
	xErr, yErr   float64
	length       float64 // px
	chi2         float64
	pixels, free int
}

const trailParams = 5

// inspect compares forms for source k of a group. radius is that of the
// window [px]. opposite is the place of the strongest response of the other
// sign nearby, nil if there is none; partner is the group's member that stands
// there, or -1. The light of all other members is taken away first.
func (ft *fitter) inspect(psf *localPSF, src []source, k int, radius, modelError float64, opposite *peak, partner int, elongated bool) evidence {
	ev := evidence{bicTrail: math.Inf(1), bicDipole: math.Inf(1), bicHit: math.Inf(1), bicBroad: math.Inf(1), residue: residue{bic: math.Inf(1), kept: math.NaN()}, angle: math.NaN(), sigma: math.NaN(), dipoleSum: 1}
	s := src[k]
	sign := 1.0
	if s.flux < 0 {
		sign = -1
	}
	centre := []source{{x0: s.x, y0: s.y}}
	w := ft.open(centre, radius)
	n := w.w * w.h
	if len(ft.patches) < len(src)+1 {
		ft.patches = append(ft.patches, make([]patch, len(src)+1-len(ft.patches))...)
	}
	p := &ft.patches[0]
	psf.draw(p, s.x, s.y, w.i0, w.j0, w.w, w.h, true)
	// Fraction of the footprint that cannot be used.
	var all, lost, inform float64
	for i := range n {
		q := p.p[i] * p.p[i]
		all += q
		if !w.use[i] {
			lost += q
		} else {
			inform += q / w.base[i]
		}
	}
	if inform > 0 {
		ev.sigma = 1 / math.Sqrt(inform)
	}
	// PSF² beyond the frame's border is lost as well.
	if whole := psf.sum2; whole > all {
		lost += whole - all
		all = whole
	}
	if all > 0 {
		ev.flagged = math.Min(1, lost/all)
	}
	if w.used < 9 || math.IsNaN(s.flux) {
		ev.reduced = math.NaN()
		return ev
	}
	ft.vari = resize(ft.vari, n)
	copy(ft.vari, w.base[:n])
	photon := 0.0
	if ft.gain > 0 && !math.IsInf(ft.gain, 0) {
		photon = 1 / ft.gain
	}
	// Take the other sources away.
	q := &ft.patches[1]
	for l := range src {
		if l == k || l == partner || math.IsNaN(src[l].flux) || math.Hypot(src[l].x-s.x, src[l].y-s.y) > radius+float64(psf.radius) {
			continue
		}
		psf.draw(q, src[l].x, src[l].y, w.i0, w.j0, w.w, w.h, false)
		f := src[l].flux
		for i := range n {
			m := f * q.p[i]
			w.data[i] -= m
			ft.vari[i] += math.Max(m, 0)*photon + modelError*modelError*m*m
		}
	}
	for i := range n {
		m := s.flux * p.p[i]
		ft.vari[i] += math.Max(m, 0)*photon + modelError*modelError*m*m
	}
	ev.pixels = w.used
	logN := math.Log(float64(w.used))

	var chi0, core, against float64
	for i := range n {
		if !w.use[i] {
			continue
		}
		wt := 1 / ft.vari[i]
		d := w.data[i]
		r := d - s.flux*p.p[i]
		chi0 += d * d * wt
		ev.chi2 += r * r * wt
		dx, dy := float64(w.i0+i%w.w+1)-s.x, float64(w.j0+i/w.w+1)-s.y
		if dx*dx+dy*dy <= 5.5*psf.sigma2 { // a radius of one FWHM
			core++
			if sign*d < 0 && d*d*wt > 9 {
				against++
			}
		}
	}
	dof := math.Max(1, float64(w.used-3))
	ev.reduced = ev.chi2 / dof
	ev.bicPoint = ev.chi2 + 3*logN
	if core > 0 {
		ev.contradicts = against / core
	}

	ft.shapeTerms(psf, &ev, s.flux)
	ft.hitModel(&ev, sign, chi0, logN, s.x, s.y, psf.fwhm)
	ft.broadModel(psf, &ev, logN)
	if opposite != nil {
		ft.dipoleModel(psf, &ev, &s, opposite, logN)
	}
	ft.residueModel(&ev, s.flux, logN)
	if s.flux > 0 && (elongated || ev.elongSig > 4 && ev.elong > 0.15) {
		minus := make([]source, 0, len(src))
		for l := range src {
			if l != k && !math.IsNaN(src[l].flux) {
				minus = append(minus, src[l])
			}
		}
		ft.trailModel(psf, &ev, &s, minus, radius, modelError)
	}
	return ev
}

// shapeTerms fits PSF, its shift and its second derivatives linearly.
func (ft *fitter) shapeTerms(psf *localPSF, ev *evidence, flux float64) {
	w, p := &ft.win, &ft.patches[0]
	const m = 6
	var a [m * m]float64
	var b [m]float64
	for i := range w.data {
		if !w.use[i] {
			continue
		}
		g := [m]float64{p.p[i], p.px[i], p.py[i], p.pxx[i] + p.pyy[i], p.pxx[i] - p.pyy[i], 2 * p.pxy[i]}
		wt := 1 / ft.vari[i]
		for k := range m {
			gk := g[k] * wt
			b[k] += gk * w.data[i]
			for l := 0; l <= k; l++ {
				a[k*m+l] += gk * g[l]
			}
		}
	}
	for k := range m {
		for l := range k {
			a[l*m+k] = a[k*m+l]
		}
	}
	if !invert(a[:], m) {
		return
	}
	var c [m]float64
	for k := range m {
		for l := range m {
			c[k] += a[k*m+l] * b[l]
		}
	}
	// A source blurred by a Gaussian of variance s is P + s/2·∇²P to first
	// order, so the coefficient is flux·s/2.
	f := flux * psf.sigma2
	ev.size = 2 * c[3] / f
	ev.sizeSig = c[3] / math.Sqrt(a[3*m+3])
	if flux < 0 {
		ev.sizeSig = -ev.sizeSig
	}
	e1, e2 := 2*c[4]/f, 2*c[5]/f
	ev.elong = math.Hypot(e1, e2)
	ev.angle = math.Atan2(e2, e1) / 2
	// Chi-square of the two components with their covariance.
	v11, v22, v12 := a[4*m+4], a[5*m+5], a[4*m+5]
	det := v11*v22 - v12*v12
	if det > 0 {
		ev.elongSig = math.Sqrt(math.Max(0, (c[4]*c[4]*v22-2*c[4]*c[5]*v12+c[5]*c[5]*v11)/det))
	}
}

// hitModel describes the data as a few pixels of any value, grown from the
// most significant one near the centre over touching pixels while each pays
// for itself. It costs ln(pixels) a value and another for its place.
func (ft *fitter) hitModel(ev *evidence, sign, chi0, logN, x, y, fwhm float64) {
	w := &ft.win
	const most = 48
	var member [most]int
	count := 0
	taken := func(i int) bool {
		for _, t := range member[:count] {
			if t == i {
				return true
			}
		}
		return false
	}
	chi := chi0
	best := math.Inf(1)
	reach := math.Max(1.5, 0.75*fwhm)
	for count < most {
		at, top := -1, 2*logN
		for i := range w.data {
			if !w.use[i] || sign*w.data[i] <= 0 {
				continue
			}
			gain := w.data[i] * w.data[i] / ft.vari[i]
			if gain <= top {
				continue
			}
			px, py := i%w.w, i/w.w
			if count == 0 {
				if math.Abs(float64(w.i0+px+1)-x) > reach || math.Abs(float64(w.j0+py+1)-y) > reach {
					continue
				}
			} else {
				touch := false
				for _, t := range member[:count] {
					if dx, dy := px-t%w.w, py-t/w.w; dx >= -1 && dx <= 1 && dy >= -1 && dy <= 1 {
						touch = true
						break
					}
				}
				if !touch || taken(i) {
					continue
				}
			}
			at, top = i, gain
		}
		if at < 0 {
			break
		}
		member[count] = at
		count++
		chi -= top
		if bic := chi + 2*float64(count)*logN; bic < best {
			best = bic
			ev.hitPixels = count
			ev.hitMinor = w.minorVariance(member[:count])
			ev.hitRest = chi / math.Max(1, float64(w.used-count))
		}
	}
	ev.bicHit = best
}

// minorVariance returns the variance along the shorter axis of the light in a
// few pixels, each taken as a point.
func (w *window) minorVariance(member []int) float64 {
	var n, x, y, xx, yy, xy float64
	for _, i := range member {
		v := math.Abs(w.data[i])
		a, b := float64(i%w.w), float64(i/w.w)
		n += v
		x += v * a
		y += v * b
		xx += v * a * a
		yy += v * b * b
		xy += v * a * b
	}
	x, y = x/n, y/n
	xx, yy, xy = xx/n-x*x, yy/n-y*y, xy/n-x*y
	return math.Max(0, (xx+yy)/2-math.Hypot((xx-yy)/2, xy))
}

// broadModel tries the PSF blurred by round Gaussians.
func (ft *fitter) broadModel(psf *localPSF, ev *evidence, logN float64) {
	w, p := &ft.win, &ft.patches[0]
	sigma := math.Sqrt(psf.sigma2)
	n := w.w * w.h
	tmp, out := make([]float64, n), make([]float64, n)
	for _, extra := range [...]float64{0.6, 1.0, 1.6, 2.5} {
		blurPlane(out, tmp, p.p[:n], w.w, w.h, extra*sigma)
		var pd, pp, dd float64
		for i := range n {
			if !w.use[i] {
				continue
			}
			wt := 1 / ft.vari[i]
			pd += out[i] * w.data[i] * wt
			pp += out[i] * out[i] * wt
			dd += w.data[i] * w.data[i] * wt
		}
		if pp <= 0 {
			continue
		}
		if bic := dd - pd*pd/pp + 4*logN; bic < ev.bicBroad {
			ev.bicBroad, ev.broad = bic, extra
		}
	}
}

// blurPlane convolves with a round Gaussian; outside is zero.
func blurPlane(dst, tmp, src []float64, w, h int, sigma float64) {
	r := int(math.Ceil(3 * sigma))
	k := make([]float64, 2*r+1)
	var sum float64
	for i := range k {
		d := float64(i-r) / sigma
		k[i] = math.Exp(-d * d / 2)
		sum += k[i]
	}
	for i := range k {
		k[i] /= sum
	}
	for j := range h {
		for i := range w {
			var s float64
			for t := max(-r, -i); t <= min(r, w-1-i); t++ {
				s += k[t+r] * src[j*w+i+t]
			}
			tmp[j*w+i] = s
		}
	}
	for j := range h {
		row := dst[j*w : (j+1)*w]
		clear(row)
		for t := max(-r, -j); t <= min(r, h-1-j); t++ {
			c := k[t+r]
			for i, v := range tmp[(j+t)*w : (j+t+1)*w] {
				row[i] += c * v
			}
		}
	}
}

// dipoleModel adds a second source of free flux where the response of the
// other sign is strongest.
func (ft *fitter) dipoleModel(psf *localPSF, ev *evidence, s *source, o *peak, logN float64) {
	w, p, q := &ft.win, &ft.patches[0], &ft.patches[1]
	psf.draw(q, o.x, o.y, w.i0, w.j0, w.w, w.h, false)
	var pp, qq, pq, pd, qd, dd float64
	for i := range w.data {
		if !w.use[i] {
			continue
		}
		wt := 1 / ft.vari[i]
		a, b, d := p.p[i], q.p[i], w.data[i]
		pp += a * a * wt
		qq += b * b * wt
		pq += a * b * wt
		pd += a * d * wt
		qd += b * d * wt
		dd += d * d * wt
	}
	det := pp*qq - pq*pq
	if !(det > 1e-9*pp*qq) {
		return
	}
	f1, f2 := (qq*pd-pq*qd)/det, (pp*qd-pq*pd)/det
	if f1*f2 >= 0 {
		return
	}
	ev.bicDipole = dd - f1*pd - f2*qd + 6*logN
	ev.oppose = math.Abs(f2) / math.Abs(f1)
	ev.dipoleSum = math.Abs(f1+f2) / (math.Abs(f1) + math.Abs(f2))
}

// trailModel fits a PSF drawn out along a straight line at even speed:
// flux, centre, and the vector from start to end. The point and trail
// criteria are compared on a window that holds the trail.
func (ft *fitter) trailModel(psf *localPSF, ev *evidence, s *source, minus []source, radius, modelError float64) {
	sigma := math.Sqrt(psf.sigma2)
	// The linear term overshoots on a long trail.
	start := math.Sqrt(24*math.Max(0.05, math.Min(ev.elong, 3))) * sigma
	if math.IsNaN(start + ev.angle) {
		return
	}
	t, point := ft.fitTrail(psf, minus, s.x, s.y, start*math.Cos(ev.angle), start*math.Sin(ev.angle), s.flux, radius+start/2, modelError)
	if t.ok && t.length > radius {
		// The window was too small for what was found: once more.
		t, point = ft.fitTrail(psf, minus, t.x, t.y, t.lx, t.ly, t.flux, radius+t.length/2, modelError)
	}
	if !t.ok {
		return
	}
	ev.trail = t
	// On the same scale as the other criteria: what the trail gains over the
	// point source on the trail's own window.
	logN := math.Log(float64(t.pixels))
	ev.bicTrail = ev.bicPoint + (t.chi2 + trailParams*logN) - (point + 3*logN)
}

// fitTrail returns the fit and the chi-square of the best point source at the
// same centre on the same pixels. It opens its own window and takes the light
// of the sources in minus away.
func (ft *fitter) fitTrail(psf *localPSF, minus []source, x, y, lx, ly, flux, radius, modelError float64) (t trailFit, pointChi2 float64) {
	sigma := math.Sqrt(psf.sigma2)
	radius = math.Min(radius, 120)
	one := []source{{x0: x, y0: y}}
	w := ft.open(one, radius)
	n := w.w * w.h
	if w.used < 12 {
		return t, math.NaN()
	}
	for len(ft.patches) < 2 {
		ft.patches = append(ft.patches, patch{})
	}
	photon := 0.0
	if ft.gain > 0 && !math.IsInf(ft.gain, 0) {
		photon = 1 / ft.gain
	}
	model := make([]float64, 5*n)
	vari := make([]float64, n)
	p := &ft.patches[0]
	for l := range minus {
		psf.draw(p, minus[l].x, minus[l].y, w.i0, w.j0, w.w, w.h, false)
		for i := range n {
			m := minus[l].flux * p.p[i]
			w.data[i] -= m
			w.base[i] += math.Max(m, 0)*photon + modelError*modelError*m*m
		}
	}
	draw := func() {
		clear(model)
		length := math.Min(math.Hypot(lx, ly), 2*radius)
		steps := 1 + int(math.Ceil(length/(0.8*sigma)))
		inv := 1 / float64(steps)
		for k := range steps {
			u := (float64(k)+0.5)*inv - 0.5
			// Points at the middles of equal parts have a little less variance
			// than the line; stretch them to the same second moment.
			if steps > 1 {
				u *= math.Sqrt(1 / (1 - inv*inv))
			} else {
				u = 0
			}
			// Only the rectangle that the point reaches.
			psf.draw(p, x+u*lx, y+u*ly, w.i0, w.j0, w.w, w.h, false)
			for i, v := range p.p[:n] {
				g := model[5*i : 5*i+5 : 5*i+5]
				dx, dy := p.px[i]*inv, p.py[i]*inv
				g[0] += v * inv
				g[1] += dx
				g[2] += dy
				g[3] += u * dx
				g[4] += u * dy
			}
		}
	}
	const m = trailParams
	var a [m * m]float64
	var b [m]float64
	accumulate := func() float64 {
		clear(a[:])
		clear(b[:])
		var chi2 float64
		for i := range n {
			if !w.use[i] {
				continue
			}
			g := [m]float64{model[5*i], flux * model[5*i+1], flux * model[5*i+2], flux * model[5*i+3], flux * model[5*i+4]}
			mv := flux * g[0]
			vari[i] = w.base[i] + math.Max(mv, 0)*photon + modelError*modelError*mv*mv
			wt := 1 / vari[i]
			r := w.data[i] - mv
			chi2 += r * r * wt
			for k := range m {
				gk := g[k] * wt
				b[k] += gk * r
				for l := 0; l <= k; l++ {
					a[k*m+l] += gk * g[l]
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
	x0, y0 := x, y
	for range 15 {
		draw()
		accumulate()
		for k := 1; k < m; k++ {
			a[k*m+k] *= 1 + 1e-3 // a little damping
		}
		if !choleskySolve(a[:], b[:], m) {
			return t, math.NaN()
		}
		limit := 1.5 * sigma
		for k := 1; k < m; k++ {
			b[k] = math.Max(-limit, math.Min(limit, b[k]))
		}
		flux += b[0]
		x, y = x+b[1], y+b[2]
		lx, ly = lx+b[3], ly+b[4]
		if math.IsNaN(flux+x+y+lx+ly) || flux <= 0 || math.Hypot(x-x0, y-y0) > radius || math.Hypot(lx, ly) > 2*radius {
			return t, math.NaN()
		}
		if math.Abs(b[1])+math.Abs(b[2])+math.Abs(b[3])+math.Abs(b[4]) < 2e-3*sigma {
			break
		}
	}
	draw()
	t = trailFit{ok: true, x: x, y: y, lx: lx, ly: ly, flux: flux, length: math.Hypot(lx, ly), pixels: w.used, free: w.used - m}
	t.chi2 = accumulate()
	if !invert(a[:], m) {
		return trailFit{}, math.NaN()
	}
	t.fluxErr, t.xErr, t.yErr = math.Sqrt(a[0]), math.Sqrt(a[m+1]), math.Sqrt(a[2*m+2])
	psf.draw(p, x0, y0, w.i0, w.j0, w.w, w.h, false)
	var pp, pd, dd float64
	for i := range n {
		if w.use[i] {
			wt := 1 / vari[i]
			pp += p.p[i] * p.p[i] * wt
			pd += p.p[i] * w.data[i] * wt
			dd += w.data[i] * w.data[i] * wt
		}
	}
	if pp > 0 {
		pointChi2 = dd - pd*pd/pp
	} else {
		pointChi2 = dd
	}
	return t, pointChi2
}

// chi2Sources returns the chi-square of a set of point sources on the window
// of a trail, with the same allowances.
func (ft *fitter) chi2Sources(psf *localPSF, src []source, x, y, radius, modelError float64) (chi2 float64, pixels int) {
	w := ft.open([]source{{x0: x, y0: y}}, math.Min(radius, 120))
	n := w.w * w.h
	photon := 0.0
	if ft.gain > 0 && !math.IsInf(ft.gain, 0) {
		photon = 1 / ft.gain
	}
	model, vari := make([]float64, n), make([]float64, n)
	copy(vari, w.base[:n])
	p := &ft.patches[0]
	for k := range src {
		if math.IsNaN(src[k].flux) {
			continue
		}
		psf.draw(p, src[k].x, src[k].y, w.i0, w.j0, w.w, w.h, false)
		for i := range n {
			m := src[k].flux * p.p[i]
			model[i] += m
			vari[i] += math.Max(m, 0)*photon + modelError*modelError*m*m
		}
	}
	for i := range n {
		if w.use[i] {
			r := w.data[i] - model[i]
			chi2 += r * r / vari[i]
			pixels++
		}
	}
	return chi2, pixels
}
