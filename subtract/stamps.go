package subtract

import (
	"context"
	"math"
	"sort"

	"golang.org/x/sync/errgroup"

	"nightsift/align"
	"nightsift/internal/frame"
)

// A stamp is the neighbourhood of one star, from which the kernel is learnt.
type stamp struct {
	x, y int // centre, FITS pixel
	star int // index of the match

	factor float64 // by which the new frame was multiplied
	data   []float32
	noise  []float32   // sky variance of the new frame [count²]
	from   []float32   // sky variance of the reference [its count²]
	good   []bool      // pixels that enter the fit
	terms  [][]float32 // the reference convolved with each element

	weight []float32 // 1/variance, 0 for bad pixels
	normal []float64 // (elements+1)², the last row and column are the sky's
	right  []float64
	square float64
	pixels int

	chi2 float64 // reduced, in the last solve
	kept bool
}

// candidatePosition is a place where a stamp may be cut.
type candidatePosition struct {
	star int
	x, y float64
	rank float64 // higher is taken first

	factor float64 // that takes a variable star on the new frame to its flux on the reference
}

// planes are the pixels that the solve sees.
type planes struct {
	new, newVariance *frame.Image
	newFlags         *frame.Mask
	ref, refVariance *frame.Image // count of the reference
	refFlags         *frame.Mask
	newGain, refGain float64 // electron per count of their own frame; Inf if unknown
	blurSquares      float64 // factor of the new frame's variance after its blur
	scale            float64 // counts of the new frame for one of the reference, from matched stars
}

// enoughStars is the number of single stars from which on nothing else teaches the kernel.
const enoughStars = 12

// With fewer than fewStars the kernel does not follow the sky's transparency over
// the frame, and its sum is that of a few stars.
const fewStars = 30

// stampPositions lists where stamps may be cut: at single stars where they are
// enough, else also at galaxies and blends. These hold new light more often than stars do, and say
// less about the kernel. A variable star shows the kernel's shape as well as a constant one: its
// flux is brought to that of the common scale. Other changes serve only when fewer than
// least positions are left without them.
func stampPositions(p *align.Pair, f *fluxes, least int) []candidatePosition {
	var lists [3][]candidatePosition
	for i, m := range p.Matches {
		s, t := &p.NewStars.Stars[m.New], &p.ReferenceStars[m.Reference]
		if (s.Flags|t.Flags)&frame.Unusable != 0 || !(s.SN > 12) {
			continue
		}
		rank := s.SN
		if !s.Clean {
			rank /= 4
		}
		class, factor := 0, 1.0
		if s.Extended || t.Extended {
			class = 1
		}
		if f.changed(p, i) {
			class = 2
			if r := f.scale / math.Exp(f.ratio[i]); r > 0.5 && r < 2 {
				class, factor = 0, r
			}
		}
		lists[class] = append(lists[class], candidatePosition{star: i, x: s.X, y: s.Y, rank: rank, factor: factor})
	}
	out := lists[0]
	if len(out) < fewStars {
		// The brightest of them decides the kernel's sum, be it constant or
		// not: what the stars scatter beyond their noise is taken out.
		for i := range out {
			k := out[i].star
			if d, e := f.ratio[k]-math.Log(f.scale), f.ratioErr[k]; out[i].factor == 1 && d == d {
				out[i].factor = math.Exp(-d * f.scatter * f.scatter / (f.scatter*f.scatter + e*e))
			}
		}
	}
	if len(out) < enoughStars {
		out = append(out, lists[1]...)
	}
	if len(out) < least {
		out = append(out, lists[2]...)
	}
	return out
}

