package subtract

import (
	"context"
	"math"
	"sort"

	"golang.org/x/sync/errgroup"
	"gonum.org/v1/gonum/mat"

	"nightsift/internal/frame"
)

// shape says which elements of a basis are in use and how each varies.
type shape struct {
	used     []int
	order    []int
	skyOrder int
	ridge    float64

	// smooth weighs the roughness of a pixel kernel, whose matrix is penalty.
	smooth  float64
	penalty []float64
}

func (h shape) unknowns() int {
	n := polynomialCount(h.skyOrder)
	for _, o := range h.order {
		n += polynomialCount(o)
	}
	return n
}

// makeShape takes the elements up to the given degrees of each Gaussian.
func makeShape(b *basis, degrees []int, order, skyOrder int, ridge float64) shape {
	h := shape{skyOrder: skyOrder, ridge: ridge}
	for k, t := range b.terms {
		if t.gaussian < len(degrees) && (t.pixel || t.degree <= degrees[t.gaussian]) {
			h.used = append(h.used, k)
			h.order = append(h.order, order)
		}
	}
	return h
}

// solution is a kernel with what its solve tells.
type solution struct {
	kernel    *Kernel
	shape     shape
	condition float64
	chi2      float64 // reduced, over the stamps kept
	kept      int
	clipped   int
}

// system holds the normal equations of the whole frame for one shape.
type system struct {
	shape  shape
	n      int
	normal []float64
	right  []float64
}

func newSystem(h shape) *system {
	n := h.unknowns()
	return &system{shape: h, n: n, normal: make([]float64, n*n), right: make([]float64, n)}
}

// add adds one stamp, or takes it away with sign -1.
func (s *system) add(st *stamp, elements int, width, height int, sign float64) {
	var buffer [36]float64
	top := s.shape.skyOrder
	for _, o := range s.shape.order {
		top = max(top, o)
	}
	u, v := normalise(float64(st.x), float64(st.y), width, height)
	p := polynomials(buffer[:0], u, v, top)
	side := elements + 1
	rowAt := 0
	for a := 0; a <= len(s.shape.used); a++ {
		ea, oa := elements, s.shape.skyOrder
		if a < len(s.shape.used) {
			ea, oa = s.shape.used[a], s.shape.order[a]
		}
		na := polynomialCount(oa)
		columnAt := 0
		for b := 0; b <= a; b++ {
			eb, ob := elements, s.shape.skyOrder
			if b < len(s.shape.used) {
				eb, ob = s.shape.used[b], s.shape.order[b]
			}
			nb := polynomialCount(ob)
			m := sign * st.normal[ea*side+eb]
			for i := range na {
				row := s.normal[(rowAt+i)*s.n+columnAt:]
				mi := m * p[i]
				for j := range nb {
					row[j] += mi * p[j]
				}
			}
			columnAt += nb
		}
		for i := range na {
			s.right[rowAt+i] += sign * st.right[ea] * p[i]
		}
		rowAt += na
	}
}

// solve, to be called once, returns the unknowns and the condition number of the scaled matrix.
// Columns are scaled to a unit diagonal and the diagonal is raised by the
// shape's ridge, except for the kernel's sum and the sky, which must stay
// unbiased.
func (s *system) solve() ([]float64, float64, bool) {
	s.addPenalty()
	n := s.n
	scale := make([]float64, n)
	for i := range n {
		d := s.normal[i*n+i]
		if !(d > 0) || math.IsInf(d, 0) {
			return nil, math.Inf(1), false
		}
		scale[i] = 1 / math.Sqrt(d)
	}
	free := make([]bool, n)
	at := 0
	for a := range s.shape.used {
		count := polynomialCount(s.shape.order[a])
		if s.shape.used[a] == 0 {
			for i := range count {
				free[at+i] = true
			}
		}
		at += count
	}
	for i := at; i < n; i++ {
		free[i] = true
	}
	for ridge := s.shape.ridge; ridge < 1; ridge *= 10 {
		a := mat.NewSymDense(n, nil)
		for i := range n {
			for j := 0; j <= i; j++ {
				v := s.normal[i*n+j] * scale[i] * scale[j]
				if i == j {
					v = 1 + 1e-12
					if !free[i] {
						v += ridge
					}
				}
				a.SetSym(i, j, v)
			}
		}
		var c mat.Cholesky
		if !c.Factorize(a) {
			continue
		}
		b := mat.NewVecDense(n, nil)
		for i := range n {
			b.SetVec(i, s.right[i]*scale[i])
		}
		var x mat.VecDense
		if err := c.SolveVecTo(&x, b); err != nil {
			// A large condition number still leaves an answer; the ridge is
			// raised until it is a trustworthy one.
			if cond, ok := err.(mat.Condition); !ok || float64(cond) > 1e13 {
				continue
			}
		}
		out := make([]float64, n)
		for i := range n {
			out[i] = x.AtVec(i) * scale[i]
			if math.IsNaN(out[i]) {
				return nil, math.Inf(1), false
			}
		}
		return out, c.Cond(), true
	}
	return nil, math.Inf(1), false
}

