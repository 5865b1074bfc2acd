package supernova

import (
	"fmt"
	"math"
	"slices"
	"sort"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"nightsift/internal/cosmology"
)

// Observation is a flux at a time; a non-detection is one like any other.
type Observation struct {
	MJD       float64
	Filter    string
	Flux, Err float64 // linear; magnitude ZeroPoint is a flux of 1
}

// Config says how a fit is made. Start from DefaultConfig.
type Config struct {
	Redshift  float64         // 0 for an unknown one: the stretch then holds 1+z
	Bands     map[string]Band // by filter; B for others
	Cosmology cosmology.Flat
	ZeroPoint float64 // magnitude of a flux of 1

	// The stretch is expected at StretchMean with a Gaussian spread: what few
	// points cannot decide follows from that.
	StretchMean, StretchSpread float64
	// ModelScatter is by how much real objects differ from the template, as a
	// part of the light; it is added to the errors.
	ModelScatter float64
	// Offset is the error of each filter's zero of flux (of the baseline), common
	// to all of the filter's points, by filter.
	Offset map[string]float64

	LeastProbability float64 // of chi-square, below which the template does not fit
}

// DefaultConfig returns an expected stretch of 1.0 ± 0.1 and a scatter of 5 %.
func DefaultConfig() Config {
	return Config{Cosmology: cosmology.Default(), ZeroPoint: 25, StretchMean: 1, StretchSpread: 0.1, ModelScatter: 0.05, LeastProbability: 0.001}
}

// Verdict says what a fit is worth.
type Verdict string

// The verdicts.
const (
	Fits       Verdict = "fits"
	Rejected   Verdict = "does not fit"      // chi-square is too large
	TooFew     Verdict = "too few points"    // for the unknowns
	NoSource   Verdict = "no source"         // its light is below five sigma
	NoRise     Verdict = "rise not observed" // the first points are past the maximum, which is then a guess
	StillRises Verdict = "still rising"      // no point past the maximum, which is then foretold
)

// Peak is the maximum in one filter.
type Peak struct {
	Filter    string
	Band      Band
	Flux, Err float64
	Mag       float64 // NaN where the flux is not positive
	MagErr    float64
}

// Result is a fit. Numbers that were not found are NaN.
type Result struct {
	Verdict Verdict
	Reason  string // in words

	MJD, MJDErr         float64 // of the maximum
	Stretch, StretchErr float64
	DeltaM15            float64 // mag, of band B
	DeltaM15Err         float64
	Peaks               []Peak // by filter
	Chi2                float64
	Degrees             int     // of freedom
	Probability         float64 // of a larger chi-square by chance
	Points              int     // that took part

	// Absolute is the absolute magnitude of the brightest peak, Expected that of
	// RelativePeak, for the redshift and cosmology of the configuration.
	Absolute, Expected float64

	redshift float64
}

// Flux returns the fitted light in a filter at a time; NaN for a filter that
// was not fitted.
func (r *Result) Flux(filter string, mjd float64) float64 {
	for _, p := range r.Peaks {
		if p.Filter == filter {
			l, _ := p.Band.Light((mjd - r.MJD) / (r.Stretch * (1 + r.redshift)))
			return p.Flux * l
		}
	}
	return math.NaN()
}

// Phases [d, stretch 1] within which points take part.
const earliestPhase, latestPhase = -40, 80

// Bounds of the stretch: beyond them nothing is of type Ia.
const leastStretch, mostStretch = 0.5, 1.6

// problem is a fit under way: points of one filter after the other.
type problem struct {
	cfg     *Config
	filters []string
	bands   []Band
	offset  []float64
	points  [][]Observation
	scatter [][]float64 // added variance
}

