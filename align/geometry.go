package align

import (
	"cmp"
	"context"
	"math"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
)

// geometry finds and fits the transform between one new frame and a reference.
// It holds scratch: one a goroutine.
type geometry struct {
	cfg    Config
	f      *frame.Frame
	ref    *PreparedReference
	fwhm   float64 // px of the new frame
	na, nb []stars.Star
	a, b   field   // positions of the stars fit to be matched, bright first
	ia, ib []int32 // their indices in na and nb

	start    affine
	evidence evidence
	method   string

	t           *Transform
	pairs       []pairing // into a and b
	used        []bool
	class       []class // of the pairs
	matched     []class // of the pair's Matches
	brightNoise float64 // px, of the centroids behind RMSX and RMSY, for each axis
	floor       floors
	condition   float64
	wildness    float64 // reference px: largest error that the fit predicts for itself in the common area
	tol         float64 // reference px, within which pairs were made
}

// Stars with these flags are not stars at all.
const notStars = frame.CosmicRay | frame.BadColumn | frame.Streak | frame.UserMasked | frame.NoData | frame.NoReference

func starField(list []stars.Star, width, height int) (field, []int32) {
	f := field{width: float64(width), height: float64(height)}
	var at []int32
	for i := range list {
		p := point{list[i].X, list[i].Y}
		if p.finite() && list[i].Flags&notStars == 0 && list[i].Flux > 0 {
			f.pts = append(f.pts, p)
			at = append(at, int32(i))
		}
	}
	return f, at
}

func newGeometry(f *frame.Frame, list *stars.List, ref *PreparedReference, cfg Config) *geometry {
	g := &geometry{cfg: cfg, f: f, ref: ref, fwhm: list.FWHM, na: list.Stars, nb: ref.Stars.Stars}
	g.a, g.ia = starField(g.na, f.Image.Width, f.Image.Height)
	g.b, g.ib = starField(g.nb, ref.Frame.Image.Width, ref.Frame.Image.Height)
	return g
}

// find determines the affine map, from the world coordinates where they agree
// with the stars, else from the pattern.
func (g *geometry) find(ctx context.Context) error {
	for _, c := range []struct {
		f    *frame.Frame
		n    int
		what string
	}{{g.f, len(g.a.pts), "new frame"}, {g.ref.Frame, len(g.b.pts), "reference"}} {
		if c.n < g.cfg.MinStars {
			return frame.Problemf(frame.ProblemTooFewStars, "%s %s has %d stars, at least %d are needed to align it; look for clouds, a wrong focus or a closed shutter", c.what, c.f.Name, c.n, g.cfg.MinStars)
		}
	}
	tol := 2.0
	if g.fwhm > 4 && g.fwhm < 100 {
		tol = g.fwhm / 2
	}
	base := search{scaleLo: 0.95, scaleHi: 1.05, tolerance: tol, minStars: g.cfg.MinStars}
	predicted := math.NaN() // overlap according to the headers
	if g.f.WCS != nil && g.ref.Frame.WCS != nil {
		s := g.f.WCS.PixelScale() / g.ref.Frame.WCS.PixelScale()
		if s > 0.01 && s < 100 {
			base.scaleLo, base.scaleHi = s*(1-g.cfg.ScaleTolerance), s*(1+g.cfg.ScaleTolerance)
			base.tolerance = tol
		}
		if start, ok := wcsMap(g.f.WCS, g.ref.Frame.WCS, g.a.width, g.a.height); ok {
			predicted = overlapArea(start, g.a, g.b) / (g.a.width * g.a.height * math.Abs(start.det()))
			if t, e, ok := shiftMatch(g.a, g.b, start, g.cfg.PointingError*start.scale(), base); ok {
				g.start, g.evidence, g.method = t, e, "world_coordinates"
				return nil
			}
		} else {
			predicted = 0
		}
	}
	t, e, ok, err := hashMatch(ctx, g.a, g.b, base)
	if err != nil {
		return err
	}
	if !ok {
		free := base
		free.scaleLo, free.scaleHi = 0.1, 10
		var e2 evidence
		t, e2, ok, err = hashMatch(ctx, g.a, g.b, free)
		if err != nil {
			return err
		}
		if ok || e2.matched > 0 && e2.logOdds < e.logOdds {
			e = e2
		}
	}
	if !ok {
		if predicted < g.cfg.MinOverlap {
			return frame.Problemf(frame.ProblemNoOverlap, "by their world coordinates %s and the reference %s share %.0f %% of the new frame, and no common star pattern was found; choose a reference of the same field", g.f.Name, g.ref.Frame.Name, 100*predicted)
		}
		return frame.Problemf(frame.ProblemNoMatch, "the star pattern of %s (%d stars) is not found in the reference %s (%d stars): the best try has %d coincidences, %.1f are expected by chance; is it the same field?", g.f.Name, len(g.a.pts), g.ref.Frame.Name, len(g.b.pts), e.matched, e.expected)
	}
	g.start, g.evidence, g.method = t, e, "pattern"
	return nil
}

