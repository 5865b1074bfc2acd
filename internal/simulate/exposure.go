package simulate

import (
	"math"
	"math/rand/v2"
)

// Conditions are everything about one exposure but the sky itself.
type Conditions struct {
	Name      string
	Camera    Camera
	PSF       PSF
	Gain      float64 // electron per count, of a single exposure
	ReadNoise float64 // electron, of a single exposure
	ZeroPoint float64 // mag of 1 count in clear air; what the header says
	Sky       float64 // count/px at the centre
	// Sky brightness relative to Sky: 1 + GradientX·X + GradientY·Y + GradientR·(X²+Y²).
	GradientX, GradientY, GradientR float64
	Transparency                    float64 // 1 is clear
	Patchy                          float64 // peak relative change of transparency over the frame
	Flat                            float64 // peak residual of the flat field
	Stack                           int     // exposures averaged; 0 is 1
	Saturation                      float64 // count; 0 for none
	Bleed                           bool
	CosmicRays                      float64 // per Mpx
	Streak                          bool
	BadColumns                      int
	HotPixels                       float64 // per Mpx
	Border                          int     // px without data at every edge
	Integers                        bool    // rounded to 0…65535
	MidMJD                          float64 // d, UTC
	Exposure                        float64 // s
	Filter, Field                   string
	HeaderEast, HeaderNorth         float64 // arcsec, error of the header's pointing
	HeaderRotation                  float64 // deg, error of the header's rotation
	HeaderDistortion                bool    // SIP terms in the header when there are any
	Reference                       bool    // events are as before all nights
	Seed                            uint64
}

// Defects of pixels, as bits of Exposure.Defects.
const (
	DefectSaturated uint16 = 1 << iota
	DefectBleed
	DefectColumn
	DefectCosmicRay
	DefectStreak
	DefectHot
	DefectNoData
)

// Keyword is one header card.
type Keyword struct {
	Key     string
	Value   any
	Comment string
}

// Exposure is a finished frame with what only its maker knows.
type Exposure struct {
	Name          string
	Width, Height int
	Pix           []float32 // count; NaN without data; whole numbers if Integers
	Header        []Keyword
	Integers      bool // written as unsigned 16 bits

	// Truth about this frame.
	Conditions Conditions
	Light      []float32 // count, noiseless light of all sources without sky
	Defects    []uint16
	SkyNoise   float64 // count, white noise per px on empty sky at the middle
}

// Float returns a header keyword's number.
func (e *Exposure) Float(key string) (float64, bool) {
	for _, k := range e.Header {
		if k.Key == key {
			switch v := k.Value.(type) {
			case float64:
				return v, true
			case int:
				return float64(v), true
			}
		}
	}
	return 0, false
}

// Str returns a header keyword's text.
func (e *Exposure) Str(key string) (string, bool) {
	for _, k := range e.Header {
		if k.Key == key {
			s, ok := k.Value.(string)
			return s, ok
		}
	}
	return "", false
}

// stack is Conditions.Stack, at least 1.
func (c *Conditions) stack() float64 { return math.Max(1, float64(c.Stack)) }

// variance is the noise variance [count²] of a pixel that expects so many counts.
func (c *Conditions) variance(counts float64) float64 {
	v := (math.Max(0, counts)/c.Gain + c.ReadNoise*c.ReadNoise/(c.Gain*c.Gain)) / c.stack()
	if c.Integers {
		v += 1.0 / 12
	}
	return v
}

// skyAt is the expected sky [count/px], flat residual not included.
func (c *Conditions) skyAt(X, Y float64) float64 {
	return c.Sky * (1 + c.GradientX*X + c.GradientY*Y + c.GradientR*(X*X+Y*Y))
}

// throughput is the response at a place relative to a clear, flat frame.
func (c *Conditions) throughput(x, y float64) (sources, flat float64) {
	cx, cy := c.Camera.centre()
	X, Y := (x-cx)/cx, (y-cy)/cy
	flat = 1 + c.Flat*math.Sin(2.1*X+0.7)*math.Cos(1.7*Y-0.4)
	sources = c.Transparency * (1 + c.Patchy*math.Sin(3.0*X+1.1*Y+float64(c.Seed%7))) * flat
	return sources, flat
}

// Counts converts light (10^(-0.4 mag)) at a place into counts.
func (c *Conditions) counts(light, x, y float64) float64 {
	s, _ := c.throughput(x, y)
	return light * math.Pow(10, 0.4*c.ZeroPoint) * s
}

// brush draws sources into one exposure.
type brush struct {
	*plane
	c     *Conditions
	table *powerTable
	mix   []component
	limit float64
}

