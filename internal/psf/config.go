package psf

// Config says how a model is fitted. Start from DefaultConfig.
type Config struct {
	MaxStars   int     // brightest, well spread stars used
	MinStars   int     // fewer usable stars are an error
	MinSN      float64 // lowest signal to noise wanted; halved if stars are few
	FitRadius  float64 // radius of the fitted pixels [FWHM] for bright stars
	MaxRadius  int     // the same, at most [px]; also the largest Radius of a model
	ShapeOrder int     // polynomial order of the shape; -1: chosen by prediction, up to 3
	GridOrder  int     // polynomial order of the residual grid; -1: chosen, up to 2
	NoGrid     bool    // leave the residual grid out
	SkyPrior   float64 // expected error of the sky under a star [sky noise per pixel]; 0: sky is exact
}

// DefaultConfig returns what suits every frame: up to 600 stars of S/N above
// 20, pixels to 4.5 FWHM, all orders chosen by prediction.
func DefaultConfig() Config {
	return Config{
		MaxStars: 600, MinStars: 8, MinSN: 20, FitRadius: 4.5, MaxRadius: 45,
		ShapeOrder: -1, GridOrder: -1, SkyPrior: 0.05,
	}
}
