package subtract

import (
	"context"
	"fmt"
	"math"

	"nightsift/align"
	"nightsift/internal/fft"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
)

// Solution is what a subtraction has solved for, kept to ask what the
// difference would be had the new frame received more light. It holds the
// planes of the pair and of the difference. It serves one goroutine.
type Solution struct {
	job        *job
	difference *Difference
}

// Solve does what Subtract does and keeps the solution. Neither the pair nor
// the difference may be changed while the solution is in use.
func Solve(ctx context.Context, pair *align.Pair, cfg Config) (*Difference, *Solution, error) {
	d, j, err := run(ctx, pair, cfg)
	if err != nil {
		return nil, nil, err
	}
	return d, &Solution{j, d}, nil
}

// PSF is the point-spread function of the new frame.
func (s *Solution) PSF() *psf.Model { return s.job.newPSF }

// Gain is the gain of the new frame [electron per count], from its header, else
// the one that explains its sky noise; +Inf if neither is known.
func (s *Solution) Gain() float64 { return s.job.newGain }

// Light is light on a square of 2·Radius+1 pixels on a side.
type Light struct {
	X, Y   int // FITS pixel of the square's centre
	Radius int
	Counts []float32 // of the new frame, rows from the lowest y
}

// With returns the difference as it would be with light added to the new
// frame, by the transfer functions that the frame without it gave. The
// difference is linear in the new frame, so nothing is solved again: each light
// goes through blur and whitening at its place, and the score is computed anew
// in the tiles that it touches. Pixels that reach saturation with the light are
// flagged. What it leaves as it was: alignment, background, point-spread
// functions, kernel, the smooth sky of the difference, the noise model and what
// was found to be artefacts.
//
// The result shares the planes that do not change with the difference that
// Solve returned. Its Injected is set. Lights must not overlap.
func (s *Solution) With(ctx context.Context, lights []Light) (*Difference, error) {
	j, d := s.job, *s.difference
	d.Injected = true
	d.Image, d.New, d.Flags, d.Significance = d.Image.Clone(), d.New.Clone(), d.Flags.Clone(), d.Significance.Clone()
	through := j.throughLight()
	input := j.scoring(&d)
	touched := map[int]bool{}
	for _, l := range lights {
		if len(l.Counts) != (2*l.Radius+1)*(2*l.Radius+1) || l.Radius > mostLightRadius {
			panic(fmt.Sprintf("subtract: %d counts for light of radius %d, at most %d", len(l.Counts), l.Radius, mostLightRadius))
		}
		s.brighten(&d, l)
		changed, radius := through(l)
		addSquare(d.Image, d.Flags, changed, l.X, l.Y, radius)
		reach := radius + j.newPSF.Radius() + 1
		for i, t := range input.tiles {
			if l.X > t.x0-reach && l.X <= t.x1+reach && l.Y > t.y0-reach && l.Y <= t.y1+reach {
				touched[i] = true
			}
		}
	}
	var tiles []tile
	for i, t := range input.tiles {
		if touched[i] {
			tiles = append(tiles, t)
		}
	}
	input.tiles = tiles
	if err := score(ctx, d.Significance, input); err != nil {
		return nil, err
	}
	return &d, nil
}

// brighten adds light to New and flags what saturates, with the pixels around.
func (s *Solution) brighten(d *Difference, l Light) {
	level := s.job.pair.New.Meta.Saturation
	counts := s.job.pair.New.Image
	size := 2*l.Radius + 1
	for v := range size {
		y := l.Y - 1 - l.Radius + v
		if y < 0 || y >= d.New.Height {
			continue
		}
		for u := range size {
			x := l.X - 1 - l.Radius + u
			if x < 0 || x >= d.New.Width {
				continue
			}
			light := l.Counts[v*size+u]
			d.New.Row(y)[x] += light
			if !(level > 0 && float64(counts.Row(y)[x])+float64(light) >= level) {
				continue
			}
			for b := max(0, y-1); b <= min(d.Flags.Height-1, y+1); b++ {
				for a := max(0, x-1); a <= min(d.Flags.Width-1, x+1); a++ {
					d.Flags.Row(b)[a] |= frame.Saturated
					d.Image.Row(b)[a] = 0
				}
			}
		}
	}
}

// addSquare adds a square around a FITS pixel where flags allow it.
func addSquare(dst *frame.Image, flags *frame.Mask, square []float32, cx, cy, radius int) {
	const masked = frame.Unusable | frame.Edge
	size := 2*radius + 1
	for v := range size {
		y := cy - 1 - radius + v
		if y < 0 || y >= dst.Height {
			continue
		}
		row, bits := dst.Row(y), flags.Row(y)
		for u := range size {
			if x := cx - 1 - radius + u; x >= 0 && x < dst.Width && bits[x]&masked == 0 {
				row[x] += square[v*size+u]
			}
		}
	}
}

// Light spreads by lightSpread px in the whitening; with that it must fit into
// a Fourier tile.
const (
	lightSpread     = 12
	mostLightRadius = tileSize/2 - 1 - lightSpread
)

// throughLight returns the function that sends light through blur and
// whitening at its place. It gives the square that results and its radius.
func (j *job) throughLight() func(l Light) ([]float32, int) {
	if !j.match.whitens() {
		return func(l Light) ([]float32, int) { return l.Counts, l.Radius }
	}
	plan := fft.NewPlan(tileSize, tileSize)
	w, prepare := j.newTransfer(plan)
	// Where the light fits, a tile of half the side serves, and of the transfer
	// function every other frequency.
	const small = tileSize / 2
	smallPlan := fft.NewPlan(small, small)
	transfer := make([]float32, smallPlan.SpectrumLen())
	pixels := make([]float32, tileSize*tileSize)
	spectrum := make([]complex64, plan.SpectrumLen())
	return func(l Light) ([]float32, int) {
		const around = tileSize / 2
		prepare(tile{l.X - around, l.Y - around, l.X + around, l.Y + around})
		radius := l.Radius + lightSpread
		side, p, t := tileSize, plan, w.blurred
		if radius < small/2 {
			side, p, t = small, smallPlan, transfer
			half, smallHalf := plan.SpectrumWidth(), smallPlan.SpectrumWidth()
			for v := range small {
				for u := range smallHalf {
					transfer[v*smallHalf+u] = w.blurred[2*v*half+2*u]
				}
			}
		}
		pixels, spectrum := pixels[:side*side], spectrum[:p.SpectrumLen()]
		wrap(pixels, side, l.Counts, l.Radius)
		p.Forward(spectrum, pixels)
		scaleReal(spectrum, t)
		p.Inverse(pixels, spectrum)
		size := 2*radius + 1
		out := make([]float32, size*size)
		for v := range size {
			row := pixels[((v-radius+side)%side)*side:]
			for u := range size {
				out[v*size+u] = row[(u-radius+side)%side]
			}
		}
		return out, radius
	}
}

// Searchable reports whether a significance was computed at the pixel nearest
// to a FITS position.
func (d *Difference) Searchable(x, y float64) bool {
	i, k := int(math.Round(x))-1, int(math.Round(y))-1
	return i >= 0 && k >= 0 && i < d.Flags.Width && k < d.Flags.Height && d.Flags.Row(k)[i]&(frame.Unusable|frame.Edge) == 0
}
