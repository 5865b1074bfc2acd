package detect

import (
	"math"
	"sort"

	"nightsift/internal/frame"
)

// segment is a straight trace of light across part of the frame.
type segment struct {
	x, y     float64 // FITS px, middle
	ux, uy   float64 // unit vector along it, ux ≥ 0
	half     float64 // px, half its length
	score    float64 // mean significance on its axis
	top      float64 // largest significance of a peak on it
	flux     float64 // count, whole
	fluxErr  float64
	across   float64 // px, 1 sigma of its place across
	flags    frame.Flag
	atBorder bool // reaches the frame's border or a masked region
	seed     peak
}

// along returns the coordinates of a place along and across the segment.
func (s *segment) along(x, y float64) (u, v float64) {
	dx, dy := x-s.x, y-s.y
	return dx*s.ux + dy*s.uy, dy*s.ux - dx*s.uy
}

// lineFinder looks for traces longer than a deblended group: candidates that
// lie on one line. Seeds are long thin components and pairs of near peaks;
// each seed is followed along its direction through the peaks on it and
// through the significance itself, which must stay up along the axis and fall
// off beside it.
type lineFinder struct {
	sig     *frame.Image
	flags   *frame.Mask
	fwhm    float64
	peaks   []peak // positive, bright first
	grid    *pointGrid
	density float64 // peaks per px²
}

const (
	lineLeastPeaks = 6    // on a line seeded by pairs
	linePairsMost  = 4000 // pairs tried
)

func findLines(sig *frame.Image, flags *frame.Mask, peaks []peak, comps []component, psf *localPSF) []segment {
	lf := &lineFinder{sig: sig, flags: flags, fwhm: psf.fwhm, grid: newPointGrid(8 * psf.fwhm)}
	for _, p := range peaks {
		if p.s > 0 {
			lf.peaks = append(lf.peaks, p)
			lf.grid.add(p.x, p.y)
		}
	}
	lf.density = float64(len(lf.peaks)) / float64(sig.Width*sig.Height)
	var found []segment
	covered := func(x, y float64) bool {
		for k := range found {
			u, v := found[k].along(x, y)
			if math.Abs(v) < lf.fwhm && math.Abs(u) < found[k].half+lf.fwhm {
				return true
			}
		}
		return false
	}
	// Long thin components, longest first.
	type long struct{ x, y, ux, uy, length float64 }
	var seeds []long
	response := 2 * psf.sigma2
	for k := range comps {
		c := &comps[k]
		if !c.positive || c.area < 8 {
			continue
		}
		x, y, xx, yy, xy := c.shape()
		mean, diff := (xx+yy)/2, math.Hypot((xx-yy)/2, xy)
		major, minor := mean+diff, mean-diff
		length := math.Sqrt(12 * 2 * diff)
		// Above the threshold a trace is a band some response widths across;
		// the brighter, the wider.
		width := response * (1 + math.Log(math.Max(1, c.top/5)))
		if length < 5*lf.fwhm || major < 12*minor || minor > 2*width {
			continue
		}
		angle := math.Atan2(2*xy, xx-yy) / 2
		seeds = append(seeds, long{x, y, math.Cos(angle), math.Sin(angle), length})
	}
	sort.SliceStable(seeds, func(a, b int) bool { return seeds[a].length > seeds[b].length })
	for _, s := range seeds {
		if covered(s.x, s.y) {
			continue
		}
		if seg, ok := lf.follow(s.x, s.y, s.ux, s.uy, s.length/2, false); ok {
			found = append(found, seg)
		}
	}
	// Pairs of near peaks, brightest first.
	pairs := 0
	var near []int32
	for i := range lf.peaks {
		if pairs >= linePairsMost {
			break
		}
		p := &lf.peaks[i]
		if covered(p.x, p.y) {
			continue
		}
		near = lf.grid.within(near[:0], p.x, p.y, 14*lf.fwhm)
		sort.Slice(near, func(a, b int) bool { return near[a] < near[b] })
		for _, k := range near {
			q := &lf.peaks[k]
			dx, dy := q.x-p.x, q.y-p.y
			d := math.Hypot(dx, dy)
			if int(k) <= i || d < 2.5*lf.fwhm {
				continue
			}
			// Peaks of one trace are about equally bright.
			if q.s < p.s/4 {
				continue
			}
			if pairs++; pairs >= linePairsMost {
				break
			}
			if seg, ok := lf.follow(p.x+dx/2, p.y+dy/2, dx/d, dy/d, d/2, true); ok {
				found = append(found, seg)
				break
			}
		}
	}
	return found
}

