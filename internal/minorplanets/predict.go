package minorplanets

import (
	"math"

	"nightsift/internal/astro"
)

const (
	gauss       = 0.01720209895      // √(G·M of the Sun), au^1.5/d
	lightTime   = 0.0057755183       // d/au
	obliquity   = 84381.448 / 3600.0 // deg, of the ecliptic of J2000 (IAU 1976)
	jupiterMass = 1 / 1047.3486      // of the Sun's
	jupiterAxis = 5.2                // au
)

// path is an orbit ready to be followed: unit vectors towards the perihelion and a
// quarter turn on, along the axes of the ICRS.
type path struct {
	orbit  *Orbit
	p, q   [3]float64
	motion float64 // rad/d
	minor  float64 // √(1−e²)
}

func newPath(o *Orbit) path {
	sinO, cosO := math.Sincos(o.Node / astro.Radian)
	sinW, cosW := math.Sincos(o.Perihelion / astro.Radian)
	sinI, cosI := math.Sincos(o.Inclination / astro.Radian)
	sinE, cosE := math.Sincos(obliquity / astro.Radian)
	equator := func(x, y, z float64) [3]float64 { return [3]float64{x, y*cosE - z*sinE, y*sinE + z*cosE} }
	return path{
		orbit:  o,
		p:      equator(cosW*cosO-sinW*sinO*cosI, cosW*sinO+sinW*cosO*cosI, sinW*sinI),
		q:      equator(-sinW*cosO-cosW*sinO*cosI, -sinW*sinO+cosW*cosO*cosI, cosW*sinI),
		motion: gauss / (o.SemiMajor * math.Sqrt(o.SemiMajor)),
		minor:  math.Sqrt(1 - o.Eccentricity*o.Eccentricity),
	}
}

// kepler solves E − e sin E = m for 0 ≤ e < 1, m [rad], by Newton steps kept within
// a bracket, to 1e-13.
func kepler(m, e float64) float64 {
	m = math.Mod(m, 2*math.Pi)
	if m > math.Pi {
		m -= 2 * math.Pi
	} else if m < -math.Pi {
		m += 2 * math.Pi
	}
	lo, hi := m-e, m+e // |E − m| ≤ e
	x := m + e*math.Sin(m)
	for range 60 {
		sin, cos := math.Sincos(x)
		f := x - e*sin - m
		if f > 0 {
			hi = x
		} else {
			lo = x
		}
		next := x - f/(1-e*cos)
		if !(next > lo && next < hi) {
			next = (lo + hi) / 2
		}
		if math.Abs(next-x) < 1e-13 {
			return next
		}
		x = next
	}
	return x
}

// at returns the place [au] about the Sun at a time [MJD TT].
func (p *path) at(tt float64) (r [3]float64) {
	o := p.orbit
	sin, cos := math.Sincos(kepler(o.MeanAnomaly/astro.Radian+p.motion*(tt-o.Epoch), o.Eccentricity))
	a, b := o.SemiMajor*(cos-o.Eccentricity), o.SemiMajor*p.minor*sin
	for k := range r {
		r[k] = a*p.p[k] + b*p.q[k]
	}
	return r
}

// Prediction is where a minor planet stands for an observer.
type Prediction struct {
	Designation string
	RA, Dec     float64 // deg, ICRS, astrometric (with light time, without aberration)
	Error       float64 // arcsec, 1 sigma in each axis, see positionError
	Mag         float64 // V; NaN without H
	Distance    float64 // au, from the observer
	SunDistance float64 // au
	Rate        float64 // arcsec/h
	Angle       float64 // deg, direction of the motion, from north through east
}

// observer is a place and time.
type observer struct {
	tt    float64
	place [3]float64 // au, about the Sun
}

func newObserver(site *astro.Site, mjdUTC float64) observer {
	tt := astro.UTCToTT(mjdUTC)
	o := observer{tt: tt, place: astro.EarthHeliocentric(tt)}
	if site != nil {
		s := astro.SiteGeocentric(*site, mjdUTC)
		for k := range s {
			o.place[k] += s[k]
		}
	}
	return o
}

