package trainset

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"hash/fnv"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sort"

	"gonum.org/v1/gonum/stat/distuv"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/realbogus"
	"nightsift/internal/survey"
	"nightsift/internal/wholefile"
	"nightsift/subtract"
)

// OwnConfig says how examples are made from a survey's own frames.
type OwnConfig struct {
	Folder  *survey.Folder
	Cache   string  // folder for the examples of each frame, kept for the next training
	Frames  int     // most frames to use, 0 for all: a fixed choice over the whole survey
	PerMpx  float64 // sources put in for each megapixel and round
	Rounds  int     // times that sources are put into a frame
	Seed    uint64
	Labels  Labels
	Model   *realbogus.Model // in use: says how far an unlabelled detection counts as bogus
	Workers int              // goroutines for a frame
}

// DefaultOwnConfig returns two rounds of 60 sources for each megapixel.
func DefaultOwnConfig() OwnConfig { return OwnConfig{PerMpx: 60, Rounds: 2, Seed: 1, Workers: 2} }

// Own is what a survey's frames gave.
type Own struct {
	Examples []realbogus.Example
	Fields   []string // of each example
	Stamps   [][]byte // of each example, for the sheet of mistakes; see Thumbnail

	Frames, SetAside, Reused int
	Mpx                      float64
	Injected, Recovered      int
	Bogus, Recurring         int // detections without a label: counted as bogus, or left out as they recur
	LabelledReal             int
	LabelledBogus            int
	LabelsUnused             int // labels whose candidate was not found again

	// Shift is the logarithm of the odds of real sources in the survey, by its
	// configured rate, over those in the examples.
	Shift float64
}

// labelWeight is what a reviewer's word counts against a guess.
const labelWeight = 5

// own is one candidate as the cache keeps it.
type own struct {
	ID           string
	RA, Dec      float64
	Significance float64
	Features     realbogus.Features
	SN           float64 // of the source put in; 0 for a detection of the frame itself
	Tag          string  // where that source was put
	Place        string
	Stamp        []byte
}

// ownFrame is what the cache keeps of a frame.
type ownFrame struct {
	Digest   string // of everything that it was made from
	Name     string
	Night    string
	Field    string
	Problem  string // why the frame cannot be searched; empty if it can
	Mpx      float64
	Radius   float64   // deg, within which two detections are at the same place
	RootDet  float64   // see realbogus.PeakDensity
	Noise    []float64 // expected noise peaks above each of heights
	Injected int
	Own      []own // detections where nothing was put in
	Put      []own // sources put in and found
}

// ownVersion changes when examples of earlier versions must be made again.
const ownVersion = "1"

// CollectOwn makes the examples of a survey: real ones are sources put into its
// own frames through their point-spread function, with their photon noise;
// bogus ones are detections on the frames as they are. A frame that was done by
// an earlier call with the same settings is read from the cache. progress is
// called after each frame.
//
// A detection that a reviewer labelled counts five times, on the reviewer's
// side. One without a label counts as bogus as far as the model in use doubts
// it; it is left out where it recurs at its place on the sky on another night
// and the model in use gives it a chance, as a real star or a real supernova
// would.
func CollectOwn(ctx context.Context, cfg OwnConfig, progress func(done, total int)) (*Own, error) {
	tasks, err := cfg.Folder.Plan(survey.Selection{})
	if err != nil {
		return nil, err
	}
	out := &Own{}
	var list []*survey.Task
	for _, t := range tasks {
		if t.Problem == nil {
			list = append(list, t)
		}
	}
	if len(list) == 0 {
		return nil, fmt.Errorf("%s: no frame with a reference to learn from: run `nightsift status --survey %s`", cfg.Folder.Dir, cfg.Folder.Dir)
	}
	if cfg.Frames > 0 && len(list) > cfg.Frames {
		sort.SliceStable(list, func(a, b int) bool { return hashOf(list[a].Name) < hashOf(list[b].Name) })
		list = list[:cfg.Frames]
	}
	// Frames of one reference follow each other, so that it is prepared once.
	sort.SliceStable(list, func(a, b int) bool {
		if list[a].Reference != list[b].Reference {
			return list[a].Reference < list[b].Reference
		}
		return list[a].Path < list[b].Path
	})
	keywords, err := cfg.Folder.Config.LoadKeywords()
	if err != nil {
		return nil, err
	}
	maker := ownMaker{cfg: cfg, keywords: keywords}
	maker.align, maker.subtract, maker.detect = cfg.Folder.Config.StageConfigs(cfg.Workers)
	maker.detect.Stamps = true
	var frames []*ownFrame
	for k, t := range list {
		f, reused, err := maker.frame(ctx, t)
		if err != nil {
			return nil, err
		}
		out.Frames++
		if reused {
			out.Reused++
		}
		if f.Problem != "" {
			out.SetAside++
		} else {
			frames = append(frames, f)
		}
		if progress != nil {
			progress(k+1, len(list))
		}
	}
	out.assemble(frames, &cfg)
	return out, nil
}

