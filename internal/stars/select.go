package stars

import (
	"cmp"
	"math"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// source is a star in the making.
type source struct {
	Star
	shape
	rho       float64
	burnt     float64 // px, radius of its saturated pixels
	sn        float64 // of the matched amplitude
	s2        float64 // √det of the moments, px²; NaN without moments
	e1, e2    float64
	near      frame.Flag // flags within two FWHM
	crowded   float64    // light of neighbours at its centre, relative to its own peak
	starlike  bool
	converged bool
}

// measureAll turns peaks into the list.
func (f *finder) measureAll(peaks []peak) *List {
	list := &List{Window: f.sigma, FWHM: math.NaN(), Roundness: math.NaN()}
	all := make([]source, 0, len(peaks))
	taken := newGrid(f.img.Width, f.img.Height, f.fwhm)
	for _, p := range peaks {
		s, ok := f.measureOne(p)
		if !ok || s.sn < 0.7*f.cfg.Threshold {
			continue
		}
		// Centroids of faint peaks may slide onto a brighter neighbour.
		own := true
		taken.near(s.X, s.Y, 0.7*f.fwhm, func(int, float64) { own = false })
		if !own {
			continue
		}
		taken.add(len(all), s.X, s.Y)
		all = append(all, s)
	}
	if len(all) == 0 {
		return list
	}
	f.neighbours(all, 2.8)
	l := f.locus(all)
	kept := all[:0]
	for _, s := range all {
		if f.tooSharp(&s, l) {
			list.Sharp++
			continue
		}
		kept = append(kept, s)
	}
	all = kept
	c := f.composite(all)
	f.calibrate(all, c, l)
	f.neighbours(all, c.beta)
	for k := range all {
		s := &all[k]
		s.Clean = s.starlike && s.FWHM == s.FWHM && s.SN >= f.cfg.CleanSN && s.converged && s.near == 0 && s.burnt == 0 &&
			s.Neighbour > 3*f.fwhm && s.crowded < 0.03
		if s.Clean {
			list.Clean++
		}
	}
	slices.SortFunc(all, func(a, b source) int {
		return cmp.Or(cmp.Compare(b.Flux, a.Flux), cmp.Compare(a.Y, b.Y), cmp.Compare(a.X, b.X))
	})
	list.Stars = make([]Star, len(all))
	var widths, round []float64
	for k := range all {
		list.Stars[k] = all[k].Star
	}
	for _, clean := range []bool{true, false} {
		widths, round = widths[:0], round[:0]
		for k := range all {
			if s := &all[k]; (s.Clean || !clean) && s.FWHM == s.FWHM {
				widths, round = append(widths, s.FWHM), append(round, s.Roundness)
			}
		}
		if len(widths) >= 5 {
			break
		}
	}
	list.FWHM, list.Roundness = robust.Median(widths), robust.Median(round)
	return list
}

// measureOne centres and measures one peak.
func (f *finder) measureOne(p peak) (s source, ok bool) {
	noise := f.bg.Noise(p.x+1, p.y+1)
	variance := noise * noise
	sigma := f.sigma
	if p.burnt > 0 {
		// Only the wings are left to centre on.
		sigma = math.Max(sigma, math.Min(0.8*p.burnt, 20))
	}
	radius := int(math.Ceil(4*sigma)) + 2
	f.cut.cut(int(math.Round(p.x)), int(math.Round(p.y)), radius)
	s.burnt, s.rho = p.burnt, 0
	if f.gain > 0 && p.burnt == 0 {
		s.rho = math.Min(maxRho, math.Max(0, p.sn*noise/(f.sigma*math.SqrtPi))/(f.gain*variance))
	}
	limit := 0.8 * f.fwhm
	if p.burnt > 0 {
		limit = math.Max(limit, 0.5*p.burnt)
	}
	x, y, fine := f.cut.centroid(p.x, p.y, sigma, s.rho, limit)
	s.converged = fine
	s.X, s.Y = x+1, y+1
	s.shape = f.cut.measure(x, y, sigma, s.rho, variance, f.gain)
	s.XErr, s.YErr = s.xErr, s.yErr
	s.Peak = s.peak
	s.sky = variance
	s.FWHM, s.Mxx, s.Myy, s.Mxy, s.Roundness = math.NaN(), math.NaN(), math.NaN(), math.NaN(), math.NaN()
	s.s2 = math.NaN()
	s.Flags = f.flagsNear(x, y, math.Max(1, 0.5*f.fwhm))
	s.near = f.flagsNear(x, y, 2*f.fwhm)
	if p.burnt > 0 {
		s.Flags |= frame.Saturated
		s.flatFlux(f, x, y, p.burnt)
		formal := math.Max(0, math.Hypot(s.xErr, s.yErr))
		rough := 0.1 + 0.1*p.burnt
		if !fine {
			rough = 0.5 + 0.3*p.burnt
		}
		if !(formal < rough) {
			formal = rough
		}
		s.XErr, s.YErr = math.Max(formal, 0.1*rough), math.Max(formal, 0.1*rough)
		return s, s.sn > 0
	}
	if !(s.amp > 0) || s.usable < 0.3 {
		return s, false
	}
	s.sn = s.amp / s.ampErr
	if !fine {
		s.XErr, s.YErr = math.Max(s.XErr, 0.3*f.sigma), math.Max(s.YErr, 0.3*f.sigma)
	}
	if a, b, c, good := unwindow(s.mxx, s.myy, s.mxy, sigma); good {
		s.Mxx, s.Myy, s.Mxy = a, b, c
		s.s2 = math.Sqrt(a*b - c*c)
		s.e1, s.e2 = (a-b)/(2*s.s2), c/s.s2
		s.Roundness = axisRatio(a, b, c)
	}
	return s, true
}

// flatFlux sums what a burnt-out star shows, a lower limit of its flux.
func (s *source) flatFlux(f *finder, x, y, burnt float64) {
	r := burnt + 1.5*f.fwhm
	w, h := f.img.Width, f.img.Height
	sum, n := 0.0, 0
	peak := math.NaN()
	for j := max(0, int(y-r)); j <= min(h-1, int(y+r)); j++ {
		for i := max(0, int(x-r)); i <= min(w-1, int(x+r)); i++ {
			if math.Hypot(float64(i)-x, float64(j)-y) > r {
				continue
			}
			if v := float64(f.img.Pix[j*w+i]); v > -huge && v < huge {
				sum += v
				n++
				if !(v <= peak) {
					peak = v
				}
			}
		}
	}
	s.Flux, s.Peak = sum, peak
	s.FluxErr = math.Sqrt(float64(n) * s.sky)
	if f.gain > 0 {
		s.FluxErr = math.Sqrt(float64(n)*s.sky + math.Max(0, sum)/f.gain)
	}
	s.FluxErr = math.Max(s.FluxErr, 0.1*math.Abs(sum))
	s.sn = s.Flux / s.FluxErr
	s.SN = s.sn
	s.amp = s.Flux / (2 * math.Pi * f.sigma * f.sigma)
}

// neighbours fills Neighbour and crowded.
func (f *finder) neighbours(all []source, beta float64) {
	reach := math.Max(12*f.fwhm, 40)
	g := newGrid(f.img.Width, f.img.Height, math.Max(reach/3, 16))
	for k := range all {
		g.add(k, all[k].X, all[k].Y)
	}
	beta = math.Min(beta, 3)
	alpha := f.fwhm / (2 * math.Sqrt(math.Pow(2, 1/beta)-1))
	for k := range all {
		s := &all[k]
		s.Neighbour, s.crowded = math.Inf(1), 0
		g.near(s.X, s.Y, reach, func(o int, d float64) {
			if o == k {
				return
			}
			ratio := all[o].amp / s.amp
			if ratio > 0.03 {
				s.Neighbour = math.Min(s.Neighbour, d)
			}
			s.crowded += ratio * math.Pow(1+d*d/(alpha*alpha), -beta)
		})
	}
}

// lowestMode returns where a sorted sample of logarithms of widths crowds: the
// lowest maximum of its density, smoothed over about width, that reaches 40 %
// of the highest one. Stars are the sharpest things that the sky sends, and
// have one width; galaxies may be more in number but spread over many. A sample
// of fewer than six gives its median.
func lowestMode(sorted []float64, width float64) float64 {
	n := len(sorted)
	if n < 6 {
		return sorted[n/2]
	}
	width *= math.Max(1, math.Pow(50/float64(n), 0.3))
	bin := width / 3
	first := sorted[0] - 3*bin
	counts := make([]float64, min(int((sorted[n-1]-first)/bin)+4, 100000))
	for _, v := range sorted {
		counts[min(int((v-first)/bin), len(counts)-1)]++
	}
	kernel := [5]float64{1, 2, 3, 2, 1}
	smooth := make([]float64, len(counts))
	highest := 0.0
	for k := range smooth {
		for d, w := range kernel {
			if i := k + d - 2; i >= 0 && i < len(counts) {
				smooth[k] += w * counts[i]
			}
		}
		highest = math.Max(highest, smooth[k])
	}
	for k := range smooth {
		before, after := 0.0, 0.0
		if k > 0 {
			before = smooth[k-1]
		}
		if k+1 < len(smooth) {
			after = smooth[k+1]
		}
		if smooth[k] < 0.4*highest || smooth[k] < before || smooth[k] < after {
			continue
		}
		centre := first + (float64(k)+0.5)*bin
		from, _ := slices.BinarySearch(sorted, centre-1.2*width)
		to, _ := slices.BinarySearch(sorted, centre+1.2*width)
		return sorted[(from+to)/2]
	}
	return sorted[n/2]
}

// locusFit is where stars lie in width and elongation over the frame.
type locusFit struct {
	ok         bool
	f          *finder
	terms      int
	size       []float64 // ln √det
	e1, e2     []float64
	scatter    float64 // of ln √det, without the stars' own noise
	scatterE   float64
	sampleSize int
}

func (l *locusFit) at(c []float64, x, y float64) float64 {
	var row [6]float64
	v := 0.0
	for k, b := range l.f.basis(row[:0], x, y, l.terms) {
		v += c[k] * b
	}
	return v
}

// basis appends the terms of a polynomial in position, scaled to −1…1.
func (f *finder) basis(dst []float64, x, y float64, terms int) []float64 {
	u := (2*x - 1 - float64(f.img.Width)) / float64(f.img.Width)
	v := (2*y - 1 - float64(f.img.Height)) / float64(f.img.Height)
	dst = append(dst, 1)
	if terms >= 3 {
		dst = append(dst, u, v)
	}
	if terms >= 6 {
		dst = append(dst, u*u, u*v, v*v)
	}
	return dst
}

func termsFor(n int) int {
	switch {
	case n >= 120:
		return 6
	case n >= 30:
		return 3
	}
	return 1
}

// Noise of the moments of a star of signal to noise S: ln √det scatters by
// sizeNoise/S, each elongation by shapeNoise/S (a round Gaussian star on sky
// noise under a window of its own width; find_test.go checks both).
const sizeNoise, shapeNoise = 2.83, 2.83

// locus fits the stars' width and elongation against position and marks the
// star-like sources. Stars crowd in width, galaxies and blends are wider, hits
// are sharper; the start is the mode of the widths of bright unflagged sources.
func (f *finder) locus(all []source) *locusFit {
	l := &locusFit{f: f}
	// Hits crowd too, and may be more than the stars: firstWidth, which knows
	// them by less than a pixel's width, sets the lower bound.
	sharpest := 2*math.Log(f.sigma) - 0.7
	var pick []int
	for _, least := range []float64{25, 12, 0} {
		pick = pick[:0]
		for k := range all {
			s := &all[k]
			if s.s2 == s.s2 && math.Log(s.s2) > sharpest && s.sn >= least && s.near&frame.Unusable == 0 && s.converged && s.crowded < 0.1 && s.Neighbour > 2*f.fwhm {
				pick = append(pick, k)
			}
		}
		if len(pick) >= 12 {
			break
		}
	}
	if len(pick) > 4000 { // the brightest tell enough
		pick = pick[:4000]
	}
	if len(pick) < 3 {
		return l
	}
	sorted := make([]float64, len(pick))
	for i, k := range pick {
		sorted[i] = math.Log(all[k].s2)
	}
	slices.Sort(sorted)
	mode := lowestMode(sorted, 0.14)
	kept := pick[:0]
	for _, k := range pick {
		if d := math.Log(all[k].s2) - mode; d > -0.6 && d < 0.5 {
			kept = append(kept, k)
		}
	}
	pick = kept
	n := len(pick)
	if n < 3 {
		return l
	}
	fit := func(terms int, value func(s *source) float64, noise float64) ([]float64, float64, bool) {
		design := make([]float64, 0, n*terms)
		y, w := make([]float64, n), make([]float64, n)
		for i, k := range pick {
			s := &all[k]
			design = f.basis(design, s.X, s.Y, terms)
			y[i] = value(s)
			e := noise / s.sn
			w[i] = 1 / (e*e + 0.02*0.02)
		}
		r, err := robust.LinearFit(design, terms, y, w, 4.685, 30)
		if err != nil {
			return nil, 0, false
		}
		// The scatter beyond the stars' own noise, from the side without
		// galaxies.
		low := make([]float64, 0, n)
		for i := range y {
			m := 0.0
			for t, c := range r.Coefficients {
				m += c * design[i*terms+t]
			}
			if d := y[i] - m; d < 0 {
				low = append(low, d*d*w[i])
			}
		}
		excess := robust.Median(low) * robust.GaussianMAD * robust.GaussianMAD // 1 if noise and 2 % explain all
		if len(low) == 0 {
			excess = 1
		}
		return r.Coefficients, 0.02 * math.Sqrt(math.Max(1, excess)), true
	}
	l.terms = termsFor(n)
	for ; ; l.terms /= 2 {
		var ok [3]bool
		var se [3]float64
		l.size, se[0], ok[0] = fit(l.terms, func(s *source) float64 { return math.Log(s.s2) }, sizeNoise)
		l.e1, se[1], ok[1] = fit(l.terms, func(s *source) float64 { return s.e1 }, shapeNoise)
		l.e2, se[2], ok[2] = fit(l.terms, func(s *source) float64 { return s.e2 }, shapeNoise)
		if ok[0] && ok[1] && ok[2] {
			l.scatter, l.scatterE = se[0], math.Max(se[1], se[2])
			break
		}
		if l.terms <= 1 {
			return l
		}
	}
	l.ok, l.sampleSize = true, n
	for k := range all {
		s := &all[k]
		if s.s2 != s.s2 || !s.converged {
			// Moments fail for what is too wide for the window, and for hits.
			s.Extended = s.burnt == 0 && s.mxx+s.myy > f.sigma*f.sigma
			continue
		}
		size := math.Hypot(l.scatter, sizeNoise/s.sn)
		shape := math.Hypot(l.scatterE, shapeNoise/s.sn)
		d := math.Log(s.s2) - l.at(l.size, s.X, s.Y)
		d1, d2 := s.e1-l.at(l.e1, s.X, s.Y), s.e2-l.at(l.e2, s.X, s.Y)
		long := math.Hypot(d1, d2)
		s.starlike = d > -3.5*size && d < 3*size && d < 0.4 && long < 3.7*shape && long < 0.4
		s.Extended = s.burnt == 0 && (d > 3*size || long > 3.7*shape)
	}
	return l
}

// tooSharp reports a source that no point-spread function of this frame can
// make: far below the locus of the stars, beyond its noise.
func (f *finder) tooSharp(s *source, l *locusFit) bool {
	if s.burnt > 0 || s.near&frame.Saturated != 0 {
		return false
	}
	typical := 2 * math.Log(f.sigma)
	if l.ok {
		typical = l.at(l.size, s.X, s.Y)
	}
	// ln √det of a hit on a single pixel is −∞; its windowed moments may even
	// fail to be an ellipse.
	size := math.Inf(-1)
	switch {
	case s.s2 == s.s2:
		size = math.Log(s.s2)
	case s.mxx+s.myy > f.sigma*f.sigma: // too wide for the window, not too sharp
		return false
	}
	return s.sn > 8 && size < typical-0.8-3*sizeNoise/s.sn
}

// compositeFit is the mean profile of the bright stars, a Moffat function of
// the distance u in units of each star's sigma, for a matched amplitude of 1.
type compositeFit struct {
	ok      bool
	peak    float64
	a, beta float64 // core radius in units of sigma, exponent
	half    float64 // half width at half maximum in units of sigma, pixel included
	pixel   float64 // px²: what the pixel adds to FWHM²
	stars   []int
}

// composite measures that profile.
func (f *finder) composite(all []source) compositeFit {
	c := compositeFit{beta: 3.5, peak: 1.03}
	for _, least := range []float64{60, 25, 7} {
		c.stars = c.stars[:0]
		for k := range all {
			s := &all[k]
			if s.starlike && s.sn >= least && s.near == 0 && s.crowded < 0.02 && s.Neighbour > 4*f.fwhm {
				c.stars = append(c.stars, k)
			}
		}
		if len(c.stars) >= 8 {
			break
		}
	}
	slices.SortFunc(c.stars, func(i, j int) int { return cmp.Or(cmp.Compare(all[j].amp, all[i].amp), cmp.Compare(i, j)) })
	const width, last = 0.15, 4.5
	if use := c.stars[:min(len(c.stars), 60)]; len(use) >= 2 {
		const bins = int(last / width)
		var val, weight, dist [bins][]float64
		for _, k := range use {
			s := &all[k]
			det := s.s2 * s.s2
			radius := int(math.Ceil(last * math.Sqrt(math.Max(s.Mxx, s.Myy))))
			f.cut.cut(int(math.Round(s.X))-1, int(math.Round(s.Y))-1, radius)
			for b := 0; b < f.cut.size; b++ {
				for a := 0; a < f.cut.size; a++ {
					p := f.cut.pix[b*f.cut.size+a]
					x, y := float64(f.cut.i0+a+1)-s.X, float64(f.cut.j0+b+1)-s.Y
					u := math.Sqrt((s.Myy*x*x - 2*s.Mxy*x*y + s.Mxx*y*y) / det)
					if t := int(u / width); p == p && t < bins {
						val[t] = append(val[t], p/s.amp)
						weight[t] = append(weight[t], s.amp*s.amp)
						dist[t] = append(dist[t], u)
					}
				}
			}
		}
		var r, y, w []float64
		for t := range val {
			if len(val[t]) < 3 {
				continue
			}
			med, mad := robust.MedianMAD(slices.Clone(val[t]))
			var sv, sw, su, s2, n float64
			for i, v := range val[t] {
				if math.Abs(v-med) <= 3*mad+0.01 {
					sv += weight[t][i] * v
					su += weight[t][i] * dist[t][i] * dist[t][i]
					sw += weight[t][i]
					s2 += (v - med) * (v - med)
					n++
				}
			}
			if n < 2 {
				continue
			}
			r = append(r, math.Sqrt(su/sw))
			y = append(y, sv/sw)
			w = append(w, 1/(s2/n/n+1e-5+1e-4*sv*sv/(sw*sw)))
		}
		if len(r) >= 8 {
			c.ok = c.fit(r, y, w)
		}
	}
	if !c.ok {
		// Too few bright stars: a common seeing profile, matched in width to the
		// Gaussian.
		c.beta, c.peak = 3.5, 1.03
		c.a = 1.13 / math.Sqrt(math.Pow(2, 1/c.beta)-1)
	}
	c.half = c.a * math.Sqrt(math.Pow(2, 1/c.beta)-1)
	// Without the pixel the profile is p − ∇²p/24 in px, to second order.
	s2 := 1 / (24 * f.sigma * f.sigma)
	sharp := func(u float64) float64 {
		q := u * u / (c.a * c.a)
		lap := 4 * c.beta / (c.a * c.a) * math.Pow(1+q, -c.beta-2) * ((c.beta+1)*q - (1 + q))
		return math.Pow(1+q, -c.beta) - s2*lap
	}
	lo, hi := 0.2*c.half, c.half
	for i := 0; i < 50; i++ {
		if mid := (lo + hi) / 2; sharp(mid) > sharp(0)/2 {
			lo = mid
		} else {
			hi = mid
		}
	}
	c.pixel = 4 * f.sigma * f.sigma * (c.half*c.half - lo*lo)
	return c
}

// fit finds the Moffat function closest to the profile.
func (c *compositeFit) fit(r, y, w []float64) bool {
	chi := func(a, beta float64) (x2, peak float64) {
		var mm, my float64
		for i := range r {
			m := math.Pow(1+r[i]*r[i]/(a*a), -beta)
			mm += w[i] * m * m
			my += w[i] * m * y[i]
		}
		peak = my / mm
		for i := range r {
			d := y[i] - peak*math.Pow(1+r[i]*r[i]/(a*a), -beta)
			x2 += w[i] * d * d
		}
		return x2, peak
	}
	best := math.Inf(1)
	for beta := 1.8; beta < 60; beta *= 1.07 {
		// Golden section in the half width.
		k := math.Sqrt(math.Pow(2, 1/beta) - 1)
		lo, hi := 0.6/k, 1.8/k
		const phi = 0.6180339887498949
		m1, m2 := hi-phi*(hi-lo), lo+phi*(hi-lo)
		f1, _ := chi(m1, beta)
		f2, _ := chi(m2, beta)
		for i := 0; i < 24; i++ {
			if f1 < f2 {
				hi, m2, f2 = m2, m1, f1
				m1 = hi - phi*(hi-lo)
				f1, _ = chi(m1, beta)
			} else {
				lo, m1, f1 = m1, m2, f2
				m2 = lo + phi*(hi-lo)
				f2, _ = chi(m2, beta)
			}
		}
		a := (lo + hi) / 2
		if x2, peak := chi(a, beta); x2 < best && peak > 0 {
			best, c.a, c.beta, c.peak = x2, a, beta, peak
		}
	}
	return !math.IsInf(best, 1)
}

// outside is the fraction of the flux further out than u sigma.
func (c *compositeFit) outside(u float64) float64 {
	return math.Pow(1+u*u/(c.a*c.a), 1-c.beta)
}

// errorFactor says how much larger the centroid's error is for the measured
// profile than for a Gaussian, under the window flattened by rho.
func (c *compositeFit) errorFactor(rho float64) float64 {
	var dTrue, dGauss, vTrue, vGauss float64
	const du = 0.05
	for u := du / 2; u < 4.5; u += du {
		g := math.Exp(-u * u / 2)
		w := (1 + rho) * g / (1 + rho*g)
		q := u * u / (c.a * c.a)
		p := c.peak * math.Pow(1+q, -c.beta)
		slope := p / (1 + q) * 2 * c.beta * u / (c.a * c.a)
		dTrue += w * u * u * slope
		dGauss += w * u * u * u * g
		vTrue += w * w * (1 + rho*p) * u * u * u
		vGauss += w * w * (1 + rho*g) * u * u * u
	}
	return math.Sqrt(vTrue/vGauss) * dGauss / dTrue
}

// calibrate turns matched amplitudes into total fluxes and moments into FWHM,
// and corrects the centroids' errors for the profile.
func (f *finder) calibrate(all []source, c compositeFit, l *locusFit) {
	gauss := 2 * math.Pi * f.sigma * f.sigma
	typical := c.peak * math.Pi * c.a * c.a / (c.beta - 1) / (2 * math.Pi)
	// Total over Gaussian flux, from apertures on the bright stars.
	var pick []int
	var ratio, weight []float64
	for _, k := range c.stars {
		if len(pick) >= 600 {
			break
		}
		s := &all[k]
		sigma := math.Sqrt(s.s2)
		r := 2 * 2 * c.half * sigma
		f.cut.cut(int(math.Round(s.X))-1, int(math.Round(s.Y))-1, int(math.Ceil(r))+1)
		if sum, ok := f.cut.aperture(s.X-1, s.Y-1, r); ok && sum > 0 {
			pick = append(pick, k)
			ratio = append(ratio, sum/(1-c.outside(r/sigma))/(gauss*s.amp))
			e := 3 / s.sn // sky noise, unseen neighbours: all fall with brightness
			weight = append(weight, 1/(e*e+0.01*0.01))
		}
	}
	terms, coefficients := 1, []float64{typical}
	if n := len(pick); n >= 4 {
		terms = termsFor(n)
		if n < 60 {
			terms = 1
		}
		design := make([]float64, 0, n*terms)
		for _, k := range pick {
			design = f.basis(design, all[k].X, all[k].Y, terms)
		}
		if r, err := robust.LinearFit(design, terms, ratio, weight, 4.685, 30); err == nil {
			coefficients = r.Coefficients
		} else {
			terms, coefficients = 1, []float64{robust.Median(ratio)}
		}
	}
	const steps = 24
	var table [steps + 1]float64
	for i := range table {
		table[i] = c.errorFactor(math.Expm1(float64(i) / steps * math.Log1p(maxRho)))
	}
	for k := range all {
		s := &all[k]
		if s.burnt > 0 {
			continue
		}
		scale := 0.0
		var row [6]float64
		for t, b := range f.basis(row[:0], s.X, s.Y, terms) {
			scale += coefficients[t] * b
		}
		s.Flux = s.amp * gauss * scale
		s.FluxErr = s.ampErr * gauss * scale
		s.SN = s.sn
		at := math.Log1p(s.rho) / math.Log1p(maxRho) * steps
		i := min(int(at), steps-1)
		e := table[i] + (at-float64(i))*(table[i+1]-table[i])
		s.XErr *= e
		s.YErr *= e
		if l.ok {
			// A star wider along one axis than the window answers less to a shift
			// along it.
			w2 := f.sigma * f.sigma * (1 + math.Log1p(s.rho))
			e1 := math.Exp(l.at(l.size, s.X, s.Y))
			d, c := l.at(l.e1, s.X, s.Y), l.at(l.e2, s.X, s.Y)
			mean := math.Sqrt(1 + d*d + c*c)
			s.XErr *= (w2 + e1*(mean+d)) / (w2 + e1)
			s.YErr *= (w2 + e1*(mean-d)) / (w2 + e1)
		}
		if s.s2 == s.s2 {
			obs := 4 * c.half * c.half * s.s2
			if w := obs - c.pixel; w > 0.3*obs {
				s.FWHM = math.Sqrt(w)
			}
		}
	}
}