// wcsMap returns the affine map from new to reference pixels nearest to what
// the two world coordinate systems say, over a lattice on the new frame.
func wcsMap(a, b *wcs.WCS, width, height float64) (affine, bool) {
	var s []sample
	const n = 7
	for j := range n {
		for i := range n {
			x, y := 1+(width-1)*float64(i)/(n-1), 1+(height-1)*float64(j)/(n-1)
			ra, dec, err := a.PixelToSky(x, y)
			if err != nil {
				continue
			}
			u, v, err := b.SkyToPixel(ra, dec)
			if err != nil || math.IsNaN(u-u) || math.IsNaN(v-v) {
				continue
			}
			s = append(s, sample{x: x, y: y, u: u, v: v, sigma2: 1})
		}
	}
	if len(s) < n {
		return affine{}, false
	}
	r, ok := fitOnce(s, nil, 1, floors{})
	if !ok {
		return affine{}, false
	}
	t := r.t.linear()
	return t, t.sane()
}

// pairUp joins stars of a with stars of b within tol [reference px], one to
// one, nearest first of several claims. ib indexes b.
func pairUp(a []point, ib *index, t *Transform, tol float64) []pairing {
	owner := make([]int32, len(ib.pts))
	for i := range owner {
		owner[i] = -1
	}
	var pairs []pairing
	var dist []float64
	for i, p := range a {
		u, v := t.Apply(p.x, p.y)
		k, d := ib.nearest(u, v, tol)
		if k < 0 {
			continue
		}
		if n := owner[k]; n >= 0 {
			if d < dist[n] {
				pairs[n].a, dist[n] = int32(i), d
			}
			continue
		}
		owner[k] = int32(len(pairs))
		pairs = append(pairs, pairing{int32(i), int32(k)})
		dist = append(dist, d)
	}
	return pairs
}

// sampleOf makes the fit's sample of one pair.
func (g *geometry) sampleOf(p pairing, scale2 float64) sample {
	a, b := &g.na[g.ia[p.a]], &g.nb[g.ib[p.b]]
	square := func(s *stars.Star) float64 {
		v := (s.XErr*s.XErr + s.YErr*s.YErr) / 2
		if !(v > 1e-6) || math.IsInf(v, 0) {
			v = 1e-6
			if !(s.XErr > 0) {
				v = 0.04 // not known: as for a faint star
			}
		}
		return v
	}
	return sample{x: a.X, y: a.Y, u: b.X, v: b.Y, sigma2: square(a)*scale2 + square(b)}
}

// choose returns which of the pairs may enter the fit: unflagged ones, and
// of these only the clean ones where they are many.
func (g *geometry) choose(pairs []pairing) []int {
	var all, clean []int
	for i, p := range pairs {
		a, b := &g.na[g.ia[p.a]], &g.nb[g.ib[p.b]]
		if (a.Flags|b.Flags)&frame.Unusable != 0 {
			continue
		}
		all = append(all, i)
		if a.Clean && b.Clean {
			clean = append(clean, i)
		}
	}
	if len(clean) >= 120 || len(clean) >= 40 && 2*len(clean) >= len(all) {
		return clean
	}
	if len(all) < g.cfg.MinStars {
		// Better saturated stars than none.
		all = all[:0]
		for i := range pairs {
			all = append(all, i)
		}
	}
	return all
}

