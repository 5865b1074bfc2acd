package align

import (
	"cmp"
	"context"
	"math"
	"runtime"
	"slices"
	"strings"

	"nightsift/internal/frame"
	"nightsift/internal/photometry"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
)

// Config says how frames are aligned. Start from DefaultConfig: the zero value
// is not usable.
type Config struct {
	Background stars.BackgroundConfig
	Stars      stars.FindConfig

	// Workers is the number of goroutines that resample. The result does not
	// depend on it.
	Workers int

	// AnyFilter allows a reference taken through another filter.
	AnyFilter bool

	// PointingError [px of the new frame] is the shift up to which the two
	// world coordinate systems are believed before the star pattern alone
	// decides.
	PointingError float64

	// ScaleTolerance is the relative error allowed at first to the pixel scale
	// given by the world coordinate systems. If no pattern is found within it,
	// any scale from a tenth to ten is tried.
	ScaleTolerance float64

	MinStars   int     // fewest matched stars
	MinOverlap float64 // least fraction of the new frame that the reference must cover
	MaxOrder   int     // highest order of the transform, 1…5

	// Distortion is DistortionSIP or DistortionTPV: how the fitted world
	// coordinates hold the distortion.
	Distortion string

	// MaxRMS [px] and MaxRMSOverFWHM bound the residual of bright stars for
	// each axis; the larger of the two bounds counts.
	MaxRMS         float64
	MaxRMSOverFWHM float64
}

// DefaultConfig returns what suits most surveys.
func DefaultConfig() Config {
	return Config{
		Background:     stars.DefaultBackgroundConfig(),
		Stars:          stars.DefaultFindConfig(),
		Workers:        runtime.GOMAXPROCS(0),
		PointingError:  60,
		ScaleTolerance: 0.03,
		MinStars:       6,
		MinOverlap:     0.03,
		Distortion:     DistortionSIP,
		MaxOrder:       MaxOrder,
		MaxRMS:         0.25,
		MaxRMSOverFWHM: 0.12,
	}
}

// Match is one star seen on both frames.
type Match struct {
	New       int     // index into Pair.NewStars.Stars
	Reference int     // index into Pair.ReferenceStars
	DX, DY    float64 // px of the new frame: measured position minus the one the transform gives
	Used      bool    // entered the fit of the transform
}

// Pair is a new frame and its reference on the new frame's pixel grid.
type Pair struct {
	// New is the new frame in its original counts. Variance holds the sky's
	// part of the variance [count²], WCS is the fitted one where there is one.
	New           *frame.Frame
	NewBackground *stars.Background
	NewVariance   stars.VarianceReport
	NewStars      *stars.List

	// Reference is resampled onto the grid of New and sky-subtracted, in
	// counts of the reference. Variance is that of white noise with the power
	// of its noise at low frequencies: it is not reduced by the interpolation.
	// Flags were carried along by their weight in the kernel's footprint;
	// where the reference does not reach there is NoReference. Its Meta, Path
	// and Checksum are the reference's own; its WCS is the fitted one.
	Reference         *frame.Frame
	ReferenceVariance stars.VarianceReport

	// ReferenceStars are the reference's stars in and near the new frame:
	// positions, errors, widths and moments in pixels of the new frame, fluxes
	// in counts of the reference.
	ReferenceStars []stars.Star
	ReferenceFWHM  float64 // px of the new frame

	Matches []Match

	// FluxScale is the number of counts on the new frame for one count on the
	// reference, from the matched stars.
	FluxScale      float64
	FluxScaleErr   float64 // 1σ, from the scatter of the stars
	FluxScaleStars int

	// Transform maps new pixels to reference pixels.
	Transform *Transform
	Parity    int     // -1 if one frame is the other's mirror image
	Rotation  float64 // deg, direction of the new x axis on the reference, counter-clockwise from its x axis
	Scale     float64 // reference pixels per new pixel, at the centre
	Overlap   float64 // fraction of the new frame that the reference covers

	// Residuals of the fit for each axis [px of the new frame], of bright
	// stars and of all used.
	RMSX, RMSY       float64
	RMSXAll, RMSYAll float64
	BrightStars      int     // behind RMSX and RMSY
	Floor            float64 // px of the new frame: error added to the centroids' own, estimated, at least 0.01
	Condition        float64 // of the normal matrix, scaled to unit diagonal
	Method           string  // "world_coordinates" or "pattern": how the match was found
	LogOdds          float64 // log10 of the odds that as many stars coincide by chance

	// Standards are stars of New with known magnitudes, for its zero point.
	// Aligning leaves it nil; whoever has a catalogue sets it.
	Standards *photometry.Standards

	// WCS is the reference's world coordinate system carried to the new frame
	// as TAN-SIP; nil if the reference has none.
	WCS    *wcs.WCS
	WCSRMS float64 // px, of that representation
}

