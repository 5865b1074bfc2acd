package realbogus

import (
	"math"
	"sort"
)

// Judged is an example with what a model said of it that has not seen its
// group.
type Judged struct {
	Example
	Score float64 // log odds before calibration
	P     float64 // probability, calibrated without the group
}

// Strength is the true signal-to-noise ratio of a source that was put in, and
// the measured significance where no truth is known.
func (e *Example) Strength() float64 {
	if e.SN > 0 {
		return e.SN
	}
	return math.Abs(e.Significance)
}

// Point is one cut in the score: candidates at or above it are kept.
type Point struct {
	Score     float64
	Kept      float64 // fraction of the real ones that is kept (recall, true positive rate)
	False     float64 // fraction of the bogus ones that is kept (false positive rate)
	Precision float64 // fraction of what is kept that is real
}

// Curve holds the cuts at all distinct scores from the highest to the lowest,
// after a first point that keeps nothing (precision 1).
type Curve []Point

// NewCurve sorts scores with labels and weights. Without an example of a class
// its fraction is NaN.
func NewCurve(score []float64, real []bool, weight []float64) Curve {
	order := make([]int, len(score))
	var np, nn float64
	for i := range order {
		order[i] = i
		if real[i] {
			np += weight[i]
		} else {
			nn += weight[i]
		}
	}
	sort.SliceStable(order, func(a, b int) bool { return score[order[a]] > score[order[b]] })
	c := Curve{{Score: math.Inf(1), Kept: 0 / np, False: 0 / nn, Precision: 1}}
	var tp, fp float64
	for k := 0; k < len(order); {
		s := score[order[k]]
		for ; k < len(order) && score[order[k]] == s; k++ {
			if i := order[k]; real[i] {
				tp += weight[i]
			} else {
				fp += weight[i]
			}
		}
		c = append(c, Point{Score: s, Kept: tp / np, False: fp / nn, Precision: tp / (tp + fp)})
	}
	return c
}

// Area is that under Kept against False: the chance that a real one scores
// higher than a bogus one (ties count half).
func (c Curve) Area() float64 {
	var a float64
	for i := 1; i < len(c); i++ {
		a += (c[i].False - c[i-1].False) * (c[i].Kept + c[i-1].Kept) / 2
	}
	return a
}

// AveragePrecision is the mean precision over the real ones kept, as a sum of
// steps without interpolation.
func (c Curve) AveragePrecision() float64 {
	var a float64
	for i := 1; i < len(c); i++ {
		a += (c[i].Kept - c[i-1].Kept) * c[i].Precision
	}
	return a
}

// CutAt returns the lowest score at which at most a fraction of the bogus ones
// is kept.
func (c Curve) CutAt(falseFraction float64) float64 {
	cut := math.Inf(1)
	for _, p := range c {
		if !(p.False <= falseFraction) {
			break
		}
		cut = p.Score
	}
	return cut
}

// Brier returns the weighted mean square of stated probability minus outcome
// (Brier 1950, Mon. Weather Rev. 78, 1).
func Brier(p []float64, real []bool, weight []float64) float64 {
	var s, w float64
	for i, v := range p {
		y := 0.0
		if real[i] {
			y = 1
		}
		s += weight[i] * (v - y) * (v - y)
		w += weight[i]
	}
	return s / w
}

// LogLoss returns the weighted mean of minus the logarithm of the probability
// stated for what was the case.
func LogLoss(p []float64, real []bool, weight []float64) float64 {
	var s, w float64
	for i, v := range p {
		q := math.Max(1e-9, math.Min(1-1e-9, v))
		if !real[i] {
			q = 1 - q
		}
		s -= weight[i] * math.Log(q)
		w += weight[i]
	}
	return s / w
}

// Missed returns the fraction of the real ones of more than the given strength
// that score below a cut, and how many there are.
func Missed(list []Judged, cut, strength float64) (fraction float64, of int) {
	var lost, all float64
	for i := range list {
		e := &list[i]
		if !e.Real || !(e.Strength() > strength) {
			continue
		}
		of++
		all += e.Weight
		if e.Score < cut {
			lost += e.Weight
		}
	}
	return lost / all, of
}

// Columns returns scores, probabilities, labels and weights.
func Columns(list []Judged) (score, p []float64, real []bool, weight []float64) {
	for i := range list {
		e := &list[i]
		score, p, real, weight = append(score, e.Score), append(p, e.P), append(real, e.Real), append(weight, e.Weight)
	}
	return score, p, real, weight
}

// Measure computes the metrics of judged examples.
func Measure(list []Judged) *Metrics {
	score, p, real, weight := Columns(list)
	c := NewCurve(score, real, weight)
	m := &Metrics{AUC: c.Area(), AveragePrecision: c.AveragePrecision(), LogLoss: LogLoss(p, real, weight), Brier: Brier(p, real, weight)}
	cut := c.CutAt(0.01)
	m.MissedAt1, _ = Missed(list, cut, -1)
	m.MissedAt01, _ = Missed(list, c.CutAt(0.001), -1)
	// Where nothing is that strong there is nothing to state.
	if q, n := Missed(list, cut, 7); n > 0 {
		m.MissedAbove7 = &q
	}
	if q, n := Missed(list, cut, 10); n > 0 {
		m.MissedAbove10 = &q
	}
	m.Reliability, m.CalibrationError = Reliability(p, real, weight, 10)
	return m
}
