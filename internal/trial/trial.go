// Package trial sends invented scenarios through all stages and measures the
// figures by which the program is judged.
package trial

import (
	"context"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"sort"
	"time"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/score"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// Config says what is tried.
type Config struct {
	Scenarios []string
	Size      int // px, of a frame's side
	Seeds     int // frames of each scenario
	FirstSeed uint64
	Align     align.Config
	Subtract  subtract.Config
	Detect    detect.Config
}

// Outcome holds the figures of one scenario over all its frames.
type Outcome struct {
	Scenario string
	Result   *score.Result
	Sky      []score.Sky // one a frame
	Problems []string    // frames that were set aside, with the reason

	AlignmentRMS []float64 // px per axis, of the fitted transform against the true one, one a frame
	NoiseRatio   []float64 // as the frames report it
	Info         []subtract.Info

	// Events where constant light, a host's core or a star, takes more than a
	// fifth of the signal-to-noise ratio that empty sky would allow.
	OnLightBias  score.Spread // relative, S/N > 10
	OnLightPulls score.Spread

	StarChi2   float64 // median over unsaturated stars of the chi-square per pixel within one FWHM
	Stars      int     // unsaturated stars of S/N 20 to 1000
	StarsFound int     // of these, with a candidate of p ≥ 0.5 on them

	Seconds struct{ Load, Align, Subtract, Detect float64 } // sums
	Mpx     float64
}

// Run tries all scenarios; report is called after each.
func Run(ctx context.Context, c Config, report func(*Outcome)) ([]*Outcome, error) {
	var all []*Outcome
	for _, name := range c.Scenarios {
		o, err := runScenario(ctx, c, name)
		if err != nil {
			return all, err
		}
		all = append(all, o)
		if report != nil {
			report(o)
		}
	}
	return all, nil
}

func runScenario(ctx context.Context, c Config, name string) (*Outcome, error) {
	o := &Outcome{Scenario: name}
	truth := &simulate.Truth{}
	var found []score.Found
	var statuses []score.Status
	var chi2 []float64
	for i := range c.Seeds {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		pairs, err := simulate.Scenario(name, c.Size, c.FirstSeed+uint64(i))
		if err != nil {
			return nil, err
		}
		one := &single{config: c, outcome: o, pairs: pairs, id: fmt.Sprintf("%s-%d", name, i)}
		candidates, problem, err := one.run(ctx)
		if err != nil {
			return nil, err
		}
		for _, f := range pairs.Truth.Frames {
			f.Frame = one.id
			truth.Frames = append(truth.Frames, f)
		}
		for _, s := range pairs.Truth.Sources {
			s.Frame = one.id
			truth.Sources = append(truth.Sources, s)
		}
		status := score.Status{Frame: one.id, Status: "searched"}
		if problem != nil {
			status.Status, status.Reason = "set_aside", problem.Slug
			o.Problems = append(o.Problems, one.id+": "+problem.Error())
		}
		statuses = append(statuses, status)
		for _, k := range candidates {
			found = append(found, score.Found{ID: k.ID, Frame: one.id, X: k.X, Y: k.Y, XErr: k.XErr, YErr: k.YErr, Flux: k.Flux, FluxErr: k.FluxErr,
				Significance: k.Significance, RealProbability: k.RealProbability, Kind: string(k.Kind)})
		}
		chi2 = append(chi2, one.starChi2...)
	}
	o.Result = score.Compare(truth, found, statuses, score.DefaultConfig())
	o.onLight()
	sort.Float64s(chi2)
	o.StarChi2 = math.NaN()
	if len(chi2) > 0 {
		o.StarChi2 = chi2[len(chi2)/2]
	}
	return o, nil
}

// onLight measures the fluxes of events on constant light.
func (o *Outcome) onLight() {
	var bias, pulls []float64
	for i := range o.Result.Outcomes {
		e := &o.Result.Outcomes[i]
		if e.Candidate == nil || e.Masked() || !e.Covered || e.Trail >= 0.5 || !(e.LocalSN > 10 && e.LocalSN < 0.8*e.SN) {
			continue
		}
		bias = append(bias, (e.Candidate.Flux-e.Flux)/e.Flux)
		pulls = append(pulls, (e.Candidate.Flux-e.Flux)/e.Candidate.FluxErr)
	}
	o.OnLightBias, o.OnLightPulls = score.NewSpread(bias), score.NewSpread(pulls)
}

// single is one frame's trial.
type single struct {
	config   Config
	outcome  *Outcome
	pairs    *simulate.Pairs
	id       string
	starChi2 []float64
}

func (s *single) run(ctx context.Context) ([]detect.Candidate, *frame.Problem, error) {
	dir, err := os.MkdirTemp("", "nightsift-trial-")
	if err != nil {
		return nil, nil, err
	}
	defer os.RemoveAll(dir)
	// Through files, as frames come.
	if err := s.pairs.Write(dir); err != nil {
		return nil, nil, err
	}
	o := s.outcome
	start := time.Now()
	lap := func(into *float64) {
		now := time.Now()
		*into += now.Sub(start).Seconds()
		start = now
	}
	problem := func(err error) ([]detect.Candidate, *frame.Problem, error) {
		var p *frame.Problem
		if asProblem(err, &p) {
			return nil, p, nil
		}
		return nil, nil, fmt.Errorf("%s: %w", s.id, err)
	}
	n, err := load.Frame(filepath.Join(dir, s.pairs.New[0].Name+".fits"), load.DefaultKeywords())
	if err != nil {
		return problem(err)
	}
	r, err := load.Frame(filepath.Join(dir, s.pairs.Reference.Name+".fits"), load.DefaultKeywords())
	if err != nil {
		return problem(err)
	}
	n.Name = s.id
	lap(&o.Seconds.Load)
	o.Mpx += float64(n.Image.Width) * float64(n.Image.Height) / 1e6
	pair, err := align.Align(ctx, n, r, s.config.Align)
	if err != nil {
		return problem(err)
	}
	lap(&o.Seconds.Align)
	o.AlignmentRMS = append(o.AlignmentRMS, s.alignment(pair))
	start = time.Now()
	d, err := subtract.Subtract(ctx, pair, s.config.Subtract)
	if err != nil {
		return problem(err)
	}
	lap(&o.Seconds.Subtract)
	candidates, err := detect.Detect(ctx, d, s.config.Detect)
	if err != nil {
		return problem(err)
	}
	lap(&o.Seconds.Detect)
	o.Info = append(o.Info, d.Info)
	o.NoiseRatio = append(o.NoiseRatio, d.Info.NoiseRatio)
	grow := 2.0
	if s.pairs.Name == "crowded" {
		grow = 1
	}
	o.Sky = append(o.Sky, score.EmptySky(d.Significance.Pix, s.pairs.EmptySky(0, grow)))
	s.stars(d, candidates)
	return candidates, nil, nil
}

// alignment compares the fitted transform with the true cameras on a lattice
// of positions that both frames cover; it returns px of the new frame per axis.
func (s *single) alignment(p *align.Pair) float64 {
	n, r := &s.pairs.New[0].Conditions.Camera, &s.pairs.Reference.Conditions.Camera
	sum, count := 0.0, 0
	const places = 12
	for j := range places {
		for i := range places {
			x := 1 + (float64(i)+0.5)/places*float64(n.Width)
			y := 1 + (float64(j)+0.5)/places*float64(n.Height)
			u, v := r.SkyToPixel(n.PixelToSky(x, y))
			if u < 1 || v < 1 || u > float64(r.Width) || v > float64(r.Height) {
				continue
			}
			fu, fv := p.Transform.Apply(x, y)
			sum += ((fu-u)*(fu-u) + (fv-v)*(fv-v)) / 2 / (p.Scale * p.Scale)
			count++
		}
	}
	return math.Sqrt(sum / float64(max(1, count)))
}

// stars looks at what constant stars left behind.
func (s *single) stars(d *subtract.Difference, candidates []detect.Candidate) {
	o := s.outcome
	e := s.pairs.New[0]
	fwhm := d.Info.FWHMNew
	busy := map[[2]int]bool{} // cells of 8 px with an event
	cell := func(x, y float64) [2]int { return [2]int{int(x / 8), int(y / 8)} }
	for _, q := range s.pairs.Truth.Sources {
		c := cell(q.X, q.Y)
		for v := -2; v <= 2; v++ {
			for u := -2; u <= 2; u++ {
				busy[[2]int{c[0] + u, c[1] + v}] = true
			}
		}
	}
	const masked = frame.Unusable | frame.Edge
	reach := int(math.Ceil(fwhm))
	for _, star := range s.pairs.Scene.Stars {
		x, y := e.Conditions.Camera.SkyToPixel(star.RA, star.Dec)
		if x < 20 || y < 20 || x > float64(e.Width)-20 || y > float64(e.Height)-20 || busy[cell(x, y)] {
			continue
		}
		sn := math.Pow(10, -0.4*(star.Mag-d.Info.ZeroPoint)) * 5 / d.Info.FluxLimit5
		if !(sn > 20 && sn < 1000) {
			continue
		}
		ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
		sum, count, bad := 0.0, 0, false
		for v := -reach; v <= reach; v++ {
			for u := -reach; u <= reach; u++ {
				at := (cj+v)*e.Width + ci + u
				if d.Flags.Bits[at]&masked != 0 {
					bad = true
				}
				if float64(u*u+v*v) <= fwhm*fwhm {
					sum += float64(d.Image.Pix[at]) * float64(d.Image.Pix[at]) / float64(d.Variance.Pix[at])
					count++
				}
			}
		}
		if bad {
			continue
		}
		o.Stars++
		if sn < 300 {
			s.starChi2 = append(s.starChi2, sum/float64(count))
		}
		for i := range candidates {
			if c := &candidates[i]; c.RealProbability >= 0.5 && math.Hypot(c.X-x, c.Y-y) < 0.7*fwhm {
				o.StarsFound++
				break
			}
		}
	}
}
