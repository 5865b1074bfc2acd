//go:build race

package realsky

// The race detector makes these tests ten times slower; one pair is enough for it
// to watch, the others are for the figures.
const raceDetector = true
