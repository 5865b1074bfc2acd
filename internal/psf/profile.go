package psf

import "math"

const (
	splineTerms   = 8               // number of radial splines
	radialTerms   = splineTerms + 1 // the last c_k is the slope of the tail
	radialSpacing = 0.6             // of their knots, in ln(1+q²/q_h²)
	tableLength   = 4096            // samples of the tabulated profile
	tableReach    = 12              // end of the table in units of q_h: 6 FWHM
	minBeta       = 1.6
	maxBeta       = 25
)

// tableEntry is f and df/d(q²) at one q.
type tableEntry struct{ p, d float32 }

// profile is the radial profile f(q), normalised so that ∫ f(q) 2πq dq = 1,
// tabulated uniformly in q. It is read-only after build.
type profile struct {
	beta    float64
	c       [radialTerms]float64
	qh      float64 // half-maximum radius of the pure Moffat profile
	table   []tableEntry
	inv     float64 // 1 / step of the table
	last    float64 // largest q·inv inside the table
	tail    float64 // f = tail·(1+q²)^-β·(1+q²/q_h²)^slope beyond the table
	slope   float64
	meanN   [radialTerms]float64
	meanLog float64 // mean of ln(1+q²) under f
}

// quadraticSpline is the uniform quadratic B-spline, support ±1.5, unit
// integral.
func quadraticSpline(x float64) float64 {
	x = math.Abs(x)
	switch {
	case x < 0.5:
		return 0.75 - x*x
	case x < 1.5:
		t := 1.5 - x
		return 0.5 * t * t
	}
	return 0
}

// quadraticSplineIntegral is the integral of quadraticSpline up to x.
func quadraticSplineIntegral(x float64) float64 {
	switch {
	case x <= -1.5:
		return 0
	case x < -0.5:
		t := x + 1.5
		return t * t * t / 6
	case x < 0.5:
		return 0.5 + x*(0.75-x*x/3)
	case x < 1.5:
		t := 1.5 - x
		return 1 - t*t*t/6
	}
	return 1
}

// radialBasis writes the radial functions N_k(s) and returns the first index k
// and the three values from it; sums over k are 1.
func radialBasis(s float64) (k int, n [3]float64) {
	t := s / radialSpacing
	c := math.Floor(t + 0.5) // nearest centre
	u := t - c
	a := 0.5 - u
	b := 0.5 + u
	n = [3]float64{0.5 * a * a, 0.75 - u*u, 0.5 * b * b}
	k = int(c) - 1
	// The functions below 0 belong to the first, those above the last to the
	// last, which therefore stays 1 to infinity.
	if k < 0 {
		n[0], n[1], n[2] = n[0]+n[1], n[2], 0
		k = 0
	}
	const top = splineTerms - 1
	if k >= top {
		return top - 2, [3]float64{0, 0, 1}
	}
	if k+2 > top {
		n = [3]float64{0, n[0], n[1] + n[2]}
		k = top - 2
	}
	return k, n
}

// radialRamp is the last radial function. It is 0 up to s = 5.5 spacings and
// from 6.5 spacings on (3.4 FWHM) a straight line in s: a change of the power
// with which the profile falls.
func radialRamp(s float64) float64 {
	t := s / radialSpacing
	switch {
	case t < 5.5:
		return 0
	case t < 6.5:
		return 0.5 * (t - 5.5) * (t - 5.5)
	}
	return t - 6
}

// correction returns Σ c_k N_k(s) and its derivative with respect to s.
func (p *profile) correction(s float64) (value, slope float64) {
	const e = 1e-4
	at := func(s float64) float64 {
		k, n := radialBasis(s)
		return p.c[k]*n[0] + p.c[k+1]*n[1] + p.c[k+2]*n[2] + p.c[splineTerms]*radialRamp(s)
	}
	down := math.Max(s-e, 0)
	return at(s), (at(s+e) - at(down)) / (s + e - down)
}

