package load

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"nightsift/internal/astro"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
)

// reader fills a Meta from headers, the first of which comes first.
type reader struct {
	headers []*fits.Header // the image's own, then the primary one that it inherits
	kw      *Keywords
	meta    *frame.Meta
	report  *Report
}

// newReader reads a header with the primary one behind it, unless INHERIT = F
// says that this does not hold for the extension (FITS Standard 4.0, appendix
// K). Extensions that do not say are taken to inherit, as most mosaics mean it.
func newReader(f *fits.File, index int, kw *Keywords, meta *frame.Meta) *reader {
	nan := math.NaN()
	r := &reader{kw: kw, meta: meta, report: &Report{PixelScale: nan, RA: nan, Dec: nan, Origin: map[string]string{}}}
	own := f.HDUs()[index].Header
	r.headers = append(r.headers, own)
	if inherit, said := own.Bool("INHERIT"); index != 0 && (inherit || !said) {
		r.headers = append(r.headers, f.HDUs()[0].Header)
	}
	return r
}

// readMeta reads everything. The order matters: units of one value need another.
func (r *reader) readMeta() {
	m, kw := r.meta, r.kw
	r.report.UnitText, _, _ = r.string("BUNIT")
	r.report.Unit, r.report.Rate = pixelUnit(r.report.UnitText)
	r.number("exposure", kw.Exposure, &m.Exposure, r.exposure)
	r.number("gain", kw.Gain, &m.Gain, r.gain)
	camera := m.Gain
	r.number("read_noise", kw.ReadNoise, &m.ReadNoise, r.readNoise)
	r.pixelGain()
	r.number("saturation", kw.Saturation, &m.Saturation, func(q quantity, key string) (float64, string, error) {
		return r.saturation(q, camera)
	})
	r.zeroPoint()
	r.number("airmass", kw.Airmass, &m.Airmass, nil)
	if math.IsNaN(m.Airmass) {
		r.airmassOfEnds()
	}
	r.text("filter", kw.Filter, &m.Filter, noFilter)
	r.text("field", kw.Field, &m.Field, nil)
	r.time()
	r.pointing()
	for _, key := range []string{"IMAGETYP", "OBSTYPE", "IMGTYPE", "FRAMETYP"} {
		text, _, ok := r.string(key)
		for _, word := range strings.FieldsFunc(strings.ToLower(text), func(c rune) bool { return c < 'a' || c > 'z' }) {
			if ok && slices.Contains([]string{"bias", "zero", "dark", "flat", "domeflat", "skyflat", "arc", "lamp"}, word) {
				r.report.remark("header", "%s = %q: this is no exposure of the sky", key, text)
				return
			}
		}
	}
}

// card finds a keyword. where is the keyword, with a word when it was
// inherited.
func (r *reader) card(key string) (c fits.Card, where string, ok bool) {
	for n, h := range r.headers {
		if c, ok = h.Get(key); ok && c.Value != nil {
			if n > 0 {
				return c, key + " of the primary HDU", true
			}
			return c, key, true
		}
	}
	return fits.Card{}, "", false
}

// float returns a keyword's number.
func (r *reader) float(key string) (v float64, where string, ok bool) {
	c, where, ok := r.card(key)
	if !ok {
		return 0, "", false
	}
	q, err := readQuantity(c, false)
	return q.value, where, err == nil
}

// string returns a keyword's value as text, if it is not blank.
func (r *reader) string(key string) (s, where string, ok bool) {
	for n, h := range r.headers {
		if v, ok := h.Text(key); ok && strings.TrimSpace(v) != "" {
			where = key
			if n > 0 {
				where += " of the primary HDU"
			}
			return strings.TrimSpace(v), where, true
		}
	}
	return "", "", false
}

// convert brings the number of a card into the unit of a value; note says how.
type convert func(q quantity, key string) (v float64, note string, err error)

