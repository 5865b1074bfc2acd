package trainset

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// The scenarios of Scenarios mostly go well: little of what the pipeline lets
// through on them is bogus. A worn frame is one on which several things go
// wrong at once, as they do at a real telescope: the finder of artefacts is
// blind, the frames are shifted against each other here and there, the header
// states another gain or no saturation, noise is correlated, the kernel cannot
// follow the point-spread function. Widths, scales, densities and brightnesses
// are drawn over wide ranges.
type worn struct {
	base   string
	change simulate.Change
	faults []string // what goes wrong, for reports

	gainError  float64 // factor on the header's gain
	saturation float64 // factor on the header's saturation level; 0 takes the keyword away
	smooth     float64 // px, width of added noise that is correlated; 0 for none
	noise      float64 // its size, in units of the white noise
	waves      float64 // px, amplitude of a shift that varies over the field
	period     float64 // px, of that
	jolts      float64 // px, shift of single places, as stars with proper motion have
	blind      bool    // the finder of artefacts is off
	stiff      bool    // the kernel is the same everywhere
	seed       uint64
}

var wornBases = []string{"plain", "crowded", "sparse", "bright_hosts", "equal_depth", "gradient", "low_counts", "dirty", "strong_psf_variation", "crossed_elongation", "gaussian", "seeing_better"}

func logUniform(r *rand.Rand, low, high float64) float64 {
	return low * math.Pow(high/low, r.Float64())
}

// newWorn draws what is wrong with worn frame number k.
func newWorn(k int, seed uint64) *worn {
	r := rand.New(rand.NewPCG(seed, 0x776f726e))
	w := &worn{base: wornBases[k%len(wornBases)], gainError: 1, saturation: 1, seed: seed}
	fault := func(chance float64, name string) bool {
		hit := r.Float64() < chance
		if hit {
			w.faults = append(w.faults, name)
		}
		return hit
	}
	w.change = simulate.Change{Events: 110, Brightest: 1000, Moving: 0.08}
	width := logUniform(r, 1.6, 10)
	other := math.Max(1.6, math.Min(11, width*logUniform(r, 0.5, 2)))
	scale := logUniform(r, 0.25, 1.2)
	density := logUniform(r, 0.4, 2.5)
	var hits, hot, refHits float64
	var columns int
	w.blind = fault(0.55, "blind")
	if fault(0.7, "hits") {
		hits = logUniform(r, 40, 500)
	}
	if fault(0.5, "hot") {
		hot = logUniform(r, 10, 200)
	}
	if fault(0.2, "reference hits") {
		refHits = logUniform(r, 20, 100)
	}
	if fault(0.25, "columns") {
		columns = 1 + r.IntN(4)
	}
	streak := fault(0.2, "trail")
	bleed := fault(0.5, "bleed")
	if fault(0.35, "saturation not stated") {
		w.change.Saturated = 12
		w.saturation = 3 * float64(r.IntN(2))
	}
	if fault(0.3, "gain") {
		w.gainError = math.Exp(0.2 * r.NormFloat64())
	}
	if fault(0.15, "correlated") {
		w.smooth, w.noise = 0.7+r.Float64(), 0.05+0.15*r.Float64()
	}
	if fault(0.35, "waves") {
		w.waves, w.period = logUniform(r, 0.05, 0.5), logUniform(r, 80, 400)
	}
	if fault(0.35, "jolts") {
		w.jolts = logUniform(r, 0.1, 0.8)
	}
	w.stiff = fault(0.2, "stiff")
	flat, patchy := 0.02*r.Float64(), 0.03*r.Float64()
	e := [6]float64{}
	for i := range e {
		e[i] = 0.06 * r.NormFloat64()
	}
	w.change.Tune = func(n, r *simulate.Conditions) {
		n.PSF.FWHM, r.PSF.FWHM = width, other
		n.Camera.Scale, r.Camera.Scale = scale, scale*r.Camera.Scale/n.Camera.Scale
		n.CosmicRays, n.HotPixels, n.BadColumns, n.Streak = hits, hot, columns, streak
		r.CosmicRays = refHits
		n.Bleed, r.Bleed = bleed, bleed
		n.Flat, n.Patchy = flat, patchy
		n.PSF.E1, n.PSF.E2 = n.PSF.E1+e[0], n.PSF.E2+e[1]
		n.PSF.FWHMX, n.PSF.FWHMR = n.PSF.FWHMX+e[2], n.PSF.FWHMR+e[3]
		n.PSF.E1X, n.PSF.E2Y = n.PSF.E1X+e[4], n.PSF.E2Y+e[5]
	}
	// Densities change about those of the scenario.
	switch w.base {
	case "crowded":
		w.change.Stars = 1500 * density
	case "sparse":
		w.change.Stars = 60 * density
	default:
		w.change.Stars = 300 * density
	}
	return w
}

func (w *worn) String() string {
	return fmt.Sprintf("worn %s (%s)", w.base, strings.Join(w.faults, ", "))
}

// spoil changes the finished exposures: headers, and noise.
func (w *worn) spoil(p *simulate.Pairs) {
	for _, e := range []*simulate.Exposure{p.New[0], p.Reference} {
		kept := e.Header[:0]
		for _, k := range e.Header {
			v, number := k.Value.(float64)
			switch {
			case k.Key == "GAIN" && number:
				k.Value = v * w.gainError
			case k.Key == "SATURATE" && number:
				if w.saturation == 0 {
					continue
				}
				k.Value = v * w.saturation
			}
			kept = append(kept, k)
		}
		e.Header = kept
	}
	if w.noise > 0 {
		addSmoothNoise(p.New[0], w.smooth, w.noise*p.New[0].SkyNoise, w.seed)
	}
}

