package subtract

import (
	"context"
	"math"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
)

// Proper subtraction (Zackay, Ofek & Gal-Yam 2016, ApJ 830, 27, "ZOGY") takes
// the transfer between the two frames from their point-spread functions
// instead of a kernel fitted to the pixels. With the reference in counts of the
// new frame (their F_n = F_r = 1) the paper's equation 13 is
//
//	D̂ = (P̂_r N̂ − P̂_n R̂) / √(σ_n² |P̂_r|² + σ_r² |P̂_n|²)
//
// and its noise is white with unit variance. Divided by P̂_r above and by |P̂_r|
// below it reads, with B̂ = P̂_n/P̂_r and up to the phase of P̂_r, which changes
// neither the noise nor the score,
//
//	D̂ = (N̂ − B̂ R̂) / √(σ_n² + σ_r² |B̂|²).
//
// This is the whitened difference of a matching kernel whose transfer function
// is B̂, so everything after it is shared with the kernel's way. Times the root
// of Φ(0) = σ_n² + σ_r² it has the unit of the new frame, and a source of f
// counts shows as f times P_D, the inverse transform of P̂_n √(Φ(0)/Φ), which is
// the paper's equation 14 in these units. The reference's noise went through
// its resampling, which adds the factor |L̂|² to σ_r².
//
// B̂ grows without limit where the reference has no power left, but is only
// ever used together with the whitening, which bounds the product by the ratio
// of the two noises: nothing is sharpened beyond what the noise allows.
//
// Transfer functions are taken at the centres of overlapping tiles, with their
// slopes along x and y, so that neighbouring tiles meet without a step.

// properHalo is what a tile reads around itself [px], at least.
const properHalo = 32

// ratioFloor is the P̂_r below which B̂ is let go to zero: what a model knows of
// a point-spread function ends there.
const ratioFloor = 1e-4

// fillFloor is the same for the prediction that fills flagged pixels. There is
// no whitening behind it, so that it must not amplify noise.
const fillFloor = 0.03

// properMatch subtracts by the two point-spread functions.
type properMatch struct {
	*job
	flux   float64 // counts of the new frame for one of the reference, from the stars
	trim   *trim   // correction of B̂ learnt from the stars; nil for none
	radius int     // of the stamps in which the point-spread functions are drawn [px]
	varies bool    // whether either point-spread function changes over the field

	stamps    []*stamp // behind the trim
	trimShape shape
}

func (j *job) newProperMatch(ctx context.Context, info *Info) (*properMatch, error) {
	m := &properMatch{job: j, flux: info.FluxScale}
	m.radius = min(tileSize/4-1, 3*max(j.newPSF.Radius(), j.refPSF.Radius())/2)
	m.varies = j.newPSF.ShapeOrder > 0 || j.newPSF.GridOrder > 0 || j.refPSF.ShapeOrder > 0 || j.refPSF.GridOrder > 0
	info.Method = MethodProper
	info.Direction = "both"
	info.DirectionReason = "proper subtraction gives each frame the other's point-spread function"
	info.KernelSum = m.flux
	err := m.refine(ctx, info)
	return m, err
}

func (m *properMatch) scale(x, y float64) float64 {
	if m.trim == nil {
		return m.flux
	}
	var c [trimTerms]float64
	m.trim.at(&c, x, y)
	return m.flux * (1 + c[0])
}

func (m *properMatch) blurring() blur { return blur{} }
func (m *properMatch) whitens() bool  { return true }

func (m *properMatch) spectra(plan *fft.Plan) func(dst []complex64, x, y float64) {
	r := m.newRatio(plan)
	return func(dst []complex64, x, y float64) {
		r.set(x, y)
		r.transfer(dst, ratioFloor)
	}
}

// ratio computes B̂ for tiles of one plan. It serves one goroutine.
type ratio struct {
	match      *properMatch
	plan       *fft.Plan
	radius     int
	new, ref   []complex64           // P̂_n, P̂_r at the place
	slopes     [2][2]*slope          // along x and y, of the new frame's and the reference's
	stamp      []float32             // drawn PSF
	other      []float32             // a second one
	pixels     []float32             // plan's tile
	scale      float64               // flux scale
	trim       [3][trimTerms]float64 // its values and slopes
	correction *trimSpectrum
	row        []complex64
}

