package efficiency

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// draws makes trials of a known curve, magnitudes even over the range.
func draws(c *Curve, n int, from, to float64, random *rand.Rand) (mag []float64, found []bool) {
	for i := range n {
		m := from + (to-from)*(float64(i)+random.Float64())/float64(n)
		mag, found = append(mag, m), append(found, random.Float64() < c.At(m))
	}
	return mag, found
}

// The likelihood is written down once more in Python and maximised by scipy.
func TestFitAgainstScipy(t *testing.T) {
	truth := &Curve{Form: FormProbit, Plateau: 0.93, Middle: 20.4, Width: 0.3}
	mag, found := draws(truth, 400, 18, 21.4, rand.New(rand.NewPCG(5, 6)))
	data, err := json.Marshal([]any{mag, found})
	if err != nil {
		t.Fatal(err)
	}
	script := fmt.Sprintf(`
import json
import numpy as np
from scipy.optimize import minimize
from scipy.stats import norm
mag, found = map(np.array, json.loads(%q))
forms = {
    'probit_flux': lambda m, m0, w: norm.cdf((10**(-0.4*(m-m0)) - 1) / (w*np.log(10)/2.5)),
    'probit': lambda m, m0, w: norm.cdf((m0-m)/w),
    'logistic': lambda m, m0, w: 1/(1+np.exp((m-m0)/(0.6*w))),
}
out = {}
for name, f in forms.items():
    def minus(p):
        A, m0, w = 1/(1+np.exp(-p[0])), p[1], np.exp(p[2])
        e = np.clip(A*f(mag, m0, w), 1e-9, 1-1e-9)
        return -(np.sum(np.where(found, np.log(e), np.log1p(-e))) + 0.5*(np.log(A)+np.log(1-A)) - 0.5*((p[2]-np.log(0.28))/0.7)**2)
    r = minimize(minus, [2.0, 20.2, np.log(0.3)], method='Nelder-Mead', options=dict(xatol=1e-9, fatol=1e-11, maxiter=20000, maxfev=20000))
    out[name] = [1/(1+np.exp(-r.x[0])), r.x[1], np.exp(r.x[2]), -r.fun]
print(json.dumps(out))
`, strings.ReplaceAll(string(data), "\n", ""))
	var want map[Form][]float64
	if err := json.Unmarshal(outside.Python(t, script), &want); err != nil {
		t.Fatal(err)
	}
	for _, form := range Forms {
		c, l := fitForm(form, mag, found)
		if c == nil {
			t.Fatalf("%s: no fit", form)
		}
		for i, g := range []float64{c.Plateau, c.Middle, c.Width, l} {
			if w := want[form][i]; math.Abs(g-w) > 2e-4*(1+math.Abs(w)) {
				t.Errorf("%s, number %d: %.6f, scipy %.6f", form, i, g, w)
			}
		}
	}
}

// Over many draws the limits scatter as their errors say. The mean over three
// forms is off by a part of the error where the truth is the one at the edge: by
// 0.4 of it (600 draws) for the limit of one half of a threshold in flux.
func TestErrorsOfTheLimits(t *testing.T) {
	for number, form := range Forms {
		truth := &Curve{Form: form, Plateau: 0.96, Middle: 20, Width: 0.26}
		random := rand.New(rand.NewPCG(11, uint64(number)))
		const trials = 250
		var pulls50, pulls90 []float64
		for range trials {
			mag, found := draws(truth, 300, 17.5, 20.9, random)
			c := FitCurve(mag, found)
			if c == nil {
				t.Fatal("no fit")
			}
			pulls50 = append(pulls50, (c.Mag50-truth.magAt(0.5))/c.Mag50Err)
			if !math.IsNaN(c.Mag90) {
				pulls90 = append(pulls90, (c.Mag90-truth.magAt(0.9))/c.Mag90Err)
			}
		}
		for what, pulls := range map[string][]float64{"one half": pulls50, "nine tenths": pulls90} {
			most := 0.55
			if what == "nine tenths" {
				most = 0.7
			}
			mean, square := 0.0, 0.0
			for _, p := range pulls {
				mean += p / float64(len(pulls))
				square += p * p / float64(len(pulls))
			}
			spread := math.Sqrt(square - mean*mean)
			if len(pulls) < trials*9/10 || math.Abs(mean) > most || spread < 0.75 || spread > 1.3 {
				t.Errorf("%s, limit of %s: %d fits, pulls of mean %+.2f and spread %.2f, want 0 and 1", form, what, len(pulls), mean, spread)
			}
		}
	}
}

func TestFitOfTooLittle(t *testing.T) {
	if FitCurve(nil, nil) != nil {
		t.Error("a curve from nothing")
	}
	if FitCurve([]float64{20, 21}, []bool{true, true}) != nil || FitCurve([]float64{20, 21}, []bool{false, false}) != nil {
		t.Error("a curve though all met the same fate")
	}
	// A clean step: the width is what was known before, and all is finite.
	c := FitCurve([]float64{19, 19.5, 20, 20.5, 21, 21.5}, []bool{true, true, true, false, false, false})
	if c == nil || math.Abs(c.Mag50-20.25) > 0.3 || !(c.Mag50Err > 0.05 && c.Mag50Err < 1) {
		t.Errorf("of a clean step: %+v", c)
	}
	// Wrong way round: no curve is as good as a flat one, none is not finite.
	if c := FitCurve([]float64{19, 19.5, 20, 20.5}, []bool{false, false, true, true}); c != nil && (math.IsNaN(c.Middle) || math.IsInf(c.Middle, 0)) {
		t.Errorf("of an inverted step: %+v", c)
	}
}

func TestLimitsBeyondThePlateau(t *testing.T) {
	c := &Curve{Form: FormLogistic, Plateau: 0.7, Middle: 20, Width: 0.3}
	if !math.IsNaN(c.magAt(0.9)) {
		t.Error("nine tenths are found though the plateau is at seven")
	}
	if m := c.magAt(0.5); math.Abs(c.At(m)-0.5) > 1e-9 {
		t.Errorf("at the limit of one half the curve is %g", c.At(m))
	}
}
