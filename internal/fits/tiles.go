package fits

import (
	"bytes"
	"compress/gzip"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
)

// Images compressed in tiles (FITS 4.0, section 10). A tile is a rectangle of
// the image; each is a row of a binary table, whose bytes stand in its heap.
// Floating-point tiles are either compressed as they are or quantised: integers
// with a scale and a zero of their own, perhaps dithered.

// tilesName is the EXTNAME that writers invent for an image without one.
const tilesName = "COMPRESSED_IMAGE"

// freePixels is the size of an image below which it is read whatever its tiles
// claim; beyond, a claim must be possible for the bytes that are there. It is
// a variable for the tests.
var freePixels int64 = 1 << 22

// Values that stand for others among quantised pixels.
const ditheredZero = math.MinInt32 + 2 // an exact zero, with SUBTRACTIVE_DITHER_2

// restoredHeader is the header of the image from that of the table of tiles.
func restoredHeader(table *Header) *Header {
	image := &Header{warnings: slices.Clone(table.Warnings())}
	for _, c := range table.Cards() {
		switch c.Key {
		case "ZSIMPLE", "ZEXTEND", "ZBLOCKED", "ZBITPIX", "ZNAXIS", "ZPCOUNT", "ZGCOUNT", "ZDATASUM":
			c.Key = c.Key[1:]
		case "ZTENSION":
			c.Key = "XTENSION"
		case "ZHECKSUM":
			c.Key = "CHECKSUM"
		case "SIMPLE", "XTENSION", "BITPIX", "NAXIS", "NAXIS1", "NAXIS2", "PCOUNT", "GCOUNT", "TFIELDS", "THEAP", "CHECKSUM", "DATASUM",
			"ZIMAGE", "ZCMPTYPE", "ZQUANTIZ", "ZDITHER0", "ZBLANK", "ZSCALE", "ZZERO", "ZMASKCMP":
			continue
		case "EXTNAME":
			if c.Value == tilesName {
				continue
			}
		default:
			switch stem := strings.TrimRight(c.Key, "0123456789"); {
			case stem == c.Key:
			case stem == "ZNAXIS":
				c.Key = c.Key[1:]
			case stem == "ZTILE" || stem == "ZNAME" || stem == "ZVAL" || stem == "TTYPE" || stem == "TFORM" || stem == "TDIM":
				continue
			}
		}
		image.add(c)
	}
	// A table has no BLANK of its own for quantised floats; for integers the
	// image's may be written either way.
	if v, ok := table.Int("ZBLANK"); ok && !image.Has("BLANK") {
		if bitpix, _ := table.Int("ZBITPIX"); bitpix > 0 {
			image.Set("BLANK", v, "value of pixels without data")
		}
	}
	return image
}

// tileColumn is a column of the table of tiles.
type tileColumn struct {
	name  string
	field field
	// Of bytes in the heap: the letter of an element and its size.
	letter byte
	size   int64
}

// tiles reads the tiles of one HDU. It is for one goroutine.
type tiles struct {
	f    *File
	h    *HDU
	s    scaling
	kind string // ZCMPTYPE

	from, to int   // rows asked for, from the first (0) up to but without to
	shape    []int // of a tile, by axes
	count    []int // of tiles along each axis
	rows     []byte

	data, gzipped, raw *tileColumn
	scale, zero, blank *tileColumn // of each tile; nil where keywords serve
	fixedScale         float64
	fixedZero          float64
	fixedBlank         int64
	hasBlank           bool
	quantised          bool
	dither             int // 0, 1 or 2
	seed               int64

	block, width int // of RICE_1
	smooth       bool

	ints    []int32
	bytes   []byte
	shuffle []byte
	h10     hcompressed
	zip     *gzip.Reader
	convert map[int]func([]float32, []byte)

	window      []byte // of the heap
	windowStart int64
}

