package astro

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"strings"
	"testing"
	"time"

	"nightsift/internal/outside"
)

// TestAgainstAstropy compares with astropy's times, separations, position
// angles and sexagesimal strings: committed ones, and those of the installed
// version.
func TestAgainstAstropy(t *testing.T) {
	committed, err := os.ReadFile("testdata/reference.json")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("committed", func(t *testing.T) { compareWithReference(t, committed) })
	script, err := os.ReadFile("testdata/reference.py")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("live", func(t *testing.T) { compareWithReference(t, outside.Python(t, string(script))) })
}

func compareWithReference(t *testing.T, data []byte) {
	var r struct {
		Times []struct {
			ISO string
			MJD float64
		}
		Pairs []struct {
			A, B              [2]float64
			Separation, Angle float64
		}
		Angles []struct {
			RA, Dec  float64
			HMS, DMS string
		}
	}
	if err := json.Unmarshal(data, &r); err != nil {
		t.Fatal(err)
	}
	if len(r.Times) < 400 || len(r.Pairs) < 400 || len(r.Angles) < 20 {
		t.Fatalf("%d times, %d pairs, %d angles: want 400, 400, 20", len(r.Times), len(r.Pairs), len(r.Angles))
	}
	worst := 0.0
	for _, c := range r.Times {
		mjd, err := ParseDate(c.ISO)
		if err != nil {
			t.Errorf("%s: %v", c.ISO, err)
			continue
		}
		worst = max(worst, math.Abs(mjd-c.MJD)*secondsPerDay)
		// Back to text: astropy's, completed to the millisecond.
		again, err := ParseDate(MJDToISO(c.MJD))
		if err != nil || math.Abs(again-c.MJD)*secondsPerDay > 0.0006 {
			t.Errorf("%s: written as %s, %v", c.ISO, MJDToISO(c.MJD), err)
		}
		if len(c.ISO) == 23 && MJDToISO(mjd) != c.ISO {
			t.Errorf("%s: written as %s", c.ISO, MJDToISO(mjd))
		}
	}
	if worst > 1e-4 {
		t.Errorf("%g s from astropy, want 1e-4", worst)
	}
	far := 0.0
	for _, c := range r.Pairs {
		s := Separation(c.A[0], c.A[1], c.B[0], c.B[1])
		far = max(far, math.Abs(s-c.Separation))
		if c.Separation < 1e-9 || c.Separation > 179.999999 || math.Abs(c.A[1]) == 90 {
			continue // no direction
		}
		d := math.Abs(Wrap180(PositionAngle(c.A[0], c.A[1], c.B[0], c.B[1]) - c.Angle))
		if d*c.Separation > 1e-11 && d > 1e-11 {
			t.Errorf("%v to %v: position angle off by %g", c.A, c.B, d)
		}
		ra, dec := Offset(c.A[0], c.A[1], c.Angle, c.Separation)
		if Separation(ra, dec, c.B[0], c.B[1]) > 1e-11 {
			t.Errorf("%v by %g at %g arrives at (%v, %v), want %v", c.A, c.Separation, c.Angle, ra, dec, c.B)
		}
	}
	if far > 1e-12 {
		t.Errorf("separation %g deg from astropy, want 1e-12", far)
	}
	for _, c := range r.Angles {
		if got := FormatRA(c.RA, 3); got != strings.Replace(c.HMS, "24:00:00.000", "00:00:00.000", 1) {
			t.Errorf("right ascension %v: %s, astropy %s", c.RA, got, c.HMS)
		}
		if got := FormatDec(c.Dec, 2); got != c.DMS {
			t.Errorf("declination %v: %s, astropy %s", c.Dec, got, c.DMS)
		}
	}
	t.Logf("at most %.2g s and %.2g deg from astropy", worst, far)
}

func TestParseDateForms(t *testing.T) {
	for text, want := range map[string]float64{
		"2000-01-01T12:00:00.000Z": 51544.5,
		" 2000-01-01 12:00 ":       51544.5,
		"2000-01-01Z":              51544,
		"01/01/99":                 51179, // FITS Standard 4.0, table of old dates: 20th century
		"31/12/00":                 15384,
		"2016-12-31T23:59:60.5":    57754,
		"2000-01-01T00:00:00.":     51544,
	} {
		if got, err := ParseDate(text); err != nil || math.Abs(got-want) > 1e-10 {
			t.Errorf("%q: %v, %v; want %v", text, got, err, want)
		}
	}
	for _, text := range []string{"", "2000", "2000-1-1", "2000-13-01", "2000-02-30", "1900-02-29", "0000-01-01",
		"2000-01-01T", "2000-01-01T1", "2000-01-01T24:00:00", "2000-01-01T12:60:00", "2000-01-01T12:00:61",
		"2000-01-01T12:30:60", "2000-01-01T12:00:0x", "2000-01-01T12:00:00,5", "2000-01-01T12:00:00.5e3",
		"2000-01-01T12-00-00", "2000-01-01X12:00:00", "2000-01-01T12:00:00+01:00", "2000-01-01T-1:00:00",
		"99/12/01", "1/2/99", "aa/bb/cc", "32/01/99", "２０００-01-01", "2000-01-01T12:00:5", "20000101"} {
		if got, err := ParseDate(text); err == nil {
			t.Errorf("%q: %v; want an error", text, got)
		}
	}
	if got, err := ParseClock(" 06:00:36.0Z"); err != nil || math.Abs(got-(0.25+36/86400.)) > 1e-15 {
		t.Errorf("clock: %v, %v", got, err)
	}
	if _, err := ParseClock("6h"); err == nil {
		t.Error("clock 6h is taken")
	}
}