// pointlike reports whether a star's light has one centre as far as its
// frame can tell: what is too faint to be clean may still be a star.
func (g *geometry) pointlike(s *stars.Star) bool {
	return s.Clean || !s.Extended && s.SN < g.cfg.Stars.CleanSN
}

// classify sorts the picked pairs: pointlike on both frames and of the same flux ratio as the others of
// their kind, or doubtful. Where stars are too few to hold the fit, all are
// of one class.
func (g *geometry) classify(pairs []pairing, pick []int) []class {
	kinds := make([]class, len(pick))
	n := 0
	for i, k := range pick {
		a, b := &g.na[g.ia[pairs[k].a]], &g.nb[g.ib[pairs[k].b]]
		kinds[i] = doubtful
		if g.pointlike(a) && g.pointlike(b) {
			kinds[i] = pointlike
			n++
		}
	}
	// A variable star stands where it stood, but new light on a compact
	// galaxy does not: while stars are enough, neither is needed.
	const enough = 8
	if n > enough {
		var steady fluxes
		for i, k := range pick {
			if kinds[i] == pointlike {
				steady.add(&g.na[g.ia[pairs[k].a]], &g.nb[g.ib[pairs[k].b]])
			}
		}
		steady.measure()
		for i, k := range pick {
			if n > enough && kinds[i] == pointlike && steady.changed(&g.na[g.ia[pairs[k].a]], &g.nb[g.ib[pairs[k].b]]) {
				kinds[i] = doubtful
				n--
			}
		}
	}
	if n < 4 {
		clear(kinds) // all alike
	}
	return kinds
}

// fluxes are the flux ratios of pairs of stars.
type fluxes struct {
	list           []fluxRatio
	centre, spread float64
}

// fluxRatio is the logarithm of a flux on the new frame over one on the
// reference, and its error.
type fluxRatio struct{ value, err float64 }

func ratioOf(a, b *stars.Star) fluxRatio {
	return fluxRatio{math.Log(a.Flux / b.Flux), math.Hypot(1/a.SN, 1/b.SN)}
}

func (f *fluxes) add(a, b *stars.Star) {
	if r := ratioOf(a, b); r.value-r.value == 0 && r.err-r.err == 0 {
		f.list = append(f.list, r)
	}
}

// measure sets the ratio of the constant ones, from the best hundred, and their scatter.
func (f *fluxes) measure() {
	slices.SortFunc(f.list, func(a, b fluxRatio) int { return cmp.Or(cmp.Compare(a.err, b.err), cmp.Compare(a.value, b.value)) })
	n := min(len(f.list), 100)
	v, e := make([]float64, n), make([]float64, n)
	for i := range v {
		v[i], e[i] = f.list[i].value, f.list[i].err
	}
	f.centre, _, f.spread, _ = robust.Common(v, e, leastScatter)
}

// changed reports whether the ratio of a pair is none of those of constant stars: off by
// a tenth and by five sigma, of its own noise and of what the others scatter.
func (f *fluxes) changed(a, b *stars.Star) bool {
	r := ratioOf(a, b)
	d := math.Abs(r.value - f.centre)
	return d > 0.1 && d > 5*math.Hypot(r.err, f.spread)
}

// leastFloor [px] is the least error of a position in the fit, whatever its own:
// neighbours and the shape of the PSF move the brightest stars by that much,
// and there are enough stars not to need the last bit of these few.
const leastFloor = 0.01

// highestOrder is the highest order for which n stars are enough.
func highestOrder(n, most int) int {
	order := 1
	for order < most && n >= 4*terms(order+1) {
		order++
	}
	return order
}

