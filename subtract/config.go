package subtract

import (
	"nightsift/internal/artefacts"
	"nightsift/internal/psf"
)

// Config holds what a user may change in a subtraction. Use DefaultConfig and
// change single fields: a zero Config is not meaningful.
type Config struct {
	Workers int // goroutines for the tiles; the result does not depend on it

	Method string // how the reference is taken away: MethodKernel, MethodProper or MethodAuto

	// KernelBasis says of which functions the matching kernel is made:
	// BasisGaussian, BasisPixel, or BasisAuto, which takes the one that
	// predicts stars held out of the solve the better.
	KernelBasis string

	KernelOrderMax int // highest spatial order of the kernel that may be chosen
	StampsMax      int // stars used to fit the kernel, at most
	StampsMin      int // fewer than this and the frame is set aside

	// NoiseRatioLow and NoiseRatioHigh bound the spread of SIGNIFICANCE on
	// empty sky; a frame outside is set aside as subtraction_poor.
	NoiseRatioLow, NoiseRatioHigh float64

	PSF       psf.Config
	Artefacts artefacts.Config
}

// The bases of the matching kernel.
const (
	BasisGaussian = "gaussian" // Gaussians times polynomials (Alard & Lupton 1998)
	BasisPixel    = "pixel"    // single pixels, regularised (Bramich 2008; Becker et al. 2012)
	BasisAuto     = "auto"
)

// Bases lists the values that Config.KernelBasis accepts.
func Bases() []string { return []string{BasisAuto, BasisGaussian, BasisPixel} }

// DefaultConfig returns the configuration in use when nothing is said.
func DefaultConfig() Config {
	return Config{
		Workers:        1,
		Method:         MethodAuto,
		KernelBasis:    BasisGaussian,
		KernelOrderMax: 3,
		StampsMax:      300,
		StampsMin:      6,
		NoiseRatioLow:  0.90,
		NoiseRatioHigh: 1.15,
		PSF:            psf.DefaultConfig(),
		Artefacts:      artefacts.DefaultConfig(),
	}
}
