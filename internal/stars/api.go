package stars

import "nightsift/internal/frame"

// Find lists the stars of a sky-subtracted image [count]. mask may be nil; gain
// is in electron per count, NaN if unknown (then source noise is left out).
func Find(img *frame.Image, bg *Background, mask *frame.Mask, gain float64, cfg FindConfig) (*List, error) {
	panic("stars: being written")
}
