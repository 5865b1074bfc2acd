package realbogus

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"runtime"
	"slices"
	"sort"
	"sync"
	"time"
)

// Example is one labelled candidate.
type Example struct {
	Features Features
	Real     bool
	Weight   float64 // 1 for a plain one; 0 leaves it out
	Group    string  // the frame: examples of one group are never split between training and testing

	// What follows is for reports and takes no part in training.
	Significance float64 // signed
	SN           float64 // true signal-to-noise ratio of a source that was put in; else 0
	RootDet      float64 // of the frame's noise, as Posterior wants it
	Tag          string  // where a real one stands, what a bogus one comes from, as far as known
	Place        string  // frame and position in words
}

// TrainConfig holds the settings of a training. Start from DefaultTrainConfig.
type TrainConfig struct {
	Trees   int     // number of trees
	Depth   int     // questions from root to leaf
	Rate    float64 // shrinkage of each tree
	Ridge   float64 // added to the sum of second derivatives of a leaf
	MinLeaf float64 // smallest sum of second derivatives in a leaf
	MinGain float64 // smallest gain of a split
	Bins    int     // candidate cuts a feature
	Folds   int     // for held-out scores
	// Base is a model from which the trees start and which they correct: its
	// terms are rescaled to the examples one by one, or as a whole with its trees
	// if it has some. nil: they start from the mean.
	Base *Model
	// Guarded keeps every tree from going against Descriptions' Trend: where a
	// feature goes beyond all examples, what speaks against a candidate cannot
	// speak for it.
	Guarded  bool
	Isotonic int    // isotonic calibration from this many held-out examples, else Platt's
	Made     string // date to write into the model, YYYY-MM-DD; empty: today (UTC)
	// Shift is added to the calibrated log odds: the logarithm of the odds of
	// real ones where the model will be used over those in the examples.
	Shift float64
	// Without names features that the trees may not use.
	Without []string
	Note    string
}

// features lists the features in use.
func (c *TrainConfig) features() []string {
	var list []string
	for _, n := range Names() {
		if !slices.Contains(c.Without, n) {
			list = append(list, n)
		}
	}
	return list
}

// DefaultTrainConfig returns 300 trees of depth 5 that correct the prior and
// keep to the trends.
func DefaultTrainConfig() TrainConfig {
	return TrainConfig{Base: Prior(), Guarded: true, Trees: 300, Depth: 5, Rate: 0.07, Ridge: 1, MinLeaf: 4, MinGain: 1e-3, Bins: 64, Folds: 10, Isotonic: 3000}
}

// Metrics are measured on held-out groups: scores from models that have not
// seen the group, calibrated on the other groups.
type Metrics struct {
	AUC              float64  `json:"auc"` // area under the curve of true against false positives
	AveragePrecision float64  `json:"average_precision"`
	LogLoss          float64  `json:"log_loss"`
	Brier            float64  `json:"brier"`
	CalibrationError float64  `json:"calibration_error"`
	MissedAt1        float64  `json:"missed_at_1_percent_false"` // fraction of real ones below the score that 1 % of bogus ones reach
	MissedAt01       float64  `json:"missed_at_0.1_percent_false"`
	MissedAbove7     *float64 `json:"missed_at_1_percent_false_above_sn_7,omitempty"` // the same of real ones of a signal-to-noise ratio above 7
	MissedAbove10    *float64 `json:"missed_at_1_percent_false_above_sn_10,omitempty"`
	Reliability      []Bin    `json:"reliability"`
}

// Train fits a model as TrainJudged does and returns the model alone.
func Train(examples []Example, cfg TrainConfig) (*Model, error) {
	m, _, err := TrainJudged(examples, cfg)
	return m, err
}

