//go:build race

package noise

// raceEnabled leaves out the large frames, which the race detector makes slow.
const raceEnabled = true
