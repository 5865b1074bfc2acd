package detect

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"strings"

	"nightsift/internal/frame"
)

// Kind says what a candidate is, as far as one frame can tell.
type Kind string

// The kinds. Their spelling is part of the file format.
const (
	NewSource  Kind = "new_source" // a point source where the reference has none, or stands on a host
	Brightened Kind = "brightened" // a point source on top of one of the reference
	Faded      Kind = "faded"      // a point source that lost light
	Dipole     Kind = "dipole"     // a positive and a negative source side by side: a shifted or a moving star
	Streak     Kind = "streak"     // a line: satellite, aircraft, meteor
	CosmicRay  Kind = "cosmic_ray" // sharper than the point-spread function
	Moving     Kind = "moving"     // a short trail: something that moved during the exposure
	Artefact   Kind = "artefact"   // anything else: residue of a bright star, edge of a mask, extended residue
)

// Kinds lists every kind.
var Kinds = []Kind{NewSource, Brightened, Faded, Dipole, Streak, CosmicRay, Moving, Artefact}

// StampSize is the side of the square cut-outs [px].
const StampSize = 51

// Candidate is one change found on one frame. Unknown numbers are NaN.
type Candidate struct {
	ID     string  // stable: the same inputs and configuration give the same
	Frame  string  // name of the new frame
	Filter string  // as the header says
	Night  string  // YYYY-MM-DD of the evening; empty when unknown
	MidMJD float64 // d, UTC, middle of the exposure

	X, Y       float64 // px, FITS convention, on the new frame
	XErr, YErr float64 // px, 1 sigma
	RA, Dec    float64 // deg, ICRS

	Flux, FluxErr     float64 // count of the new frame, signed
	Mag, MagErr       float64 // mag; NaN without zero point or where Flux ≤ 0
	MagLimit          float64 // mag of a point source of five sigma at this place
	Significance      float64 // signed peak of SIGNIFICANCE between the pixels
	RealProbability   float64 // 0…1
	Kind              Kind
	Flags             frame.Flag // bits in the footprint that carry weight
	ReferenceDistance float64    // arcsec (px without WCS: NaN) to the nearest source of the reference
	ReferenceMag      float64    // mag of that source
	FitChi2           float64    // chi-square of the point-source fit per degree of freedom
	Length, Angle     float64    // px and deg (from +x towards +y) of a streak or trail; NaN for others
	StampNew          []float32  // StampSize × StampSize in row order, count, NaN outside the frame
	StampReference    []float32
	StampDifference   []float32
	Features          []float64 // what the model saw, in the order of realbogus.Names
}

// Type is the type of a column's values.
type Type int

// The types. A Real is null where it is NaN, a Text where it is empty.
const (
	Text Type = iota
	Real
	Integer
)

// Column describes one scalar column of a table of candidates. Writers of
// every format share the list, so that all exports hold the same rows.
type Column struct {
	Name        string
	Unit        string // FITS unit; empty for none
	Description string
	Type        Type

	text func(*Candidate) *string
	real func(*Candidate) *float64
}

// Value returns the column's value: string, float64 (NaN is null) or int64.
func (c *Column) Value(k *Candidate) any {
	switch {
	case c.text != nil:
		return *c.text(k)
	case c.real != nil:
		return *c.real(k)
	case c.Name == "kind":
		return string(k.Kind)
	}
	return int64(k.Flags)
}

// Set stores a value of the column's type, as Value returns it; nil stores
// the null value. Other integer and float types are converted.
func (c *Column) Set(k *Candidate, v any) error {
	switch c.Type {
	case Text:
		s, ok := v.(string)
		if b, isBytes := v.([]byte); isBytes {
			s, ok = string(b), true
		}
		if v != nil && !ok {
			return fmt.Errorf("column %s: found a %T, expected text", c.Name, v)
		}
		if c.text != nil {
			*c.text(k) = s
		} else {
			k.Kind = Kind(s)
		}
	case Real:
		switch f := v.(type) {
		case nil:
			*c.real(k) = math.NaN()
		case float64:
			*c.real(k) = f
		case float32:
			*c.real(k) = float64(f)
		case int64:
			*c.real(k) = float64(f)
		default:
			return fmt.Errorf("column %s: found a %T, expected a number", c.Name, v)
		}
	case Integer:
		switch n := v.(type) {
		case nil:
			k.Flags = 0
		case int64:
			k.Flags = frame.Flag(n)
		case int32:
			k.Flags = frame.Flag(n)
		case float64:
			k.Flags = frame.Flag(n)
		default:
			return fmt.Errorf("column %s: found a %T, expected an integer", c.Name, v)
		}
	}
	return nil
}

