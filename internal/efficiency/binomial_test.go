package efficiency

import (
	"encoding/json"
	"math"
	"testing"

	"nightsift/internal/outside"
)

// Newcombe 1998, Statistics in Medicine 17, 857, table I: 95 % intervals by the
// score method and by the exact method of Clopper and Pearson.
func TestIntervalsAgainstNewcombe(t *testing.T) {
	for _, c := range []struct {
		k, n                                       int
		wilsonLow, wilsonHigh, exactLow, exactHigh float64
	}{
		{81, 263, 0.2553, 0.3662, 0.2527, 0.3676},
		{15, 148, 0.0624, 0.1605, 0.0578, 0.1617},
		{0, 20, 0, 0.1611, 0, 0.1684},
		{1, 29, 0.0061, 0.1718, 0.0009, 0.1776},
	} {
		wl, wh := Wilson(c.k, c.n, 0.95)
		el, eh := ClopperPearson(c.k, c.n, 0.95)
		for i, pair := range [][2]float64{{wl, c.wilsonLow}, {wh, c.wilsonHigh}, {el, c.exactLow}, {eh, c.exactHigh}} {
			if math.Abs(pair[0]-pair[1]) > 0.00006 {
				t.Errorf("%d of %d, bound %d: %.5f, published %.4f", c.k, c.n, i, pair[0], pair[1])
			}
		}
	}
}

func TestIntervalsAgainstScipy(t *testing.T) {
	const script = `
import json
from scipy.stats import binomtest
out = []
for n in [1, 2, 5, 17, 100, 1000, 20000]:
    for k in sorted({0, 1, n // 3, n // 2, n - 1, n}):
        for c in [0.6826894921370859, 0.9, 0.997]:
            r = binomtest(k, n)
            w, e = r.proportion_ci(c, 'wilson'), r.proportion_ci(c, 'exact')
            out.append([k, n, c, w.low, w.high, e.low, e.high])
print(json.dumps(out))
`
	var rows [][]float64
	if err := json.Unmarshal(outside.Python(t, script), &rows); err != nil {
		t.Fatal(err)
	}
	if len(rows) < 100 {
		t.Fatalf("scipy gave %d rows", len(rows))
	}
	for _, r := range rows {
		k, n := int(r[0]), int(r[1])
		wl, wh := Wilson(k, n, r[2])
		el, eh := ClopperPearson(k, n, r[2])
		for i, g := range []float64{wl, wh, el, eh} {
			if math.Abs(g-r[3+i]) > 1e-9 {
				t.Errorf("%d of %d at %g, bound %d: %.12f, scipy %.12f", k, n, r[2], i, g, r[3+i])
			}
		}
	}
}

func TestIntervalsOfNothing(t *testing.T) {
	for _, f := range []func(k, n int, c float64) (float64, float64){Wilson, ClopperPearson} {
		if low, high := f(0, 0, 0.9); low != 0 || high != 1 {
			t.Errorf("of no trials: %g to %g, want 0 to 1", low, high)
		}
	}
}
