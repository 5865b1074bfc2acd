package fft

import "fmt"

func same(n int, others ...int) {
	for _, m := range others {
		if m != n {
			panic(fmt.Sprintf("fft: spectra of %d and %d values do not go together", n, m))
		}
	}
}

// Multiply sets dst = a·b, value by value: the spectrum of the circular
// convolution. dst may be a or b. It panics if the lengths differ.
func Multiply(dst, a, b []complex64) {
	same(len(dst), len(a), len(b))
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		ar, ai := real(a[i]), imag(a[i])
		br, bi := real(b[i]), imag(b[i])
		dst[i] = complex(ar*br-ai*bi, ar*bi+ai*br)
	}
}

// MultiplyConj sets dst = a·conj(b): the spectrum of the circular correlation,
// Σ a(x+t)·b(x) at shift t. dst may be a or b. It panics if the lengths differ.
func MultiplyConj(dst, a, b []complex64) {
	same(len(dst), len(a), len(b))
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		ar, ai := real(a[i]), imag(a[i])
		br, bi := real(b[i]), imag(b[i])
		dst[i] = complex(ar*br+ai*bi, ai*br-ar*bi)
	}
}

// MultiplyAdd sets dst = dst + a·b. dst may be a or b. It panics if the
// lengths differ.
func MultiplyAdd(dst, a, b []complex64) {
	same(len(dst), len(a), len(b))
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		ar, ai := real(a[i]), imag(a[i])
		br, bi := real(b[i]), imag(b[i])
		dst[i] = complex(real(dst[i])+(ar*br-ai*bi), imag(dst[i])+(ar*bi+ai*br))
	}
}

// AddScaled sets dst = dst + scale·a. dst may be a. It panics if the lengths
// differ.
func AddScaled(dst []complex64, scale float32, a []complex64) {
	same(len(dst), len(a))
	a = a[:len(dst)]
	for i := range dst {
		dst[i] = complex(real(dst[i])+scale*real(a[i]), imag(dst[i])+scale*imag(a[i]))
	}
}

// Scale multiplies every value of dst by a real factor.
func Scale(dst []complex64, scale float32) {
	for i, v := range dst {
		dst[i] = complex(scale*real(v), scale*imag(v))
	}
}

// EmbedKernel writes a k×k kernel, k odd, in row order with its centre at
// element (k/2,k/2), into a tile of the plan's size, so that the kernel's
// centre lies at pixel (0,0) of the tile and the rest is wrapped around: the
// form in which Multiply of the spectra convolves without a shift. The rest of
// the tile is set to zero. It panics if the kernel does not fit.
func EmbedKernel(p *Plan, tile, kernel []float32, k int) {
	if k < 1 || k%2 == 0 || len(kernel) != k*k {
		panic(fmt.Sprintf("fft: kernel of %d values is not k×k with odd k = %d", len(kernel), k))
	}
	if k > p.Height || k > p.Width {
		panic(fmt.Sprintf("fft: kernel of %dx%d does not fit a tile of %dx%d", k, k, p.Height, p.Width))
	}
	if len(tile) != p.TileLen() {
		panic(fmt.Sprintf("fft: tile has %d pixels, want %dx%d", len(tile), p.Height, p.Width))
	}
	clear(tile)
	c := k / 2
	for j := 0; j < k; j++ {
		row := tile[(j-c+p.Height)%p.Height*p.Width:][:p.Width]
		copy(row, kernel[j*k+c:(j+1)*k])
		copy(row[p.Width-c:], kernel[j*k:j*k+c])
	}
}
