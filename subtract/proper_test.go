package subtract

import (
	"context"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"

	"nightsift/align"
	"nightsift/internal/fft"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/stars"
)

var gaussianModels = map[float64]*psf.Model{}

// gaussianModel fits a model to a field of Gaussian stars without noise to
// speak of, so that its point-spread function is known in closed form.
func gaussianModel(t *testing.T, sigma float64) *psf.Model {
	t.Helper()
	if m := gaussianModels[sigma]; m != nil {
		return m
	}
	const width, height = 400, 400
	f := randomField(60, width, height, 77)
	img := gaussianField(width, height, f.x, f.y, f.flux, sigma)
	variance := constantImage(width, height, 0.01)
	var list []stars.Star
	for i := range f.x {
		near := math.Inf(1)
		for k := range f.x {
			if k != i {
				near = math.Min(near, math.Hypot(f.x[i]-f.x[k], f.y[i]-f.y[k]))
			}
		}
		list = append(list, stars.Star{X: f.x[i], Y: f.y[i], Flux: f.flux[i], SN: 1000, FWHM: 2.3548 * sigma,
			Mxx: sigma * sigma, Myy: sigma * sigma, Neighbour: near, Clean: near > 20, Peak: f.flux[i] / (2 * math.Pi * sigma * sigma)})
	}
	rng := rand.New(rand.NewPCG(5, 5))
	for i := range img.Pix {
		img.Pix[i] += float32(0.1 * rng.NormFloat64())
	}
	cfg := psf.DefaultConfig()
	cfg.ShapeOrder, cfg.NoGrid = 0, true
	m, err := psf.Fit(img, variance, frame.NewMask(width, height), list, math.Inf(1), cfg)
	if err != nil {
		t.Fatal(err)
	}
	gaussianModels[sigma] = m
	return m
}

// properScene is a pair of frames on one grid with known point-spread
// functions, ready for a proper difference.
func properScene(t *testing.T, n, r *frame.Image, newSigma, refSigma, newV, refV float64) *properMatch {
	t.Helper()
	w, h := n.Width, n.Height
	pair := &align.Pair{
		New:           &frame.Frame{Image: n, Variance: constantImage(w, h, float32(newV)), Flags: frame.NewMask(w, h), Meta: frame.UnknownMeta()},
		Reference:     &frame.Frame{Image: r, Variance: constantImage(w, h, float32(refV)), Flags: frame.NewMask(w, h), Meta: frame.UnknownMeta()},
		NewBackground: &stars.Background{MedianNoise: math.Sqrt(newV)},
	}
	j := &job{cfg: DefaultConfig(), pair: pair, width: w, height: h, newGain: math.Inf(1), refGain: math.Inf(1),
		newFlags: frame.NewMask(w, h), flags: frame.NewMask(w, h), plain: n, resampling: newResampling(nil, nil),
		newPSF: gaussianModel(t, newSigma), refPSF: gaussianModel(t, refSigma)}
	m := &properMatch{job: j, flux: 1, radius: 3 * max(j.newPSF.Radius(), j.refPSF.Radius()) / 2}
	j.match = m
	j.allocate()
	return m
}

func addNoise(img *frame.Image, variance float64, seed uint64) {
	rng := rand.New(rand.NewPCG(seed, 9))
	for i := range img.Pix {
		img.Pix[i] += float32(math.Sqrt(variance) * rng.NormFloat64())
	}
}

// fft2 is the two-dimensional transform of a square by gonum's complex FFT;
// inverse divides by the number of pixels.
func fft2(x []complex128, n int, inverse bool) []complex128 {
	f := fourier.NewCmplxFFT(n)
	out := append([]complex128(nil), x...)
	line := make([]complex128, n)
	one := func() {
		if inverse {
			f.Sequence(line, line)
		} else {
			f.Coefficients(line, line)
		}
	}
	for j := range n {
		copy(line, out[j*n:])
		one()
		copy(out[j*n:(j+1)*n], line)
	}
	for i := range n {
		for j := range n {
			line[j] = out[j*n+i]
		}
		one()
		for j := range n {
			out[j*n+i] = line[j]
		}
	}
	if inverse {
		for i := range out {
			out[i] /= complex(float64(n*n), 0)
		}
	}
	return out
}

