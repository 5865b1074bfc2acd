package artefacts

import (
	"math"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// arms is the greatest distance [px] at which a pixel is compared with others.
const arms = 4

// directions are the four lines through a pixel.
var directions = [4][2]int{{1, 0}, {0, 1}, {1, 1}, {1, -1}}

// Limits says how sharp light can be on a frame. Arm[k][d-1] is the greatest
// ratio of a pixel to the sum of the two at d steps along direction k (0: x, 1:
// y, 2 and 3: the diagonals) on both sides; Cross that to the sum of its four
// nearest; Least the smallest ratio to the same four.
type Limits struct {
	Arm   [4][arms]float64
	Cross float64
	Least float64
}

// Positions within a pixel at which a PSF is drawn, each way.
const phases = 9

// LimitsOf measures the bounds on a PSF over a frame of width × height px.
func LimitsOf(psf Renderer, width, height int) Limits {
	var l Limits
	l.Least = math.Inf(1)
	const places = 3
	for b := range places {
		for a := range places {
			// From border to border: corners are often the sharpest places.
			x := 1 + float64(a)*float64(width-1)/(places-1)
			y := 1 + float64(b)*float64(height-1)/(places-1)
			l.join(psf, x, y)
		}
	}
	return l
}

// join widens the bounds by the PSF at one field position.
func (l *Limits) join(psf Renderer, x, y float64) {
	n := 2*psf.Radius() + 1
	stamp := make([]float32, n*n)
	for p := range phases {
		for q := range phases {
			psf.Render(stamp, x, y, float64(p)/(phases-1)-0.5, float64(q)/(phases-1)-0.5)
			peak := float32(0)
			for _, v := range stamp {
				peak = max(peak, v)
			}
			for j := 1; j < n-1; j++ {
				for i := 1; i < n-1; i++ {
					at := j*n + i
					c := stamp[at]
					four := stamp[at-1] + stamp[at+1] + stamp[at-n] + stamp[at+n]
					if four > 4e-3*peak && c > 0 {
						l.Least = min(l.Least, float64(c/four))
					}
					// In the wings noise of the model would count, and light is smooth.
					if c < 0.03*peak {
						continue
					}
					l.Cross = max(l.Cross, float64(c/max(four, 1e-6*c)))
					for k, d := range directions {
						for s := 1; s <= arms; s++ {
							di, dj := d[0]*s, d[1]*s
							if i-di < 0 || i+di >= n || j-abs(dj) < 0 || j+abs(dj) >= n {
								continue
							}
							step := dj*n + di
							sum := stamp[at-step] + stamp[at+step]
							l.Arm[k][s-1] = max(l.Arm[k][s-1], float64(c/max(sum, 1e-6*c)))
						}
					}
				}
			}
		}
	}
}

// LimitsOfWidth gives bounds that hold for round profiles of the given FWHM
// [px, before integration over pixels] between a Gaussian and a Moffat profile
// of exponent 2.5, and for wider ones.
func LimitsOfWidth(fwhm float64) Limits {
	var l Limits
	l.Least = math.Inf(1)
	radius := int(math.Ceil(1.2*fwhm)) + arms + 1
	for _, beta := range []float64{2.5, 0} {
		l.join(&roundProfile{fwhm: fwhm, moffat: beta > 0, radius: min(radius, 15)}, 0, 0)
	}
	return l
}

// roundProfile renders a Gaussian or a Moffat profile of exponent 2.5,
// integrated over pixels, with a peak of about one.
type roundProfile struct {
	fwhm   float64
	moffat bool
	radius int
}

func (p *roundProfile) Radius() int { return p.radius }

func (p *roundProfile) Render(dst []float32, _, _, dx, dy float64) {
	n := 2*p.radius + 1
	if !p.moffat {
		// The Gaussian separates.
		ex, ey := make([]float64, n), make([]float64, n)
		s := p.fwhm / (2 * math.Sqrt(math.Log(2))) // exp(-r²/s²)
		for i := range n {
			u, v := float64(i-p.radius)-dx, float64(i-p.radius)-dy
			ex[i] = math.Erf((u+0.5)/s) - math.Erf((u-0.5)/s)
			ey[i] = math.Erf((v+0.5)/s) - math.Erf((v-0.5)/s)
		}
		for j := range n {
			for i := range n {
				dst[j*n+i] = float32(ex[i] * ey[j])
			}
		}
		return
	}
	// (1 + r²/a²)^-2.5, midpoint rule on 5 × 5 points; a² = (FWHM/2)² / (2^0.4 - 1).
	const sub = 5
	inv := 4 * (math.Pow(2, 0.4) - 1) / (p.fwhm * p.fwhm)
	for j := range n {
		for i := range n {
			sum := 0.0
			for t := range sub {
				v := float64(j-p.radius) - dy + (float64(t)+0.5)/sub - 0.5
				for s := range sub {
					u := float64(i-p.radius) - dx + (float64(s)+0.5)/sub - 0.5
					q := 1 + (u*u+v*v)*inv
					sum += 1 / (q * q * math.Sqrt(q))
				}
			}
			dst[j*n+i] = float32(sum / (sub * sub))
		}
	}
}

// sharpest is the width of stars that are sharper than nine in ten of the
// clean ones along their minor axis, or fwhm when there are too few of them.
func sharpest(list []stars.Star, fwhm float64) float64 {
	var widths []float64
	for i := range list {
		s := &list[i]
		if !s.Clean || !(s.FWHM > 0) || s.SN < 30 {
			continue
		}
		v := s.FWHM
		// The given width is the mean of both axes: minor² = mean²·ratio.
		if s.Roundness > 0.3 && s.Roundness <= 1 {
			v *= math.Sqrt(s.Roundness)
		}
		widths = append(widths, v)
		if len(widths) >= 1000 {
			break
		}
	}
	if len(widths) < 10 {
		return fwhm * 0.9
	}
	slices.Sort(widths)
	low := widths[len(widths)/10]
	if fwhm > 0 {
		low = min(max(low, 0.6*fwhm), fwhm)
	}
	return low
}

// chooseLimits sets the bounds from the PSF or the stars' widths, checks them
// on the frame's own clean stars and widens those that stars break.
func (f *finder) chooseLimits() {
	width := sharpest(f.in.Stars, f.in.FWHM)
	if !(width > 0) || math.IsInf(width, 0) {
		width = 1.6 // unknown: nothing much sharper is a star
	}
	width = min(max(width, 1), 25)
	f.fwhm = width
	if f.in.FWHM > 0 && f.in.FWHM < 50 {
		f.fwhm = max(width, f.in.FWHM)
	}
	if f.in.PSF != nil {
		f.limits = LimitsOf(f.in.PSF, f.w, f.h)
	} else {
		f.limits = LimitsOfWidth(0.96 * width)
	}
	m := 1 + f.cfg.LimitMargin
	for k := range f.limits.Arm {
		for d := range f.limits.Arm[k] {
			f.limits.Arm[k][d] *= m
		}
	}
	f.limits.Cross *= m
	f.limits.Least *= 0.7
	f.learn()
	f.report.Limits = f.limits
}

// learn compares the bounds with the brightest pixels of clean stars. A bound
// that more than one star in fifty breaks clearly is wrong for this frame; it
// is raised until they keep it.
func (f *finder) learn() {
	const most = 2000
	const bounds = 4*arms + 1
	over := make([][]float64, bounds)
	n := 0
	for i := range f.in.Stars {
		s := &f.in.Stars[i]
		if !s.Clean || s.SN < 50 || s.Flags&frame.Unusable != 0 || n >= most {
			continue
		}
		ic, jc := int(math.Round(s.X))-1, int(math.Round(s.Y))-1
		var worst [bounds]float64
		for j := jc - 1; j <= jc+1; j++ {
			for i := ic - 1; i <= ic+1; i++ {
				if i < 0 || j < 0 || i >= f.w || j >= f.h || !f.usable(j*f.w+i) {
					continue
				}
				for b := range bounds {
					t, ratio := f.breach(i, j, b)
					if t > 0.7*f.cfg.HitSigma {
						worst[b] = max(worst[b], ratio)
					}
				}
			}
		}
		n++
		for b, v := range worst {
			if v > 0 {
				over[b] = append(over[b], v)
			}
		}
	}
	for b, list := range over {
		allowed := max(2, n/50)
		if len(list) <= allowed {
			continue
		}
		slices.Sort(list)
		q := f.limits.bound(b)
		*q = max(*q, 1.05*list[len(list)-1-allowed])
	}
}

// bound addresses bound b: the arms in order, then the cross.
func (l *Limits) bound(b int) *float64 {
	if b == 4*arms {
		return &l.Cross
	}
	return &l.Arm[b/arms][b%arms]
}
