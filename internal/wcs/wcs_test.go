package wcs

import (
	"math"
	"math/rand/v2"
	"strings"
	"sync"
	"testing"

	"nightsift/internal/astro"
)

func mustRead(t testing.TB, v values) *WCS {
	t.Helper()
	w, err := FromKeywords(v)
	if err != nil || w == nil {
		t.Fatalf("%v: WCS %v, error %v", v, w, err)
	}
	return w
}

// simple is a good header to be spoiled.
func simple(more values) values {
	v := values{
		"CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CRPIX1": 512.5, "CRPIX2": 400.0,
		"CRVAL1": 150.0, "CRVAL2": 2.0, "CD1_1": -1e-4, "CD1_2": 1e-5, "CD2_1": 1e-5, "CD2_2": 1e-4,
	}
	for k, x := range more {
		if x == nil {
			delete(v, k)
		} else {
			v[k] = x
		}
	}
	return v
}

func TestNoCelestialAxes(t *testing.T) {
	for _, v := range []values{
		{},
		{"CTYPE1": "", "CTYPE2": ""},
		{"CTYPE1": "LINEAR", "CTYPE2": "LINEAR", "CRVAL1": 1.0},
		{"CTYPE1": "DECENTRE", "CTYPE2": "RADIUS"},
		{"CRVAL1": 10.0, "CRVAL2": 20.0, "CDELT1": 1.0},
	} {
		if w, err := FromKeywords(v); w != nil || err != nil {
			t.Errorf("%v: WCS %v, error %v; want neither", v, w, err)
		}
	}
}

