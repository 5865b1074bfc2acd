package artefacts

import (
	"math"
	"path/filepath"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/simulate"
	"nightsift/internal/stars"
)

// scene is an invented exposure, read and measured as the chain does it.
type scene struct {
	exposure *simulate.Exposure
	sky      *simulate.Scene
	in       Input
}

// photograph renders the new frame of a scenario.
func photograph(t testing.TB, name string, size int, seed uint64) scene {
	t.Helper()
	p, err := simulate.Scenario(name, size, seed)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "new.fits")
	if err := p.New[0].Write(path); err != nil {
		t.Fatal(err)
	}
	f, err := load.Frame(path, load.DefaultKeywords())
	if err != nil {
		t.Fatal(err)
	}
	return scene{p.New[0], p.Scene, measure(t, f)}
}

// measure takes sky, variance and stars of a frame.
func measure(t testing.TB, f *frame.Frame) Input {
	t.Helper()
	bg, err := stars.EstimateBackground(f.Image, f.Flags, stars.DefaultBackgroundConfig())
	if err != nil {
		t.Fatal(err)
	}
	if _, err := stars.EstimateVariance(f, bg); err != nil {
		t.Fatal(err)
	}
	sub := frame.NewImage(f.Image.Width, f.Image.Height)
	bg.Subtract(sub, f.Image)
	list, err := stars.Find(sub, bg, f.Flags, f.Meta.Gain, stars.DefaultFindConfig())
	if err != nil {
		t.Fatal(err)
	}
	return Input{Image: sub, Variance: f.Variance, Flags: f.Flags, Counts: f.Image, FWHM: list.FWHM, Gain: f.Meta.Gain, Stars: list.Stars}
}

// starPixels counts stars on the frame whose core (within 1.2 FWHM and at least
// 1.5 px) holds a flag in bits, where no defect is within 4 px.
func (s *scene) touched(bits frame.Flag) (touched, all int) {
	e := s.exposure
	c := &e.Conditions.Camera
	r := max(1.5, 1.2*e.Conditions.PSF.FWHM)
	for _, st := range s.sky.Stars {
		x, y := c.SkyToPixel(st.RA, st.Dec)
		if !(x > r+5 && y > r+5 && x < float64(e.Width)-r-5 && y < float64(e.Height)-r-5) {
			continue
		}
		bad, dirty := false, false
		n := int(r) + 4
		for j := int(y) - 1 - n; j <= int(y)-1+n; j++ {
			for i := int(x) - 1 - n; i <= int(x)-1+n; i++ {
				if i < 0 || j < 0 || i >= e.Width || j >= e.Height {
					continue
				}
				k := j*e.Width + i
				if e.Defects[k] != 0 {
					dirty = true
				}
				if math.Hypot(float64(i+1)-x, float64(j+1)-y) <= r && s.in.Flags.Bits[k]&bits != 0 {
					bad = true
				}
			}
		}
		if dirty {
			continue
		}
		all++
		if bad {
			touched++
		}
	}
	return
}

// permitted is by how many sigma pixel k stands above what the true light lets
// its neighbours' bounds permit, noise aside: the most over all bounds.
func (s *scene) permitted(k int, l *Limits, gain float64) float64 {
	e := s.exposure
	w, h := e.Width, e.Height
	i, j := k%w, k/w
	best := math.Inf(-1)
	c := float64(s.in.Image.Pix[k])
	for d, dir := range directions {
		for step := 1; step <= arms; step++ {
			x0, y0, x1, y1 := i-step*dir[0], j-step*dir[1], i+step*dir[0], j+step*dir[1]
			if min(x0, x1, y0, y1) < 0 || max(x0, x1) >= w || max(y0, y1) >= h {
				continue
			}
			pred := l.Arm[d][step-1] * float64(e.Light[y0*w+x0]+e.Light[y1*w+x1])
			best = max(best, (c-pred)/math.Sqrt(float64(s.in.Variance.Pix[k])+max(0, pred)/gain))
		}
	}
	return best
}
