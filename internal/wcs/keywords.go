package wcs

import (
	"fmt"
	"math"
	"strings"

	"nightsift/internal/astro"
)

// Keywords is a header: fits.Header and any other set of values satisfies it.
// Float reports false for a key that is absent or not a number, Str for one
// that is absent or not text.
type Keywords interface {
	Float(key string) (float64, bool)
	Str(key string) (string, bool)
}

// FromKeywords reads the primary celestial WCS of a two-dimensional image. It
// returns nil and no error when the header describes none. The error names the
// keyword, what it holds and what was expected; it covers what is broken
// (missing or non-finite numbers, a singular matrix, one celestial axis without
// its partner) and what is not supported (other projections and distortions,
// ecliptic axes).
//
// Where habits differ from the standard:
//   - Any of CDi_j wins over PCi_j and CDELTi, and those over CROTA2, unless both
//     CD and PC are given and disagree, which is an error.
//   - TAN with A_ORDER but without -SIP is taken as TAN-SIP.
//   - TAN with PVi_j of the latitude axis, or of the longitude axis with j > 4,
//     is the older spelling of TPV. An explicit -SIP makes such PVi_j ignored.
//   - TNX becomes the TPV that it equals, ZPX without a distortion ZPN.
//   - Without CDELTi, CDi_j and PCi_j there is no scale, and without CRVALi no
//     place: errors, though the standard has defaults.
func FromKeywords(k Keywords) (*WCS, error) {
	h := header{k}
	axis, code, suffix, sys, err := h.celestialAxes()
	if err != nil || code == "" {
		return nil, err
	}
	w := &WCS{latFirst: axis[0] == 2, system: sys}

	withSIP := suffix == "SIP"
	_, hasSIP := k.Float("A_ORDER")
	withTPV := code == "TPV"
	if code == "TAN" && !withSIP && h.polynomialPV(axis) {
		withTPV = true
	}
	if code == "TAN" && suffix == "" && hasSIP && !withTPV {
		withSIP = true
	}
	withTNX, withZPX := code == "TNX", code == "ZPX"
	switch {
	case withTPV, withTNX:
		code = "TAN"
	case withZPX:
		code = "ZPN"
	}
	if w.proj = projectionByCode(code); w.proj == nil {
		known := "TPV, TNX, ZPX"
		for _, p := range projections {
			known += ", " + p.code
		}
		return nil, fmt.Errorf("wcs: projection %s is not supported; known are %s", code, known)
	}
	if suffix != "" && suffix != "SIP" {
		return nil, fmt.Errorf("wcs: distortion -%s in CTYPE1 is not supported; known are -SIP and TPV", suffix)
	}

	unit, err := h.units(axis)
	if err != nil {
		return nil, err
	}
	for i := range 2 {
		crpix := fmt.Sprintf("CRPIX%d", i+1)
		if w.crpix[i], _, err = h.number(crpix); err != nil {
			return nil, err
		}
		if math.Abs(w.crpix[i]) > 1e9 {
			return nil, fmt.Errorf("wcs: %s = %g is absurd; want within 1e9 px", crpix, w.crpix[i])
		}
		key := fmt.Sprintf("CRVAL%d", axis[i])
		v, ok, err := h.number(key)
		if err != nil {
			return nil, err
		}
		if !ok {
			return nil, fmt.Errorf("wcs: %s is missing though CTYPE%d names a celestial axis", key, axis[i])
		}
		w.crval[i] = v * unit[i]
		if math.Abs(w.crval[i]) > [2]float64{1e6, 90}[i] {
			return nil, fmt.Errorf("wcs: %s = %g is no %s", key, v, [2]string{"longitude", "latitude"}[i])
		}
	}
	w.crval[0] = astro.Wrap360(w.crval[0])
	if w.cd, err = h.matrix(axis, unit); err != nil {
		return nil, err
	}
	if err = h.poles(w, axis, withTPV || withTNX || withZPX, withSIP); err != nil {
		return nil, err
	}
	if !withTPV && !withTNX && !withZPX {
		for m := w.proj.first; m <= w.proj.last; m++ {
			if w.parameter.pv[m], _, err = h.number(fmt.Sprintf("PV%d_%d", axis[1], m)); err != nil {
				return nil, err
			}
		}
	}
	if withSIP {
		if w.distortion, err = h.sip(); err != nil {
			return nil, err
		}
	}
	switch {
	case withTPV:
		w.polynomial, err = h.tpv(axis)
	case withTNX:
		w.polynomial, err = h.tnx(axis)
	case withZPX:
		w.polynomial, err = h.zpx(axis, &w.parameter)
	}
	if err != nil {
		return nil, err
	}
	if err := w.finish(); err != nil {
		return nil, err
	}
	return w, nil
}