// TrainJudged fits a model: trees on all examples, calibration and metrics on
// held-out groups. The result depends on nothing but its arguments (and the
// date, where Made is empty). It needs at least 20 examples of each class in
// two groups or more, and features that are numbers. It also returns the
// examples of weight above 0 with what was said of them while they were held
// out.
func TrainJudged(examples []Example, cfg TrainConfig) (*Model, []Judged, error) {
	ex, nReal, nBogus, groups, err := usable(examples)
	if err != nil {
		return nil, nil, err
	}
	if cfg.Base != nil && len(cfg.Base.Trees) > 0 && len(cfg.Without) > 0 {
		return nil, nil, errors.New("train: features cannot be left out of a model that starts from trained trees")
	}
	m := &Model{
		Format: Format, Kind: KindBoosted, Made: cfg.Made, Note: cfg.Note, Features: cfg.features(),
		Training: Training{Digest: digestExamples(ex), Real: nReal, Bogus: nBogus, Groups: groups},
	}
	if m.Made == "" {
		m.Made = time.Now().UTC().Format("2006-01-02")
	}
	judged, err := HoldOut(ex, cfg)
	if err != nil {
		return nil, nil, err
	}
	m.Metrics = Measure(judged)
	score, _, real, weight := Columns(judged)
	m.Calibration = calibrate(score, real, weight, cfg)
	m.Calibration.shift(cfg.Shift)
	if cfg.Shift == 0 {
		m.Training.Odds = oddsOf(ex)
	}
	all := boost(ex, cfg)
	m.Bias, m.Terms, m.Trees, m.at = all.Bias, all.Terms, all.Trees, all.at
	if _, err := m.Encode(); err != nil {
		return nil, nil, err
	}
	return m, judged, nil
}

// oddsOf is the weight of real examples over that of bogus ones.
func oddsOf(examples []Example) float64 {
	var real, bogus float64
	for i := range examples {
		if examples[i].Real {
			real += examples[i].Weight
		} else {
			bogus += examples[i].Weight
		}
	}
	return real / bogus
}

// usable checks examples and leaves out those without weight.
func usable(examples []Example) (ex []Example, nReal, nBogus, nGroups int, err error) {
	ex = make([]Example, 0, len(examples))
	groups := map[string]int{}
	for i, e := range examples {
		if math.IsNaN(e.Weight) || math.IsInf(e.Weight, 0) || e.Weight < 0 {
			return nil, 0, 0, 0, fmt.Errorf("train: an example of %s has weight %g, expected a number ≥ 0", e.Group, e.Weight)
		}
		if e.Weight == 0 {
			continue
		}
		for k, v := range e.Features {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				return nil, 0, 0, 0, fmt.Errorf("train: example %d, of %s: the feature %s is %g, expected a number: remove the example or measure it again", i+1, e.Group, Descriptions[k].Name, v)
			}
		}
		e.Features.Clean()
		ex = append(ex, e)
		groups[e.Group]++
		if e.Real {
			nReal++
		} else {
			nBogus++
		}
	}
	if nReal < 20 || nBogus < 20 || len(groups) < 2 {
		return nil, 0, 0, 0, fmt.Errorf("train: %d real and %d bogus examples from %d frames: need at least 20 of each and two frames", nReal, nBogus, len(groups))
	}
	return ex, nReal, nBogus, len(groups), nil
}

// HoldOut judges every example by a model that was trained on other groups, and
// calibrates on the groups of the other folds. Examples of weight 0 are not
// allowed.
func HoldOut(ex []Example, cfg TrainConfig) ([]Judged, error) {
	fold := assignFolds(ex, cfg.Folds)
	folds := 0
	for _, f := range fold {
		folds = max(folds, f+1)
	}
	score := make([]float64, len(ex))
	faults := make([]error, folds)
	var wg sync.WaitGroup
	room := make(chan struct{}, max(1, runtime.GOMAXPROCS(0)))
	for f := range folds {
		room <- struct{}{}
		wg.Go(func() {
			defer func() { <-room }()
			var in []Example
			for i := range ex {
				if fold[i] != f {
					in = append(in, ex[i])
				}
			}
			if !bothClasses(in) {
				faults[f] = fmt.Errorf("train: without fold %d of %d one class has no example: need more frames with both", f+1, folds)
				return
			}
			held := boost(in, cfg)
			for i := range ex {
				if fold[i] == f {
					score[i] = held.Score(&ex[i].Features)
				}
			}
		})
	}
	wg.Wait()
	if err := errors.Join(faults...); err != nil {
		return nil, err
	}
	return recalibrated(ex, score, fold, folds, cfg), nil
}

// Rejudge judges examples by the scores of a model that has not seen them. Its
// calibration is fitted anew, on the groups of the other folds, so that nothing
// but its order of the examples is judged.
func Rejudge(m *Model, ex []Example, cfg TrainConfig) []Judged {
	fold := assignFolds(ex, cfg.Folds)
	folds := 0
	score := make([]float64, len(ex))
	for i := range ex {
		folds = max(folds, fold[i]+1)
		score[i] = m.Score(&ex[i].Features)
	}
	return recalibrated(ex, score, fold, folds, cfg)
}

