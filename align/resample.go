package align

import (
	"context"
	"fmt"
	"math"
	"sync"

	"nightsift/internal/frame"
)

const (
	lobes    = 3    // of the Lanczos kernel
	phases   = 4096 // sub-pixel positions tabulated, from 0 to 1 inclusive
	segment  = 32   // px over which the transform is a parabola
	footMark = frame.Flag(1 << 15)
	// A flagged pixel (or several) with at least so much of the kernel's
	// absolute weight flags the result.
	flagWeight = 0.01
	// The kernel is widened when a new pixel is longer than so many reference
	// pixels.
	widenFrom = 1.1
)

// lanczos is the kernel sinc(x)·sinc(x/3) within ±3, zero outside.
func lanczos(x float64) float64 {
	if x == 0 {
		return 1
	}
	if x <= -lobes || x >= lobes {
		return 0
	}
	p := math.Pi * x
	return lobes * math.Sin(p) * math.Sin(p/lobes) / (p * p)
}

// kernelTable holds the weights of the taps for each sub-pixel phase. The
// weights of a phase sum to one, so a constant stays what it is.
type kernelTable struct {
	taps int // per axis
	left int // taps before the pixel in which the position falls: pixel floor(position)-left is the first
	// w holds phases+1 rows of taps weights: row p is for a position p/phases
	// beyond a pixel's centre.
	w []float32
	// total is the sum of absolute weights of the axis for each phase.
	total []float32
}

// newKernelTable tabulates the Lanczos kernel, widened by the given factor ≥ 1.
func newKernelTable(width float64) *kernelTable {
	half := int(math.Ceil(lobes * width))
	return tabulate(2*half, half-1, func(x float64) float64 { return lanczos(x / width) })
}

// tabulate makes the table of a kernel, a function of the distance [px].
func tabulate(taps, left int, kernel func(x float64) float64) *kernelTable {
	k := &kernelTable{taps: taps, left: left}
	k.w = make([]float32, (phases+1)*k.taps)
	k.total = make([]float32, phases+1)
	row := make([]float64, k.taps)
	for p := 0; p <= phases; p++ {
		f := float64(p) / phases
		sum := 0.0
		for i := range row {
			row[i] = kernel(float64(i-k.left) - f)
			sum += row[i]
		}
		abs := 0.0
		for i := range row {
			k.w[p*k.taps+i] = float32(row[i] / sum)
			abs += math.Abs(row[i] / sum)
		}
		k.total[p] = float32(abs)
	}
	return k
}

// source is a reference ready for resampling: sky-subtracted, padded on all
// sides by pad pixels. It is read-only once made.
type source struct {
	width, height int // px, without the padding
	pad           int
	stride, rows  int       // px, with the padding
	pix           []float32 // stride × rows [count]: pixels, or spline coefficients
	variance      []float32 // white variance of a pixel [count²], same shape
	flags         []frame.Flag
	kernel        *kernelTable // weights of pix
	foot          *kernelTable // weights of the pixels themselves, for the flags
}

// Values of pixels with these bits are replaced by their neighbours' before
// resampling. Saturated and bled pixels keep theirs: they are flagged, but a
// gap in their place would ring.
const replaced = frame.BadColumn | frame.CosmicRay | frame.Streak | frame.UserMasked | frame.NoData | frame.NoReference

