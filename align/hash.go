package align

import (
	"cmp"
	"context"
	"math"
	"slices"
)

// affine maps x' = x0 + xx·x + xy·y, y' = y0 + yx·x + yy·y.
type affine struct{ x0, xx, xy, y0, yx, yy float64 }

func (a affine) apply(p point) point {
	return point{a.x0 + a.xx*p.x + a.xy*p.y, a.y0 + a.yx*p.x + a.yy*p.y}
}

func (a affine) det() float64 { return a.xx*a.yy - a.xy*a.yx }

// scale is the square root of the area of a unit square's image.
func (a affine) scale() float64 { return math.Sqrt(math.Abs(a.det())) }

// sane reports whether the map is finite and near a similarity: its two axes
// are stretched alike to a tenth and are perpendicular to a tenth.
func (a affine) sane() bool {
	s := a.scale()
	if !(s > 1e-6) || math.IsInf(s, 0) || math.IsNaN(a.x0+a.y0) {
		return false
	}
	u, v := math.Hypot(a.xx, a.yx), math.Hypot(a.xy, a.yy)
	dot := (a.xx*a.xy + a.yx*a.yy) / (u * v)
	return math.Abs(u/v-1) < 0.1 && math.Abs(dot) < 0.1
}

// pairing joins point a of the new list with point b of the reference list.
type pairing struct{ a, b int32 }

// field is one list of points, brightest first, on a frame.
type field struct {
	pts           []point
	width, height float64
}

func (f field) contains(p point) bool {
	return p.x >= 0.5 && p.y >= 0.5 && p.x <= f.width+0.5 && p.y <= f.height+0.5
}

func (f field) brightest(n int) field {
	return field{pts: f.pts[:min(n, len(f.pts))], width: f.width, height: f.height}
}

// search bounds the hunt for a pattern.
type search struct {
	scaleLo, scaleHi float64 // bounds of the scale [reference px per new px]
	tolerance        float64 // px of the coarser grid, within which two positions coincide
	minStars         int     // fewest coincidences to accept
}

// The chance of accepting a wrong field is kept below falseOdds for each frame,
// if stars fall independently; a wrong transform gets that far only by luck, so
// the number of transforms tried multiplies its odds.
const falseOdds = 1e-9

// evidence is what speaks for a transform.
type evidence struct {
	matched  int     // coincidences, one to one
	possible int     // the smaller number of bright stars in the common area
	expected float64 // coincidences by chance
	logOdds  float64 // log10 of the chance of as many, times the transforms tried
}

// triangle is three points of a list with the opposite sides in falling order:
// v[0] lies opposite the longest side.
type triangle struct {
	v        [3]int32
	r2, r3   float32 // second and third side over the longest
	longest  float32 // px
	positive bool    // v[0], v[1], v[2] turn counter-clockwise
}

// triangles joins every point with pairs of its k nearest neighbours. Triangles
// that say little (needles, near ties of two sides) are left out.
func triangles(pts []point, k int, tolerance float64) []triangle {
	g := newIndex(pts, cellFor(pts))
	var keys []uint64
	for i := range pts {
		near := g.neighbours(i, k)
		for m, j := range near {
			for _, l := range near[:m] {
				a, b, c := int32(i), j, l
				if a > b {
					a, b = b, a
				}
				if b > c {
					b, c = c, b
				}
				if a > b {
					a, b = b, a
				}
				keys = append(keys, uint64(a)<<42|uint64(b)<<21|uint64(c))
			}
		}
	}
	slices.Sort(keys)
	keys = slices.Compact(keys)
	out := make([]triangle, 0, len(keys))
	for _, key := range keys {
		v := [3]int32{int32(key >> 42), int32(key >> 21 & (1<<21 - 1)), int32(key & (1<<21 - 1))}
		side := func(a, b int32) float64 { return math.Hypot(pts[a].x-pts[b].x, pts[a].y-pts[b].y) }
		s := [3]float64{side(v[1], v[2]), side(v[0], v[2]), side(v[0], v[1])} // s[i] opposite v[i]
		for _, o := range [3][2]int{{0, 1}, {1, 2}, {0, 1}} {
			if s[o[0]] < s[o[1]] {
				s[o[0]], s[o[1]] = s[o[1]], s[o[0]]
				v[o[0]], v[o[1]] = v[o[1]], v[o[0]]
			}
		}
		if s[2] < 6*tolerance || s[2] < 0.1*s[0] || s[1]-s[2] < tolerance/2 || s[0]-s[1] < tolerance/2 || s[1]+s[2] < 1.01*s[0] {
			continue
		}
		a, b, c := pts[v[0]], pts[v[1]], pts[v[2]]
		cross := (b.x-a.x)*(c.y-a.y) - (b.y-a.y)*(c.x-a.x)
		if math.Abs(cross) < 0.05*s[0]*s[0] {
			continue
		}
		out = append(out, triangle{v: v, r2: float32(s[1] / s[0]), r3: float32(s[2] / s[0]), longest: float32(s[0]), positive: cross > 0})
	}
	return out
}

