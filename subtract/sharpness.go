package subtract

import (
	"fmt"
	"math"
)

// widths gives the second moments of a point-spread function at a FITS
// position [px²], as those of the Gaussian of the same width at half maximum.
type widths func(x, y float64) (xx, yy, xy float64)

// direction says which frames must be convolved to meet at a common
// point-spread function.
type direction struct {
	name   string // "reference" or "both"
	reason string
	blur   blur // applied to the new frame; zero for none
}

// The matching kernel is narrower than a pixel when the new frame is hardly
// broader than the reference. It can still be represented then, but once the
// new frame is the sharper one along some axis by more than sharperTolerance
// of the reference's variance, a kernel would have to sharpen, and sharpening
// multiplies noise and rings. The new frame is then blurred first until it is
// broader by matchMargin px² in every direction.
const (
	sharperTolerance = 0.06
	matchMargin      = 0.35 // px²
	leastBlur        = 0.30 // px², narrowest blur that pixels can carry
)

// chooseDirection compares the two PSFs in every direction at places over the
// frame. Their covariances add under convolution, so the new frame can be
// reached by convolving the reference where the difference of the covariances
// has no negative eigenvalue.
func chooseDirection(newPSF, refPSF widths, width, height int) direction {
	const places = 5
	worst := math.Inf(1) // smallest eigenvalue over the reference's own width
	var at [2]float64
	var worstAngle float64
	// The blur must serve all places: collect the matrix that each place asks
	// for and take, in the mean orientation, the largest need along each axis.
	type deficit struct{ xx, yy, xy float64 }
	var deficits []deficit
	for j := range places {
		for i := range places {
			x := 1 + (float64(i)+0.5)/places*float64(width)
			y := 1 + (float64(j)+0.5)/places*float64(height)
			nxx, nyy, nxy := newPSF(x, y)
			rxx, ryy, rxy := refPSF(x, y)
			d := deficit{nxx - rxx, nyy - ryy, nxy - rxy}
			deficits = append(deficits, d)
			_, low, angle := eigen(d.xx, d.yy, d.xy)
			relative := low / (0.5 * (rxx + ryy))
			if relative < worst {
				worst, at, worstAngle = relative, [2]float64{x, y}, angle+90
			}
		}
	}
	if worst >= -sharperTolerance {
		return direction{name: "reference", reason: fmt.Sprintf(
			"the reference is at least as sharp in every direction: along the closest one the new frame's variance exceeds it by %+.0f %% of its own", 100*worst)}
	}
	// Orientation of the mean deficit.
	var mean deficit
	for _, d := range deficits {
		mean.xx += d.xx
		mean.yy += d.yy
		mean.xy += d.xy
	}
	_, _, angle := eigen(mean.xx, mean.yy, mean.xy)
	s, c := math.Sincos(angle * math.Pi / 180)
	major, minor := leastBlur, leastBlur
	for _, d := range deficits {
		along := d.xx*c*c + d.yy*s*s + 2*d.xy*s*c
		across := d.xx*s*s + d.yy*c*c - 2*d.xy*s*c
		major = max(major, matchMargin-along)
		minor = max(minor, matchMargin-across)
	}
	b := blur{
		xx: major*c*c + minor*s*s,
		yy: major*s*s + minor*c*c,
		xy: (major - minor) * s * c,
	}
	return direction{name: "both", blur: b, reason: fmt.Sprintf(
		"the new frame is the sharper one at x=%.0f y=%.0f along %.0f deg, its variance is lower by %.0f %% of the reference's; it was blurred by a Gaussian of %.2f × %.2f px first",
		at[0], at[1], math.Mod(worstAngle+180, 180), -100*worst, math.Sqrt(major), math.Sqrt(minor))}
}

// eigen returns the eigenvalues of a symmetric 2×2 matrix, larger first, and
// the angle of the larger one's axis from x [deg].
func eigen(xx, yy, xy float64) (high, low, angle float64) {
	mean := 0.5 * (xx + yy)
	r := math.Hypot(0.5*(xx-yy), xy)
	return mean + r, mean - r, 0.5 * math.Atan2(2*xy, xx-yy) * 180 / math.Pi
}
