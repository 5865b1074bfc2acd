package load

import (
	"math"
	"slices"

	"nightsift/internal/frame"
)

// Limits of a plateau. A star that is not saturated changes by more than the
// spread within such a block up to a full width of 16 pixels.
const (
	plateauSpread = 0.02   // relative spread of a block of 3 × 3 pixels
	plateauAgree  = 0.03   // relative spread of the levels of several plateaus
	plateauCount  = 3      // plateaus, when they are not exactly flat
	plateauTop    = 0.3    // of the height of the brightest pixel above the sky
	plateauMost   = 100000 // pixels looked at
)

// plateau looks for a saturation level that no keyword tells: blocks of
// pixels high above the sky that are flat where a star would have a peak, and
// that end in steep edges, as a nebula does not. It takes three separate
// blocks at one level, as flat fielding makes the level uneven, or one block of
// at least five equal values among nine. The level is
// below all of them; NaN if there is none. high is the largest pixel.
func plateau(f *frame.Frame, high float32) (level float64, blocks int) {
	width, height := f.Image.Width, f.Image.Height
	sky := coarseMedian(f.Image)
	least := float32(sky + plateauTop*(float64(high)-sky))
	type block struct {
		i, j      int
		low, top  float32
		sameCount int
	}
	var found []block
	looked := 0
	for j := 1; j < height-1; j++ {
		row := f.Image.Row(j)
		for i := 1; i < width-1; i++ {
			if !(row[i] >= least) {
				continue
			}
			if looked++; looked > plateauMost {
				return math.NaN(), 0 // no stars: a frame that is bright all over
			}
			b := block{i: i, j: j, low: row[i], top: row[i]}
			for dj := -1; dj <= 1; dj++ {
				for _, v := range f.Image.Row(j + dj)[i-1 : i+2] {
					b.low, b.top = min(b.low, v), max(b.top, v)
					if v == row[i] {
						b.sameCount++
					}
				}
			}
			if float64(b.top-b.low) <= plateauSpread*(float64(b.top)-sky) {
				found = append(found, b)
			}
		}
	}
	if len(found) == 0 {
		return math.NaN(), 0
	}
	// The highest level at which there are enough blocks apart from each other.
	slices.SortStableFunc(found, func(a, b block) int {
		switch {
		case a.top > b.top:
			return -1
		case a.top < b.top:
			return 1
		}
		return 0
	})
	for first := range found {
		limit := float64(found[first].top) - plateauAgree*(float64(found[first].top)-sky)
		var apart []block
		low, exact := found[first].low, false
		for _, b := range found[first:] {
			if float64(b.low) < limit {
				if float64(b.top) < limit {
					break
				}
				continue
			}
			low = min(low, b.low)
			far := steep(f.Image, b.i, b.j, limit, sky)
			for _, a := range apart {
				far = far && max(a.i-b.i, b.i-a.i, a.j-b.j, b.j-a.j) > 10
			}
			if far {
				apart = append(apart, b)
				exact = exact || b.sameCount >= 5
			}
		}
		if len(apart) >= plateauCount || exact {
			return float64(low), len(apart)
		}
		if first >= 100 {
			break
		}
	}
	return math.NaN(), 0
}

// steep reports whether the plateau around pixel (i,j), which is above limit,
// falls along its row, on both sides, by 15 % of its height within four pixels
// of its end. The frame's edge and pixels without data count as an end.
func steep(m *frame.Image, i, j int, limit, sky float64) bool {
	row := m.Row(j)
	for _, step := range []int{-1, 1} {
		k := i
		for k >= 0 && k < m.Width && float64(row[k]) >= limit {
			k += step
		}
		if k += 4 * step; k < 0 || k >= m.Width {
			continue
		}
		if float64(row[k])-sky > 0.85*(limit-sky) {
			return false
		}
	}
	return true
}

// coarseMedian is the median of about ten thousand pixels spread over a plane.
func coarseMedian(m *frame.Image) float64 {
	step := max(1, len(m.Pix)/10007)
	var sample []float32
	for p := 0; p < len(m.Pix); p += step {
		if v := m.Pix[p]; v == v {
			sample = append(sample, v)
		}
	}
	if len(sample) == 0 {
		return math.NaN()
	}
	slices.Sort(sample)
	return float64(sample[len(sample)/2])
}
