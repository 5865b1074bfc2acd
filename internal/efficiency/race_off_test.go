//go:build !race

package efficiency

const raceDetector = false