func toComplex(x []float32) []complex128 {
	out := make([]complex128, len(x))
	for i, v := range x {
		out[i] = complex(float64(v), 0)
	}
	return out
}

// literal holds what the equations of Zackay, Ofek & Gal-Yam 2016 give, word by
// word, on one square image in float64, with F_n = F_r = 1.
type literal struct {
	d      []float64 // D, of unit noise (equation 13)
	pd     []float64 // P_D, centre at the first pixel (equation 14)
	s      []float64 // S = F_D P_D ⋆ D (equation 17)
	vn, vr []float64 // V(S_N), V(S_R) (equations 26 to 29)
	sr     []float64 // S_R, for the astrometric term (equation 30)
}

// zogy evaluates the paper's equations. varN and varR are the variances of all
// pixels, sn2 and sr2 those of the empty sky.
func zogy(n, r, pn, pr, varN, varR []float32, sn2, sr2 float64, side int) literal {
	N, R := fft2(toComplex(n), side, false), fft2(toComplex(r), side, false)
	Pn, Pr := fft2(toComplex(pn), side, false), fft2(toComplex(pr), side, false)
	fd := 1 / math.Sqrt(sn2+sr2)
	size := side * side
	D, PD, S := make([]complex128, size), make([]complex128, size), make([]complex128, size)
	kn, kr, SR := make([]complex128, size), make([]complex128, size), make([]complex128, size)
	for i := range D {
		an, ar := cmplx.Abs(Pn[i]), cmplx.Abs(Pr[i])
		den := sr2*an*an + sn2*ar*ar
		D[i] = (Pr[i]*N[i] - Pn[i]*R[i]) / complex(math.Sqrt(den), 0)
		PD[i] = Pr[i] * Pn[i] / complex(fd*math.Sqrt(den), 0)
		S[i] = complex(fd, 0) * D[i] * cmplx.Conj(PD[i])
		kn[i] = cmplx.Conj(Pn[i]) * complex(ar*ar/den, 0)
		kr[i] = cmplx.Conj(Pr[i]) * complex(an*an/den, 0)
		SR[i] = kr[i] * R[i]
		// The package takes the phase of P_r out of D and P_D.
		phase := cmplx.Conj(Pr[i]) / complex(ar, 0)
		D[i] *= phase
		PD[i] *= phase
	}
	reals := func(x []complex128) []float64 {
		x = fft2(x, side, true)
		out := make([]float64, len(x))
		for i, v := range x {
			out[i] = real(v)
		}
		return out
	}
	convolveSquare := func(variance []float32, k []complex128) []float64 {
		space := fft2(k, side, true)
		for i, v := range space {
			space[i] = complex(real(v)*real(v), 0)
		}
		a, b := fft2(toComplex(variance), side, false), fft2(space, side, false)
		for i := range a {
			a[i] *= b[i]
		}
		return reals(a)
	}
	return literal{d: reals(D), pd: reals(PD), s: reals(S), sr: reals(SR),
		vn: convolveSquare(varN, kn), vr: convolveSquare(varR, kr)}
}

// starScene draws constant stars and new ones on one Fourier tile.
func starScene(newSigma, refSigma, newV, refV float64) (n, r, brightN, brightR *frame.Image, at [][2]int) {
	const side = tileSize
	rng := rand.New(rand.NewPCG(31, 4))
	var x, y, flux []float64
	for range 25 {
		x, y = append(x, 20+rng.Float64()*(side-40)), append(y, 20+rng.Float64()*(side-40))
		flux = append(flux, 50*math.Pow(10, 2*rng.Float64()))
		at = append(at, [2]int{int(math.Round(x[len(x)-1])) - 1, int(math.Round(y[len(y)-1])) - 1})
	}
	brightR = gaussianField(side, side, x, y, flux, refSigma)
	brightN = gaussianField(side, side, x, y, flux, newSigma)
	n, r = brightN.Clone(), brightR.Clone()
	for range 10 {
		add := gaussianField(side, side, []float64{20 + rng.Float64()*(side-40)}, []float64{20 + rng.Float64()*(side-40)}, []float64{60}, newSigma)
		for i, v := range add.Pix {
			n.Pix[i] += v
		}
	}
	addNoise(n, newV, 1)
	addNoise(r, refV, 2)
	return
}

