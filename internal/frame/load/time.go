package load

import (
	"fmt"
	"math"
	"regexp"
	"strings"

	"nightsift/internal/astro"
)

// role says which instant of the exposure a keyword holds.
type role int

const (
	start role = iota
	middle
	end
)

func (r role) String() string { return [...]string{"start", "middle", "end"}[r] }

var (
	wordStart  = regexp.MustCompile(`\b(start|begin|beginning|starts|begins)\b`)
	wordMiddle = regexp.MustCompile(`\b(mid|middle|midpoint|mid-?exposure|mid-?time|centre|center|average)\b`)
	wordEnd    = regexp.MustCompile(`\b(end|ends|stop|finish)\b`)
)

// roleOf decides by the configuration's KEY:start, KEY:middle or KEY:end, then
// by the keyword's name, then by its card's comment; else it is the start, as
// the FITS Standard 4.0 has it for DATE-OBS and MJD-OBS (section 9.5). why is
// empty when the keyword speaks for itself.
func (r *reader) roleOf(spec string) (key string, is role, why string) {
	if name, suffix, ok := strings.Cut(spec, ":"); ok {
		switch strings.ToLower(suffix) {
		case "middle":
			return name, middle, "configuration"
		case "end":
			return name, end, "configuration"
		}
		return name, start, "configuration"
	}
	upper := strings.ToUpper(spec)
	switch {
	case strings.Contains(upper, "AVG") || strings.Contains(upper, "MID"):
		return spec, middle, ""
	case strings.Contains(upper, "END"):
		return spec, end, ""
	case strings.Contains(upper, "BEG"):
		return spec, start, ""
	}
	if c, _, ok := r.card(spec); ok {
		text := strings.ToLower(c.Comment)
		s, m, e := wordStart.MatchString(text), wordMiddle.MatchString(text), wordEnd.MatchString(text)
		switch {
		case m && !s && !e:
			return spec, middle, "its card says so"
		case e && !s && !m:
			return spec, end, "its card says so"
		}
	}
	return spec, start, ""
}

// time finds the middle of the exposure.
func (r *reader) time() {
	m := r.meta
	if v, ok := asFloat(r.kw.Fixed["mid_mjd"]); ok {
		m.MidMJD, m.Origin["mid_mjd"] = v, "configuration"
		return
	}
	half := m.Exposure / 2 / 86400
	if elapsed, _, ok := r.float("TELAPSE"); ok && elapsed > 0 && !(elapsed <= m.Exposure) && elapsed < 10*86400 {
		half = elapsed / 2 / 86400
		open := "longer than the shutter was open"
		if math.IsNaN(m.Exposure) {
			open = "for how long the shutter was open is not said"
		}
		r.report.remark("mid_mjd", "the exposure took %s s from start to end (TELAPSE), %s", plain(elapsed), open)
	}
	for _, spec := range r.kw.Time {
		key, is, why := r.roleOf(spec)
		mjd, note, ok := r.instant(key, true)
		if !ok {
			continue
		}
		if why == "" && is == start {
			is, why = r.compare(key, mjd)
		}
		if why != "" && is != start {
			r.report.remark("mid_mjd", "%s is the %s of the exposure: %s", key, is, why)
			note += " (" + is.String() + ")"
		}
		if math.IsNaN(half) && is != middle {
			if from, to, ends := r.ends(key, is, mjd); ends {
				m.Exposure, m.Origin["exposure"] = (to-from)*86400, "estimated: from start to end"
				r.report.remark("exposure", "no keyword holds it; from start to end it is %.6g s", m.Exposure)
				half = (to - from) / 2
			} else {
				note += " (exposure unknown: not the middle)"
				half = 0
			}
		}
		switch is {
		case start:
			mjd += half
			if from, to, ends := r.ends(key, is, mjd-half); ends {
				if d := (to-from)*86400 - 2*half*86400; math.Abs(d) > math.Max(2, 0.02*2*half*86400) {
					r.report.remark("mid_mjd", "the end that the header tells lies %.4g s from start plus exposure: the middle may be off by %.3g s (readout, or pauses of the shutter)", d, math.Abs(d)/2)
				}
			}
		case end:
			mjd -= half
		}
		m.MidMJD, m.Origin["mid_mjd"] = mjd, key+note
		return
	}
}

