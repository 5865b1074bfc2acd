package subtract

import (
	"context"
	"fmt"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
)

// The ways of taking the reference away: values of Config.Method.
const (
	MethodKernel = "kernel" // a matching kernel fitted to the stars (Alard & Lupton 1998)
	MethodProper = "proper" // from the two point-spread functions (Zackay et al. 2016)
	MethodAuto   = "auto"   // the one that leaves less at bright stars of the frame itself
)

// Methods lists the values that Config.Method accepts.
func Methods() []string { return []string{MethodAuto, MethodKernel, MethodProper} }

// A matcher brings the two frames to one point-spread function and takes one
// from the other. In Fourier space the difference is  ψ̂·(Â·N̂ − B̂·R̂)  with Â
// the blur of the new frame (or 1), B̂ the transfer function that takes the
// reference to it and ψ̂ the whitening that follows from both.
type matcher interface {
	// scale returns the counts of the new frame for one of the reference at a
	// FITS position.
	scale(x, y float64) float64

	// spectra returns the function that writes B̂ at a FITS position, for tiles
	// of the plan. It serves one goroutine.
	spectra(plan *fft.Plan) func(dst []complex64, x, y float64)

	blurring() blur // Â
	whitens() bool  // whether ψ̂ is applied at all

	// squares is the variance of static for a reference of unit variance, at
	// the frame's centre.
	squares() float64

	// grow fills flags: those of both frames, grown by the footprint of what
	// is applied to them.
	grow()

	// difference fills static, diff and vari, of the whole frame if regions is
	// nil. A region is at most regionSize wide and high. Flags are those of
	// grow; with regions, any.
	difference(ctx context.Context, regions []tile) error
}

// allocate makes the planes that matchers fill, once.
func (j *job) allocate() {
	if j.diff == nil {
		j.static = frame.NewImage(j.width, j.height)
		j.diff = frame.NewImage(j.width, j.height)
		j.vari = frame.NewImage(j.width, j.height)
	}
}

// grown returns the tiles with a margin on every side, within the frame.
func (j *job) grown(tiles []tile, margin int) []tile {
	out := make([]tile, len(tiles))
	for i, t := range tiles {
		out[i] = tile{max(0, t.x0-margin), max(0, t.y0-margin), min(j.width, t.x1+margin), min(j.height, t.y1+margin)}
	}
	return out
}

// kernelMatch is the matching kernel, with what its solve leaves for a second
// look.
type kernelMatch struct {
	*job
	direction direction
	kernel    *Kernel
	whiten    bool
	sub       *frame.Image // new frame without sky, blurred if the direction asks for it
	filled    *frame.Image // the plain one with flagged pixels filled; only if it is blurred

	basis  *basis
	stamps []*stamp
	shape  shape
}

// newKernelMatch chooses the direction and solves for the kernel.
func (j *job) newKernelMatch(ctx context.Context, info *Info) (*kernelMatch, error) {
	m := &kernelMatch{job: j, sub: j.plain}
	m.direction = chooseDirection(j.newPSF.Moments, j.refPSF.Moments, j.width, j.height)
	info.Method = MethodKernel
	info.Direction, info.DirectionReason = m.direction.name, m.direction.reason
	if !m.direction.blur.none() {
		var err error
		if m.sub, err = m.blurNew(ctx, j.plain); err != nil {
			return nil, err
		}
	}
	if err := m.solveKernel(ctx, info); err != nil {
		return nil, err
	}
	m.whiten = m.needsWhitening()
	return m, nil
}

func (m *kernelMatch) scale(x, y float64) float64 { return m.kernel.Sum(x, y) }

func (m *kernelMatch) spectra(plan *fft.Plan) func(dst []complex64, x, y float64) {
	pixels := make([]float32, plan.TileLen())
	kernel := make([]float64, m.kernel.basis.side()*m.kernel.basis.side())
	return func(dst []complex64, x, y float64) {
		m.kernel.At(kernel, x, y)
		spectrumOfKernel(plan, dst, pixels, kernel, m.kernel.Half())
	}
}

func (m *kernelMatch) blurring() blur { return m.direction.blur }
func (m *kernelMatch) whitens() bool  { return m.whiten }

func (m *kernelMatch) squares() float64 {
	return sumSquares(m.kernel.At(nil, float64(m.width)/2, float64(m.height)/2))
}

// whiteningHalo is what whitening reads around a tile [px].
func (m *kernelMatch) whiteningHalo() int {
	if !m.direction.blur.none() {
		return blurredHalo
	}
	return 32
}

// chooseMatcher prepares the way that the configuration names.
func (j *job) chooseMatcher(ctx context.Context, info *Info) error {
	j.fluxes = j.compareFluxes(200)
	info.FluxScale, info.FluxScaleStars = j.fluxes.scale, j.fluxes.stars
	j.setZeroPoint(info)
	j.flags = j.newFlags.Clone()
	for at, bits := range j.pair.Reference.Flags.Bits {
		j.flags.Bits[at] |= bits
	}
	switch j.cfg.Method {
	case MethodKernel:
		m, err := j.newKernelMatch(ctx, info)
		if err != nil {
			return err
		}
		j.match = m
		info.MethodReason = "as configured"
	case MethodProper:
		m, err := j.newProperMatch(ctx, info)
		if err != nil {
			return err
		}
		j.match = m
		info.MethodReason = "as configured"
	case MethodAuto:
		return j.chooseByTrial(ctx, info)
	default:
		panic(fmt.Sprintf("subtract: method %q is none of %v", j.cfg.Method, Methods()))
	}
	return nil
}

// stampPositions lists where constant stars may be looked at.
func (j *job) stampPositions() []candidatePosition {
	return stampPositions(j.pair, &j.fluxes, j.cfg.StampsMin)
}
