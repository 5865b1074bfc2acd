package wcs

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// parseKeywordSet reads lines of a keyword and its value: a number, else text.
func parseKeywordSet(s string) values {
	v := values{}
	for n, line := range strings.Split(s, "\n") {
		if n == 200 {
			break
		}
		key, text, _ := strings.Cut(line, " ")
		if x, err := strconv.ParseFloat(text, 64); err == nil {
			v[key] = x
		} else {
			v[key] = text
		}
	}
	return v
}

// FuzzKeywordSet: no header makes the reader panic or a transform hang; what it
// accepts makes cards that it accepts again, and closes where it claims a place.
func FuzzKeywordSet(f *testing.F) {
	data, err := os.ReadFile("testdata/reference.json")
	if err != nil {
		f.Fatal(err)
	}
	var cases []struct{ Header values }
	if err := json.Unmarshal(data, &cases); err != nil {
		f.Fatal(err)
	}
	for _, c := range cases {
		var lines []string
		for k, x := range c.Header {
			lines = append(lines, fmt.Sprintf("%s %v", k, x))
		}
		slices.Sort(lines)
		f.Add(strings.Join(lines, "\n"), 300.0, 1700.0)
	}
	for _, set := range []string{
		"CTYPE1 RA---ARC\nCTYPE2 DEC--ARC\nCRVAL1 NaN\nCRVAL2 2\nCDELT1 Inf\nCDELT2 0.1\nLONPOLE 1e300",
		"CTYPE1 DEC--TPV\nCTYPE2 RA---TPV\nCRVAL1 1\nCRVAL2 90\nCD1_1 1e-3\nCD2_2 1e-3\nPV1_7 0.1\nPV2_39 -0.1",
		"CTYPE1 GLON-ZEA\nCTYPE2 GLAT-ZEA\nCRVAL1 1\nCRVAL2 -90\nCDELT1 0.1\nCDELT2 0.1\nPC1_1 1\nPC1_2 1\nPC2_1 1\nPC2_2 1",
		"CTYPE1 RA---TAN-SIP\nCTYPE2 DEC--TAN-SIP\nCRVAL1 10\nCRVAL2 20\nCD1_1 1e-4\nCD2_2 1e-4\nA_ORDER 1e9\nB_ORDER -2\nA_2_0 1e300\nAP_ORDER 2.5",
		"CTYPE1 RA---SIN\nCTYPE2 DEC--SIN\nCRVAL1 1\nCRVAL2 2\nCDELT1 0.1\nCDELT2 0.1\nCROTA2 70\nRADESYS FK4\nEQUINOX 1e7",
	} {
		f.Add(set, 50.0, -1e4)
	}
	f.Fuzz(func(t *testing.T, set string, x, y float64) {
		v := parseKeywordSet(set)
		w, err := FromKeywords(v)
		if w == nil {
			return
		}
		if err != nil {
			t.Fatalf("both a WCS and the error %v", err)
		}
		checkWCS(t, w, [][2]float64{{x, y}, {1, 1}, {500, 2000}, {-1e4, 3e5}})
	})
}

// checkWCS holds what every WCS must keep, however odd its header.
func checkWCS(t *testing.T, w *WCS, pixels [][2]float64) {
	t.Helper()
	w.PixelScale()
	_, _, _ = w.Orientation(3, 4)
	again, err := FromKeywords(valuesOf(w.Cards()))
	if err != nil || again == nil {
		t.Fatalf("own cards are refused: %v", err)
	}
	if p, err := w.AsTPV(); err == nil {
		if q, err := FromKeywords(valuesOf(p.Cards())); err != nil || q == nil {
			t.Fatalf("own cards as TPV are refused: %v", err)
		}
	}
	for _, pixel := range pixels {
		ra, dec, err := w.PixelToSky(pixel[0], pixel[1])
		if err != nil {
			continue
		}
		if !(ra >= 0 && ra < 360 && math.Abs(dec) <= 90) {
			t.Fatalf("pixel %v is at (%g, %g)", pixel, ra, dec)
		}
		x, y, err := w.SkyToPixel(ra, dec)
		if err != nil {
			continue
		}
		// The pixel it finds may be another one of the same place, but must
		// lie at that place.
		ra2, dec2, err := w.PixelToSky(x, y)
		if d := Separation(ra, dec, ra2, dec2); err == nil && d > 1e-6+1e-6*w.PixelScale()/3600 {
			t.Fatalf("place (%v, %v) goes to pixel (%g, %g) at (%v, %v)", ra, dec, x, y, ra2, dec2)
		}
	}
}