// finish checks the numbers and derives what transforms need.
func (w *WCS) finish() error {
	for _, v := range []float64{w.crpix[0], w.crpix[1], w.crval[0], w.crval[1], w.lonpole,
		w.cd[0][0], w.cd[0][1], w.cd[1][0], w.cd[1][1]} {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return fmt.Errorf("wcs: a value of the WCS is %g; want finite numbers", v)
		}
	}
	if math.Abs(w.crval[1]) > 90 {
		return fmt.Errorf("wcs: latitude %g of the reference point is outside -90 to 90 deg", w.crval[1])
	}
	c := &w.cd
	det := c[0][0]*c[1][1] - c[0][1]*c[1][0]
	size := math.Hypot(c[0][0], c[0][1]) * math.Hypot(c[1][0], c[1][1])
	if scale := math.Sqrt(math.Abs(det)); !(math.Abs(det) > 1e-9*size) || !(scale > 1e-12 && scale < 90) {
		return fmt.Errorf("wcs: the matrix from pixels to degrees, [%g %g; %g %g], is singular or absurd",
			c[0][0], c[0][1], c[1][0], c[1][1])
	}
	w.inverse = [2][2]float64{{c[1][1] / det, -c[0][1] / det}, {-c[1][0] / det, c[0][0] / det}}
	if t := w.polynomial; t != nil {
		_, _, lx, ly, mx, my := t.at(0, 0)
		w.tpvSide = lx*my - ly*mx
		if w.tpvSide == 0 {
			return fmt.Errorf("wcs: the PVi_j polynomial is singular at the reference point")
		}
	}
	if w.proj.prepare != nil {
		if err := w.proj.prepare(&w.parameter); err != nil {
			return err
		}
	}
	frame, err := w.nativeFrame()
	if err != nil {
		return err
	}
	if w.moved {
		sinTheta, cosTheta := sincosDeg(w.reference[1])
		sinPhi, cosPhi := sincosDeg(w.reference[0])
		u, v, ok := w.proj.toPlane(&w.parameter, cosTheta*cosPhi, cosTheta*sinPhi, sinTheta)
		if !ok {
			return fmt.Errorf("wcs: the reference point that PVi_1 = %g and PVi_2 = %g name is outside the projection %s",
				w.reference[0], w.reference[1], w.proj.code)
		}
		w.origin = [2]float64{u, v}
	}
	if name := w.system.name; name == "FK4" || name == "FK4-NO-E" {
		w.fk4 = newFK4(w.system.equinox, w.system.epoch, name == "FK4")
		w.rotation = frame
		return nil
	}
	m, err := w.system.toICRS()
	if err != nil {
		return err
	}
	w.rotation = multiply(m, frame)
	return nil
}