func TestBrokenHeaders(t *testing.T) {
	for _, c := range []struct {
		spoil values
		want  string // part of the message
	}{
		{values{"CTYPE2": nil}, "no pair"},
		{values{"CTYPE2": "RA---TAN"}, "same axis"},
		{values{"CTYPE2": "DEC--SIN"}, "differ"},
		{values{"CTYPE1": "RA", "CTYPE2": "DEC"}, "no projection"},
		{values{"CTYPE1": "RA---ZPX", "CTYPE2": "DEC--ZPX"}, "ZPN must grow"},
		{values{"CTYPE1": "RA---ZPN", "CTYPE2": "DEC--ZPN", "PV2_1": -1.0}, "ZPN must grow"},
		{values{"CTYPE1": "RA---ZPN", "CTYPE2": "DEC--ZPN", "PV2_1": 1.0, "PV2_29": 1e308}, "overflow"},
		{values{"CTYPE1": "RA---CEA", "CTYPE2": "DEC--CEA", "PV2_1": 2.0}, "CEA"},
		{values{"CTYPE1": "RA---CAR", "CTYPE2": "DEC--CAR", "CRVAL2": 50.0, "LONPOLE": 70.0}, "contradict"},
		{values{"CTYPE1": "RA---CAR", "CTYPE2": "DEC--CAR", "LONPOLE": 90.0}, "equator"},
		{values{"PV1_0": 1.0, "PV1_2": -10.0}, "outside the projection"},
		{values{"CTYPE1": "RA---ZPX", "CTYPE2": "DEC--ZPX", "WAT1_001": "wtype=zpx projp1="}, "projp1"},
		{values{"CTYPE1": "RA---ZPX", "CTYPE2": "DEC--ZPX", "WAT1_001": "wtype=zpx projp1=x"}, "projp1"},
		{values{"CTYPE1": "RA---TNX", "CTYPE2": "DEC--TNX", "WAT2_001": `latcor = "3. 2. 2. 2. 0 0 0 0 1 2"`}, "missing"},
		{values{"CTYPE1": "RA---TNX", "CTYPE2": "DEC--TNX", "WAT2_001": `latcor = "3. 2. 2. 2. 0 0 0 0 1 2 3 4"`}, "too many"},
		{values{"CTYPE1": "RA---TNX", "CTYPE2": "DEC--TNX", "WAT2_001": `latcor = "1. 2. 2. 2. 0 0 0 0 1 2 3"`}, "empty"},
		{values{"CTYPE1": "RA---TNX", "CTYPE2": "DEC--TNX", "WAT2_001": `latcor = "3. 9. 2. 2. 0 0 0 0 1 2 3"`}, "terms"},
		{values{"CTYPE1": "RA---TNX", "CTYPE2": "DEC--TNX", "WAT2_001": `latcor = "4. 2. 2. 2. 0 0 0 0 1 2 3"`}, "kind"},
		{values{"CTYPE1": "RA---TNX", "CTYPE2": "DEC--TNX", "WAT1_001": `lngcor = "1. two"`}, "not a number"},
		{values{"CTYPE1": "RA---HPX", "CTYPE2": "DEC--HPX"}, "HPX is not supported"},
		{values{"CTYPE1": "RA---TAN-TPD", "CTYPE2": "DEC--TAN-TPD"}, "TPD"},
		{values{"CTYPE1": "ELON-TAN", "CTYPE2": "ELAT-TAN"}, "ELON"},
		{values{"CTYPE2": "VELO", "CTYPE3": "DEC--TAN"}, "first two"},
		{values{"CRVAL1": nil}, "CRVAL1 is missing"},
		{values{"CRVAL2": "12:00:00"}, "CRVAL2"},
		{values{"CRVAL2": 91.0}, "no latitude"},
		{values{"CRVAL1": math.NaN()}, "CRVAL1"},
		{values{"CRPIX2": math.Inf(1)}, "CRPIX2"},
		{values{"CRPIX2": 1e30}, "absurd"},
		{values{"CD1_1": 0.0, "CD1_2": 0.0}, "singular"},
		{values{"CD1_1": 1e-5, "CD2_2": 1e-5}, "singular"},
		{values{"CD1_1": 1e-300, "CD1_2": 0.0, "CD2_1": 0.0, "CD2_2": 1e-300}, "singular"},
		{values{"CD1_1": 1e200, "CD2_2": 1e200}, "singular or absurd"},
		{values{"CD2_2": math.NaN()}, "CD2_2"},
		{values{"CD1_1": nil, "CD1_2": nil, "CD2_1": nil, "CD2_2": nil}, "scale is unknown"},
		{values{"PC1_1": 1.0, "CDELT1": 3e-4, "CDELT2": 3e-4}, "remove one"},
		{values{"CUNIT1": "furlong"}, "CUNIT1"},
		{values{"RADESYS": "FK4", "EQUINOX": 2050.0}, "Besselian"},
		{values{"RADESYS": "GAPPT"}, "GAPPT"},
		{values{"RADESYS": "FK5", "EQUINOX": 1e9}, "EQUINOX"},
		{values{"LONPOLE": math.NaN()}, "LONPOLE"},
		{values{"PV1_1": 1000.0}, "PV1_1"},
		{values{"PV1_2": 91.0}, "PV1_2"},
		{values{"A_ORDER": 2, "A_2_0": 1e-6}, "only one"},
		{values{"A_ORDER": 10, "B_ORDER": 2}, "A_ORDER"},
		{values{"A_ORDER": 1000000000, "B_ORDER": 2}, "A_ORDER"},
		{values{"A_ORDER": 2.5, "B_ORDER": 2}, "A_ORDER"},
		{values{"A_ORDER": -1, "B_ORDER": 2}, "A_ORDER"},
		{values{"A_ORDER": 2, "B_ORDER": 2, "B_1_1": math.NaN()}, "B_1_1"},
		{values{"PV2_5": math.Inf(-1)}, "PV2_5"},
		{values{"PV1_1": 0.0, "PV2_1": 0.0}, "singular"},
	} {
		w, err := FromKeywords(simple(c.spoil))
		if err == nil || w != nil {
			t.Errorf("%v: WCS %v, error %v; want an error", c.spoil, w, err)
		} else if !strings.Contains(err.Error(), c.want) || !strings.HasPrefix(err.Error(), "wcs: ") {
			t.Errorf("%v: error %q does not say %q", c.spoil, err, c.want)
		}
	}
}

