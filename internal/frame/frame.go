// Package frame holds the value that flows through every stage: one exposure
// as pixels, variance, flags, world coordinates and what its header says.
//
// # Pixel convention
//
// Outside a loop, positions are FITS pixel coordinates: (1,1) is the centre of
// the first pixel, x runs along NAXIS1. Inside loops, array indices i = x-1 and
// j = y-1 are used and named i and j (or col, row), never x and y.
package frame

import (
	"fmt"
	"math"
	"strings"

	"nightsift/internal/wcs"
)

// Image is a plane of float32 values in row order: the pixel with FITS
// coordinates (x,y) is Pix[(y-1)*Width+(x-1)]. The unit is count unless the
// owner says otherwise. NaN marks a pixel without data.
type Image struct {
	Width, Height int
	Pix           []float32
}

// NewImage returns a plane of zeros.
func NewImage(width, height int) *Image {
	return &Image{Width: width, Height: height, Pix: make([]float32, width*height)}
}

// Row returns row j (0-based) as a slice that shares the plane's memory.
func (m *Image) Row(j int) []float32 { return m.Pix[j*m.Width : (j+1)*m.Width] }

// Clone returns a copy that shares nothing.
func (m *Image) Clone() *Image {
	c := NewImage(m.Width, m.Height)
	copy(c.Pix, m.Pix)
	return c
}

// SameShape reports whether two planes have equal width and height.
func (m *Image) SameShape(o *Image) bool { return m.Width == o.Width && m.Height == o.Height }

// Flag is a set of bits that say what is wrong with a pixel.
type Flag uint16

// The bits of the flag plane. Their values are part of the file format.
const (
	Saturated    Flag = 1 << iota // at or above the saturation level
	Bleed                         // charge bled from a saturated pixel
	BadColumn                     // column or row that carries no light
	CosmicRay                     // hit by a charged particle
	Streak                        // crossed by a satellite or aircraft
	Edge                          // too near the frame's edge for a full kernel footprint
	NoReference                   // the reference does not cover this pixel
	Interpolated                  // value replaced by its neighbours'
	UserMasked                    // masked by the user's own mask
	NoData                        // NaN, BLANK or outside the detector
)

// FlagNames lists the bits in order of value with the slug used in headers,
// tables and messages.
var FlagNames = []struct {
	Bit     Flag
	Name    string
	Meaning string
}{
	{Saturated, "saturated", "at or above the saturation level"},
	{Bleed, "bleed", "charge bled from a saturated pixel"},
	{BadColumn, "bad_column", "column or row that carries no light"},
	{CosmicRay, "cosmic_ray", "hit by a charged particle"},
	{Streak, "streak", "crossed by a satellite or aircraft"},
	{Edge, "edge", "too near the edge for a full footprint"},
	{NoReference, "no_reference", "not covered by the reference"},
	{Interpolated, "interpolated", "replaced by its neighbours' value"},
	{UserMasked, "user_masked", "masked by the user's own mask"},
	{NoData, "no_data", "NaN, BLANK or outside the detector"},
}

// String lists the names of the bits, joined by commas; it is empty for none.
func (f Flag) String() string {
	var names []string
	for _, n := range FlagNames {
		if f&n.Bit != 0 {
			names = append(names, n.Name)
		}
	}
	return strings.Join(names, ", ")
}

// Unusable is the set of bits of pixels whose value must not enter a fit, a
// background or a sum.
const Unusable = Saturated | Bleed | BadColumn | CosmicRay | Streak | NoReference | UserMasked | NoData

// Mask is a plane of flags, addressed like an Image.
type Mask struct {
	Width, Height int
	Bits          []Flag
}

// NewMask returns a plane without flags.
func NewMask(width, height int) *Mask {
	return &Mask{Width: width, Height: height, Bits: make([]Flag, width*height)}
}

// Row returns row j (0-based) as a slice that shares the plane's memory.
func (m *Mask) Row(j int) []Flag { return m.Bits[j*m.Width : (j+1)*m.Width] }

// Clone returns a copy that shares nothing.
func (m *Mask) Clone() *Mask {
	c := NewMask(m.Width, m.Height)
	copy(c.Bits, m.Bits)
	return c
}

// Meta is what a header says about an exposure. Unknown numbers are NaN,
// unknown strings are empty.
type Meta struct {
	Gain       float64 // electron per count
	ReadNoise  float64 // electron, per read
	Saturation float64 // count
	Exposure   float64 // s
	MidMJD     float64 // d, UTC, middle of the exposure
	ZeroPoint  float64 // mag of a source of 1 count
	Airmass    float64
	Filter     string
	Field      string

	// Origin tells where each value came from, keyed by the survey.toml name
	// (gain, read_noise, saturation, exposure, mid_mjd, zero_point, airmass,
	// filter, field): a header keyword, with a word on the HDU or on how it was
	// read, "configuration", "data type", "estimated: …", or absent.
	Origin map[string]string
}

// UnknownMeta returns a Meta with nothing known.
func UnknownMeta() Meta {
	n := math.NaN()
	return Meta{Gain: n, ReadNoise: n, Saturation: n, Exposure: n, MidMJD: n, ZeroPoint: n, Airmass: n, Origin: map[string]string{}}
}

// Frame is one exposure.
type Frame struct {
	Name     string // file stem, with the extension's name or number appended for one HDU of many
	Path     string // as given by the user
	Checksum string // SHA-256 of the file's bytes, hexadecimal; empty for frames made in memory
	Image    *Image // count
	Variance *Image // count²; nil until read or estimated
	Flags    *Mask
	WCS      *wcs.WCS // nil when the header has none
	Meta     Meta
}

// New returns a frame around an image, without flags and with nothing known.
func New(name string, img *Image) *Frame {
	return &Frame{Name: name, Image: img, Flags: NewMask(img.Width, img.Height), Meta: UnknownMeta()}
}

// Problem is a reason for which a frame is set aside: the frame's fault, not
// the program's. Slug is machine-readable and stable; Detail is a sentence
// that says what was found, what was expected and what to do.
type Problem struct {
	Slug   string
	Detail string
}

func (p *Problem) Error() string { return p.Slug + ": " + p.Detail }

// Problemf makes a Problem with a formatted detail.
func Problemf(slug, format string, args ...any) *Problem {
	return &Problem{Slug: slug, Detail: fmt.Sprintf(format, args...)}
}

// The slugs in use. Files and tools outside rely on their spelling.
const (
	ProblemUnreadable      = "unreadable"       // not FITS, truncated, empty
	ProblemNotAnImage      = "not_an_image"     // no two-dimensional image in the file
	ProblemNoData          = "no_data"          // all pixels NaN, masked or equal
	ProblemTooFewStars     = "too_few_stars"    // nothing to register or to learn the PSF from
	ProblemNoMatch         = "no_match"         // star pattern not found in the reference: wrong field
	ProblemNoOverlap       = "no_overlap"       // the two frames share too little sky
	ProblemAlignmentPoor   = "alignment_poor"   // residuals after the fit are too large
	ProblemSubtractionPoor = "subtraction_poor" // empty sky or star residuals are not as predicted
	ProblemNoReference     = "no_reference"     // no reference for this field and filter
	ProblemMissingKeyword  = "missing_keyword"  // a needed header value is absent
	ProblemWrongFilter     = "wrong_filter"     // filter differs from the reference's
)