// see returns the vector from the observer to the object as its light shows it,
// and the object's distance from the Sun.
func (p *path) see(o observer) (v [3]float64, distance, sun float64) {
	for range 3 { // the light time converges by a factor of 10,000 a round
		r := p.at(o.tt - distance*lightTime)
		for k := range v {
			v[k] = r[k] - o.place[k]
		}
		distance, sun = norm(v), norm(r)
	}
	return v, distance, sun
}

func norm(v [3]float64) float64 { return math.Sqrt(v[0]*v[0] + v[1]*v[1] + v[2]*v[2]) }

func toSky(v [3]float64) (ra, dec float64) {
	return astro.Wrap360(math.Atan2(v[1], v[0]) * astro.Radian), math.Atan2(v[2], math.Hypot(v[0], v[1])) * astro.Radian
}

// instant is an observer now and half an hour later, for the motion.
type instant struct{ now, later observer }

const instantStep = 1.0 / 48 // d

func newInstant(site *astro.Site, mjdUTC float64) instant {
	return instant{newObserver(site, mjdUTC), newObserver(site, mjdUTC+instantStep)}
}

func (p *path) predict(at instant) Prediction {
	o := at.now
	v, distance, sun := p.see(o)
	out := Prediction{Designation: p.orbit.Designation, Distance: distance, SunDistance: sun, Mag: math.NaN()}
	out.RA, out.Dec = toSky(v)
	later, _, _ := p.see(at.later)
	ra, dec := toSky(later)
	out.Rate = astro.Separation(out.RA, out.Dec, ra, dec) * 3600 / (24 * instantStep)
	out.Angle = astro.PositionAngle(out.RA, out.Dec, ra, dec)
	out.Error = positionError(p.orbit, o.tt, distance, sun)
	if p.orbit.H == p.orbit.H {
		out.Mag = p.orbit.H + brightness(p.orbit.G, sun, distance, norm(o.place))
	}
	return out
}

// brightness is V − H for a slope G at a distance from the Sun and the observer,
// who is `earth` from the Sun [au] (the H, G system: Bowell et al. 1989, Asteroids II, 524).
func brightness(g, sun, distance, earth float64) float64 {
	cos := (sun*sun + distance*distance - earth*earth) / (2 * sun * distance)
	half := math.Tan(math.Acos(max(-1, min(1, cos))) / 2)
	phi1, phi2 := math.Exp(-3.33*math.Pow(half, 0.63)), math.Exp(-1.87*math.Pow(half, 1.22))
	return 5*math.Log10(sun*distance) - 2.5*math.Log10((1-g)*phi1+g*phi2)
}

// positionError is what can be said of the error of a place [arcsec]: half an
// arcsec; the growth along the orbit that the export format's U stands for, at most
// exp(U·ln(648000)/9) arcsec in ten years (U = 5 where it is unknown); and the way
// that Jupiter would pull the object in the time since the epoch, ½ k² m t² / d², at
// the smallest distance d that their distances from the Sun allow, not below half an au.
func positionError(o *Orbit, tt, distance, sun float64) float64 {
	u := o.Uncertainty
	if u < 0 {
		u = 5
	}
	days := math.Abs(tt - o.Epoch)
	near := max(distance, 0.01)
	growth := math.Exp(float64(u)*math.Log(648000)/9) * days / 3652.5 * max(1, sun/near)
	d := max(0.5, math.Abs(jupiterAxis-sun))
	pull := 0.5 * gauss * gauss * jupiterMass * days * days / (d * d) / near * astro.Radian * 3600
	return math.Sqrt(0.25 + growth*growth + pull*pull)
}

// Catalogue is a set of orbits. It is read-only: many goroutines may use one.
type Catalogue struct{ paths []path }

// NewCatalogue prepares orbits.
func NewCatalogue(list []Orbit) *Catalogue {
	c := &Catalogue{paths: make([]path, len(list))}
	for i := range list {
		c.paths[i] = newPath(&list[i])
	}
	return c
}

