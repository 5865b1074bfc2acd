package artefacts

import (
	"slices"

	"nightsift/internal/frame"
)

// plateaus finds saturated pixels that carry no flag: neighbours at one and the
// same value above everything around them. Photon noise makes three equal
// neighbours of a bright pixel very unlikely; a detector or converter that is
// full makes them the rule. What is connected to such a plateau and within
// three in a hundred of it is full, too. Groups that are long in one direction
// only are charge that bled.
func (f *finder) plateaus() {
	counts := f.img
	if f.in.Counts != nil {
		counts = f.in.Counts.Pix
	}
	w := f.w
	const bright = 20 * 20 // sigma²
	var seeds []int32
	for j := 1; j < f.h-1; j++ {
		row := f.img[j*w : (j+1)*w]
		vrow := f.vari[j*w : (j+1)*w][:len(row)]
		for i := 1; i < len(row)-1; i++ {
			c := row[i]
			if !(c*c > bright*vrow[i]) || c < 0 {
				continue
			}
			k := j*w + i
			if !f.usable(k) {
				continue
			}
			v := counts[k]
			same := 0
			for _, n := range [8]int{k - w - 1, k - w, k - w + 1, k - 1, k + 1, k + w - 1, k + w, k + w + 1} {
				if counts[n] == v {
					same++
				}
			}
			if same >= 3 {
				seeds = append(seeds, int32(k))
			}
		}
	}
	if len(seeds) == 0 {
		return
	}
	var group, stack []int32
	var levels []float64
	done := make(map[int32]bool)
	for _, s := range seeds {
		if f.bits[s]&frame.Saturated != 0 || done[s] {
			continue
		}
		level := counts[s]
		low := level - 0.03*f.img[s]
		group, stack = group[:0], append(stack[:0], s)
		done[s] = true
		equal, above := 0, 0
		for len(stack) > 0 {
			k := int(stack[len(stack)-1])
			stack = stack[:len(stack)-1]
			group = append(group, int32(k))
			switch v := counts[k]; {
			case v == level:
				equal++
			case v > level:
				above++
			}
			i, j := k%w, k/w
			for _, p := range [4][2]int{{i - 1, j}, {i + 1, j}, {i, j - 1}, {i, j + 1}} {
				if p[0] < 0 || p[1] < 0 || p[0] >= w || p[1] >= f.h {
					continue
				}
				n := int32(p[1]*w + p[0])
				if !done[n] && counts[n] >= low && counts[n] <= maxFloat32 {
					done[n] = true
					stack = append(stack, n)
				}
			}
		}
		// A plateau is the top of its group, and a fair part of it.
		if equal < 4 || above > 0 || equal*8 < len(group) {
			continue
		}
		levels = append(levels, float64(level))
		f.report.Plateaus++
		for _, k := range group {
			f.bits[k] |= frame.Saturated
		}
		f.bleed(group)
	}
	if len(levels) > 0 {
		slices.Sort(levels)
		f.report.Saturated = levels[len(levels)/2]
	}
}

// bleed flags the long narrow parts of a group of saturated pixels: runs along
// one axis more than twice as long as the group is wide, and a few pixels
// beyond their ends.
func (f *finder) bleed(group []int32) {
	w := f.w
	full := func(i, j int) bool {
		return i >= 0 && j >= 0 && i < w && j < f.h && f.bits[j*w+i]&frame.Saturated != 0
	}
	var longest [2]int
	for pass := range 2 {
		for dir := range 2 {
			di, dj := 1-dir, dir
			across := longest[1-dir]
			if pass == 1 && longest[dir] <= 2*across+3 {
				continue
			}
			for _, k := range group {
				i, j := int(k)%w, int(k)/w
				if full(i-di, j-dj) {
					continue
				}
				n := 1
				for full(i+n*di, j+n*dj) {
					n++
				}
				if pass == 0 {
					longest[dir] = max(longest[dir], n)
					continue
				}
				if n <= across+2 {
					continue
				}
				for s := -(across + 2); s < n+across+2; s++ {
					x, y := i+s*di, j+s*dj
					if x >= 0 && y >= 0 && x < w && y < f.h {
						f.bits[y*w+x] |= frame.Bleed
					}
				}
			}
		}
	}
}
