package psf

import "math"

const (
	gridFolds = 3
	modeOrder = 6
	modeCount = (modeOrder + 1) * (modeOrder + 2) / 2
)

// gridStrengths are the tried sizes of the residual grid's prior, as a share of
// the profile's value.
var gridStrengths = []float64{0.005, 0.015, 0.05, 0.15}

// fitGrid fits the residual grid to what the elliptical part leaves.
//
// The constant term solves the normal equations of all nodes, a banded system,
// under a prior that expects coefficients of a share τ of the profile (more in
// its wings) and small second differences. τ is chosen by prediction of stars
// left out; if no τ predicts better than no grid there is none. The terms that
// vary over the field are combinations of Gauss-Hermite functions, of order 6
// at most, sampled on the same nodes; their order and strength are chosen in
// the same way.
func (s *fitState) fitGrid() {
	m := s.m
	h := m.spacing
	reach := (nodesHalf+1.5)*h + 0.5
	taken := int(math.Ceil(3 + 1/h))
	band := (taken - 1) * (nodesSide + 1)

	// What each star leaves: data - sky - neighbours - the elliptical part.
	type job struct {
		st    *fitStar
		res   []float64
		flux  float64 // flux/(1+net)
		in    []int   // pixels within reach
		tx    []taps
		ty    []taps
		info  float64
		phi   [6]float64
		fold  int
		modeA [modeCount * modeCount]float64
		modeB [modeCount]float64
	}
	jobs := make([]*job, len(s.st))
	for k, st := range s.st {
		jobs[k] = &job{st: st, fold: k % gridFolds}
	}
	byStar := make(map[*fitStar]*job, len(jobs))
	for _, j := range jobs {
		byStar[j.st] = j
	}
	s.each(func(st *fitStar) {
		j := byStar[st]
		var l local
		m.at(&l, st.x, st.y)
		j.flux = st.flux * l.scale
		u0, v0 := float64(st.i0+1)-st.x, float64(st.j0+1)-st.y
		j.tx, j.ty = make([]taps, st.nx), make([]taps, st.ny)
		for i := range j.tx {
			tapsAt(&j.tx[i], u0+float64(i), h, false)
		}
		for i := range j.ty {
			tapsAt(&j.ty[i], v0+float64(i), h, false)
		}
		for k := range st.px {
			p := &st.px[k]
			if p.weight == 0 || j.tx[p.i].n == 0 || j.ty[p.j].n == 0 {
				continue
			}
			u, v := u0+float64(p.i), v0+float64(p.j)
			if math.Abs(u) > reach || math.Abs(v) > reach {
				continue
			}
			e := l.pixel(u, v)
			j.in = append(j.in, k)
			j.res = append(j.res, float64(p.value-p.other)-st.sky-st.flux*e)
			j.info += float64(p.model) * float64(p.model) * float64(p.weight)
		}
		monomials(j.phi[:], st.phi[1], st.phi[2], 2)
	})

	// Constant term.
	var mats [gridFolds]*banded
	var rhs [gridFolds][]float64
	for f := range mats {
		mats[f] = newBanded(nodesAll, band)
		rhs[f] = make([]float64, nodesAll)
	}
	for _, j := range jobs {
		a, b := mats[j.fold], rhs[j.fold]
		for n, k := range j.in {
			p := &j.st.px[k]
			tx, ty := &j.tx[p.i], &j.ty[p.j]
			w := float64(p.weight) * j.flux
			var vals [maxTaps * maxTaps]float64
			for y := 0; y < ty.n; y++ {
				for x := 0; x < tx.n; x++ {
					vals[y*maxTaps+x] = float64(ty.w[y]) * float64(tx.w[x])
				}
			}
			wr := w * j.res[n]
			w2 := w * j.flux
			for y := 0; y < ty.n; y++ {
				for x := 0; x < tx.n; x++ {
					c := vals[y*maxTaps+x]
					node := (ty.k0+y)*nodesSide + tx.k0 + x
					b[node] += wr * c
					row := a.row(node)
					c *= w2
					for yy := 0; yy < y; yy++ {
						off := (ty.k0+yy)*nodesSide + tx.k0 - node + band
						dst := row[off : off+tx.n]
						src := vals[yy*maxTaps : yy*maxTaps+tx.n]
						for q, v := range src {
							dst[q] += c * v
						}
					}
					off := (ty.k0+y)*nodesSide + tx.k0 - node + band
					for q, v := range vals[y*maxTaps : y*maxTaps+x+1] {
						row[off+q] += c * v
					}
				}
			}
		}
	}
	prior, peak := s.gridPrior(band)
	try := func(fold int, tau float64) []float64 {
		a := newBanded(nodesAll, band)
		x := make([]float64, nodesAll)
		for k, v := range prior.v {
			a.v[k] = v / (tau * tau)
		}
		for f := range mats {
			if f == fold {
				continue
			}
			for k, v := range mats[f].v {
				a.v[k] += v
			}
			for k, v := range rhs[f] {
				x[k] += v
			}
		}
		if !a.factor() {
			return nil
		}
		a.solve(x)
		return x
	}
	// change is χ² with the grid x less χ² without, on fold f.
	change := func(f int, x []float64) float64 {
		v := mats[f].quadratic(x)
		for k, b := range rhs[f] {
			v -= 2 * x[k] * b
		}
		return v
	}
	bestTau, best := 0.0, -4.0
	var bestIn float64
	for _, tau := range gridStrengths {
		var out, in float64
		for f := range gridFolds {
			x := try(f, tau)
			if x == nil {
				out = math.Inf(1)
				break
			}
			out += change(f, x)
			for g := range gridFolds {
				if g != f {
					in += change(g, x) / (gridFolds - 1)
				}
			}
		}
		if out < best {
			best, bestTau, bestIn = out, tau, in
		}
		if out > best+50 { // stronger grids only get worse
			break
		}
	}
	s.gap = 0
	if bestTau == 0 {
		m.GridOrder, m.nodes, m.net = -1, nil, nil
		return
	}
	base := try(-1, bestTau)
	if base == nil {
		m.GridOrder, m.nodes, m.net = -1, nil, nil
		return
	}
	// With all stars the prediction is better than with two thirds.
	s.gap = math.Max(0, best-bestIn) / 2

	planes := [][]float64{base}
	center := []float64{0}
	most := 2
	if s.cfg.GridOrder >= 0 {
		most = min(2, s.cfg.GridOrder)
	}
	for most > 0 && len(jobs) < 7*terms(most) {
		most--
	}
	if most > 0 {
		modes := gaussHermite(s.fwhm/2.3548/h, peak)
		s.each(func(st *fitStar) {
			j := byStar[st]
			cols := make([]float64, modeCount)
			rows := make([]float64, st.ny*modeCount*nodesSide)
			done := make([]bool, st.ny)
			for n, k := range j.in {
				p := &st.px[k]
				tx, ty := &j.tx[p.i], &j.ty[p.j]
				r := rows[int(p.j)*modeCount*nodesSide : (int(p.j)+1)*modeCount*nodesSide]
				if !done[p.j] {
					done[p.j] = true
					for q := range modes {
						dst := r[q*nodesSide : (q+1)*nodesSide]
						for y := 0; y < ty.n; y++ {
							w := float64(ty.w[y])
							for c, v := range modes[q][(ty.k0+y)*nodesSide : (ty.k0+y+1)*nodesSide] {
								dst[c] += w * v
							}
						}
					}
				}
				var constant float64
				for y := 0; y < ty.n; y++ {
					for x := 0; x < tx.n; x++ {
						constant += float64(ty.w[y]) * float64(tx.w[x]) * base[(ty.k0+y)*nodesSide+tx.k0+x]
					}
				}
				res := j.res[n] - j.flux*constant
				for q := range cols {
					src := r[q*nodesSide+tx.k0 : q*nodesSide+tx.k0+tx.n]
					var v float64
					for x, c := range src {
						v += c * float64(tx.w[x])
					}
					cols[q] = v * j.flux
				}
				w := float64(p.weight)
				for q, v := range cols {
					wv := w * v
					j.modeB[q] += wv * res
					dst := j.modeA[q*modeCount : q*modeCount+q+1]
					for c := range dst {
						dst[c] += wv * cols[c]
					}
				}
			}
			for q := range modeCount {
				for c := range q {
					j.modeA[c*modeCount+q] = j.modeA[q*modeCount+c]
				}
			}
		})
		var mean [6]float64
		var sum float64
		for _, j := range jobs {
			sum += j.info
			for t := range mean {
				mean[t] += j.info * j.phi[t]
			}
		}
		for t := range mean {
			mean[t] /= sum
		}
		type trial struct {
			order int
			tau   float64
			out   []float64 // for each star
			sum   float64
		}
		solve := func(order, fold int, tau float64) []float64 {
			nt := terms(order) - 1
			n := nt * modeCount
			a, b := make([]float64, n*n), make([]float64, n)
			for _, j := range jobs {
				if j.fold == fold {
					continue
				}
				for t := range nt {
					ft := j.phi[t+1] - mean[t+1]
					for q := range modeCount {
						b[t*modeCount+q] += ft * j.modeB[q]
					}
					for u := 0; u <= t; u++ {
						w := ft * (j.phi[u+1] - mean[u+1])
						for q := range modeCount {
							dst := a[(t*modeCount+q)*n+u*modeCount:]
							for c, v := range j.modeA[q*modeCount : (q+1)*modeCount] {
								dst[c] += w * v
							}
						}
					}
				}
			}
			for i := range n {
				a[i*n+i] += 1 / (tau * tau)
			}
			if !cholesky(a, n) {
				return nil
			}
			choleskySolve(a, n, b)
			return b
		}
		var chosen *trial
		var chosenIn float64
		for order := 1; order <= most; order++ {
			for _, tau := range gridStrengths {
				t := trial{order: order, tau: tau, out: make([]float64, len(jobs))}
				var in float64
				nt := terms(order) - 1
				ok := true
				for fold := range gridFolds {
					x := solve(order, fold, tau)
					if x == nil {
						ok = false
						break
					}
					local := make([]float64, modeCount)
					for k, j := range jobs {
						clear(local)
						for u := range nt {
							ft := j.phi[u+1] - mean[u+1]
							for q := range local {
								local[q] += ft * x[u*modeCount+q]
							}
						}
						var v float64
						for q, c := range local {
							v -= 2 * c * j.modeB[q]
							var r float64
							for p, d := range local {
								r += j.modeA[q*modeCount+p] * d
							}
							v += c * r
						}
						if j.fold == fold {
							t.out[k] = v
							t.sum += v
						} else {
							in += v / (gridFolds - 1)
						}
					}
				}
				if !ok {
					continue
				}
				var against []float64
				var old float64
				if chosen != nil {
					against, old = chosen.out, chosen.sum
				} else {
					against = make([]float64, len(jobs))
				}
				var sq float64
				for k := range t.out {
					d := t.out[k] - against[k]
					sq += d * d
				}
				gainNeeded := math.Max(4, math.Sqrt(sq))
				if chosen != nil && chosen.order == order {
					gainNeeded = 0
				}
				if old-t.sum > gainNeeded {
					c := t
					chosen, chosenIn = &c, in
				}
			}
		}
		if chosen != nil {
			x := solve(chosen.order, -1, chosen.tau)
			if x != nil {
				for t := range terms(chosen.order) - 1 {
					plane := make([]float64, nodesAll)
					for q := range modes {
						c := x[t*modeCount+q]
						for k, v := range modes[q] {
							plane[k] += c * v
						}
					}
					planes = append(planes, plane)
					center = append(center, mean[t+1])
				}
				s.gap += math.Max(0, chosen.sum-chosenIn) / 2
			}
		}
	}
	m.GridOrder = 0
	switch len(planes) {
	case 3:
		m.GridOrder = 1
	case 6:
		m.GridOrder = 2
	}
	m.nodes, m.center = planes, center
	m.net = make([]float64, len(planes))
	for t, p := range planes {
		for _, v := range p {
			m.net[t] += v * h * h
		}
	}
	// Fluxes were those of the elliptical part alone, or of the old grid.
	for _, j := range jobs {
		var l local
		m.at(&l, j.st.x, j.st.y)
		j.st.flux = j.flux / l.scale
	}
}

