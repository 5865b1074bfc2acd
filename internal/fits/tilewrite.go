package fits

import (
	"bytes"
	"compress/gzip"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
)

// Methods of Compression.
const (
	CompressNone = "none"
	CompressRice = "rice"
	CompressGzip = "gzip"
)

// compressions lists the methods.
func compressions() []string { return []string{CompressNone, CompressRice, CompressGzip} }

// Compression says how the two-dimensional images of a file are compressed:
// in tiles of a row each (FITS 4.0, section 10). Integers become RICE_1 with
// "rice" and GZIP_2 with "gzip". Floats become GZIP_2 with either and come back
// bit for bit, unless Quantise is set. The zero value compresses nothing.
type Compression struct {
	Method string // CompressNone, CompressRice or CompressGzip; "" is the first

	// Quantise, if not 0, is the noise of a row over the step to which its
	// floats are rounded; 4 adds 0.26 % to the noise. The noise comes from
	// differences of pixels two and four apart (Stoehr et al. 2008, ADASS XVII,
	// 505). Rounding is dithered (SUBTRACTIVE_DITHER_2): means stay, exact zeros
	// and NaN too (as ZBLANK, which astropy 5.2.1 does not know). A row
	// without noise or with infinities is kept bit for bit.
	Quantise float64
}

func (c Compression) on() bool { return c.Method != "" && c.Method != CompressNone }

// Check reports a value that is out of range.
func (c Compression) Check() error {
	switch {
	case c.Method != "" && !slices.Contains(compressions(), c.Method):
		return fmt.Errorf("compress = %q: want one of %s", c.Method, strings.Join(compressions(), ", "))
	case !(c.Quantise == 0 || c.Quantise >= 0.5 && c.Quantise <= 1000):
		return fmt.Errorf("quantise = %v: want 0 for none, or 0.5 to 1000 steps for one standard deviation of the noise", c.Quantise)
	case c.Quantise != 0 && !c.on():
		return fmt.Errorf("quantise = %v: want compress = %q or %q with it", c.Quantise, CompressRice, CompressGzip)
	}
	return nil
}

// WriteCompressed is Write with all two-dimensional images compressed. Cubes
// and tables stay as they are.
func WriteCompressed(path string, c Compression, primary *Header, hdus ...HDUWriter) error {
	if err := c.Check(); err != nil {
		return err
	}
	packed := slices.Clone(hdus)
	for i, h := range packed {
		if m, ok := h.(*ImageHDU); ok && m.Depth == 0 && c.on() {
			packed[i] = &tiledImage{ImageHDU: m, c: c}
		}
	}
	return Write(path, primary, packed...)
}

// blankStep stands for NaN among quantised floats that are written here: the
// number that cfitsio uses, as some readers know no other.
const blankStep = math.MinInt32 + 1

// tiledImage is an image that is written as a table of tiles.
type tiledImage struct {
	*ImageHDU
	c    Compression
	code string // ZCMPTYPE

	quantised bool
	seed      int64
	rowBytes  int
	table     []byte // rows, then the heap
	heap      int    // where it begins
}

// Columns of bytes in the heap have descriptors of 8 bytes, or of 16 where the
// heap may pass 2 GiB.
func (t *tiledImage) descriptor() (letter string, size int) {
	if len(t.Float) > 1<<28 || len(t.Bits) > 1<<29 {
		return "Q", 16
	}
	return "P", 8
}

// pack compresses all rows. datasum is that of the plain image.
func (t *tiledImage) pack(datasum uint32) {
	t.code = "GZIP_2"
	t.quantised = t.Float != nil && t.c.Quantise > 0
	if t.c.Method == CompressRice && (t.Float == nil || t.quantised) {
		t.code = "RICE_1"
	}
	letter, size := t.descriptor()
	t.rowBytes, t.seed = size, 1+int64(datasum%dithers)
	if t.quantised {
		t.rowBytes = 2*size + 16
	}
	t.heap = t.rowBytes * t.Height
	t.table = make([]byte, t.heap, t.heap+t.Width*t.Height/2)
	packer := tilePacker{block: make([]byte, 8*t.Width)}
	for y := range t.Height {
		row := t.table[y*t.rowBytes:][:t.rowBytes]
		start := len(t.table)
		at := row
		switch {
		case t.Bits != nil:
			packer.ints = resize(packer.ints, t.Width)
			for i, v := range t.Bits[y*t.Width:][:t.Width] {
				packer.ints[i] = int32(int16(v ^ 0x8000))
			}
			t.table = packer.pack(t.table, t.code, 2)
		case t.quantised:
			steps, ok := packer.quantise(t.Float[y*t.Width:][:t.Width], t.c.Quantise, newDither(y, t.seed))
			if ok {
				putF64(row[2*size:], steps.scale)
				putF64(row[2*size+8:], steps.zero)
				t.table = packer.pack(t.table, t.code, 4)
				break
			}
			at = row[size:]
			putFloats(packer.block, t.Float[y*t.Width:][:t.Width])
			t.table = packer.zip(t.table, packer.block[:4*t.Width])
		default:
			packer.ints = resize(packer.ints, t.Width)
			for i, v := range t.Float[y*t.Width:][:t.Width] {
				packer.ints[i] = int32(math.Float32bits(v))
			}
			t.table = packer.pack(t.table, t.code, 4)
		}
		row = t.table[y*t.rowBytes:][:t.rowBytes] // the table may have moved
		at = row[t.rowBytes-len(at):]
		n, from := len(t.table)-start, start-t.heap
		if letter == "Q" {
			put64(at, int64(n))
			put64(at[8:], int64(from))
		} else {
			put32(at, int32(n))
			put32(at[4:], int32(from))
		}
	}
}