// kernelOf arranges a solved vector as a Kernel.
func kernelOf(b *basis, h shape, x []float64, width, height int) *Kernel {
	k := &Kernel{basis: b, used: h.used, order: h.order, skyOrder: h.skyOrder, width: width, height: height}
	at := 0
	for _, o := range h.order {
		n := polynomialCount(o)
		k.coefficient = append(k.coefficient, x[at:at+n])
		at += n
	}
	k.sky = x[at:]
	return k
}

// local returns the coefficients of all elements and the sky at a stamp.
func (k *Kernel) local(dst []float64, st *stamp) []float64 {
	dst = k.weights(dst, float64(st.x), float64(st.y))
	return append(dst[:k.basis.len()], k.Sky(float64(st.x), float64(st.y)))
}

// fitKernel solves for the kernel: three rounds of weights from the model of
// the round before, in each of them stamps that fit worse than their fellows
// are clipped; the shape is chosen by cross-validation on held-out stamps.
func fitKernel(ctx context.Context, p *planes, b *basis, stamps []*stamp, shapes []shape, workers int) (*solution, error) {
	width, height := p.new.Width, p.new.Height
	elements := b.len()
	pixels := len(stamps[0].data)

	// First weights: the star is as bright as the reference says.
	squares := 0.0
	element0 := make([]float64, b.side()*b.side())
	one := make([]float64, elements)
	one[0] = p.scale
	b.combine(element0, one)
	squares = sumSquares(element0)
	weigh := func(k *Kernel) error {
		group, ctx := errgroup.WithContext(ctx)
		group.SetLimit(max(1, workers))
		for _, s := range stamps {
			group.Go(func() error {
				if err := ctx.Err(); err != nil {
					return err
				}
				m := make([]float32, pixels)
				w := one
				sum, sq := p.scale, squares
				if k != nil {
					w = k.weights(nil, float64(s.x), float64(s.y))
					sum = w[0]
					sq = sumSquares(k.At(nil, float64(s.x), float64(s.y)))
				}
				s.model(m, w)
				s.reweigh(m, sum, sq, p)
				s.accumulate()
				return nil
			})
		}
		return group.Wait()
	}
	if err := weigh(nil); err != nil {
		return nil, err
	}
	best := shapes[0]
	var sol *solution
	const rounds = 4
	for round := range rounds {
		kept := 0
		for _, s := range stamps {
			if s.kept {
				kept++
			}
		}
		if round >= 2 && len(shapes) > 1 {
			best = chooseShape(stamps, shapes, elements, width, height)
		} else {
			best = simplest(shapes, kept)
		}
		var err error
		sol, err = solveOnce(b, stamps, best, width, height)
		if err != nil {
			return nil, err
		}
		clipStamps(stamps, sol)
		if round < rounds-1 {
			if err := weigh(sol.kernel); err != nil {
				return nil, err
			}
		}
	}
	return sol, nil
}

func sumSquares(k []float64) float64 {
	s := 0.0
	for _, v := range k {
		s += v * v
	}
	return s
}

// simplest returns the richest shape of spatial order at most one that the
// number of stamps supports.
func simplest(shapes []shape, stamps int) shape {
	best := shapes[0]
	for _, h := range shapes {
		if h.order[0] <= 1 && h.unknowns() > best.unknowns() && h.unknowns() <= 3*stamps {
			best = h
		}
	}
	return best
}

func solveOnce(b *basis, stamps []*stamp, h shape, width, height int) (*solution, error) {
	sys := newSystem(h)
	kept := 0
	for _, s := range stamps {
		if s.kept {
			sys.add(s, b.len(), width, height, 1)
			kept++
		}
	}
	x, condition, ok := sys.solve()
	if !ok {
		return nil, frame.Problemf(frame.ProblemSubtractionPoor,
			"the matching kernel could not be solved from %d stars: the equations are singular; check that the reference shows the same sky", kept)
	}
	k := kernelOf(b, h, x, width, height)
	sol := &solution{kernel: k, shape: h, condition: condition}
	var local []float64
	var sum float64
	pixels := 0
	for _, s := range stamps {
		local = k.local(local, s)
		r := s.residual(local)
		s.chi2 = r / float64(max(1, s.pixels))
		if s.kept {
			sum += r
			pixels += s.pixels
			sol.kept++
		} else {
			sol.clipped++
		}
	}
	sol.chi2 = sum / float64(max(1, pixels-h.unknowns()))
	return sol, nil
}

// clipStamps drops the stamps whose reduced chi-square stands out from the
// others' (variables, moving objects, blemishes), never more than a third.
func clipStamps(stamps []*stamp, sol *solution) {
	values := make([]float64, len(stamps))
	for i, s := range stamps {
		values[i] = s.chi2
	}
	sort.Float64s(values)
	median := values[len(values)/2]
	deviation := make([]float64, len(values))
	for i, v := range values {
		deviation[i] = math.Abs(v - median)
	}
	sort.Float64s(deviation)
	spread := 1.4826 * deviation[len(deviation)/2]
	// The statistical spread of a reduced chi-square is the least there is.
	spread = max(spread, median*math.Sqrt(2/float64(max(1, len(stamps[0].data)))))
	limit := max(median+4*spread, values[len(values)*2/3])
	sol.kept, sol.clipped = 0, 0
	for _, s := range stamps {
		s.kept = s.chi2 <= limit
		if s.kept {
			sol.kept++
		} else {
			sol.clipped++
		}
	}
}

