package align

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"
)

// sample is one matched star in the fit of the transform.
type sample struct {
	x, y   float64 // new px
	u, v   float64 // reference px
	sigma2 float64 // variance of either coordinate of the residual from the centroids' errors [reference px²]
	class  class
}

// class says how far the position of a sample can be trusted beyond the errors given for it.
type class uint8

const (
	pointlike class = iota // a star on both frames
	doubtful               // a galaxy, a blend, or a source that changed: its light has no one centre
	classes
)

// floors are the errors per coordinate [reference px] of the classes beyond those of the centroids.
type floors [classes]float64

// variance returns the variance of either coordinate of a sample's residual [reference px²].
func (f *floors) variance(s *sample) float64 { return s.sigma2 + f[s.class]*f[s.class] }

// uniform returns floors that are the same for all.
func uniform(floor float64) floors { return floors{floor, floor} }

// fitDomain returns the bounding box of samples as centre and half-sides.
func fitDomain(s []sample) (x0, y0, hx, hy float64) {
	lo, hi := point{math.Inf(1), math.Inf(1)}, point{math.Inf(-1), math.Inf(-1)}
	for _, p := range s {
		lo.x, lo.y = min(lo.x, p.x), min(lo.y, p.y)
		hi.x, hi.y = max(hi.x, p.x), max(hi.y, p.y)
	}
	return (lo.x + hi.x) / 2, (lo.y + hi.y) / 2, max((hi.x-lo.x)/2, 1), max((hi.y-lo.y)/2, 1)
}

// solution is one weighted least-squares fit.
type solution struct {
	t         *Transform
	condition float64 // of the normal matrix with unit diagonal
	// covariance of the coefficients of either coordinate, for weights that
	// are inverse variances.
	covariance mat.SymDense
}

// normal holds the sums of a least-squares problem with two right-hand sides.
type normal struct {
	n      int
	a      []float64 // n × n, upper triangle filled
	bx, by []float64
}

func newNormal(n int) *normal {
	return &normal{n: n, a: make([]float64, n*n), bx: make([]float64, n), by: make([]float64, n)}
}

// add enters one sample with its basis values and weight.
func (m *normal) add(b []float64, w, u, v float64) {
	for i, bi := range b {
		wb := w * bi
		row := m.a[i*m.n : (i+1)*m.n]
		for j := i; j < len(b); j++ {
			row[j] += wb * b[j]
		}
		m.bx[i] += wb * u
		m.by[i] += wb * v
	}
}

// minus returns the sums of m without those of o.
func (m *normal) minus(o *normal) *normal {
	r := newNormal(m.n)
	for i := range m.a {
		r.a[i] = m.a[i] - o.a[i]
	}
	for i := range m.bx {
		r.bx[i], r.by[i] = m.bx[i]-o.bx[i], m.by[i]-o.by[i]
	}
	return r
}

// solve factorises the matrix, scaled to a unit diagonal. ok is false when the
// samples do not determine the coefficients.
func (m *normal) solve(cx, cy []float64, covariance *mat.SymDense) (condition float64, ok bool) {
	n := m.n
	scale := make([]float64, n)
	for i := range n {
		d := m.a[i*n+i]
		if !(d > 0) {
			return math.Inf(1), false
		}
		scale[i] = 1 / math.Sqrt(d)
	}
	a := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			a.SetSym(i, j, m.a[i*n+j]*scale[i]*scale[j])
		}
	}
	var ch mat.Cholesky
	if !ch.Factorize(a) {
		return math.Inf(1), false
	}
	condition = ch.Cond()
	if !(condition < 1e10) {
		return condition, false
	}
	for k, b := range [2][]float64{m.bx, m.by} {
		rhs := mat.NewVecDense(n, nil)
		for i := range n {
			rhs.SetVec(i, b[i]*scale[i])
		}
		var x mat.VecDense
		if err := ch.SolveVecTo(&x, rhs); err != nil {
			return condition, false
		}
		out := [2][]float64{cx, cy}[k]
		for i := range n {
			out[i] = x.AtVec(i) * scale[i]
		}
	}
	if covariance != nil {
		var inv mat.SymDense
		if err := ch.InverseTo(&inv); err != nil {
			return condition, false
		}
		covariance.Reset()
		covariance.ReuseAsSym(n)
		for i := range n {
			for j := i; j < n; j++ {
				covariance.SetSym(i, j, inv.At(i, j)*scale[i]*scale[j])
			}
		}
	}
	return condition, true
}

// fitOnce fits a transform of given order to the samples that use marks (nil:
// all), with inverse-variance weights 1/(sigma2+floor²).
func fitOnce(s []sample, use []bool, order int, floor floors) (*solution, bool) {
	t := &Transform{Order: order, CX: make([]float64, terms(order)), CY: make([]float64, terms(order))}
	t.X0, t.Y0, t.HalfX, t.HalfY = fitDomain(s)
	m := newNormal(terms(order))
	b := make([]float64, m.n)
	// Offsets from the centre keep the sums exact for large coordinates.
	for i := range s {
		if use != nil && !use[i] {
			continue
		}
		t.basis(s[i].x, s[i].y, b)
		m.add(b, 1/floor.variance(&s[i]), s[i].u-t.X0, s[i].v-t.Y0)
	}
	r := &solution{t: t}
	var ok bool
	r.condition, ok = m.solve(t.CX, t.CY, &r.covariance)
	t.CX[0] += t.X0
	t.CY[0] += t.Y0
	return r, ok
}

