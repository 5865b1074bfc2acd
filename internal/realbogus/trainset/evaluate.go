package trainset

import (
	"context"
	"fmt"
	"io"
	"math"
	"math/rand/v2"

	"nightsift/internal/realbogus"
	"nightsift/internal/score"
	"nightsift/internal/simulate"
)

// EvaluateConfig says on which invented frames models are judged.
type EvaluateConfig struct {
	Config     // Scenarios, Frames and Worn are not used
	PerSet int // frames of each set
	Sets   []string
}

// The sets of frames on which models are judged.
const (
	SetScenarios = "scenarios" // in turn, as they are
	SetCameras   = "cameras"   // drawn at random: scale, widths, elongation, density, hits, trails, bleeds
	SetShifted   = "shifted"   // dirty frames and bright galaxies on dirty frames, the reference shifted by 0.3 px in waves
	SetWorn      = "worn"      // as in training: flags missing, headers wrong, several faults at once
)

// Sets lists the sets.
func Sets() []string { return []string{SetScenarios, SetCameras, SetShifted, SetWorn} }

// Verdict is what a model does on a set of frames.
type Verdict struct {
	Model string
	Set   string

	Frames, SetAside int
	Mpx              float64
	Real, Bogus      int

	// Among candidates at places with and without a source: the fraction of the
	// real ones below the score that 1 % of the bogus ones reach.
	MissedAbove7, MissedAbove10 score.Fraction
	AUC                         float64
	CalibrationError            float64 // of the probability at the rate of real ones of this set

	// At a stated probability of at least one half, noise peaks and rates included.
	FalsePerMpx float64
	False       int
	Kept        score.Fraction // sources of a signal-to-noise ratio above 8, not on bad pixels, covered by the reference
	KeptOnCores score.Fraction // those where a galaxy takes a fifth or more of that ratio
}

// Judge is a model under a name.
type Judge struct {
	Name  string
	Model *realbogus.Model
}

// Evaluate searches the frames of each set once and judges all models on them.
// Seeds count up from FirstSeed.
func Evaluate(ctx context.Context, cfg EvaluateConfig, judges []Judge, progress func(done, total int)) ([]Verdict, error) {
	var out []Verdict
	done := 0
	for n, set := range cfg.Sets {
		var list []searched
		aside := 0
		for k := range cfg.PerSet {
			seed := cfg.FirstSeed + uint64(1000*n+k)
			scenario, w := cfg.draw(set, k, seed)
			s, err := one(ctx, cfg.Config, scenario, seed, w)
			if err != nil {
				return nil, fmt.Errorf("%s seed %d: %w", scenario, seed, err)
			}
			if s.problem != nil {
				aside++
			} else {
				list = append(list, s)
			}
			done++
			if progress != nil {
				progress(done, len(cfg.Sets)*cfg.PerSet)
			}
		}
		for _, j := range judges {
			v := judge(list, j.Model, cfg.Detect.Rates, cfg.Detect.Threshold)
			v.Model, v.Set, v.Frames, v.SetAside = j.Name, set, cfg.PerSet, aside
			out = append(out, v)
		}
	}
	return out, nil
}

// draw makes frame k of a set.
func (c *EvaluateConfig) draw(set string, k int, seed uint64) (scenario string, w *worn) {
	switch set {
	case SetCameras:
		w = newCamera(k, seed)
	case SetShifted:
		w = newShifted(k, seed)
	case SetWorn:
		w = newWorn(k, seed)
	default:
		names := simulate.Names()
		return names[k%len(names)], nil
	}
	return w.String(), w
}

// newCamera draws an ordinary frame of some camera: its artefacts are those
// that the pipeline looks for, its header is right.
func newCamera(k int, seed uint64) *worn {
	r := rand.New(rand.NewPCG(seed, 0x63616d65))
	w := &worn{base: wornBases[k%len(wornBases)], gainError: 1, saturation: 1, seed: seed, faults: []string{"camera"}}
	width := logUniform(r, 1.8, 9)
	other := math.Max(1.8, math.Min(10, width*logUniform(r, 0.6, 1.6)))
	scale, density := logUniform(r, 0.25, 1.2), logUniform(r, 0.5, 2)
	w.change = simulate.Change{Events: 100, Brightest: 200, Moving: 0.05, Stars: 300 * density}
	switch w.base {
	case "crowded":
		w.change.Stars = 1500 * density
	case "sparse":
		w.change.Stars = 60 * density
	}
	hits, hot := logUniform(r, 10, 150), logUniform(r, 5, 50)
	columns, streak, bleed := r.IntN(4), r.Float64() < 0.3, r.Float64() < 0.6
	var e [6]float64
	for i := range e {
		e[i] = 0.05 * r.NormFloat64()
	}
	w.change.Tune = func(n, q *simulate.Conditions) {
		n.PSF.FWHM, q.PSF.FWHM = width, other
		n.Camera.Scale, q.Camera.Scale = scale, scale*q.Camera.Scale/n.Camera.Scale
		n.CosmicRays, n.HotPixels, n.BadColumns, n.Streak = hits, hot, columns, streak
		n.Bleed, q.Bleed = bleed, bleed
		n.PSF.E1, n.PSF.E2 = n.PSF.E1+e[0], n.PSF.E2+e[1]
		n.PSF.FWHMX, n.PSF.FWHMR = n.PSF.FWHMX+e[2], n.PSF.FWHMR+e[3]
		n.PSF.E1X, n.PSF.E2Y = n.PSF.E1X+e[4], n.PSF.E2Y+e[5]
	}
	return w
}

