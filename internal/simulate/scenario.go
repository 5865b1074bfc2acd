package simulate

import (
	"fmt"
	"math"
	"sort"
	"strings"
	"sync"
)

// Pairs is one reference, the new frames to be searched against it, and the
// truth.
type Pairs struct {
	Name      string
	Scene     *Scene
	Reference *Exposure
	New       []*Exposure
	Truth     *Truth
}

// preset describes a scenario.
type preset struct {
	about     string
	stars     float64 // per Mpx of the new frame, of S/N > 10 on it
	saturated float64 // per Mpx, added
	galaxies  float64 // per Mpx
	events    float64 // per Mpx
	onHosts   float64 // fraction of the events
	anywhere  float64 // fraction of the events placed without regard to bad pixels
	tune      func(n, r *Conditions)
	galaxyMag [2]float64 // relative to the magnitude of S/N 10
	brightest float64    // S/N of the brightest events
	moving    float64    // fraction of the new sources that move during the exposure
}

// Change alters a scenario. Zero values keep what the scenario has.
type Change struct {
	Stars, Saturated, Galaxies, Events float64 // per Mpx, as the scenario defines them
	Brightest                          float64 // S/N of the brightest events; a scenario has 100
	Moving                             float64 // fraction of the new sources on empty sky that trail by up to three FWHM
	Tune                               func(n, r *Conditions)
}

func basePreset() preset {
	return preset{stars: 300, galaxies: 60, events: 100, onHosts: 0.45, galaxyMag: [2]float64{-3.5, 0.5}, brightest: 100}
}

var presets = map[string]preset{}

func define(name, about string, change func(p *preset)) {
	p := basePreset()
	p.about = about
	change(&p)
	presets[name] = p
}

