// Package subtract takes the reference away from a new frame.
//
// The reference is convolved with a position-dependent kernel fitted to the
// stars that both frames show (Alard & Lupton 1998, ApJ 503, 325; spatial
// variation after Alard 2000, A&AS 144, 363). When the new frame is the
// sharper one in any direction it is blurred by a known Gaussian first, so
// that the kernel never has to sharpen. The difference is then whitened, so
// that its noise is independent from pixel to pixel again, and searched by a
// matched filter whose output is N(0,1) on empty sky. With whitened noise the
// score is the one of Zackay, Ofek & Gal-Yam 2016, ApJ 830, 27.
package subtract

import (
	"context"
	"fmt"
	"math"
	"sort"

	"nightsift/align"
	"nightsift/internal/artefacts"
	"nightsift/internal/fft"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/stars"
)

// job carries what the steps of one subtraction share.
type job struct {
	cfg    Config
	pair   *align.Pair
	width  int
	height int

	newGain, refGain float64 // electron per count of their own frame; Inf if unknown

	newFlags       *frame.Mask // of the new frame, with what was found on it
	artefacts      *artefacts.Report
	newPSF, refPSF *psf.Model
	fluxes         fluxes
	resampling     *resampling
	match          matcher

	plain      *frame.Image // new frame without sky
	static     *frame.Image // the reference as it was taken away, count of the new frame
	diff       *frame.Image
	vari       *frame.Image
	spare      *frame.Image // a plane for results that replace diff
	flags      *frame.Mask
	grownFlags bool // by the chosen way, when the trial did it
}

// Subtract compares the two frames of a pair. The pair is only read.
//
// A *frame.Problem is returned when the frame must be set aside: too few
// stars, or a difference that is not as clean as its noise predicts.
func Subtract(ctx context.Context, pair *align.Pair, cfg Config) (*Difference, error) {
	d, _, err := run(ctx, pair, cfg)
	return d, err
}

// run is Subtract, and returns the job with what was solved.
func run(ctx context.Context, pair *align.Pair, cfg Config) (*Difference, *job, error) {
	n, r := pair.New, pair.Reference
	if !n.Image.SameShape(r.Image) {
		panic(fmt.Sprintf("subtract: new frame is %d×%d, reference %d×%d", n.Image.Width, n.Image.Height, r.Image.Width, r.Image.Height))
	}
	j := &job{cfg: cfg, pair: pair, width: n.Image.Width, height: n.Image.Height}
	d := &Difference{Frame: n, Info: j.inputInfo()}
	j.newGain = gainOr(n.Meta.Gain, pair.NewVariance.SkyGain)
	j.refGain = gainOr(r.Meta.Gain, math.Inf(1))

	newSub := frame.NewImage(j.width, j.height)
	pair.NewBackground.Subtract(newSub, n.Image)
	d.New = newSub
	if err := j.fitPSFs(newSub, &d.Info); err != nil {
		return nil, nil, err
	}
	if err := j.findArtefacts(newSub, &d.Info); err != nil {
		return nil, nil, err
	}
	d.Artefacts = j.artefacts
	if err := ctx.Err(); err != nil {
		return nil, nil, err
	}

	j.plain = newSub
	j.resampling = newResampling(j.locator(), pair.InterpolationPower)
	if err := j.chooseMatcher(ctx, &d.Info); err != nil {
		return nil, nil, err
	}
	j.allocate()
	if !j.grownFlags {
		j.match.grow()
	}
	if err := j.match.difference(ctx, nil); err != nil {
		return nil, nil, err
	}
	if err := j.flatten(d.Info.FWHMNew); err != nil {
		return nil, nil, err
	}
	d.Image, d.Variance, d.Flags, d.Reference = j.diff, j.vari, j.flags, j.static
	d.PSF = j.tabulatePSF()

	// Significance.
	d.Significance = frame.NewImage(j.width, j.height)
	d.Info.NoiseScale = 1
	rounds := 1
	if pair.NewVariance.Correlated() || pair.ReferenceVariance.Correlated() {
		rounds = 3 // noise; residue at stars, which depends on it; both
	}
	for round := 1; round <= rounds; round++ {
		if round > 1 || rounds == 1 {
			j.probe(d)
		}
		if err := score(ctx, d.Significance, j.scoring(d)); err != nil {
			return nil, nil, err
		}
		if round < rounds {
			j.learnNoise(d)
		}
	}
	j.measureNoise(d)
	d.ReferenceStars = j.referenceStars()
	if d.Info.UsablePixels == 0 {
		return nil, nil, frame.Problemf(frame.ProblemNoOverlap, "no pixel of %s is left to search after masking", n.Name)
	}
	if q := d.Info.NoiseRatio; !(q >= cfg.NoiseRatioLow && q <= cfg.NoiseRatioHigh) {
		return nil, nil, frame.Problemf(frame.ProblemSubtractionPoor,
			"SIGNIFICANCE on empty sky spreads by %.3f, expected 1 (accepted %.2f to %.2f): the noise is not as gain, read noise and sky predict, or the frames do not match",
			q, cfg.NoiseRatioLow, cfg.NoiseRatioHigh)
	}
	return d, j, nil
}

