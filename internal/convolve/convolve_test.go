package convolve

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/outside"
)

func noise(seed uint64, w, h int) *frame.Image {
	r := rand.New(rand.NewPCG(seed, 3))
	m := frame.NewImage(w, h)
	for i := range m.Pix {
		m.Pix[i] = float32(r.NormFloat64())
	}
	return m
}

// plain is the definition in the package comment, in float64.
func plain(src *frame.Image, kernel []float32, kw, kh int, edge Edge) []float64 {
	out := make([]float64, len(src.Pix))
	for j := 0; j < src.Height; j++ {
		for i := 0; i < src.Width; i++ {
			var sum float64
			for b := 0; b < kh; b++ {
				for a := 0; a < kw; a++ {
					x, y := i-a+kw/2, j-b+kh/2
					if edge == Nearest {
						x, y = min(max(x, 0), src.Width-1), min(max(y, 0), src.Height-1)
					}
					if x >= 0 && x < src.Width && y >= 0 && y < src.Height {
						sum += float64(kernel[b*kw+a]) * float64(src.Row(y)[x])
					}
				}
			}
			out[j*src.Width+i] = sum
		}
	}
	return out
}

func TestAgainstDefinition(t *testing.T) {
	var scratch Scratch // one for all sizes: it must not remember
	for _, shape := range [][2]int{{1, 1}, {2, 3}, {40, 33}, {7, 50}, {64, 1}, {1, 64}, {33, 9}} {
		for _, k := range [][2]int{{1, 1}, {3, 5}, {7, 3}, {9, 9}, {1, 15}, {21, 1}, {13, 11}} {
			for _, edge := range []Edge{Zero, Nearest} {
				src := noise(uint64(shape[0]*100+k[0]), shape[0], shape[1])
				kx, ky := noise(1, k[0], 1).Pix, noise(2, k[1], 1).Pix
				kernel := make([]float32, k[0]*k[1])
				for b := range ky {
					for a := range kx {
						kernel[b*k[0]+a] = ky[b] * kx[a]
					}
				}
				want := plain(src, kernel, k[0], k[1], edge)
				got := frame.NewImage(shape[0], shape[1])
				Dense(got, src, kernel, k[0], k[1], edge, &scratch)
				compare(t, fmt.Sprint("dense ", shape, k, edge), got.Pix, want)
				Separable(got, src, kx, ky, edge, &scratch)
				compare(t, fmt.Sprint("separable ", shape, k, edge), got.Pix, want)
				inPlace := src.Clone()
				Separable(inPlace, inPlace, kx, ky, edge, nil)
				compare(t, fmt.Sprint("separable in place ", shape, k, edge), inPlace.Pix, want)
			}
		}
	}
}

func compare(t *testing.T, what string, got []float32, want []float64) {
	t.Helper()
	var rms float64
	for _, w := range want {
		rms += w * w
	}
	rms = math.Sqrt(rms/float64(len(want))) + 1e-3
	for i := range got {
		if math.Abs(float64(got[i])-want[i]) > 1e-5*rms {
			t.Fatalf("%s: pixel %d is %g, want %g", what, i, got[i], want[i])
		}
	}
}

func TestImpulseIsTheKernel(t *testing.T) {
	kernel := noise(5, 5, 7).Pix
	src, dst := frame.NewImage(20, 20), frame.NewImage(20, 20)
	src.Row(10)[8] = 1
	Dense(dst, src, kernel, 5, 7, Zero, nil)
	for j := 0; j < 20; j++ {
		for i := 0; i < 20; i++ {
			var want float32
			if a, b := i-8+2, j-10+3; a >= 0 && a < 5 && b >= 0 && b < 7 {
				want = kernel[b*5+a]
			}
			if dst.Row(j)[i] != want {
				t.Fatalf("(%d,%d): %g, want %g", i, j, dst.Row(j)[i], want)
			}
		}
	}
}

func TestNaNStaysInItsFootprint(t *testing.T) {
	src, dst := noise(1, 30, 30), frame.NewImage(30, 30)
	src.Row(12)[15] = float32(math.NaN())
	k := Gaussian(1, 3)
	Separable(dst, src, k, k, Nearest, nil)
	for j := 0; j < 30; j++ {
		for i := 0; i < 30; i++ {
			inside := i >= 12 && i <= 18 && j >= 9 && j <= 15
			if v := dst.Row(j)[i]; (v != v) != inside {
				t.Fatalf("(%d,%d) is %g", i, j, v)
			}
		}
	}
}