// crossValidate predicts each fifth of the stamps by a kernel that never saw it
// and returns the reduced chi-square of each prediction.
func crossValidate(kept []*stamp, h shape, elements, width, height int) ([]float64, bool) {
	const folds = 5
	if h.unknowns() > 10*len(kept)*(folds-1)/folds {
		return nil, false
	}
	all := newSystem(h)
	for _, s := range kept {
		all.add(s, elements, width, height, 1)
	}
	chi2 := make([]float64, len(kept))
	for f := range folds {
		part := newSystem(h)
		copy(part.normal, all.normal)
		copy(part.right, all.right)
		for i := f; i < len(kept); i += folds {
			part.add(kept[i], elements, width, height, -1)
		}
		x, _, ok := part.solve()
		if !ok {
			return nil, false
		}
		k := kernelOf(nilBasis(elements), h, x, width, height)
		var local []float64
		for i := f; i < len(kept); i += folds {
			local = k.local(local, kept[i])
			chi2[i] = kept[i].residual(local) / float64(max(1, kept[i].pixels))
		}
	}
	return chi2, true
}

func keptOf(stamps []*stamp) []*stamp {
	var kept []*stamp
	for _, s := range stamps {
		if s.kept {
			kept = append(kept, s)
		}
	}
	return kept
}

// chooseShape compares the shapes by cross-validation. The simplest shape whose
// prediction is within one standard error of the best one's wins (Breiman et
// al. 1984, section 3.4.3).
func chooseShape(stamps []*stamp, shapes []shape, elements, width, height int) shape {
	kept := keptOf(stamps)
	type result struct {
		shape shape
		chi2  []float64
		mean  float64
	}
	var results []result
	for _, h := range shapes {
		if chi2, ok := crossValidate(kept, h, elements, width, height); ok {
			results = append(results, result{h, chi2, trimmedMean(chi2)})
		}
	}
	if len(results) == 0 {
		return simplest(shapes, len(kept))
	}
	sort.SliceStable(results, func(a, b int) bool { return results[a].shape.unknowns() < results[b].shape.unknowns() })
	best := 0
	for i, r := range results {
		if r.mean < results[best].mean {
			best = i
		}
	}
	difference := make([]float64, len(kept))
	for i := range results {
		if i == best {
			break
		}
		for j := range difference {
			difference[j] = results[i].chi2[j] - results[best].chi2[j]
		}
		mean := trimmedMean(difference)
		if mean < standardError(difference, mean) {
			return results[i].shape
		}
	}
	return results[best].shape
}

// predicts returns how well two solutions predict stamps held out, over those
// that both kept: the trimmed mean of the reduced chi-squares, and the
// standard error of their difference.
func predicts(a, b *solution, stampsA, stampsB []*stamp, width, height int) (chi2A, chi2B, err float64, ok bool) {
	keptA, keptB := keptOf(stampsA), keptOf(stampsB)
	ra, okA := crossValidate(keptA, a.shape, a.kernel.basis.len(), width, height)
	rb, okB := crossValidate(keptB, b.shape, b.kernel.basis.len(), width, height)
	if !okA || !okB {
		return 0, 0, 0, false
	}
	byStar := map[int]float64{}
	for i, s := range keptB {
		byStar[s.star] = rb[i]
	}
	var va, vb, d []float64
	for i, s := range keptA {
		if r, both := byStar[s.star]; both {
			va, vb, d = append(va, ra[i]), append(vb, r), append(d, ra[i]-r)
		}
	}
	if len(d) < 5 {
		return 0, 0, 0, false
	}
	return trimmedMean(va), trimmedMean(vb), standardError(d, trimmedMean(d)), true
}

// nilBasis carries only the number of elements, which is all that evaluating
// coefficients needs.
func nilBasis(elements int) *basis { return &basis{terms: make([]basisTerm, elements)} }

// trimmedMean is the mean without the largest and smallest twentieth.
func trimmedMean(values []float64) float64 {
	v := append([]float64(nil), values...)
	sort.Float64s(v)
	cut := len(v) / 20
	v = v[cut : len(v)-cut]
	s := 0.0
	for _, x := range v {
		s += x
	}
	return s / float64(len(v))
}

func standardError(values []float64, mean float64) float64 {
	v := make([]float64, len(values))
	for i, x := range values {
		v[i] = math.Abs(x - mean)
	}
	sort.Float64s(v)
	// Robust: 1.4826 times the median absolute deviation.
	return 1.4826 * v[len(v)/2] / math.Sqrt(float64(len(v)))
}
