package detect

import (
	"context"
	"math"
	"sort"

	"nightsift/internal/frame"
	"nightsift/internal/realbogus"
)

// place is a source on the reference.
type place struct{ x, y, flux float64 }

// input is what the search reads, apart from names.
type input struct {
	image, variance, significance *frame.Image
	newSub, reference             *frame.Image // may be nil
	flags                         *frame.Mask
	psf                           renderer
	places                        []place
	gain                          float64 // electron/count; NaN: unknown
	zeroPoint                     float64
	scaleError, jitter            float64
	sky                           func(x, y float64) (ra, dec float64, ok bool)
	pixelScale                    float64 // arcsec/px, used where sky fails; NaN: unknown
}

// search is one run over a difference.
type search struct {
	in     *input
	cfg    *Config
	model  *realbogus.Model
	centre *localPSF // PSF of the frame's centre
	fwhm   float64
	cache  map[[2]int]*localPSF
	ft     fitter

	peaks   []peak // all, of both signs, bright first
	comps   []component
	crowd   *pointGrid // of the peaks above the threshold
	stars   *pointGrid
	rates   realbogus.Rates
	rootDet float64
	buf     []int32
	near    []float32 // scratch of unrest
	wide    []float32
}

const (
	scoutThreshold = 4.0 // sigma: peaks from here on vote for lines
	lowThreshold   = 3.0 // sigma: pixels from here on make components
	blendMost      = 8   // sources fitted together
	residueKept    = 3   // candidates kept of a larger group
	psfCell        = 48  // px: one local PSF serves a cell of this size
)

// psfScale guesses the FWHM from the sum of squares of a rendered stamp: a
// Gaussian has 1/(4πσ²).
func psfScale(r renderer, x, y float64) float64 {
	const size = 41
	stamp := make([]float32, size*size)
	r.Render(stamp, size, x, y, 0, 0)
	var s, s2 float64
	for _, v := range stamp {
		s += float64(v)
		s2 += float64(v) * float64(v)
	}
	if !(s2 > 0) || !(s > 0) {
		return math.NaN()
	}
	return 2.3548 * math.Sqrt(1/(4*math.Pi*s2)) * s
}

func newSearch(in *input, cfg *Config, model *realbogus.Model) (*search, error) {
	w, h := in.significance.Width, in.significance.Height
	for _, m := range [...]*frame.Image{in.image, in.variance, in.newSub, in.reference} {
		if m != nil && (m.Width != w || m.Height != h) {
			panic("detect: planes differ in shape")
		}
	}
	if in.flags.Width != w || in.flags.Height != h {
		panic("detect: flags differ in shape")
	}
	cx, cy := float64(w+1)/2, float64(h+1)/2
	guess := psfScale(in.psf, cx, cy)
	if !(guess > 0.5 && guess < 60) {
		return nil, frame.Problemf(frame.ProblemSubtractionPoor, "the difference's point-spread function has a width of %.3g px at the centre, expected 1 to 60: check the difference's PSF", guess)
	}
	s := &search{in: in, cfg: cfg, model: model, cache: map[[2]int]*localPSF{}}
	s.centre = newLocalPSF(in.psf, cx, cy, guess, stampRadius(guess))
	s.centre.correlate()
	s.fwhm = s.centre.fwhm
	s.rootDet = s.centre.rootDet()
	s.ft = fitter{image: in.image, variance: in.variance, reference: in.reference, flags: in.flags, gain: in.gain}
	s.rates = cfg.Rates
	s.rates.Threshold = cfg.Threshold
	return s, nil
}

func stampRadius(fwhm float64) int { return max(6, min(40, int(math.Ceil(3*fwhm))+1)) }

// rootDet is √det Λ of PeakDensity.
func (p *localPSF) rootDet() float64 {
	return math.Sqrt(math.Max(0, p.curve[0]*p.curve[1]-p.curve[2]*p.curve[2]))
}

// local returns the PSF of the cell around a place.
func (s *search) local(x, y float64) *localPSF {
	key := [2]int{int(x) / psfCell, int(y) / psfCell}
	if p, ok := s.cache[key]; ok {
		return p
	}
	p := newLocalPSF(s.in.psf, (float64(key[0])+0.5)*psfCell, (float64(key[1])+0.5)*psfCell, s.fwhm, s.centre.radius)
	if len(s.cache) > 512 {
		clear(s.cache)
	}
	s.cache[key] = p
	return p
}

