package trainset

import (
	"context"
	"math"
	"testing"

	"nightsift/detect"
	"nightsift/internal/realbogus"
	"nightsift/internal/simulate"
)

// Labels: the event itself is real, the wrong sign and what is merely near are
// ambiguous, what stands alone is bogus.
func TestLabel(t *testing.T) {
	truth := []simulate.Source{{X: 100, Y: 100, Flux: 500, LocalSN: 12}, {X: 300, Y: 100, Flux: 500, LocalSN: 1}}
	for _, c := range []struct {
		x, y, s      float64
		real, weight bool
	}{
		{100.2, 99.9, 11, true, true},
		{100.2, 99.9, -11, false, false},
		{104, 100, 6, false, false},
		{150, 100, 6, false, true},
		{300, 100, 9, false, false}, // far too bright for that event
	} {
		k := detect.Candidate{X: c.x, Y: c.y, XErr: 0.1, YErr: 0.1, Significance: c.s, Features: make([]float64, realbogus.Count)}
		e := label(&k, truth, 3, "g")
		if e.Real != c.real || (e.Weight > 0) != c.weight {
			t.Errorf("(%g,%g) of %g sigma: real %t, weight %g", c.x, c.y, c.s, e.Real, e.Weight)
		}
	}
	k := detect.Candidate{X: 100, Y: 100, XErr: math.NaN(), YErr: math.NaN(), Significance: 10}
	if e := label(&k, truth, 3, "g"); !e.Real {
		t.Error("a candidate without position error at the event's place is not real")
	}
}

// A small frame through the whole pipeline gives real examples with features.
func TestCollect(t *testing.T) {
	cfg := DefaultConfig()
	cfg.Scenarios, cfg.Size, cfg.Frames, cfg.Worn = []string{"gaussian"}, 420, 1, 0
	examples, s, err := Collect(context.Background(), cfg, nil)
	if err != nil {
		t.Fatal(err)
	}
	t.Log(s)
	if s.Real < 4 || s.SetAside > 0 || len(examples) != s.Real+s.Bogus+s.Dropped {
		t.Errorf("%d examples: %v", len(examples), s)
	}
	for i := range examples {
		if examples[i].Features[0] < 0.69 {
			t.Errorf("example %d has a significance of 10^%g", i, examples[i].Features[0])
		}
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, _, err := Collect(ctx, cfg, nil); err == nil {
		t.Error("a cancelled collection returns")
	}
}
