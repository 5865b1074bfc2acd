package efficiency

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/stat/distuv"

	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/subtract"
)

// lightOf draws a source of a flux [count] at a FITS position as a detector of a
// gain [electron per count] would see it: the point-spread function of the place,
// shifted by parts of a pixel, with Poisson noise in every pixel. With an unknown
// gain, +Inf, there is no noise.
func lightOf(model *psf.Model, gain, flux, x, y float64, random *rand.Rand) subtract.Light {
	l := subtract.Light{X: int(math.Round(x)), Y: int(math.Round(y)), Radius: model.Radius()}
	size := 2*l.Radius + 1
	l.Counts = make([]float32, size*size)
	model.Render(l.Counts, x, y, x-float64(l.X), y-float64(l.Y))
	for i, p := range l.Counts {
		mean := flux * float64(p)
		if electrons := mean * gain; electrons > 0 && !math.IsInf(electrons, 0) {
			mean = distuv.Poisson{Lambda: electrons, Src: random}.Rand() / gain
		}
		l.Counts[i] = float32(mean)
	}
	return l
}

// addTo adds light to the counts of a frame and flags what reaches saturation
// [count; NaN for unknown], as reading such a frame from a file would.
func addTo(f *frame.Frame, l subtract.Light) {
	size := 2*l.Radius + 1
	for v := range size {
		y := l.Y - 1 - l.Radius + v
		if y < 0 || y >= f.Image.Height {
			continue
		}
		row, flags := f.Image.Row(y), f.Flags.Row(y)
		for u := range size {
			x := l.X - 1 - l.Radius + u
			if x < 0 || x >= f.Image.Width {
				continue
			}
			row[x] += l.Counts[v*size+u]
			if s := f.Meta.Saturation; s > 0 && float64(row[x]) >= s {
				flags[x] |= frame.Saturated
			}
		}
	}
}
