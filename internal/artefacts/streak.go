package artefacts

import (
	"math"
	"math/bits"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// mostLooks bounds how many lines are looked at closely.
const mostLooks = 60 // and one more for each 100,000 px

// searchPart of StreakSigma is the threshold of the first search: its sums lose
// by binning and clipping, and what passes by chance is refused on inspection.
const searchPart = 0.6

// streaks searches for trails, the most significant first; each one found is
// flagged and taken out before the next is looked at.
func (f *finder) streaks() {
	if f.w < 32*binning || f.h < 32*binning {
		return
	}
	b := f.bin()
	lowest := bits.Len(uint(f.cfg.StreakLength/binning)) - 1 // 2^lowest bins ≤ StreakLength
	lowest = max(lowest, 4)
	var refused []segment
	looks := 0
	for _, s := range b.search(lowest, searchPart*f.cfg.StreakSigma) {
		if looks >= mostLooks+f.w*f.h/100000 || len(f.report.Streaks) >= f.cfg.MaxStreaks {
			break
		}
		// Parts and neighbours of trails already taken out are empty by now.
		if len(f.report.Streaks) > 0 && b.sum(s) < searchPart*f.cfg.StreakSigma*math.Sqrt(float64(s.n)) {
			continue
		}
		if slices.ContainsFunc(refused, func(r segment) bool { return alike(r, s) }) {
			continue
		}
		looks++
		t, ok := f.inspect(s)
		if !ok {
			refused = append(refused, s)
			continue
		}
		f.markStreak(t)
		f.report.Streaks = append(f.report.Streaks, t.public(f))
		b.remove(f)
	}
	slices.SortStableFunc(f.report.Streaks, func(a, c Streak) int {
		switch {
		case a.SN > c.SN:
			return -1
		case a.SN < c.SN:
			return 1
		}
		return 0
	})
}

// alike reports that both ends of s are within a few bins of the line r, and
// s not longer: what was refused once is not looked at again.
func alike(r, s segment) bool {
	if s.n > r.n {
		return false
	}
	x0, y0, x1, y1 := r.ends()
	u0, v0, u1, v1 := s.ends()
	length := math.Hypot(x1-x0, y1-y0)
	nx, ny := -(y1-y0)/length, (x1-x0)/length
	tx, ty := ny, -nx
	for _, p := range [2][2]float64{{u0, v0}, {u1, v1}} {
		d := (p[0]-x0)*nx + (p[1]-y0)*ny
		a := (p[0]-x0)*tx + (p[1]-y0)*ty
		if math.Abs(d) > 2 || a < -4 || a > length+4 {
			return false
		}
	}
	return true
}

// cellBins is the side [bins] of the cells in which bins are compared.
const cellBins = 16

// bin makes the plane that is searched.
func (f *finder) bin() *binned {
	b := &binned{w: (f.w + binning - 1) / binning, h: (f.h + binning - 1) / binning}
	b.pix = make([]float32, b.w*b.h)
	nan := float32(math.NaN())
	sum, vari, count := make([]float32, b.w), make([]float32, b.w), make([]float32, b.w)
	for bj := range b.h {
		clear(sum)
		clear(vari)
		clear(count)
		for j := bj * binning; j < min(f.h, (bj+1)*binning); j++ {
			row := f.img[j*f.w : (j+1)*f.w]
			vrow := f.vari[j*f.w : (j+1)*f.w][:len(row)]
			brow := f.bits[j*f.w : (j+1)*f.w][:len(row)]
			for i, v := range row {
				s := vrow[i]
				if brow[i]&frame.Unusable != 0 || !(v >= -maxFloat32 && v <= maxFloat32) || !(s > 0 && s <= maxFloat32) {
					continue
				}
				c := uint(i) / binning
				sum[c] += v
				vari[c] += s
				count[c]++
			}
		}
		out := b.pix[bj*b.w : (bj+1)*b.w]
		for i := range out {
			out[i] = nan
			if count[i] >= binning*binning/2 {
				out[i] = sum[i] / float32(math.Sqrt(float64(vari[i])))
			}
		}
	}
	b.flatten()
	return b
}

// flatten takes the median of its cell from each bin, divides by the cell's
// spread where that exceeds the noise, clips at two and takes off the mean:
// no star and no galaxy counts for much, a trail that crosses the cell does.
func (b *binned) flatten() {
	scratch := make([]float32, 0, cellBins*cellBins)
	for cj := 0; cj < b.h; cj += cellBins {
		for ci := 0; ci < b.w; ci += cellBins {
			scratch = scratch[:0]
			j1, i1 := min(b.h, cj+cellBins), min(b.w, ci+cellBins)
			for j := cj; j < j1; j++ {
				for _, v := range b.pix[j*b.w+ci : j*b.w+i1] {
					if v == v {
						scratch = append(scratch, v)
					}
				}
			}
			median, scale := float32(0), float32(1)
			if len(scratch) >= 12 {
				k := len(scratch)
				median = robust.Select(scratch, k/2)
				low := robust.Select(scratch, k/6)
				scale = max(1, median-low) // 1/6 quantile: 0.97 sigma below
			}
			var sum float32
			n := 0
			for j := cj; j < j1; j++ {
				row := b.pix[j*b.w+ci : j*b.w+i1]
				for i, v := range row {
					if v != v {
						continue
					}
					v = (v - median) / scale
					v = min(2, max(-2, v))
					row[i] = v
					sum += v
					n++
				}
			}
			mean := sum / float32(max(1, n))
			for j := cj; j < j1; j++ {
				row := b.pix[j*b.w+ci : j*b.w+i1]
				for i, v := range row {
					if v == v {
						row[i] = v - mean
					} else {
						row[i] = 0
					}
				}
			}
		}
	}
}

// remove zeroes the bins that hold a flagged trail.
func (b *binned) remove(f *finder) {
	for j := range f.h {
		row := f.bits[j*f.w : (j+1)*f.w]
		out := b.pix[j/binning*b.w : (j/binning+1)*b.w]
		for i, v := range row {
			if v&frame.Streak != 0 {
				out[uint(i)/binning] = 0
			}
		}
	}
}

// trail is a line under inspection: points p(t,o) = (x,y) + t·(ux,uy) +
// o·(-uy,ux), 0-based px.
type trail struct {
	x, y, ux, uy float64
	t0, t1       float64 // extent
	fwhm, half   float64
	peak, bright float64 // count, count per px of length
	sn           float64
	whole        bool
}

func (l *trail) at(t, o float64) (x, y float64) {
	return l.x + t*l.ux - o*l.uy, l.y + t*l.uy + o*l.ux
}

// chord gives the range of t within the frame, from p(0,0).
func (f *finder) chord(l *trail) (t0, t1 float64) {
	t0, t1 = math.Inf(-1), math.Inf(1)
	for _, a := range [2][3]float64{{l.x, l.ux, float64(f.w - 1)}, {l.y, l.uy, float64(f.h - 1)}} {
		if math.Abs(a[1]) < 1e-12 {
			if a[0] < 0 || a[0] > a[2] {
				return 0, -1
			}
			continue
		}
		p, q := -a[0]/a[1], (a[2]-a[0])/a[1]
		if p > q {
			p, q = q, p
		}
		t0, t1 = max(t0, p), min(t1, q)
	}
	return
}

// profiles are medians along pieces of a line: at[k][o+reach] is that of piece
// k at offset o px, in units of the noise of a pixel; NaN where too few pixels
// are usable.
type profiles struct {
	reach int
	piece float64 // px
	t     []float64
	at    [][]float64
	by    [][]float64 // mean offset of the pixels used from the nominal one
	noise []float64   // of each piece's values
}

// profile cuts the line into pieces of about the given length.
func (f *finder) profile(l *trail, t0, t1, piece float64, reach int) *profiles {
	n := max(1, int(math.Round((t1-t0)/piece)))
	p := &profiles{reach: reach, piece: (t1 - t0) / float64(n)}
	scratch := make([]float32, 0, int(p.piece)+2)
	steps := max(1, int(p.piece))
	values, moved := make([]float64, n*(2*reach+1)), make([]float64, n*(2*reach+1))
	for k := range n {
		start := t0 + float64(k)*p.piece
		row := values[k*(2*reach+1) : (k+1)*(2*reach+1)]
		by := moved[k*(2*reach+1) : (k+1)*(2*reach+1)]
		most := 0
		for o := -reach; o <= reach; o++ {
			x, y := l.at(start+0.5*(p.piece-float64(steps-1)), float64(o))
			scratch = scratch[:0]
			for range steps {
				i, j := int(math.Floor(x+0.5)), int(math.Floor(y+0.5))
				if i >= 0 && j >= 0 && i < f.w && j < f.h {
					at := j*f.w + i
					if f.usable(at) {
						scratch = append(scratch, f.img[at])
						by[o+reach] += (float64(j)-y)*l.ux - (float64(i)-x)*l.uy
					}
				}
				x += l.ux
				y += l.uy
			}
			if 2*len(scratch) < steps || len(scratch) < 4 {
				row[o+reach] = math.NaN()
				continue
			}
			most = max(most, len(scratch))
			by[o+reach] /= float64(len(scratch))
			row[o+reach] = robust.Median(scratch)
		}
		sigma := f.noiseAt(l, start+p.piece/2)
		// The piece's own level, from all offsets.
		level := median(row)
		for o := range row {
			row[o] = (row[o] - level) / sigma
		}
		p.t = append(p.t, start+p.piece/2)
		p.at = append(p.at, row)
		p.by = append(p.by, by)
		p.noise = append(p.noise, 1.2533/math.Sqrt(float64(max(1, most))))
	}
	return p
}

// noiseAt is the noise of a pixel near a place on the line.
func (f *finder) noiseAt(l *trail, t float64) float64 {
	for _, o := range []float64{0, 3, -3, 7, -7, 15, -15} {
		x, y := l.at(t, o)
		i, j := int(x+0.5), int(y+0.5)
		if i >= 0 && j >= 0 && i < f.w && j < f.h && f.usable(j*f.w+i) {
			return math.Sqrt(float64(f.vari[j*f.w+i]))
		}
	}
	return math.Inf(1)
}

// median of the values that are numbers; v keeps its order.
func median(v []float64) float64 {
	return robust.MedianOf(v, make([]float64, len(v)))
}

// smooth weighs the offsets of a piece by a Gaussian of sigma s about o.
func (p *profiles) smooth(k int, o, s float64) (v float64, ok bool) {
	row := p.at[k]
	var sum, norm float64
	for i := int(math.Ceil(o - 3*s - 0.5)); float64(i) <= o+3*s+0.5; i++ {
		if i < -p.reach || i > p.reach || row[i+p.reach] != row[i+p.reach] {
			continue
		}
		d := (float64(i) + p.by[k][i+p.reach] - o) / s
		g := math.Exp(-0.5 * d * d)
		sum += g * row[i+p.reach]
		norm += g
	}
	if norm < 0.6*s {
		return 0, false
	}
	return sum / norm, true
}

// inspect measures a line on the pixels themselves and says whether it is a
// trail: the same excess in nearly all of its pieces, in medians that no
// single star moves, as wide as the seeing at least, and long.
func (f *finder) inspect(s segment) (*trail, bool) {
	x0, y0, x1, y1 := s.ends()
	const centre = 0.5 * (binning - 1)
	x0, y0, x1, y1 = binning*x0+centre, binning*y0+centre, binning*x1+centre, binning*y1+centre
	length := math.Hypot(x1-x0, y1-y0)
	l := &trail{x: (x0 + x1) / 2, y: (y0 + y1) / 2, ux: (x1 - x0) / length, uy: (y1 - y0) / length}
	sigma := max(0.8, f.fwhm/2.3548)
	shortest := max(16, 5*f.fwhm)
	lo, hi := f.chord(l)
	l.t0, l.t1 = max(lo, -length/2), min(hi, length/2)
	// Rounded to bins, a line along the border may miss the frame.
	if !(l.t1 > l.t0) || l.t1-l.t0 < 4*shortest && l.t1-l.t0 < 0.9*(hi-lo) {
		return nil, false
	}
	pieceOf := func(span float64) float64 { return max(shortest, span/32) }
	// A first place, from sums over all pieces on a grid of offsets and slopes.
	p := f.profile(l, l.t0, l.t1, pieceOf(l.t1-l.t0), 6*binning)
	if !l.place(p, sigma, 3*binning) {
		return nil, false
	}
	for round := range 3 {
		l.polish(p, sigma)
		if lo, hi = f.chord(l); !(hi > lo) {
			return nil, false
		}
		span := max(l.t1-l.t0, 4*shortest)
		p = f.profile(l, lo, hi, pieceOf(span), 6*binning)
		if !l.extend(p, sigma) {
			return nil, false
		}
		if round < 2 {
			p = f.profile(l, l.t0, l.t1, pieceOf(l.t1-l.t0), 4*binning)
		}
	}
	// A last time with the trail's own width, which may exceed the seeing.
	p = f.profile(l, l.t0, l.t1, pieceOf(l.t1-l.t0), 6*binning)
	own := sigma
	if w := l.width(p.middle(), p.reach); w > 0 {
		own = min(max(sigma, w/2.3548), 3*binning)
	}
	l.polish(p, own)
	lo, hi = f.chord(l)
	length = l.t1 - l.t0
	l.whole = length > 0.97*(hi-lo)
	if length < f.cfg.StreakLength {
		return nil, false
	}
	return l, f.judge(l, sigma)
}

// place moves the line to where the sum of its pieces is largest, up to reach
// px aside at both ends.
func (l *trail) place(p *profiles, sigma float64, reach int) bool {
	n := len(p.t)
	width := 2*p.reach + 1
	soft := make([]float64, n*width)
	for k := range n {
		for o := range width {
			v, _ := p.smooth(k, float64(o-p.reach), sigma)
			soft[k*width+o] = min(4, max(-2, v))
		}
	}
	half := (l.t1 - l.t0) / 2
	mid := (l.t1 + l.t0) / 2
	best, bestO, bestS := math.Inf(-1), 0.0, 0.0
	for a := -reach; a <= reach; a++ {
		for b := -reach; b <= reach; b++ {
			sum := 0.0
			for k, t := range p.t {
				o := float64(a) + float64(b)*(t-mid)/half
				i := int(math.Floor(o+0.5)) + p.reach
				if i >= 0 && i < width {
					sum += soft[k*width+i]
				}
			}
			if sum > best {
				best, bestO, bestS = sum, float64(a), float64(b)/half
			}
		}
	}
	if !(best > 0) {
		return false
	}
	l.shift(bestO-bestS*mid, bestS)
	return true
}

// shift moves the line to offsets o + slope·t of its old self.
func (l *trail) shift(o, slope float64) {
	l.x, l.y = l.at(0, o)
	ux, uy := l.ux-slope*l.uy, l.uy+slope*l.ux
	n := math.Hypot(ux, uy)
	l.ux, l.uy = ux/n, uy/n
	l.t0, l.t1 = l.t0*n, l.t1*n
}

// polish moves the line to the nearest maximum of the sum of its pieces under
// a window of the seeing: the best estimate for a faint trail (with white noise
// and a Gaussian profile it is the maximum of the likelihood). No piece counts
// for more than twice the median.
func (l *trail) polish(p *profiles, sigma float64) {
	var v []float64
	for k := range p.t {
		if a, ok := p.smooth(k, 0, sigma); ok {
			v = append(v, a)
		}
	}
	if len(v) < 4 {
		return
	}
	most := 2 * median(v)
	if !(most > 0) {
		return
	}
	mid, half := (l.t0+l.t1)/2, (l.t1-l.t0)/2
	sum := func(o, b float64) float64 {
		s := 0.0
		for k, t := range p.t {
			if a, ok := p.smooth(k, o+b*(t-mid)/half, sigma); ok {
				s += min(most, a)
			}
		}
		return s
	}
	o, b := 0.0, 0.0
	best := sum(o, b)
	for step := 1.0; step > 0.01; step /= 2 {
		for moved, turns := true, 0; moved && turns < 6; turns++ {
			moved = false
			for _, d := range [4][2]float64{{step, 0}, {-step, 0}, {0, step}, {0, -step}} {
				if s := sum(o+d[0], b+d[1]); s > best {
					best, o, b, moved = s, o+d[0], b+d[1], true
				}
			}
		}
	}
	if math.Abs(o)+math.Abs(b) < 3*sigma+2 {
		l.shift(o-b*mid/half, b/half)
	}
}

// brightness of piece k on the axis above both sides, in noise of a pixel, and
// its error.
func (p *profiles) excess(k int, sigma float64) (v, noise float64, ok bool) {
	v, ok = p.smooth(k, 0, sigma)
	if !ok {
		return 0, 0, false
	}
	var sides []float64
	for o := -p.reach; o <= p.reach; o++ {
		if a := math.Abs(float64(o)); a > 4*sigma+3 {
			if s := p.at[k][o+p.reach]; s == s {
				sides = append(sides, s)
			}
		}
	}
	if len(sides) >= 4 {
		v -= median(sides)
	}
	return v, p.noise[k] / math.Sqrt(math.Max(1, 3.5449*sigma)), true
}

// extend finds the stretch of the chord along which the trail shines: the
// largest sum of excess over half its level.
func (l *trail) extend(p *profiles, sigma float64) bool {
	var inside []float64
	for k, t := range p.t {
		if t >= l.t0-p.piece/2 && t <= l.t1+p.piece/2 {
			if v, _, ok := p.excess(k, sigma); ok {
				inside = append(inside, v)
			}
		}
	}
	if len(inside) < 3 {
		return false
	}
	level := median(inside)
	if !(level > 0) {
		return false
	}
	bestSum, bestFrom, bestTo := 0.0, 0, -1
	sum, from := 0.0, 0
	for k := range p.t {
		v, _, ok := p.excess(k, sigma)
		if ok {
			sum += min(1.5*level, max(-level, v)) - 0.5*level
		}
		if sum <= 0 {
			sum, from = 0, k+1
		} else if sum > bestSum {
			bestSum, bestFrom, bestTo = sum, from, k
		}
	}
	if bestTo < bestFrom {
		return false
	}
	l.t0, l.t1 = p.t[bestFrom]-p.piece/2, p.t[bestTo]+p.piece/2
	return true
}

// judge measures the trail and decides.
func (f *finder) judge(l *trail, sigma float64) bool {
	length := l.t1 - l.t0
	piece := max(16, 5*f.fwhm, length/48)
	reach := 6 * binning
	var p *profiles
	var mean []float64
	for {
		p = f.profile(l, l.t0, l.t1, piece, reach)
		mean = p.middle()
		if reach >= 192 || !(mean[0] > 0.1 || mean[len(mean)-1] > 0.1) && l.width(mean, reach) < float64(reach)/2 {
			break
		}
		reach *= 2
	}
	l.fwhm = l.width(mean, reach)
	// Light comes through the seeing.
	if !(l.fwhm > 0.7*f.fwhm) || l.fwhm > float64(reach) || length < 8*l.fwhm {
		return false
	}
	s := max(sigma, l.fwhm/2.3548)
	var values []float64
	var sum, vari float64
	good, all := 0, 0
	for k := range p.t {
		v, noise, ok := p.excess(k, s)
		if !ok {
			continue
		}
		values = append(values, v)
		sum += v
		vari += noise * noise
		all++
	}
	if all < 6 || 2*all < len(p.t) {
		return false
	}
	level := median(values)
	l.sn = sum / math.Sqrt(vari)
	for _, v := range values {
		if v > 0.35*level {
			good++
		}
	}
	if l.sn < f.cfg.StreakSigma || float64(good) < 0.75*float64(all) {
		return false
	}
	if f.isSpike(l, p, s) || !f.isEven(l, s) {
		return false
	}
	// Half width of the mask: to where the mean profile, at its own noise, ends.
	noise := 0.0
	for _, n := range p.noise {
		noise += n * n
	}
	noise = 1.2533 * math.Sqrt(noise) / float64(len(p.noise))
	floor := max(0.1, 2.5*noise)
	half := 1
	for half < reach && (mean[reach+half]+mean[reach-half])/2 > floor {
		half++
	}
	l.half = max(float64(half)+1, 1.3*l.fwhm)
	pixel := f.noiseAt(l, (l.t0+l.t1)/2)
	if math.IsInf(pixel, 0) {
		pixel = math.NaN()
	}
	l.peak = mean[reach] * pixel
	for o := -half; o <= half; o++ {
		if v := mean[reach+o]; v == v {
			l.bright += v * pixel
		}
	}
	return true
}

// middle is the median of all pieces, offset by offset, less the level far
// from the axis; NaN where no piece has a value.
func (p *profiles) middle() []float64 {
	m := make([]float64, 2*p.reach+1)
	v := make([]float64, len(p.at))
	for o := range m {
		for k := range p.at {
			v[k] = p.at[k][o]
		}
		m[o] = robust.Median(v)
	}
	var far []float64
	for o, v := range m {
		if v == v && 3*abs(o-p.reach) > 2*p.reach {
			far = append(far, v)
		}
	}
	if len(far) > 3 {
		level := median(far)
		for o := range m {
			m[o] -= level
		}
	}
	return m
}

// width is the full width at half maximum of a mean profile [px]; NaN without
// a peak in the middle.
func (l *trail) width(m []float64, reach int) float64 {
	peak := 0.0
	for o := -2; o <= 2; o++ {
		if v := m[reach+o]; v > peak {
			peak = v
		}
	}
	if !(peak > 0) {
		return math.NaN()
	}
	side := func(step int) float64 {
		last := m[reach]
		for o := 1; o <= reach; o++ {
			v := m[reach+o*step]
			if v != v {
				return float64(o)
			}
			if v < peak/2 {
				if last > v {
					return float64(o) - (peak/2-v)/(last-v)
				}
				return float64(o)
			}
			last = v
		}
		return float64(reach)
	}
	return side(1) + side(-1)
}

// isEven compares the distribution of the pixels along the axis with those
// along parallel lines on both sides. A trail lifts all of it, the faintest
// pixels as well; a chain of stars or a galaxy lifts the bright ones. Between
// the lines the distributions differ by noise and by the confusion of faint
// stars: a trail must lift its faint pixels by several times that.
func (f *finder) isEven(l *trail, sigma float64) bool {
	n := int(l.t1 - l.t0)
	v := make([]float64, 0, n)
	line := func(offset float64) (low, mid float64, ok bool) {
		v = v[:0]
		for s := range n {
			// Three pixels across.
			sum, m := 0.0, 0
			for o := offset - 1; o <= offset+1; o++ {
				x, y := l.at(l.t0+float64(s)+0.5, o)
				i, j := int(math.Floor(x+0.5)), int(math.Floor(y+0.5))
				if i < 0 || j < 0 || i >= f.w || j >= f.h || !f.usable(j*f.w+i) {
					continue
				}
				k := j*f.w + i
				sum += float64(f.img[k]) / math.Sqrt(float64(f.vari[k]))
				m++
			}
			if m > 0 {
				v = append(v, sum/float64(m))
			}
		}
		if len(v) < 30 || 2*len(v) < n {
			return 0, 0, false
		}
		slices.Sort(v)
		return v[len(v)/8], v[len(v)/2], true
	}
	low, mid, ok := line(0)
	if !ok {
		return false
	}
	var lows, mids []float64
	for k := range 24 {
		o := 3*sigma + 4 + float64(k)*max(4, 1.5*f.fwhm)
		for _, o := range [2]float64{o, -o} {
			if a, b, ok := line(o); ok {
				lows, mids = append(lows, a), append(mids, b)
			}
		}
	}
	if len(lows) < 6 {
		return false
	}
	spread := func(v []float64) (centre, sigma float64) { return robust.MedianMAD(v) }
	lowCentre, lowSpread := spread(lows)
	midCentre, midSpread := spread(mids)
	// Quantiles of n values of noise 0.6 have at least this spread.
	least := 1 / math.Sqrt(float64(n))
	liftLow, liftMid := low-lowCentre, mid-midCentre
	return liftLow > 9*max(least, lowSpread) && liftMid > 5*max(least, midSpread) && liftLow > 0.65*liftMid
}

// isSpike reports a line that leads away from a very bright star and fades
// with distance from it: a diffraction spike.
func (f *finder) isSpike(l *trail, p *profiles, sigma float64) bool {
	for i := range f.in.Stars {
		s := &f.in.Stars[i]
		if i >= 300 {
			break
		}
		x, y := s.X-1-l.x, s.Y-1-l.y
		t, o := x*l.ux+y*l.uy, -x*l.uy+y*l.ux
		if math.Abs(o) > 2*f.fwhm+2 || t < l.t0-(l.t1-l.t0) || t > l.t1+(l.t1-l.t0) {
			continue
		}
		if s.SN < 300 && s.Flags&(frame.Saturated|frame.Bleed) == 0 {
			continue
		}
		// Mean of the nearer and of the farther half.
		var near, far, all []float64
		for k := range p.t {
			if v, _, ok := p.excess(k, sigma); ok {
				all = append(all, math.Abs(p.t[k]-t))
				_ = v
			}
		}
		if len(all) < 4 {
			continue
		}
		mid := median(all)
		for k := range p.t {
			if v, _, ok := p.excess(k, sigma); ok {
				if math.Abs(p.t[k]-t) <= mid {
					near = append(near, v)
				} else {
					far = append(far, v)
				}
			}
		}
		if len(near) > 1 && len(far) > 1 && median(near) > 1.7*median(far) {
			return true
		}
	}
	return false
}

// markStreak flags the trail.
func (f *finder) markStreak(l *trail) {
	t0, t1 := l.t0, l.t1
	lo, hi := f.chord(l)
	pad := 2*l.half + 4
	// An end so near the frame's edge is beyond it.
	if t0-lo < 4*pad {
		t0 = lo - 10*pad
	}
	if hi-t1 < 4*pad {
		t1 = hi + 10*pad
	}
	t0, t1 = t0-pad, t1+pad
	reach := l.half + 1
	for j := range f.h {
		// |o| ≤ half on this row: o = -dx·uy + dy·ux.
		dy := float64(j) - l.y
		i0, i1 := 0.0, float64(f.w-1)
		if math.Abs(l.uy) > 1e-9 {
			a, b := (dy*l.ux-l.half)/l.uy+l.x, (dy*l.ux+l.half)/l.uy+l.x
			i0, i1 = max(i0, min(a, b)), min(i1, max(a, b))
		} else if math.Abs(dy) > reach {
			continue
		}
		for i := int(math.Ceil(i0)); i <= int(math.Floor(i1)); i++ {
			dx := float64(i) - l.x
			t, o := dx*l.ux+dy*l.uy, -dx*l.uy+dy*l.ux
			if t >= t0 && t <= t1 && math.Abs(o) <= l.half {
				f.bits[j*f.w+i] |= frame.Streak
			}
		}
	}
}

// public gives the trail as the report wants it.
func (l *trail) public(f *finder) Streak {
	s := Streak{Length: l.t1 - l.t0, FWHM: l.fwhm, HalfWidth: l.half, Peak: l.peak, Brightness: l.bright, SN: l.sn, WholeFrame: l.whole}
	s.X0, s.Y0 = l.at(l.t0, 0)
	s.X1, s.Y1 = l.at(l.t1, 0)
	if s.X0 > s.X1 {
		s.X0, s.Y0, s.X1, s.Y1 = s.X1, s.Y1, s.X0, s.Y0
	}
	s.X0, s.Y0, s.X1, s.Y1 = s.X0+1, s.Y0+1, s.X1+1, s.Y1+1
	s.Angle = math.Atan2(s.Y1-s.Y0, s.X1-s.X0) * 180 / math.Pi
	if s.Angle <= -90 {
		s.Angle += 180
	}
	return s
}

func abs(i int) int {
	if i < 0 {
		return -i
	}
	return i
}
