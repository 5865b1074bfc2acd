package realbogus

import (
	"fmt"
	"math"
	"sort"

	"nightsift/internal/robust"
)

// Calibration maps a score to a probability: "none" is the logistic function
// itself, "platt" the logistic function of A·score + B, "isotonic" a
// non-decreasing polyline through the knots (constant beyond the ends).
type Calibration struct {
	Kind  string       `json:"kind"`
	A     float64      `json:"a,omitempty"`
	B     float64      `json:"b,omitempty"`
	Knots [][2]float64 `json:"knots,omitempty"` // score, probability
}

func logistic(s float64) float64 { return 1 / (1 + math.Exp(-s)) }

// Apply returns the probability for a score.
func (c *Calibration) Apply(score float64) float64 {
	switch c.Kind {
	case "platt":
		return logistic(c.A*score + c.B)
	case "isotonic":
		if len(c.Knots) == 0 {
			return math.NaN()
		}
		k := sort.Search(len(c.Knots), func(i int) bool { return c.Knots[i][0] > score })
		if k == 0 {
			return c.Knots[0][1]
		}
		if k == len(c.Knots) {
			return c.Knots[k-1][1]
		}
		a, b := c.Knots[k-1], c.Knots[k]
		t := (score - a[0]) / (b[0] - a[0])
		return a[1] + t*(b[1]-a[1])
	}
	return logistic(score)
}

// shift moves the log odds of every stated probability by d.
func (c *Calibration) shift(d float64) {
	if d == 0 {
		return
	}
	if c.Kind == "none" {
		*c = Calibration{Kind: "platt", A: 1}
	}
	c.B += d
	for i, k := range c.Knots {
		p := math.Max(1e-9, math.Min(1-1e-9, k[1]))
		c.Knots[i][1] = logistic(math.Log(p/(1-p)) + d)
	}
}

func (c *Calibration) check() error {
	switch c.Kind {
	case "none":
		return nil
	case "platt":
		if !(c.A > 0 && c.A <= largest && math.Abs(c.B) <= largest) {
			return fmt.Errorf("calibration: slope %g and offset %g: the slope must be positive", c.A, c.B)
		}
		return nil
	case "isotonic":
		for i, k := range c.Knots {
			if !(k[1] >= 0 && k[1] <= 1) || !(math.Abs(k[0]) <= 1e18) || i > 0 && (k[0] <= c.Knots[i-1][0] || k[1] < c.Knots[i-1][1]) {
				return fmt.Errorf("calibration: knot %d is %v: scores must rise and probabilities not fall", i, k)
			}
		}
		if len(c.Knots) > 0 {
			return nil
		}
		return fmt.Errorf("calibration: isotonic without knots")
	}
	return fmt.Errorf("calibration %q is unknown, expected none, platt or isotonic", c.Kind)
}

// FitPlatt fits A and B by Newton's method to weighted labels, with the
// softened targets of Platt (1999) that keep a separable set finite.
func FitPlatt(score []float64, real []bool, weight []float64) Calibration {
	var np, nn float64
	for i := range score {
		if real[i] {
			np += weight[i]
		} else {
			nn += weight[i]
		}
	}
	hi, lo := (np+1)/(np+2), 1/(nn+2)
	a, b := 1.0, 0.0
	loss := func(a, b float64) float64 {
		var l float64
		for i, s := range score {
			z := a*s + b
			t := lo
			if real[i] {
				t = hi
			}
			// log(1+e^z) − t·z, written for both signs of z
			l += weight[i] * (math.Max(z, 0) + math.Log1p(math.Exp(-math.Abs(z))) - t*z)
		}
		return l
	}
	now := loss(a, b)
	for range 100 {
		var ga, gb, haa, hab, hbb float64
		for i, s := range score {
			p := logistic(a*s + b)
			t := lo
			if real[i] {
				t = hi
			}
			d, w := weight[i]*(p-t), weight[i]*math.Max(p*(1-p), 1e-12)
			ga += d * s
			gb += d
			haa += w * s * s
			hab += w * s
			hbb += w
		}
		haa += 1e-9
		hbb += 1e-9
		det := haa*hbb - hab*hab
		if !(det > 0) {
			break
		}
		da, db := (hbb*ga-hab*gb)/det, (haa*gb-hab*ga)/det
		step := 1.0
		for step > 1e-8 {
			if l := loss(a-step*da, b-step*db); l <= now {
				now = l
				break
			}
			step /= 2
		}
		a, b = a-step*da, b-step*db
		if math.Abs(step*da)+math.Abs(step*db) < 1e-10*(1+math.Abs(a)+math.Abs(b)) {
			break
		}
	}
	if !(a > 1e-3) { // scores that say nothing, or the opposite
		a = 1e-3
	}
	return Calibration{Kind: "platt", A: a, B: b}
}

