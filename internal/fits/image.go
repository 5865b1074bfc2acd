package fits

import (
	"encoding/binary"
	"math"
	"math/bits"
	"strings"
	"sync"
	"unsafe"
)

// Image is a plane of an HDU in physical values: stored value × BSCALE +
// BZERO, rounded to float32. The pixel with FITS coordinates (x,y) is
// Pix[(y-1)*Width + (x-1)]. NaN marks a pixel without data: BLANK in integer
// images, NaN in floating-point ones.
type Image struct {
	Header        *Header
	Width, Height int
	Pix           []float32

	BitPix  int     // of the stored values
	TypeMax float64 // the largest value an integer type can hold, scaled; NaN for floats
}

// Cube is an array of planes. The pixel (x,y) of plane k, counted from 0, is
// Pix[(k*Height+y-1)*Width + (x-1)].
type Cube struct {
	Header               *Header
	Width, Height, Depth int
	Pix                  []float32
}

// Plane returns plane k, which shares the cube's memory.
func (c *Cube) Plane(k int) []float32 {
	n := c.Width * c.Height
	return c.Pix[k*n : (k+1)*n]
}

// Flags is a plane of unsigned 16-bit integers, addressed like an Image.
type Flags struct {
	Header        *Header
	Width, Height int
	Bits          []uint16
}

// Image reads the two-dimensional image of HDU i, an index into HDUs.
func (f *File) Image(i int) (*Image, error) {
	h := &f.hdus[i]
	switch h.Kind {
	case ImageData, CompressedImage:
		if h.Depth > 1 {
			return nil, f.unsupported(i, "NAXISn = %v: want a two-dimensional image; read one plane of it", h.Axes)
		}
		return f.plane(i, 0)
	case CubeData:
		return nil, f.unsupported(i, "NAXISn = %v: want a two-dimensional image; read one plane of it", h.Axes)
	}
	return nil, f.formatError(i, "holds no image (kind: %s)", h.Kind)
}

// Plane reads plane k, counted from 0, of the image or cube of HDU i.
func (f *File) Plane(i, k int) (*Image, error) {
	h := &f.hdus[i]
	switch h.Kind {
	case ImageData, CubeData, CompressedImage:
	default:
		return nil, f.formatError(i, "holds no image (kind: %s)", h.Kind)
	}
	if k < 0 || k >= h.Depth {
		return nil, f.formatError(i, "has no plane %d: NAXISn = %v", k, h.Axes)
	}
	return f.plane(i, k)
}

func (f *File) plane(i, k int) (*Image, error) {
	h := &f.hdus[i]
	s, err := f.scaling(h)
	if err != nil {
		return nil, err
	}
	img := &Image{Header: h.Header, Width: h.Width, Height: h.Height, BitPix: h.BitPix, TypeMax: s.typeMax(h.BitPix)}
	img.Pix, err = f.planes(h, k, 1, s)
	if err != nil {
		return nil, err
	}
	return img, nil
}

// planes reads count planes from the first-th on.
func (f *File) planes(h *HDU, first, count int, s scaling) ([]float32, error) {
	if h.Kind == CompressedImage {
		return f.decompress(h, first, count, 0, h.Height, s)
	}
	n := h.Width * h.Height
	pix := unset(n * count)
	if err := f.decode(pix, h, int64(first)*int64(n), s); err != nil {
		return nil, err
	}
	return pix, nil
}

// unset returns memory for n values that whoever asks will set all. To clear
// that of a large plane first would cost a sixth of the time of reading it. Of
// the standard library only a strings.Builder hands out memory as it was; the
// string that it would become is used by nobody.
func unset(n int) []float32 {
	if n < 1<<16 {
		return make([]float32, n)
	}
	var memory strings.Builder
	memory.Grow(4 * n)
	memory.WriteByte(0) // of an empty string the address would not be defined
	return unsafe.Slice((*float32)(unsafe.Pointer(unsafe.StringData(memory.String()))), n)
}

// Cube reads the planes of HDU i; an image is a cube of depth 1.
func (f *File) Cube(i int) (*Cube, error) {
	h := &f.hdus[i]
	switch h.Kind {
	case ImageData, CubeData, CompressedImage:
	default:
		return nil, f.formatError(i, "holds no image (kind: %s)", h.Kind)
	}
	s, err := f.scaling(h)
	if err != nil {
		return nil, err
	}
	c := &Cube{Header: h.Header, Width: h.Width, Height: h.Height, Depth: h.Depth}
	if c.Pix, err = f.planes(h, 0, h.Depth, s); err != nil {
		return nil, err
	}
	return c, nil
}