// newShifted draws a dirty frame, every other one full of bright galaxies, whose
// reference is shifted by waves of 0.3 px.
func newShifted(k int, seed uint64) *worn {
	w := &worn{base: "dirty", gainError: 1, saturation: 1, seed: seed, waves: 0.3, period: 200, faults: []string{"waves"}}
	w.change = simulate.Change{Events: 100}
	if k%2 == 1 {
		w.base = "bright_hosts"
		w.change.Saturated = 5
		w.change.Tune = func(n, r *simulate.Conditions) {
			n.CosmicRays, n.HotPixels, n.BadColumns, n.Streak = 90, 25, 4, true
			n.Bleed, r.Bleed = true, true
		}
	}
	return w
}

// judge applies a model to what was searched.
func judge(list []searched, m *realbogus.Model, rates realbogus.Rates, threshold float64) Verdict {
	var v Verdict
	rates.Threshold = threshold
	var judged []realbogus.Judged
	var kept, all, keptCore, allCore int
	for k := range list {
		s := &list[k]
		v.Mpx += s.mpx
		good := map[*simulate.Source]bool{}
		for i := range s.examples {
			e := &s.examples[i]
			if e.Weight == 0 {
				continue
			}
			j := realbogus.Judged{Example: e.Example, Score: m.Score(&e.Features)}
			j.P = m.Calibration.Apply(j.Score)
			judged = append(judged, j)
			p := realbogus.Posterior(m.Here(j.P, rates), e.Significance, e.RootDet, rates)
			switch {
			case e.Real:
				v.Real++
				good[e.event] = good[e.event] || p >= 0.5
			default:
				v.Bogus++
				if p >= 0.5 {
					v.False++
				}
			}
		}
		for i := range s.truth {
			t := &s.truth[i]
			if t.Masked() || !t.Covered || !(t.LocalSN > 8) {
				continue
			}
			core := placeOf(t) == OnCore
			all++
			if core {
				allCore++
			}
			if good[t] {
				kept++
				if core {
					keptCore++
				}
			}
		}
	}
	v.FalsePerMpx = float64(v.False) / v.Mpx
	v.Kept, v.KeptOnCores = score.NewFraction(kept, all), score.NewFraction(keptCore, allCore)
	sc, p, real, weight := realbogus.Columns(judged)
	curve := realbogus.NewCurve(sc, real, weight)
	v.AUC = curve.Area()
	_, v.CalibrationError = realbogus.Reliability(p, real, weight, 10)
	cut := curve.CutAt(0.01)
	missed := func(above float64) score.Fraction {
		share, n := realbogus.Missed(judged, cut, above)
		return score.NewFraction(int(math.Round(share*float64(max(n, 1)))), n)
	}
	v.MissedAbove7, v.MissedAbove10 = missed(7), missed(10)
	return v
}

// WriteVerdicts writes the table of verdicts.
func WriteVerdicts(w io.Writer, list []Verdict) error {
	if _, err := fmt.Fprintf(w, "%-10s %-10s %6s %6s %6s %6s  %-22s %-22s %7s %6s  %-14s %-24s %s\n", "set", "model", "frames", "Mpx", "real", "bogus",
		"missed at 1 %, S/N>7", "S/N>10", "area", "ECE", "false per Mpx", "kept, S/N>8", "kept on cores"); err != nil {
		return err
	}
	short := func(f score.Fraction) string {
		if f.N == 0 {
			return "none"
		}
		return fmt.Sprintf("%.2f %% (%d of %d)", 100*f.Value, f.K, f.N)
	}
	for i := range list {
		v := &list[i]
		if _, err := fmt.Fprintf(w, "%-10s %-10s %6d %6.1f %6d %6d  %-22s %-22s %7.4f %6.4f  %-14s %-24s %s\n", v.Set, v.Model, v.Frames-v.SetAside, v.Mpx, v.Real, v.Bogus,
			short(v.MissedAbove7), short(v.MissedAbove10), v.AUC, v.CalibrationError, fmt.Sprintf("%.3f (%d)", v.FalsePerMpx, v.False), short(v.Kept), short(v.KeptOnCores)); err != nil {
			return err
		}
	}
	return nil
}