// number reads the first keyword of a list with a sensible value, or a set of
// keywords for several amplifiers.
func (r *reader) number(name string, keys []string, into *float64, to convert) {
	if v, ok := asFloat(r.kw.Fixed[name]); ok {
		*into, r.meta.Origin[name] = v, "configuration"
		return
	}
	for _, key := range keys {
		c, where, ok := r.card(key)
		if !ok {
			continue
		}
		if v, note, ok := r.one(name, c, key, to); ok {
			*into, r.meta.Origin[name] = v, where+note
			return
		}
	}
	for _, key := range keys {
		if r.amplifiers(name, key, into, to) {
			return
		}
	}
}

// one reads a single card; what is wrong with it becomes a remark.
func (r *reader) one(name string, c fits.Card, key string, to convert) (v float64, note string, ok bool) {
	q, err := readQuantity(c, name == "saturation")
	if err != nil {
		r.report.remark(name, "%s = %v: ignored", key, err)
		return 0, "", false
	}
	v = q.value
	if to != nil {
		if v, note, err = to(q, key); err != nil {
			r.report.remark(name, "%s = %s: %v: ignored", key, plain(q.value), err)
			return 0, "", false
		}
	}
	if !valid(name, v) {
		r.report.remark(name, "%s = %s makes no sense (want a number%s): ignored", key, plain(q.value), ranges[name])
		return 0, "", false
	}
	if q.note != "" {
		r.report.remark(name, "%s: %s", key, q.note)
	}
	return v, note, true
}

func plain(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }

// amplifiers joins GAIN1, GAIN2, … or GAINA, GAINB, … (also with an
// underscore) of a detector that is read out in several parts: the mean gain,
// the mean square of the read noise, the lowest saturation.
func (r *reader) amplifiers(name, key string, into *float64, to convert) bool {
	if name != "gain" && name != "read_noise" && name != "saturation" {
		return false
	}
	for _, form := range []string{"%s%d", "%s_%d", "%s%02d", "%s%c", "%s_%c"} {
		var values []float64
		var used []string
		for n := 1; n <= 64; n++ {
			arg := any(n)
			if strings.HasSuffix(form, "c") {
				if n > 16 {
					break
				}
				arg = 'A' + rune(n) - 1
			}
			amplifier := fmt.Sprintf(form, key, arg)
			if c, _, ok := r.card(amplifier); ok {
				if v, _, ok := r.one(name, c, amplifier, to); ok {
					values, used = append(values, v), append(used, amplifier)
				}
			}
		}
		if len(values) == 0 {
			continue
		}
		sum := 0.0
		for _, v := range values {
			if name == "read_noise" {
				v *= v
			}
			sum += v
		}
		*into = sum / float64(len(values))
		how := "mean"
		switch name {
		case "read_noise":
			*into, how = math.Sqrt(*into), "root of the mean square"
		case "saturation":
			*into, how = slices.Min(values), "lowest"
		}
		low, high := slices.Min(values), slices.Max(values)
		if len(used) == 1 {
			r.meta.Origin[name] = used[0]
			return true
		}
		r.meta.Origin[name] = fmt.Sprintf("%s to %s, %s of %d", used[0], used[len(used)-1], how, len(used))
		if high > low {
			r.report.remark(name, "the amplifiers differ (%s to %s): one value, %s, stands for all; noise of stars is off by up to %.0f %% on some of them",
				plain(low), plain(high), plain(*into), 50*(high-low)/(high+low))
		}
		return true
	}
	return false
}

// exposure is in seconds, unless the card says otherwise.
func (r *reader) exposure(q quantity, key string) (float64, string, error) {
	switch {
	case milliseconds.MatchString(q.unit):
		r.report.remark("exposure", "%s = %s is in milliseconds, as its card says", key, plain(q.value))
		return q.value / 1000, " (from ms)", nil
	case minutes.MatchString(q.unit):
		r.report.remark("exposure", "%s = %s is in minutes, as its card says", key, plain(q.value))
		return q.value * 60, " (from minutes)", nil
	}
	return q.value, "", nil
}

