package subtract

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Simulated residuals with a known relative error, a third of the stars
// changed for good: the error comes back.
func TestExcess(t *testing.T) {
	for _, eps := range []float64{0, 0.003, 0.02} {
		rng := rand.New(rand.NewPCG(3, 7))
		var r, l []float64
		for i := range 3000 {
			lever := 20 * math.Pow(10, 1.5*rng.Float64())
			v := rng.NormFloat64() * math.Sqrt(1+eps*eps*lever*lever)
			if i%6 == 0 {
				v += 5 + 60*rng.Float64()
			}
			r, l = append(r, v), append(l, lever)
		}
		got := excess(r, l)
		if math.Abs(got-eps) > 0.12*eps+0.0012 {
			t.Errorf("excess %.5f, want %.5f", got, eps)
		}
	}
}
