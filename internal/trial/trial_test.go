package trial

import (
	"bytes"
	"context"
	"math"
	"strings"
	"testing"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/score"
	"nightsift/subtract"
)

// The figures that the nightly job must reach, on frames small enough for
// every test run. The command `nightsift demo --score` measures them with more
// events.
func TestFiguresOfTheNightlyJob(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	c := Config{Scenarios: []string{"plain", "dirty"}, Size: 640, Seeds: 1, FirstSeed: 911,
		Align: align.DefaultConfig(), Subtract: subtract.DefaultConfig(), Detect: detect.DefaultConfig()}
	all, err := Run(context.Background(), c, nil)
	if err != nil {
		t.Fatal(err)
	}
	for _, o := range all {
		if len(o.Problems) > 0 {
			t.Errorf("%s: set aside: %v", o.Scenario, o.Problems)
			continue
		}
		r := o.Result
		if r.Found.N < 20 || r.Found.High < 0.95 {
			t.Errorf("%s: found %s, want at least 95 %%", o.Scenario, r.Found)
		}
		if r.FalsePerMpx-r.FalseErr > 2 {
			t.Errorf("%s: %.1f ± %.1f false per Mpx, want at most 2", o.Scenario, r.FalsePerMpx, r.FalseErr)
		}
		if b := math.Abs(r.FluxBias.Median) - 2*r.FluxBias.MedianErr; b > 0.02 {
			t.Errorf("%s: flux bias %.2f ± %.2f %%, want below 2 %%", o.Scenario, 100*r.FluxBias.Median, 100*r.FluxBias.MedianErr)
		}
		mean, spread, beyond, gaussian := joined(o.Sky)
		if math.Abs(spread-1) > 0.05 || math.Abs(mean) > 0.06 {
			t.Errorf("%s: SIGNIFICANCE on empty sky has mean %+.3f and spread %.3f", o.Scenario, mean, spread)
		}
		if float64(beyond) > 2*gaussian+4 {
			t.Errorf("%s: %d pixels beyond five sigma, a Gaussian has %.1f", o.Scenario, beyond, gaussian)
		}
		if w := worst(o.AlignmentRMS); !(w <= 0.06) {
			t.Errorf("%s: alignment %.3f px, want at most 0.06", o.Scenario, w)
		}
		if o.StarsFound > max(1, o.Stars/200) {
			t.Errorf("%s: %d of %d constant stars are candidates", o.Scenario, o.StarsFound, o.Stars)
		}
	}
	var b bytes.Buffer
	if err := WriteTable(&b, all); err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"plain", "dirty", "align"} {
		if !strings.Contains(b.String(), want) {
			t.Errorf("the table lacks %q:\n%s", want, b.String())
		}
	}
}

// A frame that cannot be searched appears in the outcome with its reason.
func TestFrameSetAsideIsTold(t *testing.T) {
	c := Config{Scenarios: []string{"plain"}, Size: 300, Seeds: 1, FirstSeed: 5,
		Align: align.DefaultConfig(), Subtract: subtract.DefaultConfig(), Detect: detect.DefaultConfig()}
	c.Align.MinStars = 100000
	all, err := Run(context.Background(), c, nil)
	if err != nil {
		t.Fatal(err)
	}
	if len(all[0].Problems) != 1 || !strings.Contains(all[0].Problems[0], "too_few_stars") {
		t.Errorf("problems %q", all[0].Problems)
	}
	if all[0].Result.Found.N != 0 {
		t.Errorf("events of a frame that was not searched count: %s", all[0].Result.Found)
	}
}

func TestJoinedSky(t *testing.T) {
	mean, spread, beyond, gaussian := joined([]score.Sky{{N: 100, Mean: 0.1, Spread: 1, Above5: 2, Gaussian: 0.5}, {N: 300, Mean: -0.1, Spread: 1.2, Below5: 1, Gaussian: 1}})
	if math.Abs(mean+0.05) > 1e-12 || math.Abs(spread-1.15) > 1e-12 || beyond != 3 || gaussian != 3 {
		t.Errorf("joined: %g %g %d %g", mean, spread, beyond, gaussian)
	}
}