// nativeFrame returns the rotation from native unit vectors to those of the
// header's system (paper II, section 2.4).
func (w *WCS) nativeFrame() (matrix, error) {
	lon, lat := w.crval[0], w.crval[1]
	phi, theta := w.reference[0], w.reference[1]
	if theta == 90 {
		return nativeToCelestial(lon, lat, w.lonpole), nil
	}
	// The latitude of the native pole, equation 8: one of base ± spread. The
	// length of (x, y) is the largest sine of a latitude within reach.
	sinTheta, cosTheta := sincosDeg(theta)
	sinLat, cosLat := sincosDeg(lat)
	sinTurn, cosTurn := sincosDeg(w.lonpole - phi)
	x, y := cosTheta*cosTurn, sinTheta
	var pole float64
	switch {
	case x == 0 && y == 0:
		if lat != 0 {
			return matrix{}, fmt.Errorf("wcs: LONPOLE = %g wants the reference point on the equator, but its latitude is %g", w.lonpole, lat)
		}
		pole = w.latpole
	default:
		var base, spread float64
		if sinTurn == 0 {
			base, spread = math.Atan2(y, x)*astro.Radian, 90-lat
		} else {
			// x² + y² - sin²δ₀ without its cancellation.
			rest := cosLat*cosLat - cosTheta*cosTheta*sinTurn*sinTurn
			if rest < -1e-12 {
				return matrix{}, fmt.Errorf("wcs: CRVAL latitude %g and LONPOLE = %g contradict each other for a reference point at native latitude %g",
					lat, w.lonpole, theta)
			}
			base, spread = math.Atan2(y, x)*astro.Radian, math.Atan2(math.Sqrt(math.Max(0, rest)), sinLat)*astro.Radian
		}
		a, b := astro.Wrap180(base+spread), astro.Wrap180(base-spread)
		const slack = 1e-10
		aReal, bReal := math.Abs(a) <= 90+slack, math.Abs(b) <= 90+slack
		switch {
		case !aReal && !bReal:
			return matrix{}, fmt.Errorf("wcs: CRVAL latitude %g and LONPOLE = %g contradict each other for a reference point at native latitude %g",
				lat, w.lonpole, theta)
		case aReal && (!bReal || math.Abs(w.latpole-a) < math.Abs(w.latpole-b)):
			pole = a
		default:
			pole = b
		}
		pole = math.Max(-90, math.Min(90, pole))
	}
	// Its longitude is the one that takes the reference point to CRVAL.
	frame := nativeToCelestial(0, pole, w.lonpole)
	turn := lon
	if math.Abs(lat) != 90 {
		sinPhi, cosPhi := sincosDeg(phi)
		r := apply(frame, [3]float64{cosTheta * cosPhi, cosTheta * sinPhi, sinTheta})
		turn -= math.Atan2(r[1], r[0]) * astro.Radian
	}
	return nativeToCelestial(turn, pole, w.lonpole), nil
}

// defaultLonpole is the native longitude of the celestial pole [deg] when a
// header does not give it (paper II, section 2.4).
func (w *WCS) defaultLonpole() float64 {
	if w.crval[1] >= w.reference[1] {
		return w.reference[0]
	}
	turned := astro.Wrap180(w.reference[0] + 180)
	if turned == -180 {
		return 180
	}
	return turned
}

type header struct{ Keywords }

// number returns a finite number. Text and NaN are errors, absence is not.
func (h header) number(key string) (v float64, ok bool, err error) {
	v, ok = h.Float(key)
	if !ok {
		if s, isText := h.Str(key); isText {
			return 0, false, fmt.Errorf("wcs: %s = %q is text; want a number", key, s)
		}
		return 0, false, nil
	}
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return 0, false, fmt.Errorf("wcs: %s = %g; want a finite number", key, v)
	}
	return v, true, nil
}

// text returns a trimmed string in capitals, empty when absent.
func (h header) text(key string) string {
	s, _ := h.Str(key)
	return strings.ToUpper(strings.TrimSpace(s))
}