func newBrush(c *Conditions) *brush {
	b := &brush{plane: newPlane(c.Camera.Width, c.Camera.Height), c: c, mix: mixture(c.PSF.Beta)}
	if c.PSF.Beta != 0 {
		b.table = newPowerTable(c.PSF.Beta)
	}
	b.limit = 0.004 * math.Sqrt(c.variance(c.Sky))
	return b
}

func (b *brush) onFrame(x, y, margin float64) bool {
	return x > -margin && y > -margin && x < float64(b.w)+1+margin && y < float64(b.h)+1+margin
}

func (b *brush) star(ra, dec, light float64) {
	x, y := b.c.Camera.SkyToPixel(ra, dec)
	if !b.onFrame(x, y, 500) {
		return
	}
	b.point(x, y, b.c.counts(light, x, y))
}

func (b *brush) point(x, y, counts float64) {
	b.addPoint(b.c.PSF.at(&b.c.Camera, x, y), b.table, x, y, counts, b.limit)
}

// static draws everything that never changes.
func (b *brush) static(s *Scene) {
	for _, st := range s.Stars {
		b.star(st.RA, st.Dec, fluxOf(st.Mag))
	}
	for i := range s.Galaxies {
		g := &s.Galaxies[i]
		x, y := b.c.Camera.SkyToPixel(g.RA, g.Dec)
		if b.onFrame(x, y, 200) {
			b.addGalaxy(&b.c.Camera, b.c.PSF.at(&b.c.Camera, x, y), b.mix, g, x, y, b.c.counts(fluxOf(g.Mag), x, y), b.limit)
		}
	}
}

// path returns where an event is at mid-exposure and how far it moves during
// the exposure [px].
func (c *Conditions) path(e *Event) (x, y, tx, ty float64) {
	x, y = c.Camera.SkyToPixel(e.place(c.MidMJD))
	if e.East != 0 || e.North != 0 {
		h := c.Exposure / 86400 / 2
		x0, y0 := c.Camera.SkyToPixel(e.place(c.MidMJD - h))
		x1, y1 := c.Camera.SkyToPixel(e.place(c.MidMJD + h))
		tx, ty = x1-x0, y1-y0
	}
	return
}

// event draws one event's light, of the given counts, as it is on this frame.
func (b *brush) event(e *Event, counts float64) {
	if counts == 0 {
		return
	}
	x, y, tx, ty := b.c.path(e)
	if !b.onFrame(x, y, 500) {
		return
	}
	length := math.Hypot(tx, ty)
	n := 1 + int(math.Ceil(length*4))
	if length < 0.01 {
		n = 1
	}
	for k := range n {
		t := (float64(k)+0.5)/float64(n) - 0.5
		b.addPoint(b.c.PSF.at(&b.c.Camera, x, y), b.table, x+t*tx, y+t*ty, counts/float64(n), b.limit/40/float64(n))
	}
}

// shines tells whether an event adds light to a frame, and how much
// (10^(-0.4 mag)). Lost light is there on the reference and gone later.
func (e *Event) shines(c *Conditions) float64 {
	l := e.Light(c.MidMJD)
	if e.Kind == KindFaded {
		if c.Reference {
			return -l
		}
		return 0
	}
	if c.Reference {
		return 0
	}
	return l
}

// faults holds the parts of a frame that are the detector's or the sky's own
// doing, drawn before the events are placed.
type faults struct {
	charge   []float32 // count added by particles, hot pixels and the streak, nil if none
	response map[int]float32
	defects  []uint16
}

const columnDead, columnHot = -1, 1

func (c *Conditions) faults() *faults {
	w, h := c.Camera.Width, c.Camera.Height
	f := &faults{defects: make([]uint16, w*h), response: map[int]float32{}}
	mpx := float64(w) * float64(h) / 1e6
	noise := math.Sqrt(c.variance(c.Sky))
	p := &plane{w: w, h: h}
	if c.CosmicRays > 0 || c.HotPixels > 0 || c.Streak {
		p.pix = make([]float32, w*h)
		f.charge = p.pix
	}
	mark := func(from []float32, bit uint16, level float64) {
		for i, v := range from {
			if float64(v) > level {
				f.defects[i] |= bit
			}
		}
	}
	if c.CosmicRays > 0 {
		r := stream(c.Seed, 11)
		for range int(poisson(r, c.CosmicRays*mpx)) {
			p.cosmicRay(r, c.Gain)
		}
		mark(p.pix, DefectCosmicRay, 0.3*noise)
	}
	if c.HotPixels > 0 {
		r := stream(c.Seed, 12)
		for range int(poisson(r, c.HotPixels*mpx)) {
			k := r.IntN(w * h)
			p.pix[k] += float32(noise * logUniform(r, 8, 400))
			f.defects[k] |= DefectHot
		}
	}
	if c.Streak {
		s := newPlane(w, h)
		r := stream(c.Seed, 13)
		s.streak(r, noise, c.PSF.FWHM)
		for i, v := range s.pix {
			if v > 0 {
				p.pix[i] += v
				if float64(v) > 0.05*noise {
					f.defects[i] |= DefectStreak
				}
			}
		}
	}
	if c.BadColumns > 0 {
		r := stream(c.Seed, 14)
		for k := range c.BadColumns {
			i := 3 + r.IntN(w-6)
			j0 := 0
			if k%2 == 1 { // half a column
				j0 = h/4 + r.IntN(h/2)
			}
			kind := float32(columnDead)
			if k%3 == 2 {
				kind = columnHot
			}
			for j := j0; j < h; j++ {
				f.defects[j*w+i] |= DefectColumn
				f.response[j*w+i] = kind
			}
		}
	}
	if c.Border > 0 {
		for j := range h {
			for i := range w {
				if i < c.Border || j < c.Border || i >= w-c.Border || j >= h-c.Border {
					f.defects[j*w+i] |= DefectNoData
				}
			}
		}
	}
	return f
}

