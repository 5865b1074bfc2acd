package astro

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// maxDecimals bounds what a float64 of degrees can carry.
const maxDecimals = 9

// FormatRA writes a right ascension [deg] as hh:mm:ss with so many decimals of
// the second (0 to 9), rounded; what rounds up to 24 h is 00:00:00. NaN gives "".
func FormatRA(ra float64, decimals int) string {
	if math.IsNaN(ra) || math.IsInf(ra, 0) {
		return ""
	}
	unit := pow10(decimals)
	n := int64(math.Round(Wrap360(ra)*240*float64(unit))) % (86400 * unit)
	return sixties(n, decimals, ":")
}

// FormatDec writes a declination [deg] as ±dd:mm:ss with so many decimals of
// the second (0 to 9), rounded. NaN gives "".
func FormatDec(dec float64, decimals int) string {
	if math.IsNaN(dec) || math.IsInf(dec, 0) {
		return ""
	}
	sign := "+"
	if dec < 0 {
		sign = "-"
	}
	return sign + sixties(int64(math.Round(math.Abs(dec)*3600*float64(pow10(decimals)))), decimals, ":")
}

// pow10 returns 10^decimals as an integer.
func pow10(decimals int) int64 {
	if decimals < 0 || decimals > maxDecimals {
		panic(fmt.Sprintf("astro: %d decimals, want 0 to %d", decimals, maxDecimals))
	}
	n := int64(1)
	for range decimals {
		n *= 10
	}
	return n
}

// sixties writes a count of the last decimal's unit as three parts.
func sixties(n int64, decimals int, separator string) string {
	unit := pow10(decimals)
	fraction, seconds := n%unit, n/unit
	s := fmt.Sprintf("%02d%s%02d%s%02d", seconds/3600, separator, seconds/60%60, separator, seconds%60)
	if decimals > 0 {
		s += fmt.Sprintf(".%0*d", decimals, fraction)
	}
	return s
}

// Designation names a source by its place (ra, dec [deg], J2000) in the IAU's
// style: prefix, blank, JHHMMSS.s±DDMMSS, as "MR J123456.7-012345". Digits are
// cut, not rounded, as the IAU asks, so that a longer name begins with the
// shorter. A place within a millionth of the last digit's unit of a full
// digit, as float64 makes of a decimal, counts as having reached it. An empty
// prefix leaves out the blank. NaN gives "".
func Designation(ra, dec float64, prefix string) string {
	if math.IsNaN(ra) || math.IsInf(ra, 0) || !(math.Abs(dec) <= 90) {
		return ""
	}
	const nearly = 1e-6
	tenths := int64(math.Floor(Wrap360(ra)*2400+nearly)) % 864000
	arcsec := int64(math.Floor(math.Abs(dec)*3600 + nearly))
	sign := "+"
	if dec < 0 {
		sign = "-"
	}
	name := "J" + sixties(tenths, 1, "") + sign + sixties(arcsec, 0, "")
	if prefix == "" {
		return name
	}
	return prefix + " " + name
}

// ParseRA reads a right ascension and returns degrees in [0, 360). Three or
// two parts, parted by colons, blanks or the letters h m s, are hours, minutes
// and seconds; a single number is degrees, with an h behind it hours.
func ParseRA(text string) (float64, error) {
	v, sexagesimal, err := parseSixties(text, "hms")
	if err != nil {
		return 0, fmt.Errorf("astro: right ascension %q: %w; want hh:mm:ss.s or degrees", text, err)
	}
	limit := 360.0
	if sexagesimal {
		limit = 24
	}
	if v < 0 || v > limit {
		return 0, fmt.Errorf("astro: right ascension %q: outside 0 to 24 h or 0 to 360 deg", text)
	}
	if sexagesimal {
		v *= 15
	}
	return Wrap360(v), nil
}

// ParseDec reads a declination and returns degrees. Three or two parts, parted
// by colons, blanks or the letters d m s, are degrees, minutes and seconds; a
// single number is degrees. The sign holds for the whole: -00:30:00 is -0.5.
func ParseDec(text string) (float64, error) {
	v, _, err := parseSixties(text, "dms")
	if err != nil {
		return 0, fmt.Errorf("astro: declination %q: %w; want ±dd:mm:ss.s or degrees", text, err)
	}
	if math.Abs(v) > 90 {
		return 0, fmt.Errorf("astro: declination %q: outside -90 to 90 deg", text)
	}
	return v, nil
}

// parseSixties reads one to three parts. sexagesimal tells that there were
// several, or one with its letter.
func parseSixties(text, letters string) (v float64, sexagesimal bool, err error) {
	s := strings.TrimSpace(text)
	negative := strings.HasPrefix(s, "-")
	if negative || strings.HasPrefix(s, "+") {
		s = s[1:]
	}
	for i := range letters {
		// Each letter may stand once, behind its own part.
		if before, after, found := strings.Cut(s, letters[i:i+1]); found {
			if len(strings.FieldsFunc(before, isPart)) != i+1 {
				return 0, false, fmt.Errorf("the letter %c is out of place", letters[i])
			}
			s = before + " " + after
			sexagesimal = true
		}
	}
	parts := strings.FieldsFunc(s, isPart)
	if len(parts) == 0 || len(parts) > 3 {
		return 0, false, fmt.Errorf("%d numbers", len(parts))
	}
	if strings.Count(s, ":") > len(parts)-1 {
		return 0, false, fmt.Errorf("an empty part")
	}
	unit := 1.0
	for i, p := range parts {
		if strings.Trim(p, "0123456789.") != "" {
			return 0, false, fmt.Errorf("%q is no number", p)
		}
		if i < len(parts)-1 && strings.Contains(p, ".") {
			return 0, false, fmt.Errorf("%q before the last part has decimals", p)
		}
		f, err := strconv.ParseFloat(p, 64)
		if err != nil {
			return 0, false, fmt.Errorf("%q is no number", p)
		}
		if i > 0 && f >= 60 {
			return 0, false, fmt.Errorf("%q is 60 or more", p)
		}
		v += f / unit
		unit *= 60
	}
	if negative {
		v = -v
	}
	return v, sexagesimal || len(parts) > 1, nil
}

func isPart(r rune) bool { return r == ':' || r == ' ' || r == '\t' }