// refine fits the transform to all stars.
func (g *geometry) refine(ctx context.Context) error {
	scale := g.start.scale()
	unit := max(scale, 1) // reference px in a pixel of the coarser grid
	t := fromAffine(g.start, g.a.width, g.a.height)
	poor := func(n int) error {
		return frame.Problemf(frame.ProblemAlignmentPoor, "%s: the stars of the reference %s were recognised (%d coincidences), but no transform fits them: %d stars are left; look for a trailed or doubled exposure", g.f.Name, g.ref.Frame.Name, g.evidence.matched, n)
	}

	// Bright stars of the common area first: fewer wrong neighbours.
	inside := func(from []point, most int, to func(p point) bool) []point {
		var out []point
		for _, p := range from {
			if to(p) {
				out = append(out, p)
				if len(out) == most {
					break
				}
			}
		}
		return out
	}
	back, ok := g.start.inverse()
	if !ok {
		return poor(0)
	}
	const margin = 30
	wide := func(f field) field {
		return field{width: f.width + 2*margin*unit, height: f.height + 2*margin*unit}
	}
	shift := func(p point) point { return point{p.x + margin*unit, p.y + margin*unit} }
	const bright = 1500
	pa := inside(g.a.pts, bright, func(p point) bool { return wide(g.b).contains(shift(g.start.apply(p))) })
	pb := inside(g.b.pts, bright, func(p point) bool { return wide(g.a).contains(shift(back.apply(p))) })
	ib := newIndex(pb, cellFor(pb)/2)
	tol := 2 * max(2, g.fwhm/2) * unit
	if !(tol < 100*unit) {
		tol = 4 * unit
	}
	for pass := range 7 {
		pairs := pairUp(pa, ib, t, tol)
		s := make([]sample, len(pairs))
		for i, p := range pairs {
			s[i] = sample{x: pa[p.a].x, y: pa[p.a].y, u: pb[p.b].x, v: pb[p.b].y, sigma2: 0.01 * unit * unit}
		}
		if len(s) < g.cfg.MinStars {
			return poor(len(s))
		}
		order := highestOrder(len(s), min(1+pass, 3, g.cfg.MaxOrder))
		r, use, floor, ok := fitRobust(s, t, order, 0.01*unit, tol/3)
		if !ok {
			if r, use, floor, ok = fitRobust(s, t, 1, 0.01*unit, tol/3); !ok {
				return poor(len(s))
			}
		}
		_ = use
		t = r.t
		tol = min(tol, max(6*math.Sqrt(floor[0]*floor[0]+0.01*unit*unit), 1.2*unit))
		if pass < 3 {
			// Not too soon: stars beyond the map's reach may still come in.
			tol = max(tol, 2.5*unit)
		}
	}
	if err := ctx.Err(); err != nil {
		return err
	}

	// All stars.
	ib = newIndex(g.b.pts, cellFor(g.b.pts)/2)
	for pass := range 3 {
		pairs := pairUp(g.a.pts, ib, t, tol)
		pick := g.choose(pairs)
		s := make([]sample, len(pick))
		kinds := g.classify(pairs, pick)
		for i, k := range pick {
			s[i] = g.sampleOf(pairs[k], scale*scale)
			s[i].class = kinds[i]
		}
		if len(s) < g.cfg.MinStars {
			return poor(len(s))
		}
		order := highestOrder(len(s), g.cfg.MaxOrder)
		low, high := leastFloor*unit, tol
		best, ok := chooseOrder(s, t, order, low, high, g.lattice(t), func(t *Transform) bool { return !g.folds(t) })
		if !ok {
			return poor(len(s))
		}
		t = best.solution.t
		g.t, g.floor, g.condition = t, best.floor, best.solution.condition
		// Pair up once more with what is now known; the last pass keeps the
		// result of the same transform.
		if pass == 2 {
			g.wildness = 0
			for _, p := range g.lattice(t) {
				g.wildness = max(g.wildness, best.solution.predictedError(p.x, p.y))
			}
			g.pairs, g.tol = pairs, tol
			g.class = make([]class, len(pairs))
			for i := range g.class {
				g.class[i] = doubtful
			}
			for i, k := range pick {
				g.class[k] = kinds[i]
			}
			g.used = make([]bool, len(pairs))
			for i, k := range pick {
				g.used[k] = best.use[i]
			}
		}
		tol = max(1*unit, 6*best.floor[pointlike])
	}
	n := 0
	for _, u := range g.used {
		if u {
			n++
		}
	}
	if n < g.cfg.MinStars {
		return poor(n)
	}
	return nil
}