// decompress reads count planes from the first-th on of an image in tiles. Of
// tiles without a pixel in the rows from (the first is 0) up to but without to,
// nothing is read.
func (f *File) decompress(h *HDU, first, count, from, to int, s scaling) ([]float32, error) {
	t := &tiles{f: f, h: h, s: s, from: from, to: to, convert: map[int]func([]float32, []byte){}}
	if err := t.describe(); err != nil {
		return nil, err
	}
	if err := t.possible(); err != nil {
		return nil, err
	}
	pix := make([]float32, count*h.Width*h.Height)
	return pix, t.read(pix, first, count)
}

func (t *tiles) wrong(row int, column *tileColumn, format string, args ...any) error {
	return t.f.formatError(t.h.Index, "column %s, row %d: %s", column.name, row+1, fmt.Sprintf(format, args...))
}

// describe reads the keywords and the table's rows.
func (t *tiles) describe() error {
	f, index := t.f, t.h.Index
	table := *t.h
	table.Header = t.h.stored
	hdr := table.Header
	t.kind, _ = hdr.Str("ZCMPTYPE")
	t.kind = strings.TrimSpace(t.kind)
	switch t.kind {
	case "RICE_1", "GZIP_1", "GZIP_2", "HCOMPRESS_1", "PLIO_1", "NOCOMPRESS":
	case "RICE_ONE": // an early name
		t.kind = "RICE_1"
	default:
		return f.unsupported(index, "ZCMPTYPE = %q: want RICE_1, GZIP_1, GZIP_2, HCOMPRESS_1, PLIO_1 or NOCOMPRESS", t.kind)
	}

	need := int64(1)
	for i, n := range t.h.Axes {
		key := "ZTILE" + strconv.Itoa(i+1)
		size := int64(1)
		if i == 0 {
			size = int64(n)
		}
		if hdr.Has(key) {
			var err error
			if size, err = f.integer(&table, key, 1, 1<<48); err != nil {
				return err
			}
		}
		size = min(size, int64(n))
		across := (int64(n) + size - 1) / size
		t.shape, t.count = append(t.shape, int(size)), append(t.count, int(across))
		need *= across // at most the number of pixels, which was checked
	}
	if need > int64(t.h.Rows) {
		return f.formatError(index, "NAXIS2 = %d rows: the image of ZNAXISn = %v needs %d tiles of ZTILEn = %v", t.h.Rows, t.h.Axes, need, t.shape)
	}

	if err := t.columns(&table); err != nil {
		return err
	}
	if err := t.parameters(); err != nil {
		return err
	}
	t.rows = make([]byte, need*int64(t.h.RowBytes))
	return f.readAll(t.h, t.rows, t.h.dataOffset)
}

func (t *tiles) columns(table *HDU) error {
	var list Table
	list.Header = &Header{}
	fields, err := t.f.fields(table, &list)
	if err != nil {
		return err
	}
	for i, fd := range fields {
		c := &tileColumn{name: list.Columns[i].Name, field: fd}
		if fd.variable {
			form := list.Columns[i].Format
			if at := strings.IndexByte(form, fd.letter); at+1 < len(form) {
				c.letter = form[at+1]
			}
			c.size = int64(elementBytes[c.letter])
		}
		var into **tileColumn
		heap := false
		switch strings.ToUpper(c.name) {
		case "COMPRESSED_DATA":
			into, heap = &t.data, true
		case "GZIP_COMPRESSED_DATA":
			into, heap = &t.gzipped, true
		case "UNCOMPRESSED_DATA":
			into, heap = &t.raw, true
		case "ZSCALE":
			into = &t.scale
		case "ZZERO":
			into = &t.zero
		case "ZBLANK":
			into = &t.blank
		default:
			continue
		}
		form := list.Columns[i].Format
		switch {
		case *into != nil:
			return t.f.formatError(t.h.Index, "two columns are named %s", c.name)
		case heap && (!fd.variable || fd.repeat != 1 || c.size == 0 || c.letter == 'P' || c.letter == 'Q'):
			return t.f.formatError(t.h.Index, "column %s: TFORM%d = %q: want bytes of variable length, such as 1PB", c.name, i+1, form)
		case !heap && (fd.variable || fd.repeat != 1 || !strings.ContainsRune("BIJKED", rune(fd.letter))):
			return t.f.formatError(t.h.Index, "column %s: TFORM%d = %q: want one number", c.name, i+1, form)
		}
		*into = c
	}
	if t.data == nil && t.raw == nil {
		return t.f.formatError(t.h.Index, "there is no column COMPRESSED_DATA")
	}
	return nil
}