func hashOf(name string) uint64 {
	h := fnv.New64a()
	h.Write([]byte(name))
	return h.Sum64()
}

// ownMaker works on one frame after the other.
type ownMaker struct {
	cfg       OwnConfig
	keywords  load.Keywords
	align     align.Config
	subtract  subtract.Config
	detect    detect.Config
	reference *align.PreparedReference
	of        string // path of the reference
}

// digest names everything on which a frame's examples depend. Equal name, size
// and time of change are taken for equal content.
func (m *ownMaker) digest(t *survey.Task) string {
	h := sha256.New()
	features, _ := json.Marshal(realbogus.Names())
	// What is measured does not depend on the model, nor on the goroutines.
	a, s, d := m.align, m.subtract, m.detect
	a.Workers, s.Workers, d.Model = 0, 0, nil
	fmt.Fprintf(h, "%s %+v %+v %+v %+v %g %d %d %s\n", ownVersion, m.keywords, a, s, d, m.cfg.PerMpx, m.cfg.Rounds, m.cfg.Seed, features)
	for _, path := range []string{t.Path, t.Reference} {
		if info, err := os.Stat(path); err == nil {
			fmt.Fprintln(h, filepath.Base(path), info.Size(), info.ModTime().UTC().UnixNano())
		} else {
			fmt.Fprintln(h, path)
		}
	}
	return hex.EncodeToString(h.Sum(nil)[:16])
}

func (m *ownMaker) frame(ctx context.Context, t *survey.Task) (f *ownFrame, reused bool, err error) {
	path := filepath.Join(m.cfg.Cache, t.Night, t.Name+".json")
	digest := m.digest(t)
	if data, err := os.ReadFile(path); err == nil {
		var kept ownFrame
		if json.Unmarshal(data, &kept) == nil && kept.Digest == digest {
			return &kept, true, nil
		}
	}
	f, err = m.make(ctx, t)
	if err != nil {
		var p *frame.Problem
		if !errors.As(err, &p) {
			return nil, false, fmt.Errorf("%s: %w", t.Path, err)
		}
		f = &ownFrame{Problem: err.Error()}
	}
	f.Digest, f.Name, f.Night = digest, t.Name, t.Night
	data, err := json.Marshal(f)
	if err != nil {
		return nil, false, fmt.Errorf("examples of %s: %w", t.Name, err)
	}
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return nil, false, err
	}
	return f, false, wholefile.WriteBytes(path, data)
}