// follow grows a seed along its direction.
func (lf *lineFinder) follow(x, y, ux, uy, half float64, needPeaks bool) (segment, bool) {
	if ux < 0 || ux == 0 && uy < 0 {
		ux, uy = -ux, -uy
	}
	s := segment{x: x, y: y, ux: ux, uy: uy, half: half}
	var members []int32
	var near []int32
	for range 4 {
		// Peaks on the axis, grown outward over gaps of up to 14 FWHM.
		members = members[:0]
		lo, hi := -s.half, s.half
		gap := 14 * lf.fwhm
		tolerance := 0.75 * lf.fwhm
		for grown := true; grown; {
			grown = false
			for _, end := range [2]float64{lo, hi} {
				near = lf.grid.within(near[:0], s.x+end*s.ux, s.y+end*s.uy, gap)
				for _, k := range near {
					u, v := s.along(lf.peaks[k].x, lf.peaks[k].y)
					if math.Abs(v) > tolerance {
						continue
					}
					if u < lo && lo-u <= gap && lf.lit(&s, u, lo) {
						lo, grown = u, true
					}
					if u > hi && u-hi <= gap && lf.lit(&s, hi, u) {
						hi, grown = u, true
					}
				}
			}
		}
		mid := (lo + hi) / 2
		near = lf.grid.within(near[:0], s.x+mid*s.ux, s.y+mid*s.uy, (hi-lo)/2+2*lf.fwhm)
		for _, k := range near {
			u, v := s.along(lf.peaks[k].x, lf.peaks[k].y)
			if math.Abs(v) <= tolerance && u >= lo-1e-9 && u <= hi+1e-9 {
				members = append(members, k)
			}
		}
		if len(members) < 2 || needPeaks && len(members) < 3 {
			return s, false
		}
		// The line through the members.
		var n, mx, my float64
		for _, k := range members {
			n++
			mx += lf.peaks[k].x
			my += lf.peaks[k].y
		}
		mx, my = mx/n, my/n
		var xx, yy, xy float64
		for _, k := range members {
			dx, dy := lf.peaks[k].x-mx, lf.peaks[k].y-my
			xx += dx * dx
			yy += dy * dy
			xy += dx * dy
		}
		if len(members) > 2 {
			angle := math.Atan2(2*xy, xx-yy) / 2
			s.ux, s.uy = math.Cos(angle), math.Sin(angle)
			if s.ux < 0 {
				s.ux, s.uy = -s.ux, -s.uy
			}
		}
		// Ends relative to the new centre.
		lo, hi = math.Inf(1), math.Inf(-1)
		s.x, s.y = mx, my
		for _, k := range members {
			u, _ := s.along(lf.peaks[k].x, lf.peaks[k].y)
			lo, hi = math.Min(lo, u), math.Max(hi, u)
		}
		s.x, s.y = mx+s.ux*(lo+hi)/2, my+s.uy*(lo+hi)/2
		s.half = (hi - lo) / 2
	}
	length := 2 * s.half
	if length < 5*lf.fwhm {
		return s, false
	}
	expected := lf.density * 1.5 * lf.fwhm * length
	if needPeaks && (len(members) < lineLeastPeaks || float64(len(members)) < 4*expected+4) {
		return s, false
	}
	on, lit, valid := lf.profile(&s, 0)
	left, _, _ := lf.profile(&s, 3.5*lf.fwhm)
	right, _, _ := lf.profile(&s, -3.5*lf.fwhm)
	if valid < 4 || on < 2 || lit < 0.8 || math.Max(math.Abs(left), math.Abs(right)) > 0.35*on {
		return s, false
	}
	s.score = on
	for _, k := range members {
		if p := lf.peaks[k]; p.s > s.top {
			s.top, s.seed = p.s, p
		}
	}
	lf.extend(&s)
	return s, true
}

// lit reports whether the axis between two places carries light, as far as
// pixels there can be judged.
func (lf *lineFinder) lit(s *segment, u0, u1 float64) bool {
	step := lf.fwhm / 2
	n, on := 0, 0
	for u := u0; u <= u1; u += step {
		if v, ok := lf.sample(s.x+u*s.ux, s.y+u*s.uy); ok {
			n++
			if v > 1 {
				on++
			}
		}
	}
	return n == 0 || float64(on) >= 0.6*float64(n)
}

