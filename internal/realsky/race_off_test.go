//go:build !race

package realsky

const raceDetector = false