// scoring is what the matched filter reads for a difference.
func (j *job) scoring(d *Difference) scoreInput {
	halo := j.newPSF.Radius() + 2
	if j.match.whitens() {
		halo += 6
	}
	halo = min(halo, tileSize/4)
	return scoreInput{
		difference: d.Image, variance: d.Variance, static: d.Reference, flags: d.Flags,
		halo: halo, tiles: tiling(j.width, j.height, halo), workers: j.cfg.Workers,
		prepare: j.preparePSF, jitter: d.Info.JitterPx, scaleError: d.Info.ScaleError, shapeError: d.Info.ShapeError, fwhm: d.Info.FWHMNew,
	}
}

func gainOr(gain, fallback float64) float64 {
	if gain > 0 && !math.IsInf(gain, 0) {
		return gain
	}
	if fallback > 0 {
		return fallback
	}
	return math.Inf(1)
}

func (j *job) inputInfo() Info {
	p := j.pair
	return Info{
		ReferenceName:     p.Reference.Name,
		ReferenceChecksum: p.Reference.Checksum,
		Sky:               p.NewBackground.MedianSky,
		SkyNoise:          p.NewBackground.MedianNoise,
		StarsMatched:      len(p.Matches),
		AstrometryRMS:     p.RMS(),
		NoiseSource:       p.NewVariance.Source,
		ModelNoise:        p.NewVariance.ModelNoise,
		MeasuredNoise:     p.NewVariance.MeasuredNoise,
	}
}

func (j *job) fitPSFs(newSub *frame.Image, info *Info) error {
	p := j.pair
	var err error
	j.newPSF, err = psf.Fit(newSub, p.New.Variance, p.New.Flags, p.NewStars.Stars, j.newGain, j.cfg.PSF)
	if err != nil {
		return fmt.Errorf("point-spread function of %s: %w", p.New.Name, err)
	}
	j.refPSF, err = psf.Fit(p.Reference.Image, p.Reference.Variance, p.Reference.Flags, p.ReferenceStars, j.refGain, j.cfg.PSF)
	if err != nil {
		return fmt.Errorf("point-spread function of the reference %s: %w", p.Reference.Name, err)
	}
	cx, cy := float64(j.width+1)/2, float64(j.height+1)/2
	info.FWHMNew = j.newPSF.FWHM(cx, cy)
	info.FWHMReference = j.refPSF.FWHM(cx, cy)
	info.StarsPSFNew = j.newPSF.Stars
	info.StarsPSFRef = j.refPSF.Stars
	return nil
}

// findArtefacts flags what is no light from the sky: hits, trails, bad lines.
func (j *job) findArtefacts(newSub *frame.Image, info *Info) error {
	p := j.pair
	j.newFlags = p.New.Flags.Clone()
	report, err := artefacts.Find(artefacts.Input{
		Image: newSub, Variance: p.New.Variance, Flags: j.newFlags, Counts: p.New.Image,
		FWHM: p.NewStars.FWHM, Gain: j.newGain, PSF: j.newPSF, Stars: p.NewStars.Stars,
	}, j.cfg.Artefacts)
	if err != nil {
		return err
	}
	j.artefacts = report
	info.Hits, info.HitPixels, info.Trails, info.BadLines = report.Hits, report.HitPixels, len(report.Streaks), len(report.Lines)
	return nil
}

// blurNew convolves the new frame with the direction's Gaussian. Flagged
// pixels are first given the reference's value at the same place, so that what
// was wrong there does not spread.
func (j *kernelMatch) blurNew(ctx context.Context, newSub *frame.Image) (*frame.Image, error) {
	filled := newSub.Clone()
	j.filled = filled
	for at, bits := range j.newFlags.Bits {
		if bits&frame.Unusable != 0 {
			filled.Pix[at] = 0
			if j.pair.Reference.Flags.Bits[at]&(frame.NoReference|frame.NoData) == 0 {
				filled.Pix[at] = float32(j.pair.FluxScale) * j.pair.Reference.Image.Pix[at]
			}
		}
	}
	out := frame.NewImage(j.width, j.height)
	b := j.direction.blur
	halo := int(math.Ceil(5*math.Sqrt(max(b.xx, b.yy)))) + 2
	err := forTiles(ctx, j.cfg.Workers, tiling(j.width, j.height, halo), func() func(tile) {
		plan := fft.NewPlan(tileSize, tileSize)
		spectrum := make([]complex64, plan.SpectrumLen())
		pixels := make([]float32, tileSize*tileSize)
		transfer := make([]float32, plan.SpectrumLen())
		half := plan.SpectrumWidth()
		for v := range tileSize {
			for u := range half {
				transfer[v*half+u] = float32(b.transfer(float64(u)/tileSize, frequency(v)))
			}
		}
		return func(t tile) {
			load(pixels, filled, t, halo)
			plan.Forward(spectrum, pixels)
			scaleReal(spectrum, transfer)
			plan.Inverse(pixels, spectrum)
			store(out, pixels, t, halo)
		}
	})
	return out, err
}

// store copies the core of a Fourier tile to the frame.
func store(dst *frame.Image, pixels []float32, t tile, halo int) {
	for y := t.y0; y < t.y1; y++ {
		copy(dst.Row(y)[t.x0:t.x1], pixels[(y-t.y0+halo)*tileSize+halo:])
	}
}

