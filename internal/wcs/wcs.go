// Package wcs maps pixels to the sky and back.
//
// It follows the FITS papers on world coordinates (Greisen & Calabretta 2002,
// A&A 395, 1061; Calabretta & Greisen 2002, A&A 395, 1077) for the projections
// TAN, SIN (with its slant), ARC, STG, ZEA, ZPN, CAR, CEA, MER, SFL, PAR and AIT,
// and the conventions for distortion SIP, TPV, TNX and ZPX.
//
// # Conventions
//
// Pixels are FITS pixels: (1,1) is the centre of the first one. The sky is
// right ascension and declination [deg] in the ICRS, whatever system the header
// names: FK5 is precessed to J2000 (IAU 1976) and turned by the 0.03 arcsec that
// lie between it and the ICRS, FK4 loses its elliptic aberration and goes by the
// standard matrix for the epoch of the exposure, galactic coordinates are
// rotated. Ecliptic coordinates are refused.
//
// # Accuracy
//
// Against WCSLIB: 1e-10 deg from pixel to sky and 1e-7 px back, at edges, at
// poles and over the wrap of right ascension (TestAgainstWCSLIB). Distortions
// are inverted by Newton's method to 1e-9 px; published inverse polynomials only
// start it.
//
// # Concurrency
//
// A WCS does not change after it is made and holds no scratch: any number of
// goroutines may use one.
package wcs

import (
	"errors"
	"math"

	"nightsift/internal/astro"
)

// ErrOutside is returned for a pixel or a place in the sky that the projection
// does not reach, for NaN, and where a distortion has no inverse because it
// folds over.
var ErrOutside = errors.New("wcs: position is outside the projection")

// WCS is a celestial world coordinate system of an image. Make one with
// FromKeywords, NewTAN or FitTANSIP.
type WCS struct {
	crpix [2]float64
	// cd turns pixel offsets into intermediate coordinates [deg]: row 0 is the
	// longitude's axis, row 1 the latitude's, in whatever order the header has
	// them. inverse is its inverse [px/deg].
	cd, inverse [2][2]float64
	distortion  *sip // nil when there is none; never changed
	polynomial  *tpv // nil when there is none; never changed
	tpvSide     float64

	proj      *projection
	parameter parameters
	origin    [2]float64 // of the plane, in the projection's own [rad]

	// rotation turns native unit vectors into ICRS ones; or, where fk4 is not
	// nil, into ones of FK4, which fk4 turns into ICRS ones.
	rotation matrix
	fk4      *fk4

	// The header's own words, for Cards.
	crval            [2]float64 // longitude, latitude in the header's system [deg]
	reference        [2]float64 // native longitude and latitude of that place [deg]
	moved            bool       // the plane's origin is there, not where the projection has it
	lonpole, latpole float64    // [deg]
	system           system
	latFirst         bool // the latitude is axis 1
}

// NewTAN returns a gnomonic WCS without distortion whose tangent point (ra, dec
// [deg], ICRS) lies at the pixel (x, y). cd is [deg/px]: its first row gives
// the offset along increasing right ascension, its second along declination.
// The error says which value is not usable.
func NewTAN(x, y, ra, dec float64, cd [2][2]float64) (*WCS, error) {
	w := &WCS{
		crpix:     [2]float64{x, y},
		cd:        cd,
		proj:      projectionByCode("TAN"),
		crval:     [2]float64{astro.Wrap360(ra), dec},
		reference: [2]float64{0, 90},
		latpole:   90,
		system:    system{name: "ICRS"},
	}
	w.lonpole = w.defaultLonpole()
	if err := w.finish(); err != nil {
		return nil, err
	}
	return w, nil
}

// Clone returns a copy. As a WCS does not change, sharing one is as good.
func (w *WCS) Clone() *WCS {
	c := *w
	return &c
}