// cosmicRay deposits charge along a straight, thin track.
func (p *plane) cosmicRay(r *rand.Rand, gain float64) {
	x, y := uniform(r, 0, float64(p.w)), uniform(r, 0, float64(p.h))
	total := logUniform(r, 300, 30000) / gain
	length := uniform(r, 0, 1.5)
	if r.Float64() < 0.35 {
		length = logUniform(r, 3, 30)
		total *= 1 + length/5
	}
	sin, cos := math.Sincos(uniform(r, 0, 2*math.Pi))
	n := int(math.Ceil(length*10)) + 10
	for range n {
		t := r.Float64() * length
		// Charge spreads a little, by diffusion.
		i := int(math.Floor(x + t*cos + 0.25*r.NormFloat64()))
		j := int(math.Floor(y + t*sin + 0.25*r.NormFloat64()))
		if i >= 0 && j >= 0 && i < p.w && j < p.h {
			p.pix[j*p.w+i] += float32(total / float64(n))
		}
	}
}

// streak draws a satellite's line across the frame, of Gaussian profile.
func (p *plane) streak(r *rand.Rand, noise, fwhm float64) {
	w, h := float64(p.w), float64(p.h)
	x0, y0 := uniform(r, 0.3, 0.7)*w, uniform(r, 0.3, 0.7)*h
	sin, cos := math.Sincos(uniform(r, 15, 75) * deg)
	if r.IntN(2) == 0 {
		cos = -cos
	}
	sigma := math.Hypot(fwhm/2.355, 0.7)
	peak := noise * uniform(r, 4, 15)
	for j := range p.h {
		for i := range p.w {
			d := (float64(i+1)-x0)*sin - (float64(j+1)-y0)*cos
			if math.Abs(d) < 6*sigma {
				p.pix[j*p.w+i] += float32(peak * math.Exp(-d*d/(2*sigma*sigma)))
			}
		}
	}
}

// overflow is the relative level at which a full pixel spills, above the level
// the header gives as saturation.
const overflow = 1.02

// bleed spills charge above the full well up and down each column.
func bleed(w, h int, pix []float32, full float32, defects []uint16) {
	for i := range w {
		for j := range h {
			k := j*w + i
			if pix[k] <= full {
				continue
			}
			excess := (pix[k] - full) / 2
			pix[k] = full
			defects[k] |= DefectSaturated
			for _, step := range [2]int{w, -w} {
				rest := excess
				for n := k + step; rest > 0 && n >= 0 && n < w*h; n += step {
					if room := full - pix[n]; room > 0 {
						take := min(room, rest)
						pix[n] += take
						rest -= take
						defects[n] |= DefectBleed
					} else if pix[n] > full {
						continue // spills on its own turn
					}
				}
			}
		}
	}
}

// expect fills pix with the mean counts before noise: sky, flat residual, light,
// faults and overflow; saturated and bled pixels enter the defects.
func (c *Conditions) expect(pix, light []float32, f *faults) {
	w, h := c.Camera.Width, c.Camera.Height
	cx, cy := c.Camera.centre()
	for j := range h {
		Y := (float64(j+1) - cy) / cy
		row := pix[j*w : (j+1)*w]
		for i := range row {
			X := (float64(i+1) - cx) / cx
			v := c.skyAt(X, Y)
			if c.Flat != 0 {
				_, flat := c.throughput(float64(i+1), float64(j+1))
				v *= flat
			}
			row[i] = float32(v) + light[j*w+i]
		}
	}
	if f.charge != nil {
		for i, v := range f.charge {
			pix[i] += v
		}
	}
	if c.Saturation > 0 {
		full := float32(c.Saturation * overflow)
		if c.Bleed {
			bleed(w, h, pix, full, f.defects)
		}
		for i, v := range pix {
			if v >= full*0.985 {
				f.defects[i] |= DefectSaturated
				pix[i] = min(v, full)
			}
		}
	}
}