// solveKernel chooses basis and stamps from the two widths and solves.
func (j *kernelMatch) solveKernel(ctx context.Context, info *Info) error {
	p := j.pair
	cx, cy := float64(j.width+1)/2, float64(j.height+1)/2
	nxx, nyy, _ := j.newPSF.Moments(cx, cy)
	rxx, ryy, _ := j.refPSF.Moments(cx, cy)
	b := j.direction.blur
	// Width of the Gaussian that takes the reference to the new frame.
	match := math.Sqrt(max(0.36, 0.5*(nxx+b.xx-rxx+nyy+b.yy-ryy)))
	fwhm := max(info.FWHMNew, 2.3548*math.Sqrt(0.5*(nxx+b.xx+nyy+b.yy)))
	half := min(24, max(6, int(math.Ceil(6*match)), int(math.Ceil(1.3*fwhm))))
	reach := min(26, max(7, int(math.Ceil(1.8*fwhm))+2))
	basis := newBasis(half, []gaussianTerm{
		{sigma: match, degree: 6},
		{sigma: max(0.5, 0.55*match), degree: 4},
		{sigma: max(2*match, 0.3*fwhm), degree: 4},
	})
	pl := &planes{new: j.sub, newVariance: p.New.Variance, newFlags: j.newFlags,
		ref: p.Reference.Image, refVariance: p.Reference.Variance, refFlags: p.Reference.Flags,
		newGain: j.newGain, refGain: j.refGain, scale: p.FluxScale, blurSquares: j.direction.blur.squares()}

	chosen := chooseStamps(j.stampPositions(), j.width, j.height, reach, j.cfg.StampsMax)
	stamps, err := cutStamps(ctx, pl, basis, reach, chosen, j.cfg.Workers)
	if err != nil {
		return err
	}
	if len(stamps) < j.cfg.StampsMin {
		return frame.Problemf(frame.ProblemTooFewStars,
			"%d stars are bright, unflagged and far enough from the edge in both frames; the matching kernel needs %d", len(stamps), j.cfg.StampsMin)
	}
	var shapes []shape
	for _, degrees := range [][]int{{2, 0, 0}, {4, 2, 2}, {6, 4, 4}} {
		for order := 0; order <= j.cfg.KernelOrderMax; order++ {
			shapes = append(shapes, makeShape(basis, degrees, order, min(order, 1), 1e-8))
		}
	}
	solution, err := fitKernel(ctx, pl, basis, stamps, shapes, j.cfg.Workers)
	if err != nil {
		return err
	}
	info.KernelBasis = BasisGaussian
	if j.cfg.KernelBasis != BasisGaussian {
		pixels := newPixelBasis(min(pixelHalfMost, max(3, int(math.Ceil(2.6*match)))))
		pixelStamps, err := cutStamps(ctx, pl, pixels, reach, chosen, j.cfg.Workers)
		if err != nil {
			return err
		}
		other, err := fitKernel(ctx, pl, pixels, pixelStamps, pixelShapes(pixels, j.cfg.KernelOrderMax), j.cfg.Workers)
		if err != nil && j.cfg.KernelBasis == BasisPixel {
			return err
		}
		if err == nil {
			better := j.cfg.KernelBasis == BasisPixel
			if !better {
				g, p, e, ok := predicts(solution, other, stamps, pixelStamps, j.width, j.height)
				better = ok && p < g-e
			}
			if better {
				solution, info.KernelBasis = other, BasisPixel
				basis, stamps = pixels, pixelStamps
			}
		}
	}
	j.kernel = solution.kernel
	j.basis, j.stamps, j.shape = basis, stamps, solution.shape
	info.KernelStamps, info.KernelClipped = solution.kept, solution.clipped
	info.KernelChi2, info.Condition = solution.chi2, solution.condition
	info.KernelOrder = solution.shape.order[0]
	info.KernelTerms = solution.shape.unknowns()
	info.KernelSum, info.KernelSumRMS = j.kernel.sumSpread()
	if !(info.KernelSum > 0.5*p.FluxScale && info.KernelSum < 2*p.FluxScale) {
		return frame.Problemf(frame.ProblemSubtractionPoor,
			"the kernel's flux scale %.4g does not agree with the matched stars' %.4g: the frames do not show the same stars", info.KernelSum, p.FluxScale)
	}
	return nil
}

// grow joins the flags of both frames, each grown by its kernel.
func (j *kernelMatch) grow() {
	p := j.pair
	j.flags = j.newFlags.Clone()
	dilate(j.flags, frame.Saturated)
	noise := p.NewBackground.MedianNoise
	saturation := p.Reference.Meta.Saturation
	refNoise := math.Sqrt(float64(medianOf(p.Reference.Variance.Pix)))
	refAmplitude := func(i, jj int, bits frame.Flag) float64 {
		a := math.Abs(float64(p.Reference.Image.Pix[jj*j.width+i]))
		if math.IsNaN(a) {
			a = 0
		}
		if bits&(frame.Saturated|frame.Bleed) != 0 && saturation > a {
			a = saturation
		}
		return max(a, 10*refNoise)
	}
	growFlags(j.flags, p.Reference.Flags, refAmplitude, j.kernel.At, j.kernel.Half(), noise)
	for at, bits := range p.Reference.Flags.Bits {
		j.flags.Bits[at] |= bits
	}
	if b := j.direction.blur; !b.none() {
		half := min(24, int(math.Ceil(4*math.Sqrt(max(b.xx, b.yy)))))
		gaussian := gaussianKernel(b, half)
		newAmplitude := func(i, jj int, bits frame.Flag) float64 {
			if bits&(frame.Saturated|frame.Bleed) != 0 {
				return max(p.New.Meta.Saturation-p.NewBackground.MedianSky, 100*noise)
			}
			// Filled from the reference: wrong by the noise and by a part of
			// the light that is there.
			return 3*noise + 0.1*math.Abs(float64(p.Reference.Image.Pix[jj*j.width+i]))*p.FluxScale
		}
		growFlags(j.flags, j.newFlags, newAmplitude, func([]float64, float64, float64) []float64 { return gaussian }, half, noise)
	}
	centre := j.kernel.At(nil, float64(j.width)/2, float64(j.height)/2)
	band := max(2, reachOf(centre, j.kernel.Half(), 0.02))
	if b := j.direction.blur; !b.none() {
		// The matched reference lacks light from beyond the edge, and whitening
		// carries the lack a little farther.
		band = max(band, int(math.Ceil(2*math.Sqrt(max(b.xx, b.yy))))) + 3
	}
	markEdges(j.flags, band)
}

