package catalog

import (
	"encoding/json"
	"fmt"
	"math"

	"nightsift/detect"
)

// Status says what became of a frame.
type Status string

// The states of a frame.
const (
	Searched Status = "searched"  // all stages ran
	SetAside Status = "set_aside" // the frame's own fault: Reason and Detail say which
	Failed   Status = "failed"    // the program's or the computer's fault
)

// Input is a file that went into a result.
type Input struct {
	Role     string `json:"role"` // "new", "reference"
	Name     string `json:"name"`
	Checksum string `json:"checksum"` // SHA-256, hexadecimal
}

// FrameRecord is what is kept about one frame. Unknown numbers are NaN, unknown
// texts empty: begin with NewFrameRecord.
type FrameRecord struct {
	Frame  string // name: the key
	Status Status
	Reason string // slug
	Detail string // sentence

	Filter         string
	MidMJD         float64 // d, UTC
	Exposure       float64 // s
	FWHM           float64 // px
	ReferenceFWHM  float64 // px of the new frame
	Sky            float64 // count
	SkyNoise       float64 // count
	ZeroPoint      float64 // mag
	ZeroPointErr   float64 // mag, 1 sigma
	FluxScale      float64 // counts of the new frame for one of the reference
	StarsMatched   int
	AstrometryRMS  float64 // px
	NoiseRatio     float64
	MagLimit5Sigma float64 // mag
	Efficiency50   float64 // mag
	Candidates     int     // set by AddFrame
	Seconds        float64 // s spent

	Night         string // YYYY-MM-DD of the evening
	Field         string
	Width, Height int // px

	// Jacobian is the change of the sky position at the frame's centre with
	// the pixel position, arcsec per px: east with x, east with y, north with
	// x, north with y. It turns pixel errors into errors on the sky. NaN if
	// unknown; see SetWCS.
	Jacobian [4]float64

	// Footprint is the outline of the frame on the sky [deg]: its corners and
	// the middles of its edges, around the frame, joined by great circles. Empty
	// if unknown; see SetWCS.
	Footprint [][2]float64

	ZeroPointSource string // where ZeroPoint came from, in words

	Version       string // of the program
	Configuration string // digest
	Inputs        []Input
}

// NewFrameRecord returns a record with nothing known but its name and status.
func NewFrameRecord(name string, status Status) FrameRecord {
	n := math.NaN()
	return FrameRecord{
		Frame: name, Status: status,
		MidMJD: n, Exposure: n, FWHM: n, ReferenceFWHM: n, Sky: n, SkyNoise: n, ZeroPoint: n, ZeroPointErr: n, FluxScale: n,
		AstrometryRMS: n, NoiseRatio: n, MagLimit5Sigma: n, Efficiency50: n, Seconds: n,
		Jacobian: [4]float64{n, n, n, n},
	}
}

// Projection maps a pixel (FITS convention) to the sky [deg]; *wcs.WCS is one.
type Projection interface {
	PixelToSky(x, y float64) (ra, dec float64, err error)
}

// SetWCS sets Width, Height, Jacobian and Footprint from the frame's size and
// its world coordinates; the Jacobian by a step of one pixel about the centre.
// Where the projection fails they stay unknown. Do not call it for a frame
// without world coordinates; set Width and Height then.
func (r *FrameRecord) SetWCS(w Projection, width, height int) {
	n := math.NaN()
	r.Width, r.Height = width, height
	r.Jacobian, r.Footprint = [4]float64{n, n, n, n}, outline(w, width, height)
	x, y := float64(width+1)/2, float64(height+1)/2
	ra0, dec0, err := w.PixelToSky(x, y)
	if err != nil {
		return
	}
	at := newPlane(ra0, dec0)
	var j [4]float64
	for axis, step := range [2][2]float64{{0.5, 0}, {0, 0.5}} {
		ra1, dec1, err1 := w.PixelToSky(x+step[0], y+step[1])
		ra2, dec2, err2 := w.PixelToSky(x-step[0], y-step[1])
		if err1 != nil || err2 != nil {
			return
		}
		xi1, eta1 := at.offset(unit(ra1, dec1))
		xi2, eta2 := at.offset(unit(ra2, dec2))
		j[axis], j[axis+2] = xi1-xi2, eta1-eta2
	}
	r.Jacobian = j
}

