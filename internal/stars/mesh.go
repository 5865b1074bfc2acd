package stars

import "math"

// binFactor is the side, in pixels, of the small bins on which the sky is
// measured. It depends on the frame's size alone, so that a mesh can be put
// back in place later.
func binFactor(width, height int) int {
	switch n := min(width, height); {
	case n >= 48:
		return 4
	case n >= 16:
		return 2
	}
	return 1
}

// cellEdges returns the n+1 edges of the cells along an axis of the given
// length, in bins.
func cellEdges(length, bin, n int) []int {
	bins := (length + bin - 1) / bin
	e := make([]int, n+1)
	for k := range e {
		e[k] = k * bins / n
	}
	return e
}

// cellCentres returns the 0-based pixel positions of the cells' centres.
func cellCentres(length, bin, n int) []float64 {
	e := cellEdges(length, bin, n)
	c := make([]float64, n)
	for k := range c {
		c[k] = float64(e[k]*bin+min(e[k+1]*bin, length)-1) / 2
	}
	return c
}

// slopeWeights gives the slope at knot k of a curve through values at the knots
// as a·y[k-1] + b·y[k] + c·y[k+1] (inside: exact for parabolas). At the ends
// the slope is the mean one over the two outermost intervals, which halves the
// noise that extrapolation over half a cell adds; then the three weights refer
// to the outermost three knots. first is the index the weights start at.
func slopeWeights(knots []float64, k int) (first int, w [3]float64) {
	n := len(knots)
	switch {
	case n == 1:
		return 0, w
	case n == 2:
		h := knots[1] - knots[0]
		return 0, [3]float64{-1 / h, 1 / h, 0}
	case k == 0:
		h := knots[2] - knots[0]
		return 0, [3]float64{-1 / h, 0, 1 / h}
	case k == n-1:
		h := knots[n-1] - knots[n-3]
		return n - 3, [3]float64{-1 / h, 0, 1 / h}
	}
	h0, h1 := knots[k]-knots[k-1], knots[k+1]-knots[k]
	return k - 1, [3]float64{-h1 / (h0 * (h0 + h1)), (h1 - h0) / (h0 * h1), h0 / (h1 * (h0 + h1))}
}

// interval returns k with knots[k] <= p < knots[k+1], at most the last
// interval, at least the first; 0 for a single knot.
func interval(knots []float64, p float64) int {
	lo, hi := 0, len(knots)-1
	for hi-lo > 1 {
		if mid := (lo + hi) / 2; knots[mid] <= p {
			lo = mid
		} else {
			hi = mid
		}
	}
	return lo
}

// knotWeights spreads the interpolation at p over the knots: w, as long as
// knots, is overwritten with the weight of each. Only the range [from,to) is
// not zero. Beyond the outer knots the curve goes on straight.
func knotWeights(w, knots []float64, p float64) (from, to int) {
	clear(w)
	n := len(knots)
	if n == 1 {
		w[0] = 1
		return 0, 1
	}
	add := func(k int, f float64) { // f times the slope at knot k
		first, s := slopeWeights(knots, k)
		for i, v := range s {
			if v != 0 {
				w[first+i] += f * v
			}
		}
	}
	switch {
	case p <= knots[0]:
		w[0] = 1
		add(0, p-knots[0])
	case p >= knots[n-1]:
		w[n-1] = 1
		add(n-1, p-knots[n-1])
	default:
		k := interval(knots, p)
		h := knots[k+1] - knots[k]
		t := (p - knots[k]) / h
		w[k] += (1 + 2*t) * (1 - t) * (1 - t)
		w[k+1] += t * t * (3 - 2*t)
		add(k, h*t*(1-t)*(1-t))
		add(k+1, h*t*t*(t-1))
	}
	for from = 0; w[from] == 0; from++ {
	}
	for to = n; w[to-1] == 0; to-- {
	}
	return from, to
}

// meshRow evaluates a mesh along a row: dst[i] is the value at x = x0 + i·step,
// y = y (0-based pixels).
func meshRow(dst []float32, mesh []float32, xc, yc []float64, x0, step, y float64) {
	nx := len(xc)
	wy := make([]float64, len(yc)+2*nx)
	v, m := wy[len(yc):len(yc)+nx], wy[len(yc)+nx:]
	wy = wy[:len(yc)]
	from, to := knotWeights(wy, yc, y)
	for cy := from; cy < to; cy++ {
		w := wy[cy]
		for cx, s := range mesh[cy*nx : (cy+1)*nx] {
			v[cx] += w * float64(s)
		}
	}
	if nx == 1 {
		c := float32(v[0])
		for i := range dst {
			dst[i] = c
		}
		return
	}
	for k := range m {
		first, s := slopeWeights(xc, k)
		m[k] = s[0]*v[first] + s[1]*v[first+1]
		if s[2] != 0 {
			m[k] += s[2] * v[first+2]
		}
	}
	// place returns the first index with x >= p, within dst.
	place := func(p float64) int {
		return min(max(int(math.Ceil((p-x0)/step)), 0), len(dst))
	}
	run := func(from, to int, origin, c0, c1, c2, c3 float64) {
		if from >= to {
			return
		}
		a0, a1, a2, a3 := float32(c0), float32(c1), float32(c2), float32(c3)
		u0, st := float32(x0+float64(from)*step-origin), float32(step)
		for i := range dst[from:to] {
			u := u0 + float32(i)*st
			dst[from+i] = a0 + u*(a1+u*(a2+u*a3))
		}
	}
	at := place(xc[0])
	run(0, at, xc[0], v[0], m[0], 0, 0)
	for k := 0; k+1 < nx; k++ {
		next := place(xc[k+1])
		h := xc[k+1] - xc[k]
		d := (v[k+1] - v[k]) / h
		run(at, next, xc[k], v[k], m[k], (3*d-2*m[k]-m[k+1])/h, (m[k]+m[k+1]-2*d)/(h*h))
		at = next
	}
	run(at, len(dst), xc[nx-1], v[nx-1], m[nx-1], 0, 0)
}

