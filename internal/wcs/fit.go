package wcs

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"

	"nightsift/internal/astro"
)

const (
	// maxCondition is the largest condition number of the scaled design matrix
	// for which an order is kept: beyond it the stars do not determine the terms.
	maxCondition = 1e6
	// starsPerTerm is how many stars each term of a polynomial must have.
	starsPerTerm = 1.5
)

// FitTANSIP fits a gnomonic WCS with a SIP distortion to stars at the pixels
// (x, y) whose places (ra, dec [deg], ICRS) are known, by weighted least
// squares; a caller who suspects outliers clips them and calls again. weight is
// 1/variance in any unit, nil for equal ones; stars of weight 0 are left out.
// The tangent point lies at the centre of the frame of width × height pixels.
// order is that of the polynomial: 1 for none (plain TAN), up to 9; A and B hold
// terms of order 2 and more. The inverse polynomials AP and BP are fitted over
// the frame, one order higher, for programs that need them.
//
// When there are fewer than 1.5 stars for each term of the order, or they lie
// so that they do not determine it (condition number above 1e6), the order is
// lowered; SIPOrder of the result tells. At least 3 stars not in a line are
// needed.
//
// rms is the weighted root mean square residual of one axis [px], of the fit
// as it is, without a correction for its degrees of freedom. A distortion within
// the model is recovered to better than 1e-6 px (TestFitRecovers).
func FitTANSIP(x, y, ra, dec, weight []float64, width, height, order int) (w *WCS, rms float64, err error) {
	if len(y) != len(x) || len(ra) != len(x) || len(dec) != len(x) || (weight != nil && len(weight) != len(x)) {
		panic("wcs: slices differ in length")
	}
	if width < 1 || height < 1 || order < 1 || order > maxOrder {
		panic(fmt.Sprintf("wcs: fit of order %d over %d x %d pixels; want an order from 1 to %d", order, width, height, maxOrder))
	}
	// Stars of use, with unit vectors and square roots of weights.
	cx, cy := float64(width+1)/2, float64(height+1)/2
	half := float64(max(width, height, 2)) / 2
	var s, t, root []float64
	var place [][3]float64
	var mean [3]float64
	for i := range x {
		wt := 1.0
		if weight != nil {
			wt = weight[i]
		}
		if wt == 0 {
			continue
		}
		if !(wt > 0) || math.IsInf(wt, 0) || !finite(x[i]) || !finite(y[i]) || !finite(ra[i]) || !(math.Abs(dec[i]) <= 90) {
			return nil, 0, fmt.Errorf("wcs: star %d of the fit: pixel (%g, %g), place (%g, %g), weight %g: want finite numbers",
				i, x[i], y[i], ra[i], dec[i], wt)
		}
		sa, ca := math.Sincos(ra[i] / astro.Radian)
		sd, cd := math.Sincos(dec[i] / astro.Radian)
		p := [3]float64{cd * ca, cd * sa, sd}
		s = append(s, (x[i]-cx)/half)
		t = append(t, (y[i]-cy)/half)
		root = append(root, math.Sqrt(wt))
		place = append(place, p)
		for k := range p {
			mean[k] += p[k]
		}
	}
	n := len(s)
	if n < 3 {
		return nil, 0, fmt.Errorf("wcs: %d stars cannot determine a WCS; want at least 3", n)
	}
	var design *leastSquares
	for ; ; order-- {
		if order > 1 && float64(n) < starsPerTerm*float64(terms(order)) {
			continue
		}
		if design = newLeastSquares(s, t, root, order); design.condition <= maxCondition {
			break
		}
		if order == 1 {
			return nil, 0, fmt.Errorf("wcs: the %d stars of the fit lie in a line or a point (condition number %.3g)", n, design.condition)
		}
	}

	// The tangent point is where the frame's centre falls, which the fit itself
	// tells: each round moves it there. The plane changes little, so it settles
	// fast.
	lon := astro.Wrap360(math.Atan2(mean[1], mean[0]) * astro.Radian)
	lat := math.Atan2(mean[2], math.Hypot(mean[0], mean[1])) * astro.Radian
	xi, eta := make([]float64, n), make([]float64, n)
	var px, py polynomial
	tan := projectionByCode("TAN")
	const rounds = 12
	for round := 0; ; round++ {
		r := nativeToCelestial(lon, lat, 180)
		for i, p := range place {
			var ok bool
			a := r[0][0]*p[0] + r[1][0]*p[1] + r[2][0]*p[2]
			b := r[0][1]*p[0] + r[1][1]*p[1] + r[2][1]*p[2]
			c := r[0][2]*p[0] + r[1][2]*p[1] + r[2][2]*p[2]
			if xi[i], eta[i], ok = tan.toPlane(nil, a, b, c); !ok {
				return nil, 0, fmt.Errorf("wcs: the stars of the fit spread over more than half the sky")
			}
		}
		px = design.solve(xi)
		py = design.solve(eta)
		u, v := px.c[0][0], py.c[0][0]
		if !finite(u) || !finite(v) {
			return nil, 0, fmt.Errorf("wcs: the fit has no finite answer")
		}
		// Rounding of the places leaves 1e-15 rad or so.
		if math.Hypot(u, v) < 1e-14 || round == rounds {
			break
		}
		a, b, c, _ := tan.toSphere(nil, u, v)
		ex := r[0][0]*a + r[0][1]*b + r[0][2]*c
		ey := r[1][0]*a + r[1][1]*b + r[1][2]*c
		ez := r[2][0]*a + r[2][1]*b + r[2][2]*c
		lon = astro.Wrap360(math.Atan2(ey, ex) * astro.Radian)
		lat = math.Atan2(ez, math.Hypot(ex, ey)) * astro.Radian
	}

	// The linear terms are CD; the others, brought back through it, are A and B.
	// A constant that is left, below 1e-14 rad, goes into CRPIX.
	linear := [2][2]float64{
		{px.c[1][0] / half * astro.Radian, px.c[0][1] / half * astro.Radian},
		{py.c[1][0] / half * astro.Radian, py.c[0][1] / half * astro.Radian},
	}
	w, err = NewTAN(cx, cy, lon, lat, linear)
	if err != nil {
		return nil, 0, err
	}
	w.lonpole = 180
	if err := w.finish(); err != nil {
		return nil, 0, err
	}
	du := (w.inverse[0][0]*px.c[0][0] + w.inverse[0][1]*py.c[0][0]) * astro.Radian
	dv := (w.inverse[1][0]*px.c[0][0] + w.inverse[1][1]*py.c[0][0]) * astro.Radian
	w.crpix[0] -= du
	w.crpix[1] -= dv
	if order > 1 {
		d := &sip{}
		d.a.order, d.b.order = order, order
		for p := 0; p <= order; p++ {
			for q := 0; p+q <= order; q++ {
				if p+q < 2 {
					continue
				}
				scale := astro.Radian / math.Pow(half, float64(p+q))
				l, m := px.c[p][q]*scale, py.c[p][q]*scale
				d.a.c[p][q] = w.inverse[0][0]*l + w.inverse[0][1]*m
				d.b.c[p][q] = w.inverse[1][0]*l + w.inverse[1][1]*m
			}
		}
		d.fitInverse(width, height, min(order+1, maxOrder))
		w.distortion = d
	}

	var sum, total float64
	for i := range n {
		l := (xi[i] - px.at(s[i], t[i])) * astro.Radian
		m := (eta[i] - py.at(s[i], t[i])) * astro.Radian
		rx := w.inverse[0][0]*l + w.inverse[0][1]*m
		ry := w.inverse[1][0]*l + w.inverse[1][1]*m
		wt := root[i] * root[i]
		sum += wt * (rx*rx + ry*ry)
		total += 2 * wt
	}
	return w, math.Sqrt(sum / total), nil
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

// terms is the number of coefficients of a polynomial in two variables.
func terms(order int) int { return (order + 1) * (order + 2) / 2 }

// leastSquares fits polynomials to values at fixed points with fixed weights.
type leastSquares struct {
	order     int
	root      []float64 // square root of each point's weight
	norm      []float64 // length of each column before scaling
	qr        mat.QR
	condition float64 // of the matrix with columns of length 1
}

// newLeastSquares sets up the points (x, y), which should lie within about ±1,
// and factorizes.
func newLeastSquares(x, y, root []float64, order int) *leastSquares {
	ls := &leastSquares{order: order, root: root, norm: make([]float64, terms(order))}
	n := len(x)
	if n < terms(order) {
		ls.condition = math.Inf(1)
		return ls
	}
	m := mat.NewDense(n, terms(order), nil)
	row := make([]float64, terms(order))
	for i := range x {
		k := 0
		xp := root[i]
		for p := 0; p <= order; p++ {
			v := xp
			for q := 0; p+q <= order; q++ {
				row[k] = v
				ls.norm[k] += v * v
				k++
				v *= y[i]
			}
			xp *= x[i]
		}
		m.SetRow(i, row)
	}
	for k := range ls.norm {
		ls.norm[k] = math.Sqrt(ls.norm[k])
		if ls.norm[k] == 0 {
			ls.condition = math.Inf(1)
			return ls
		}
	}
	for i := range n {
		r := m.RawRowView(i)
		for k := range r {
			r[k] /= ls.norm[k]
		}
	}
	ls.qr.Factorize(m)
	ls.condition = ls.qr.Cond()
	if math.IsNaN(ls.condition) {
		ls.condition = math.Inf(1)
	}
	return ls
}

// solve fits the polynomial to values at the points. NaN appears where the
// system is singular, which condition tells beforehand.
func (ls *leastSquares) solve(value []float64) polynomial {
	rhs := mat.NewVecDense(len(value), nil)
	for i, v := range value {
		rhs.SetVec(i, v*ls.root[i])
	}
	var c mat.VecDense
	// The error here is a warning about the condition, judged by the caller.
	if err := ls.qr.SolveVecTo(&c, false, rhs); err != nil && c.Len() == 0 {
		c = *mat.NewVecDense(terms(ls.order), nil)
		for k := range ls.norm {
			c.SetVec(k, math.NaN())
		}
	}
	f := polynomial{order: ls.order}
	k := 0
	for p := 0; p <= ls.order; p++ {
		for q := 0; p+q <= ls.order; q++ {
			f.c[p][q] = c.AtVec(k) / ls.norm[k]
			k++
		}
	}
	return f
}

// fitInverse fills the inverse polynomials from a grid over the frame. A
// distortion without a well-determined inverse keeps none.
func (s *sip) fitInverse(width, height, order int) {
	const nodes = 24
	half := float64(max(width, height, 2)) / 2
	var x, y, du, dv, root []float64
	for j := range nodes {
		for i := range nodes {
			u := (float64(i)/(nodes-1) - 0.5) * float64(width)
			v := (float64(j)/(nodes-1) - 0.5) * float64(height)
			fa, fb := s.a.at(u, v), s.b.at(u, v)
			x = append(x, (u+fa)/half)
			y = append(y, (v+fb)/half)
			du = append(du, -fa)
			dv = append(dv, -fb)
			root = append(root, 1)
		}
	}
	ls := newLeastSquares(x, y, root, order)
	if !(ls.condition < 1e10) {
		return
	}
	ap, bp := ls.solve(du), ls.solve(dv)
	for p := 0; p <= order; p++ {
		for q := 0; p+q <= order; q++ {
			scale := math.Pow(half, -float64(p+q))
			ap.c[p][q] *= scale
			bp.c[p][q] *= scale
			if !finite(ap.c[p][q]) || !finite(bp.c[p][q]) {
				return
			}
		}
	}
	s.ap, s.bp = &ap, &bp
}