func (m *ownMaker) make(ctx context.Context, t *survey.Task) (*ownFrame, error) {
	n, err := load.Frame(t.Path, m.keywords)
	if err != nil {
		return nil, err
	}
	n.Name = t.Name
	if m.reference == nil || m.of != t.Reference {
		r, err := load.Frame(t.Reference, m.keywords)
		if err != nil {
			return nil, err
		}
		if m.reference, err = align.Prepare(r, m.align); err != nil {
			return nil, err
		}
		m.of = t.Reference
	}
	pair, err := align.AlignTo(ctx, n, m.reference, m.align)
	if err != nil {
		return nil, err
	}
	d, solution, err := subtract.Solve(ctx, pair, m.subtract)
	if err != nil {
		return nil, err
	}
	found, err := detect.Detect(ctx, d, m.detect)
	if err != nil {
		return nil, err
	}
	f := &ownFrame{Field: n.Meta.Field, Mpx: float64(d.Info.UsablePixels) / 1e6, Radius: math.NaN()}
	if n.WCS != nil {
		f.Radius = 0.5 * d.Info.FWHMNew * n.WCS.PixelScale() / 3600
	}
	if math.IsNaN(f.Radius) {
		f.Radius = 0
	}
	for _, u := range heights {
		f.Noise = append(f.Noise, detect.NoisePeaks(d, u))
	}
	f.RootDet = f.Noise[0] / (2 * float64(d.Info.UsablePixels) * realbogus.PeakDensity(1, heights[0]))
	for i := range found {
		f.Own = append(f.Own, keep(&found[i], d, t.Name))
	}
	for round := range m.cfg.Rounds {
		random := rand.New(rand.NewPCG(m.cfg.Seed^hashOf(t.Name), uint64(round)))
		sources := m.draw(d, solution, found, random)
		f.Injected += len(sources)
		lights := make([]subtract.Light, len(sources))
		for i := range sources {
			lights[i] = sources[i].light
		}
		with, err := solution.With(ctx, lights)
		if err != nil {
			return nil, err
		}
		again, err := detect.Detect(ctx, with, m.detect)
		if err != nil {
			return nil, err
		}
		f.Put = append(f.Put, recovered(again, sources, with, t.Name)...)
	}
	return f, nil
}

func keep(c *detect.Candidate, d *subtract.Difference, name string) own {
	o := own{ID: c.ID, RA: c.RA, Dec: c.Dec, Significance: c.Significance,
		Place: fmt.Sprintf("%s (%.0f, %.0f)", name, c.X, c.Y), Stamp: Thumbnail(c, d)}
	if math.IsNaN(o.RA + o.Dec) { // JSON has no NaN
		o.RA, o.Dec = -1, 0
	}
	copy(o.Features[:], c.Features)
	return o
}

// put is one source to be put in.
type put struct {
	x, y, flux, trail float64
	tag               string
	light             subtract.Light
}

// draw places sources: on sky, on and beside extended and other sources of the
// reference near their cores and far from them, and on stars, which brighten or
// fade; some trail. Strengths go from the limit up, evenly in the logarithm.
func (m *ownMaker) draw(d *subtract.Difference, solution *subtract.Solution, found []detect.Candidate, random *rand.Rand) []put {
	w, h := float64(d.Image.Width), float64(d.Image.Height)
	model, gain := solution.PSF(), solution.Gain()
	fwhm := d.Info.FWHMNew
	radius := min(model.Radius(), 40)
	apart := float64(2*radius + 2*14)
	want := int(math.Round(m.cfg.PerMpx * w * h / 1e6))
	// More do not fit, and a crowd would teach another sky.
	want = min(max(want, 3), int(0.4*w*h/(apart*apart))+1)
	hosts, all := []int{}, []int{}
	for i := range d.ReferenceStars {
		s := &d.ReferenceStars[i]
		if s.Flags&frame.Unusable != 0 || !(s.Flux > 0) {
			continue
		}
		all = append(all, i)
		if s.Extended {
			hosts = append(hosts, i)
		}
	}
	if len(hosts) < 3 {
		hosts = all
	}
	unit := d.Info.FluxLimit5 / 5 // flux of a signal-to-noise ratio of one on empty sky
	var list []put
	for try := 0; len(list) < want && try < 60*want; try++ {
		p := put{tag: OnSky}
		sn := math.Exp(math.Log(4) + random.Float64()*math.Log(25))
		p.flux = sn * unit
		switch u := random.Float64(); {
		case u < 0.42 && len(hosts) > 0:
			s := &d.ReferenceStars[hosts[random.IntN(len(hosts))]]
			r := 0.7 * fwhm * math.Abs(random.NormFloat64())
			p.tag = OnHost
			if random.Float64() < 0.5 {
				r *= 3 // far from the core
			} else {
				// The noise of the host's light: reach up to it.
				p.flux *= math.Sqrt(1 + math.Max(0, s.Peak)/math.Max(gain, 1e-3)/math.Max(1e-9, sq(unit)/12))
				p.tag = OnCore
			}
			sin, cos := math.Sincos(2 * math.Pi * random.Float64())
			p.x, p.y = s.X+r*cos, s.Y+r*sin
		case u < 0.5 && len(all) > 0:
			s := &d.ReferenceStars[all[random.IntN(len(all))]]
			p.x, p.y, p.tag = s.X, s.Y, OnStar
			light := s.Flux * d.Info.FluxScale
			if random.Float64() < 0.5 && light > 8*unit {
				p.flux = -math.Min(p.flux, 0.8*light)
			}
		default:
			p.x, p.y = 1+random.Float64()*(w-1), 1+random.Float64()*(h-1)
			if random.Float64() < 0.12 {
				p.trail, p.tag = fwhm*(0.5+2.5*random.Float64()), OnTrail
				p.flux *= math.Sqrt(1 + p.trail/fwhm)
			}
		}
		edge := float64(radius) + p.trail
		if p.x < edge || p.y < edge || p.x > w-edge || p.y > h-edge || !d.Searchable(p.x, p.y) || math.IsNaN(p.flux) {
			continue
		}
		free := true
		for i := range list {
			free = free && (math.Abs(list[i].x-p.x) > apart+p.trail+list[i].trail || math.Abs(list[i].y-p.y) > apart+p.trail+list[i].trail)
		}
		for i := range found {
			free = free && math.Hypot(found[i].X-p.x, found[i].Y-p.y) > 2.5*fwhm
		}
		if !free {
			continue
		}
		p.render(model.Render, gain, radius, random)
		list = append(list, p)
	}
	return list
}

