package fits

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math/bits"
)

// The H-transform with quadtree coding (FITS 4.0, section 10.4.4; White,
// Postman and Lattanzi 1992, in Digitised Optical Sky Surveys). The transform
// replaces, level by level, each square of four pixels by their sum and three
// differences. The coefficients, divided by a scale, are coded bit plane by
// bit plane, each in a quadtree whose nodes tell which of four quarters hold
// bits at all. Rows here are the slow axis.

var errHcompress = errors.New("the quadtree is damaged")

// hcompressed is a tile while it is expanded. Its buffers are used again.
type hcompressed struct {
	rows, cols int
	a          []int64 // coefficients, in the end pixels
	quads      []byte  // nodes of a level of the quadtree
	above      []byte  // those of the coarser level
	line       []int64
	in         bitReader
}

// header of a compressed tile: two bytes of magic, rows, columns and scale in
// four bytes each, the sum in eight, and the numbers of bit planes.
const hcompressHeader = 2 + 3*4 + 8 + 3

// decode expands a tile of known shape; smooth asks for the smoothing of the
// blocks that a large scale leaves.
func (t *hcompressed) decode(dst []int32, src []byte, rows, cols int, smooth bool) error {
	if rows < 2 || cols < 2 {
		return fmt.Errorf("the tile is %d×%d pixels, want 2×2 at least", cols, rows)
	}
	if len(src) < hcompressHeader {
		return errTileShort
	}
	if src[0] != 0xdd || src[1] != 0x99 {
		return fmt.Errorf("the tile begins with %x, want dd99", src[:2])
	}
	if r, c := int(get32(src[2:])), int(get32(src[6:])); r != rows || c != cols {
		return fmt.Errorf("the tile holds %d×%d pixels, want %d×%d", c, r, cols, rows)
	}
	scale, total := int64(get32(src[10:])), int64(binary.BigEndian.Uint64(src[14:]))
	planes := src[22:25]
	t.rows, t.cols = rows, cols
	t.a = resize(t.a, rows*cols)
	clear(t.a)
	t.in = bitReader{src: src[hcompressHeader:]}
	topRows, topCols := (rows+1)/2, (cols+1)/2
	for _, q := range []struct {
		at, rows, cols int
		planes         byte
	}{
		{0, topRows, topCols, planes[0]},
		{topCols, topRows, cols / 2, planes[1]},
		{topRows * cols, rows / 2, topCols, planes[1]},
		{topRows*cols + topCols, rows / 2, cols / 2, planes[2]},
	} {
		if err := t.quadrant(q.at, q.rows, q.cols, int(q.planes)); err != nil {
			return err
		}
	}
	if end, ok := t.in.take(4); !ok || end != 0 {
		return errHcompress
	}
	t.in.take(t.in.have % 8) // the signs begin at a whole byte
	for i, v := range t.a {
		if v != 0 {
			negative, ok := t.in.take(1)
			if !ok {
				return errTileShort
			}
			if negative == 1 {
				v = -v
			}
			if scale > 1 {
				v *= scale
			}
			t.a[i] = v
		}
	}
	t.a[0] = total
	if scale > 1 {
		t.a[0] *= scale
	}
	t.invert(scale, smooth)
	for i := range dst {
		dst[i] = int32(t.a[i])
	}
	return nil
}

func resize[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n)
	}
	return s[:n]
}

