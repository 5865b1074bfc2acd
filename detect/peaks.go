package detect

import (
	"math"
	"sort"

	"nightsift/internal/frame"
)

// peak is a local extremum of the significance, interpolated between pixels.
type peak struct {
	x, y float64 // FITS px
	s    float64 // signed, interpolated
	comp int32   // index of its component
}

// component is a connected set of pixels of one sign (eight neighbours) with
// |significance| at or above the low threshold. Moments are weighted with
// |significance| and relate to FITS coordinates.
type component struct {
	area           int
	sum            float64
	sx, sy         float64
	sxx, syy, sxy  float64
	x0, x1, y0, y1 int32 // FITS px, inclusive
	positive       bool
	top            float64 // largest |significance| of a pixel
}

// run is a stretch of pixels of one row above the low threshold.
type run struct {
	i0, i1 int32 // array indices, i1 exclusive
	comp   int32
	pos    bool
}

// scanner finds peaks and components in one pass over the rows. A scanner
// holds scratch: use one for each goroutine.
type scanner struct {
	parent []int32
	comps  []component
	peaks  []peak
	prev   []run
	cur    []run
}

// find returns all local extrema with pixel |significance| ≥ peakLow and all
// components of pixels ≥ low (low ≤ peakLow). NaN counts as empty.
func (s *scanner) find(sig *frame.Image, low, peakLow float32) ([]peak, []component) {
	s.parent, s.comps, s.peaks = s.parent[:0], s.comps[:0], s.peaks[:0]
	s.prev = s.prev[:0]
	w, h := sig.Width, sig.Height
	for j := range h {
		row := sig.Row(j)
		s.cur = s.cur[:0]
		for i := 0; i < w; i++ {
			v := row[i]
			if !(v >= low) && !(v <= -low) {
				continue
			}
			start, pos := i, v > 0
			for i++; i < w; i++ {
				v = row[i]
				if pos && !(v >= low) || !pos && !(v <= -low) {
					break
				}
			}
			s.addRun(sig, j, start, i, pos, peakLow)
			i-- // the pixel that ended the run may start one of the other sign
		}
		s.prev, s.cur = s.cur, s.prev
	}
	// Collapse the union–find forest into compact indices.
	index := make([]int32, len(s.parent))
	out := make([]component, 0, len(s.parent))
	for k := range s.parent {
		if s.parent[k] == int32(k) {
			index[k] = int32(len(out))
			out = append(out, s.comps[k])
		}
	}
	for k := range s.parent {
		if r := s.root(int32(k)); r != int32(k) {
			index[k] = index[r]
		}
	}
	peaks := make([]peak, len(s.peaks))
	copy(peaks, s.peaks)
	for k := range peaks {
		peaks[k].comp = index[peaks[k].comp]
	}
	// Bright first; position breaks ties so that the order never depends on
	// the sort.
	sort.Slice(peaks, func(a, b int) bool {
		p, q := &peaks[a], &peaks[b]
		if pa, qa := math.Abs(p.s), math.Abs(q.s); pa != qa {
			return pa > qa
		}
		if p.y != q.y {
			return p.y < q.y
		}
		return p.x < q.x
	})
	return peaks, out
}

func (s *scanner) root(k int32) int32 {
	for s.parent[k] != k {
		s.parent[k] = s.parent[s.parent[k]]
		k = s.parent[k]
	}
	return k
}