// gaussianKernel samples a Gaussian of unit sum.
func gaussianKernel(b blur, half int) []float64 {
	det := b.xx*b.yy - b.xy*b.xy
	n := 2*half + 1
	k := make([]float64, n*n)
	sum := 0.0
	for v := range n {
		for u := range n {
			x, y := float64(u-half), float64(v-half)
			w := math.Exp(-0.5 * (b.yy*x*x - 2*b.xy*x*y + b.xx*y*y) / det)
			k[v*n+u] = w
			sum += w
		}
	}
	for i := range k {
		k[i] /= sum
	}
	return k
}

// difference computes the matched reference, the difference and its variance,
// of the whole frame or of some regions.
func (j *kernelMatch) difference(ctx context.Context, regions []tile) error {
	tiles, wider := regions, regions
	if regions == nil {
		tiles, wider = tiling(j.width, j.height, j.whiteningHalo()), tiling(j.width, j.height, j.kernel.Half())
	} else if j.whiten {
		wider = j.grown(regions, j.whiteningHalo())
	}
	if err := j.convolve(ctx, wider); err != nil || !j.whiten {
		return err
	}
	return j.whitenAll(ctx, tiles)
}

// convolve computes the same without whitening, on tiles that leave room for
// the kernel.
func (j *kernelMatch) convolve(ctx context.Context, tiles []tile) error {
	p := j.pair
	half := j.kernel.Half()
	halo := half
	varies := j.kernel.varies()
	return forTiles(ctx, j.cfg.Workers, tiles, func() func(tile) {
		plan := fft.NewPlan(tileSize, tileSize)
		n := plan.SpectrumLen()
		reference := make([]complex64, n)
		spectrum := make([]complex64, n)
		kernel := make([]complex64, n)
		pixels := make([]float32, tileSize*tileSize)
		sum := make([]float32, tileSize*tileSize)
		side := 2*half + 1
		k0, kx, ky := make([]float64, side*side), make([]float64, side*side), make([]float64, side*side)
		return func(t tile) {
			x, y := t.centre()
			j.kernel.slopes(k0, kx, ky, x, y, 0.5*float64(tileSize-2*halo))
			load(pixels, p.Reference.Image, t, halo)
			for i, v := range pixels {
				if v != v {
					pixels[i] = 0
				}
			}
			plan.Forward(reference, pixels)
			spectrumOfKernel(plan, kernel, pixels, k0, half)
			fft.Multiply(spectrum, reference, kernel)
			plan.Inverse(sum, spectrum)
			if varies {
				for axis, k := range [][]float64{kx, ky} {
					spectrumOfKernel(plan, kernel, pixels, k, half)
					fft.Multiply(spectrum, reference, kernel)
					plan.Inverse(pixels, spectrum)
					for v := t.y0; v < t.y1; v++ {
						row := (v-t.y0+halo)*tileSize + halo
						dst := sum[row : row+t.x1-t.x0]
						src := pixels[row : row+t.x1-t.x0]
						if axis == 1 {
							f := float32(float64(v+1) - y)
							for i, s := range src {
								dst[i] += f * s
							}
						} else {
							f := float32(float64(t.x0+1) - x)
							for i, s := range src {
								dst[i] += f * s
								f++
							}
						}
					}
				}
			}
			store(j.static, sum, t, halo)
			j.assemble(t, k0)
		}
	})
}

// assemble fills difference and variance of one tile. The variance is the sky
// part of both frames and the photon noise of the static light as the matched
// reference predicts it, in counts of the new frame after whitening: Φ(0).
func (j *kernelMatch) assemble(t tile, k0 []float64) {
	p := j.pair
	sum := total(k0)
	squares := sumSquares(k0)
	const masked = frame.Unusable | frame.Edge
	perCount := 1/j.newGain + sum/j.refGain
	scale2 := sum * sum
	for y := t.y0; y < t.y1; y++ {
		static, diff, vari := j.static.Row(y), j.diff.Row(y), j.vari.Row(y)
		sub, newV, refV := j.sub.Row(y), p.New.Variance.Row(y), p.Reference.Variance.Row(y)
		flags := j.flags.Row(y)
		skyLeft, skyStep := j.skyAlong(t, y)
		for x := t.x0; x < t.x1; x++ {
			m := static[x]
			v := float64(newV[x]) + scale2*float64(refV[x])
			// Light counts once it is seen over the matched reference's noise.
			if m > 0 && float64(m)*float64(m) > 9*squares*float64(refV[x]) {
				v += float64(m) * perCount
			}
			if !(v > 0) || math.IsInf(v, 0) {
				v = float64(newV[x])
				flags[x] |= frame.NoData
			}
			vari[x] = float32(v)
			if flags[x]&masked != 0 {
				diff[x] = 0
				continue
			}
			diff[x] = sub[x] - m - float32(skyLeft+skyStep*float64(x-t.x0))
		}
	}
}

