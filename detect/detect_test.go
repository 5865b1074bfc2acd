package detect

import (
	"context"
	"errors"
	"math"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
	"nightsift/subtract"
)

// invented returns a difference as the stage before makes it, with a source, a
// faded star and a neighbour on the reference.
func invented(t testing.TB) *subtract.Difference {
	const size = 400
	g := gaussian{1.3, 1.4}
	s := newScene(size, size, g, 10, 21)
	s.add(100.4, 120.6, 50*s.unit())
	s.add(300.2, 200.8, -30*s.unit())
	s.score()
	f := frame.New("field-7", frame.NewImage(size, size))
	f.Checksum = "abc"
	f.Meta.Filter, f.Meta.MidMJD, f.Meta.Gain = "r", 61375.125, 1e9
	var err error
	if f.WCS, err = wcs.NewTAN(200, 200, 150, 20, [2][2]float64{{-0.5 / 3600, 0}, {0, 0.5 / 3600}}); err != nil {
		t.Fatal(err)
	}
	return &subtract.Difference{
		Frame: f, Image: s.image, Variance: s.variance, Significance: s.significance, Flags: s.flags,
		New: s.newSub, Reference: s.reference,
		PSF: psf.NewGrid(size, size, 2, 2, 25, 4, func(dst []float32, x, y, dx, dy float64) { g.Render(dst, 25, x, y, dx, dy) }),
		ReferenceStars: []stars.Star{
			{X: 300, Y: 201, Flux: 10000}, {X: 104.4, Y: 123.6, Flux: 1000},
		},
		Info: subtract.Info{ReferenceName: "ref", ReferenceChecksum: "def", ZeroPoint: 26, JitterPx: 0.01, ScaleError: 0.003, UsablePixels: size * size},
	}
}

func TestDetect(t *testing.T) {
	d := invented(t)
	list, err := Detect(context.Background(), d, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	if len(list) < 2 || len(list) > 3 {
		t.Fatalf("%d candidates, put in 2", len(list))
	}
	c := nearest(list, 100.4, 120.6, 1)
	if c == nil {
		t.Fatal("the source is lost")
	}
	if c.Kind != NewSource || c.Frame != "field-7" || c.Filter != "r" || c.MidMJD != 61375.125 || c.Night == "" || len(c.ID) != 16 {
		t.Errorf("%s on %q, %q, %g, %q, id %q", c.Kind, c.Frame, c.Filter, c.MidMJD, c.Night, c.ID)
	}
	if math.Abs(c.ReferenceDistance-0.5*math.Hypot(104.4-c.X, 123.6-c.Y)) > 1e-3 || math.Abs(c.ReferenceMag-(26-7.5)) > 1e-9 {
		t.Errorf("nearest reference source at %g arcsec of %g mag", c.ReferenceDistance, c.ReferenceMag)
	}
	ra, dec, err := d.Frame.WCS.PixelToSky(c.X, c.Y)
	if err != nil || c.RA != ra || c.Dec != dec {
		t.Errorf("at (%g,%g), the frame's WCS says (%g,%g)", c.RA, c.Dec, ra, dec)
	}
	if math.Abs(c.Mag-(26-2.5*math.Log10(c.Flux))) > 1e-9 || math.Abs(c.MagErr-1.0857*c.FluxErr/c.Flux) > 1e-5 || math.Abs(c.MagLimit-(26-2.5*math.Log10(5*c.FluxErr))) > 0.02 {
		t.Errorf("mag %g ± %g, limit %g for flux %g ± %g", c.Mag, c.MagErr, c.MagLimit, c.Flux, c.FluxErr)
	}
	if got, want := float64(c.StampDifference[25*StampSize+25]), float64(d.Image.Pix[120*400+99]); got != want {
		t.Errorf("middle of the stamp is %g, the pixel there %g", got, want)
	}
	if f := nearest(list, 300.2, 200.8, 1); f == nil || f.Kind != Faded || !math.IsNaN(f.Mag) || f.Flux > 0 {
		t.Errorf("the faded star: %+v", f)
	}
	again, err := Detect(context.Background(), d, DefaultConfig())
	if err != nil || len(again) != len(list) {
		t.Fatalf("second run: %d candidates, %v", len(again), err)
	}
	for k := range list {
		if list[k].ID != again[k].ID || list[k].RealProbability != again[k].RealProbability {
			t.Errorf("candidate %d differs in a second run", k)
		}
	}
	cfg := DefaultConfig()
	cfg.Threshold = 20
	few, err := Detect(context.Background(), d, cfg)
	if err != nil {
		t.Fatal(err)
	}
	if f := nearest(few, 100.4, 120.6, 1); f == nil || f.ID != c.ID {
		t.Error("another threshold changes the identifier")
	}
}

func TestDetectRefuses(t *testing.T) {
	d := invented(t)
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := Detect(ctx, d, DefaultConfig()); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
	for name, change := range map[string]func(*Config){
		"threshold": func(c *Config) { c.Threshold = 0 },
		"model":     func(c *Config) { c.ModelError = 1 },
		"lobes":     func(c *Config) { c.LobeError = -1 },
		"peaks":     func(c *Config) { c.MaxPeaks = 0 },
		"longitude": func(c *Config) { c.Longitude = math.NaN() },
		"rates":     func(c *Config) { c.Rates.RealPerMpx = 0 },
	} {
		cfg := DefaultConfig()
		change(&cfg)
		if _, err := Detect(context.Background(), d, cfg); err == nil {
			t.Errorf("%s: a senseless setting is taken", name)
		}
	}
}

func TestNoisePeaksOfADifference(t *testing.T) {
	d := invented(t)
	// A Gaussian matched filter: the closed form with the pixel's own width.
	sigma2 := math.Sqrt((1.3*1.3 + 1.0/12) * (1.4*1.4 + 1.0/12))
	want := 2 * 400 * 400 / (2 * sigma2) * math.Pow(2*math.Pi, -1.5) * 4 * math.Exp(-8)
	if got := NoisePeaks(d, 4); math.Abs(got/want-1) > 0.02 {
		t.Errorf("%g noise peaks, expected %g", got, want)
	}
}
