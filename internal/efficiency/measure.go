package efficiency

import (
	"context"
	"math"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/subtract"
)

// Result is what was measured on one frame.
type Result struct {
	Injections []Injection
	Rounds     int

	// HasMagnitudes tells whether the frame has a zero point. Without one the
	// curve is that of magnitudes relative to one count.
	HasMagnitudes bool
	Curve         *Curve // nil where the sources were too few or met all the same fate
	Width, Height int    // px
	Limit5        float64
}

// Chain holds what the stages need for a frame.
type Chain struct {
	Align     align.Config
	Subtract  subtract.Config
	Detect    detect.Config
	Reference *align.PreparedReference
	Mark      func(*align.Pair) // sets the standards of a pair; may be nil
}

// search is a frame as it was searched, without sources put in.
type search struct {
	solution   *subtract.Solution
	difference *subtract.Difference
	candidates []detect.Candidate
	detect     detect.Config
}

// rerun searches the frame with sources put in.
type rerun func(ctx context.Context, lights []subtract.Light) ([]detect.Candidate, error)

// Shared measures a frame that was just searched with what that search solved.
// candidates are what the search found. The difference is not changed.
func Shared(ctx context.Context, s *subtract.Solution, d *subtract.Difference, candidates []detect.Candidate, dc detect.Config, cfg Config) (*Result, error) {
	dc.Stamps = false
	w := search{s, d, candidates, dc}
	return w.measure(ctx, cfg, func(ctx context.Context, lights []subtract.Light) ([]detect.Candidate, error) {
		injected, err := s.With(ctx, lights)
		if err != nil {
			return nil, err
		}
		return detect.Detect(ctx, injected, dc)
	})
}

// Full measures a frame by repeating all stages for every round of sources. The
// frame is not changed. An error may be a *frame.Problem: the frame cannot be
// searched, with or without the sources.
func Full(ctx context.Context, n *frame.Frame, c Chain, cfg Config) (*Result, error) {
	c.Detect.Stamps = false
	d, s, candidates, err := c.search(ctx, n, false)
	if err != nil {
		return nil, err
	}
	w := search{s, d, candidates, c.Detect}
	return w.measure(ctx, cfg, func(ctx context.Context, lights []subtract.Light) ([]detect.Candidate, error) {
		copied := *n
		copied.Image = n.Image.Clone()
		copied.Flags = n.Flags.Clone()
		for _, l := range lights {
			addTo(&copied, l)
		}
		_, _, found, err := c.search(ctx, &copied, true)
		return found, err
	})
}

// SharedFrom searches a frame and measures it with what the search solved.
func SharedFrom(ctx context.Context, n *frame.Frame, c Chain, cfg Config) (*Result, error) {
	c.Detect.Stamps = false
	d, s, candidates, err := c.search(ctx, n, false)
	if err != nil {
		return nil, err
	}
	return Shared(ctx, s, d, candidates, c.Detect, cfg)
}

// search sends a frame through the stages.
func (c *Chain) search(ctx context.Context, n *frame.Frame, injected bool) (*subtract.Difference, *subtract.Solution, []detect.Candidate, error) {
	pair, err := align.AlignTo(ctx, n, c.Reference, c.Align)
	if err != nil {
		return nil, nil, nil, err
	}
	if c.Mark != nil {
		c.Mark(pair)
	}
	d, s, err := subtract.Solve(ctx, pair, c.Subtract)
	if err != nil {
		return nil, nil, nil, err
	}
	d.Injected = injected
	found, err := detect.Detect(ctx, d, c.Detect)
	return d, s, found, err
}

// measure puts the sources in, round by round.
func (w *search) measure(ctx context.Context, cfg Config, again rerun) (*Result, error) {
	if err := cfg.Check(); err != nil {
		return nil, err
	}
	d := w.difference
	r := &Result{Width: d.Flags.Width, Height: d.Flags.Height, Limit5: d.Info.MagLimit5, HasMagnitudes: !math.IsNaN(d.Info.ZeroPoint)}
	if !(d.Info.FluxLimit5 > 0) || math.IsInf(d.Info.FluxLimit5, 0) {
		return nil, frame.Problemf(frame.ProblemNoOverlap, "the depth of %s is unknown, so that no range of brightness can be chosen", d.Frame.Name)
	}
	draw, err := newDrawer(&cfg, d)
	if err != nil {
		return nil, err
	}
	most := Density(r.Width, r.Height, d.Info.FWHMNew)
	rounds := (cfg.Count + most - 1) / most
	for left := cfg.Count; left > 0; {
		r.Rounds++
		// Rounds of about equal numbers.
		n := (left + max(1, rounds-r.Rounds+1) - 1) / max(1, rounds-r.Rounds+1)
		places := draw.round(min(n, most))
		if len(places) == 0 {
			return nil, frame.Problemf(frame.ProblemNoOverlap, "%s has no place for a source: nothing of it is covered by the reference", d.Frame.Name)
		}
		left -= len(places)
		list := make([]Injection, len(places))
		lights := make([]subtract.Light, len(places))
		relative := draw.magnitudes(len(places), draw.shift(places))
		for i, p := range places {
			list[i] = w.injection(&cfg, p, relative[i])
			list[i].Round = r.Rounds
			list[i].name(d.Frame.Checksum, cfg.Seed, len(r.Injections)+i)
			lights[i] = lightOf(w.solution.PSF(), w.solution.Gain(), list[i].Flux, p.x, p.y, draw.random)
		}
		found, err := again(ctx, lights)
		if err != nil {
			return nil, err
		}
		w.judge(&cfg, list, found)
		r.Injections = append(r.Injections, list...)
	}
	r.Curve = FitCurve(r.axis(), r.outcomes())
	return r, nil
}