// slope is the derivative of a transfer function along one axis [1/px].
type slope struct{ spectrum []complex64 }

func (m *properMatch) newRatio(plan *fft.Plan) *ratio {
	r := &ratio{match: m, plan: plan, radius: min(m.radius, plan.Height/2-1),
		new: make([]complex64, plan.SpectrumLen()), ref: make([]complex64, plan.SpectrumLen()),
		pixels: make([]float32, plan.TileLen())}
	size := 2*r.radius + 1
	r.stamp, r.other = make([]float32, size*size), make([]float32, size*size)
	r.correction = newTrimSpectrum(plan)
	r.row = make([]complex64, 2*plan.SpectrumWidth())
	return r
}

// set takes the point-spread functions at a FITS position.
func (r *ratio) set(x, y float64) {
	m := r.match
	for _, p := range []struct {
		render func(dst []float32, x, y, dx, dy float64)
		dst    []complex64
	}{{m.newPSF.Render, r.new}, {m.refPSF.Render, r.ref}} {
		p.render(r.stamp, x, y, 0, 0)
		wrap(r.pixels, r.plan.Height, r.stamp, r.radius)
		r.plan.Forward(p.dst, r.pixels)
	}
	r.scale = m.flux
	r.trim = [3][trimTerms]float64{}
	if m.trim != nil {
		m.trim.at(&r.trim[0], x, y)
	}
}

// setSlopes adds the derivatives at the same position, from differences over
// ±step px.
func (r *ratio) setSlopes(x, y, step float64) {
	m := r.match
	// The slopes are those of the cores: wings hardly change.
	small := min(r.radius, max(m.newPSF.Radius(), m.refPSF.Radius()))
	size := 2*small + 1
	a, b := r.stamp[:size*size], r.other[:size*size]
	for axis, d := range [2][2]float64{{step, 0}, {0, step}} {
		for f, render := range []func(dst []float32, x, y, dx, dy float64){m.newPSF.Render, m.refPSF.Render} {
			if r.slopes[axis][f] == nil {
				r.slopes[axis][f] = &slope{make([]complex64, r.plan.SpectrumLen())}
			}
			render(a, x+d[0], y+d[1], 0, 0)
			render(b, x-d[0], y-d[1], 0, 0)
			for i, v := range b {
				a[i] = (a[i] - v) / float32(2*step)
			}
			wrap(r.pixels, r.plan.Height, a, small)
			r.plan.Forward(r.slopes[axis][f].spectrum, r.pixels)
		}
		if m.trim != nil {
			var after, before [trimTerms]float64
			m.trim.at(&after, x+d[0], y+d[1])
			m.trim.at(&before, x-d[0], y-d[1])
			for k := range after {
				r.trim[1+axis][k] = (after[k] - before[k]) / (2 * step)
			}
		}
	}
}

// transfer writes B̂ = F·P̂_n·P̂_r* / (|P̂_r|² + floor²) · C.
func (r *ratio) transfer(dst []complex64, floor float32) {
	floor2 := floor * floor
	scale := float32(r.scale)
	for i, p := range r.ref {
		n := r.new[i]
		f := scale / (real(p)*real(p) + imag(p)*imag(p) + floor2)
		dst[i] = complex(f*(real(n)*real(p)+imag(n)*imag(p)), f*(imag(n)*real(p)-real(n)*imag(p)))
	}
	if r.match.trim != nil {
		half := r.plan.SpectrumWidth()
		c := r.row[:half]
		for v := range r.plan.Height {
			r.correction.row(c, &r.trim[0], v, 1)
			fft.Multiply(dst[v*half:(v+1)*half], dst[v*half:(v+1)*half], c)
		}
	}
}

