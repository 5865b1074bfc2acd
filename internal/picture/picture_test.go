package picture

import (
	"encoding/json"
	"image"
	"image/png"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/outside"
)

// sky is noise of 5 around 100, with a few bright stars.
func sky(width, height int, seed uint64) *frame.Image {
	rng := rand.New(rand.NewPCG(seed, 4))
	m := frame.NewImage(width, height)
	for p := range m.Pix {
		m.Pix[p] = float32(100 + 5*rng.NormFloat64())
	}
	for range width * height / 2000 {
		m.Pix[rng.IntN(len(m.Pix))] += float32(100 + 30000*rng.Float64())
	}
	return m
}

// TestStretchAgainstAstropy compares with astropy's ZScaleInterval, which fits
// such a line too. Its sample and its rejection are others, so the limits agree
// to a part of the noise only.
func TestStretchAgainstAstropy(t *testing.T) {
	m := sky(300, 200, 1)
	file := filepath.Join(t.TempDir(), "plane.json")
	data, err := json.Marshal(m.Pix)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(file, data, 0o600); err != nil {
		t.Fatal(err)
	}
	out := outside.Python(t, `
import json, sys
import numpy as np
from astropy.visualization import ZScaleInterval
a = np.array(json.load(open(sys.argv[1])), dtype=np.float32).reshape(200, 300)
print(json.dumps([float(v) for v in ZScaleInterval(nsamples=20000).get_limits(a)]))
`, file)
	var want [2]float64
	if err := json.Unmarshal(out, &want); err != nil {
		t.Fatal(err)
	}
	low, high := Stretch(m)
	t.Logf("limits %.2f %.2f, astropy's %.2f %.2f", low, high, want[0], want[1])
	if math.Abs(low-want[0]) > 5 || math.Abs(high-want[1]) > 5 {
		t.Errorf("limits %.2f %.2f, astropy's %.2f %.2f", low, high, want[0], want[1])
	}
}

func TestStretchOfPoorPlanes(t *testing.T) {
	nan := float32(math.NaN())
	flat := frame.NewImage(10, 10)
	for _, c := range []struct {
		name      string
		m         *frame.Image
		low, high float64
	}{
		{"empty", frame.NewImage(0, 0), 0, 1}, {"flat", flat, -0.5, 0.5},
		{"blank", &frame.Image{Width: 2, Height: 1, Pix: []float32{nan, nan}}, 0, 1},
		{"two values", &frame.Image{Width: 2, Height: 1, Pix: []float32{1, 3}}, 1, 3},
	} {
		if low, high := Stretch(c.m); low != c.low || high != c.high {
			t.Errorf("%s: limits %g %g, want %g %g", c.name, low, high, c.low, c.high)
		}
	}
}

func TestGrey(t *testing.T) {
	m := &frame.Image{Width: 2, Height: 2, Pix: []float32{0, 10, float32(math.NaN()), 5}}
	img := Grey(m, 0, 10)
	for _, c := range []struct {
		x, y int
		want uint8
	}{{0, 1, 1}, {1, 1, 255}, {0, 0, 0}, {1, 0, 128}} { // row 1 of the plane is at the bottom
		if got := img.GrayAt(c.x, c.y).Y; got != c.want {
			t.Errorf("grey at (%d,%d) is %d, want %d", c.x, c.y, got, c.want)
		}
	}
}

func TestShrink(t *testing.T) {
	m := frame.NewImage(7, 4)
	for p := range m.Pix {
		m.Pix[p] = float32(p)
	}
	m.Pix[0] = float32(math.NaN())
	small, factor := shrink(m, 3)
	if factor != 2 || small.Width != 4 || small.Height != 2 {
		t.Fatalf("factor %d, %d × %d", factor, small.Width, small.Height)
	}
	for p, want := range []float32{(1 + 7 + 8) / 3., (2 + 3 + 9 + 10) / 4., (4 + 5 + 11 + 12) / 4., (6 + 13) / 2.} {
		if math.Abs(float64(small.Pix[p]-want)) > 1e-5 {
			t.Errorf("pixel %d is %g, want %g", p, small.Pix[p], want)
		}
	}
}

// TestNorthUp: a star to the north and a fainter one to the east of the middle
// end up above and to the left, whatever the frame's orientation.
func TestNorthUp(t *testing.T) {
	for _, parity := range []int{1, -1} {
		for _, angle := range []float64{0, 30, 90, 135, 200, 315} {
			m := frame.NewImage(101, 101)
			spot := func(pa, value float64) { // at position angle pa, 30 px away
				// +y lies at angle; with parity +1 position angles grow counterclockwise.
				a := (pa - angle) * math.Pi / 180 * float64(parity)
				x, y := 50-30*math.Sin(a), 50+30*math.Cos(a)
				for j := -2; j <= 2; j++ {
					for i := -2; i <= 2; i++ {
						m.Pix[(int(math.Round(y))+j)*101+int(math.Round(x))+i] = float32(value)
					}
				}
			}
			spot(0, 100)
			spot(90, 60)
			img := NorthUp(Grey(m, 0, 100), angle, parity)
			cx, cy := img.Bounds().Dx()/2, img.Bounds().Dy()/2
			if north, east := img.NRGBAAt(cx, cy-30).R, img.NRGBAAt(cx-30, cy).R; north < 240 || east < 130 || east > 180 {
				t.Errorf("parity %d, angle %g: above is %d, left is %d", parity, angle, north, east)
			}
		}
	}
}

func TestWriteFrame(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.png")
	for _, size := range [][2]int{{500, 300}, {90, 2500}, {1, 1}} {
		scale, _, _, err := WriteFrame(path, sky(size[0], size[1], 2), 200)
		if err != nil {
			t.Fatal(err)
		}
		f, err := os.Open(path)
		if err != nil {
			t.Fatal(err)
		}
		var img image.Image
		img, err = png.Decode(f)
		f.Close()
		if err != nil {
			t.Fatal(err)
		}
		b := img.Bounds()
		if b.Dx() > 200 || b.Dy() > 200 || max(b.Dx(), b.Dy()) < min(200, max(size[0], size[1])) || math.Abs(scale*float64(b.Dx())-float64(size[0])) > 1e-9 {
			t.Errorf("%v: picture of %v, scale %g", size, b, scale)
		}
	}
	if _, _, _, err := WriteFrame(filepath.Join(t.TempDir(), "absent", "a.png"), sky(10, 10, 1), 20); err == nil {
		t.Error("no error for a folder that is not there")
	}
	if _, _, _, err := WriteFrame(path, frame.NewImage(0, 0), 20); err == nil {
		t.Error("no error for an empty frame")
	}
}