// sample returns the significance of the pixel at a place, and whether the
// pixel can be judged.
func (lf *lineFinder) sample(x, y float64) (float64, bool) {
	i, j := int(math.Round(x))-1, int(math.Round(y))-1
	if i < 0 || j < 0 || i >= lf.sig.Width || j >= lf.sig.Height {
		return 0, false
	}
	at := j*lf.sig.Width + i
	v := float64(lf.sig.Pix[at])
	if lf.flags.Bits[at]&excluded != 0 || v == 0 || math.IsNaN(v) {
		return 0, false
	}
	return v, true
}

// profile returns the median-like mean of the significance along a line
// parallel to the axis (values beyond four times the median are cut), the
// part of samples above 1, and their number.
func (lf *lineFinder) profile(s *segment, offset float64) (mean, lit float64, n int) {
	var values []float64
	for u := -s.half; u <= s.half; u += lf.fwhm / 2 {
		if v, ok := lf.sample(s.x+u*s.ux-offset*s.uy, s.y+u*s.uy+offset*s.ux); ok {
			values = append(values, v)
			if v > 1 {
				lit++
			}
		}
	}
	n = len(values)
	if n == 0 {
		return 0, 0, 0
	}
	sort.Float64s(values)
	return values[n/2], lit / float64(n), n
}

// extend moves the ends outward while the axis stays lit and notes whether an
// end is the frame's border or a mask.
func (lf *lineFinder) extend(s *segment) {
	step := lf.fwhm / 2
	reach := func(dir float64) float64 {
		u := s.half
		last := u
		dark := 0
		for {
			u += step
			x, y := s.x+dir*u*s.ux, s.y+dir*u*s.uy
			if x < 1 || y < 1 || x > float64(lf.sig.Width) || y > float64(lf.sig.Height) {
				s.atBorder = true
				return u
			}
			v, ok := lf.sample(x, y)
			switch {
			case !ok: // unknown: go on, but do not count it as lit
			case v > math.Max(1, 0.35*s.score):
				last, dark = u, 0
			default:
				dark++
			}
			if dark >= 4 || u-last > 14*lf.fwhm {
				return last
			}
		}
	}
	a, b := reach(1), reach(-1)
	s.x, s.y = s.x+s.ux*(a-b)/2, s.y+s.uy*(a-b)/2
	s.half = (a + b) / 2
}

// measureSegment fits the light per pixel of length with the PSF's profile
// across the line, over pixels beside the axis; masked pixels do not count.
func measureSegment(s *segment, psf *localPSF, image, variance *frame.Image, flags *frame.Mask) {
	const fine = 8
	reach := 2 * psf.fwhm
	m := int(reach*fine) + 2
	profile := make([]float64, 2*m+1)
	for k := range profile {
		v := float64(k-m) / fine
		var sum float64
		for t := -float64(psf.radius); t <= float64(psf.radius); t += 0.5 {
			sum += psf.at(t*s.ux-v*s.uy, t*s.uy+v*s.ux) * 0.5
		}
		profile[k] = sum
	}
	var pp, pd, gg float64
	x0 := math.Abs(s.ux)*s.half + reach
	y0 := math.Abs(s.uy)*s.half + reach
	for j := max(0, int(s.y-y0)-1); j < min(image.Height, int(s.y+y0)+1); j++ {
		for i := max(0, int(s.x-x0)-1); i < min(image.Width, int(s.x+x0)+1); i++ {
			u, v := s.along(float64(i+1), float64(j+1))
			if math.Abs(v) >= reach || math.Abs(u) > s.half {
				continue
			}
			at := j*image.Width + i
			s.flags |= flags.Bits[at]
			if flags.Bits[at]&excluded != 0 || !(variance.Pix[at] > 0) {
				continue
			}
			w := 1 / float64(variance.Pix[at])
			d := float64(image.Pix[at])
			if math.IsNaN(d) || math.IsInf(d, 0) {
				continue
			}
			f := v*fine + float64(m)
			k := int(f)
			t := f - float64(k)
			p := (1-t)*profile[k] + t*profile[k+1]
			g := (profile[k+1] - profile[k]) * fine
			pp += p * p * w
			pd += p * d * w
			gg += g * g * w
		}
	}
	s.flux, s.fluxErr, s.across = math.NaN(), math.NaN(), math.NaN()
	if pp > 0 {
		a := pd / pp
		s.flux = a * 2 * s.half
		s.fluxErr = 2 * s.half / math.Sqrt(pp)
		if a > 0 && gg > 0 {
			s.across = 1 / (a * math.Sqrt(gg))
		}
	}
}