// gridPrior returns the inverse covariance of the nodes' coefficients for
// strength 1, and the profile's central value.
func (s *fitState) gridPrior(band int) (*banded, float64) {
	m := s.m
	h := m.spacing
	var l local
	m.at(&l, float64(m.Width+1)/2, float64(m.Height+1)/2)
	l.amp /= l.scale
	peak := l.amp * l.prof.value(0)
	p := newBanded(nodesAll, band)
	size := make([]float64, nodesAll)
	for y := range nodesSide {
		for x := range nodesSide {
			u, v := float64(x-nodesHalf)*h, float64(y-nodesHalf)*h
			f := l.amp * l.prof.value(l.a*u*u+2*l.c*u*v+l.b*v*v)
			size[y*nodesSide+x] = math.Max(math.Pow(f, 0.75)*math.Pow(peak, 0.25), 1e-4*peak)
		}
	}
	for k, v := range size {
		p.row(k)[band] += 1 / (v * v)
	}
	const rough = 0.5
	second := func(k, step int) {
		w := 1 / (rough * rough * size[k] * size[k])
		idx := [3]int{k - step, k, k + step}
		c := [3]float64{1, -2, 1}
		for a := range 3 {
			for b := 0; b <= a; b++ {
				p.row(idx[a])[idx[b]-idx[a]+band] += w * c[a] * c[b]
			}
		}
	}
	for y := range nodesSide {
		for x := range nodesSide {
			k := y*nodesSide + x
			if x > 0 && x < nodesSide-1 {
				second(k, 1)
			}
			if y > 0 && y < nodesSide-1 {
				second(k, nodesSide)
			}
		}
	}
	return p, peak
}

// gaussHermite returns Gauss-Hermite functions up to modeOrder with a sigma in
// nodes, sampled on the nodes, of unit root-mean-square order (orthonormal as
// in quantum mechanics) times peak.
func gaussHermite(sigma, peak float64) [][]float64 {
	var one [modeOrder + 1][nodesSide]float64
	for k := range nodesSide {
		x := float64(k-nodesHalf) / sigma
		g := math.Exp(-x * x / 2)
		one[0][k] = g
		one[1][k] = math.Sqrt2 * x * g
		for n := 2; n <= modeOrder; n++ {
			one[n][k] = math.Sqrt(2/float64(n))*x*one[n-1][k] - math.Sqrt(float64(n-1)/float64(n))*one[n-2][k]
		}
	}
	var out [][]float64
	for o := 0; o <= modeOrder; o++ {
		for b := 0; b <= o; b++ {
			v := make([]float64, nodesAll)
			for y := range nodesSide {
				for x := range nodesSide {
					v[y*nodesSide+x] = peak * one[o-b][x] * one[b][y]
				}
			}
			out = append(out, v)
		}
	}
	return out
}
