package fits

import (
	"encoding/binary"
	"errors"
	"math/bits"
)

// Rice coding of differences (FITS 4.0, section 10.4.1; Rice, Yeh and Miller
// 1993, AIAA Computing in Aerospace 9). A tile begins with its first pixel, as
// it is. Then come blocks of differences to the pixel before, folded to
// unsigned numbers (0, -1, 1, -2, …). Each block opens with a code of few bits:
// 0 says that all differences are zero, the largest that they stand in full,
// any other, less one, how many low bits of each stand in full after the
// unary rest.

var errTileShort = errors.New("the compressed bytes end too early")

// riceForm has the sizes that depend on the bytes of a pixel.
type riceForm struct {
	codeBits uint // of the code that opens a block
	full     int  // the code, less one, of a block that is not compressed
	bits     uint // of a pixel
}

// riceForms by bytes of a pixel; others have no form.
var riceForms = map[int]riceForm{1: {3, 6, 8}, 2: {4, 14, 16}, 4: {5, 25, 32}}

// bitReader hands out bits, the most significant first.
type bitReader struct {
	src  []byte
	pos  int
	acc  uint64 // the next bits, left-aligned; below them may be more true bits
	have uint   // how many count
}

// fill brings have to 56 or more, unless the source ends.
func (r *bitReader) fill() {
	if r.pos+8 <= len(r.src) {
		r.acc |= binary.BigEndian.Uint64(r.src[r.pos:]) >> r.have
		n := (63 - r.have) >> 3
		r.pos += int(n)
		r.have += 8 * n
		return
	}
	for r.have <= 56 && r.pos < len(r.src) {
		r.acc |= uint64(r.src[r.pos]) << (56 - r.have)
		r.pos++
		r.have += 8
	}
}

// take returns n bits, at most 32.
func (r *bitReader) take(n uint) (uint32, bool) {
	if r.have < n {
		if r.fill(); r.have < n {
			return 0, false
		}
	}
	v := r.acc >> 1 >> (63 - n)
	r.acc <<= n
	r.have -= n
	return uint32(v), true
}

// zeros counts the zero bits before the next one, and takes them with it.
func (r *bitReader) zeros() (uint32, bool) {
	var n uint32
	for {
		if z := uint(bits.LeadingZeros64(r.acc)); z < r.have {
			r.acc <<= z + 1
			r.have -= z + 1
			return n + uint32(z), true
		}
		n += uint32(r.have)
		r.acc, r.have = 0, 0
		if r.fill(); r.have == 0 {
			return 0, false
		}
	}
}

// riceDecode expands len(dst) pixels of width bytes, which is a key of
// riceForms. Pixels of one byte are unsigned, wider ones signed.
func riceDecode(dst []int32, src []byte, block, width int) error {
	form := riceForms[width]
	if len(src) < width {
		return errTileShort
	}
	var last uint32
	for _, b := range src[:width] {
		last = last<<8 | uint32(b)
	}
	shift, mask := 32-form.bits, int32(-1)
	if width == 1 {
		shift, mask = 0, 0xff
	}
	r := bitReader{src: src[width:]}
	for len(dst) > 0 {
		n := min(block, len(dst))
		out := dst[:n]
		dst = dst[n:]
		code, ok := r.take(form.codeBits)
		if !ok {
			return errTileShort
		}
		switch low := int(code) - 1; {
		case low < 0:
			v := int32(last<<shift) >> shift & mask
			for i := range out {
				out[i] = v
			}
		case low == form.full:
			for i := range out {
				d, ok := r.take(form.bits)
				if !ok {
					return errTileShort
				}
				last += d>>1 ^ -(d & 1)
				out[i] = int32(last<<shift) >> shift & mask
			}
		case low > form.full:
			return errors.New("a block has a code that Rice coding does not know")
		default:
			if last, ok = riceBlock(&r, out, last, uint(low), shift, mask); !ok {
				return errTileShort
			}
		}
	}
	return nil
}

