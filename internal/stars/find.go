package stars

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// sigmaToFWHM is the FWHM of a Gaussian of unit sigma.
const sigmaToFWHM = 2.3548200450309493

// maxFWHM is the widest PSF looked for, px.
const maxFWHM = 15

// Find lists the stars of a sky-subtracted image [count].
//
// Peaks of a Gaussian matched filter as wide as the PSF, more than
// cfg.Threshold sigma above sky and surroundings, are centred under a Gaussian
// window of the same width; for bright stars the window is flattened to the
// weight of least noise, so errors stay near the bound of photon and sky noise.
// Fluxes are those of the matched Gaussian, scaled (with a low-order
// polynomial in position) to totals measured on bright isolated stars. Sources
// sharper than the PSF can make them are left out and counted; of peaks closer
// than one FWHM the brighter one stays, and because the filter broadens stars
// by √2, unequal pairs closer than about two FWHM are one source. A group of saturated pixels is one
// star. Clean stars follow the locus of widths and elongations over the frame.
//
// NaN and flagged pixels carry no light; a window that holds some leaves out
// the opposite pixels too. mask may be nil; gain is in electron per count, NaN
// if unknown: then source noise is left out of errors and weights.
//
// A frame without any star gives an empty list, not an error; an error is a
// wrong configuration.
func Find(img *frame.Image, bg *Background, mask *frame.Mask, gain float64, cfg FindConfig) (*List, error) {
	if img.Width != bg.Width || img.Height != bg.Height {
		panic(fmt.Sprintf("stars: image is %dx%d, the background %dx%d", img.Width, img.Height, bg.Width, bg.Height))
	}
	if mask != nil && (mask.Width != img.Width || mask.Height != img.Height) {
		panic(fmt.Sprintf("stars: mask is %dx%d, want %dx%d", mask.Width, mask.Height, img.Width, img.Height))
	}
	if !(cfg.Threshold >= 2) || cfg.MaxStars < 1 || (cfg.FWHM == cfg.FWHM && !(cfg.FWHM >= 0.5 && cfg.FWHM <= 50)) {
		return nil, fmt.Errorf("stars: threshold %g sigma, FWHM %g px, at most %d stars: want a threshold of at least 2, an FWHM of 0.5 to 50 or NaN, and at least 1 star", cfg.Threshold, cfg.FWHM, cfg.MaxStars)
	}
	if !(gain > 0) || math.IsInf(gain, 0) {
		gain = math.NaN()
	}
	f := &finder{img: img, bg: bg, mask: mask, gain: gain, cfg: cfg,
		cut: stamp{img: img, mask: mask}}
	sigma := cfg.FWHM / sigmaToFWHM
	if sigma != sigma {
		sigma = f.firstWidth()
	} else {
		sigma = math.Sqrt(sigma*sigma + 1./12)
	}
	f.sigma = math.Max(sigma, 0.7)
	f.fwhm = f.sigma * sigmaToFWHM
	m := matchedFilter(img, mask, f.sigma)
	peaks := f.separate(m, m.peaks(bg, gain, f.fwhm, cfg.Threshold))
	list := f.measureAll(peaks)
	return list, nil
}

type finder struct {
	img  *frame.Image
	bg   *Background
	mask *frame.Mask
	gain float64
	cfg  FindConfig

	sigma float64 // px, of the matched Gaussian, pixel included
	fwhm  float64 // px, of that Gaussian
	cut   stamp
}

// firstWidth estimates the sigma [px] of the PSF from bright peaks of a binned
// frame, whatever the seeing: bins of 4 px see sharp and broad stars alike.
func (f *finder) firstWidth() float64 {
	nx, ny := (f.img.Width+3)/4, (f.img.Height+3)/4
	bins := make([]float32, nx*ny)
	line := make([]float32, f.img.Width)
	for j := 0; j < f.img.Height; j++ {
		pixelRow(line, f.img, f.mask, j)
		out := bins[j/4*nx : (j/4+1)*nx]
		full := f.img.Width / 4
		for i := range out[:full] {
			l := line[4*i : 4*i+4 : 4*i+4]
			out[i] += (l[0] + l[1]) + (l[2] + l[3])
		}
		for i := full * 4; i < f.img.Width; i++ {
			out[full] += line[i]
		}
	}
	m := &matched{width: nx, height: ny, step: 4, pix: bins, unit: 4}
	sizes := f.brightWidths(m, 12)
	if len(sizes) < 8 {
		sizes = f.brightWidths(m, 6)
	}
	if len(sizes) < 8 { // broad and faint: bins of 8 px
		if more := f.brightWidths(m.halve(), 6); len(more) > len(sizes) {
			sizes = more
		}
	}
	slices.Sort(sizes)
	switch n := len(sizes); {
	case n == 0:
		return 3 / sigmaToFWHM
	case n < 6:
		return math.Exp(sizes[n/2])
	}
	// The median of what lies near the mode.
	mode := lowestMode(sizes, 0.07)
	var near []float64
	for _, s := range sizes {
		if math.Abs(s-mode) < 0.2 {
			near = append(near, s)
		}
	}
	return math.Exp(robust.Median(near))
}