func recalibrated(ex []Example, score []float64, fold []int, folds int, cfg TrainConfig) []Judged {
	out := make([]Judged, len(ex))
	for f := range folds {
		var s, w []float64
		var r []bool
		for i := range ex {
			if fold[i] != f {
				s, r, w = append(s, score[i]), append(r, ex[i].Real), append(w, ex[i].Weight)
			}
		}
		c := calibrate(s, r, w, cfg)
		for i := range ex {
			if fold[i] == f {
				out[i] = Judged{Example: ex[i], Score: score[i], P: c.Apply(score[i])}
			}
		}
	}
	return out
}

func bothClasses(ex []Example) bool {
	var r, b bool
	for i := range ex {
		r = r || ex[i].Real
		b = b || !ex[i].Real
	}
	return r && b
}

func calibrate(score []float64, real []bool, weight []float64, cfg TrainConfig) Calibration {
	if len(score) >= cfg.Isotonic {
		if c := FitIsotonic(score, real, weight); c.check() == nil {
			return c
		}
	}
	return FitPlatt(score, real, weight)
}

// assignFolds deals whole groups, ordered by a hash of their name, to folds.
func assignFolds(ex []Example, folds int) []int {
	sum := map[string][32]byte{}
	for i := range ex {
		if _, ok := sum[ex[i].Group]; !ok {
			sum[ex[i].Group] = sha256.Sum256([]byte(ex[i].Group))
		}
	}
	names := make([]string, 0, len(sum))
	for n := range sum {
		names = append(names, n)
	}
	sort.Slice(names, func(a, b int) bool {
		x, y := sum[names[a]], sum[names[b]]
		return string(x[:]) < string(y[:])
	})
	of := map[string]int{}
	folds = max(2, min(folds, len(names)))
	for k, n := range names {
		of[n] = k % folds
	}
	out := make([]int, len(ex))
	for i := range ex {
		out[i] = of[ex[i].Group]
	}
	return out
}

func digestExamples(ex []Example) string {
	h := sha256.New()
	var buf [8]byte
	put := func(v float64) {
		binary.LittleEndian.PutUint64(buf[:], math.Float64bits(v))
		h.Write(buf[:])
	}
	for i := range ex {
		for _, v := range ex[i].Features {
			put(v)
		}
		put(ex[i].Weight)
		if ex[i].Real {
			h.Write([]byte{1})
		} else {
			h.Write([]byte{0})
		}
		fmt.Fprintf(h, "%d:%s", len(ex[i].Group), ex[i].Group)
	}
	return hex.EncodeToString(h.Sum(nil))
}

// rescale fits the weights of a base's terms to examples by logistic
// regression. Each keeps its sign: it is multiplied by a factor ≥ 0, which is
// held near the common factor of Platt's fit by a Gaussian prior of as much
// spread, so that terms that the examples hardly test keep their say. Newton
// steps go from coordinate to coordinate.
func rescale(base *Model, ex []Example) (bias float64, terms []Term) {
	n := len(ex)
	alone := Model{Bias: base.Bias, Terms: base.Terms}
	score, weight, real := make([]float64, n), make([]float64, n), make([]bool, n)
	for i := range ex {
		score[i], real[i], weight[i] = alone.Score(&ex[i].Features), ex[i].Real, ex[i].Weight
	}
	c := FitPlatt(score, real, weight)
	bias = c.A*base.Bias + c.B
	factor := make([]float64, len(base.Terms))
	x := make([][]float64, len(base.Terms))
	for k, t := range base.Terms {
		factor[k] = c.A
		x[k] = make([]float64, n)
		for i := range ex {
			x[k][i] = t.Weight * math.Max(t.Low, math.Min(t.High, ex[i].Features[t.index]))
		}
	}
	for i := range score {
		score[i] = c.A*score[i] + c.B
	}
	step := func(x []float64, pull, stiff, low float64) float64 {
		g, h := pull, stiff
		for i := range score {
			p, v, y := logistic(score[i]), 1.0, 0.0
			if x != nil {
				v = x[i]
			}
			if real[i] {
				y = 1
			}
			g += weight[i] * (y - p) * v
			h += weight[i] * math.Max(p*(1-p), 1e-6) * v * v
		}
		// Half steps: a whole one may overshoot where the loss is flat.
		d := math.Max(low, 0.5*g/h)
		for i := range score {
			if x != nil {
				score[i] += d * x[i]
			} else {
				score[i] += d
			}
		}
		return d
	}
	for range 200 {
		shift := step(nil, 0, 1e-6, math.Inf(-1))
		bias += shift
		moved := math.Abs(shift)
		for k := range x {
			d := step(x[k], (c.A-factor[k])/(c.A*c.A), 1/(c.A*c.A), -factor[k])
			factor[k] += d
			moved = math.Max(moved, math.Abs(d)/c.A)
		}
		if moved < 1e-4 {
			break
		}
	}
	for k, t := range base.Terms {
		t.Weight *= factor[k]
		terms = append(terms, t)
	}
	return bias, terms
}

