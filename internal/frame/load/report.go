package load

import (
	"fmt"

	"nightsift/internal/frame/noise"
)

// Report is what was found on the way from a file to a frame and does not
// belong to the frame itself.
type Report struct {
	Unit       PixelUnit
	Rate       bool              // the pixels are per second
	UnitText   string            // BUNIT; "" if there is none
	PixelScale float64           // arcsec per px, of a keyword; NaN if there is none
	RA, Dec    float64           // deg, the pointing that keywords tell, as they tell it; NaN if they do not
	Origin     map[string]string // of pixel_scale and pointing
	Noise      *noise.Result     // measured because gain or read noise is missing; else nil
	Remarks    []Remark
}

// Remark is a sentence on one value: what was odd, ignored, converted or
// guessed.
type Remark struct {
	About string // a key of frame.Meta.Origin, or unit, time, wcs, variance, mask, header
	Text  string
}

func (r *Report) remark(about, format string, args ...any) {
	r.Remarks = append(r.Remarks, Remark{about, fmt.Sprintf(format, args...)})
}