// celestialAxes finds the pair of celestial axes: the numbers of the longitude
// and latitude axis, their projection code and the suffix behind it. An empty
// code says that there is none.
func (h header) celestialAxes() (axis [2]int, code, suffix string, sys system, err error) {
	fail := func(format string, args ...any) ([2]int, string, string, system, error) {
		return [2]int{}, "", "", system{}, fmt.Errorf("wcs: "+format, args...)
	}
	var names, codes, suffixes [2]string
	for i := 1; i <= 9; i++ {
		ctype := h.text(fmt.Sprintf("CTYPE%d", i))
		name, p, s, isLat, ok := splitCTYPE(ctype)
		if !ok {
			continue
		}
		which := 0
		if isLat {
			which = 1
		}
		if i > 2 {
			if axis[which] != 0 {
				continue // a second pair behind the first, of no interest here
			}
			return fail("CTYPE%d = %q: the celestial axes are not the image's first two", i, ctype)
		}
		if axis[which] != 0 {
			return fail("CTYPE1 and CTYPE2 name the same axis, %q", ctype)
		}
		axis[which], names[which], codes[which], suffixes[which] = i, name, p, s
	}
	switch {
	case axis == [2]int{}:
		return axis, "", "", sys, nil
	case axis[0] == 0 || axis[1] == 0:
		return fail("CTYPE1 = %q and CTYPE2 = %q are no pair of celestial axes", h.text("CTYPE1"), h.text("CTYPE2"))
	case names[0] != names[1] || codes[0] != codes[1] || suffixes[0] != suffixes[1]:
		return fail("CTYPE1 = %q and CTYPE2 = %q differ in system or projection", h.text("CTYPE1"), h.text("CTYPE2"))
	case codes[0] == "":
		return fail("CTYPE1 = %q has no projection; want a form like RA---TAN", h.text("CTYPE1"))
	}
	if sys, err = h.system(names[0]); err != nil {
		return fail("%w", err)
	}
	return axis, codes[0], suffixes[0], sys, nil
}

// splitCTYPE takes apart a form like RA---TAN-SIP, in capitals. name is "RA"
// for either equatorial axis, "G" for a galactic pair and so on.
func splitCTYPE(ctype string) (name, code, suffix string, isLat, ok bool) {
	head, rest := ctype, ""
	if len(ctype) > 4 {
		head, rest = ctype[:4], ctype[4:]
	}
	switch head = strings.TrimRight(head, "- "); {
	case head == "RA":
		name = "RA"
	case head == "DEC":
		name, isLat = "RA", true
	case len(head) == 4 && head[1:] == "LON":
		name = head[:1]
	case len(head) == 4 && head[1:] == "LAT":
		name, isLat = head[:1], true
	case len(head) == 4 && head[2:] == "LN":
		name = head[:2]
	case len(head) == 4 && head[2:] == "LT":
		name, isLat = head[:2], true
	default:
		return "", "", "", false, false
	}
	if rest == "" {
		return name, "", "", isLat, true
	}
	if rest[0] != '-' {
		return "", "", "", false, false // DECAM, RADIUS and other words
	}
	code, suffix, _ = strings.Cut(rest[1:], "-")
	return name, strings.TrimSpace(code), strings.TrimSpace(suffix), isLat, true
}

// polynomialPV tells whether the PVi_j of a TAN header are the older spelling
// of TPV: TAN itself takes none for the latitude axis.
func (h header) polynomialPV(axis [2]int) bool {
	for m := range 40 {
		if _, ok := h.Float(fmt.Sprintf("PV%d_%d", axis[1], m)); ok {
			return true
		}
		if _, ok := h.Float(fmt.Sprintf("PV%d_%d", axis[0], m)); ok && m > 4 {
			return true
		}
	}
	return false
}

// units returns how many degrees are one unit of the longitude and latitude axis.
func (h header) units(axis [2]int) (unit [2]float64, err error) {
	for i := range 2 {
		key := fmt.Sprintf("CUNIT%d", axis[i])
		s, _ := h.Str(key)
		switch strings.ToLower(strings.TrimSpace(s)) {
		case "", "deg", "degree", "degrees":
			unit[i] = 1
		case "arcmin":
			unit[i] = 1. / 60
		case "arcsec":
			unit[i] = 1. / 3600
		case "mas":
			unit[i] = 1. / 3600000
		case "rad":
			unit[i] = astro.Radian
		default:
			return unit, fmt.Errorf("wcs: %s = %q: want deg, arcmin, arcsec, mas or rad", key, s)
		}
	}
	return unit, nil
}

