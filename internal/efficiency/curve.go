package efficiency

import (
	"math"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"
)

// Form is the shape with which the recovered fraction falls. Each has a plateau
// A, a place m0 and a width w.
type Form string

// The forms. The first holds for one threshold in Gaussian noise; the others
// for depths that vary over the places.
const (
	FormFlux     Form = "probit_flux" // A·Φ((10^(-0.4(m-m0)) - 1)/(w ln(10)/2.5)): as wide as the next at m0
	FormProbit   Form = "probit"      // A·Φ(-(m-m0)/w)
	FormLogistic Form = "logistic"    // A/(1 + exp((m-m0)/(0.6 w))): about as wide
)

// Forms lists the forms in the order in which ties are decided.
var Forms = []Form{FormFlux, FormProbit, FormLogistic}

// value is the form without its plateau.
func (f Form) value(m, m0, w float64) float64 {
	switch f {
	case FormFlux:
		return distuv.UnitNormal.CDF((math.Pow(10, -0.4*(m-m0)) - 1) / (w * math.Ln10 / 2.5))
	case FormProbit:
		return distuv.UnitNormal.CDF((m0 - m) / w)
	default:
		return 1 / (1 + math.Exp((m-m0)/(0.6*w)))
	}
}

// Curve is a fitted efficiency against magnitude: of a source in magnitudes, or
// in magnitudes relative to one count where the zero point is unknown.
type Curve struct {
	Form    Form
	Plateau float64 // A
	Middle  float64 // m0 [mag], where half of the plateau is reached
	Width   float64 // w [mag]

	PlateauErr, MiddleErr, WidthErr float64 // 1 sigma

	Mag50, Mag50Err float64 // where half of all sources are found; NaN if the plateau is below
	Mag90, Mag90Err float64 // where nine tenths are

	Injected, Found int

	// Chi2 compares the curve with the fractions in cells of magnitude, with
	// Cells cells.
	Chi2  float64
	Cells int
}

// At is the efficiency at a magnitude.
func (c *Curve) At(m float64) float64 { return c.Plateau * c.Form.value(m, c.Middle, c.Width) }

// magAt returns where the curve is at a fraction, NaN if it never is.
func (c *Curve) magAt(fraction float64) float64 {
	if !(c.Plateau > fraction) {
		return math.NaN()
	}
	lo, hi := c.Middle-20*c.Width-5, c.Middle+20*c.Width+5
	for range 80 {
		mid := (lo + hi) / 2
		if c.At(mid) > fraction {
			lo = mid
		} else {
			hi = mid
		}
	}
	return (lo + hi) / 2
}

// Weak knowledge holds the fit together where sources are few: the plateau as if
// half a source more had been found on it and half a one lost, the width near
// priorWidth within a factor of e^priorSpread. From a hundred sources on, neither
// matters against the errors.
const (
	priorCount  = 0.5
	priorWidth  = 0.28 // mag: a threshold of five sigma in Gaussian noise gives 0.22
	priorSpread = 0.7
)

// FitCurve fits all forms to magnitudes and outcomes and returns the likeliest.
// It is nil where nothing can be fitted: no sources, all found, or none.
//
// The likelihood is that of independent trials, Π ε^k (1-ε)^(1-k). Errors come
// from the expected information at its maximum. Which form holds is not known
// either: the limits Mag50 and Mag90 are means over the forms, weighted by their
// likelihoods, and their errors hold how far the forms differ. So they may lie
// off the likeliest curve by a part of their errors.
func FitCurve(mag []float64, found []bool) *Curve {
	var best *Curve
	var fits []*Curve
	var logs []float64
	top := math.Inf(-1)
	n := 0
	for _, f := range found {
		if f {
			n++
		}
	}
	if n == 0 || n == len(found) {
		return nil
	}
	for _, form := range Forms {
		c, l := fitForm(form, mag, found)
		if c == nil {
			continue
		}
		fits, logs = append(fits, c), append(logs, l)
		if l > top+1e-9 {
			best, top = c, l
		}
	}
	if best != nil {
		weights := make([]float64, len(fits))
		for i, l := range logs {
			weights[i] = math.Exp(l - top)
		}
		mean := *best
		mean.Mag50, mean.Mag50Err = overForms(fits, weights, func(c *Curve) (float64, float64) { return c.Mag50, c.Mag50Err })
		mean.Mag90, mean.Mag90Err = overForms(fits, weights, func(c *Curve) (float64, float64) { return c.Mag90, c.Mag90Err })
		best = &mean
		best.Injected, best.Found = len(mag), n
		best.compare(mag, found)
	}
	return best
}