// transferSlope writes the derivative of B̂ along an axis, with B̂ in b.
func (r *ratio) transferSlope(dst, b []complex64, axis int) {
	const floor2 = ratioFloor * ratioFloor
	half := r.plan.SpectrumWidth()
	dn, dr := r.slopes[axis][0].spectrum, r.slopes[axis][1].spectrum
	scale := float32(r.scale)
	trimmed := r.match.trim != nil
	c, dc := r.row[:half], r.row[half:]
	for v := range r.plan.Height {
		if trimmed {
			r.correction.row(c, &r.trim[0], v, 1)
			r.correction.row(dc, &r.trim[1+axis], v, 0)
		}
		for u := range half {
			i := v*half + u
			p, n := r.ref[i], r.new[i]
			q, o := dr[i], dn[i]
			f := 1 / (real(p)*real(p) + imag(p)*imag(p) + floor2)
			pc, qc := complex(real(p), -imag(p)), complex(real(q), -imag(q))
			bare := complex(scale*f, 0) * (o*pc + n*qc)
			change := -2 * f * (real(p)*real(q) + imag(p)*imag(q))
			if !trimmed {
				dst[i] = bare + complex(change, 0)*b[i]
				continue
			}
			dst[i] = bare*c[u] + complex(change, 0)*b[i] + complex(scale*f, 0)*n*pc*dc[u]
		}
	}
}

// properTile computes one tile of a proper difference. It serves one goroutine.
type properTile struct {
	match      *properMatch
	plan       *fft.Plan
	ratio      *ratio
	halo       int
	b          []complex64 // B̂
	slope      []complex64 // its derivative
	psi        []float32
	gx, gy     []float32
	new, ref   []complex64 // spectra of the frames
	product    []complex64
	pixels     []float32
	diff       []float32
	static     []float32
	power      float64 // variance of static for a reference of unit variance
	photonsNew float64 // factors on the photon noise of the two frames
	photonsRef float64
}

func (m *properMatch) newTile(plan *fft.Plan, halo int) *properTile {
	n := plan.SpectrumLen()
	return &properTile{match: m, plan: plan, ratio: m.newRatio(plan), halo: halo,
		b: make([]complex64, n), slope: make([]complex64, n), psi: make([]float32, n),
		gx: make([]float32, tileSize), gy: make([]float32, tileSize),
		new: make([]complex64, n), ref: make([]complex64, n), product: make([]complex64, n),
		pixels: make([]float32, plan.TileLen()), diff: make([]float32, plan.TileLen()), static: make([]float32, plan.TileLen())}
}

// transfers sets B̂ and ψ̂ for a place with the levels of noise of a tile.
func (p *properTile) transfers(x, y float64, t tile) {
	m := p.match
	p.ratio.set(x, y)
	p.ratio.transfer(p.b, ratioFloor)
	newV, refV := m.levels(t)
	m.resampling.power(p.gx, p.gy, t)
	sum := float64(real(p.b[0]))
	zero := newV + refV*sum*sum
	vn, vr := float32(newV/zero), float32(refV/zero)
	half, side := p.plan.SpectrumWidth(), p.plan.Height
	step := tileSize / side
	var power, light, lightNew, lightRef float64
	for v := range side {
		gy := vr * p.gy[v*step]
		for u := range half {
			i := v*half + u
			b := p.b[i]
			b2 := real(b)*real(b) + imag(b)*imag(b)
			g := gy * p.gx[u*step]
			psi2 := 1 / max(vn+g*b2, whiteningFloor)
			p.psi[i] = float32(math.Sqrt(float64(psi2)))
			n := p.ratio.new[i]
			w := float64(psi2) * float64(real(n)*real(n)+imag(n)*imag(n)) // |P̂_D|²
			if u == 0 || u == half-1 {
				w *= 0.5
			}
			k := 1.0
			if u == 0 || u == half-1 {
				k = 0.5
			}
			through := float64(psi2 * b2 * p.gx[u*step] * p.gy[v*step])
			power += 2 * k * through
			light += w
			lightNew += w * float64(psi2)
			lightRef += w * through
		}
	}
	p.power = power / float64(side*side)
	p.photonsNew = lightNew / light
	p.photonsRef = lightRef / light / (sum * sum)
}

