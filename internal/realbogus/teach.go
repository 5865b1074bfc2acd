package realbogus

import (
	"cmp"
	"math"
	"slices"
)

// TeachingOrder orders candidates by how much a reviewer's label would teach the
// model: the one to label first comes first. All indices of list are in it.
//
// A label moves a model fitted to the logistic loss by the gradient that it
// adds, whose expected length is 2p(1−p) times that of the example in the
// model's own terms (expected model change: Settles, Craven & Ray 2008, NIPS
// 20, 1289). For trees those terms are the leaves that the example falls into,
// as many for each. So that the first labels are not all of one kind, that is
// multiplied by the distance of the candidate from those before it: the
// fraction of the trees that tell it from the nearest of them (the proximity of
// Breiman 2001, Mach. Learn. 45, 5). Equal values keep the order of the list.
//
// The first most candidates are chosen so; those after them follow by the
// expected change alone. It takes most × len(list) × trees steps.
func TeachingOrder(m *Model, list []Features, most int) []int {
	n := len(list)
	change := make([]float64, n)
	for i := range list {
		p := m.Probability(&list[i])
		change[i] = 2 * p * (1 - p)
	}
	byChange := make([]int, n)
	for i := range byChange {
		byChange[i] = i
	}
	slices.SortStableFunc(byChange, func(a, b int) int { return cmp.Compare(change[b], change[a]) })
	// Far down the list nothing can come to the front: a distance is at most 1.
	pool := byChange[:min(n, max(4*most, 200))]
	leaves := make([][]int32, len(pool))
	for k, i := range pool {
		leaves[k] = m.leaves(&list[i])
	}
	distance := make([]float64, len(pool))
	for k := range distance {
		distance[k] = 1
	}
	chosen := make([]bool, n)
	order := make([]int, 0, n)
	for range min(most, len(pool)) {
		best := -1
		for k, i := range pool {
			if !chosen[i] && (best < 0 || change[i]*distance[k] > change[pool[best]]*distance[best]) {
				best = k
			}
		}
		chosen[pool[best]] = true
		order = append(order, pool[best])
		for k := range pool {
			if len(m.Trees) == 0 {
				break
			}
			other := 0
			for t, l := range leaves[k] {
				if l != leaves[best][t] {
					other++
				}
			}
			// Never quite zero: twins still go by their change.
			distance[k] = math.Min(distance[k], math.Max(1e-3, float64(other)/float64(len(m.Trees))))
		}
	}
	for _, i := range byChange {
		if !chosen[i] {
			order = append(order, i)
		}
	}
	return order
}

// leaves returns the number of the leaf in which the features end, for each
// tree.
func (m *Model) leaves(f *Features) []int32 {
	out := make([]int32, len(m.Trees))
	for i := range m.Trees {
		t := &m.Trees[i]
		n := 0
		for t.Left[n] != 0 {
			if f[m.at[t.Feature[n]]] < t.Cut[n] {
				n = t.Left[n]
			} else {
				n = t.Left[n] + 1
			}
		}
		out[i] = int32(n)
	}
	return out
}