func init() {
	define("plain", "an ordinary frame against a deep, somewhat sharper reference", func(p *preset) {
		p.tune = func(n, r *Conditions) {}
	})
	define("dirty", "cosmic rays, bleeding stars, a satellite, bad columns, hot pixels, thin cloud, wrong pointing", func(p *preset) {
		p.saturated, p.anywhere = 5, 0.15
		p.tune = func(n, r *Conditions) {
			n.CosmicRays, n.HotPixels, n.BadColumns, n.Streak = 90, 25, 4, true
			n.Bleed, r.Bleed = true, true
			n.Flat, n.Patchy, n.Transparency = 0.01, 0.02, 0.8
			n.GradientX, n.GradientR = 0.08, -0.05
			n.HeaderEast, n.HeaderNorth = 35, -22
			n.Camera.Distortion = newDistortion(n.Camera.Width, n.Camera.Height, 2.5)
			n.PSF.E1, n.PSF.E2 = 0.06, -0.05
		}
	})
	define("seeing_worse", "the new frame is much less sharp than the reference", func(p *preset) {
		p.tune = func(n, r *Conditions) { n.PSF.FWHM, r.PSF.FWHM = 5.8, 2.8 }
	})
	define("seeing_better", "the new frame is much sharper than the reference", func(p *preset) {
		p.tune = func(n, r *Conditions) { n.PSF.FWHM, r.PSF.FWHM = 2.5, 4.4 }
	})
	define("crossed_elongation", "both frames elongated, at right angles", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			n.PSF.FWHM, r.PSF.FWHM = 3.7, 3.5
			n.PSF.E1, n.PSF.E2, r.PSF.E1, r.PSF.E2 = 0.17, 0.04, -0.17, -0.04
		}
	})
	define("strong_psf_variation", "width and elongation change over the field, with strong distortion", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			n.PSF.FWHMX, n.PSF.FWHMY, n.PSF.FWHMR = 0.10, -0.05, 0.12
			n.PSF.E1X, n.PSF.E1Y, n.PSF.E2X, n.PSF.E2Y = 0.10, 0.03, -0.04, 0.10
			r.PSF.FWHMX, r.PSF.FWHMR = -0.04, 0.10
			r.PSF.E1Y, r.PSF.E2X = 0.07, 0.07
			n.Camera.Distortion = newDistortion(n.Camera.Width, n.Camera.Height, 0.008*float64(n.Camera.Width))
			r.Camera.Distortion = newDistortion(r.Camera.Width, r.Camera.Height, 0.006*float64(r.Camera.Width))
			n.HeaderDistortion = true
		}
	})
	define("gradient", "moonlight gradient, flat-field residuals and patchy cloud, stored as floats with a border without data", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			n.GradientX, n.GradientY, n.GradientR = 0.5, -0.3, 0.15
			n.Flat, n.Patchy, n.Transparency = 0.02, 0.03, 0.85
			n.Sky = 800
			r.GradientY = 0.1
			n.Integers, n.Border = false, 6
		}
	})
	define("low_counts", "a short exposure under a dark sky: few photons per pixel", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			n.Sky, n.Gain, n.ReadNoise = 6, 1, 2.2
			r.Sky, r.Gain, r.ReadNoise, r.Stack = 5, 1, 2.2, 6
			n.ZeroPoint, r.ZeroPoint = 25.5, 25.5
			n.Exposure = 20
		}
	})
	define("crowded", "a dense star field", func(p *preset) {
		p.stars, p.galaxies, p.onHosts = 3000, 20, 0.15
		p.tune = func(n, r *Conditions) {}
	})
	define("sparse", "few stars", func(p *preset) {
		p.stars, p.galaxies = 25, 40
		p.tune = func(n, r *Conditions) {}
	})
	define("bright_hosts", "most events on the inner parts of bright galaxies", func(p *preset) {
		p.galaxies, p.onHosts = 170, 0.88
		p.galaxyMag = [2]float64{-6, -2.5}
		p.tune = func(n, r *Conditions) {}
	})
	define("equal_depth", "the reference is a single exposure as deep as the new frame", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			r.Stack, r.Sky, r.Integers = 1, n.Sky, true
			r.PSF.FWHM = 3.3
		}
	})
	define("rotated_12deg", "the new frame is rotated by 12 degrees", func(p *preset) {
		p.tune = func(n, r *Conditions) { n.Camera.Rotation = 12 }
	})
	define("mirrored", "the new frame is mirrored and turned, its header says so", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			n.Camera.Mirrored, n.Camera.Rotation = true, 181
		}
	})
	define("pointing_off_5arcmin", "the frames overlap in part and the header is wrong by five arcminutes", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			d := 0.1 * float64(n.Camera.Width) * n.Camera.Scale
			n.Camera.RA, n.Camera.Dec = offsetSky(r.Camera.RA, r.Camera.Dec, d, -0.6*d)
			n.HeaderEast, n.HeaderNorth = 240, 180
		}
	})
	define("other_camera", "the reference comes from another camera, with another scale and rotation", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			r.Camera.Scale, r.Camera.Rotation = 0.47, -31
			r.PSF.FWHM = 3.6
			r.Camera.Width = r.Camera.Width * 5 / 4
			r.Camera.Height = r.Camera.Height * 6 / 5
			r.Camera.Distortion = newDistortion(r.Camera.Width, r.Camera.Height, 1.5)
		}
	})
	define("gaussian", "round Gaussian profiles, no distortion", func(p *preset) {
		p.tune = func(n, r *Conditions) {
			n.PSF, r.PSF = PSF{FWHM: 3.6}, PSF{FWHM: 2.9}
			n.Camera.Distortion, r.Camera.Distortion = nil, nil
		}
	})
	define("undersampled", "stars of 1.8 pixels", func(p *preset) {
		p.tune = func(n, r *Conditions) { n.PSF.FWHM, r.PSF.FWHM = 1.8, 1.9 }
	})
	define("broad", "stars of nine pixels", func(p *preset) {
		p.events = 60
		p.tune = func(n, r *Conditions) { n.PSF.FWHM, r.PSF.FWHM = 9, 7 }
	})
}

// Names lists the scenarios in alphabetical order.
func Names() []string {
	var l []string
	for n := range presets {
		l = append(l, n)
	}
	sort.Strings(l)
	return l
}

// About returns one line on a scenario, empty when there is none of that name.
func About(name string) string { return presets[name].about }

// baseConditions are those of an ordinary pair.
func baseConditions(size int, seed uint64) (n, r Conditions) {
	const ra, dec = 214.37, -11.62
	r = Conditions{
		Name:   "reference",
		Camera: Camera{Width: size, Height: size, RA: ra, Dec: dec, Scale: 0.6, Rotation: 0.3},
		PSF:    PSF{Beta: 3.6, FWHM: 2.9, E1: -0.02, E2: 0.02, FWHMR: 0.02, E1X: 0.01},
		Gain:   1.4, ReadNoise: 6, ZeroPoint: 27.9, Sky: 300, Transparency: 1, Stack: 12,
		Saturation: 55000, MidMJD: 61300.21, Exposure: 120, Filter: "r", Field: "MR-101",
		HeaderDistortion: true, Reference: true, Seed: mix(seed ^ 0xaaaa),
	}
	r.Camera.Distortion = newDistortion(size, size, 0.0006*float64(size))
	n = Conditions{
		Name:   "new-1",
		Camera: Camera{Width: size, Height: size, Scale: 0.6, Rotation: -0.4},
		PSF:    PSF{Beta: 3.1, FWHM: 3.6, E1: 0.04, E2: -0.02, FWHMX: 0.02, FWHMR: 0.03, E2Y: 0.015},
		Gain:   1.5, ReadNoise: 6.5, ZeroPoint: 27.6, Sky: 400, Transparency: 1,
		Saturation: 60000, Integers: true, MidMJD: 61420.18, Exposure: 90, Filter: "r", Field: "MR-101",
		HeaderEast: 4, HeaderNorth: -3, Seed: mix(seed ^ 0x5555),
	}
	rng := stream(seed, 3)
	n.Camera.RA, n.Camera.Dec = offsetSky(ra, dec, uniform(rng, -9, 9), uniform(rng, -9, 9))
	n.Camera.Distortion = newDistortion(size, size, 0.0009*float64(size))
	return n, r
}