// load reads the frames around a tile. Pixels that must not be used are
// replaced: the reference's by the new frame, scaled; the new frame's by what
// the reference predicts.
func (p *properTile) load(t tile) {
	m := p.match
	pair := m.pair
	side, halo := p.plan.Height, p.halo
	scale := float32(1 / m.flux)
	flagged := false
	clear(p.pixels)
	x0, x1 := max(0, t.x0-halo), min(m.width, min(t.x1+halo, t.x0-halo+side))
	y0, y1 := max(0, t.y0-halo), min(m.height, min(t.y1+halo, t.y0-halo+side))
	for y := y0; y < y1; y++ {
		dst := p.pixels[(y-t.y0+halo)*side+x0-t.x0+halo:][:x1-x0]
		ref, refBits := pair.Reference.Image.Row(y)[x0:x1], pair.Reference.Flags.Row(y)[x0:x1]
		new, newBits := m.plain.Row(y)[x0:x1], m.newFlags.Row(y)[x0:x1]
		for i := range dst {
			v := ref[i]
			if newBits[i]&frame.Unusable != 0 {
				flagged = true
				if refBits[i]&(frame.NoReference|frame.NoData) != 0 || v != v {
					v = 0
				}
			} else if refBits[i]&frame.Unusable != 0 || v != v {
				v = new[i] * scale
			}
			dst[i] = v
		}
	}
	p.plan.Forward(p.ref, p.pixels)
	if flagged {
		p.ratio.transfer(p.slope, fillFloor)
		fft.Multiply(p.product, p.ref, p.slope)
		p.plan.Inverse(p.static, p.product)
	}
	clear(p.pixels)
	for y := y0; y < y1; y++ {
		at := (y-t.y0+halo)*side + x0 - t.x0 + halo
		dst := p.pixels[at:][:x1-x0]
		copy(dst, m.plain.Row(y)[x0:x1])
		if flagged {
			for i, bits := range m.newFlags.Row(y)[x0:x1] {
				if bits&frame.Unusable != 0 || dst[i] != dst[i] {
					dst[i] = p.static[at+i]
				}
			}
		}
	}
	p.plan.Forward(p.new, p.pixels)
}

// compute fills diff and static for a tile: the difference in counts of the new
// frame with white noise, and the reference's part in it.
func (p *properTile) compute(t tile) {
	x, y := t.centre()
	p.transfers(x, y, t)
	p.load(t)
	half, side := p.plan.SpectrumWidth(), p.plan.Height
	for i, s := range p.psi {
		taken := complex(s, 0) * p.b[i] * p.ref[i]
		p.slope[i] = taken
		p.product[i] = complex(s, 0)*p.new[i] - taken
	}
	p.plan.Inverse(p.static, p.slope)
	p.plan.Inverse(p.diff, p.product)
	if !p.match.varies && p.match.trim == nil {
		return
	}
	reach := 0.5 * float64(max(t.x1-t.x0, t.y1-t.y0))
	p.ratio.setSlopes(x, y, reach)
	newV, refV := p.match.levels(t)
	sum := float64(real(p.b[0]))
	vr := float32(refV / (newV + refV*sum*sum))
	step := tileSize / side
	for axis := range 2 {
		p.ratio.transferSlope(p.slope, p.b, axis)
		// ψ' = −ψ³ v_r |L|² Re(B* B'); the floor of ψ is constant.
		for v := range side {
			gy := vr * p.gy[v*step]
			for u := range half {
				i := v*half + u
				b, s, psi := p.b[i], p.slope[i], p.psi[i]
				change := -psi * psi * psi * gy * p.gx[u*step] * (real(b)*real(s) + imag(b)*imag(s))
				taken := (complex(change, 0)*b + complex(psi, 0)*s) * p.ref[i]
				p.product[i] = complex(change, 0)*p.new[i] - taken
				p.slope[i] = taken
			}
		}
		p.plan.Inverse(p.pixels, p.slope)
		p.add(p.static, t, axis, x, y)
		p.plan.Inverse(p.pixels, p.product)
		p.add(p.diff, t, axis, x, y)
	}
}

// add adds the slope in pixels times the distance from the tile's centre.
func (p *properTile) add(dst []float32, t tile, axis int, x, y float64) {
	side := p.plan.Height
	for v := p.halo; v < p.halo+t.y1-t.y0; v++ {
		row := dst[v*side+p.halo:][:t.x1-t.x0]
		part := p.pixels[v*side+p.halo:][:t.x1-t.x0]
		if axis == 1 {
			f := float32(float64(t.y0-p.halo+v+1) - y)
			for i, s := range part {
				row[i] += f * s
			}
			continue
		}
		f := float32(float64(t.x0+1) - x)
		for i, s := range part {
			row[i] += f * s
			f++
		}
	}
}