// skyError turns 1σ errors in pixels into a covariance on the sky [arcsec²]:
// J·diag(ex²,ey²)·Jᵀ. Without a Jacobian the result is NaN.
func (r *FrameRecord) skyError(ex, ey float64) (xixi, etaeta, xieta float64) {
	a, b, c, d := r.Jacobian[0], r.Jacobian[1], r.Jacobian[2], r.Jacobian[3]
	ex, ey = ex*ex, ey*ey
	return a*a*ex + b*b*ey, c*c*ex + d*d*ey, a*c*ex + b*d*ey
}

// area returns the frame's size on the sky [arcsec²]; NaN if unknown.
func (r *FrameRecord) area() float64 {
	det := math.Abs(r.Jacobian[0]*r.Jacobian[3] - r.Jacobian[1]*r.Jacobian[2])
	return det * float64(r.Width) * float64(r.Height)
}

// Column describes one column of an export. The types are those of package
// detect: a Real is null where it is NaN, a Text where it is empty.
type Column struct {
	Name        string
	Unit        string // FITS unit
	Description string
	Type        detect.Type
}

// frameColumn joins a column to its place in the record.
type frameColumn struct {
	Column
	text func(*FrameRecord) *string
	real func(*FrameRecord) *float64
	num  func(*FrameRecord) *int
}

func frameText(name, description string, get func(*FrameRecord) *string) frameColumn {
	return frameColumn{Column: Column{name, "", description, detect.Text}, text: get}
}

func frameReal(name, unit, description string, get func(*FrameRecord) *float64) frameColumn {
	return frameColumn{Column: Column{name, unit, description, detect.Real}, real: get}
}

func frameInt(name, unit, description string, get func(*FrameRecord) *int) frameColumn {
	return frameColumn{Column: Column{name, unit, description, detect.Integer}, num: get}
}

// tableColumns is the number of columns, from the first, that a run's table of
// frames has; the catalogue keeps and exports the rest too.
const tableColumns = 20

