// Package convolve convolves float32 planes with small kernels directly, by
// one inner loop: the weighted sum of a few rows.
//
// # Convention
//
// A kernel of width kw and height kh (both odd) has its centre at element
// (kw/2, kh/2), counted from 0, in row order. The result is a convolution, not
// a correlation:
//
//	dst(i,j) = Σ_b Σ_a kernel(a,b) · src(i - a + kw/2, j - b + kh/2)
//
// so that an impulse becomes a copy of the kernel as it is written. What lies
// beyond the edge of the plane is set by Edge. A NaN in src spoils every pixel
// whose footprint it touches, and no other.
//
// Direct convolution suits kernels up to about 15 pixels; for larger ones, and
// for many kernels on one plane, see package fft.
package convolve

import (
	"fmt"

	"nightsift/internal/frame"
)

// Edge says what a plane continues as beyond its border.
type Edge int

const (
	// Zero continues the plane with zeros: the choice for a plane whose sky
	// is subtracted.
	Zero Edge = iota
	// Nearest repeats the nearest pixel of the border: the choice for smooth
	// planes such as a sky or a variance.
	Nearest
)

// Scratch holds the rows in flight. It grows to the largest width used and is
// meant to be kept between calls; one Scratch a goroutine. The zero value is
// ready.
type Scratch struct {
	rows   []float32 // ring of padded or filtered rows
	padded []float32
	list   [][]float32
}

func (s *Scratch) need(rows, padded, list int) {
	if len(s.rows) < rows {
		s.rows = make([]float32, rows)
	}
	if len(s.padded) < padded {
		s.padded = make([]float32, padded)
	}
	if cap(s.list) < list {
		s.list = make([][]float32, list)
	}
}

// Separable sets dst to the convolution of src with the kernel ky(b)·kx(a).
// The lengths of kx and ky are odd. dst may be src. scratch may be nil; then
// memory is taken for the call. It panics if the shapes differ or a length is
// even.
func Separable(dst, src *frame.Image, kx, ky []float32, edge Edge, scratch *Scratch) {
	check(dst, src, len(kx), len(ky))
	if scratch == nil {
		scratch = new(Scratch)
	}
	w, h := src.Width, src.Height
	if w == 0 || h == 0 {
		return
	}
	rx, ry, n := len(kx)/2, len(ky)/2, len(ky)
	scratch.need((n+1)*w, w+2*rx, max(n, len(kx)))
	zeros := scratch.rows[n*w : (n+1)*w]
	clear(zeros)
	rx0 := reversed(kx)
	ry0 := reversed(ky)
	list := scratch.list[:cap(scratch.list)]

	// The ring holds filtered rows j-ry … j+ry: row t at slot t mod n. A row of
	// src is read before the same row of dst is written, so dst may be src.
	filter := func(t int) {
		padded := scratch.padded[:w+2*rx]
		pad(padded, src.Row(t), rx, edge)
		for a := range kx {
			list[a] = padded[a:][:w]
		}
		WeightedSum(scratch.rows[t%n*w:][:w], list[:len(kx)], rx0)
	}
	next := 0
	for j := 0; j < h; j++ {
		for ; next < h && next <= j+ry; next++ {
			filter(next)
		}
		for b := range ky {
			t := j + b - ry
			switch {
			case t >= 0 && t < h:
			case edge == Zero:
				list[b] = zeros
				continue
			default:
				t = min(max(t, 0), h-1)
			}
			list[b] = scratch.rows[t%n*w:][:w]
		}
		WeightedSum(dst.Row(j), list[:n], ry0)
	}
}

// Dense sets dst to the convolution of src with a kernel of kw columns and kh
// rows, in row order, both odd. dst must not be src. scratch may be nil. It
// panics if the shapes differ, a size is even or dst is src.
func Dense(dst, src *frame.Image, kernel []float32, kw, kh int, edge Edge, scratch *Scratch) {
	check(dst, src, kw, kh)
	if len(kernel) != kw*kh {
		panic(fmt.Sprintf("convolve: kernel has %d values, want %dx%d", len(kernel), kw, kh))
	}
	w, h := src.Width, src.Height
	if w == 0 || h == 0 {
		return
	}
	if &dst.Pix[0] == &src.Pix[0] {
		panic("convolve: Dense cannot work in place")
	}
	if scratch == nil {
		scratch = new(Scratch)
	}
	rx, ry := kw/2, kh/2
	pw := w + 2*rx
	scratch.need(kh*pw, 0, kw*kh)
	weights := reversed(kernel) // both axes turned round
	list := scratch.list[:cap(scratch.list)]
	used := make([]float32, 0, kw*kh)
	next := 0
	for j := 0; j < h; j++ {
		for ; next < h && next <= j+ry; next++ {
			pad(scratch.rows[next%kh*pw:][:pw], src.Row(next), rx, edge)
		}
		used = used[:0]
		for b := 0; b < kh; b++ {
			t := j + b - ry
			if t < 0 || t >= h {
				if edge == Zero {
					continue
				}
				t = min(max(t, 0), h-1)
			}
			row := scratch.rows[t%kh*pw:][:pw]
			for a := 0; a < kw; a++ {
				list[len(used)] = row[a:][:w]
				used = append(used, weights[b*kw+a])
			}
		}
		WeightedSum(dst.Row(j), list[:len(used)], used)
	}
}

