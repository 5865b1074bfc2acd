//go:build race

package psf

// The race detector makes the accuracy tests ten times slower and has nothing
// to find in them that TestFitRepeats does not show.
const raceDetector = true