// overForms averages a limit over the fits that have one, NaN where half of the
// weight has none.
func overForms(fits []*Curve, weights []float64, limit func(*Curve) (value, err float64)) (mean, err float64) {
	sum, all, square := 0.0, 0.0, 0.0
	for i, c := range fits {
		all += weights[i]
		if v, e := limit(c); v == v && e == e {
			sum += weights[i]
			mean += weights[i] * v
			square += weights[i] * (v*v + e*e)
		}
	}
	if !(sum > all/2) {
		return math.NaN(), math.NaN()
	}
	mean /= sum
	return mean, math.Sqrt(math.Max(0, square/sum-mean*mean))
}

// fitForm maximises the likelihood of a form over logit A, m0 and ln w by
// Fisher's scoring with halved steps.
func fitForm(form Form, mag []float64, found []bool) (*Curve, float64) {
	curve := func(p [3]float64) Curve {
		return Curve{Form: form, Plateau: 1 / (1 + math.Exp(-p[0])), Middle: p[1], Width: math.Exp(p[2])}
	}
	likelihood := func(p [3]float64) float64 {
		c := curve(p)
		sum := priorCount*(math.Log(c.Plateau)+math.Log(1-c.Plateau)) - 0.5*sq((p[2]-math.Log(priorWidth))/priorSpread)
		for i, m := range mag {
			e := clampFraction(c.At(m))
			if found[i] {
				sum += math.Log(e)
			} else {
				sum += math.Log1p(-e)
			}
		}
		return sum
	}
	// gradients of the fraction with respect to the three.
	slopes := func(p [3]float64, m float64) (e float64, g [3]float64) {
		c := curve(p)
		e = clampFraction(c.At(m))
		for k := range g {
			const step = 1e-4
			hi, lo := p, p
			hi[k] += step
			lo[k] -= step
			ch, cl := curve(hi), curve(lo)
			g[k] = (ch.At(m) - cl.At(m)) / (2 * step)
		}
		return e, g
	}
	p := [3]float64{2.2, startMiddle(mag, found), math.Log(priorWidth)}
	current := likelihood(p)
	lambda := 1e-3
	information := mat.NewSymDense(3, nil)
	fill := func(p [3]float64) (gradient [3]float64) {
		information.Zero()
		for i, m := range mag {
			e, g := slopes(p, m)
			w := 1 / (e * (1 - e))
			k := 0.0
			if found[i] {
				k = 1
			}
			for a := range 3 {
				gradient[a] += (k - e) * w * g[a]
				for b := a; b < 3; b++ {
					information.SetSym(a, b, information.At(a, b)+w*g[a]*g[b])
				}
			}
		}
		A := 1 / (1 + math.Exp(-p[0]))
		gradient[0] += priorCount * (1 - 2*A)
		information.SetSym(0, 0, information.At(0, 0)+2*priorCount*A*(1-A))
		gradient[2] -= (p[2] - math.Log(priorWidth)) / (priorSpread * priorSpread)
		information.SetSym(2, 2, information.At(2, 2)+1/(priorSpread*priorSpread))
		return gradient
	}
	for range 100 {
		gradient := fill(p)
		damped := mat.NewSymDense(3, nil)
		damped.CopySym(information)
		for k := range 3 {
			damped.SetSym(k, k, damped.At(k, k)*(1+lambda)+1e-12)
		}
		var cholesky mat.Cholesky
		if !cholesky.Factorize(damped) {
			return nil, 0
		}
		var step mat.VecDense
		if cholesky.SolveVecTo(&step, mat.NewVecDense(3, gradient[:])) != nil {
			return nil, 0
		}
		next := p
		for k := range next {
			next[k] += math.Max(-1, math.Min(1, step.AtVec(k)))
		}
		l := likelihood(next)
		if !(l >= current) {
			if lambda *= 10; lambda > 1e8 {
				break
			}
			continue
		}
		moved := l - current
		p, current = next, l
		lambda = math.Max(lambda/10, 1e-9)
		if moved < 1e-10*(1+math.Abs(current)) {
			break
		}
	}
	fill(p)
	var cholesky mat.Cholesky
	if !cholesky.Factorize(information) {
		return nil, 0
	}
	var covariance mat.SymDense
	if cholesky.InverseTo(&covariance) != nil {
		return nil, 0
	}
	c := curve(p)
	c.PlateauErr = c.Plateau * (1 - c.Plateau) * math.Sqrt(covariance.At(0, 0))
	c.MiddleErr = math.Sqrt(covariance.At(1, 1))
	c.WidthErr = c.Width * math.Sqrt(covariance.At(2, 2))
	// Where the curve is at a fraction: its error follows from the fraction's
	// error there over the slope.
	limit := func(fraction float64) (m, err float64) {
		m = c.magAt(fraction)
		if math.IsNaN(m) {
			return m, m
		}
		_, g := slopes(p, m)
		variance := 0.0
		for a := range 3 {
			for b := range 3 {
				variance += g[a] * g[b] * covariance.At(a, b)
			}
		}
		const step = 1e-4
		slope := (c.At(m+step) - c.At(m-step)) / (2 * step)
		return m, math.Sqrt(variance) / math.Abs(slope)
	}
	c.Mag50, c.Mag50Err = limit(0.5)
	c.Mag90, c.Mag90Err = limit(0.9)
	return &c, current
}