// brightWidths returns the logarithms of the sigmas of the brightest peaks of a
// binned frame above a threshold [sigma], at most 500 of them.
func (f *finder) brightWidths(m *matched, threshold float32) []float64 {
	const most = 500
	var found []peak
	half := float64(m.step-1) / 2
	noise := make([]float32, m.width)
	for j := 0; j < m.height; j++ {
		m.noiseRow(noise, f.bg, j)
		for i, v := range m.pix[j*m.width : (j+1)*m.width] {
			if v > threshold*noise[i] && m.isMaximum(i, j) {
				found = append(found, peak{value: v, x: float64(i*m.step) + half, y: float64(j*m.step) + half})
			}
		}
	}
	slices.SortFunc(found, brighter)
	taken := newGrid(f.img.Width, f.img.Height, 16)
	var sizes []float64
	for _, p := range found {
		if len(sizes) >= most {
			break
		}
		near := false
		taken.near(p.x, p.y, 12, func(int, float64) { near = true })
		taken.add(len(sizes), p.x, p.y)
		if near || f.flagsNear(p.x, p.y, 4)&(frame.Saturated|frame.Bleed) != 0 {
			continue
		}
		f.cut.cut(int(math.Round(p.x)), int(math.Round(p.y)), 28)
		_, _, s, axis, ok := f.cut.adapt(p.x, p.y)
		// A width below that of a pixel, or a long thin trace of one, is a hit
		// and no star.
		if !ok || s < 0.5 || s*math.Sqrt(axis) < 0.4 || s > 1.3*maxFWHM/sigmaToFWHM {
			continue
		}
		sizes = append(sizes, math.Log(s))
	}
	return sizes
}

// halve sums bins two by two.
func (m *matched) halve() *matched {
	h := &matched{width: (m.width + 1) / 2, height: (m.height + 1) / 2, step: 2 * m.step, unit: 2 * m.unit}
	h.pix = make([]float32, h.width*h.height)
	for j := 0; j < m.height; j++ {
		for i, v := range m.pix[j*m.width : (j+1)*m.width] {
			h.pix[j/2*h.width+i/2] += v
		}
	}
	return h
}

// flagsNear joins the flags within r px of a 0-based position; outside the
// frame counts as Edge, a value that is no number as NoData.
func (f *finder) flagsNear(x, y, r float64) (flags frame.Flag) {
	w, h := f.img.Width, f.img.Height
	for j := int(math.Ceil(y - r)); float64(j) <= y+r; j++ {
		half := math.Sqrt(math.Max(0, r*r-(float64(j)-y)*(float64(j)-y)))
		for i := int(math.Ceil(x - half)); float64(i) <= x+half; i++ {
			if i < 0 || j < 0 || i >= w || j >= h {
				flags |= frame.Edge
				continue
			}
			if v := f.img.Pix[j*w+i]; !(v > -huge && v < huge) {
				flags |= frame.NoData
			}
			if f.mask != nil {
				flags |= f.mask.Bits[j*w+i]
			}
		}
	}
	return flags
}

// brighter orders peaks by falling brightness; ties by place, so that the
// order is always the same.
func brighter(a, b peak) int {
	return cmp.Or(cmp.Compare(b.value, a.value), cmp.Compare(a.y, b.y), cmp.Compare(a.x, b.x))
}