// newSource copies a sky-subtracted image [count] with its variance and flags.
// The slices of img are not kept. Pixels that are not finite, or whose variance
// is not finite and positive, count as NoData.
func newSource(img, variance *frame.Image, flags *frame.Mask) *source {
	if !img.SameShape(variance) || flags.Width != img.Width || flags.Height != img.Height {
		panic(fmt.Sprintf("align: image is %dx%d, variance %dx%d, flags %dx%d", img.Width, img.Height, variance.Width, variance.Height, flags.Width, flags.Height))
	}
	const pad = 6
	s := &source{width: img.Width, height: img.Height, pad: pad, stride: img.Width + 2*pad, rows: img.Height + 2*pad}
	n := s.stride * s.rows
	s.pix, s.variance, s.flags = make([]float32, n), make([]float32, n), make([]frame.Flag, n)
	bad := make([]int32, 0, 256)
	for j := range img.Height {
		src, v, fl := img.Row(j), variance.Row(j), flags.Row(j)
		o := (j+pad)*s.stride + pad
		for i, x := range src {
			f := fl[i] &^ footMark
			if x-x != 0 || v[i]-v[i] != 0 || v[i] <= 0 {
				f |= frame.NoData
			}
			s.pix[o+i], s.variance[o+i], s.flags[o+i] = x, v[i], f
			if f&replaced != 0 {
				bad = append(bad, int32(o+i))
			}
		}
	}
	s.fill(bad)
	// The padding repeats the border and is no reference.
	for j := range s.rows {
		jj := min(max(j, pad), s.rows-pad-1)
		row := jj * s.stride
		for i := 0; i < s.stride; i++ {
			if i == pad && j == jj {
				i = s.stride - pad
			}
			from, to := row+min(max(i, pad), s.stride-pad-1), j*s.stride+i
			s.pix[to], s.variance[to] = s.pix[from], s.variance[from]
			s.flags[to] = frame.NoReference
		}
	}
	return s
}

// fill replaces the values at the listed places. From the border of a gap
// inwards, layer by layer, each place takes the mean of its neighbours that are
// good or filled before; deeper than fillDepth it is zero, the sky. The
// variance is treated alike.
func (s *source) fill(bad []int32) {
	const fillDepth = 6
	type value struct {
		at   int32
		p, v float32
	}
	const (
		good   = 0
		gap    = 1
		queued = 2
	)
	state := make([]uint8, len(s.pix))
	for j := range s.rows {
		for i := range s.stride {
			if i < s.pad || j < s.pad || i >= s.stride-s.pad || j >= s.rows-s.pad {
				state[j*s.stride+i] = gap
			}
		}
	}
	for _, at := range bad {
		state[at] = gap
		s.pix[at], s.variance[at] = 0, 1
	}
	w := int32(s.stride)
	around := [8]int32{-w - 1, -w, -w + 1, -1, 1, w - 1, w, w + 1}
	inside := func(at int32) bool {
		i, j := int(at)%s.stride, int(at)/s.stride
		return i >= s.pad && j >= s.pad && i < s.stride-s.pad && j < s.rows-s.pad
	}
	front := bad
	for range fillDepth {
		var layer []value
		for _, at := range front {
			var p, v float64
			count := 0
			for _, d := range around {
				if state[at+d] == good {
					p, v, count = p+float64(s.pix[at+d]), v+float64(s.variance[at+d]), count+1
				}
			}
			if count > 0 {
				layer = append(layer, value{at, float32(p / float64(count)), float32(v / float64(count))})
			}
		}
		for _, l := range layer {
			s.pix[l.at], s.variance[l.at], state[l.at] = l.p, l.v, good
		}
		// The next layer are the neighbours, still gaps, of this one.
		front = nil
		for _, l := range layer {
			for _, d := range around {
				if at := l.at + d; state[at] == gap && inside(at) {
					state[at] = queued
					front = append(front, at)
				}
			}
		}
		if len(front) == 0 {
			break
		}
	}
}

// interpolate makes the source ready for new pixels about as long as its own:
// pix becomes spline coefficients.
func (s *source) interpolate() {
	splinePlane(s.pix, s.stride, s.rows)
	s.kernel, s.foot = newSplineTable(), newCardinalTable()
	s.mark()
}

// widened returns a source, of the same planes as one made ready by
// interpolate, for new pixels of the given number of reference pixels: it
// averages with a Lanczos kernel of that width.
func (s *source) widened(pixelsPerPixel float64) *source {
	c := *s
	c.pix = splineSamples(s.pix, s.stride, s.rows)
	c.flags = append([]frame.Flag(nil), s.flags...)
	c.kernel = newKernelTable(pixelsPerPixel)
	c.foot = c.kernel
	c.mark()
	return &c
}

