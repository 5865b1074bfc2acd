package astro

import (
	"fmt"
	"math"
	"strings"
)

const (
	secondsPerDay = 86400
	// firstMJD and lastMJD bound the years 1 to 9999 that four digits can write.
	firstMJD = -678575 // 0001-01-01
	lastMJD  = 2973484 // 10000-01-01, not included
)

// ParseDate reads a date as FITS headers write it and returns the modified
// Julian date [d] on the same time scale, UTC unless the header says otherwise.
// It takes
//
//	2026-12-01                   the start of the day
//	2026-12-01T03:04             hours and minutes
//	2026-12-01T03:04:05[.678]    seconds with any number of decimals
//	01/12/98                     day/month/year of the 20th century, the old form
//
// with a final Z and blanks around ignored, and a blank allowed for the T. A
// day has 86400 s here: 23:59:60 of a leap second is the next day's first
// instant, so an error of at most 1 s occurs within a day that has one. The
// result carries about 1 µs. (FITS Standard 4.0, section 9.1.1.)
func ParseDate(text string) (mjd float64, err error) {
	s := strings.TrimSpace(text)
	bad := func(why string) (float64, error) {
		return 0, fmt.Errorf("astro: date %q: %s; want YYYY-MM-DD, YYYY-MM-DDThh:mm:ss[.s] or DD/MM/YY", text, why)
	}
	if len(s) == 8 && s[2] == '/' && s[5] == '/' {
		day, ok1 := digits(s[0:2])
		month, ok2 := digits(s[3:5])
		year, ok3 := digits(s[6:8])
		if !ok1 || !ok2 || !ok3 {
			return bad("not digits around the slashes")
		}
		if !validDate(1900+year, month, day) {
			return bad("no such day")
		}
		return float64(MJDOfDate(1900+year, month, day)), nil
	}
	if len(s) < 10 || s[4] != '-' || s[7] != '-' {
		return bad("unknown form")
	}
	year, ok1 := digits(s[0:4])
	month, ok2 := digits(s[5:7])
	day, ok3 := digits(s[8:10])
	if !ok1 || !ok2 || !ok3 {
		return bad("unknown form")
	}
	if !validDate(year, month, day) {
		return bad("no such day")
	}
	date := float64(MJDOfDate(year, month, day))
	clock := strings.TrimSuffix(s[10:], "Z")
	if clock == "" {
		return date, nil
	}
	if clock[0] != 'T' && clock[0] != ' ' {
		return bad("unknown form")
	}
	seconds, why := parseClock(clock[1:])
	if why != "" {
		return bad(why)
	}
	return date + seconds/secondsPerDay, nil
}

// ParseClock reads a time of day hh:mm[:ss[.sss]], as an old header gives it in
// a keyword of its own, and returns it in days, 0 to 1. A final Z is ignored.
func ParseClock(text string) (days float64, err error) {
	seconds, why := parseClock(strings.TrimSuffix(strings.TrimSpace(text), "Z"))
	if why != "" {
		return 0, fmt.Errorf("astro: time %q: %s; want hh:mm:ss[.s]", text, why)
	}
	return seconds / secondsPerDay, nil
}

// parseClock returns seconds since midnight, or what is wrong.
func parseClock(s string) (seconds float64, why string) {
	if len(s) < 5 || s[2] != ':' || (len(s) > 5 && (len(s) < 8 || s[5] != ':')) {
		return 0, "unknown form of the time of day"
	}
	hour, ok1 := digits(s[0:2])
	minute, ok2 := digits(s[3:5])
	if !ok1 || !ok2 {
		return 0, "unknown form of the time of day"
	}
	whole, fraction := 0, 0.0
	if len(s) > 5 {
		var ok bool
		if whole, ok = digits(s[6:8]); !ok {
			return 0, "seconds are not digits"
		}
		if len(s) > 8 {
			if s[8] != '.' {
				return 0, "unknown form of the seconds"
			}
			unit := 0.1
			for _, c := range []byte(s[9:]) {
				if c < '0' || c > '9' {
					return 0, "seconds are not digits"
				}
				fraction += float64(c-'0') * unit
				unit /= 10
			}
		}
	}
	// 24:00:00 is the end of the day in ISO 8601, but not in FITS.
	if hour > 23 || minute > 59 || whole > 60 || (whole == 60 && (hour != 23 || minute != 59)) {
		return 0, "no such time of day"
	}
	if whole == 60 {
		fraction = 0
	}
	return float64(hour*3600+minute*60+whole) + fraction, ""
}

