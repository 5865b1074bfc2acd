package fft

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"

	"nightsift/internal/outside"
)

// sizes are height, width: powers of two, every radix, odd lengths, 1, and the
// extremes of shape.
var sizes = [][2]int{
	{1, 1}, {1, 2}, {2, 1}, {2, 2}, {3, 4}, {5, 6}, {4, 8}, {8, 3}, {9, 5}, {7 + 1, 10},
	{16, 16}, {15, 45}, {25, 27}, {12, 30}, {17 - 1, 75}, {32, 64}, {64, 64}, {60, 72},
	{64, 128}, {125, 81}, {81, 250}, {100, 120}, {128, 128}, {160, 144}, {240, 256},
	{256, 256}, {300, 270}, {320, 384}, {512, 256}, {243, 375}, {512, 512}, {1, 512}, {512, 1},
}

func noise(seed uint64, n int) []float32 {
	r := rand.New(rand.NewPCG(seed, 7))
	x := make([]float32, n)
	for i := range x {
		x[i] = float32(r.NormFloat64())
	}
	return x
}

// truth is the same transform in float64 by gonum: rows, then columns.
func truth(x []float32, height, width int) []complex128 {
	half := width/2 + 1
	out := make([]complex128, height*half)
	rows := fourier.NewFFT(width)
	row := make([]float64, width)
	for j := 0; j < height; j++ {
		for i := range row {
			row[i] = float64(x[j*width+i])
		}
		rows.Coefficients(out[j*half:(j+1)*half], row)
	}
	columns := fourier.NewCmplxFFT(height)
	col := make([]complex128, height)
	for u := 0; u < half; u++ {
		for j := range col {
			col[j] = out[j*half+u]
		}
		columns.Coefficients(col, col)
		for j := range col {
			out[j*half+u] = col[j]
		}
	}
	return out
}

// relative returns the root mean square and the largest difference, both
// relative to the root mean square of want.
func relative(got []complex64, want []complex128) (rms, worst float64) {
	var d2, w2 float64
	for i, w := range want {
		d := cmplx.Abs(complex128(got[i]) - w)
		d2 += d * d
		w2 += real(w)*real(w) + imag(w)*imag(w)
		worst = max(worst, d)
	}
	scale := math.Sqrt(w2 / float64(len(want)))
	return math.Sqrt(d2/float64(len(want))) / scale, worst / scale
}

// guarded returns a slice of n values between canaries, and a check of them.
func guarded[T comparable](n int, canary T) ([]T, func() bool) {
	buf := make([]T, n+64)
	for i := range buf {
		buf[i] = canary
	}
	return buf[32 : 32+n : 32+n], func() bool {
		for i := range 32 {
			if buf[i] != canary || buf[32+n+i] != canary {
				return false
			}
		}
		return true
	}
}

func TestAgainstFloat64(t *testing.T) {
	for _, size := range sizes {
		h, w := size[0], size[1]
		p := NewPlan(h, w)
		for pass := range 2 { // the second pass uses the plan again
			x := noise(uint64(h*1000+w+pass), h*w)
			kept := append([]float32(nil), x...)
			spec, intact := guarded(p.SpectrumLen(), complex64(complex(1e30, -1e30)))
			p.Forward(spec, x)
			if rms, worst := relative(spec, truth(x, h, w)); rms > 5e-7 || worst > 3e-6 {
				t.Errorf("%dx%d pass %d: forward differs from gonum by %.2g rms, %.2g at worst, of the spectrum's rms", h, w, pass, rms, worst)
			}
			for i := range x {
				if x[i] != kept[i] {
					t.Fatalf("%dx%d: Forward changed its input at %d", h, w, i)
				}
			}
			back, intactBack := guarded(h*w, float32(1e30))
			p.Inverse(back, spec)
			var worst float64
			for i := range x {
				worst = max(worst, math.Abs(float64(back[i]-x[i])))
			}
			if worst > 3e-6 {
				t.Errorf("%dx%d: there and back differs by %.2g from noise of rms 1", h, w, worst)
			}
			if !intact() || !intactBack() {
				t.Fatalf("%dx%d: wrote outside its slice", h, w)
			}
		}
	}
}

