package wcs

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"testing"

	"nightsift/internal/outside"
)

// TestSystemsAgainstAstropy compares the systems of positions with astropy,
// which precesses FK5 by IAU 2006, has the FK4 by other published constants and
// ties galactic coordinates to the FK5.
// ERFA, whose constants are ours, is the witness of TestAgainstWCSLIB.
func TestSystemsAgainstAstropy(t *testing.T) {
	script, err := os.ReadFile("testdata/systems.py")
	if err != nil {
		t.Fatal(err)
	}
	var places []struct {
		System            string
		Equinox, MJD      *float64
		Lon, Lat, RA, Dec float64
	}
	if err := json.Unmarshal(outside.Python(t, string(script)), &places); err != nil {
		t.Fatal(err)
	}
	if len(places) < 600 {
		t.Fatalf("%d places, want 600", len(places))
	}
	limit := map[string]float64{ // arcsec
		"FK5 2000": 1e-5, "FK5 1975": 0.08, "FK5 2030": 0.1, "GALACTIC": 0.03,
		"FK4 1950": 0.005, "FK4-NO-E 1950": 0.005, "FK4 1900": 0.02, "FK4-NO-E 1900": 0.02, "FK4 1875": 0.03, "FK4-NO-E 1875": 0.03,
	}
	worst := map[string]float64{}
	for _, p := range places {
		v := simple(values{"CRVAL1": p.Lon, "CRVAL2": p.Lat, "RADESYS": p.System})
		name := p.System
		if name == "GALACTIC" {
			delete(v, "RADESYS")
			v["CTYPE1"], v["CTYPE2"] = "GLON-TAN", "GLAT-TAN"
		} else {
			v["EQUINOX"] = *p.Equinox
			name += fmt.Sprintf(" %g", *p.Equinox)
		}
		if p.MJD != nil {
			v["MJD-OBS"] = *p.MJD
		}
		w := mustRead(t, v)
		ra, dec, err := w.PixelToSky(512.5, 400)
		if err != nil {
			t.Fatal(err)
		}
		worst[name] = max(worst[name], Separation(ra, dec, p.RA, p.Dec)*3600)
		x, y, err := w.SkyToPixel(ra, dec)
		if err != nil || math.Hypot(x-512.5, y-400) > 1e-8 {
			t.Errorf("%s: pixel (512.5, 400) comes back as (%g, %g), %v", name, x, y, err)
		}
	}
	for name, d := range worst {
		if !(d < limit[name]) {
			t.Errorf("%s: %.3g arcsec from astropy, want %g", name, d, limit[name])
		}
	}
	t.Logf("arcsec from astropy: %v", worst)
}
