package astro

import (
	"encoding/json"
	"math"
	"os"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// TestTimesAgainstAstropy compares conversions between time scales with
// astropy's and altitudes with ERFA's: committed ones, and those of the installed
// version.
func TestTimesAgainstAstropy(t *testing.T) {
	committed, err := os.ReadFile("testdata/times.json")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("committed", func(t *testing.T) { compareTimes(t, committed) })
	script, err := os.ReadFile("testdata/times.py")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("live", func(t *testing.T) { compareTimes(t, outside.Python(t, string(script))) })
}

func compareTimes(t *testing.T, data []byte) {
	var r struct {
		Times []struct {
			ISO     map[string]string
			Day     string
			Seconds float64
		}
		Offsets []struct{ MJD, Offset float64 }
		Sky     []struct{ MJD, Lon, Lat, Height, RA, Dec, Alt, Az float64 }
	}
	if err := json.Unmarshal(data, &r); err != nil {
		t.Fatal(err)
	}
	if len(r.Times) < 400 || len(r.Offsets) < 200 || len(r.Sky) < 400 {
		t.Fatalf("%d times, %d offsets, %d places of the sky: want 400, 200, 400", len(r.Times), len(r.Offsets), len(r.Sky))
	}
	worst := map[TimeScale]float64{}
	compared := 0
	for _, c := range r.Times {
		day, err := ParseDate(c.Day)
		if err != nil {
			t.Fatal(err)
		}
		// Within a leap second: the next day's first instant.
		want := day + min(c.Seconds, secondsPerDay)/secondsPerDay
		for name, iso := range c.ISO {
			scale, err := ParseTimeScale(name)
			if err != nil {
				t.Fatal(err)
			}
			mjd, err := ParseDate(iso)
			if err != nil {
				t.Errorf("%s: %v", iso, err)
				continue
			}
			d := math.Abs(ToUTC(mjd, scale)-want) * secondsPerDay
			worst[scale] = max(worst[scale], d)
			compared++
			if d > 1e-4 {
				t.Errorf("%s %s: %.3g s from astropy's UTC, %s + %g s", iso, scale, d, c.Day, c.Seconds)
			}
		}
	}
	if compared < 2400 {
		t.Errorf("compared %d times, want 2400", compared)
	}
	for _, c := range r.Offsets {
		if d := math.Abs(TAIMinusUTC(c.MJD) - c.Offset); d > 1e-9 {
			t.Errorf("MJD %g: TAI - UTC differs by %g s from ERFA", c.MJD, d)
		}
	}
	sky := 0.0
	for _, c := range r.Sky {
		alt, az := AltAz(Site{c.Lon, c.Lat, c.Height}, c.MJD, c.RA, c.Dec)
		if az < 0 || az >= 360 {
			t.Errorf("azimuth %g", az)
		}
		sky = max(sky, Separation(az, alt, c.Az, c.Alt)*3600)
	}
	if sky > 1 {
		t.Errorf("altitude and azimuth: %.3g arcsec from ERFA, want 1", sky)
	}
	t.Logf("seconds from astropy's UTC: %v; altitude and azimuth %.2g arcsec from ERFA", worst, sky)
}

func TestParseTimeScale(t *testing.T) {
	for text, want := range map[string]TimeScale{
		"": UTC, " utc ": UTC, "UTC(NIST)": UTC, "GMT": UTC, "UT": UTC, "UT1": UT1, "IAT": TAI, "tt(TAI)": TT, "TDT": TT, "ET": TT,
		"TDB": TDB, "TCG": TCG, "TCB": TCB, "GPS": GPS,
	} {
		if got, err := ParseTimeScale(text); err != nil || got != want {
			t.Errorf("%q: %q, %v; want %q", text, got, err, want)
		}
	}
	for _, text := range []string{"LOCAL", "MST", "UTC+3", "TAI TT"} {
		if got, err := ParseTimeScale(text); err == nil || !strings.Contains(err.Error(), text) {
			t.Errorf("%q: %q, %v; want an error that names it", text, got, err)
		}
	}
}

// TestTimesOutsideTables: no date makes a jump or a panic.
func TestTimesOutsideTables(t *testing.T) {
	for _, scale := range []TimeScale{UTC, UT1, TAI, GPS, TT, TDB, TCG, TCB} {
		for _, mjd := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
			if v := ToUTC(mjd, scale); !math.IsNaN(v) && !math.IsInf(v, 0) {
				t.Errorf("%v %s: %v", mjd, scale, v)
			}
		}
		last := ToUTC(-678575, scale)
		for mjd := -678575 + 0.37; mjd < 2973484; mjd += 91.37 {
			v := ToUTC(mjd, scale)
			if v <= last || math.Abs(v-mjd) > 0.6 {
				t.Fatalf("%s %g is UTC %g, after %g", scale, mjd, v, last)
			}
			last = v
		}
	}
	for _, c := range []struct{ mjd, tt float64 }{{57753.999, 68.184}, {57754, 69.184}, {36934, 33.127482}, {0, 33.127482}} {
		if got := (UTCToTT(c.mjd) - c.mjd) * secondsPerDay; math.Abs(got-c.tt) > 1e-5 {
			t.Errorf("MJD %g: TT - UTC = %g s, want %g", c.mjd, got, c.tt)
		}
	}
	if got := MJDOfJD(2451545); got != 51544.5 {
		t.Errorf("JD 2451545 is MJD %g", got)
	}
}