// predictedError returns the 1σ error of either coordinate that the fit predicts at (x,y)
// [reference px].
func (r *solution) predictedError(x, y float64) float64 {
	b := make([]float64, terms(r.t.Order))
	r.t.basis(x, y, b)
	v := mat.NewVecDense(len(b), b)
	return math.Sqrt(max(mat.Inner(v, &r.covariance, v), 0))
}

// residual2 returns the squared length of a sample's residual [reference px²].
func residual2(t *Transform, p *sample) float64 {
	u, v := t.Apply(p.x, p.y)
	return (u-p.u)*(u-p.u) + (v-p.v)*(v-p.v)
}

// Twice the logarithm of two: the median of chi-square with two degrees of freedom.
const medianChi2 = 2 * math.Ln2

// estimateFloors returns the floor of each class. Doubtful samples are never
// better than stars. They carry the fit where they are good, and leave it to the
// stars where they are not, however few the stars.
func estimateFloors(s []sample, use []bool, t *Transform, low, high float64) (f floors) {
	f[pointlike] = estimateFloor(s, use, pointlike, t, low, high)
	f[doubtful] = max(f[pointlike], estimateFloor(s, use, doubtful, t, low, high))
	return f
}

// estimateFloor returns the extra error per coordinate [reference px] that
// makes the median of residual²/(sigma2+floor²) that of chi-square with two
// degrees of freedom, for the better quarter of the samples of one class used (half of fewer than 80),
// corrected for the coefficients fitted.
func estimateFloor(s []sample, use []bool, of class, t *Transform, low, high float64) float64 {
	var sig []float64
	for i := range s {
		if use[i] && s[i].class == of {
			sig = append(sig, s[i].sigma2)
		}
	}
	if len(sig) == 0 {
		return low
	}
	if len(sig) < 40 {
		return likelyFloor(s, use, of, t, low, high)
	}
	slices.Sort(sig)
	cut := sig[(len(sig)-1)/4]
	if len(sig) < 80 {
		cut = sig[(len(sig)-1)/2]
	}
	// A median of some thousand is good enough.
	every := max(1, len(sig)/3000)
	seen := 0
	var r2, s2 []float64
	for i := range s {
		if use[i] && s[i].class == of && s[i].sigma2 <= cut {
			if seen++; seen%every != 0 {
				continue
			}
			r2 = append(r2, residual2(t, &s[i]))
			s2 = append(s2, s[i].sigma2)
		}
	}
	n := float64(len(sig))
	target := medianChi2 * max(1-float64(terms(t.Order))/n, 0.1)
	ratio := make([]float64, len(r2))
	median := func(f float64) float64 {
		for i := range r2 {
			ratio[i] = r2[i] / (s2[i] + f*f)
		}
		slices.Sort(ratio)
		return (ratio[(len(ratio)-1)/2] + ratio[len(ratio)/2]) / 2
	}
	if median(low) <= target {
		return low
	}
	if median(high) >= target {
		return high
	}
	for range 30 {
		mid := math.Sqrt(low * high)
		if median(mid) > target {
			low = mid
		} else {
			high = mid
		}
	}
	return math.Sqrt(low * high)
}

// likelyFloor returns the floor of the largest likelihood, for normal residuals. Of few samples
// a median would be that of the faint ones, and its noise the floor of the bright.
func likelyFloor(s []sample, use []bool, of class, t *Transform, low, high float64) float64 {
	var r2, s2 []float64
	for i := range s {
		if use[i] && s[i].class == of {
			r2 = append(r2, residual2(t, &s[i]))
			s2 = append(s2, s[i].sigma2)
		}
	}
	free := max(1-float64(terms(t.Order))/float64(len(r2)), 0.25)
	best, floor := math.Inf(1), low
	for f := low; f <= high; f *= 1.1 {
		c := 0.0
		for i := range r2 {
			v := s2[i] + f*f
			c += free*math.Log(v) + r2[i]/(2*v)
		}
		if c < best {
			best, floor = c, f
		}
	}
	return floor
}

// Samples farther out than clipSigma (in units of the error of either
// coordinate) are left out of the fit.
const clipSigma = 4.5