// TestCalendar walks every day of four centuries beside package time.
func TestCalendar(t *testing.T) {
	day := time.Date(1850, 1, 1, 0, 0, 0, 0, time.UTC)
	mjd := MJDOfDate(1850, 1, 1)
	if MJDOfDate(1858, 11, 17) != 0 {
		t.Errorf("day 0 is day %d", MJDOfDate(1858, 11, 17))
	}
	for range 400 * 366 {
		y, m, d := DateOfMJD(mjd)
		if y != day.Year() || m != int(day.Month()) || d != day.Day() || MJDOfDate(y, m, d) != mjd {
			t.Fatalf("day %d is %d-%d-%d and back %d, want %v", mjd, y, m, d, MJDOfDate(y, m, d), day)
		}
		day = day.AddDate(0, 0, 1)
		mjd++
	}
	for mjd := firstMJD; mjd < lastMJD; mjd += 13 {
		y, m, d := DateOfMJD(mjd)
		if !validDate(y, m, d) || MJDOfDate(y, m, d) != mjd {
			t.Fatalf("day %d is %d-%d-%d and back %d", mjd, y, m, d, MJDOfDate(y, m, d))
		}
	}
}

func TestMJDToISO(t *testing.T) {
	for mjd, want := range map[float64]string{
		51544.5:                     "2000-01-01T12:00:00.000",
		51544.9999999999:            "2000-01-02T00:00:00.000",
		51543 + 86399.9994/86400:    "1999-12-31T23:59:59.999",
		-0.25:                       "1858-11-16T18:00:00.000",
		firstMJD:                    "0001-01-01T00:00:00.000",
		firstMJD - 1:                "",
		lastMJD:                     "",
		math.Nextafter(lastMJD, 0):  "",
		math.NaN():                  "",
		math.Inf(1):                 "",
		math.Inf(-1):                "",
		60000 + 3723.0045001/86400.: "2023-02-25T01:02:03.005",
	} {
		if got := MJDToISO(mjd); got != want {
			t.Errorf("%v: %q, want %q", mjd, got, want)
		}
	}
}

func TestNightOf(t *testing.T) {
	for _, c := range []struct {
		iso       string
		longitude float64
		want      string
	}{
		{"2026-08-01T22:00:00", 0, "2026-08-01"},
		{"2026-08-02T03:00:00", 0, "2026-08-01"},
		{"2026-08-02T11:59:59", 0, "2026-08-01"},
		{"2026-08-02T12:00:01", 0, "2026-08-02"},
		{"2026-08-02T03:00:00", -105, "2026-08-01"}, // 20 h in the evening
		{"2026-08-02T03:00:00", 255, "2026-08-01"},
		{"2026-08-02T18:59:00", -105, "2026-08-01"}, // just before noon
		{"2026-08-02T19:01:00", -105, "2026-08-02"},
		{"2026-08-01T10:00:00", 150, "2026-08-01"}, // 20 h in the evening
		{"2026-08-01T18:00:00", 150, "2026-08-01"}, // 4 h in the morning after
		{"2026-08-02T01:59:00", 150, "2026-08-01"},
		{"2026-08-02T02:01:00", 150, "2026-08-02"},
		{"2024-03-01T05:00:00", -70, "2024-02-29"},
		{"2027-01-01T05:00:00", -70, "2026-12-31"},
	} {
		mjd, err := ParseDate(c.iso)
		if err != nil {
			t.Fatal(err)
		}
		if got := NightOf(mjd, c.longitude); got != c.want {
			t.Errorf("%s at %g: %s, want %s", c.iso, c.longitude, got, c.want)
		}
	}
	for _, mjd := range []float64{math.NaN(), math.Inf(1), 1e300, -1e7} {
		if got := NightOf(mjd, 10); got != "" {
			t.Errorf("%v: %q, want nothing", mjd, got)
		}
	}
}