// lattice returns positions on the new frame that the reference covers.
func (g *geometry) lattice(t *Transform) []point {
	var out []point
	const n = 9
	a := t.linear()
	for j := range n {
		for i := range n {
			p := point{0.5 + g.a.width*float64(i)/(n-1), 0.5 + g.a.height*float64(j)/(n-1)}
			if g.b.contains(a.apply(p)) {
				out = append(out, p)
			}
		}
	}
	return out
}

// folds reports whether the transform, beyond the stars that hold it, comes back into the
// reference where its tangent lies clearly outside.
func (g *geometry) folds(t *Transform) bool {
	const n = 24
	a := t.linear()
	mx, my := 0.05*g.b.width, 0.05*g.b.height
	for j := range n + 1 {
		for i := range n + 1 {
			p := point{0.5 + g.a.width*float64(i)/n, 0.5 + g.a.height*float64(j)/n}
			q := a.apply(p)
			if q.x > -mx && q.y > -my && q.x < g.b.width+mx && q.y < g.b.height+my {
				continue
			}
			u, v := t.Apply(p.x, p.y)
			if g.b.contains(point{u, v}) {
				return true
			}
		}
	}
	return false
}

// fillPair writes what was found into the pair and judges it.
func (g *geometry) fillPair(p *Pair) error {
	t := g.t
	p.Transform = t
	p.Method, p.LogOdds, p.Condition = g.method, g.evidence.logOdds, g.condition
	cx, cy := (g.a.width+1)/2, (g.a.height+1)/2
	xx, xy, yx, yy := t.Jacobian(cx, cy)
	det := xx*yy - xy*yx
	p.Parity = 1
	if det < 0 {
		p.Parity = -1
	}
	p.Rotation = math.Atan2(yx, xx) * 180 / math.Pi
	p.Scale = math.Sqrt(math.Abs(det))
	p.Floor = g.floor[pointlike] / p.Scale
	if !(p.Scale > 0) || math.IsInf(p.Scale, 0) {
		return frame.Problemf(frame.ProblemAlignmentPoor, "%s: the transform to the reference %s is singular", g.f.Name, g.ref.Frame.Name)
	}

	const n = 64
	in := 0
	for j := range n {
		for i := range n {
			u, v := t.Apply(0.5+g.a.width*(float64(i)+0.5)/n, 0.5+g.a.height*(float64(j)+0.5)/n)
			if g.b.contains(point{u, v}) {
				in++
			}
		}
	}
	p.Overlap = float64(in) / (n * n)
	if p.Overlap < g.cfg.MinOverlap {
		return frame.Problemf(frame.ProblemNoOverlap, "the reference %s covers %.1f %% of %s, at least %.1f %% are needed; choose a reference of the same field", g.ref.Frame.Name, 100*p.Overlap, g.f.Name, 100*g.cfg.MinOverlap)
	}

	// All stars together must coincide more often than chance lets them.
	seen := 0
	for _, q := range g.a.pts {
		u, v := t.Apply(q.x, q.y)
		if g.b.contains(point{u, v}) {
			seen++
		}
	}
	chance := float64(seen) * float64(len(g.b.pts)) / (g.b.width * g.b.height) * math.Pi * g.tol * g.tol
	if float64(len(g.pairs)) < 2*chance || len(g.pairs) < seen/50 {
		return frame.Problemf(frame.ProblemNoMatch, "%s: of %d stars within the reference %s %d coincide with one of its stars, %.0f would do so by chance; is it the same field?", g.f.Name, seen, g.ref.Frame.Name, len(g.pairs), chance)
	}

	g.carryStars(p)
	g.measureResiduals(p)
	g.judgeStars(p)
	scaleFlux(p)
	limit := g.cfg.MaxRMS
	if g.fwhm > 0 {
		limit = max(limit, g.cfg.MaxRMSOverFWHM*g.fwhm)
	}
	// Faint stars scatter by their own noise, which is no fault of the transform.
	allowed := math.Hypot(limit, g.brightNoise)
	if !(max(p.RMSX, p.RMSY) <= allowed) {
		return frame.Problemf(frame.ProblemAlignmentPoor, "%s: residuals of %d bright stars against the reference %s are %.2f and %.2f px in x and y, want at most %.2f px; look for a trailed or doubled exposure", g.f.Name, p.BrightStars, g.ref.Frame.Name, p.RMSX, p.RMSY, allowed)
	}
	if e := g.wildness / p.Scale; !(e <= limit) {
		return frame.Problemf(frame.ProblemAlignmentPoor, "%s: %d stars are in common with the reference %s, too few or too faint to tell where all of it lies: the transform is uncertain by %.2f px, want at most %.2f px", g.f.Name, len(p.Matches), g.ref.Frame.Name, e, limit)
	}
	g.carryWCS(p)
	return nil
}

