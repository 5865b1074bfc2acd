package subtract

import "nightsift/internal/fft"

// When the new frame is blurred first, whitening takes the blur out again, and
// whatever was cut in between would ring. The whole chain
//
//	ψ ⊗ (A⊗N − B⊗R)
//
// is therefore done within one Fourier tile, from the frames themselves, with
// nothing set to zero on the way but what lies beyond the frame's edge in both.
// Flagged pixels of N carry the reference's light instead of their own.

// blurredHalo is what a tile reads around itself [px]: the reach of the kernel,
// the blur and the whitening together.
const blurredHalo = 44

// blurredTiles computes A⊗N − B⊗R on tiles with their halo.
type blurredTiles struct {
	job       *kernelMatch
	plan      *fft.Plan
	new       []complex64
	reference []complex64
	product   []complex64
	kernel    []complex64
	blur      []float32
	scratch   []float32
	k0        []float64
	kx        []float64
	ky        []float64
}

func (j *kernelMatch) newBlurredTiles(plan *fft.Plan) *blurredTiles {
	n := plan.SpectrumLen()
	side := j.kernel.basis.side()
	b := &blurredTiles{job: j, plan: plan,
		new: make([]complex64, n), reference: make([]complex64, n), product: make([]complex64, n), kernel: make([]complex64, n),
		blur: make([]float32, n), scratch: make([]float32, tileSize*tileSize),
		k0: make([]float64, side*side), kx: make([]float64, side*side), ky: make([]float64, side*side)}
	half := plan.SpectrumWidth()
	for v := range tileSize {
		for u := range half {
			b.blur[v*half+u] = float32(j.direction.blur.transfer(float64(u)/tileSize, frequency(v)))
		}
	}
	return b
}

// compute fills dst (tileSize² values) for a tile with blurredHalo around it.
func (b *blurredTiles) compute(dst []float32, t tile) {
	j := b.job
	x, y := t.centre()
	half := j.kernel.Half()
	j.kernel.slopes(b.k0, b.kx, b.ky, x, y, 0.5*float64(tileSize-2*blurredHalo))
	load(b.scratch, j.filled, t, blurredHalo)
	b.plan.Forward(b.new, b.scratch)
	scaleReal(b.new, b.blur)
	load(b.scratch, j.pair.Reference.Image, t, blurredHalo)
	for i, v := range b.scratch {
		if v != v {
			b.scratch[i] = 0
		}
	}
	b.plan.Forward(b.reference, b.scratch)
	spectrumOfKernel(b.plan, b.kernel, b.scratch, b.k0, half)
	for i, r := range b.reference {
		b.new[i] -= r * b.kernel[i]
	}
	b.plan.Inverse(dst, b.new)
	if !j.kernel.varies() {
		return
	}
	for axis, k := range [][]float64{b.kx, b.ky} {
		spectrumOfKernel(b.plan, b.kernel, b.scratch, k, half)
		fft.Multiply(b.product, b.reference, b.kernel)
		b.plan.Inverse(b.scratch, b.product)
		for v := range tileSize {
			row, part := dst[v*tileSize:(v+1)*tileSize], b.scratch[v*tileSize:(v+1)*tileSize]
			fy := float32(float64(t.y0-blurredHalo+v+1) - y)
			fx := float32(float64(t.x0-blurredHalo+1) - x)
			for u, p := range part {
				if axis == 0 {
					row[u] -= (fx + float32(u)) * p
				} else {
					row[u] -= fy * p
				}
			}
		}
	}
}