// startFrom takes over all of a trained model, multiplied and shifted as Platt's
// fit to the examples says. All of its features must be
// in use.
func (m *Model) startFrom(base *Model, ex []Example) {
	score, real, weight := make([]float64, len(ex)), make([]bool, len(ex)), make([]float64, len(ex))
	for i := range ex {
		score[i], real[i], weight[i] = base.Score(&ex[i].Features), ex[i].Real, ex[i].Weight
	}
	c := FitPlatt(score, real, weight)
	m.Bias = c.A*base.Bias + c.B
	for _, t := range base.Terms {
		t.Weight *= c.A
		m.Terms = append(m.Terms, t)
	}
	for i := range base.Trees {
		t := &base.Trees[i]
		n := Tree{Feature: slices.Clone(t.Feature), Cut: slices.Clone(t.Cut), Left: slices.Clone(t.Left)}
		for k := range n.Left {
			if n.Left[k] == 0 {
				n.Cut[k] *= c.A
				n.Feature[k] = 0
				continue
			}
			n.Feature[k] = slices.Index(m.at, base.at[t.Feature[k]])
		}
		m.Trees = append(m.Trees, n)
	}
}

// boost returns a model without calibration: the base, rescaled, and the trees
// that correct it, fitted to the logistic loss. Values are sorted into at most
// Bins cuts at quantiles once; each split is the best over all features and
// cuts by the second-order gain. Everything runs in a fixed order.
func boost(ex []Example, cfg TrainConfig) *Model {
	n := len(ex)
	m := &Model{Features: cfg.features()}
	if err := m.place("boost"); err != nil {
		panic("realbogus: " + err.Error())
	}
	score := make([]float64, n)
	switch {
	case cfg.Base != nil && len(cfg.Base.Trees) > 0:
		m.startFrom(cfg.Base, ex)
	case cfg.Base != nil:
		m.Bias, m.Terms = rescale(cfg.Base, ex)
	default:
		var wr, wb float64
		for i := range ex {
			if ex[i].Real {
				wr += ex[i].Weight
			} else {
				wb += ex[i].Weight
			}
		}
		m.Bias = math.Log(wr / wb)
	}
	for i := range ex {
		score[i] = m.Score(&ex[i].Features)
	}
	cuts := make([][]float64, len(m.at))
	binned := make([][]uint8, len(m.at))
	values := make([]float64, n)
	for f, at := range m.at {
		for i := range ex {
			values[i] = ex[i].Features[at]
		}
		cuts[f] = quantileCuts(values, cfg.Bins)
		binned[f] = make([]uint8, n)
		for i := range ex {
			// Bin b holds cuts[b-1] ≤ value < cuts[b].
			v := ex[i].Features[at]
			binned[f][i] = uint8(sort.Search(len(cuts[f]), func(k int) bool { return cuts[f][k] > v }))
		}
	}
	grad, hess := make([]float64, n), make([]float64, n)
	index := make([]int32, n)
	for range cfg.Trees {
		for i := range ex {
			p := logistic(score[i])
			y := 0.0
			if ex[i].Real {
				y = 1
			}
			grad[i] = ex[i].Weight * (y - p)
			hess[i] = ex[i].Weight * math.Max(p*(1-p), 1e-9)
			index[i] = int32(i)
		}
		g := grower{at: m.at, cuts: cuts, binned: binned, grad: grad, hess: hess, cfg: cfg, score: score}
		g.reserve(1)
		g.grow(0, index, cfg.Depth, math.Inf(-1), math.Inf(1))
		if len(g.tree.Left) == 1 {
			break // nothing left to gain
		}
		m.Trees = append(m.Trees, g.tree)
	}
	return m
}