// parameters reads how pixels are quantised and what the compression needs.
func (t *tiles) parameters() error {
	f, hdr, index := t.f, t.h.stored, t.h.Index
	named := func(name string, otherwise int64, allowed ...int64) (int64, error) {
		for n := 1; ; n++ {
			key := strconv.Itoa(n)
			text, ok := hdr.Str("ZNAME" + key)
			if !ok {
				return otherwise, nil
			}
			if strings.TrimSpace(text) != name {
				continue
			}
			v, ok := hdr.Int("ZVAL" + key)
			if !ok || len(allowed) > 0 && !slices.Contains(allowed, v) {
				found, _ := hdr.Text("ZVAL" + key)
				return 0, f.formatError(index, "ZVAL%d = %s for %s: want one of %v", n, found, name, allowed)
			}
			return v, nil
		}
	}
	switch t.kind {
	case "RICE_1":
		block, err := named("BLOCKSIZE", 32, 8, 16, 32, 64, 128, 256)
		if err != nil {
			return err
		}
		width, err := named("BYTEPIX", 4, 1, 2, 4, 8)
		if err != nil {
			return err
		}
		if width == 8 {
			return f.unsupported(index, "RICE_1 of pixels of 8 bytes")
		}
		t.block, t.width = int(block), int(width)
	case "HCOMPRESS_1":
		smooth, err := named("SMOOTH", 0)
		if err != nil {
			return err
		}
		t.smooth = smooth != 0
	}
	if t.h.BitPix > 0 {
		return nil
	}

	t.fixedScale = 1
	scale, hasScale := hdr.Float("ZSCALE")
	zero, hasZero := hdr.Float("ZZERO")
	if hasScale {
		t.fixedScale = scale
	}
	if hasZero {
		t.fixedZero = zero
	}
	t.quantised = hasScale || hasZero || t.scale != nil || t.zero != nil
	if v, ok := hdr.Int("ZBLANK"); ok {
		t.fixedBlank, t.hasBlank = v, true
	} else if v, ok := hdr.Int("BLANK"); ok {
		t.fixedBlank, t.hasBlank = v, true
	}
	how, _ := hdr.Str("ZQUANTIZ")
	switch strings.TrimSpace(how) {
	case "", "NONE", "NO_DITHER":
	case "SUBTRACTIVE_DITHER_1":
		t.dither = 1
	case "SUBTRACTIVE_DITHER_2":
		t.dither = 2
	default:
		return f.unsupported(index, "ZQUANTIZ = %q: want NONE, NO_DITHER, SUBTRACTIVE_DITHER_1 or SUBTRACTIVE_DITHER_2", how)
	}
	// Writers may leave ZDITHER0 at 0 where no tile is quantised.
	t.seed, _ = hdr.Int("ZDITHER0")
	return nil
}

// cell is the part of a row that belongs to a column.
func (t *tiles) cell(row int, c *tileColumn) []byte {
	at := row*t.h.RowBytes + c.field.offset
	return t.rows[at : at+c.field.width]
}

// number reads a scalar column.
func (t *tiles) number(row int, c *tileColumn) float64 {
	cell, v := t.cell(row, c), 0.0
	switch c.field.letter {
	case 'B':
		v = float64(cell[0])
	case 'I':
		v = float64(get16(cell))
	case 'J':
		v = float64(get32(cell))
	case 'K':
		v = float64(get64(cell))
	case 'E':
		v = float64(getF32(cell))
	case 'D':
		v = getF64(cell)
	}
	return v
}

