package load

import (
	"math"
	"math/rand/v2"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/simulate"
)

// TestMissingGainIsEstimated writes an invented frame of known gain with parts
// of its header left out. The estimates agree with the truth within 12 %, or
// within three times their stated error.
func TestMissingGainIsEstimated(t *testing.T) {
	const gain, readNoise = 2.0, 9.0
	pairs, err := simulate.Varied("gradient", simulate.Change{Tune: func(n, _ *simulate.Conditions) {
		n.Gain, n.ReadNoise, n.Sky = gain, readNoise, 120
	}}, 640, 5)
	if err != nil {
		t.Fatal(err)
	}
	e := pairs.New[0]
	for _, c := range []struct {
		name                string
		h                   *fits.Header
		gainFrom, noiseFrom string // beginnings of the origins
	}{
		{"both stated", header("GAIN", gain, "RDNOISE", readNoise, "SATURATE", 60000), "GAIN", "RDNOISE"},
		{"no gain", header("RDNOISE", readNoise, "SATURATE", 60000), "estimated", "RDNOISE"},
		{"no read noise", header("GAIN", gain, "SATURATE", 60000), "GAIN", "estimated"},
		{"neither", header("SATURATE", 60000), "estimated", "estimated"},
	} {
		path := filepath.Join(t.TempDir(), "a.fits")
		if err := fits.WritePrimary(path, &fits.ImageHDU{Header: c.h, Width: e.Width, Height: e.Height, Float: e.Pix}); err != nil {
			t.Fatal(err)
		}
		f, report, err := Read(path, DefaultKeywords())
		if err != nil {
			t.Fatal(err)
		}
		m := f.Meta
		t.Logf("%s: gain %.3f (%s), read noise %.2f (%s)", c.name, m.Gain, m.Origin["gain"], m.ReadNoise, m.Origin["read_noise"])
		if !strings.HasPrefix(m.Origin["gain"], c.gainFrom) || !strings.HasPrefix(m.Origin["read_noise"], c.noiseFrom) {
			t.Errorf("%s: gain from %q, read noise from %q", c.name, m.Origin["gain"], m.Origin["read_noise"])
		}
		if (report.Noise != nil) != (c.name != "both stated") {
			t.Errorf("%s: noise measured: %v", c.name, report.Noise != nil)
		}
		if !(math.Abs(m.Gain/gain-1) < 0.12) || !(math.Abs(m.ReadNoise-readNoise) < 3) {
			t.Errorf("%s: gain %.3f, read noise %.2f; want %g and %g", c.name, m.Gain, m.ReadNoise, gain, readNoise)
		}
	}
	// One level only: nothing can be told, and nothing is.
	f, report, err := Read(write(t, "flat.fits", nil, noisy(1200, 8)), DefaultKeywords())
	if err != nil || !math.IsNaN(f.Meta.Gain) || !math.IsNaN(f.Meta.ReadNoise) || report.Noise.Why == "" {
		t.Errorf("flat frame: %+v, %v", f.Meta, err)
	}
}

// plateaus makes a field of stars whose light ends at a level that the flat
// field makes uneven by so much.
func plateaus(level, uneven, fwhm float64, seed uint64) *frame.Frame {
	rng := rand.New(rand.NewPCG(seed, 5))
	const size = 300
	light := make([]float64, size*size)
	for n := range 60 {
		x, y, peak := rng.Float64()*size, rng.Float64()*size, 200*math.Pow(1000, rng.Float64())
		if n < 8 {
			peak = 150000
		}
		for j := range size {
			for i := range size {
				r2 := (float64(i)-x)*(float64(i)-x) + (float64(j)-y)*(float64(j)-y)
				if r2 < 30*fwhm*fwhm {
					light[j*size+i] += peak * math.Exp(-4*math.Ln2*r2/(fwhm*fwhm))
				}
			}
		}
	}
	f := frame.New("plateaus", frame.NewImage(size, size))
	for p, v := range light {
		v = math.Min(300+v+math.Sqrt(300+v)*rng.NormFloat64(), level)
		f.Image.Pix[p] = float32(v * (1 + uneven*math.Sin(float64(p%size)/40)))
	}
	return f
}

func TestUnannouncedSaturation(t *testing.T) {
	for _, c := range []struct {
		level, uneven, fwhm float64
		found               bool
	}{
		{50000, 0, 3, true}, {50000, 0.008, 4, true}, {30000, 0.01, 6, true},
		{1e9, 0, 3, false}, {1e9, 0.01, 9, false},
	} {
		f := plateaus(c.level, c.uneven, c.fwhm, 3)
		_, high, _ := flagNoData(f)
		flagSaturated(f, math.NaN(), high)
		got := f.Meta.Saturation
		if c.found != !math.IsNaN(got) {
			t.Errorf("%+v: level %g (%s)", c, got, f.Meta.Origin["saturation"])
			continue
		}
		if c.found && !(got <= c.level*(1+c.uneven) && got >= c.level*(1-c.uneven)*0.97) {
			t.Errorf("%+v: level %g", c, got)
		}
		if c.found && !strings.HasPrefix(f.Meta.Origin["saturation"], "estimated: ") {
			t.Errorf("%+v: origin %q", c, f.Meta.Origin["saturation"])
		}
	}
	// A nebula is smooth and bright, but has no plateau.
	f := frame.New("nebula", frame.NewImage(300, 300))
	rng := rand.New(rand.NewPCG(1, 1))
	for p := range f.Image.Pix {
		dx, dy := float64(p%300)-150, float64(p/300)-150
		f.Image.Pix[p] = float32(300 + 30000*math.Exp(-(dx*dx+dy*dy)/5000) + 20*rng.NormFloat64())
	}
	_, high, _ := flagNoData(f)
	if flagSaturated(f, math.NaN(), high); !math.IsNaN(f.Meta.Saturation) {
		t.Errorf("a nebula saturates at %g (%s)", f.Meta.Saturation, f.Meta.Origin["saturation"])
	}
}