func (m *properMatch) drawn(model *psf.Model) []float32 {
	size := 2*m.radius + 1
	stamp, pixels := make([]float32, size*size), make([]float32, tileSize*tileSize)
	model.Render(stamp, float64(m.width+1)/2, float64(m.height+1)/2, 0, 0)
	wrap(pixels, tileSize, stamp, m.radius)
	return pixels
}

// The equations of the paper in float64 by gonum's FFT.
func TestProperAgreesWithLiteralTranscription(t *testing.T) {
	for _, c := range []struct{ newSigma, refSigma, newV, refV float64 }{
		// Narrow, so that the reference has power at all frequencies and the
		// floor of the ratio is out of play.
		{0.95, 0.8, 1, 0.1}, {0.8, 0.9, 1, 0.2}, {0.85, 0.85, 1, 1},
	} {
		n, r, _, _, _ := starScene(c.newSigma, c.refSigma, c.newV, c.refV)
		m := properScene(t, n, r, c.newSigma, c.refSigma, c.newV, c.refV)
		flat := make([]float32, tileSize*tileSize)
		want := zogy(n.Pix, r.Pix, m.drawn(m.newPSF), m.drawn(m.refPSF), flat, flat, c.newV, c.refV, tileSize)
		p := m.newTile(fft.NewPlan(tileSize, tileSize), 0)
		whole := tile{0, 0, tileSize, tileSize}
		p.compute(whole)
		unit := math.Sqrt(c.newV + c.refV) // F_D⁻¹: counts for unit noise
		peak, worst := 0.0, 0.0
		for _, v := range n.Pix {
			peak = math.Max(peak, float64(v))
		}
		for i, v := range p.diff {
			worst = math.Max(worst, math.Abs(float64(v)-unit*want.d[i]))
		}
		if worst > 1e-5*peak {
			t.Errorf("%v: D departs from the transcription by %.2g of the brightest pixel", c, worst/peak)
		}
		// P_D and S.
		plan := fft.NewPlan(tileSize, tileSize)
		spectrum := make([]complex64, plan.SpectrumLen())
		whiteness := m.preparePSF(plan)(spectrum, whole)
		if math.Abs(whiteness-1) > 1e-4 {
			t.Errorf("%v: whiteness %.6f", c, whiteness)
		}
		pd := make([]float32, plan.TileLen())
		plan.Inverse(pd, spectrum)
		worst = 0
		for i, v := range pd {
			worst = math.Max(worst, math.Abs(float64(v)-want.pd[i]))
		}
		if worst > 1e-5 {
			t.Errorf("%v: P_D departs from the transcription by %.2g", c, worst)
		}
		norm := 0.0
		for _, v := range want.pd {
			norm += v * v
		}
		s := frame.NewImage(tileSize, tileSize)
		copy(m.diff.Pix, p.diff)
		copy(m.vari.Pix, constantImage(tileSize, tileSize, float32(c.newV+c.refV)).Pix)
		const halo = 32
		if err := score(context.Background(), s, scoreInput{difference: m.diff, variance: m.vari, static: m.static, flags: m.flags,
			halo: halo, tiles: tiling(tileSize, tileSize, halo), workers: 1, prepare: m.preparePSF, fwhm: 2.5}); err != nil {
			t.Fatal(err)
		}
		most := 0.0
		worst = 0
		for y := halo; y < tileSize-halo; y++ {
			for x := halo; x < tileSize-halo; x++ {
				at := y*tileSize + x
				w := want.s[at] * unit / math.Sqrt(norm) // S over its own noise F_D √ΣP_D²
				most = math.Max(most, math.Abs(w))
				worst = math.Max(worst, math.Abs(float64(s.Pix[at])-w))
			}
		}
		if most < 10 {
			t.Errorf("%v: the scene shows no sources (%.1f)", c, most)
		}
		if worst > 2e-4*most {
			t.Errorf("%v: S departs from the transcription by %.2g of its maximum", c, worst/most)
		}
	}
}