// skyAlong returns the differential sky at the first pixel of a tile's row and
// its change from pixel to pixel [count].
func (j *kernelMatch) skyAlong(t tile, row int) (left, step float64) {
	left = j.kernel.Sky(float64(t.x0)+1, float64(row)+1)
	return left, (j.kernel.Sky(float64(t.x1), float64(row)+1) - left) / float64(max(1, t.x1-t.x0-1))
}

// locator returns the map from the new frame's pixels to the reference's.
func (j *job) locator() func(x, y float64) (u, v float64) {
	if j.pair.Transform == nil {
		return nil
	}
	return j.pair.Transform.Apply
}

// levels returns the typical sky variances of both frames in a tile.
func (j *job) levels(t tile) (newV, refV float64) {
	const samples = 9
	var ns, rs []float64
	for v := range samples {
		for u := range samples {
			x := min(j.width-1, max(0, t.x0+(2*u+1)*(t.x1-t.x0)/(2*samples)))
			y := min(j.height-1, max(0, t.y0+(2*v+1)*(t.y1-t.y0)/(2*samples)))
			at := y*j.width + x
			if j.flags.Bits[at]&frame.Unusable != 0 {
				continue
			}
			ns = append(ns, float64(j.pair.New.Variance.Pix[at]))
			rs = append(rs, float64(j.pair.Reference.Variance.Pix[at]))
		}
	}
	if len(ns) == 0 {
		s := j.pair.NewBackground.MedianNoise
		return s * s, 0
	}
	sort.Float64s(ns)
	sort.Float64s(rs)
	return ns[len(ns)/2], rs[len(rs)/2]
}

// needsWhitening reports whether the noise of the convolved reference, or of a
// blurred new frame, matters. Below one part in five hundred it changes the
// significance by less than a thousandth.
func (j *kernelMatch) needsWhitening() bool {
	if !j.direction.blur.none() {
		return true
	}
	newV, refV := j.levels(tile{0, 0, j.width, j.height})
	sum := j.kernel.Sum(float64(j.width)/2, float64(j.height)/2)
	return refV*sum*sum > 0.002*newV
}

// newTransfer returns a whitener and the function that prepares it for the
// surroundings of a tile. They serve one goroutine.
func (j *job) newTransfer(plan *fft.Plan) (*whitener, func(t tile)) {
	w := newWhitener(plan)
	spectrum := j.match.spectra(plan)
	blur, active := j.match.blurring(), j.match.whitens()
	return w, func(t tile) {
		x, y := t.centre()
		spectrum(w.kernel, x, y)
		newV, refV := j.levels(t)
		j.resampling.power(w.gx[:], w.gy[:], t)
		w.set(noise{newVariance: newV, refVariance: refV, blur: blur}, w.kernel, w.gx[:], w.gy[:], active)
	}
}

// whitenAll applies ψ to the difference.
func (j *kernelMatch) whitenAll(ctx context.Context, tiles []tile) error {
	if j.spare == nil {
		j.spare = frame.NewImage(j.width, j.height)
	}
	out := j.spare
	halo := j.whiteningHalo()
	blurred := !j.direction.blur.none()
	const masked = frame.Unusable | frame.Edge
	err := forTiles(ctx, j.cfg.Workers, tiles, func() func(tile) {
		plan := fft.NewPlan(tileSize, tileSize)
		w, transfer := j.newTransfer(plan)
		spectrum := make([]complex64, plan.SpectrumLen())
		pixels := make([]float32, tileSize*tileSize)
		var chain *blurredTiles
		if blurred {
			chain = j.newBlurredTiles(plan)
		}
		return func(t tile) {
			transfer(t)
			if blurred {
				chain.compute(pixels, t)
			} else {
				load(pixels, j.diff, t, halo)
			}
			plan.Forward(spectrum, pixels)
			scaleReal(spectrum, w.psi)
			plan.Inverse(pixels, spectrum)
			store(out, pixels, t, halo)
			for y := t.y0; y < t.y1; y++ {
				row := out.Row(y)
				var sky, step float64
				if blurred {
					sky, step = j.skyAlong(t, y)
				}
				for x, bits := range j.flags.Row(y)[t.x0:t.x1] {
					if bits&masked != 0 {
						row[t.x0+x] = 0
					} else {
						row[t.x0+x] -= float32(sky + step*float64(x))
					}
				}
			}
		}
	})
	j.diff, j.spare = out, j.diff
	return err
}

// flattenCells are the sides of the cells of flatten [px]: wide ones, which
// leave a galaxy's change of brightness alone, and those of the two skies'
// meshes for frames so crowded that the meshes themselves differ.
var flattenCells = [2]int{128, 64}

