package astro

import (
	"fmt"
	"math"
	"sort"
	"strings"
)

// TimeScale is one of the time scales of FITS Standard 4.0, table 30.
type TimeScale string

// The scales that ToUTC knows. Names of old are folded into them by
// ParseTimeScale.
const (
	UTC TimeScale = "UTC"
	UT1 TimeScale = "UT1"
	TAI TimeScale = "TAI"
	GPS TimeScale = "GPS"
	TT  TimeScale = "TT"
	TDB TimeScale = "TDB"
	TCG TimeScale = "TCG"
	TCB TimeScale = "TCB"
)

// ParseTimeScale reads the value of TIMESYS. Blank text is UTC, as the standard
// has it; a realization in brackets, as in TT(TAI) or UTC(NIST), is ignored. The
// scale LOCAL, which names no scale, and unknown words are errors.
func ParseTimeScale(text string) (TimeScale, error) {
	name, _, _ := strings.Cut(strings.ToUpper(strings.TrimSpace(text)), "(")
	switch name = strings.TrimSpace(name); name {
	case "", "UTC", "GMT", "UT":
		return UTC, nil
	case "UT1", "TAI", "GPS", "TT", "TDB", "TCG", "TCB":
		return TimeScale(name), nil
	case "IAT":
		return TAI, nil
	case "TDT", "ET":
		return TT, nil
	}
	return "", fmt.Errorf("astro: time scale %q is unknown; want UTC, UT1, TAI, GPS, TT, TDB, TCG or TCB", text)
}

// ttMinusTAI and taiMinusGPS are fixed offsets [s].
const (
	ttMinusTAI  = 32.184
	taiMinusGPS = 19
)

// utcStep says that from the day mjd on TAI - UTC [s] is
// offset + rate × (MJD - from).
type utcStep struct{ mjd, offset, from, rate float64 }

// utcSteps are the steps of UTC since 1960 as the IERS publishes them. Until
// 1972 UTC also ran at another rate than TAI.
var utcSteps = []utcStep{
	{36934, 1.4178180, 37300, 0.001296}, {37300, 1.4228180, 37300, 0.001296}, {37512, 1.3728180, 37300, 0.001296},
	{37665, 1.8458580, 37665, 0.0011232}, {38334, 1.9458580, 37665, 0.0011232}, {38395, 3.2401300, 38761, 0.001296},
	{38486, 3.3401300, 38761, 0.001296}, {38639, 3.4401300, 38761, 0.001296}, {38761, 3.5401300, 38761, 0.001296},
	{38820, 3.6401300, 38761, 0.001296}, {38942, 3.7401300, 38761, 0.001296}, {39004, 3.8401300, 38761, 0.001296},
	{39126, 4.3131700, 39126, 0.002592}, {39887, 4.2131700, 39126, 0.002592},
	{mjd: 41317, offset: 10}, {mjd: 41499, offset: 11}, {mjd: 41683, offset: 12}, {mjd: 42048, offset: 13},
	{mjd: 42413, offset: 14}, {mjd: 42778, offset: 15}, {mjd: 43144, offset: 16}, {mjd: 43509, offset: 17},
	{mjd: 43874, offset: 18}, {mjd: 44239, offset: 19}, {mjd: 44786, offset: 20}, {mjd: 45151, offset: 21},
	{mjd: 45516, offset: 22}, {mjd: 46247, offset: 23}, {mjd: 47161, offset: 24}, {mjd: 47892, offset: 25},
	{mjd: 48257, offset: 26}, {mjd: 48804, offset: 27}, {mjd: 49169, offset: 28}, {mjd: 49534, offset: 29},
	{mjd: 50083, offset: 30}, {mjd: 50630, offset: 31}, {mjd: 51179, offset: 32}, {mjd: 53736, offset: 33},
	{mjd: 54832, offset: 34}, {mjd: 56109, offset: 35}, {mjd: 57204, offset: 36}, {mjd: 57754, offset: 37},
}

