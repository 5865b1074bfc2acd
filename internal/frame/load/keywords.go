package load

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/internal/astro"
	"nightsift/internal/fits"
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
	ZeroPoint  []string // mag of a source of 1 count

	// Time keywords hold a date (YYYY-MM-DDThh:mm:ss), an MJD or a JD. A
	// keyword with AVG or MID in it is the middle of the exposure, one with
	// END its end, any other its start. A date without time of day is joined
	// with TIME-OBS, UTC-OBS, UT or UTC where the header has one. TIMESYS is
	// heeded: the result is UTC.
	Time []string

	// Variance, Error and Mask name extensions with a plane of the image's
	// shape: the variance in count²; where there is none, the standard deviation
	// in count; and a mask that is not zero where a pixel must not be used.
	// {hdu} in a name stands for the image's EXTNAME. With MaskBits only these
	// bits of the mask count.
	Variance string
	Error    string
	Mask     string
	MaskBits uint64

	// Fixed values win over the header. Keys are those of
	// frame.Meta.Origin: gain, read_noise, saturation, exposure, mid_mjd,
	// zero_point (numbers), filter, field (text).
	Fixed map[string]any
}

// DefaultKeywords returns the keywords in common use.
func DefaultKeywords() Keywords {
	return Keywords{
		// EGAIN first: where a camera writes both, GAIN is its setting.
		Gain:       []string{"EGAIN", "GAIN"},
		ReadNoise:  []string{"RDNOISE", "READNOIS", "READNOISE", "RON", "ENOISE"},
		Saturation: []string{"SATURATE", "SATLEVEL", "SATURAT", "SATURATION"},
		Exposure:   []string{"EXPTIME", "EXPOSURE", "XPOSURE", "EXP-TIME", "ITIME"},
		Time: []string{"MJD-AVG", "DATE-AVG", "MJD-MID", "DATE-MID", "MJDMID", "MJD-OBS", "DATE-OBS", "MJD-BEG", "DATE-BEG",
			"MJD_OBS", "DATE_OBS", "MJD-END", "DATE-END", "JD"},
		Filter:    []string{"FILTER", "FILTER1", "BAND", "FILTER2", "FILTNAM", "FILTERID"},
		Field:     []string{"OBJECT", "FIELD", "FIELDID", "TARGET"},
		ZeroPoint: []string{"MAGZP", "MAGZPT", "MAGZERO", "ZEROPT", "ZEROPNT", "ZPT", "ZP", "PHOTZP"},
		Variance:  "VARIANCE",
	}
}

var fixedKeys = []string{"gain", "read_noise", "saturation", "exposure", "mid_mjd", "zero_point", "filter", "field"}

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
			return fmt.Errorf("fixed value %s = %v: want a number%s", name, kw.Fixed[name], map[string]string{
				"gain": " > 0", "saturation": " > 0", "read_noise": " ≥ 0", "exposure": " ≥ 0"}[name])
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
	}
	return true
}

// reader fills a Meta from headers, the first of which comes first.
type reader struct {
	headers []*fits.Header
	kw      *Keywords
	meta    *frame.Meta
}

func (r *reader) readMeta() {
	m, kw := r.meta, r.kw
	r.number("gain", kw.Gain, &m.Gain)
	r.number("read_noise", kw.ReadNoise, &m.ReadNoise)
	r.number("saturation", kw.Saturation, &m.Saturation)
	r.number("exposure", kw.Exposure, &m.Exposure)
	r.number("zero_point", kw.ZeroPoint, &m.ZeroPoint)
	r.text("filter", kw.Filter, &m.Filter, noFilter)
	r.text("field", kw.Field, &m.Field, nil)
	r.time()
}

func (r *reader) float(key string) (float64, bool) {
	for _, h := range r.headers {
		if v, ok := h.Float(key); ok {
			return v, true
		}
	}
	return 0, false
}

func (r *reader) string(key string) (string, bool) {
	for _, h := range r.headers {
		if v, ok := h.Text(key); ok && strings.TrimSpace(v) != "" {
			return strings.TrimSpace(v), true
		}
	}
	return "", false
}

