package detect

import (
	"math"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/realbogus"
)

// The number of noise peaks is what the closed form says, for peaks between
// the pixels: Adler's formula through realbogus.PeakDensity.
func TestNoisePeaksAgainstClosedForm(t *testing.T) {
	for _, sigma := range []float64{0.85, 1.3, 2} {
		g := gaussian{sigma, 1.15 * sigma}
		counts := map[float64]float64{}
		var area float64
		var rootDet float64
		for seed := range uint64(2) {
			s := newScene(1000, 1000, g, 5, 900+seed)
			s.score()
			sr, err := newSearch(&s.input, &Config{Threshold: 5, MaxPeaks: 1e6, Rates: realbogus.DefaultRates()}, realbogus.Prior())
			if err != nil {
				t.Fatal(err)
			}
			rootDet = sr.rootDet
			var sc scanner
			peaks, _ := sc.find(s.significance, 2.5, 2.5)
			const margin = 20
			for _, p := range peaks {
				if p.x < margin || p.y < margin || p.x > 1000-margin || p.y > 1000-margin {
					continue
				}
				for _, u := range []float64{3.5, 4, 4.5} {
					if math.Abs(p.s) >= u {
						counts[u]++
					}
				}
			}
			area += sq(1000 - 2*margin)
		}
		for _, u := range []float64{3.5, 4, 4.5} {
			want := 2 * realbogus.PeakDensity(rootDet, u) * area
			t.Logf("sigma %.2f px, %.1f sigma: %4.0f peaks, closed form %6.1f", sigma, u, counts[u], want)
			if math.Abs(counts[u]-want) > 3.5*math.Sqrt(want)+0.05*want {
				t.Errorf("sigma %.2f px, above %.1f: %.0f peaks, expected %.1f", sigma, u, counts[u], want)
			}
		}
	}
}

// Peaks between pixels: the height does not depend on where a source falls.
func TestInterpolatedPeak(t *testing.T) {
	for _, fwhm := range []float64{1.8, 2.5, 5} {
		g := gaussian{fwhm / 2.3548, fwhm / 2.3548}
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, d := range []float64{0, 0.2, 0.5} {
			for _, e := range []float64{0, 0.3, 0.5} {
				s := newScene(61, 61, g, 1e-6, 1)
				s.sky = 1
				s.add(31+d, 31+e, 50*s.unit())
				s.score()
				var sc scanner
				peaks, _ := sc.find(s.significance, 3, 3)
				if len(peaks) == 0 {
					t.Fatal("no peak")
				}
				p := peaks[0]
				lo, hi = math.Min(lo, p.s), math.Max(hi, p.s)
				if math.Hypot(p.x-31-d, p.y-31-e) > 0.03 {
					t.Errorf("FWHM %g: peak at (%g,%g), source at (%g,%g)", fwhm, p.x, p.y, 31+d, 31+e)
				}
			}
		}
		t.Logf("FWHM %g: interpolated peaks of a 50 sigma source from %.2f to %.2f", fwhm, lo, hi)
		if hi/lo > 1.06 {
			t.Errorf("FWHM %g: peak height depends on the pixel phase: %g to %g", fwhm, lo, hi)
		}
	}
}