// gain heeds a card that says count per electron, or that the number is a
// setting of the camera.
func (r *reader) gain(q quantity, key string) (float64, string, error) {
	switch {
	case cameraSetting.MatchString(q.unit):
		return 0, "", fmt.Errorf("its card calls it a setting of the camera (%q), no electrons per count", strings.TrimSpace(q.unit))
	case countsPerElectron.MatchString(q.unit) && !electronsPerCount.MatchString(q.unit) && q.value > 0:
		r.report.remark("gain", "%s = %s is in counts per electron, as its card says: inverted", key, plain(q.value))
		return 1 / q.value, " (inverted)", nil
	}
	return q.value, "", nil
}

// readNoise is in electrons unless the card names counts and no electrons.
func (r *reader) readNoise(q quantity, key string) (float64, string, error) {
	if unitCount.MatchString(q.unit) && !unitElectron.MatchString(q.unit) {
		if math.IsNaN(r.meta.Gain) {
			return 0, "", fmt.Errorf("it is in counts, as its card says, and no gain is known")
		}
		r.report.remark("read_noise", "%s = %s is in counts, as its card says: times the gain", key, plain(q.value))
		return q.value * r.meta.Gain, " (times gain)", nil
	}
	return q.value, "", nil
}

// pixelGain turns the camera's gain into that of the pixels, when they are no
// longer the camera's counts.
func (r *reader) pixelGain() {
	m, p := r.meta, r.report
	if p.Unit == Counts && !p.Rate || m.Origin["gain"] == "configuration" {
		return
	}
	camera, from := m.Gain, m.Origin["gain"]
	bunit := fmt.Sprintf("BUNIT = %q", p.UnitText)
	unknown := func(why string) {
		m.Gain = math.NaN()
		delete(m.Origin, "gain")
		p.remark("gain", "%s: %s", bunit, why)
	}
	switch {
	case p.Unit == OtherUnits && math.IsNaN(camera):
		p.remark("gain", "%s: the pixels are no counts; an electron is worth nobody knows how many", bunit)
		return
	case p.Unit == OtherUnits:
		unknown(fmt.Sprintf("the pixels are no counts; %s = %s is the camera's and does not hold for them", from, plain(camera)))
		return
	case p.Unit == Electrons:
		if !math.IsNaN(camera) && camera != 1 {
			p.remark("gain", "%s: the pixels are electrons already; %s = %s describes the camera and is not applied again", bunit, from, plain(camera))
		}
		m.Gain, m.Origin["gain"] = 1, "BUNIT"
	}
	if !p.Rate || math.IsNaN(m.Gain) {
		return
	}
	if !(m.Exposure > 0) {
		unknown("the pixels are per second, and the exposure is unknown")
		return
	}
	m.Gain *= m.Exposure
	m.Origin["gain"] += " times exposure"
	p.remark("gain", "%s: the pixels are per second; one of their units is %s electrons", bunit, plain(m.Gain))
}

// saturation brings the level into the unit of the pixels where its card names
// another one. camera is the camera's gain.
func (r *reader) saturation(q quantity, camera float64) (float64, string, error) {
	p := r.report
	v, note := q.value, ""
	electrons, counts := unitElectron.MatchString(q.unit) && !electronsPerCount.MatchString(q.unit), unitCount.MatchString(q.unit)
	switch {
	case electrons && !counts && p.Unit == Counts && camera > 0:
		v, note = v/camera, " (electrons by gain)"
	case electrons && !counts && p.Unit == Counts:
		return 0, "", fmt.Errorf("it is in electrons, as its card says, and no gain is known")
	case counts && !electrons && p.Unit == Electrons && camera > 0:
		v, note = v*camera, " (counts times gain)"
	}
	if p.Rate && (electrons || counts) && !perSecond.MatchString(q.unit) {
		if !(r.meta.Exposure > 0) {
			return 0, "", fmt.Errorf("it is a total, the pixels are per second, and the exposure is unknown")
		}
		v, note = v/r.meta.Exposure, note+" (by exposure)"
	} else if p.Rate && !electrons && !counts {
		p.remark("saturation", "the pixels are per second; the saturation level is taken to be so too, as its card names no unit")
	}
	return v, note, nil
}

