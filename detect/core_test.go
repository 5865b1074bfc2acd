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
		for seed := range uint64(3) {
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