// What each form is called.
func TestKinds(t *testing.T) {
	cfg := DefaultConfig()
	for _, psf := range []renderer{gaussian{0.9, 0.9}, gaussian{1.3, 1.3}, moffat{4, 3}, gaussian{3, 3.3}} {
		fwhm := newLocalPSF(psf, 1, 1, psfScale(psf, 1, 1), 12).fwhm
		s := newScene(700, 700, psf, 10, 42)
		u := s.unit()
		type want struct {
			x, y float64
			kind []Kind
			what string
		}
		var wants []want
		put := func(x, y float64, what string, kind ...Kind) { wants = append(wants, want{x, y, kind, what}) }

		s.add(60.3, 60.6, 8*u)
		put(60.3, 60.6, "faint source", NewSource)
		s.add(160.5, 60.5, 300*u)
		put(160.5, 60.5, "bright source", NewSource)
		s.add(260.2, 60.5, -12*u)
		put(260.2, 60.5, "faded", Faded)
		s.places = append(s.places, place{360.1, 60.2, 500 * u})
		s.add(360.3, 60.2, 15*u)
		put(360.3, 60.2, "brightened", Brightened)
		// A dipole: the same star twice, opposite, 0.8 FWHM apart.
		s.add(460, 60, 80*u)
		s.add(460+0.8*fwhm, 60.4, -76*u)
		put(460+0.4*fwhm, 60.2, "dipole", Dipole)
		// A hit on one pixel, and on a short track.
		s.image.Pix[159*700+59] += float32(60 + 60*fwhm)
		put(60, 160, "one-pixel hit", CosmicRay)
		if fwhm > 2.5 {
			for k := range 5 {
				s.image.Pix[(159+k)*700+159+k/2] += 300
			}
			put(160.8, 162, "track", CosmicRay)
		}
		// A mover: trail of three FWHM.
		const steps = 60
		length := 3 * fwhm
		for k := range steps {
			f := (float64(k)+0.5)/steps - 0.5
			s.add(300+length*f*0.8, 160+length*f*0.6, 60*u/steps)
		}
		put(300, 160, "trail", Moving)
		// A streak across the frame.
		const dots = 1800
		for k := range dots {
			f := (float64(k) + 0.5) / dots
			s.add(700*f, 300+150*f, 6*u*700/fwhm/dots)
		}
		// Extended residue: many times wider than the PSF.
		wide := gaussian{1.6 * fwhm, 1.6 * fwhm}
		keep := s.psf
		s.psf = wide
		s.add(560, 160, 60*s.unit())
		s.psf = keep
		put(560, 160, "extended", Artefact)
		// A source on a masked column: most of its light cannot be used.
		for j := 540; j < 600; j++ {
			for i := range int(fwhm + 1) {
				s.flags.Bits[j*700+200+i] = frame.BadColumn
			}
		}
		s.add(201.5, 570, 50*u)
		// Two close sources.
		s.add(400, 570, 40*u)
		s.add(400+1.6*fwhm, 570.5, 30*u)
		put(400, 570, "blend, first", NewSource)
		put(400+1.6*fwhm, 570.5, "blend, second", NewSource)

		s.score()
		found := s.find(t, cfg)
		used := map[*Candidate]bool{}
		for _, w := range wants {
			c := nearest(found, w.x, w.y, 1.2*fwhm)
			if c == nil {
				t.Errorf("FWHM %.1f: %s at (%.1f,%.1f) not found", fwhm, w.what, w.x, w.y)
				continue
			}
			used[c] = true
			ok := false
			for _, k := range w.kind {
				ok = ok || c.Kind == k
			}
			t.Logf("FWHM %.1f: %-14s S %+7.1f %-11s p %.3f chi2 %.2f", fwhm, w.what, c.Significance, c.Kind, c.RealProbability, c.FitChi2)
			if !ok {
				t.Errorf("FWHM %.1f: %s is called %s", fwhm, w.what, c.Kind)
			}
			real := false
			switch c.Kind {
			case NewSource, Brightened, Faded:
				real = true
			}
			if ok && c.Kind != Moving && real != (c.RealProbability > 0.5) {
				t.Errorf("FWHM %.1f: %s has probability %.3f", fwhm, w.what, c.RealProbability)
			}
		}
		streaks, rest := 0, 0
		for k := range found {
			c := &found[k]
			switch {
			case c.Kind == Streak:
				streaks++
				t.Logf("FWHM %.1f: streak of %.0f px at %.1f deg, flux %.4g ± %.2g (put in %.4g) at (%.0f,%.0f)", fwhm, c.Length, c.Angle, c.Flux, c.FluxErr, 6*u*700/fwhm, c.X, c.Y)
				if math.Abs(c.Angle-12.09) > 0.3 || c.Length < 650 {
					t.Errorf("FWHM %.1f: streak of %g px at %g deg, put in 716 px at 12.1 deg", fwhm, c.Length, c.Angle)
				}
				if math.Abs(c.Flux/(6*u*700/fwhm)-1) > 0.05 {
					t.Errorf("streak flux %g, put in %g", c.Flux, 6*u*700/fwhm)
				}
			case !used[c] && !(c.Y > 530 && c.X > 180 && c.X < 225):
				rest++
				t.Logf("FWHM %.1f: left over: (%.1f,%.1f) S %.1f %s p %.2f", fwhm, c.X, c.Y, c.Significance, c.Kind, c.RealProbability)
			}
		}
		if streaks != 1 {
			t.Errorf("FWHM %.1f: %d streaks, expected 1", fwhm, streaks)
		}
		if rest > 2 {
			t.Errorf("FWHM %.1f: %d candidates that nothing explains", fwhm, rest)
		}
	}
}