// Every number of rows and every length from 0 to 40, between guards.
func TestWeightedSum(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 8))
	for k := 0; k <= 27; k++ {
		for n := 0; n <= 40; n++ {
			buf := make([]float32, n+2)
			buf[0], buf[n+1] = 1e30, 1e30
			dst := buf[1 : n+1]
			rows, weights := make([][]float32, k), make([]float32, k)
			want := make([]float64, n)
			for q := range rows {
				rows[q] = make([]float32, n+q%2)
				weights[q] = float32(r.NormFloat64())
				for i := range rows[q] {
					rows[q][i] = float32(r.NormFloat64())
				}
				for i := range want {
					want[i] += float64(weights[q]) * float64(rows[q][i])
				}
			}
			for i := range dst {
				dst[i] = float32(math.NaN()) // must be overwritten
			}
			WeightedSum(dst, rows, weights)
			for i := range dst {
				if !(math.Abs(float64(dst[i])-want[i]) < 1e-5) {
					t.Fatalf("%d rows of %d: value %d is %g, want %g", k, n, i, dst[i], want[i])
				}
			}
			if buf[0] != 1e30 || buf[n+1] != 1e30 {
				t.Fatalf("%d rows of %d: wrote outside", k, n)
			}
		}
	}
}

// A Gaussian of known width: unit sum, and variance σ² + 1/12 of the pixel.
func TestGaussian(t *testing.T) {
	for _, sigma := range []float64{0.8, 2, 4} {
		radius := int(math.Ceil(7*sigma)) + 1
		var sum, m2 float64
		for i, v := range Gaussian(sigma, radius) {
			x := float64(i - radius)
			sum += float64(v)
			m2 += float64(v) * x * x
		}
		if math.Abs(sum-1) > 1e-6 || math.Abs(m2-sigma*sigma-1.0/12) > 1e-3*sigma*sigma {
			t.Errorf("sigma %g: sum %g, second moment %g", sigma, sum, m2)
		}
	}
}

func TestMistakesPanic(t *testing.T) {
	a, b := frame.NewImage(4, 4), frame.NewImage(4, 5)
	k := []float32{1, 1, 1}
	for name, f := range map[string]func(){
		"shape":        func() { Separable(a, b, k, k, Zero, nil) },
		"even":         func() { Separable(a, a, k[:2], k, Zero, nil) },
		"length":       func() { Dense(a, frame.NewImage(4, 4), k, 3, 3, Zero, nil) },
		"in place":     func() { Dense(a, a, k, 3, 1, Zero, nil) },
		"sigma":        func() { Gaussian(0, 3) },
		"missing rows": func() { WeightedSum(a.Pix, nil, k) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			f()
		}()
	}
}

// Against scipy.signal.convolve2d (zero edge) and scipy.ndimage.convolve1d
// (nearest edge) in float64, live.
func TestAgainstScipy(t *testing.T) {
	dir := t.TempDir()
	src, kernel := noise(21, 70, 53), noise(22, 11, 7)
	kx, ky := noise(23, 11, 1).Pix, noise(24, 7, 1).Pix
	for name, data := range map[string][]float32{"src": src.Pix, "kernel": kernel.Pix, "kx": kx, "ky": ky} {
		var buf bytes.Buffer
		binary.Write(&buf, binary.LittleEndian, data)
		if err := os.WriteFile(filepath.Join(dir, name), buf.Bytes(), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	outside.Python(t, `
import sys, numpy, scipy.signal, scipy.ndimage
d = sys.argv[1] + '/'
r = lambda n: numpy.fromfile(d + n, '<f4').astype(float)
src, kernel, kx, ky = r('src').reshape(53, 70), r('kernel').reshape(7, 11), r('kx'), r('ky')
scipy.signal.convolve2d(src, kernel, mode='same').tofile(d + 'dense')
scipy.signal.convolve2d(src, numpy.outer(ky, kx), mode='same').tofile(d + 'separable')
near = scipy.ndimage.convolve1d(scipy.ndimage.convolve1d(src, kx, axis=1, mode='nearest'), ky, axis=0, mode='nearest')
near.tofile(d + 'nearest')
`, dir)
	got := frame.NewImage(70, 53)
	check := func(name string) {
		t.Helper()
		data, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		want := make([]float64, len(got.Pix))
		if err := binary.Read(bytes.NewReader(data), binary.LittleEndian, want); err != nil {
			t.Fatal(err)
		}
		compare(t, name, got.Pix, want)
	}
	Dense(got, src, kernel.Pix, 11, 7, Zero, nil)
	check("dense")
	Separable(got, src, kx, ky, Zero, nil)
	check("separable")
	Separable(got, src, kx, ky, Nearest, nil)
	check("nearest")
}

func BenchmarkSeparable21(b *testing.B) {
	src, dst := noise(1, 2048, 512), frame.NewImage(2048, 512)
	k := Gaussian(3, 10)
	var s Scratch
	for b.Loop() {
		Separable(dst, src, k, k, Zero, &s)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(src.Pix)), "ns/px")
}

func BenchmarkDense15(b *testing.B) {
	src, dst := noise(1, 2048, 256), frame.NewImage(2048, 256)
	k := noise(2, 15, 15).Pix
	var s Scratch
	for b.Loop() {
		Dense(dst, src, k, 15, 15, Zero, &s)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(src.Pix)), "ns/px")
}
