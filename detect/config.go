package detect

import (
	"fmt"
	"math"

	"nightsift/internal/realbogus"
)

// Config says how candidates are found. Start from DefaultConfig.
type Config struct {
	// Threshold is the least |SIGNIFICANCE| of a candidate. It acts on the
	// peak interpolated between pixels, so that detection does not depend on
	// where a source falls on the pixel grid.
	Threshold float64

	// ModelError is the relative error of the PSF model that the comparison
	// of forms forgives.
	ModelError float64
	// LobeError is the part of a bright peak's score that side lobes may
	// reach without becoming candidates of their own.
	LobeError float64

	MaxPeaks int  // of one frame, the brightest; more than that is a broken frame
	Stamps   bool // cut out stamps

	// Longitude of the observatory [deg, east positive] decides which evening
	// a time belongs to.
	Longitude float64

	Rates realbogus.Rates
	Model *realbogus.Model // nil: the shipped one
}

// DefaultConfig returns five sigma, 2 % of model error, stamps, longitude 0
// and the shipped model.
func DefaultConfig() Config {
	return Config{
		Threshold: 5, ModelError: 0.02, LobeError: 0.03, MaxPeaks: 20000, Stamps: true,
		Rates: realbogus.DefaultRates(),
	}
}

// Check reports a setting that makes no sense.
func (c *Config) Check() error {
	switch {
	case !(c.Threshold >= 3 && c.Threshold <= 100):
		return fmt.Errorf("detect: threshold is %g sigma, expected 3 to 100", c.Threshold)
	case !(c.ModelError >= 0 && c.ModelError < 0.5):
		return fmt.Errorf("detect: model error is %g, expected 0 to 0.5", c.ModelError)
	case !(c.LobeError >= 0 && c.LobeError < 0.5):
		return fmt.Errorf("detect: lobe error is %g, expected 0 to 0.5", c.LobeError)
	case c.MaxPeaks < 1:
		return fmt.Errorf("detect: at most %d peaks, expected 1 or more", c.MaxPeaks)
	case !(math.Abs(c.Longitude) <= 360):
		return fmt.Errorf("detect: longitude is %g deg, expected -360 to 360", c.Longitude)
	case !(c.Rates.RealPerMpx > 0) || !(c.Rates.Slope > 0):
		return fmt.Errorf("detect: %g real changes per megapixel with slope %g, expected positive numbers", c.Rates.RealPerMpx, c.Rates.Slope)
	}
	return nil
}