// The corrected score of the paper's equation 25 at stars. The astrometric term
// is the paper's own, with S_R. For source noise the package weighs each pixel by
// its own variance before the matched filter, the paper divides after it: the two
// scores differ, but both have unit spread at stars that did not change, and
// they move together.
func TestCorrectedScoreAgreesWithThePaper(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	const halo = 32
	whole := tile{0, 0, tileSize, tileSize}
	for _, c := range []struct{ newSigma, refSigma, newV, refV, refGain float64 }{{1.2, 1, 300, 15, 20}, {1.1, 1.1, 300, 300, 1}} {
		n, r, brightN, brightR, at := starScene(c.newSigma, c.refSigma, c.newV, c.refV)
		m := properScene(t, n, r, c.newSigma, c.refSigma, c.newV, c.refV)
		pn, pr := m.drawn(m.newPSF), m.drawn(m.refPSF)
		p := m.newTile(fft.NewPlan(tileSize, tileSize), 0)
		scored := func(jitter float64) *frame.Image {
			p.compute(whole)
			copy(m.diff.Pix, p.diff)
			copy(m.static.Pix, p.static)
			m.variance(p, whole)
			s := frame.NewImage(tileSize, tileSize)
			if err := score(context.Background(), s, scoreInput{difference: m.diff, variance: m.vari, static: m.static, flags: m.flags,
				halo: halo, tiles: tiling(tileSize, tileSize, halo), workers: 1, prepare: m.preparePSF, fwhm: 2.5, jitter: jitter}); err != nil {
				t.Fatal(err)
			}
			return s
		}
		places := func(each func(i int)) {
			for _, star := range at {
				for _, d := range [][2]int{{0, 0}, {1, 0}, {0, -2}} {
					if x, y := star[0]+d[0], star[1]+d[1]; x >= halo && y >= halo && x < tileSize-halo && y < tileSize-halo {
						each(y*tileSize + x)
					}
				}
			}
		}
		// Astrometric noise.
		const jitter = 0.05
		varN, varR := constantImage(tileSize, tileSize, float32(c.newV)).Pix, constantImage(tileSize, tileSize, float32(c.refV)).Pix
		want := zogy(n.Pix, r.Pix, pn, pr, varN, varR, c.newV, c.refV, tileSize)
		s := scored(jitter)
		places(func(i int) {
			gx, gy := (want.sr[i+1]-want.sr[i-1])/2, (want.sr[i+tileSize]-want.sr[i-tileSize])/2
			scorr := want.s[i] / math.Sqrt(want.vn[i]+want.vr[i]+jitter*jitter*(gx*gx+gy*gy))
			if math.Abs(float64(s.Pix[i])-scorr) > 0.01 {
				t.Errorf("%v: pixel %d: score with jitter %.4f, the paper's %.4f", c, i, s.Pix[i], scorr)
			}
		})
		// Source noise, many times over. Counts of the new frame are electrons.
		m.newGain, m.refGain = 1, c.refGain
		for i := range varN {
			brightN.Pix[i] *= 10
			brightR.Pix[i] *= 10
			varN[i] += brightN.Pix[i]
			varR[i] += brightR.Pix[i] / float32(c.refGain)
		}
		rng := rand.New(rand.NewPCG(100, 3))
		var own, paper, both, count float64
		for range 14 {
			for i := range varN {
				n.Pix[i] = brightN.Pix[i] + float32(math.Sqrt(float64(varN[i]))*rng.NormFloat64())
				r.Pix[i] = brightR.Pix[i] + float32(math.Sqrt(float64(varR[i]))*rng.NormFloat64())
			}
			want := zogy(n.Pix, r.Pix, pn, pr, varN, varR, c.newV, c.refV, tileSize)
			s := scored(0)
			places(func(i int) {
				a, b := float64(s.Pix[i]), want.s[i]/math.Sqrt(want.vn[i]+want.vr[i])
				own, paper, both, count = own+a*a, paper+b*b, both+a*b, count+1
			})
		}
		tolerance := 5 / math.Sqrt(count) // three places share a star
		if count < 500 || math.Abs(own/count-1) > tolerance || math.Abs(paper/count-1) > tolerance {
			t.Errorf("%v: mean squared score at stars %.3f, by the paper %.3f, want 1 ± %.2f", c, own/count, paper/count, tolerance)
		}
		if correlation := both / math.Sqrt(own*paper); correlation < 0.9 {
			t.Errorf("%v: scores at stars correlate with the paper's by %.3f", c, correlation)
		}
	}
}

