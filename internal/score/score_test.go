package score

import (
	"bytes"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"nightsift/internal/simulate"
)

func source(frame, id string, x, y, flux, sn float64) simulate.Source {
	return simulate.Source{Frame: frame, ID: id, Kind: "transient", X: x, Y: y, Flux: flux, SN: sn, LocalSN: sn, Covered: true}
}

func candidate(frame string, x, y, flux, p float64) Found {
	return Found{Frame: frame, X: x, Y: y, XErr: 0.05, YErr: 0.05, Flux: flux, FluxErr: 10, RealProbability: p, Significance: flux / 10}
}

func TestCompareByHand(t *testing.T) {
	masked := source("a", "masked", 300, 300, 500, 50)
	masked.Defects = 8
	edge := source("a", "edge", 3, 3, 500, 50)
	edge.Covered = false
	host := source("a", "host", 200, 50, 300, 30)
	host.Host = "G1"
	truth := &simulate.Truth{
		Frames: []simulate.FrameTruth{{Frame: "a", Area: 2}, {Frame: "b", Area: 3}, {Frame: "c", Area: 5, Expected: "unreadable"}, {Frame: "d", Area: 1}},
		Sources: []simulate.Source{
			source("a", "good", 50, 50, 200, 20),
			source("a", "negative", 80, 50, -200, 20),
			source("a", "wrong sign", 110, 50, 200, 20),
			source("a", "rejected", 140, 50, 200, 20),
			source("a", "far", 170, 50, 200, 20),
			host, masked, edge,
			source("a", "faint", 230, 50, 40, 4),
			source("a", "lost", 260, 50, 200, 20),
			source("c", "aside", 50, 50, 200, 20),
			source("d", "unlisted", 50, 50, 200, 20),
			source("b", "other frame", 50, 50, 200, 20),
		},
	}
	found := []Found{
		candidate("a", 50.1, 50, 210, 0.9), candidate("a", 50.4, 50, 210, 0.4), // the second is a fragment
		candidate("a", 80, 50.2, -190, 0.8), candidate("a", 110, 50, -200, 0.9),
		candidate("a", 140, 50, 200, 0.2), candidate("a", 173, 50, 200, 0.9),
		candidate("a", 200, 50, 310, 0.7), candidate("a", 400, 400, 99, 0.6), candidate("a", 420, 400, 99, 0.4),
		candidate("b", 60, 60, 99, 0.6),
	}
	statuses := []Status{{"a", "searched", ""}, {"b", "searched", ""}, {"c", "set_aside", "unreadable"}}
	r := Compare(truth, found, statuses, DefaultConfig())
	want := map[string]string{
		"good": "", "negative": "", "wrong sign": ReasonMisplaced, "rejected": ReasonRejected, "far": ReasonMisplaced,
		"host": "", "masked": ReasonMasked, "edge": ReasonEdge, "faint": ReasonBelow, "lost": ReasonUndetected,
		"aside": ReasonSetAside, "unlisted": ReasonUnlisted, "other frame": ReasonUndetected,
	}
	for _, o := range r.Outcomes {
		if o.Reason != want[o.ID] || o.Found != (want[o.ID] == "") {
			t.Errorf("%s: found %v, reason %q, want %q", o.ID, o.Found, o.Reason, want[o.ID])
		}
	}
	// good, negative, host of good, negative, wrong sign, rejected, far, host, lost, other frame.
	if r.Found.K != 3 || r.Found.N != 8 || r.Detected.K != 4 || r.OnHosts.K != 1 || r.OnHosts.N != 1 || r.Masked.N != 1 {
		t.Errorf("found %v, detected %v, hosts %v, masked %v", r.Found, r.Detected, r.OnHosts, r.Masked)
	}
	if len(r.False) != 2 || r.Area != 5 || r.FalsePerMpx != 2.0/5 {
		t.Errorf("%d false on %g Mpx: %g, want 2 on 5", len(r.False), r.Area, r.FalsePerMpx)
	}
	for _, f := range r.Frames {
		if f.OK != (f.Frame != "d") {
			t.Errorf("frame %s: %+v", f.Frame, f)
		}
	}
	ev := r.Events()
	if len(ev) != len(truth.Sources) || ev[0].FirstFrame != "a" || ev[0].Found != 1 || ev[9].MissedExpected != 1 || ev[8].MissedExpected != 0 {
		t.Errorf("summaries %+v", ev)
	}
	var b bytes.Buffer
	if err := r.WriteText(&b); err != nil {
		t.Fatal(err)
	}
	if err := r.WriteEvents(&b); err != nil {
		t.Fatal(err)
	}
	if err := r.WriteSummary(&b); err != nil {
		t.Fatal(err)
	}
	for _, s := range []string{"judged not real (1)", "37.5 % (3 of 8", "0.40 ± 0.28 (2)", "missed: judged_not_real, 20.0 sigma, p = 0.20", "UNEXPECTED"} {
		if !strings.Contains(b.String(), s) {
			t.Errorf("text lacks %q:\n%s", s, b.String())
		}
	}
}