// forScale returns the source suited to new pixels of a given number of
// reference pixels: itself or a widened one.
func (s *source) forScale(pixelsPerPixel float64) *source {
	if pixelsPerPixel > widenFrom {
		return s.widened(pixelsPerPixel)
	}
	return s
}

// mark sets footMark at each place from which the kernel reaches a flagged
// pixel: place (i,j) is the pixel in which a position falls, the footprint
// runs from i-left to i-left+taps-1.
func (s *source) mark() {
	left, taps := s.foot.left, s.foot.taps
	right := taps - 1 - left
	w, h := s.stride, s.rows
	rowHas := make([]bool, w*h)
	for j := range h {
		row := s.flags[j*w : (j+1)*w]
		out := rowHas[j*w : (j+1)*w]
		// out[i] is true when row[i-left … i+right] has a flag: keep the
		// place of the last one seen.
		last := -1 << 30
		for i := -right; i < w; i++ {
			if i+right < w && row[i+right]&^footMark != 0 {
				last = i + right
			}
			if i >= 0 {
				out[i] = last >= i-left || i-left < 0 || i+right >= w
			}
		}
	}
	last := make([]int, w)
	for i := range last {
		last[i] = -1 << 30
	}
	for j := -right; j < h; j++ {
		if j+right < h {
			in := rowHas[(j+right)*w : (j+right+1)*w]
			for i, b := range in {
				if b {
					last[i] = j + right
				}
			}
		}
		if j < 0 {
			continue
		}
		row := s.flags[j*w : (j+1)*w]
		outside := j-left < 0 || j+right >= h
		for i := range row {
			row[i] &^= footMark
			if outside || last[i] >= j-left {
				row[i] |= footMark
			}
		}
	}
}

// resampled is the reference on the new frame's grid.
type resampled struct {
	image    *frame.Image
	variance *frame.Image
	flags    *frame.Mask
}

// resample computes the planes on a grid of width × height new pixels:
//
//	image    = Σ w·pix · area        (w: weights of spline or Lanczos kernel, of sum one)
//	variance = nearest pixel's variance · area
//
// where area is the new pixel's area in reference pixels. The first conserves
// the counts of a source. The second is the variance of white noise with the
// same power at low frequencies as the resampled noise has: the noise of a
// patch of sky, not that of one interpolated pixel, which is smaller and
// correlated with its neighbours'.
//
// Rows are independent, so the result does not depend on workers.
func (s *source) resample(ctx context.Context, t *Transform, width, height, workers int) (*resampled, error) {
	r := &resampled{image: frame.NewImage(width, height), variance: frame.NewImage(width, height), flags: frame.NewMask(width, height)}
	const band = 32
	const piece = 128 / segment
	next := make(chan int)
	var wg sync.WaitGroup
	for range max(workers, 1) {
		wg.Add(1)
		go func() {
			defer wg.Done()
			w := newWalker(t, width)
			for b := range next {
				// In pieces of rows, so that turned by 90° a piece of the
				// reference stays in the cache for the whole band.
				for k := 0; k < len(w.seg); k += piece {
					for j := b * band; j < min((b+1)*band, height); j++ {
						s.row(w, j, k, min(k+piece, len(w.seg)), r)
					}
				}
			}
		}()
	}
	var err error
	for b := range (height + band - 1) / band {
		if err = ctx.Err(); err != nil {
			break
		}
		next <- b
	}
	close(next)
	wg.Wait()
	if err != nil {
		return nil, err
	}
	return r, nil
}

// walker evaluates a transform along rows. It holds scratch: one a goroutine.
type walker struct {
	t     *Transform
	width int
	// Per segment of a row: position and area as parabolas in the pixel's
	// number within the segment, x = x0 + k·(x1 + k·x2).
	seg []parabolas
}

