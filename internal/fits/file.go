package fits

import (
	"bytes"
	"fmt"
	"io"
	"math"
	"math/bits"
	"os"
	"strconv"
	"strings"
)

// Limits on what a hostile file can make this package do. They are variables
// for the tests.
var (
	maxHeaderBytes   int64 = 16 << 20 // of one header
	maxHDUs                = 10_000   // of one file
	maxInflated      int64 = 64 << 30 // of a file compressed with gzip
	maxInflatedInRAM int64 = 16 << 20 // beyond it a temporary file takes over
)

// Kind says what an HDU holds.
type Kind int

const (
	Empty           Kind = iota // no data
	ImageData                   // an array of two dimensions (others of length 1)
	CubeData                    // an array of another number of dimensions
	BinaryTable                 // BINTABLE
	ASCIITable                  // TABLE
	CompressedImage             // an image in tiles within a BINTABLE
	Other                       // anything else
)

func (k Kind) String() string {
	return [...]string{"empty", "image", "cube", "binary table", "ASCII table", "compressed image", "other"}[k]
}

// HDU describes one header-data unit.
type HDU struct {
	Index   int    // from 0, the primary
	Name    string // EXTNAME; "" if it has none
	Version int    // EXTVER; 1 if it has none
	Kind    Kind
	Header  *Header

	// For images, compressed ones included. Axes are NAXIS1, NAXIS2, …; Depth
	// is the product of those after the second, and 1 for a plain image.
	BitPix        int
	Axes          []int
	Width, Height int
	Depth         int

	// For tables.
	Rows, RowBytes int

	stored     *Header // of the table, where tiles of an image stand in one; else Header
	dataOffset int64   // in the file
	dataBytes  int64   // without padding; at most what the file holds
	heapOffset int64   // from dataOffset
	headOffset int64
}

// File is an open FITS file. Its methods may be called concurrently, but for
// Close.
type File struct {
	Path     string // as given, without the part in brackets
	Selected int    // index of the HDU named in brackets; -1 if none was
	Warnings []string

	hdus []HDU
	src  source
}

// source is where the uncompressed bytes are.
type source interface {
	io.ReaderAt
	io.Closer
	// upTo returns the number of bytes, or n if there are at least so many.
	upTo(n int64) (int64, error)
}

type memory struct{ *bytes.Reader }

func (memory) Close() error                  { return nil }
func (m memory) upTo(n int64) (int64, error) { return min(n, m.Size()), nil }

type disk struct {
	*os.File
	size int64
}

func (d disk) upTo(n int64) (int64, error) { return min(n, d.size), nil }

// SplitName parts a name like "file.fits[SCI]" or "file.fits[2]" into the file
// and the text in brackets. A file that exists under the whole name is taken
// as it is.
func SplitName(name string) (file, hdu string) {
	open := strings.LastIndexByte(name, '[')
	if open <= 0 || !strings.HasSuffix(name, "]") {
		return name, ""
	}
	if _, err := os.Stat(name); err == nil {
		return name, ""
	}
	return name[:open], strings.TrimSpace(name[open+1 : len(name)-1])
}

// Open opens a file and reads all its headers. The name may end in [EXTNAME],
// [EXTNAME,version] or [n], n counting from 0, the primary; the HDU so named is
// Selected. Errors are a *FormatError, an *UnsupportedError or that of the
// file system.
func Open(name string) (*File, error) {
	return open(name, (*File).inflate)
}

// OpenHeaders is Open for those who want headers alone. What a compressed file
// inflates to passes by and is kept nowhere. The file is closed already: its
// data cannot be read.
func OpenHeaders(name string) (*File, error) {
	f, err := open(name, func(f *File, r io.Reader) (err error) {
		f.src, err = f.newStream(r)
		return err
	})
	if err != nil {
		return nil, err
	}
	return f, f.Close()
}

