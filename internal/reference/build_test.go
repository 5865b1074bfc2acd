package reference

import (
	"context"
	"math"
	"testing"
)

func build(t testing.TB, paths []string, change func(*Config)) *Product {
	t.Helper()
	cfg := DefaultConfig()
	cfg.Scratch = t.TempDir()
	if change != nil {
		change(&cfg)
	}
	p, err := Build(context.Background(), paths, cfg)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func TestEqualFrames(t *testing.T) {
	sky := drawSky(300, 560, 2e6, 1)
	paths := shots(t, sky, 10, jitter)
	p := build(t, paths, nil)
	for _, in := range p.Inputs {
		t.Logf("%s used %v w %.4f scale %.4f±%.4f fwhm %.3f noise %.3f rms %.3f rejected %.5f %s", in.Name, in.Used, in.Weight, in.Scale, in.ScaleErr, in.GridFWHM, in.GridNoise, in.RMS, in.Rejected, in.Detail)
	}
	t.Logf("%s (%s): FWHM %.3f limit %.2f predicted %.2f mean %.2f proper %.2f best %.2f ratio/sqrt(N) %.4f", p.Method, p.MethodReason, p.FWHM, p.Limit, p.Predicted, p.MeanLimit, p.ProperLimit, p.BestFrame, p.BestFrame/p.Limit/math.Sqrt(10))
	t.Logf("noise %.3f pixel %.3f corr %.3f meta %+v", p.Noise, p.PixelNoise, p.Correlation, p.Frame.Meta)
}
