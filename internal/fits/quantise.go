package fits

import "math"

// dithers is the number of random numbers of the standard's sequence.
const dithers = 10000

// ditherSequence holds the random numbers of FITS 4.0, appendix I: those of
// Park and Miller (1988, Communications of the ACM 31, 1192), from seed 1.
var ditherSequence = func() (list [dithers]float32) {
	const multiplier, modulus = 16807, math.MaxInt32
	seed := int64(1)
	for i := range list {
		seed = seed * multiplier % modulus
		list[i] = float32(float64(seed) / modulus)
	}
	return list
}()

// dither walks through the sequence as tiles do: from a place that depends on
// the tile's row and on ZDITHER0, and on to another when the end is reached.
type dither struct{ start, next int }

func newDither(row int, seed int64) dither {
	d := dither{start: int((int64(row) + seed - 1) % dithers)}
	d.next = int(ditherSequence[d.start] * 500)
	return d
}

func (d *dither) step() {
	if d.next++; d.next == dithers {
		if d.start++; d.start == dithers {
			d.start = 0
		}
		d.next = int(ditherSequence[d.start] * 500)
	}
}

// unquantise turns the integers of a tile, from row 0 on, into values.
func (t *tiles) unquantise(dst []float32, row int) {
	scale, zero, blank, hasBlank := t.fixedScale, t.fixedZero, t.fixedBlank, t.hasBlank
	if t.scale != nil {
		scale = t.number(row, t.scale)
	}
	if t.zero != nil {
		zero = t.number(row, t.zero)
	}
	if t.blank != nil {
		blank, hasBlank = int64(t.number(row, t.blank)), true
	}
	var d dither
	if t.dither > 0 {
		d = newDither(row, t.seed)
	}
	for i, v := range t.ints {
		switch {
		case hasBlank && int64(v) == blank:
			dst[i] = nan32()
		case t.dither == 2 && v == ditheredZero:
			dst[i] = 0
		case t.dither > 0:
			shifted := float64(v) - float64(ditherSequence[d.next]) + 0.5
			dst[i] = float32(float64(shifted*scale) + zero)
		default:
			dst[i] = float32(float64(float64(v)*scale) + zero)
		}
		if t.dither > 0 {
			d.step()
		}
	}
	if !t.s.plain() {
		for i, v := range dst {
			dst[i] = float32(t.s.zero + float64(t.s.scale*float64(v)))
		}
	}
}
