package fits

import (
	"compress/gzip"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"strings"

	"nightsift/internal/wholefile"
)

// HDUWriter is an HDU that Write can write: an *ImageHDU or a *Table.
type HDUWriter interface {
	// prepare checks the content and returns the structural cards after
	// XTENSION or SIMPLE, and the user's cards to follow.
	prepare() (structure []Card, extra *Header, name string, err error)
	// data passes the content, without padding, in pieces whose lengths are
	// multiples of four but for the last.
	data(emit func([]byte) error) error
	// datasum is the ones' complement sum of the content.
	datasum() (sum, error)
	kind() string
}

// ImageHDU is an image or cube to be written. Exactly one of Float and Bits is
// set, of length Width × Height × max(Depth, 1). Float becomes BITPIX -32,
// Bits 16-bit unsigned integers (BITPIX 16, BZERO 32768).
type ImageHDU struct {
	Name          string
	Header        *Header // cards to add; those that describe the structure are left out
	Width, Height int
	Depth         int // 0 for a two-dimensional image, else NAXIS3
	Float         []float32
	Bits          []uint16
}

func (m *ImageHDU) kind() string { return "IMAGE" }

func (m *ImageHDU) prepare() ([]Card, *Header, string, error) {
	want, n := m.Width*m.Height*max(m.Depth, 1), len(m.Float)
	bitpix := -32
	if m.Bits != nil {
		bitpix, n = 16, len(m.Bits)
	}
	if m.Width <= 0 || m.Height <= 0 || m.Depth < 0 || n != want || m.Float != nil && m.Bits != nil {
		panic(fmt.Sprintf("fits: image %s of %d×%d×%d has %d float and %d integer pixels", m.Name, m.Width, m.Height, m.Depth, len(m.Float), len(m.Bits)))
	}
	cards := []Card{
		{"BITPIX", int64(bitpix), "bits of a stored value"},
		{"NAXIS", int64(2), "number of axes"},
		{"NAXIS1", int64(m.Width), "pixels along x"},
		{"NAXIS2", int64(m.Height), "pixels along y"},
	}
	if m.Depth > 0 {
		cards[1].Value = int64(3)
		cards = append(cards, Card{"NAXIS3", int64(m.Depth), "planes"})
	}
	return cards, m.Header, m.Name, nil
}

// scale are the cards that come after PCOUNT and GCOUNT.
func (m *ImageHDU) scale() []Card {
	if m.Bits == nil {
		return nil
	}
	return []Card{
		{"BSCALE", 1.0, ""},
		{"BZERO", int64(32768), "the integers are unsigned"},
	}
}

func (m *ImageHDU) datasum() (sum, error) {
	var s sum
	if m.Bits == nil {
		for pix := m.Float; len(pix) > 0; {
			n := min(len(pix), 1<<24)
			s.floats(pix[:n])
			pix = pix[n:]
		}
		return s, nil
	}
	err := m.data(func(p []byte) error {
		s.bytes(p)
		return nil
	})
	return s, err
}

func (m *ImageHDU) data(emit func([]byte) error) error {
	buffer := chunks.Get().(*[]byte)
	defer chunks.Put(buffer)
	raw := *buffer
	for pix := m.Float; len(pix) > 0; {
		n := min(len(pix), len(raw)/4)
		putFloats(raw, pix[:n])
		if err := emit(raw[:4*n]); err != nil {
			return err
		}
		pix = pix[n:]
	}
	for b := m.Bits; len(b) > 0; {
		n := min(len(b), len(raw)/2)
		out := raw[:2*n]
		for i, v := range b[:n] {
			binary.BigEndian.PutUint16(out[2*i:], v^0x8000)
		}
		if err := emit(out); err != nil {
			return err
		}
		b = b[n:]
	}
	return nil
}

func putFloats(raw []byte, pix []float32) {
	raw = raw[:4*len(pix)]
	for len(pix) >= 2 {
		u := uint64(math.Float32bits(pix[0]))<<32 | uint64(math.Float32bits(pix[1]))
		binary.BigEndian.PutUint64(raw, u)
		pix, raw = pix[2:], raw[8:]
	}
	if len(pix) > 0 {
		binary.BigEndian.PutUint32(raw, math.Float32bits(pix[0]))
	}
}

// Write writes a file with an empty primary HDU that carries the cards of
// primary (nil for none), followed by the extensions. The file is whole or
// absent. A name that ends in .gz is compressed with gzip. Mismatched lengths
// in an HDU panic. Cards without a value are left out.
func Write(path string, primary *Header, hdus ...HDUWriter) error {
	return writeFile(path, func(w io.Writer) error { return Encode(w, primary, hdus...) })
}

// WritePrimary writes a file whose primary HDU is the image itself, followed
// by extensions if there are any.
func WritePrimary(path string, img *ImageHDU, hdus ...HDUWriter) error {
	return writeFile(path, func(w io.Writer) error {
		if err := encodeHDU(w, img, true, len(hdus) > 0); err != nil {
			return err
		}
		return encodeAll(w, hdus)
	})
}