// ends returns start and end of the exposure when the header has both in
// keywords of one family, at most three days apart.
func (r *reader) ends(key string, is role, mjd float64) (from, to float64, ok bool) {
	upper := strings.ToUpper(key)
	var others []string
	if is == start {
		for _, part := range []string{"OBS", "BEG"} {
			if strings.Contains(upper, part) {
				others = append(others, strings.Replace(upper, part, "END", 1))
			}
		}
	} else {
		others = append(others, strings.Replace(upper, "END", "BEG", 1), strings.Replace(upper, "END", "OBS", 1))
	}
	for _, other := range others {
		if v, _, good := r.instant(other, false); good && other != upper {
			from, to = min(mjd, v), max(mjd, v)
			if is == start && v > mjd || is == end && v < mjd {
				return from, to, to-from < 3
			}
		}
	}
	return 0, 0, false
}

// compare looks whether a keyword that should be the start is contradicted by
// DATE-OBS: one exposure later it is the end, half of one later the middle.
func (r *reader) compare(key string, mjd float64) (is role, why string) {
	const other = "DATE-OBS"
	if strings.EqualFold(key, other) || strings.EqualFold(key, "DATE-BEG") {
		return start, ""
	}
	text, _, ok := r.string(other)
	date, _, good := r.instant(other, false)
	if !ok || !good || !strings.Contains(text, ":") {
		return start, ""
	}
	if _, is, _ := r.roleOf(other); is != start {
		return start, ""
	}
	later := (mjd - date) * 86400
	t := r.meta.Exposure
	slack := 0.5
	if t > 25 { // not where it is unknown
		slack = 0.02 * t
	}
	switch {
	case math.Abs(later) < slack:
	case t > 4 && math.Abs(later-t) < slack:
		return end, fmt.Sprintf("it lies one exposure after %s", other)
	case t > 4 && math.Abs(later-t/2) < slack:
		return middle, fmt.Sprintf("it lies half of an exposure after %s", other)
	default:
		r.report.remark("mid_mjd", "%s and %s differ by %.6g s: %s counts", key, other, later, key)
	}
	return start, ""
}

// instant reads one keyword as an MJD in UTC. With say, what is wrong with it
// becomes a remark.
func (r *reader) instant(key string, say bool) (mjd float64, note string, ok bool) {
	c, where, ok := r.card(key)
	if !ok {
		return 0, "", false
	}
	if where != key {
		note = strings.TrimPrefix(where, key)
	}
	text, isText := c.Value.(string)
	text = strings.TrimSpace(text)
	if v, _, number := r.float(key); number && (!isText || !strings.ContainsAny(text, "-/:T")) {
		switch {
		case v > 2400000.5 && v < 2500000:
			mjd = astro.MJDOfJD(v)
		case v > 15000 && v < 99999: // 1900 to 2132
			mjd = v
		default:
			if say {
				r.report.remark("mid_mjd", "%s = %s is no date (want an MJD or JD of 1900 to 2132): ignored", key, plain(v))
			}
			return 0, "", false
		}
		return r.toUTC(mjd, say), note, true
	}
	if !isText || text == "" {
		return 0, "", false
	}
	mjd, err := astro.ParseDate(text)
	if err != nil {
		if say {
			r.report.remark("mid_mjd", "%s = %q is no date (want YYYY-MM-DDThh:mm:ss): ignored", key, text)
		}
		return 0, "", false
	}
	if say && strings.Contains(text, "/") {
		r.report.remark("mid_mjd", "%s = %q is the old form day/month/year of the 1900s: read as %s", key, text, astro.MJDToISO(mjd)[:10])
	}
	if !strings.Contains(text, ":") {
		clock := ""
		for _, k := range []string{"TIME-OBS", "UTC-OBS", "UT-OBS", "TIME-BEG", "UTSTART", "UT-START", "UT", "UTC"} {
			if t, _, ok := r.string(k); ok {
				if day, err := astro.ParseClock(t); err == nil {
					mjd, clock = mjd+day, k
					break
				}
			}
		}
		if clock != "" {
			note += " and " + clock
		} else {
			note += " (no time of day)"
		}
	}
	return r.toUTC(mjd, say), note, true
}

// toUTC heeds TIMESYS.
func (r *reader) toUTC(mjd float64, say bool) float64 {
	text, _, _ := r.string("TIMESYS")
	scale, err := astro.ParseTimeScale(text)
	if err != nil {
		if say {
			r.report.remark("mid_mjd", "TIMESYS = %q names no time scale that is known: taken as UTC", text)
		}
		return mjd
	}
	utc := astro.ToUTC(mjd, scale)
	if say && scale != astro.UTC && scale != astro.UT1 {
		r.report.remark("mid_mjd", "TIMESYS = %s: %.3f s taken off to have UTC", text, (mjd-utc)*86400)
	}
	return utc
}