func sq(v float64) float64 { return v * v }

// render draws the light with its photon noise; a trail as points along a line.
func (p *put) render(psf func(dst []float32, x, y, dx, dy float64), gain float64, radius int, random *rand.Rand) {
	radius += int(math.Ceil(p.trail / 2))
	p.light = subtract.Light{X: int(math.Round(p.x)), Y: int(math.Round(p.y)), Radius: radius}
	size := 2*radius + 1
	p.light.Counts = make([]float32, size*size)
	one := make([]float32, size*size)
	steps := 1 + int(math.Ceil(2*p.trail))
	sin, cos := math.Sincos(2 * math.Pi * random.Float64())
	for k := range steps {
		u := ((float64(k)+0.5)/float64(steps) - 0.5) * p.trail
		psf(one, p.x, p.y, p.x-float64(p.light.X)+u*cos, p.y-float64(p.light.Y)+u*sin)
		for i, v := range one {
			p.light.Counts[i] += v / float32(steps)
		}
	}
	for i, v := range p.light.Counts {
		mean := p.flux * float64(v)
		if electrons := math.Abs(mean) * gain; p.flux > 0 && electrons > 0 && !math.IsInf(electrons, 0) {
			mean = distuv.Poisson{Lambda: electrons, Src: random}.Rand() / gain
		}
		p.light.Counts[i] = float32(mean)
	}
}

// recovered pairs sources with the most significant candidate of their sign
// within reach.
func recovered(list []detect.Candidate, sources []put, d *subtract.Difference, name string) []own {
	var out []own
	fwhm := d.Info.FWHMNew
	for i := range sources {
		p := &sources[i]
		best := -1
		for k := range list {
			c := &list[k]
			err := math.Max(c.XErr, c.YErr)
			if !(err >= 0) || err > fwhm {
				err = fwhm
			}
			if (c.Significance > 0) != (p.flux > 0) || math.Hypot(c.X-p.x, c.Y-p.y)-p.trail/2 > 0.3+0.1*fwhm+4*err {
				continue
			}
			if best < 0 || math.Abs(c.Significance) > math.Abs(list[best].Significance) {
				best = k
			}
		}
		if best < 0 {
			continue
		}
		c := &list[best]
		sn := math.Abs(p.flux) / c.FluxErr
		if p.trail > 0 || !(sn > 0) || math.IsInf(sn, 0) {
			sn = math.Abs(c.Significance)
		}
		// A piece of what was put in is neither real nor bogus.
		if math.Abs(c.Significance) < 0.5*sn {
			continue
		}
		o := keep(c, d, name)
		o.SN, o.Tag = sn, p.tag
		out = append(out, o)
	}
	return out
}

