package supernova

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"nightsift/internal/outside"
)

func mag(b Band, phase float64) float64 {
	l, _ := b.Light(phase)
	return -2.5 * math.Log10(l)
}

// Facts of common practice about ordinary objects.
func TestTemplateFacts(t *testing.T) {
	for _, f := range []struct {
		name              string
		found, want, give float64
	}{
		{"rise in B [d]", peak[B].at, 19.5, 0.05},
		{"rise in V [d]", peak[V].at, 19.5, 0.05},
		{"Δm15 in B", B.DeltaM15(1), 1.10, 0.01},
		{"Δm15 in V", V.DeltaM15(1), 0.65, 0.01},
		{"B ten days before the maximum", mag(B, -10), 0.9, 0.1},
		{"B thirty days after the maximum", mag(B, 30), 2.6, 0.1},
		{"late slope in B [mag/d]", (mag(B, 70) - mag(B, 50)) / 20, 0.016, 0.002},
		{"Δm15 of stretch 0.9, 1.1 + 1.7 (1/s − 1)", B.DeltaM15(0.9), 1.29, 0.05},
		{"Δm15 of stretch 1.1", B.DeltaM15(1.1), 0.945, 0.05},
	} {
		if !(math.Abs(f.found-f.want) <= f.give) {
			t.Errorf("%s: %.3f, want %.3f ± %.3f", f.name, f.found, f.want, f.give)
		}
	}
	for _, b := range []Band{B, V} {
		if l, d := b.Light(-peak[b].at - 0.001); l != 0 || d != 0 {
			t.Errorf("%s: light before the explosion", Bands[b])
		}
		if l, d := b.Light(0); math.Abs(l-1) > 1e-12 || math.Abs(d) > 1e-9 {
			t.Errorf("%s: %v and slope %v at the maximum", Bands[b], l, d)
		}
		// ∝ τ² at first.
		early, _ := b.Light(1 - peak[b].at)
		twice, _ := b.Light(2 - peak[b].at)
		if math.Abs(twice/early-4) > 0.05 {
			t.Errorf("%s: light doubles in time by %.3f, want 4", Bands[b], twice/early)
		}
		for phase := -19.0; phase < 150; phase += 0.37 {
			l, d := b.Light(phase)
			if phase < -0.1 && d <= 0 || phase > 0.1 && d >= 0 {
				t.Errorf("%s: slope %v at phase %.1f", Bands[b], d, phase)
			}
			const h = 1e-5
			up, _ := b.Light(phase + h)
			down, _ := b.Light(phase - h)
			if math.Abs((up-down)/(2*h)-d) > 1e-7 {
				t.Errorf("%s: slope %v at phase %.1f, by differences %v", Bands[b], d, phase, (up-down)/(2*h))
			}
			if l <= 0 || l > 1 {
				t.Errorf("%s: light %v at phase %.1f", Bands[b], l, phase)
			}
		}
	}
	// The slower the brighter, and some 0.6 mag between Δm15 of 0.9 and 1.5.
	if d := RelativePeak(1.5) - RelativePeak(0.9); RelativePeak(1.1) != 0 || math.Abs(d-0.55) > 0.1 {
		t.Errorf("brightness from Δm15 0.9 to 1.5: %.3f", d)
	}
	for s := 0.75; s < 1.25; s += 0.05 {
		if RelativePeak(B.DeltaM15(s+0.05)) >= RelativePeak(B.DeltaM15(s)) {
			t.Errorf("stretch %.2f is not brighter than %.2f", s+0.05, s)
		}
	}
}

// object makes observations of an object every `every` days between two phases [d].
func object(r *rand.Rand, mjd, stretch, z, height, sigma, from, to, every, offset float64) []Observation {
	var list []Observation
	for k, f := range []string{"g", "r"} {
		for day := from; day < to; day += every {
			at := mjd + day + 0.1*float64(k)
			l, _ := Band(k).Light((at - mjd) / (stretch * (1 + z)))
			list = append(list, Observation{MJD: at, Filter: f, Flux: height*l*(1+0.5*float64(k)) + offset + sigma*r.NormFloat64(), Err: sigma})
		}
	}
	return list
}

func configured(z float64) Config {
	cfg := DefaultConfig()
	cfg.Redshift, cfg.ModelScatter, cfg.Bands = z, 0, map[string]Band{"g": B, "r": V}
	return cfg
}