// Fit fits the template to observations by least squares in flux: the date of
// the maximum and the stretch for all filters together, the height for each,
// and an offset of each filter's zero within its error. Errors come from the
// normal equations at the minimum. Observations that are not finite, or without
// a positive error, are left out.
func Fit(list []Observation, cfg Config) Result {
	n := math.NaN()
	r := Result{MJD: n, MJDErr: n, Stretch: n, StretchErr: n, DeltaM15: n, DeltaM15Err: n, Chi2: n, Probability: n, Absolute: n, Expected: n, redshift: cfg.Redshift}
	var good []Observation
	for _, o := range list {
		if o.Err > 0 && o.Err-o.Err == 0 && o.Flux-o.Flux == 0 && o.MJD-o.MJD == 0 {
			good = append(good, o)
		}
	}
	detected := map[float64]bool{}
	for _, o := range good {
		if o.Flux > 3*o.Err {
			detected[math.Floor(o.MJD-0.5)] = true
		}
	}
	if len(detected) < 3 {
		r.Verdict, r.Reason = TooFew, fmt.Sprintf("it is above three sigma on %d days, want 3", len(detected))
		return r
	}
	pr := newProblem(good, &cfg)
	mjd, stretch := pr.search(good)
	if pr = newProblem(within(good, mjd, stretch*(1+cfg.Redshift)), &cfg); len(pr.filters) == 0 {
		r.Verdict, r.Reason = TooFew, "no points near the maximum"
		return r
	}
	x := []float64{mjd, stretch}
	heights := pr.heights(mjd, stretch)
	x = append(x, heights...)
	cov := pr.refine(x)
	r.MJD, r.Stretch = x[0], x[1]
	for _, l := range pr.points {
		r.Points += len(l)
	}
	// The stretch counts as an observation through what is expected of it.
	r.Chi2 = pr.chi2(x)
	r.Degrees = r.Points - 2 - len(pr.filters) + 1
	if r.Degrees < 1 {
		r.Verdict, r.Reason = TooFew, fmt.Sprintf("%d points for %d unknowns", r.Points, 2+len(pr.filters))
		return r
	}
	if cov == nil {
		r.MJD, r.Stretch = n, n
		r.Verdict, r.Reason = Rejected, "no date and stretch describe the points"
		return r
	}
	r.MJDErr, r.StretchErr = math.Sqrt(cov.At(0, 0)), math.Sqrt(cov.At(1, 1))
	r.DeltaM15 = B.DeltaM15(r.Stretch)
	r.DeltaM15Err = math.Abs(B.DeltaM15(r.Stretch*1.001)-B.DeltaM15(r.Stretch*0.999)) / (0.002 * r.Stretch) * r.StretchErr
	best, weight := -1, 0.0
	for k, f := range pr.filters {
		p := Peak{Filter: f, Band: pr.bands[k], Flux: x[2+k], Err: math.Sqrt(cov.At(2+k, 2+k)), Mag: n, MagErr: n}
		if p.Flux > 0 {
			p.Mag, p.MagErr = cfg.ZeroPoint-2.5*math.Log10(p.Flux), p.Err/p.Flux*2.5/math.Ln10
		}
		weight += p.Flux * math.Abs(p.Flux) / (p.Err * p.Err)
		if best < 0 || p.Flux > r.Peaks[best].Flux {
			best = k
		}
		r.Peaks = append(r.Peaks, p)
	}
	r.Probability = distuv.ChiSquared{K: float64(r.Degrees)}.Survival(r.Chi2)
	if z := cfg.Redshift; z > 0 {
		r.Absolute = r.Peaks[best].Mag - cfg.Cosmology.Modulus(z)
		r.Expected = StandardPeak + RelativePeak(r.DeltaM15) + 5*math.Log10(cfg.Cosmology.H0/70)
	}
	r.judge(pr, weight)
	return r
}

// judge sets the verdict.
func (r *Result) judge(pr *problem, weight float64) {
	scale := r.Stretch * (1 + pr.cfg.Redshift)
	rise, decline := 0, 0
	for _, l := range pr.points {
		for _, o := range l {
			switch phase := (o.MJD - r.MJD) / scale; {
			case phase > -30 && phase < -1:
				rise++
			case phase > 1:
				decline++
			}
		}
	}
	switch {
	case weight < 25:
		r.Verdict, r.Reason = NoSource, fmt.Sprintf("the fitted light is %.1f sigma above zero, want 5", math.Sqrt(max(0, weight)))
	case r.Probability < pr.cfg.LeastProbability:
		r.Verdict, r.Reason = Rejected, fmt.Sprintf("chi-square %.1f for %d degrees of freedom: a probability of %.2g", r.Chi2, r.Degrees, r.Probability)
	case r.Stretch < leastStretch+0.01 || r.Stretch > mostStretch-0.01:
		r.Verdict, r.Reason = Rejected, fmt.Sprintf("the stretch is at its bound, %.2f", r.Stretch)
	case rise == 0:
		r.Verdict, r.Reason = NoRise, "no point within the 30 days before the maximum; the date is a guess"
	case decline == 0:
		r.Verdict, r.Reason = StillRises, "no point after the maximum; date and height are foretold from the rise"
	default:
		r.Verdict, r.Reason = Fits, fmt.Sprintf("chi-square %.1f for %d degrees of freedom", r.Chi2, r.Degrees)
	}
}