func open(name string, inflate func(*File, io.Reader) error) (*File, error) {
	path, selector := SplitName(name)
	f := &File{Path: path, Selected: -1}
	file, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	info, err := file.Stat()
	if err == nil && !info.Mode().IsRegular() {
		err = f.formatError(-1, "is no regular file")
	}
	if err != nil {
		file.Close()
		return nil, err
	}
	f.src = disk{file, info.Size()}
	var magic [2]byte
	if n, _ := file.ReadAt(magic[:], 0); n == 2 && magic[0] == 0x1f && magic[1] == 0x8b {
		defer file.Close()
		f.src = nil
		err = inflate(f, file)
	}
	if err == nil {
		err = f.scan()
	}
	if err == nil && selector != "" {
		f.Selected, err = f.Find(selector)
	}
	if err != nil {
		f.Close()
		return nil, err
	}
	return f, nil
}

// Close releases the file.
func (f *File) Close() error {
	if f.src == nil {
		return nil
	}
	err := f.src.Close()
	f.src = nil
	return err
}

// HDUs returns all HDUs in order. The slice belongs to the file.
func (f *File) HDUs() []HDU { return f.hdus }

// Find returns the index of the HDU that a selector names: a number, or an
// EXTNAME (upper and lower case alike), with ",version" where several share
// one name.
func (f *File) Find(selector string) (int, error) {
	selector = strings.TrimSpace(selector)
	if n, err := strconv.Atoi(selector); err == nil && n >= 0 && n < len(f.hdus) {
		return n, nil
	}
	name, version := selector, 0
	if before, after, ok := strings.Cut(selector, ","); ok {
		if v, err := strconv.Atoi(strings.TrimSpace(after)); err == nil {
			name, version = strings.TrimSpace(before), v
		}
	}
	var names []string
	for i := range f.hdus {
		h := &f.hdus[i]
		if strings.EqualFold(h.Name, name) && (version == 0 || h.Version == version) && name != "" {
			return i, nil
		}
		names = append(names, h.selector())
	}
	return -1, &FormatError{Path: f.Path, HDU: -1, Msg: fmt.Sprintf("no HDU is named [%s]: the file has %s", selector, strings.Join(names, ", ")), cause: ErrNoHDU}
}

func (h *HDU) selector() string {
	if h.Name == "" {
		return "[" + strconv.Itoa(h.Index) + "]"
	}
	return "[" + h.Name + "]"
}

func (f *File) formatError(hdu int, format string, args ...any) error {
	return &FormatError{Path: f.Path, HDU: hdu, Msg: fmt.Sprintf(format, args...)}
}

func (f *File) unsupported(hdu int, format string, args ...any) error {
	return &UnsupportedError{Path: f.Path, HDU: hdu, Msg: fmt.Sprintf(format, args...)}
}

// scan walks over all HDUs.
func (f *File) scan() error {
	var offset int64
	for {
		index := len(f.hdus)
		size, err := f.src.upTo(offset + 1)
		if err != nil {
			return err
		}
		if size <= offset {
			if size == 0 {
				return f.formatError(-1, "is empty")
			}
			if size < offset {
				f.Warnings = append(f.Warnings, "the last block is not filled up to 2880 bytes")
			}
			return nil
		}
		if index == maxHDUs {
			return f.unsupported(-1, "has more than %d HDUs", maxHDUs)
		}
		if index > 0 {
			var start [8]byte
			n, err := f.src.ReadAt(start[:], offset)
			if n < len(start) && err != nil && err != io.EOF {
				return err
			}
			if string(start[:n]) != "XTENSION" {
				if size, err = f.src.upTo(math.MaxInt64); err != nil {
					return err
				}
				f.Warnings = append(f.Warnings, fmt.Sprintf("%d bytes after the last HDU, from byte %d on, are no extension: ignored", size-offset, offset))
				return nil
			}
		}
		raw, next, err := f.readHeader(index, offset)
		if err != nil {
			return err
		}
		hdu := HDU{Index: index, Header: parseHeader(raw), headOffset: offset, dataOffset: next, Version: 1}
		if err := f.describe(&hdu); err != nil {
			return err
		}
		if size, err = f.src.upTo(next + hdu.dataBytes); err != nil {
			return err
		}
		if hdu.dataBytes > size-next {
			return f.formatError(index, "truncated: the header announces %d bytes of data, the file holds %d, from byte %d on", hdu.dataBytes, max(0, size-next), next)
		}
		f.hdus = append(f.hdus, hdu)
		offset = next + padded(hdu.dataBytes)
	}
}

func padded(n int64) int64 { return (n + blockSize - 1) / blockSize * blockSize }