func TestRecovery(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for _, c := range []struct {
		name               string
		height, from, to   float64
		offset             float64
		want               Verdict
		trials             int
		meanTime, meanMags float64 // largest mean pulls
	}{
		{"well covered", 100, -35, 60, 0, Fits, 80, 0.3, 0.3},
		{"to five days past the maximum", 100, -35, 6, 0, Fits, 80, 0.35, 0.35},
		{"baseline off within its error", 100, -35, 60, 3, Fits, 80, 0.3, 0.3},
	} {
		var pulls [4][]float64
		bad := 0
		for range c.trials {
			z := 0.1 * r.Float64()
			s := 1 + 0.1*r.NormFloat64()
			mjd := 61000 + 10*r.Float64()
			offset := c.offset * r.NormFloat64()
			cfg := configured(z)
			if c.offset > 0 {
				cfg.Offset = map[string]float64{"g": c.offset, "r": c.offset}
			}
			f := Fit(object(r, mjd, s, z, c.height, 4, c.from, c.to, 3, offset), cfg)
			if f.Verdict != c.want {
				bad++
				continue
			}
			pulls[0] = append(pulls[0], (f.MJD-mjd)/f.MJDErr)
			pulls[1] = append(pulls[1], (f.Stretch-s)/f.StretchErr)
			pulls[2] = append(pulls[2], (f.Peaks[0].Flux-c.height)/f.Peaks[0].Err)
			pulls[3] = append(pulls[3], (f.Peaks[1].Flux-1.5*c.height)/f.Peaks[1].Err)
		}
		if bad > c.trials/20 {
			t.Errorf("%s: %d of %d without the verdict %q", c.name, bad, c.trials, c.want)
		}
		for k, name := range []string{"date", "stretch", "height in g", "height in r"} {
			var sum, square float64
			for _, p := range pulls[k] {
				sum, square = sum+p, square+p*p
			}
			n := float64(len(pulls[k]))
			mean, spread := sum/n, math.Sqrt(square/n)
			t.Logf("%-32s %-12s mean pull %+.2f, spread %.2f", c.name, name, mean, spread)
			if math.Abs(mean) > c.meanTime || math.Abs(spread-1) > 0.3 {
				t.Errorf("%s: %s: mean pull %+.2f, spread %.2f", c.name, name, mean, spread)
			}
		}
	}
}

func TestVerdicts(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 8))
	check := func(name string, list []Observation, want ...Verdict) {
		t.Helper()
		f := Fit(list, configured(0.05))
		for _, w := range want {
			if f.Verdict == w {
				return
			}
		}
		t.Errorf("%s: %q (%s), want %q", name, f.Verdict, f.Reason, want)
	}
	check("nothing", nil, TooFew)
	check("noise", object(r, 61000, 1, 0.05, 0, 4, -35, 60, 3, 0), TooFew, NoSource)
	check("three points", object(r, 61000, 1, 0.05, 100, 4, -3, 0, 3, 0)[:1], TooFew)
	check("only after the maximum", object(r, 61000, 1, 0.05, 100, 4, 12, 60, 3, 0), NoRise)
	check("only the rise", object(r, 61000, 1, 0.05, 100, 4, -35, -6, 2, 0), StillRises)
	var variable, nova []Observation
	for day := 0.0; day < 90; day += 3 {
		variable = append(variable, Observation{MJD: 61000 + day, Filter: "g", Flux: 60 + 40*math.Sin(day/4) + 4*r.NormFloat64(), Err: 4})
		flux := 4 * r.NormFloat64()
		if day >= 30 {
			flux += 100 * math.Exp(-(day-30)/5)
		}
		nova = append(nova, Observation{MJD: 61000 + day, Filter: "g", Flux: flux, Err: 4})
	}
	check("a variable", variable, Rejected)
	check("a sudden rise and a fast decline", nova, Rejected)
	bad := []Observation{{MJD: math.NaN(), Flux: 1, Err: 1}, {MJD: 1, Flux: math.Inf(1), Err: 1}, {MJD: 1, Flux: 1, Err: 0}, {MJD: 1, Flux: 1, Err: math.NaN()}}
	check("nothing finite", bad, TooFew)
	check("beside what is not finite", append(bad, object(r, 61000, 1, 0.05, 100, 4, -35, 60, 3, 0)...), Fits)
}

