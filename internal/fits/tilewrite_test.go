package fits

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"path/filepath"
	"testing"

	"nightsift/internal/outside"
)

// skyPlanes are what a difference holds: noise with stars and awkward rows,
// a plane without noise, and flags.
func skyPlanes(width, height int) []*ImageHDU {
	rng := rand.New(rand.NewPCG(5, 5))
	sky, even, bits := make([]float32, width*height), make([]float32, width*height), make([]uint16, width*height)
	for i := range sky {
		x, y := float64(i%width), float64(i/width)
		sky[i] = float32(rng.NormFloat64()*12 + 9000*math.Exp(-((x-50)*(x-50)+(y-40)*(y-40))/9))
		even[i] = 144
		if rng.IntN(50) == 0 {
			bits[i] = uint16(1 << rng.IntN(16))
		}
	}
	for i := range width {
		sky[3*width+i] = nan32()
		sky[5*width+i] = 0
		sky[6*width+i] = 7.5
		bits[4*width+i] = 65535
	}
	nasty(sky[20*width+10:])
	sky[30*width], sky[31*width+5], sky[31*width+6] = nan32(), 0, nan32()
	return []*ImageHDU{
		{Name: "DIFFERENCE", Header: exampleHeader(), Width: width, Height: height, Float: sky},
		{Name: "VARIANCE", Width: width, Height: height, Float: even},
		{Name: "FLAGS", Header: exampleHeader(), Width: width, Height: height, Bits: bits},
	}
}

// TestWriteCompressed reads back what is written in tiles: by this package,
// by astropy and by cfitsio, whose funpack must restore the very header, as the
// checksum of the plain image tells.
func TestWriteCompressed(t *testing.T) {
	const width, height = 211, 97
	for _, c := range []Compression{{CompressRice, 0}, {CompressGzip, 0}, {CompressRice, 4}, {CompressGzip, 16}} {
		t.Run(fmt.Sprint(c.Method, c.Quantise), func(t *testing.T) {
			dir := t.TempDir()
			path, plain := filepath.Join(dir, "a.fits"), filepath.Join(dir, "plain.fits")
			planes := skyPlanes(width, height)
			cube := &ImageHDU{Name: "PSF", Width: 5, Height: 5, Depth: 2, Float: randomFloats(50, 3)}
			if err := WriteCompressed(path, c, exampleHeader(), planes[0], planes[1], planes[2], cube, exampleTable(5, 1)); err != nil {
				t.Fatal(err)
			}
			f, err := Open(path)
			if err != nil {
				t.Fatal(err)
			}
			defer f.Close()
			var read [2]*Image
			for i := range read {
				if f.HDUs()[i+1].Kind != CompressedImage || f.HDUs()[i+1].Name != planes[i].Name {
					t.Fatalf("HDU %d is a %s named %s", i+1, f.HDUs()[i+1].Kind, f.HDUs()[i+1].Name)
				}
				if read[i], err = f.Image(i + 1); err != nil {
					t.Fatal(err)
				}
				checkHeader(t, read[i].Header, planes[i].Header)
			}
			if c.Quantise == 0 {
				checkPix(t, "sky", read[0].Pix, planes[0].Float)
			} else {
				checkQuantised(t, read[0].Pix, planes[0].Float, 12/c.Quantise, width)
			}
			checkPix(t, "variance", read[1].Pix, planes[1].Float)
			flags, err := f.Flags(3)
			if err != nil {
				t.Fatal(err)
			}
			for i, b := range flags.Bits {
				if b != planes[2].Bits[i] {
					t.Fatalf("flags %d = %d, want %d", i, b, planes[2].Bits[i])
				}
			}
			if back, err := f.Cube(4); err != nil || back.Pix[7] != cube.Float[7] {
				t.Errorf("cube: %v", err)
			}
			for i := range f.HDUs() {
				if present, err := f.Verify(i); !present || err != nil {
					t.Errorf("HDU %d: checksum %v %v", i, present, err)
				}
			}
			verify(t, path)

			outside.Command(t, "funpack", "-O", plain, path)
			verify(t, plain)
			p, err := Open(plain)
			if err != nil {
				t.Fatal(err)
			}
			defer p.Close()
			for i := range p.HDUs() {
				if _, err := p.Verify(i); err != nil {
					t.Errorf("HDU %d after funpack: %v", i, err)
				}
			}
			var sums [3]float64
			if err := json.Unmarshal(outside.Python(t, `
import sys, json
import numpy as np
from astropy.io import fits
h, p = fits.open(sys.argv[1]), fits.open(sys.argv[2])
out = []
for i in (1, 2, 3):
    a, b = h[i].data, p[i].data
    assert a.dtype.kind == b.dtype.kind
    if sys.argv[4] != "0" and i == 1:
        # In tiles that are not quantised cfitsio makes infinities NaN, and the smallest numbers 0.
        b[20] = a[20]
        # astropy 5.2.1 does not know ZBLANK; cfitsio does.
        a[30, 0] = a[31, 6] = np.nan
    assert np.array_equal(a, b, equal_nan=a.dtype.kind == "f"), i
    a.astype("<f4").tofile(sys.argv[3] + str(i))
    out.append(float(np.nansum(a[40:80])))
print(json.dumps(out))
`, path, plain, filepath.Join(dir, "raw"), fmt.Sprint(c.Quantise)), &sums); err != nil {
				t.Fatal(err)
			}
			for i := range read {
				checkPix(t, "astropy", rawFloats(t, filepath.Join(dir, fmt.Sprint("raw", i+1))), read[i].Pix)
			}
		})
	}
}