// Closed form: the signal to noise of a source of f counts in the best
// difference of two frames with Gaussian point-spread functions is the integral
// f² ∫∫ |P_n|²|P_r|² / (V_n|P_r|² + V_r|P_n|²) over the pixels' frequencies
// (Zackay et al. 2016, section 2.1), here by the midpoint rule.
func TestProperReachesTheOptimalSignalToNoise(t *testing.T) {
	for _, c := range []struct{ newSigma, refSigma, newV, refV float64 }{
		{1.6, 1.1, 1, 0.1}, {1.1, 1.7, 1, 0.1}, {1.2, 1.5, 1, 1},
	} {
		const side, flux, sources = 512, 40.0, 120
		transfer := func(sigma, fx, fy float64) float64 {
			sinc := func(f float64) float64 {
				if f == 0 {
					return 1
				}
				return math.Sin(math.Pi*f) / (math.Pi * f)
			}
			return math.Exp(-2*math.Pi*math.Pi*sigma*sigma*(fx*fx+fy*fy)) * sinc(fx) * sinc(fy)
		}
		const grid = 400
		sum := 0.0
		for v := range grid {
			for u := range grid {
				fx, fy := (float64(u)+0.5)/grid-0.5, (float64(v)+0.5)/grid-0.5
				a, b := transfer(c.newSigma, fx, fy), transfer(c.refSigma, fx, fy)
				sum += a * a * b * b / (c.newV*b*b + c.refV*a*a)
			}
		}
		best := flux * math.Sqrt(sum/(grid*grid))
		n, r := frame.NewImage(side, side), frame.NewImage(side, side)
		rng := rand.New(rand.NewPCG(12, 3))
		var x, y, f []float64
		for i := range sources { // on pixel centres, apart from each other
			x = append(x, float64(30+(i%11)*41+rng.IntN(10)))
			y = append(y, float64(30+(i/11)*41+rng.IntN(10)))
			f = append(f, flux)
		}
		n = gaussianField(side, side, x, y, f, c.newSigma)
		addNoise(n, c.newV, 21)
		addNoise(r, c.refV, 22)
		m := properScene(t, n, r, c.newSigma, c.refSigma, c.newV, c.refV)
		limit := m.depth()(tile{0, 0, side, side})
		if ratio := 5 * flux / limit / best; math.Abs(ratio-1) > 0.005 {
			t.Errorf("%v: predicted signal to noise is %.4f of the optimum", c, ratio)
		}
		s := m.scored(t)
		mean := 0.0
		for i := range x {
			mean += float64(s.Pix[(int(y[i])-1)*side+int(x[i])-1]) / sources
		}
		if math.Abs(mean-best) > 4/math.Sqrt(sources) {
			t.Errorf("%v: %d sources have a mean score of %.3f, want %.3f", c, sources, mean, best)
		}
	}
}

