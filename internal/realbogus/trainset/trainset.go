// Package trainset makes the examples from which the shipped real/bogus model
// is trained: invented scenarios go through the real pipeline, and every
// candidate is labelled by the truth.
package trainset

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"sync"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/realbogus"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// Config says which frames are searched.
type Config struct {
	Scenarios []string
	Size      int    // px, side of the frames
	Frames    int    // of each scenario
	Worn      int    // frames on which much goes wrong
	FirstSeed uint64 // seeds count up from here: keep them apart from those of scored runs
	Workers   int
	Align     align.Config
	Subtract  subtract.Config
	Detect    detect.Config
}

// DefaultConfig returns all scenarios, one frame of 704 px each, and 48 worn
// frames, with seeds that no scored run uses.
func DefaultConfig() Config {
	c := Config{
		Scenarios: simulate.Names(), Size: 704, Frames: 1, Worn: 48, FirstSeed: 7_000_001, Workers: 1,
		Align: align.DefaultConfig(), Subtract: subtract.DefaultConfig(), Detect: detect.DefaultConfig(),
	}
	c.Detect.Stamps = false
	return c
}

// Summary says what Collect found.
type Summary struct {
	Frames, SetAside     int
	Mpx                  float64
	Real, Bogus, Dropped int
	NoiseExpected        float64 // noise peaks above the threshold, by the closed form
	NoiseRemoved         float64 // weight taken from bogus examples for them
}

func (s Summary) String() string {
	return fmt.Sprintf("%d frames (%d set aside), %.1f Mpx: %d real, %d bogus, %d ambiguous; %.1f noise peaks expected, %.1f taken out",
		s.Frames, s.SetAside, s.Mpx, s.Real, s.Bogus, s.Dropped, s.NoiseExpected, s.NoiseRemoved)
}

// heights are the edges of the bins of significance in which noise peaks are
// taken out.
var heights = []float64{5, 5.25, 5.5, 6, 7}

// Collect runs the pipeline and returns one example a candidate. Groups are
// scenarios, so that held-out figures are those for conditions never trained
// on. A candidate near an event that is not clearly that event has weight 0.
//
// Plain noise makes peaks above five sigma that no feature can tell from a
// faint source; realbogus.Posterior counts them by their known density. So
// that they are not counted twice, bogus examples lose the weight that the
// closed form expects of noise at their height.
func Collect(ctx context.Context, cfg Config, report func(string)) ([]realbogus.Example, Summary, error) {
	type job struct {
		scenario string
		seed     uint64
		worn     *worn
	}
	var jobs []job
	for _, name := range cfg.Scenarios {
		for k := range cfg.Frames {
			jobs = append(jobs, job{name, cfg.FirstSeed + uint64(k), nil})
		}
	}
	for k := range cfg.Worn {
		seed := cfg.FirstSeed + 1000 + uint64(k)
		w := newWorn(k, seed)
		jobs = append(jobs, job{w.String(), seed, w})
	}
	type result struct {
		searched
		err error
	}
	results := make([]result, len(jobs))
	next := make(chan int)
	var wg sync.WaitGroup
	var lock sync.Mutex
	for range max(1, cfg.Workers) {
		wg.Go(func() {
			for i := range next {
				r := &results[i]
				r.searched, r.err = one(ctx, cfg, jobs[i].scenario, jobs[i].seed, jobs[i].worn)
				if report != nil {
					lock.Lock()
					report(fmt.Sprintf("%s seed %d: %s%s", jobs[i].scenario, jobs[i].seed, count(r.examples), reason(r.problem)))
					lock.Unlock()
				}
			}
		})
	}
	for i := range jobs {
		if ctx.Err() != nil {
			break
		}
		next <- i
	}
	close(next)
	wg.Wait()
	var s Summary
	if err := ctx.Err(); err != nil {
		return nil, s, err
	}
	var all []labelled
	expected := make([]float64, len(heights))
	for i := range results {
		r := &results[i]
		if r.err != nil {
			return nil, s, fmt.Errorf("%s seed %d: %w", jobs[i].scenario, jobs[i].seed, r.err)
		}
		s.Frames++
		if r.problem != nil {
			s.SetAside++
			continue
		}
		s.Mpx += r.mpx
		for k, n := range r.noise {
			expected[k] += n
		}
		all = append(all, r.examples...)
	}
	// expected holds numbers above each edge.
	s.NoiseExpected = expected[0]
	bogus := make([]float64, len(heights))
	for i := range all {
		if e := &all[i]; !e.Real && e.Weight > 0 {
			bogus[bin(e.height)]++
		}
	}
	for i := range all {
		e := &all[i]
		switch {
		case e.Weight == 0:
			s.Dropped++
			continue
		case e.Real:
			s.Real++
			continue
		}
		s.Bogus++
		b := bin(e.height)
		n := expected[b]
		if b+1 < len(expected) {
			n -= expected[b+1]
		}
		keep := math.Max(0, 1-n/bogus[b])
		s.NoiseRemoved += 1 - keep
		e.Weight = keep
	}
	examples := make([]realbogus.Example, len(all))
	for i := range all {
		examples[i] = all[i].Example
	}
	return examples, s, nil
}

