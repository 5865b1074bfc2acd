package simulate

import "math"

// Source is one event on one frame: a row of the truth table.
type Source struct {
	Frame   string
	ID      string
	Kind    string  // see the Kind constants
	RA, Dec float64 // deg, at mid-exposure
	X, Y    float64 // px of the frame, at mid-exposure
	Flux    float64 // count of the frame, change against the reference, signed
	Mag     float64 // mag of |Flux| in clear air
	SN      float64 // optimal signal-to-noise ratio in the difference, sky noise only
	LocalSN float64 // the same with the photon noise of the constant light there
	Light   float64 // count/px, constant light there on the frame
	Trail   float64 // px moved during the exposure
	Defects uint16  // bits of bad pixels within one FWHM, on the frame or the reference
	Covered bool    // on the reference and at least two FWHM inside both frames

	Host         string  // empty for none
	HostDistance float64 // arcsec
	HostMag      float64 // mag, NaN without host
}

// Masked tells whether a bad pixel lies within one FWHM.
func (s *Source) Masked() bool { return s.Defects != 0 }

// FrameTruth is what is true of one frame.
type FrameTruth struct {
	Frame, Path, Field, Filter, Night string
	MidMJD, Exposure                  float64
	FWHM, Major, Minor, Angle, Beta   float64    // px, px, px, deg; at the centre, before pixel integration
	Sky, Noise                        float64    // count/px at the centre; white noise per px there
	FluxScale                         float64    // counts per reference count, at the centre
	ZeroPoint                         float64    // mag of 1 count, transparency included, at the centre
	Limit                             float64    // mag of S/N 5 in the difference at the centre, sky noise only
	Affine                            [6]float64 // reference px = A0 + A1 x + A2 y, A3 + A4 x + A5 y
	Distortion                        float64    // px, largest departure from Affine
	ReferenceFWHM, ReferenceNoise     float64    // px and count of the reference
	Area                              float64    // Mpx common with the reference
	// Expected is the slug with which the frame should be set aside; empty for a
	// good frame.
	Expected string
}

// Truth is everything that was put in.
type Truth struct {
	Frames  []FrameTruth
	Sources []Source
}

// Frame returns the truth about the frame of that name, or nil.
func (t *Truth) Frame(name string) *FrameTruth {
	for i := range t.Frames {
		if t.Frames[i].Frame == name {
			return &t.Frames[i]
		}
	}
	return nil
}

// pairing computes what concerns one new frame and its reference.
type pairing struct {
	n, r           *Conditions
	nTransfer      *transfer
	rTransfer      *transfer
	nLight, rLight []float32 // constant light; nil counts as none
	nDefects       []uint16
	rDefects       []uint16
}

func newPairing(n, r *Conditions) *pairing {
	return &pairing{n: n, r: r, nTransfer: newTransfer(n.PSF.Beta), rTransfer: newTransfer(r.PSF.Beta)}
}

// toReference maps a new-frame pixel to the reference.
func (p *pairing) toReference(x, y float64) (float64, float64) {
	return p.r.Camera.SkyToPixel(p.n.Camera.PixelToSky(x, y))
}

// meanAround is the mean of a plane over a square of about one FWHM.
func meanAround(light []float32, c *Conditions, x, y, fwhm float64) float64 {
	if light == nil {
		return 0
	}
	w, h := c.Camera.Width, c.Camera.Height
	r := int(math.Round(fwhm / 2))
	i, j := int(math.Round(x))-1, int(math.Round(y))-1
	sum, n := 0.0, 0
	for b := max(0, j-r); b <= min(h-1, j+r); b++ {
		for a := max(0, i-r); a <= min(w-1, i+r); a++ {
			sum += float64(light[b*w+a])
			n++
		}
	}
	if n == 0 {
		return 0
	}
	return sum / float64(n)
}

// defectsAround collects the defect bits within radius px.
func defectsAround(d []uint16, c *Conditions, x, y, radius float64) (bits uint16) {
	if d == nil {
		return 0
	}
	w, h := c.Camera.Width, c.Camera.Height
	r := int(math.Ceil(radius))
	i, j := int(math.Round(x))-1, int(math.Round(y))-1
	for b := max(0, j-r); b <= min(h-1, j+r); b++ {
		for a := max(0, i-r); a <= min(w-1, i+r); a++ {
			if math.Hypot(float64(a+1)-x, float64(b+1)-y) <= radius+0.5 {
				bits |= d[b*w+a]
			}
		}
	}
	return bits
}

func (c *Conditions) localSky(x, y float64) float64 {
	cx, cy := c.Camera.centre()
	_, flat := c.throughput(x, y)
	return c.skyAt((x-cx)/cx, (y-cy)/cy) * flat
}

// unit returns the optimal S/N of a source of one new-frame count at (x,y),
// with sky noise alone and with the constant light's.
func (p *pairing) unit(x, y, tx, ty float64) (sky, local float64) {
	rx, ry := p.toReference(x, y)
	ns := side{psf: p.n.PSF.at(&p.n.Camera, x, y), transfer: p.nTransfer, jacobian: [2][2]float64{{1, 0}, {0, 1}}, scale: 1}
	rs := side{psf: p.r.PSF.at(&p.r.Camera, rx, ry), transfer: p.rTransfer,
		jacobian: mapJacobian(&p.n.Camera, &p.r.Camera, x, y), scale: p.n.counts(1, x, y) / p.r.counts(1, rx, ry)}
	nSky, rSky := p.n.localSky(x, y), p.r.localSky(rx, ry)
	ns.variance, rs.variance = p.n.variance(nSky), p.r.variance(rSky)
	sky = unitSN(&ns, &rs, tx, ty)
	nl := meanAround(p.nLight, p.n, x, y, ns.psf.fwhm)
	rl := meanAround(p.rLight, p.r, rx, ry, rs.psf.fwhm)
	if nl == 0 && rl == 0 {
		return sky, sky
	}
	ns.variance, rs.variance = p.n.variance(nSky+nl), p.r.variance(rSky+rl)
	return sky, unitSN(&ns, &rs, tx, ty)
}

