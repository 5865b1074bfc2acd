package artefacts

import (
	"fmt"
	"math"

	"nightsift/internal/frame"
)

// block is the number of pixels of a column or row that are summed before runs
// are sought.
const block = 32

// drift is taken off every pixel's term, so that runs of noise end [sigma].
const drift = 0.4

// clipAt bounds a pixel's term [sigma].
const clipAt = 3

// run is a stretch of blocks or pixels with a large sum.
type run struct {
	from, to int // first and last
	sum      float64
}

// lines finds bad columns and rows. The term of a pixel of a hot column is its
// excess over what light permits given the pixels on both sides, that of a
// dead one its deficit against both of them and the sky, in units of noise and
// clipped, so that no star counts for more than a few pixels. Long runs with a
// large sum are bad. Stars, bleed trails (which are flagged) and gradients give
// sums near zero or below: light on both sides only lowers the excess.
func (f *finder) lines() {
	nb := (f.h + block - 1) / block
	hot, dead := make([]float32, nb*f.w), make([]float32, nb*f.w) // columns, block by block
	rows := (f.w + block - 1) / block
	rowHot, rowDead := make([]float32, f.h*rows), make([]float32, f.h*rows)
	inverse := [3][]float32{make([]float32, f.w), make([]float32, f.w), make([]float32, f.w)}
	q := f.lineLimits()
	f.inverseNoise(inverse[1], 0)
	for j := range f.h {
		// inverse holds rows j-1, j, j+1; zero where there is none.
		if j+1 < f.h {
			f.inverseNoise(inverse[2], j+1)
		} else {
			clear(inverse[2])
		}
		row, inv := f.img[j*f.w:(j+1)*f.w], inverse[1]
		b := j / block
		sumColumns(hot[b*f.w:(b+1)*f.w], dead[b*f.w:(b+1)*f.w], row, inv, q[0])
		if j > 0 && j+1 < f.h {
			up, down := f.img[(j-1)*f.w:j*f.w], f.img[(j+1)*f.w:(j+2)*f.w]
			sumRow(rowHot[j*rows:(j+1)*rows], rowDead[j*rows:(j+1)*rows], row, up, down, inv, inverse[0], inverse[2], q[1])
		}
		inverse[0], inverse[1], inverse[2] = inverse[1], inverse[2], inverse[0]
	}
	terms := make([]float64, max(nb, rows))
	look := func(isRow, isDead bool, lines, n int, sums []float32, next, stride int) {
		var found []Line
		for at := 1; at+1 < lines; at++ {
			for b := range n {
				terms[b] = float64(sums[at*next+b*stride]) - drift*block
			}
			for _, r := range runsAbove(terms[:n], f.cfg.ColumnSum) {
				found = append(found, f.refine(isRow, isDead, at, r)...)
			}
		}
		f.markLines(found, lines, isRow)
	}
	// Dead ones first: beside them light stands out, which refine then sees.
	look(false, true, f.w, nb, dead, 1, f.w)
	look(true, true, f.h, rows, rowDead, rows, 1)
	look(false, false, f.w, nb, hot, 1, f.w)
	look(true, false, f.h, rows, rowHot, rows, 1)
}

// lineLimits are the bounds used across columns and rows.
func (f *finder) lineLimits() [2]float32 {
	return [2]float32{float32(f.limits.Arm[0][0]), float32(f.limits.Arm[1][0])}
}

// inverseNoise writes 1/σ of the pixels of row j, zero for unusable ones.
func (f *finder) inverseNoise(dst []float32, j int) {
	row := f.img[j*f.w : (j+1)*f.w][:len(dst)]
	vari := f.vari[j*f.w : (j+1)*f.w][:len(dst)]
	bits := f.bits[j*f.w : (j+1)*f.w][:len(dst)]
	for i, s := range vari {
		v := row[i]
		if bits[i]&frame.Unusable != 0 || !(v >= -maxFloat32 && v <= maxFloat32) || !(s > 0 && s <= maxFloat32) {
			dst[i] = 0
			continue
		}
		dst[i] = float32(1 / math.Sqrt(float64(s)))
	}
}

// sumColumns adds the terms of one row of pixels to the sums of their columns.
func sumColumns(hot, dead, row, inv []float32, q float32) {
	scale := 1 / float32(math.Sqrt(float64(1+2*q*q)))
	const scaleDead = 0.816496580927726 // 1/√1.5
	n := len(row)
	inv, hot, dead = inv[:n], hot[:n], dead[:n]
	if n < 3 {
		return
	}
	for i := 1; i < n-1; i++ {
		s := inv[i]
		if s == 0 || inv[i-1] == 0 || inv[i+1] == 0 {
			continue
		}
		c, both := row[i], row[i-1]+row[i+1]
		x := min(c, c-q*both) * s * scale
		y := min(-c, 0.5*both-c) * s * scaleDead
		if x > clipAt {
			x = clipAt
		} else if x < -clipAt {
			x = -clipAt
		}
		if y > clipAt {
			y = clipAt
		} else if y < -clipAt {
			y = -clipAt
		}
		hot[i] += x
		dead[i] += y
	}
}