// Scenario renders a named preset (see Names) with frames of about size × size
// px in memory. The same arguments give the same pixels.
func Scenario(name string, size int, seed uint64) (*Pairs, error) {
	return Varied(name, Change{}, size, seed)
}

// Varied renders a named preset with a change, which may tune the conditions
// of the new frame and the reference after the preset did.
func Varied(name string, change Change, size int, seed uint64) (*Pairs, error) {
	p, ok := presets[name]
	if !ok {
		return nil, fmt.Errorf("simulate: no scenario %q: want one of %s", name, strings.Join(Names(), ", "))
	}
	for _, c := range []struct {
		to   *float64
		from float64
	}{{&p.stars, change.Stars}, {&p.saturated, change.Saturated}, {&p.galaxies, change.Galaxies}, {&p.events, change.Events},
		{&p.brightest, change.Brightest}, {&p.moving, change.Moving}} {
		if c.from > 0 {
			*c.to = c.from
		}
	}
	if size < 128 || size > 16384 {
		return nil, fmt.Errorf("simulate: frames of %d px: want 128 to 16384", size)
	}
	n, r := baseConditions(size, seed)
	p.tune(&n, &r)
	if change.Tune != nil {
		change.Tune(&n, &r)
	}
	// The depth of the new frame sets the scale of magnitudes.
	alone := side{psf: n.PSF.at(&n.Camera, n.Camera.cx(), n.Camera.cy()), transfer: newTransfer(n.PSF.Beta),
		variance: n.variance(n.Sky), jacobian: [2][2]float64{{1, 0}, {0, 1}}, scale: 1}
	ten := 10 / unitSN(&alone, nil, 0, 0) / n.counts(1, n.Camera.cx(), n.Camera.cy())
	m10 := -2.5 * math.Log10(ten)
	perArea := 1e6 * n.Camera.Scale * n.Camera.Scale / 3600 // square arcmin per Mpx
	mpx := float64(n.Camera.Width) * float64(n.Camera.Height) / 1e6
	full := n.ZeroPoint - 2.5*math.Log10(n.Saturation/alone.psf.peak()) // about saturating
	plan := skyPlan{
		stars: p.stars / perArea, starMag: m10, slope: 0.3, bright: m10 - 7.7, faint: m10 + 3.2,
		forced: int(math.Round(p.saturated * mpx)), forcedMag: [2]float64{full - 4.8, full - 0.8},
		galaxies: p.galaxies / perArea, galaxySlope: 0.4,
		galaxyMag: [2]float64{m10 + p.galaxyMag[0], m10 + p.galaxyMag[1]},
		radius:    [2]float64{0.8, 2.4},
	}
	scene := newScene(r.Camera.RA, r.Camera.Dec, sceneSide(&n, &r), plan, mix(seed))
	return expose(name, scene, r, n, &p, seed), nil
}

func (c *Camera) cx() float64 { return (float64(c.Width) + 1) / 2 }
func (c *Camera) cy() float64 { return (float64(c.Height) + 1) / 2 }

// sceneSide is the side [arcsec] of the square about the first camera's
// pointing that holds all frames and a margin.
func sceneSide(list ...*Conditions) float64 {
	half := 0.0
	ra, dec := list[len(list)-1].Camera.RA, list[len(list)-1].Camera.Dec
	for _, c := range list {
		w, h := float64(c.Camera.Width), float64(c.Camera.Height)
		const m = 25
		for _, q := range [][2]float64{{-m, -m}, {w + m, -m}, {-m, h + m}, {w + m, h + m}, {w / 2, -m}, {w / 2, h + m}, {-m, h / 2}, {w + m, h / 2}} {
			a, d := c.Camera.PixelToSky(q[0], q[1])
			xi, eta := toTangent(ra, dec, a, d)
			half = math.Max(half, math.Max(math.Abs(xi), math.Abs(eta)))
		}
	}
	return 2 * half * 3600
}