// Every length that one axis of a tile can have, with a few rows or columns.
func TestEveryLength(t *testing.T) {
	tested := 0
	for n := 1; n <= 512; n++ {
		if !Supported(n) {
			continue
		}
		for _, size := range [][2]int{{n, 5}, {3, n}, {n, 16}, {8, n}} {
			h, w := size[0], size[1]
			x := noise(uint64(n), h*w)
			p := NewPlan(h, w)
			spec := make([]complex64, p.SpectrumLen())
			p.Forward(spec, x)
			if rms, worst := relative(spec, truth(x, h, w)); rms > 5e-7 || worst > 3e-6 {
				t.Errorf("%dx%d: differs from gonum by %.2g rms, %.2g at worst", h, w, rms, worst)
			}
			back := make([]float32, h*w)
			p.Inverse(back, spec)
			for i := range x {
				if math.Abs(float64(back[i]-x[i])) > 3e-6 {
					t.Fatalf("%dx%d: there and back gives %g at %d, want %g", h, w, back[i], i, x[i])
				}
			}
			tested++
		}
	}
	if tested < 200 {
		t.Errorf("only %d shapes tested", tested)
	}
}

// The definition itself: an impulse at (i,j) has the spectrum
// exp(-2πi (u·i/width + v·j/height)).
func TestImpulses(t *testing.T) {
	for _, size := range [][2]int{{8, 8}, {6, 10}, {9, 15}, {16, 32}} {
		h, w := size[0], size[1]
		p := NewPlan(h, w)
		spec := make([]complex64, p.SpectrumLen())
		x := make([]float32, h*w)
		for at := range x {
			clear(x)
			x[at] = 1
			p.Forward(spec, x)
			i, j := at%w, at/w
			for v := 0; v < h; v++ {
				for u := 0; u <= w/2; u++ {
					a := -2 * math.Pi * (float64(u*i)/float64(w) + float64(v*j)/float64(h))
					want := cmplx.Exp(complex(0, a))
					if got := complex128(spec[v*p.SpectrumWidth()+u]); cmplx.Abs(got-want) > 1e-6 {
						t.Fatalf("%dx%d impulse at (%d,%d): F(%d,%d) = %v, want %v", h, w, i, j, u, v, got, want)
					}
				}
			}
		}
	}
}

func TestConstantAndParseval(t *testing.T) {
	for _, size := range sizes {
		h, w := size[0], size[1]
		p := NewPlan(h, w)
		x := make([]float32, h*w)
		for i := range x {
			x[i] = 3
		}
		spec := make([]complex64, p.SpectrumLen())
		p.Forward(spec, x)
		for i, s := range spec {
			want := complex64(0)
			if i == 0 {
				want = complex(float32(3*h*w), 0)
			}
			if cmplx.Abs(complex128(s-want)) > 1e-6*float64(3*h*w) {
				t.Fatalf("%dx%d: constant tile has F[%d] = %v, want %v", h, w, i, s, want)
			}
		}
		x = noise(3, h*w)
		p.Forward(spec, x)
		var space, freq float64
		for _, v := range x {
			space += float64(v) * float64(v)
		}
		for i, s := range spec {
			u := i % p.SpectrumWidth()
			e := float64(real(s))*float64(real(s)) + float64(imag(s))*float64(imag(s))
			if u != 0 && !(w%2 == 0 && u == w/2) {
				e *= 2 // its conjugate is not stored
			}
			freq += e
		}
		freq /= float64(h * w)
		if math.Abs(freq-space) > 1e-6*space {
			t.Errorf("%dx%d: energy %g in the spectrum, %g in the tile", h, w, freq, space)
		}
	}
}

// A fine structure on a high pedestal, as an image that still has its sky.
func TestPedestal(t *testing.T) {
	p := NewPlan(256, 256)
	x := noise(11, 256*256)
	for i := range x {
		x[i] += 1000
	}
	spec := make([]complex64, p.SpectrumLen())
	p.Forward(spec, x)
	back := make([]float32, len(x))
	p.Inverse(back, spec)
	for i := range x {
		if d := math.Abs(float64(back[i] - x[i])); d > 2e-3 {
			t.Fatalf("pixel %d: %g came back as %g", i, x[i], back[i])
		}
	}
}

