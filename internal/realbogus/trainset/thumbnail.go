package trainset

import (
	"math"

	"nightsift/detect"
	"nightsift/subtract"
)

// ThumbnailSize is the side of a thumbnail [px].
const ThumbnailSize = 25

// Thumbnail returns the middle of a candidate's three stamps, new, reference
// and difference one after the other, in grey levels: 64 is zero, and the
// inverse hyperbolic sine of the value in units of the noise there is scaled so
// that 300 times the noise is white. It is nil without stamps.
func Thumbnail(c *detect.Candidate, d *subtract.Difference) []byte {
	if c.StampDifference == nil || c.StampNew == nil || c.StampReference == nil {
		return nil
	}
	noise := d.Info.SkyNoise
	if !(noise > 0) || math.IsInf(noise, 0) {
		noise = 1
	}
	const skip = (detect.StampSize - ThumbnailSize) / 2
	out := make([]byte, 0, 3*ThumbnailSize*ThumbnailSize)
	for _, plane := range [][]float32{c.StampNew, c.StampReference, c.StampDifference} {
		for j := range ThumbnailSize {
			for i := range ThumbnailSize {
				v := float64(plane[(j+skip)*detect.StampSize+i+skip])
				g := 64.0
				if !math.IsNaN(v) {
					g += math.Asinh(v/noise) / math.Asinh(300) * 191
				}
				out = append(out, byte(math.Max(0, math.Min(255, math.Round(g)))))
			}
		}
	}
	return out
}
