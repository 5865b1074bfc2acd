//go:build race

package efficiency

// The race detector makes the tests of accuracy many times slower and has
// nothing to find in them that TestSharedRepeats does not show.
const raceDetector = true