// run returns the candidates, bright first, with everything but names.
func (s *search) run(ctx context.Context) ([]Candidate, error) {
	c := &s.centre.curve
	// Between pixels the response falls at most to that of half a pixel off
	// on both axes; so much lower must the scan look.
	drop := 0.97 * math.Exp(-(c[0]+c[1]+2*math.Abs(c[2]))/8)
	low := math.Min(lowThreshold, s.cfg.Threshold*0.6)
	scout := math.Min(scoutThreshold, s.cfg.Threshold)
	var sc scanner
	s.peaks, s.comps = sc.find(s.in.significance, float32(low), float32(math.Max(low, scout*drop)))
	n := sort.Search(len(s.peaks), func(i int) bool { return math.Abs(s.peaks[i].s) < scout })
	if s.peaks = s.peaks[:n]; n > s.cfg.MaxPeaks {
		s.peaks = s.peaks[:s.cfg.MaxPeaks]
	}
	s.stars = newPointGrid(math.Max(16, 4*s.fwhm))
	for _, p := range s.in.places {
		s.stars.add(p.x, p.y)
	}
	lines := findLines(s.in.significance, s.in.flags, s.peaks, s.comps, s.centre)
	kept, absorbed := independent(s.peaks, s.centre, s.cfg.Threshold, s.cfg.LobeError)

	s.crowd = newPointGrid(12 * s.fwhm)
	var free []peak
	var freeAbsorbed []int
	for k, p := range kept {
		if onLine(lines, p, s.fwhm, s.cfg.Threshold) {
			continue
		}
		s.crowd.add(p.x, p.y)
		free = append(free, p)
		freeAbsorbed = append(freeAbsorbed, absorbed[k])
	}
	var out []Candidate
	for k := range lines {
		if lines[k].top >= s.cfg.Threshold {
			out = append(out, s.lineCandidate(&lines[k]))
		}
	}
	// Around a saturated star residues scatter: there the links reach farther.
	saturated := make([]bool, len(free))
	for k, p := range free {
		saturated[k] = s.saturationDistance(p.x, p.y) < 4*s.fwhm
	}
	for _, g := range groups(free, saturated, 2.5*s.fwhm) {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		out = append(out, s.group(free, freeAbsorbed, g)...)
	}
	sort.SliceStable(out, func(a, b int) bool {
		p, q := &out[a], &out[b]
		if x, y := math.Abs(p.Significance), math.Abs(q.Significance); x != y {
			return x > y
		}
		if p.Y != q.Y {
			return p.Y < q.Y
		}
		return p.X < q.X
	})
	return out, nil
}

// onLine reports whether a line explains a peak: it lies on it and does not
// stand out.
func onLine(lines []segment, p peak, fwhm, threshold float64) bool {
	for k := range lines {
		l := &lines[k]
		u, v := l.along(p.x, p.y)
		reach := 1.5 * fwhm
		if l.top > 30 {
			reach = 3 * fwhm
		}
		if math.Abs(v) < reach && math.Abs(u) < l.half+reach && math.Abs(p.s) < 2*l.score+threshold {
			return true
		}
	}
	return false
}

// groups joins peaks closer than link into groups (friends of friends), each
// bright first, in order of their brightest. Two wide peaks are joined at
// twice that distance.
func groups(peaks []peak, wide []bool, link float64) [][]int32 {
	grid := newPointGrid(link)
	for _, p := range peaks {
		grid.add(p.x, p.y)
	}
	done := make([]bool, len(peaks))
	var out [][]int32
	var near []int32
	for k := range peaks {
		if done[k] {
			continue
		}
		done[k] = true
		g := []int32{int32(k)}
		for at := 0; at < len(g); at++ {
			p := &peaks[g[at]]
			reach := link
			if wide[g[at]] {
				reach = 2 * link
			}
			near = grid.within(near[:0], p.x, p.y, reach)
			for _, m := range near {
				if !done[m] && (wide[m] || math.Hypot(peaks[m].x-p.x, peaks[m].y-p.y) <= link) {
					done[m] = true
					g = append(g, m)
				}
			}
		}
		sort.Slice(g, func(a, b int) bool { return g[a] < g[b] })
		out = append(out, g)
	}
	return out
}

