package artefacts

import (
	"encoding/binary"
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/outside"
	"nightsift/internal/simulate"
	"nightsift/internal/stars"
)

// addStar draws a Moffat star (exponent 3), integrated over pixels by the
// midpoint rule on 5 × 5 points.
func addStar(img *frame.Image, x, y, fwhm, flux float64) {
	a2 := fwhm * fwhm / 4 / (math.Pow(2, 1.0/3) - 1)
	r := 12 * fwhm
	for j := max(0, int(y-1-r)); j <= min(img.Height-1, int(y-1+r)); j++ {
		for i := max(0, int(x-1-r)); i <= min(img.Width-1, int(x-1+r)); i++ {
			sum := 0.0
			for p := range 5 {
				for q := range 5 {
					dx, dy := float64(i+1)-x+float64(p-2)/5, float64(j+1)-y+float64(q-2)/5
					u := 1 + (dx*dx+dy*dy)/a2
					sum += 1 / (u * u * u)
				}
			}
			img.Pix[j*img.Width+i] += float32(flux * 2 / (math.Pi * a2) * sum / 25)
		}
	}
}

func star(x, y, flux float64) stars.Star {
	return stars.Star{X: x, Y: y, Flux: flux, SN: 1000, FWHM: 3, Roundness: 1}
}

// TestLaplacian compares the closed form with van Dokkum's steps done one by
// one: sub-sample twofold, convolve with the Laplacian kernel, drop negative
// values, average over the original pixels (PASP 113, 1420, eq. 3 to 7).
func TestLaplacian(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	const w, h = 23, 17
	pix := make([]float32, w*h)
	for k := range pix {
		pix[k] = float32(10 * rng.NormFloat64())
		if rng.IntN(20) == 0 {
			pix[k] += float32(rng.ExpFloat64() * 1000)
		}
	}
	fine := func(i, j int) float64 { return float64(pix[j/2*w+i/2]) }
	literal := make([]float64, w*h)
	for j := 2; j < 2*h-2; j++ {
		for i := 2; i < 2*w-2; i++ {
			l := (4*fine(i, j) - fine(i-1, j) - fine(i+1, j) - fine(i, j-1) - fine(i, j+1)) / 4
			literal[j/2*w+i/2] += max(l, 0) // the sum over f_s² sub-pixels ...
		}
	}
	for k := range literal {
		literal[k] /= 2 // ... and S = L+/(f_s N)
	}
	check := func(what string, want []float64) {
		t.Helper()
		for j := 1; j < h-1; j++ {
			for i := 1; i < w-1; i++ {
				k := j*w + i
				got := float64(laplacian(pix[k], pix[k-1], pix[k+1], pix[k-w], pix[k+w]))
				if math.Abs(got-want[k]) > 1e-4*(1+math.Abs(want[k])) {
					t.Fatalf("%s: %g at %d,%d, want %g", what, got, i, j, want[k])
				}
			}
		}
	}
	check("literal", literal)

	file := filepath.Join(t.TempDir(), "pixels")
	raw := make([]byte, 0, 4*len(pix))
	for _, v := range pix {
		raw = binary.LittleEndian.AppendUint32(raw, math.Float32bits(v))
	}
	if err := os.WriteFile(file, raw, 0o644); err != nil {
		t.Fatal(err)
	}
	out := outside.Python(t, `
import sys, json
import numpy as np
from scipy import ndimage
a = np.fromfile(sys.argv[1], dtype="<f4").reshape(17, 23).astype(float)
fine = np.kron(a, np.ones((2, 2)))
l = ndimage.convolve(fine, np.array([[0, -1, 0], [-1, 4, -1], [0, -1, 0]]) / 4.0)
l = np.clip(l, 0, None).reshape(17, 2, 23, 2).sum(axis=(1, 3)) / 2
print(json.dumps(l.ravel().tolist()))
`, file)
	var scipy []float64
	if err := json.Unmarshal(out, &scipy); err != nil || len(scipy) != len(pix) {
		t.Fatalf("scipy gave %d values: %v", len(scipy), err)
	}
	check("scipy.ndimage", scipy)
}