// cards gives the header of the table from that of the plain image, which ends
// with DATASUM and CHECKSUM.
func (t *tiledImage) cards(plain []Card) []Card {
	letter, _ := t.descriptor()
	cards := []Card{
		{"XTENSION", "BINTABLE", "an image in tiles"}, {"BITPIX", int64(8), "bytes"}, {"NAXIS", int64(2), "a table"},
		{"NAXIS1", int64(t.rowBytes), "bytes of a row"}, {"NAXIS2", int64(t.Height), "rows, one a tile"},
		{"PCOUNT", int64(len(t.table) - t.heap), "bytes of the tiles"}, {"GCOUNT", int64(1), ""}, {"TFIELDS", int64(1), "columns"},
		{"TTYPE1", "COMPRESSED_DATA", ""}, {"TFORM1", "1" + letter + "B", ""},
	}
	if t.quantised {
		cards[7].Value = int64(4)
		cards = append(cards, Card{"TTYPE2", "GZIP_COMPRESSED_DATA", "tiles that are not quantised"}, Card{"TFORM2", "1" + letter + "B", ""},
			Card{"TTYPE3", "ZSCALE", "step of a tile"}, Card{"TFORM3", "1D", ""}, Card{"TTYPE4", "ZZERO", "value of 0"}, Card{"TFORM4", "1D", ""})
	}
	cards = append(cards, Card{"ZIMAGE", true, "this table holds an image"}, Card{"ZCMPTYPE", t.code, "how tiles are compressed"},
		Card{"ZTILE1", int64(t.Width), "pixels of a tile along x"}, Card{"ZTILE2", int64(1), "along y"})
	if t.code == "RICE_1" {
		width := int64(4)
		if t.Bits != nil {
			width = 2
		}
		cards = append(cards, Card{"ZNAME1", "BLOCKSIZE", "pixels of a block"}, Card{"ZVAL1", int64(riceBlockSize), ""},
			Card{"ZNAME2", "BYTEPIX", "bytes of a pixel"}, Card{"ZVAL2", width, ""})
	}
	switch {
	case t.quantised:
		cards = append(cards, Card{"ZQUANTIZ", "SUBTRACTIVE_DITHER_2", "rounded to steps of noise / " + strconv.FormatFloat(t.c.Quantise, 'g', -1, 64)},
			Card{"ZDITHER0", t.seed, "first place in the random sequence"}, Card{"ZBLANK", int64(blankStep), "NaN"})
	case t.Float != nil:
		cards = append(cards, Card{"ZQUANTIZ", "NONE", "bit for bit"})
	}
	for _, c := range plain {
		switch stem := strings.TrimRight(c.Key, "0123456789"); {
		case c.Key == "SIMPLE" || c.Key == "BITPIX" || stem == "NAXIS" || c.Key == "EXTEND" || c.Key == "PCOUNT" || c.Key == "GCOUNT" || c.Key == "DATASUM":
			c.Key = "Z" + c.Key
		case c.Key == "XTENSION":
			c.Key = "ZTENSION"
		case c.Key == "CHECKSUM":
			c.Key = "ZHECKSUM"
		}
		cards = append(cards, c)
	}
	return cards
}

func (t *tiledImage) datasum() (sum, error) {
	var s sum
	for data := t.table; len(data) > 0; {
		n := min(len(data), 1<<24)
		s.bytes(data[:n])
		data = data[n:]
	}
	return s, nil
}

func (t *tiledImage) data(emit func([]byte) error) error { return emit(t.table) }