// fitRobust fits with iterative clipping and returns the solution, the samples
// kept and the floor. start gives the first residuals; nil fits all first.
func fitRobust(s []sample, start *Transform, order int, floorLow, floorHigh float64) (*solution, []bool, floors, bool) {
	use := make([]bool, len(s))
	for i := range use {
		use[i] = true
	}
	floor := uniform(floorLow)
	t := start
	var r *solution
	previous := make([]bool, len(s))
	var last floors
	for round := range 20 {
		if t != nil {
			// The floor first, from what is neither clipped nor far out.
			if round > 0 {
				floor = estimateFloors(s, use, t, floorLow, floorHigh)
			} else {
				floor = estimateFloors(s, use, t, floorLow, 10*floorHigh)
			}
			settled := floor[pointlike] < 1.15*last[pointlike] && floor[pointlike] > last[pointlike]/1.15
			last = floor
			copy(previous, use)
			n := 0
			for i := range s {
				use[i] = residual2(t, &s[i]) < clipSigma*clipSigma*floor.variance(&s[i])
				if use[i] {
					n++
				}
			}
			if n < max(3, terms(order)) {
				return nil, nil, floors{}, false
			}
			if round > 1 && settled && slices.Equal(previous, use) {
				return r, use, floor, true
			}
		}
		next, ok := fitOnce(s, use, order, floor)
		if !ok {
			return nil, nil, floors{}, false
		}
		r, t = next, next.t
	}
	return r, use, floor, true
}

// crossValidate fits an order to four fifths of the samples, five times, and
// returns the sum of squared residuals of those left out in units of their
// variance (each at most 12), and the largest error [reference px] that the
// fit to all predicts for itself at the positions in check. The score is
// infinite where the samples do not determine the fit.
func crossValidate(s []sample, floor floors, order int, check []point) (score, wildness float64) {
	const folds = 5
	n := terms(order)
	if len(s) < 3*n {
		return math.Inf(1), 0
	}
	t := &Transform{Order: order}
	t.X0, t.Y0, t.HalfX, t.HalfY = fitDomain(s)
	b := make([]float64, n)
	all := newNormal(n)
	var part [folds]*normal
	for k := range part {
		part[k] = newNormal(n)
	}
	for i := range s {
		t.basis(s[i].x, s[i].y, b)
		w := 1 / floor.variance(&s[i])
		part[i%folds].add(b, w, s[i].u-t.X0, s[i].v-t.Y0)
	}
	for k := range part {
		for i := range all.a {
			all.a[i] += part[k].a[i]
		}
		for i := range all.bx {
			all.bx[i] += part[k].bx[i]
			all.by[i] += part[k].by[i]
		}
	}
	t.CX, t.CY = make([]float64, n), make([]float64, n)
	for k := range part {
		if _, ok := all.minus(part[k]).solve(t.CX, t.CY, nil); !ok {
			return math.Inf(1), 0
		}
		t.CX[0] += t.X0
		t.CY[0] += t.Y0
		for i := k; i < len(s); i += folds {
			score += min(residual2(t, &s[i])/floor.variance(&s[i]), 12)
		}
	}
	full := &solution{t: t}
	if _, ok := all.solve(t.CX, t.CY, &full.covariance); !ok {
		return math.Inf(1), 0
	}
	for _, p := range check {
		wildness = max(wildness, full.predictedError(p.x, p.y))
	}
	return score, wildness
}

// robustFit is what fitRobust returned.
type robustFit struct {
	solution *solution
	use      []bool
	floor    floors
}

// chooseOrder fits the orders 1 to most and picks one by cross-validation: a
// higher one must predict the samples left out better by more than the noise
// of that score, and the error it predicts for itself at the positions in check
// must not explode. The two are compared on what the lower order keeps, so that
// stars with wrong positions do not bend the map to themselves. admit (nil for
// none) can refuse a fit.
func chooseOrder(s []sample, start *Transform, most int, low, high float64, check []point, admit func(t *Transform) bool) (robustFit, bool) {
	var best robustFit
	var ok bool
	best.solution, best.use, best.floor, ok = fitRobust(s, start, 1, low, high)
	if !ok {
		return best, false
	}
	order := 1
	for next := 2; next <= most; next++ {
		var f robustFit
		f.solution, f.use, f.floor, ok = fitRobust(s, start, next, low, high)
		if !ok {
			continue
		}
		kept := make([]sample, 0, len(s))
		for i := range s {
			if best.use[i] {
				kept = append(kept, s[i])
			}
		}
		floor := floors{min(f.floor[0], best.floor[0]), min(f.floor[1], best.floor[1])}
		was, wasWild := crossValidate(kept, floor, order, check)
		is, isWild := crossValidate(kept, floor, next, check)
		// Where the errors given are too small, the score's noise is larger.
		unit := max(1, is/(2*float64(len(kept))))
		extra := 2 * float64(terms(next)-terms(order))
		gain := (was - is) / unit
		wild := max(0.04, 3*wasWild)
		if gain > 20*extra {
			wild = max(0.15, wild) // a strong distortion: better its rough shape than none
		}
		if gain > 3*extra {
			// The lower order misfits every star by what its floor exceeds the
			// higher one's: uncertainty up to that much is the lesser evil.
			wild = max(wild, best.floor[pointlike]-f.floor[pointlike])
		}
		if gain > extra/2+6 && isWild < wild && (admit == nil || admit(f.solution.t)) {
			best, order = f, next
		}
	}
	return best, true
}
