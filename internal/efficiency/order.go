package efficiency

import "sort"

// sortedBy returns the indices 0…n-1 in the order of less, ties as they come.
func sortedBy(n int, less func(a, b int) bool) []int {
	order := make([]int, n)
	for i := range order {
		order[i] = i
	}
	sort.SliceStable(order, func(a, b int) bool { return less(order[a], order[b]) })
	return order
}