// descriptor returns where the bytes of a cell begin in the heap and how many
// they are; all lie within it. A column that is nil has none.
func (t *tiles) descriptor(row int, c *tileColumn) (start, n int64, err error) {
	if c == nil {
		return 0, 0, nil
	}
	cell, heap := t.cell(row, c), t.h.dataBytes-t.h.heapOffset
	if c.field.letter == 'P' {
		n, start = int64(get32(cell)), int64(binary.BigEndian.Uint32(cell[4:]))
	} else {
		n, start = get64(cell), get64(cell[8:])
	}
	if n < 0 || start < 0 || n > heap/c.size || start > heap-n*c.size {
		return 0, 0, t.wrong(row, c, "points at %d elements from byte %d of a heap of %d bytes", n, start, heap)
	}
	return start, n * c.size, nil
}

// stored returns the bytes of a cell. They hold until the next call.
func (t *tiles) stored(row int, c *tileColumn) ([]byte, error) {
	start, n, err := t.descriptor(row, c)
	if err != nil || n == 0 {
		return nil, err
	}
	if end := t.windowStart + int64(len(t.window)); start < t.windowStart || start+n > end {
		heap := t.h.dataBytes - t.h.heapOffset
		t.window = resize(t.window, int(min(heap-start, max(n, chunkBytes))))
		t.windowStart = start
		if err := t.f.readAll(t.h, t.window, t.h.dataOffset+t.h.heapOffset+start); err != nil {
			t.window = nil
			return nil, err
		}
	}
	return t.window[start-t.windowStart:][:n], nil
}

// possible compares the size of the image with the most that its bytes can
// expand to, before memory is asked for.
func (t *tiles) possible() error {
	pixels := int64(1)
	for _, n := range t.h.Axes {
		pixels *= int64(n)
	}
	var total int64
	for row := range len(t.rows) / t.h.RowBytes {
		for _, c := range []*tileColumn{t.data, t.gzipped, t.raw} {
			_, n, err := t.descriptor(row, c)
			if err != nil {
				return err
			}
			total += n
		}
	}
	// Tiles may share bytes, but not without end.
	total = min(total, 4*(t.h.dataBytes-t.h.heapOffset))
	each := int64(1100) // deflate reaches 1032 for a byte
	switch t.kind {
	case "RICE_1":
		each = max(each, int64(t.block)*8/3)
	case "HCOMPRESS_1":
		each = 1 << 13 // a constant tile of 16 rows of 8192 pixels takes some 28 bytes
	case "PLIO_1":
		each = 4096
	}
	if pixels > freePixels && (pixels-freePixels)/each > total {
		return t.f.formatError(t.h.Index, "ZNAXISn = %v: the %d bytes of compressed tiles cannot hold that many pixels", t.h.Axes, total)
	}
	return nil
}

// read fills dst with count planes.
func (t *tiles) read(dst []float32, first, count int) error {
	axes := len(t.h.Axes)
	plane := t.h.Width * t.h.Height
	tile, low, size, at := make([]int, axes), make([]int, axes), make([]int, axes), make([]int, axes)
	var values []float32
	for row := range len(t.rows) / t.h.RowBytes {
		rest, n := row, 1
		for a := range axes {
			tile[a], rest = rest%t.count[a], rest/t.count[a]
			low[a] = tile[a] * t.shape[a]
			size[a] = min(t.shape[a], t.h.Axes[a]-low[a])
			n *= size[a]
		}
		// The planes that the tile touches lie between those of its corners.
		nearest, farthest := 0, 0
		for a := axes - 1; a >= 2; a-- {
			nearest = nearest*t.h.Axes[a] + low[a]
			farthest = farthest*t.h.Axes[a] + low[a] + size[a] - 1
		}
		if farthest < first || nearest >= first+count || axes > 1 && (low[1]+size[1] <= t.from || low[1] >= t.to) {
			continue
		}
		direct := nearest == farthest && size[0] == t.h.Width
		if direct { // the tile is one piece of the plane
			from := (nearest - first) * plane
			if axes > 1 {
				from += low[1] * t.h.Width
			}
			if err := t.values(dst[from:from+n], row, size); err != nil {
				return err
			}
			continue
		}
		values = resize(values, n)
		if err := t.values(values, row, size); err != nil {
			return err
		}
		copy(at, low)
		for line := values; len(line) > 0; line = line[size[0]:] {
			p := 0
			for a := axes - 1; a >= 2; a-- {
				p = p*t.h.Axes[a] + at[a]
			}
			if p >= first && p < first+count {
				to := (p-first)*plane + low[0]
				if axes > 1 {
					to += at[1] * t.h.Width
				}
				copy(dst[to:], line[:size[0]])
			}
			for a := 1; a < axes; a++ {
				if at[a]++; at[a] < low[a]+size[a] {
					break
				}
				at[a] = low[a]
			}
		}
	}
	return nil
}