// meshAt evaluates a mesh at one point (0-based pixels).
func meshAt(mesh []float32, xc, yc []float64, x, y float64) float64 {
	nx := len(xc)
	wx, wy := make([]float64, nx), make([]float64, len(yc))
	fx, tx := knotWeights(wx, xc, x)
	fy, ty := knotWeights(wy, yc, y)
	sum := 0.0
	for cy := fy; cy < ty; cy++ {
		for cx := fx; cx < tx; cx++ {
			sum += wy[cy] * wx[cx] * float64(mesh[cy*nx+cx])
		}
	}
	return sum
}

// smoothMesh writes the mesh smoothed by (1 2 1)/4 along both axes into dst.
// The end cells keep their value along the axis across which they end, so
// slopes survive.
func smoothMesh(dst, src []float32, nx, ny int) {
	tmp := make([]float32, len(src))
	for cy := 0; cy < ny; cy++ {
		row, out := src[cy*nx:(cy+1)*nx], tmp[cy*nx:(cy+1)*nx]
		copy(out, row)
		for cx := 1; cx+1 < nx; cx++ {
			out[cx] = (row[cx-1] + 2*row[cx] + row[cx+1]) / 4
		}
	}
	copy(dst, tmp)
	for cy := 1; cy+1 < ny; cy++ {
		for cx := 0; cx < nx; cx++ {
			k := cy*nx + cx
			dst[k] = (tmp[k-nx] + 2*tmp[k] + tmp[k+nx]) / 4
		}
	}
}

// fillMesh replaces the cells with ok false, ring after ring, from the good
// cells up to two away: by a plane through them where they span one, so that a
// slope goes on, else by their mean. It returns false if no cell is good.
func fillMesh(mesh []float32, ok []bool, nx, ny int) bool {
	good := append([]bool(nil), ok...)
	next := append([]bool(nil), ok...)
	for {
		missing, found := 0, 0
		for cy := 0; cy < ny; cy++ {
			for cx := 0; cx < nx; cx++ {
				if good[cy*nx+cx] {
					continue
				}
				missing++
				if v, any := fromNeighbours(mesh, good, nx, ny, cx, cy); any {
					mesh[cy*nx+cx] = float32(v)
					next[cy*nx+cx] = true
					found++
				}
			}
		}
		if missing == 0 {
			return true
		}
		if found == 0 {
			return false
		}
		copy(good, next)
	}
}

// fromNeighbours is the value at cell (cx,cy) of the plane fitted, with weights
// that fall with distance, to the good cells up to two away, or their weighted
// mean if they do not fix a plane.
func fromNeighbours(mesh []float32, good []bool, nx, ny, cx, cy int) (value float64, any bool) {
	var s, sx, sy, sxx, syy, sxy, sv, svx, svy float64
	for y := max(0, cy-2); y <= min(ny-1, cy+2); y++ {
		for x := max(0, cx-2); x <= min(nx-1, cx+2); x++ {
			if !good[y*nx+x] {
				continue
			}
			u, v := float64(x-cx), float64(y-cy)
			w := 1 / (u*u + v*v)
			z := w * float64(mesh[y*nx+x])
			s += w
			sx += w * u
			sy += w * v
			sxx += w * u * u
			syy += w * v * v
			sxy += w * u * v
			sv += z
			svx += z * u
			svy += z * v
		}
	}
	if s == 0 {
		return 0, false
	}
	mean := sv / s
	mx, my := sx/s, sy/s
	cxx, cyy, cxy := sxx/s-mx*mx, syy/s-my*my, sxy/s-mx*my
	det := cxx*cyy - cxy*cxy
	if cxx < 0.1 || cyy < 0.1 || det < 0.3*cxx*cyy {
		return mean, true
	}
	px, py := svx/s-mean*mx, svy/s-mean*my
	a, b := (px*cyy-py*cxy)/det, (py*cxx-px*cxy)/det
	return mean - a*mx - b*my, true
}