// readHeader returns the cards from offset up to END, and where data begin.
func (f *File) readHeader(index int, offset int64) (raw []byte, next int64, err error) {
	block := make([]byte, 0, 2*blockSize)
	for {
		at := offset + int64(len(block))
		if int64(len(block)) >= maxHeaderBytes {
			return nil, 0, f.unsupported(index, "the header is longer than %d bytes", maxHeaderBytes)
		}
		block = append(block, make([]byte, blockSize)...)
		n, err := f.src.ReadAt(block[len(block)-blockSize:], at)
		if err != nil && err != io.EOF {
			return nil, 0, err
		}
		part := block[len(block)-blockSize:][:n]
		if len(block) == blockSize && index == 0 && !bytes.HasPrefix(part, []byte("SIMPLE  =")) {
			return nil, 0, f.formatError(-1, "is not FITS: it begins with %.30q, want \"SIMPLE  =\"", part[:min(n, 30)])
		}
		for i := 0; i+cardSize <= n; i += cardSize {
			if string(part[i:i+8]) == "END     " {
				end := len(block) - blockSize + i
				return block[:end:end], offset + int64(len(block)), nil
			}
		}
		if n < blockSize {
			return nil, 0, f.formatError(index, "truncated: the header, which begins at byte %d, has no END card", offset)
		}
	}
}

// describe fills in what the header says, with all sizes checked for sense.
func (f *File) describe(h *HDU) error {
	hdr := h.Header
	h.stored = hdr
	h.Name, _ = hdr.Str("EXTNAME")
	h.Name = strings.TrimSpace(h.Name)
	if v, ok := hdr.Int("EXTVER"); ok {
		h.Version = int(v)
	}
	if h.Index == 0 {
		if simple, ok := hdr.Bool("SIMPLE"); !ok || !simple {
			hdr.warn("SIMPLE is not T: the file may not follow the standard")
		}
	}
	bitpix, err := f.integer(h, "BITPIX", -64, 64)
	if err != nil {
		return err
	}
	switch bitpix {
	case 8, 16, 32, 64, -32, -64:
	default:
		return f.formatError(h.Index, "BITPIX = %d: want 8, 16, 32, 64, -32 or -64", bitpix)
	}
	naxis, err := f.integer(h, "NAXIS", 0, 999)
	if err != nil {
		return err
	}
	h.BitPix, h.Axes = int(bitpix), make([]int, naxis)
	for i := range h.Axes {
		n, err := f.integer(h, "NAXIS"+strconv.Itoa(i+1), 0, 1<<48)
		if err != nil {
			return err
		}
		h.Axes[i] = int(n)
	}
	pcount, gcount := int64(0), int64(1)
	if hdr.Has("PCOUNT") && (h.Index > 0 || hdr.Has("GROUPS")) {
		if pcount, err = f.integer(h, "PCOUNT", 0, 1<<48); err != nil {
			return err
		}
	}
	if hdr.Has("GCOUNT") && (h.Index > 0 || hdr.Has("GROUPS")) {
		if gcount, err = f.integer(h, "GCOUNT", 0, 1<<48); err != nil {
			return err
		}
	}
	groups, _ := hdr.Bool("GROUPS")
	groups = groups && h.Index == 0 && len(h.Axes) > 1 && h.Axes[0] == 0

	axes := h.Axes
	if groups {
		axes = axes[1:]
	}
	elements, ok := product(axes)
	total := uint64(elements) + uint64(pcount) // below 2^63 + 2^48
	high, total := bits.Mul64(total, uint64(gcount))
	high2, total := bits.Mul64(total, uint64(abs(h.BitPix)/8))
	if !ok || high != 0 || high2 != 0 || total > 1<<60 {
		return f.formatError(h.Index, "NAXIS1…NAXIS%d = %v: no file can be that large", len(h.Axes), h.Axes)
	}
	h.dataBytes = int64(total)
	if len(h.Axes) == 0 {
		h.dataBytes = 0
	}

	xtension, _ := hdr.Str("XTENSION")
	switch {
	case groups:
		h.Kind = Other
	case h.Index == 0 || xtension == "IMAGE" || xtension == "IUEIMAGE":
		if pcount != 0 || gcount != 1 {
			return f.formatError(h.Index, "PCOUNT = %d, GCOUNT = %d: want 0 and 1 in an image", pcount, gcount)
		}
		h.shape()
	case xtension == "BINTABLE" || xtension == "A3DTABLE" || xtension == "TABLE":
		if h.BitPix != 8 || len(h.Axes) != 2 {
			return f.formatError(h.Index, "BITPIX = %d, NAXIS = %d: want 8 and 2 in a table", h.BitPix, len(h.Axes))
		}
		h.RowBytes, h.Rows = h.Axes[0], h.Axes[1]
		if h.RowBytes == 0 {
			h.Rows = 0 // rows of nothing would pass any check of sizes
		}
		h.Kind = BinaryTable
		if xtension == "TABLE" {
			h.Kind = ASCIITable
		}
		h.heapOffset = int64(elements)
		if hdr.Has("THEAP") {
			if h.heapOffset, err = f.integer(h, "THEAP", int64(elements), h.dataBytes); err != nil {
				return err
			}
		}
		if zimage, _ := hdr.Bool("ZIMAGE"); zimage && h.Kind == BinaryTable {
			return f.describeCompressed(h)
		}
	default:
		h.Kind = Other
	}
	return nil
}