func TestDesignation(t *testing.T) {
	ra := func(h, m, s float64) float64 { return 15 * (h + m/60 + s/3600) }
	for _, c := range []struct {
		ra, dec      float64
		prefix, want string
	}{
		{ra(12, 34, 56.78), -(1 + 23./60 + 45.9/3600), "MR", "MR J123456.7-012345"}, // cut, not rounded
		{ra(23, 59, 59.99), 89.99999, "MR", "MR J235959.9+895959"},
		{359.9999999999, 0, "", "J000000.0+000000"}, // a full turn but for rounding
		{-1e-17, -0.5 / 3600, "", "J000000.0-000000"},
		{0, 90, "", "J000000.0+900000"},
		{360, -90, "", "J000000.0-900000"},
		{math.NaN(), 0, "MR", ""},
		{0, 91, "MR", ""},
	} {
		if got := Designation(c.ra, c.dec, c.prefix); got != c.want {
			t.Errorf("(%v, %v): %q, want %q", c.ra, c.dec, got, c.want)
		}
	}
	// Decimals that float64 holds a little low keep their last digit.
	for tenths := range 864000 {
		if tenths%97 != 0 {
			continue
		}
		dec := float64(tenths%324000) / 3600
		want := "J" + sixties(int64(tenths), 1, "") + "+" + sixties(int64(tenths%324000), 0, "")
		if got := Designation(float64(tenths)/2400, dec, ""); got != want {
			t.Fatalf("%d tenths of a second: %s, want %s", tenths, got, want)
		}
	}
}

func TestParseAngles(t *testing.T) {
	for text, want := range map[string]float64{
		"10:30:00": 157.5, "10 30 00": 157.5, " 10h30m00.0s ": 157.5, "10h30m": 157.5, "10h 30m 0s": 157.5,
		"10:30": 157.5, "157.5": 157.5, "10.5h": 157.5, "23:59:59.999999": 360 - 15e-6/3600, "24:00:00": 0, "360": 0, "0": 0,
	} {
		if got, err := ParseRA(text); err != nil || math.Abs(got-want) > 1e-12 {
			t.Errorf("right ascension %q: %v, %v; want %v", text, got, err, want)
		}
	}
	for text, want := range map[string]float64{
		"-00:30:00": -0.5, "+00 30": 0.5, "-12d30m36s": -12.51, "-12.51": -12.51, "90:00:00": 90, "5d": 5, "-0d0m36s": -0.01,
	} {
		if got, err := ParseDec(text); err != nil || math.Abs(got-want) > 1e-13 {
			t.Errorf("declination %q: %v, %v; want %v", text, got, err, want)
		}
	}
	for _, text := range []string{"", "-", "abc", "10:60:00", "10:00:60", "25:00:00", "-1:00:00", "361", "10::00", "1:2:3:4",
		"10.5:30:00", "10m30h", "1e2", "0x10", "NaN", "inf", "10:-3:00", "1.2.3", "10d30m", "+-3", ":10:20", "10:20:"} {
		if got, err := ParseRA(text); err == nil {
			t.Errorf("right ascension %q: %v; want an error", text, got)
		}
	}
	for _, text := range []string{"90:00:01", "-91", "10h30m", "--3", "1e1"} {
		if got, err := ParseDec(text); err == nil {
			t.Errorf("declination %q: %v; want an error", text, got)
		}
	}
	rng := rand.New(rand.NewPCG(1, 2))
	for range 2000 {
		ra, dec := 360*rng.Float64(), 180*rng.Float64()-90
		a, err1 := ParseRA(FormatRA(ra, 6))
		d, err2 := ParseDec(FormatDec(dec, 6))
		if err1 != nil || err2 != nil || math.Abs(Wrap180(a-ra)) > 3e-9 || math.Abs(d-dec) > 2e-10 {
			t.Fatalf("(%v, %v) comes back as (%v, %v), %v, %v", ra, dec, a, d, err1, err2)
		}
	}
	for got, want := range map[string]string{
		FormatRA(359.9999999, 2): "00:00:00.00", FormatRA(-15, 0): "23:00:00", FormatDec(-0.0001, 0): "-00:00:00",
		FormatDec(59.99999999, 1): "+60:00:00.0", FormatRA(math.NaN(), 1): "", FormatDec(math.Inf(1), 1): "",
	} {
		if got != want {
			t.Errorf("got %q, want %q", got, want)
		}
	}
}

func TestWrap(t *testing.T) {
	for _, c := range [][3]float64{{0, 0, 0}, {360, 0, 0}, {-1, 359, -1}, {725, 5, 5}, {180, 180, -180}, {-180, 180, -180},
		{-1e-17, 0, 0}, {-720, 0, 0}} {
		if a, b := Wrap360(c[0]), Wrap180(c[0]); a != c[1] || b != c[2] || math.Signbit(a) {
			t.Errorf("%g: %g and %g, want %g and %g", c[0], a, b, c[1], c[2])
		}
	}
	if !math.IsNaN(Wrap360(math.NaN())) || !math.IsNaN(Wrap180(math.Inf(1))) {
		t.Error("NaN and infinity give numbers")
	}
}
