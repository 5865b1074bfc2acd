package fits

import (
	"bytes"
	"encoding/binary"
	"strconv"
	"testing"
)

// The seeds in testdata/fuzz are tiles that cfitsio compressed, and files and
// headers with faults. FuzzHeader and FuzzOpen stand in hostile_test.go.

func FuzzRice(f *testing.F) {
	f.Add(riceEncode(nil, []int32{1, 2, 3, 500, 4, 4, 4, 4, -7}, 8, 2), uint8(9), uint8(1), uint8(0))
	f.Fuzz(func(t *testing.T, src []byte, n, width, block uint8) {
		w := []int{1, 2, 4}[width%3]
		b := []int{8, 16, 32, 256}[block%4]
		pix := make([]int32, int(n)+1)
		if riceDecode(pix, src, b, w) != nil {
			return
		}
		// What could be read is the same after another round.
		again := make([]int32, len(pix))
		if err := riceDecode(again, riceEncode(nil, pix, b, w), b, w); err != nil {
			t.Fatal(err)
		}
		for i := range pix {
			if pix[i] != again[i] {
				t.Fatalf("pixel %d = %d, want %d", i, again[i], pix[i])
			}
		}
	})
}

func FuzzHcompress(f *testing.F) {
	var tile hcompressed
	f.Fuzz(func(t *testing.T, src []byte, rows, cols uint8, smooth bool) {
		// The shape that the bytes claim, when it is small: else no tile passes.
		r, c := int(rows%40), int(cols%40)
		if len(src) >= 10 {
			if hr, hc := int(get32(src[2:])), int(get32(src[6:])); hr > 0 && hr < 40 && hc > 0 && hc < 40 {
				r, c = hr, hc
			}
		}
		tile.decode(make([]int32, r*c), src, r, c, smooth)
	})
}

func FuzzPlio(f *testing.F) {
	f.Add([]byte{0, 0, 0, 7, 0xff, 0x9c, 0, 9, 0, 0, 0, 0, 0, 0, 0x40, 5, 0x50, 3}, uint16(100))
	f.Fuzz(func(t *testing.T, src []byte, n uint16) {
		plioDecode(make([]int32, int(n%2000)+1), src)
	})
}

// tileFile makes a file of an image of 24×10×2 pixels in tiles. The heap and, if
// asked for, the rows of the table are content.
func tileFile(kind, bitpix, options uint8, content []byte) []byte {
	kinds := []string{"RICE_1", "GZIP_1", "GZIP_2", "HCOMPRESS_1", "PLIO_1", "NOCOMPRESS"}
	bits := []int{8, 16, 32, 64, -32, -64}[bitpix%6]
	shape := [][3]int{{24, 1, 1}, {24, 10, 1}, {7, 4, 1}, {24, 10, 2}, {5, 3, 2}, {24, 5, 1}, {1, 1, 1}, {30, 30, 30}}[options%8]
	rows := (23/shape[0] + 1) * (9/shape[1] + 1) * (1/shape[2] + 1)
	lines := []string{"XTENSION= 'BINTABLE'", "BITPIX  = 8", "NAXIS   = 2", "NAXIS1  = 40", "NAXIS2  = " + strconv.Itoa(rows), "PCOUNT  = " + strconv.Itoa(len(content)),
		"GCOUNT  = 1", "TFIELDS = 5", "TTYPE1  = 'COMPRESSED_DATA'", "TFORM1  = '1PB(99)'", "TTYPE2  = 'GZIP_COMPRESSED_DATA'", "TFORM2  = '1PB'",
		"TTYPE3  = 'UNCOMPRESSED_DATA'", "TFORM3  = '1PI'", "TTYPE4  = 'ZSCALE'", "TFORM4  = '1D'", "TTYPE5  = 'ZZERO'", "TFORM5  = '1D'",
		"ZIMAGE  = T", "ZCMPTYPE= '" + kinds[kind%6] + "'", "ZBITPIX = " + strconv.Itoa(bits), "ZNAXIS  = 3", "ZNAXIS1 = 24", "ZNAXIS2 = 10", "ZNAXIS3 = 2"}
	for i, n := range shape {
		lines = append(lines, "ZTILE"+strconv.Itoa(i+1)+"  = "+strconv.Itoa(n))
	}
	if options&8 != 0 {
		lines = append(lines, "ZQUANTIZ= 'SUBTRACTIVE_DITHER_2'", "ZDITHER0= 10000", "ZBLANK  = 3")
	}
	if options&16 != 0 {
		lines = append(lines, "ZNAME1  = 'SMOOTH'", "ZVAL1   = 1", "ZNAME2  = 'BYTEPIX'", "ZVAL2   = 2", "ZNAME3  = 'BLOCKSIZE'", "ZVAL3   = 16")
	}
	if options&32 != 0 {
		lines = append(lines, "BSCALE  = 2", "BZERO   = 5")
	}
	table := make([]byte, 40*rows)
	for row := range rows {
		r := table[40*row:]
		each := len(content) / rows
		column := 8 * int(kind/6%3)
		binary.BigEndian.PutUint32(r[column:], uint32(each))
		binary.BigEndian.PutUint32(r[column+4:], uint32(each*row))
		putF64(r[24:], 0.5)
		putF64(r[32:], 100)
	}
	if options&64 != 0 {
		copy(table, content)
	}
	data := append(table, content...)
	data = append(data, make([]byte, padded(int64(len(data)))-int64(len(data)))...)
	return bytes.Join([][]byte{cards("SIMPLE  = T", "BITPIX  = 8", "NAXIS   = 0"), cards(lines...), data}, nil)
}

func FuzzTiles(f *testing.F) {
	f.Add(uint8(1), uint8(4), uint8(3), zipped(make([]byte, 480*4)))
	f.Add(uint8(2), uint8(1), uint8(1), append(zipped(make([]byte, 480)), zipped(make([]byte, 480))...))
	f.Add(uint8(0), uint8(1), uint8(16+3), riceEncode(nil, make([]int32, 480), 16, 2))
	f.Add(uint8(5), uint8(0), uint8(3), make([]byte, 480))
	f.Add(uint8(13), uint8(1), uint8(3), make([]byte, 960))
	f.Fuzz(func(t *testing.T, kind, bitpix, options uint8, content []byte) {
		if len(content) > 4096 {
			t.Skip("large")
		}
		file, err := newFile("fuzz", tileFile(kind, bitpix, options, content))
		if err != nil {
			t.Fatal(err)
		}
		cube, err := file.Cube(1)
		if err != nil {
			typed(t, err)
			return
		}
		plane, err := file.Plane(1, 1)
		if err != nil {
			t.Fatal(err)
		}
		for i, v := range cube.Plane(1) {
			if !sameBits(v, plane.Pix[i]) {
				t.Fatalf("pixel %d = %v, want %v", i, plane.Pix[i], v)
			}
		}
	})
}