// TestForgivenHeaders holds the deviations that FromKeywords promises to take.
func TestForgivenHeaders(t *testing.T) {
	plain := mustRead(t, simple(nil))
	for _, more := range []values{
		{"CTYPE1": "ra---tan ", "CTYPE2": "dec--tan"},
		{"RADESYS": "ICRS", "EPOCH": 2019.3},
		{"CTYPE1": "RA---TAN-SIP", "CTYPE2": "DEC--TAN-SIP"}, // with no polynomial
		{"CTYPE1": "RA---TAN-SIP", "CTYPE2": "DEC--TAN-SIP", "A_ORDER": 2, "B_ORDER": 2, "PV2_4": 0.3},
		{"CDELT1": 1.0, "CDELT2": 1.0, "CROTA2": 12.0},
		{"PC1_1": -1e-4, "PC1_2": 1e-5, "PC2_1": 1e-5, "PC2_2": 1e-4},
		{"CUNIT1": "degrees", "CUNIT2": "deg"},
		{"CTYPE3": "FREQ", "PV1_0": 0.0, "PV1_2": 90.0, "LATPOLE": 3.0},
	} {
		w := mustRead(t, simple(more))
		for _, p := range [][2]float64{{1, 1}, {700, 800}} {
			ra1, dec1, _ := plain.PixelToSky(p[0], p[1])
			ra2, dec2, _ := w.PixelToSky(p[0], p[1])
			if ra1 != ra2 || dec1 != dec2 {
				t.Errorf("%v: pixel %v at (%v, %v), want (%v, %v)", more, p, ra2, dec2, ra1, dec1)
			}
		}
	}
}

// TestLatitudeFirst: exchanging the axes changes nothing. (WCSLIB 7.12 exchanges
// the pixel axes of such a TPV and does not find the parameters of such a ZPX, so
// it is no witness.)
func TestLatitudeFirst(t *testing.T) {
	for _, v := range []values{
		simple(values{"CTYPE1": "RA---TPV", "CTYPE2": "DEC--TPV", "PV1_2": 0.01, "PV1_7": 3.0, "PV2_9": 2.0,
			"PV2_3": 1e-3, "PV1_11": 4.0}),
		simple(values{"CTYPE1": "RA---ZPX", "CTYPE2": "DEC--ZPX",
			"WAT1_001": `wtype=zpx axtype=ra projp1=1. projp3=300.5 lngcor = "3. 2. 2. 1. 0 0 0 0 1e-3 2e-3 3e-3 0.04"`,
			"WAT2_001": `wtype=zpx axtype=dec projp1=1. projp3=300.5 latcor = "3. 1. 2. 1. 0 0 0 0 1e-3 2e-3"`}),
	} {
		swapped := values{}
		for k, x := range v {
			for _, stem := range []string{"CTYPE", "CRVAL", "CD", "PV", "WAT"} {
				if strings.HasPrefix(k, stem) {
					digit := k[len(stem)]
					k = k[:len(stem)] + string('1'+'2'-digit) + k[len(stem)+1:]
				}
			}
			swapped[k] = x
		}
		if swapped["CTYPE2"] != v["CTYPE1"] || swapped["CD2_1"] != -1e-4 {
			t.Fatal("the test's exchange is wrong")
		}
		a, b := mustRead(t, v), mustRead(t, swapped)
		c := mustRead(t, valuesOf(b.Cards()))
		for _, p := range [][2]float64{{1, 1}, {700, 800}, {3, 900}} {
			ra1, dec1, _ := a.PixelToSky(p[0], p[1])
			ra2, dec2, _ := b.PixelToSky(p[0], p[1])
			if ra1 != ra2 || dec1 != dec2 {
				t.Errorf("%v: pixel %v: (%v, %v) and (%v, %v)", v["CTYPE1"], p, ra1, dec1, ra2, dec2)
			}
			if ra3, dec3, _ := c.PixelToSky(p[0], p[1]); Separation(ra2, dec2, ra3, dec3) > 1e-13 {
				t.Errorf("%v: pixel %v: (%v, %v), by its own cards (%v, %v)", v["CTYPE1"], p, ra2, dec2, ra3, dec3)
			}
		}
	}
}