// cellFor gives cells of about two points.
func cellFor(pts []point) float64 {
	if len(pts) == 0 {
		return 1
	}
	lo, hi := pts[0], pts[0]
	for _, p := range pts {
		lo.x, lo.y = min(lo.x, p.x), min(lo.y, p.y)
		hi.x, hi.y = max(hi.x, p.x), max(hi.y, p.y)
	}
	return math.Sqrt(2 * max(hi.x-lo.x, 1) * max(hi.y-lo.y, 1) / float64(len(pts)))
}

// similarity returns the map with one scale that brings three points of the new
// list nearest to three of the reference, and its largest residual.
func similarity(p, q [3]point, mirrored bool) (affine, float64) {
	var pc, qc point
	for i := range p {
		pc.x, pc.y = pc.x+p[i].x/3, pc.y+p[i].y/3
		qc.x, qc.y = qc.x+q[i].x/3, qc.y+q[i].y/3
	}
	var re, im, den float64
	sign := 1.0
	if mirrored {
		sign = -1
	}
	for i := range p {
		px, py := p[i].x-pc.x, sign*(p[i].y-pc.y)
		qx, qy := q[i].x-qc.x, q[i].y-qc.y
		re += px*qx + py*qy
		im += px*qy - py*qx
		den += px*px + py*py
	}
	re, im = re/den, im/den
	t := affine{xx: re, xy: -im * sign, yx: im, yy: re * sign}
	t.x0 = qc.x - t.xx*pc.x - t.xy*pc.y
	t.y0 = qc.y - t.yx*pc.x - t.yy*pc.y
	worst := 0.0
	for i := range p {
		m := t.apply(p[i])
		worst = max(worst, math.Hypot(m.x-q[i].x, m.y-q[i].y))
	}
	return t, worst
}

// matcher compares two bright lists.
type matcher struct {
	a, b  field
	index *index // over b
	find  search
	// trials counts the transforms that were looked at, over all lists.
	trials int
	// density is the mean number of points of b per square pixel.
	density float64
	// scratch
	used  []int32
	pairs []pairing
}

// tolerance returns the radius [reference px] within which positions coincide.
func (m *matcher) tolerance(t affine) float64 { return m.find.tolerance * max(1, t.scale()) }

// pairUp joins each point of a within radius of (x,y) with the point of b nearest to its image, if that lies within
// tol; of several claims on one point of b the nearest wins. The result lives
// until the next call.
func (m *matcher) pairUp(t affine, centre point, radius, tol float64) []pairing {
	if cap(m.used) < len(m.b.pts) {
		m.used = make([]int32, len(m.b.pts))
	}
	used := m.used[:len(m.b.pts)]
	for i := range used {
		used[i] = -1
	}
	m.pairs = m.pairs[:0]
	for i, p := range m.a.pts {
		if (p.x-centre.x)*(p.x-centre.x)+(p.y-centre.y)*(p.y-centre.y) > radius*radius {
			continue
		}
		q := t.apply(p)
		k, d := m.index.nearest(q.x, q.y, tol)
		if k < 0 {
			continue
		}
		if n := used[k]; n >= 0 {
			o := t.apply(m.a.pts[m.pairs[n].a])
			if (o.x-m.b.pts[k].x)*(o.x-m.b.pts[k].x)+(o.y-m.b.pts[k].y)*(o.y-m.b.pts[k].y) > d {
				m.pairs[n].a = int32(i)
			}
			continue
		}
		used[k] = int32(len(m.pairs))
		m.pairs = append(m.pairs, pairing{int32(i), int32(k)})
	}
	return m.pairs
}