// carryStars moves the reference's stars to the new frame's pixels.
func (g *geometry) carryStars(p *Pair) {
	const margin = 30
	place := make([]int32, len(g.nb))
	for i := range g.nb {
		place[i] = -1
		s, ok := g.t.Carry(g.nb[i])
		if !ok || s.X < 0.5-margin || s.Y < 0.5-margin || s.X > g.a.width+0.5+margin || s.Y > g.a.height+0.5+margin {
			continue
		}
		place[i] = int32(len(p.ReferenceStars))
		p.ReferenceStars = append(p.ReferenceStars, s)
	}
	p.ReferenceFWHM = g.ref.Stars.FWHM / p.Scale
	for i, q := range g.pairs {
		k := place[g.ib[q.b]]
		if k < 0 {
			continue
		}
		a := &g.na[g.ia[q.a]]
		r := &p.ReferenceStars[k]
		g.matched = append(g.matched, g.class[i])
		p.Matches = append(p.Matches, Match{New: int(g.ia[q.a]), Reference: int(k), DX: a.X - r.X, DY: a.Y - r.Y, Used: g.used[i]})
	}
}

// judgeStars takes the mark of a clean star from those of the new frame and the reference that
// the other frame shows to be none, or not constant: a galaxy whose supernova outshines it is
// as sharp as a star. It then measures the new frame's width again.
func (g *geometry) judgeStars(p *Pair) {
	known := func(s *stars.Star) bool { return s.SN >= g.cfg.Stars.CleanSN && s.Flags&frame.Unusable == 0 }
	var steady fluxes
	for _, m := range p.Matches {
		a, b := &p.NewStars.Stars[m.New], &p.ReferenceStars[m.Reference]
		if a.Clean && b.Clean {
			steady.add(a, b)
		}
		if known(b) && b.Extended && !a.Extended {
			a.Extended, a.Clean = true, false
		} else if known(a) && a.Extended && !b.Extended {
			b.Extended, b.Clean = true, false
		}
	}
	steady.measure()
	if len(steady.list) >= 5 {
		for _, m := range p.Matches {
			a, b := &p.NewStars.Stars[m.New], &p.ReferenceStars[m.Reference]
			if !steady.changed(a, b) {
				continue
			}
			if !b.Clean {
				// New light on what may be its host.
				a.Extended = true
			}
			a.Clean, b.Clean = false, false
		}
		g.judgeLone(p, math.Exp(steady.centre))
	}
	l := p.NewStars
	l.Clean = 0
	var widths, round []float64
	for i := range l.Stars {
		if s := &l.Stars[i]; s.Clean {
			l.Clean++
			if s.FWHM > 0 {
				widths, round = append(widths, s.FWHM), append(round, s.Roundness)
			}
		}
	}
	if len(widths) >= 5 {
		l.FWHM, l.Roundness = robust.Median(widths), robust.Median(round)
	}
}

// judgeLone looks at what the new frame shows and the reference does not: on
// empty sky it is as good a star as any, beside other light it is not clean.
func (g *geometry) judgeLone(p *Pair, scale float64) {
	both := make([]bool, len(p.NewStars.Stars))
	for _, m := range p.Matches {
		both[m.New] = true
	}
	at := make([]point, len(p.ReferenceStars))
	for i := range at {
		at[i] = point{p.ReferenceStars[i].X, p.ReferenceStars[i].Y}
	}
	reach := 3 * max(g.fwhm, p.ReferenceFWHM)
	if !(reach > 0) || len(at) == 0 {
		return
	}
	near := newIndex(at, reach)
	for i := range p.NewStars.Stars {
		s := &p.NewStars.Stars[i]
		if both[i] || s.Extended {
			continue
		}
		i0, i1, j0, j1 := near.cells(s.X, s.Y, reach)
		for j := j0; j <= j1 && i0 <= i1; j++ {
			for _, k := range near.order[near.start[j*near.nx+i0]:near.start[j*near.nx+i1+1]] {
				r := &p.ReferenceStars[k]
				if math.Hypot(r.X-s.X, r.Y-s.Y) < reach && r.Flux*scale > 0.03*s.Flux {
					s.Extended, s.Clean = true, false
				}
			}
		}
	}
}