// converter keeps the loops, as some have tables.
func (t *tiles) converter(bitpix int) func([]float32, []byte) {
	c := t.convert[bitpix]
	if c == nil {
		c = t.s.converter(bitpix)
		t.convert[bitpix] = c
	}
	return c
}

// values expands the tile of a row to physical values.
func (t *tiles) values(dst []float32, row int, size []int) error {
	src, err := t.stored(row, t.data)
	if err != nil {
		return err
	}
	if len(src) == 0 {
		return t.fallback(dst, row)
	}
	kind := t.kind
	switch kind {
	case "GZIP_1", "GZIP_2", "NOCOMPRESS":
		if kind != "NOCOMPRESS" {
			pixel := 4
			if !t.quantised {
				pixel = abs(t.h.BitPix) / 8
			}
			if src, err = t.gunzip(src, len(dst), pixel); err != nil {
				return t.wrong(row, t.data, "%v", err)
			}
		}
		width := len(src) / len(dst)
		if len(src)%len(dst) != 0 || width != 1 && width != 2 && width != 4 && width != 8 {
			return t.wrong(row, t.data, "%d bytes for %d pixels: want 1, 2, 4 or 8 for each", len(src), len(dst))
		}
		if kind == "GZIP_2" {
			src = t.unshuffle(src, width)
		}
		if !t.quantised && width == abs(t.h.BitPix)/8 {
			t.converter(t.h.BitPix)(dst, src)
			return nil
		}
		if t.h.BitPix < 0 && !t.quantised {
			return t.wrong(row, t.data, "%d bytes for a pixel: want those of ZBITPIX = %d", width, t.h.BitPix)
		}
		if width == 8 {
			return t.wrong(row, t.data, "8 bytes for a pixel: want at most 4 with ZBITPIX = %d", t.h.BitPix)
		}
		t.ints = resize(t.ints, len(dst))
		for i := range t.ints {
			switch width {
			case 1:
				t.ints[i] = int32(src[i])
			case 2:
				t.ints[i] = int32(get16(src[2*i:]))
			case 4:
				t.ints[i] = get32(src[4*i:])
			}
		}
	case "RICE_1":
		t.ints = resize(t.ints, len(dst))
		err = riceDecode(t.ints, src, t.block, t.width)
	case "HCOMPRESS_1":
		cols, rows := size[0], len(dst)/size[0]
		for _, n := range size {
			if n > 1 { // the first axis that is not of length 1 is the fast one
				cols, rows = n, len(dst)/n
				break
			}
		}
		t.ints = resize(t.ints, len(dst))
		err = t.h10.decode(t.ints, src, rows, cols, t.smooth)
	case "PLIO_1":
		t.ints = resize(t.ints, len(dst))
		err = plioDecode(t.ints, src)
	}
	if err != nil {
		return t.wrong(row, t.data, "%s: %v", kind, err)
	}
	if t.h.BitPix < 0 {
		if t.dither > 0 && (t.seed < 1 || t.seed > dithers) {
			return t.f.formatError(t.h.Index, "ZDITHER0 = %d: want 1 to %d, row %d is dithered", t.seed, dithers, row+1)
		}
		t.unquantise(dst, row)
		return nil
	}
	if !t.s.hasBlank && t.s.scale == 1 && t.s.zero == math.Trunc(t.s.zero) && math.Abs(t.s.zero) <= 1<<23 && t.h.BitPix <= 16 {
		zero := int32(t.s.zero)
		for i, v := range t.ints {
			dst[i] = float32(v + zero)
		}
		return nil
	}
	for i, v := range t.ints {
		dst[i] = t.s.value(int64(v))
	}
	return nil
}