// build tabulates the profile; the table is new, so copies of an old profile
// stay valid.
func (p *profile) build(beta float64, c [radialTerms]float64) {
	p.beta, p.c = beta, c
	p.qh = math.Sqrt(math.Pow(2, 1/beta) - 1)
	step := tableReach * p.qh / tableLength
	p.inv = 1 / step
	p.last = tableLength - 0.5
	p.table = make([]tableEntry, tableLength+1)
	plain := c == [radialTerms]float64{}
	raw := make([]float64, tableLength+1)
	slope := make([]float64, tableLength+1)
	qh2 := p.qh * p.qh
	var sum, sumLog float64
	var sumN [radialTerms]float64
	for i := range raw {
		q2 := float64(i) * step * float64(i) * step
		l := math.Log1p(q2)
		s := math.Log1p(q2 / qh2)
		e, dl := -beta*l, -beta/(1+q2)
		if !plain {
			v, d := p.correction(s)
			e += v
			dl += d / (qh2 + q2)
		}
		f := math.Exp(e)
		raw[i], slope[i] = f, f*dl
		// Simpson's rule for ∫ f 2πq dq.
		w := 4.0
		if i%2 == 0 {
			w = 2
		}
		if i == 0 || i == tableLength {
			w = 1
		}
		w *= step / 3 * 2 * math.Pi * float64(i) * step * f
		sum += w
		sumLog += w * l
		k, n := radialBasis(s)
		for a, v := range n {
			sumN[k+a] += w * v
		}
		sumN[splineTerms] += w * radialRamp(s)
	}
	// Beyond the table, by Simpson's rule in ln q as far as anything is left.
	p.slope = c[splineTerms] / radialSpacing
	p.tail = math.Exp(c[splineTerms-1] - 6*c[splineTerms])
	const tailSteps, tailEnd = 400, 40.0
	for i := 0; i <= tailSteps; i++ {
		z := tailEnd * float64(i) / tailSteps
		q := tableReach * p.qh * math.Exp(z)
		w := 4.0
		if i%2 == 0 {
			w = 2
		}
		if i == 0 || i == tailSteps {
			w = 1
		}
		w *= tailEnd / tailSteps / 3 * 2 * math.Pi * q * q * p.beyond(q*q)
		sum += w
		sumLog += w * math.Log1p(q*q)
		sumN[splineTerms-1] += w
		sumN[splineTerms] += w * radialRamp(math.Log1p(q*q/qh2))
	}
	p.tail /= sum
	p.meanLog = sumLog / sum
	for k := range sumN {
		p.meanN[k] = sumN[k] / sum
	}
	for i := range raw {
		p.table[i] = tableEntry{float32(raw[i] / sum), float32(slope[i] / sum)}
	}
}

// at returns f and df/d(q²).
func (p *profile) at(q2 float64) (f, d float64) {
	t := math.Sqrt(q2) * p.inv
	if t < p.last {
		k := int(t)
		w := float32(t - float64(k))
		e := p.table[k : k+2 : k+2]
		return float64(e[0].p + w*(e[1].p-e[0].p)), float64(e[0].d + w*(e[1].d-e[0].d))
	}
	f = p.beyond(q2)
	return f, f * (p.slope/(p.qh*p.qh+q2) - p.beta/(1+q2))
}

// beyond returns f outside the table.
func (p *profile) beyond(q2 float64) float64 {
	f := p.tail * math.Pow(1+q2, -p.beta)
	if p.slope != 0 {
		f *= math.Pow(1+q2/(p.qh*p.qh), p.slope)
	}
	return f
}

// value returns f alone.
func (p *profile) value(q2 float64) float64 {
	t := math.Sqrt(q2) * p.inv
	if t < p.last {
		k := int(t)
		e := p.table[k : k+2 : k+2]
		return float64(e[0].p + float32(t-float64(k))*(e[1].p-e[0].p))
	}
	return p.beyond(q2)
}
