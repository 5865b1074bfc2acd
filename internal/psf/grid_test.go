package psf

import (
	"math"
	"math/rand/v2"
	"path/filepath"
	"testing"

	"nightsift/internal/fits"
)

// gaussPixel is the exact light of a round Gaussian in a pixel.
func gaussPixel(u, v, sigma float64) float64 {
	f := func(a float64) float64 {
		return 0.5 * (math.Erf((a+0.5)/sigma/math.Sqrt2) - math.Erf((a-0.5)/sigma/math.Sqrt2))
	}
	return f(u) * f(v)
}

func gaussRender(fwhm float64) func(dst []float32, x, y, dx, dy float64) {
	return func(dst []float32, x, y, dx, dy float64) {
		n := side(len(dst))
		h := float64(n-1) / 2
		// The size grows linearly along x, so that the grid's bilinear
		// positions can be tested.
		s := fwhm / 2.3548
		for j := range n {
			for i := range n {
				a := gaussPixel(float64(i)-h-dx, float64(j)-h-dy, s)
				b := gaussPixel(float64(i)-h-dx, float64(j)-h-dy, s*1.3)
				dst[j*n+i] = float32(a + (b-a)*x/1000)
			}
		}
	}
}

// The closed form with error functions is the outside source of these numbers.
func TestGridInterpolation(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, fwhm := range []float64{2, 3, 6} {
		for _, os := range []int{3, 4} {
			for _, size := range []int{15, 31} {
				render := gaussRender(fwhm)
				g := NewGrid(1000, 800, 4, 3, size, os, render)
				n := size
				dst, gx, gy, want := make([]float32, n*n), make([]float32, n*n), make([]float32, n*n), make([]float32, n*n)
				plus, minus := make([]float32, n*n), make([]float32, n*n)
				limit := 2e-4
				if os == 3 && fwhm < 3 {
					limit = 6e-4
				}
				var worst, worstG, peakG float64
				for try := range 40 {
					x := 125.5 + 750*rng.Float64()
					y := 800 * rng.Float64()
					dx, dy := rng.Float64()-0.5, rng.Float64()-0.5
					if try < 4 { // the ends of the range
						dx, dy = float64(try/2)-0.5, float64(try%2)-0.5
					}
					g.RenderGradient(dst, gx, gy, n, x, y, dx, dy)
					render(want, x, y, dx, dy)
					peak := float64(want[n*n/2])
					for k := range dst {
						worst = math.Max(worst, math.Abs(float64(dst[k]-want[k]))/peak)
					}
					for axis := range 2 {
						e := 0.01
						if axis == 0 {
							render(plus, x, y, dx+e, dy)
							render(minus, x, y, dx-e, dy)
						} else {
							render(plus, x, y, dx, dy+e)
							render(minus, x, y, dx, dy-e)
						}
						for k := range dst {
							have := gx[k]
							if axis == 1 {
								have = gy[k]
							}
							d := float64(plus[k]-minus[k]) / (2 * e)
							peakG = math.Max(peakG, math.Abs(d))
							worstG = math.Max(worstG, math.Abs(float64(have)-d))
						}
					}
				}
				if worst > limit || worstG > 0.01*peakG {
					t.Errorf("fwhm %g, %d samples, size %d: error %.2g of the peak (limit %.2g), gradient %.2g of its largest", fwhm, os, size, worst, limit, worstG/peakG)
				}
			}
		}
	}
}

func TestGridOutsideAndSizes(t *testing.T) {
	g := NewGrid(100, 100, 1, 1, 21, 4, gaussRender(3))
	want := make([]float32, 21*21)
	g.Render(want, 21, 50, 50, 0.2, -0.3)
	for _, size := range []int{1, 3, 5, 11, 21, 35, 61} {
		got := make([]float32, size*size)
		for k := range got {
			got[k] = float32(math.NaN())
		}
		g.Render(got, size, 50, 50, 0.2, -0.3)
		d := (size - 21) / 2
		for j := range size {
			for i := range size {
				var w float32
				if i-d >= 0 && j-d >= 0 && i-d < 21 && j-d < 21 {
					w = want[(j-d)*21+i-d]
				}
				if diff := math.Abs(float64(got[j*size+i] - w)); !(diff < 1e-7) {
					t.Fatalf("size %d pixel %d,%d: %g, want %g", size, i, j, got[j*size+i], w)
				}
			}
		}
	}
	stamp := make([]float32, 9)
	for _, d := range []float64{1e9, -1e9, 40, -40, math.NaN(), math.Inf(1)} {
		g.Render(stamp, 3, d, d, d, d)
		for _, v := range stamp {
			if v != 0 {
				t.Errorf("shift %g: %g, want 0", d, v)
			}
		}
	}
	if f := g.FWHM(50, 50); math.Abs(f-3.17) > 0.1 {
		t.Errorf("FWHM %g, want about 3.17", f)
	}
	s2 := math.Pow(3/2.3548, 2) + 1./12
	xx, yy, xy := g.Moments(50, 50)
	if math.Abs(xx/s2-1) > 0.05 || math.Abs(yy/s2-1) > 0.05 || math.Abs(xy) > 1e-3 {
		t.Errorf("moments %g %g %g, want about %g", xx, yy, xy, s2)
	}
}

func TestGridFile(t *testing.T) {
	g := NewGrid(640, 480, 3, 2, 17, 4, gaussRender(2.5))
	path := filepath.Join(t.TempDir(), "psf.fits")
	if err := fits.Write(path, &fits.Header{}, g.Encode("PSF")); err != nil {
		t.Fatal(err)
	}
	f, err := fits.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	k, err := f.Find("PSF")
	if err != nil {
		t.Fatal(err)
	}
	c, err := f.Cube(k)
	if err != nil {
		t.Fatal(err)
	}
	h, err := Decode(c)
	if err != nil {
		t.Fatal(err)
	}
	a, b := make([]float32, 17*17), make([]float32, 17*17)
	for _, p := range [][2]float64{{1, 1}, {300.3, 77}, {640, 480}} {
		g.Render(a, 17, p[0], p[1], 0.123, 0.4)
		h.Render(b, 17, p[0], p[1], 0.123, 0.4)
		for k := range a {
			if a[k] != b[k] {
				t.Fatalf("at %v pixel %d: %g after the file, %g before", p, k, b[k], a[k])
			}
		}
	}
	// A header that does not fit is refused with words.
	for _, bad := range []struct {
		key   string
		value any
	}{{"GRIDNX", int64(4)}, {"STAMPPIX", int64(16)}, {"STAMPPIX", int64(1 << 19)}, {"OVERSAMP", int64(0)}, {"GRIDX2", -5.0}, {"GRIDNY", "two"}, {"OVERSAMP", int64(3)}} {
		old := c.Header
		c.Header = old.Clone()
		c.Header.Set(bad.key, bad.value, "")
		if _, err := Decode(c); err == nil {
			t.Errorf("%s = %v was taken", bad.key, bad.value)
		}
		c.Header = old
	}
}

func BenchmarkGridRender(b *testing.B) {
	g := NewGrid(1000, 800, 4, 3, 31, 4, gaussRender(4))
	dst := make([]float32, 31*31)
	b.ReportAllocs()
	for b.Loop() {
		g.Render(dst, 31, 333, 444, 0.2, 0.3)
	}
}