// One candidate must not serve two events.
func TestOneToOne(t *testing.T) {
	truth := &simulate.Truth{Frames: []simulate.FrameTruth{{Frame: "a", Area: 1}},
		Sources: []simulate.Source{source("a", "p", 50, 50, 200, 20), source("a", "q", 50.2, 50, 200, 20)}}
	r := Compare(truth, []Found{candidate("a", 50.15, 50, 200, 1)}, nil, DefaultConfig())
	if r.Outcomes[0].Found || !r.Outcomes[1].Found {
		t.Errorf("the nearer event must get the candidate: %v %v", r.Outcomes[0].Found, r.Outcomes[1].Found)
	}
}

// A perfect search with a cut at 5 sigma: every number of the comparison has a
// known value.
func TestCompareOnPerfectSearch(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 5))
	truth := &simulate.Truth{Frames: []simulate.FrameTruth{{Frame: "a", Area: 100}}}
	var found []Found
	for k := range 6000 {
		sn := 3 * math.Pow(33, r.Float64())
		sigma := 12.0
		x, y := float64(k%80)*30+r.Float64(), float64(k/80)*30+r.Float64()
		truth.Sources = append(truth.Sources, source("a", "t", x, y, sn*sigma, sn))
		got := sn + r.NormFloat64()
		if got < 5 {
			continue
		}
		pos := 1.5 / sn
		found = append(found, Found{Frame: "a", X: x + pos*r.NormFloat64(), Y: y + pos*r.NormFloat64(), XErr: pos, YErr: pos,
			Flux: got*sigma*1.004 + 0, FluxErr: sigma, Significance: got, RealProbability: 1})
	}
	res := Compare(truth, found, nil, DefaultConfig())
	if res.Found.Value < 0.995 {
		t.Errorf("found %v", res.Found)
	}
	check := func(what string, got, want, err float64) {
		t.Helper()
		if !(math.Abs(got-want) < 4*err) {
			t.Errorf("%s: %g, want %g ± %g", what, got, want, err)
		}
	}
	check("bias", res.FluxBias.Median, 0.004, res.FluxBias.MedianErr)
	check("flux pull", res.FluxPulls.Spread, 1, res.FluxPulls.SpreadErr)
	check("x pull", res.XPulls.Spread, 1, res.XPulls.SpreadErr)
	check("y pull", res.YPulls.Median, 0, res.YPulls.MedianErr)
	check("half", res.Half.SN, 5, res.Half.SNErr)
	if res.Half.SNErr > 0.1 || res.FluxPulls.SpreadErr > 0.03 {
		t.Errorf("errors %g and %g are too large to test anything", res.Half.SNErr, res.FluxPulls.SpreadErr)
	}
	// A search that loses 20 % of depth shows it.
	shallow := found[:0:0]
	for _, f := range found {
		if f.Significance > 6 {
			shallow = append(shallow, f)
		}
	}
	res = Compare(truth, shallow, nil, DefaultConfig())
	check("half, cut at 6", res.Half.SN, 6, res.Half.SNErr)
	check("magnitudes lost", res.Half.Mag, 2.5*math.Log10(1.2), res.Half.MagErr)
}