func TestInverseCloses(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 7))
	for n := range 300 {
		theta := rng.Float64() * 2 * math.Pi
		scale := math.Pow(10, -5+2*rng.Float64())
		s, c := math.Sincos(theta)
		parity := float64(1 - 2*rng.IntN(2))
		v := values{
			"CRPIX1": rng.Float64() * 4096, "CRPIX2": rng.Float64() * 4096,
			"CRVAL1": rng.Float64() * 360, "CRVAL2": math.Asin(2*rng.Float64()-1) * astro.Radian,
			"CD1_1": parity * scale * c, "CD1_2": -scale * s, "CD2_1": parity * scale * s, "CD2_2": scale * c,
		}
		if n%10 == 0 {
			v["CRVAL2"] = float64(90 - n%20*18)
		}
		code := projections[n%len(projections)].code
		if code == "ZPN" {
			v["PV2_1"], v["PV2_3"] = 1.0, 10*rng.NormFloat64()
		}
		v["CTYPE1"], v["CTYPE2"] = "RA---"+code, "DEC--"+code
		if code == "TAN" {
			v["CTYPE1"], v["CTYPE2"] = "RA---TAN-SIP", "DEC--TAN-SIP"
			v["A_ORDER"], v["B_ORDER"] = 3, 3
			for _, k := range []string{"A_2_0", "A_1_1", "A_0_2", "B_2_0", "B_1_1", "B_0_2"} {
				v[k] = rng.NormFloat64() * 1e-6
			}
			for _, k := range []string{"A_3_0", "A_2_1", "B_1_2", "B_0_3"} {
				v[k] = rng.NormFloat64() * 1e-10
			}
		}
		w := mustRead(t, v)
		for range 20 {
			x, y := rng.Float64()*4096, rng.Float64()*4096
			ra, dec, err := w.PixelToSky(x, y)
			if err != nil {
				continue // outside, which TestAgainstWCSLIB judges
			}
			x2, y2, err := w.SkyToPixel(ra, dec)
			// A place in the sky is known to about 1e-16 of a turn: where the
			// plane is stretched, or the projection is seen edge-on, that is more
			// of a pixel.
			tolerance := 1e-9 + 2e-13/scale
			if code == "SIN" || code == "ZEA" {
				tolerance *= 10
			}
			if d := math.Hypot(x2-x, y2-y); err != nil || d > tolerance {
				t.Errorf("%s, scale %.2g: pixel (%g, %g) comes back %.3g px off, error %v", code, scale, x, y, d, err)
			}
		}
	}
}

// TestFoldedDistortion: a place far outside, which the polynomial would fold
// back into the frame, has no pixel.
func TestFoldedDistortion(t *testing.T) {
	w := mustRead(t, simple(values{"CTYPE1": "RA---TAN-SIP", "CTYPE2": "DEC--TAN-SIP",
		"A_ORDER": 3, "B_ORDER": 3, "A_3_0": -1e-7, "B_0_3": -1e-7}))
	// u - 1e-7 u³ turns at u = 1826 and reaches 1217 px there.
	for _, u := range []float64{0, 500, 1100, 1210} {
		ra, dec, _ := mustRead(t, simple(nil)).PixelToSky(512.5+u, 400)
		x, _, err := w.SkyToPixel(ra, dec)
		if err != nil || math.Abs(x-512.5) > 1826 {
			t.Errorf("undistorted offset %g: x = %g, error %v", u, x, err)
		}
	}
	for _, u := range []float64{1230, 2000, 5000, -3000} {
		ra, dec, _ := mustRead(t, simple(nil)).PixelToSky(512.5+u, 400)
		if x, y, err := w.SkyToPixel(ra, dec); err != ErrOutside {
			t.Errorf("undistorted offset %g: pixel (%g, %g), error %v; want ErrOutside", u, x, y, err)
		}
	}
}