// finish turns light into counts: sky, flat residual, faults, overflow, photon
// and read noise, rounding. light is left as it is.
func (c *Conditions) finish(light []float32, f *faults) *Exposure {
	w, h := c.Camera.Width, c.Camera.Height
	e := &Exposure{
		Name: c.Name, Width: w, Height: h, Pix: make([]float32, w*h), Integers: c.Integers,
		Conditions: *c, Light: light, Defects: f.defects, SkyNoise: math.Sqrt(c.variance(c.Sky)),
	}
	pix := e.Pix
	c.expect(pix, light, f)
	r := stream(c.Seed, 21)
	gain, n := c.Gain, c.stack()
	read := c.ReadNoise * math.Sqrt(n)
	for k, v := range pix {
		electrons := poisson(r, float64(v)*gain*n) + read*r.NormFloat64()
		pix[k] = float32(electrons / (gain * n))
	}
	for k, kind := range f.response {
		if kind == columnDead {
			pix[k] = 0
		} else {
			pix[k] += float32(0.4*c.Sky + 12*e.SkyNoise)
		}
	}
	full := float32(math.Inf(1))
	if c.Saturation > 0 {
		full = float32(c.Saturation * overflow)
	}
	nan := float32(math.NaN())
	for k, v := range pix {
		if v >= full {
			v = full
		}
		if c.Integers {
			v = max(0, min(65535, float32(math.Round(float64(v)))))
		}
		if f.defects[k]&DefectNoData != 0 {
			v = nan
			if c.Integers {
				v = 0
			}
		}
		pix[k] = v
	}
	e.Header = c.header()
	return e
}

// header gives the cards of a frame, with what its camera would know: the
// pointing may be wrong.
func (c *Conditions) header() []Keyword {
	var k []Keyword
	add := func(key string, v any, comment string) { k = append(k, Keyword{key, v, comment}) }
	add("OBJECT", c.Field, "field")
	add("FILTER", c.Filter, "filter")
	add("EXPTIME", c.Exposure, "[s] exposure time")
	add("DATE-OBS", isoDate(c.MidMJD-c.Exposure/86400/2), "UTC, start of the exposure")
	add("TIMESYS", "UTC", "time scale")
	add("GAIN", c.Gain*c.stack(), "[electron/count] gain")
	add("RDNOISE", c.ReadNoise*math.Sqrt(c.stack()), "[electron] read noise")
	if c.Saturation > 0 {
		add("SATURATE", c.Saturation, "[count] saturation level")
	}
	add("MAGZP", c.ZeroPoint, "[mag] of a source of one count")
	if c.Stack > 1 {
		add("NCOMBINE", c.Stack, "number of exposures averaged")
	}
	add("TELESCOP", "Marrow Ridge 0.8 m", "invented")
	add("OBSERVAT", "Marrow Ridge", "invented station")
	add("BUNIT", "count", "")
	dist := c.Camera.Distortion != nil && c.HeaderDistortion
	t := ""
	if dist {
		t = "-SIP"
	}
	cx, cy := c.Camera.centre()
	ra, dec := offsetSky(c.Camera.RA, c.Camera.Dec, c.HeaderEast, c.HeaderNorth)
	add("CTYPE1", "RA---TAN"+t, "gnomonic projection")
	add("CTYPE2", "DEC--TAN"+t, "gnomonic projection")
	add("CUNIT1", "deg", "")
	add("CUNIT2", "deg", "")
	add("CRVAL1", ra, "[deg] right ascension at the reference pixel")
	add("CRVAL2", dec, "[deg] declination at the reference pixel")
	add("CRPIX1", cx, "[px] reference pixel")
	add("CRPIX2", cy, "[px] reference pixel")
	shown := c.Camera
	shown.Rotation += c.HeaderRotation
	m := shown.cd()
	add("CD1_1", m[0][0], "[deg/px]")
	add("CD1_2", m[0][1], "[deg/px]")
	add("CD2_1", m[1][0], "[deg/px]")
	add("CD2_2", m[1][1], "[deg/px]")
	add("RADESYS", "ICRS", "")
	if dist {
		add("A_ORDER", 3, "")
		add("B_ORDER", 3, "")
		for p := 0; p <= 3; p++ {
			for q := 0; p+q <= 3; q++ {
				if p+q < 2 {
					continue
				}
				name := "_" + string(rune('0'+p)) + "_" + string(rune('0'+q))
				if a := c.Camera.Distortion.A[p][q]; a != 0 {
					add("A"+name, a, "")
				}
				if b := c.Camera.Distortion.B[p][q]; b != 0 {
					add("B"+name, b, "")
				}
			}
		}
	}
	return k
}