// TAIMinusUTC returns TAI - UTC [s] at a UTC date [d]. Before 1960, when there
// was no UTC, it is the value of the first day of 1960, so that no time jumps;
// Universal Time of then differs from that by some tens of seconds. After the
// last known leap second (2017-01-01) it stays.
func TAIMinusUTC(mjdUTC float64) float64 {
	i := sort.Search(len(utcSteps), func(i int) bool { return utcSteps[i].mjd > mjdUTC }) - 1
	if i < 0 {
		i = 0
		mjdUTC = math.Max(mjdUTC, utcSteps[0].mjd) // NaN stays
	}
	s := utcSteps[i]
	return s.offset + s.rate*(mjdUTC-s.from)
}

// taiToUTC is exact but within a leap second, which becomes the first instant
// of the next day, as ParseDate reads it.
func taiToUTC(mjdTAI float64) float64 {
	i := sort.Search(len(utcSteps), func(i int) bool {
		s := utcSteps[i]
		return s.mjd+TAIMinusUTC(s.mjd)/secondsPerDay > mjdTAI
	}) - 1
	if i < 0 {
		return mjdTAI - TAIMinusUTC(mjdTAI)/secondsPerDay
	}
	s := utcSteps[i]
	utc := (mjdTAI - (s.offset-s.rate*s.from)/secondsPerDay) / (1 + s.rate/secondsPerDay)
	if i+1 < len(utcSteps) {
		utc = math.Min(utc, utcSteps[i+1].mjd)
	}
	return utc
}

// ToUTC converts a modified Julian date [d] of any scale to UTC, whose days have
// 86400 s here (see ParseDate). UT1 is taken as UTC, from which it differs by
// less than 0.9 s; the others are right to 0.1 ms, TCB and TDB for an observer on
// the Earth. An unknown scale panics: ParseTimeScale does not return one.
func ToUTC(mjd float64, scale TimeScale) float64 {
	switch scale {
	case UTC, UT1:
		return mjd
	case TAI:
		return taiToUTC(mjd)
	case GPS:
		return taiToUTC(mjd + taiMinusGPS/float64(secondsPerDay))
	}
	return taiToUTC(toTT(mjd, scale) - ttMinusTAI/secondsPerDay)
}

// toTT brings the dynamical scales to TT. The constants are those of the IAU
// resolutions B1.9 (2000) and B3 (2006).
func toTT(mjd float64, scale TimeScale) float64 {
	const (
		start     = 43144 + 32.184/secondsPerDay // 1977-01-01 TAI
		rateTCG   = 6.969290134e-10
		rateTCB   = 1.550519768e-8
		tdbOffset = -6.55e-5 // s
	)
	switch scale {
	case TT:
		return mjd
	case TCG:
		return mjd - rateTCG*(mjd-start)
	case TCB:
		mjd += -rateTCB*(mjd-start) + tdbOffset/secondsPerDay
	case TDB:
	default:
		panic(fmt.Sprintf("astro: time scale %q is unknown", string(scale)))
	}
	return mjd - tdbMinusTT(mjd)/secondsPerDay
}

// tdbMinusTT returns TDB - TT [s], right to about 10 µs: the largest terms of
// Fairhead & Bretagnon (1990, A&A 229, 240). The date may be of either scale.
func tdbMinusTT(mjd float64) float64 {
	t := (mjd - j2000) / 36525
	return 0.001657*math.Sin(628.3076*t+6.2401) + 0.000022*math.Sin(575.3385*t+4.2970) +
		0.000014*math.Sin(1256.6152*t+6.1969) + 0.000005*math.Sin(606.9777*t+4.0212) +
		0.000005*math.Sin(52.9691*t+0.4444) + 0.000002*math.Sin(21.3299*t+5.5431) +
		0.000010*t*math.Sin(628.3076*t+4.2490)
}

// UTCToTT converts a modified Julian date [d] from UTC to Terrestrial Time, the
// time of ephemerides.
func UTCToTT(mjdUTC float64) float64 {
	return mjdUTC + (TAIMinusUTC(mjdUTC)+ttMinusTAI)/secondsPerDay
}

// MJDOfJD returns the modified Julian date of a Julian date [d].
func MJDOfJD(jd float64) float64 { return jd - 2400000.5 }