// zeroPoint reads the magnitude of one unit of the pixels. A keyword from the
// list of those per second, or whose card says so, is brought to the exposure.
func (r *reader) zeroPoint() {
	m, p := r.meta, r.report
	to := func(listed bool) convert {
		return func(q quantity, key string) (float64, string, error) {
			if q.value == 0 && p.Unit != OtherUnits {
				return 0, "", fmt.Errorf("a count of magnitude 0 is a place holder")
			}
			if !listed && !perSecond.MatchString(q.unit) || p.Rate {
				return q.value, "", nil
			}
			if !(m.Exposure > 0) {
				return 0, "", fmt.Errorf("it is for one count per second, and the exposure is unknown")
			}
			p.remark("zero_point", "%s = %s is for one count per second: brought to %s s", key, plain(q.value), plain(m.Exposure))
			return q.value + 2.5*math.Log10(m.Exposure), " (per second)", nil
		}
	}
	r.number("zero_point", r.kw.ZeroPoint, &m.ZeroPoint, to(false))
	if math.IsNaN(m.ZeroPoint) {
		r.number("zero_point", r.kw.ZeroPointPerSecond, &m.ZeroPoint, to(true))
	}
}

// airmassOfEnds is the mean of start and end.
func (r *reader) airmassOfEnds() {
	for _, pair := range [][2]string{{"AMSTART", "AMEND"}, {"AIRMSTRT", "AIRMEND"}, {"TEL AIRM START", "TEL AIRM END"}, {"ESO TEL AIRM START", "ESO TEL AIRM END"}} {
		a, _, ok1 := r.float(pair[0])
		b, _, ok2 := r.float(pair[1])
		if ok1 && ok2 && valid("airmass", a) && valid("airmass", b) {
			r.meta.Airmass, r.meta.Origin["airmass"] = (a+b)/2, "mean of "+pair[0]+" and "+pair[1]
			return
		}
	}
}

// noFilter tells the words that stand for an empty place in a filter wheel.
func noFilter(s string) bool {
	s = strings.ToLower(s)
	switch s {
	case "open", "empty", "air", "none", "no filter", "no_filter", "nofilter", "n/a", "unknown", "-", "free", "hole", "blank":
		return true
	}
	return strings.HasPrefix(s, "clear")
}

func (r *reader) text(name string, keys []string, into *string, weak func(string) bool) {
	if v, ok := r.kw.Fixed[name].(string); ok {
		*into, r.meta.Origin[name] = v, "configuration"
		return
	}
	found := false
	for _, key := range keys {
		v, where, ok := r.string(key)
		if !ok {
			continue
		}
		isWeak := weak != nil && weak(v)
		if found && !isWeak {
			// A second element in the beam, such as a neutral density.
			stem, digit := strings.CutSuffix(key, key[len(key)-1:])
			if digit && strings.HasPrefix(r.meta.Origin[name], stem) && key[len(key)-1] <= '9' && !strings.EqualFold(v, *into) {
				r.report.remark(name, "%s = %q stands beside %s = %q: the latter counts", key, v, r.meta.Origin[name], *into)
			}
			continue
		}
		if found || isWeak && *into != "" {
			continue
		}
		*into, r.meta.Origin[name], found = v, where, !isWeak
		if found && weak == nil {
			return
		}
	}
}

// pointing reads what serves orientation where there is no WCS.
func (r *reader) pointing() {
	p := r.report
	for _, key := range r.kw.PixelScale {
		if v, where, ok := r.float(key); ok && v > 1e-3 && v < 1000 {
			p.PixelScale, p.Origin["pixel_scale"] = v, where
			break
		}
	}
	read := func(keys []string, parse func(string) (float64, error)) (float64, string) {
		for _, key := range keys {
			text, where, ok := r.string(key)
			if !ok {
				continue
			}
			if v, err := parse(text); err == nil {
				return v, where
			}
		}
		return math.NaN(), ""
	}
	ra, fromRA := read(r.kw.RA, astro.ParseRA)
	dec, fromDec := read(r.kw.Dec, astro.ParseDec)
	if ra == ra && dec == dec {
		p.RA, p.Dec, p.Origin["pointing"] = ra, dec, fromRA+" and "+fromDec
	}
}