// NaN must stay visible: it spoils the whole tile and is not turned into a number.
func TestNaN(t *testing.T) {
	p := NewPlan(16, 16)
	x := noise(5, 256)
	x[100] = float32(math.NaN())
	spec := make([]complex64, p.SpectrumLen())
	p.Forward(spec, x)
	back := make([]float32, 256)
	p.Inverse(back, spec)
	for i, v := range back {
		if v == v {
			t.Fatalf("pixel %d is %g, want NaN", i, v)
		}
	}
}

// A clone and its original must not share scratch.
func TestCloneConcurrently(t *testing.T) {
	p := NewPlan(64, 64)
	x := noise(9, 64*64)
	want := make([]complex64, p.SpectrumLen())
	p.Forward(want, x)
	done := make(chan bool)
	for range 4 {
		c := p.Clone()
		go func() {
			ok := true
			spec := make([]complex64, c.SpectrumLen())
			for range 20 {
				c.Forward(spec, x)
				for i := range spec {
					ok = ok && spec[i] == want[i]
				}
			}
			done <- ok
		}()
	}
	for range 4 {
		if !<-done {
			t.Error("a clone gave another result")
		}
	}
}

func TestEmbedKernelConvolves(t *testing.T) {
	for _, size := range [][3]int{{16, 20, 7}, {9, 9, 9}, {15, 12, 1}, {8, 30, 5}} {
		h, w, k := size[0], size[1], size[2]
		p := NewPlan(h, w)
		x, kernel := noise(1, h*w), noise(2, k*k)
		tile := make([]float32, h*w)
		EmbedKernel(p, tile, kernel, k)
		a, b := make([]complex64, p.SpectrumLen()), make([]complex64, p.SpectrumLen())
		p.Forward(a, x)
		p.Forward(b, tile)
		conv, corr := make([]complex64, len(a)), make([]complex64, len(a))
		Multiply(conv, a, b)
		MultiplyConj(corr, a, b)
		gotConv, gotCorr := make([]float32, h*w), make([]float32, h*w)
		p.Inverse(gotConv, conv)
		p.Inverse(gotCorr, corr)
		c := k / 2
		for j := 0; j < h; j++ {
			for i := 0; i < w; i++ {
				var sum, cross float64
				for dj := -c; dj <= c; dj++ {
					for di := -c; di <= c; di++ {
						kv := float64(kernel[(dj+c)*k+di+c])
						sum += kv * float64(x[(j-dj+h)%h*w+(i-di+w)%w])
						cross += kv * float64(x[(j+dj+h)%h*w+(i+di+w)%w])
					}
				}
				if math.Abs(sum-float64(gotConv[j*w+i])) > 2e-5 || math.Abs(cross-float64(gotCorr[j*w+i])) > 2e-5 {
					t.Fatalf("%dx%d kernel %d at (%d,%d): convolution %g, want %g; correlation %g, want %g",
						h, w, k, i, j, gotConv[j*w+i], sum, gotCorr[j*w+i], cross)
				}
			}
		}
	}
}

func TestSpectrumHelpers(t *testing.T) {
	const n = 37
	mk := func(seed uint64) []complex64 {
		v := noise(seed, 2*n)
		out := make([]complex64, n)
		for i := range out {
			out[i] = complex(v[2*i], v[2*i+1])
		}
		return out
	}
	a, b, d := mk(1), mk(2), mk(3)
	near := func(what string, got []complex64, want func(i int) complex128) {
		t.Helper()
		for i := range got {
			if cmplx.Abs(complex128(got[i])-want(i)) > 2e-6 {
				t.Errorf("%s: value %d is %v, want %v", what, i, got[i], want(i))
			}
		}
	}
	A := func(i int) complex128 { return complex128(a[i]) }
	B := func(i int) complex128 { return complex128(b[i]) }
	D := func(i int) complex128 { return complex128(d[i]) }
	copyOf := func(x []complex64) []complex64 { return append([]complex64(nil), x...) }
	got := copyOf(a)
	Multiply(got, got, b)
	near("Multiply in place", got, func(i int) complex128 { return A(i) * B(i) })
	got = copyOf(b)
	MultiplyConj(got, a, got)
	near("MultiplyConj in place", got, func(i int) complex128 { return A(i) * cmplx.Conj(B(i)) })
	got = copyOf(d)
	MultiplyAdd(got, a, b)
	near("MultiplyAdd", got, func(i int) complex128 { return D(i) + A(i)*B(i) })
	got = copyOf(d)
	AddScaled(got, -0.75, a)
	near("AddScaled", got, func(i int) complex128 { return D(i) - 0.75*A(i) })
	got = copyOf(d)
	Scale(got, 0.5)
	near("Scale", got, func(i int) complex128 { return D(i) * 0.5 })
}