// group measures the candidates of one group.
func (s *search) group(peaks []peak, absorbed []int, g []int32) []Candidate {
	extra := 0
	if len(g) > blendMost {
		extra = len(g) - residueKept
		g = g[:residueKept]
	}
	first := peaks[g[0]]
	psf := s.local(first.x, first.y)
	radius := math.Max(3, 1.5*s.fwhm)
	inspectRadius := math.Max(4, 2.2*s.fwhm)

	if c, ok := s.trailCandidate(psf, peaks, g, inspectRadius); ok {
		return []Candidate{c}
	}
	src := make([]source, len(g))
	for k, i := range g {
		src[k] = source{x0: peaks[i].x, y0: peaks[i].y}
	}
	s.fitSources(psf, src, radius)

	gone := make([]bool, len(g))
	var out []Candidate
	for k := range g {
		if gone[k] {
			continue
		}
		p := peaks[g[k]]
		opposite, partner := s.opposite(p, src, k, peaks, g)
		comp := &s.comps[p.comp]
		ev := s.ft.inspect(psf, src, k, inspectRadius, s.cfg.ModelError, opposite, partner, elongated(comp, psf))
		c := s.describe(psf, p, &src[k], &ev)
		f := s.features(psf, p, &src[k], &ev)
		f[realbogus.Absorbed] = math.Log10(1 + float64(absorbed[g[k]]+extra))
		f[realbogus.Crowding] = math.Log10(1 + math.Max(0, float64(len(s.crowd.within(s.buf[:0], p.x, p.y, 12*s.fwhm))-1)))
		c.Kind = s.kind(&c, &src[k], &ev, &f, extra > 0)
		if c.Kind == Dipole && partner >= 0 && partner > k {
			gone[partner] = true
		}
		if c.Kind == Moving || c.Kind == Streak {
			t := &ev.trail
			c.X, c.Y, c.XErr, c.YErr = t.x, t.y, t.xErr, t.yErr
			c.Flux, c.FluxErr = t.flux, t.fluxErr
			c.Length, c.Angle = t.length, lineAngle(t.lx, t.ly)
		}
		s.finish(&c, &f)
		out = append(out, c)
	}
	return out
}

// fitSources fits all sources together; one whose joint fit fails is fitted
// alone, and if that fails too with its position held at the peak.
func (s *search) fitSources(psf *localPSF, src []source, radius float64) {
	bound := 1.5 * s.fwhm
	s.ft.open(src, radius)
	out := s.ft.fit(psf, src, bound)
	if out.stop == "singular" || out.stop == "no pixels" {
		for k := range src {
			one := src[k : k+1]
			s.ft.open(one, radius)
			s.ft.fit(psf, one, bound)
		}
	}
	for k := range src {
		src[k].unbias()
	}
}

// lineAngle returns the direction of a line in degrees, -90 < a ≤ 90.
func lineAngle(ux, uy float64) float64 {
	a := math.Atan2(uy, ux) * 180 / math.Pi
	if a > 90 {
		a -= 180
	}
	if a <= -90 {
		a += 180
	}
	return a
}

// elongated reports whether a component is longer than the response of a
// point source.
func elongated(c *component, psf *localPSF) bool {
	if c.area < 5 {
		return false
	}
	_, _, xx, yy, xy := c.shape()
	mean, diff := (xx+yy)/2, math.Hypot((xx-yy)/2, xy)
	// The response has variance 2σ², of which the threshold shows a part.
	return 2*diff > 0.5*psf.sigma2 && mean+diff > 1.8*(mean-diff)
}

// opposite returns the strongest response of the other sign within 2 FWHM: a
// member of the group if there is one, else a pixel below -3 sigma.
func (s *search) opposite(p peak, src []source, k int, peaks []peak, g []int32) (*peak, int) {
	best, partner := peak{}, -1
	for l := range src {
		q := peaks[g[l]]
		if l == k || q.s*p.s >= 0 || math.Hypot(q.x-p.x, q.y-p.y) > 2*s.fwhm || math.IsNaN(src[l].flux) {
			continue
		}
		if math.Abs(q.s) > math.Abs(best.s) {
			best, partner = peak{x: src[l].x, y: src[l].y, s: q.s}, l
		}
	}
	if partner >= 0 {
		return &best, partner
	}
	sig := s.in.significance
	r := 2 * s.fwhm
	sign := 1.0
	if p.s < 0 {
		sign = -1
	}
	best.s = 3
	found := false
	for j := max(0, int(math.Ceil(p.y-r))-1); j < min(sig.Height, int(p.y+r)); j++ {
		row := sig.Row(j)
		for i := max(0, int(math.Ceil(p.x-r))-1); i < min(sig.Width, int(p.x+r)); i++ {
			dx, dy := float64(i+1)-p.x, float64(j+1)-p.y
			// What the PSF's own negative lobes predict does not count.
			v := -sign*float64(row[i]) + math.Abs(p.s)*s.centre.correlation(dx, dy)
			if w := -sign * float64(row[i]); v > best.s && w > best.s && dx*dx+dy*dy <= r*r {
				best = peak{x: float64(i + 1), y: float64(j + 1), s: math.Min(v, w)}
				found = true
			}
		}
	}
	if !found {
		return nil, -1
	}
	return &best, -1
}