type parabolas struct{ x0, x1, x2, y0, y1, y2, a0, a1, a2 float64 }

func newWalker(t *Transform, width int) *walker {
	return &walker{t: t, width: width, seg: make([]parabolas, (width+segment-1)/segment)}
}

// start prepares segments k0 to k1-1 of row j (0-based).
func (w *walker) start(j, k0, k1 int) {
	t := w.t
	y := float64(j + 1)
	var q, dq [MaxOrder + 1]float64
	legendre((y-t.Y0)/t.HalfY, t.Order, &q, &dq)
	// Collapse the sum over the second index: along a row each coordinate is
	// Σ c[i]·P_i(u).
	var cx, cy, dxdy, dydy [MaxOrder + 1]float64
	k := 0
	for n := 0; n <= t.Order; n++ {
		for m := 0; m <= n; m++ {
			cx[n-m] += t.CX[k] * q[m]
			cy[n-m] += t.CY[k] * q[m]
			dxdy[n-m] += t.CX[k] * dq[m] / t.HalfY
			dydy[n-m] += t.CY[k] * dq[m] / t.HalfY
			k++
		}
	}
	var p, d [MaxOrder + 1]float64
	at := func(x float64) (u, v, area float64) {
		legendre((x-t.X0)/t.HalfX, t.Order, &p, &d)
		var xx, xy, yx, yy float64
		for i := 0; i <= t.Order; i++ {
			u += cx[i] * p[i]
			v += cy[i] * p[i]
			xx += cx[i] * d[i] / t.HalfX
			yx += cy[i] * d[i] / t.HalfX
			xy += dxdy[i] * p[i]
			yy += dydy[i] * p[i]
		}
		return u, v, math.Abs(xx*yy - xy*yx)
	}
	u0, v0, a0 := at(float64(k0*segment + 1))
	for k := k0; k < k1; k++ {
		x := float64(k*segment + 1)
		um, vm, am := at(x + segment/2)
		u1, v1, a1 := at(x + segment)
		const h = segment / 2
		g := &w.seg[k]
		g.x0, g.x1, g.x2 = u0, (4*um-3*u0-u1)/(2*h), (u1-2*um+u0)/(2*h*h)
		g.y0, g.y1, g.y2 = v0, (4*vm-3*v0-v1)/(2*h), (v1-2*vm+v0)/(2*h*h)
		g.a0, g.a1, g.a2 = a0, (4*am-3*a0-a1)/(2*h), (a1-2*am+a0)/(2*h*h)
		u0, v0, a0 = u1, v1, a1
	}
}

// fraction is the number of bits behind the point of the fixed-point positions
// that the pixel loop steps along.
const fraction = 32

// fixed converts a position [px].
func fixed(x float64) int64 { return int64(math.RoundToEven(x * (1 << fraction))) }

