package wcs

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// distorted is a TAN-SIP WCS over a frame of 4096 × 3000 px with terms of about
// 8 px at the edge.
func distorted(t testing.TB, lon, lat float64, order int, rng *rand.Rand) *WCS {
	v := values{
		"CTYPE1": "RA---TAN-SIP", "CTYPE2": "DEC--TAN-SIP", "CRPIX1": 2048.5, "CRPIX2": 1500.5,
		"CRVAL1": lon, "CRVAL2": lat, "CD1_1": -1.4e-4, "CD1_2": 0.9e-4, "CD2_1": 0.9e-4, "CD2_2": 1.4e-4,
		"A_ORDER": order, "B_ORDER": order,
	}
	for p := 0; p <= order; p++ {
		for q := 0; p+q <= order; q++ {
			if p+q >= 2 {
				scale := 8 / math.Pow(2048, float64(p+q))
				v["A_"+string(rune('0'+p))+"_"+string(rune('0'+q))] = scale * rng.NormFloat64()
				v["B_"+string(rune('0'+p))+"_"+string(rune('0'+q))] = scale * rng.NormFloat64()
			}
		}
	}
	return mustRead(t, v)
}

func scatter(t testing.TB, w *WCS, n int, rng *rand.Rand) (x, y, ra, dec []float64) {
	for range n {
		px, py := 0.5+4096*rng.Float64(), 0.5+3000*rng.Float64()
		r, d, err := w.PixelToSky(px, py)
		if err != nil {
			t.Fatal(err)
		}
		x, y, ra, dec = append(x, px), append(y, py), append(ra, r), append(dec, d)
	}
	return
}

func TestFitRecovers(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 5))
	worst := 0.0
	for _, place := range [][2]float64{{150, 2}, {0.01, -40}, {20, 89.9}, {200, -90}, {359.999, 60}} {
		for order := 1; order <= 5; order++ {
			truth := distorted(t, place[0], place[1], order, rng)
			x, y, ra, dec := scatter(t, truth, 200, rng)
			w, rms, err := FitTANSIP(x, y, ra, dec, nil, 4096, 3000, order)
			if err != nil {
				t.Fatalf("%v order %d: %v", place, order, err)
			}
			if rms > 1e-7 {
				t.Errorf("%v order %d: rms %g px of perfect places", place, order, rms)
			}
			if want := order; order > 1 && w.SIPOrder() != want || order == 1 && w.SIPOrder() != 0 {
				t.Errorf("%v order %d: fitted order %d", place, order, w.SIPOrder())
			}
			again := mustRead(t, valuesOf(w.Cards()))
			for _, p := range [][2]float64{{0.5, 0.5}, {4096.5, 3000.5}, {1, 3000}, {2048, 1500}, {3000, 10}} {
				r, d, err := truth.PixelToSky(p[0], p[1])
				if err != nil {
					t.Fatal(err)
				}
				px, py, err := w.SkyToPixel(r, d)
				if err != nil {
					t.Fatalf("%v order %d: %v", place, order, err)
				}
				worst = max(worst, math.Hypot(px-p[0], py-p[1]))
				if qx, qy, err := again.SkyToPixel(r, d); err != nil || math.Hypot(px-qx, py-qy) > 1e-9 {
					t.Errorf("%v order %d: written and read, (%g, %g) moves to (%g, %g), %v", place, order, px, py, qx, qy, err)
				}
			}
		}
	}
	if worst > 1e-6 {
		t.Errorf("%.3g px from the known distortion, want 1e-6", worst)
	}
	t.Logf("at most %.2g px from the known distortion", worst)
}

