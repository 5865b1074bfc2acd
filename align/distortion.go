package align

import (
	"fmt"

	"nightsift/internal/wcs"
)

// The values of Config.Distortion: the FITS convention in which the fitted world
// coordinates hold the distortion of the frame.
const (
	DistortionSIP = "sip"
	DistortionTPV = "tpv"
)

// distorted brings fitted world coordinates into the form that the
// configuration asks for. Places stay the same to rounding.
func (c Config) distorted(w *wcs.WCS) (*wcs.WCS, error) {
	switch c.Distortion {
	case DistortionSIP:
		return w, nil
	case DistortionTPV:
		return w.AsTPV()
	}
	panic(fmt.Sprintf("align: Distortion is %q, want %q or %q", c.Distortion, DistortionSIP, DistortionTPV))
}
