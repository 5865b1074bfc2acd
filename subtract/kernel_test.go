package subtract

import (
	"context"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"nightsift/internal/frame"
)

// gaussianField draws stars of Gaussian profile, integrated over the pixel by
// the error function, so that widths are known exactly.
func gaussianField(width, height int, xs, ys, fluxes []float64, sigma float64) *frame.Image {
	img := frame.NewImage(width, height)
	edge := func(t float64) float64 { return 0.5 * math.Erf(t/(sigma*math.Sqrt2)) }
	r := int(math.Ceil(7 * sigma))
	for s := range xs {
		cx, cy := int(math.Round(xs[s])), int(math.Round(ys[s]))
		for y := max(1, cy-r); y <= min(height, cy+r); y++ {
			fy := edge(float64(y)+0.5-ys[s]) - edge(float64(y)-0.5-ys[s])
			for x := max(1, cx-r); x <= min(width, cx+r); x++ {
				fx := edge(float64(x)+0.5-xs[s]) - edge(float64(x)-0.5-xs[s])
				img.Pix[(y-1)*width+x-1] += float32(fluxes[s] * fx * fy)
			}
		}
	}
	return img
}

func constantImage(width, height int, v float32) *frame.Image {
	img := frame.NewImage(width, height)
	for i := range img.Pix {
		img.Pix[i] = v
	}
	return img
}

type starField struct{ x, y, flux []float64 }

func randomField(n, width, height int, seed uint64) starField {
	rng := rand.New(rand.NewPCG(seed, 1))
	var f starField
	for range n {
		f.x = append(f.x, 40+rng.Float64()*float64(width-80))
		f.y = append(f.y, 40+rng.Float64()*float64(height-80))
		f.flux = append(f.flux, 2000*math.Pow(10, 1.5*rng.Float64()))
	}
	return f
}

func testPlanes(n, r *frame.Image, variance float32) *planes {
	return &planes{new: n, newVariance: constantImage(n.Width, n.Height, variance), newFlags: frame.NewMask(n.Width, n.Height),
		ref: r, refVariance: constantImage(n.Width, n.Height, variance/1e4), refFlags: frame.NewMask(n.Width, n.Height),
		newGain: math.Inf(1), refGain: math.Inf(1), scale: 1, blurSquares: 1}
}

func (f starField) positions() []candidatePosition {
	var p []candidatePosition
	for i := range f.x {
		p = append(p, candidatePosition{star: i, x: f.x[i], y: f.y[i], rank: f.flux[i], factor: 1})
	}
	return p
}

// Closed form: a Gaussian of width σ₁ becomes one of width σ₂ by a Gaussian of
// width √(σ₂²−σ₁²); its sum is the flux ratio.
func TestKernelOfTwoGaussiansIsAGaussian(t *testing.T) {
	const w, h = 400, 380
	const s1, s2, scale = 1.5, 2.2, 1.7
	f := randomField(70, w, h, 3)
	ref := gaussianField(w, h, f.x, f.y, f.flux, s1)
	scaled := make([]float64, len(f.flux))
	for i, v := range f.flux {
		scaled[i] = scale * v
	}
	img := gaussianField(w, h, f.x, f.y, scaled, s2)
	p := testPlanes(img, ref, 1)
	want := math.Sqrt(s2*s2 - s1*s1)
	// The basis does not hold the answer's own width.
	b := newBasis(10, []gaussianTerm{{1.3, 6}, {0.8, 4}, {2.6, 4}})
	stamps, err := cutStamps(context.Background(), p, b, 12, chooseStamps(f.positions(), w, h, 12, 50), 1)
	if err != nil {
		t.Fatal(err)
	}
	if len(stamps) < 40 {
		t.Fatalf("%d stamps", len(stamps))
	}
	sol, err := fitKernel(context.Background(), p, b, stamps, []shape{makeShape(b, []int{6, 4, 4}, 0, 0, 1e-10)}, 1)
	if err != nil {
		t.Fatal(err)
	}
	k := sol.kernel.At(nil, 200, 190)
	n := b.side()
	sum := total(k)
	if math.Abs(sum/scale-1) > 2e-4 {
		t.Errorf("kernel sums to %.6f, want %.6f", sum, scale)
	}
	// The kernel acts on pixel-integrated profiles, so it is the Gaussian
	// sampled at pixel centres (the pixel's own width is in both).
	worst := 0.0
	for j := range n {
		for i := range n {
			r2 := float64((i-b.half)*(i-b.half) + (j-b.half)*(j-b.half))
			g := scale * math.Exp(-r2/(2*want*want)) / (2 * math.Pi * want * want)
			worst = math.Max(worst, math.Abs(k[j*n+i]-g))
		}
	}
	if peak := scale / (2 * math.Pi * want * want); worst > 0.02*peak {
		t.Errorf("kernel departs from the Gaussian by %.4f of its peak", worst/peak)
	}
}