// assemble weighs the candidates of all frames.
func (o *Own) assemble(frames []*ownFrame, cfg *OwnConfig) {
	used := map[string]bool{}
	expected, bogus := make([]float64, len(heights)), make([]float64, len(heights))
	type spot struct{ frame, at int }
	var found []spot
	for k, f := range frames {
		o.Mpx += f.Mpx
		o.Injected += f.Injected
		for b, n := range f.Noise {
			expected[b] += n
		}
		for i := range f.Own {
			found = append(found, spot{k, i})
		}
	}
	again := recurring(frames)
	add := func(f *ownFrame, c *own, real bool, weight float64) {
		o.Examples = append(o.Examples, realbogus.Example{Features: c.Features, Real: real, Weight: weight, Group: f.Night + "/" + f.Name,
			Significance: c.Significance, SN: c.SN, RootDet: f.RootDet, Tag: c.Tag, Place: c.Place})
		o.Fields = append(o.Fields, f.Field)
		o.Stamps = append(o.Stamps, c.Stamp)
	}
	plain := map[int]bool{} // index in Examples of detections that are guessed
	said := map[int]bool{}  // of those with a label
	for _, s := range found {
		f, c := frames[s.frame], &frames[s.frame].Own[s.at]
		verdict, labelled := cfg.Labels[c.ID]
		switch {
		case labelled:
			used[c.ID] = true
			if verdict {
				o.LabelledReal++
			} else {
				o.LabelledBogus++
			}
			said[len(o.Examples)] = true
			add(f, c, verdict, labelWeight)
			continue
		}
		p := cfg.Model.Probability(&c.Features)
		if again[[2]int{s.frame, s.at}] && p > 0.05 {
			o.Recurring++
			continue
		}
		o.Bogus++
		bogus[bin(math.Abs(c.Significance))] += 1 - p
		plain[len(o.Examples)] = true
		add(f, c, false, 1-p)
	}
	for i := range o.Examples {
		if !plain[i] {
			continue
		}
		// Plain noise is counted by its closed form: see Collect.
		e := &o.Examples[i]
		b := bin(math.Abs(e.Significance))
		n := expected[b]
		if b+1 < len(heights) {
			n -= expected[b+1]
		}
		e.Weight *= math.Max(0, 1-n/math.Max(bogus[b], n))
	}
	for _, f := range frames {
		for i := range f.Put {
			o.Recovered++
			add(f, &f.Put[i], true, 1)
		}
	}
	o.LabelsUnused = len(cfg.Labels) - len(used)
	// The calibration holds for the odds of the weights. In the survey there are as
	// many real ones as the configuration says, and a bogus one with a label is one.
	var real, bogusWeight, bogusThere float64
	for i := range o.Examples {
		switch e := &o.Examples[i]; {
		case e.Real:
			real += e.Weight
		case said[i]:
			bogusWeight, bogusThere = bogusWeight+e.Weight, bogusThere+1
		default:
			bogusWeight, bogusThere = bogusWeight+e.Weight, bogusThere+e.Weight
		}
	}
	if rate := cfg.Folder.Config.Search.RealPerMpx * o.Mpx; real > 0 && rate > 0 && bogusThere > 0 {
		o.Shift = math.Log(rate/real) + math.Log(bogusWeight/bogusThere)
	}
}

// recurring marks detections with another one at the same place on another
// night.
func recurring(frames []*ownFrame) map[[2]int]bool {
	type seen struct {
		frame, at int
		ra, dec   float64
	}
	var list []seen
	widest := 0.0
	for k, f := range frames {
		for i := range f.Own {
			if c := &f.Own[i]; c.RA >= 0 && f.Radius > 0 {
				list = append(list, seen{k, i, c.RA, c.Dec})
				widest = math.Max(widest, f.Radius)
			}
		}
	}
	sort.SliceStable(list, func(a, b int) bool { return list[a].dec < list[b].dec })
	out := map[[2]int]bool{}
	for a := range list {
		p := &list[a]
		for b := a + 1; b < len(list) && list[b].dec-p.dec <= widest; b++ {
			q := &list[b]
			if frames[p.frame].Night == frames[q.frame].Night {
				continue
			}
			turn := math.Abs(p.ra - q.ra)
			turn = math.Min(turn, 360-turn) * math.Cos(p.dec*math.Pi/180)
			if math.Hypot(turn, p.dec-q.dec) <= math.Max(frames[p.frame].Radius, frames[q.frame].Radius) {
				out[[2]int{p.frame, p.at}], out[[2]int{q.frame, q.at}] = true, true
			}
		}
	}
	return out
}
