package subtract

import (
	"math"

	"nightsift/internal/fft"
)

// noise describes the noise of a difference  A⊗N − B⊗R  near one place: the
// new frame's pixels are independent with variance newVariance; the
// reference's were so with refVariance before they were resampled. A is the
// Gaussian that blurs the new frame (or nothing), B the matching kernel.
//
// Its power spectrum is  Φ(f) = V_N |Â|² + V_R |B̂|² |L̂|²  with L̂ the transfer
// function of the resampling. Multiplied by ψ̂ = √(Φ(0)/Φ) the difference
// keeps the flux of sources and has white noise of variance Φ(0).
type noise struct {
	newVariance float64 // count²
	refVariance float64 // count² of the reference
	blur        blur
}

// blur is a Gaussian with a covariance matrix [px²]; the zero value is no blur.
type blur struct{ xx, yy, xy float64 }

func (b blur) none() bool { return b == blur{} }

// squares returns the sum of the squared Gaussian kernel: the factor by which
// the blur lowers the variance of white noise.
func (b blur) squares() float64 {
	if b.none() {
		return 1
	}
	// ∫∫|Â|² over the band of the pixels, by the midpoint rule.
	const n = 64
	sum := 0.0
	for j := range n {
		for i := range n {
			a := b.transfer((float64(i)+0.5)/n-0.5, (float64(j)+0.5)/n-0.5)
			sum += a * a
		}
	}
	return sum / (n * n)
}

// transfer returns the Gaussian's Fourier transform at a frequency [cycles/px].
func (b blur) transfer(fx, fy float64) float64 {
	return math.Exp(-2 * math.Pi * math.Pi * (b.xx*fx*fx + b.yy*fy*fy + 2*b.xy*fx*fy))
}

// whiteningFloor bounds the whitening from below: frequencies at which less
// than this part of the noise is left carry nothing that could be restored.
const whiteningFloor = 1e-4

// whitener holds the transfer functions of one tile.
type whitener struct {
	plan     *fft.Plan
	psi      []float32 // ψ̂, real and even
	spectral []float32 // |ψ̂|²Φ/Φ(0): 1 where the noise is white
	blurred  []float32 // ψ̂·Â: how a source in the new frame is transferred
	kernel   []complex64
	gx, gy   [tileSize]float32
}

func newWhitener(plan *fft.Plan) *whitener {
	n := plan.SpectrumLen()
	return &whitener{plan: plan, psi: make([]float32, n), spectral: make([]float32, n), blurred: make([]float32, n), kernel: make([]complex64, n)}
}

// set computes the transfer functions. kernelSpectrum is B̂; powerX and
// powerY are the mean |L̂|² along each axis for the frequencies of the tile.
// With active false, ψ̂ is 1 and only the spectrum of what is left is computed.
func (w *whitener) set(n noise, kernelSpectrum []complex64, powerX, powerY []float32, active bool) {
	half := w.plan.SpectrumWidth()
	sum := float64(real(kernelSpectrum[0]))
	zero := n.newVariance + n.refVariance*sum*sum
	for j := range tileSize {
		fy := frequency(j)
		for i := range half {
			at := j*half + i
			fx := float64(i) / tileSize
			a := 1.0
			if !n.blur.none() {
				a = n.blur.transfer(fx, fy)
			}
			k := kernelSpectrum[at]
			b2 := float64(real(k)*real(k) + imag(k)*imag(k))
			phi := (n.newVariance*a*a + n.refVariance*b2*float64(powerX[i]*powerY[j])) / zero
			psi := 1.0
			if active {
				psi = 1 / math.Sqrt(max(phi, whiteningFloor))
			}
			w.psi[at] = float32(psi)
			w.spectral[at] = float32(psi * psi * phi)
			w.blurred[at] = float32(psi * a)
		}
	}
}

// frequency returns the frequency of row j of a half spectrum [cycles/px].
func frequency(j int) float64 {
	if j > tileSize/2 {
		j -= tileSize
	}
	return float64(j) / tileSize
}

// whiteness returns Σ|P̂|²s / Σ|P̂|² for a half spectrum P̂ and the relative
// noise power s: the factor by which the variance of a matched filter's output
// differs from that in white noise.
func whiteness(psf []complex64, spectral []float32, half int) float64 {
	var with, without float64
	for j := range tileSize {
		for i := range half {
			at := j*half + i
			p := psf[at]
			m := float64(real(p)*real(p) + imag(p)*imag(p))
			if i != 0 && i != half-1 {
				m *= 2 // the half of the spectrum that is not stored
			}
			with += m * float64(spectral[at])
			without += m
		}
	}
	return with / without
}

// squaresOf returns the sum of the squared pixels of a tile from its half
// spectrum.
func squaresOf(spectrum []complex64, half int) float64 {
	var sum float64
	for j := range tileSize {
		for i, p := range spectrum[j*half : (j+1)*half] {
			m := float64(real(p)*real(p) + imag(p)*imag(p))
			if i != 0 && i != half-1 {
				m *= 2
			}
			sum += m
		}
	}
	return sum / (tileSize * tileSize)
}

// phaseSteps is the number of sub-pixel phases in the table of transfer
// functions.
const phaseSteps = 32

// resampling tells the mean transfer function of the reference's resampling
// over a tile.
type resampling struct {
	table [phaseSteps][]float64
	// locate maps FITS positions on the new frame to the reference's; nil when
	// the reference was not resampled.
	locate func(x, y float64) (u, v float64)
}

// newResampling tabulates power(phase, frequency), the transfer of noise along
// one axis.
func newResampling(locate func(x, y float64) (u, v float64), power func(phase, f float64) float64) *resampling {
	r := &resampling{locate: locate}
	if locate == nil {
		return r
	}
	for p := range r.table {
		r.table[p] = make([]float64, tileSize)
		for i := range r.table[p] {
			r.table[p][i] = power(float64(p)/phaseSteps, frequency(i))
		}
	}
	return r
}

// power averages |L̂|² along each axis over the sub-pixel phases met in a tile.
func (r *resampling) power(gx, gy []float32, t tile) {
	if r.locate == nil {
		for i := range gx {
			gx[i], gy[i] = 1, 1
		}
		return
	}
	var cx, cy [phaseSteps]int
	const samples = 16
	for j := range samples {
		for i := range samples {
			x := float64(t.x0) + (float64(i)+0.37)/samples*float64(t.x1-t.x0)
			y := float64(t.y0) + (float64(j)+0.61)/samples*float64(t.y1-t.y0)
			// Phases belong to whole pixels.
			u, v := r.locate(math.Floor(x)+1, math.Floor(y)+1)
			cx[phaseIndex(u)]++
			cy[phaseIndex(v)]++
		}
	}
	for i := range gx {
		var sx, sy float64
		for p := range phaseSteps {
			if cx[p] > 0 {
				sx += float64(cx[p]) * r.table[p][i]
			}
			if cy[p] > 0 {
				sy += float64(cy[p]) * r.table[p][i]
			}
		}
		gx[i] = float32(sx / (samples * samples))
		gy[i] = float32(sy / (samples * samples))
	}
}

func phaseIndex(u float64) int {
	p := int(math.Round((u - math.Floor(u)) * phaseSteps))
	if p == phaseSteps {
		return 0
	}
	return p
}