// chooseStamps picks bright positions spread evenly over the frame: the frame
// is cut in cells, and the cells take turns to give their brightest star that
// is left and stands clear of those chosen.
func chooseStamps(positions []candidatePosition, width, height, reach, most int) []candidatePosition {
	cells := max(3, int(math.Ceil(math.Sqrt(float64(most)/2))))
	byCell := make([][]candidatePosition, cells*cells)
	for _, p := range positions {
		i := min(cells-1, max(0, int((p.x-0.5)/float64(width)*float64(cells))))
		j := min(cells-1, max(0, int((p.y-0.5)/float64(height)*float64(cells))))
		byCell[j*cells+i] = append(byCell[j*cells+i], p)
	}
	for _, c := range byCell {
		sort.Slice(c, func(a, b int) bool {
			if c[a].rank != c[b].rank {
				return c[a].rank > c[b].rank
			}
			return c[a].star < c[b].star
		})
	}
	var chosen []candidatePosition
	apart := float64(reach) // stamps may overlap by half
	for len(chosen) < most {
		any := false
		for c := range byCell {
			for len(byCell[c]) > 0 {
				p := byCell[c][0]
				byCell[c] = byCell[c][1:]
				clear := true
				for _, q := range chosen {
					if math.Abs(q.x-p.x) < apart && math.Abs(q.y-p.y) < apart {
						clear = false
						break
					}
				}
				if clear {
					chosen = append(chosen, p)
					any = true
					break
				}
			}
			if len(chosen) == most {
				break
			}
		}
		if !any {
			break
		}
	}
	sort.Slice(chosen, func(a, b int) bool { return chosen[a].star < chosen[b].star })
	return chosen
}

// cutStamps cuts and convolves the stamps. Positions whose footprint is mostly
// flagged or leaves the frame are dropped.
func cutStamps(ctx context.Context, p *planes, b *basis, reach int, positions []candidatePosition, workers int) ([]*stamp, error) {
	stamps := make([]*stamp, len(positions))
	group, ctx := errgroup.WithContext(ctx)
	group.SetLimit(max(1, workers))
	for n, pos := range positions {
		group.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			stamps[n] = cutStamp(p, b, reach, pos)
			return nil
		})
	}
	if err := group.Wait(); err != nil {
		return nil, err
	}
	kept := stamps[:0]
	for _, s := range stamps {
		if s != nil {
			kept = append(kept, s)
		}
	}
	return kept, nil
}

func cutStamp(p *planes, b *basis, reach int, pos candidatePosition) *stamp {
	outer := b.half + reach
	cx, cy := int(math.Round(pos.x))-1, int(math.Round(pos.y))-1 // 0-based
	if cx-outer < 0 || cy-outer < 0 || cx+outer >= p.new.Width || cy+outer >= p.new.Height {
		return nil
	}
	n := 2*reach + 1
	s := &stamp{x: cx + 1, y: cy + 1, star: pos.star, factor: pos.factor, kept: true,
		data: make([]float32, n*n), noise: make([]float32, n*n), from: make([]float32, n*n),
		good: make([]bool, n*n), weight: make([]float32, n*n)}
	// A flagged pixel of the reference spoils every pixel that its kernel
	// footprint reaches. Most of the kernel's weight lies within half of its
	// half size: that is the distance kept.
	side := 2*outer + 1
	window := make([]float32, side*side)
	spoiled := make([]bool, n*n)
	near := max(1, b.half/2)
	for j := range side {
		row := p.ref.Row(cy - outer + j)[cx-outer:]
		flags := p.refFlags.Row(cy - outer + j)[cx-outer:]
		for i := range side {
			if flags[i]&frame.Unusable != 0 {
				for v := max(0, j-b.half-near); v <= min(n-1, j-b.half+near); v++ {
					for u := max(0, i-b.half-near); u <= min(n-1, i-b.half+near); u++ {
						spoiled[v*n+u] = true
					}
				}
				continue
			}
			window[j*side+i] = row[i]
		}
	}
	good := 0
	for j := range n {
		row := cy - reach + j
		for i := range n {
			at := row*p.new.Width + cx - reach + i
			k := j*n + i
			s.data[k] = p.new.Pix[at] * float32(pos.factor)
			s.noise[k] = p.newVariance.Pix[at] * float32(pos.factor*pos.factor)
			s.from[k] = p.refVariance.Pix[at]
			s.good[k] = !spoiled[k] && p.newFlags.Bits[at]&frame.Unusable == 0 && s.noise[k] > 0
			if s.good[k] {
				good++
			} else {
				s.data[k] = 0
			}
		}
	}
	// The core must be whole, and most of the rest.
	core := max(1, reach/3)
	for j := reach - core; j <= reach+core; j++ {
		for i := reach - core; i <= reach+core; i++ {
			if !s.good[j*n+i] {
				return nil
			}
		}
	}
	if good < n*n*6/10 {
		return nil
	}
	s.terms = make([][]float32, b.len())
	all := make([]float32, b.len()*n*n)
	for k := range s.terms {
		s.terms[k] = all[k*n*n : (k+1)*n*n]
	}
	b.apply(s.terms, window, reach, nil)
	return s
}