// quadrant reads all bit planes of a quarter of the coefficients, which begins
// at element at.
func (t *hcompressed) quadrant(at, rows, cols, planes int) error {
	if planes > 62 {
		return errHcompress
	}
	levels := bits.Len(uint(max(rows, cols) - 1))
	size := (rows + 1) / 2 * ((cols + 1) / 2)
	t.quads, t.above = resize(t.quads, size), resize(t.above, size)
	for plane := planes - 1; plane >= 0; plane-- {
		form, ok := t.in.take(4)
		if !ok {
			return errTileShort
		}
		switch form {
		case 0: // four bits for each node, as they are
			for i := range t.quads {
				v, ok := t.in.take(4)
				if !ok {
					return errTileShort
				}
				t.quads[i] = byte(v)
			}
		case 15:
			if t.quads[0], ok = t.node(); !ok {
				return errTileShort
			}
			// The shape of each level is that of the quarter divided by a
			// power of two, rounded up.
			for level := levels - 1; level >= 1; level-- {
				if !t.descend(up(cols, level+1), up(rows, level), up(cols, level)) {
					return errTileShort
				}
			}
		default:
			return errHcompress
		}
		bit, stride := int64(1)<<plane, (cols+1)/2
		for r := range rows {
			line, nodes := t.a[at+r*t.cols:][:cols], t.quads[r/2*stride:]
			for c := range line {
				if nodes[c/2]>>(3-2*(r&1)-c&1)&1 == 1 {
					line[c] |= bit
				}
			}
		}
	}
	return nil
}

// up divides by a power of two and rounds up.
func up(n, power int) int { return (n + 1<<power - 1) >> power }

// descend replaces the nodes of a level, with a stride, by the rows×cols nodes
// of the next finer one. They stand in the stream from the last to the first.
func (t *hcompressed) descend(stride, rows, cols int) bool {
	t.quads, t.above = t.above, t.quads
	for r := rows - 1; r >= 0; r-- {
		for c := cols - 1; c >= 0; c-- {
			var v byte
			if t.above[r/2*stride+c/2]>>(3-2*(r&1)-c&1)&1 == 1 {
				var ok bool
				if v, ok = t.node(); !ok {
					return false
				}
			}
			t.quads[r*cols+c] = v
		}
	}
	return true
}

// nodeCodes gives for the next six bits of the stream the node, and the number
// of bits of its code.
var nodeCodes = func() (table [64]struct{ node, bits byte }) {
	for node, code := range [16]string{
		"111110", "000", "001", "1000", "010", "1001", "11010", "11011",
		"011", "11100", "1010", "11101", "1011", "11110", "111111", "1100",
	} {
		for i := range table {
			if fmt.Sprintf("%06b", i)[:len(code)] == code {
				table[i].node, table[i].bits = byte(node), byte(len(code))
			}
		}
	}
	return table
}()

// node reads four bits that are coded by their frequency.
func (t *hcompressed) node() (byte, bool) {
	if t.in.have < 6 {
		t.in.fill()
	}
	e := nodeCodes[t.in.acc>>58]
	if t.in.have < uint(e.bits) {
		return 0, false
	}
	t.in.acc <<= e.bits
	t.in.have -= uint(e.bits)
	return e.node, true
}

// invert turns coefficients into pixels, from the coarsest level to the
// finest. A level's coefficients are known to fewer bits than the sums need;
// the bits that were shifted out follow from the parity of the others.
func (t *hcompressed) invert(scale int64, smooth bool) {
	levels := bits.Len(uint(max(t.rows, t.cols) - 1))
	t.line = resize(t.line, max(t.rows, t.cols))
	low := int64(1) << max(levels-1, 0) // lowest bit of the curvature at this level
	t.a[0] = roundTo(t.a[0], low<<2)
	for level := levels - 1; level >= 0; level-- {
		rows, cols := up(t.rows, level), up(t.cols, level)
		for r := range rows {
			interleave(t.a[r*t.cols:], t.line, cols, 1)
		}
		for c := range cols {
			interleave(t.a[c:], t.line, rows, t.cols)
		}
		if smooth {
			t.smooth(rows, cols, scale)
		}
		t.squares(rows, cols, low, level == 0)
		low >>= 1
	}
}

// roundTo rounds to a multiple of a power of two, halves away from zero.
func roundTo(v, unit int64) int64 {
	half := unit >> 1
	if v < 0 {
		half = max(half-1, 0)
	}
	return (v + half) & -unit
}