// trailCandidate tries one trail for a group whose brightest component is
// long, against the point sources of the group.
func (s *search) trailCandidate(psf *localPSF, peaks []peak, g []int32, radius float64) (Candidate, bool) {
	first := peaks[g[0]]
	c := &s.comps[first.comp]
	if len(g) < 2 || !c.positive {
		return Candidate{}, false
	}
	for _, i := range g {
		if peaks[i].comp != first.comp {
			return Candidate{}, false
		}
	}
	x, y, xx, yy, xy := c.shape()
	mean, diff := (xx+yy)/2, math.Hypot((xx-yy)/2, xy)
	length := math.Sqrt(24 * diff)
	if length < 1.5*s.fwhm || mean+diff < 3*(mean-diff) {
		return Candidate{}, false
	}
	angle := math.Atan2(2*xy, xx-yy) / 2
	window := radius + length/2
	t, _ := s.ft.fitTrail(psf, nil, x, y, length*math.Cos(angle), length*math.Sin(angle), first.s*math.Max(1, length/s.fwhm)/math.Sqrt(psf.sum2)*s.noiseAt(first.x, first.y), window, s.cfg.ModelError)
	if !t.ok || t.length < s.fwhm {
		return Candidate{}, false
	}
	src := make([]source, len(g))
	for k, i := range g {
		src[k] = source{x0: peaks[i].x, y0: peaks[i].y}
	}
	s.fitSources(psf, src, math.Max(3, 1.5*s.fwhm))
	chi2, n := s.ft.chi2Sources(psf, src, x, y, window, s.cfg.ModelError)
	logN := math.Log(float64(max(2, n)))
	if t.chi2+trailParams*logN > chi2+3*float64(len(g))*logN || t.chi2 > 4*float64(max(1, t.free)) {
		return Candidate{}, false
	}
	whole := source{x0: t.x, y0: t.y, x: t.x, y: t.y, flux: t.flux}
	ev := s.ft.inspect(psf, []source{whole}, 0, radius, s.cfg.ModelError, nil, -1, false)
	ev.trail = t
	ev.bicTrail = ev.bicPoint - (chi2 - t.chi2)
	whole.cov[0], whole.cov[3], whole.cov[5] = t.fluxErr*t.fluxErr, t.xErr*t.xErr, t.yErr*t.yErr
	cand := s.describe(psf, first, &whole, &ev)
	cand.Length, cand.Angle = t.length, lineAngle(t.lx, t.ly)
	f := s.features(psf, first, &whole, &ev)
	cand.Kind = s.trailKind(&t)
	s.finish(&cand, &f)
	return cand, true
}

// noiseAt returns the noise of the nearest pixel [count], 1 if unknown.
func (s *search) noiseAt(x, y float64) float64 {
	i := max(0, min(s.in.variance.Width-1, int(math.Round(x))-1))
	j := max(0, min(s.in.variance.Height-1, int(math.Round(y))-1))
	if v := float64(s.in.variance.Pix[j*s.in.variance.Width+i]); v > 0 && !math.IsInf(v, 0) {
		return math.Sqrt(v)
	}
	return 1
}

// trailKind tells a mover from a streak: a mover's trail is short and ends
// inside the frame.
func (s *search) trailKind(t *trailFit) Kind {
	if t.length > 12*s.fwhm {
		return Streak
	}
	w, h := float64(s.in.image.Width), float64(s.in.image.Height)
	for _, e := range [2]float64{-0.5, 0.5} {
		x, y := t.x+e*t.lx, t.y+e*t.ly
		if x < 1+s.fwhm || y < 1+s.fwhm || x > w-s.fwhm || y > h-s.fwhm {
			return Streak
		}
	}
	return Moving
}

// lineCandidate describes a long line by one candidate at its middle.
func (s *search) lineCandidate(l *segment) Candidate {
	psf := s.local(l.x, l.y)
	measureSegment(l, psf, s.in.image, s.in.variance, s.in.flags)
	src := source{x0: l.x, y0: l.y, x: l.x, y: l.y, flux: l.flux}
	// The middle of an evenly lit line of unknown ends is uniform along it.
	along := 2 * l.half / math.Sqrt(12)
	src.cov[0] = l.fluxErr * l.fluxErr
	src.cov[3] = sq(l.ux*along) + sq(l.uy*l.across)
	src.cov[5] = sq(l.uy*along) + sq(l.ux*l.across)
	ev := s.ft.inspect(psf, []source{{x0: l.x, y0: l.y, x: l.x, y: l.y, flux: math.Max(l.flux*s.fwhm/(2*l.half+s.fwhm), 1e-6)}}, 0, math.Max(4, 2.2*s.fwhm), s.cfg.ModelError, nil, -1, false)
	c := s.describe(psf, l.seed, &src, &ev)
	c.Flags |= l.flags | frame.Streak
	c.Length, c.Angle = 2*l.half, lineAngle(l.ux, l.uy)
	f := s.features(psf, l.seed, &src, &ev)
	f[realbogus.Elongation], f[realbogus.ElongationSig], f[realbogus.TrailMargin] = 5, 8, 2
	c.Kind = Streak
	if !l.atBorder && 2*l.half < 12*s.fwhm {
		c.Kind = Moving
	}
	s.finish(&c, &f)
	return c
}

func sq(v float64) float64 { return v * v }
