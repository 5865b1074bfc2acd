package survey

import (
	"fmt"
	"math"
	"testing"

	"nightsift/catalog"
	"nightsift/detect"
)

// A hot pixel shows on three frames that point a little elsewhere; a star that
// varies and a new source keep their probability, on dithered frames because they
// stand on other pixels, on frames that point alike because the sky is the same.
func TestRepeatedOnTheDetector(t *testing.T) {
	const scale = 0.6 / 3600 // deg per px
	var records []catalog.FrameRecord
	var list []detect.Candidate
	add := func(frame, id string, x, y, ra, dec float64) {
		list = append(list, detect.Candidate{ID: id + frame, Frame: frame, X: x, Y: y, RA: ra, Dec: dec, RealProbability: 0.9, Kind: detect.NewSource})
	}
	for k, shift := range []float64{0, 15, 40, 40} {
		r := catalog.NewFrameRecord(fmt.Sprint("f", k), catalog.Searched)
		r.Width, r.Height, r.Jacobian = 1000, 1000, [4]float64{-0.6, 0, 0, 0.6}
		records = append(records, r)
		sky := func(x, y float64) (ra, dec float64) { return 150 - (x-shift)*scale, 2 + y*scale }
		if k < 3 {
			ra, dec := sky(300.2, 400)
			add(r.Frame, "hot", 300.2+0.3*float64(k), 400, ra, dec)
		}
		ra, dec := sky(700+shift, 200)
		add(r.Frame, "new", 700+shift, 200, ra, dec)
	}
	// One that nobody knows the place of.
	add("f0", "lost", 300, 400.5, math.NaN(), math.NaN())
	judgeRepeated(records, list)
	for _, c := range list {
		hot := c.ID[:3] == "hot"
		if hot && (c.RealProbability > 0.01 || c.Kind != detect.Artefact) || !hot && (c.RealProbability != 0.9 || c.Kind != detect.NewSource) {
			t.Errorf("%s: probability %.4f, %s", c.ID, c.RealProbability, c.Kind)
		}
	}
	// By the rule: eight detections on four frames of a megapixel, three of them on
	// the frame itself.
	want := 9 * (1 - math.Exp(-(8.0-3)*1e-6*math.Pi*1.5*1.5)) / 0.5
	p := list[0].RealProbability
	if got := p / (1 - p); math.Abs(got/want-1) > 1e-9 {
		t.Errorf("odds %.4g, want %.4g", got, want)
	}
}