// flatten takes the smooth remains of the sky out of the difference: what the
// two skies' meshes saw differently and low gradients such as ghosts. Both
// signs are clipped alike, since the difference has sources of both. The
// smaller cells are used when the larger ones leave more between them than
// noise.
func (j *job) flatten(fwhm float64) error {
	near := j.nearExcess(fwhm)
	for pass, cell := range flattenCells {
		nx, ny := max(1, j.width/cell), max(1, j.height/cell)
		sky, noise, excess := j.differenceSky(nx, ny, near)
		if pass > 0 && excess < 1.3 {
			break
		}
		if !fillMesh(sky, nx, ny) || !fillMesh(noise, nx, ny) {
			return nil // hardly a pixel is left; the next step will say so
		}
		background, err := stars.BackgroundFromMesh(j.width, j.height, nx, ny, sky, noise)
		if err != nil {
			return err
		}
		row := make([]float32, j.width)
		for y := range j.height {
			background.SkyRow(row, y)
			diff, flags := j.diff.Row(y), j.flags.Row(y)
			for x, s := range row {
				if flags[x]&(frame.Unusable|frame.Edge) == 0 {
					diff[x] -= s
				}
			}
		}
	}
	return nil
}

// differenceSky returns the mean of the difference in nx × ny cells, NaN where
// too few pixels are usable, the noise of a pixel there, and the reduced
// chi-square of the means about zero.
func (j *job) differenceSky(nx, ny int, near []bool) (sky, noise []float32, chi2 float64) {
	sky = make([]float32, nx*ny)
	noise = make([]float32, nx*ny)
	const masked = frame.Unusable | frame.Edge
	squares := float32(j.match.squares())
	var values []float64
	cells := 0
	for cy := range ny {
		for cx := range nx {
			values = values[:0]
			x0, x1 := cx*j.width/nx, (cx+1)*j.width/nx
			y0, y1 := cy*j.height/ny, (cy+1)*j.height/ny
			variance := 0.0
			for y := y0; y < y1; y++ {
				flags, diff, static, vari := j.flags.Row(y), j.diff.Row(y), j.static.Row(y), j.vari.Row(y)
				refV := j.pair.Reference.Variance.Row(y)
				for x := x0; x < x1; x++ {
					// Where static light is bright its residue is not sky.
					if flags[x]&masked == 0 && !near[y*j.width+x] && static[x]*static[x] < vari[x]+16*squares*refV[x] {
						values = append(values, float64(diff[x]))
						variance += float64(vari[x])
					}
				}
			}
			at := cy*nx + cx
			sky[at], noise[at] = float32(math.NaN()), float32(math.NaN())
			if n := len(values); n > 500 || n > (x1-x0)*(y1-y0)/4 {
				sigma := math.Sqrt(variance / float64(n))
				mean := symmetricMean(values, sigma)
				sky[at], noise[at] = float32(mean), float32(sigma)
				chi2 += mean * mean * float64(n) / (sigma * sigma)
				cells++
			}
		}
	}
	return sky, noise, chi2 / float64(max(1, cells))
}

// nearExcess marks the surroundings of places where the difference, summed over
// a square of about one FWHM, stands out by four sigma of either sign.
func (j *job) nearExcess(fwhm float64) []bool {
	reach := max(1, int(math.Round(fwhm/2)))
	near := make([]bool, j.width*j.height)
	column := make([]float64, j.width) // sums over 2·reach+1 rows
	for y := -reach; y < j.height; y++ {
		if in := y + reach; in < j.height {
			for x, d := range j.diff.Row(in) {
				column[x] += float64(d)
			}
		}
		if out := y - reach - 1; out >= 0 {
			for x, d := range j.diff.Row(out) {
				column[x] -= float64(d)
			}
		}
		if y < 0 {
			continue
		}
		row := near[y*j.width : (y+1)*j.width]
		vari := j.vari.Row(y)
		n := float64((2*reach + 1) * (2*reach + 1))
		sum := 0.0
		for x := -reach; x < j.width; x++ {
			if in := x + reach; in < j.width {
				sum += column[in]
			}
			if out := x - reach - 1; out >= 0 {
				sum -= column[out]
			}
			if x >= 0 {
				row[x] = sum*sum > 16*n*float64(vari[x])
			}
		}
	}
	growSquares(near, j.width, j.height, int(math.Ceil(2*fwhm)))
	return near
}

// symmetricMean is the mean of the values within five sigma of it, found by
// iteration from the median of a sample. So wide a cut keeps the mean of the
// skewed noise of few photons; sources were left out before.
func symmetricMean(v []float64, sigma float64) float64 {
	sample := make([]float64, 0, 512)
	for i := 0; i < len(v); i += max(1, len(v)/500) {
		sample = append(sample, v[i])
	}
	sort.Float64s(sample)
	mean := sample[len(sample)/2]
	for range 8 {
		sum, n := 0.0, 0
		for _, x := range v {
			if math.Abs(x-mean) < 5*sigma {
				sum += x
				n++
			}
		}
		if n == 0 {
			return mean
		}
		next := sum / float64(n)
		if math.Abs(next-mean) < 1e-4*sigma {
			return next
		}
		mean = next
	}
	return mean
}

// fillMesh gives cells without a value the mean of their neighbours', round by
// round. It reports whether any cell had one.
func fillMesh(mesh []float32, nx, ny int) bool {
	for {
		var fill []int
		var value []float32
		known := false
		for y := range ny {
			for x := range nx {
				if m := mesh[y*nx+x]; m == m {
					known = true
					continue
				}
				sum, n := float32(0), 0
				for v := max(0, y-1); v <= min(ny-1, y+1); v++ {
					for u := max(0, x-1); u <= min(nx-1, x+1); u++ {
						if m := mesh[v*nx+u]; m == m {
							sum += m
							n++
						}
					}
				}
				if n > 0 {
					fill = append(fill, y*nx+x)
					value = append(value, sum/float32(n))
				}
			}
		}
		if len(fill) == 0 {
			return known
		}
		for i, at := range fill {
			mesh[at] = value[i]
		}
	}
}