// describeCompressed takes size and type of a tile-compressed image from the
// keywords that stand for those of the image.
func (f *File) describeCompressed(h *HDU) error {
	bitpix, err := f.integer(h, "ZBITPIX", -64, 64)
	if err != nil {
		return err
	}
	naxis, err := f.integer(h, "ZNAXIS", 0, 999)
	if err != nil {
		return err
	}
	switch bitpix {
	case 8, 16, 32, 64, -32, -64:
	default:
		return f.formatError(h.Index, "ZBITPIX = %d: want 8, 16, 32, 64, -32 or -64", bitpix)
	}
	h.BitPix, h.Axes = int(bitpix), make([]int, naxis)
	for i := range h.Axes {
		n, err := f.integer(h, "ZNAXIS"+strconv.Itoa(i+1), 0, 1<<48)
		if err != nil {
			return err
		}
		h.Axes[i] = int(n)
	}
	if n, ok := product(h.Axes); !ok || n > 1<<48 {
		return f.formatError(h.Index, "ZNAXISn = %v: no image can be that large", h.Axes)
	}
	h.shape()
	if h.Kind != Empty {
		h.Kind = CompressedImage
	}
	h.Header = restoredHeader(h.stored)
	if h.Name == tilesName {
		h.Name = ""
	}
	return nil
}

// shape sets kind, width, height and depth from the axes.
func (h *HDU) shape() {
	n, _ := product(h.Axes)
	if len(h.Axes) == 0 || n == 0 {
		h.Kind = Empty
		return
	}
	h.Width, h.Height, h.Depth = h.Axes[0], 1, 1
	if len(h.Axes) > 1 {
		h.Height = h.Axes[1]
		for _, a := range h.Axes[2:] {
			h.Depth *= a
		}
	}
	h.Kind = CubeData
	if len(h.Axes) > 1 && h.Depth == 1 {
		h.Kind = ImageData
	}
}

// product multiplies axes; false tells that it does not fit.
func product(axes []int) (int64, bool) {
	if len(axes) == 0 {
		return 0, true
	}
	for _, a := range axes {
		if a == 0 {
			return 0, true
		}
	}
	n := uint64(1)
	for _, a := range axes {
		high, low := bits.Mul64(n, uint64(a))
		if high != 0 || low > 1<<60 {
			return 0, false
		}
		n = low
	}
	return int64(n), true
}

func abs(n int) int {
	if n < 0 {
		return -n
	}
	return n
}

// integer reads a keyword that must be there and lie in a range.
func (f *File) integer(h *HDU, key string, low, high int64) (int64, error) {
	c, ok := h.Header.Get(key)
	if !ok {
		return 0, f.formatError(h.Index, "%s is missing", key)
	}
	n, ok := h.Header.Int(key)
	if !ok {
		text, _ := h.Header.Text(key)
		return 0, f.formatError(h.Index, "%s = %q: want a whole number", key, text)
	}
	if n < low || n > high {
		return 0, f.formatError(h.Index, "%s = %v: want %d to %d", key, c.Value, low, high)
	}
	return n, nil
}
