package noise

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/simulate"
)

// exposure takes an invented frame with its saturated pixels flagged.
func exposure(e *simulate.Exposure) (*frame.Image, *frame.Mask) {
	img, flags := &frame.Image{Width: e.Width, Height: e.Height, Pix: e.Pix}, frame.NewMask(e.Width, e.Height)
	for p, v := range e.Pix {
		if v != v {
			flags.Bits[p] = frame.NoData
		}
		if s := e.Conditions.Saturation; s > 0 && float64(v) >= s {
			flags.Bits[p] = frame.Saturated
		}
	}
	return img, flags
}

// TestScenes measures frames of a known camera. Where a gain is told, its
// error is at most 12 %, and the truth lies within 3.5 times the error.
func TestScenes(t *testing.T) {
	told, square := 0, 0.0
	for _, c := range []struct {
		scenario        string
		gain, readNoise float64
		sky             float64 // of the new frame; 0: the scenario's
		size            int
		must            bool // the levels suffice
	}{
		{"gradient", 0.4, 12, 0, 512, true}, {"gradient", 1.5, 6.5, 0, 512, true}, {"gradient", 5, 3, 0, 512, true},
		{"crowded", 1.5, 6.5, 0, 768, true}, {"low_counts", 1, 2.2, 0, 768, true}, {"broad", 1.5, 6.5, 0, 1024, true},
		{"dirty", 1.5, 6.5, 0, 1024, false}, {"plain", 2.5, 4, 60, 1024, false}, {"undersampled", 1.5, 6.5, 0, 768, false}, {"sparse", 1.5, 6.5, 0, 512, false},
	} {
		if raceEnabled && c.size > 512 {
			continue
		}
		pairs, err := simulate.Varied(c.scenario, simulate.Change{Tune: func(n, _ *simulate.Conditions) {
			n.Gain, n.ReadNoise = c.gain, c.readNoise
			if c.sky > 0 {
				n.Sky = c.sky
			}
		}}, c.size, 9)
		if err != nil {
			t.Fatal(err)
		}
		e := pairs.New[0]
		r := Measure(exposure(e))
		t.Logf("%-12s gain %.2f: %.3f ± %.3f, read noise %.1f: %.1f ± %.1f, %d levels up to %.0f, χ² %.2f %s",
			c.scenario, c.gain, r.Gain, r.GainErr, c.readNoise, r.ReadNoise, r.ReadNoiseErr, r.Levels, r.Highest, r.Chi2, r.Why)
		if math.Abs(r.Noise/e.SkyNoise-1) > 0.05 {
			t.Errorf("%s: noise of the sky %.3f, want %.3f", c.scenario, r.Noise, e.SkyNoise)
		}
		if r.Why != "" {
			if c.must {
				t.Errorf("%s, gain %g: nothing told: %s", c.scenario, c.gain, r.Why)
			}
			continue
		}
		pull := (r.Gain - c.gain) / r.GainErr
		told, square = told+1, square+pull*pull
		if !(math.Abs(pull) < 3.5) || r.GainErr > 0.12*r.Gain {
			t.Errorf("%s: gain %.3f ± %.3f, want %.3f", c.scenario, r.Gain, r.GainErr, c.gain)
		}
		if !(math.Abs(r.ReadNoise-c.readNoise) < 3.5*r.ReadNoiseErr) {
			t.Errorf("%s: read noise %.2f ± %.2f, want %.2f", c.scenario, r.ReadNoise, r.ReadNoiseErr, c.readNoise)
		}
	}
	if rms := math.Sqrt(square / float64(told)); rms > 1.6 {
		t.Errorf("the pulls of %d gains have a spread of %.2f", told, rms)
	}
}

// ramp is white noise on a smooth slope.
func ramp(gain, readNoise, low, high float64, seed uint64) *frame.Image {
	rng := rand.New(rand.NewPCG(seed, 7))
	img := frame.NewImage(400, 400)
	for p := range img.Pix {
		level := low + (high-low)*float64(p%400)/399
		img.Pix[p] = float32(level + rng.NormFloat64()*math.Sqrt(level/gain+readNoise*readNoise/(gain*gain)))
	}
	return img
}

func TestRamp(t *testing.T) {
	r := Measure(ramp(0.7, 30, 50, 5000, 1), nil)
	if math.Abs(r.Gain/0.7-1) > 0.05 || math.Abs(r.ReadNoise/30-1) > 0.15 {
		t.Errorf("%+v", r)
	}
}

func TestOneLevel(t *testing.T) {
	r := Measure(ramp(1.5, 6, 300, 300, 2), nil)
	if r.Why == "" || !math.IsNaN(r.Gain) {
		t.Errorf("a gain was told from one level: %+v", r)
	}
	if g := r.GainFor(6); math.Abs(g/1.5-1) > 0.04 {
		t.Errorf("with the read noise known the gain is %.3f, want 1.5", g)
	}
	if n, e := r.ReadNoiseFor(1.5); !(math.Abs(n-6) < 3*e) {
		t.Errorf("with the gain known the read noise is %.2f ± %.2f, want 6", n, e)
	}
}

func TestResampledNoiseTellsNothing(t *testing.T) {
	img := ramp(0.7, 30, 50, 5000, 3)
	for p := range img.Pix[:len(img.Pix)-1] {
		img.Pix[p] = 0.7*img.Pix[p] + 0.3*img.Pix[p+1]
	}
	if r := Measure(img, nil); !strings.Contains(r.Why, "not white") {
		t.Errorf("%+v", r)
	}
}

func TestPoorFrames(t *testing.T) {
	blank := frame.NewImage(200, 200)
	for p := range blank.Pix {
		blank.Pix[p] = float32(math.NaN())
	}
	for name, img := range map[string]*frame.Image{"empty": frame.NewImage(0, 0), "tiny": frame.NewImage(4, 3), "flat": frame.NewImage(300, 300), "blank": blank} {
		if r := Measure(img, nil); r.Why == "" {
			t.Errorf("%s: %+v", name, r)
		}
	}
}

func BenchmarkMeasure4096(b *testing.B) {
	img := frame.NewImage(4096, 4096)
	rng := rand.New(rand.NewPCG(1, 7))
	for p := range img.Pix {
		img.Pix[p] = float32(500 + 20*rng.NormFloat64())
	}
	for b.Loop() {
		Measure(img, nil)
	}
}
