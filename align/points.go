package align

import (
	"math"
	"slices"
)

// point is a position [px].
type point struct{ x, y float64 }

func (p point) finite() bool { return !math.IsNaN(p.x-p.x) && !math.IsNaN(p.y-p.y) }

// index is a uniform grid of cells over a list of points, for neighbour
// searches. It is read-only once made: safe for concurrent use.
type index struct {
	pts    []point
	x0, y0 float64
	cell   float64
	nx, ny int
	start  []int32 // start[c]…start[c+1] bounds cell c in order
	order  []int32 // indices into pts, sorted by cell
}

// newIndex builds the grid over finite points. cell [px] is a wish: it is
// enlarged where it would give many more cells than points.
func newIndex(pts []point, cell float64) *index {
	g := &index{pts: pts, nx: 1, ny: 1, cell: 1}
	if len(pts) == 0 {
		g.start = make([]int32, 2)
		return g
	}
	lo, hi := pts[0], pts[0]
	for _, p := range pts {
		lo.x, lo.y = min(lo.x, p.x), min(lo.y, p.y)
		hi.x, hi.y = max(hi.x, p.x), max(hi.y, p.y)
	}
	g.x0, g.y0 = lo.x, lo.y
	most := float64(4*len(pts) + 64)
	g.cell = max(cell, 1e-9*max(hi.x-lo.x, hi.y-lo.y), 1e-9)
	for (math.Floor((hi.x-lo.x)/g.cell)+1)*(math.Floor((hi.y-lo.y)/g.cell)+1) > most {
		g.cell *= 1.25
	}
	g.nx = int((hi.x-lo.x)/g.cell) + 1
	g.ny = int((hi.y-lo.y)/g.cell) + 1
	g.start = make([]int32, g.nx*g.ny+1)
	g.order = make([]int32, len(pts))
	for _, p := range pts {
		g.start[g.cellOf(p)+1]++
	}
	for c := range g.nx * g.ny {
		g.start[c+1] += g.start[c]
	}
	next := slices.Clone(g.start[:g.nx*g.ny])
	for i, p := range pts {
		c := g.cellOf(p)
		g.order[next[c]] = int32(i)
		next[c]++
	}
	return g
}

func (g *index) cellOf(p point) int {
	i := min(max(int((p.x-g.x0)/g.cell), 0), g.nx-1)
	j := min(max(int((p.y-g.y0)/g.cell), 0), g.ny-1)
	return j*g.nx + i
}

// cells returns the clipped range of cells that a square of half-side r around
// (x,y) touches; empty when i0 > i1 or j0 > j1.
func (g *index) cells(x, y, r float64) (i0, i1, j0, j1 int) {
	span := func(v, origin float64, n int) (int, int) {
		lo, hi := (v-r-origin)/g.cell, (v+r-origin)/g.cell
		if !(hi >= 0 && lo < float64(n)) {
			// The last cell also holds points on the far border.
			if !(lo <= float64(n) && hi >= 0) {
				return 1, 0
			}
			return n - 1, n - 1
		}
		return int(max(lo, 0)), int(min(hi, float64(n-1)))
	}
	i0, i1 = span(x, g.x0, g.nx)
	j0, j1 = span(y, g.y0, g.ny)
	return
}

// nearest returns the point closest to (x,y) within r and its squared distance,
// or -1. Of equally distant points the lowest index is taken.
func (g *index) nearest(x, y, r float64) (int, float64) {
	best, bestD := -1, r*r
	i0, i1, j0, j1 := g.cells(x, y, r)
	for j := j0; j <= j1; j++ {
		if i0 > i1 {
			break
		}
		for _, k := range g.order[g.start[j*g.nx+i0]:g.start[j*g.nx+i1+1]] {
			p := g.pts[k]
			d := (p.x-x)*(p.x-x) + (p.y-y)*(p.y-y)
			if d < bestD || d == bestD && (best < 0 || int(k) < best) {
				best, bestD = int(k), d
			}
		}
	}
	return best, bestD
}

// neighbours returns the k points nearest to point i, itself excluded, nearest
// first; fewer when the list is shorter.
func (g *index) neighbours(i, k int) []int32 {
	type item struct {
		d float64
		k int32
	}
	k = min(k, len(g.pts)-1)
	if k <= 0 {
		return nil
	}
	p := g.pts[i]
	far := g.cell * float64(g.nx+g.ny+2)
	var found []item
	for r := g.cell; ; r *= 1.6 {
		found = found[:0]
		i0, i1, j0, j1 := g.cells(p.x, p.y, r)
		for j := j0; j <= j1; j++ {
			for _, q := range g.order[g.start[j*g.nx+i0]:g.start[j*g.nx+i1+1]] {
				d := (g.pts[q].x-p.x)*(g.pts[q].x-p.x) + (g.pts[q].y-p.y)*(g.pts[q].y-p.y)
				if int(q) != i && (d <= r*r || r > far) {
					found = append(found, item{d, q})
				}
			}
		}
		if len(found) >= k || r > far {
			break
		}
	}
	slices.SortFunc(found, func(a, b item) int {
		if a.d != b.d {
			if a.d < b.d {
				return -1
			}
			return 1
		}
		return int(a.k - b.k)
	})
	out := make([]int32, min(k, len(found)))
	for n := range out {
		out[n] = found[n].k
	}
	return out
}