// renderPSF returns a function that renders the PSF of the difference at a
// FITS position, shifted by (dx,dy), into a square of side 2·Radius+1.
func (j *job) renderPSF() func(dst []float32, x, y, dx, dy float64) {
	if !j.match.whitens() {
		return j.newPSF.Render
	}
	plan := fft.NewPlan(tileSize, tileSize)
	w, prepare := j.newTransfer(plan)
	radius := j.newPSF.Radius()
	size := 2*radius + 1
	stamp := make([]float32, size*size)
	// The stamp is transferred on a tile of half the side, for which every
	// other frequency serves.
	const small = tileSize / 2
	smallPlan := fft.NewPlan(small, small)
	spectrum := make([]complex64, smallPlan.SpectrumLen())
	transfer := make([]float32, smallPlan.SpectrumLen())
	smallPixels := make([]float32, small*small)
	var at [2]float64
	return func(dst []float32, x, y, dx, dy float64) {
		if at != [2]float64{x, y} {
			at = [2]float64{x, y}
			const around = tileSize / 2
			prepare(tile{int(x) - around, int(y) - around, int(x) + around, int(y) + around})
			half, smallHalf := plan.SpectrumWidth(), smallPlan.SpectrumWidth()
			for v := range small {
				for u := range smallHalf {
					transfer[v*smallHalf+u] = w.blurred[2*v*half+2*u]
				}
			}
		}
		j.newPSF.Render(stamp, x, y, dx, dy)
		wrap(smallPixels, small, stamp, radius)
		smallPlan.Forward(spectrum, smallPixels)
		scaleReal(spectrum, transfer)
		smallPlan.Inverse(smallPixels, spectrum)
		for v := range size {
			for u := range size {
				dst[v*size+u] = smallPixels[((v-radius+small)%small)*small+(u-radius+small)%small]
			}
		}
	}
}

// wrap puts a stamp's centre at the first pixel of a square tile.
func wrap(pixels []float32, side int, stamp []float32, radius int) {
	clear(pixels)
	size := 2*radius + 1
	for v := range size {
		row := pixels[((v-radius+side)%side)*side:]
		for u := range size {
			row[(u-radius+side)%side] = stamp[v*size+u]
		}
	}
}

// tabulatePSF stores the difference's PSF on a grid over the frame.
func (j *job) tabulatePSF() *psf.Grid {
	nx := min(5, max(1, j.width/128))
	ny := min(5, max(1, j.height/128))
	return psf.NewGrid(j.width, j.height, nx, ny, 2*j.newPSF.Radius()+1, 3, j.renderPSF())
}

// preparePSF returns the function that score calls for each tile.
func (j *job) preparePSF(plan *fft.Plan) func(spectrum []complex64, t tile) float64 {
	w, transfer := j.newTransfer(plan)
	pixels := make([]float32, tileSize*tileSize)
	radius := j.newPSF.Radius()
	stamp := make([]float32, (2*radius+1)*(2*radius+1))
	return func(spectrum []complex64, t tile) float64 {
		x, y := t.centre()
		transfer(t)
		j.newPSF.Render(stamp, x, y, 0, 0)
		wrap(pixels, tileSize, stamp, radius)
		plan.Forward(spectrum, pixels)
		scaleReal(spectrum, w.blurred)
		return whiteness(spectrum, w.spectral, plan.SpectrumWidth())
	}
}

// probe measures at bright stars how much more than noise the subtraction
// leaves, as a relative scale error and as a jitter of position.
func (j *job) probe(d *Difference) {
	p := j.pair
	radius := (d.PSF.Size - 1) / 2
	n := d.PSF.Size * d.PSF.Size
	stamp, gx, gy := make([]float32, n), make([]float32, n), make([]float32, n)
	var score, static, shift, lever, aperture, light, chi2 []float64
	for i, m := range p.Matches {
		s := p.NewStars.Stars[m.New]
		// Stars only: a galaxy may hold the very source that is looked for. And
		// where stars are few, variable ones may be the more.
		if !s.Clean || !(s.SN > 30) || s.Flags&frame.Unusable != 0 || len(p.Matches) < 300 && j.fluxes.changed(p, i) {
			continue
		}
		// The probe sits on the nearest pixel; the star does not quite.
		d.PSF.RenderGradient(stamp, gx, gy, d.PSF.Size, s.X, s.Y, s.X-math.Round(s.X), s.Y-math.Round(s.Y))
		q, ok := probeStar(j.diff, j.vari, j.static, j.flags, s.X, s.Y, stamp, gx, gy, radius, d.Info.FWHMNew)
		if !ok || q.static < 20 {
			continue
		}
		score = append(score, q.score)
		static = append(static, q.static)
		shift = append(shift, q.shiftX, q.shiftY)
		lever = append(lever, q.gradientX, q.gradientY)
		aperture = append(aperture, q.aperture)
		light = append(light, q.light)
		chi2 = append(chi2, q.pixelChi2)
	}
	d.Info.ScaleError = excess(aperture, light)
	total := excess(score, static)
	d.Info.ShapeError = math.Sqrt(max(0, total*total-d.Info.ScaleError*d.Info.ScaleError))
	d.Info.JitterPx = excess(shift, lever)
	d.Info.StarChi2 = math.NaN()
	if len(chi2) > 0 {
		sort.Float64s(chi2)
		d.Info.StarChi2 = chi2[len(chi2)/2]
	}
	d.Info.StarsProbed = len(chi2)
}

