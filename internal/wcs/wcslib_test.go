package wcs

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"nightsift/internal/outside"
)

// values is a header for tests.
type values map[string]any

func (v values) Float(key string) (float64, bool) {
	switch x := v[key].(type) {
	case float64:
		return x, true
	case int:
		return float64(x), true
	}
	return 0, false
}

func (v values) Str(key string) (string, bool) {
	s, ok := v[key].(string)
	return s, ok
}

func valuesOf(cards []Card) values {
	v := values{}
	for _, c := range cards {
		v[c.Key] = c.Value
	}
	return v
}

// reference is what testdata/reference.py writes.
type reference struct {
	Name   string
	Header values
	Size   float64
	X, Y   []float64
	Sky    [][]float64 // null where the projection has no place
}

// TestAgainstWCSLIB compares with WCSLIB: the committed places, and live ones
// of the installed version.
func TestAgainstWCSLIB(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	committed, err := os.ReadFile("testdata/reference.json")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("committed", func(t *testing.T) { compareWithReference(t, committed, 64) })
	script, err := os.ReadFile("testdata/reference.py")
	if err != nil {
		t.Fatal(err)
	}
	t.Run("live", func(t *testing.T) { compareWithReference(t, outside.Python(t, string(script), "1000"), 1000) })
}

func compareWithReference(t *testing.T, data []byte, points int) {
	var cases []reference
	if err := json.Unmarshal(data, &cases); err != nil {
		t.Fatal(err)
	}
	if len(cases) < 80 {
		t.Fatalf("%d cases, want at least 80", len(cases))
	}
	worstSky, worstPixel, compared, outsiders := 0.0, 0.0, 0, 0
	for _, c := range cases {
		w, err := FromKeywords(c.Header)
		if err != nil || w == nil {
			t.Errorf("%s: WCS %v, error %v", c.Name, w, err)
			continue
		}
		again, err := FromKeywords(valuesOf(w.Cards()))
		if err != nil || again == nil {
			t.Errorf("%s: its own cards: WCS %v, error %v", c.Name, again, err)
			continue
		}
		if len(c.Sky) != points {
			t.Errorf("%s: %d pixels, want %d", c.Name, len(c.Sky), points)
		}
		caseSky, casePixel := 0.0, 0.0
		for i, sky := range c.Sky {
			ra, dec, err := w.PixelToSky(c.X[i], c.Y[i])
			if sky == nil {
				outsiders++
				if err == nil {
					t.Errorf("%s: pixel (%g, %g) is at (%g, %g), WCSLIB has no place", c.Name, c.X[i], c.Y[i], ra, dec)
				}
				continue
			}
			compared++
			if err != nil {
				t.Errorf("%s: pixel (%g, %g): %v, WCSLIB says %v", c.Name, c.X[i], c.Y[i], err, sky)
				continue
			}
			if ra < 0 || ra >= 360 {
				t.Errorf("%s: right ascension %g", c.Name, ra)
			}
			caseSky = max(caseSky, Separation(ra, dec, sky[0], sky[1]), math.Abs(dec-sky[1]))
			ra2, dec2, err := again.PixelToSky(c.X[i], c.Y[i])
			if d := Separation(ra, dec, ra2, dec2); err != nil || d > 1e-12 {
				t.Errorf("%s: cards written and read move (%g, %g) by %g deg, error %v", c.Name, c.X[i], c.Y[i], d, err)
			}
			for _, turn := range []float64{0, 360, -360} {
				x, y, err := w.SkyToPixel(sky[0]+turn, sky[1])
				if err != nil {
					t.Errorf("%s: place %v: %v, want pixel (%g, %g)", c.Name, sky, err, c.X[i], c.Y[i])
					continue
				}
				casePixel = max(casePixel, math.Hypot(x-c.X[i], y-c.Y[i]))
			}
		}
		if caseSky > 1e-10 {
			t.Errorf("%s: %.3g deg from WCSLIB, want 1e-10", c.Name, caseSky)
		}
		if casePixel > 1e-7 {
			t.Errorf("%s: %.3g px from WCSLIB, want 1e-7", c.Name, casePixel)
		}
		worstSky, worstPixel = max(worstSky, caseSky), max(worstPixel, casePixel)
	}
	if compared < 70*points || outsiders < 5*points {
		t.Errorf("compared %d pixels and %d outside the projection, want %d and %d", compared, outsiders, 70*points, 5*points)
	}
	t.Logf("%d pixels in %d cases: at most %.2g deg and %.2g px from WCSLIB", compared, len(cases), worstSky, worstPixel)
}