// A saturated star leaves a ring of residues of both signs: few candidates,
// none of them likely, and a real source at some distance still found.
func TestSaturatedStar(t *testing.T) {
	for _, psf := range []renderer{gaussian{1.1, 1.1}, gaussian{1.8, 1.8}} {
		s := newScene(300, 300, psf, 10, 8)
		fwhm := psfScale(psf, 1, 1)
		r := 5 * fwhm
		for k := range 60 {
			a := float64(k) * 0.7
			rr := r + 2.5*fwhm*s.rng.Float64()
			s.add(150+rr*math.Cos(a), 150+rr*math.Sin(a), (20+200*s.rng.Float64())*s.unit()*math.Copysign(1, s.rng.Float64()-0.5))
		}
		for j := range 300 {
			for i := range 300 {
				if math.Hypot(float64(i-149), float64(j-149)) < r {
					s.flags.Bits[j*300+i] = frame.Saturated
				}
			}
		}
		s.add(40, 40, 20*s.unit())
		s.score()
		found := s.find(t, DefaultConfig())
		near, likely := 0, 0
		for _, c := range found {
			if math.Hypot(c.X-150, c.Y-150) < r+6*fwhm {
				near++
				if c.RealProbability > 0.5 {
					likely++
				}
			}
		}
		c := nearest(found, 40, 40, 2)
		t.Logf("FWHM %.1f: %d candidates around the star, %d likely", fwhm, near, likely)
		if near > 8 || likely > 0 {
			t.Errorf("FWHM %.1f: %d candidates around a saturated star, %d with p > 0.5", fwhm, near, likely)
		}
		if c == nil || c.RealProbability < 0.5 {
			t.Errorf("FWHM %.1f: the source far from it is lost", fwhm)
		}
	}
}

// One bright source with a PSF that is wrong by some percent is one candidate.
func TestBrightSourceIsOneCandidate(t *testing.T) {
	for _, fwhm := range []float64{2, 3, 6} {
		g := gaussian{fwhm / 2.3548, fwhm / 2.3548}
		s := newScene(120, 120, g, 10, 4)
		wrong := gaussian{g.sx * 1.02, g.sy * 0.985}
		s.psf = wrong
		s.add(60.3, 59.6, 2000*s.unit())
		s.psf = g
		s.score()
		found := s.find(t, DefaultConfig())
		if len(found) != 1 {
			for _, c := range found {
				t.Logf("(%.1f,%.1f) S %.1f %s", c.X, c.Y, c.Significance, c.Kind)
			}
			t.Errorf("FWHM %g: %d candidates", fwhm, len(found))
			continue
		}
		if found[0].Kind != NewSource || found[0].RealProbability < 0.5 {
			t.Errorf("FWHM %g: called %s with p %.3f, chi-square %.1f", fwhm, found[0].Kind, found[0].RealProbability, found[0].FitChi2)
		}
	}
}

// NaN, infinities, masks everywhere, tiny frames: no panic, nothing silly.
func TestUglyPlanes(t *testing.T) {
	nan, inf := float32(math.NaN()), float32(math.Inf(1))
	ugly := []float32{nan, inf, -inf, 1e38, -1e38, 1e-40, 0}
	for seed := range uint64(6) {
		s := newScene(90, 70, gaussian{1.2, 1.2}, 10, 70+seed)
		for range 12 {
			s.add(90*s.rng.Float64(), 70*s.rng.Float64(), 60*s.unit()*s.rng.NormFloat64())
		}
		s.score()
		for range 200 {
			k := s.rng.IntN(90 * 70)
			switch s.rng.IntN(4) {
			case 0:
				s.image.Pix[k] = ugly[s.rng.IntN(len(ugly))]
			case 1:
				s.variance.Pix[k] = ugly[s.rng.IntN(len(ugly))]
			case 2:
				s.significance.Pix[k] = ugly[s.rng.IntN(len(ugly))]
			case 3:
				s.flags.Bits[k] = frame.Flag(1 << s.rng.IntN(10))
			}
		}
		s.newSub.Pix[7], s.reference.Pix[9] = nan, inf
		s.places = append(s.places, place{math.NaN(), 3, 5}, place{4, 4, math.NaN()}, place{-1e9, 1e9, 3})
		for _, c := range s.find(t, DefaultConfig()) {
			if math.IsNaN(c.X+c.Y) || math.IsNaN(c.Significance) || !(c.RealProbability >= 0 && c.RealProbability <= 1) || c.Kind == "" {
				t.Errorf("seed %d: candidate %+v", seed, c.Features)
			}
			for i, v := range c.Features {
				if math.IsNaN(v) || math.IsInf(v, 0) {
					t.Errorf("seed %d: feature %s is %g", seed, realbogus.Descriptions[i].Name, v)
				}
			}
		}
	}
	for _, size := range [][2]int{{1, 1}, {2, 40}, {40, 1}, {9, 9}} {
		s := newScene(size[0], size[1], gaussian{1.2, 1.2}, 1, 5)
		for k := range s.significance.Pix {
			s.significance.Pix[k] = float32(9 * s.rng.NormFloat64())
		}
		s.find(t, DefaultConfig())
		for k := range s.flags.Bits {
			s.flags.Bits[k] = frame.NoData
		}
		s.find(t, DefaultConfig())
	}
}

