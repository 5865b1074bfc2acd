package stars

import (
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// matched is a frame after a Gaussian matched filter, on bins of side step
// when the PSF is wide, and the saturated pixels met on the way.
type matched struct {
	width, height int // bins
	step          int // px per bin
	pix           []float32
	kernelSum     float64 // response to a constant of one count per pixel
	unit          float64 // noise of pix for white noise of one count per pixel
	blobs         []blob  // connected saturated pixels
}

// blob is a connected group of saturated pixels (0-based pixels).
type blob struct {
	n                      int
	sumX, sumY             float64
	left, right, low, high int
}

func (b *blob) radius() float64 { return math.Sqrt(float64(b.n) / math.Pi) }

// pixelRow copies row j of the image into dst with 0 in place of pixels that
// carry no value. Saturated pixels keep theirs if it is a number.
func pixelRow(dst []float32, img *frame.Image, mask *frame.Mask, j int) {
	copy(dst, img.Row(j))
	for i, v := range dst {
		if !(v > -huge && v < huge) {
			dst[i] = 0
		}
	}
	if mask == nil {
		return
	}
	for i, f := range mask.Row(j) {
		if f&frame.Unusable != 0 && f&frame.Saturated == 0 {
			dst[i] = 0
		}
	}
}

// matchedFilter filters img with a Gaussian of the given sigma [px]. Beyond
// the frame's edge there is nothing (zero).
func matchedFilter(img *frame.Image, mask *frame.Mask, sigma float64) *matched {
	m := &matched{step: 1}
	for m.step < 4 && sigma/float64(m.step) > 2.1 {
		m.step *= 2
	}
	st := m.step
	m.width, m.height = (img.Width+st-1)/st, (img.Height+st-1)/st
	m.pix = make([]float32, m.width*m.height)
	s := sigma / float64(st)
	radius := max(1, int(math.Ceil(3*s)))
	kernel := make([]float64, radius+1)
	var sq, sum float64
	for k := range kernel {
		kernel[k] = math.Exp(-float64(k*k) / (2 * s * s))
		n := 2.0
		if k == 0 {
			n = 1
		}
		sq += n * kernel[k] * kernel[k]
		sum += n * kernel[k]
	}
	k32 := make([]float32, radius+1)
	for k := range kernel {
		k32[k] = float32(kernel[k] / math.Sqrt(sq))
	}
	m.kernelSum = sum * sum / sq * float64(st*st)
	m.unit = float64(st)

	blobs := newBlobFinder(img.Width)
	line := make([]float32, img.Width)
	padded := make([]float32, m.width+2*radius)
	ring := make([][]float32, 2*radius+1)
	for k := range ring {
		ring[k] = make([]float32, m.width)
	}
	read := func(jb int) { // bins a row of pixels and filters it along x
		mid := padded[radius : radius+m.width]
		if st == 1 {
			pixelRow(mid, img, mask, jb)
			blobs.row(mask, jb)
		} else {
			clear(mid)
			for j := jb * st; j < min(jb*st+st, img.Height); j++ {
				pixelRow(line, img, mask, j)
				blobs.row(mask, j)
				full := img.Width / st
				if st == 2 {
					for i := range mid[:full] {
						mid[i] += line[2*i] + line[2*i+1]
					}
				} else {
					for i := range mid[:full] {
						mid[i] += line[4*i] + line[4*i+1] + line[4*i+2] + line[4*i+3]
					}
				}
				for i := full * st; i < img.Width; i++ {
					mid[full] += line[i]
				}
			}
		}
		filterRow(ring[jb%len(ring)], padded, k32)
	}
	next := 0
	for j := 0; j < m.height; j++ {
		for ; next <= j+radius && next < m.height; next++ {
			read(next)
		}
		out := m.pix[j*m.width : (j+1)*m.width]
		scaleRow(out, ring[j%len(ring)], k32[0])
		for r := 1; r <= radius; r++ {
			var a, b []float32
			if j-r >= 0 {
				a = ring[(j-r)%len(ring)]
			}
			if j+r < m.height {
				b = ring[(j+r)%len(ring)]
			}
			switch {
			case a != nil && b != nil:
				addPair(out, a, b, k32[r])
			case a != nil:
				addRow(out, a, k32[r])
			case b != nil:
				addRow(out, b, k32[r])
			}
		}
	}
	m.blobs = blobs.finish()
	return m
}

// filterRow applies a symmetric kernel (its middle first) along a row that is
// padded by len(kernel)-1 values on both sides.
func filterRow(dst, padded, kernel []float32) {
	r := len(kernel) - 1
	n := len(dst)
	scaleRow(dst, padded[r:r+n], kernel[0])
	k := 1
	for ; k+1 <= r; k += 2 {
		a, b := padded[r-k:r-k+n], padded[r+k:r+k+n]
		c, d := padded[r-k-1:r-k-1+n], padded[r+k+1:r+k+1+n]
		w, v := kernel[k], kernel[k+1]
		for i := range dst {
			dst[i] += w*(a[i]+b[i]) + v*(c[i]+d[i])
		}
	}
	if k <= r {
		addPair(dst, padded[r-k:r-k+n], padded[r+k:r+k+n], kernel[k])
	}
}

func scaleRow(dst, a []float32, w float32) {
	a = a[:len(dst)]
	for i := range dst {
		dst[i] = w * a[i]
	}
}

func addRow(dst, a []float32, w float32) {
	a = a[:len(dst)]
	for i := range dst {
		dst[i] += w * a[i]
	}
}

func addPair(dst, a, b []float32, w float32) {
	a, b = a[:len(dst)], b[:len(dst)]
	for i := range dst {
		dst[i] += w * (a[i] + b[i])
	}
}

// blobFinder joins saturated pixels into blobs, row by row.
type blobFinder struct {
	width     int
	before    []run // of the row before
	now       []run
	beforeRow int
	parent    []int
	blobs     []blob
}

type run struct{ from, to, blob int }

func newBlobFinder(width int) *blobFinder { return &blobFinder{width: width, beforeRow: -2} }

func (f *blobFinder) root(k int) int {
	for f.parent[k] != k {
		f.parent[k] = f.parent[f.parent[k]]
		k = f.parent[k]
	}
	return k
}

func (f *blobFinder) row(mask *frame.Mask, j int) {
	if mask == nil {
		return
	}
	flags := mask.Row(j)
	f.now = f.now[:0]
	for i := 0; i < len(flags); i++ {
		if flags[i]&frame.Saturated == 0 {
			continue
		}
		start := i
		for i < len(flags) && flags[i]&frame.Saturated != 0 {
			i++
		}
		f.now = append(f.now, run{start, i, -1})
	}
	if len(f.now) == 0 {
		return
	}
	if f.beforeRow != j-1 {
		f.before = f.before[:0]
	}
	for k := range f.now {
		r := &f.now[k]
		for _, p := range f.before {
			if p.to < r.from || p.from > r.to { // touching corners join
				continue
			}
			if b := f.root(p.blob); r.blob < 0 {
				r.blob = b
			} else if a := f.root(r.blob); a != b {
				f.parent[b] = a
			}
		}
		if r.blob < 0 {
			r.blob = len(f.blobs)
			f.parent = append(f.parent, r.blob)
			f.blobs = append(f.blobs, blob{left: f.width, low: j})
		}
		b := &f.blobs[r.blob]
		n := r.to - r.from
		b.n += n
		b.sumX += float64(n) * float64(r.from+r.to-1) / 2
		b.sumY += float64(n) * float64(j)
		b.left, b.right = min(b.left, r.from), max(b.right, r.to-1)
		b.high = j
	}
	f.before, f.now = f.now, f.before
	f.beforeRow = j
}

func (f *blobFinder) finish() []blob {
	for k := range f.blobs {
		r := f.root(k)
		if r == k {
			continue
		}
		a, b := &f.blobs[r], f.blobs[k]
		a.n += b.n
		a.sumX += b.sumX
		a.sumY += b.sumY
		a.left, a.right = min(a.left, b.left), max(a.right, b.right)
		a.low, a.high = min(a.low, b.low), max(a.high, b.high)
	}
	var out []blob
	for k, b := range f.blobs {
		if f.parent[k] == k {
			out = append(out, b)
		}
	}
	return out
}

// peak is a local maximum of the filtered plane.
type peak struct {
	value float32 // of the filtered plane
	sn    float64 // above its surroundings
	x, y  float64 // 0-based pixels
	burnt float64 // px, radius of the group of saturated pixels it stands for, 0 for none
}

// spreadOf returns the noise of the filtered plane in units of what white noise
// would give, at least 1: it is more where pixels are correlated, or where
// the faint stars of a crowded field make the sky uneven.
func (m *matched) spreadOf(bg *Background) float64 {
	noise := make([]float32, m.width)
	var sample []float32
	every := max(1, m.width*m.height/20000)
	at := 0
	for j := 0; j < m.height; j++ {
		first := at - j*m.width
		if first >= m.width {
			continue
		}
		m.noiseRow(noise, bg, j)
		for ; first < m.width; first += every {
			if v := m.pix[j*m.width+first]; v != 0 {
				sample = append(sample, v/noise[first])
			}
		}
		at = j*m.width + first
	}
	if len(sample) < 50 {
		return 1
	}
	// Half a sigma of a Gaussian lies between these two; stars are on the other
	// side. What lies far below is no noise but dead columns and holes, which
	// would shift the two: it is left out, with the spread so far.
	spread := 1.0
	for range 4 {
		spread = max(1, 2*(robust.Percentile(sample, 30.853754)-robust.Percentile(sample, 15.865525)))
		kept := sample[:0]
		for _, v := range sample {
			if float64(v) > -6*spread {
				kept = append(kept, v)
			}
		}
		if len(kept) == len(sample) || len(kept) < 50 {
			break
		}
		sample = kept
	}
	return spread
}

// noiseRow writes the noise of the filtered plane, for white noise, along a
// row.
func (m *matched) noiseRow(dst []float32, bg *Background, j int) {
	half := float64(m.step-1) / 2
	meshRow(dst, bg.NoiseMesh, bg.xc, bg.yc, half, float64(m.step), float64(j*m.step)+half)
	floor, unit := bg.floor, float32(m.unit)
	for i, v := range dst {
		dst[i] = unit * max(v, floor)
	}
}

// peaks lists the local maxima that stand threshold sigma above zero and above
// their surroundings, a ring at 2.2 times the FWHM. Noise counts the photons of
// the ring, so that the halo of a bright star does not crumble into peaks.
func (m *matched) peaks(bg *Background, gain, fwhm, threshold float64) []peak {
	spread := m.spreadOf(bg)
	limit := float32(threshold * spread)
	ring := ringOffsets(2.2*fwhm/float64(m.step), m.width)
	var out []peak
	noise := make([]float32, m.width)
	w := m.width
	around := make([]float32, 0, len(ring))
	for j := 0; j < m.height; j++ {
		m.noiseRow(noise, bg, j)
		row := m.pix[j*w : (j+1)*w]
		for i, v := range row {
			if !(v > limit*noise[i]) {
				continue
			}
			if !m.isMaximum(i, j) {
				continue
			}
			around = around[:0]
			for _, o := range ring {
				if x, y := i+o[0], j+o[1]; x >= 0 && y >= 0 && x < w && y < m.height {
					around = append(around, m.pix[y*w+x])
				}
			}
			base := 0.0
			if len(around) >= 5 {
				base = max(0, robust.Percentile(around, 35))
			}
			n := spread * float64(noise[i])
			if gain > 0 {
				n = math.Sqrt(n*n + base/m.kernelSum*m.unit*m.unit/gain)
			}
			sn := (float64(v) - base) / n
			if sn < threshold || float64(v)-base < 0.05*base {
				continue
			}
			x, y := m.interpolate(i, j)
			half := float64(m.step-1) / 2
			out = append(out, peak{value: v, sn: sn, x: x*float64(m.step) + half, y: y*float64(m.step) + half})
		}
	}
	return out
}

func (m *matched) isMaximum(i, j int) bool {
	w := m.width
	k := j*w + i
	v := m.pix[k]
	if i == 0 || j == 0 || i == w-1 || j == m.height-1 {
		for dj := -1; dj <= 1; dj++ {
			for di := -1; di <= 1; di++ {
				x, y := i+di, j+dj
				if x < 0 || y < 0 || x >= w || y >= m.height || (di == 0 && dj == 0) {
					continue
				}
				if n := m.pix[y*w+x]; n > v || (n == v && (dj > 0 || (dj == 0 && di > 0))) {
					return false
				}
			}
		}
		return true
	}
	p := m.pix
	return v >= p[k-1] && v > p[k+1] && v >= p[k-w-1] && v >= p[k-w] && v >= p[k-w+1] &&
		v > p[k+w-1] && v > p[k+w] && v > p[k+w+1]
}

// interpolate returns the place of a maximum by parabolas in x and y.
func (m *matched) interpolate(i, j int) (x, y float64) {
	x, y = float64(i), float64(j)
	vertex := func(a, b, c float64) float64 {
		d := a - 2*b + c
		if d >= 0 {
			return 0
		}
		return math.Max(-0.5, math.Min(0.5, (a-c)/(2*d)))
	}
	k := j*m.width + i
	if i > 0 && i+1 < m.width {
		x += vertex(float64(m.pix[k-1]), float64(m.pix[k]), float64(m.pix[k+1]))
	}
	if j > 0 && j+1 < m.height {
		y += vertex(float64(m.pix[k-m.width]), float64(m.pix[k]), float64(m.pix[k+m.width]))
	}
	return x, y
}

func ringOffsets(radius float64, width int) [][2]int {
	out := make([][2]int, 16)
	for k := range out {
		a := 2 * math.Pi * float64(k) / 16
		out[k] = [2]int{int(math.Round(radius * math.Cos(a))), int(math.Round(radius * math.Sin(a)))}
	}
	return out
}

// at samples the filtered plane at a 0-based pixel position, bilinearly.
func (m *matched) at(x, y float64) float64 {
	half := float64(m.step-1) / 2
	x, y = (x-half)/float64(m.step), (y-half)/float64(m.step)
	x = math.Max(0, math.Min(x, float64(m.width-1)))
	y = math.Max(0, math.Min(y, float64(m.height-1)))
	i, j := min(int(x), max(0, m.width-2)), min(int(y), max(0, m.height-2))
	u, v := x-float64(i), y-float64(j)
	i1, j1 := min(i+1, m.width-1), min(j+1, m.height-1)
	a, b := float64(m.pix[j*m.width+i]), float64(m.pix[j*m.width+i1])
	c, d := float64(m.pix[j1*m.width+i]), float64(m.pix[j1*m.width+i1])
	return (1-v)*((1-u)*a+u*b) + v*((1-u)*c+u*d)
}