func (r *reader) number(name string, keys []string, into *float64) {
	if v, ok := asFloat(r.kw.Fixed[name]); ok {
		*into, r.meta.Origin[name] = v, "configuration"
		return
	}
	for _, key := range keys {
		if v, ok := r.float(key); ok && valid(name, v) {
			*into, r.meta.Origin[name] = v, key
			return
		}
	}
}

// noFilter tells the words that stand for an empty place in a filter wheel.
func noFilter(s string) bool {
	switch strings.ToLower(s) {
	case "clear", "open", "empty", "air", "none", "no filter", "n/a", "unknown", "-":
		return true
	}
	return false
}

func (r *reader) text(name string, keys []string, into *string, weak func(string) bool) {
	if v, ok := r.kw.Fixed[name].(string); ok {
		*into, r.meta.Origin[name] = v, "configuration"
		return
	}
	for _, key := range keys {
		v, ok := r.string(key)
		if !ok {
			continue
		}
		isWeak := weak != nil && weak(v)
		if isWeak && *into != "" {
			continue
		}
		*into, r.meta.Origin[name] = v, key
		if !isWeak {
			return
		}
	}
}

// time finds the middle of the exposure.
func (r *reader) time() {
	m := r.meta
	if v, ok := asFloat(r.kw.Fixed["mid_mjd"]); ok {
		m.MidMJD, m.Origin["mid_mjd"] = v, "configuration"
		return
	}
	half := m.Exposure / 2 / 86400
	for _, key := range r.kw.Time {
		mjd, note, ok := r.instant(key)
		if !ok {
			continue
		}
		upper := strings.ToUpper(key)
		switch {
		case strings.Contains(upper, "AVG") || strings.Contains(upper, "MID"):
		case math.IsNaN(half):
			note += " (exposure unknown: not the middle)"
		case strings.Contains(upper, "END"):
			mjd -= half
		default:
			mjd += half
		}
		m.MidMJD, m.Origin["mid_mjd"] = mjd, key+note
		return
	}
}

// instant reads one keyword as an MJD in UTC.
func (r *reader) instant(key string) (mjd float64, note string, ok bool) {
	if v, isNumber := r.float(key); isNumber {
		switch {
		case v > 2400000.5 && v < 2500000:
			mjd = v - 2400000.5
		case v > 15000 && v < 99999: // 1900 to 2132
			mjd = v
		default:
			return 0, "", false
		}
		return r.toUTC(mjd), "", true
	}
	text, ok := r.string(key)
	if !ok {
		return 0, "", false
	}
	mjd, err := astro.ParseDate(text)
	if err != nil {
		return 0, "", false
	}
	if !strings.Contains(text, ":") {
		note = " (no time of day)"
		for _, clock := range []string{"TIME-OBS", "UTC-OBS", "UT-OBS", "TIME-BEG", "UTSTART", "UT", "UTC"} {
			if text, ok := r.string(clock); ok {
				if day, err := astro.ParseClock(text); err == nil {
					mjd, note = mjd+day, " and "+clock
					break
				}
			}
		}
	}
	return r.toUTC(mjd), note, true
}

// toUTC heeds TIMESYS.
func (r *reader) toUTC(mjd float64) float64 {
	system, _ := r.string("TIMESYS")
	switch strings.ToUpper(system) {
	case "TAI", "IAT":
		return mjd - taiMinusUTC(mjd)/86400
	case "TT", "TDT", "ET", "TDB":
		// TDB differs from TT by less than 2 ms.
		return mjd - (taiMinusUTC(mjd)+32.184)/86400
	case "GPS":
		return mjd - (taiMinusUTC(mjd)-19)/86400
	}
	return mjd
}

// leapSeconds are the days from which TAI−UTC has grown by one second; it was
// 10 s at the first (IERS Bulletin C).
var leapSeconds = []float64{
	41317, 41499, 41683, 42048, 42413, 42778, 43144, 43509, 43874, 44239, 44786, 45151, 45516, 46247,
	47161, 47892, 48257, 48804, 49169, 49534, 50083, 50630, 51179, 53736, 54832, 56109, 57204, 57754,
}

// taiMinusUTC returns TAI−UTC [s]; within a minute of a leap second it may be
// the value of the other side.
func taiMinusUTC(mjd float64) float64 {
	n := 9.0
	for _, day := range leapSeconds {
		if mjd >= day {
			n++
		}
	}
	return n
}