// addSmoothNoise adds Gaussian noise of the given spread, white noise smoothed
// with a Gaussian of the given width [px].
func addSmoothNoise(e *simulate.Exposure, width, spread float64, seed uint64) {
	r := rand.New(rand.NewPCG(seed, 0x736d6f6f))
	w, h := e.Width, e.Height
	half := int(math.Ceil(3 * width))
	kernel := make([]float64, 2*half+1)
	sum := 0.0
	for i := range kernel {
		d := float64(i-half) / width
		kernel[i] = math.Exp(-d * d / 2)
		sum += kernel[i] * kernel[i]
	}
	white := make([]float32, w*h)
	for k := range white {
		white[k] = float32(spread / sum * r.NormFloat64())
	}
	pass := func(dst, src []float32, dx, dy int) {
		for j := range h {
			for i := range w {
				v := 0.0
				for t, c := range kernel {
					// The far edge continues at the near one: the variance is the same everywhere.
					a, b := (i+dx*(t-half)+w)%w, (j+dy*(t-half)+h)%h
					v += c * float64(src[b*w+a])
				}
				dst[j*w+i] = float32(v)
			}
		}
	}
	along := make([]float32, w*h)
	pass(along, white, 1, 0)
	pass(white, along, 0, 1)
	for k, v := range white {
		e.Pix[k] += v
		if e.Integers {
			e.Pix[k] = float32(math.Max(0, math.Min(65535, math.Round(float64(e.Pix[k])))))
		}
	}
}

// shift moves the reference of an aligned pair: by waves over the field and by
// jolts of single places. The pair's own report of how well it is aligned
// stays as it was, as after an error that nobody noticed.
func (w *worn) shift(p *align.Pair) {
	if w.waves == 0 && w.jolts == 0 {
		return
	}
	r := rand.New(rand.NewPCG(w.seed, 0x73686966))
	src := p.Reference.Image
	type jolt struct{ x, y, dx, dy, reach float64 }
	var jolts []jolt
	if w.jolts > 0 {
		// At stars, where a shift leaves something.
		for _, s := range p.ReferenceStars {
			if r.Float64() < 0.15 {
				sin, cos := math.Sincos(2 * math.Pi * r.Float64())
				a := w.jolts * r.Float64()
				jolts = append(jolts, jolt{s.X - 1, s.Y - 1, a * cos, a * sin, 2 + 1.5*p.ReferenceFWHM})
			}
		}
	}
	width, height := src.Width, src.Height
	dx, dy := make([]float32, width*height), make([]float32, width*height)
	if w.waves > 0 {
		k := 2 * math.Pi / w.period
		a, b := 2*math.Pi*r.Float64(), 2*math.Pi*r.Float64()
		for j := range height {
			for i := range width {
				dx[j*width+i] = float32(w.waves * math.Sin(k*(float64(i)*0.7+float64(j)*0.5)+a))
				dy[j*width+i] = float32(w.waves * math.Cos(k*(float64(j)*0.8-float64(i)*0.4)+b))
			}
		}
	}
	for _, q := range jolts {
		far := int(2.5 * q.reach)
		ci, cj := int(q.x), int(q.y)
		for j := max(0, cj-far); j <= min(height-1, cj+far); j++ {
			for i := max(0, ci-far); i <= min(width-1, ci+far); i++ {
				u, v := (float64(i)-q.x)/q.reach, (float64(j)-q.y)/q.reach
				f := math.Exp(-(u*u + v*v) * (u*u + v*v))
				dx[j*width+i] += float32(q.dx * f)
				dy[j*width+i] += float32(q.dy * f)
			}
		}
	}
	p.Reference.Image = displaced(src, dx, dy)
}

// displaced resamples an image at (x+dx, y+dy) with the cubic convolution
// kernel of Keys 1981, IEEE Trans. ASSP 29, 1153. Pixels within two of the
// border or of a value that is not finite stay as they are.
func displaced(src *frame.Image, dx, dy []float32) *frame.Image {
	out := src.Clone()
	w, h := src.Width, src.Height
	weights := func(t float64) (c [4]float64) {
		c[0] = ((-t+2)*t - 1) * t / 2
		c[1] = (3*t-5)*t*t/2 + 1
		c[2] = ((-3*t+4)*t + 1) * t / 2
		c[3] = (t - 1) * t * t / 2
		return
	}
	for j := range h {
		for i := range w {
			k := j*w + i
			if dx[k] == 0 && dy[k] == 0 {
				continue
			}
			x, y := float64(i)+float64(dx[k]), float64(j)+float64(dy[k])
			a, b := int(math.Floor(x)), int(math.Floor(y))
			if a < 1 || b < 1 || a+2 >= w || b+2 >= h {
				continue
			}
			cx, cy := weights(x-float64(a)), weights(y-float64(b))
			v := 0.0
			for t := range 4 {
				row := src.Row(b - 1 + t)[a-1 : a+3]
				v += cy[t] * (cx[0]*float64(row[0]) + cx[1]*float64(row[1]) + cx[2]*float64(row[2]) + cx[3]*float64(row[3]))
			}
			if !math.IsNaN(v) && !math.IsInf(v, 0) {
				out.Pix[k] = float32(v)
			}
		}
	}
	return out
}

// loosen sets the subtraction up for a worn frame. Frames whose noise is larger
// than stated stay set aside: their noise peaks would teach that faint sources
// are bogus.
func (w *worn) loosen(c subtract.Config) subtract.Config {
	c.Artefacts.Off = c.Artefacts.Off || w.blind
	if w.stiff {
		c.KernelOrderMax = 0
	}
	c.NoiseRatioLow = 0.5
	return c
}