// TestLightKeepsBounds: sums of stars without noise, at any place and blend,
// break no bound of a profile that is as sharp; a single pixel of a few times
// the noise on top of one does.
func TestLightKeepsBounds(t *testing.T) {
	for _, fwhm := range []float64{1.8, 2.5, 4, 8} {
		rng := rand.New(rand.NewPCG(3, uint64(10*fwhm)))
		in := noiseFrame(160, 160, 1)
		for k := range in.Image.Pix {
			in.Image.Pix[k] = 0
		}
		for range 300 {
			addStar(in.Image, rng.Float64()*160, rng.Float64()*160, fwhm, math.Exp(3+8*rng.Float64()))
		}
		in.FWHM, in.Gain = fwhm, 1e6
		f := &finder{in: in, cfg: DefaultConfig(), w: 160, h: 160, img: in.Image.Pix, vari: in.Variance.Pix, bits: in.Flags.Bits, gain: in.Gain, report: &Report{}}
		f.chooseLimits()
		for k := range f.vari {
			f.vari[k] = 1e-6
		}
		for j := range 160 {
			for i := range 160 {
				if e := f.excess(i, j); e > 0 {
					t.Fatalf("FWHM %g: light breaks a bound by %g at %d,%d", fwhm, e, i, j)
				}
			}
		}
	}
}

// TestLimits: for a Gaussian of 1.8 px centred on a pixel, the ratio of the
// middle pixel to both neighbours is a closed form in error functions.
func TestLimits(t *testing.T) {
	l := LimitsOfWidth(1.8)
	s := 1.8 / (2 * math.Sqrt(2*math.Ln2)) * math.Sqrt2
	centre := 2 * math.Erf(0.5/s)
	side := math.Erf(1.5/s) - math.Erf(0.5/s)
	if want := centre / (2 * side); math.Abs(l.Arm[0][0]/want-1) > 1e-3 || math.Abs(l.Arm[1][0]/want-1) > 1e-3 {
		t.Errorf("bound %.5f and %.5f, want %.5f", l.Arm[0][0], l.Arm[1][0], want)
	}
	if want := centre / (4 * side); math.Abs(l.Cross/want-1) > 1e-3 {
		t.Errorf("cross %.5f, want %.5f", l.Cross, want)
	}
	wide := LimitsOfWidth(6)
	for k := range wide.Arm {
		for d, q := range wide.Arm[k] {
			if !(q < l.Arm[k][d]) || !(q > 0.5) {
				t.Errorf("bound %d,%d: %.3f for 6 px, %.3f for 1.8 px", k, d, q, l.Arm[k][d])
			}
		}
	}
	measured := LimitsOf(&roundProfile{fwhm: 1.8, radius: 7}, 100, 100)
	if math.Abs(measured.Arm[0][0]-l.Arm[0][0]) > 1e-6 {
		t.Errorf("measured %.5f, from the width %.5f", measured.Arm[0][0], l.Arm[0][0])
	}
}

