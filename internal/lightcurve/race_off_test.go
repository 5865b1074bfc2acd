//go:build !race

package lightcurve

const raceDetector = false
