package psf

import (
	"math"

	"nightsift/internal/frame"
)

// StarFit is what FitStar measured. Errors are 1 sigma from sky noise and the
// star's photons; the model's own error is not in them (Model.Uncertainty).
type StarFit struct {
	X, Y               float64 // FITS pixels
	Flux, Sky          float64 // count, count per pixel
	XErr, YErr         float64 // px
	FluxErr, SkyErr    float64
	CovXY              float64 // px²
	Chi2               float64 // reduced
	Pixels             int     // used
	Lost               float64 // share of P² on pixels that could not be used: 0…1
	Flags              frame.Flag
	Converged          bool
	Rounds             int
	CovFluxX, CovFluxY float64
}

// StarOptions says how FitStar works. The zero value fits position and flux
// with the sky held at zero.
type StarOptions struct {
	Radius  float64 // of the pixels used [px]; 0: twice the FWHM, at least 3 px
	FreeSky bool    // fit a constant sky as well
	FixXY   bool    // keep the position, fit the flux alone
}

// FitStar fits position and flux of one star near (x,y) on a sky-subtracted
// frame by weighted least squares with the model; variance is that of the sky
// part, the star's photons are added from the model. ok is false when the
// pixels do not allow a fit: too few usable, no convergence within the frame.
func (m *Model) FitStar(img, variance *frame.Image, flags *frame.Mask, x, y, gain float64, opt StarOptions) (fit StarFit, ok bool) {
	fit = StarFit{X: x, Y: y}
	if !(math.Abs(x) < 1e9) || !(math.Abs(y) < 1e9) {
		return fit, false
	}
	radius := opt.Radius
	if !(radius > 0) {
		radius = math.Max(3, 2*m.FWHM(x, y))
	}
	radius = math.Min(radius, 100)
	inv := 0.0
	if gain > 0 && !math.IsInf(gain, 0) {
		inv = 1 / gain
	}
	ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
	r := int(math.Ceil(radius)) + 1
	i0, i1 := max(0, ci-r), min(img.Width-1, ci+r)
	j0, j1 := max(0, cj-r), min(img.Height-1, cj+r)
	if i1-i0 < 2 || j1-j0 < 2 {
		return fit, false
	}
	nx, ny := i1-i0+1, j1-j0+1
	var l local
	m.at(&l, x, y)
	p := make([]float32, 3*nx*ny)
	gv, gx, gy := p[:nx*ny], p[nx*ny:2*nx*ny], p[2*nx*ny:]

	np := 3
	if opt.FreeSky {
		np = 4
	}
	flux, sky := 0.0, 0.0
	damping, weightFlux := 0.0, 0.0
	best := math.Inf(1)
	var a, last [16]float64
	var prev struct{ x, y, flux, sky float64 }
	sx, sy := x, y
	for round := 0; round < 40; round++ {
		fit.Rounds = round + 1
		u0, v0 := float64(i0+1)-sx+l.ox, float64(j0+1)-sy+l.oy
		clear(p)
		if l.grid {
			l.addGrid(gv, nx, ny, u0, v0, m.spacing, 0, 1)
			l.addGrid(gx, nx, ny, u0, v0, m.spacing, 1, 1)
			l.addGrid(gy, nx, ny, u0, v0, m.spacing, 2, 1)
		}
		// First round: flux alone. Later: everything.
		linear := round == 0 || opt.FixXY
		if round < 4 { // then the weights stay, so that χ² can be compared
			weightFlux = math.Max(flux, 0)
		}
		var b [4]float64
		a = [16]float64{}
		var chi2, lost, all float64
		n := 0
		var fl frame.Flag
		for j := range ny {
			for i := range nx {
				u, v := u0+float64(i), v0+float64(j)
				if math.Hypot(float64(i0+i+1)-x, float64(j0+j+1)-y) > radius {
					continue
				}
				e := l.pixelGradient(u, v)
				g := j*nx + i
				e.p += float64(gv[g])
				e.u += float64(gx[g])
				e.v += float64(gy[g])
				all += e.p * e.p
				k := (j0+j)*img.Width + i0 + i
				val, vr := float64(img.Pix[k]), float64(variance.Pix[k])
				bad := val-val != 0 || !(vr > 0) || math.IsInf(vr, 0)
				if flags != nil {
					fl |= flags.Bits[k]
					bad = bad || flags.Bits[k]&frame.Unusable != 0
				}
				if bad {
					lost += e.p * e.p
					continue
				}
				n++
				w := 1 / (vr + weightFlux*math.Max(e.p, 0)*inv)
				res := val - flux*e.p - sky
				chi2 += w * res * res
				jac := [4]float64{e.p, -flux * e.u, -flux * e.v, 1}
				for s := range np {
					ws := w * jac[s]
					b[s] += ws * res
					for t := 0; t <= s; t++ {
						a[s*np+t] += ws * jac[t]
					}
				}
			}
		}
		fit.Pixels, fit.Flags = n, fl
		fit.Lost = lost / math.Max(all, 1e-300)
		if n < np+1 || !(all > 0) || fit.Lost > 0.7 {
			return fit, false
		}
		if linear {
			for _, s := range [2]int{1, 2} {
				for t := range np {
					a[max(s, t)*np+min(s, t)] = 0
				}
				a[s*np+s] = 1
				b[s] = 0
			}
		}
		if round > 4 && !linear {
			if !(chi2 <= best+0.01) {
				if damping > 1e4 {
					break
				}
				damping = math.Max(damping, 1e-3) * 10
				sx, sy, flux, sky = prev.x, prev.y, prev.flux, prev.sky
				best = math.Inf(1)
				continue
			}
		}
		best = chi2
		fit.Chi2 = chi2 / float64(n-np)
		last = a
		prev.x, prev.y, prev.flux, prev.sky = sx, sy, flux, sky
		for s := range np {
			a[s*np+s] *= 1 + damping
			if a[s*np+s] == 0 {
				a[s*np+s] = 1
			}
		}
		if !cholesky(a[:np*np], np) {
			return fit, false
		}
		choleskySolve(a[:np*np], np, b[:np])
		step := math.Hypot(b[1], b[2])
		if lim := 0.5; step > lim {
			b[1] *= lim / step
			b[2] *= lim / step
		}
		flux += b[0]
		sx += b[1]
		sy += b[2]
		if opt.FreeSky {
			sky += b[3]
		}
		damping /= 10
		if !(math.Hypot(sx-x, sy-y) < math.Max(2, radius/2)) {
			return fit, false
		}
		// Converged: steps far below the errors.
		fluxErr := 1 / math.Sqrt(math.Max(last[0], 1e-300))
		posErr := 1 / math.Sqrt(math.Max(last[np+1], 1e-300))
		if round > 1 && step < 3e-3*posErr+1e-5 && math.Abs(b[0]) < 3e-3*fluxErr+1e-6*math.Abs(flux) {
			fit.Converged = true
			break
		}
	}
	fit.X, fit.Y, fit.Flux, fit.Sky = sx, sy, flux, sky
	if !cholesky(last[:np*np], np) {
		return fit, false
	}
	c := choleskyInverse(last[:np*np], np)
	fit.FluxErr = math.Sqrt(c[0])
	if opt.FixXY {
		fit.XErr, fit.YErr = 0, 0
	} else {
		fit.XErr, fit.YErr = math.Sqrt(c[np+1]), math.Sqrt(c[2*np+2])
		fit.CovXY, fit.CovFluxX, fit.CovFluxY = c[np+2], c[1], c[2]
	}
	if opt.FreeSky {
		fit.SkyErr = math.Sqrt(c[3*np+3])
	}
	return fit, fit.Converged
}