// scored runs difference and score over the whole frame.
func (m *properMatch) scored(t *testing.T) *frame.Image {
	t.Helper()
	if err := m.difference(context.Background(), nil); err != nil {
		t.Fatal(err)
	}
	s := frame.NewImage(m.width, m.height)
	const halo = 32
	if err := score(context.Background(), s, scoreInput{difference: m.diff, variance: m.vari, static: m.static, flags: m.flags,
		halo: halo, tiles: tiling(m.width, m.height, halo), workers: 1, prepare: m.preparePSF, fwhm: 2.5}); err != nil {
		t.Fatal(err)
	}
	return s
}

// Pairs of pure noise: score N(0,1), pixels independent, at equal depth and
// with very different seeing either way.
func TestProperNoiseIsWhite(t *testing.T) {
	for _, c := range []struct{ newSigma, refSigma, newV, refV float64 }{
		{1.3, 1.3, 1, 1}, {2.8, 1, 1, 0.1}, {1, 2.8, 1, 0.1}, {1, 2.5, 1, 1}, {1.2, 1.5, 0.3, 2},
	} {
		const side = 560
		n, r := frame.NewImage(side, side), frame.NewImage(side, side)
		addNoise(n, c.newV, 41)
		addNoise(r, c.refV, 42)
		m := properScene(t, n, r, c.newSigma, c.refSigma, c.newV, c.refV)
		s := m.scored(t)
		var sum, squares, along, scores, scoreSquares float64
		count := 0.0
		for y := 20; y < side-20; y++ {
			for x := 20; x < side-20; x++ {
				at := y*side + x
				d := float64(m.diff.Pix[at]) / math.Sqrt(c.newV+c.refV)
				sum += d
				squares += d * d
				along += d * float64(m.diff.Pix[at+1]+m.diff.Pix[at+side]) / 2 / math.Sqrt(c.newV+c.refV)
				v := float64(s.Pix[at])
				scores += v
				scoreSquares += v * v
				count++
			}
		}
		if v := squares / count; math.Abs(v-1) > 5*math.Sqrt(2/count) {
			t.Errorf("%v: pixels have %.4f of the variance stated", c, v)
		}
		if r := along / squares; math.Abs(r) > 5*math.Sqrt(0.5/count) {
			t.Errorf("%v: neighbouring pixels correlate by %+.4f", c, r)
		}
		// Scores are correlated over the point-spread function, so that fewer
		// of them are independent.
		area := 12.6 * math.Max(c.newSigma, 1) * math.Max(c.newSigma, 1)
		tolerance := 5 * math.Sqrt(area/(2*count))
		if spread := math.Sqrt(scoreSquares / count); math.Abs(spread-1) > tolerance {
			t.Errorf("%v: scores spread by %.4f, want 1 ± %.4f", c, spread, tolerance)
		}
		if mean := scores / count; math.Abs(mean) > 5*math.Sqrt(area/count) {
			t.Errorf("%v: mean score %+.4f", c, mean)
		}
	}
}

// The result does not depend on where the tiles lie.
func TestProperTilesLeaveNoSeams(t *testing.T) {
	const side = 420
	for _, c := range []struct{ newSigma, refSigma float64 }{{1.7, 1.2}, {1.2, 1.6}} {
		f := randomField(80, side, side, 6)
		for i := range f.flux {
			f.flux[i] /= 100 // 20 to 630 counts
		}
		n, r := gaussianField(side, side, f.x, f.y, f.flux, c.newSigma), gaussianField(side, side, f.x, f.y, f.flux, c.refSigma)
		addNoise(n, 1, 3)
		addNoise(r, 0.1, 4)
		m := properScene(t, n, r, c.newSigma, c.refSigma, 1, 0.1)
		ctx := context.Background()
		if err := m.difference(ctx, nil); err != nil {
			t.Fatal(err)
		}
		before := m.diff.Clone()
		var moved []tile
		edges := []int{0, 97, 201, 333, side}
		for j := range 4 {
			for i := range 4 {
				moved = append(moved, tile{edges[i], edges[j], edges[i+1], edges[j+1]})
			}
		}
		if err := m.difference(ctx, moved); err != nil {
			t.Fatal(err)
		}
		worst := 0.0
		for i, v := range before.Pix {
			worst = math.Max(worst, math.Abs(float64(v-m.diff.Pix[i])))
		}
		if worst > 1e-4 {
			t.Errorf("%v: other tiles change the difference by %.2g sigma", c, worst)
		}
	}
}