// encode writes the image.
func (t *tiledImage) encode(w io.Writer) error {
	sum, err := t.ImageHDU.datasum()
	if err != nil {
		return err
	}
	plain, err := headerCards(t.ImageHDU, false, false)
	if err != nil {
		return err
	}
	_, plain, err = sealed(plain, sum)
	if err != nil {
		return err
	}
	t.pack(sum.value())
	defer func() { t.table = nil }() // another image may need the memory
	packed, err := t.datasum()
	if err != nil {
		return err
	}
	raw, _, err := sealed(t.cards(plain), packed)
	if err != nil {
		return err
	}
	if _, err := w.Write(raw); err != nil {
		return err
	}
	return writeData(w, t)
}

// riceBlockSize is the usual number of pixels of a block.
const riceBlockSize = 32

// tilePacker compresses tiles. It is for one goroutine.
type tilePacker struct {
	ints    []int32
	block   []byte
	noise   []float32
	buffer  bytes.Buffer
	zipper  *gzip.Writer
	shuffle []byte
}

// pack appends the tile in ints, of width bytes each.
func (p *tilePacker) pack(dst []byte, kind string, width int) []byte {
	if kind == "RICE_1" {
		return riceEncode(dst, p.ints, riceBlockSize, width)
	}
	n := len(p.ints)
	p.shuffle = resize(p.shuffle, n*width)
	for b := range width {
		part, shift := p.shuffle[b*n:(b+1)*n], 8*(width-1-b)
		for i, v := range p.ints {
			part[i] = byte(uint32(v) >> shift)
		}
	}
	return p.zip(dst, p.shuffle)
}

func (p *tilePacker) zip(dst, raw []byte) []byte {
	p.buffer.Reset()
	if p.zipper == nil {
		p.zipper, _ = gzip.NewWriterLevel(&p.buffer, gzip.BestSpeed) // the level is valid
	} else {
		p.zipper.Reset(&p.buffer)
	}
	p.zipper.Write(raw) // a bytes.Buffer never fails
	p.zipper.Close()
	return append(dst, p.buffer.Bytes()...)
}

type steps struct{ scale, zero float64 }

// quantise rounds a tile into ints, and tells whether that was possible.
func (p *tilePacker) quantise(pix []float32, q float64, d dither) (steps, bool) {
	low, high := math.Inf(1), math.Inf(-1)
	for _, v := range pix {
		if v != v {
			continue
		}
		low, high = min(low, float64(v)), max(high, float64(v))
	}
	p.noise = p.noise[:0]
	for i := 2; i+2 < len(pix); i++ {
		if v := 2*pix[i] - pix[i-2] - pix[i+2]; v == v {
			p.noise = append(p.noise, float32(math.Abs(float64(v))))
		}
	}
	if len(p.noise) < 8 {
		return steps{}, false
	}
	slices.Sort(p.noise)
	s := steps{scale: 0.6052697 * float64(p.noise[len(p.noise)/2]) / q, zero: low}
	// Steps must fit 32 bits, with room for the values that stand for others.
	if !(s.scale > 0) || !((high-low)/s.scale < math.MaxInt32-2) {
		return steps{}, false
	}
	p.ints = resize(p.ints, len(pix))
	for i, v := range pix {
		switch {
		case v != v:
			p.ints[i] = blankStep
		case v == 0:
			p.ints[i] = ditheredZero
		default:
			p.ints[i] = int32(math.RoundToEven((float64(v)-s.zero)/s.scale + float64(ditherSequence[d.next]) - 0.5))
		}
		d.step()
	}
	return s, true
}

// sealed encodes cards as a header with DATASUM and CHECKSUM, and returns it
// also with these as cards. LONGSTRN announces long strings.
func sealed(cards []Card, data sum) ([]byte, []Card, error) {
	raw, long := []byte(nil), false
	for _, c := range cards {
		var l bool
		var err error
		if raw, l, err = appendCard(raw, c); err != nil {
			return nil, nil, err
		}
		long = long || l
	}
	cards = slices.Clone(cards)
	add := func(c Card) {
		cards = append(cards, c)
		raw, _, _ = appendCard(raw, c)
	}
	if long && !slices.ContainsFunc(cards, func(c Card) bool { return c.Key == "LONGSTRN" }) {
		add(Card{"LONGSTRN", "OGIP 1.0", "strings may go on in CONTINUE cards"})
	}
	add(Card{"DATASUM", strconv.FormatUint(uint64(data.value()), 10), "sum of the data"})
	at := len(raw)
	add(Card{"CHECKSUM", "0000000000000000", "sum of header and data is zero"})
	raw = appendLine(raw, "END")
	for len(raw)%blockSize != 0 {
		raw = append(raw, ' ')
	}
	total := sum(data.value())
	total.bytes(raw)
	text := encodeChecksum(total.value())
	copy(raw[at+11:], text)
	cards[len(cards)-1].Value = text
	return raw, cards, nil
}
