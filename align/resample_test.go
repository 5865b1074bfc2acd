package align

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/outside"
)

// bent is a transform with rotation, mirroring, scale and a distortion of some
// pixels at the corners of a width × height frame.
func bent(deg, scale float64, mirrored bool, width, height, bend float64) *Transform {
	c := point{(width + 1) / 2, (height + 1) / 2}
	a := fromAffine(turn(deg, scale, mirrored, c, c), width, height)
	t := &Transform{Order: 4, X0: a.X0, Y0: a.Y0, HalfX: a.HalfX, HalfY: a.HalfY, CX: make([]float64, terms(4)), CY: make([]float64, terms(4))}
	copy(t.CX, a.CX)
	copy(t.CY, a.CY)
	for k := 3; k < terms(4); k++ {
		t.CX[k] = bend * math.Sin(float64(3*k)) / 6
		t.CY[k] = bend * math.Cos(float64(5*k)) / 6
	}
	return t
}

func constant(width, height int, v float32) *frame.Image {
	m := frame.NewImage(width, height)
	for i := range m.Pix {
		m.Pix[i] = v
	}
	return m
}

// render adds a round Gaussian of total flux, sampled at the pixel centres, to
// an image; an integral over pixels is a Gaussian too, as wide as one likes.
func render(m *frame.Image, x, y, sigma, flux float64) {
	r := int(6*sigma) + 2
	for j := max(int(y)-r, 0); j < min(int(y)+r, m.Height); j++ {
		for i := max(int(x)-r, 0); i < min(int(x)+r, m.Width); i++ {
			dx, dy := float64(i+1)-x, float64(j+1)-y
			m.Pix[j*m.Width+i] += float32(flux / (2 * math.Pi * sigma * sigma) * math.Exp(-(dx*dx+dy*dy)/(2*sigma*sigma)))
		}
	}
}