func (s *scanner) addRun(sig *frame.Image, j, i0, i1 int, pos bool, peakLow float32) {
	row := sig.Row(j)
	c := component{area: i1 - i0, x0: int32(i0 + 1), x1: int32(i1), y0: int32(j + 1), y1: int32(j + 1), positive: pos}
	y := float64(j + 1)
	for i := i0; i < i1; i++ {
		v := math.Abs(float64(row[i]))
		if math.IsInf(v, 0) {
			v = 1e6 // a broken plane must not poison the moments
		}
		x := float64(i + 1)
		c.sum += v
		c.sx += v * x
		c.sxx += v * x * x
		c.top = math.Max(c.top, v)
	}
	c.sy = c.sum * y
	c.syy = c.sum * y * y
	c.sxy = c.sx * y
	id := int32(len(s.parent))
	s.parent = append(s.parent, id)
	s.comps = append(s.comps, c)
	for k := range s.prev {
		p := &s.prev[k]
		if p.pos != pos || int(p.i1) < i0 || int(p.i0) > i1 {
			continue
		}
		a, b := s.root(p.comp), s.root(id)
		if a == b {
			continue
		}
		if b < a {
			a, b = b, a
		}
		s.parent[b] = a
		s.comps[a].merge(&s.comps[b])
	}
	s.cur = append(s.cur, run{int32(i0), int32(i1), id, pos})
	sign := float32(1)
	if !pos {
		sign = -1
	}
	for i := i0; i < i1; i++ {
		if v := sign * row[i]; v >= peakLow && isPeak(sig, i, j, sign) {
			p := interpolate(sig, i, j, float64(sign))
			p.comp = id
			s.peaks = append(s.peaks, p)
		}
	}
}

func (c *component) merge(o *component) {
	c.area += o.area
	c.sum += o.sum
	c.sx += o.sx
	c.sy += o.sy
	c.sxx += o.sxx
	c.syy += o.syy
	c.sxy += o.sxy
	c.x0, c.x1 = min(c.x0, o.x0), max(c.x1, o.x1)
	c.y0, c.y1 = min(c.y0, o.y0), max(c.y1, o.y1)
	c.top = math.Max(c.top, o.top)
}

// shape returns the centroid and the covariance of the component's light.
func (c *component) shape() (x, y, xx, yy, xy float64) {
	x, y = c.sx/c.sum, c.sy/c.sum
	return x, y, c.sxx/c.sum - x*x, c.syy/c.sum - y*y, c.sxy/c.sum - x*y
}

// isPeak reports whether a pixel exceeds its eight neighbours. Of equal
// neighbours the first in row order counts.
func isPeak(sig *frame.Image, i, j int, sign float32) bool {
	v := sign * sig.Pix[j*sig.Width+i]
	for dj := -1; dj <= 1; dj++ {
		if j+dj < 0 || j+dj >= sig.Height {
			continue
		}
		row := sig.Row(j + dj)
		for di := -1; di <= 1; di++ {
			if di == 0 && dj == 0 || i+di < 0 || i+di >= sig.Width {
				continue
			}
			n := sign * row[i+di]
			if n > v || n == v && (dj < 0 || dj == 0 && di < 0) {
				return false
			}
		}
	}
	return true
}

// interpolate fits a quadratic to the 3×3 pixels around an extremum and
// returns its top. Where the nine values allow it the logarithm is fitted,
// which is exact for a Gaussian response; else the values themselves. At the
// frame's border the pixel itself is returned.
func interpolate(sig *frame.Image, i, j int, sign float64) peak {
	p := peak{x: float64(i + 1), y: float64(j + 1), s: float64(sig.Pix[j*sig.Width+i])}
	if i == 0 || j == 0 || i == sig.Width-1 || j == sig.Height-1 {
		return p
	}
	var f [3][3]float64
	top := sign * p.s
	useLog := true
	for dj := range 3 {
		row := sig.Row(j + dj - 1)
		for di := range 3 {
			v := sign * float64(row[i+di-1])
			if !(v > 0.15*top) {
				useLog = false
			}
			f[dj][di] = v
		}
	}
	if math.IsInf(top, 0) {
		return p
	}
	if useLog {
		for dj := range f {
			for di := range f[dj] {
				f[dj][di] = math.Log(f[dj][di] / top)
			}
		}
	}
	bx, by := (f[1][2]-f[1][0])/2, (f[2][1]-f[0][1])/2
	cxx, cyy := f[1][2]+f[1][0]-2*f[1][1], f[2][1]+f[0][1]-2*f[1][1]
	cxy := (f[2][2] - f[2][0] - f[0][2] + f[0][0]) / 4
	det := cxx*cyy - cxy*cxy
	if !(det > 0) || !(cxx < 0) {
		return p
	}
	dx := -(cyy*bx - cxy*by) / det
	dy := -(cxx*by - cxy*bx) / det
	if math.Abs(dx) > 0.75 || math.Abs(dy) > 0.75 {
		return p
	}
	gain := (bx*dx + by*dy) / 2
	if useLog {
		p.s *= math.Exp(gain)
	} else {
		p.s += sign * gain
	}
	p.x += dx
	p.y += dy
	return p
}