// literalSolve transcribes the equations of Alard & Lupton 1998 word for word:
// every element of the basis is drawn as an image, convolved by a double sum,
// and the normal equations are summed over all pixels of all stamps; no
// separability, no per-stamp matrices, no unit-sum elements.
func literalSolve(p *planes, b *basis, stamps []*stamp, reach, order int) []float64 {
	n := b.side()
	var columns [][]float64
	var data, weight []float64
	terms := polynomialCount(order)
	for range (b.len())*terms + polynomialCount(order) {
		columns = append(columns, nil)
	}
	kernel := make([]float64, n*n)
	for _, s := range stamps {
		u, v := normalise(float64(s.x), float64(s.y), p.new.Width, p.new.Height)
		poly := polynomials(nil, u, v, order)
		for j := -reach; j <= reach; j++ {
			for i := -reach; i <= reach; i++ {
				x, y := s.x-1+i, s.y-1+j
				data = append(data, float64(p.new.Pix[y*p.new.Width+x]))
				weight = append(weight, float64(s.weight[(j+reach)*(2*reach+1)+i+reach]))
				at := 0
				for k := range b.len() {
					b.bare(kernel, k)
					sum := 0.0
					for dv := -b.half; dv <= b.half; dv++ {
						for du := -b.half; du <= b.half; du++ {
							sum += kernel[(dv+b.half)*n+du+b.half] * float64(p.ref.Pix[(y-dv)*p.new.Width+x-du])
						}
					}
					for _, q := range poly {
						columns[at] = append(columns[at], q*sum)
						at++
					}
				}
				for _, q := range poly {
					columns[at] = append(columns[at], q)
					at++
				}
			}
		}
	}
	m := len(columns)
	normal := mat.NewSymDense(m, nil)
	right := mat.NewVecDense(m, nil)
	for a := range m {
		for c := 0; c <= a; c++ {
			sum := 0.0
			for i, w := range weight {
				sum += w * columns[a][i] * columns[c][i]
			}
			normal.SetSym(a, c, sum)
		}
		sum := 0.0
		for i, w := range weight {
			sum += w * columns[a][i] * data[i]
		}
		right.SetVec(a, sum)
	}
	var x mat.VecDense
	var qr mat.QR
	qr.Factorize(normal)
	if err := qr.SolveVecTo(&x, false, right); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			panic(err)
		}
	}
	return x.RawVector().Data
}

func TestSolveAgreesWithLiteralTranscription(t *testing.T) {
	const w, h = 220, 210
	const reach, order = 7, 1
	f := randomField(16, w, h, 9)
	ref := gaussianField(w, h, f.x, f.y, f.flux, 1.4)
	img := gaussianField(w, h, f.x, f.y, f.flux, 1.9)
	rng := rand.New(rand.NewPCG(4, 4))
	for i := range img.Pix {
		img.Pix[i] += float32(rng.NormFloat64())
		// A width that changes over the field.
		img.Pix[i] *= float32(1 + 0.1*float64(i%w)/w)
	}
	p := testPlanes(img, ref, 1)
	p.newGain, p.refGain = 2, 200
	b := newBasis(6, []gaussianTerm{{1.2, 2}, {2.4, 0}})
	stamps, err := cutStamps(context.Background(), p, b, reach, chooseStamps(f.positions(), w, h, reach, 16), 1)
	if err != nil || len(stamps) < 8 {
		t.Fatalf("%d stamps, %v", len(stamps), err)
	}
	for _, s := range stamps {
		m := make([]float32, len(s.data))
		s.model(m, append([]float64{1}, make([]float64, b.len()-1)...))
		s.reweigh(m, 1, 0.05, p)
		s.accumulate()
	}
	sh := makeShape(b, []int{2, 0}, order, order, 0)
	sh.ridge = 1e-14
	sol, err := solveOnce(b, stamps, sh, w, h)
	if err != nil {
		t.Fatal(err)
	}
	x := literalSolve(p, b, stamps, reach, order)
	// Compare the kernels, since the two use other elements for one space.
	n := b.side()
	bare := make([]float64, n*n)
	for _, at := range [][2]float64{{30, 40}, {110, 105}, {190, 60}} {
		got := sol.kernel.At(nil, at[0], at[1])
		want := make([]float64, n*n)
		u, v := normalise(at[0], at[1], w, h)
		poly := polynomials(nil, u, v, order)
		i := 0
		for k := range b.len() {
			b.bare(bare, k)
			for _, q := range poly {
				for m := range want {
					want[m] += x[i] * q * bare[m]
				}
				i++
			}
		}
		peak := 0.0
		for _, v := range want {
			peak = math.Max(peak, math.Abs(v))
		}
		for m := range want {
			if math.Abs(got[m]-want[m]) > 1e-5*peak {
				t.Fatalf("at %v, pixel %d: kernel %.8f, transcription %.8f (peak %.4f)", at, m, got[m], want[m], peak)
			}
		}
		sky := 0.0
		for _, q := range poly {
			sky += x[i] * q
			i++
		}
		if math.Abs(sky-sol.kernel.Sky(at[0], at[1])) > 1e-4 {
			t.Errorf("sky %.6f, transcription %.6f", sol.kernel.Sky(at[0], at[1]), sky)
		}
	}
}