// interleave brings the first half of n elements to the even places and the
// second half to the odd ones.
func interleave(a, line []int64, n, stride int) {
	for i := range n {
		line[i] = a[i*stride]
	}
	half := (n + 1) / 2
	for i := range half {
		a[2*i*stride] = line[i]
	}
	for i := half; i < n; i++ {
		a[(2*(i-half)+1)*stride] = line[i]
	}
}

// squares turns sums and differences into the four values they came from.
func (t *hcompressed) squares(rows, cols int, low int64, last bool) {
	shift := 1
	if last {
		shift = 2
	}
	away := func(v, by int64) int64 {
		if v >= 0 {
			return v + by
		}
		return v - by
	}
	a, mid := t.a, low<<1
	for r := 0; r < rows; r += 2 {
		for c := 0; c < cols; c += 2 {
			at := r*t.cols + c
			sum := a[at]
			right, below := c+1 < cols, r+1 < rows
			switch {
			case right && below:
				diag := at + t.cols + 1
				dx, dy := roundTo(a[at+t.cols], mid), roundTo(a[at+1], mid)
				dc := roundTo(a[diag], low)
				bit0 := dc & low
				dx, dy = away(dx, -bit0), away(dy, -bit0)
				bit1 := (dc ^ dx ^ dy) & mid
				if sum < 0 && bit0 == 0 {
					bit1 = -bit1
				}
				sum += bit0 - bit1
				a[diag] = (sum + dx + dy + dc) >> shift
				a[at+t.cols] = (sum + dx - dy - dc) >> shift
				a[at+1] = (sum - dx + dy - dc) >> shift
				a[at] = (sum - dx - dy + dc) >> shift
			case right || below:
				other := at + 1
				if below {
					other = at + t.cols
				}
				d := roundTo(a[other], mid)
				sum = away(sum, -(d & mid))
				a[other], a[at] = (sum+d)>>shift, (sum-d)>>shift
			default:
				a[at] = sum >> shift
			}
		}
	}
}

// smooth replaces differences that the scale rounded away by those of a smooth
// surface through the neighbouring sums, by no more than the rounding.
func (t *hcompressed) smooth(rows, cols int, scale int64) {
	most := scale >> 1
	if most <= 0 {
		return
	}
	a, two := t.a, 2*t.cols
	clamp := func(v, low, high int64) int64 { return max(min(v, high), low) }
	adjust := func(at, step, target int) {
		before, here, after := a[at-step], a[at], a[at+step]
		high := max(min(after-here, here-before), 0) << 2
		low := min(max(after-here, here-before), 0) << 2
		if low < high {
			s := (clamp(after-before, low, high) - a[target]<<3) / 8
			a[target] += clamp(s, -most, most)
		}
	}
	for r := 2; r < rows-2; r += 2 {
		for c := 0; c < cols; c += 2 {
			adjust(r*t.cols+c, two, (r+1)*t.cols+c)
		}
	}
	for r := 0; r < rows; r += 2 {
		for c := 2; c < cols-2; c += 2 {
			adjust(r*t.cols+c, 2, r*t.cols+c+1)
		}
	}
	for r := 2; r < rows-2; r += 2 {
		for c := 2; c < cols-2; c += 2 {
			at := r*t.cols + c
			here := a[at]
			mm, pm, mp, pp := a[at-two-2], a[at+two-2], a[at-two+2], a[at+two+2]
			dx, dy := a[at+t.cols]<<1, a[at+1]<<1
			high := min(max(pp-here, 0)-dx-dy, max(here-pm, 0)+dx-dy, max(here-mp, 0)-dx+dy, max(mm-here, 0)+dx+dy) << 4
			low := max(min(pp-here, 0)-dx-dy, min(here-pm, 0)+dx-dy, min(here-mp, 0)-dx+dy, min(mm-here, 0)+dx+dy) << 4
			if low < high {
				s := (clamp(pp+mm-mp-pm, low, high) - a[at+t.cols+1]<<6) / 64
				a[at+t.cols+1] += clamp(s, -most, most)
			}
		}
	}
}
