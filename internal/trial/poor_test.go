package trial

import (
	"context"
	"errors"
	"math"
	"path/filepath"
	"testing"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/score"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// Frames that something is wrong with are searched with honest figures or set
// aside with a reason; never a difference that looks fine and is wrong.
func TestPoorFramesAreHonest(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	for _, c := range []struct {
		name  string
		tune  func(n, r *simulate.Conditions)
		spoil func(e *simulate.Exposure)
	}{
		{name: "trailed", tune: func(n, r *simulate.Conditions) { n.PSF.E1, n.PSF.FWHM = 0.55, 5 }},
		{name: "out of focus", tune: func(n, r *simulate.Conditions) { n.PSF.FWHM = 13 }},
		{name: "patchy cloud", tune: func(n, r *simulate.Conditions) { n.Patchy, n.Transparency = 0.35, 0.6 }},
		{name: "shallow reference", tune: func(n, r *simulate.Conditions) { r.Stack, r.Sky = 1, 4*n.Sky }},
		{name: "half masked", spoil: func(e *simulate.Exposure) {
			for i := range e.Pix {
				if i%e.Width > e.Width/2 {
					e.Pix[i] = float32(math.NaN())
				}
			}
			e.Integers = false
		}},
	} {
		p, err := simulate.Varied("plain", simulate.Change{Tune: c.tune}, 600, 77)
		if err != nil {
			t.Fatal(err)
		}
		if c.spoil != nil {
			c.spoil(p.New[0])
		}
		found, sky, err := searchOne(t, p)
		var problem *frame.Problem
		switch {
		case errors.As(err, &problem):
			t.Logf("%s: set aside, %v", c.name, err)
			continue
		case err != nil:
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		likely, wrong := 0, 0
		for i := range found {
			if found[i].RealProbability < 0.5 {
				continue
			}
			likely++
			near := false
			for _, s := range p.Truth.Sources {
				near = near || math.Hypot(s.X-found[i].X, s.Y-found[i].Y) < 8
			}
			if !near {
				wrong++
			}
		}
		t.Logf("%s: %s; %d candidates of p ≥ 0.5, %d of them false", c.name, sky, likely, wrong)
		if sky.N > 1000 && (math.Abs(sky.Mean) > 0.15 || sky.Spread < 0.9 || sky.Spread > 1.15) {
			t.Errorf("%s: searched, but SIGNIFICANCE on empty sky has %s", c.name, sky)
		}
		if wrong > 3 {
			t.Errorf("%s: %d false candidates of p ≥ 0.5 on a third of a megapixel", c.name, wrong)
		}
	}
}

func searchOne(t *testing.T, p *simulate.Pairs) ([]detect.Candidate, score.Sky, error) {
	t.Helper()
	dir := t.TempDir()
	if err := p.Write(dir); err != nil {
		t.Fatal(err)
	}
	n, err := load.Frame(filepath.Join(dir, p.New[0].Name+".fits"), load.DefaultKeywords())
	if err != nil {
		return nil, score.Sky{}, err
	}
	r, err := load.Frame(filepath.Join(dir, p.Reference.Name+".fits"), load.DefaultKeywords())
	if err != nil {
		return nil, score.Sky{}, err
	}
	pair, err := align.Align(context.Background(), n, r, align.DefaultConfig())
	if err != nil {
		return nil, score.Sky{}, err
	}
	d, err := subtract.Subtract(context.Background(), pair, subtract.DefaultConfig())
	if err != nil {
		return nil, score.Sky{}, err
	}
	found, err := detect.Detect(context.Background(), d, detect.DefaultConfig())
	return found, score.EmptySky(d.Significance.Pix, p.EmptySky(0, 1.5)), err
}