// Columns are the scalar columns in the order in which every table has them.
var Columns = []Column{
	textColumn("candidate_id", "stable identifier", func(k *Candidate) *string { return &k.ID }),
	textColumn("frame", "name of the new frame", func(k *Candidate) *string { return &k.Frame }),
	textColumn("filter", "filter of the new frame", func(k *Candidate) *string { return &k.Filter }),
	textColumn("night", "date of the evening", func(k *Candidate) *string { return &k.Night }),
	realColumn("mid_mjd", "d", "middle of the exposure, MJD UTC", func(k *Candidate) *float64 { return &k.MidMJD }),
	realColumn("x_px", "pixel", "position on the new frame, first pixel is 1", func(k *Candidate) *float64 { return &k.X }),
	realColumn("y_px", "pixel", "position on the new frame, first pixel is 1", func(k *Candidate) *float64 { return &k.Y }),
	realColumn("x_px_err", "pixel", "1 sigma error of x_px", func(k *Candidate) *float64 { return &k.XErr }),
	realColumn("y_px_err", "pixel", "1 sigma error of y_px", func(k *Candidate) *float64 { return &k.YErr }),
	realColumn("ra_deg", "deg", "right ascension, ICRS", func(k *Candidate) *float64 { return &k.RA }),
	realColumn("dec_deg", "deg", "declination, ICRS", func(k *Candidate) *float64 { return &k.Dec }),
	realColumn("flux", "count", "PSF flux on the difference, signed", func(k *Candidate) *float64 { return &k.Flux }),
	realColumn("flux_err", "count", "1 sigma error of flux", func(k *Candidate) *float64 { return &k.FluxErr }),
	realColumn("mag", "mag", "magnitude of flux", func(k *Candidate) *float64 { return &k.Mag }),
	realColumn("mag_err", "mag", "1 sigma error of mag", func(k *Candidate) *float64 { return &k.MagErr }),
	realColumn("mag_limit", "mag", "5 sigma limit for a point source here", func(k *Candidate) *float64 { return &k.MagLimit }),
	realColumn("significance", "", "signed peak score in sigma", func(k *Candidate) *float64 { return &k.Significance }),
	realColumn("real_probability", "", "calibrated probability to be real", func(k *Candidate) *float64 { return &k.RealProbability }),
	{Name: "kind", Description: "what it looks like", Type: Text},
	{Name: "flags", Description: "bits set in the footprint", Type: Integer},
	realColumn("reference_distance_arcsec", "arcsec", "distance of the nearest reference source", func(k *Candidate) *float64 { return &k.ReferenceDistance }),
	realColumn("reference_mag", "mag", "magnitude of that source", func(k *Candidate) *float64 { return &k.ReferenceMag }),
	realColumn("fit_chi2", "", "reduced chi-square of the point-source fit", func(k *Candidate) *float64 { return &k.FitChi2 }),
	realColumn("length_px", "pixel", "length of a streak or trail", func(k *Candidate) *float64 { return &k.Length }),
	realColumn("angle_deg", "deg", "its angle from +x towards +y", func(k *Candidate) *float64 { return &k.Angle }),
}

// Stamps describes the cut-outs, which only FITS tables carry.
var Stamps = []struct {
	Name, Unit, Description string
	Plane                   func(*Candidate) *[]float32
}{
	{"stamp_new", "count", "new frame, sky subtracted", func(k *Candidate) *[]float32 { return &k.StampNew }},
	{"stamp_reference", "count", "reference as compared", func(k *Candidate) *[]float32 { return &k.StampReference }},
	{"stamp_difference", "count", "difference", func(k *Candidate) *[]float32 { return &k.StampDifference }},
}

func textColumn(name, description string, get func(*Candidate) *string) Column {
	return Column{Name: name, Description: description, Type: Text, text: get}
}

func realColumn(name, unit, description string, get func(*Candidate) *float64) Column {
	return Column{Name: name, Unit: unit, Description: description, Type: Real, real: get}
}

// InjectedPrefix begins the identifiers of what was found with injected sources
// in the frame. Nothing so named is a candidate: it enters no table of
// candidates and no catalogue.
const InjectedPrefix = "INJ-"

// Injected reports whether the candidate is from a frame with injected sources.
func (k *Candidate) Injected() bool { return strings.HasPrefix(k.ID, InjectedPrefix) }

// identify returns the identifier of a candidate: 16 hexadecimal digits of the
// SHA-256 of the two frames' names and checksums and of the position rounded
// to half a pixel. It does not depend on measured brightness or kind, so that
// a better model or another threshold keeps the names of what is found again.
func identify(frameName, frameSum, referenceName, referenceSum string, x, y float64) string {
	h := sha256.Sum256(fmt.Appendf(nil, "candidate\x00%s\x00%s\x00%s\x00%s\x00%d\x00%d",
		frameName, frameSum, referenceName, referenceSum, int64(math.Round(2*x)), int64(math.Round(2*y))))
	return hex.EncodeToString(h[:8])
}