// fallback reads a tile that would not shrink or could not be quantised.
func (t *tiles) fallback(dst []float32, row int) error {
	src, err := t.stored(row, t.gzipped)
	if err != nil {
		return err
	}
	if len(src) > 0 {
		width := abs(t.h.BitPix) / 8
		if src, err = t.gunzip(src, len(dst), width); err != nil {
			return t.wrong(row, t.gzipped, "%v", err)
		}
		if len(src) != width*len(dst) {
			return t.wrong(row, t.gzipped, "%d bytes for %d pixels: want %d for each", len(src), len(dst), width)
		}
		t.converter(t.h.BitPix)(dst, src)
		return nil
	}
	if src, err = t.stored(row, t.raw); err != nil {
		return err
	}
	if len(src) == 0 {
		c := t.data
		if c == nil {
			c = t.raw
		}
		return t.wrong(row, c, "the tile has no bytes in any column")
	}
	bitpix := map[byte]int{'B': 8, 'I': 16, 'J': 32, 'K': 64, 'E': -32, 'D': -64}[t.raw.letter]
	if t.raw.letter == 'B' && len(src) == len(dst)*abs(t.h.BitPix)/8 {
		bitpix = t.h.BitPix
	}
	if bitpix == 0 || len(src) != len(dst)*abs(bitpix)/8 {
		return t.wrong(row, t.raw, "%d bytes for %d pixels", len(src), len(dst))
	}
	t.converter(bitpix)(dst, src)
	return nil
}

// gunzip expands to what a tile of n pixels can hold at most.
func (t *tiles) gunzip(src []byte, n, width int) ([]byte, error) {
	in := bytes.NewReader(src)
	var err error
	if t.zip == nil {
		t.zip, err = gzip.NewReader(in)
	} else {
		err = t.zip.Reset(in)
	}
	if err != nil {
		return nil, fmt.Errorf("no gzip stream: %w", err)
	}
	t.zip.Multistream(false)
	t.bytes = resize(t.bytes, n*width+1)
	m, err := io.ReadFull(t.zip, t.bytes)
	if err == nil { // wider pixels than expected
		t.bytes = slices.Grow(t.bytes, 8*n)
		var more int
		more, err = io.ReadFull(t.zip, t.bytes[m:8*n+1])
		m += more
		if err == nil {
			return nil, fmt.Errorf("the gzip stream holds more than %d bytes", 8*n)
		}
	}
	if err != io.EOF && err != io.ErrUnexpectedEOF {
		return nil, fmt.Errorf("the gzip stream is damaged: %w", err)
	}
	return t.bytes[:m], nil
}

// unshuffle brings the bytes of each pixel together: GZIP_2 has first the most
// significant bytes of all pixels, then the next ones.
func (t *tiles) unshuffle(src []byte, width int) []byte {
	n := len(src) / width
	t.shuffle = resize(t.shuffle, len(src))
	out := t.shuffle
	switch width {
	case 4:
		a, b, c, d := src[:n], src[n:2*n], src[2*n:3*n], src[3*n:]
		for i := range n {
			binary.BigEndian.PutUint32(out[4*i:], uint32(a[i])<<24|uint32(b[i])<<16|uint32(c[i])<<8|uint32(d[i]))
		}
	default:
		for b := range width {
			for i, v := range src[b*n : (b+1)*n] {
				out[i*width+b] = v
			}
		}
	}
	return out
}