func mustResample(t testing.TB, img *frame.Image, flags *frame.Mask, tr *Transform, width, height int, scale float64, workers int) *resampled {
	t.Helper()
	if flags == nil {
		flags = frame.NewMask(img.Width, img.Height)
	}
	s := newSource(img, constant(img.Width, img.Height, 1), flags)
	s.interpolate()
	r, err := s.forScale(scale).resample(context.Background(), tr, width, height, workers)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// cardinalWeights are the coefficients of a unit impulse: the Fourier series of
// the inverse of the sampled spline's transform (66 + 52 cos ω + 2 cos 2ω)/120.
var cardinalWeights = func() (c [41]float64) {
	const n = 512
	for k := range c {
		for m := range n {
			w := 2 * math.Pi * float64(m) / n
			c[k] += math.Cos(float64(k-20)*w) / ((66 + 52*math.Cos(w) + 2*math.Cos(2*w)) / 120) / n
		}
	}
	return c
}()

// interpolant is the weight of a pixel at distance x that the spline amounts to.
func interpolant(x float64) float64 {
	sum := 0.0
	for k, c := range cardinalWeights {
		sum += c * bspline5(x-float64(k-20))
	}
	return sum
}

// kernelFor returns the definition of the kernel and how far it reaches.
func kernelFor(scale float64) (func(x float64) float64, float64) {
	if scale > widenFrom {
		return func(x float64) float64 { return lanczos(x / scale) }, lobes * scale
	}
	return interpolant, 17
}

// resampleSlowly is the definition: for each new pixel the double sum over all
// reference pixels within the kernel, weights from the formula, in float64. It
// gives NaN where the kernel reaches beyond the reference.
func resampleSlowly(img *frame.Image, tr *Transform, width, height int, scale float64) []float64 {
	kernel, reach := kernelFor(scale)
	out := make([]float64, width*height)
	wx := make([]float64, img.Width)
	for j := range height {
		for i := range width {
			x, y := tr.Apply(float64(i+1), float64(j+1))
			if x-reach < 1 || y-reach < 1 || x+reach > float64(img.Width) || y+reach > float64(img.Height) {
				out[j*width+i] = math.NaN()
				continue
			}
			var sum, weight float64
			for a := range wx {
				wx[a] = kernel(float64(a+1) - x)
			}
			for b := range img.Height {
				wy := kernel(float64(b+1) - y)
				for a, w := range wx {
					sum += wy * w * float64(img.Pix[b*img.Width+a])
					weight += wy * w
				}
			}
			out[j*width+i] = sum / weight * tr.Area(float64(i+1), float64(j+1))
		}
	}
	return out
}

func TestResampleEqualsTheDirectDoubleSum(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 21))
	for _, c := range []struct {
		w, h, w2, h2 int
		deg, scale   float64
		mirrored     bool
	}{
		{50, 50, 50, 50, 0, 1, false},
		{61, 57, 53, 70, 12, 1, false},
		{50, 50, 50, 50, 90, 1.01, true},
		{50, 60, 41, 53, 201, 0.7, true},
		{90, 90, 40, 40, 33, 1.8, false},
		{7, 7, 9, 5, 3, 1, false},
		{1, 1, 1, 1, 0, 1, false},
	} {
		img := frame.NewImage(c.w, c.h)
		for i := range img.Pix {
			img.Pix[i] = float32(1000 * r.NormFloat64())
		}
		bend := 0.001
		if c.w < 40 {
			bend = 0 // no parabola over 16 px
		}
		tr := bent(c.deg, c.scale, c.mirrored, float64(c.w), float64(c.h), bend)
		got := mustResample(t, img, nil, tr, c.w2, c.h2, c.scale, 1)
		want := resampleSlowly(img, tr, c.w2, c.h2, c.scale)
		compared := 0
		for k, v := range want {
			if math.IsNaN(v) {
				continue
			}
			compared++
			if got.flags.Bits[k] != 0 {
				t.Fatalf("%+v: pixel %d with a whole footprint has flags %b", c, k, got.flags.Bits[k])
			}
			// White noise of 1000 counts has a slope of about 2000 counts a
			// pixel, the table's step is 1/4096 px.
			if d := math.Abs(float64(got.image.Pix[k]) - v); d > 3 {
				t.Fatalf("%+v: pixel %d is %g, the double sum gives %g", c, k, got.image.Pix[k], v)
			}
		}
		if c.w >= 40 && compared < 100 {
			t.Fatalf("%+v: only %d pixels compared", c, compared)
		}
		again := mustResample(t, img, nil, tr, c.w2, c.h2, c.scale, 7)
		if !slices.Equal(again.image.Pix, got.image.Pix) || !slices.Equal(again.variance.Pix, got.variance.Pix) || !slices.Equal(again.flags.Bits, got.flags.Bits) {
			t.Fatalf("%+v: seven workers give another result than one", c)
		}
	}
}

// Against scipy.ndimage.map_coordinates of order 5.
func TestResampleAgainstScipy(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 21))
	const n = 64
	img := frame.NewImage(n, n)
	var in strings.Builder
	for i := range img.Pix {
		img.Pix[i] = float32(r.IntN(2000))
		fmt.Fprintf(&in, "%g ", img.Pix[i])
	}
	tr := bent(17, 1, true, n, n, 0)
	for k := range tr.CX {
		if k < 3 {
			fmt.Fprintf(&in, "%.17g %.17g ", tr.CX[k], tr.CY[k])
		}
	}
	out := outside.Python(t, `
import sys, json, numpy as np
from scipy import ndimage
a = np.array(sys.argv[1].split(), float)
n = 64
img, c = a[:n*n].reshape(n, n), a[n*n:].reshape(3, 2)
y, x = np.mgrid[1:n+1, 1:n+1]
u, v = (x-(n+1)/2)/(n/2), (y-(n+1)/2)/(n/2)
xr, yr = [c[0, k] + c[1, k]*u + c[2, k]*v for k in (0, 1)]
json.dump(ndimage.map_coordinates(img, [yr-1, xr-1], order=5, mode="mirror").ravel().tolist(), sys.stdout)
`, in.String())
	var want []float64
	if err := json.Unmarshal(out, &want); err != nil {
		t.Fatal(err)
	}
	got := mustResample(t, img, nil, tr, n, n, 1, 1)
	compared := 0
	for k, v := range want {
		x, y := tr.Apply(float64(k%n+1), float64(k/n+1))
		if min(x, y) < 14 || max(x, y) > n-13 {
			continue // the border is mirrored there, repeated here
		}
		compared++
		if d := math.Abs(float64(got.image.Pix[k]) - v); d > 2 {
			t.Fatalf("pixel %d is %g, scipy gives %g", k, got.image.Pix[k], v)
		}
	}
	if compared < 1000 {
		t.Fatalf("only %d pixels compared", compared)
	}
}