// matrix reads the linear part in whichever of its three forms the header has.
func (h header) matrix(axis [2]int, unit [2]float64) (cd [2][2]float64, err error) {
	var pc [2][2]float64
	var cdelt [2]float64
	var hasCD, hasPC, hasCDELT bool
	for i := range 2 {
		key := fmt.Sprintf("CDELT%d", axis[i])
		v, ok, err := h.number(key)
		if err != nil {
			return cd, err
		}
		cdelt[i] = 1
		if ok {
			cdelt[i] = v
			hasCDELT = true
		}
		for j := range 2 {
			if v, ok, err = h.number(fmt.Sprintf("CD%d_%d", axis[i], j+1)); err != nil {
				return cd, err
			}
			cd[i][j] = v
			hasCD = hasCD || ok
			if v, ok, err = h.number(fmt.Sprintf("PC%d_%d", axis[i], j+1)); err != nil {
				return cd, err
			}
			if !ok && axis[i] == j+1 {
				v = 1
			}
			pc[i][j] = v
			hasPC = hasPC || ok
		}
	}
	if !hasCD && !hasPC {
		if !hasCDELT {
			return cd, fmt.Errorf("wcs: neither CDi_j nor PCi_j nor CDELTi is given: the pixel scale is unknown")
		}
		// CROTA belongs to the latitude axis; some writers put it on both.
		rotation, _, err := h.number(fmt.Sprintf("CROTA%d", axis[1]))
		if err != nil {
			return cd, err
		}
		// In terms of PC (paper II, section 6.1).
		s, c := sincosDeg(rotation)
		lon, lat := axis[0]-1, axis[1]-1
		cd[0][lon], cd[0][lat] = cdelt[0]*c, -cdelt[1]*s
		cd[1][lon], cd[1][lat] = cdelt[0]*s, cdelt[1]*c
	} else {
		var product [2][2]float64
		for i := range 2 {
			for j := range 2 {
				product[i][j] = cdelt[i] * pc[i][j]
			}
		}
		switch {
		case !hasCD:
			cd = product
		case hasPC:
			size := math.Abs(cd[0][0]) + math.Abs(cd[0][1]) + math.Abs(cd[1][0]) + math.Abs(cd[1][1])
			for i := range 2 {
				for j := range 2 {
					if !(math.Abs(cd[i][j]-product[i][j]) <= 1e-4*size) {
						return cd, fmt.Errorf("wcs: CD%d_%d = %g, but PC%d_%d × CDELT%d = %g: remove one of the two forms",
							axis[i], j+1, cd[i][j], axis[i], j+1, axis[i], product[i][j])
					}
				}
			}
		}
	}
	for i := range 2 {
		for j := range 2 {
			cd[i][j] *= unit[i]
		}
	}
	return cd, nil
}

// poles reads LONPOLE, LATPOLE and the PVi_m of the longitude axis, of which 1
// and 2 name the native place of the reference point, 3 and 4 are other names of
// LONPOLE and LATPOLE, and 0 moves the plane's origin to that place.
func (h header) poles(w *WCS, axis [2]int, withTPV, withSIP bool) error {
	w.reference = [2]float64{0, w.proj.theta}
	w.latpole = 90
	plane := withTPV || withSIP && w.proj.code == "TAN" // the PVi_m are not those of paper II
	if !plane {
		for m := range 3 {
			key := fmt.Sprintf("PV%d_%d", axis[0], m)
			v, ok, err := h.number(key)
			if err != nil {
				return err
			}
			switch {
			case !ok:
			case m == 0:
				w.moved = v != 0
			case math.Abs(v) > [2]float64{360, 90}[m-1]:
				return fmt.Errorf("wcs: %s = %g is no native %s", key, v, [2]string{"longitude", "latitude"}[m-1])
			default:
				w.reference[m-1] = v
			}
		}
		w.moved = w.moved && w.reference != [2]float64{0, w.proj.theta}
	}
	w.lonpole = w.defaultLonpole()
	for _, p := range []struct {
		into      *float64
		key       string
		fromPlane bool
	}{
		{&w.lonpole, "LONPOLE", false}, {&w.lonpole, fmt.Sprintf("PV%d_3", axis[0]), true},
		{&w.latpole, "LATPOLE", false}, {&w.latpole, fmt.Sprintf("PV%d_4", axis[0]), true},
	} {
		if p.fromPlane && plane {
			continue
		}
		v, ok, err := h.number(p.key)
		if err != nil {
			return err
		}
		if !ok {
			continue
		}
		if math.Abs(v) > 1e6 {
			return fmt.Errorf("wcs: %s = %g is absurd; want -180 to 360", p.key, v)
		}
		*p.into = v
	}
	return nil
}

