package robust

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Constant values with known errors and scatter among strays: the centre must
// be right within its error, trial by trial, also where strays are the more.
func TestCommon(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 71))
	for _, c := range []struct {
		name            string
		steady, strays  int
		scatter, spread float64
		pull            float64 // most allowed
	}{
		{"all steady", 30, 0, 0, 0, 1.2},
		{"scattering", 30, 0, 0.03, 0, 1.25},
		{"few", 6, 0, 0, 0, 1.4},
		{"half stray", 8, 8, 0, 0.5, 1.5},
		{"most stray", 12, 20, 0, 0.5, 1.5},
		{"many", 300, 30, 0.01, 0.3, 1.2},
	} {
		const trials = 150
		var pulls []float64
		for range trials {
			var v, e []float64
			for i := range c.steady + c.strays {
				s := 0.003 * math.Pow(30, r.Float64())
				x := 0.25 + math.Hypot(s, c.scatter)*r.NormFloat64()
				if i >= c.steady {
					x += c.spread * r.NormFloat64()
				}
				v, e = append(v, x), append(e, s)
			}
			centre, sigma, _, members := Common(v, e, 0.003)
			pulls = append(pulls, (centre-0.25)/sigma)
			if members > len(v) || members < 1 {
				t.Fatalf("%s: %d members of %d", c.name, members, len(v))
			}
		}
		m, s := MedianMAD(pulls)
		t.Logf("%s: pulls %.2f, spread %.2f", c.name, m, s)
		if math.Abs(m) > 4*s/math.Sqrt(trials) || s > c.pull || s < 0.6 {
			t.Errorf("%s: pulls have median %.2f and spread %.2f", c.name, m, s)
		}
	}
	nan := math.NaN()
	if c, _, _, n := Common([]float64{nan, 1}, []float64{1, 0}, 0.01); n != 0 || !math.IsNaN(c) {
		t.Errorf("without a value: %g, %d", c, n)
	}
	if c, s, _, n := Common([]float64{2}, []float64{0.1}, 0.01); math.Abs(c-2) > 1e-12 || n != 1 || s < 0.1 {
		t.Errorf("of one value: %g ± %g, %d", c, s, n)
	}
}
