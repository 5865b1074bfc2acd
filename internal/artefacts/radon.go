package artefacts

import (
	"math"
	"math/bits"
	"slices"

	"nightsift/internal/robust"
)

// binning is the side [px] of the squares that are averaged before trails are
// sought.
const binning = 4

// binned is a frame of averages over squares of binning px, in units of their
// own noise, without what is smooth and with bright values clipped. Masked
// bins are zero.
type binned struct {
	w, h int
	pix  []float32
}

// segment is a discrete line of bins: n rows from row (or column, if flat)
// first, beginning at start and ending at start+shift.
type segment struct {
	score        float64
	first, n     int
	start, shift int // shift ≥ 0 towards higher, negative towards lower
	flat         bool
}

// ends returns the first and last bin [bins, 0-based] of a segment.
func (s segment) ends() (x0, y0, x1, y1 float64) {
	a, b := float64(s.start), float64(s.start+s.shift)
	p, q := float64(s.first), float64(s.first+s.n-1)
	if s.flat {
		return p, a, q, b
	}
	return a, p, b, q
}

// sum adds up the bins of a segment.
func (b *binned) sum(s segment) float64 {
	levels := bits.Len(uint(s.n)) - 1
	total := 0.0
	for r := range s.n {
		along, across := s.first+r, abs(s.shift)
		d := rowOffset(levels, across, r)
		if s.shift < 0 {
			d = -d
		}
		i, j := s.start+d, along
		if s.flat {
			i, j = j, i
		}
		if i >= 0 && j >= 0 && i < b.w && j < b.h {
			total += float64(b.pix[j*b.w+i])
		}
	}
	return total
}

// rowOffset is how far row r of a discrete line of 2^m rows and shift s is from
// its start.
func rowOffset(m, s, r int) int {
	d := 0
	for m > 0 {
		m--
		if r >= 1<<m {
			r -= 1 << m
			d += s - s/2
		}
		s /= 2
	}
	return d
}

// tile is the number of neighbouring starting places of which the best line
// alone is kept.
const tile = 64

// search lists discrete lines of 2^m bins, m from lowest on, whose sums exceed
// threshold times the noise of such sums, best first. That noise is the larger
// of white noise's and the measured spread.
func (b *binned) search(lowest int, threshold float64) []segment {
	var list []segment
	across := make([]float32, len(b.pix))
	for i := range b.w {
		for j := range b.h {
			across[i*b.h+j] = b.pix[j*b.w+i]
		}
	}
	mirror := make([]float32, len(b.pix))
	for _, flat := range []bool{false, true} {
		w, h, pix := b.w, b.h, b.pix
		if flat {
			w, h, pix = b.h, b.w, across
		}
		t := newTransform(w, h)
		list = append(list, t.run(pix, lowest, threshold, flat, false)...)
		for j := range h {
			src, dst := pix[j*w:(j+1)*w], mirror[j*w:(j+1)*w]
			for i, v := range src {
				dst[w-1-i] = v
			}
		}
		list = append(list, t.run(mirror, lowest, threshold, flat, true)...)
	}
	slices.SortStableFunc(list, func(a, c segment) int {
		switch {
		case a.score > c.score:
			return -1
		case a.score < c.score:
			return 1
		}
		return 0
	})
	return list
}

// transform is the fast Radon transform of a plane w bins wide. At level m,
// plane (block, s) holds for each start x the sum over the 2^m rows of the
// block along the discrete line from x in its first row to x+s in its last:
//
//	R(m+1, block, x, 2s)   = R(m, 2·block, x, s) + R(m, 2·block+1, x+s, s)
//	R(m+1, block, x, 2s+1) = R(m, 2·block, x, s) + R(m, 2·block+1, x+s+1, s)
//
// Starts run from -2^m, so that lines that enter from the side are there.
type transform struct {
	w, h, n int // n: rows, a power of two
	a, b, c []float32
	sample  []float32
}

func newTransform(w, h int) *transform {
	n := 1
	for n < h {
		n *= 2
	}
	size := n * (w + n)
	return &transform{w: w, h: h, n: n, a: make([]float32, size), b: make([]float32, size), c: make([]float32, size)}
}

// level describes the layout at one level: planes of width wide, starts from -pad.
func (t *transform) level(m int) (rows, pad, wide int) {
	rows = 1 << m
	return rows, rows, t.w + rows
}