func check(dst, src *frame.Image, kw, kh int) {
	if !dst.SameShape(src) {
		panic(fmt.Sprintf("convolve: dst is %dx%d, want %dx%d", dst.Width, dst.Height, src.Width, src.Height))
	}
	if kw%2 == 0 || kh%2 == 0 {
		panic(fmt.Sprintf("convolve: kernel of %dx%d has no centre pixel: want odd sizes", kw, kh))
	}
}

func reversed(k []float32) []float32 {
	r := make([]float32, len(k))
	for i, v := range k {
		r[len(k)-1-i] = v
	}
	return r
}

// pad copies row between two margins of r pixels.
func pad(dst, row []float32, r int, edge Edge) {
	var left, right float32
	if edge == Nearest {
		left, right = row[0], row[len(row)-1]
	}
	for i := 0; i < r; i++ {
		dst[i] = left
		dst[len(dst)-1-i] = right
	}
	copy(dst[r:], row)
}

// WeightedSum sets dst[i] = Σ_k weights[k]·rows[k][i]. Rows of length len(dst)
// or more are read up to that length. dst must not overlap a row. Without rows
// dst becomes zero. It panics if there are fewer rows than weights, or a row is
// short.
//
// Eight rows are taken at a time, two pixels at once, so that a pixel of dst is
// loaded and stored once in eight products.
func WeightedSum(dst []float32, rows [][]float32, weights []float32) {
	n := len(dst)
	if n == 0 {
		return
	}
	first := true
	k := 0
	for ; k+8 <= len(weights); k += 8 {
		sum8(dst, (*[8][]float32)(rows[k:k+8]), (*[8]float32)(weights[k:k+8]), first)
		first = false
	}
	for ; k+4 <= len(weights); k += 4 {
		sum4(dst, (*[4][]float32)(rows[k:k+4]), (*[4]float32)(weights[k:k+4]), first)
		first = false
	}
	for ; k < len(weights); k++ {
		w, r := weights[k], rows[k][:n]
		if first {
			for i, v := range r {
				dst[i] = w * v
			}
			first = false
			continue
		}
		for i, v := range r {
			dst[i] += w * v
		}
	}
	if first {
		clear(dst)
	}
}

func sum8(dst []float32, rows *[8][]float32, w *[8]float32, first bool) {
	n := len(dst)
	r0, r1, r2, r3 := rows[0][:n], rows[1][:n], rows[2][:n], rows[3][:n]
	r4, r5, r6, r7 := rows[4][:n], rows[5][:n], rows[6][:n], rows[7][:n]
	w0, w1, w2, w3, w4, w5, w6, w7 := w[0], w[1], w[2], w[3], w[4], w[5], w[6], w[7]
	if first {
		for i := range dst {
			a := w0*r0[i] + w1*r1[i]
			b := w2*r2[i] + w3*r3[i]
			c := w4*r4[i] + w5*r5[i]
			d := w6*r6[i] + w7*r7[i]
			dst[i] = (a + b) + (c + d)
		}
		return
	}
	for i := range dst {
		a := w0*r0[i] + w1*r1[i]
		b := w2*r2[i] + w3*r3[i]
		c := w4*r4[i] + w5*r5[i]
		d := w6*r6[i] + w7*r7[i]
		dst[i] += (a + b) + (c + d)
	}
}

func sum4(dst []float32, rows *[4][]float32, w *[4]float32, first bool) {
	n := len(dst)
	r0, r1, r2, r3 := rows[0][:n], rows[1][:n], rows[2][:n], rows[3][:n]
	w0, w1, w2, w3 := w[0], w[1], w[2], w[3]
	if first {
		for i := range dst {
			dst[i] = (w0*r0[i] + w1*r1[i]) + (w2*r2[i] + w3*r3[i])
		}
		return
	}
	for i := range dst {
		dst[i] += (w0*r0[i] + w1*r1[i]) + (w2*r2[i] + w3*r3[i])
	}
}