// The wings of a long bleed trail reach beyond what a single pixel of it does.
func TestProperBleedTrailIsFlaggedAsAWhole(t *testing.T) {
	const side = 300
	n, r := frame.NewImage(side, side), frame.NewImage(side, side)
	addNoise(n, 100, 3)
	addNoise(r, 10, 4)
	m := properScene(t, n, r, 2.4, 1.2, 100, 10)
	for y := 60; y < 240; y++ {
		r.Pix[y*side+150] = 300
		m.pair.Reference.Flags.Bits[y*side+150] |= frame.Saturated | frame.Bleed
		m.newFlags.Bits[y*side+150] |= frame.Saturated | frame.Bleed
	}
	m.grow()
	if err := m.difference(context.Background(), nil); err != nil {
		t.Fatal(err)
	}
	// Means along the trail, column by column, show a tenth of the noise.
	searched := 0
	for x := 120; x <= 180; x++ {
		sum, count := 0.0, 0.0
		for y := 70; y < 230; y++ {
			if m.flags.Bits[y*side+x]&(frame.Unusable|frame.Edge) == 0 {
				sum += float64(m.diff.Pix[y*side+x])
				count++
			}
		}
		if count < 100 {
			continue
		}
		searched++
		if mean := sum / count / math.Sqrt(110); math.Abs(mean) > 0.25+5/math.Sqrt(count) {
			t.Errorf("column %d: mean %.3f sigma", x, mean)
		}
	}
	if searched < 25 {
		t.Errorf("only %d columns beside the trail are searched", searched)
	}
}

// A flagged pixel of any value changes nothing outside the flags that it grows.
func TestProperFlaggedPixelsDoNotSpread(t *testing.T) {
	const side = 300
	f := randomField(40, side, side, 8)
	n, r := gaussianField(side, side, f.x, f.y, f.flux, 1.6), gaussianField(side, side, f.x, f.y, f.flux, 1.2)
	addNoise(n, 100, 3)
	addNoise(r, 10, 4)
	difference := func(spoil bool) *properMatch {
		a, b := n.Clone(), r.Clone()
		m := properScene(t, a, b, 1.6, 1.2, 100, 10)
		for k := range 9 {
			at := (20+k*20)*side + 150 + k
			m.newFlags.Bits[at] |= frame.CosmicRay
			m.pair.Reference.Flags.Bits[at+60*side+40] |= frame.BadColumn
			if spoil {
				a.Pix[at] = 1e6
				b.Pix[at+60*side+40] = float32(math.NaN())
			}
		}
		m.grow()
		if err := m.difference(context.Background(), nil); err != nil {
			t.Fatal(err)
		}
		return m
	}
	clean, spoiled := difference(false), difference(true)
	for i, v := range clean.diff.Pix {
		if v != spoiled.diff.Pix[i] {
			t.Fatalf("pixel %d: %g with good values under the flags, %g with bad ones", i, v, spoiled.diff.Pix[i])
		}
	}
	// And what was filled in does not show: outside the flags the noise is as
	// elsewhere.
	sum, count := 0.0, 0
	for k := range 9 {
		y, x := 20+k*20, 150+k
		for v := y - 3; v <= y+3; v++ {
			for u := x - 3; u <= x+3; u++ {
				at := v*side + u
				if spoiled.flags.Bits[at]&(frame.Unusable|frame.Edge) == 0 {
					d := float64(spoiled.diff.Pix[at])
					sum += d * d / float64(spoiled.vari.Pix[at])
					count++
				}
			}
		}
	}
	if count < 100 || math.Abs(sum/float64(count)-1) > 4*math.Sqrt(2/float64(count)) {
		t.Errorf("chi-square beside flagged pixels is %.3f of %d", sum/float64(count), count)
	}
}