func bin(height float64) int {
	b := 0
	for b+1 < len(heights) && height >= heights[b+1] {
		b++
	}
	return b
}

func count(list []labelled) string {
	var real, bogus int
	for i := range list {
		switch e := &list[i]; {
		case e.Real:
			real++
		case e.Weight > 0:
			bogus++
		}
	}
	return fmt.Sprintf("%d real, %d bogus, %d ambiguous", real, bogus, len(list)-real-bogus)
}

func reason(err error) string {
	if err == nil {
		return ""
	}
	return ", set aside: " + err.Error()
}

type labelled struct {
	realbogus.Example
	height float64          // |significance|
	event  *simulate.Source // of a real one
}

// searched is what came of one invented frame.
type searched struct {
	examples []labelled
	truth    []simulate.Source
	mpx      float64
	noise    []float64 // expected noise peaks above each of heights
	problem  error     // why it was set aside
}

// one searches one invented frame; w is nil for one that is not worn.
func one(ctx context.Context, cfg Config, scenario string, seed uint64, w *worn) (out searched, err error) {
	var pairs *simulate.Pairs
	group := scenario
	if w != nil {
		group = fmt.Sprintf("worn %d", seed)
		pairs, err = simulate.Varied(w.base, w.change, cfg.Size, seed)
	} else {
		pairs, err = simulate.Scenario(scenario, cfg.Size, seed)
	}
	if err != nil {
		return out, err
	}
	if w != nil {
		w.spoil(pairs)
	}
	dir, err := os.MkdirTemp("", "nightsift-train-")
	if err != nil {
		return out, err
	}
	defer os.RemoveAll(dir)
	if err := pairs.Write(dir); err != nil {
		return out, err
	}
	split := func(err error) (searched, error) {
		var p *frame.Problem
		if errors.As(err, &p) {
			return searched{problem: p}, nil
		}
		return out, err
	}
	n, err := load.Frame(filepath.Join(dir, pairs.New[0].Name+".fits"), load.DefaultKeywords())
	if err != nil {
		return split(err)
	}
	r, err := load.Frame(filepath.Join(dir, pairs.Reference.Name+".fits"), load.DefaultKeywords())
	if err != nil {
		return split(err)
	}
	pair, err := align.Align(ctx, n, r, cfg.Align)
	if err != nil {
		return split(err)
	}
	if w != nil {
		w.shift(pair)
		cfg.Subtract = w.loosen(cfg.Subtract)
	}
	d, err := subtract.Subtract(ctx, pair, cfg.Subtract)
	if err != nil {
		return split(err)
	}
	list, err := detect.Detect(ctx, d, cfg.Detect)
	if err != nil {
		return split(err)
	}
	for _, u := range heights {
		out.noise = append(out.noise, detect.NoisePeaks(d, u))
	}
	rootDet := detect.NoisePeaks(d, 5) / (2 * float64(d.Info.UsablePixels) * realbogus.PeakDensity(1, 5))
	for i := range list {
		e := label(&list[i], pairs.Truth.Sources, d.Info.FWHMNew, group)
		e.RootDet = rootDet
		e.Place = fmt.Sprintf("%s seed %d at (%.1f, %.1f)", scenario, seed, list[i].X, list[i].Y)
		if !e.Real && e.Weight > 0 {
			e.Tag = cause(pairs, &list[i], d.Info.FWHMNew)
		}
		out.examples = append(out.examples, e)
	}
	oneForEach(out.examples)
	out.truth, out.mpx = pairs.Truth.Sources, float64(d.Info.UsablePixels)/1e6
	return out, nil
}

