package load

import (
	"fmt"
	"math"

	"nightsift/internal/frame"
)

const maxFloat32 = math.MaxFloat32

var nan32 = float32(math.NaN())

// flagNoData flags pixels that are not finite, makes them NaN, and returns the
// lowest and highest of the others and their number.
func flagNoData(f *frame.Frame) (low, high float32, good int) {
	low, high = float32(math.Inf(1)), float32(math.Inf(-1))
	bad := 0
	for p, v := range f.Image.Pix {
		if !(v >= -maxFloat32 && v <= maxFloat32) {
			f.Image.Pix[p] = nan32
			f.Flags.Bits[p] |= frame.NoData
			bad++
			continue
		}
		if v < low {
			low = v
		}
		if v > high {
			high = v
		}
	}
	return low, high, len(f.Image.Pix) - bad
}

// flagSaturated flags what is at or above the saturation level, and the bleed
// trails. typeMax is the largest value the stored type can hold, NaN for
// floats; high is the largest pixel.
func flagSaturated(f *frame.Frame, typeMax float64, high float32) {
	level := f.Meta.Saturation
	if !math.IsNaN(typeMax) && float64(high) >= float64(float32(typeMax)) && !(level <= typeMax) {
		level = typeMax
		f.Meta.Saturation, f.Meta.Origin["saturation"] = level, "data type"
	}
	if math.IsNaN(level) {
		found, blocks := plateau(f, high)
		if math.IsNaN(found) {
			return
		}
		level = found
		f.Meta.Saturation, f.Meta.Origin["saturation"] = level, fmt.Sprintf("estimated: %d plateaus of bright stars", blocks)
	}
	if float64(high) < float64(float32(level)) {
		return
	}
	limit, any := float32(level), false
	for p, v := range f.Image.Pix {
		if v >= limit {
			f.Flags.Bits[p] |= frame.Saturated
			any = true
		}
	}
	if any {
		flagBleed(f.Flags)
	}
}

// flagBleed looks at each connected group of saturated pixels. The core of a
// star is about as wide as high; charge that bleeds makes the group long in
// one direction only. With d the longest run across and l the longest along,
// a group with l > 2 d + 3 bleeds: its runs along that are longer than d + 2
// are flagged, and d + 2 pixels beyond both ends, where the trail goes on
// without reaching saturation.
func flagBleed(m *frame.Mask) {
	width, height := m.Width, m.Height
	seen := make([]uint64, (len(m.Bits)+63)/64)
	saturated := func(i, j int) bool {
		return i >= 0 && j >= 0 && i < width && j < height && m.Bits[j*width+i]&frame.Saturated != 0
	}
	var group []int32
	var stack []int32
	for start, bits := range m.Bits {
		if bits&frame.Saturated == 0 || seen[start>>6]>>(start&63)&1 != 0 {
			continue
		}
		group, stack = group[:0], append(stack[:0], int32(start))
		seen[start>>6] |= 1 << (start & 63)
		for len(stack) > 0 {
			p := int(stack[len(stack)-1])
			stack = stack[:len(stack)-1]
			group = append(group, int32(p))
			i, j := p%width, p/width
			for dj := -1; dj <= 1; dj++ {
				for di := -1; di <= 1; di++ {
					if !saturated(i+di, j+dj) {
						continue
					}
					q := (j+dj)*width + i + di
					if seen[q>>6]>>(q&63)&1 == 0 {
						seen[q>>6] |= 1 << (q & 63)
						stack = append(stack, int32(q))
					}
				}
			}
		}
		var longest [2]int // along x, along y
		for dir := range longest {
			runs(group, width, dir, saturated, func(_, _, n int) { longest[dir] = max(longest[dir], n) })
		}
		for dir := range longest {
			along, across := longest[dir], longest[1-dir]
			if along <= 2*across+3 {
				continue
			}
			runs(group, width, dir, saturated, func(i, j, n int) {
				if n <= across+2 {
					return
				}
				for k := -(across + 2); k < n+across+2; k++ {
					x, y := i+k, j
					if dir == 1 {
						x, y = i, j+k
					}
					if x >= 0 && y >= 0 && x < width && y < height {
						m.Bits[y*width+x] |= frame.Bleed
					}
				}
			})
		}
	}
}

// runs calls visit for each run of saturated pixels in a group, along x (dir
// 0) or y (dir 1), with its first pixel and length.
func runs(group []int32, width, dir int, saturated func(i, j int) bool, visit func(i, j, n int)) {
	di, dj := 1-dir, dir
	for _, p := range group {
		i, j := int(p)%width, int(p)/width
		if saturated(i-di, j-dj) {
			continue
		}
		n := 1
		for saturated(i+n*di, j+n*dj) {
			n++
		}
		visit(i, j, n)
	}
}
