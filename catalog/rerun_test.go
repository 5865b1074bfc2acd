package catalog

import (
	"math/rand/v2"
	"testing"
)

// A thousand reruns of the same nights, each in another order, on a catalogue
// that is never emptied: the objects stay as they are, and none is doubled.
func TestThousandReruns(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	s := newStore(t)
	frames := pairs(9, 3, [2]float64{0, 0}, [2]float64{0.9, 0}, [2]float64{4, 3}) // two of them on the verge of one
	addAll(t, s, frames)
	want := state(t, s)
	r := rand.New(rand.NewPCG(1000, 1))
	for k := range 1000 {
		for _, i := range r.Perm(len(frames)) {
			addAll(t, s, frames[i:i+1])
		}
		if k%100 == 99 {
			if got := state(t, s); got != want {
				t.Fatalf("rerun %d: %s", k+1, difference(want, got))
			}
		}
	}
	healthy(t, s)
}