// Predict returns all places for a site (nil: the Earth's centre) at a time [MJD UTC].
func (c *Catalogue) Predict(site *astro.Site, mjdUTC float64) []Prediction {
	at := newInstant(site, mjdUTC)
	out := make([]Prediction, len(c.paths))
	for i := range c.paths {
		out[i] = c.paths[i].predict(at)
	}
	return out
}

// Sky knows roughly where all minor planets are around one time, so that few have
// to be computed for each frame.
type Sky struct {
	catalogue *Catalogue
	site      *astro.Site
	mjd       float64
	towards   [][3]float32 // unit vectors
	speed     []float32    // rad/d, an upper bound
}

// At prepares a sky for frames around a time [MJD UTC], best the middle of a night.
func (c *Catalogue) At(site *astro.Site, mjdUTC float64) *Sky {
	s := &Sky{catalogue: c, site: site, mjd: mjdUTC, towards: make([][3]float32, len(c.paths)), speed: make([]float32, len(c.paths))}
	o := newObserver(site, mjdUTC)
	for i := range c.paths {
		v, distance, sun := c.paths[i].see(o)
		for k := range v {
			s.towards[i][k] = float32(v[k] / distance)
		}
		// No object bound to the Sun is faster than √2 k/√r; the Earth moves by 0.0175
		// au a day, a site by 0.0003.
		sun = max(sun-0.1, 0.02)
		s.speed[i] = float32((math.Sqrt2*gauss/math.Sqrt(sun) + 0.018) / max(distance-0.05, 0.002))
	}
	return s
}

// Match is a minor planet near a detection.
type Match struct {
	Prediction
	Offset float64 // arcsec, from the predicted place to the detection
	Sigma  float64 // Offset in units of both errors
}

// Limits say what counts as a match.
type Limits struct {
	Radius   float64 // arcsec, always allowed
	Sigmas   float64 // of the errors, added to it
	MaxError float64 // arcsec: a minor planet whose place is known worse names nothing
}

// DefaultLimits returns 2 arcsec and three sigma, for places known to 20 arcsec.
func DefaultLimits() Limits { return Limits{Radius: 2, Sigmas: 3, MaxError: 20} }

// Match returns the minor planet that a detection at (ra, dec [deg], ICRS) at a time
// [MJD UTC, middle of the exposure] with an error [arcsec] fits best. found is false
// where none does.
func (s *Sky) Match(ra, dec, mjdUTC, positionErr float64, l Limits) (best Match, found bool) {
	if !(math.Abs(mjdUTC-s.mjd) < 30) || !(dec >= -90 && dec <= 90) || ra-ra != 0 || positionErr != positionErr {
		return best, false
	}
	sinD, cosD := math.Sincos(dec / astro.Radian)
	sinA, cosA := math.Sincos(ra / astro.Radian)
	towards := [3]float32{float32(cosD * cosA), float32(cosD * sinA), float32(sinD)}
	reach := (l.Radius+l.Sigmas*math.Hypot(l.MaxError, positionErr))/3600/astro.Radian + 1e-5
	days := math.Abs(mjdUTC - s.mjd)
	at := newInstant(s.site, mjdUTC)
	for i := range s.towards {
		t := &s.towards[i]
		dx, dy, dz := t[0]-towards[0], t[1]-towards[1], t[2]-towards[2]
		chord := float64(dx*dx + dy*dy + dz*dz)
		if far := reach + days*float64(s.speed[i]); chord > far*far {
			continue
		}
		p := s.catalogue.paths[i].predict(at)
		if !(p.Error <= l.MaxError) {
			continue
		}
		m := Match{Prediction: p, Offset: astro.Separation(ra, dec, p.RA, p.Dec) * 3600}
		sigma := math.Hypot(p.Error, positionErr)
		m.Sigma = m.Offset / sigma
		if m.Offset <= l.Radius+l.Sigmas*sigma && (!found || m.Sigma < best.Sigma) {
			best, found = m, true
		}
	}
	return best, found
}