var frameColumns = []frameColumn{
	frameText("frame", "name of the frame", func(r *FrameRecord) *string { return &r.Frame }),
	frameText("status", "searched, set_aside or failed", func(r *FrameRecord) *string { return (*string)(&r.Status) }),
	frameText("reason", "why not searched, for machines", func(r *FrameRecord) *string { return &r.Reason }),
	frameText("detail", "why not searched, a sentence", func(r *FrameRecord) *string { return &r.Detail }),
	frameText("filter", "filter", func(r *FrameRecord) *string { return &r.Filter }),
	frameReal("mid_mjd", "d", "middle of the exposure, MJD UTC", func(r *FrameRecord) *float64 { return &r.MidMJD }),
	frameReal("exposure_s", "s", "exposure time", func(r *FrameRecord) *float64 { return &r.Exposure }),
	frameReal("fwhm_px", "pixel", "width of the point-spread function", func(r *FrameRecord) *float64 { return &r.FWHM }),
	frameReal("reference_fwhm_px", "pixel", "that of the reference, in pixels of the frame", func(r *FrameRecord) *float64 { return &r.ReferenceFWHM }),
	frameReal("sky", "count", "median sky level", func(r *FrameRecord) *float64 { return &r.Sky }),
	frameReal("sky_noise", "count", "noise of a pixel of empty sky", func(r *FrameRecord) *float64 { return &r.SkyNoise }),
	frameReal("zero_point", "mag", "magnitude of one count", func(r *FrameRecord) *float64 { return &r.ZeroPoint }),
	frameReal("flux_scale", "", "counts for one count of the reference", func(r *FrameRecord) *float64 { return &r.FluxScale }),
	frameInt("stars_matched", "", "stars shared with the reference", func(r *FrameRecord) *int { return &r.StarsMatched }),
	frameReal("astrometry_rms_px", "pixel", "residual of bright stars per axis", func(r *FrameRecord) *float64 { return &r.AstrometryRMS }),
	frameReal("noise_ratio", "", "spread of the significance on empty sky", func(r *FrameRecord) *float64 { return &r.NoiseRatio }),
	frameReal("mag_limit_5sigma", "mag", "point source of 5 sigma", func(r *FrameRecord) *float64 { return &r.MagLimit5Sigma }),
	frameReal("efficiency_50_mag", "mag", "half of all sources are found here", func(r *FrameRecord) *float64 { return &r.Efficiency50 }),
	frameInt("candidates", "", "candidates found", func(r *FrameRecord) *int { return &r.Candidates }),
	frameReal("seconds", "s", "time spent", func(r *FrameRecord) *float64 { return &r.Seconds }),

	frameText("night", "date of the evening", func(r *FrameRecord) *string { return &r.Night }),
	frameText("field", "field", func(r *FrameRecord) *string { return &r.Field }),
	frameInt("width_px", "pixel", "size along x", func(r *FrameRecord) *int { return &r.Width }),
	frameInt("height_px", "pixel", "size along y", func(r *FrameRecord) *int { return &r.Height }),
	frameReal("xi_x", "arcsec/pixel", "eastward step with x", func(r *FrameRecord) *float64 { return &r.Jacobian[0] }),
	frameReal("xi_y", "arcsec/pixel", "eastward step with y", func(r *FrameRecord) *float64 { return &r.Jacobian[1] }),
	frameReal("eta_x", "arcsec/pixel", "northward step with x", func(r *FrameRecord) *float64 { return &r.Jacobian[2] }),
	frameReal("eta_y", "arcsec/pixel", "northward step with y", func(r *FrameRecord) *float64 { return &r.Jacobian[3] }),
	frameReal("zero_point_err", "mag", "1 sigma error of zero_point", func(r *FrameRecord) *float64 { return &r.ZeroPointErr }),
	frameText("zero_point_source", "where zero_point came from", func(r *FrameRecord) *string { return &r.ZeroPointSource }),
	frameText("version", "version of the program", func(r *FrameRecord) *string { return &r.Version }),
	frameText("configuration", "digest of the configuration", func(r *FrameRecord) *string { return &r.Configuration }),
}

// value returns the column's value for SQL: nil for null.
func (c *frameColumn) value(r *FrameRecord) any {
	switch {
	case c.text != nil:
		return nullText(*c.text(r))
	case c.real != nil:
		return nullReal(*c.real(r))
	}
	return int64(*c.num(r))
}

// set stores a value read by SQL.
func (c *frameColumn) set(r *FrameRecord, v any) error {
	switch {
	case c.text != nil:
		s, ok := v.(string)
		if !ok && v != nil {
			return fmt.Errorf("frames.%s: found a %T, expected text", c.Name, v)
		}
		*c.text(r) = s
	case c.real != nil:
		switch f := v.(type) {
		case nil:
			*c.real(r) = math.NaN()
		case float64:
			*c.real(r) = f
		case int64:
			*c.real(r) = float64(f)
		default:
			return fmt.Errorf("frames.%s: found a %T, expected a number", c.Name, v)
		}
	default:
		n, ok := v.(int64)
		if !ok {
			return fmt.Errorf("frames.%s: found a %T, expected an integer", c.Name, v)
		}
		*c.num(r) = int(n)
	}
	return nil
}

func nullText(s string) any {
	if s == "" {
		return nil
	}
	return s
}

func nullReal(f float64) any {
	if math.IsNaN(f) {
		return nil
	}
	return f
}

func encodeInputs(in []Input) (any, error) {
	if len(in) == 0 {
		return nil, nil
	}
	b, err := json.Marshal(in)
	return string(b), err
}
