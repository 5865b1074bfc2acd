package subtract

import (
	"context"
	"math"
	"math/rand/v2"
	"testing"
)

// The kernel of single pixels and that of Gaussians are two descriptions of
// one thing: on the same stars they give the same convolved reference.
func TestPixelAndGaussianBasisAgree(t *testing.T) {
	const w, h = 420, 400
	f := randomField(90, w, h, 21)
	ref := gaussianField(w, h, f.x, f.y, f.flux, 1.5)
	img := gaussianField(w, h, f.x, f.y, f.flux, 2.1)
	rng := rand.New(rand.NewPCG(7, 1))
	for i := range img.Pix {
		img.Pix[i] += float32(3 * rng.NormFloat64())
	}
	p := testPlanes(img, ref, 9)
	const reach = 10
	chosen := chooseStamps(f.positions(), w, h, reach, 80)
	solve := func(b *basis, shapes []shape) (*solution, []*stamp) {
		stamps, err := cutStamps(context.Background(), p, b, reach, chosen, 1)
		if err != nil {
			t.Fatal(err)
		}
		s, err := fitKernel(context.Background(), p, b, stamps, shapes, 1)
		if err != nil {
			t.Fatal(err)
		}
		return s, stamps
	}
	gaussian := newBasis(10, []gaussianTerm{{1.3, 6}, {0.8, 4}, {2.6, 4}})
	pixels := newPixelBasis(6)
	g, gs := solve(gaussian, []shape{makeShape(gaussian, []int{6, 4, 4}, 0, 0, 1e-9)})
	x, xs := solve(pixels, pixelShapes(pixels, 0))
	if a, b := g.kernel.Sum(200, 200), x.kernel.Sum(200, 200); math.Abs(a-1) > 0.001 || math.Abs(b-1) > 0.001 {
		t.Errorf("flux scales %.5f and %.5f, want 1", a, b)
	}
	// The convolved stars agree to a small part of the noise they were fitted
	// through, and both to the truth.
	byStar := map[int]*stamp{}
	for _, s := range xs {
		byStar[s.star] = s
	}
	compared := 0
	for _, s := range gs {
		o := byStar[s.star]
		if o == nil {
			continue
		}
		a, b := make([]float32, len(s.data)), make([]float32, len(s.data))
		s.model(a, g.kernel.weights(nil, float64(s.x), float64(s.y)))
		o.model(b, x.kernel.weights(nil, float64(o.x), float64(o.y)))
		peak, worst := 0.0, 0.0
		for i := range a {
			peak = math.Max(peak, float64(a[i]))
			worst = math.Max(worst, math.Abs(float64(a[i]-b[i])))
		}
		if worst > 0.004*peak+0.6 {
			t.Errorf("star %d: models differ by %.2f counts, peak %.0f, noise 3", s.star, worst, peak)
		}
		compared++
	}
	if compared < 40 {
		t.Errorf("only %d stars compared", compared)
	}
	cg, cx, _, ok := predicts(g, x, gs, xs, w, h)
	if !ok || math.Abs(cg-1) > 0.06 || math.Abs(cx-1) > 0.06 {
		t.Errorf("held-out chi-squares %.3f and %.3f, want 1", cg, cx)
	}
}

// A kernel that no sum of centred Gaussians resembles: the star doubled, as by
// a tracking jump. The pixel basis follows it.
func TestPixelBasisFollowsADoubledStar(t *testing.T) {
	const w, h = 400, 400
	f := randomField(80, w, h, 5)
	ref := gaussianField(w, h, f.x, f.y, f.flux, 1.6)
	img := gaussianField(w, h, f.x, f.y, f.flux, 1.6)
	second := append([]float64(nil), f.x...)
	for i := range second {
		second[i] += 4
	}
	again := gaussianField(w, h, second, f.y, f.flux, 1.6)
	rng := rand.New(rand.NewPCG(7, 1))
	for i := range img.Pix {
		img.Pix[i] = 0.6*img.Pix[i] + 0.4*again.Pix[i] + float32(3*rng.NormFloat64())
	}
	p := testPlanes(img, ref, 9)
	chosen := chooseStamps(f.positions(), w, h, 10, 80)
	pixels := newPixelBasis(6)
	stamps, err := cutStamps(context.Background(), p, pixels, 10, chosen, 1)
	if err != nil {
		t.Fatal(err)
	}
	s, err := fitKernel(context.Background(), p, pixels, stamps, pixelShapes(pixels, 0), 1)
	if err != nil {
		t.Fatal(err)
	}
	if s.chi2 > 1.1 {
		t.Errorf("reduced chi-square %.3f", s.chi2)
	}
	k := s.kernel.At(nil, 200, 200)
	n := pixels.side()
	// Its moments are those of the two impulses, 0.6 at 0 and 0.4 at 4 px. What
	// the stars' width hides, finer structure, is not determined by the data.
	var sum, first, second2 float64
	for y := range n {
		for x := range n {
			v := k[y*n+x]
			sum += v
			first += v * float64(x-pixels.half)
			second2 += v * float64((x-pixels.half)*(x-pixels.half))
		}
	}
	mean := first / sum
	if variance := second2/sum - mean*mean; math.Abs(sum-1) > 0.003 || math.Abs(mean-1.6) > 0.03 || math.Abs(variance-0.24*16) > 0.25 {
		t.Errorf("kernel: sum %.4f, mean %.3f, variance %.3f; want 1, 1.6, 3.84", sum, mean, variance)
	}
}

// The penalty matrix against second differences taken by hand.
func TestRoughness(t *testing.T) {
	b := newPixelBasis(3)
	rng := rand.New(rand.NewPCG(1, 9))
	c := make([]float64, b.len())
	for i := range c {
		c[i] = rng.NormFloat64()
	}
	side := b.side()
	k := make([]float64, side*side)
	b.combine(k, c)
	at := func(x, y int) float64 {
		if x < 0 || y < 0 || x >= side || y >= side {
			return 0
		}
		return k[y*side+x]
	}
	want := 0.0
	for y := range side {
		for x := range side {
			d := at(x+1, y) + at(x-1, y) + at(x, y+1) + at(x, y-1) - 4*at(x, y)
			want += d * d
		}
	}
	got := 0.0
	for i, a := range c {
		for j, d := range c {
			got += a * d * b.penalty[i*len(c)+j]
		}
	}
	if math.Abs(got-want) > 1e-9*want {
		t.Errorf("roughness %.9f, second differences %.9f", got, want)
	}
}
