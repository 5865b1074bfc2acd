package simulate

import (
	"fmt"
	"math"
	"math/rand/v2"
)

// Star is a point source of constant light.
type Star struct {
	RA, Dec, Mag float64
}

// Event is new or lost light: what a search should find. Light is its magnitude
// at a time; on a reference it shines only if InReference.
type Event struct {
	ID      string
	Kind    string // see the Kind constants
	RA, Dec float64
	// Flux of the change at a time [MJD] as 10^(-0.4 mag), negative for lost light.
	Light func(mjd float64) float64
	// Motion [arcsec per day] east and north, about (RA, Dec) at Epoch.
	East, North, Epoch float64

	Host         string
	HostDistance float64 // arcsec
	HostMag      float64
	Supernova    *Supernova
}

// The kinds of events.
const (
	KindTransient = "transient" // appears where it was not
	KindFaded     = "faded"     // stands on the reference only
	KindVariable  = "variable"  // a star that changed
	KindSupernova = "supernova" // type Ia light curve
	KindAsteroid  = "asteroid"  // moves
)

func (e *Event) place(mjd float64) (ra, dec float64) {
	if e.East == 0 && e.North == 0 {
		return e.RA, e.Dec
	}
	t := mjd - e.Epoch
	return offsetSky(e.RA, e.Dec, e.East*t, e.North*t)
}

// Scene is the sky of one field.
type Scene struct {
	RA, Dec  float64 // deg, middle
	Stars    []Star
	Galaxies []Galaxy
	Events   []Event
}

// skyPlan says how a scene is filled. Densities are per square arcminute.
type skyPlan struct {
	stars       float64 // number brighter than starMag
	starMag     float64
	slope       float64 // dex per mag of the counts
	bright      float64 // mag of the brightest star
	faint       float64 // mag of the faintest
	forced      int     // extra stars between forcedMag[0] and [1]
	forcedMag   [2]float64
	galaxies    float64
	galaxyMag   [2]float64
	galaxySlope float64
	radius      [2]float64 // arcsec, of a galaxy of the middle magnitude
}

// newScene fills a square of side arcsec about (ra, dec).
func newScene(ra, dec, side float64, plan skyPlan, seed uint64) *Scene {
	s := &Scene{RA: ra, Dec: dec}
	area := side * side / 3600
	r := stream(seed, 1)
	total := plan.stars * area * math.Pow(10, plan.slope*(plan.faint-plan.starMag))
	n := int(poisson(r, total))
	place := func(r *rand.Rand) (float64, float64) {
		return offsetSky(ra, dec, uniform(r, -side/2, side/2), uniform(r, -side/2, side/2))
	}
	s.Stars = make([]Star, 0, n+plan.forced)
	for range n {
		m := powerMag(r, plan.slope, plan.bright, plan.faint)
		a, d := place(r)
		s.Stars = append(s.Stars, Star{a, d, m})
	}
	for range plan.forced {
		m := uniform(r, plan.forcedMag[0], plan.forcedMag[1])
		// Within the middle, so that they fall on the frame.
		a, d := offsetSky(ra, dec, uniform(r, -0.3, 0.3)*side, uniform(r, -0.3, 0.3)*side)
		s.Stars = append(s.Stars, Star{a, d, m})
	}
	r = stream(seed, 2)
	n = int(poisson(r, plan.galaxies*area))
	for k := range n {
		m := powerMag(r, plan.galaxySlope, plan.galaxyMag[0], plan.galaxyMag[1])
		a, d := place(r)
		s.Galaxies = append(s.Galaxies, newGalaxy(r, fmt.Sprintf("G%04d", k+1), a, d, m, &plan))
	}
	return s
}

// newGalaxy draws the shape of a galaxy of given magnitude. Its redshift follows
// from an absolute magnitude about -20.8.
func newGalaxy(r *rand.Rand, id string, ra, dec, mag float64, plan *skyPlan) Galaxy {
	mid := (plan.galaxyMag[0] + plan.galaxyMag[1]) / 2
	modulus := mag + 20.8 + 0.7*r.NormFloat64()
	return Galaxy{
		ID: id, RA: ra, Dec: dec, Mag: mag,
		Sersic: 1 + math.Floor(r.Float64()*13)/4, // 1 to 4
		Radius: logUniform(r, plan.radius[0], plan.radius[1]) * math.Pow(10, -0.15*(mag-mid)),
		Ratio:  uniform(r, 0.35, 1),
		Angle:  uniform(r, 0, 180),
		Z:      math.Pow(10, (modulus-25)/5) * hubble / lightSpeed,
	}
}

// powerMag draws from counts that grow as 10^(slope m) between two magnitudes.
func powerMag(r *rand.Rand, slope, bright, faint float64) float64 {
	a, b := math.Pow(10, slope*bright), math.Pow(10, slope*faint)
	return math.Log10(a+(b-a)*r.Float64()) / slope
}

func fluxOf(mag float64) float64 { return math.Pow(10, -0.4*mag) }
