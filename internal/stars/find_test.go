package stars

import (
	"encoding/binary"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/outside"
	"nightsift/internal/robust"
)

// flatBackground is a known sky of zero with known white noise.
func flatBackground(t testing.TB, w, h int, noise float64) *Background {
	t.Helper()
	b, err := BackgroundFromMesh(w, h, 1, 1, []float32{0}, []float32{float32(noise)})
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func find(t testing.TB, img *frame.Image, b *Background, mask *frame.Mask, gain float64) *List {
	t.Helper()
	l, err := Find(img, b, mask, gain, DefaultFindConfig())
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// orchard renders equal stars on a grid, each at its own place within the
// pixel, under photon noise of sky and stars.
func orchard(p profile, pitch, side int, flux, gain, skyNoise float64, radius int, seed uint64) (*frame.Image, [][3]float64) {
	rng := random(seed)
	w := pitch * side
	img := frame.NewImage(w, w)
	var truth [][3]float64
	for a := 0; a < side; a++ {
		for b := 0; b < side; b++ {
			s := [3]float64{float64(a*pitch+pitch/2) + rng.Float64(), float64(b*pitch+pitch/2) + rng.Float64(), flux}
			truth = append(truth, s)
			add(img, s[0], s[1], flux, p, radius)
		}
	}
	expose(img, level(0), gain, skyNoise*gain, rng)
	return img, truth
}

// bound is the least error of a centroid along x [px]: the inverse root of the
// Fisher information Σ (∂I/∂x)²/V over the pixels (King 1983).
func bound(p profile, flux, gain, skyNoise float64, radius int) float64 {
	n := 2*radius + 1
	at := func(dx float64) []float32 {
		img := frame.NewImage(n, n)
		add(img, float64(radius+1)+dx, float64(radius+1), flux, p, radius+1)
		return img.Pix
	}
	a, b, c := at(-0.02), at(0), at(0.02)
	sum := 0.0
	for k := range b {
		d := float64(c[k]-a[k]) / 0.04
		sum += d * d / (skyNoise*skyNoise + float64(b[k])/gain)
	}
	return 1 / math.Sqrt(sum)
}

// Centroids: unbiased, within 15 % of the bound, their stated errors right;
// fluxes: right within 1 %, their stated errors right; FWHM within
// 2 %. Sources: the renderer, and the Fisher information above. 400 stars fix a
// standard deviation of 800 offsets to 2.5 %.
func TestAccuracy(t *testing.T) {
	const gain, noise, side = 2.0, 12.0, 20
	for _, c := range []struct {
		name string
		p    profile
		fwhm float64
		sn   float64
		flux float64 // tolerance
	}{
		{"sharp", moffat(2.5, 3, 0.95, 0.5), 2.5, 60, 0.01},
		{"typical", moffat(4, 3, 0.9, 0.5), 4, 30, 0.03},
		{"typical, bright", moffat(4, 3, 0.9, 0.5), 4, 1000, 0.01},
		{"Gaussian", gaussian(4, 0.9, 1), 4, 100, 0.01},
		{"wide wings", moffat(3.5, 2.2, 0.9, 1), 3.5, 300, 0.02}, // 0.4 % lie beyond the rendered stamp
		{"broad", moffat(8, 3.5, 0.85, 0.5), 8, 200, 0.01},
	} {
		flux := c.sn * noise * c.fwhm * 1.505
		for k := 0; k < 10; k++ {
			flux = c.sn * math.Sqrt(noise*noise*c.fwhm*c.fwhm*2.27+flux/gain)
		}
		pitch := int(math.Max(24, 8*c.fwhm))
		img, truth := orchard(c.p, pitch, side, flux, gain, noise, pitch, 61)
		l := find(t, img, flatBackground(t, img.Width, img.Height, noise), nil, gain)
		g := newGrid(img.Width, img.Height, 8)
		for k, s := range truth {
			g.add(k, s[0], s[1])
		}
		var offset, pull, fluxes, fluxPull, fwhm []float64
		for _, s := range l.Stars {
			g.near(s.X, s.Y, c.fwhm/2, func(k int, _ float64) {
				dx, dy, df := s.X-truth[k][0], s.Y-truth[k][1], s.Flux-truth[k][2]
				offset = append(offset, dx, dy)
				pull = append(pull, dx/s.XErr, dy/s.YErr)
				fluxes = append(fluxes, df/truth[k][2])
				fluxPull = append(fluxPull, df/s.FluxErr)
				fwhm = append(fwhm, s.FWHM)
			})
		}
		if len(fluxes) != len(truth) || len(l.Stars) != len(truth) {
			t.Errorf("%s: %d of %d stars found, %d in the list", c.name, len(fluxes), len(truth), len(l.Stars))
			continue
		}
		if l.Clean < len(truth)*9/10 {
			t.Errorf("%s: only %d of %d stars are clean", c.name, l.Clean, len(truth))
		}
		o, q := robust.Clip(offset, nil, 4, 10), robust.Clip(pull, nil, 4, 10)
		best := bound(c.p, flux, gain, noise, int(4*c.fwhm))
		if math.Abs(o.Mean) > 0.002+3*o.Std/math.Sqrt(float64(len(offset))) {
			t.Errorf("%s: centroids are off by %.4f px on average", c.name, o.Mean)
		}
		if o.Std > 1.15*best {
			t.Errorf("%s: centroids scatter by %.5f px, bound %.5f", c.name, o.Std, best)
		}
		if math.Abs(q.Std-1) > 0.08 {
			t.Errorf("%s: centroid pulls scatter by %.3f, want 1", c.name, q.Std)
		}
		if f := robust.Clip(fluxes, nil, 4, 10); math.Abs(f.Mean) > c.flux {
			t.Errorf("%s: fluxes are off by %.4f", c.name, f.Mean)
		}
		if f := robust.Clip(fluxPull, nil, 4, 10); c.sn <= 300 && math.Abs(f.Std-1) > 0.12 {
			t.Errorf("%s: flux pulls scatter by %.3f, want 1", c.name, f.Std)
		}
		if m := robust.Median(fwhm); math.Abs(m/c.fwhm-1) > 0.02 {
			t.Errorf("%s: FWHM %.3f, want %.3f", c.name, m, c.fwhm)
		}
	}
}

// Without noise, wherever a star stands within its pixel, the centroid is
// right to 0.01 px from FWHM 2.5 up.
func TestNoPixelPhase(t *testing.T) {
	for _, fwhm := range []float64{2.5, 3, 4.5, 9} {
		for name, p := range map[string]profile{"Moffat": moffat(fwhm, 3, 0.9, 0.4), "Gaussian": gaussian(fwhm, 0.9, 0.4)} {
			const pitch, side = 60, 8
			img := frame.NewImage(pitch*side, pitch*side)
			var truth [][2]float64
			for a := 0; a < side; a++ {
				for b := 0; b < side; b++ {
					x, y := float64(a*pitch+pitch/2)+float64(a)/side-0.5, float64(b*pitch+pitch/2)+float64(b)/side-0.5
					add(img, x, y, 1e5, p, pitch)
					truth = append(truth, [2]float64{x, y})
				}
			}
			l := find(t, img, flatBackground(t, img.Width, img.Height, 5), nil, 2)
			if len(l.Stars) != len(truth) {
				t.Errorf("%s of FWHM %g: %d stars, want %d", name, fwhm, len(l.Stars), len(truth))
			}
			worst := 0.0
			for _, s := range l.Stars {
				best := math.Inf(1)
				for _, p := range truth {
					best = math.Min(best, math.Max(math.Abs(s.X-p[0]), math.Abs(s.Y-p[1])))
				}
				worst = math.Max(worst, best)
			}
			if worst > 0.01 {
				t.Errorf("%s of FWHM %g: a centroid is off by %.4f px", name, fwhm, worst)
			}
		}
	}
}

// Closed form: the moments of a Gaussian, freed from the window, are its own,
// and a pixel adds 1/12.
func TestMomentsOfGaussians(t *testing.T) {
	const sx, sy, theta = 2.4, 1.8, 0.7
	fwhm := math.Sqrt(sx*sy) * sigmaToFWHM
	img := frame.NewImage(61, 61)
	add(img, 31.3, 30.8, 1e5, gaussian(fwhm, sy/sx, theta), 40)
	s := stamp{img: img}
	s.cut(30, 30, 25)
	c, n := math.Cos(theta), math.Sin(theta)
	wantXX := sx*sx*c*c + sy*sy*n*n + 1./12
	wantYY := sx*sx*n*n + sy*sy*c*c + 1./12
	wantXY := (sx*sx - sy*sy) * c * n
	for _, window := range []float64{1.2, 2, 3.5} {
		x, y, ok := s.centroid(30, 30, window, 0, 5)
		if !ok || math.Abs(x-30.3) > 2e-3 || math.Abs(y-29.8) > 2e-3 {
			t.Errorf("window %g: centroid %.4f %.4f, want 30.3 29.8", window, x, y)
		}
		q := s.measure(x, y, window, 0, 1, math.NaN())
		xx, yy, xy, ok := unwindow(q.mxx, q.myy, q.mxy, window)
		if !ok || math.Abs(xx-wantXX) > 0.01*wantXX || math.Abs(yy-wantYY) > 0.01*wantYY || math.Abs(xy-wantXY) > 0.02*wantXX {
			t.Errorf("window %g: moments %.4f %.4f %.4f, want %.4f %.4f %.4f", window, xx, yy, xy, wantXX, wantYY, wantXY)
		}
	}
	_, _, sigma, axis, ok := s.adapt(28, 32)
	if want := math.Sqrt(math.Sqrt(wantXX*wantYY - wantXY*wantXY)); !ok || math.Abs(sigma-want) > 0.02*want {
		t.Errorf("adapted sigma %.4f, want %.4f", sigma, want)
	}
	if math.Abs(axis-sy/sx) > 0.02 {
		t.Errorf("axis ratio %.3f, want %.3f", axis, sy/sx)
	}
}

// The fast filter against the definition, summed in float64, at all bin sizes
// and shapes of frame.
func TestMatchedFilterAgainstDefinition(t *testing.T) {
	rng := random(62)
	for _, c := range []struct {
		w, h  int
		sigma float64
	}{{40, 31, 1.1}, {5, 60, 1.7}, {64, 50, 3}, {83, 41, 5.2}, {1, 1, 1.5}, {3, 9, 6}} {
		img := frame.NewImage(c.w, c.h)
		for k := range img.Pix {
			img.Pix[k] = float32(rng.NormFloat64())
			if rng.Float64() < 0.03 {
				img.Pix[k] = float32(math.NaN())
			}
		}
		m := matchedFilter(img, nil, c.sigma)
		s := c.sigma / float64(m.step)
		r := max(1, int(math.Ceil(3*s)))
		norm := 0.0
		for b := -r; b <= r; b++ {
			for a := -r; a <= r; a++ {
				g := math.Exp(-float64(a*a+b*b) / (2 * s * s))
				norm += g * g
			}
		}
		bin := func(x, y int) (v float64) {
			for j := y * m.step; j < min(c.h, (y+1)*m.step); j++ {
				for i := x * m.step; i < min(c.w, (x+1)*m.step); i++ {
					if p := float64(img.Pix[j*c.w+i]); p == p {
						v += p
					}
				}
			}
			return v
		}
		for y := 0; y < m.height; y++ {
			for x := 0; x < m.width; x++ {
				want := 0.0
				for b := -r; b <= r; b++ {
					for a := -r; a <= r; a++ {
						if x+a >= 0 && y+b >= 0 && x+a < m.width && y+b < m.height {
							want += math.Exp(-float64(a*a+b*b)/(2*s*s)) * bin(x+a, y+b)
						}
					}
				}
				want /= math.Sqrt(norm)
				if got := float64(m.pix[y*m.width+x]); math.Abs(got-want) > 1e-4*(1+math.Abs(want)) {
					t.Fatalf("%dx%d sigma %g at %d,%d: got %g, want %g", c.w, c.h, c.sigma, x, y, got, want)
				}
			}
		}
	}
}

// Empty sky: five sigma means few false peaks. A Gaussian field filtered with
// sigma s has about (u²−1)·u/(2π)^1.5/(2s²)·exp(−u²/2)/u maxima above u per
// pixel; at u = 5 and s = 1.3 that is 0.09 per million pixels.
func TestEmptySky(t *testing.T) {
	img := frame.NewImage(1500, 1000)
	expose(img, level(50), 0, 3, random(63))
	b := estimate(t, img, nil)
	l := find(t, b.Subtract(nil, img), b, nil, 2)
	if len(l.Stars) > 4 {
		t.Errorf("%d stars on empty sky", len(l.Stars))
	}
	if len(l.Stars) == 0 && l.FWHM == l.FWHM {
		t.Errorf("no stars, but FWHM %g", l.FWHM)
	}
}

// Stars of random brightness at random places, through the whole chain: what is
// well above the limit and not hidden behind a neighbour is found, and what is
// found is there.
func TestCompleteness(t *testing.T) {
	for _, c := range []struct {
		stars int
		fwhm  float64
		axis  float64
	}{{15, 3, 0.9}, {700, 3, 0.9}, {4000, 2.3, 0.9}, {150, 11, 0.9}} {
		const w, gain, read, sky = 800, 1.5, 8.0, 300.0
		rng := random(uint64(64 + c.stars))
		noise := math.Sqrt(sky*gain+read*read) / gain
		limit := 5 * noise * c.fwhm * 1.7 // about five sigma for this profile
		truth := scatter(c.stars, w, w, 0.7*limit, 300*limit, rng)
		img := frame.NewImage(w, w)
		g := newGrid(w, w, 16)
		for k, s := range truth {
			add(img, s[0], s[1], s[2], moffat(c.fwhm, 3, c.axis, 1), min(60, reach(s[2], c.fwhm, 3, 0.1)))
			g.add(k, s[0], s[1])
		}
		expose(img, level(sky), gain, read, rng)
		b := estimate(t, img, nil)
		l := find(t, b.Subtract(nil, img), b, nil, gain)
		found := newGrid(w, w, 16)
		spurious := 0
		for k, s := range l.Stars {
			found.add(k, s.X, s.Y)
			any := false
			g.near(s.X, s.Y, c.fwhm, func(int, float64) { any = true })
			if !any {
				spurious++
			}
			if k > 0 && s.Flux > l.Stars[k-1].Flux {
				t.Fatal("the list is not ordered by flux")
			}
		}
		wanted, missed := 0, 0
		for k, s := range truth {
			if s[2] < 2*limit || s[0] < 4 || s[1] < 4 || s[0] > w-4 || s[1] > w-4 {
				continue
			}
			// The filter broadens stars by √2: nearer ones make one peak.
			hidden := false
			g.near(s[0], s[1], 2.5*c.fwhm, func(o int, _ float64) { hidden = hidden || (o != k && truth[o][2] > 0.3*s[2]) })
			g.near(s[0], s[1], 3.2*c.fwhm, func(o int, _ float64) { hidden = hidden || truth[o][2] > 2*s[2] })
			g.near(s[0], s[1], 5*c.fwhm, func(o int, _ float64) { hidden = hidden || truth[o][2] > 20*s[2] })
			if hidden {
				continue
			}
			wanted++
			any := false
			found.near(s[0], s[1], c.fwhm, func(int, float64) { any = true })
			if !any {
				missed++
			}
		}
		if missed*50 > wanted { // 2 %
			t.Errorf("%d stars of FWHM %g: %d of %d missed", c.stars, c.fwhm, missed, wanted)
		}
		if spurious > 2+len(l.Stars)/100 {
			t.Errorf("%d stars of FWHM %g: %d of %d are not there", c.stars, c.fwhm, spurious, len(l.Stars))
		}
		if math.Abs(l.FWHM/c.fwhm-1) > 0.04 {
			t.Errorf("%d stars of FWHM %g: FWHM %.3f", c.stars, c.fwhm, l.FWHM)
		}
		if c.stars >= 100 && l.Clean < 12 {
			t.Errorf("%d stars of FWHM %g: only %d are clean", c.stars, c.fwhm, l.Clean)
		}
	}
}

// field renders stars and whatever extra draws, exposes, estimates and finds;
// it returns the list and a test for "a star stands there".
func field(t *testing.T, n int, p profile, fwhm float64, seed uint64, extra func(img *frame.Image)) (*List, func(s Star) bool) {
	t.Helper()
	const w = 700
	rng := random(seed)
	img := frame.NewImage(w, w)
	g := newGrid(w, w, 16)
	for k, s := range scatter(n, w, w, 2000, 5e5, rng) {
		add(img, s[0], s[1], s[2], p, 26)
		g.add(k, s[0], s[1])
	}
	if extra != nil {
		extra(img)
	}
	expose(img, level(300), 2, 8, rng)
	b := estimate(t, img, nil)
	return find(t, b.Subtract(nil, img), b, nil, 2), func(s Star) bool {
		any := false
		g.near(s.X, s.Y, fwhm, func(int, float64) { any = true })
		return any
	}
}

// Hits on single pixels and pairs, seven times as many as stars, leave the list
// nearly clean of them and steer nothing.
func TestHits(t *testing.T) {
	rng := random(70)
	l, real := field(t, 130, moffat(3, 3, 0.9, 1), 3, 71, func(img *frame.Image) {
		for k := 0; k < 900; k++ {
			x, y := rng.IntN(img.Width-1), rng.IntN(img.Height)
			img.Pix[y*img.Width+x] += float32(200 + 2000*rng.Float64())
			if k%3 == 0 {
				img.Pix[y*img.Width+x+1] += float32(200 + 1000*rng.Float64())
			}
		}
	})
	stars, hits, clean := 0, 0, 0
	for _, s := range l.Stars {
		if real(s) {
			stars++
			continue
		}
		hits++
		if s.Clean {
			clean++
		}
	}
	if stars < 110 || hits > 30 || clean > 0 || l.Sharp < 700 {
		t.Errorf("%d stars, %d hits in the list (%d of them clean), %d thrown away", stars, hits, clean, l.Sharp)
	}
	if math.Abs(l.FWHM/3-1) > 0.03 {
		t.Errorf("FWHM %.3f", l.FWHM)
	}
}

// Twice as many galaxies as stars: none of them is clean.
func TestGalaxiesAreNotClean(t *testing.T) {
	rng := random(72)
	l, real := field(t, 100, moffat(3, 3, 0.9, 1), 3, 73, func(img *frame.Image) {
		for k := 0; k < 200; k++ {
			add(img, 700*rng.Float64(), 700*rng.Float64(), 3000+20000*rng.Float64(), exponential(3+4*rng.Float64(), 0.3+0.7*rng.Float64(), 3*rng.Float64()), 35)
		}
	})
	clean, wrong := 0, 0
	for _, s := range l.Stars {
		if s.Clean {
			clean++
			if !real(s) {
				wrong++
			}
		}
	}
	if clean < 25 || wrong > 1 {
		t.Errorf("%d clean stars, %d of them galaxies", clean, wrong)
	}
	if math.Abs(l.FWHM/3-1) > 0.03 {
		t.Errorf("FWHM %.3f", l.FWHM)
	}
}

// Frames that failed in the telescope still give a list of what is there.
func TestTrailedAndDefocused(t *testing.T) {
	trail := func(u, v float64) float64 { // 12 px long
		s := 0.0
		for k := -6; k <= 6; k++ {
			s += gaussian(3, 1, 0)(u-0.8*float64(k), v-0.6*float64(k)) / 13
		}
		return s
	}
	ring := func(u, v float64) float64 {
		s := 0.0
		for k := 0; k < 24; k++ {
			a := float64(k) / 24 * 2 * math.Pi
			s += gaussian(3, 1, 0)(u-5*math.Cos(a), v-5*math.Sin(a)) / 24
		}
		return s
	}
	for name, p := range map[string]profile{"trailed": trail, "out of focus": ring} {
		l, real := field(t, 60, p, 5, 74, nil)
		n, wrong := 0, 0
		for _, s := range l.Stars {
			if real(s) {
				n++
			} else {
				wrong++
			}
		}
		if n < 45 || wrong > 3 {
			t.Errorf("%s: %d of 60 found, %d others", name, n, wrong)
		}
		if name == "trailed" && l.Roundness > 0.5 {
			t.Errorf("trailed, but roundness %.2f", l.Roundness)
		}
	}
}

// A PSF that changes over the field, in width by half and in elongation, keeps
// its clean stars everywhere.
func TestVaryingPSF(t *testing.T) {
	const w = 900
	rng := random(75)
	img := frame.NewImage(w, w)
	for _, s := range scatter(500, w, w, 3000, 5e5, rng) {
		r := math.Hypot(s[0]-w/2, s[1]-w/2) / (0.7 * w)
		add(img, s[0], s[1], s[2], moffat(3*(1+0.5*r*r), 3, 1-0.25*r, math.Atan2(s[1]-w/2, s[0]-w/2)), 30)
	}
	expose(img, level(300), 2, 8, rng)
	b := estimate(t, img, nil)
	l := find(t, b.Subtract(nil, img), b, nil, 2)
	var share [2][2]float64 // inner and outer: clean, all bright
	for _, s := range l.Stars {
		if s.SN < 25 || s.Neighbour < 20 || s.X < 15 || s.Y < 15 || s.X > w-15 || s.Y > w-15 {
			continue
		}
		k := 0
		if math.Hypot(s.X-w/2, s.Y-w/2) > 0.45*w {
			k = 1
		}
		share[k][1]++
		if s.Clean {
			share[k][0]++
		}
	}
	for k := range share {
		if share[k][1] < 20 || share[k][0] < 0.8*share[k][1] {
			t.Errorf("part %d: %g of %g isolated bright stars are clean", k, share[k][0], share[k][1])
		}
	}
}

// A burnt-out star is one star, flagged, placed as well as it says; its flux is
// a lower limit.
func TestSaturated(t *testing.T) {
	const w = 600
	rng := random(76)
	img := frame.NewImage(w, w)
	var truth [][2]float64
	for k := 0; k < 25; k++ {
		x, y := float64(k%5)*120+50+20*rng.Float64(), float64(k/5)*120+50+20*rng.Float64()
		truth = append(truth, [2]float64{x, y})
		add(img, x, y, 1e6*math.Pow(10, 1.3*rng.Float64()), moffat(4, 3, 0.9, 1), 110)
	}
	for _, s := range scatter(150, w, w, 2500, 5e4, rng) {
		add(img, s[0], s[1], s[2], moffat(4, 3, 0.9, 1), 25)
	}
	expose(img, level(300), 2, 8, rng)
	mask := frame.NewMask(w, w)
	for k, v := range img.Pix {
		if v > 40000 {
			img.Pix[k] = 40000
			mask.Bits[k] = frame.Saturated
		}
	}
	for _, p := range truth[:5] { // bleeding columns
		i := int(math.Round(p[0])) - 1
		for j := int(p[1]) - 20; j < int(p[1])+20; j++ {
			if mask.Bits[j*w+i] == 0 {
				img.Pix[j*w+i] = 35000
				mask.Bits[j*w+i] = frame.Bleed
			}
		}
	}
	b := estimate(t, img, mask)
	l := find(t, b.Subtract(nil, img), b, mask, 2)
	var pulls []float64
	for _, p := range truth {
		n := 0
		for _, s := range l.Stars {
			d := math.Hypot(s.X-p[0], s.Y-p[1])
			if s.Flags&frame.Saturated != 0 && d < 8 {
				n++
				pulls = append(pulls, d/math.Hypot(s.XErr, s.YErr))
				if s.Clean {
					t.Error("a saturated star is clean")
				}
			}
		}
		if n != 1 {
			t.Errorf("%d stars at %v, want one", n, p)
		}
	}
	if q := robust.Percentile(slices.Clone(pulls), 90); q > 3 {
		t.Errorf("places of saturated stars are off by %.1f of their errors (90 %%)", q)
	}
}

// Holes and flags beside the centre must not pull a centroid.
func TestHolesDoNotPull(t *testing.T) {
	p := moffat(4, 3, 0.95, 0)
	img, truth := orchard(p, 40, 10, 2e5, 2, 5, 40, 77)
	mask := frame.NewMask(img.Width, img.Height)
	rng := random(78)
	for _, s := range truth {
		i, j := int(math.Round(s[0]))-1+rng.IntN(7)-3, int(math.Round(s[1]))-1+rng.IntN(7)-3
		if rng.IntN(2) == 0 {
			img.Pix[j*img.Width+i] = float32(math.NaN())
		} else {
			mask.Bits[j*img.Width+i] = frame.BadColumn
			img.Pix[j*img.Width+i] = 1e5
		}
	}
	l := find(t, img, flatBackground(t, img.Width, img.Height, 5), mask, 2)
	if len(l.Stars) != len(truth) {
		t.Errorf("%d stars, want %d", len(l.Stars), len(truth))
	}
	var pull []float64
	for _, s := range l.Stars {
		for _, p := range truth {
			if math.Hypot(s.X-p[0], s.Y-p[1]) < 3 {
				pull = append(pull, (s.X-p[0])/s.XErr, (s.Y-p[1])/s.YErr)
			}
		}
	}
	if c := robust.Clip(pull, nil, 5, 10); c.Std > 1.3 || c.N < 195 {
		t.Errorf("pulls scatter by %.2f (%d of %d kept)", c.Std, c.N, len(pull))
	}
}

func TestFindConfiguration(t *testing.T) {
	img := frame.NewImage(50, 50)
	b := flatBackground(t, 50, 50, 1)
	for _, c := range []FindConfig{{}, {Threshold: 5, FWHM: -1, MaxStars: 5}, {Threshold: math.NaN(), FWHM: 3, MaxStars: 5}, {Threshold: 5, FWHM: 3}} {
		if _, err := Find(img, b, nil, 1, c); err == nil {
			t.Errorf("%+v is accepted", c)
		}
	}
	img, truth := orchard(moffat(4, 3, 1, 0), 40, 6, 5e4, 2, 5, 40, 79)
	c := DefaultFindConfig()
	c.FWHM, c.MaxStars = 4, 10
	l, err := Find(img, flatBackground(t, img.Width, img.Height, 5), nil, math.NaN(), c)
	if err != nil || len(l.Stars) != 10 || len(truth) != 36 {
		t.Errorf("%d stars and error %v, want 10", len(l.Stars), err)
	}
}

// The same frame gives the same list.
func TestFindRepeats(t *testing.T) {
	img := frame.NewImage(400, 400)
	for _, s := range scatter(300, 400, 400, 1000, 1e5, random(80)) {
		add(img, s[0], s[1], s[2], moffat(3, 3, 1, 0), 20)
	}
	expose(img, level(100), 1, 5, random(81))
	b := estimate(t, img, nil)
	sub := b.Subtract(nil, img)
	one, two := find(t, sub, b, nil, 1), find(t, sub, b, nil, 1)
	if fmt.Sprint(one) != fmt.Sprint(two) {
		t.Error("two runs differ")
	}
}

// A real, crowded, badly sampled frame with a nebula (testdata/README.md).
// Source of the comparison: peaks and windowed first moments by scipy.ndimage
// and numpy, run live on the same sky-subtracted pixels.
func TestRealSky(t *testing.T) {
	raw, err := os.ReadFile("testdata/nebula.fits")
	if err != nil {
		t.Fatal(err)
	}
	const w = 200
	img := frame.NewImage(w, w)
	for k := range img.Pix { // the header fills one block
		img.Pix[k] = math.Float32frombits(binary.BigEndian.Uint32(raw[2880+4*k:]))
	}
	b := estimate(t, img, nil)
	sub := b.Subtract(nil, img)
	l := find(t, sub, b, nil, math.NaN())
	if len(l.Stars) < 60 || l.FWHM < 1.8 || l.FWHM > 3.5 {
		t.Errorf("%d stars of FWHM %.2f", len(l.Stars), l.FWHM)
	}
	dir := t.TempDir()
	bytes := make([]byte, 4*len(sub.Pix))
	for k, v := range sub.Pix {
		binary.LittleEndian.PutUint32(bytes[4*k:], math.Float32bits(v))
	}
	places := make([][2]float64, 0)
	for _, s := range l.Stars {
		if s.SN > 20 && s.X > 12 && s.Y > 12 && s.X < w-12 && s.Y < w-12 {
			places = append(places, [2]float64{s.X, s.Y})
		}
	}
	text, _ := json.Marshal(map[string]any{"places": places, "window": l.Window})
	pix, list := filepath.Join(dir, "pix"), filepath.Join(dir, "list.json")
	if os.WriteFile(pix, bytes, 0o644) != nil || os.WriteFile(list, text, 0o644) != nil {
		t.Fatal("cannot write")
	}
	out := outside.Python(t, `
import sys, json, numpy as np
from scipy import ndimage as nd
im = np.fromfile(sys.argv[1], '<f4').reshape(200, 200).astype(float)
q = json.load(open(sys.argv[2]))
s = q["window"]
f = nd.gaussian_filter(im, s)
noise = 1.4826 * np.median(np.abs(f - np.median(f)))
pk = (f == nd.maximum_filter(f, 7)) & (f > np.median(f) + 25 * noise)
ys, xs = np.nonzero(pk)
peaks = [[int(x) + 1, int(y) + 1] for x, y in zip(xs, ys)]
yy, xx = np.mgrid[1:201, 1:201]
resid = []
for x, y in q["places"]:
    w = np.exp(-((xx - x)**2 + (yy - y)**2) / (2 * s * s)) * (((xx - x)**2 + (yy - y)**2) < (4 * s)**2)
    resid.append([float((w * im * (xx - x)).sum() / (w * im).sum()), float((w * im * (yy - y)).sum() / (w * im).sum())])
json.dump({"peaks": peaks, "resid": resid}, sys.stdout)
`, pix, list)
	var ref struct {
		Peaks [][2]float64
		Resid [][2]float64
	}
	if err := json.Unmarshal(out, &ref); err != nil {
		t.Fatal(err)
	}
	if len(ref.Peaks) < 10 || len(ref.Resid) < 20 {
		t.Fatalf("nothing to compare with: %d peaks, %d places", len(ref.Peaks), len(ref.Resid))
	}
	missed := 0
	for _, p := range ref.Peaks {
		best := math.Inf(1)
		for _, s := range l.Stars {
			best = math.Min(best, math.Hypot(s.X-p[0], s.Y-p[1]))
		}
		if best > 1.5 {
			missed++
		}
	}
	if missed*12 > len(ref.Peaks) {
		t.Errorf("%d of %d bright peaks are not in the list", missed, len(ref.Peaks))
	}
	off := 0
	for _, r := range ref.Resid {
		if math.Hypot(r[0], r[1]) > 2e-3 {
			off++
		}
	}
	if off*50 > len(ref.Resid) {
		t.Errorf("%d of %d centroids do not null the windowed moment", off, len(ref.Resid))
	}
}

func BenchmarkFind(b *testing.B) {
	img := benchFrame()
	bg, err := EstimateBackground(img, nil, DefaultBackgroundConfig())
	if err != nil {
		b.Fatal(err)
	}
	sub := bg.Subtract(nil, img)
	for b.Loop() {
		if _, err := Find(sub, bg, nil, 1, DefaultFindConfig()); err != nil {
			b.Fatal(err)
		}
	}
	perPixel(b, img)
}
