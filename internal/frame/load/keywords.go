package load

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/internal/frame"
)

// Keywords says which header keywords hold what. Each list is tried in order;
// the first keyword that is there with a sensible value counts.
type Keywords struct {
	Gain       []string // electron per count, > 0
	ReadNoise  []string // electron, ≥ 0
	Saturation []string // count, > 0
	Exposure   []string // s, ≥ 0
	Filter     []string // text; words for "no filter" count only if no other keyword has a value
	Field      []string // text
	ZeroPoint  []string // mag of a source of 1 count; of 1 count/s where the card says so
	Airmass    []string // ≥ 1

	ZeroPointPerSecond []string // mag of a source of 1 count/s

	// PixelScale [arcsec per px], RA and Dec [deg or sexagesimal] say where a
	// frame without world coordinates points. They are for the eye: frames are
	// matched by their stars.
	PixelScale, RA, Dec []string

	// Time keywords hold a date (YYYY-MM-DDThh:mm:ss), an MJD or a JD. A
	// keyword with AVG or MID in it is the middle of the exposure, one with
	// END its end, any other its start unless its comment says otherwise; a name
	// followed by :start, :middle or :end is what that says. A date without time of day is joined
	// with TIME-OBS, UTC-OBS, UT or UTC where the header has one. TIMESYS is
	// heeded: the result is UTC.
	Time []string

	// Variance, Error and Mask name extensions with a plane of the image's
	// shape: the variance in count²; where there is none, the standard deviation
	// in count; and a mask that is not zero where a pixel must not be used.
	// {hdu} in a name stands for the image's EXTNAME. MaskFlags says which bits
	// of the mask are which flag; of the others those in MaskBits, or all when
	// that is 0, are UserMasked.
	Variance  string
	Error     string
	Mask      string
	MaskBits  uint64
	MaskFlags map[frame.Flag]uint64

	// Fixed values win over the header. Keys are those of
	// frame.Meta.Origin: gain, read_noise, saturation, exposure, mid_mjd,
	// zero_point, airmass (numbers), filter, field (text).
	Fixed map[string]any
}

// DefaultKeywords returns the keywords in common use.
func DefaultKeywords() Keywords {
	return Keywords{
		// EGAIN first: where a camera writes both, GAIN is its setting.
		Gain:       []string{"EGAIN", "GAIN", "CCDGAIN", "GAINEFF", "DETGAIN", "GAIN_E", "CONAD", "ESO DET OUT1 CONAD", "DET OUT1 CONAD", "ATODGAIN", "ATODGN"},
		ReadNoise:  []string{"RDNOISE", "READNOIS", "READNOISE", "RON", "ENOISE", "RDNOIS", "RNOISE", "READ_NOI", "DETRON", "ESO DET OUT1 RON", "DET OUT1 RON", "READNSE"},
		Saturation: []string{"SATURATE", "SATLEVEL", "SATURAT", "SATURATION", "SATUR", "MAXLIN", "NONLIN", "FULLWELL"},
		Exposure:   []string{"EXPTIME", "EXPOSURE", "XPOSURE", "EXP-TIME", "ITIME", "EXP_TIME", "EXPOSED", "INTTIME", "TEXPTIME", "ELAPTIME"},
		Time: []string{"MJD-AVG", "DATE-AVG", "MJD-MID", "DATE-MID", "MJDMID", "MJD-OBS", "DATE-OBS", "MJD-BEG", "DATE-BEG",
			"MJD_OBS", "DATE_OBS", "DATEOBS", "MJD-END", "DATE-END", "JD", "JD-OBS", "MJD"},
		Filter: []string{"FILTER", "FILTER1", "BAND", "FILTER2", "FILTER3", "FILTNAM", "FILTERID", "FILTNAM1", "FILTNAM2", "FILT", "INSFILTE", "ESO INS FILT1 NAME",
			"INS FILT1 NAME"},
		Field:      []string{"OBJECT", "FIELD", "FIELDID", "TARGET", "OBJNAME", "TARGNAME", "FIELD_ID"},
		ZeroPoint:  []string{"MAGZP", "MAGZPT", "MAGZERO", "ZEROPT", "ZEROPNT", "ZPT", "ZP", "PHOTZP", "MAG0", "ZEROPOIN", "MAGZEROP"},
		Airmass:    []string{"AIRMASS", "SECZ", "AIRMASS1", "AMASS", "AIRM"},
		PixelScale: []string{"PIXSCALE", "PIXSCAL1", "SECPIX", "SECPIX1", "CCDSCALE", "PIXELSCL"},
		RA:         []string{"RA", "OBJCTRA", "TELRA", "RA_TARG", "RA-TARG", "OBJRA", "RA_OBS"},
		Dec:        []string{"DEC", "OBJCTDEC", "TELDEC", "DEC_TARG", "DEC-TARG", "OBJDEC", "DEC_OBS"},
		Variance:   "VARIANCE",
	}
}

var fixedKeys = []string{"gain", "read_noise", "saturation", "exposure", "mid_mjd", "zero_point", "airmass", "filter", "field"}

// Check reports a fixed value of unknown name or wrong type.
func (kw Keywords) Check() error {
	names := make([]string, 0, len(kw.Fixed))
	for name := range kw.Fixed {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		if !slices.Contains(fixedKeys, name) {
			return fmt.Errorf("fixed value %s: no such value; known are %s", name, strings.Join(fixedKeys, ", "))
		}
		if name == "filter" || name == "field" {
			if _, ok := kw.Fixed[name].(string); !ok {
				return fmt.Errorf("fixed value %s = %v: want text in quotes", name, kw.Fixed[name])
			}
			continue
		}
		v, ok := asFloat(kw.Fixed[name])
		if !ok || !valid(name, v) {
			return fmt.Errorf("fixed value %s = %v: want a number%s", name, kw.Fixed[name], ranges[name])
		}
	}
	return nil
}

// companion reports whether an EXTNAME is that of a variance or mask.
func (kw *Keywords) companion(name string) bool {
	for _, pattern := range []string{kw.Variance, kw.Error, kw.Mask} {
		before, after, wild := strings.Cut(strings.ToUpper(pattern), "{HDU}")
		n := strings.ToUpper(name)
		if pattern == "" || n == "" {
			continue
		}
		if !wild && n == before || wild && before+after != "" && len(n) > len(before)+len(after) && strings.HasPrefix(n, before) && strings.HasSuffix(n, after) {
			return true
		}
	}
	return false
}

func asFloat(v any) (float64, bool) {
	switch v := v.(type) {
	case float64:
		return v, true
	case int64:
		return float64(v), true
	case int:
		return float64(v), true
	}
	return 0, false
}

// ranges are those of valid, in words.
var ranges = map[string]string{"gain": " > 0", "saturation": " > 0", "read_noise": " ≥ 0", "exposure": " ≥ 0", "airmass": " from 1 to 40"}

// valid tells whether a number makes sense for a value.
func valid(name string, v float64) bool {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return false
	}
	switch name {
	case "gain", "saturation":
		return v > 0
	case "read_noise", "exposure":
		return v >= 0
	case "airmass":
		return v >= 0.99 && v <= 40
	}
	return true
}