// independent keeps the peaks that brighter ones do not explain. The response
// of a brighter source at a peak's place is taken away with the PSF's
// autocorrelation; what remains must reach the threshold, and exceed what an
// error of the PSF model leaves (modelError of the brighter source's score,
// fading with distance). Peaks come bright first; the result keeps the order.
// absorbed[k] counts the peaks that kept peak k explains.
func independent(peaks []peak, psf *localPSF, threshold, modelError float64) (kept []peak, absorbed []int) {
	reach := float64(psf.radius)
	grid := newPointGrid(reach)
	amp := make([]float64, 0, len(peaks))
	var near []int32
	for _, p := range peaks {
		if math.Abs(p.s) < threshold {
			continue
		}
		rest := p.s
		limit := 0.0
		owner := int32(-1)
		near = grid.within(near[:0], p.x, p.y, reach)
		for _, k := range near {
			q := &kept[k]
			dx, dy := p.x-q.x, p.y-q.y
			rest -= amp[k] * psf.correlation(dx, dy)
			r2 := (dx*dx + dy*dy) / psf.sigma2
			l := modelError * math.Abs(q.s) * (3*math.Exp(-r2/8) + math.Exp(-math.Sqrt(r2)/3))
			if l > limit {
				limit, owner = l, k
			}
		}
		if p.s*rest <= 0 || math.Abs(rest) < math.Max(threshold, limit) {
			if owner < 0 && len(near) > 0 {
				owner = near[0]
			}
			if owner >= 0 {
				absorbed[owner]++
				continue
			}
		}
		grid.add(p.x, p.y)
		kept = append(kept, p)
		amp = append(amp, rest)
		absorbed = append(absorbed, 0)
	}
	return kept, absorbed
}

// pointGrid finds points near a place. Points are numbered in the order in
// which they were added.
type pointGrid struct {
	cell   float64
	bucket map[[2]int32][]int32
	x, y   []float64
}

func newPointGrid(cell float64) *pointGrid {
	return &pointGrid{cell: math.Max(cell, 1), bucket: map[[2]int32][]int32{}}
}

func (g *pointGrid) key(x, y float64) [2]int32 {
	return [2]int32{int32(math.Floor(x / g.cell)), int32(math.Floor(y / g.cell))}
}

func (g *pointGrid) add(x, y float64) {
	k := g.key(x, y)
	g.bucket[k] = append(g.bucket[k], int32(len(g.x)))
	g.x, g.y = append(g.x, x), append(g.y, y)
}

// within appends the points no farther than r, in a fixed order.
func (g *pointGrid) within(dst []int32, x, y, r float64) []int32 {
	lo, hi := g.key(x-r, y-r), g.key(x+r, y+r)
	if cells := (float64(hi[0]-lo[0]) + 1) * (float64(hi[1]-lo[1]) + 1); cells > float64(len(g.x)) {
		// Fewer points than cells: look at the points.
		for k := range g.x {
			if dx, dy := g.x[k]-x, g.y[k]-y; dx*dx+dy*dy <= r*r {
				dst = append(dst, int32(k))
			}
		}
		return dst
	}
	for b := lo[1]; b <= hi[1]; b++ {
		for a := lo[0]; a <= hi[0]; a++ {
			for _, k := range g.bucket[[2]int32{a, b}] {
				if dx, dy := g.x[k]-x, g.y[k]-y; dx*dx+dy*dy <= r*r {
					dst = append(dst, k)
				}
			}
		}
	}
	return dst
}

// nearest returns the nearest point no farther than r, or -1.
func (g *pointGrid) nearest(x, y, r float64) (index int, distance float64) {
	index, distance = -1, math.Inf(1)
	for try := math.Min(r, g.cell); ; try = math.Min(2*try, r) {
		for _, k := range g.within(nil, x, y, try) {
			if d := math.Hypot(g.x[k]-x, g.y[k]-y); d < distance {
				index, distance = int(k), d
			}
		}
		if index >= 0 || try >= r {
			return index, distance
		}
	}
}
