package trainset

import (
	"context"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/realbogus"
	"nightsift/internal/simulate"
	"nightsift/internal/survey"
)

// Labels are read, and what is wrong with a file is said with its line.
func TestReadLabels(t *testing.T) {
	write := func(text string) string {
		path := filepath.Join(t.TempDir(), "labels.csv")
		if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
		return path
	}
	got, err := ReadLabels(write("reviewer,candidate_id,label\nA,x1,real\nB,x2,bogus\nC,x1,real\n"))
	if err != nil || len(got) != 2 || !got["x1"] || got["x2"] {
		t.Errorf("found %v, %v", got, err)
	}
	for name, c := range map[string]struct{ text, says string }{
		"empty":         {"", "empty"},
		"no labels":     {"candidate_id,label\n", "no label"},
		"columns":       {"id,label\nx,real\n", "found the columns id, label"},
		"word":          {"candidate_id,label\nx,maybe\n", `line 2: found the label "maybe"`},
		"no name":       {"candidate_id,label\n,real\n", "line 2: no candidate_id"},
		"contradicting": {"candidate_id,label\nx,real\ny,real\nx,bogus\n", "lines 2 and 4 contradict"},
		"ragged":        {"candidate_id,label\nx\n", "wrong number of fields"},
	} {
		if _, err := ReadLabels(write(c.text)); err == nil || !strings.Contains(err.Error(), c.says) || !strings.Contains(err.Error(), "labels.csv") {
			t.Errorf("%s: error %v, expected one that says %q", name, err, c.says)
		}
	}
	if err := got.Add("x1", false, "the label of Ada"); err == nil || !strings.Contains(err.Error(), "Ada contradicts") {
		t.Errorf("a contradiction between two sources: %v", err)
	}
}

// Detections are weighed by labels, by the model in use and by recurrence.
func TestAssemble(t *testing.T) {
	model := realbogus.Prior()
	clean := realbogus.Features{realbogus.LogSN: 1.3, realbogus.Sign: 1, realbogus.SaturationDistance: 1.4, realbogus.ExpectedResidual: 1.3, realbogus.NewFlux: 1,
		realbogus.StarDistance: 10, realbogus.EdgeDistance: 1.4, realbogus.DipoleSum: 1}
	bad := clean
	bad[realbogus.HitMargin], bad[realbogus.Chi2Excess] = 1, 1.5
	if p, q := model.Probability(&clean), model.Probability(&bad); p < 0.6 || q > 0.05 {
		t.Fatalf("the prior gives %.3f and %.3f", p, q)
	}
	at := func(id string, ra float64, f realbogus.Features) own {
		return own{ID: id, RA: ra, Dec: 20, Significance: 20, Features: f}
	}
	noise := make([]float64, len(heights))
	frames := []*ownFrame{
		{Name: "f1", Night: "1", Field: "A", Mpx: 1, Radius: 1e-4, Noise: noise, Own: []own{at("star-1", 10, clean), at("hit", 11, bad), at("spike-1", 12, bad), at("said-real", 13, bad), at("once", 14, clean)},
			Put: []own{{ID: "p", Significance: 9, SN: 9, Features: clean}}},
		{Name: "f2", Night: "2", Field: "B", Mpx: 1, Radius: 1e-4, Noise: noise, Own: []own{at("star-2", 10.00005, clean), at("spike-2", 12, bad), at("said-bogus", 15, clean)}},
	}
	folder := &survey.Folder{Config: survey.DefaultConfig()}
	var o Own
	o.assemble(frames, &OwnConfig{Folder: folder, Model: model, Labels: Labels{"said-real": true, "said-bogus": false, "gone": true}})
	type seen struct {
		real   bool
		weight float64
	}
	got := map[string]seen{}
	k := 0
	for _, f := range frames {
		for _, c := range f.Own {
			if c.ID == "star-1" || c.ID == "star-2" {
				continue
			}
			got[c.ID] = seen{o.Examples[k].Real, o.Examples[k].Weight}
			k++
		}
	}
	if o.Recurring != 2 || o.Bogus != 4 || o.LabelledReal != 1 || o.LabelledBogus != 1 || o.LabelsUnused != 1 || len(o.Examples) != 7 {
		t.Fatalf("found %+v", o)
	}
	if g := got["said-real"]; !g.real || g.weight != labelWeight {
		t.Errorf("labelled real: %+v", g)
	}
	if g := got["said-bogus"]; g.real || g.weight != labelWeight {
		t.Errorf("labelled bogus: %+v", g)
	}
	if g := got["hit"]; g.real || math.Abs(g.weight-1+model.Probability(&bad)) > 1e-12 {
		t.Errorf("a hit: %+v", g)
	}
	if g := got["once"]; g.real || math.Abs(g.weight-1+model.Probability(&clean)) > 1e-12 {
		t.Errorf("seen once, like a star: %+v", g)
	}
	// The odds of the weights, shifted, are those of the survey: two real ones in each
	// of two megapixels over the bogus ones, of which the labelled one counts once.
	odds := (1.0 + labelWeight) / (got["hit"].weight + got["once"].weight + 2*got["spike-1"].weight + labelWeight)
	there := got["hit"].weight + got["once"].weight + 2*got["spike-1"].weight + 1
	if shifted := odds * math.Exp(o.Shift); math.Abs(shifted-2*2/there) > 1e-12 {
		t.Errorf("odds %.4f, expected %.4f", shifted, 2*2/there)
	}
}