// halo is what a tile reads around itself.
func (m *properMatch) halo() int {
	return min(tileSize/4-8, max(properHalo, m.newPSF.Radius()+8, m.refPSF.Radius()+8))
}

func (m *properMatch) difference(ctx context.Context, regions []tile) error {
	halo := m.halo()
	if regions == nil {
		regions = tiling(m.width, m.height, halo)
	}
	return forTiles(ctx, m.cfg.Workers, regions, func() func(tile) {
		p := m.newTile(fft.NewPlan(tileSize, tileSize), halo)
		return func(t tile) {
			p.compute(t)
			store(m.static, p.static, t, halo)
			store(m.diff, p.diff, t, halo)
			m.variance(p, t)
		}
	})
}

// variance fills vari of one tile and clears masked pixels of the difference.
// It is the sky part of both frames and the photon noise of the static light,
// which reaches the score through the frames' own transfer functions: the
// paper's V(S_N) and V(S_R), equations 25 to 28, for light that is smooth over a
// point-spread function.
func (m *properMatch) variance(p *properTile, t tile) {
	const masked = frame.Unusable | frame.Edge
	x, y := t.centre()
	sum := m.scale(x, y)
	scale2 := sum * sum
	perCount := p.photonsNew/m.newGain + p.photonsRef*sum/m.refGain
	for y := t.y0; y < t.y1; y++ {
		static, diff, vari := m.static.Row(y), m.diff.Row(y), m.vari.Row(y)
		newV, refV := m.pair.New.Variance.Row(y), m.pair.Reference.Variance.Row(y)
		flags := m.flags.Row(y)
		for x := t.x0; x < t.x1; x++ {
			s := float64(static[x])
			v := float64(newV[x]) + scale2*float64(refV[x])
			if s > 0 && s*s > 9*p.power*float64(refV[x]) {
				v += s * perCount
			}
			if !(v > 0) || math.IsInf(v, 0) {
				v = float64(newV[x])
				flags[x] |= frame.NoData
			}
			vari[x] = float32(v)
			if flags[x]&masked != 0 {
				diff[x] = 0
			}
		}
	}
}

func (m *properMatch) squares() float64 {
	p := m.newTile(fft.NewPlan(tileSize, tileSize), 0)
	p.transfers(float64(m.width+1)/2, float64(m.height+1)/2, tile{0, 0, m.width, m.height})
	return p.power
}

// grow joins the flags of both frames, each grown by the footprint with which
// it enters the difference.
func (m *properMatch) grow() {
	pair := m.pair
	m.flags = m.newFlags.Clone()
	dilate(m.flags, frame.Saturated)
	noise := pair.NewBackground.MedianNoise
	refNoise := math.Sqrt(float64(medianOf(pair.Reference.Variance.Pix)))
	const half = 24
	p := m.newTile(fft.NewPlan(tileSize, tileSize), 0)
	kernelAt := func(ofReference bool) func(dst []float64, x, y float64) []float64 {
		return func(dst []float64, x, y float64) []float64 {
			const around = tileSize / 2
			p.transfers(x, y, tile{int(x) - around, int(y) - around, int(x) + around, int(y) + around})
			for i, s := range p.psi {
				if ofReference {
					p.product[i] = complex(s, 0) * p.b[i]
				} else {
					p.product[i] = complex(s, 0)
				}
			}
			p.plan.Inverse(p.pixels, p.product)
			return unwrap(dst, p.pixels, tileSize, half)
		}
	}
	saturation := pair.Reference.Meta.Saturation
	refAmplitude := func(i, j int, bits frame.Flag) float64 {
		at := j*m.width + i
		if bits&(frame.Saturated|frame.Bleed) != 0 {
			a := math.Abs(float64(pair.Reference.Image.Pix[at]))
			if saturation > a || math.IsNaN(a) {
				a = max(0, saturation)
			}
			return max(a, 10*refNoise)
		}
		// Filled from the new frame, which is sharper or blurred.
		return max(10*refNoise, 0.5*math.Abs(float64(m.plain.Pix[at]))/m.flux)
	}
	growFlags(m.flags, pair.Reference.Flags, refAmplitude, kernelAt(true), half, noise)
	m.growLeaks(refAmplitude, noise)
	for at, bits := range pair.Reference.Flags.Bits {
		m.flags.Bits[at] |= bits
	}
	centre := kernelAt(true)(nil, float64(m.width+1)/2, float64(m.height+1)/2)
	wrong := m.fillError(p)
	newAmplitude := func(i, j int, bits frame.Flag) float64 {
		// Filled by prediction: the noise is missing and part of the light is.
		return noise + wrong*math.Abs(float64(pair.Reference.Image.Pix[j*m.width+i]))*m.flux
	}
	growFlags(m.flags, m.newFlags, newAmplitude, kernelAt(false), half, noise)
	band := max(2, reachOf(centre, half, 0.02))
	markEdges(m.flags, min(band, half/2)+1)
}