// label compares a candidate with the events of its frame. It is real when an
// event of its sign lies within the position error, and ambiguous when it is
// merely near one, or when that event is too faint to have caused it.
func label(c *detect.Candidate, truth []simulate.Source, fwhm float64, group string) labelled {
	e := labelled{height: math.Abs(c.Significance)}
	e.Group, e.Weight, e.Significance = group, 1, c.Significance
	copy(e.Features[:], c.Features)
	err := math.Max(c.XErr, c.YErr)
	if !(err >= 0) || err > fwhm {
		err = fwhm
	}
	for i := range truth {
		t := &truth[i]
		d := math.Hypot(c.X-t.X, c.Y-t.Y) - t.Trail/2
		if d > 2*fwhm+4 {
			continue
		}
		same := c.Significance > 0 == (t.Flux > 0)
		if same && d <= 0.3+0.1*fwhm+4*err && t.LocalSN > 0.4*e.height {
			e.Real, e.Weight, e.SN, e.Tag = true, 1, t.LocalSN, placeOf(t)
			e.event = t
			return e
		}
		e.Weight = 0
	}
	return e
}

// oneForEach leaves each event its most significant candidate, and that only
// where it holds half of the event's light: what else is found at a bright event
// is a piece of it, neither real nor bogus.
func oneForEach(list []labelled) {
	best := map[*simulate.Source]int{}
	for i := range list {
		if e := &list[i]; e.Real {
			if k, ok := best[e.event]; !ok || list[k].height < e.height {
				best[e.event] = i
			}
		}
	}
	for i := range list {
		if e := &list[i]; e.Real && (best[e.event] != i || e.height < 0.5*e.SN) {
			e.Real, e.Weight, e.SN, e.Tag = false, 0, 0, ""
		}
	}
}

// The tags of real examples.
const (
	OnSky   = "sky"
	OnHost  = "host"
	OnCore  = "core" // of a galaxy, so bright that it takes a fifth of the signal-to-noise ratio
	OnStar  = "star"
	OnTrail = "trail"
	OnFlaw  = "bad pixel"
)

// placeOf says where an event stands.
func placeOf(t *simulate.Source) string {
	switch {
	case t.Masked():
		return OnFlaw
	case t.Trail > 0.5:
		return OnTrail
	case t.Kind == simulate.KindVariable:
		return OnStar
	case t.Host != "" && t.LocalSN < 0.8*t.SN:
		return OnCore
	case t.Host != "":
		return OnHost
	}
	return OnSky
}

// cause names the nearest thing that may have made a bogus candidate.
func cause(p *simulate.Pairs, c *detect.Candidate, fwhm float64) string {
	n, r := p.New[0], p.Reference
	reach := max(1, int(math.Round(0.7*fwhm)))
	around := func(e *simulate.Exposure, x, y float64, wide int) (bits uint16) {
		ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
		for j := max(0, cj-wide); j <= min(e.Height-1, cj+wide); j++ {
			for i := max(0, ci-wide); i <= min(e.Width-1, ci+wide); i++ {
				bits |= e.Defects[j*e.Width+i]
			}
		}
		return bits
	}
	x, y := r.Conditions.Camera.SkyToPixel(n.Conditions.Camera.PixelToSky(c.X, c.Y))
	near, wide := around(n, c.X, c.Y, reach), around(n, c.X, c.Y, 4*reach)
	ref := around(r, x, y, reach)
	light := 0.0
	if i, j := int(math.Round(c.X))-1, int(math.Round(c.Y))-1; i >= 0 && j >= 0 && i < n.Width && j < n.Height {
		light = float64(n.Light[j*n.Width+i])
	}
	switch {
	case near&(simulate.DefectSaturated|simulate.DefectBleed) != 0:
		return "saturated"
	case near&simulate.DefectCosmicRay != 0:
		return "hit"
	case near&simulate.DefectHot != 0:
		return "hot pixel"
	case near&simulate.DefectColumn != 0:
		return "column"
	case near&simulate.DefectStreak != 0:
		return "trail"
	case ref != 0:
		return "reference defect"
	case wide&(simulate.DefectSaturated|simulate.DefectBleed) != 0:
		return "beside saturated"
	case light > 2*n.SkyNoise:
		return "bright light"
	case light > 0.3*n.SkyNoise:
		return "faint light"
	}
	return "empty sky"
}

// Note says in words what a model was trained from.
func Note(s Summary) string {
	return "invented scenarios and worn frames through the whole pipeline, held out by scenario and frame: " + s.String()
}