func TestBasisSumsAndConvolution(t *testing.T) {
	b := newBasis(8, []gaussianTerm{{1.1, 4}, {2, 2}})
	n := b.side()
	k := make([]float64, n*n)
	rng := rand.New(rand.NewPCG(1, 2))
	const reach = 5
	outer := 2*(b.half+reach) + 1
	window := make([]float32, outer*outer)
	for i := range window {
		window[i] = float32(rng.NormFloat64())
	}
	inner := 2*reach + 1
	out := make([][]float32, b.len())
	for i := range out {
		out[i] = make([]float32, inner*inner)
	}
	b.apply(out, window, reach, nil)
	for e := range b.len() {
		w := make([]float64, b.len())
		w[e] = 1
		b.combine(k, w)
		want := 0.0
		if e == 0 {
			want = 1
		}
		if s := total(k); math.Abs(s-want) > 1e-12 {
			t.Errorf("element %d sums to %g, want %g", e, s, want)
		}
		for _, at := range [][2]int{{0, 0}, {reach, reach}, {inner - 1, 3}} {
			sum := 0.0
			for v := range n {
				for u := range n {
					sum += k[v*n+u] * float64(window[(at[1]+2*b.half-v)*outer+at[0]+2*b.half-u])
				}
			}
			if got := float64(out[e][at[1]*inner+at[0]]); math.Abs(got-sum) > 1e-5 {
				t.Errorf("element %d at %v: %g, double sum %g", e, at, got, sum)
			}
		}
	}
}

// A star that changed must not pull the kernel.
func TestVariableStarIsClipped(t *testing.T) {
	const w, h = 400, 400
	f := randomField(60, w, h, 5)
	ref := gaussianField(w, h, f.x, f.y, f.flux, 1.5)
	changed := append([]float64(nil), f.flux...)
	changed[7] *= 1.6
	changed[20] *= 0.3
	img := gaussianField(w, h, f.x, f.y, changed, 2)
	p := testPlanes(img, ref, 4)
	rng := rand.New(rand.NewPCG(8, 8))
	for i := range img.Pix {
		img.Pix[i] += float32(2 * rng.NormFloat64())
	}
	b := newBasis(9, []gaussianTerm{{1.3, 4}, {0.7, 2}, {2.6, 2}})
	stamps, err := cutStamps(context.Background(), p, b, 10, chooseStamps(f.positions(), w, h, 10, 60), 2)
	if err != nil {
		t.Fatal(err)
	}
	var shapes []shape
	for o := range 3 {
		shapes = append(shapes, makeShape(b, []int{4, 2, 2}, o, 0, 1e-8))
	}
	sol, err := fitKernel(context.Background(), p, b, stamps, shapes, 2)
	if err != nil {
		t.Fatal(err)
	}
	if sol.shape.order[0] != 0 {
		t.Errorf("spatial order %d chosen for a constant kernel", sol.shape.order[0])
	}
	for _, s := range stamps {
		if (s.star == 7 || s.star == 20) && s.kept {
			t.Errorf("variable star %d was kept", s.star)
		}
	}
	if sum := sol.kernel.Sum(200, 200); math.Abs(sum-1) > 0.002 {
		t.Errorf("flux scale %.5f, want 1", sum)
	}
	if sol.chi2 < 0.9 || sol.chi2 > 1.1 {
		t.Errorf("reduced chi-square %.3f", sol.chi2)
	}
}