// sip reads the four polynomials of the SIP convention.
func (h header) sip() (*sip, error) {
	s := &sip{}
	found := 0
	for _, p := range []struct {
		prefix string
		f      *polynomial
	}{{"A", &s.a}, {"B", &s.b}} {
		ok, err := h.polynomial(p.prefix, p.f)
		if err != nil {
			return nil, err
		}
		if ok {
			found++
		}
	}
	if found == 1 {
		return nil, fmt.Errorf("wcs: only one of A_ORDER and B_ORDER is given; want both or none")
	}
	if found == 0 {
		return nil, nil // -SIP in CTYPE, but nothing distorted
	}
	var ap, bp polynomial
	okA, err := h.polynomial("AP", &ap)
	if err != nil {
		return nil, err
	}
	okB, err := h.polynomial("BP", &bp)
	if err != nil {
		return nil, err
	}
	if okA && okB {
		s.ap, s.bp = &ap, &bp
	}
	return s, nil
}

// polynomial reads prefix_ORDER and prefix_p_q.
func (h header) polynomial(prefix string, f *polynomial) (ok bool, err error) {
	order, ok, err := h.number(prefix + "_ORDER")
	if err != nil || !ok {
		return false, err
	}
	if order != math.Trunc(order) || order < 0 || order > maxOrder {
		return false, fmt.Errorf("wcs: %s_ORDER = %g; want an integer from 0 to %d", prefix, order, maxOrder)
	}
	f.order = int(order)
	for p := 0; p <= f.order; p++ {
		for q := 0; p+q <= f.order; q++ {
			if f.c[p][q], _, err = h.number(fmt.Sprintf("%s_%d_%d", prefix, p, q)); err != nil {
				return false, err
			}
		}
	}
	return true, nil
}

// tpvTerms calls do for each of the 40 terms: m is its number; radial is the
// index of a term in r, or -1 for the term x^p y^q.
func tpvTerms(do func(m, p, q, radial int)) {
	m := 0
	for degree := 0; degree <= maxTPVOrder; degree++ {
		for q := 0; q <= degree; q++ {
			do(m, degree-q, q, -1)
			m++
		}
		if degree%2 == 1 {
			do(m, 0, 0, degree/2)
			m++
		}
	}
}

// tpv reads PVi_0 to PVi_39 of both axes.
func (h header) tpv(axis [2]int) (*tpv, error) {
	t := &tpv{}
	t.lon.order, t.lat.order = 1, 1
	var failed error
	for i, f := range [2]*polynomial{&t.lon, &t.lat} {
		radials := &t.lonRadial
		if i == 1 {
			radials = &t.latRadial
		}
		tpvTerms(func(m, p, q, radial int) {
			v, ok, err := h.number(fmt.Sprintf("PV%d_%d", axis[i], m))
			if err != nil {
				failed = err
			}
			if !ok && m == 1 {
				v = 1
			}
			switch {
			case radial >= 0:
				radials[radial] = v
				return
			case i == 1: // the latitude's polynomial has y first
				p, q = q, p
			}
			f.c[p][q] = v
			if v != 0 {
				f.order = max(f.order, p+q)
			}
		})
	}
	if failed != nil {
		return nil, failed
	}
	return t, nil
}
