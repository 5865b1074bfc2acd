package fits

import (
	"path/filepath"
	"runtime"
	"slices"
	"testing"
)

// TestLargePlane reads a plane whose memory was not cleared before.
func TestLargePlane(t *testing.T) {
	const width, height = 523, 401
	pix := make([]float32, width*height)
	for p := range pix {
		pix[p] = float32(p) - 0.5
	}
	path := filepath.Join(t.TempDir(), "large.fits")
	if err := WritePrimary(path, &ImageHDU{Width: width, Height: height, Float: pix}); err != nil {
		t.Fatal(err)
	}
	f, err := Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for range 3 {
		img, err := f.Image(0)
		if err != nil || !slices.Equal(img.Pix, pix) || cap(img.Pix) != len(pix) {
			t.Fatalf("read back differently: %v", err)
		}
		clear(img.Pix)
		runtime.GC()
	}
}

func TestSectionIsPartOfTheImage(t *testing.T) {
	const w, h = 37, 23
	pix, bits := make([]float32, w*h), make([]uint16, w*h)
	for p := range pix {
		pix[p], bits[p] = float32(p)/3, uint16(p*71)
	}
	path := filepath.Join(t.TempDir(), "a.fits")
	if err := Write(path, nil, &ImageHDU{Name: "A", Width: w, Height: h, Float: pix}, &ImageHDU{Name: "B", Width: w, Height: h, Bits: bits}); err != nil {
		t.Fatal(err)
	}
	f, err := Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for i := 1; i <= 2; i++ {
		whole, err := f.Image(i)
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range [][4]int{{1, 1, w, h}, {5, 7, 11, 3}, {w, h, 1, 1}, {1, h, w, 1}} {
			part, err := f.Section(i, r[0], r[1], r[2], r[3])
			if err != nil {
				t.Fatal(err)
			}
			for y := range r[3] {
				for x := range r[2] {
					if got, want := part.Pix[y*r[2]+x], whole.Pix[(r[1]-1+y)*w+r[0]-1+x]; got != want {
						t.Fatalf("section %v of HDU %d, pixel (%d,%d): %v, want %v", r, i, x+1, y+1, got, want)
					}
				}
			}
		}
		for _, r := range [][4]int{{0, 1, 2, 2}, {1, 1, w + 1, 1}, {w, 1, 2, 1}, {3, 3, 0, 4}, {1, h, 1, 2}, {1 << 62, 1, 1 << 62, 1}} {
			if _, err := f.Section(i, r[0], r[1], r[2], r[3]); err == nil {
				t.Errorf("section %v: no error", r)
			}
		}
	}
	if _, err := f.Section(0, 1, 1, 1, 1); err == nil {
		t.Error("a section of an empty HDU: no error")
	}
}
