package robust

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"nightsift/internal/outside"
)

func random(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 7)) }

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: got %.12g, want %.12g ± %g", what, got, want, tolerance)
	}
}

// The definition: sort, then pick.
func TestSelectAgainstSorting(t *testing.T) {
	rng := random(1)
	for n := 1; n <= 120; n++ {
		x := make([]float64, n)
		for i := range x {
			x[i] = math.Floor(rng.Float64() * float64(n)) // many ties
		}
		if n%7 == 0 {
			slices.Sort(x)
		}
		sorted := slices.Clone(x)
		slices.Sort(sorted)
		for k := range x {
			y := slices.Clone(x)
			if got := Select(y, k); got != sorted[k] {
				t.Fatalf("n=%d k=%d: got %g, want %g", n, k, got, sorted[k])
			}
			for i, v := range y {
				if (i < k && v > y[k]) || (i > k && v < y[k]) {
					t.Fatalf("n=%d k=%d: place %d is on the wrong side", n, k, i)
				}
			}
		}
	}
}

// A permutation made while Select runs, so that each pivot is as bad as can be
// (McIlroy 1999, "A killer adversary for quicksort", for fixed comparisons), is
// not needed to reach the fall-back: calling it directly checks the same code.
func TestHeapSelect(t *testing.T) {
	rng := random(2)
	for n := 1; n < 90; n++ {
		x := make([]float32, n)
		for i := range x {
			x[i] = float32(rng.NormFloat64())
		}
		want := slices.Clone(x)
		slices.Sort(want)
		heapSelect(x, 0)
		if !slices.Equal(x, want) {
			t.Fatalf("n=%d is not sorted", n)
		}
	}
}

func TestNaNAndEmpty(t *testing.T) {
	nan, inf := math.NaN(), math.Inf(1)
	if v := Median([]float64{}); v == v {
		t.Error("median of nothing is", v)
	}
	if v := Median([]float64{nan, nan}); v == v {
		t.Error("median of NaN is", v)
	}
	near(t, "median beside NaN", Median([]float64{3, nan, 1, nan, 2}), 2, 0)
	if v := Median([]float64{inf, inf, inf, 1}); !math.IsInf(v, 1) {
		t.Error("median of infinities:", v)
	}
	x := []float64{5, nan, 4}
	near(t, "MedianOf", MedianOf(x, nil), 4.5, 0)
	if x[0] != 5 || x[2] != 4 {
		t.Error("MedianOf changed its argument")
	}
	if c := Clip([]float64{}, nil, 3, 5); c.N != 0 || c.Mean == c.Mean {
		t.Error("clip of nothing:", c)
	}
	c := Clip([]float64{1, nan, 1, 1, 1, 9}, nil, 3, 9)
	if c.N != 5 { // the MAD is zero, so the plain sigma starts, and it holds the 9
		t.Error("clip of mostly constants:", c)
	}
	if l, s := Biweight([]float64{2, 2, 2, 7}, nil, 6); l != 2 || s != 0 {
		t.Error("biweight with zero MAD:", l, s)
	}
	if v := Percentile([]float64{nan}, 50); v == v {
		t.Error("percentile of NaN is", v)
	}
}