func TestAbsoluteMagnitude(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 9))
	z := 0.05
	cfg := configured(z)
	height := math.Pow(10, -0.4*(StandardPeak+cfg.Cosmology.Modulus(z)-25))
	f := Fit(object(r, 61000, 1, z, height/1.5, height/100, -35, 60, 3, 0), cfg)
	if math.Abs(f.Absolute-StandardPeak) > 0.03 || math.Abs(f.Expected-StandardPeak) > 0.05 {
		t.Errorf("absolute %.3f, expected %.3f, want %.2f", f.Absolute, f.Expected, StandardPeak)
	}
}

// scipy, with the template's formula written down once more, finds the same minimum.
func TestAgainstScipy(t *testing.T) {
	const script = `
import json, sys
import numpy as np
from scipy.optimize import least_squares, minimize_scalar
d = json.load(open(sys.argv[1]))
shapes = {0: (20.312, 2.2233, .07089, 15.741, 6.363, 70), 1: (21.273, 2.6159, .46567, 29.609, 9.857, 32.596)}
def raw(tau, p):
    a, b, w, c, k, T = p
    tau = np.maximum(tau, 0)
    return (tau/19.5)**2*np.exp(-(tau/a)**b) + w*(1-np.exp(-(tau/c)**k))*np.exp(-tau/T)
out = []
peaks = {b: minimize_scalar(lambda t: -raw(t, p), bounds=(14, 25), method="bounded", options={"xatol": 1e-10}) for b, p in shapes.items()}
for case in d:
    o = case["Points"]
    mjd, flux, err = (np.array([q[k] for q in o]) for k in ("MJD", "Flux", "Err"))
    band = np.array([{"g": 0, "r": 1}[q["Filter"]] for q in o])
    def res(x):
        m = np.zeros(len(o))
        for b in (0, 1):
            u = band == b
            ph = (mjd[u]-x[0])/(x[1]*(1+case["Z"]))
            m[u] = x[2+b]*raw(ph+peaks[b].x, shapes[b])/-peaks[b].fun
        return np.append((flux-m)/err, (x[1]-1)/0.1)
    s = least_squares(res, [case["MJD"]+3, 0.95, 80, 80], xtol=1e-14, ftol=1e-14, gtol=1e-14)
    cov = np.linalg.inv(s.jac.T @ s.jac)
    out.append(list(s.x) + list(np.sqrt(np.diag(cov))) + [2*s.cost])
print(json.dumps(out))
`
	type sample struct {
		Z, MJD float64
		Points []Observation
	}
	r := rand.New(rand.NewPCG(6, 1))
	var list []sample
	for range 8 {
		z := 0.1 * r.Float64()
		// Within the phases that take part, so that both fit the same points.
		list = append(list, sample{z, 61000, object(r, 61000, 1+0.1*r.NormFloat64(), z, 100, 5, -25, 50, 4, 0)})
	}
	data, err := json.Marshal(list)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "data.json")
	if err := os.WriteFile(path, data, 0o644); err != nil {
		t.Fatal(err)
	}
	var want [][]float64
	if err := json.Unmarshal(outside.Python(t, script, path), &want); err != nil {
		t.Fatal(err)
	}
	if len(want) != len(list) {
		t.Fatalf("scipy gave %d fits, want %d", len(want), len(list))
	}
	for i, s := range list {
		f := Fit(s.Points, configured(s.Z))
		if len(f.Peaks) != 2 {
			t.Fatalf("%+v", f)
		}
		got := []float64{f.MJD, f.Stretch, f.Peaks[0].Flux, f.Peaks[1].Flux, f.MJDErr, f.StretchErr, f.Peaks[0].Err, f.Peaks[1].Err, f.Chi2}
		for k, g := range got {
			// Values to a hundredth of their errors, errors to 1 %.
			give := 0.01 * math.Abs(want[i][k])
			if k < 4 {
				give = 0.01 * want[i][4+k]
			}
			if k == 8 {
				give = 1e-3
			}
			if !(math.Abs(g-want[i][k]) < give) {
				t.Errorf("fit %d, number %d: %v, scipy %v", i, k, g, want[i][k])
			}
		}
	}
}