// Light that is put in has the flux asked for, on average over its photon
// noise, and the noise has the variance of its photons.
func TestRenderedLight(t *testing.T) {
	const gain, flux = 1.5, 3000.0
	psf := func(dst []float32, x, y, dx, dy float64) {
		const side = 31
		for j := range side {
			for i := range side {
				u, v := float64(i-15)-dx, float64(j-15)-dy
				dst[j*side+i] = float32(math.Exp(-(u*u+v*v)/8) / (8 * math.Pi))
			}
		}
	}
	r := rand.New(rand.NewPCG(1, 2))
	var sum, square, xx float64
	const n = 600
	for range n {
		p := put{x: 100.3, y: 50.6, flux: flux}
		p.render(psf, gain, 15, r)
		var s, x float64
		for i, v := range p.light.Counts {
			s += float64(v)
			x += float64(v) * float64(p.light.X-15+i%31)
		}
		sum, square, xx = sum+s, square+s*s, xx+x/s
	}
	mean := sum / n
	spread := math.Sqrt(square/n - mean*mean)
	if math.Abs(mean-flux) > 8 || math.Abs(spread/math.Sqrt(flux/gain)-1) > 0.1 || math.Abs(xx/n-100.3) > 0.01 {
		t.Errorf("flux %.1f, spread %.2f, x %.3f; expected %g, %.2f, 100.3", mean, spread, xx/n, flux, math.Sqrt(flux/gain))
	}
}

// A survey of two small frames: examples of both classes; the second call takes
// them from the cache, and a changed frame does not.
func TestCollectOwn(t *testing.T) {
	dir := t.TempDir()
	if err := survey.Init(dir); err != nil {
		t.Fatal(err)
	}
	pairs, err := simulate.Varied("plain", simulate.Change{Events: 30, Tune: func(n, r *simulate.Conditions) { n.HotPixels = 100 }}, 300, 4)
	if err != nil {
		t.Fatal(err)
	}
	made := t.TempDir()
	if err := pairs.Write(made); err != nil {
		t.Fatal(err)
	}
	name := filepath.Join(dir, "incoming", "n.fits")
	for from, to := range map[string]string{"reference.fits": filepath.Join(dir, "references", "r.fits"), "new-1.fits": name} {
		if err := os.Rename(filepath.Join(made, from), to); err != nil {
			t.Fatal(err)
		}
	}
	f, err := survey.OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	cfg := DefaultOwnConfig()
	cfg.Folder, cfg.Cache, cfg.Model, cfg.Rounds = f, filepath.Join(dir, "training", "examples"), realbogus.Prior(), 1
	first, err := CollectOwn(context.Background(), cfg, nil)
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("%d put in, %d found, %d bogus", first.Injected, first.Recovered, first.Bogus)
	if first.Reused != 0 || first.SetAside != 0 || first.Recovered < 3 || first.Bogus < 1 || len(first.Stamps[0]) != 3*ThumbnailSize*ThumbnailSize {
		t.Fatalf("found %+v", first)
	}
	again, err := CollectOwn(context.Background(), cfg, nil)
	if err != nil || again.Reused != 1 || len(again.Examples) != len(first.Examples) || again.Examples[0] != first.Examples[0] {
		t.Fatalf("the second call: %v, %+v", err, again)
	}
	if _, err := Learn(first, cfg.Model, realbogus.DefaultTrainConfig()); err == nil || !strings.Contains(err.Error(), "need at least 20") {
		t.Errorf("one frame is enough to learn from: %v", err)
	}
}