// growLeaks flags what the saturated pixels of the reference may have changed
// together. The wings of point-spread functions fall slowly: where each pixel of
// a bleed trail does no harm, the whole trail still may.
func (m *properMatch) growLeaks(amplitude func(i, j int, bits frame.Flag) float64, noise float64) {
	const (
		tolerance = 0.25 // of the noise of a pixel; a score gathers a dozen of them
		bright    = frame.Saturated | frame.Bleed
	)
	halo := m.halo()
	limit := float32(tolerance * noise)
	// A background context: the tiles are few and the work is short.
	err := forTiles(context.Background(), m.cfg.Workers, tiling(m.width, m.height, halo), func() func(tile) {
		p := m.newTile(fft.NewPlan(tileSize, tileSize), halo)
		return func(t tile) {
			clear(p.pixels)
			found := false
			for y := max(0, t.y0-halo); y < min(m.height, t.y1+halo); y++ {
				row := p.pixels[(y-t.y0+halo)*tileSize:]
				bits := m.pair.Reference.Flags.Row(y)
				for x := max(0, t.x0-halo); x < min(m.width, t.x1+halo); x++ {
					if bits[x]&bright != 0 {
						row[x-t.x0+halo] = float32(amplitude(x, y, bits[x]))
						found = true
					}
				}
			}
			if !found {
				return
			}
			x, y := t.centre()
			p.transfers(x, y, t)
			p.plan.Forward(p.ref, p.pixels)
			for i, s := range p.psi {
				p.product[i] = complex(s, 0) * p.b[i] * p.ref[i]
			}
			p.plan.Inverse(p.pixels, p.product)
			for y := t.y0; y < t.y1; y++ {
				flags := m.flags.Row(y)
				for x, leak := range p.pixels[(y-t.y0+halo)*tileSize+halo:][:t.x1-t.x0] {
					if leak > limit || leak < -limit {
						flags[t.x0+x] |= frame.Saturated
					}
				}
			}
		}
	})
	if err != nil {
		panic("subtract: growing flags was interrupted: " + err.Error())
	}
}

// fillError is the part of a star's light that the prediction for flagged
// pixels misses, root mean square after whitening. The transfers of the tile
// are those in use.
func (m *properMatch) fillError(p *properTile) float64 {
	p.ratio.transfer(p.slope, fillFloor)
	var wrong, all float64
	for i, s := range p.psi {
		d := complex(s, 0) * (p.b[i] - p.slope[i]) * p.ratio.ref[i]
		b := complex(s, 0) * p.b[i] * p.ratio.ref[i]
		wrong += float64(real(d)*real(d) + imag(d)*imag(d))
		all += float64(real(b)*real(b) + imag(b)*imag(b))
	}
	return math.Sqrt(wrong / all)
}

// unwrap copies the middle of a kernel whose centre is the first pixel of a
// square tile.
func unwrap(dst []float64, pixels []float32, side, half int) []float64 {
	n := 2*half + 1
	if len(dst) != n*n {
		dst = make([]float64, n*n)
	}
	for v := range n {
		row := pixels[((v-half+side)%side)*side:]
		for u := range n {
			dst[v*n+u] = float64(row[(u-half+side)%side])
		}
	}
	return dst
}