// The two filters undo each other.
func TestSplineSamplesUndoSplinePlane(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 21))
	for _, size := range [][2]int{{13, 13}, {40, 17}, {300, 29}} {
		w, h := size[0], size[1]
		p := make([]float32, w*h)
		for i := range p {
			p[i] = float32(1000 * r.NormFloat64())
		}
		c := slices.Clone(p)
		splinePlane(c, w, h)
		back := splineSamples(c, w, h)
		for j := 4; j < h-4; j++ {
			for i := 4; i < w-4; i++ {
				if d := math.Abs(float64(back[j*w+i] - p[j*w+i])); d > 0.01 {
					t.Fatalf("%d×%d: sample (%d,%d) is %g, was %g", w, h, i, j, back[j*w+i], p[j*w+i])
				}
			}
		}
	}
}

func TestResampleOfASmoothFunction(t *testing.T) {
	// A Gaussian of sigma 1.5 px (FWHM 3.5 px) is known everywhere.
	const sigma = 1.5
	img := frame.NewImage(80, 80)
	render(img, 40.3, 41.2, sigma, 1e5)
	peak := 1e5 / (2 * math.Pi * sigma * sigma)
	tr := bent(12, 1.0, true, 80, 80, 0.05)
	got := mustResample(t, img, nil, tr, 80, 80, 1, 1)
	worst := 0.0
	for j := 10; j < 70; j++ {
		for i := 10; i < 70; i++ {
			x, y := tr.Apply(float64(i+1), float64(j+1))
			want := peak * math.Exp(-((x-40.3)*(x-40.3)+(y-41.2)*(y-41.2))/(2*sigma*sigma)) * tr.Area(float64(i+1), float64(j+1))
			worst = max(worst, math.Abs(want-float64(got.image.Row(j)[i]))/peak)
		}
	}
	t.Logf("largest error %.2g of the peak at FWHM 3.5 px", worst)
	if worst > 1e-3 {
		t.Errorf("largest error %.2g of the peak, want below 1e-3", worst)
	}
}

func TestResampleKeepsConstantsAndFlux(t *testing.T) {
	for _, scale := range []float64{0.5, 0.8, 1, 1.01, 1.5, 3} {
		for _, mirrored := range []bool{false, true} {
			const n = 200
			tr := bent(27, scale, mirrored, n, n, 0.1)
			one := mustResample(t, constant(n, n, 100), nil, tr, n, n, scale, 1)
			seen := 0
			for k, v := range one.image.Pix {
				if one.flags.Bits[k] != 0 {
					continue
				}
				seen++
				want := 100 * tr.Area(float64(k%n+1), float64(k/n+1))
				if math.Abs(float64(v)-want) > 1e-4*want {
					t.Fatalf("scale %g: constant sky of 100 gives %g in pixel %d, want %g", scale, v, k, want)
				}
				if math.Abs(float64(one.variance.Pix[k])-want/100) > 1e-5*want {
					t.Fatalf("scale %g: variance 1 gives %g, want %g", scale, one.variance.Pix[k], want/100)
				}
			}
			if seen < 1000 {
				t.Fatalf("scale %g: only %d pixels", scale, seen)
			}
			star := frame.NewImage(n, n)
			const flux = 1e6
			render(star, 98.4, 103.7, 1.4*max(scale, 1), flux)
			r := mustResample(t, star, nil, tr, n, n, scale, 1)
			sum := 0.0
			for k, v := range r.image.Pix {
				if r.flags.Bits[k]&frame.NoReference == 0 {
					sum += float64(v)
				}
			}
			t.Logf("scale %g, mirrored %v: flux changes by %.1e", scale, mirrored, sum/flux-1)
			if math.Abs(sum/flux-1) > 1e-3 {
				t.Errorf("scale %g, mirrored %v: flux %g becomes %g", scale, mirrored, flux, sum)
			}
		}
	}
}