// sumRow sums the terms of a row of pixels in blocks.
func sumRow(hot, dead, row, up, down, inv, invUp, invDown []float32, q float32) {
	scale := 1 / float32(math.Sqrt(float64(1+2*q*q)))
	const scaleDead = 0.816496580927726
	n := len(row)
	up, down, inv, invUp, invDown = up[:n], down[:n], inv[:n], invUp[:n], invDown[:n]
	for b := range hot {
		var sx, sy float32
		for i := b * block; i < min(n, (b+1)*block); i++ {
			s := inv[i]
			if s == 0 || invUp[i] == 0 || invDown[i] == 0 {
				continue
			}
			c, both := row[i], up[i]+down[i]
			x := min(c, c-q*both) * s * scale
			y := min(-c, 0.5*both-c) * s * scaleDead
			if x > clipAt {
				x = clipAt
			} else if x < -clipAt {
				x = -clipAt
			}
			if y > clipAt {
				y = clipAt
			} else if y < -clipAt {
				y = -clipAt
			}
			sx += x
			sy += y
		}
		hot[b], dead[b] = sx, sy
	}
}

// runsAbove lists the disjoint stretches whose sums are largest and at least
// least, in order: a stretch ends where the sum has fallen by as much as least
// from its highest, or to zero.
func runsAbove(terms []float64, least float64) []run {
	var list []run
	for i := 0; i < len(terms); {
		if terms[i] <= 0 {
			i++
			continue
		}
		best := run{i, i, 0}
		sum := 0.0
		k := i
		for ; k < len(terms); k++ {
			sum += terms[k]
			if sum > best.sum {
				best.sum, best.to = sum, k
			}
			if sum <= 0 || sum < best.sum-least {
				break
			}
		}
		if best.sum >= least {
			list = append(list, best)
			i = best.to + 1
		} else {
			// No stretch that begins before the sum fell to zero does better;
			// after a deep fall the rest must be seen again.
			i = max(best.to+1, i+1)
		}
	}
	return list
}

// refine finds the pixels where runs of blocks begin and end. Gaps shorter
// than two blocks, where a star crosses, are closed.
func (f *finder) refine(isRow, isDead bool, at int, r run) []Line {
	length := f.h
	if isRow {
		length = f.w
	}
	from, to := max(0, (r.from-1)*block), min(length, (r.to+2)*block)
	terms := make([]float64, to-from)
	sum, n := 0.0, 0
	for k := range terms {
		x, ok := f.lineTerm(isRow, isDead, at, from+k)
		terms[k] = x
		if !ok {
			terms[k] = math.NaN()
			continue
		}
		if k+from >= r.from*block && k+from < (r.to+1)*block {
			sum += x
			n++
		}
	}
	if n == 0 {
		return nil
	}
	// Half of the level inside parts inside from outside best.
	level := min(1.5, max(drift, 0.5*sum/float64(n)))
	for k, x := range terms {
		if x != x {
			terms[k] = 0
		} else {
			terms[k] = x - level
		}
	}
	var list []Line
	for _, p := range runsAbove(terms, 0.4*f.cfg.ColumnSum) {
		l := Line{Row: isRow, At: at + 1, From: from + p.from + 1, To: from + p.to + 1, Dead: isDead}
		if m := len(list); m > 0 && l.From-list[m-1].To <= 2*block {
			list[m-1].To = l.To
			continue
		}
		list = append(list, l)
	}
	return list
}

// lineTerm is one pixel's term, as in sumColumns; ok is false where there is none.
func (f *finder) lineTerm(isRow, isDead bool, at, along int) (x float64, ok bool) {
	k, step := along*f.w+at, 1
	q := f.lineLimits()[0]
	if isRow {
		k, step, q = at*f.w+along, f.w, f.lineLimits()[1]
	}
	if !f.usable(k) {
		return 0, false
	}
	if !f.usable(k-step) || !f.usable(k+step) {
		// Within a saturated star a dead pixel is dead by itself.
		c := float64(f.img[k])
		return clipAt, isDead && c < 0 && c*c > 5*5*float64(f.vari[k])
	}
	c, both := float64(f.img[k]), float64(f.img[k-step])+float64(f.img[k+step])
	s := math.Sqrt(float64(f.vari[k]))
	if isDead {
		x = min(-c, 0.5*both-c) / s / math.Sqrt(1.5)
	} else {
		x = min(c, c-float64(q)*both) / s / math.Sqrt(1+2*float64(q)*float64(q))
	}
	return min(clipAt, max(-clipAt, x)), true
}

// markLines flags what was found, unless it is so much that the frame's own
// structure must be the cause.
func (f *finder) markLines(found []Line, of int, isRow bool) {
	what := "columns"
	if isRow {
		what = "rows"
	}
	distinct, last := 0, 0
	for _, l := range found {
		if l.At != last {
			distinct++
		}
		last = l.At
	}
	if distinct > 3 && distinct*10 > of {
		f.report.Notes = append(f.report.Notes, fmt.Sprintf("%d of %d %s stand out from their neighbours: taken for structure of the frame, none flagged", distinct, of, what))
		return
	}
	for _, l := range found {
		k, step := (l.From-1)*f.w+l.At-1, f.w
		if l.Row {
			k, step = (l.At-1)*f.w+l.From-1, 1
		}
		for n := l.From; n <= l.To; n++ {
			f.bits[k] |= frame.BadColumn
			k += step
		}
	}
	f.report.Lines = append(f.report.Lines, found...)
}
