package report

import (
	"bytes"
	"encoding/base64"
	"image"
	"image/color"
	"image/png"
	"math"
	"sort"

	"nightsift/detect"
)

// stretch maps counts to 0…1.
type stretch struct{ low, high float64 }

// stretchOf takes the range from the sky's spread, so that the same source
// looks the same on new frame and reference: from three sigma below the
// median to the brightest percent, at least twelve sigma above.
func stretchOf(stamps ...[]float32) stretch {
	var v []float64
	for _, s := range stamps {
		for _, x := range s {
			if x == x && !math.IsInf(float64(x), 0) {
				v = append(v, float64(x))
			}
		}
	}
	if len(v) == 0 {
		return stretch{0, 1}
	}
	sort.Float64s(v)
	median := v[len(v)/2]
	spread := (median - v[int(0.159*float64(len(v)))])
	if !(spread > 0) {
		spread = 1
	}
	return stretch{median - 3*spread, max(median+12*spread, v[int(0.99*float64(len(v)-1))])}
}

// value maps a count through an inverse hyperbolic sine, which shows faint and
// bright together.
func (s stretch) value(x float64) float64 {
	t := (x - s.low) / (s.high - s.low)
	const knee = 3
	t = math.Asinh(knee*t) / math.Asinh(knee)
	return min(1, max(0, t))
}

// lightShade goes from deep slate to warm white.
func lightShade(t float64) color.NRGBA {
	return color.NRGBA{uint8(18 + 237*t), uint8(24 + 226*t), uint8(38 + 200*t), 255}
}

// signedShade goes from teal (light lost) over near black to amber (light
// won); t runs from -1 to 1.
func signedShade(t float64) color.NRGBA {
	if t >= 0 {
		return color.NRGBA{uint8(22 + 233*t), uint8(24 + 170*t), uint8(30 + 50*t), 255}
	}
	t = -t
	return color.NRGBA{uint8(22 + 30*t), uint8(24 + 180*t), uint8(30 + 190*t), 255}
}

// noData is the shade of pixels outside the frame.
var noData = color.NRGBA{90, 60, 80, 255}

// picture renders a square stamp, y upwards as on the sky, as a data URI.
func picture(stamp []float32, shade func(float64) color.NRGBA, level func(float64) float64) (string, error) {
	const n = detect.StampSize
	if len(stamp) != n*n {
		return "", nil
	}
	img := image.NewNRGBA(image.Rect(0, 0, n, n))
	for j := range n {
		for i := range n {
			v := float64(stamp[j*n+i])
			c := noData
			if v == v {
				c = shade(level(v))
			}
			img.SetNRGBA(i, n-1-j, c)
		}
	}
	var buffer bytes.Buffer
	if err := png.Encode(&buffer, img); err != nil {
		return "", err
	}
	return "data:image/png;base64," + base64.StdEncoding.EncodeToString(buffer.Bytes()), nil
}

// Pictures renders the three stamps of a candidate as data URIs of PNG files, y
// upwards, the new frame and the reference with one stretch. A stamp that is
// missing, or of another size than detect.StampSize, gives an empty text.
func Pictures(c *detect.Candidate) (newURI, refURI, diffURI string, err error) {
	s := stretchOf(c.StampNew, c.StampReference)
	if newURI, err = picture(c.StampNew, lightShade, s.value); err != nil {
		return
	}
	if refURI, err = picture(c.StampReference, lightShade, s.value); err != nil {
		return
	}
	d := stretchOf(c.StampDifference)
	reach := max(math.Abs(d.low), 0.6*d.high)
	diffURI, err = picture(c.StampDifference, signedShade, func(v float64) float64 {
		return min(1, max(-1, math.Asinh(3*v/reach)/math.Asinh(3)))
	})
	return
}