// measureNoise takes mean and robust spread of the score on empty sky and the
// depth.
func (j *job) measureNoise(d *Difference) {
	const masked = frame.Unusable | frame.Edge
	usable := 0
	step := max(1, j.width*j.height/600000)
	var sample []float64
	next := 0
	near := j.nearSources(d, int(math.Ceil(2*d.Info.FWHMNew)))
	squares := d.Info.NoiseScale * d.Info.NoiseScale * j.match.squares()
	for at, bits := range j.flags.Bits {
		if bits&masked != 0 {
			continue
		}
		usable++
		m := float64(j.static.Pix[at])
		// Light that the matched reference shows over its own noise. A cut
		// within that noise would choose pixels by the noise they are to show.
		if near[at] || m*m > 0.04*float64(j.vari.Pix[at])+16*squares*float64(j.pair.Reference.Variance.Pix[at]) {
			continue
		}
		if next--; next > 0 {
			continue
		}
		next = step
		sample = append(sample, float64(d.Significance.Pix[at]))
	}
	d.Info.UsablePixels = usable
	d.Info.NoiseRatio, d.Info.SignificanceMean = math.NaN(), math.NaN()
	if len(sample) > 100 {
		d.Info.SignificanceMean, d.Info.NoiseRatio = meanAndSpread(sample)
	}
	// Depth at places all over the frame.
	var limits []float64
	limit := j.depth()
	const places = 3
	for v := range places {
		for u := range places {
			t := tile{u * j.width / places, v * j.height / places, (u + 1) * j.width / places, (v + 1) * j.height / places}
			limits = append(limits, d.Info.NoiseScale*limit(t))
		}
	}
	sort.Float64s(limits)
	d.Info.FluxLimit5 = limits[len(limits)/2]
	d.Info.MagLimit5 = d.Info.ZeroPoint - 2.5*math.Log10(d.Info.FluxLimit5)
}

// depth returns the function that gives the flux [count] of five sigma for a
// tile, from the frames' sky noise. It serves one goroutine.
func (j *job) depth() func(t tile) float64 {
	plan := fft.NewPlan(tileSize, tileSize)
	prepare := j.preparePSF(plan)
	spectrum := make([]complex64, plan.SpectrumLen())
	return func(t tile) float64 {
		c := prepare(spectrum, t)
		newV, refV := j.levels(t)
		x, y := t.centre()
		sum := j.match.scale(x, y)
		return 5 * math.Sqrt(c*(newV+refV*sum*sum)/squaresOf(spectrum, plan.SpectrumWidth()))
	}
}

// learnNoise scales the variance so that the significance on empty sky spreads
// by one. Where the frames' noise is correlated, a single frame cannot tell it
// from faint stars and nebulae at the scale of a star, and what was carried here
// is an upper limit; the difference, in which those cancel, can.
func (j *job) learnNoise(d *Difference) {
	for range 4 { // empty sky is where the significance is low: it depends on the scale
		j.measureNoise(d)
		q := d.Info.NoiseRatio
		if !(q > 0) || math.IsInf(q, 0) {
			return // no empty sky; the caller finds the same and says so
		}
		d.Info.NoiseScale *= q
		d.Info.NoiseSource = "difference"
		for at := range j.vari.Pix {
			j.vari.Pix[at] *= float32(q * q)
			d.Significance.Pix[at] /= float32(q)
		}
		if math.Abs(q-1) < 0.003 {
			return
		}
	}
}

// nearSources marks the squares around every pixel beyond five sigma and
// around what is saturated or hit: empty sky is elsewhere.
func (j *job) nearSources(d *Difference, reach int) []bool {
	const hit = frame.Saturated | frame.Bleed | frame.Streak | frame.CosmicRay
	near := make([]bool, j.width*j.height)
	for at, s := range d.Significance.Pix {
		near[at] = s >= 5 || s <= -5 || j.flags.Bits[at]&hit != 0
	}
	growSquares(near, j.width, j.height, reach)
	return near
}

// meanAndSpread returns the mean within four sigma and the spread from the
// median absolute deviation.
func meanAndSpread(v []float64) (mean, spread float64) {
	sort.Float64s(v)
	median := v[len(v)/2]
	deviation := make([]float64, len(v))
	for i, x := range v {
		deviation[i] = math.Abs(x - median)
	}
	sort.Float64s(deviation)
	spread = deviation[len(deviation)/2] / 0.6744897501960817
	n := 0
	for _, x := range v {
		if math.Abs(x-median) < 4*spread {
			mean += x
			n++
		}
	}
	return mean / float64(max(1, n)), spread
}

func medianOf(v []float32) float32 {
	step := max(1, len(v)/10007)
	var s []float32
	for i := 0; i < len(v); i += step {
		if v[i] == v[i] {
			s = append(s, v[i])
		}
	}
	sort.Slice(s, func(a, b int) bool { return s[a] < s[b] })
	if len(s) == 0 {
		return 0
	}
	return s[len(s)/2]
}

// referenceStars returns the reference's sources in counts of the new frame.
func (j *job) referenceStars() []stars.Star {
	out := append([]stars.Star(nil), j.pair.ReferenceStars...)
	for i := range out {
		scale := j.match.scale(out[i].X, out[i].Y)
		out[i].Flux *= scale
		out[i].FluxErr *= scale
		out[i].Peak *= scale
	}
	return out
}