// row resamples segments k0 to k1-1 of row j (0-based).
func (s *source) row(w *walker, j, k0, k1 int, r *resampled) {
	w.start(j, k0, k1)
	img, va, fl := r.image.Row(j), r.variance.Row(j), r.flags.Row(j)
	six := s.kernel.taps == 6
	stride := s.stride
	// Places from which the footprint stays within the padded plane.
	left := s.foot.left
	first0 := s.kernel.left * (stride + 1)
	limitI, limitJ := stride-s.foot.taps+left, s.rows-s.foot.taps+left
	offset := float64(s.pad - 1) // FITS coordinate to padded 0-based index
	weights := s.kernel.w
	const far = 1e8 // px, beyond which fixed-point numbers would overflow
	for k := k0; k < k1; k++ {
		g := &w.seg[k]
		i0, i1 := k*segment, min((k+1)*segment, w.width)
		img, va, fl := img[i0:i1], va[i0:i1], fl[i0:i1]
		va = va[:len(img)]
		fl = fl[:len(img)]
		reach := math.Abs(g.x0) + math.Abs(g.y0) + segment*(math.Abs(g.x1)+math.Abs(g.y1)) + segment*segment*(math.Abs(g.x2)+math.Abs(g.y2))
		if !(reach < far) {
			for i := range img {
				va[i], fl[i] = 1, frame.NoReference
			}
			continue
		}
		x, dx, ddx := fixed(g.x0+offset), fixed(g.x1+g.x2), fixed(2*g.x2)
		y, dy, ddy := fixed(g.y0+offset), fixed(g.y1+g.y2), fixed(2*g.y2)
		// The area is a parabola too, but nearly straight: single precision.
		area, da, dda := float32(g.a0), float32(g.a1+g.a2), float32(2*g.a2)
		for i := range img {
			ix, iy := int(x>>fraction), int(y>>fraction)
			if ix < left || iy < left || ix > limitI || iy > limitJ {
				va[i], fl[i] = 1, frame.NoReference
			} else {
				// Position within the pixel, rounded to a phase.
				px := int((x&(1<<fraction-1) + 1<<(fraction-1)/phases) / (1 << fraction / phases))
				py := int((y&(1<<fraction-1) + 1<<(fraction-1)/phases) / (1 << fraction / phases))
				at := iy*stride + ix
				if s.flags[at]&footMark != 0 {
					fl[i] = s.footprint(ix-left, iy-left, px, py)
				}
				near := at
				if px > phases/2 {
					near++
				}
				if py > phases/2 {
					near += stride
				}
				va[i] = s.variance[near] * area
				if six {
					img[i] = area * sum6(s.pix, at-first0, stride, (*[6]float32)(weights[px*6:]), (*[6]float32)(weights[py*6:]))
				} else {
					t := s.kernel.taps
					img[i] = area * sumWide(s.pix, at-first0, stride, weights[px*t:px*t+t], weights[py*t:py*t+t])
				}
			}
			x, dx = x+dx, dx+ddx
			y, dy = y+dy, dy+ddy
			area, da = area+da, da+dda
		}
	}
}

// sum6 is the weighted sum over 6 × 6 pixels from index first.
func sum6(pix []float32, first, stride int, wx, wy *[6]float32) float32 {
	w0, w1, w2, w3, w4, w5 := wx[0], wx[1], wx[2], wx[3], wx[4], wx[5]
	var sum float32
	for k := range wy {
		p := (*[6]float32)(pix[first:])
		sum += wy[k] * ((p[0]*w0 + p[1]*w1) + (p[2]*w2 + p[3]*w3) + (p[4]*w4 + p[5]*w5))
		first += stride
	}
	return sum
}

// sumWide is the same for any number of taps.
func sumWide(pix []float32, first, stride int, wx, wy []float32) float32 {
	var sum float32
	for _, b := range wy {
		p := pix[first : first+len(wx)]
		var row float32
		for i, a := range wx {
			row += a * p[i]
		}
		sum += b * row
		first += stride
	}
	return sum
}

// footprint joins the flags whose pixels carry enough of the kernel's absolute
// weight at place (i,j), the first pixel of the footprint.
func (s *source) footprint(i, j, px, py int) frame.Flag {
	k := s.foot
	wx, wy := k.w[px*k.taps:(px+1)*k.taps], k.w[py*k.taps:(py+1)*k.taps]
	var weight [16]float32
	var seen frame.Flag
	for n, b := range wy {
		row := s.flags[(j+n)*s.stride+i:][:len(wx)]
		for m, a := range wx {
			f := row[m] &^ footMark
			if f == 0 {
				continue
			}
			seen |= f
			w := a * b
			if w < 0 {
				w = -w
			}
			for bit := 0; f != 0; bit, f = bit+1, f>>1 {
				if f&1 != 0 {
					weight[bit] += w
				}
			}
		}
	}
	if seen == 0 {
		return 0
	}
	enough := flagWeight * k.total[px] * k.total[py]
	var out frame.Flag
	for bit := range 15 {
		if weight[bit] >= enough {
			out |= 1 << bit
		}
	}
	return out
}