func sq(v float64) float64 { return v * v }

// clampFraction keeps logarithms finite.
func clampFraction(e float64) float64 { return math.Max(1e-9, math.Min(1-1e-9, e)) }

// startMiddle is the magnitude at which a step from found to lost makes the
// fewest errors.
func startMiddle(mag []float64, found []bool) float64 {
	order := sortedBy(len(mag), func(a, b int) bool { return mag[a] < mag[b] })
	wrong := 0 // with the step before all
	for _, f := range found {
		if f {
			wrong++
		}
	}
	best, at := wrong, mag[order[0]]
	for k, i := range order {
		if found[i] {
			wrong--
		} else {
			wrong++
		}
		if wrong < best {
			best, at = wrong, mag[i]
			if k+1 < len(order) {
				at = (at + mag[order[k+1]]) / 2
			}
		}
	}
	return at
}

// compare sets the chi-square of the curve against the fractions in cells of
// about equal numbers: Pearson's Σ (k - Σε)²/Σε(1-ε), over cells in which at least
// three are expected of either outcome; the faintest, when they do not fill a cell,
// are left out.
func (c *Curve) compare(mag []float64, found []bool) {
	order := sortedBy(len(mag), func(a, b int) bool { return mag[a] < mag[b] })
	var k, expected, variance, n float64
	flush := func() {
		c.Chi2 += sq(k-expected) / variance
		c.Cells++
		k, expected, variance, n = 0, 0, 0, 0
	}
	least := math.Max(10, float64(len(mag))/20)
	for _, i := range order {
		e := clampFraction(c.At(mag[i]))
		expected += e
		variance += e * (1 - e)
		n++
		if found[i] {
			k++
		}
		if n >= least && expected >= 3 && n-expected >= 3 {
			flush()
		}
	}
}
