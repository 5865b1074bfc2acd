package controltime

import (
	"encoding/json"
	"fmt"
	"math"
	"testing"

	"nightsift/internal/cosmology"
	"nightsift/internal/outside"
	"nightsift/internal/supernova"
)

// hat is seen at its maximum from phase -10 to 20 and not else.
var hat = Template{First: -10, Last: 20, Light: func(p float64) float64 {
	if p >= -10 && p <= 20 {
		return 1
	}
	return 0
}}

func stepAt(limit, plateau float64) func(float64) float64 {
	return func(m float64) float64 {
		if m <= limit {
			return plateau
		}
		return 0
	}
}

// Closed forms: an object seen for 30 days.
func TestClosedForms(t *testing.T) {
	visit := func(mjd, plateau float64) Visit { return Visit{mjd, stepAt(21, plateau)} }
	for _, c := range []struct {
		name   string
		visits []Visit
		needed int
		peak   float64
		z      float64
		want   float64
	}{
		{"one visit", []Visit{visit(100, 1)}, 1, 20, 0, 30},
		{"too faint", []Visit{visit(100, 1)}, 1, 21.5, 0, 0},
		{"half efficient", []Visit{visit(100, 0.5)}, 1, 20, 0, 15},
		{"slowed by redshift", []Visit{visit(100, 1)}, 1, 20, 0.5, 45},
		{"far apart", []Visit{visit(100, 1), visit(300, 1), visit(200, 1)}, 1, 20, 0, 90},
		{"overlapping", []Visit{visit(110, 1), visit(100, 1)}, 1, 20, 0, 40},
		{"twice in one night", []Visit{visit(100, 0.5), visit(100, 0.5)}, 1, 20, 0, 22.5},
		{"two needed", []Visit{visit(100, 1), visit(110, 1)}, 2, 20, 0, 20},
		{"two of three needed", []Visit{visit(100, 0.5), visit(100, 0.5), visit(100, 0.5)}, 2, 20, 0, 15},
		{"none", nil, 1, 20, 0, 0},
	} {
		got := NewWatch(c.visits, c.needed).ForPeak(Object{hat, 1}, c.peak, c.z)
		if math.Abs(got-c.want) > 0.5 {
			t.Errorf("%s: %.2f days, want %.2f", c.name, got, c.want)
		}
	}
}

// Everything once more in Python with astropy's cosmology and scipy's integrals,
// from a table of the template.
func TestAgainstAstropy(t *testing.T) {
	var phases, light []float64
	for p := -25.0; p <= 120; p += 0.05 {
		l, _ := supernova.B.Light(p)
		phases, light = append(phases, p), append(light, l)
	}
	table, err := json.Marshal([][]float64{phases, light})
	if err != nil {
		t.Fatal(err)
	}
	script := fmt.Sprintf(`
import json
import numpy as np
from astropy.cosmology import FlatLambdaCDM
from scipy.stats import norm
phases, light = np.array(json.loads('%s'))
c = FlatLambdaCDM(H0=70, Om0=0.3, Tcmb0=0)
visits, limits = np.array([0., 5., 9., 40., 200.]), np.array([20.5, 21.0, 19.8, 20.9, 21.3])
def T(z):
    t0 = np.arange(-250, 400, 0.1)
    missed = np.ones_like(t0)
    for v, l in zip(visits, limits):
        L = np.interp((v-t0)/(1+z), phases, light, left=0, right=0)
        m = np.where(L > 0, -19.5 + c.distmod(z).value - 2.5*np.log10(np.where(L > 0, L, 1)), 99)
        missed *= 1 - 0.95*norm.cdf((l-m)/0.3)
    return np.sum(1-missed)*0.1
zs = np.linspace(0, 0.3, 61)[1:]
f = [2.5e-5*(1+z)**0.7*T(z)/365.25/(1+z)*c.differential_comoving_volume(z).value for z in zs]
f = np.array([0]+f)
print(json.dumps([T(0.05), T(0.15), T(0.25), 0.01*np.trapezoid(f, dx=0.005) if hasattr(np, 'trapezoid') else 0.01*np.trapz(f, dx=0.005)]))
`, table)
	var want []float64
	if err := json.Unmarshal(outside.Python(t, script), &want); err != nil {
		t.Fatal(err)
	}
	var visits []Visit
	limits := []float64{20.5, 21.0, 19.8, 20.9, 21.3}
	for i, mjd := range []float64{0, 5, 9, 40, 200} {
		visits = append(visits, Visit{mjd, func(m float64) float64 { return 0.95 * 0.5 * math.Erfc((m-limits[i])/0.3/math.Sqrt2) }})
	}
	w, k, c := NewWatch(visits, 1), TypeIa(supernova.StandardPeak, 0), cosmology.Default()
	k.Fainter[0] = 0 // the reference has no relation of width and brightness
	got := []float64{w.AtRedshift(k, c, 0.05), w.AtRedshift(k, c, 0.15), w.AtRedshift(k, c, 0.25), w.InVolume(k, c, 0.01, 0.3, 2.5e-5, 0.7, 60)}
	for i := range want {
		if math.Abs(got[i]/want[i]-1) > 0.002 {
			t.Errorf("number %d: %.5f, reference %.5f", i, got[i], want[i])
		}
	}
}

// Facts of common practice: about 20 days of rise, maximum at about -19.5, the
// slower the brighter; and one event in 500 years in a galaxy is two in a year of
// a thousand galaxies that are watched all the time.
func TestTypeIaFacts(t *testing.T) {
	k := TypeIa(supernova.StandardPeak, 0.1)
	share, width := 0.0, 0.0
	for i, s := range k.Stretches {
		share += k.Shares[i]
		width += k.Shares[i] * (s - 1) * (s - 1)
		if i > 0 && !(k.Fainter[i] < k.Fainter[i-1]) {
			t.Errorf("stretch %.2f is not brighter than %.2f", s, k.Stretches[i-1])
		}
	}
	if math.Abs(share-1) > 1e-9 || math.Abs(math.Sqrt(width)-0.1) > 1e-3 {
		t.Errorf("shares sum to %g, the stretch spreads by %g", share, math.Sqrt(width))
	}
	first := 0.0
	for p := -25.0; p < 0; p += 0.01 {
		if k.Template.Light(p) > 0 {
			first = p
			break
		}
	}
	if first < -21 || first > -18 {
		t.Errorf("rise of %.1f days", -first)
	}
	var visits []Visit
	for d := range 366 {
		visits = append(visits, Visit{float64(d), stepAt(25, 1)})
	}
	if n := NewWatch(visits, 1).InGalaxies(k, cosmology.Default(), 0.01, 1000, 1.0/500); n < 2 || n > 3.3 {
		t.Errorf("%.2f events in a thousand galaxies watched for a year", n)
	}
}