// Flags reads the two-dimensional image of HDU i as unsigned 16-bit integers.
// A value outside 0…65535, or one that is not whole, is an error.
func (f *File) Flags(i int) (*Flags, error) {
	img, err := f.Image(i)
	if err != nil {
		return nil, err
	}
	out := &Flags{Header: img.Header, Width: img.Width, Height: img.Height, Bits: make([]uint16, len(img.Pix))}
	for p, v := range img.Pix {
		b := uint16(v)
		if float32(b) != v || v < 0 || v > 65535 {
			return nil, f.formatError(i, "pixel (%d,%d) = %g: want a whole number of 0 to 65535", p%img.Width+1, p/img.Width+1, v)
		}
		out.Bits[p] = b
	}
	return out, nil
}

// scaling turns stored into physical values.
type scaling struct {
	scale, zero float64
	hasBlank    bool
	blank       int64
}

func (f *File) scaling(h *HDU) (scaling, error) {
	s := scaling{scale: 1}
	for _, k := range []struct {
		key  string
		into *float64
	}{{"BSCALE", &s.scale}, {"BZERO", &s.zero}} {
		c, ok := h.Header.Get(k.key)
		if !ok || c.Value == nil {
			continue
		}
		v, ok := h.Header.Float(k.key)
		if !ok {
			return s, f.formatError(h.Index, "%s = %v: want a number", k.key, c.Value)
		}
		*k.into = v
	}
	if s.scale == 0 {
		return s, f.formatError(h.Index, "BSCALE = 0: every pixel would be equal")
	}
	if h.BitPix > 0 {
		s.blank, s.hasBlank = h.Header.Int("BLANK")
	}
	return s, nil
}

func (s scaling) plain() bool { return s.scale == 1 && s.zero == 0 }

func (s scaling) value(stored int64) float32 {
	if s.hasBlank && stored == s.blank {
		return float32(math.NaN())
	}
	return float32(s.zero + s.scale*float64(stored))
}

// typeMax is the largest physical value that a BITPIX can express.
func (s scaling) typeMax(bitpix int) float64 {
	low, high := 0.0, 255.0
	switch bitpix {
	case 8:
	case 16, 32, 64:
		low, high = -math.Ldexp(1, bitpix-1), math.Ldexp(1, bitpix-1)-1
	default:
		return math.NaN()
	}
	return max(s.zero+s.scale*low, s.zero+s.scale*high)
}

const chunkBytes = 1 << 18 // stays in the second-level cache

var chunks = sync.Pool{New: func() any { b := make([]byte, chunkBytes); return &b }}

// decode reads len(dst) pixels from the first-th of an HDU on.
func (f *File) decode(dst []float32, h *HDU, first int64, s scaling) error {
	width := int64(abs(h.BitPix) / 8)
	buffer := chunks.Get().(*[]byte)
	defer chunks.Put(buffer)
	convert := s.converter(h.BitPix)
	offset := h.dataOffset + first*width
	if h.BitPix == -32 && s.plain() && littleEndian {
		return f.floats(dst, h, offset)
	}
	for len(dst) > 0 {
		n := min(len(dst), chunkBytes/int(width))
		raw := (*buffer)[:n*int(width)]
		if err := f.readAll(h, raw, offset); err != nil {
			return err
		}
		convert(dst[:n], raw)
		dst, offset = dst[n:], offset+int64(len(raw))
	}
	return nil
}

// littleEndian tells the byte order of this machine.
var littleEndian = binary.NativeEndian.Uint16([]byte{1, 0}) == 1

// floats reads plain float32 pixels right into dst, and turns their bytes there
// while they are in the cache.
func (f *File) floats(dst []float32, h *HDU, offset int64) error {
	for len(dst) > 0 {
		n := min(len(dst), chunkBytes/4)
		raw := unsafe.Slice((*byte)(unsafe.Pointer(&dst[0])), 4*n)
		if err := f.readAll(h, raw, offset); err != nil {
			return err
		}
		turnBytes(dst[:n])
		dst, offset = dst[n:], offset+int64(len(raw))
	}
	return nil
}