// checkQuantised wants values to half a step of a row's noise, which is known
// to 40 %, and NaN, zeros and rows that cannot be rounded as they were.
func checkQuantised(t *testing.T, got, want []float32, step float64, width int) {
	t.Helper()
	var sum, square, n float64
	for i, v := range want {
		row := i / width
		g := got[i]
		if v != v || v == 0 || row == 6 || row == 20 {
			if !sameBits(g, v) && !(g == 0 && v == 0) {
				t.Fatalf("pixel %d = %v, want %v", i, g, v)
			}
			continue
		}
		d := float64(g) - float64(v)
		if math.Abs(d) > 0.75*step {
			t.Fatalf("pixel %d = %v, want %v to half of %v", i, g, v, step)
		}
		sum, square, n = sum+d, square+d*d, n+1
	}
	// Dithered rounding has the mean 0 and the variance step²/12.
	if mean, rms := sum/n, math.Sqrt(square/n); math.Abs(mean) > 4*rms/math.Sqrt(n) || math.Abs(rms/(step/math.Sqrt(12))-1) > 0.1 {
		t.Errorf("rounding: mean %.4f, rms %.4f; want 0 and %.4f", mean, rms, step/math.Sqrt(12))
	}
}

func TestCompressionCheck(t *testing.T) {
	for _, c := range []Compression{{"zip", 0}, {CompressNone, 4}, {"", 4}, {CompressRice, -1}, {CompressRice, 0.1}, {CompressRice, math.NaN()}, {CompressRice, 1e9}} {
		if c.Check() == nil {
			t.Errorf("%+v passes", c)
		}
		if WriteCompressed(filepath.Join(t.TempDir(), "a.fits"), c, nil) == nil {
			t.Errorf("%+v was written", c)
		}
	}
	for _, c := range []Compression{{}, {CompressNone, 0}, {CompressGzip, 0}, {CompressRice, 4}} {
		if err := c.Check(); err != nil {
			t.Error(err)
		}
	}
}

// TestRice goes round with pixels of all widths, blocks and roughnesses.
func TestRice(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 3))
	for width, form := range riceForms {
		for _, block := range []int{8, 32, 256} {
			for trial := range 200 {
				n := 1 + rng.IntN(100)
				pix := make([]int32, n)
				amplitude := uint32(1) << rng.IntN(int(form.bits))
				for i := range pix {
					v := int32(rng.Uint32N(amplitude)) * int32(1-2*rng.IntN(2))
					if rng.IntN(40) == 0 {
						v = int32(rng.Uint32())
					}
					switch width {
					case 1:
						v &= 0xff
					case 2:
						v = int32(int16(v))
					}
					pix[i] = v
				}
				code := riceEncode(nil, pix, block, width)
				got := make([]int32, n)
				if err := riceDecode(got, code, block, width); err != nil {
					t.Fatal(err)
				}
				for i := range got {
					if got[i] != pix[i] {
						t.Fatalf("width %d, block %d, trial %d: pixel %d = %d, want %d", width, block, trial, i, got[i], pix[i])
					}
				}
				for cut := range len(code) {
					if err := riceDecode(got, code[:cut], block, width); err == nil {
						t.Fatalf("width %d: %d of %d bytes were enough", width, cut, len(code))
					}
				}
			}
		}
	}
}