// Shifted returns the WCS of the same sky on pixels renumbered so that old
// pixel (x,y) is new pixel (x-dx, y-dy): what a cut-out that begins at pixel
// (1+dx, 1+dy) needs.
func (w *WCS) Shifted(dx, dy float64) *WCS {
	c := *w
	c.crpix[0] -= dx
	c.crpix[1] -= dy
	return &c
}

// Projection returns the FITS code of the projection, as "TAN" or "SIN"; the
// TPV convention is "TPV", ZPN with a polynomial "ZPX".
func (w *WCS) Projection() string {
	switch {
	case w.polynomial == nil:
		return w.proj.code
	case w.proj.code == "ZPN":
		return "ZPX"
	}
	return "TPV"
}

// SIPOrder returns the order of the SIP distortion, 0 when there is none.
func (w *WCS) SIPOrder() int {
	if w.distortion == nil {
		return 0
	}
	return max(w.distortion.a.order, w.distortion.b.order)
}

// PixelToSky returns the place [deg] of a pixel, right ascension in [0, 360).
// The error is ErrOutside.
func (w *WCS) PixelToSky(x, y float64) (ra, dec float64, err error) {
	u, v := x-w.crpix[0], y-w.crpix[1]
	if s := w.distortion; s != nil {
		u, v = u+s.a.at(u, v), v+s.b.at(u, v)
	}
	ra, dec, ok := w.offsetToSky(u, v)
	if !ok {
		return math.NaN(), math.NaN(), ErrOutside
	}
	return ra, dec, nil
}

// offsetToSky takes pixel offsets from CRPIX free of SIP distortion.
func (w *WCS) offsetToSky(u, v float64) (ra, dec float64, ok bool) {
	x := w.cd[0][0]*u + w.cd[0][1]*v
	y := w.cd[1][0]*u + w.cd[1][1]*v
	if w.polynomial != nil {
		x, y, _, _, _, _ = w.polynomial.at(x, y)
	}
	a, b, n, ok := w.proj.toSphere(&w.parameter, x/astro.Radian+w.origin[0], y/astro.Radian+w.origin[1])
	r := &w.rotation
	ex := r[0][0]*a + r[0][1]*b + r[0][2]*n
	ey := r[1][0]*a + r[1][1]*b + r[1][2]*n
	ez := r[2][0]*a + r[2][1]*b + r[2][2]*n
	if w.fk4 != nil {
		e := w.fk4.toICRS([3]float64{ex, ey, ez})
		ex, ey, ez = e[0], e[1], e[2]
	}
	ra = math.Atan2(ey, ex) * astro.Radian
	if ra < 0 {
		ra += 360
		if ra >= 360 {
			ra = 0
		}
	}
	dec = math.Atan2(ez, math.Sqrt(ex*ex+ey*ey)) * astro.Radian
	return ra, dec, ok && !math.IsNaN(ra+dec)
}

// SkyToPixel returns the pixel at a place [deg]; right ascension may be any
// turn. The error is ErrOutside.
func (w *WCS) SkyToPixel(ra, dec float64) (x, y float64, err error) {
	x, y, ok := w.skyToPixel(ra, dec)
	if !ok {
		return math.NaN(), math.NaN(), ErrOutside
	}
	return x, y, nil
}

