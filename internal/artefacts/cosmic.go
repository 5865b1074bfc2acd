package artefacts

import (
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// laplacian is the positive part of the Laplacian of a pixel c with the
// neighbours l, r, u, d, after sub-sampling twofold (van Dokkum 2001, eq. 3 to
// 7), in units of the pixel: each quarter of the pixel sees twice its own pixel
// and one neighbour each way, so its Laplacian is (2c - h - v)/4; negative
// quarters count as zero, and the sum is divided by the factor of sub-sampling.
// A single bright pixel gives its own value.
func laplacian(c, l, r, u, d float32) float32 {
	c2 := c + c
	s := max(c2-l-u, 0) + max(c2-r-u, 0) + max(c2-l-d, 0) + max(c2-r-d, 0)
	return s / 8
}

// isLight reports a usable pixel that is not far below the sky: beside one that
// is, all light would stand out.
func (f *finder) isLight(k int) bool {
	v := f.img[k]
	return f.usable(k) && (v >= 0 || v*v < 5*5*f.vari[k])
}

// breach is the significance t by which pixel (i,j) breaks bound b, and the
// ratio of the pixel to its neighbours. t is -Inf when a pixel of the
// comparison is missing.
func (f *finder) breach(i, j, b int) (t, ratio float64) {
	k := j*f.w + i
	q := *f.limits.bound(b)
	none := math.Inf(-1)
	if !(q > 0) {
		return none, 0
	}
	var sum, bright, vari float64
	add := func(n int) {
		v := float64(f.img[n])
		sum += v
		bright += max(v, 0)
		vari += float64(f.vari[n])
	}
	if b == 4*arms {
		if i < 1 || j < 1 || i >= f.w-1 || j >= f.h-1 {
			return none, 0
		}
		for _, n := range [4]int{k - 1, k + 1, k - f.w, k + f.w} {
			if !f.isLight(n) {
				return none, 0
			}
			add(n)
		}
	} else {
		d := directions[b/arms]
		s := b%arms + 1
		di, dj := s*d[0], s*d[1]
		if i-di < 0 || i+di >= f.w || j-abs(dj) < 0 || j+abs(dj) >= f.h {
			return none, 0
		}
		step := dj*f.w + di
		if !f.isLight(k-step) || !f.isLight(k+step) {
			return none, 0
		}
		add(k - step)
		add(k + step)
	}
	c := float64(f.img[k])
	pred := q * sum
	noise := float64(f.vari[k]) + max(pred, 0)/f.gain + q*q*(vari+bright/f.gain)
	return (c - pred) / math.Sqrt(noise), c / max(sum, 1e-6*math.Abs(c)+1e-30)
}

// excess is the greatest significance over all bounds.
func (f *finder) excess(i, j int) float64 {
	best := math.Inf(-1)
	for b := range 4*arms + 1 {
		if q := *f.limits.bound(b); q > 4 {
			continue // says nothing
		}
		if t, _ := f.breach(i, j, b); t > best {
			best = t
		}
	}
	return best
}

// hits finds pixels above what light permits and follows their tracks, twice:
// first each pixel of a track must break a bound against good pixels on both
// sides, then, once, pixels beside the track may have the light under it
// estimated from around it.
func (f *finder) hits() {
	seeds := f.hitSeeds()
	flagged := f.follow(seeds)
	beside := f.besideHits(flagged)
	for _, k := range beside {
		f.bits[k] |= frame.CosmicRay
	}
	f.countHits(seeds)
}

// follow flags the seeds and all that is connected to them and breaks a bound
// by GrowSigma. It returns the pixels flagged.
func (f *finder) follow(seeds []int32) []int32 {
	// Marks first, so that no hit hides its neighbour while tracks are followed.
	for _, k := range seeds {
		f.bits[k] |= frame.CosmicRay
	}
	queue := append([]int32(nil), seeds...)
	flagged := append([]int32(nil), seeds...)
	grow := f.cfg.GrowSigma
	for len(queue) > 0 {
		k := int(queue[len(queue)-1])
		queue = queue[:len(queue)-1]
		i, j := k%f.w, k/f.w
		for dj := -1; dj <= 1; dj++ {
			for di := -1; di <= 1; di++ {
				x, y := i+di, j+dj
				if x < 0 || y < 0 || x >= f.w || y >= f.h {
					continue
				}
				n := y*f.w + x
				c := float64(f.img[n])
				if !f.usable(n) || c*c < 4*float64(f.vari[n]) || c < 0 || f.excess(x, y) < grow {
					continue
				}
				f.bits[n] |= frame.CosmicRay
				queue = append(queue, int32(n))
				flagged = append(flagged, int32(n))
			}
		}
	}
	return flagged
}

// besideHits lists neighbours of hit pixels that break a bound when hit pixels
// among those compared with are replaced by the median of the good pixels
// around them, and that are fainter than the hit itself: charge that spread.
func (f *finder) besideHits(flagged []int32) []int32 {
	const part = 0.6
	limit := f.cfg.GrowSigma + 1
	var found []int32
	for _, k := range flagged {
		i, j := int(k)%f.w, int(k)/f.w
		for y := max(0, j-1); y <= min(f.h-1, j+1); y++ {
			for x := max(0, i-1); x <= min(f.w-1, i+1); x++ {
				n := y*f.w + x
				c := f.img[n]
				if f.usable(n) && c > 0 && float64(c)*float64(c) > limit*limit*float64(f.vari[n]) &&
					c < part*f.img[k] && f.excessFilled(x, y) > limit {
					found = append(found, int32(n))
				}
			}
		}
	}
	return found
}

// excessFilled is like excess over the two nearest pairs in each direction,
// with hit pixels replaced.
func (f *finder) excessFilled(i, j int) float64 {
	best := math.Inf(-1)
	at := j*f.w + i
	c := float64(f.img[at])
	for d, dir := range directions {
	pairs:
		for s := 1; s <= 2; s++ {
			q := f.limits.Arm[d][s-1]
			if q > 4 {
				continue
			}
			var sum, bright, vari float64
			for _, sign := range [2]int{-s, s} {
				x, y := i+sign*dir[0], j+sign*dir[1]
				if x < 0 || y < 0 || x >= f.w || y >= f.h {
					continue pairs
				}
				n := y*f.w + x
				v := float64(f.img[n])
				switch {
				case f.isLight(n):
					vari += float64(f.vari[n])
				case f.bits[n]&frame.Unusable == frame.CosmicRay:
					var ok bool
					if v, ok = f.around(x, y, at); !ok {
						continue pairs
					}
				default:
					continue pairs
				}
				sum += v
				bright += max(v, 0)
			}
			pred := q * sum
			noise := float64(f.vari[at]) + max(pred, 0)/f.gain + q*q*(vari+bright/f.gain)
			best = max(best, (c-pred)/math.Sqrt(noise))
		}
	}
	return best
}

// around is the median of the usable pixels within two steps of a pixel,
// without the one at except.
func (f *finder) around(i, j, except int) (float64, bool) {
	var v [25]float32
	n := 0
	for y := max(0, j-2); y <= min(f.h-1, j+2); y++ {
		for x := max(0, i-2); x <= min(f.w-1, i+2); x++ {
			if k := y*f.w + x; k != except && f.usable(k) {
				v[n] = f.img[k]
				n++
			}
		}
	}
	if n < 5 {
		return 0, false
	}
	return robust.Median(v[:n]), true
}

// hitSeeds lists the pixels that break a bound by HitSigma on the flags as
// they are.
func (f *finder) hitSeeds() []int32 {
	var seeds []int32
	w := f.w
	least := float32(f.cfg.HitSigma * f.cfg.HitSigma)
	for j := range f.h {
		row := f.img[j*w : (j+1)*w]
		vrow := f.vari[j*w : (j+1)*w][:len(row)]
		for i, c := range row {
			// Most pixels end here: noise of a comparison exceeds the pixel's own.
			if !(c*c > least*vrow[i]) || c < 0 {
				continue
			}
			k := j*w + i
			if !f.usable(k) || !f.sieve(i, j, c, vrow[i]) {
				continue
			}
			if f.excess(i, j) < f.cfg.HitSigma || !f.standsOut(i, j) {
				continue
			}
			seeds = append(seeds, int32(k))
		}
	}
	return seeds
}

// sieve is van Dokkum's first criterion: the Laplacian over the noise, here
// with the least a seed can have.
func (f *finder) sieve(i, j int, c, vari float32) bool {
	if i < 1 || j < 1 || i >= f.w-1 || j >= f.h-1 {
		return true
	}
	k := j*f.w + i
	l, r, u, d := f.img[k-1], f.img[k+1], f.img[k-f.w], f.img[k+f.w]
	s := laplacian(c, l, r, u, d)
	// NaN neighbours give NaN, which passes.
	return !(float64(s*s) < 0.1*f.cfg.HitSigma*f.cfg.HitSigma*float64(vari))
}

// standsOut repeats the comparison with the sky at its local level, when that
// is below zero: a bound with q > ½ takes a hole for sharpness.
func (f *finder) standsOut(i, j int) bool {
	var ring [24]float32
	n := 0
	for d := -3; d < 3; d++ {
		for _, p := range [4][2]int{{i + d, j - 3}, {i + 3, j + d}, {i - d, j + 3}, {i - 3, j - d}} {
			if p[0] < 0 || p[1] < 0 || p[0] >= f.w || p[1] >= f.h || !f.usable(p[1]*f.w+p[0]) {
				continue
			}
			ring[n] = f.img[p[1]*f.w+p[0]]
			n++
		}
	}
	if n < 6 {
		return true
	}
	level := robust.Median(ring[:n])
	if level >= 0 {
		return true
	}
	best := math.Inf(-1)
	k := j*f.w + i
	c := float64(f.img[k])
	for b := range 4*arms + 1 {
		q := *f.limits.bound(b)
		t, ratio := f.breach(i, j, b)
		if q > 4 || math.IsInf(t, -1) {
			continue
		}
		// A = c - q·sum becomes A - level·(1 - n q), n the number of neighbours.
		m := 2.0
		if b == 4*arms {
			m = 4
		}
		a := c - q*c/ratio
		if a <= 0 {
			continue
		}
		best = max(best, t*(a-level*(1-m*q))/a)
	}
	return best >= f.cfg.HitSigma
}

// countHits counts connected groups of hit pixels, beginning at the seeds. A
// group at the end of a run of saturated pixels is the last charge that bled.
func (f *finder) countHits(seeds []int32) {
	seen := make(map[int32]bool, 2*len(seeds))
	var stack, group []int32
	for _, s := range seeds {
		if seen[s] {
			continue
		}
		seen[s] = true
		stack = append(stack[:0], s)
		n := 0
		end := false
		group = group[:0]
		for len(stack) > 0 {
			k := int(stack[len(stack)-1])
			stack = stack[:len(stack)-1]
			n++
			group = append(group, int32(k))
			i, j := k%f.w, k/f.w
			end = end || f.endsRun(i, j)
			for y := max(0, j-1); y <= min(f.h-1, j+1); y++ {
				for x := max(0, i-1); x <= min(f.w-1, i+1); x++ {
					m := int32(y*f.w + x)
					if f.bits[m]&frame.CosmicRay != 0 && !seen[m] {
						seen[m] = true
						stack = append(stack, m)
					}
				}
			}
		}
		if end && n <= 12 {
			for _, k := range group {
				f.bits[k] = f.bits[k]&^frame.CosmicRay | frame.Bleed
			}
			continue
		}
		f.report.Hits++
		f.report.HitPixels += n
		if n == 1 {
			f.report.Hot++
		}
	}
}

// endsRun reports a pixel that continues a straight run of at least four
// saturated pixels along a column or row.
func (f *finder) endsRun(i, j int) bool {
	for _, d := range [4][2]int{{0, 1}, {0, -1}, {1, 0}, {-1, 0}} {
		run := true
		for s := 1; s <= 4 && run; s++ {
			x, y := i+s*d[0], j+s*d[1]
			run = x >= 0 && y >= 0 && x < f.w && y < f.h && f.bits[y*f.w+x]&(frame.Saturated|frame.Bleed) != 0
		}
		if run {
			return true
		}
	}
	return false
}

// deadPixels flags single pixels far below what light and sky permit.
func (f *finder) deadPixels() {
	w := f.w
	limit := float32(f.cfg.DeadSigma * f.cfg.DeadSigma)
	var found []int32
	for j := range f.h {
		row := f.img[j*w : (j+1)*w]
		vrow := f.vari[j*w : (j+1)*w][:len(row)]
		for i, c := range row {
			if !(c*c > limit*vrow[i]) {
				continue
			}
			k := j*w + i
			if c < 0 {
				if f.usable(k) && f.isDead(i, j) {
					found = append(found, int32(k))
				}
				continue
			}
			// Beside a bright pixel a dead one need not be below the sky.
			if i+1 < w && row[i+1] < 0.3*c && f.isDead(i+1, j) {
				found = append(found, int32(k+1))
			}
			if j+1 < f.h && f.img[k+w] < 0.3*c && f.isDead(i, j+1) {
				found = append(found, int32(k+w))
			}
		}
	}
	for _, k := range found {
		if f.bits[k]&frame.BadColumn == 0 {
			f.bits[k] |= frame.BadColumn
			f.report.Dead++
		}
	}
}

// isDead compares a pixel with its four neighbours: light gives it at least
// Limits.Least of their sum, and no sky is so far below theirs.
func (f *finder) isDead(i, j int) bool {
	if i < 1 || j < 1 || i >= f.w-1 || j >= f.h-1 {
		return false
	}
	k := j*f.w + i
	if !f.usable(k) {
		return false
	}
	var sum, bright, vari, lowest float64
	lowest = math.Inf(1)
	for _, n := range [4]int{k - 1, k + 1, k - f.w, k + f.w} {
		if !f.usable(n) {
			return false
		}
		v := float64(f.img[n])
		sum += v
		bright += max(v, 0)
		vari += float64(f.vari[n])
		lowest = min(lowest, v)
	}
	c, q := float64(f.img[k]), f.limits.Least
	pred := min(q*sum, lowest)
	noise := float64(f.vari[k]) + max(pred, 0)/f.gain + q*q*(vari+bright/f.gain)
	return pred-c > f.cfg.DeadSigma*math.Sqrt(noise)
}