func within(list []Observation, mjd, scale float64) []Observation {
	return slices.DeleteFunc(slices.Clone(list), func(o Observation) bool {
		phase := (o.MJD - mjd) / scale
		return phase < earliestPhase || phase > latestPhase
	})
}

func newProblem(list []Observation, cfg *Config) *problem {
	p := &problem{cfg: cfg}
	at := map[string]int{}
	for _, o := range list {
		if _, ok := at[o.Filter]; !ok {
			at[o.Filter] = 0
			p.filters = append(p.filters, o.Filter)
		}
	}
	sort.Strings(p.filters)
	for k, f := range p.filters {
		at[f] = k
		p.bands = append(p.bands, cfg.Bands[f])
		p.offset = append(p.offset, cfg.Offset[f])
	}
	p.points = make([][]Observation, len(p.filters))
	for _, o := range list {
		p.points[at[o.Filter]] = append(p.points[at[o.Filter]], o)
	}
	p.scatter = make([][]float64, len(p.filters))
	for k := range p.points {
		p.scatter[k] = make([]float64, len(p.points[k]))
	}
	return p
}

// sums are the weighted products of one filter from which the offset of its
// zero is eliminated: with a vector u and the constant 1, u'Wv − (u'W1)(v'W1)/(1'W1 + 1/σ²).
type sums struct{ ll, ly, yy, l, y, one float64 }

func (p *problem) sum(k int, mjd, stretch float64) (s sums) {
	scale := stretch * (1 + p.cfg.Redshift)
	for i, o := range p.points[k] {
		w := 1 / (o.Err*o.Err + p.scatter[k][i])
		l, _ := p.bands[k].Light((o.MJD - mjd) / scale)
		s.ll += w * l * l
		s.ly += w * l * o.Flux
		s.yy += w * o.Flux * o.Flux
		s.l += w * l
		s.y += w * o.Flux
		s.one += w
	}
	if v := p.offset[k] * p.offset[k]; v > 0 {
		d := s.one + 1/v
		s.ll -= s.l * s.l / d
		s.ly -= s.l * s.y / d
		s.yy -= s.y * s.y / d
	}
	return s
}

// heights are the best heights at a date and stretch, none below zero.
func (p *problem) heights(mjd, stretch float64) []float64 {
	out := make([]float64, len(p.filters))
	for k := range out {
		if s := p.sum(k, mjd, stretch); s.ll > 0 {
			out[k] = max(0, s.ly/s.ll)
		}
	}
	return out
}

// chi2 includes what is expected of the stretch.
func (p *problem) chi2(x []float64) float64 {
	d := (x[1] - p.cfg.StretchMean) / p.cfg.StretchSpread
	sum := d * d
	for k := range p.filters {
		s := p.sum(k, x[0], x[1])
		sum += s.yy - 2*x[2+k]*s.ly + x[2+k]*x[2+k]*s.ll
	}
	return sum
}

// search finds date and stretch on a grid, fine enough to start from.
func (p *problem) search(list []Observation) (mjd, stretch float64) {
	first, last := math.Inf(1), math.Inf(-1)
	for _, o := range list {
		if o.Flux > 3*o.Err {
			first, last = min(first, o.MJD), max(last, o.MJD)
		}
	}
	scale := 1 + p.cfg.Redshift
	least := math.Inf(1)
	steps := int(min(2000, last-first+50*scale))
	step := (last - first + 50*scale) / float64(max(1, steps))
	for k := 0; k <= steps; k++ {
		t := first - 30*scale + float64(k)*step
		for s := 0.7; s < 1.35; s += 0.1 {
			d := (s - p.cfg.StretchMean) / p.cfg.StretchSpread
			c := d * d
			for k := range p.filters {
				q := p.sum(k, t, s)
				c += q.yy
				if q.ly > 0 && q.ll > 0 {
					c -= q.ly * q.ly / q.ll
				}
			}
			if c < least {
				least, mjd, stretch = c, t, s
			}
		}
	}
	return mjd, stretch
}