// grow verifies a transform from its neighbourhood outwards: pairs within a
// radius refine the map, which then holds for a larger radius.
func (m *matcher) grow(t affine, centre point, radius float64) (affine, evidence) {
	whole := math.Hypot(m.a.width, m.a.height)
	for {
		for range 2 {
			pairs := m.pairUp(t, centre, radius, m.tolerance(t))
			next, ok := m.refit(t, pairs)
			if !ok {
				return t, evidence{}
			}
			t = next
		}
		if radius >= whole {
			break
		}
		inside := 0
		for _, p := range m.a.pts {
			if (p.x-centre.x)*(p.x-centre.x)+(p.y-centre.y)*(p.y-centre.y) <= radius*radius && m.b.contains(t.apply(p)) {
				inside++
			}
		}
		tol := m.tolerance(t)
		if logPoissonTail(len(m.pairs)-3, float64(inside)*m.density*math.Pi*tol*tol) > -1 {
			return t, evidence{}
		}
		radius *= 1.7
	}
	return t, m.weigh(t, len(m.pairUp(t, centre, math.Inf(1), m.tolerance(t))))
}

// refit fits the map to pairs: affine where enough of them tell the axes apart, else a
// similarity.
func (m *matcher) refit(t affine, pairs []pairing) (affine, bool) {
	if len(pairs) < 3 {
		return t, false
	}
	var n, px, py, qx, qy float64
	for _, k := range pairs {
		p, q := m.a.pts[k.a], m.b.pts[k.b]
		n, px, py, qx, qy = n+1, px+p.x, py+p.y, qx+q.x, qy+q.y
	}
	px, py, qx, qy = px/n, py/n, qx/n, qy/n
	var sxx, sxy, syy, xu, yu, xv, yv float64
	for _, k := range pairs {
		p, q := m.a.pts[k.a], m.b.pts[k.b]
		x, y, u, v := p.x-px, p.y-py, q.x-qx, q.y-qy
		sxx, sxy, syy = sxx+x*x, sxy+x*y, syy+y*y
		xu, yu, xv, yv = xu+x*u, yu+y*u, xv+x*v, yv+y*v
	}
	var r affine
	det := sxx*syy - sxy*sxy
	if len(pairs) >= 6 && det > 0.05*sxx*syy && min(sxx, syy) > 0.02*max(sxx, syy) {
		r.xx, r.xy = (xu*syy-yu*sxy)/det, (yu*sxx-xu*sxy)/det
		r.yx, r.yy = (xv*syy-yv*sxy)/det, (yv*sxx-xv*sxy)/det
	} else {
		sign := 1.0
		if t.det() < 0 {
			sign = -1
		}
		den := sxx + syy
		if !(den > 0) {
			return t, false
		}
		re, im := (xu+sign*yv)/den, (xv-sign*yu)/den
		r = affine{xx: re, xy: -sign * im, yx: im, yy: sign * re}
	}
	r.x0 = qx - r.xx*px - r.xy*py
	r.y0 = qy - r.yx*px - r.yy*py
	s := r.scale()
	return r, r.sane() && s >= m.find.scaleLo*0.99 && s <= m.find.scaleHi*1.01 && (r.det() > 0) == (t.det() > 0)
}

// weigh computes how far the number of coincidences lies above chance. Chance
// is the larger of two numbers: from the mean density in the common area, and
// counted with the transform pushed aside, which sees clusters.
func (m *matcher) weigh(t affine, matched int) evidence {
	tol := m.tolerance(t)
	e := evidence{matched: matched}
	inA := 0
	for _, p := range m.a.pts {
		if m.b.contains(t.apply(p)) {
			inA++
		}
	}
	// The part of the reference that the new frame covers, by its own stars.
	back, ok := t.inverse()
	if !ok || inA == 0 {
		return e
	}
	inB := 0
	for _, q := range m.b.pts {
		if m.a.contains(back.apply(q)) {
			inB++
		}
	}
	area := overlapArea(t, m.a, m.b)
	e.possible = min(inA, inB)
	if area > 0 {
		e.expected = float64(inA) * float64(inB) * math.Pi * tol * tol / max(area, 20*tol*tol)
	}
	pushed := 0
	const pushes = 12
	for k := range pushes {
		angle := 2 * math.Pi * float64(k) / pushes
		far := tol * (4 + 2.5*float64(k%4))
		s := t
		s.x0, s.y0 = t.x0+far*math.Cos(angle), t.y0+far*math.Sin(angle)
		pushed += len(m.pairUp(s, point{}, math.Inf(1), tol))
	}
	e.expected = max(e.expected, float64(pushed)/pushes)
	// Three pairs are given away: they determine the map.
	e.logOdds = logPoissonTail(matched-3, e.expected) + math.Log10(float64(max(m.trials, 1)))
	return e
}

