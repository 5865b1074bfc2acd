package fits

import (
	"bytes"
	"encoding/binary"
	"errors"
	"runtime"
	"strings"
	"testing"
)

// TestHostileTiles reads tables of tiles that lie: each gives an error with HDU
// and row or keyword, and takes little memory whatever size the header claims.
func TestHostileTiles(t *testing.T) {
	good := riceEncode(nil, make([]int32, 24), 32, 2)
	build := func(rows int, start, n uint32, heap []byte, lines ...string) []byte {
		// What a case says comes first, and so counts.
		head := append([]string{"XTENSION= 'BINTABLE'"}, lines...)
		head = append(head, "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = "+formatValue(int64(rows)),
			"PCOUNT  = "+formatValue(int64(len(heap))), "GCOUNT  = 1",
			"TFIELDS = 1", "TTYPE1  = 'COMPRESSED_DATA'", "TFORM1  = '1PB'", "ZIMAGE  = T", "ZCMPTYPE= 'RICE_1'",
			"ZBITPIX = 16", "ZNAXIS  = 2", "ZNAXIS1 = 24", "ZNAXIS2 = 2", "ZNAME1  = 'BYTEPIX'", "ZVAL1   = 2")
		table := make([]byte, 8*rows)
		for r := range rows {
			binary.BigEndian.PutUint32(table[8*r:], n)
			binary.BigEndian.PutUint32(table[8*r+4:], start)
		}
		data := append(table, heap...)
		data = append(data, make([]byte, padded(int64(len(data)))-int64(len(data)))...)
		return bytes.Join([][]byte{cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 0"), cards(head...), data}, nil)
	}
	size := uint32(len(good))
	for _, c := range []struct {
		name    string
		content []byte
		want    string // "" for a file that is read
	}{
		{"good", build(2, 0, size, good), ""},
		{"start outside", build(2, size, 1, good), "column COMPRESSED_DATA, row 1: points at 1 elements from byte"},
		{"length outside", build(2, 0, size+1, good), "row 1: points at"},
		{"negative length", build(2, 0, 0xffffffff, good), "row 1: points at -1"},
		{"no bytes", build(2, 0, 0, good), "row 1: the tile has no bytes in any column"},
		{"cut", build(2, 0, 2, good), "row 1: RICE_1: the compressed bytes end too early"},
		{"rubbish", build(2, 0, 40, bytes.Repeat([]byte{0xff}, 40), "ZNAME1  = 'BYTEPIX'", "ZVAL1   = 4"), "row 1: RICE_1: a block has a code"},
		{"too few rows", build(1, 0, size, good), "NAXIS2 = 1 rows"},
		{"kind", build(2, 0, size, good, "ZCMPTYPE= 'MAGIC'"), `ZCMPTYPE = "MAGIC"`},
		{"no column", build(2, 0, size, good, "TTYPE1  = 'DATA'"), "no column COMPRESSED_DATA"},
		{"column of numbers", build(2, 0, size, good, "TFORM1  = '2J'"), "want bytes of variable length"},
		{"two descriptors", build(2, 0, size, good, "TFORM1  = '2PB'", "NAXIS1  = 16", "NAXIS2  = 1", "ZNAXIS2 = 1"), "want bytes of variable length"},
		{"columns of one name", build(2, 0, size, good, "NAXIS1  = 16", "NAXIS2  = 1", "TFIELDS = 2", "TTYPE2  = 'compressed_data'", "TFORM2  = '1PB'", "ZNAXIS2 = 1"), "two columns"},
		{"ZBITPIX", build(2, 0, size, good, "ZBITPIX = 12"), "ZBITPIX = 12"},
		{"ZTILE 0", build(2, 0, size, good, "ZTILE1  = 0"), "ZTILE1 = 0"},
		{"ZTILE negative", build(2, 0, size, good, "ZTILE2  = -1"), "ZTILE2 = -1"},
		{"BYTEPIX", build(2, 0, size, good, "ZNAME1  = 'BYTEPIX'", "ZVAL1   = 3"), "ZVAL1 = 3 for BYTEPIX"},
		{"BLOCKSIZE", build(2, 0, size, good, "ZNAME1  = 'BLOCKSIZE'", "ZVAL1   = 1000000000"), "for BLOCKSIZE"},
		{"ZQUANTIZ", build(2, 0, size, good, "ZBITPIX = -32", "ZSCALE  = 2", "ZQUANTIZ= 'COIN'"), `ZQUANTIZ = "COIN"`},
		{"ZDITHER0", build(2, 0, size, good, "ZBITPIX = -32", "ZSCALE  = 2", "ZQUANTIZ= 'SUBTRACTIVE_DITHER_1'", "ZDITHER0= 10001"), "ZDITHER0 = 10001"},
		{"absurd axes", build(2, 0, size, good, "ZNAXIS1 = 200000000000000", "ZNAXIS2 = 200000000000000"), "no image can be that large"},
		{"large axis", build(2, 0, size, good, "ZNAXIS1 = 100000000000"), "cannot hold that many pixels"},
		{"one large tile", build(1, 0, size, good, "ZNAXIS1 = 100000", "ZNAXIS2 = 100000", "ZTILE1  = 100000", "ZTILE2  = 100000"), "cannot hold that many pixels"},
		{"large tile, H-transform", build(1, 0, size, good, "ZCMPTYPE= 'HCOMPRESS_1'", "ZNAXIS1 = 100000", "ZNAXIS2 = 100000", "ZTILE1  = 100000", "ZTILE2  = 100000"), "cannot hold that many pixels"},
		{"shared heap", build(1000, 0, 64, zipped(make([]byte, 1<<20))[:64], "ZCMPTYPE= 'GZIP_1'", "ZNAXIS1 = 1000000", "ZNAXIS2 = 1000"), "cannot hold that many pixels"},
		{"gzip bomb", build(2, 0, 1040, zipped(make([]byte, 1<<20)), "ZCMPTYPE= 'GZIP_1'"), "row 1: the gzip stream holds more than 192 bytes"},
		{"no gzip", build(2, 0, size, good, "ZCMPTYPE= 'GZIP_2'"), "row 1: no gzip stream"},
		{"gzip of another length", build(2, 0, 25, zipped(make([]byte, 25)), "ZCMPTYPE= 'GZIP_1'"), "row 1"},
		{"H-transform magic", build(1, 0, 30, make([]byte, 30), "ZCMPTYPE= 'HCOMPRESS_1'", "ZTILE2  = 2"), "want dd99"},
		{"H-transform shape", build(1, 0, 30, append([]byte{0xdd, 0x99, 0x7f}, make([]byte, 27)...), "ZCMPTYPE= 'HCOMPRESS_1'", "ZTILE2  = 2"), "want 24×2"},
		{"H-transform of a line", build(2, 0, 30, make([]byte, 30), "ZCMPTYPE= 'HCOMPRESS_1'"), "want 2×2 at least"},
		{"THEAP", build(2, 0, size, good, "THEAP   = 5"), "THEAP = 5"},
		{"truncated heap", build(2, 0, size, good, "PCOUNT  = 50000"), "truncated: the header announces"},
	} {
		t.Run(c.name, func(t *testing.T) {
			var before, after runtime.MemStats
			runtime.ReadMemStats(&before)
			f, err := newFile("bad", c.content)
			if err == nil {
				_, err = f.Image(1)
			}
			runtime.ReadMemStats(&after)
			if grown := after.TotalAlloc - before.TotalAlloc; grown > 8<<20 {
				t.Errorf("%d bytes were allocated", grown)
			}
			if c.want == "" {
				if err != nil {
					t.Fatal(err)
				}
				return
			}
			var format *FormatError
			var unsupported *UnsupportedError
			if !errors.As(err, &format) && !errors.As(err, &unsupported) {
				t.Fatalf("error %v (%T), want a FormatError or UnsupportedError", err, err)
			}
			if !strings.Contains(err.Error(), c.want) || !strings.HasPrefix(err.Error(), "bad[1]: ") {
				t.Errorf("error %q, want %q in it and bad[1] before it", err, c.want)
			}
		})
	}
}