// measureResiduals fills the RMS values from the stars used, from those with one centre
// where they are five at least. Bright are those
// whose own errors are below 0.02 px, or else the better third, but at least five.
func (g *geometry) measureResiduals(p *Pair) {
	type item struct{ e2, dx, dy float64 }
	var list []item
	var count [classes]int
	for i, m := range p.Matches {
		if m.Used {
			count[g.matched[i]]++
		}
	}
	for i, m := range p.Matches {
		if !m.Used || count[pointlike] >= 5 && g.matched[i] != pointlike {
			continue
		}
		a, b := &p.NewStars.Stars[m.New], &p.ReferenceStars[m.Reference]
		e2 := (a.XErr*a.XErr + a.YErr*a.YErr + b.XErr*b.XErr + b.YErr*b.YErr) / 2
		if math.IsNaN(e2) {
			e2 = math.Inf(1)
		}
		list = append(list, item{e2, m.DX, m.DY})
	}
	slices.SortStableFunc(list, func(a, b item) int {
		switch {
		case a.e2 < b.e2:
			return -1
		case a.e2 > b.e2:
			return 1
		}
		return 0
	})
	n := 0
	for n < len(list) && list[n].e2 < 0.02*0.02 {
		n++
	}
	n = min(max(n, len(list)/3, 5), len(list))
	rms := func(s []item) (x, y float64) {
		for _, q := range s {
			x += q.dx * q.dx
			y += q.dy * q.dy
		}
		// Freedoms taken by the coefficients of one coordinate, in proportion.
		free := float64(len(s)) * max(1-float64(terms(g.t.Order))/float64(len(list)), 0.1)
		return math.Sqrt(x / free), math.Sqrt(y / free)
	}
	p.BrightStars = n
	g.brightNoise = 0
	for _, q := range list[:n] {
		g.brightNoise += q.e2 / float64(n)
	}
	g.brightNoise = math.Sqrt(g.brightNoise)
	p.RMSX, p.RMSY = rms(list[:n])
	p.RMSXAll, p.RMSYAll = rms(list)
}

// carryWCS fits the reference's world coordinates at the transformed positions
// as TAN-SIP. Where the transform has no stars to hold it, outside the common
// area, the fit extrapolates.
func (g *geometry) carryWCS(p *Pair) {
	ref := g.ref.Frame.WCS
	if ref == nil {
		return
	}
	var x, y, ra, dec []float64
	n := 25
	for range 3 {
		x, y, ra, dec = x[:0], y[:0], ra[:0], dec[:0]
		for j := range n {
			for i := range n {
				px, py := 1+(g.a.width-1)*float64(i)/float64(n-1), 1+(g.a.height-1)*float64(j)/float64(n-1)
				u, v := g.t.Apply(px, py)
				if !g.b.contains(point{u, v}) {
					continue
				}
				r, d, err := ref.PixelToSky(u, v)
				if err != nil {
					continue
				}
				x, y, ra, dec = append(x, px), append(y, py), append(ra, r), append(dec, d)
			}
		}
		if len(x) >= 150 {
			break
		}
		n *= 2
	}
	weight := make([]float64, len(x))
	for i := range weight {
		weight[i] = 1
	}
	// The lowest order that does.
	for order := 1; order <= 5; order++ {
		w, rms, err := wcs.FitTANSIP(x, y, ra, dec, weight, g.f.Image.Width, g.f.Image.Height, order)
		if err != nil {
			continue
		}
		if p.WCS == nil || rms < p.WCSRMS/3 {
			p.WCS, p.WCSRMS = w, rms
		}
		if rms < 1e-4 {
			break
		}
	}
}