func inside(c *Conditions, x, y, margin float64) bool {
	m := margin + float64(c.Border)
	return x >= 1+m && y >= 1+m && x <= float64(c.Camera.Width)-m && y <= float64(c.Camera.Height)-m
}

// covered tells whether a place lies on both frames, margin px inside.
func (p *pairing) covered(x, y, margin float64) bool {
	if !inside(p.n, x, y, margin) {
		return false
	}
	rx, ry := p.toReference(x, y)
	return inside(p.r, rx, ry, margin)
}

// defects collects what is wrong within about one FWHM on either frame.
func (p *pairing) defects(x, y, grow float64) uint16 {
	bits := defectsAround(p.nDefects, p.n, x, y, p.n.PSF.FWHM*grow)
	rx, ry := p.toReference(x, y)
	return bits | defectsAround(p.rDefects, p.r, rx, ry, p.r.PSF.FWHM*grow)
}

// source makes the truth row of an event, or reports that it is not on the
// frame or does not differ from the reference.
func (p *pairing) source(e *Event) (Source, bool) {
	x, y, tx, ty := p.n.path(e)
	if !inside(p.n, x, y, 0) {
		return Source{}, false
	}
	light := e.Light(p.n.MidMJD)
	if light == 0 {
		return Source{}, false
	}
	ra, dec := e.place(p.n.MidMJD)
	s := Source{
		Frame: p.n.Name, ID: e.ID, Kind: e.Kind, RA: ra, Dec: dec, X: x, Y: y,
		Flux: p.n.counts(light, x, y), Mag: -2.5 * math.Log10(math.Abs(light)),
		Light: meanAround(p.nLight, p.n, x, y, p.n.PSF.FWHM), Trail: math.Hypot(tx, ty),
		Defects: p.defects(x, y, 1), Covered: p.covered(x, y, 2*math.Max(p.n.PSF.FWHM, p.r.PSF.FWHM)),
		Host: e.Host, HostDistance: e.HostDistance, HostMag: e.HostMag,
	}
	if e.Host == "" {
		s.HostMag = math.NaN()
	}
	sky, local := p.unit(x, y, tx, ty)
	s.SN, s.LocalSN = math.Abs(s.Flux)*sky, math.Abs(s.Flux)*local
	return s, true
}

// truth describes the frame.
func (p *pairing) truth() FrameTruth {
	c := p.n
	cx, cy := c.Camera.centre()
	rx, ry := p.toReference(cx, cy)
	sh := c.PSF.at(&c.Camera, cx, cy)
	t := FrameTruth{
		Frame: c.Name, Field: c.Field, Filter: c.Filter, MidMJD: c.MidMJD, Exposure: c.Exposure,
		FWHM: sh.fwhm, Beta: sh.beta, Sky: c.localSky(cx, cy), Noise: math.Sqrt(c.variance(c.localSky(cx, cy))),
		FluxScale:     c.counts(1, cx, cy) / p.r.counts(1, rx, ry),
		ZeroPoint:     2.5 * math.Log10(c.counts(1, cx, cy)),
		ReferenceFWHM: p.r.PSF.FWHM, ReferenceNoise: math.Sqrt(p.r.variance(p.r.Sky)),
	}
	t.Major, t.Minor, t.Angle = sh.majorMinor()
	sky, _ := p.unit(cx, cy, 0, 0)
	t.Limit = t.ZeroPoint - 2.5*math.Log10(5/sky)
	t.Affine, t.Distortion = p.affine()
	const n = 64
	w, h := float64(c.Camera.Width), float64(c.Camera.Height)
	for b := range n {
		for a := range n {
			if p.covered((float64(a)+0.5)/n*w+0.5, (float64(b)+0.5)/n*h+0.5, 0) {
				t.Area += w * h / (n * n) / 1e6
			}
		}
	}
	return t
}

// affine fits the map from new to reference pixels by least squares on a grid
// that is symmetric about the centre, where the sums separate.
func (p *pairing) affine() (a [6]float64, worst float64) {
	cx, cy := p.n.Camera.centre()
	const n = 5
	var sx, sy, sxx, syy, xu, xv, yu, yv float64
	type node struct{ u, v, x, y float64 }
	var nodes []node
	for b := -n; b <= n; b++ {
		for c := -n; c <= n; c++ {
			u, v := float64(c)/n*(cx-1), float64(b)/n*(cy-1)
			x, y := p.toReference(cx+u, cy+v)
			nodes = append(nodes, node{u, v, x, y})
			sx, sy = sx+x, sy+y
			sxx, syy = sxx+u*u, syy+v*v
			xu, xv, yu, yv = xu+x*u, xv+x*v, yu+y*u, yv+y*v
		}
	}
	m := float64(len(nodes))
	a[1], a[2], a[4], a[5] = xu/sxx, xv/syy, yu/sxx, yv/syy
	a[0] = sx/m - a[1]*cx - a[2]*cy
	a[3] = sy/m - a[4]*cx - a[5]*cy
	for _, q := range nodes {
		x, y := cx+q.u, cy+q.v
		worst = math.Max(worst, math.Hypot(a[0]+a[1]*x+a[2]*y-q.x, a[3]+a[4]*x+a[5]*y-q.y))
	}
	return a, worst
}
