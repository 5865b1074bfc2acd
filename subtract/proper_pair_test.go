package subtract_test

import (
	"context"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// simulatedPair aligns the frames of a scenario.
func simulatedPair(t *testing.T, scenario string, size int) *align.Pair {
	t.Helper()
	pairs, err := simulate.Scenario(scenario, size, 11)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	if err := pairs.Write(dir); err != nil {
		t.Fatal(err)
	}
	read := func(name string) *frame.Frame {
		f, err := load.Frame(filepath.Join(dir, name+".fits"), load.DefaultKeywords())
		if err != nil {
			t.Fatal(err)
		}
		return f
	}
	pair, err := align.Align(context.Background(), read(pairs.New[0].Name), read(pairs.Reference.Name), align.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	return pair
}

// The whitened difference of a matching kernel and a proper one are two ways to
// one score; on round Gaussian stars they agree. And auto gives what the way that
// it chooses gives, with its reason.
func TestBothWaysGiveOneScore(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	pair := simulatedPair(t, "gaussian", 640)
	run := func(method string) *subtract.Difference {
		cfg := subtract.DefaultConfig()
		cfg.Method = method
		d, err := subtract.Subtract(context.Background(), pair, cfg)
		if err != nil {
			t.Fatalf("%s: %v", method, err)
		}
		return d
	}
	kernel, proper, auto := run(subtract.MethodKernel), run(subtract.MethodProper), run(subtract.MethodAuto)
	const masked = frame.Unusable | frame.Edge
	var sum, product, a2, b2, count float64
	for i, a := range kernel.Significance.Pix {
		b := proper.Significance.Pix[i]
		if (kernel.Flags.Bits[i]|proper.Flags.Bits[i])&masked != 0 {
			continue
		}
		d := float64(a - b)
		sum += d * d
		product += float64(a * b)
		a2 += float64(a * a)
		b2 += float64(b * b)
		count++
	}
	if count < 0.8*640*640 {
		t.Errorf("only %.0f pixels in common", count)
	}
	if rms := math.Sqrt(sum / count); rms > 0.1 {
		t.Errorf("scores differ by %.3f (rms)", rms)
	}
	if r := product / math.Sqrt(a2*b2); r < 0.995 {
		t.Errorf("scores correlate by %.4f", r)
	}
	if ratio := proper.Info.FluxLimit5 / kernel.Info.FluxLimit5; math.Abs(ratio-1) > 0.005 {
		t.Errorf("depth by proper subtraction is %.4f of the kernel's", ratio)
	}
	chosen := kernel
	if auto.Info.Method == subtract.MethodProper {
		chosen = proper
	} else if auto.Info.Method != subtract.MethodKernel {
		t.Fatalf("method %q", auto.Info.Method)
	}
	if !strings.Contains(auto.Info.MethodReason, "stars") {
		t.Errorf("reason %q", auto.Info.MethodReason)
	}
	for i, v := range auto.Significance.Pix {
		if v != chosen.Significance.Pix[i] {
			t.Fatalf("auto chose %s but its score differs at pixel %d: %g, %g", auto.Info.Method, i, v, chosen.Significance.Pix[i])
		}
	}
}
