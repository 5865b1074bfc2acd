// Package picture makes pictures of planes for the eye: a stretch that shows
// the sky's noise and faint sources, scaling, orientation, PNG.
//
// Row 1 of a plane is at the bottom, x runs to the right, as on the sky a frame
// without rotation has north up and east to the left.
package picture

import (
	"fmt"
	"image"
	"image/color"
	"image/png"
	"io"
	"math"
	"slices"

	"github.com/disintegration/imaging"

	"nightsift/internal/frame"
	"nightsift/internal/wholefile"
)

const (
	sampled  = 20000 // pixels from which limits are taken
	contrast = 0.25  // flattens the slope of the sorted values
)

// Stretch returns the values to be shown black and white. The pixels of a
// sample, sorted, are mostly sky and lie on a line against their rank; a line
// fitted to the middle with what departs from it left out, made steeper by the
// contrast, gives limits that show the noise of the sky and keep faint sources
// grey, whatever a few bright stars do. Where most of the plane is no sky the
// limits are the lowest and highest of the sample. NaN is left out; a plane
// without values gives 0 and 1.
func Stretch(plane *frame.Image) (low, high float64) {
	step := max(1, len(plane.Pix)/sampled)
	if step > 1 && plane.Width%step == 0 {
		step++ // not always the same columns
	}
	var values []float64
	for p := 0; p < len(plane.Pix); p += step {
		if v := float64(plane.Pix[p]); v-v == 0 {
			values = append(values, v)
		}
	}
	n := len(values)
	if n == 0 {
		return 0, 1
	}
	slices.Sort(values)
	lowest, highest, median := values[0], values[n-1], values[n/2]
	if lowest == highest {
		return lowest - 0.5, highest + 0.5
	}
	slope, kept := line(values)
	if 2*kept < n || !(slope > 0) {
		return lowest, highest
	}
	slope /= contrast
	low = math.Max(lowest, median-slope*float64(n/2))
	high = math.Min(highest, median+slope*float64(n-n/2))
	if !(high > low) {
		return lowest, highest
	}
	return low, high
}

// line fits sorted values against their rank, and leaves out what lies more
// than 2.5 standard deviations away, until nothing more goes.
func line(values []float64) (slope float64, kept int) {
	n := len(values)
	use := make([]bool, n)
	for k := range use {
		use[k] = true
	}
	kept = n
	for range 10 {
		var s, sx, sy, sxx, sxy float64
		for k, v := range values {
			if use[k] {
				x := float64(k) - float64(n)/2
				s, sx, sy, sxx, sxy = s+1, sx+x, sy+v, sxx+x*x, sxy+x*v
			}
		}
		det := s*sxx - sx*sx
		if !(det > 0) {
			return 0, 0
		}
		slope = (s*sxy - sx*sy) / det
		zero := (sy - slope*sx) / s
		square := 0.0
		residual := func(k int) float64 { return values[k] - zero - slope*(float64(k)-float64(n)/2) }
		for k := range values {
			if use[k] {
				square += residual(k) * residual(k)
			}
		}
		limit := 2.5 * math.Sqrt(square/s)
		before := kept
		kept = 0
		for k := range values {
			if use[k] = use[k] && math.Abs(residual(k)) <= limit; use[k] {
				kept++
			}
		}
		if kept == before || kept < max(5, n/2) {
			break
		}
	}
	return slope, kept
}

// noData is the grey of a pixel without a value.
const noData = 0

// Grey paints a plane: low and below is dark, high and above white, in between
// even steps. A pixel without a value is black.
func Grey(plane *frame.Image, low, high float64) *image.Gray {
	img := image.NewGray(image.Rect(0, 0, plane.Width, plane.Height))
	scale := 254 / (high - low)
	for j := range plane.Height {
		row := img.Pix[(plane.Height-1-j)*img.Stride:][:plane.Width]
		for i, v := range plane.Row(j) {
			g := 1 + (float64(v)-low)*scale
			switch {
			case g != g:
				row[i] = noData
			case g < 1:
				row[i] = 1
			case g > 255:
				row[i] = 255
			default:
				row[i] = uint8(g + 0.5)
			}
		}
	}
	return img
}

// shrink averages blocks of pixels, so that neither side is longer than twice
// most. The mean is over the pixels that have a value. The plane itself is
// returned when it is small enough. factor is the side of a block.
func shrink(plane *frame.Image, most int) (small *frame.Image, factor int) {
	factor = max(1, max(plane.Width, plane.Height)/max(most, 1))
	if factor == 1 {
		return plane, 1
	}
	width, height := (plane.Width+factor-1)/factor, (plane.Height+factor-1)/factor
	small = frame.NewImage(width, height)
	sum, count := make([]float64, width), make([]int, width)
	for j := range height {
		clear(sum)
		clear(count)
		for k := j * factor; k < min((j+1)*factor, plane.Height); k++ {
			for i, v := range plane.Row(k) {
				if v == v {
					sum[i/factor] += float64(v)
					count[i/factor]++
				}
			}
		}
		row := small.Row(j)
		for i := range row {
			row[i] = float32(sum[i] / float64(count[i])) // NaN where there is none
		}
	}
	return small, factor
}

// Fit makes a picture smaller, so that neither side is longer than most. A
// picture that is small enough is returned as it is.
func Fit(img image.Image, most int) image.Image {
	return imaging.Fit(img, most, most, imaging.Box)
}

// NorthUp turns a picture made by Grey so that north is up and east to the
// left. positionAngle [deg] is that of the plane's +y axis, from north through
// east, and parity -1 for a mirrored plane, as the Orientation of a wcs.WCS gives
// them. The picture grows to hold the turned frame; new corners are black.
func NorthUp(img image.Image, positionAngle float64, parity int) *image.NRGBA {
	if parity < 0 {
		img = imaging.FlipH(img)
	}
	return imaging.Rotate(img, positionAngle, color.Black)
}

// Encode writes a picture as PNG.
func Encode(w io.Writer, img image.Image) error {
	e := png.Encoder{CompressionLevel: png.DefaultCompression}
	return e.Encode(w, img)
}

// WriteFrame writes a frame as a PNG file with no side longer than most, whole
// or not at all. It returns how many pixels of the frame one of the picture is
// wide, and the values shown black and white.
func WriteFrame(path string, plane *frame.Image, most int) (scale, low, high float64, err error) {
	if plane.Width < 1 || plane.Height < 1 {
		return 0, 0, 0, fmt.Errorf("%s: no picture of a frame of %d × %d pixels", path, plane.Width, plane.Height)
	}
	small, _ := shrink(plane, most)
	low, high = Stretch(small)
	img := Fit(Grey(small, low, high), most)
	scale = float64(plane.Width) / float64(img.Bounds().Dx())
	err = wholefile.Write(path, func(w io.Writer) error { return Encode(w, img) })
	return scale, low, high, err
}
