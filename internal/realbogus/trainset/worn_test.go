package trainset

import (
	"context"
	"math"
	"testing"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/simulate"
	"nightsift/internal/stars"
)

func gaussianAt(w, h int, x, y, sigma float64) *frame.Image {
	m := frame.NewImage(w, h)
	for j := range h {
		for i := range w {
			u, v := float64(i)-x, float64(j)-y
			m.Pix[j*w+i] = float32(1000 * math.Exp(-(u*u+v*v)/(2*sigma*sigma)))
		}
	}
	return m
}

// A star that is moved by a known part of a pixel is that star drawn there.
func TestDisplaced(t *testing.T) {
	const w, h = 40, 30
	dx, dy := make([]float32, w*h), make([]float32, w*h)
	for k := range dx {
		dx[k], dy[k] = 0.3, -0.45
	}
	got := displaced(gaussianAt(w, h, 20, 15, 2.5), dx, dy)
	want := gaussianAt(w, h, 19.7, 15.45, 2.5)
	for k := range got.Pix {
		if d := math.Abs(float64(got.Pix[k] - want.Pix[k])); d > 4 { // the cubic kernel's own error; linear interpolation would leave 20
			t.Fatalf("pixel %d is %g, expected %g", k, got.Pix[k], want.Pix[k])
		}
	}
}

// Jolts move light at stars, leave the rest alone and do not touch the frame
// that was given.
func TestShift(t *testing.T) {
	const n = 200
	given := gaussianAt(n, n, 50, 60, 1.5)
	keep := given.Clone()
	p := &align.Pair{Reference: &frame.Frame{Image: given}, ReferenceFWHM: 3.5}
	for range 60 { // enough that one is chosen
		p.ReferenceStars = append(p.ReferenceStars, stars.Star{X: 51, Y: 61})
	}
	w := &worn{jolts: 0.5, seed: 3}
	w.shift(p)
	var sum, moved, far float64
	for k, v := range p.Reference.Image.Pix {
		if given.Pix[k] != keep.Pix[k] {
			t.Fatal("the given plane was changed")
		}
		d := math.Abs(float64(v - keep.Pix[k]))
		moved += d
		sum += float64(v)
		if math.Hypot(float64(k%n)-50, float64(k/n)-60) > 30 {
			far = math.Max(far, d)
		}
	}
	if want := 1000 * 2 * math.Pi * 1.5 * 1.5; math.Abs(sum/want-1) > 0.05 {
		t.Errorf("the star's light is %g, expected %g", sum, want)
	}
	if moved < 500 || far > 0 {
		t.Errorf("%g counts moved, %g far from the star", moved, far)
	}
}

// Added noise has the spread it should have and is correlated as white noise
// smoothed with a Gaussian of width s: exp(-1/4s²) for neighbours.
func TestSmoothNoise(t *testing.T) {
	const n, width, spread = 300, 1.2, 7.0
	e := &simulate.Exposure{Width: n, Height: n, Pix: make([]float32, n*n)}
	addSmoothNoise(e, width, spread, 9)
	var vv, vn float64
	for j := range n {
		for i := range n - 1 {
			a, b := float64(e.Pix[j*n+i]), float64(e.Pix[j*n+i+1])
			vv, vn = vv+a*a, vn+a*b
		}
	}
	if s := math.Sqrt(vv / (n * (n - 1))); math.Abs(s/spread-1) > 0.05 {
		t.Errorf("spread %g, expected %g", s, spread)
	}
	if c, want := vn/vv, math.Exp(-1/(4*width*width)); math.Abs(c-want) > 0.03 {
		t.Errorf("neighbours correlate by %.3f, expected %.3f", c, want)
	}
}

// A worn frame is one that would teach something: searched in spite of its
// faults, with bogus and with real ones, the same each time.
func TestWornFrame(t *testing.T) {
	cfg := DefaultConfig()
	cfg.Scenarios, cfg.Size, cfg.Worn = nil, 420, 1
	w := newWorn(0, cfg.FirstSeed+1000)
	if again := newWorn(0, cfg.FirstSeed+1000); w.String() != again.String() || w.saturation != again.saturation {
		t.Error("two draws from one seed differ")
	}
	w = &worn{base: "plain", gainError: 1.2, saturation: 0, blind: true, seed: 5}
	w.change = simulate.Change{Events: 60, Brightest: 1000, Tune: func(n, r *simulate.Conditions) { n.CosmicRays = 300 }}
	done, err := one(context.Background(), cfg, "", 5, w)
	if err != nil || done.problem != nil {
		t.Fatal(err, done.problem)
	}
	list, mpx, noise := done.examples, done.mpx, done.noise
	real, bogus := 0, 0
	for i := range list {
		if e := &list[i]; e.Real {
			real++
		} else if e.Weight > 0 {
			bogus++
		}
	}
	t.Logf("%d real, %d bogus on %.2f Mpx, %.2f noise peaks", real, bogus, mpx, noise[0])
	if real < 3 || bogus < 20 {
		t.Errorf("%d real and %d bogus ones with 300 hits per Mpx and no finder", real, bogus)
	}
}