// The variance given is that of white noise with the same power at low
// frequencies: sums over 12 × 12 pixels of resampled white noise must have the
// variance predicted from it.
func TestResampledVarianceIsThatOfLargeSums(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 21))
	for _, scale := range []float64{0.8, 1, 1.3} {
		const n = 900
		img := frame.NewImage(n, n)
		for i := range img.Pix {
			img.Pix[i] = float32(r.NormFloat64())
		}
		c := point{n / 2, n / 2}
		tr := fromAffine(turn(17, scale, false, c, c), n, n)
		got := mustResample(t, img, nil, tr, n, n, scale, 1)
		const b = 12
		var sum2, want float64
		blocks := 0
		for j := 0; j+b <= n; j += b {
			for i := 0; i+b <= n; i += b {
				var s, v float64
				bad := false
				for y := range b {
					for x := range b {
						k := (j+y)*n + i + x
						s += float64(got.image.Pix[k])
						v += float64(got.variance.Pix[k])
						bad = bad || got.flags.Bits[k] != 0
					}
				}
				if !bad {
					sum2, want, blocks = sum2+s*s, want+v, blocks+1
				}
			}
		}
		ratio := sum2 / want
		// A sum over a box keeps some power of higher frequencies, where
		// interpolation loses up to a few percent: allow for that and the
		// statistical error.
		tolerance := 0.05 + 3*math.Sqrt(2/float64(blocks))
		t.Logf("scale %g: variance of %d block sums over the prediction %.3f", scale, blocks, ratio)
		if math.Abs(ratio-1) > tolerance {
			t.Errorf("scale %g: block sums have %.3f of the predicted variance, want 1 ± %.3f", scale, ratio, tolerance)
		}
	}
}

func TestWalkerFollowsTheTransform(t *testing.T) {
	const width, height = 4096, 4096
	tr := bent(12, 1.01, true, width, height, 20)
	w := newWalker(tr, width)
	worst, worstArea := 0.0, 0.0
	for j := 0; j < height; j += 97 {
		w.start(j, 0, len(w.seg))
		for i := 0; i < width; i += 3 {
			g := w.seg[i/segment]
			n := float64(i % segment)
			x, y := tr.Apply(float64(i+1), float64(j+1))
			worst = max(worst, math.Abs(g.x0+n*(g.x1+n*g.x2)-x), math.Abs(g.y0+n*(g.y1+n*g.y2)-y))
			worstArea = max(worstArea, math.Abs((g.a0+n*(g.a1+n*g.a2))/tr.Area(float64(i+1), float64(j+1))-1))
		}
	}
	t.Logf("largest error %.1e px, of the area %.1e", worst, worstArea)
	if worst > 3e-5 || worstArea > 1e-6 {
		t.Errorf("positions off by %g px, areas by %g: want below 3e-5 and 1e-6", worst, worstArea)
	}
}

