package subtract

import (
	"math"

	"nightsift/internal/frame"
)

// growFlags carries flags through a convolution by the weight that a flagged
// pixel has in its surroundings: a pixel of out gets the bits of a flagged
// pixel of in when that pixel could change it by more than tolerance times the
// noise. amplitude is what the flagged pixel's value may be wrong by [count of
// the convolved frame before the kernel]; kernelAt gives the kernel around a
// FITS position, side 2·half+1; noise [count] is that of the result.
//
// Only the rim of a flagged region is followed: what lies deeper inside is
// farther from every pixel without a flag.
func growFlags(out, in *frame.Mask, amplitude func(i, j int, bits frame.Flag) float64,
	kernelAt func(dst []float64, x, y float64) []float64, half int, noise float64) {
	const (
		tolerance = 0.5
		cell      = 128
		rim       = 2
	)
	w, h := in.Width, in.Height
	side := 2*half + 1
	var kernel []float64
	beyond := make([]float64, half+1) // largest absolute kernel at a distance of r or more along either axis
	for cy := 0; cy < h; cy += cell {
		for cx := 0; cx < w; cx += cell {
			ready := false
			for j := cy; j < min(h, cy+cell); j++ {
				row := in.Row(j)
				for i := cx; i < min(w, cx+cell); i++ {
					bits := row[i] & frame.Unusable
					if bits == 0 || !onRim(in, i, j, rim) {
						continue
					}
					if !ready {
						kernel = kernelAt(kernel, float64(cx)+cell/2, float64(cy)+cell/2)
						largestBeyond(beyond, kernel, half)
						ready = true
					}
					a := math.Abs(amplitude(i, j, bits))
					reach := half
					for reach >= 0 && !(a*beyond[reach] > tolerance*noise) {
						reach--
					}
					for v := max(0, j-reach); v <= min(h-1, j+reach); v++ {
						krow := kernel[(v-j+half)*side : (v-j+half+1)*side]
						orow := out.Row(v)
						for u := max(0, i-reach); u <= min(w-1, i+reach); u++ {
							if a*math.Abs(krow[u-i+half]) > tolerance*noise {
								orow[u] |= bits
							}
						}
					}
				}
			}
		}
	}
}

// largestBeyond fills dst[r] with the largest absolute value of a kernel at a
// distance of at least r pixels along either axis.
func largestBeyond(dst, kernel []float64, half int) {
	clear(dst)
	side := 2*half + 1
	for v := range side {
		for u := range side {
			r := max(abs(u-half), abs(v-half))
			dst[r] = max(dst[r], math.Abs(kernel[v*side+u]))
		}
	}
	for r := half - 1; r >= 0; r-- {
		dst[r] = max(dst[r], dst[r+1])
	}
}

// onRim reports whether a pixel without an unusable flag lies within reach.
func onRim(m *frame.Mask, i, j, reach int) bool {
	for v := max(0, j-reach); v <= min(m.Height-1, j+reach); v++ {
		row := m.Row(v)
		for u := max(0, i-reach); u <= min(m.Width-1, i+reach); u++ {
			if row[u]&frame.Unusable == 0 {
				return true
			}
		}
	}
	return false
}

// dilate sets bit in all eight neighbours of pixels that have it.
func dilate(m *frame.Mask, bit frame.Flag) {
	w, h := m.Width, m.Height
	above := make([]bool, w)
	here := make([]bool, w)
	below := make([]bool, w)
	read := func(dst []bool, j int) {
		if j >= h {
			clear(dst)
			return
		}
		for i, b := range m.Row(j) {
			dst[i] = b&bit != 0
		}
	}
	read(here, 0)
	for j := range h {
		read(below, j+1)
		row := m.Row(j)
		for i := range row {
			lo, hi := max(0, i-1), min(w-1, i+1)
			if above[i] || above[lo] || above[hi] || here[i] || here[lo] || here[hi] || below[i] || below[lo] || below[hi] {
				row[i] |= bit
			}
		}
		above, here, below = here, below, above
	}
}

// growSquares marks everything within reach pixels of a mark along both axes.
func growSquares(marks []bool, width, height, reach int) {
	line := make([]bool, width)
	for y := range height {
		row := marks[y*width : (y+1)*width]
		copy(line, row)
		last := -reach - 1 // last mark to the left
		next := 0          // marks up to here have been looked at
		for x := range row {
			for next < width && next <= x+reach {
				if line[next] {
					last = next
				}
				next++
			}
			row[x] = last >= x-reach
		}
	}
	// Along y: how many marked rows lie within reach, column by column.
	count := make([]int, width)
	whole := append([]bool(nil), marks...)
	for y := -reach; y < height; y++ {
		if in := y + reach; in < height {
			for x, m := range whole[in*width : (in+1)*width] {
				if m {
					count[x]++
				}
			}
		}
		if out := y - reach - 1; out >= 0 {
			for x, m := range whole[out*width : (out+1)*width] {
				if m {
					count[x]--
				}
			}
		}
		if y >= 0 {
			row := marks[y*width : (y+1)*width]
			for x, c := range count {
				row[x] = c > 0
			}
		}
	}
}

// markEdges sets Edge in a band around the frame.
func markEdges(m *frame.Mask, band int) {
	for j := range m.Height {
		row := m.Row(j)
		for i := range row {
			if j < band || j >= m.Height-band || i < band || i >= m.Width-band {
				row[i] |= frame.Edge
			}
		}
	}
}

// reachOf returns the radius [px] of the square outside of which the kernel
// has less than the given part of its absolute sum.
func reachOf(kernel []float64, half int, part float64) int {
	n := 2*half + 1
	sums := make([]float64, half+1)
	all := 0.0
	for j := range n {
		for i := range n {
			r := max(abs(i-half), abs(j-half))
			v := math.Abs(kernel[j*n+i])
			sums[r] += v
			all += v
		}
	}
	outside := 0.0
	for r := half; r > 0; r-- {
		outside += sums[r]
		if outside > part*all {
			return r
		}
	}
	return 0
}

func abs(i int) int {
	if i < 0 {
		return -i
	}
	return i
}
