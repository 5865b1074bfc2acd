package psf

import (
	"math"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// source is an entry of the star list as the fit needs it.
type source struct {
	x, y, flux, sn float64
	flags          frame.Flag
	clean          bool
	extended       bool
	mom            moments // measured in selectStars, without the pixel's own variance
}

// field is what the fit reads.
type field struct {
	img, variance *frame.Image
	flags         *frame.Mask
	gain          float64 // electron/count; 0: unknown
	all           []source
	bins          map[[2]int][]int // index into all, by bins of binSize px
}

const binSize = 64

// usable reports whether pixel (i,j), 0-based and inside, may enter a fit.
func (f *field) usable(i, j int) bool {
	k := j*f.img.Width + i
	if f.flags != nil && f.flags.Bits[k]&frame.Unusable != 0 {
		return false
	}
	v, s := f.img.Pix[k], f.variance.Pix[k]
	return v-v == 0 && s-s == 0 && s > 0
}

// collect copies the finite, positive stars of the list, bright first, and
// indexes them by position.
func (f *field) collect(list []stars.Star) {
	for i := range list {
		s := &list[i]
		if !(s.Flux > 0) || math.IsInf(s.Flux, 0) || !(math.Abs(s.X) < 1e9) || !(math.Abs(s.Y) < 1e9) {
			continue
		}
		sn := s.SN
		if !(sn > 0) && s.FluxErr > 0 {
			sn = s.Flux / s.FluxErr
		}
		f.all = append(f.all, source{x: s.X, y: s.Y, flux: s.Flux, sn: sn, flags: s.Flags, clean: s.Clean, extended: s.Extended})
	}
	slices.SortStableFunc(f.all, func(a, b source) int {
		switch {
		case a.flux > b.flux:
			return -1
		case a.flux < b.flux:
			return 1
		}
		return 0
	})
	f.bins = make(map[[2]int][]int)
	for i, s := range f.all {
		k := [2]int{int(math.Floor(s.x / binSize)), int(math.Floor(s.y / binSize))}
		f.bins[k] = append(f.bins[k], i)
	}
}

// near appends to dst the indices of the sources within radius of (x,y).
func (f *field) near(dst []int, x, y, radius float64) []int {
	for by := int(math.Floor((y - radius) / binSize)); by <= int(math.Floor((y+radius)/binSize)); by++ {
		for bx := int(math.Floor((x - radius) / binSize)); bx <= int(math.Floor((x+radius)/binSize)); bx++ {
			for _, i := range f.bins[[2]int{bx, by}] {
				if math.Hypot(f.all[i].x-x, f.all[i].y-y) < radius {
					dst = append(dst, i)
				}
			}
		}
	}
	return dst
}

// measure fills the moments of a source; false if they make no sense there.
func (f *field) measure(s *source, start float64, stamp []float32, bad []bool) bool {
	size := side(len(stamp))
	half := size / 2
	ci, cj := int(math.Round(s.x))-1, int(math.Round(s.y))-1
	if ci < 0 || cj < 0 || ci >= f.img.Width || cj >= f.img.Height {
		return false
	}
	for j := range size {
		for i := range size {
			k := j*size + i
			ii, jj := ci-half+i, cj-half+j
			in := ii >= 0 && jj >= 0 && ii < f.img.Width && jj < f.img.Height
			bad[k] = !in || !f.usable(ii, jj)
			stamp[k] = 0
			if !bad[k] {
				stamp[k] = f.img.Pix[jj*f.img.Width+ii]
			}
			// Bad pixels at the centre spoil the moments.
			if bad[k] && abs(i-half) <= 1 && abs(j-half) <= 1 {
				return false
			}
		}
	}
	fx, fy := s.x-1-float64(ci)+float64(half), s.y-1-float64(cj)+float64(half)
	m, ok := adaptiveMoments(stamp, bad, size, size, fx, fy, start, 25)
	if !ok || math.Hypot(m.x-fx, m.y-fy) > 1.5 {
		return false
	}
	m.xx -= 1. / 12
	m.yy -= 1. / 12
	if !(m.xx > 0.05 && m.yy > 0.05 && m.xx*m.yy > m.xy*m.xy) {
		return false
	}
	s.mom = m
	return true
}

func abs(i int) int {
	if i < 0 {
		return -i
	}
	return i
}

// selectStars returns indices of the stars to learn from, bright first, and
// the median of Mxx and Myy [px²].
func (f *field) selectStars(cfg Config) (chosen []int, sigma2 float64) {
	const bad = frame.Unusable | frame.Edge
	const (
		onlyClean = iota
		noneExtended
		anySource
	)
	pick := func(minSN float64, what int) []int {
		var out []int
		for i, s := range f.all {
			if s.flags&bad != 0 || !(s.sn >= minSN) || what == onlyClean && !s.clean || what == noneExtended && s.extended {
				continue
			}
			if s.x < 3 || s.y < 3 || s.x > float64(f.img.Width-2) || s.y > float64(f.img.Height-2) {
				continue
			}
			out = append(out, i)
		}
		return out
	}
	few := max(30, 2*cfg.MinStars)
	cand := pick(cfg.MinSN, onlyClean)
	if len(cand) < few {
		cand = pick(cfg.MinSN/2, onlyClean)
	}
	// A dozen clean stars are worth more than many faint sources.
	few = max(12, cfg.MinStars+cfg.MinStars/2)
	if len(cand) < few {
		cand = pick(cfg.MinSN/2, noneExtended)
	}
	if len(cand) < cfg.MinStars {
		cand = pick(cfg.MinSN/2, anySource)
	}
	if len(cand) == 0 {
		return nil, 0
	}
	// Spread over the field: a quota for each of 8×8 regions, then the
	// brightest left.
	want := cfg.MaxStars + cfg.MaxStars/4
	if len(cand) > want {
		const side = 8
		var count [side * side]int
		quota := (want + side*side - 1) / (side * side)
		taken := make([]bool, len(cand))
		var out []int
		for n, i := range cand {
			s := f.all[i]
			bx := min(side-1, max(0, int(s.x*side/float64(f.img.Width+1))))
			by := min(side-1, max(0, int(s.y*side/float64(f.img.Height+1))))
			if count[by*side+bx] < quota && len(out) < want {
				count[by*side+bx]++
				taken[n] = true
				out = append(out, i)
			}
		}
		for n, i := range cand {
			if len(out) >= want {
				break
			}
			if !taken[n] {
				out = append(out, i)
			}
		}
		slices.Sort(out)
		cand = out
	}
	// Moments: first with a rough start for the brightest, then for all with
	// the right window.
	stamp, mask := make([]float32, 41*41), make([]bool, 41*41)
	var sizes []float64
	for _, i := range cand[:min(60, len(cand))] {
		s := f.all[i]
		if f.measure(&s, 2, stamp, mask) {
			sizes = append(sizes, (s.mom.xx+s.mom.yy)/2)
		}
	}
	if len(sizes) == 0 {
		return nil, 0
	}
	start := median(sizes) + 1./12
	if start > 12 {
		n := 2*int(5*math.Sqrt(start)+1) + 1
		stamp, mask = make([]float32, n*n), make([]bool, n*n)
	}
	var ok []int
	for _, i := range cand {
		if f.measure(&f.all[i], start, stamp, mask) {
			ok = append(ok, i)
		}
	}
	ok = f.locus(ok)
	ok = f.isolated(ok, start, few)
	if len(ok) > cfg.MaxStars {
		ok = ok[:cfg.MaxStars]
	}
	sizes = sizes[:0]
	for _, i := range ok {
		sizes = append(sizes, (f.all[i].mom.xx+f.all[i].mom.yy)/2)
	}
	if len(sizes) == 0 {
		return nil, 0
	}
	return ok, median(sizes)
}

// locus removes what is not shaped like the other stars around it: moments
// off a smooth function of position.
func (f *field) locus(idx []int) []int {
	for range 4 {
		if len(idx) < 6 {
			return idx
		}
		order := 0
		switch {
		case len(idx) >= 60:
			order = 2
		case len(idx) >= 15:
			order = 1
		}
		n := terms(order)
		keep := make([]bool, len(idx))
		for k := range keep {
			keep[k] = true
		}
		phi := make([]float64, n)
		for q := range 3 {
			get := func(s *source) float64 {
				t := s.mom.xx + s.mom.yy
				switch q {
				case 0:
					return math.Log(t)
				case 1:
					return (s.mom.xx - s.mom.yy) / t
				}
				return 2 * s.mom.xy / t
			}
			vals := make([]float64, len(idx))
			for k, i := range idx {
				vals[k] = get(&f.all[i])
			}
			center := median(slices.Clone(vals))
			coef := make([]float64, n)
			coef[0] = center
			res := make([]float64, len(idx))
			scale := math.Inf(1)
			for range 5 { // iteratively re-weighted (Cauchy) least squares
				a, b := make([]float64, n*n), make([]float64, n)
				for k, i := range idx {
					s := &f.all[i]
					monomials(phi, 2*s.x/float64(f.img.Width)-1, 2*s.y/float64(f.img.Height)-1, order)
					w := 1.0
					r := vals[k] - center
					if !math.IsInf(scale, 1) {
						r = res[k]
					} else {
						scale0 := 0.15
						w = 1 / (1 + r*r/(scale0*scale0))
					}
					if !math.IsInf(scale, 1) {
						w = 1 / (1 + r*r/(4*scale*scale))
					}
					for x := range n {
						b[x] += w * phi[x] * vals[k]
						for y := range n {
							a[x*n+y] += w * phi[x] * phi[y]
						}
					}
				}
				for x := range n {
					a[x*n+x] += 1e-6 * float64(len(idx))
				}
				if !cholesky(a, n) {
					break
				}
				choleskySolve(a, n, b)
				coef = b
				for k, i := range idx {
					s := &f.all[i]
					monomials(phi, 2*s.x/float64(f.img.Width)-1, 2*s.y/float64(f.img.Height)-1, order)
					res[k] = vals[k]
					for x := range n {
						res[k] -= coef[x] * phi[x]
					}
				}
				scale = math.Max(mad(res), 1e-3)
			}
			for k, i := range idx {
				// Faint stars scatter more: moments are good to about 2/SN.
				if math.Abs(res[k]) > 4*math.Hypot(scale, 1/math.Max(f.all[i].sn, 1))+0.01 {
					keep[k] = false
				}
			}
		}
		var out []int
		for k, i := range idx {
			if keep[k] {
				out = append(out, i)
			}
		}
		if len(out) == len(idx) || len(out) < 6 {
			return out
		}
		idx = out
	}
	return idx
}

// isolated sorts out stars with a brighter, or nearly as bright, neighbour
// close by, unless too few stars would remain.
func (f *field) isolated(idx []int, sigma2 float64, few int) []int {
	fwhm := 2.355 * math.Sqrt(sigma2)
	var out, rest []int
	var nb []int
	for _, i := range idx {
		s := f.all[i]
		var dirt float64
		nb = f.near(nb[:0], s.x, s.y, 5*fwhm)
		for _, j := range nb {
			if j == i {
				continue
			}
			r := math.Hypot(f.all[j].x-s.x, f.all[j].y-s.y) / fwhm
			// Light of the neighbour in the star's core, as a share of the
			// star's, for wings like (1+…r²)^-2.5.
			dirt += f.all[j].flux / s.flux * math.Pow(1+1.3*r*r, -2.5)
		}
		if dirt < 0.02 {
			out = append(out, i)
		} else if dirt < 0.5 {
			rest = append(rest, i)
		}
	}
	if len(out) < few {
		out = append(out, rest...)
		slices.Sort(out)
	}
	return out
}

// median returns the median and reorders v; 0 for none.
func median(v []float64) float64 {
	if len(v) == 0 {
		return 0
	}
	slices.Sort(v)
	n := len(v)
	if n%2 == 1 {
		return v[n/2]
	}
	return (v[n/2-1] + v[n/2]) / 2
}

// mad returns 1.4826 times the median of |v - median|; v is kept.
func mad(v []float64) float64 {
	c := slices.Clone(v)
	m := median(c)
	for i, x := range v {
		c[i] = math.Abs(x - m)
	}
	return 1.4826 * median(c)
}
