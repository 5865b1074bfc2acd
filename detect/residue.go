package detect

import (
	"math"
	"slices"
)

// The light of the reference leaves a known pattern where it was taken away
// wrongly: its slopes where it was shifted, itself where its scale was off.
// These are the spreads of such errors that the residue model allows without
// a penalty worth a source [px, relative]. They are wider than those of a good
// frame: a frame's own estimate is an average, and what is asked here is
// whether this one place is worse.
const (
	shiftSpread = 0.25
	scaleSpread = 0.05
)

// residue is what the pattern of the reference beneath explains of a
// candidate.
type residue struct {
	bic   float64 // of the pattern alone, without any source; +Inf where the reference has no light
	shift float64 // px, that it takes
	kept  float64 // significance of the source when the pattern is fitted together with it, positive for the source's own sign
}

// residueModel fits the reference's slopes and its light, each with a Gaussian
// prior, first alone and then together with the point source. It uses the
// window, the weights and the patch of the source that inspect prepared.
func (ft *fitter) residueModel(ev *evidence, flux, logN float64) {
	ev.residue = residue{bic: math.Inf(1), kept: math.NaN()}
	m := ft.reference
	if m == nil {
		return
	}
	w, p := &ft.win, &ft.patches[0]
	const terms = 4 // source, slope along x, slope along y, light
	var a [terms * terms]float64
	var b [terms]float64
	var dd float64
	for i := range w.data {
		if !w.use[i] {
			continue
		}
		x, y := w.i0+i%w.w, w.j0+i/w.w
		if x < 1 || y < 1 || x+1 >= m.Width || y+1 >= m.Height {
			continue
		}
		at := y*m.Width + x
		g := [terms]float64{p.p[i],
			float64(m.Pix[at+1]-m.Pix[at-1]) / 2,
			float64(m.Pix[at+m.Width]-m.Pix[at-m.Width]) / 2,
			float64(m.Pix[at])}
		if math.IsNaN(g[1]+g[2]+g[3]) || math.IsInf(g[1]+g[2]+g[3], 0) {
			continue
		}
		wt := 1 / ft.vari[i]
		dd += w.data[i] * w.data[i] * wt
		for k := range terms {
			gk := g[k] * wt
			b[k] += gk * w.data[i]
			for l := 0; l <= k; l++ {
				a[k*terms+l] += gk * g[l]
			}
		}
	}
	for k := range terms {
		for l := range k {
			a[l*terms+k] = a[k*terms+l]
		}
	}
	prior := [terms]float64{0, 1 / (shiftSpread * shiftSpread), 1 / (shiftSpread * shiftSpread), 1 / (scaleSpread * scaleSpread)}
	for k := range terms {
		a[k*terms+k] += prior[k]
	}
	// The pattern alone: the lower right block.
	const few = terms - 1
	var s [few * few]float64
	var c [few]float64
	for k := range few {
		c[k] = b[k+1]
		for l := range few {
			s[k*few+l] = a[(k+1)*terms+l+1]
		}
	}
	if !choleskySolve(s[:], c[:], few) {
		return
	}
	gain := 0.0
	for k := range few {
		gain += c[k] * b[k+1]
	}
	// The priors stand for as many data as there are terms, so the terms cost
	// what a source of three does.
	ev.residue.bic = dd - gain + 3*logN
	ev.residue.shift = math.Hypot(c[0], c[1])
	if invert(a[:], terms) && a[0] > 0 {
		var f float64
		for k := range terms {
			f += a[k] * b[k]
		}
		ev.residue.kept = math.Copysign(1, flux) * f / math.Sqrt(a[0])
	}
}

// unrest looks at the significance around a candidate: its robust spread in a
// ring, and its robust spread on the light of the reference within a wider
// circle. Both are 1 where the subtraction is as good as its noise says. Where
// there are too few pixels to tell, they are 1.
func (s *search) unrest(x, y float64) (ring, light float64) {
	const most, fewest = 1200, 30
	sig := s.in.significance
	outer := 10 * s.fwhm
	// A lattice thin enough for the number of pixels wanted.
	step := max(1, int(math.Sqrt(math.Pi*outer*outer/most)))
	ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
	r := int(outer)
	near, wide := s.near[:0], s.wide[:0]
	r0, r1, r2 := 2*s.fwhm, 5*s.fwhm, outer
	for dj := -r; dj <= r; dj++ {
		j := cj + dj
		if j < 0 || j >= sig.Height {
			continue
		}
		row := sig.Row(j)
		bits := s.in.flags.Row(j)
		inner := dj*dj <= int(r1*r1)
		if dj%step != 0 && !inner {
			continue
		}
		for di := -r; di <= r; di++ {
			i := ci + di
			d2 := float64(di*di + dj*dj)
			if i < 0 || i >= sig.Width || d2 < r0*r0 || d2 > r2*r2 || bits[i]&excluded != 0 {
				continue
			}
			v := row[i]
			if v != v {
				continue
			}
			// The ring is small where the star is: every pixel up to some width.
			if d2 <= r1*r1 && (di+dj)%max(1, step/2) == 0 {
				near = append(near, abs32(v))
			}
			if di%step == 0 && dj%step == 0 && s.in.reference != nil {
				at := j*sig.Width + i
				if u := s.in.reference.Pix[at]; u > 0 && u*u > 9*s.in.variance.Pix[at] {
					wide = append(wide, abs32(v))
				}
			}
		}
	}
	s.near, s.wide = near, wide
	spread := func(v []float32) float64 {
		if len(v) < fewest {
			return 1
		}
		slices.Sort(v)
		return math.Max(0.1, float64(v[len(v)/2])/0.6745)
	}
	return spread(near), spread(wide)
}

func abs32(v float32) float32 {
	if v < 0 {
		return -v
	}
	return v
}