// Wilson interval of 9 of 10 at one sigma by hand: centre (0.9+0.05)/1.1 = 0.8636,
// half width √(0.09/10+0.0025)/1.1 = 0.0975.
func TestFraction(t *testing.T) {
	f := NewFraction(9, 10)
	if math.Abs(f.Low-0.7661) > 2e-4 || math.Abs(f.High-0.9611) > 2e-4 {
		t.Errorf("interval %g to %g", f.Low, f.High)
	}
	if f := NewFraction(0, 0); !math.IsNaN(f.Value) || f.Low != 0 || f.High != 1 {
		t.Errorf("empty: %+v", f)
	}
	if f := NewFraction(5, 5); f.High < 0.999 || f.Low < 0.8 || f.Low > 0.9 {
		t.Errorf("all: %+v", f)
	}
}

// The stated error of a spread is the scatter of spreads.
func TestSpreadErrors(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 1))
	var med, spr, spr2, said float64
	const runs, n = 2000, 200
	for range runs {
		v := make([]float64, n)
		for i := range v {
			v[i] = 3 + 2*r.NormFloat64()
		}
		s := NewSpread(v)
		med += s.Median / runs
		spr += s.Spread / runs
		spr2 += s.Spread * s.Spread / runs
		said += s.SpreadErr / runs
	}
	if math.Abs(med-3) > 0.02 || math.Abs(spr-2) > 0.02 {
		t.Errorf("median %g, spread %g", med, spr)
	}
	if got := math.Sqrt(spr2 - spr*spr); math.Abs(got/said-1) > 0.08 {
		t.Errorf("spreads scatter by %g, stated %g", got, said)
	}
}

func TestEmptySky(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 3))
	const n = 400000
	plane, empty := make([]float32, n), make([]bool, n)
	for i := range plane {
		plane[i], empty[i] = float32(0.03+1.05*r.NormFloat64()), true
		if i%10 == 0 {
			plane[i], empty[i] = 40, false
		}
		if i%10 == 1 {
			plane[i] = 0
		}
	}
	plane[5], plane[15], plane[25], plane[35] = 7, -6, float32(math.NaN()), -9
	s := EmptySky(plane, empty)
	if math.Abs(s.Mean-0.03) > 0.008 || math.Abs(s.Spread-1.05) > 0.008 || math.Abs(s.Median-0.03) > 0.01 {
		t.Errorf("%v", s)
	}
	if s.Above5 < 1 || s.Above5 > 4 || s.Below5 < 2 || s.Below5 > 5 || s.N != n*8/10-1 {
		t.Errorf("%d above, %d below of %d", s.Above5, s.Below5, s.N)
	}
	if s := EmptySky(nil, nil); s.N != 0 || !math.IsNaN(s.Mean) {
		t.Errorf("%+v", s)
	}
}

// On a scenario whose pixels are known, a difference made with the true PSF by
// hand is N(0,1): the mask of empty sky leaves out what it must.
func TestEmptySkyOfScenario(t *testing.T) {
	p, err := simulate.Scenario("sparse", 400, 2)
	if err != nil {
		t.Fatal(err)
	}
	e := p.New[0]
	plane := make([]float32, len(e.Pix))
	for k, v := range e.Pix {
		plane[k] = float32((float64(v) - e.Conditions.Sky) / e.SkyNoise)
	}
	s := EmptySky(plane, p.EmptySky(0, 1))
	if s.N < 50000 || math.Abs(s.Mean) > 0.03 || math.Abs(s.Spread-1) > 0.02 || s.Above5 > 3 {
		t.Errorf("%v", s)
	}
}