// refine improves date, stretch and heights by damped Gauss–Newton steps
// (Levenberg 1944, Marquardt 1963) and returns their covariance, nil if the
// points do not determine them.
func (p *problem) refine(x []float64) *mat.SymDense {
	n := len(x)
	for range 4 { // the template's scatter depends on the heights
		p.weigh(x)
		damping, now := 1e-3, p.chi2(x)
		for range 100 {
			a, b := p.normal(x)
			for k := range n {
				a.SetSym(k, k, a.At(k, k)*(1+damping))
			}
			var chol mat.Cholesky
			if !chol.Factorize(a) {
				damping = max(damping*10, 1e-6)
				if damping > 1e9 {
					break
				}
				continue
			}
			var d mat.VecDense
			if chol.SolveVecTo(&d, b) != nil {
				break
			}
			y := slices.Clone(x)
			for k := range n {
				y[k] += d.AtVec(k)
			}
			y[1] = min(mostStretch, max(leastStretch, y[1]))
			next := p.chi2(y)
			if !(next <= now) {
				if damping *= 10; damping > 1e9 {
					break
				}
				continue
			}
			done := now-next < 1e-9*(1+now)
			copy(x, y)
			now = next
			damping /= 10
			if done {
				break
			}
		}
	}
	a, _ := p.normal(x)
	var chol mat.Cholesky
	if !chol.Factorize(a) {
		return nil
	}
	var cov mat.SymDense
	if chol.InverseTo(&cov) != nil {
		return nil
	}
	return &cov
}

// weigh sets the variance that the template's scatter adds.
func (p *problem) weigh(x []float64) {
	scale := x[1] * (1 + p.cfg.Redshift)
	for k := range p.points {
		for i, o := range p.points[k] {
			l, _ := p.bands[k].Light((o.MJD - x[0]) / scale)
			v := p.cfg.ModelScatter * x[2+k] * l
			p.scatter[k][i] = v * v
		}
	}
}

// normal returns the normal matrix and the gradient at x, offsets eliminated.
func (p *problem) normal(x []float64) (*mat.SymDense, *mat.VecDense) {
	n := len(x)
	a, b := mat.NewSymDense(n, nil), mat.NewVecDense(n, nil)
	w := 1 / (p.cfg.StretchSpread * p.cfg.StretchSpread)
	a.SetSym(1, 1, w)
	b.SetVec(1, -w*(x[1]-p.cfg.StretchMean))
	scale := x[1] * (1 + p.cfg.Redshift)
	for k := range p.filters {
		at := [3]int{0, 1, 2 + k}
		var m [3][3]float64
		var g, c [3]float64 // gradient; products with the constant
		var one, rest float64
		for i, o := range p.points[k] {
			w := 1 / (o.Err*o.Err + p.scatter[k][i])
			phase := (o.MJD - x[0]) / scale
			l, d := p.bands[k].Light(phase)
			h := x[2+k]
			grad := [3]float64{-h * d / scale, -h * d * phase / x[1], l}
			r := o.Flux - h*l
			for u := range 3 {
				for v := range 3 {
					m[u][v] += w * grad[u] * grad[v]
				}
				g[u] += w * grad[u] * r
				c[u] += w * grad[u]
			}
			one += w
			rest += w * r
		}
		if v := p.offset[k] * p.offset[k]; v > 0 {
			d := one + 1/v
			for u := range 3 {
				for v := range 3 {
					m[u][v] -= c[u] * c[v] / d
				}
				g[u] -= c[u] * rest / d
			}
		}
		for u := range 3 {
			for v := u; v < 3; v++ {
				a.SetSym(at[u], at[v], a.At(at[u], at[v])+m[u][v])
			}
			b.SetVec(at[u], b.AtVec(at[u])+g[u])
		}
	}
	return a, b
}