// turnBytes reverses the bytes of each value, two values at a time.
func turnBytes(pix []float32) {
	turn := func(p *float32) { *p = math.Float32frombits(bits.ReverseBytes32(math.Float32bits(*p))) }
	if len(pix) > 0 && uintptr(unsafe.Pointer(&pix[0]))%8 != 0 {
		turn(&pix[0])
		pix = pix[1:]
	}
	if len(pix)%2 == 1 {
		turn(&pix[len(pix)-1])
		pix = pix[:len(pix)-1]
	}
	if len(pix) == 0 {
		return
	}
	pairs := unsafe.Slice((*uint64)(unsafe.Pointer(&pix[0])), len(pix)/2)
	for len(pairs) >= 4 {
		p := pairs[:4]
		p[0] = bits.RotateLeft64(bits.ReverseBytes64(p[0]), 32)
		p[1] = bits.RotateLeft64(bits.ReverseBytes64(p[1]), 32)
		p[2] = bits.RotateLeft64(bits.ReverseBytes64(p[2]), 32)
		p[3] = bits.RotateLeft64(bits.ReverseBytes64(p[3]), 32)
		pairs = pairs[4:]
	}
	for i, v := range pairs {
		pairs[i] = bits.RotateLeft64(bits.ReverseBytes64(v), 32)
	}
}

// converter picks the loop for a type of pixel.
func (s scaling) converter(bitpix int) func(dst []float32, raw []byte) {
	switch bitpix {
	case 8:
		var table [256]float32
		for i := range table {
			table[i] = s.value(int64(i))
		}
		return func(dst []float32, raw []byte) {
			for i := range dst {
				dst[i] = table[raw[i]]
			}
		}
	case 16:
		if !s.hasBlank && s.scale == 1 && s.zero == math.Trunc(s.zero) && math.Abs(s.zero) <= 1<<23 {
			zero := int32(s.zero) // all sums are exact in float32
			return func(dst []float32, raw []byte) {
				for i := range dst {
					dst[i] = float32(int32(int16(binary.BigEndian.Uint16(raw[2*i:]))) + zero)
				}
			}
		}
		table := make([]float32, 1<<16)
		for i := range table {
			table[i] = s.value(int64(int16(i)))
		}
		return func(dst []float32, raw []byte) {
			for i := range dst {
				dst[i] = table[binary.BigEndian.Uint16(raw[2*i:])]
			}
		}
	case 32:
		return func(dst []float32, raw []byte) {
			for i := range dst {
				dst[i] = s.value(int64(int32(binary.BigEndian.Uint32(raw[4*i:]))))
			}
		}
	case 64:
		if s.scale == 1 && s.zero == 1<<63 {
			// Unsigned: the sum does not fit a float64, so flip the sign bit.
			return func(dst []float32, raw []byte) {
				for i := range dst {
					u := binary.BigEndian.Uint64(raw[8*i:])
					if s.hasBlank && int64(u) == s.blank {
						dst[i] = float32(math.NaN())
					} else {
						dst[i] = float32(u ^ 1<<63)
					}
				}
			}
		}
		return func(dst []float32, raw []byte) {
			for i := range dst {
				dst[i] = s.value(int64(binary.BigEndian.Uint64(raw[8*i:])))
			}
		}
	case -32:
		if s.plain() {
			return getFloats
		}
		return func(dst []float32, raw []byte) {
			for i := range dst {
				dst[i] = float32(s.zero + s.scale*float64(math.Float32frombits(binary.BigEndian.Uint32(raw[4*i:]))))
			}
		}
	case -64:
		return func(dst []float32, raw []byte) {
			for i := range dst {
				dst[i] = float32(s.zero + s.scale*math.Float64frombits(binary.BigEndian.Uint64(raw[8*i:])))
			}
		}
	}
	panic("fits: BITPIX was not checked")
}

// getFloats decodes big-endian float32 values, two at a time.
func getFloats(dst []float32, raw []byte) {
	raw = raw[:4*len(dst)]
	for len(dst) >= 4 && len(raw) >= 16 {
		u, v := binary.BigEndian.Uint64(raw), binary.BigEndian.Uint64(raw[8:])
		dst[0] = math.Float32frombits(uint32(u >> 32))
		dst[1] = math.Float32frombits(uint32(u))
		dst[2] = math.Float32frombits(uint32(v >> 32))
		dst[3] = math.Float32frombits(uint32(v))
		dst, raw = dst[4:], raw[16:]
	}
	for i := range dst {
		dst[i] = math.Float32frombits(binary.BigEndian.Uint32(raw[4*i:]))
	}
}