// expose draws the constant sky on both frames, chooses the events, and
// finishes the frames.
func expose(name string, scene *Scene, r, n Conditions, p *preset, seed uint64) *Pairs {
	brushes := [2]*brush{newBrush(&n), newBrush(&r)}
	var blemish [2]*faults
	var constant [2][]float32
	both(func(k int) {
		b := brushes[k]
		b.static(scene)
		blemish[k] = b.c.faults()
		// The constant sky decides which pixels overflow.
		dry := make([]float32, len(b.pix))
		b.c.expect(dry, b.pix, blemish[k])
		constant[k] = append(dry[:0], b.pix...)
	})
	pair := newPairing(&n, &r)
	pair.nLight, pair.rLight = constant[0], constant[1]
	pair.nDefects, pair.rDefects = blemish[0].defects, blemish[1].defects
	scene.Events = placeEvents(scene, pair, p, seed)
	truth := &Truth{}
	for i := range scene.Events {
		if s, ok := pair.source(&scene.Events[i]); ok {
			truth.Sources = append(truth.Sources, s)
		}
	}
	truth.Frames = []FrameTruth{pair.truth()}
	var done [2]*Exposure
	both(func(k int) {
		b := brushes[k]
		for i := range scene.Events {
			e := &scene.Events[i]
			x, y, _, _ := b.c.path(e)
			b.event(e, b.c.counts(e.shines(b.c), x, y))
		}
		done[k] = b.c.finish(b.pix, blemish[k])
	})
	return &Pairs{Name: name, Scene: scene, Reference: done[1], New: done[:1], Truth: truth}
}

// both runs f(0) and f(1) together.
func both(f func(int)) {
	var wg sync.WaitGroup
	wg.Go(func() { f(0) })
	f(1)
	wg.Wait()
}

// apart is the least distance between two events [px].
const apart = 25

// placeEvents chooses events with signal-to-noise ratios between 3 and 100, spread
// evenly in the logarithm: on hosts following their light, on empty sky, changed
// stars, lost light.
func placeEvents(s *Scene, pair *pairing, p *preset, seed uint64) []Event {
	n := pair.n
	w, h := float64(n.Camera.Width), float64(n.Camera.Height)
	r := stream(seed, 4)
	count := int(math.Round(p.events * w * h / 1e6))
	margin := 3*math.Max(n.PSF.FWHM, pair.r.PSF.FWHM) + 12
	far := math.Max(apart, 4*n.PSF.FWHM)
	type spot struct{ x, y float64 }
	var taken []spot
	free := func(x, y float64, anywhere bool) bool {
		if !pair.covered(x, y, margin) {
			return false
		}
		for _, t := range taken {
			if math.Hypot(t.x-x, t.y-y) < far {
				return false
			}
		}
		return anywhere || pair.defects(x, y, 2) == 0
	}
	skyVar := n.variance(n.Sky)
	// busy is the photon noise of constant light relative to the sky's.
	busy := func(x, y float64) float64 {
		return meanAround(pair.nLight, n, x, y, n.PSF.FWHM) / n.Gain / skyVar
	}
	hosts := s.Galaxies
	var events []Event
	for k := 0; len(events) < count && k < 20*count; k++ {
		target := logUniform(r, 3, p.brightest)
		e := Event{ID: fmt.Sprintf("T%04d", len(events)+1), Kind: KindTransient, HostMag: math.NaN()}
		sign := 1.0
		u := r.Float64()
		anywhere := r.Float64() < p.anywhere
		var x, y float64
		ok := false
		switch {
		case u < 0.06 && len(s.Stars) > 0:
			e.Kind = KindVariable
			for range 200 {
				st := s.Stars[r.IntN(len(s.Stars))]
				x, y = n.Camera.SkyToPixel(st.RA, st.Dec)
				if !free(x, y, anywhere) {
					continue
				}
				sky, local := pair.unit(x, y, 0, 0)
				flux := n.counts(fluxOf(st.Mag), x, y)
				if flux*sky < 15 || flux*sky > 1500 {
					continue
				}
				if r.IntN(2) == 0 {
					sign = -1
					target = math.Min(target, 0.8*flux*local)
				} else {
					target = math.Min(target, 3*flux*local)
				}
				ok = true
				break
			}
		case u < 0.06+p.onHosts && len(hosts) > 0:
			for range 200 {
				g := &hosts[r.IntN(len(hosts))]
				east, north := g.pointInside(r, 2.5)
				ra, dec := offsetSky(g.RA, g.Dec, east, north)
				x, y = n.Camera.SkyToPixel(ra, dec)
				if !free(x, y, anywhere) {
					continue
				}
				e.Host, e.HostDistance, e.HostMag = g.ID, math.Hypot(east, north), g.Mag
				ok = true
				break
			}
		default:
			if u > 0.94 {
				e.Kind, sign = KindFaded, -1
			}
			for try := range 200 {
				x, y = uniform(r, 1, w), uniform(r, 1, h)
				if free(x, y, anywhere) && (anywhere || try > 150 || busy(x, y) < 0.3) {
					ok = true
					break
				}
			}
		}
		if !ok {
			continue
		}
		trail, towards := 0.0, 0.0
		if p.moving > 0 && e.Kind == KindTransient && e.Host == "" && r.Float64() < p.moving {
			trail, towards = n.PSF.FWHM*uniform(r, 0.5, 3), uniform(r, 0, 2*math.Pi)
			speed := trail * n.Camera.Scale / n.Exposure * 86400 // arcsec per day
			e.Kind, e.Epoch, e.East, e.North = KindAsteroid, n.MidMJD, speed*math.Cos(towards), speed*math.Sin(towards)
		}
		_, local := pair.unit(x, y, trail*math.Cos(towards), trail*math.Sin(towards))
		light := sign * target / local / n.counts(1, x, y)
		e.Light = func(float64) float64 { return light }
		e.RA, e.Dec = n.Camera.PixelToSky(x, y)
		events = append(events, e)
		taken = append(taken, spot{x, y})
	}
	return events
}