// axis returns the magnitudes of the curve; without a zero point those of the
// flux in counts.
func (r *Result) axis() []float64 {
	out := make([]float64, len(r.Injections))
	for i := range r.Injections {
		if out[i] = r.Injections[i].Mag; !r.HasMagnitudes {
			out[i] = -2.5 * math.Log10(r.Injections[i].Flux)
		}
	}
	return out
}

func (r *Result) outcomes() []bool {
	out := make([]bool, len(r.Injections))
	for i := range r.Injections {
		out[i] = r.Injections[i].Fate == Found
	}
	return out
}

// injection describes a source before it is sought.
func (w *search) injection(cfg *Config, p place, relative float64) Injection {
	d := w.difference
	nan := math.NaN()
	s := Injection{Frame: d.Frame.Name, Filter: d.Frame.Meta.Filter, Where: cfg.Where, X: p.x, Y: p.y, RA: nan, Dec: nan,
		U: (p.x - 0.5) / float64(d.Flags.Width), V: (p.y - 0.5) / float64(d.Flags.Height),
		Relative: relative, Flux: d.Info.FluxLimit5 * math.Pow(10, -0.4*relative), HostDistance: p.hostDistance, HostBrightness: nan,
		Significance: nan, RealProbability: nan, FoundX: nan, FoundY: nan, FoundFlux: nan, FoundFluxErr: nan}
	s.SN = 5 * s.Flux / d.Info.FluxLimit5
	s.Mag = d.Info.ZeroPoint - 2.5*math.Log10(s.Flux)
	scale := nan
	if wcs := d.Frame.WCS; wcs != nil {
		scale = wcs.PixelScale()
		if ra, dec, err := wcs.PixelToSky(p.x, p.y); err == nil {
			s.RA, s.Dec = ra, dec
		}
	}
	s.HostLight = lightAt(d.Reference, p.x, p.y, d.Info.FWHMNew)
	if s.HostLight > 0 {
		s.HostBrightness = d.Info.ZeroPoint - 2.5*math.Log10(s.HostLight/(scale*scale))
	}
	return s
}

// lightAt is the mean of the reference within half a FWHM of a place [count/px].
func lightAt(reference *frame.Image, x, y, fwhm float64) float64 {
	r := math.Max(1, fwhm/2)
	sum, n := 0.0, 0
	for j := max(0, int(math.Ceil(y-r))-1); j <= min(reference.Height-1, int(y+r)-1); j++ {
		for i := max(0, int(math.Ceil(x-r))-1); i <= min(reference.Width-1, int(x+r)-1); i++ {
			if v := float64(reference.Row(j)[i]); math.Hypot(float64(i+1)-x, float64(j+1)-y) <= r && v-v == 0 {
				sum += v
				n++
			}
		}
	}
	if n == 0 {
		return math.NaN()
	}
	return sum / float64(n)
}

// judge decides what became of the sources. Each is compared with the nearest
// candidate of its sign within reach; sources are too far apart to share one.
func (w *search) judge(cfg *Config, list []Injection, found []detect.Candidate) {
	d := w.difference
	fwhm := d.Info.FWHMNew
	reachOf := func(c *detect.Candidate) float64 {
		e := math.Hypot(c.XErr, c.YErr) / math.Sqrt2
		if e-e != 0 {
			e = 0
		}
		return math.Min(cfg.Radius+cfg.Sigmas*e, math.Max(fwhm, 2))
	}
	for i := range list {
		s := &list[i]
		// A candidate that counts goes before a nearer one that does not.
		var best *detect.Candidate
		beside := false
		for k := range found {
			c := &found[k]
			distance := math.Hypot(c.X-s.X, c.Y-s.Y)
			if !(distance <= math.Max(fwhm, reachOf(c))) {
				continue
			}
			if distance > reachOf(c) || c.Flux < 0 {
				beside = true
				continue
			}
			counts := c.RealProbability >= cfg.Probability
			if best == nil || counts && !(best.RealProbability >= cfg.Probability) ||
				counts == (best.RealProbability >= cfg.Probability) && distance < math.Hypot(best.X-s.X, best.Y-s.Y) {
				best = c
			}
		}
		if best != nil {
			s.Significance, s.RealProbability, s.Kind = best.Significance, best.RealProbability, best.Kind
			s.FoundX, s.FoundY, s.FoundFlux, s.FoundFluxErr = best.X, best.Y, best.Flux, best.FluxErr
		}
		switch {
		case best != nil && w.knownAt(cfg, s, best, reachOf(best)):
			s.Fate = Confused
		case best != nil && best.RealProbability >= cfg.Probability:
			s.Fate = Found
		case !d.Searchable(s.X, s.Y):
			s.Fate = Masked
		case best != nil:
			s.Fate = Rejected
		case beside:
			s.Fate = Confused
		default:
			s.Fate = NotDetected
		}
	}
}

// knownAt reports whether a candidate that counts stood at the place without the
// source: then the one found there tells nothing about it.
func (w *search) knownAt(cfg *Config, s *Injection, c *detect.Candidate, reach float64) bool {
	for k := range w.candidates {
		o := &w.candidates[k]
		if o.Flux > 0 && o.RealProbability >= cfg.Probability && math.Hypot(o.X-s.X, o.Y-s.Y) <= reach && math.Hypot(o.X-c.X, o.Y-c.Y) <= reach {
			return true
		}
	}
	return false
}