// inverse returns the inverse map.
func (a affine) inverse() (affine, bool) {
	d := a.det()
	if !(math.Abs(d) > 1e-12) {
		return affine{}, false
	}
	r := affine{xx: a.yy / d, xy: -a.xy / d, yx: -a.yx / d, yy: a.xx / d}
	r.x0 = -r.xx*a.x0 - r.xy*a.y0
	r.y0 = -r.yx*a.x0 - r.yy*a.y0
	return r, true
}

// overlapArea returns the area [reference px²] that the image of frame a shares
// with frame b, from a lattice of positions.
func overlapArea(t affine, a, b field) float64 {
	const n = 24
	in := 0
	for j := range n {
		for i := range n {
			p := point{0.5 + a.width*(float64(i)+0.5)/n, 0.5 + a.height*(float64(j)+0.5)/n}
			if b.contains(t.apply(p)) {
				in++
			}
		}
	}
	return float64(in) / (n * n) * a.width * a.height * math.Abs(t.det())
}

// logPoissonTail returns log10 of an upper bound, good to a factor of two, of
// the probability of k or more events when mu are expected.
func logPoissonTail(k int, mu float64) float64 {
	if k <= 0 || float64(k) <= mu {
		return 0
	}
	if mu <= 0 {
		mu = 1e-12
	}
	lg, _ := math.Lgamma(float64(k) + 1)
	p := -mu + float64(k)*math.Log(mu) - lg
	// The tail is at most a geometric series.
	p -= math.Log1p(-mu / float64(k+1))
	return p / math.Ln10
}

// accepts decides on the evidence.
func (m *matcher) accepts(e evidence) bool {
	return e.matched >= m.find.minStars && e.logOdds < math.Log10(falseOdds) &&
		float64(e.matched) >= 0.15*float64(e.possible) && float64(e.matched) >= 2*e.expected
}

// proposals calls try with each similarity that brings a triangle of a onto an
// alike one of b, brighter triangles of a first, until it returns false.
func (m *matcher) proposals(ta, tb []triangle, try func(t affine, x, y *triangle) bool) {
	const bins = 128
	bin := func(r float32) int { return min(max(int(r*bins), 0), bins-1) }
	start := make([]int32, bins*bins+1)
	for i := range tb {
		start[bin(tb[i].r2)*bins+bin(tb[i].r3)+1]++
	}
	for c := range bins * bins {
		start[c+1] += start[c]
	}
	next := slices.Clone(start[:bins*bins])
	order := make([]int32, len(tb))
	for i := range tb {
		c := bin(tb[i].r2)*bins + bin(tb[i].r3)
		order[next[c]] = int32(i)
		next[c]++
	}
	slices.SortStableFunc(ta, func(p, q triangle) int {
		return cmp.Compare(max(p.v[0], p.v[1], p.v[2]), max(q.v[0], q.v[1], q.v[2]))
	})
	lo, hi := float32(m.find.scaleLo), float32(m.find.scaleHi)
	tol := m.find.tolerance
	free := hi > 1.2*lo
	for i := range ta {
		x := &ta[i]
		// Two ends of a side, each off by about a third of the tolerance, and
		// a difference of the two axes' scales.
		eps := float32(0.004 + min(0.5*tol/float64(x.longest), 0.03))
		for c2 := bin(x.r2 - eps); c2 <= bin(x.r2+eps); c2++ {
			for _, k := range order[start[c2*bins+bin(x.r3-eps)]:start[c2*bins+bin(x.r3+eps)+1]] {
				y := &tb[k]
				if d := x.r2 - y.r2; d > eps || d < -eps {
					continue
				}
				if d := x.r3 - y.r3; d > eps || d < -eps {
					continue
				}
				if y.longest < lo*x.longest || y.longest > hi*x.longest {
					continue
				}
				if free && m.hopeless(float64(y.longest/x.longest)) {
					continue
				}
				m.trials++
				var p, q [3]point
				for n := range 3 {
					p[n], q[n] = m.a.pts[x.v[n]], m.b.pts[y.v[n]]
				}
				t, worst := similarity(p, q, x.positive != y.positive)
				if worst > m.tolerance(t)+0.004*float64(y.longest) {
					continue
				}
				if !try(t, x, y) {
					return
				}
			}
		}
	}
}

