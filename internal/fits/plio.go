package fits

import "encoding/binary"

// plioDecode expands a line list, the code of masks (FITS 4.0, section
// 10.4.3): 16-bit words whose upper four bits are an instruction, the lower
// twelve a number. There is a current value, at first 1.
func plioDecode(dst []int32, src []byte) error {
	word := func(i int) int { return int(int16(binary.BigEndian.Uint16(src[2*i:]))) }
	words := len(src) / 2
	if words < 3 {
		return errTileShort
	}
	// An old form of the list has its length in the third word and begins
	// right after it; the newer one has its length in two words.
	end, at := word(2), 3
	if end <= 0 {
		if words < 7 {
			return errTileShort
		}
		end, at = word(4)<<15+word(3), word(1)
	}
	if end > words || at < 0 {
		return errTileShort
	}
	clear(dst)
	value, n := int32(1), 0
	for ; at < end; at++ {
		w := int(uint16(word(at)))
		number := w & 0xfff
		switch w >> 12 {
		case 0: // zeros
			n += number
		case 4: // the value
			for i := n; i < min(n+number, len(dst)); i++ {
				dst[i] = value
			}
			n += number
		case 5: // zeros, the last one the value
			if n += number; number > 0 && n <= len(dst) {
				dst[n-1] = value
			}
		case 1: // a new value in two words
			at++
			if at >= end {
				return errTileShort
			}
			value = int32(word(at)<<12 + number)
		case 2:
			value += int32(number)
		case 3:
			value -= int32(number)
		case 6, 7: // as 2 and 3, and one pixel
			if w>>12 == 7 {
				number = -number
			}
			value += int32(number)
			if n < len(dst) {
				dst[n] = value
			}
			n++
		}
		if n >= len(dst) {
			return nil
		}
	}
	return nil // what is missing is zero
}