// TestFitNoise: with noisy pixels the rms is the noise of one axis, less the
// fit's freedom, and weights decide.
func TestFitNoise(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 9))
	truth := distorted(t, 80, -30, 3, rng)
	x, y, ra, dec := scatter(t, truth, 3000, rng)
	weight := make([]float64, len(x))
	for i := range x {
		sigma := 0.02
		if i%3 == 0 {
			sigma = 0.5
		}
		if i%50 == 1 { // outliers of no weight
			x[i] += 300
			continue
		}
		weight[i] = 1 / (sigma * sigma)
		x[i] += sigma * rng.NormFloat64()
		y[i] += sigma * rng.NormFloat64()
	}
	w, rms, err := FitTANSIP(x, y, ra, dec, weight, 4096, 3000, 3)
	if err != nil {
		t.Fatal(err)
	}
	var sum float64
	used := 0.0
	for _, v := range weight {
		sum += v
		if v > 0 {
			used++
		}
	}
	// The weighted mean of residual² is the number of stars over the sum of the
	// weights; 10 terms for each axis take their part.
	want := math.Sqrt((used - 10) / sum)
	if math.Abs(rms/want-1) > 0.05 {
		t.Errorf("rms %g px, want %g", rms, want)
	}
	worst := 0.0
	for j := 1.0; j < 3000; j += 500 {
		for i := 1.0; i < 4096; i += 500 {
			r, d, _ := truth.PixelToSky(i, j)
			px, py, err := w.SkyToPixel(r, d)
			if err != nil {
				t.Fatal(err)
			}
			worst = max(worst, math.Hypot(px-i, py-j))
		}
	}
	// 2000 good stars of 0.02 px determine 10 terms to about 0.02·√(10/2000) in
	// the mean and some times that in the corners.
	if worst > 0.012 {
		t.Errorf("fitted WCS is up to %g px from the truth", worst)
	}
}

func TestFitFewOrPoorStars(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	truth := distorted(t, 80, -30, 2, rng)
	x, y, ra, dec := scatter(t, truth, 40, rng)
	for _, c := range []struct{ n, order, want int }{
		{3, 3, 0}, {8, 2, 0}, {9, 2, 2}, {14, 5, 2}, {15, 5, 3}, {40, 5, 5},
	} {
		w, _, err := FitTANSIP(x[:c.n], y[:c.n], ra[:c.n], dec[:c.n], nil, 4096, 3000, c.order)
		if err != nil || w.SIPOrder() != c.want {
			t.Errorf("%d stars, order %d: fitted order %d, error %v; want order %d", c.n, c.order, w.SIPOrder(), err, c.want)
		}
	}
	// Stars crowded in a corner do not determine high orders.
	for i := range x {
		x[i], y[i] = 4000+x[i]/100, 2900+y[i]/100
		ra[i], dec[i], _ = truth.PixelToSky(x[i], y[i])
	}
	w, rms, err := FitTANSIP(x, y, ra, dec, nil, 4096, 3000, 5)
	if err != nil || w.SIPOrder() > 2 || rms > 0.01 {
		t.Errorf("crowded stars: order %d, rms %g, error %v; want order at most 2", w.SIPOrder(), rms, err)
	}
	for name, spoil := range map[string]func(x, y, ra, dec, weight []float64){
		"in a line":      func(x, y, ra, dec, weight []float64) { copy(y, x); truth.PixelsToSky(ra, dec, x, y) },
		"too few":        func(x, y, ra, dec, weight []float64) { clear(weight[2:]) },
		"at one point":   func(x, y, ra, dec, weight []float64) { fill(x, 5); fill(y, 5) },
		"at one place":   func(x, y, ra, dec, weight []float64) { fill(ra, 5); fill(dec, 5) },
		"all over":       func(x, y, ra, dec, weight []float64) { ra[0] += 180; dec[0] = -dec[0] },
		"NaN":            func(x, y, ra, dec, weight []float64) { x[3] = math.NaN() },
		"no declination": func(x, y, ra, dec, weight []float64) { dec[3] = 100 },
		"bad weight":     func(x, y, ra, dec, weight []float64) { weight[3] = -1 },
	} {
		x, y, ra, dec := scatter(t, truth, 30, rng)
		weight := make([]float64, 30)
		fill(weight, 1)
		spoil(x, y, ra, dec, weight)
		if w, _, err := FitTANSIP(x, y, ra, dec, weight, 4096, 3000, 2); err == nil || !strings.HasPrefix(err.Error(), "wcs: ") {
			t.Errorf("stars %s: WCS %v, error %v; want an error", name, w, err)
		}
	}
}

func fill(s []float64, v float64) {
	for i := range s {
		s[i] = v
	}
}