func writeFile(path string, encode func(io.Writer) error) error {
	return wholefile.Write(path, func(w io.Writer) error {
		if !strings.HasSuffix(strings.ToLower(path), ".gz") {
			return encode(w)
		}
		z, err := gzip.NewWriterLevel(w, gzip.BestSpeed)
		if err != nil {
			return err
		}
		if err := encode(z); err != nil {
			return err
		}
		return z.Close()
	})
}

// Encode writes what Write does to a writer.
func Encode(w io.Writer, primary *Header, hdus ...HDUWriter) error {
	if err := encodeHDU(w, &empty{primary}, true, true); err != nil {
		return err
	}
	return encodeAll(w, hdus)
}

func encodeAll(w io.Writer, hdus []HDUWriter) error {
	for _, h := range hdus {
		if err := encodeHDU(w, h, false, false); err != nil {
			return err
		}
	}
	return nil
}

// empty is a primary HDU without data.
type empty struct{ header *Header }

func (e *empty) kind() string { return "IMAGE" }
func (e *empty) prepare() ([]Card, *Header, string, error) {
	return []Card{{"BITPIX", int64(8), ""}, {"NAXIS", int64(0), "no data here"}}, e.header, "", nil
}
func (e *empty) datasum() (sum, error)         { return 0, nil }
func (e *empty) data(func([]byte) error) error { return nil }

func encodeHDU(w io.Writer, h HDUWriter, primary, extend bool) error {
	if t, ok := h.(*tiledImage); ok {
		return t.encode(w)
	}
	dataSum, err := h.datasum()
	if err != nil {
		return err
	}
	cards, err := headerCards(h, primary, extend)
	if err != nil {
		return err
	}
	raw, _, err := sealed(cards, dataSum)
	if err != nil {
		return err
	}
	if _, err := w.Write(raw); err != nil {
		return err
	}
	return writeData(w, h)
}

// writeData writes the content and fills the last block.
func writeData(w io.Writer, h HDUWriter) error {
	var n int64
	err := h.data(func(p []byte) error {
		n += int64(len(p))
		_, err := w.Write(p)
		return err
	})
	if err != nil {
		return err
	}
	_, err = w.Write(make([]byte, padded(n)-n))
	return err
}

// headerCards gives all cards of an HDU but DATASUM and CHECKSUM.
func headerCards(h HDUWriter, primary, extend bool) ([]Card, error) {
	structure, extra, name, err := h.prepare()
	if err != nil {
		return nil, err
	}
	var cards []Card
	if primary {
		cards = append(cards, Card{"SIMPLE", true, "FITS Standard 4.0"})
	} else {
		cards = append(cards, Card{"XTENSION", h.kind(), ""})
	}
	_, isTable := h.(*Table)
	for i, c := range structure {
		if isTable && i == 4 { // after NAXIS2
			cards = append(cards, Card{"PCOUNT", int64(0), ""}, Card{"GCOUNT", int64(1), ""})
		}
		cards = append(cards, c)
	}
	if !primary && !isTable {
		cards = append(cards, Card{"PCOUNT", int64(0), ""}, Card{"GCOUNT", int64(1), ""})
	}
	if primary && extend {
		cards = append(cards, Card{"EXTEND", true, ""})
	}
	if name != "" {
		cards = append(cards, Card{"EXTNAME", name, ""})
	}
	if m, ok := h.(*ImageHDU); ok {
		cards = append(cards, m.scale()...)
	}
	seen := map[string]bool{}
	for _, c := range extra.Cards() {
		if structural(c.Key) || seen[c.Key] || c.Value == nil && !c.commentary() {
			continue
		}
		if !c.commentary() {
			seen[c.Key] = true
		}
		cards = append(cards, c)
	}
	return cards, nil
}

// structural reports whether a keyword describes how the data are stored, so
// that a copy of it from another header would contradict what is written here.
func structural(key string) bool {
	switch key {
	case "SIMPLE", "XTENSION", "BITPIX", "NAXIS", "EXTEND", "PCOUNT", "GCOUNT", "GROUPS", "EXTNAME",
		"BSCALE", "BZERO", "BLANK", "DATAMIN", "DATAMAX", "CHECKSUM", "DATASUM", "LONGSTRN", "TFIELDS", "THEAP", "END",
		"ZIMAGE", "ZCMPTYPE", "ZBITPIX", "ZNAXIS", "ZSIMPLE", "ZEXTEND", "ZTENSION", "ZPCOUNT", "ZGCOUNT",
		"ZHECKSUM", "ZDATASUM", "ZQUANTIZ", "ZDITHER0", "ZBLANK", "ZMASKCMP", "ZBLOCKED":
		return true
	}
	stem := strings.TrimRight(key, "0123456789")
	if stem == key {
		return false
	}
	switch stem {
	case "NAXIS", "TFORM", "TTYPE", "TUNIT", "TDIM", "TNULL", "TSCAL", "TZERO", "TDISP", "TBCOL", "TCOMM",
		"PTYPE", "PSCAL", "PZERO", "ZNAXIS", "ZTILE", "ZNAME", "ZVAL", "ZFORM", "ZCTYP":
		return true
	}
	return false
}
