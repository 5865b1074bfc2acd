package psf

import "math"

// neighbours computes, for every star, the light that other listed sources
// send into its pixels. With refine, the fluxes of those that matter are fitted
// in the star's own pixels, together with the star and its sky; otherwise the
// list's fluxes are taken, on the scale of the stars fitted so far.
func (s *fitState) neighbours(refine bool) {
	f := s.f
	ratio := make([]float64, 0, len(s.st))
	for _, st := range s.st {
		ratio = append(ratio, st.flux/f.all[st.id].flux)
	}
	scale := median(ratio)
	if !(scale > 0) {
		scale = 1
	}
	const most = 24
	s.each(func(st *fitStar) {
		rad := 0.5 * math.Hypot(float64(st.nx), float64(st.ny))
		ids := f.near(nil, st.x, st.y, rad+2*s.fwhm)
		for k := range st.px {
			st.px[k].other = 0
		}
		var l local
		s.m.at(&l, st.x, st.y)
		type other struct {
			flux float64
			v    []float32 // P in the star's pixels
			fit  bool
		}
		var list []other
		for _, id := range ids {
			if id == st.id || len(list) == most {
				continue
			}
			n := &f.all[id]
			// The star itself, listed twice, is no neighbour.
			if math.Hypot(n.x-st.x, n.y-st.y) < 0.3*s.fwhm {
				continue
			}
			flux := n.flux * scale
			// Reach: where its light falls below a twentieth of the noise.
			reach := s.fwhm
			for reach < 2*rad+2*s.fwhm && flux*l.amp*l.prof.value(l.a*reach*reach) > 0.05*st.noise {
				reach *= 1.25
			}
			o := other{flux: flux}
			touched := 0
			var peak float64
			for k := range st.px {
				p := &st.px[k]
				u := float64(st.i0+1+int(p.i)) - n.x
				v := float64(st.j0+1+int(p.j)) - n.y
				if u*u+v*v > reach*reach {
					continue
				}
				if o.v == nil {
					o.v = make([]float32, len(st.px))
				}
				e := s.m.value(&l, u, v)
				o.v[k] = float32(e)
				peak = math.Max(peak, e)
				touched++
			}
			if touched == 0 {
				continue
			}
			o.fit = refine && touched > 5 && flux*peak > st.noise
			list = append(list, o)
		}
		if len(list) == 0 {
			return
		}
		// Fluxes: star, sky and the neighbours worth it.
		if refine {
			var fit []int
			for k := range list {
				if list[k].fit {
					fit = append(fit, k)
				}
			}
			n := 2 + len(fit)
			a, b := make([]float64, n*n), make([]float64, n)
			row := make([]float64, n)
			for k := range st.px {
				p := &st.px[k]
				// Weights as for a pixel that may hold a neighbour: the clip
				// is not for these.
				var fixed, light float64
				for j := range list {
					if list[j].v != nil {
						c := list[j].flux * float64(list[j].v[k])
						light += c
						if !list[j].fit {
							fixed += c
						}
					}
				}
				v := float64(p.sky) + 0.0025*(float64(p.model)*float64(p.model)+light*light)
				if f.gain > 0 {
					v += (math.Max(0, float64(p.model)) + light) / f.gain
				}
				row[0], row[1] = float64(p.model)/st.flux, 1
				for j, q := range fit {
					row[2+j] = float64(list[q].v[k])
				}
				y := float64(p.value) - fixed
				for i, x := range row {
					if x == 0 {
						continue
					}
					wx := x / v
					b[i] += wx * y
					for j := 0; j <= i; j++ {
						a[i*n+j] += wx * row[j]
					}
				}
			}
			if st.skySigma > 0 {
				a[n+1] += 1 / (st.skySigma * st.skySigma)
			} else {
				a[n+1] += 1e12
			}
			for j, q := range fit { // the list is good to a third or so
				t := 1 / math.Pow(0.3*list[q].flux, 2)
				a[(2+j)*n+2+j] += t
				b[2+j] += t * list[q].flux
			}
			a[0] *= 1 + 1e-12
			if cholesky(a, n) {
				choleskySolve(a, n, b)
				for j, q := range fit {
					list[q].flux = math.Max(0, b[2+j])
				}
			}
		}
		for j := range list {
			for k := range st.px {
				st.px[k].other += float32(list[j].flux) * list[j].v[k]
			}
		}
	})
}