// RMS returns the residual of bright stars for one axis, the mean of both [px of the new frame].
func (p *Pair) RMS() float64 { return math.Sqrt((p.RMSX*p.RMSX + p.RMSY*p.RMSY) / 2) }

// PreparedReference is what aligning needs of a reference, made once for any
// number of new frames. It is read-only: safe for concurrent use.
type PreparedReference struct {
	Frame      *frame.Frame // as given
	Background *stars.Background
	Variance   stars.VarianceReport
	Stars      *stars.List

	source *source
}

// Prepare measures a reference. The frame is not changed, but its planes are
// kept. The error is a *frame.Problem where the frame is at fault.
func Prepare(ref *frame.Frame, cfg Config) (*PreparedReference, error) {
	p := &PreparedReference{}
	var sub *frame.Image
	var err error
	p.Frame, p.Background, p.Variance, p.Stars, sub, err = measure(ref, cfg)
	if err != nil {
		return nil, err
	}
	p.source = newSource(sub, p.Frame.Variance, p.Frame.Flags)
	p.source.interpolate()
	p.Frame.Variance = ref.Variance // the source holds its own: not two planes
	return p, nil
}

// measure fills what Prepare and AlignTo need of either frame: a copy of it
// with variance, its background, stars and the sky-subtracted image.
func measure(f *frame.Frame, cfg Config) (*frame.Frame, *stars.Background, stars.VarianceReport, *stars.List, *frame.Image, error) {
	var report stars.VarianceReport
	g := *f
	if g.Flags == nil {
		g.Flags = frame.NewMask(g.Image.Width, g.Image.Height)
	}
	bg, err := stars.EstimateBackground(g.Image, g.Flags, cfg.Background)
	if err != nil {
		return nil, nil, report, nil, nil, err
	}
	r, err := stars.EstimateVariance(&g, bg)
	if err != nil {
		return nil, nil, report, nil, nil, err
	}
	report = *r
	sub := bg.Subtract(nil, g.Image)
	list, err := stars.Find(sub, bg, g.Flags, g.Meta.Gain, cfg.Stars)
	if err != nil {
		return nil, nil, report, nil, nil, err
	}
	return &g, bg, report, list, sub, nil
}

// Align brings one reference onto one new frame's grid. For many new frames
// use Prepare once and AlignTo.
func Align(ctx context.Context, newFrame, ref *frame.Frame, cfg Config) (*Pair, error) {
	if p := filterProblem(newFrame, ref, cfg); p != nil {
		return nil, p
	}
	prepared, err := Prepare(ref, cfg)
	if err != nil {
		return nil, err
	}
	return AlignTo(ctx, newFrame, prepared, cfg)
}

func filterProblem(f, ref *frame.Frame, cfg Config) error {
	a, b := strings.TrimSpace(f.Meta.Filter), strings.TrimSpace(ref.Meta.Filter)
	if cfg.AnyFilter || a == "" || b == "" || a == b {
		return nil
	}
	return frame.Problemf(frame.ProblemWrongFilter, "%s was taken through filter %q, the reference %s through %q; choose a reference of the same filter or allow any", f.Name, a, ref.Name, b)
}