// The same input gives the same candidates, and a broken PSF is the frame's
// fault.
func TestSameAgain(t *testing.T) {
	s := newScene(200, 200, gaussian{1.2, 1.2}, 10, 70)
	for range 60 {
		s.add(200*s.rng.Float64(), 200*s.rng.Float64(), 60*s.unit()*s.rng.NormFloat64())
	}
	s.score()
	a, b := s.find(t, DefaultConfig()), s.find(t, DefaultConfig())
	if len(a) != len(b) || len(a) < 10 {
		t.Fatalf("%d and %d candidates", len(a), len(b))
	}
	for k := range a {
		if a[k].X != b[k].X || a[k].Flux != b[k].Flux || a[k].RealProbability != b[k].RealProbability || a[k].Kind != b[k].Kind {
			t.Errorf("candidate %d differs", k)
		}
	}
	s.input.psf = flat{}
	cfg := DefaultConfig()
	if _, err := newSearch(&s.input, &cfg, realbogus.Prior()); err == nil {
		t.Error("a PSF of zeros is taken")
	}
}

type flat struct{}

func (flat) Render(dst []float32, size int, x, y, dx, dy float64) { clear(dst) }

// Against the matched-filter limit: half of the sources of five sigma are
// found, nearly all of seven.
func TestCompleteness(t *testing.T) {
	found, put := map[float64]float64{}, map[float64]float64{}
	cfg := DefaultConfig()
	cfg.Stamps = false
	for seed := range uint64(3) {
		s := newScene(700, 700, gaussian{1.2, 1.2}, 10, 300+seed)
		type spot struct{ x, y, sn float64 }
		var spots []spot
		for y := 30.0; y < 680; y += 25 {
			for x := 30.0; x < 680; x += 25 {
				sn := []float64{4.5, 5, 5.5, 7}[s.rng.IntN(4)]
				p := spot{x + s.rng.Float64(), y + s.rng.Float64(), sn}
				s.add(p.x, p.y, sn*s.unit())
				spots = append(spots, p)
			}
		}
		s.score()
		list := s.find(t, cfg)
		for _, p := range spots {
			put[p.sn]++
			if nearest(list, p.x, p.y, 2) != nil {
				found[p.sn]++
			}
		}
	}
	for _, sn := range []float64{4.5, 5, 5.5, 7} {
		// The maximum over position gains 1/S on average.
		want := 0.5 * math.Erfc((5-sn-1/sn)/math.Sqrt2)
		got := found[sn] / put[sn]
		t.Logf("S/N %.1f: %.3f found, expected %.3f", sn, got, want)
		if math.Abs(got-want) > 3.5*math.Sqrt(0.25/put[sn])+0.03 {
			t.Errorf("S/N %.1f: %.3f found, expected %.3f", sn, got, want)
		}
	}
}

func BenchmarkScan(b *testing.B) {
	s := newScene(2048, 2048, gaussian{1.3, 1.3}, 10, 1)
	s.significance = s.image.Clone() // white noise: more peaks than a filtered plane
	for k := range s.significance.Pix {
		s.significance.Pix[k] *= 0.1
	}
	var sc scanner
	b.SetBytes(int64(len(s.significance.Pix)))
	for b.Loop() {
		sc.find(s.significance, 3, 3.5)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(s.significance.Pix)), "ns/px")
}

// One field of many sources: the time of a candidate, stamps included.
func BenchmarkSearch(b *testing.B) {
	s := newScene(1000, 1000, gaussian{1.3, 1.3}, 10, 5)
	for range 300 {
		s.add(1000*s.rng.Float64(), 1000*s.rng.Float64(), (8+40*s.rng.Float64())*s.unit())
	}
	s.score()
	n := 0
	for b.Loop() {
		n = len(s.find(b, DefaultConfig()))
	}
	b.ReportMetric(float64(b.Elapsed().Microseconds())/float64(b.N)/float64(n), "µs/candidate")
}