// EmptySky marks the pixels of new frame i that hold nothing but sky on both
// frames: within grow FWHM no constant light with a tenth of the sky's variance, no event, no bad pixel, and covered by the
// reference.
func (p *Pairs) EmptySky(i int, grow float64) []bool {
	n, r := p.New[i], p.Reference
	w, h := n.Width, n.Height
	busy := make([]bool, w*h)
	bad := make([]bool, r.Width*r.Height)
	level := func(e *Exposure) float32 {
		c := &e.Conditions
		return float32(0.1 * e.SkyNoise * e.SkyNoise * c.Gain * c.stack())
	}
	lr, ln := level(r), level(n)
	for k := range bad {
		bad[k] = r.Light[k] > lr || r.Defects[k] != 0
	}
	pair := newPairing(&n.Conditions, &r.Conditions)
	// The map is smooth: exact at every 16th pixel, linear between.
	const step = 16
	for j := range h {
		for i0 := 0; i0 < w; i0 += step {
			x0, y0 := pair.toReference(float64(i0+1), float64(j+1))
			x1, y1 := pair.toReference(float64(i0+1+step), float64(j+1))
			for d := 0; d < step && i0+d < w; d++ {
				k := j*w + i0 + d
				f := float64(d) / step
				a, b := int(math.Round(x0+f*(x1-x0)))-1, int(math.Round(y0+f*(y1-y0)))-1
				busy[k] = n.Light[k] > ln || n.Defects[k] != 0 ||
					a < 0 || b < 0 || a >= r.Width || b >= r.Height || bad[b*r.Width+a]
			}
		}
	}
	for _, s := range p.Truth.Sources {
		if s.Frame == n.Name {
			a, b := int(math.Round(s.X))-1, int(math.Round(s.Y))-1
			if a >= 0 && b >= 0 && a < w && b < h {
				busy[b*w+a] = true
			}
		}
	}
	radius := int(math.Ceil(grow * math.Max(n.Conditions.PSF.FWHM, r.Conditions.PSF.FWHM)))
	busy = dilate(busy, w, h, radius)
	for k := range busy {
		busy[k] = !busy[k]
	}
	return busy
}

// dilate grows a mask by a square of the given radius; beyond the frame counts
// as set.
func dilate(m []bool, w, h, radius int) []bool {
	pass := func(src, dst []bool, n, lines, stride, lineStride int) {
		for l := range lines {
			base := l * lineStride
			last := -1 // position of the latest set pixel; before the frame is set
			for i := range n {
				if src[base+i*stride] {
					last = i
				}
				dst[base+i*stride] = i-last <= radius
			}
			next := n
			for i := n - 1; i >= 0; i-- {
				if src[base+i*stride] {
					next = i
				}
				if next-i <= radius {
					dst[base+i*stride] = true
				}
			}
		}
	}
	a, b := make([]bool, len(m)), make([]bool, len(m))
	pass(m, a, w, h, 1, w)
	pass(a, b, h, w, w, 1)
	return b
}