// TestOthersReadCards: astropy finds the same places by the cards of a fitted
// WCS, and the inverse polynomials, which it uses, are good to 0.01 px.
func TestOthersReadCards(t *testing.T) {
	rng := rand.New(rand.NewPCG(21, 6))
	truth := distorted(t, 359.9, 33, 3, rng)
	x, y, ra, dec := scatter(t, truth, 100, rng)
	w, _, err := FitTANSIP(x, y, ra, dec, nil, 4096, 3000, 3)
	if err != nil {
		t.Fatal(err)
	}
	in, err := json.Marshal(map[string]any{"header": valuesOf(w.Cards()), "x": x, "y": y})
	if err != nil {
		t.Fatal(err)
	}
	file := filepath.Join(t.TempDir(), "cards.json")
	if err := os.WriteFile(file, in, 0o644); err != nil {
		t.Fatal(err)
	}
	var got struct{ RA, Dec, X, Y []float64 }
	out := outside.Python(t, `
import json, sys
import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
d = json.load(open(sys.argv[1]))
h = fits.Header()
for k, v in d["header"].items():
    h[k] = v
w = WCS(h)
pix = np.array([d["x"], d["y"]]).T
sky = w.all_pix2world(pix, 1)
back = w.sip_foc2pix(w.wcs_world2pix(sky, 1) - w.wcs.crpix, 1) # takes offsets, gives pixels
json.dump({"ra": list(sky[:, 0]), "dec": list(sky[:, 1]), "x": list(back[:, 0]), "y": list(back[:, 1])}, sys.stdout)
`, file)
	if err := json.Unmarshal(out, &got); err != nil {
		t.Fatal(err)
	}
	if len(got.RA) != len(x) {
		t.Fatalf("%d places, want %d", len(got.RA), len(x))
	}
	for i := range x {
		r, d, err := w.PixelToSky(x[i], y[i])
		if err != nil || Separation(r, d, got.RA[i], got.Dec[i]) > 1e-11 {
			t.Errorf("pixel (%g, %g): (%v, %v), %v; astropy (%v, %v)", x[i], y[i], r, d, err, got.RA[i], got.Dec[i])
		}
		if e := math.Hypot(got.X[i]-x[i], got.Y[i]-y[i]); e > 0.01 {
			t.Errorf("pixel (%g, %g): the inverse polynomials miss it by %g px", x[i], y[i], e)
		}
	}
}

func BenchmarkPixelToSkyRow(b *testing.B) {
	w := distorted(b, 150, 2, 3, rand.New(rand.NewPCG(1, 1)))
	ra, dec := make([]float64, 4096), make([]float64, 4096)
	for b.Loop() {
		w.PixelToSkyRow(ra, dec, 1, 77)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/4096, "ns/px")
}

func BenchmarkSkyToPixels(b *testing.B) {
	w := distorted(b, 150, 2, 3, rand.New(rand.NewPCG(1, 1)))
	ra, dec := make([]float64, 4096), make([]float64, 4096)
	x, y := make([]float64, 4096), make([]float64, 4096)
	w.PixelToSkyRow(ra, dec, 1, 77)
	for b.Loop() {
		w.SkyToPixels(x, y, ra, dec)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/4096, "ns/px")
}

func BenchmarkProjections(b *testing.B) {
	for i := range projections {
		code := projections[i].code
		more := values{"CTYPE1": "RA---" + code, "CTYPE2": "DEC--" + code}
		if code == "ZPN" {
			more["PV2_1"], more["PV2_3"] = 1.0, 42.0
		}
		w := mustRead(b, simple(more))
		b.Run(code, func(b *testing.B) {
			ra, dec := make([]float64, 4096), make([]float64, 4096)
			x, y := make([]float64, 4096), make([]float64, 4096)
			b.ReportAllocs()
			for b.Loop() {
				w.PixelToSkyRow(ra, dec, 1, 77)
				w.SkyToPixels(x, y, ra, dec)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/4096, "ns/px")
		})
	}
}

func BenchmarkFitTANSIP(b *testing.B) {
	rng := rand.New(rand.NewPCG(1, 1))
	x, y, ra, dec := scatter(b, distorted(b, 150, 2, 3, rng), 2000, rng)
	for b.Loop() {
		if _, _, err := FitTANSIP(x, y, ra, dec, nil, 4096, 3000, 3); err != nil {
			b.Fatal(err)
		}
	}
}