// hashMatch finds the map from list a (new) to list b (reference) without any
// knowledge but the bounds in find. It returns the map, the evidence for it and
// whether it is accepted; when it is not, the best evidence seen. The error is
// the context's.
func hashMatch(ctx context.Context, a, b field, find search) (affine, evidence, bool, error) {
	type round struct {
		na, nb, k int
		lo, hi    float64 // scales tried
	}
	var rounds []round
	// Bright lists that reach equally deep: their lengths go as the areas on
	// the sky.
	ratios := []float64{1}
	free := find.scaleHi > 1.2*find.scaleLo
	if free {
		ratios = []float64{1, 0.25, 4, 1. / 16, 16}
	} else {
		s := math.Sqrt(find.scaleLo * find.scaleHi)
		ratios[0] = b.width * b.height / (a.width * a.height * s * s)
	}
	for _, n := range []int{30, 100, 300, 900} {
		for _, r := range ratios {
			na, nb := float64(n), float64(n)
			if r > 1 {
				nb = min(nb*r, 4000)
			} else {
				na = min(na/r, 4000)
			}
			if free && (n >= 900 || n >= 300 && (r > 4 || r < 0.25)) {
				continue // a pattern at any scale shows in the brighter stars, or costs seconds
			}
			k := 8
			if n <= 30 {
				k = 14
			} else if n >= 900 {
				k = 6
			}
			add := round{min(int(na), len(a.pts)), min(int(nb), len(b.pts)), k, find.scaleLo, find.scaleHi}
			if free && add.na == int(na) && add.nb == int(nb) {
				// The scale at which the two lists reach equally deep, give or
				// take. Short lists are compared whole, at any scale.
				s := math.Sqrt(float64(add.na) / (a.width * a.height) / (float64(add.nb) / (b.width * b.height)))
				add.lo, add.hi = max(add.lo, s/2.5), min(add.hi, s*2.5)
			}
			rounds = append(rounds, add)
		}
	}
	var best evidence
	var bestMap affine
	trials := 0
	done := map[round]bool{}
	for _, r := range rounds {
		if done[r] || r.na < 3 || r.nb < 3 {
			continue
		}
		done[r] = true
		m := &matcher{a: a.brightest(r.na), b: b.brightest(r.nb), find: find, trials: trials}
		m.find.scaleLo, m.find.scaleHi = r.lo, r.hi
		m.index = newIndex(m.b.pts, max(2*find.tolerance, cellFor(m.b.pts)/2))
		m.density = float64(len(m.b.pts)) / (b.width * b.height)
		ta, tb := triangles(m.a.pts, r.k, find.tolerance), triangles(m.b.pts, r.k, find.tolerance)
		near := make([][]int32, len(m.a.pts))
		ga := newIndex(m.a.pts, cellFor(m.a.pts))
		for i := range near {
			near[i] = ga.neighbours(i, 12)
		}
		var err error
		found := false
		budget := m.trials + 1_000_000
		if free {
			budget = m.trials + 150_000
		}
		m.proposals(ta, tb, func(t affine, x, y *triangle) bool {
			if m.trials&1023 == 0 && ctx.Err() != nil {
				err = ctx.Err()
				return false
			}
			if !m.supported(t, x, y, near) {
				return m.trials < budget
			}
			c := m.a.pts[x.v[0]]
			g, e := m.grow(t, c, 2*float64(x.longest))
			if e.matched > 0 && (best.matched == 0 || e.logOdds < best.logOdds) {
				best, bestMap = e, g
			}
			found = m.accepts(e)
			return !found && m.trials < budget
		})
		trials = m.trials
		if err != nil {
			return bestMap, best, false, err
		}
		if found {
			return bestMap, best, true, nil
		}
	}
	return bestMap, best, false, ctx.Err()
}

// supported is the cheap first check of a proposal: more neighbours of the
// triangle must fall on a point of the reference than chance explains.
func (m *matcher) supported(t affine, x, y *triangle, near [][]int32) bool {
	tol := m.tolerance(t)
	need := m.need(tol, 3*len(near[x.v[0]]))
	count := 0
	for v := range 3 {
		for _, i := range near[x.v[v]] {
			if i == x.v[0] || i == x.v[1] || i == x.v[2] {
				continue
			}
			q := t.apply(m.a.pts[i])
			k, _ := m.index.nearest(q.x, q.y, tol)
			if k < 0 || int32(k) == y.v[0] || int32(k) == y.v[1] || int32(k) == y.v[2] {
				continue
			}
			count++
			if count >= need {
				return true
			}
		}
		if v == 0 && count == 0 && len(m.a.pts) > 60 {
			return false
		}
	}
	return false
}