func (t *transform) run(pix []float32, lowest int, threshold float64, flat, mirrored bool) []segment {
	_, pad, wide := t.level(0)
	cur, next := t.a, t.b
	for j := range t.n {
		row := cur[j*wide : (j+1)*wide]
		clear(row)
		if j < t.h {
			copy(row[pad:], pix[j*t.w:(j+1)*t.w])
		}
	}
	var list []segment
	for m := 0; 1<<m < t.n; m++ {
		t.step(next, cur, m, 0)
		if m+1 >= lowest {
			list = t.peaks(list, next, m+1, 0, threshold, flat, mirrored)
			// Blocks that begin half way: no short trail is cut in two.
			t.step(t.c, cur, m, 1)
			list = t.peaks(list, t.c, m+1, 1<<m, threshold, flat, mirrored)
		}
		cur, next = next, cur
	}
	return list
}

// step makes level m+1 from level m, of the blocks 2·block+odd and the one
// after each.
func (t *transform) step(dst, src []float32, m, odd int) {
	rows, pad, wide := t.level(m)
	_, pad2, wide2 := t.level(m + 1)
	for block := range t.n / (2 * rows) {
		if (2*block+odd)*rows >= t.h || (2*block+odd+2)*rows > t.n {
			clear(dst[block*2*rows*wide2 : (block+1)*2*rows*wide2])
			continue
		}
		for s2 := range 2 * rows {
			s := s2 / 2
			by := s + s2&1
			out := dst[(block*2*rows+s2)*wide2:][:wide2]
			one := src[((2*block+odd)*rows+s)*wide:][:wide]
			two := src[((2*block+odd+1)*rows+s)*wide:][:wide]
			// out[x+pad2] = one[x+pad] + two[x+by+pad], zero where out of range.
			// Index in out: o = x + pad2; one at o - (pad2-pad), two at o + by - (pad2-pad).
			gap := pad2 - pad
			low := max(0, gap-by) // two begins
			clear(out[:low])
			end2 := wide - by + gap // two ends (exclusive), in out
			if low < gap {
				copy(out[low:gap], two[low+by-gap:by])
			}
			x, y, z := out[gap:end2], one[:end2-gap], two[by:wide]
			for i, v := range y {
				x[i] = v + z[i]
			}
			copy(out[end2:], one[end2-gap:])
		}
	}
}

// peaks adds the best line of each block and tile that exceeds the threshold.
// The blocks begin at row begin.
func (t *transform) peaks(list []segment, r []float32, m, begin int, threshold float64, flat, mirrored bool) []segment {
	rows, pad, wide := t.level(m)
	noise := math.Sqrt(float64(rows))
	// The measured spread, from lines that run inside the frame.
	s := t.sample[:0]
	stride := max(1, t.n*t.w/4000) | 1
	for k := stride / 2; k < t.n*t.w; k += stride {
		plane, x := k/t.w, k%t.w
		shift := plane % rows
		if begin+(plane/rows+1)*rows <= t.h && x+shift < t.w {
			if v := r[plane*wide+pad+x]; v != 0 {
				s = append(s, v)
			}
		}
	}
	t.sample = s
	centre := 0.0
	if len(s) > 50 {
		centre = float64(robust.Select(s, len(s)/2))
		spread := centre - float64(robust.Select(s[:len(s)/2], len(s)*4/25)) // the lower side: trails and stars are on the upper
		noise = max(noise, spread)
	}
	limit := float32(max(0, centre) + threshold*noise)
	for block := range t.n / rows {
		if begin+block*rows >= t.h || begin+(block+1)*rows > t.n {
			break
		}
		for x0 := 0; x0 < wide; x0 += tile {
			x1 := min(wide, x0+tile)
			best, bestShift, bestX := limit, -1, 0
			for shift := range rows {
				line := r[(block*rows+shift)*wide:][x0:x1]
				for i, v := range line {
					if v > best {
						best, bestShift, bestX = v, shift, x0+i-pad
					}
				}
			}
			if bestShift < 0 {
				continue
			}
			g := segment{score: (float64(best) - centre) / noise, first: begin + block*rows, n: rows, start: bestX, shift: bestShift, flat: flat}
			if mirrored {
				g.start, g.shift = t.w-1-bestX, -bestShift
			}
			list = append(list, g)
		}
	}
	return list
}