// quantileCuts returns at most bins−1 (and at most 255) rising cuts, each half
// way between two distinct values.
func quantileCuts(values []float64, bins int) []float64 {
	v := append([]float64(nil), values...)
	sort.Float64s(v)
	bins = min(bins, 256)
	var cuts []float64
	for b := 1; b < bins; b++ {
		k := b * len(v) / bins
		if k == 0 {
			continue
		}
		// The step between distinct values at or after the quantile.
		for k < len(v) && v[k] == v[k-1] {
			k++
		}
		if k == len(v) {
			break
		}
		c := v[k-1] + (v[k]-v[k-1])/2
		if c <= v[k-1] {
			c = v[k]
		}
		if len(cuts) == 0 || c > cuts[len(cuts)-1] {
			cuts = append(cuts, c)
		}
	}
	return cuts
}

type grower struct {
	tree       Tree
	at         []int // of each column, its index in Features
	cuts       [][]float64
	binned     [][]uint8
	grad, hess []float64
	score      []float64
	cfg        TrainConfig
}

// reserve appends n empty nodes.
func (g *grower) reserve(n int) {
	for range n {
		g.tree.Feature = append(g.tree.Feature, 0)
		g.tree.Cut = append(g.tree.Cut, 0)
		g.tree.Left = append(g.tree.Left, 0)
	}
}

// grow splits a node while that gains. Its values stay between low and high:
// a split of a feature with a trend hands its middle to both sides as a limit,
// so that no value on one side passes one on the other.
func (g *grower) grow(node int, index []int32, depth int, low, high float64) {
	var sg, sh float64
	for _, i := range index {
		sg += g.grad[i]
		sh += g.hess[i]
	}
	bestGain, bestF, bestBin := g.cfg.MinGain, -1, 0
	value := func(grad, hess float64) float64 {
		return math.Max(low, math.Min(high, grad/(hess+g.cfg.Ridge)))
	}
	var bestLeft, bestRight float64
	if depth > 0 {
		whole := sg * sg / (sh + g.cfg.Ridge)
		var bg, bh [256]float64
		for f := range g.cuts {
			nb := len(g.cuts[f]) + 1
			if nb < 2 {
				continue
			}
			clear(bg[:nb])
			clear(bh[:nb])
			bins := g.binned[f]
			for _, i := range index {
				b := bins[i]
				bg[b] += g.grad[i]
				bh[b] += g.hess[i]
			}
			var lg, lh float64
			for b := range nb - 1 {
				lg += bg[b]
				lh += bh[b]
				rg, rh := sg-lg, sh-lh
				if lh < g.cfg.MinLeaf || rh < g.cfg.MinLeaf {
					continue
				}
				gain := (lg*lg/(lh+g.cfg.Ridge) + rg*rg/(rh+g.cfg.Ridge) - whole) / 2
				if gain <= bestGain {
					continue
				}
				l, r := value(lg, lh), value(rg, rh)
				if g.cfg.Guarded && float64(Descriptions[g.at[f]].Trend)*(r-l) < 0 {
					continue
				}
				bestGain, bestF, bestBin, bestLeft, bestRight = gain, f, b, l, r
			}
		}
	}
	if bestF < 0 {
		v := g.cfg.Rate * value(sg, sh)
		g.tree.Cut[node] = v
		for _, i := range index {
			g.score[i] += v
		}
		return
	}
	// Stable partition keeps the order of the sums.
	left := make([]int32, 0, len(index))
	right := make([]int32, 0, len(index))
	for _, i := range index {
		if int(g.binned[bestF][i]) <= bestBin {
			left = append(left, i)
		} else {
			right = append(right, i)
		}
	}
	child := len(g.tree.Left)
	g.reserve(2)
	g.tree.Feature[node], g.tree.Cut[node], g.tree.Left[node] = bestF, g.cuts[bestF][bestBin], child
	lowLeft, highLeft, lowRight, highRight := low, high, low, high
	if g.cfg.Guarded {
		middle := (bestLeft + bestRight) / 2
		switch Descriptions[g.at[bestF]].Trend {
		case 1:
			highLeft, lowRight = middle, middle
		case -1:
			lowLeft, highRight = middle, middle
		}
	}
	g.grow(child, left, depth-1, lowLeft, highLeft)
	g.grow(child+1, right, depth-1, lowRight, highRight)
}