// digits reads an unsigned number that has nothing but digits.
func digits(s string) (n int, ok bool) {
	for _, c := range []byte(s) {
		if c < '0' || c > '9' {
			return 0, false
		}
		n = n*10 + int(c-'0')
	}
	return n, s != ""
}

func validDate(year, month, day int) bool {
	return year >= 1 && month >= 1 && month <= 12 && day >= 1 && day <= daysIn(year, month)
}

func daysIn(year, month int) int {
	switch month {
	case 2:
		if year%4 == 0 && (year%100 != 0 || year%400 == 0) {
			return 29
		}
		return 28
	case 4, 6, 9, 11:
		return 30
	}
	return 31
}

// MJDOfDate returns the modified Julian date of the day's start in the
// Gregorian calendar, carried back before 1582 as ISO 8601 does. The year is 1
// or later and the day exists. The count takes March as the first month, so
// that the leap day ends a year.
func MJDOfDate(year, month, day int) int {
	month -= 3
	if month < 0 {
		month += 12
		year--
	}
	// 153 days make five months from March or August on; -678881 is the day
	// before 1 March of the year 0.
	return 365*year + year/4 - year/100 + year/400 + (153*month+2)/5 + day - 678882
}

// DateOfMJD is the inverse of MJDOfDate for days from the year 1 on.
func DateOfMJD(mjd int) (year, month, day int) {
	n := mjd + 678881 // days since 0000-03-01
	const in400 = 146097
	cycle := n / in400
	n -= cycle * in400
	y := (n - n/1460 + n/36524 - n/146096) / 365
	n -= 365*y + y/4 - y/100
	m := (5*n + 2) / 153
	day = n - (153*m+2)/5 + 1
	year = cycle*400 + y
	month = m + 3
	if month > 12 {
		month -= 12
		year++
	}
	return year, month, day
}

// MJDToISO writes a modified Julian date as YYYY-MM-DDThh:mm:ss.sss, rounded
// to the millisecond. NaN and days outside the years 1 to 9999 give "".
func MJDToISO(mjd float64) string {
	if !(mjd >= firstMJD && mjd < lastMJD) {
		return ""
	}
	day := math.Floor(mjd)
	ms := int64(math.Round((mjd - day) * secondsPerDay * 1000))
	if ms >= secondsPerDay*1000 {
		ms -= secondsPerDay * 1000
		day++
		if day >= lastMJD {
			return ""
		}
	}
	y, m, d := DateOfMJD(int(day))
	return fmt.Sprintf("%04d-%02d-%02dT%02d:%02d:%02d.%03d", y, m, d, ms/3600000, ms/60000%60, ms/1000%60, ms%1000)
}

// NightOf returns the night to which an instant (mjd [d], UTC) belongs at an
// east longitude [deg], as YYYY-MM-DD: the local date of its evening. A night
// runs from local mean noon to the next. NaN and days outside the years 1 to
// 9999 give "".
func NightOf(mjd, longitude float64) string {
	day := math.Floor(mjd + Wrap180(longitude)/360 - 0.5)
	if !(day >= firstMJD && day < lastMJD) {
		return ""
	}
	y, m, d := DateOfMJD(int(day))
	return fmt.Sprintf("%04d-%02d-%02d", y, m, d)
}