// riceBlock expands a block whose differences have low bits in full.
func riceBlock(r *bitReader, out []int32, last uint32, low, shift uint, mask int32) (uint32, bool) {
	acc, have, pos, src := r.acc, r.have, r.pos, r.src
	for i := range out {
		if have < 32 && pos+8 <= len(src) {
			acc |= binary.BigEndian.Uint64(src[pos:]) >> (have & 63)
			n := (63 - have) >> 3
			pos += int(n)
			have += 8 * n
		}
		var d uint32
		if z := uint(bits.LeadingZeros64(acc)); z+1+low <= have {
			acc <<= (z + 1) & 63
			d = uint32(z)<<(low&31) | uint32(acc>>1>>((63-low)&63))
			acc <<= low & 63
			have -= z + 1 + low
		} else {
			r.acc, r.have, r.pos = acc, have, pos
			high, ok := r.zeros()
			rest, ok2 := r.take(low)
			if !ok || !ok2 {
				return last, false
			}
			d = high<<low | rest
			acc, have, pos = r.acc, r.have, r.pos
		}
		last += d>>1 ^ -(d & 1)
		out[i] = int32(last<<(shift&31)) >> (shift & 31) & mask
	}
	r.acc, r.have, r.pos = acc, have, pos
	return last, true
}

// bitWriter collects bits, the most significant first.
type bitWriter struct {
	dst  []byte
	acc  uint64 // the bits not yet in dst, right-aligned
	have uint
}

// put appends the low n bits of v, at most 32; the others must be zero.
func (w *bitWriter) put(v uint32, n uint) {
	w.acc = w.acc<<n | uint64(v)
	w.have += n
	if w.have >= 32 {
		w.have -= 32
		w.dst = binary.BigEndian.AppendUint32(w.dst, uint32(w.acc>>w.have))
	}
}

// zeros appends n zero bits and a one.
func (w *bitWriter) zeros(n uint32) {
	for ; n >= 31; n -= 31 {
		w.put(0, 31)
	}
	w.put(1, uint(n)+1)
}

// end fills the last byte with zero bits.
func (w *bitWriter) end() []byte {
	for w.have >= 8 {
		w.have -= 8
		w.dst = append(w.dst, byte(w.acc>>w.have))
	}
	if w.have > 0 {
		w.dst = append(w.dst, byte(w.acc<<(8-w.have)))
		w.have = 0
	}
	return w.dst
}

// riceEncode appends the coded pixels to dst. Of each pixel the low width
// bytes count. The number of low bits of a block is the one that makes the
// block shortest.
func riceEncode(dst []byte, pix []int32, block, width int) []byte {
	form := riceForms[width]
	w := bitWriter{dst: dst}
	last := uint32(pix[0])
	for b := width - 1; b >= 0; b-- {
		w.dst = append(w.dst, byte(last>>(8*b)))
	}
	shift := 32 - form.bits
	folded := make([]uint32, block)
	for len(pix) > 0 {
		n := min(block, len(pix))
		var sum uint64
		for i, v := range pix[:n] {
			d := int32((uint32(v)-last)<<shift) >> shift
			last = uint32(v)
			folded[i] = uint32(d<<1) ^ uint32(d>>31)
			sum += uint64(folded[i])
		}
		pix = pix[n:]
		if sum == 0 {
			w.put(0, form.codeBits)
			continue
		}
		low, size := riceLow(folded[:n], sum, form)
		if size >= uint64(n)*uint64(form.bits) {
			w.put(uint32(form.full+1), form.codeBits)
			for _, d := range folded[:n] {
				w.put(d, form.bits)
			}
			continue
		}
		w.put(uint32(low+1), form.codeBits)
		for _, d := range folded[:n] {
			w.zeros(d >> low)
			w.put(d&(1<<low-1), low)
		}
	}
	return w.end()
}

// riceLow finds the best number of low bits, and the bits that the block then
// takes. The best lies near the logarithm of the mean.
func riceLow(folded []uint32, sum uint64, form riceForm) (best uint, size uint64) {
	middle := bits.Len64(sum / uint64(len(folded)))
	size = 1 << 62
	for low := max(0, middle-2); low <= min(form.full-1, middle+1); low++ {
		total := uint64(len(folded)) * uint64(low+1)
		for _, d := range folded {
			total += uint64(d >> low)
		}
		if total < size {
			best, size = uint(low), total
		}
	}
	return best, size
}