// model writes the kernel applied to the reference, without the sky.
func (s *stamp) model(dst []float32, weights []float64) {
	clear(dst)
	for k, w := range weights {
		if w == 0 {
			continue
		}
		f := float32(w)
		for i, v := range s.terms[k] {
			dst[i] += f * v
		}
	}
}

// modelFloor is the relative error of the kernel's model that the weights
// allow for, so that one very bright star does not outvote all others.
const modelFloor = 0.003

// reweigh sets the weights from the model of the star, never from its noisy
// pixels: weights that follow the noise would bias the scale.
func (s *stamp) reweigh(model []float32, sum, squares float64, p *planes) {
	perCount := s.factor*p.blurSquares/p.newGain + squares/(sum*p.refGain)
	for i, m := range model {
		if !s.good[i] {
			s.weight[i] = 0
			continue
		}
		signal := max(0, float64(m))
		v := p.blurSquares*float64(s.noise[i]) + squares*float64(s.from[i]) + signal*perCount + modelFloor*modelFloor*signal*signal
		s.weight[i] = float32(1 / v)
	}
}

// accumulate builds the stamp's normal equations over all elements and a
// constant.
func (s *stamp) accumulate() {
	k := len(s.terms)
	n := k + 1
	if s.normal == nil {
		s.normal = make([]float64, n*n)
		s.right = make([]float64, n)
	}
	weighted := make([]float32, len(s.data))
	for a := range n {
		if a < k {
			for i, v := range s.terms[a] {
				weighted[i] = v * s.weight[i]
			}
		} else {
			copy(weighted, s.weight)
		}
		for b := 0; b <= a; b++ {
			var sum float64
			if b < k {
				sum = dot(weighted, s.terms[b])
			} else {
				for _, v := range weighted {
					sum += float64(v)
				}
			}
			s.normal[a*n+b] = sum
			s.normal[b*n+a] = sum
		}
		s.right[a] = dot(weighted, s.data)
	}
	s.square = 0
	s.pixels = 0
	for i, v := range s.data {
		s.square += float64(v) * float64(v) * float64(s.weight[i])
		if s.weight[i] > 0 {
			s.pixels++
		}
	}
}

// dot sums the products of two rows of float32 in float64, four at a time.
func dot(a, b []float32) float64 {
	b = b[:len(a)]
	var s0, s1, s2, s3 float64
	i := 0
	for ; i+4 <= len(a); i += 4 {
		s0 += float64(a[i] * b[i])
		s1 += float64(a[i+1] * b[i+1])
		s2 += float64(a[i+2] * b[i+2])
		s3 += float64(a[i+3] * b[i+3])
	}
	for ; i < len(a); i++ {
		s0 += float64(a[i] * b[i])
	}
	return s0 + s1 + s2 + s3
}

// residual returns the weighted sum of squares left by the coefficients (one
// for each element, then the sky).
func (s *stamp) residual(coefficients []float64) float64 {
	n := len(coefficients)
	r := s.square
	for a, ca := range coefficients {
		if ca == 0 {
			continue
		}
		row := s.normal[a*n : (a+1)*n]
		t := 0.0
		for b, cb := range coefficients {
			t += row[b] * cb
		}
		r += ca * (t - 2*s.right[a])
	}
	return max(0, r)
}
