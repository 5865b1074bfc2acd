package artefacts

import (
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/simulate"
)

// TestMeasuredPSF: bounds from a fitted PSF touch no star, and find at least
// what bounds from the width find.
func TestMeasuredPSF(t *testing.T) {
	for _, name := range []string{"undersampled", "strong_psf_variation", "dirty"} {
		s := photograph(t, name, 512, 91)
		m, err := psf.Fit(s.in.Image, s.in.Variance, s.in.Flags, s.in.Stars, s.in.Gain, psf.DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		wide := s.in
		wide.Flags = s.in.Flags.Clone()
		before := s.in.Flags.Clone()
		s.in.PSF = m
		r, err := Find(s.in, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		byWidth, err := Find(wide, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		near := dilated(s.exposure.Defects, s.exposure.Width, s.exposure.Height, 2)
		wrong, kept := 0, 0
		for k, b := range s.in.Flags.Bits {
			if b != before.Bits[k] && near[k] == 0 && b&frame.Streak == 0 {
				wrong++
			}
			if s.exposure.Defects[k]&(simulate.DefectCosmicRay|simulate.DefectHot) != 0 && b&frame.CosmicRay != 0 {
				kept++
			}
		}
		touched, all := s.touched(frame.CosmicRay | frame.BadColumn)
		t.Logf("%s: arm %.3f (by width %.3f), cross %.3f (%.3f), hits %d (%d), %d pixels wrong, %d of %d stars touched", name, r.Limits.Arm[0][0], byWidth.Limits.Arm[0][0], r.Limits.Cross, byWidth.Limits.Cross, r.HitPixels, byWidth.HitPixels, wrong, touched, all)
		if wrong > 1 || touched > 0 || all < 200 {
			t.Errorf("%s: %d pixels flagged wrongly, %d of %d stars touched", name, wrong, touched, all)
		}
		if r.HitPixels < byWidth.HitPixels*98/100 || name == "dirty" && kept < 100 {
			t.Errorf("%s: %d hit pixels, %d with bounds from the width", name, r.HitPixels, byWidth.HitPixels)
		}
	}
}
