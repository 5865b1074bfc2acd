package stars

import "nightsift/internal/frame"

type spline struct{}

// EstimateBackground measures sky and white noise of an image. NaN, infinite
// pixels and pixels with a bit of frame.Unusable are ignored; mask may be nil.
// A frame without usable or without varying pixels gives a *frame.Problem
// (no_data).
func EstimateBackground(img *frame.Image, mask *frame.Mask, cfg BackgroundConfig) (*Background, error) {
	panic("stars: being written")
}

// BackgroundFromMesh rebuilds a background from what was stored of it: the
// frame's width and height [px], the mesh's, and the two mesh planes in row
// order [count]. The slices are kept.
func BackgroundFromMesh(width, height, nx, ny int, sky, noise []float32) (*Background, error) {
	panic("stars: being written")
}

// SkyRow writes the sky [count] of row j (0-based) into dst, Width long.
func (b *Background) SkyRow(dst []float32, j int) { panic("stars: being written") }

// NoiseRow writes the white noise [count] of row j (0-based) into dst.
func (b *Background) NoiseRow(dst []float32, j int) { panic("stars: being written") }

// Sky returns the sky [count] at FITS pixel position (x,y).
func (b *Background) Sky(x, y float64) float64 { panic("stars: being written") }

// Noise returns the white noise [count] of a pixel at FITS position (x,y).
func (b *Background) Noise(x, y float64) float64 { panic("stars: being written") }

// Subtract writes img minus sky into dst, which may be img or nil (a new plane
// is made), and returns it.
func (b *Background) Subtract(dst, img *frame.Image) *frame.Image { panic("stars: being written") }

// EstimateVariance fills f.Variance with the variance [count²] of the empty
// sky in each pixel; the photon noise of sources is not in it.
func EstimateVariance(f *frame.Frame, bg *Background) (*VarianceReport, error) {
	panic("stars: being written")
}

// Find lists the stars of a sky-subtracted image [count]. mask may be nil; gain
// is in electron per count, NaN if unknown (then source noise is left out).
func Find(img *frame.Image, bg *Background, mask *frame.Mask, gain float64, cfg FindConfig) (*List, error) {
	panic("stars: being written")
}
