package fits

import (
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
)

// sum accumulates the ones' complement sum of big-endian 32-bit words of FITS
// 4.0, appendix J. The carries collect in the upper half and are folded back
// when the sum is read, which gives the same result.
type sum uint64

// fold brings the sum back below 2³³, so that 2³⁰ more words can follow.
func (s *sum) fold() { *s = *s>>32 + *s&math.MaxUint32 }

// value returns the sum of 32 bits.
func (s sum) value() uint32 {
	for s>>32 != 0 {
		s.fold()
	}
	return uint32(s)
}

// bytes adds raw bytes, the first of a word first. Only the last call for one
// HDU may have a length that is no multiple of four.
func (s *sum) bytes(p []byte) {
	var a, b uint64
	for len(p) >= 16 {
		u, v := binary.BigEndian.Uint64(p), binary.BigEndian.Uint64(p[8:])
		a += u>>32 + v>>32
		b += u&math.MaxUint32 + v&math.MaxUint32
		p = p[16:]
	}
	for len(p) >= 4 {
		a += uint64(binary.BigEndian.Uint32(p))
		p = p[4:]
	}
	if len(p) > 0 {
		var last [4]byte
		copy(last[:], p)
		b += uint64(binary.BigEndian.Uint32(last[:]))
	}
	s.fold()
	*s += sum(a>>32+a&math.MaxUint32) + sum(b>>32+b&math.MaxUint32)
}

// floats adds pixels as they will be stored: a float32 is one word, whatever
// the byte order.
func (s *sum) floats(pix []float32) {
	var a, b, c, d uint64
	for len(pix) >= 4 {
		a += uint64(math.Float32bits(pix[0]))
		b += uint64(math.Float32bits(pix[1]))
		c += uint64(math.Float32bits(pix[2]))
		d += uint64(math.Float32bits(pix[3]))
		pix = pix[4:]
	}
	for _, v := range pix {
		a += uint64(math.Float32bits(v))
	}
	for _, t := range [...]uint64{a, b, c, d} {
		s.fold()
		*s += sum(t>>32 + t&math.MaxUint32)
	}
}

// encodeChecksum writes the complement of a sum as the 16 characters of the
// CHECKSUM keyword (appendix J.2.2).
func encodeChecksum(total uint32) string {
	const exclude = ":;<=>?@[\\]^_`"
	value := ^total
	var out [16]byte
	for i := range 4 {
		b := int(value >> (24 - 8*i) & 0xff)
		quotient, remainder := b/4+'0', b%4
		ch := [4]int{quotient + remainder, quotient, quotient, quotient}
		for again := true; again; {
			again = false
			for j := 0; j < 4; j += 2 {
				if strings.IndexByte(exclude, byte(ch[j])) >= 0 || strings.IndexByte(exclude, byte(ch[j+1])) >= 0 {
					ch[j]++
					ch[j+1]--
					again = true
				}
			}
		}
		for j := range 4 {
			out[4*j+i] = byte(ch[j])
		}
	}
	// One place to the right, as the value begins at the second byte of a word.
	return string(out[15]) + string(out[:15])
}

// Verify compares the CHECKSUM and DATASUM of HDU i with its bytes. It returns
// a *FormatError when one of them is wrong; a keyword that is absent passes,
// and present tells whether there was one.
func (f *File) Verify(i int) (present bool, err error) {
	h := &f.hdus[i]
	head, err := f.sumRange(h, h.headOffset, h.dataOffset-h.headOffset)
	if err != nil {
		return false, err
	}
	data, err := f.sumRange(h, h.dataOffset, padded(h.dataBytes))
	if err != nil {
		return false, err
	}
	if text, ok := h.stored.Text("DATASUM"); ok && strings.TrimSpace(text) != "" {
		present = true
		want, err := strconv.ParseUint(strings.TrimSpace(text), 10, 32)
		if err != nil {
			return true, f.formatError(i, "DATASUM = %q: want a number of 32 bits", text)
		}
		if uint32(want) != data.value() {
			return true, f.formatError(i, "the data are damaged: their sum is %d, DATASUM says %d", data.value(), want)
		}
	}
	if text, ok := h.stored.Str("CHECKSUM"); ok && strings.TrimSpace(text) != "" {
		present = true
		total := head
		total.fold()
		total += sum(data.value())
		if v := total.value(); v != 0 && v != math.MaxUint32 {
			return true, f.formatError(i, "the header or the data are damaged: CHECKSUM does not agree")
		}
	}
	return present, nil
}

func (f *File) sumRange(h *HDU, offset, n int64) (sum, error) {
	var s sum
	buffer := chunks.Get().(*[]byte)
	defer chunks.Put(buffer)
	for n > 0 {
		part := (*buffer)[:min(n, chunkBytes)]
		m, err := f.src.ReadAt(part, offset)
		if m < len(part) && err != nil && err != io.EOF {
			return 0, fmt.Errorf("%s[%d]: %w", f.Path, h.Index, err)
		}
		s.bytes(part[:m]) // what is missing of the last block counts as zero
		if m < len(part) {
			break
		}
		offset, n = offset+int64(m), n-int64(m)
	}
	return s, nil
}