// AlignTo aligns a new frame with a prepared reference. newFrame is not
// changed, but its planes become part of the pair. The error is a
// *frame.Problem where the frames are at fault (too_few_stars, no_match,
// no_overlap, alignment_poor, wrong_filter), or the context's.
func AlignTo(ctx context.Context, newFrame *frame.Frame, ref *PreparedReference, cfg Config) (*Pair, error) {
	if cfg.MinStars < 4 || cfg.MaxOrder < 1 || cfg.MaxOrder > MaxOrder {
		panic("align: Config not made by DefaultConfig")
	}
	if err := filterProblem(newFrame, ref.Frame, cfg); err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	p := &Pair{}
	var err error
	p.New, p.NewBackground, p.NewVariance, p.NewStars, _, err = measure(newFrame, cfg)
	if err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	g := newGeometry(p.New, p.NewStars, ref, cfg)
	if err := g.find(ctx); err != nil {
		return nil, err
	}
	if err := g.refine(ctx); err != nil {
		return nil, err
	}
	if err := g.fillPair(p); err != nil {
		return nil, err
	}
	p.ReferenceVariance = ref.Variance
	if p.WCS != nil {
		if p.WCS, err = cfg.distorted(p.WCS); err != nil {
			return nil, err
		}
		p.New.WCS = p.WCS
	}
	r, err := ref.source.forScale(p.Scale).resample(ctx, p.Transform, p.New.Image.Width, p.New.Image.Height, cfg.Workers)
	if err != nil {
		return nil, err
	}
	p.Reference = &frame.Frame{
		Name: ref.Frame.Name, Path: ref.Frame.Path, Checksum: ref.Frame.Checksum, Meta: ref.Frame.Meta,
		Image: r.image, Variance: r.variance, Flags: r.flags, WCS: p.WCS,
	}
	return p, nil
}

// leastScatter is the least relative scatter of flux ratios beyond photon noise: flat field,
// neighbours, colour.
const leastScatter = 0.005

// scaleFlux measures the flux scale from matched, clean stars: what the
// logarithms of their flux ratios have in common. Where stars are few, many of
// them may be variable.
func scaleFlux(p *Pair) {
	const (
		onlyClean = iota
		noneExtended
		anySource
	)
	collect := func(what int, minSN float64) []fluxRatio {
		var out []fluxRatio
		for _, m := range p.Matches {
			a, b := &p.NewStars.Stars[m.New], &p.ReferenceStars[m.Reference]
			if (a.Flags|b.Flags)&frame.Unusable != 0 || what == onlyClean && !(a.Clean && b.Clean) || what == noneExtended && (a.Extended || b.Extended) {
				continue
			}
			if !(a.Flux > 0 && b.Flux > 0 && a.SN >= minSN && b.SN >= minSN) {
				continue
			}
			out = append(out, ratioOf(a, b))
		}
		return out
	}
	list := collect(onlyClean, 20)
	if len(list) < 20 {
		list = collect(noneExtended, 10)
	}
	if len(list) < 3 {
		list = collect(anySource, 10)
	}
	if len(list) < 3 {
		list = collect(anySource, 3)
	}
	p.FluxScale, p.FluxScaleErr = math.NaN(), math.NaN()
	if len(list) == 0 {
		return
	}
	slices.SortStableFunc(list, func(a, b fluxRatio) int { return cmp.Compare(a.err, b.err) })
	list = list[:min(len(list), 300)]
	var v, e []float64
	for _, r := range list {
		v, e = append(v, r.value), append(e, r.err)
	}
	centre, sigma, _, members := robust.Common(v, e, leastScatter)
	p.FluxScale, p.FluxScaleErr, p.FluxScaleStars = math.Exp(centre), math.Exp(centre)*sigma, members
}
