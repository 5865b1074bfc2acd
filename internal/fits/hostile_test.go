package fits

import (
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
)

// cards joins lines to a header block, with END and padding.
func cards(lines ...string) []byte {
	var out []byte
	for _, l := range lines {
		out = appendLine(out, l)
	}
	out = appendLine(out, "END")
	for len(out)%blockSize != 0 {
		out = append(out, ' ')
	}
	return out
}

func image8(lines ...string) []byte {
	head := cards(append([]string{"SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 4", "NAXIS2  = 3"}, lines...)...)
	return append(head, make([]byte, blockSize)...)
}

func zipped(content []byte) []byte {
	var buf bytes.Buffer
	z := gzip.NewWriter(&buf)
	z.Write(content)
	z.Close()
	return buf.Bytes()
}

// TestBadFiles wants for every fault an error of the right type that names the
// fault, and never a panic or a large allocation.
func TestBadFiles(t *testing.T) {
	good := image8()
	primary := cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 0")
	ext := func(lines ...string) []byte { return append(bytes.Clone(primary), cards(lines...)...) }
	table := func(lines ...string) []byte {
		return append(ext(append([]string{"XTENSION= 'BINTABLE'", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = 2", "PCOUNT  = 16", "GCOUNT  = 1"}, lines...)...), make([]byte, blockSize)...)
	}
	for _, c := range []struct {
		name    string
		content []byte
		want    string
	}{
		{"empty", nil, "is empty"},
		{"text", []byte("This is a letter, not an image.\n"), "is not FITS"},
		{"short text", []byte("hi"), "is not FITS"},
		{"long text", bytes.Repeat([]byte("SIMPLETON\n"), 1000), "is not FITS"},
		{"header cut", good[:300], "has no END card"},
		{"no END", bytes.Repeat([]byte("SIMPLE  = T                                                                     "), 36), "has no END card"},
		{"data cut", good[:blockSize+5], "announces 12 bytes of data, the file holds 5, from byte 2880 on"},
		{"no data", good[:blockSize], "truncated"},
		{"second header cut", append(bytes.Clone(good), "XTENSION= 'IMAGE   '"...), "[1]: truncated"},
		{"no BITPIX", cards("SIMPLE  = T", "NAXIS   = 0"), "BITPIX is missing"},
		{"BITPIX text", cards("SIMPLE  = T", "BITPIX  = 'wide'", "NAXIS   = 0"), `BITPIX = "wide"`},
		{"BITPIX 7", cards("SIMPLE  = T", "BITPIX  = 7", "NAXIS   = 0"), "BITPIX = 7"},
		{"BITPIX 1.5", cards("SIMPLE  = T", "BITPIX  = 1.5", "NAXIS   = 0"), `BITPIX = "1.5"`},
		{"NAXIS -1", cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = -1"), "NAXIS = -1"},
		{"NAXIS huge", cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 999999999999"), "NAXIS = 999999999999"},
		{"NAXIS1 missing", cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 1"), "NAXIS1 is missing"},
		{"NAXIS1 negative", cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = -5", "NAXIS2  = 5"), "NAXIS1 = -5"},
		{"absurd size", cards("SIMPLE  = T", "BITPIX  = -64", "NAXIS   = 2", "NAXIS1  = 1000000000", "NAXIS2  = 1000000"), "truncated"},
		{"overflow", cards("SIMPLE  = T", "BITPIX  = -64", "NAXIS   = 3", "NAXIS1  = 281474976710656", "NAXIS2  = 281474976710656", "NAXIS3  = 281474976710656"), "no file can be that large"},
		{"overflow by BITPIX", cards("SIMPLE  = T", "BITPIX  = -64", "NAXIS   = 2", "NAXIS1  = 281474976710656", "NAXIS2  = 4096"), "no file can be that large"},
		{"overflow by GCOUNT", ext("XTENSION= 'ODD'", "BITPIX  = 8", "NAXIS   = 1", "NAXIS1  = 281474976710656", "PCOUNT  = 0", "GCOUNT  = 281474976710656"), "no file can be that large"},
		{"PCOUNT negative", ext("XTENSION= 'IMAGE'", "BITPIX  = 8", "NAXIS   = 0", "PCOUNT  = -9"), "PCOUNT = -9"},
		{"table of 3 axes", ext("XTENSION= 'BINTABLE'", "BITPIX  = 8", "NAXIS   = 3", "NAXIS1  = 1", "NAXIS2  = 1", "NAXIS3  = 1", "PCOUNT  = 0", "GCOUNT  = 1"), "want 8 and 2 in a table"},
		{"gzip cut", zipped(good)[:40], "gzip"},
		{"gzip of text", zipped([]byte("hello")), "is not FITS"},
		{"gzip header only", []byte{0x1f, 0x8b}, "gzip"},
		{"gzip damaged", append(zipped(good)[:len(zipped(good))-8], 1, 2, 3, 4, 5, 6, 7, 8), "gzip stream is damaged"},

		{"BSCALE text", image8("BSCALE  = 'x'"), "BSCALE = x"},
		{"BSCALE 0", image8("BSCALE  = 0.0"), "BSCALE = 0"},
		{"one axis", append(cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 1", "NAXIS1  = 9"), make([]byte, blockSize)...), "two-dimensional"},
		{"no image", cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 0"), "holds no image"},
		{"axis of 0", cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 0", "NAXIS2  = 3"), "holds no image"},
		{"tiles", table("TFIELDS = 0", "ZIMAGE  = T", "ZBITPIX = 16", "ZNAXIS  = 2", "ZNAXIS1 = 3", "ZNAXIS2 = 3", "ZCMPTYPE= 'RICE_1'"), "needs 3 tiles of ZTILEn = [3 1]"},

		{"no TFIELDS", table(), "TFIELDS is missing"},
		{"no TFORM", table("TFIELDS = 1"), "TFORM1 is missing"},
		{"TFORM letter", table("TFIELDS = 1", "TFORM1  = '1Z'"), "no type of a column"},
		{"TFORM number", table("TFIELDS = 1", "TFORM1  = '12'"), "want a count and a letter"},
		{"TFORM too wide", table("TFIELDS = 1", "TFORM1  = '3D'"), "NAXIS1 is 8"},
		{"TFORM absurd", table("TFIELDS = 1", "TFORM1  = '99999999999999999999D'"), "NAXIS1 = 8"},
		{"TFORM sum", table("TFIELDS = 2", "TFORM1  = '1D'", "TFORM2  = '1D'"), "need 16 bytes"},
		{"THEAP inside rows", table("TFIELDS = 1", "TFORM1  = '1PE(3)'", "THEAP   = 3"), "THEAP = 3"},
	} {
		t.Run(c.name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), "bad.fits")
			if err := os.WriteFile(path, c.content, 0o644); err != nil {
				t.Fatal(err)
			}
			f, err := Open(path)
			if err == nil {
				defer f.Close()
				last := len(f.HDUs()) - 1
				if f.HDUs()[last].Kind == BinaryTable {
					_, err = f.Table(last)
				} else {
					_, err = f.Image(last)
				}
			}
			var format *FormatError
			var unsupported *UnsupportedError
			if !errors.As(err, &format) && !errors.As(err, &unsupported) {
				t.Fatalf("error %v (%T), want a FormatError or UnsupportedError", err, err)
			}
			if !strings.Contains(err.Error(), c.want) || !strings.HasPrefix(err.Error(), path) {
				t.Errorf("error %q, want %q in it and the path before it", err, c.want)
			}
		})
	}
}

// TestBadHeap has descriptors that point outside the heap.
func TestBadHeap(t *testing.T) {
	primary := cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 0")
	head := cards("XTENSION= 'BINTABLE'", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = 1", "PCOUNT  = 16", "GCOUNT  = 1", "TFIELDS = 1", "TFORM1  = '1PE(4)'")
	for _, c := range []struct {
		count, start uint32
		ok           bool
	}{{4, 0, true}, {2, 8, true}, {0, 16, true}, {5, 0, false}, {1, 13, false}, {0xffffffff, 0, false}, {1, 0xffffffff, false}, {0x40000000, 0, false}} {
		data := make([]byte, blockSize)
		put32(data, int32(c.count))
		put32(data[4:], int32(c.start))
		f, err := newFile("a", bytes.Join([][]byte{primary, head, data}, nil))
		if err != nil {
			t.Fatal(err)
		}
		tab, err := f.Table(1)
		if c.ok != (err == nil) {
			t.Errorf("descriptor %v: %v", c, err)
		}
		if c.ok && len(tab.Columns[0].Data.([][]float32)[0]) != int(c.count) {
			t.Errorf("descriptor %v: %v", c, tab.Columns[0].Data)
		}
	}
}

// TestTolerated reads files with faults that do not stand in the way.
func TestTolerated(t *testing.T) {
	for _, c := range []struct {
		name    string
		content []byte
		warning string
	}{
		{"unpadded", image8()[:blockSize+12], "not filled up"},
		{"trailing bytes", append(image8(), "rubbish"...), "7 bytes after the last HDU, from byte 5760 on"},
		{"SIMPLE F", bytes.Replace(image8(), []byte("SIMPLE  = T"), []byte("SIMPLE  = F"), 1), "SIMPLE is not T"},
		{"lower case", image8("exptime = 5"), "not upper case"},
		{"unquoted", image8("FILTER  = r"), "no FITS value"},
		{"no quote at the end", image8("OBJECT  = 'field"), "no closing quote"},
		{"duplicate", image8("EXPTIME = 5", "EXPTIME = 6"), "more than once"},
		{"binary", image8("OBJECT  = 'f\x80\x00'"), "printable ASCII"},
		{"lone CONTINUE", image8("CONTINUE  'abc'"), "CONTINUE"},
		{"no space", image8("EXPTIME =5"), "no space"},
		{"after string", image8("OBJECT  = 'a' b"), "without a '/'"},
	} {
		f, err := newFile(c.name, c.content)
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		if img, err := f.Image(0); err != nil || len(img.Pix) != 12 {
			t.Errorf("%s: %v", c.name, err)
		}
		all := strings.Join(append(f.Warnings, f.HDUs()[0].Header.Warnings()...), "\n")
		if !strings.Contains(all, c.warning) {
			t.Errorf("%s: warnings %q, want %q", c.name, all, c.warning)
		}
	}
}

func TestParseCards(t *testing.T) {
	lines := []string{
		"INT     =                   42 / answer", "NEG     = -7", "PLUS    = +7", "FLOAT   = 1.5E-3", "DFLOAT  = 1.5D3 / old", "POINT   = 5.",
		"STR     = 'it''s / here' / comment", "BLANKS  = '  a  '", "NULL    = ''", "T       = T", "F       = F / no",
		"UNDEF   =", "UNDEF2  =  / only a comment", "CPLX    = (1.5, -2)", "HIERARCH ABC Def ghi = 5 / long", "HIERARCH X = 'y'",
		"HUGE    = 18446744073709551615", "QUOTED  = '12.5'", "WORDS   some text", "LONG    = 'abc&'", "CONTINUE  'def&'", "CONTINUE  '' / end",
		"INF     = 'inf'", "BAD     = 1.2.3", "EXP     = 1E999", "URL     = 'a//b'",
	}
	var raw []byte
	for _, l := range lines {
		raw = appendLine(raw, l)
	}
	h := parseHeader(raw)
	for key, want := range map[string]any{
		"INT": int64(42), "NEG": int64(-7), "PLUS": int64(7), "FLOAT": 1.5e-3, "DFLOAT": 1500.0, "POINT": 5.0,
		"STR": "it's / here", "BLANKS": "  a", "NULL": "", "T": true, "F": false, "UNDEF": nil, "UNDEF2": nil, "CPLX": complex(1.5, -2),
		"ABC DEF GHI": int64(5), "HIERARCH ABC DEF GHI": int64(5), "X": "y", "HUGE": math.Ldexp(1, 64), "QUOTED": "12.5", "WORDS": nil,
		"LONG": "abcdef", "BAD": "1.2.3", "EXP": "1E999", "URL": "a//b",
	} {
		if c, ok := h.Get(key); !ok || !reflect.DeepEqual(c.Value, want) {
			t.Errorf("%s = %#v, want %#v", key, c.Value, want)
		}
	}
	if c, _ := h.Get("STR"); c.Comment != "comment" {
		t.Errorf("comment %q", c.Comment)
	}
	if c, _ := h.Get("LONG"); c.Comment != "end" {
		t.Errorf("comment of a long string %q", c.Comment)
	}
	if v, ok := h.Float("QUOTED"); !ok || v != 12.5 {
		t.Errorf("quoted number: %v %v", v, ok)
	}
	if v, ok := h.Float("INF"); ok {
		t.Errorf("Float of 'inf' is %v", v)
	}
	if v, ok := h.Int("POINT"); !ok || v != 5 {
		t.Errorf("Int of 5.: %v %v", v, ok)
	}
	if v, ok := h.Text("INT"); !ok || v != "42" {
		t.Errorf("Text of 42: %q %v", v, ok)
	}
	if _, ok := h.Str("INT"); ok {
		t.Error("a number is a string")
	}
	if len(h.Warnings()) != 2 {
		t.Errorf("warnings %q, want two", h.Warnings())
	}
	h.Delete("STR")
	if h.Has("STR") || !h.Has("URL") {
		t.Error("Delete")
	}
	var none *Header
	if _, ok := none.Float("X"); ok || none.Len() != 0 || none.Has("X") {
		t.Error("a nil header is not empty")
	}
}

// TestInflateLimits goes through the temporary file, and over the limit.
func TestInflateLimits(t *testing.T) {
	ram, all := maxInflatedInRAM, maxInflated
	defer func() { maxInflatedInRAM, maxInflated = ram, all }()
	z := zipped(image8())
	maxInflatedInRAM = 1000
	f, err := newFile("a", z)
	if err != nil {
		t.Fatal(err)
	}
	spool := f.src.(*temporaryFile).Name()
	if img, err := f.Image(0); err != nil || len(img.Pix) != 12 {
		t.Error(err)
	}
	f.Close()
	if _, err := os.Stat(spool); err == nil {
		t.Error("the temporary file is still there")
	}
	maxInflated = 2000
	var unsupported *UnsupportedError
	if _, err := newFile("a", z); !errors.As(err, &unsupported) {
		t.Errorf("over the limit: %v", err)
	}
}

// newFile reads FITS bytes held in memory, compressed with gzip or not.
func newFile(name string, content []byte) (*File, error) {
	f := &File{Path: name, Selected: -1, src: memory{bytes.NewReader(content)}}
	var err error
	if len(content) >= 2 && content[0] == 0x1f && content[1] == 0x8b {
		f.src = nil
		err = f.inflate(bytes.NewReader(content))
	}
	if err == nil {
		err = f.scan()
	}
	if err != nil {
		f.Close()
		return nil, err
	}
	return f, nil
}

func FuzzHeader(f *testing.F) {
	f.Add(image8("EXPTIME = 5 / [s]", "HIERARCH A B = 'c'", "LONG    = 'abc&'", "CONTINUE  'def' / x", "HISTORY done"))
	f.Add([]byte("KEY     = 'it''s''' / com"))
	f.Add([]byte("HIERARCH  = 1"))
	f.Add([]byte("CPLX    = (1,2)"))
	f.Add([]byte("CONTINUE"))
	f.Fuzz(func(t *testing.T, raw []byte) {
		raw = raw[:min(len(raw), 100*cardSize)]
		for len(raw)%cardSize != 0 {
			raw = append(raw, ' ')
		}
		h := parseHeader(raw)
		for _, c := range h.Cards() {
			h.Float(c.Key)
			h.Int(c.Key)
			h.Text(c.Key)
		}
		// What can be written is read back as it was.
		var out []byte
		var kept []Card
		for _, c := range h.Cards() {
			if line, _, err := appendCard(nil, c); err == nil {
				out = append(out, line...)
				if !c.commentary() {
					kept = append(kept, c)
				}
			}
		}
		if len(out)%cardSize != 0 {
			t.Fatal("cards of a wrong length")
		}
		n := 0
		for _, c := range parseHeader(out).Cards() {
			if c.commentary() {
				continue
			}
			if n >= len(kept) || c.Key != kept[n].Key || !reflect.DeepEqual(c.Value, kept[n].Value) {
				t.Fatalf("card %d is %#v, want %#v", n, c, kept[min(n, len(kept)-1)])
			}
			n++
		}
		if n != len(kept) {
			t.Fatalf("%d cards, want %d", n, len(kept))
		}
	})
}

func FuzzOpen(f *testing.F) {
	f.Add(image8("BZERO   = 128", "BLANK   = 3"))
	f.Add(zipped(image8()))
	var buf bytes.Buffer
	small := exampleTable(3, 1)
	small.Columns[8] = Column{Name: "stamp", Dim: "(2,2)", Data: [][]float32{{1, 2, 3, 4}, nil, {5, 6, 7, 8}}}
	if err := Encode(&buf, nil, &ImageHDU{Width: 2, Height: 2, Depth: 2, Float: make([]float32, 8)}, small); err != nil {
		f.Fatal(err)
	}
	f.Add(buf.Bytes())
	primary := cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 0")
	heap := cards("XTENSION= 'BINTABLE'", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = 2", "PCOUNT  = 16", "GCOUNT  = 1", "TFIELDS = 1", "TFORM1  = '1PE(4)'")
	f.Add(bytes.Join([][]byte{primary, heap, make([]byte, blockSize)}, nil))
	text := cards("XTENSION= 'TABLE'", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = 2", "PCOUNT  = 0", "GCOUNT  = 1", "TFIELDS = 2",
		"TFORM1  = 'F4.1'", "TBCOL1  = 1", "TFORM2  = 'I3'", "TBCOL2  = 6")
	f.Add(bytes.Join([][]byte{primary, text, []byte(" 1.5  12-2.5 ***"), bytes.Repeat([]byte{' '}, blockSize-16)}, nil))
	f.Add(bytes.Join([][]byte{primary, cards("XTENSION= 'BINTABLE'", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = 2", "PCOUNT  = 0", "GCOUNT  = 1",
		"TFIELDS = 1", "TFORM1  = '1D'", "ZIMAGE  = T", "ZBITPIX = 16", "ZNAXIS  = 2", "ZNAXIS1 = 3", "ZNAXIS2 = 3"), make([]byte, blockSize)}, nil))
	f.Fuzz(func(t *testing.T, raw []byte) {
		if len(raw) > 1<<16 {
			t.Skip("large")
		}
		ram, all := maxInflatedInRAM, maxInflated
		maxInflatedInRAM, maxInflated = 1<<22, 1<<23
		defer func() { maxInflatedInRAM, maxInflated = ram, all }()
		file, err := newFile("fuzz", raw)
		if len(raw) >= 2 && raw[0] == 0x1f && raw[1] == 0x8b {
			samePassingBy(t, raw, file, err)
		}
		if err != nil {
			typed(t, err)
			return
		}
		defer file.Close()
		for i, h := range file.HDUs() {
			if h.Width*h.Height*h.Depth > 1<<24 && h.Kind != CompressedImage {
				t.Fatalf("HDU %d of %v is larger than its file", i, h.Axes)
			}
			if _, err := file.Image(i); err != nil {
				typed(t, err)
			}
			if h.Kind != CompressedImage {
				if _, err := file.Cube(i); err != nil {
					typed(t, err)
				}
			}
			if _, err := file.Verify(i); err != nil {
				typed(t, err)
			}
			tab, err := file.Table(i)
			if err != nil {
				typed(t, err)
				continue
			}
			for _, c := range tab.Columns {
				if c.Data != nil && rowsOf(c.Data) != h.Rows {
					t.Fatalf("column %s has %d rows of %d", c.Name, rowsOf(c.Data), h.Rows)
				}
			}
		}
	})
}

// samePassingBy wants the same headers from a stream that is not kept.
func samePassingBy(t *testing.T, raw []byte, want *File, wantErr error) {
	f := &File{Path: "fuzz", Selected: -1}
	s, err := f.newStream(bytes.NewReader(raw))
	if err == nil {
		f.src = s
		err = f.scan()
	}
	if err != nil {
		typed(t, err)
		// A fault of the header may be met before one of the compression.
		if wantErr == nil {
			t.Fatalf("passing by: %v", err)
		}
		return
	}
	if wantErr != nil || !reflect.DeepEqual(f.hdus, want.hdus) || !reflect.DeepEqual(f.Warnings, want.Warnings) {
		t.Fatalf("passing by: %d HDUs; want %v", len(f.hdus), wantErr)
	}
}

func typed(t *testing.T, err error) {
	t.Helper()
	var format *FormatError
	var unsupported *UnsupportedError
	if !errors.As(err, &format) && !errors.As(err, &unsupported) {
		t.Fatalf("error %v of type %T", err, err)
	}
}

func benchmarkFile(b *testing.B) (string, *ImageHDU) {
	img := &ImageHDU{Name: "SCI", Width: 4096, Height: 4096, Float: randomFloats(4096*4096, 1)}
	path := filepath.Join(b.TempDir(), "a.fits")
	if err := WritePrimary(path, img); err != nil {
		b.Fatal(err)
	}
	b.SetBytes(4096 * 4096 * 4)
	b.ReportAllocs()
	b.ResetTimer()
	return path, img
}

func BenchmarkRead(b *testing.B) {
	path, _ := benchmarkFile(b)
	for b.Loop() {
		f, err := Open(path)
		if err != nil {
			b.Fatal(err)
		}
		if _, err := f.Image(0); err != nil {
			b.Fatal(err)
		}
		f.Close()
	}
}

// BenchmarkWrite is the whole way to the disk, sync included.
func BenchmarkWrite(b *testing.B) {
	path, img := benchmarkFile(b)
	for b.Loop() {
		if err := WritePrimary(path, img); err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkEncode is the work of Write without the disk.
func BenchmarkEncode(b *testing.B) {
	_, img := benchmarkFile(b)
	for b.Loop() {
		if err := Encode(discard{}, nil, img); err != nil {
			b.Fatal(err)
		}
	}
}

type discard struct{}

func (discard) Write(p []byte) (int, error) { return len(p), nil }

func BenchmarkTable(b *testing.B) {
	t := exampleTable(2000, 1)
	b.SetBytes(2000 * 51 * 51 * 4)
	for b.Loop() {
		if err := Encode(discard{}, nil, t); err != nil {
			b.Fatal(err)
		}
	}
}

// ExampleWrite writes an image and a table and reads them back.
func ExampleWrite() {
	dir, err := os.MkdirTemp("", "example")
	if err != nil {
		panic(err)
	}
	defer os.RemoveAll(dir)
	path := filepath.Join(dir, "a.fits")
	primary := &Header{}
	primary.Set("ORIGIN", "Marrow Ridge", "where the frame was taken")
	err = Write(path, primary,
		&ImageHDU{Name: "SKY", Width: 3, Height: 2, Float: []float32{1, 2, 3, 4, 5, 6}},
		&Table{Name: "STARS", Columns: []Column{{Name: "x_px", Unit: "pixel", Description: "place along x", Data: []float64{1.5, 2.5}}}})
	if err != nil {
		panic(err)
	}
	f, err := Open(path + "[SKY]")
	if err != nil {
		panic(err)
	}
	defer f.Close()
	img, err := f.Image(f.Selected)
	if err != nil {
		panic(err)
	}
	stars, err := f.Table(2)
	if err != nil {
		panic(err)
	}
	x, err := stars.Floats("x_px")
	fmt.Println(img.Width, img.Height, img.Pix, x, err)
	// Output: 3 2 [1 2 3 4 5 6] [1.5 2.5] <nil>
}
