package reference

import (
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
)

// measureNoise returns the scatter [count] of fluxes fitted with a point-spread
// function at places without a star: the noise of the faintest sources as it
// is, whatever the correlation between pixels. It is NaN where hardly any such
// place is left.
//
// img is without sky. render draws the function; fwhm [px] is its width.
func measureNoise(img *frame.Image, flags *frame.Mask, list []stars.Star, render func(dst []float32, x, y, dx, dy float64), fwhm float64) float64 {
	h := max(3, int(math.Ceil(2*fwhm)))
	size := 2*h + 1
	const most = 20000
	step := max(3, int(math.Ceil(1.2*fwhm)))
	for (img.Width/step)*(img.Height/step) > 4*most {
		step++
	}
	// Places near a star, the farther the brighter.
	near := make([]bool, img.Width*img.Height)
	for i := range list {
		s := &list[i]
		r := float64(h) + fwhm*math.Max(0, math.Min(8, 0.5+math.Log10(math.Max(s.SN, 1)/5)*1.5))
		x0, x1 := max(int(s.X-r), 0), min(int(s.X+r), img.Width-1)
		y0, y1 := max(int(s.Y-r), 0), min(int(s.Y+r), img.Height-1)
		for y := y0; y <= y1; y++ {
			for x := x0; x <= x1; x++ {
				near[y*img.Width+x] = true
			}
		}
	}
	stamp := make([]float32, size*size)
	var fluxes []float64
	for y := h; y < img.Height-h; y += step {
	next:
		for x := h; x < img.Width-h; x += step {
			if near[y*img.Width+x] {
				continue
			}
			for j := -h; j <= h; j++ {
				for _, b := range flags.Row(y + j)[x-h : x+h+1] {
					if b&frame.Unusable != 0 {
						continue next
					}
				}
			}
			render(stamp, float64(x+1), float64(y+1), 0, 0)
			var top, bottom float64
			for j := -h; j <= h; j++ {
				row := img.Row(y + j)[x-h:]
				for i, q := range stamp[(j+h)*size : (j+h+1)*size] {
					top += float64(q) * float64(row[i])
					bottom += float64(q) * float64(q)
				}
			}
			fluxes = append(fluxes, top/bottom)
		}
	}
	if len(fluxes) < 30 {
		return math.NaN()
	}
	_, sigma := robust.MedianMAD(fluxes)
	return sigma
}
