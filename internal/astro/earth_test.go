package astro

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"nightsift/internal/outside"
)

// TestEarthAgainstERFA compares the Earth's place and velocity, places of
// sites and sidereal times with ERFA's: committed ones, and those of the
// installed version.
func TestEarthAgainstERFA(t *testing.T) {
	committed, err := os.ReadFile("testdata/earth.json")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("committed", func(t *testing.T) { compareEarth(t, committed) })
	script, err := os.ReadFile("testdata/earth.py")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("live", func(t *testing.T) { compareEarth(t, outside.Python(t, string(script))) })
}

func compareEarth(t *testing.T, data []byte) {
	var r struct {
		Earth []struct {
			MJD  float64
			P, V [3]float64
		}
		Sites []struct {
			MJD, Lon, Lat, Height float64
			P, Fixed              [3]float64
			GMST, GAST            float64
		}
	}
	if err := json.Unmarshal(data, &r); err != nil {
		t.Fatal(err)
	}
	if len(r.Earth) < 300 || len(r.Sites) < 200 {
		t.Fatalf("%d places of the Earth and %d sites, want 300 and 200", len(r.Earth), len(r.Sites))
	}
	place, velocity := 0.0, 0.0
	for _, c := range r.Earth {
		place = max(place, distance(EarthHeliocentric(c.MJD), c.P))
		velocity = max(velocity, distance(earthVelocity(c.MJD), c.V))
	}
	if place > 7e-7 {
		t.Errorf("Earth: %.3g au from ERFA, want 7e-7", place)
	}
	if velocity > 1e-7 {
		t.Errorf("Earth: %.3g au/d from ERFA, want 1e-7", velocity)
	}
	site, fixed, mean, apparent := 0.0, 0.0, 0.0, 0.0
	for _, c := range r.Sites {
		s := Site{c.Lon, c.Lat, c.Height}
		site = max(site, distance(SiteGeocentric(s, c.MJD), c.P))
		x, y, z := s.fixed()
		fixed = max(fixed, distance([3]float64{x, y, z}, c.Fixed))
		mean = max(mean, math.Abs(Wrap180(GreenwichMeanSidereal(c.MJD)-c.GMST)))
		apparent = max(apparent, math.Abs(Wrap180(GreenwichApparentSidereal(c.MJD)-c.GAST)))
	}
	if site > 1e-11 {
		t.Errorf("site: %.3g au from ERFA, want 1e-11", site)
	}
	if fixed > 1e-8 {
		t.Errorf("site on axes of the Earth: %.3g m from ERFA, want 1e-8", fixed)
	}
	if mean*240 > 1e-5 || apparent*240 > 0.003 {
		t.Errorf("sidereal time: mean %.3g s and apparent %.3g s from ERFA, want 1e-5 and 0.003", mean*240, apparent*240)
	}
	t.Logf("from ERFA: Earth %.2g au, %.2g au/d; site %.2g au; sidereal time %.2g s, %.2g s",
		place, velocity, site, mean*240, apparent*240)
}

func distance(a, b [3]float64) float64 {
	return math.Sqrt((a[0]-b[0])*(a[0]-b[0]) + (a[1]-b[1])*(a[1]-b[1]) + (a[2]-b[2])*(a[2]-b[2]))
}
