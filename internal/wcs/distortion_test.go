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

// TestAsTPV: the same places, also by WCSLIB from the cards of the TPV.
func TestAsTPV(t *testing.T) {
	rng := rand.New(rand.NewPCG(31, 2))
	type file struct {
		Header values    `json:"header"`
		X      []float64 `json:"x"`
		Y      []float64 `json:"y"`
	}
	var files []file
	var sky [][2][]float64
	for order := 2; order <= 7; order++ {
		w := distorted(t, 359.9, -60+20*float64(order), order, rng)
		w.distortion.a.c[0][0], w.distortion.b.c[1][0] = 0.3, 1e-3 // terms that a fit does not have
		p, err := w.AsTPV()
		if err != nil {
			t.Fatal(err)
		}
		if p.Projection() != "TPV" || p.SIPOrder() != 0 {
			t.Errorf("order %d: projection %s with SIP of order %d", order, p.Projection(), p.SIPOrder())
		}
		x, y, ra, dec := scatter(t, w, 200, rng)
		for i := range x {
			r, d, err := p.PixelToSky(x[i], y[i])
			if s := Separation(r, d, ra[i], dec[i]); err != nil || s > 1e-12 {
				t.Errorf("order %d: pixel (%g, %g) moves by %.3g deg, %v", order, x[i], y[i], s, err)
			}
			px, py, err := p.SkyToPixel(ra[i], dec[i])
			if e := math.Hypot(px-x[i], py-y[i]); err != nil || e > 1e-8 {
				t.Errorf("order %d: pixel (%g, %g) comes back %.3g px off, %v", order, x[i], y[i], e, err)
			}
		}
		files = append(files, file{valuesOf(p.Cards()), x, y})
		sky = append(sky, [2][]float64{ra, dec})
	}
	in, err := json.Marshal(files)
	if err != nil {
		t.Fatal(err)
	}
	name := filepath.Join(t.TempDir(), "cards.json")
	if err := os.WriteFile(name, in, 0o644); err != nil {
		t.Fatal(err)
	}
	var got [][2][]float64
	out := outside.Python(t, `
import json, sys
import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
out = []
for d in json.load(open(sys.argv[1])):
    h = fits.Header()
    h.update(d["header"])
    sky = WCS(h).all_pix2world(np.array([d["x"], d["y"]]).T, 1)
    out.append([list(sky[:, 0]), list(sky[:, 1])])
json.dump(out, sys.stdout)
`, name)
	if err := json.Unmarshal(out, &got); err != nil {
		t.Fatal(err)
	}
	if len(got) != len(sky) {
		t.Fatalf("%d lists of places, want %d", len(got), len(sky))
	}
	for k := range sky {
		for i := range sky[k][0] {
			if s := Separation(sky[k][0][i], sky[k][1][i], got[k][0][i], got[k][1][i]); s > 1e-11 {
				t.Errorf("order %d: WCSLIB reads our TPV %.3g deg off", k+2, s)
			}
		}
	}
}

func TestAsTPVRefuses(t *testing.T) {
	plain := mustRead(t, simple(nil))
	if p, err := plain.AsTPV(); p != plain || err != nil {
		t.Errorf("a WCS without distortion: %v, %v; want itself", p, err)
	}
	for want, more := range map[string]values{
		"order 8":  {"A_ORDER": 8, "B_ORDER": 2, "A_8_0": 1e-30},
		"gnomonic": {"CTYPE1": "RA---ZEA-SIP", "CTYPE2": "DEC--ZEA-SIP", "A_ORDER": 2, "B_ORDER": 2, "A_2_0": 1e-7},
	} {
		if p, err := mustRead(t, simple(more)).AsTPV(); p != nil || err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v: %v, %v; want an error that says %q", more, p, err, want)
		}
	}
}
