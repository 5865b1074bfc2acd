package efficiency

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// Where says at which places sources are put in.
type Where string

// The places.
const (
	OnSky      Where = "sky"      // anywhere on the part of the frame that the reference covers
	OnGalaxies Where = "galaxies" // on the extended sources of the reference, following their light
	NearCores  Where = "cores"    // at a distance from the centres of these sources
)

// Places lists the values of Where.
var Places = []Where{OnSky, OnGalaxies, NearCores}

// Config says what is put in. Start from DefaultConfig.
type Config struct {
	Count int    // sources in each frame
	Seed  uint64 // two runs with equal seeds draw equal sources
	Where Where

	// CoreDistance is the distance from the centres [px], for NearCores.
	CoreDistance float64

	// Probability is the least real_probability of a candidate that counts.
	Probability float64

	// Radius [px] and Sigmas say how far from its place a source may be found:
	// Radius plus Sigmas times the candidate's own error on one axis.
	Radius, Sigmas float64

	// Workers resample in the full way; the result does not depend on it.
	Workers int
}

// DefaultConfig returns 100 sources anywhere, and the reach with which the
// scores of invented frames are made.
func DefaultConfig() Config {
	return Config{Count: 100, Seed: 1, Where: OnSky, CoreDistance: 2, Probability: 0.5, Radius: 0.3, Sigmas: 4, Workers: 1}
}

// MostCount bounds Config.Count: more than a million sources in one frame are a
// slip of the pen.
const MostCount = 1_000_000

// Check reports a setting that makes no sense.
func (c *Config) Check() error {
	switch {
	case c.Count < 1 || c.Count > MostCount:
		return fmt.Errorf("efficiency: %d sources in each frame, expected 1 to %d", c.Count, MostCount)
	case !slices.Contains(Places, c.Where):
		names := make([]string, len(Places))
		for i, p := range Places {
			names[i] = string(p)
		}
		return fmt.Errorf("efficiency: places %q, expected one of %s", c.Where, strings.Join(names, ", "))
	case !(c.CoreDistance >= 0 && c.CoreDistance <= 1000):
		return fmt.Errorf("efficiency: %g px from the cores, expected 0 to 1000", c.CoreDistance)
	case !(c.Probability >= 0 && c.Probability <= 1):
		return fmt.Errorf("efficiency: probability %g, expected 0 to 1", c.Probability)
	case !(c.Radius > 0) || !(c.Sigmas >= 0):
		return fmt.Errorf("efficiency: reach of %g px and %g sigma, expected positive numbers", c.Radius, c.Sigmas)
	}
	return nil
}

// spacing is the least distance between two sources of one round [px]: twelve
// FWHM, so that neither lies in the other's footprint, nor in the square in which
// crowding is judged.
func spacing(fwhm float64) float64 { return math.Max(40, 12*fwhm) }

// Density is the most sources that one round puts into a frame: one in four
// squares of the least distance, for FWHM up to 3.3 px about 150 in a megapixel.
// More than that are put in by several rounds.
func Density(width, height int, fwhm float64) int {
	s := spacing(fwhm)
	return max(1, int(float64(width)*float64(height)/(4*s*s)))
}