func (w *WCS) skyToPixel(ra, dec float64) (x, y float64, ok bool) {
	if !(math.Abs(dec) <= 90) || !(math.Abs(ra) <= 1e6) {
		return 0, 0, false
	}
	sinRA, cosRA := math.Sincos(ra / astro.Radian)
	sinDec, cosDec := math.Sincos(dec / astro.Radian)
	ex, ey, ez := cosDec*cosRA, cosDec*sinRA, sinDec
	if w.fk4 != nil {
		e := w.fk4.fromICRS([3]float64{ex, ey, ez})
		ex, ey, ez = e[0], e[1], e[2]
	}
	r := &w.rotation
	a := r[0][0]*ex + r[1][0]*ey + r[2][0]*ez
	b := r[0][1]*ex + r[1][1]*ey + r[2][1]*ez
	n := r[0][2]*ex + r[1][2]*ey + r[2][2]*ez
	px, py, ok := w.proj.toPlane(&w.parameter, a, b, n)
	if !ok {
		return 0, 0, false
	}
	px = (px - w.origin[0]) * astro.Radian
	py = (py - w.origin[1]) * astro.Radian
	if w.polynomial != nil {
		tolerance := 1e-10 * w.linearScale()
		if px, py, ok = w.polynomial.invert(px, py, tolerance, w.tpvSide); !ok {
			return 0, 0, false
		}
	}
	u := w.inverse[0][0]*px + w.inverse[0][1]*py
	v := w.inverse[1][0]*px + w.inverse[1][1]*py
	if w.distortion != nil {
		if u, v, ok = w.distortion.invert(u, v); !ok {
			return 0, 0, false
		}
	}
	x, y = u+w.crpix[0], v+w.crpix[1]
	return x, y, !math.IsNaN(x + y)
}

// PixelToSkyRow fills ra and dec [deg], of one length, with the places of the
// pixels (x, y), (x+1, y), (x+2, y)…, and returns how many have none; those are
// NaN. It allocates nothing.
func (w *WCS) PixelToSkyRow(ra, dec []float64, x, y float64) (outside int) {
	return w.PixelToSkyGrid(ra, dec, len(ra), x, y, 1, 1)
}

// PixelToSkyGrid fills ra and dec [deg], in row order, with the places of a
// grid of nx columns whose first node is the pixel (x, y) and whose steps are
// (dx, dy) px; it has len(ra)/nx rows. It returns how many nodes have no place;
// those are NaN. It allocates nothing.
func (w *WCS) PixelToSkyGrid(ra, dec []float64, nx int, x, y, dx, dy float64) (outside int) {
	if len(ra) != len(dec) {
		panic("wcs: ra and dec differ in length")
	}
	if len(ra) == 0 {
		return 0
	}
	if nx < 1 || len(ra)%nx != 0 {
		panic("wcs: length is not a whole number of grid rows")
	}
	var ka, kb [maxOrder + 1]float64
	for j := 0; j*nx < len(ra); j++ {
		rowRA, rowDec := ra[j*nx:(j+1)*nx], dec[j*nx:(j+1)*nx]
		v0 := y + float64(j)*dy - w.crpix[1]
		s := w.distortion
		if s != nil {
			s.a.inX(&ka, v0)
			s.b.inX(&kb, v0)
		}
		for i := range rowRA {
			u, v := x+float64(i)*dx-w.crpix[0], v0
			if s != nil {
				u, v = u+horner(ka[:s.a.order+1], u), v+horner(kb[:s.b.order+1], u)
			}
			var ok bool
			if rowRA[i], rowDec[i], ok = w.offsetToSky(u, v); !ok {
				rowRA[i], rowDec[i] = math.NaN(), math.NaN()
				outside++
			}
		}
	}
	return outside
}

// PixelsToSky fills ra and dec [deg] with the places of the pixels (x[i],
// y[i]) and returns how many have none; those are NaN. All four have one
// length; ra and dec may be x and y. It allocates nothing.
func (w *WCS) PixelsToSky(ra, dec, x, y []float64) (outside int) {
	if len(ra) != len(x) || len(dec) != len(x) || len(y) != len(x) {
		panic("wcs: slices differ in length")
	}
	for i := range x {
		var err error
		if ra[i], dec[i], err = w.PixelToSky(x[i], y[i]); err != nil {
			outside++
		}
	}
	return outside
}

