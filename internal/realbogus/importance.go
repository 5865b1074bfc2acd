package realbogus

import (
	"cmp"
	"math/rand/v2"
	"slices"
)

// Weighed is a feature with what the model loses without it.
type Weighed struct {
	Feature string  `json:"feature"`
	Loss    float64 `json:"loss"` // rise of the log loss when its values are dealt anew among held-out examples
}

// Importance trains on parts of the groups and measures on the others how much
// the log loss rises when the values of one feature are permuted (Breiman 2001,
// Mach. Learn. 45, 5), the most important first. Features that say the same
// share their importance.
func Importance(examples []Example, cfg TrainConfig) ([]Weighed, error) {
	ex, _, _, _, err := usable(examples)
	if err != nil {
		return nil, err
	}
	const parts = 3
	fold := assignFolds(ex, parts)
	loss := make([]float64, Count)
	for f := range parts {
		var in []Example
		var out []int
		for i := range ex {
			if fold[i] != f {
				in = append(in, ex[i])
			} else {
				out = append(out, i)
			}
		}
		if len(out) == 0 || !bothClasses(in) {
			continue
		}
		m := boost(in, cfg)
		p, real, weight := make([]float64, len(out)), make([]bool, len(out)), make([]float64, len(out))
		judge := func(column int, from []int) float64 {
			for k, i := range out {
				x := ex[i].Features
				if column >= 0 {
					x[column] = ex[out[from[k]]].Features[column]
				}
				p[k], real[k], weight[k] = logistic(m.Score(&x)), ex[i].Real, ex[i].Weight
			}
			return LogLoss(p, real, weight)
		}
		plain := judge(-1, nil)
		for c := range Count {
			from := rand.New(rand.NewPCG(uint64(f), uint64(c))).Perm(len(out))
			loss[c] += (judge(c, from) - plain) / parts
		}
	}
	list := make([]Weighed, Count)
	for c := range list {
		list[c] = Weighed{Descriptions[c].Name, loss[c]}
	}
	slices.SortStableFunc(list, func(a, b Weighed) int { return cmp.Compare(b.Loss, a.Loss) })
	return list, nil
}
