package align

import (
	"math"
	"testing"

	"nightsift/internal/wcs"
)

// TestDistorted: the form of the world coordinates changes, the places do not.
func TestDistorted(t *testing.T) {
	var x, y, ra, dec []float64
	for j := range 20 {
		for i := range 20 {
			px, py := 1+50*float64(i), 1+50*float64(j)
			x, y = append(x, px), append(y, py)
			ra, dec = append(ra, 150-1e-4*px+1e-9*px*py), append(dec, 2+1e-4*py+2e-9*px*px)
		}
	}
	w, _, err := wcs.FitTANSIP(x, y, ra, dec, nil, 1000, 1000, 3)
	if err != nil {
		t.Fatal(err)
	}
	cfg := DefaultConfig()
	for form, projection := range map[string]string{DistortionSIP: "TAN", DistortionTPV: "TPV"} {
		cfg.Distortion = form
		got, err := cfg.distorted(w)
		if err != nil || got.Projection() != projection || (form == DistortionSIP) != (got.SIPOrder() == 3) {
			t.Fatalf("%s: projection %s with SIP of order %d, error %v", form, got.Projection(), got.SIPOrder(), err)
		}
		for i := range x {
			r, d, err := got.PixelToSky(x[i], y[i])
			want, wantDec, _ := w.PixelToSky(x[i], y[i])
			if err != nil || math.Abs(r-want) > 1e-12 || math.Abs(d-wantDec) > 1e-12 {
				t.Errorf("%s: pixel (%g, %g) is at (%v, %v), %v; want (%v, %v)", form, x[i], y[i], r, d, err, want, wantDec)
			}
		}
	}
}