// SkyToPixels fills x and y with the pixels of the places (ra[i], dec[i])
// [deg] and returns how many have none; those are NaN. All four have one
// length; x and y may be ra and dec. It allocates nothing.
func (w *WCS) SkyToPixels(x, y, ra, dec []float64) (outside int) {
	if len(ra) != len(x) || len(dec) != len(x) || len(y) != len(x) {
		panic("wcs: slices differ in length")
	}
	for i := range x {
		var err error
		if x[i], y[i], err = w.SkyToPixel(ra[i], dec[i]); err != nil {
			outside++
		}
	}
	return outside
}

// linearScale returns the side [deg] of a square as large as a pixel, by the
// CD matrix alone.
func (w *WCS) linearScale() float64 {
	return math.Sqrt(math.Abs(w.cd[0][0]*w.cd[1][1] - w.cd[0][1]*w.cd[1][0]))
}

// PixelScale returns the side [arcsec] of a square as large as the pixel at
// CRPIX. PixelScaleAt knows the rest of the frame.
func (w *WCS) PixelScale() float64 {
	scale := w.linearScale() * 3600
	if s := w.distortion; s != nil {
		scale *= math.Sqrt(math.Abs((1+s.a.c[1][0])*(1+s.b.c[0][1]) - s.a.c[0][1]*s.b.c[1][0]))
	}
	if t := w.polynomial; t != nil {
		_, _, lx, ly, mx, my := t.at(0, 0)
		scale *= math.Sqrt(math.Abs(lx*my - ly*mx))
	}
	return scale
}

// local returns the derivatives of the place with pixel steps at (x,y), as the
// steps east and north [rad/px] for a step in x and for one in y.
func (w *WCS) local(x, y float64) (eastX, northX, eastY, northY float64, err error) {
	ra, dec, err := w.PixelToSky(x, y)
	if err != nil {
		return 0, 0, 0, 0, err
	}
	sinRA, cosRA := math.Sincos(ra / astro.Radian)
	sinDec, cosDec := math.Sincos(dec / astro.Radian)
	step := func(dx, dy float64) (east, north float64) {
		var e, n [2]float64
		for i, h := range [2]float64{0.5, -0.5} {
			r, d, err2 := w.PixelToSky(x+h*dx, y+h*dy)
			if err2 != nil {
				err = err2
			}
			sr, cr := math.Sincos(r / astro.Radian)
			sd, cd := math.Sincos(d / astro.Radian)
			e[i] = cd * (sr*cosRA - cr*sinRA)
			n[i] = sd*cosDec - cd*sinDec*(cr*cosRA+sr*sinRA)
		}
		return e[0] - e[1], n[0] - n[1]
	}
	eastX, northX = step(1, 0)
	eastY, northY = step(0, 1)
	return eastX, northX, eastY, northY, err
}

// Orientation returns the position angle [deg, 0 to 360, north through east] of
// the direction of increasing y at the pixel (x,y), and the parity. The error
// is ErrOutside.
func (w *WCS) Orientation(x, y float64) (positionAngle float64, parity int, err error) {
	ex, nx, ey, ny, err := w.local(x, y)
	parity = 1
	if ex*ny-ey*nx > 0 {
		parity = -1
	}
	return astro.Wrap360(math.Atan2(ey, ny) * astro.Radian), parity, err
}

// Parity is +1 for an image that shows the sky as the eye sees it (with x to
// the right and y up, east is a quarter turn counterclockwise from north), -1
// for a mirrored one.
func (w *WCS) Parity() int {
	if w.cd[0][0]*w.cd[1][1]-w.cd[0][1]*w.cd[1][0] > 0 {
		return -1
	}
	return 1
}

// Separation returns the angle [deg] between two places in the sky [deg].
func Separation(ra1, dec1, ra2, dec2 float64) float64 {
	return astro.Separation(ra1, dec1, ra2, dec2)
}

// PositionAngle returns the direction [deg], 0 to 360, from the first place to
// the second: 0 is north, 90 is east.
func PositionAngle(ra1, dec1, ra2, dec2 float64) float64 {
	return astro.PositionAngle(ra1, dec1, ra2, dec2)
}
