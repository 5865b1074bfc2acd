//go:build !race

package psf

const raceDetector = false
