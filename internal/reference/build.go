package reference

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"strings"

	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
)

// Product is a finished reference.
type Product struct {
	// Frame holds the image [count], the variance of its sky [count²], flags,
	// world coordinates and the values of its header. Pixels without data are
	// NaN; pixels that were saturated on a frame are at Meta.Saturation at least.
	Frame    *frame.Frame
	Used     *frame.Image // number of frames in each pixel
	Outliers *frame.Image // number of frames left out there as outliers
	PSF      *psf.Grid
	Inputs   []Input

	Method       string // MethodMean or MethodProper
	MethodReason string

	FWHM        float64 // px
	Limit       float64 // count, point source at 5 sigma, as measured
	MeanLimit   float64 // count, of the mean
	ProperLimit float64 // count, of proper coaddition; NaN if not tried
	Predicted   float64 // count, Limit as predicted from the frames
	BestFrame   float64 // count, the same of the best single frame
	Noise       float64 // count, white noise of a pixel with the same effect on a star
	PixelNoise  float64 // count, spread of single pixels
	Correlation float64 // of the noise; see stars.Background
	First, Last float64 // MJD of the earliest and latest exposure
}

// NoFramesError tells that too few frames can be used, and why.
type NoFramesError struct {
	Usable, Wanted int
	Inputs         []Input
}

func (e *NoFramesError) Error() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%d of %d frames can be used, at least %d are needed", e.Usable, len(e.Inputs), e.Wanted)
	n := 0
	for _, in := range e.Inputs {
		if in.Used {
			continue
		}
		if n++; n == 6 {
			b.WriteString("; and others")
			break
		}
		fmt.Fprintf(&b, "; %s: %s, %s", in.Name, in.Reason, in.Detail)
	}
	return b.String()
}

// Build makes a reference of frames. Frames that cannot be used are left out
// with their reason in Inputs. Equal frames, in whatever order they are named,
// and equal settings give equal pixels.
//
// The error is a *NoFramesError when too few frames are left, a *frame.Problem
// when the grid asked for does not lie on them, the context's, or one of the
// disk.
func Build(ctx context.Context, paths []string, cfg Config) (*Product, error) {
	cfg.check()
	list, err := describe(paths, &cfg)
	if err != nil {
		return nil, err
	}
	enough := func() error {
		n := len(remaining(list))
		if n >= cfg.MinFrames {
			return nil
		}
		e := &NoFramesError{Usable: n, Wanted: cfg.MinFrames}
		for _, c := range list {
			c.Used = c.remaining()
			e.Inputs = append(e.Inputs, c.Input)
		}
		return e
	}
	if err := enough(); err != nil {
		return nil, err
	}
	if err := measureAll(ctx, list, &cfg); err != nil {
		return nil, err
	}
	leaveDuplicates(list)
	leaveBright(list, &cfg)
	leavePoor(list, &cfg)
	if err := enough(); err != nil {
		return nil, err
	}
	anchor, err := registerAll(ctx, list, &cfg)
	if err != nil {
		return nil, err
	}
	g, err := newGrid(anchor, &cfg)
	if err != nil {
		return nil, err
	}
	weigh(list, anchor)
	leaveShallow(list, &cfg)
	if err := enough(); err != nil {
		return nil, err
	}
	dir := cfg.Parts
	if dir == "" {
		if dir, err = os.MkdirTemp(cfg.Scratch, ".nightsift-parts-"); err != nil {
			return nil, err
		}
		defer os.RemoveAll(dir)
	} else if err := os.MkdirAll(dir, 0o755); err != nil {
		return nil, err
	}
	left := remaining(list)
	for i, c := range left {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		err := g.place(c)
		if err == nil {
			err = c.makePart(ctx, dir, g, anchor, &cfg)
		}
		var p *frame.Problem
		if errors.As(err, &p) {
			c.leaveFor(p)
		} else if err != nil {
			return nil, err
		}
		cfg.observe(StageResample, i+1, len(left), c.Name)
	}
	if err := enough(); err != nil {
		return nil, err
	}
	return stackAll(ctx, list, anchor, g, &cfg)
}

// weigh gives each frame's information on a faint star, from its own noise and width.
func weigh(list []*candidate, anchor *candidate) {
	for _, c := range remaining(list) {
		// Of one count of the anchor: the noise of the best flux is
		// noise · sqrt(area) with the area of a Gaussian, 4π σ².
		sigma := c.FWHM / 2.3548
		c.Share = 1 / (c.Scale * c.Scale * c.Noise * c.Noise * 4 * math.Pi * sigma * sigma)
	}
}