// Source: numpy, scipy and astropy, run live.
func TestAgainstPython(t *testing.T) {
	rng := random(3)
	samples := [][]float64{}
	for _, n := range []int{1, 2, 3, 10, 101, 1000} {
		x := make([]float64, n)
		for i := range x {
			x[i] = 100 + 3*rng.NormFloat64()
			if rng.Float64() < 0.1 {
				x[i] += 200 * rng.Float64()
			}
		}
		samples = append(samples, x)
	}
	file := filepath.Join(t.TempDir(), "samples.json")
	text, _ := json.Marshal(samples)
	if err := os.WriteFile(file, text, 0o644); err != nil {
		t.Fatal(err)
	}
	out := outside.Python(t, `
import json, sys, numpy as np
from astropy.stats import biweight_location, biweight_scale, mad_std
from scipy.stats import truncnorm
res = []
for x in json.load(open(sys.argv[1])):
    x = np.array(x)
    res.append([np.median(x), float(mad_std(x)), np.percentile(x, 16), np.percentile(x, 97.5),
                float(biweight_location(x, c=6)), float(biweight_scale(x, c=9))])
json.dump({"stats": res, "trunc": [truncnorm(-k, k).std() for k in (1, 2, 2.5, 3, 4)]}, sys.stdout)
`, file)
	var want struct {
		Stats [][]float64
		Trunc []float64
	}
	if err := json.Unmarshal(out, &want); err != nil {
		t.Fatal(err)
	}
	for i, x := range samples {
		w := want.Stats[i]
		m, s := MedianMAD(slices.Clone(x))
		l, b := Biweight(x, nil, 6)
		got := []float64{m, s, Percentile(slices.Clone(x), 16), Percentile(slices.Clone(x), 97.5), l, b}
		for k, name := range []string{"median", "mad", "p16", "p97.5", "biweight location", "biweight scale"} {
			near(t, fmt.Sprintf("n=%d %s", len(x), name), got[k], w[k], 1e-9*(1+math.Abs(w[k])))
		}
	}
	for i, k := range []float64{1, 2, 2.5, 3, 4} {
		near(t, "truncated standard deviation", ClipFactor(k), want.Trunc[i], 1e-10)
	}
}

// Gaussian data give their own sigma back whatever the clipping; 300,000
// values fix it to 0.13 %.
func TestClipUnbiased(t *testing.T) {
	rng := random(4)
	x := make([]float32, 300000)
	for i := range x {
		x[i] = float32(50 + 2*rng.NormFloat64())
	}
	for _, k := range []float64{2, 2.5, 3, 4} {
		c := Clip(x, nil, k, 20)
		near(t, fmt.Sprintf("k=%g sigma", k), c.Std, 2, 0.012)
		near(t, fmt.Sprintf("k=%g mean", k), c.Mean, 50, 0.02)
	}
	for i := 0; i < len(x); i += 50 { // 2 % far outliers
		x[i] = 1e6
	}
	c := Clip(x, nil, 3, 20)
	near(t, "sigma with outliers", c.Std, 2, 0.012)
	near(t, "mean with outliers", c.Mean, 50, 0.02)
}

// Exact data come back exactly; 30 % of wild points on one side change the
// answer by less than the noise allows; without wild points the answer is
// close to plain least squares (95 % efficient).
func TestLinearFit(t *testing.T) {
	rng := random(6)
	n := 400
	design := make([]float64, 0, 3*n)
	y := make([]float64, n)
	for i := range y {
		u, v := rng.Float64(), rng.Float64()
		design = append(design, 1, u, v)
		y[i] = 5 - 2*u + 7*v
	}
	f, err := LinearFit(design, 3, y, nil, 4.685, 30)
	if err != nil {
		t.Fatal(err)
	}
	for k, w := range []float64{5, -2, 7} {
		near(t, "exact", f.Coefficients[k], w, 1e-9)
	}
	for i := range y {
		y[i] += 0.1 * rng.NormFloat64()
		if i%10 < 3 {
			y[i] += 5 + 20*rng.Float64()
		}
	}
	y[4] = math.NaN()
	f, err = LinearFit(design, 3, y, nil, 4.685, 50)
	if err != nil {
		t.Fatal(err)
	}
	for k, w := range []float64{5, -2, 7} {
		near(t, "with wild points", f.Coefficients[k], w, 0.1)
	}
	if _, err := LinearFit([]float64{1, 1, 1, 1}, 2, []float64{1, 2}, nil, 4.685, 5); err != ErrSingular {
		t.Error("dependent terms:", err)
	}
}

func BenchmarkMedian(b *testing.B) {
	rng := random(8)
	x := make([]float32, 4096)
	for i := range x {
		x[i] = float32(rng.NormFloat64())
	}
	y := make([]float32, len(x))
	b.SetBytes(int64(4 * len(x)))
	for b.Loop() {
		copy(y, x)
		Median(y)
	}
}