func TestMistakesPanic(t *testing.T) {
	p := NewPlan(8, 8)
	for name, f := range map[string]func(){
		"length 7":       func() { NewPlan(7, 8) },
		"length 0":       func() { NewPlan(8, 0) },
		"short spectrum": func() { p.Forward(make([]complex64, 39), make([]float32, 64)) },
		"long tile":      func() { p.Inverse(make([]float32, 65), make([]complex64, 40)) },
		"multiply":       func() { Multiply(make([]complex64, 2), make([]complex64, 3), make([]complex64, 2)) },
		"even kernel":    func() { EmbedKernel(p, make([]float32, 64), make([]float32, 4), 2) },
		"wide kernel":    func() { EmbedKernel(p, make([]float32, 64), make([]float32, 81), 9) },
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
	if NextFast(257) != 270 || NextFast(256) != 256 || NextFast(1) != 2 || NextFast(511) != 512 {
		t.Errorf("NextFast: %d %d %d %d", NextFast(257), NextFast(256), NextFast(1), NextFast(511))
	}
}

// Against scipy.fft.rfft2 in float64, live.
func TestAgainstScipy(t *testing.T) {
	dir := t.TempDir()
	shapes := [][2]int{{64, 64}, {256, 256}, {90, 75}, {243, 500}, {512, 320}}
	var args []string
	for k, s := range shapes {
		var buf bytes.Buffer
		binary.Write(&buf, binary.LittleEndian, noise(uint64(100+k), s[0]*s[1]))
		name := filepath.Join(dir, fmt.Sprint(k))
		if err := os.WriteFile(name, buf.Bytes(), 0o644); err != nil {
			t.Fatal(err)
		}
		args = append(args, fmt.Sprint(s[0]), fmt.Sprint(s[1]), name)
	}
	outside.Python(t, `
import sys, numpy, scipy.fft
a = sys.argv[1:]
for h, w, name in zip(a[0::3], a[1::3], a[2::3]):
    x = numpy.fromfile(name, '<f4').astype(float).reshape(int(h), int(w))
    scipy.fft.rfft2(x).astype('<c16').tofile(name + '.out')
`, args...)
	for k, s := range shapes {
		data, err := os.ReadFile(filepath.Join(dir, fmt.Sprint(k)+".out"))
		if err != nil {
			t.Fatal(err)
		}
		p := NewPlan(s[0], s[1])
		want := make([]complex128, p.SpectrumLen())
		if len(data) != 16*len(want) {
			t.Fatalf("%v: scipy's half spectrum has %d bytes, want %d", s, len(data), 16*len(want))
		}
		if err := binary.Read(bytes.NewReader(data), binary.LittleEndian, want); err != nil {
			t.Fatal(err)
		}
		got := make([]complex64, p.SpectrumLen())
		p.Forward(got, noise(uint64(100+k), s[0]*s[1]))
		rms, worst := relative(got, want)
		t.Logf("%v: %.2g rms, %.2g at worst", s, rms, worst)
		if rms > 3e-7 || worst > 3e-6 {
			t.Errorf("%v: differs from scipy by %.2g rms, %.2g at worst", s, rms, worst)
		}
	}
}

func BenchmarkRoundTrip(b *testing.B) {
	for _, size := range [][2]int{{64, 64}, {128, 128}, {256, 256}, {512, 512}, {240, 240}, {300, 300}, {243, 243}} {
		b.Run(fmt.Sprintf("%dx%d", size[0], size[1]), func(b *testing.B) {
			p := NewPlan(size[0], size[1])
			x := noise(1, p.TileLen())
			spec := make([]complex64, p.SpectrumLen())
			for b.Loop() {
				p.Forward(spec, x)
				p.Inverse(x, spec)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(p.TileLen()), "ns/px")
		})
	}
}

func BenchmarkMultiply(b *testing.B) {
	p := NewPlan(256, 256)
	x, y := make([]complex64, p.SpectrumLen()), make([]complex64, p.SpectrumLen())
	for b.Loop() {
		Multiply(x, x, y)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(p.TileLen()), "ns/px")
}