// supportMean[k] is the expected number of coincidences up to which k of them
// come by chance in less than one of three thousand proposals.
var supportMean = func() (t [13]float64) {
	for k := 2; k < len(t); k++ {
		lo, hi := 0.0, float64(k)
		for range 50 {
			mid := (lo + hi) / 2
			if logPoissonTail(k, mid) > -3.5 {
				hi = mid
			} else {
				lo = mid
			}
		}
		t[k] = lo
	}
	return
}()

// need returns how many of n neighbours must coincide.
func (m *matcher) need(tol float64, n int) int {
	mu := float64(n) * m.density * math.Pi * tol * tol
	k := 2
	for k < len(supportMean)-1 && mu > supportMean[k] {
		k++
	}
	return k
}

// hopeless reports a scale at which the stars of either list lie so close,
// compared with the tolerance, that no coincidence tells anything.
func (m *matcher) hopeless(scale float64) bool {
	tol := m.find.tolerance * max(1, scale)
	here := float64(len(m.a.pts)) / (m.a.width * m.a.height)
	const most = 0.25 // neighbours within the tolerance
	return m.density*math.Pi*tol*tol > most || here*math.Pi*tol*tol > most*scale*scale
}

// shiftMatch starts from a map that is right up to a shift of at most radius
// reference pixels (from world coordinates): the most frequent shift between
// bright stars is taken and verified.
func shiftMatch(a, b field, start affine, radius float64, find search) (affine, evidence, bool) {
	if !start.sane() {
		return start, evidence{}, false
	}
	// Bright stars of the common area only.
	pick := func(from field, t affine, into field, margin float64) field {
		out := field{width: from.width, height: from.height}
		for _, p := range from.pts {
			q := t.apply(p)
			if q.x > -margin && q.y > -margin && q.x < into.width+margin && q.y < into.height+margin {
				out.pts = append(out.pts, p)
				if len(out.pts) == 400 {
					break
				}
			}
		}
		return out
	}
	back, ok := start.inverse()
	if !ok {
		return start, evidence{}, false
	}
	m := &matcher{a: pick(a, start, b, radius), b: pick(b, back, a, radius/start.scale()), find: find}
	if len(m.a.pts) < 3 || len(m.b.pts) < 3 {
		return start, evidence{}, false
	}
	tol := m.tolerance(start)
	m.index = newIndex(m.b.pts, max(2*tol, cellFor(m.b.pts)/2))
	n := int(math.Ceil(2*radius/tol)) + 2
	votes := make([]int32, n*n)
	for _, p := range m.a.pts {
		q := start.apply(p)
		i0, i1, j0, j1 := m.index.cells(q.x, q.y, radius)
		for j := j0; j <= j1; j++ {
			if i0 > i1 {
				break
			}
			for _, k := range m.index.order[m.index.start[j*m.index.nx+i0]:m.index.start[j*m.index.nx+i1+1]] {
				u, v := (m.b.pts[k].x-q.x+radius)/tol, (m.b.pts[k].y-q.y+radius)/tol
				if u >= 0 && v >= 0 && u < float64(n-1) && v < float64(n-1) {
					votes[int(v)*n+int(u)]++
				}
			}
		}
	}
	best, at := int32(-1), 0
	for v := range n - 1 {
		for u := range n - 1 {
			c := v*n + u
			if s := votes[c] + votes[c+1] + votes[c+n] + votes[c+n+1]; s > best {
				best, at = s, c
			}
		}
	}
	t := start
	t.x0 += (float64(at%n)+1)*tol - radius
	t.y0 += (float64(at/n)+1)*tol - radius
	m.trials = n * n
	for range 3 {
		pairs := m.pairUp(t, point{}, math.Inf(1), 1.5*tol)
		next, ok := m.refit(t, pairs)
		if !ok {
			return t, evidence{}, false
		}
		t = next
	}
	e := m.weigh(t, len(m.pairUp(t, point{}, math.Inf(1), tol)))
	return t, e, m.accepts(e)
}