// poolAdjacent returns the isotonic fit at each of the sorted values.
func poolAdjacent(y, w []float64) []float64 {
	type block struct {
		sum, weight float64
		count       int
	}
	var stack []block
	for i := range y {
		stack = append(stack, block{y[i] * w[i], w[i], 1})
		for n := len(stack); n > 1 && stack[n-2].sum*stack[n-1].weight >= stack[n-1].sum*stack[n-2].weight; n = len(stack) {
			stack[n-2].sum += stack[n-1].sum
			stack[n-2].weight += stack[n-1].weight
			stack[n-2].count += stack[n-1].count
			stack = stack[:n-1]
		}
	}
	out := make([]float64, 0, len(y))
	for _, b := range stack {
		for range b.count {
			out = append(out, b.sum/b.weight)
		}
	}
	return out
}

// FitIsotonic fits a non-decreasing polyline. Each pooled block becomes a knot
// at its mean score with (successes+½)/(weight+1), so that a pure block at an
// end never claims certainty; blocks lighter than 20 are joined with their
// neighbour.
func FitIsotonic(score []float64, real []bool, weight []float64) Calibration {
	order := make([]int, 0, len(score))
	for i := range score {
		if weight[i] > 0 {
			order = append(order, i)
		}
	}
	sort.SliceStable(order, func(a, b int) bool { return score[order[a]] < score[order[b]] })
	y, w := make([]float64, len(order)), make([]float64, len(order))
	for k, i := range order {
		w[k] = weight[i]
		if real[i] {
			y[k] = 1
		}
	}
	fit := poolAdjacent(y, w)
	type group struct{ weight, hits, score float64 }
	var groups []group
	for k := 0; k < len(order); {
		var g group
		for v := fit[k]; k < len(order) && fit[k] == v; k++ {
			g.weight += w[k]
			g.hits += w[k] * y[k]
			g.score += w[k] * score[order[k]]
		}
		if n := len(groups); n > 0 && groups[n-1].weight < 20 {
			groups[n-1].weight += g.weight
			groups[n-1].hits += g.hits
			groups[n-1].score += g.score
			continue
		}
		groups = append(groups, g)
	}
	c := Calibration{Kind: "isotonic"}
	last := -1.0
	for _, g := range groups {
		s, p := g.score/g.weight, (g.hits+0.5)/(g.weight+1)
		p = math.Max(p, last)
		if n := len(c.Knots); n > 0 && !(s > c.Knots[n-1][0]) {
			continue
		}
		c.Knots = append(c.Knots, [2]float64{s, p})
		last = p
	}
	return c
}

// Bin is one row of a reliability table.
type Bin struct {
	Low       float64 `json:"low"` // of the stated probability
	High      float64 `json:"high"`
	Weight    float64 `json:"weight"` // candidates
	Stated    float64 `json:"stated"` // mean stated probability
	Found     float64 `json:"found"`  // fraction that was real
	FoundLow  float64 `json:"found_low"`
	FoundHigh float64 `json:"found_high"` // 68 % interval (Wilson)
}

// Reliability sorts stated probabilities into equal bins and compares each
// with the fraction that was real. The expected calibration error is the mean
// absolute difference weighted by the bins' content.
func Reliability(p []float64, real []bool, weight []float64, bins int) (table []Bin, ece float64) {
	table = make([]Bin, bins)
	var total float64
	for i, v := range p {
		b := &table[max(0, min(bins-1, int(v*float64(bins))))]
		b.Weight += weight[i]
		b.Stated += weight[i] * v
		if real[i] {
			b.Found += weight[i]
		}
		total += weight[i]
	}
	for k := range table {
		b := &table[k]
		b.Low, b.High = float64(k)/float64(bins), float64(k+1)/float64(bins)
		if b.Weight > 0 {
			b.Stated /= b.Weight
			b.Found /= b.Weight
			ece += b.Weight * math.Abs(b.Stated-b.Found)
			b.FoundLow, b.FoundHigh = robust.Wilson(b.Found*b.Weight, b.Weight, 1)
		}
	}
	if total > 0 {
		ece /= total
	}
	return table, ece
}