// stackAll adds the frames left and measures the result.
func stackAll(ctx context.Context, list []*candidate, anchor *candidate, g *grid, cfg *Config) (*Product, error) {
	left := remaining(list)
	s := &stacker{width: g.width, height: g.height, clip: cfg.Clip, workers: cfg.Workers}
	d, err := s.setLayers(left, g)
	if err != nil {
		return nil, err
	}
	p := &Product{BestFrame: 5 / math.Sqrt(d.best), ProperLimit: math.NaN()}
	// Both are tried where it may make a difference.
	gain := math.Sqrt(d.proper / d.mean)
	s.proper = cfg.Method == MethodProper || cfg.Method == MethodAuto && gain > 1.005
	s.observe = func(done, total int) { cfg.observe(StageStack, done, total, "") }
	sum, err := s.run(ctx)
	if err != nil {
		return nil, err
	}
	for k, c := range left {
		c.Used, c.Weight = true, s.layers[k].weight
		c.Rejected = sum.rejected[k] / math.Max(sum.considered[k], 1)
	}
	for _, c := range list {
		p.Inputs = append(p.Inputs, c.Input)
	}
	p.Used, p.Outliers = sum.used, sum.outliers
	meta := s.meta(left, anchor, d)

	mean, err := p.finish(sum.mean, sum.variance, sum, g, meta, cfg)
	if err != nil && cfg.Method != MethodProper {
		return nil, err
	}
	p.MeanLimit = math.NaN()
	if err == nil {
		p.MeanLimit = mean.limit
	}
	chosen := mean
	switch {
	case !s.proper:
		p.MethodReason = "asked for"
		if cfg.Method == MethodAuto {
			p.MethodReason = fmt.Sprintf("proper coaddition would go deeper by %.2f %% only", 100*(gain-1))
		}
	default:
		proper, err := p.finish(sum.proper, sum.properVar, sum, g, meta, cfg)
		if err != nil {
			if cfg.Method == MethodProper {
				return nil, err
			}
			p.MethodReason = "proper coaddition has no measurable stars: " + err.Error()
			break
		}
		p.ProperLimit = proper.limit
		ratio := p.MeanLimit / p.ProperLimit
		switch {
		case cfg.Method == MethodProper:
			chosen, p.Method, p.MethodReason = proper, MethodProper, "asked for"
		case ratio > 1.01:
			chosen, p.Method, p.MethodReason = proper, MethodProper, fmt.Sprintf("it goes deeper than the mean by %.2f %% as measured, %.2f %% were predicted", 100*(ratio-1), 100*(gain-1))
		default:
			p.MethodReason = fmt.Sprintf("proper coaddition goes deeper by %.2f %% as measured, at least 1 %% is wanted", 100*(ratio-1))
		}
	}
	p.Predicted = 5 / math.Sqrt(d.mean)
	if p.Method == "" {
		p.Method = MethodMean
	} else {
		p.Predicted = 5 / math.Sqrt(d.proper)
	}
	p.Frame, p.PSF, p.FWHM, p.Limit = chosen.frame, chosen.psf, chosen.fwhm, chosen.limit
	p.Noise, p.PixelNoise, p.Correlation = chosen.noise, chosen.background.ClippedNoise, chosen.background.Correlation
	p.First, p.Last = math.NaN(), math.NaN()
	for _, c := range left {
		if t := c.MidMJD; t == t {
			if !(p.First <= t) {
				p.First = t
			}
			if !(p.Last >= t) {
				p.Last = t
			}
		}
	}
	return p, nil
}

// setLayers fills the stacker's layers with the weights of the best mean.
func (s *stacker) setLayers(left []*candidate, g *grid) (depths, error) {
	tiles := tiling(g.width, g.height)
	middle := 0
	for k, t := range tiles {
		best := tiles[middle]
		cx, cy := float64(g.width)/2, float64(g.height)/2
		if math.Hypot(t.x-cx, t.y-cy) < math.Hypot(best.x-cx, best.y-cy) {
			middle = k
		}
	}
	size := 0
	for _, c := range left {
		size = max(size, c.part.PSFSize)
	}
	stamps := make([][]float32, len(left))
	variance := make([]float64, len(left))
	for k, c := range left {
		f, err := os.Open(c.part.path)
		if err != nil {
			return depths{}, err
		}
		stamp, err := c.part.stamp(f, middle)
		f.Close()
		if err != nil {
			return depths{}, err
		}
		stamps[k] = make([]float32, size*size)
		centre(stamps[k], size, stamp, c.part.PSFSize)
		variance[k] = robust.MedianOf(c.part.variance, nil) * c.Scale * c.Scale
		c.GridNoise, c.GridFWHM = math.Sqrt(variance[k]), c.part.FWHM
		c.Share = dot(stamps[k], stamps[k]) / variance[k]
	}
	overlap := make([][]float64, len(left))
	for i := range left {
		overlap[i] = make([]float64, len(left))
		for j := range i + 1 {
			overlap[i][j] = dot(stamps[i], stamps[j])
			overlap[j][i] = overlap[i][j]
		}
	}
	d := predict(overlap, variance)
	s.layers = nil
	for k, c := range left {
		s.layers = append(s.layers, layer{part: c.part, scale: c.Scale, gain: c.gain, weight: d.weights[k], variance: variance[k], shift: c.shift(), uncertainty: c.part.Uncertainty})
	}
	return d, nil
}

