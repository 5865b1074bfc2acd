package lightcurve

import (
	"context"
	"math"
	"math/rand/v2"
	"path/filepath"
	"testing"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/psf"
	"nightsift/internal/robust"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// section makes a square of noise with a source of the given counts in it.
func section(r *rand.Rand, grid *psf.Grid, x, y, sigma, counts, gain float64) *subtract.Section {
	const side = 41
	s := &subtract.Section{Name: "f", Meta: frame.UnknownMeta(), PSF: grid, X: x, Y: y,
		Image: frame.NewImage(side, side), Variance: frame.NewImage(side, side), Significance: frame.NewImage(side, side), Flags: frame.NewMask(side, side)}
	s.Meta.Gain, s.Meta.MidMJD = gain, 61000
	s.Info.ZeroPoint, s.Info.ZeroPointErr = 25, math.NaN()
	s.I0, s.J0 = int(math.Round(x))-1-side/2, int(math.Round(y))-1-side/2
	stamp := make([]float32, side*side)
	grid.Render(stamp, side, x, y, x-math.Round(x), y-math.Round(y))
	for k := range s.Image.Pix {
		light := counts * float64(stamp[k])
		s.Image.Pix[k] = float32(light + math.Sqrt(sigma*sigma+max(light, 0)/gain)*r.NormFloat64())
		s.Variance.Pix[k] = float32(sigma * sigma)
	}
	return s
}

func gaussianGrid(fwhm float64) *psf.Grid {
	sigma := fwhm / 2.3548
	return psf.NewGrid(200, 200, 1, 1, 31, 4, func(dst []float32, x, y, dx, dy float64) {
		bin := func(d float64) float64 {
			return (math.Erf((d+0.5)/(sigma*math.Sqrt2)) - math.Erf((d-0.5)/(sigma*math.Sqrt2))) / 2
		}
		for j := range 31 {
			for i := range 31 {
				dst[j*31+i] = float32(bin(float64(i-15)-dx) * bin(float64(j-15)-dy))
			}
		}
	})
}

func TestForcedFluxIsUnbiased(t *testing.T) {
	grid := gaussianGrid(3.1)
	r := rand.New(rand.NewPCG(5, 6))
	const n = 3000
	for _, counts := range []float64{0, 150, 3000, 60000} {
		var sum, square, relative float64
		for range n {
			s := section(r, grid, 100+r.Float64(), 100+r.Float64(), 10, counts, 1.5)
			p := measure(s, 0.5)
			if p.Status != Measured {
				t.Fatalf("%s: %s", p.Status, p.Reason)
			}
			pull := (p.Counts - counts) / p.CountsErr
			sum, square, relative = sum+pull, square+pull*pull, relative+p.Counts/counts
		}
		mean, spread := sum/n, math.Sqrt(square/n)
		t.Logf("%6.0f counts: mean pull %+.3f, spread %.3f", counts, mean, spread)
		// A pull's mean is known to 1/√n = 0.018; at little signal the error grows with the
		// noise of the flux, which skews it a little.
		if math.Abs(mean) > 0.07 || math.Abs(spread-1) > 0.05 {
			t.Errorf("%g counts: mean pull %.3f, spread %.3f", counts, mean, spread)
		}
		if counts > 1000 && math.Abs(relative/n-1) > 0.003 {
			t.Errorf("%g counts: mean flux is %.5f of the true one", counts, relative/n)
		}
	}
}

// With known equal noise the error is σ/√ΣP².
func TestErrorIsTheClosedForm(t *testing.T) {
	grid := gaussianGrid(4)
	s := section(rand.New(rand.NewPCG(1, 1)), grid, 100, 100, 7, 0, math.NaN())
	p := measure(s, 0.5)
	// ΣP² of a Gaussian of sigma s convolved with a pixel is near 1/(4π(s² + 1/12)).
	sigma2 := math.Pow(4/2.3548, 2) + 1.0/12
	if want := 7 * math.Sqrt(4*math.Pi*sigma2); math.Abs(p.CountsErr/want-1) > 0.01 {
		t.Errorf("error %.3f, closed form %.3f", p.CountsErr, want)
	}
}

func TestBadPixels(t *testing.T) {
	grid := gaussianGrid(3)
	r := rand.New(rand.NewPCG(9, 9))
	var sum, square float64
	const n = 1500
	for range n {
		s := section(r, grid, 100, 100, 5, 800, math.Inf(1))
		// A bad column next to the middle, with a wild value.
		for j := range s.Image.Height {
			at := j*s.Image.Width + 21
			s.Flags.Bits[at], s.Image.Pix[at] = frame.BadColumn, 1e6
		}
		p := measure(s, 0.5)
		if p.Status != Measured || p.Lost < 0.1 || p.Lost > 0.4 || p.Flags&frame.BadColumn == 0 {
			t.Fatalf("%+v", p)
		}
		pull := (p.Counts - 800) / p.CountsErr
		sum, square = sum+pull, square+pull*pull
	}
	if mean, spread := sum/n, math.Sqrt(square/n); math.Abs(mean) > 0.08 || math.Abs(spread-1) > 0.06 {
		t.Errorf("mean pull %.3f, spread %.3f", mean, spread)
	}
	s := section(r, grid, 100, 100, 5, 800, 1)
	for k := range s.Flags.Bits {
		s.Flags.Bits[k] = frame.Saturated
	}
	if p := measure(s, 0.5); p.Status != Masked || p.Reason == "" || p.Counts == p.Counts {
		t.Errorf("all pixels saturated: %+v", p)
	}
	s = section(r, grid, 100, 100, 5, 800, 1)
	for k := range s.Image.Pix {
		s.Image.Pix[k] = float32(math.NaN())
	}
	if p := measure(s, 0.5); p.Status != Masked {
		t.Errorf("all pixels NaN: %+v", p)
	}
}

// difference sends an invented pair through the stages to a file.
func difference(t *testing.T, p *simulate.Pairs, dir string) string {
	t.Helper()
	if err := p.Write(dir); err != nil {
		t.Fatal(err)
	}
	read := func(name string) *frame.Frame {
		f, err := load.Frame(filepath.Join(dir, name+".fits"), load.DefaultKeywords())
		if err != nil {
			t.Fatal(err)
		}
		return f
	}
	pair, err := align.Align(context.Background(), read(p.New[0].Name), read(p.Reference.Name), align.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	d, err := subtract.Subtract(context.Background(), pair, subtract.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, "difference.fits")
	if err := d.Write(path, nil); err != nil {
		t.Fatal(err)
	}
	return path
}

// Through all stages: nothing on empty sky, with honest errors, and the fluxes
// of known sources, also on galaxies.
func TestInventedFrames(t *testing.T) {
	if raceDetector {
		t.Skip("takes long under the race detector; runs without it")
	}
	const size = 512
	var pulls, empty []float64
	var bright, weight float64
	for _, scene := range []struct {
		name string
		seed uint64
	}{{"plain", 51}, {"bright_hosts", 52}} {
		p, err := simulate.Scenario(scene.name, size, scene.seed)
		if err != nil {
			t.Fatal(err)
		}
		path := difference(t, p, t.TempDir())
		for i := range p.Truth.Sources {
			s := &p.Truth.Sources[i]
			if s.Frame != p.New[0].Name || !s.Covered || s.Trail > 0.3 {
				continue
			}
			m := Measure(path, s.RA, s.Dec, 0.3)
			if m.Status != Measured {
				continue
			}
			pulls = append(pulls, (m.Counts-s.Flux)/m.CountsErr)
			if s.SN > 20 {
				w := s.Flux * s.Flux / (m.CountsErr * m.CountsErr)
				bright, weight = bright+w*(m.Counts/s.Flux-1), weight+w
			}
		}
		sky := p.EmptySky(0, 1.5)
		sec, err := subtract.ReadSection(path, p.Truth.Sources[0].RA, p.Truth.Sources[0].Dec, 0)
		if err != nil {
			t.Fatal(err)
		}
		for y := 20; y < size-20; y += 19 {
			for x := 20; x < size-20; x += 19 {
				if !sky[(y-1)*size+x-1] {
					continue
				}
				ra, dec, err := sec.WCS.PixelToSky(float64(x)+0.3, float64(y)-0.2)
				if err != nil {
					t.Fatal(err)
				}
				if m := Measure(path, ra, dec, 0.3); m.Status == Measured {
					empty = append(empty, m.Counts/m.CountsErr)
				}
			}
		}
	}
	moments := func(v []float64) (mean, spread float64) {
		for _, x := range v {
			mean += x / float64(len(v))
		}
		_, spread = robust.MedianMAD(append([]float64(nil), v...))
		return mean, spread
	}
	mean, spread := moments(empty)
	t.Logf("%d empty places: mean %+.3f, spread %.3f of the error", len(empty), mean, spread)
	if n := float64(len(empty)); n < 300 || math.Abs(mean) > 4/math.Sqrt(n) || math.Abs(spread-1) > 4*1.2/math.Sqrt(2*n) {
		t.Errorf("empty sky: mean %.3f, spread %.3f over %d places", mean, spread, len(empty))
	}
	mean, spread = moments(pulls)
	t.Logf("%d sources: mean pull %+.3f, spread %.3f; S/N > 20: flux off by %+.4f ± %.4f", len(pulls), mean, spread, bright/weight, 1/math.Sqrt(weight))
	if n := float64(len(pulls)); n < 30 || math.Abs(mean) > 4/math.Sqrt(n) || math.Abs(spread-1) > 5*1.2/math.Sqrt(2*n) {
		t.Errorf("sources: mean pull %.3f, spread %.3f over %d", mean, spread, len(pulls))
	}
	// Few stars make the point-spread function of so small a frame: its sum is
	// known to about one percent.
	if math.Abs(bright/weight) > 0.01+3/math.Sqrt(weight) {
		t.Errorf("bright sources: flux off by %+.4f", bright/weight)
	}
}