func TestOutside(t *testing.T) {
	w := mustRead(t, simple(nil))
	for _, p := range [][2]float64{{330, -2}, {150, -89}, {240.1, 0}, {math.NaN(), 0}, {0, math.NaN()},
		{math.Inf(1), 0}, {150, 91}, {1e300, 2}} {
		if x, y, err := w.SkyToPixel(p[0], p[1]); err != ErrOutside || !math.IsNaN(x) || !math.IsNaN(y) {
			t.Errorf("place %v: (%g, %g), %v; want ErrOutside", p, x, y, err)
		}
	}
	if ra, dec, err := w.PixelToSky(math.NaN(), 3); err != ErrOutside || !math.IsNaN(ra+dec) {
		t.Errorf("pixel NaN: (%g, %g), %v; want ErrOutside", ra, dec, err)
	}
}

func TestRowsAndGrids(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 1))
	for _, more := range []values{
		nil,
		{"CTYPE1": "RA---SIN", "CTYPE2": "DEC--SIN", "CD1_1": -0.1, "CD2_2": 0.1},
		{"A_ORDER": 4, "B_ORDER": 2, "A_4_0": 1e-12, "A_1_2": 3e-9, "B_0_2": 1e-5, "B_1_1": 2e-6, "B_0_0": 0.5},
		{"PV1_7": 0.3, "PV2_7": 0.2, "PV2_3": 0.001},
		{"CTYPE1": "RA---ZPN", "CTYPE2": "DEC--ZPN", "PV2_1": 1.0, "PV2_3": -40.0},
		{"CTYPE1": "RA---AIT", "CTYPE2": "DEC--AIT", "CD1_1": -0.2, "CD2_2": 0.2},
		{"CTYPE1": "RA---CAR", "CTYPE2": "DEC--CAR", "CD1_1": -0.2, "CD2_2": 0.2, "PV1_0": 1, "PV1_1": 3.0, "PV1_2": 20.0},
		{"RADESYS": "FK4", "EQUINOX": 1950.0, "MJD-OBS": 45000.0},
	} {
		w := mustRead(t, simple(more))
		const nx, ny = 37, 11
		ra, dec := make([]float64, nx*ny), make([]float64, nx*ny)
		x, y := make([]float64, nx*ny), make([]float64, nx*ny)
		outside := w.PixelToSkyGrid(ra, dec, nx, -3, 2.5, 31, 77.7)
		missing := 0
		for i := range ra {
			x[i], y[i] = -3+31*float64(i%nx), 2.5+77.7*float64(i/nx)
			r, d, err := w.PixelToSky(x[i], y[i])
			if err != nil {
				missing++
				if !math.IsNaN(ra[i]) || !math.IsNaN(dec[i]) {
					t.Errorf("%v: node %d is (%g, %g), want NaN", more, i, ra[i], dec[i])
				}
				continue
			}
			if astro.Separation(r, d, ra[i], dec[i]) > 1e-13 {
				t.Errorf("%v: node %d is (%v, %v), want (%v, %v)", more, i, ra[i], dec[i], r, d)
			}
		}
		if missing != outside {
			t.Errorf("%v: %d nodes reported outside, want %d", more, outside, missing)
		}
		ra2, dec2 := append([]float64(nil), x...), append([]float64(nil), y...)
		if n := w.PixelsToSky(ra2, dec2, ra2, dec2); n != missing {
			t.Errorf("%v: %d pixels outside, want %d", more, n, missing)
		}
		if n := w.SkyToPixels(ra2, dec2, ra2, dec2); n != missing {
			t.Errorf("%v: %d places outside, want %d", more, n, missing)
		}
		for i := range x {
			if !math.IsNaN(ra2[i]) && math.Hypot(ra2[i]-x[i], dec2[i]-y[i]) > 1e-7 {
				t.Errorf("%v: pixel (%g, %g) comes back as (%g, %g)", more, x[i], y[i], ra2[i], dec2[i])
			}
		}
		if n := testing.AllocsPerRun(5, func() {
			w.PixelToSkyRow(ra[:nx], dec[:nx], 1+rng.Float64(), 4)
			w.PixelToSkyGrid(ra, dec, nx, 1, 1, 8, 8)
			w.PixelsToSky(ra2, dec2, x, y)
			w.SkyToPixels(ra2, dec2, ra, dec)
		}); n != 0 {
			t.Errorf("%v: %g allocations, want none", more, n)
		}
	}
	mustRead(t, simple(nil)).PixelToSkyRow(nil, nil, 1, 1)
}

