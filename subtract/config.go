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

	KernelOrderMax int // highest spatial order of the kernel that may be chosen
	StampsMax      int // stars used to fit the kernel, at most
	StampsMin      int // fewer than this and the frame is set aside

	// NoiseRatioLow and NoiseRatioHigh bound the spread of SIGNIFICANCE on
	// empty sky; a frame outside is set aside as subtraction_poor.
	NoiseRatioLow, NoiseRatioHigh float64

	PSF       psf.Config
	Artefacts artefacts.Config
}

// DefaultConfig returns the configuration in use when nothing is said.
func DefaultConfig() Config {
	return Config{
		Workers:        1,
		Method:         MethodKernel,
		KernelOrderMax: 3,
		StampsMax:      300,
		StampsMin:      6,
		NoiseRatioLow:  0.90,
		NoiseRatioHigh: 1.15,
		PSF:            psf.DefaultConfig(),
		Artefacts:      artefacts.DefaultConfig(),
	}
}