// separate keeps of the peaks those that are sources of their own, and puts one
// in place of each group of saturated pixels.
func (f *finder) separate(m *matched, found []peak) []peak {
	found = f.saturatedPeaks(m, found)
	slices.SortFunc(found, brighter)
	reach := 3 * f.fwhm
	kept := found[:0:0]
	g := newGrid(f.img.Width, f.img.Height, reach)
	for _, p := range found {
		own := true
		g.near(p.x, p.y, reach, func(k int, d float64) {
			if !own || p.burnt > 0 {
				return
			}
			if d < f.fwhm {
				own = false
				return
			}
			// Between two sources the light falls below the fainter one by more
			// than noise does.
			o := kept[k]
			low := float64(p.value)
			n := max(3, int(2*d/float64(m.step)))
			for s := 1; s < n; s++ {
				t := float64(s) / float64(n)
				low = math.Min(low, m.at(p.x+t*(o.x-p.x), p.y+t*(o.y-p.y)))
			}
			noise := m.unit * f.bg.Noise(p.x+1, p.y+1)
			if f.gain > 0 && low > 0 {
				noise = math.Sqrt(noise*noise + low/m.kernelSum*m.unit*m.unit/f.gain)
			}
			if drop := float64(p.value) - low; drop < 3*noise || drop < 0.02*low {
				own = false
			}
		})
		if own {
			g.add(len(kept), p.x, p.y)
			kept = append(kept, p)
		}
	}
	return kept[:min(len(kept), f.cfg.MaxStars)]
}

// saturatedPeaks drops the peaks in and at the rim of each group of saturated
// pixels and adds one for the group, at its middle; a group much smaller than
// the PSF keeps its brightest peak instead.
func (f *finder) saturatedPeaks(m *matched, found []peak) []peak {
	if len(m.blobs) == 0 {
		return found
	}
	g := newGrid(f.img.Width, f.img.Height, 16)
	for k, p := range found {
		g.add(k, p.x, p.y)
	}
	drop := make([]bool, len(found))
	// Pieces of one burnt-out star follow the largest.
	slices.SortStableFunc(m.blobs, func(a, b blob) int { return cmp.Compare(b.n, a.n) })
	largest := math.Min(m.blobs[0].radius(), 100)
	taken := newGrid(f.img.Width, f.img.Height, f.fwhm+largest)
	var extra []peak
	for _, b := range m.blobs {
		x, y := b.sumX/float64(b.n), b.sumY/float64(b.n)
		rim := 0.7 * f.fwhm
		hw, hh := float64(b.right-b.left+1)/2+rim, float64(b.high-b.low+1)/2+rim
		mx, my := float64(b.left+b.right)/2, float64(b.low+b.high)/2
		best := -1
		g.near(mx, my, math.Hypot(hw, hh), func(n int, _ float64) {
			p := found[n]
			if math.Abs(p.x-mx) > hw || math.Abs(p.y-my) > hh || drop[n] {
				return
			}
			drop[n] = true
			if best < 0 || p.value > found[best].value {
				best = n
			}
		})
		p := peak{x: x, y: y, burnt: b.radius(), value: float32(m.at(x, y))}
		if best >= 0 {
			p.value, p.sn = max(p.value, found[best].value), found[best].sn
			if p.burnt < 0.5*f.fwhm {
				p.x, p.y = found[best].x, found[best].y
			}
		}
		apart := p.value > 0
		taken.near(p.x, p.y, f.fwhm+largest, func(k int, d float64) {
			if d < f.fwhm+extra[k].burnt {
				apart = false
			}
		})
		if apart {
			taken.add(len(extra), p.x, p.y)
			extra = append(extra, p)
		}
	}
	kept := found[:0:0]
	for k, p := range found {
		if !drop[k] {
			kept = append(kept, p)
		}
	}
	return append(kept, extra...)
}

// grid finds points near a place.
type grid struct {
	cell   float64
	nx, ny int
	points [][]gridPoint
}

type gridPoint struct {
	id   int
	x, y float64
}

func newGrid(width, height int, cell float64) *grid {
	cell = math.Max(cell, 4)
	g := &grid{cell: cell, nx: int(float64(width)/cell) + 1, ny: int(float64(height)/cell) + 1}
	g.points = make([][]gridPoint, g.nx*g.ny)
	return g
}

func (g *grid) place(v float64, n int) int { return min(max(int(v/g.cell), 0), n-1) }

func (g *grid) add(id int, x, y float64) {
	k := g.place(y, g.ny)*g.nx + g.place(x, g.nx)
	g.points[k] = append(g.points[k], gridPoint{id, x, y})
}

// near calls visit with every point within r and its distance.
func (g *grid) near(x, y, r float64, visit func(id int, d float64)) {
	for cy := g.place(y-r, g.ny); cy <= g.place(y+r, g.ny); cy++ {
		for cx := g.place(x-r, g.nx); cx <= g.place(x+r, g.nx); cx++ {
			for _, p := range g.points[cy*g.nx+cx] {
				if d := math.Hypot(p.x-x, p.y-y); d <= r {
					visit(p.id, d)
				}
			}
		}
	}
}