func TestConcurrentUse(t *testing.T) {
	w := mustRead(t, simple(values{"A_ORDER": 2, "B_ORDER": 2, "A_2_0": 1e-6}))
	var group sync.WaitGroup
	for g := range 4 {
		group.Go(func() {
			for i := range 500 {
				x := float64(i + g)
				ra, dec, _ := w.PixelToSky(x, 7)
				if x2, _, err := w.SkyToPixel(ra, dec); err != nil || math.Abs(x2-x) > 1e-8 {
					t.Errorf("x = %g comes back as %g, %v", x, x2, err)
				}
			}
		})
	}
	group.Wait()
}

func TestScaleAndOrientation(t *testing.T) {
	// North up, east left, then turned, mirrored and moved to the pole.
	for _, c := range []struct {
		cd     [2][2]float64
		angle  float64
		parity int
		scale  float64
	}{
		{[2][2]float64{{-1e-4, 0}, {0, 1e-4}}, 0, 1, 0.36},
		{[2][2]float64{{1e-4, 0}, {0, 1e-4}}, 0, -1, 0.36},
		{[2][2]float64{{0, 1e-4}, {1e-4, 0}}, 90, 1, 0.36}, // y points east
		{[2][2]float64{{1e-4, 0}, {0, -4e-4}}, 180, 1, 0.72},
	} {
		for _, dec := range []float64{0, 60, -89.9, 90} {
			w, err := NewTAN(100, 200, 359.9999, dec, c.cd)
			if err != nil {
				t.Fatal(err)
			}
			angle, parity, err := w.Orientation(100, 200)
			if dec != 90 && (err != nil || math.Abs(astro.Wrap180(angle-c.angle)) > 1e-5) {
				t.Errorf("dec %g, %v: position angle of y is %g, want %g", dec, c.cd, angle, c.angle)
			}
			if parity != c.parity || w.Parity() != c.parity {
				t.Errorf("dec %g, %v: parity %d and %d, want %d", dec, c.cd, parity, w.Parity(), c.parity)
			}
			scale, err := pixelScaleAt(w, 100, 200)
			if err != nil || math.Abs(scale-c.scale) > 1e-9 || math.Abs(w.PixelScale()-c.scale) > 1e-12 {
				t.Errorf("dec %g, %v: scale %g and %g, want %g", dec, c.cd, scale, w.PixelScale(), c.scale)
			}
		}
	}
	w := mustRead(t, simple(values{"A_ORDER": 2, "B_ORDER": 2, "A_1_0": 0.21, "A_2_0": 1e-4}))
	want, _ := pixelScaleAt(w, 512.5, 400)
	if math.Abs(w.PixelScale()-want) > 1e-7*want {
		t.Errorf("scale %g with SIP, want %g", w.PixelScale(), want)
	}
}

// pixelScaleAt is the side [arcsec] of a square as large as the pixel at (x,y).
func pixelScaleAt(w *WCS, x, y float64) (float64, error) {
	ex, nx, ey, ny, err := w.local(x, y)
	return math.Sqrt(math.Abs(ex*ny-ey*nx)) * astro.Radian * 3600, err
}

func TestShiftedAndClone(t *testing.T) {
	w := mustRead(t, simple(values{"A_ORDER": 2, "B_ORDER": 2, "A_2_0": 1e-6}))
	ra, dec, _ := w.PixelToSky(130, 90)
	ra2, dec2, _ := w.Clone().Shifted(100, 50).PixelToSky(30, 40)
	if ra != ra2 || dec != dec2 {
		t.Errorf("shifted: (%v, %v), want (%v, %v)", ra2, dec2, ra, dec)
	}
	if x, y := w.crpix[0], w.crpix[1]; x != 512.5 || y != 400 {
		t.Errorf("reference pixel (%g, %g) moved", x, y)
	}
}
