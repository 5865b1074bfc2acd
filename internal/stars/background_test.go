package stars

import (
	"errors"
	"fmt"
	"math"
	"testing"

	"nightsift/internal/frame"
)

func estimate(t *testing.T, img *frame.Image, mask *frame.Mask) *Background {
	t.Helper()
	b, err := EstimateBackground(img, mask, DefaultBackgroundConfig())
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// skyError is mean and rms of estimated minus true sky.
func skyError(b *Background, sky func(i, j int) float64) (mean, rms float64) {
	row := make([]float32, b.Width)
	for j := 0; j < b.Height; j++ {
		b.SkyRow(row, j)
		for i, v := range row {
			d := float64(v) - sky(i, j)
			mean += d
			rms += d * d
		}
	}
	n := float64(b.Width * b.Height)
	return mean / n, math.Sqrt(rms / n)
}

// Against the sky that the renderer put in. One square of 1024 px fixes the
// noise to 0.15 % and the mean sky to 0.001 sigma; the rest of the tolerance is
// for stars.
func TestSkyAndNoise(t *testing.T) {
	sky := func(i, j int) float64 { return 200 + 0.1*float64(i) + 20*math.Sin(float64(j)/200) }
	const w, sigma = 1024, 10.0
	for _, c := range []struct {
		stars           int
		fwhm            float64
		bias, rms, nois float64
	}{
		{0, 4, 0.01, 0.03, 0.005},
		{300, 2, 0.02, 0.03, 0.005},
		{300, 8, 0.02, 0.04, 0.006},
		{1000, 3, 0.02, 0.04, 0.006},
		{3000, 2.5, 0.04, 0.08, 0.012},
	} {
		rng := random(uint64(c.stars) + 17)
		img := frame.NewImage(w, w)
		for _, s := range scatter(c.stars, w, w, 100*c.fwhm, 3e5, rng) {
			add(img, s[0], s[1], s[2], moffat(c.fwhm, 3, 1, 0), reach(s[2], c.fwhm, 3, 0.03))
		}
		expose(img, sky, 0, sigma, rng)
		b := estimate(t, img, nil)
		mean, rms := skyError(b, sky)
		name := fmt.Sprintf("%d stars of FWHM %g", c.stars, c.fwhm)
		if !(math.Abs(mean) < c.bias*sigma) || !(rms < c.rms*sigma) {
			t.Errorf("%s: sky is off by %.4f sigma, rms %.4f, want below %g and %g", name, mean/sigma, rms/sigma, c.bias, c.rms)
		}
		if r := b.MedianNoise / sigma; !(math.Abs(r-1) < c.nois) {
			t.Errorf("%s: noise is %.4f of the true one, want 1 ± %g", name, r, c.nois)
		}
		if c.stars == 0 && math.Abs(b.NoiseRatio-1) > 0.01 {
			t.Errorf("white noise has ratio %.4f", b.NoiseRatio)
		}
	}
}

// A nebula of stars too faint to see adds to the plain spread of pixels, not to
// the white noise.
func TestUnresolvedStarsDoNotRaiseTheNoise(t *testing.T) {
	rng := random(31)
	const w, sigma = 384, 10.0
	img := frame.NewImage(w, w)
	for _, s := range scatter(5000, w, w, 100, 400, rng) {
		add(img, s[0], s[1], s[2], moffat(5, 3, 1, 0), 14)
	}
	expose(img, level(100), 0, sigma, rng)
	b := estimate(t, img, nil)
	if r := b.MedianNoise / sigma; math.Abs(r-1) > 0.015 {
		t.Errorf("noise is %.4f of the true one", r)
	}
	if b.NoiseRatio < 1.05 {
		t.Errorf("the ratio %.3f does not show the faint stars", b.NoiseRatio)
	}
}

// Noise smoothed by (1 2 1)/4 in x and y: the plain sigma is 6/16 of the
// original one, the second differences tell less. The closed form: each axis
// gives Σk² = 6/16 for the pixels, and for k∗(1 −2 1) = (1 0 −2 0 1)/4 the sum 6/16
// against 6 for white noise.
// Noise smoothed by (1 2 1)/4 in both directions is seen for what it is. The
// expected values are sums over the kernels, exact.
func TestCorrelatedNoiseShows(t *testing.T) {
	rng := random(32)
	const w = 512
	white := frame.NewImage(w+2, w+2)
	expose(white, level(0), 0, 100, rng)
	img := frame.NewImage(w, w)
	k := [3]float32{0.25, 0.5, 0.25}
	for j := 0; j < w; j++ {
		for i := 0; i < w; i++ {
			for b := range k {
				for a := range k {
					img.Pix[j*w+i] += k[a] * k[b] * white.Pix[(j+b)*(w+2)+i+a]
				}
			}
		}
	}
	b := estimate(t, img, nil)
	plain := 100 * 6.0 / 16
	coarse := 100 * coarsePart([]float64{0.25, 0.5, 0.25})
	if math.Abs(b.ClippedNoise/plain-1) > 0.02 || math.Abs(b.MedianNoise/coarse-1) > 0.04 {
		t.Errorf("plain %.3f, at the scale of a star %.3f: want %.3f and %.3f", b.ClippedNoise, b.MedianNoise, plain, coarse)
	}
	// Second differences of the smoothed noise, [1 −2 1] of [1 2 1]/4, are
	// [1 0 −2 0 1]/4: lag two in one axis has −4 over 6.
	if math.Abs(b.Correlation+2./3) > 0.03 {
		t.Errorf("correlation %.3f, want %.3f", b.Correlation, -2./3)
	}
	if math.Abs(b.NoiseRatio/6-1) > 0.03 {
		t.Errorf("ratio %.3f, want 6", b.NoiseRatio)
	}
}

// coarsePart is the part of white noise's variance that smoothing by a kernel
// leaves in second differences of bins of four, along one axis: exact sums.
func coarsePart(kernel []float64) float64 {
	weights := []float64{1, 1, 1, 1, -2, -2, -2, -2, 1, 1, 1, 1}
	smooth := make([]float64, len(weights)+len(kernel)-1)
	before, after := 0.0, 0.0
	for i, w := range weights {
		before += w * w
		for a, f := range kernel {
			smooth[i+a] += w * f
		}
	}
	for _, w := range smooth {
		after += w * w
	}
	return after / before
}

// White noise stays white noise to the test, also under crowded stars of a
// narrow PSF; noise interpolated by half a pixel, in any common way, does not.
func TestCorrelationTellsInterpolatedNoise(t *testing.T) {
	const w, pad = 512, 3
	rng := random(33)
	white := frame.NewImage(w+2*pad, w+2*pad)
	expose(white, level(0), 0, 100, rng)
	at := func(kernel []float64) *Background { // kernel of 2·pad taps or one, in both axes
		rows := frame.NewImage(w+2*pad, w)
		for j := 0; j < w; j++ {
			for i := range rows.Row(j) {
				for b, f := range kernel {
					rows.Row(j)[i] += float32(f) * white.Row(j + b)[i]
				}
			}
		}
		img := frame.NewImage(w, w)
		for j := 0; j < w; j++ {
			for i := range img.Row(j) {
				for a, f := range kernel {
					img.Row(j)[i] += float32(f) * rows.Row(j)[i+a]
				}
			}
		}
		return estimate(t, img, nil)
	}
	lanczos := make([]float64, 2*pad)
	for k := range lanczos {
		x := math.Pi * (float64(k) - pad + 0.5)
		lanczos[k] = pad * math.Sin(x) * math.Sin(x/pad) / (x * x)
	}
	for _, c := range []struct {
		name        string
		kernel      []float64
		least, most float64 // correlation
	}{
		{"none", []float64{1}, 1./6 - 0.02, 1./6 + 0.02},
		{"linear", []float64{0.5, 0.5}, -0.55, -0.45}, // −1/2, exact
		{"cubic", []float64{-0.0625, 0.5625, 0.5625, -0.0625}, -0.6, correlated},
		{"Lanczos", lanczos, -0.6, correlated},
	} {
		b := at(c.kernel)
		if b.Correlation < c.least || b.Correlation > c.most {
			t.Errorf("%s: correlation %.3f, want %.3f to %.3f", c.name, b.Correlation, c.least, c.most)
		}
		if want := 100 * coarsePart(c.kernel); math.Abs(b.MedianNoise/want-1) > 0.04 {
			t.Errorf("%s: noise at the scale of a star %.2f, want %.2f", c.name, b.MedianNoise, want)
		}
	}
	for _, s := range scatter(4000, w, w, 100, 20000, rng) {
		add(white, s[0]+pad, s[1]+pad, s[2], moffat(2, 3.5, 1, 0), 12)
	}
	if b := at([]float64{1}); b.Correlation < 0.05 {
		t.Errorf("crowded stars: correlation %.3f, want near 1/6", b.Correlation)
	}
}

// Large galaxies must not be taken for sky: the sky beneath stays within a
// tenth of the noise, though their light covers several cells.
func TestGalaxies(t *testing.T) {
	rng := random(33)
	const w, sigma = 1024, 5.0
	img := frame.NewImage(w, w)
	for k := 0; k < 12; k++ {
		add(img, 60+900*rng.Float64(), 60+900*rng.Float64(), 3e5, exponential(14, 0.6, 3*rng.Float64()), 160)
	}
	expose(img, level(300), 0, sigma, rng)
	b := estimate(t, img, nil)
	mean, rms := skyError(b, level(300))
	if math.Abs(mean) > 0.05*sigma || rms > 0.1*sigma {
		t.Errorf("sky is off by %.3f sigma, rms %.3f", mean/sigma, rms/sigma)
	}
}

// Missing, flagged and filled regions change nothing elsewhere, and the sky
// goes on through them.
func TestMissingPixels(t *testing.T) {
	rng := random(34)
	const w, h, sigma = 700, 500, 3.0
	sky := func(i, j int) float64 { return 1000 + 0.02*float64(i) - 0.03*float64(j) }
	img := frame.NewImage(w, h)
	expose(img, sky, 0, sigma, rng)
	mask := frame.NewMask(w, h)
	for j := 0; j < h; j++ {
		for i := 0; i < w; i++ {
			k := j*w + i
			switch {
			case i < 90: // zeros nobody flagged
				img.Pix[k] = 0
			case i > 400 && i < 560 && j > 100 && j < 300:
				img.Pix[k] = float32(math.NaN())
			case j > 430:
				img.Pix[k] = 1e9
				mask.Bits[k] = frame.UserMasked
			case i == 333:
				img.Pix[k] = float32(math.Inf(1))
			case (i+j)%97 == 0:
				img.Pix[k] = -1e30
				mask.Bits[k] = frame.CosmicRay
			}
		}
	}
	b := estimate(t, img, mask)
	mean, rms := skyError(b, sky)
	if math.Abs(mean) > 0.1*sigma || rms > 0.3*sigma {
		t.Errorf("sky is off by %.3f sigma, rms %.3f", mean/sigma, rms/sigma)
	}
	if r := b.MedianNoise / sigma; math.Abs(r-1) > 0.01 {
		t.Errorf("noise is %.4f of the true one", r)
	}
}

// Whole numbers: rounding adds 1/12 to the variance.
func TestRoundedPixels(t *testing.T) {
	rng := random(35)
	const w, sigma = 512, 0.7
	img := frame.NewImage(w, w)
	expose(img, level(40.3), 0, sigma, rng)
	for k, v := range img.Pix {
		img.Pix[k] = float32(math.Round(float64(v)))
	}
	b := estimate(t, img, nil)
	want := math.Sqrt(sigma*sigma + 1./12)
	if mean, _ := skyError(b, level(40.3)); math.Abs(mean) > 0.02*sigma {
		t.Errorf("sky is off by %.3f sigma", mean/sigma)
	}
	if math.Abs(b.MedianNoise/want-1) > 0.015 {
		t.Errorf("noise %.4f, want %.4f", b.MedianNoise, want)
	}
}

func TestNoData(t *testing.T) {
	nan := float32(math.NaN())
	for _, size := range [][2]int{{1, 1}, {2, 3}, {5, 5}, {17, 40}, {64, 64}, {200, 90}} {
		for name, value := range map[string]float32{"zero": 0, "constant": 1234.5, "NaN": nan, "infinite": float32(math.Inf(-1))} {
			img := frame.NewImage(size[0], size[1])
			for k := range img.Pix {
				img.Pix[k] = value
			}
			_, err := EstimateBackground(img, nil, DefaultBackgroundConfig())
			var p *frame.Problem
			if !errors.As(err, &p) || p.Slug != frame.ProblemNoData {
				t.Errorf("%s frame of %v: got %v, want no_data", name, size, err)
			}
		}
		img := frame.NewImage(size[0], size[1])
		expose(img, level(5), 0, 1, random(1))
		mask := frame.NewMask(size[0], size[1])
		for k := range mask.Bits {
			mask.Bits[k] = frame.BadColumn
		}
		var p *frame.Problem
		if _, err := EstimateBackground(img, mask, DefaultBackgroundConfig()); !errors.As(err, &p) {
			t.Errorf("all flagged: got %v", err)
		}
	}
	if _, err := EstimateBackground(frame.NewImage(0, 0), nil, DefaultBackgroundConfig()); err == nil {
		t.Error("an image without pixels is accepted")
	}
	if _, err := EstimateBackground(frame.NewImage(9, 9), nil, BackgroundConfig{}); err == nil {
		t.Error("an empty configuration is accepted")
	}
}

// Frames smaller than a cell, and odd sizes: the answer is there and sane.
func TestSmallFrames(t *testing.T) {
	rng := random(36)
	for _, size := range [][2]int{{2, 2}, {3, 3}, {7, 5}, {16, 16}, {31, 20}, {47, 200}, {50, 50}, {63, 64}, {65, 131}, {33, 1}, {1, 40}} {
		img := frame.NewImage(size[0], size[1])
		expose(img, level(100), 0, 2, rng)
		b := estimate(t, img, nil)
		n := float64(size[0] * size[1])
		if mean, _ := skyError(b, level(100)); math.Abs(mean) > 2*(0.1+8/math.Sqrt(n)) {
			t.Errorf("%v: sky is off by %.3f", size, mean)
		}
		if n > 200 && math.Abs(b.MedianNoise/2-1) > 0.03+4/math.Sqrt(n) {
			t.Errorf("%v: noise %.3f, want 2", size, b.MedianNoise)
		}
	}
}

// Wild numbers must neither panic nor come out as NaN.
func TestUglyFrames(t *testing.T) {
	rng := random(37)
	odd := []float32{0, float32(math.NaN()), float32(math.Inf(1)), 3e38, -3e38, 1e-45, 65535, -1}
	for round := 0; round < 60; round++ {
		w, h := 1+rng.IntN(150), 1+rng.IntN(150)
		img := frame.NewImage(w, h)
		mask := frame.NewMask(w, h)
		expose(img, level(10), 0, math.Pow(10, 6*rng.Float64()-3), rng)
		share := rng.Float64()
		for k := range img.Pix {
			if rng.Float64() < share {
				img.Pix[k] = odd[rng.IntN(len(odd))]
			}
			if rng.Float64() < 0.1 {
				mask.Bits[k] = frame.Flag(rng.Uint32())
			}
		}
		b, err := EstimateBackground(img, mask, DefaultBackgroundConfig())
		if err != nil {
			continue
		}
		for c := range b.SkyMesh {
			if s, n := float64(b.SkyMesh[c]), float64(b.NoiseMesh[c]); s-s != 0 || !(n > 0) || math.IsInf(n, 0) {
				t.Fatalf("round %d: cell %d has sky %g and noise %g", round, c, s, n)
			}
		}
		if _, err := Find(b.Subtract(nil, img), b, mask, 1, DefaultFindConfig()); err != nil {
			t.Fatalf("round %d: %v", round, err)
		}
	}
}

// Few photons: most pixels are zero, and that is the sky.
func TestFewPhotons(t *testing.T) {
	rng := random(38)
	img := frame.NewImage(256, 256)
	const p = 0.75
	for k := range img.Pix {
		for rng.Float64() > p { // geometric: mean (1−p)/p
			img.Pix[k]++
		}
	}
	const mean = (1 - p) / p
	b := estimate(t, img, nil)
	if got, _ := skyError(b, level(mean)); math.Abs(got) > 0.05 {
		t.Errorf("sky %.3f, want %.3f", got+mean, mean)
	}
}

// Row by row, point by point and rebuilt from the mesh: one answer. Straight
// slopes are exact, beyond the outer cells too; a parabola is, inside.
func TestMesh(t *testing.T) {
	const w, h, nx, ny = 330, 260, 5, 4
	sky, noise := make([]float32, nx*ny), make([]float32, nx*ny)
	xc, yc := cellCentres(w, 4, nx), cellCentres(h, 4, ny)
	plane := func(x, y float64) float64 { return 3 + 0.5*x - 0.25*y }
	for c := range sky {
		sky[c] = float32(plane(xc[c%nx], yc[c/nx]))
		noise[c] = 2
	}
	b, err := BackgroundFromMesh(w, h, nx, ny, sky, noise)
	if err != nil {
		t.Fatal(err)
	}
	row := make([]float32, w)
	for j := 0; j < h; j += 7 {
		b.SkyRow(row, j)
		for i, v := range row {
			if math.Abs(float64(v)-plane(float64(i), float64(j))) > 1e-4 {
				t.Fatalf("plane at %d,%d: got %g, want %g", i, j, v, plane(float64(i), float64(j)))
			}
		}
		b.NoiseRow(row, j)
		if row[0] != 2 || row[w-1] != 2 {
			t.Fatalf("noise %g %g, want 2", row[0], row[w-1])
		}
	}
	rng := random(40)
	for c := range sky {
		sky[c] = float32(rng.NormFloat64())
	}
	for j := 0; j < h; j += 11 {
		b.SkyRow(row, j)
		for i := 0; i < w; i += 5 {
			if p := b.Sky(float64(i+1), float64(j+1)); math.Abs(p-float64(row[i])) > 2e-5 {
				t.Fatalf("at %d,%d: row gives %g, point %g", i, j, row[i], p)
			}
		}
	}
	for c := range sky {
		x := xc[c%nx]
		sky[c] = float32(x * x / 1000)
	}
	b.SkyRow(row, 100)
	for i := int(xc[1]) + 1; i < int(xc[nx-2]); i++ {
		if want := float64(i*i) / 1000; math.Abs(float64(row[i])-want) > 1e-3 {
			t.Fatalf("parabola at %d: got %g, want %g", i, row[i], want)
		}
	}
	for _, bad := range []func() (*Background, error){
		func() (*Background, error) { return BackgroundFromMesh(w, h, nx, ny, sky[1:], noise) },
		func() (*Background, error) { return BackgroundFromMesh(0, h, nx, ny, sky, noise) },
		func() (*Background, error) { return BackgroundFromMesh(3, 3, nx, ny, sky, noise) },
		func() (*Background, error) { return BackgroundFromMesh(w, h, nx, ny, sky, make([]float32, nx*ny)) },
	} {
		if _, err := bad(); err == nil {
			t.Error("a wrong mesh is accepted")
		}
	}
}

func TestRebuiltFromMesh(t *testing.T) {
	rng := random(41)
	for _, size := range [][2]int{{300, 333}, {1030, 77}, {40, 30}} {
		img := frame.NewImage(size[0], size[1])
		expose(img, func(i, j int) float64 { return float64(i) / 50 }, 0, 1, rng)
		a := estimate(t, img, nil)
		b, err := BackgroundFromMesh(a.Width, a.Height, a.NX, a.NY, a.SkyMesh, a.NoiseMesh)
		if err != nil {
			t.Fatal(err)
		}
		x, y := a.Subtract(nil, img), b.Subtract(nil, img)
		for k := range x.Pix {
			if x.Pix[k] != y.Pix[k] {
				t.Fatalf("%v: pixel %d differs", size, k)
			}
		}
		if z := a.Subtract(img, img); z != img || z.Pix[5] != x.Pix[5] {
			t.Error("subtraction in place differs")
		}
	}
}

// The model wins when it is right, the measurement when it is not.
func TestVariance(t *testing.T) {
	rng := random(42)
	const w, gain, read = 512, 1.7, 6.0
	sky := func(i, j int) float64 { return 400 + 0.3*float64(i) }
	make1 := func() *frame.Frame {
		img := frame.NewImage(w, w)
		expose(img, sky, gain, read, rng)
		return frame.New("v", img)
	}
	check := func(f *frame.Frame, source string, tolerance float64) *VarianceReport {
		t.Helper()
		r, err := EstimateVariance(f, estimate(t, f.Image, f.Flags))
		if err != nil {
			t.Fatal(err)
		}
		if r.Source != source {
			t.Errorf("used %s (%s), want %s", r.Source, r.Reason, source)
		}
		for _, k := range []int{0, w - 1, w*w/2 + w/2, w*w - 1} {
			want := sky(k%w, k/w)/gain + read*read/gain/gain
			if got := float64(f.Variance.Pix[k]); math.Abs(got/want-1) > tolerance {
				t.Errorf("%s: variance %.2f at %d, want %.2f", source, got, k, want)
			}
		}
		return r
	}
	f := make1()
	f.Meta.Gain, f.Meta.ReadNoise = gain, read
	if r := check(f, "model", 0.01); math.Abs(r.ModelNoise/r.MeasuredNoise-1) > 0.01 {
		t.Errorf("model %.3f and measured %.3f differ", r.ModelNoise, r.MeasuredNoise)
	}
	f = make1()
	check(f, "measured", 0.15)
	f.Meta.Gain, f.Meta.ReadNoise = 1, read // wrong gain
	f.Variance = nil
	check(f, "measured", 0.15)
	f = make1()
	f.Variance = frame.NewImage(w, w)
	for k := range f.Variance.Pix {
		f.Variance.Pix[k] = float32(sky(k%w, k/w)/gain + read*read/gain/gain)
		if k%50 == 0 {
			f.Variance.Pix[k] = float32(math.NaN())
		}
	}
	check(f, "extension", 0.02)
	for k := range f.Variance.Pix { // a wrong extension
		f.Variance.Pix[k] *= 4
	}
	check(f, "measured", 0.15)
}

func BenchmarkBackground(b *testing.B) {
	img := benchFrame()
	b.ResetTimer()
	for b.Loop() {
		if _, err := EstimateBackground(img, nil, DefaultBackgroundConfig()); err != nil {
			b.Fatal(err)
		}
	}
	perPixel(b, img)
}

func BenchmarkSubtract(b *testing.B) {
	img := benchFrame()
	bg, err := EstimateBackground(img, nil, DefaultBackgroundConfig())
	if err != nil {
		b.Fatal(err)
	}
	dst := frame.NewImage(img.Width, img.Height)
	for b.Loop() {
		bg.Subtract(dst, img)
	}
	perPixel(b, img)
}

func perPixel(b *testing.B, img *frame.Image) {
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(img.Pix)), "ns/px")
}

func benchFrame() *frame.Image {
	rng := random(50)
	img := frame.NewImage(2048, 2048)
	for _, s := range scatter(2500, 2048, 2048, 600, 1e6, rng) {
		add(img, s[0], s[1], s[2], moffat(4, 3, 1, 0), min(20, reach(s[2], 4, 3, 0.3)))
	}
	expose(img, level(500), 1, 5, rng)
	return img
}