// TestDirty searches invented frames with every kind of fault. The defects are
// the simulator's own record.
func TestDirty(t *testing.T) {
	var strong, strongFound, column, columnFound, falseHit, falseColumn, px, touched, all int
	for seed := uint64(301); seed <= 303; seed++ {
		s := photograph(t, "dirty", 768, seed)
		before := s.in.Flags.Clone()
		r, err := Find(s.in, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		e := s.exposure
		near := dilated(e.Defects, e.Width, e.Height, 2)
		for k, d := range e.Defects {
			if before.Bits[k]&frame.Unusable != 0 {
				continue
			}
			px++
			got := s.in.Flags.Bits[k]
			if near[k] == 0 && got&(frame.CosmicRay|frame.Saturated|frame.Bleed) != 0 {
				falseHit++
			}
			if d&simulate.DefectColumn == 0 && got&frame.BadColumn != 0 {
				falseColumn++
			}
			if d&simulate.DefectColumn != 0 {
				column++
				if got&frame.BadColumn != 0 {
					columnFound++
				}
			} else if d&(simulate.DefectCosmicRay|simulate.DefectHot) != 0 && got&frame.Streak == 0 && s.permitted(k, &r.Limits, r.Gain) > 5 {
				strong++
				if got&frame.Unusable != 0 {
					strongFound++
				}
			}
		}
		a, b := s.touched(frame.CosmicRay | frame.BadColumn)
		touched, all = touched+a, all+b
		if len(r.Streaks) != 1 {
			t.Errorf("seed %d: %d trails, want 1", seed, len(r.Streaks))
			continue
		}
		if d := angleBetween(r.Streaks[0].Angle, trueAngle(e)); d > 0.1 {
			t.Errorf("seed %d: angle of the trail wrong by %.3f deg", seed, d)
		}
	}
	t.Logf("hit pixels over 5 sigma: %d of %d; column pixels: %d of %d; stars touched: %d of %d", strongFound, strong, columnFound, column, touched, all)
	if strong < 800 || float64(strongFound) < 0.93*float64(strong) {
		t.Errorf("%d of %d hit pixels over 5 sigma found", strongFound, strong)
	}
	if column < 4000 || float64(columnFound) < 0.99*float64(column) {
		t.Errorf("%d of %d pixels of bad columns found", columnFound, column)
	}
	if falseHit > px/1000000+1 || falseColumn > column/100 {
		t.Errorf("%d pixels called hits and %d called bad column wrongly, of %d", falseHit, falseColumn, px)
	}
	if all < 2500 || touched > 0 {
		t.Errorf("%d of %d stars carry a flag", touched, all)
	}
}

// trueAngle fits the axis of the simulator's trail: the mean of its pixels row
// by row or column by column, away from the frame's edge.
func trueAngle(e *simulate.Exposure) float64 {
	fit := func(steep bool) (slope float64, n float64) {
		var s, st, so, stt, sto float64
		a, b := e.Width, e.Height
		if steep {
			a, b = b, a
		}
		for p := range a {
			first, last := -1, -1
			for q := range b {
				k := q*e.Width + p
				if steep {
					k = p*e.Width + q
				}
				if e.Defects[k]&simulate.DefectStreak != 0 {
					if first < 0 {
						first = q
					}
					last = q
				}
			}
			if first <= 0 || last >= b-1 {
				continue
			}
			t, o := float64(p), float64(first+last)/2
			s++
			st += t
			so += o
			stt += t * t
			sto += t * o
		}
		return (s*sto - st*so) / (s*stt - st*st), s
	}
	flat, n := fit(false)
	if steep, m := fit(true); m > n {
		return math.Atan2(1, steep) * 180 / math.Pi
	}
	return math.Atan(flat) * 180 / math.Pi
}

// TestClean searches frames without any fault: nothing is flagged, no trail is
// invented, no star is touched, in dense fields, on bright galaxies and with
// stars of 1.8 px.
func TestClean(t *testing.T) {
	for _, c := range []struct {
		name  string
		seeds uint64
	}{{"plain", 1}, {"crowded", 2}, {"undersampled", 2}, {"bright_hosts", 1}, {"low_counts", 1}, {"strong_psf_variation", 1}, {"broad", 1}, {"gradient", 1}} {
		flagged, px, touched, all := 0, 0, 0, 0
		for seed := 400 + uint64(0); seed < 400+c.seeds; seed++ {
			s := photograph(t, c.name, 512, seed)
			before := s.in.Flags.Clone()
			r, err := Find(s.in, DefaultConfig())
			if err != nil {
				t.Fatal(err)
			}
			for k, b := range before.Bits {
				px++
				if s.in.Flags.Bits[k] != b {
					flagged++
				}
			}
			a, b := s.touched(frame.CosmicRay | frame.BadColumn | frame.Streak | frame.Bleed)
			touched, all = touched+a, all+b
			if len(r.Streaks)+len(r.Lines)+r.Dead+r.Plateaus > 0 {
				t.Errorf("%s %d: %+v", c.name, seed, r)
			}
		}
		if flagged > 1 || touched > 0 || all == 0 {
			t.Errorf("%s: %d of %d pixels flagged, %d of %d stars touched", c.name, flagged, px, touched, all)
		}
	}
}

// TestHitsOnStars: hits on the flanks of bright stars are found where they
// exceed what the star's neighbours permit, and the stars' own cores are kept.
func TestHitsOnStars(t *testing.T) {
	in := noiseFrame(400, 400, 8)
	rng := rand.New(rand.NewPCG(8, 8))
	var hits []int
	for b := range 9 {
		for a := range 9 {
			x, y := 40+40*float64(a)+rng.Float64(), 40+40*float64(b)+rng.Float64()
			addStar(in.Image, x, y, 3, 20000)
			i, j := int(math.Round(x))-1+2, int(math.Round(y))-1+rng.IntN(3)
			hits = append(hits, j*400+i)
		}
	}
	for k, v := range in.Image.Pix {
		in.Image.Pix[k] += float32(rng.NormFloat64() * math.Sqrt(max(0, float64(v))))
	}
	for _, k := range hits {
		in.Image.Pix[k] += 2000
	}
	if _, err := Find(in, DefaultConfig()); err != nil {
		t.Fatal(err)
	}
	found, extra := 0, 0
	for k, b := range in.Flags.Bits {
		isHit := slices.Contains(hits, k)
		switch {
		case b&frame.CosmicRay != 0 && isHit:
			found++
		case b != 0:
			extra++
		}
	}
	if found < 76 || extra > 20 {
		t.Errorf("%d of 81 hits found, %d other pixels flagged", found, extra)
	}
}

// TestPixelsAndLines: single hot and dead pixels, also on light; parts of rows
// and columns, hot, dead, two wide, across a star.
func TestPixelsAndLines(t *testing.T) {
	in := noiseFrame(300, 260, 9)
	addStar(in.Image, 100, 100, 4, 60000)
	rng := rand.New(rand.NewPCG(9, 9))
	for k, v := range in.Image.Pix {
		in.Image.Pix[k] += float32(rng.NormFloat64() * math.Sqrt(max(0, float64(v))))
	}
	p := in.Image.Pix
	at := func(i, j int) *float32 { return &p[j*300+i] }
	*at(20, 20) = 15
	*at(30, 200) = -15
	*at(98, 99) = -20 // dead, on the star
	for j := 40; j < 200; j++ {
		*at(100, j) += 4 // hot, through the star
		*at(160, j) = -30
	}
	for i := range 300 {
		*at(i, 230) -= 6
		if i > 180 {
			*at(i, 60) = 25
		}
	}
	r, err := Find(in, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	bits := func(i, j int) frame.Flag { return in.Flags.Bits[j*300+i] }
	if bits(20, 20) != frame.CosmicRay || bits(30, 200) != frame.BadColumn || bits(98, 99)&frame.BadColumn == 0 {
		t.Errorf("hot %v, dead %v, dead on a star %v", bits(20, 20), bits(30, 200), bits(98, 99))
	}
	want := []struct {
		row, dead    bool
		at, from, to int
		slack        int
	}{{false, true, 161, 41, 200, 3}, {true, true, 231, 1, 300, 4}, {false, false, 101, 41, 200, 12}, {true, false, 61, 182, 300, 3}}
	for _, w := range want {
		ok := false
		for _, l := range r.Lines {
			ok = ok || l.Row == w.row && l.Dead == w.dead && l.At == w.at && abs(l.From-w.from) <= w.slack && abs(l.To-w.to) <= w.slack
		}
		if !ok {
			t.Errorf("%+v is missing", w)
		}
	}
	if len(r.Lines) != len(want) {
		t.Errorf("%d lines: %+v", len(r.Lines), r.Lines)
	}
	other := 0
	for k, b := range in.Flags.Bits {
		i, j := k%300, k/300
		if b != 0 && i != 100 && i != 160 && j != 230 && j != 60 && k != 20*300+20 && k != 200*300+30 && k != 99*300+98 {
			other++
		}
	}
	if other > 4 {
		t.Errorf("%d other pixels flagged", other)
	}
}

// TestPlateaus: a frame whose header names no saturation level.
func TestPlateaus(t *testing.T) {
	for _, seed := range []uint64{51} {
		p, err := simulate.Scenario("dirty", 640, seed)
		if err != nil {
			t.Fatal(err)
		}
		path := filepath.Join(t.TempDir(), "new.fits")
		if err := p.New[0].Write(path); err != nil {
			t.Fatal(err)
		}
		kw := load.DefaultKeywords()
		kw.Saturation = nil
		f, err := load.Frame(path, kw)
		if err != nil {
			t.Fatal(err)
		}
		// The loader looks for plateaus as well: here they are to be found anew.
		f.Meta.Saturation = math.NaN()
		for k := range f.Flags.Bits {
			f.Flags.Bits[k] &^= frame.Saturated | frame.Bleed
		}
		s := scene{p.New[0], p.Scene, measure(t, f)}
		r, err := Find(s.in, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		full, found, wrong := 0, 0, 0
		for k, v := range f.Image.Pix {
			got := f.Flags.Bits[k]&(frame.Saturated|frame.Bleed|frame.CosmicRay) != 0
			d := p.New[0].Defects[k]
			if d&(simulate.DefectSaturated) != 0 && v > 60000 && d&simulate.DefectColumn == 0 {
				full++
				if got {
					found++
				}
			}
			if f.Flags.Bits[k]&frame.Saturated != 0 && v < 0.95*60000 {
				wrong++
			}
		}
		t.Logf("%d of %d full pixels found in %d groups at %g", found, full, r.Plateaus, r.Saturated)
		if full < 100 || float64(found) < 0.9*float64(full) || wrong > 0 {
			t.Errorf("%d of %d full pixels found, %d wrong", found, full, wrong)
		}
		if math.Abs(r.Saturated/61200-1) > 0.005 { // 60000 by the header, full at 1.02 of it
			t.Errorf("level %g, want 61200", r.Saturated)
		}
	}
}

// TestUgly: nothing panics, and nothing without data is judged.
func TestUgly(t *testing.T) {
	nan, inf := float32(math.NaN()), float32(math.Inf(1))
	rng := rand.New(rand.NewPCG(4, 4))
	for _, size := range [][2]int{{1, 1}, {2, 1}, {1, 7}, {3, 3}, {5, 40}, {129, 130}, {200, 131}, {31, 300}, {700, 130}} {
		w, h := size[0], size[1]
		for kind := range 7 {
			in := noiseFrame(w, h, uint64(kind))
			for k := range in.Image.Pix {
				switch kind {
				case 0:
					in.Image.Pix[k] = nan
				case 1:
					in.Flags.Bits[k] = frame.NoData
				case 2:
					in.Variance.Pix[k] = 0
				case 3:
					switch rng.IntN(5) {
					case 0:
						in.Image.Pix[k] = nan
					case 1:
						in.Image.Pix[k] = inf
					case 2:
						in.Variance.Pix[k] = nan
					case 3:
						in.Image.Pix[k] = float32(rng.NormFloat64()) * 1e30
					}
				case 4:
					in.Image.Pix[k] = 5
				case 5:
					in.Image.Pix[k] = math.MaxFloat32
				case 6:
					in.Variance.Pix[k] = 1e-40
				}
			}
			if kind == 4 {
				in.FWHM, in.Gain = math.NaN(), math.NaN()
				in.Counts = in.Image
			}
			if _, err := Find(in, DefaultConfig()); err != nil {
				t.Error(err)
			}
			for k, b := range in.Flags.Bits {
				if kind == 0 && b != 0 || kind == 2 && b != 0 {
					t.Fatalf("%d×%d: pixel %d without data is flagged %v", w, h, k, b)
				}
			}
		}
	}
}

// TestConfiguration: what cannot work is an error, the caller's mistakes panic.
func TestConfiguration(t *testing.T) {
	for _, change := range []func(*Config){
		func(c *Config) { c.HitSigma = math.NaN() }, func(c *Config) { c.GrowSigma = 0 }, func(c *Config) { c.ColumnSum = 1 }, func(c *Config) { c.StreakLength = 3 },
	} {
		cfg := DefaultConfig()
		change(&cfg)
		if _, err := Find(noiseFrame(20, 20, 1), cfg); err == nil {
			t.Errorf("%+v is accepted", cfg)
		}
	}
	defer func() {
		if recover() == nil {
			t.Error("planes of unequal shape do not panic")
		}
	}()
	in := noiseFrame(20, 20, 1)
	in.Variance = frame.NewImage(20, 21)
	_, _ = Find(in, DefaultConfig())
}

// TestRepeats: equal inputs give equal flags.
func TestRepeats(t *testing.T) {
	s := photograph(t, "dirty", 512, 6)
	first := s.in
	first.Flags = s.in.Flags.Clone()
	second := s.in
	second.Flags = s.in.Flags.Clone()
	a, err := Find(first, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	b, err := Find(second, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(first.Flags.Bits, second.Flags.Bits) || a.Hits != b.Hits || !slices.Equal(a.Streaks, b.Streaks) || !slices.Equal(a.Lines, b.Lines) {
		t.Error("two runs differ")
	}
}

// dilated grows each set of bits by a square of radius r.
func dilated(d []uint16, w, h, r int) []uint16 {
	out := make([]uint16, len(d))
	for k, v := range d {
		if v == 0 {
			continue
		}
		i, j := k%w, k/w
		for y := max(0, j-r); y <= min(h-1, j+r); y++ {
			for x := max(0, i-r); x <= min(w-1, i+r); x++ {
				out[y*w+x] |= v
			}
		}
	}
	return out
}