func TestFlagsFollowTheFootprint(t *testing.T) {
	const n = 60
	r := rand.New(rand.NewPCG(3, 21))
	img := constant(n, n, 50)
	flags := frame.NewMask(n, n)
	for range 25 {
		k := r.IntN(n * n)
		flags.Bits[k] |= []frame.Flag{frame.Saturated, frame.NoData, frame.CosmicRay, frame.Edge}[r.IntN(4)]
		if flags.Bits[k]&replaced != 0 {
			img.Pix[k] = []float32{float32(math.NaN()), float32(math.Inf(1)), -1e30}[r.IntN(3)]
		}
	}
	img.Pix[1234] = float32(math.NaN()) // not flagged
	for j := 8; j < 26; j++ {           // a large gap
		for i := 30; i < 52; i++ {
			img.Pix[j*n+i] = float32(math.NaN())
		}
	}
	for _, scale := range []float64{1, 1.6} {
		tr := bent(31, scale, false, n, n, 0.005)
		kernel, _ := kernelFor(scale)
		got := mustResample(t, img, flags, tr, n, n, scale, 1)
		clean := 0
		for j := range n {
			for i := range n {
				x, y := tr.Apply(float64(i+1), float64(j+1))
				var weight [16]float64
				var wx, wy [41]float64
				for k := range wx {
					wx[k], wy[k] = kernel(float64(int(x)-20+k)-x), kernel(float64(int(y)-20+k)-y)
				}
				total := 0.0
				for b := int(y) - 20; b <= int(y)+20; b++ {
					for a := int(x) - 20; a <= int(x)+20; a++ {
						w := math.Abs(wy[b-int(y)+20] * wx[a-int(x)+20])
						total += w
						f := frame.NoReference
						if a >= 1 && b >= 1 && a <= n && b <= n {
							f = flags.Row(b - 1)[a-1]
							if v := img.Row(b - 1)[a-1]; v-v != 0 {
								f |= frame.NoData
							}
						}
						for bit := range weight {
							if f>>bit&1 != 0 {
								weight[bit] += w
							}
						}
					}
				}
				f := got.flags.Row(j)[i]
				for bit, w := range weight {
					near := math.Abs(w/total-flagWeight) < 0.008 // the tail left out
					far := x < 0.5 || y < 0.5 || x > n+0.5 || y > n+0.5
					if !near && !far && (w/total >= flagWeight) != (f>>bit&1 != 0) {
						t.Fatalf("scale %g, pixel %d,%d: bit %d is %d, its weight %.4f", scale, i, j, bit, f>>bit&1, w/total)
					}
					if far && f&frame.NoReference == 0 {
						t.Fatalf("scale %g, pixel %d,%d lies outside the reference, without the flag", scale, i, j)
					}
				}
				v := got.image.Row(j)[i]
				if v-v != 0 {
					t.Fatalf("scale %g, pixel %d,%d is %g", scale, i, j, v)
				}
				if f&frame.Unusable == 0 {
					clean++
					want := 50 * tr.Area(float64(i+1), float64(j+1))
					if math.Abs(float64(v)-want) > 1e-3*want {
						t.Fatalf("scale %g, pixel %d,%d: bad pixels leak: %g, want %g", scale, i, j, v, want)
					}
				}
			}
		}
		if clean < 200 {
			t.Fatalf("scale %g: only %d pixels free of flags", scale, clean)
		}
	}
}

func TestResampleStopsWhenCancelled(t *testing.T) {
	s := newSource(constant(64, 64, 1), constant(64, 64, 1), frame.NewMask(64, 64))
	s.interpolate()
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if r, err := s.resample(ctx, bent(0, 1, false, 64, 64, 0), 64, 64, 2); err != context.Canceled || r != nil {
		t.Fatalf("got %v, %v: want the context's error", r, err)
	}
}

func BenchmarkResample2048(b *testing.B) {
	for _, c := range []struct {
		name  string
		deg   float64
		scale float64
	}{{"shift", 0, 1}, {"rotated12", 12, 1.01}, {"rotated90", 90, 1}, {"widened1.5", 12, 1.5}} {
		b.Run(c.name, func(b *testing.B) {
			const n = 2048
			s := newSource(constant(n, n, 3), constant(n, n, 1), frame.NewMask(n, n))
			s.interpolate()
			s = s.forScale(c.scale)
			tr := bent(c.deg, c.scale, false, n, n, 2)
			b.ResetTimer()
			for range b.N {
				if _, err := s.resample(context.Background(), tr, n, n, 1); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/(n*n), "ns/px")
		})
	}
}

func BenchmarkPrepareSource2048(b *testing.B) {
	const n = 2048
	img, v, f := constant(n, n, 3), constant(n, n, 1), frame.NewMask(n, n)
	for range b.N {
		newSource(img, v, f).interpolate()
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/(n*n), "ns/px")
}