// shift is what registering leaves [px]: the floor of its residuals, and the
// error of the transform itself.
func (c *candidate) shift() float64 {
	if c.Anchor || c.pair == nil {
		return 0
	}
	n := 0
	for _, m := range c.pair.Matches {
		if m.Used {
			n++
		}
	}
	o := c.pair.Transform.Order
	return math.Hypot(c.pair.Floor, c.RMS*math.Sqrt(float64((o+1)*(o+2)/2)/float64(max(n, 1))))
}

// meta is what the header of the stack says.
func (s *stacker) meta(left []*candidate, anchor *candidate, d depths) frame.Meta {
	m := frame.UnknownMeta()
	m.Filter, m.Field = anchor.Filter, anchor.Field
	var photons, sky, exposure, time, timed float64
	var zeroPoints []float64
	m.Saturation = math.Inf(1)
	for k, c := range left {
		w := s.layers[k].weight
		// A source of f counts has f/scale of its own, scale·f/gain of variance.
		photons += w * w * c.Scale / c.gain
		sky += w * w * s.layers[k].variance
		if c.Exposure == c.Exposure {
			exposure += c.Exposure
		}
		if c.MidMJD == c.MidMJD {
			time += w * c.MidMJD
			timed += w
		}
		if c.ZeroPoint == c.ZeroPoint {
			zeroPoints = append(zeroPoints, c.ZeroPoint+2.5*math.Log10(c.Scale))
		}
		if c.Saturation > 0 {
			m.Saturation = min(m.Saturation, (c.Saturation-c.Sky)*c.Scale)
		}
		if m.Filter == "" {
			m.Filter = c.Filter
		}
		if m.Field == "" {
			m.Field = c.Field
		}
	}
	if photons > 0 {
		m.Gain = 1 / photons
		m.ReadNoise = math.Sqrt(sky) * m.Gain
	}
	if exposure > 0 {
		m.Exposure = exposure
	}
	if timed > 0 {
		m.MidMJD = time / timed
	}
	if len(zeroPoints) > 0 {
		m.ZeroPoint = robust.Median(zeroPoints)
	}
	if !(m.Saturation > 0) || math.IsInf(m.Saturation, 1) {
		m.Saturation = math.NaN()
	}
	return m
}

// finished is one way of adding, measured.
type finished struct {
	frame      *frame.Frame
	psf        *psf.Grid
	background *stars.Background
	fwhm       float64
	noise      float64 // count, white noise of a pixel with the same effect on a star
	limit      float64 // count, 5 sigma point source
}

// finish flags an image of the stack and measures it.
func (p *Product) finish(img, variance *frame.Image, sum *stacked, g *grid, meta frame.Meta, cfg *Config) (*finished, error) {
	f := &frame.Frame{Name: "reference", Image: img, Variance: variance, Flags: frame.NewMask(g.width, g.height), WCS: g.wcs, Meta: meta}
	nan := float32(math.NaN())
	level := float32(meta.Saturation)
	if level != level {
		// No header says where its frames saturate, but some pixels did.
		level = float32(math.Inf(1))
		for at, full := range sum.saturated {
			if full && sum.used.Pix[at] > 0 {
				level = min(level, img.Pix[at])
			}
		}
	}
	for at, n := range sum.used.Pix {
		switch {
		case n == 0:
			img.Pix[at], variance.Pix[at] = nan, nan
			f.Flags.Bits[at] = frame.NoData
		case sum.saturated[at]:
			f.Flags.Bits[at] = frame.Saturated
			img.Pix[at] = max(img.Pix[at], level)
		case img.Pix[at] >= level:
			f.Flags.Bits[at] = frame.Saturated
		}
	}
	bg, err := stars.EstimateBackground(img, f.Flags, cfg.Align.Background)
	if err != nil {
		return nil, err
	}
	sub := bg.Subtract(nil, img)
	list, err := stars.Find(sub, bg, f.Flags, meta.Gain, cfg.Align.Stars)
	if err != nil {
		return nil, err
	}
	model, err := psf.Fit(sub, variance, f.Flags, list.Stars, meta.Gain, cfg.PSF)
	if err != nil {
		return nil, fmt.Errorf("point-spread function of the stack: %w", err)
	}
	x, y := float64(g.width+1)/2, float64(g.height+1)/2
	out := &finished{frame: f, background: bg, fwhm: model.FWHM(x, y)}
	out.noise = math.Sqrt(robust.MedianOf(variance.Pix, nil))
	if sigma := measureNoise(sub, f.Flags, list.Stars, model.Render, out.fwhm); sigma > 0 {
		out.noise = sigma / math.Sqrt(model.EffectiveArea(x, y))
	}
	out.limit = 5 * out.noise * math.Sqrt(model.EffectiveArea(x, y))
	nx, ny := min(5, 1+g.width/128), min(5, 1+g.height/128)
	out.psf = psf.NewGrid(g.width, g.height, nx, ny, 2*model.Radius()+1, 4, model.Render)
	return out, nil
}
