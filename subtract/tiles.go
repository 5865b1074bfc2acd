package subtract

import (
	"context"

	"golang.org/x/sync/errgroup"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
)

// tileSize is the side of the Fourier tiles [px].
const tileSize = 256

// tile is a rectangle of the frame, 0-based and half open: the pixels that one
// Fourier tile is responsible for. What lies around it within the halo is read
// as well.
type tile struct{ x0, y0, x1, y1 int }

// centre returns the FITS position of the middle of a tile.
func (t tile) centre() (x, y float64) {
	return 0.5*float64(t.x0+t.x1) + 0.5, 0.5*float64(t.y0+t.y1) + 0.5
}

// tiling cuts a frame in tiles of nearly equal size, none wider than the
// Fourier tile less its halo on both sides.
func tiling(width, height, halo int) []tile {
	core := tileSize - 2*halo
	nx := (width + core - 1) / core
	ny := (height + core - 1) / core
	tiles := make([]tile, 0, nx*ny)
	for j := range ny {
		for i := range nx {
			tiles = append(tiles, tile{i * width / nx, j * height / ny, (i + 1) * width / nx, (j + 1) * height / ny})
		}
	}
	return tiles
}

// forTiles runs work over all tiles on some goroutines, each with its own
// worker from newWorker. Tiles write to separate pixels, so the result does
// not depend on the number of goroutines.
func forTiles(ctx context.Context, workers int, tiles []tile, newWorker func() func(tile)) error {
	group, ctx := errgroup.WithContext(ctx)
	queue := make(chan tile)
	for range max(1, min(workers, len(tiles))) {
		group.Go(func() error {
			work := newWorker()
			for t := range queue {
				work(t)
			}
			return nil
		})
	}
	group.Go(func() error {
		defer close(queue)
		for _, t := range tiles {
			select {
			case queue <- t:
			case <-ctx.Done():
				return ctx.Err()
			}
		}
		return nil
	})
	return group.Wait()
}

// load copies the tile and its halo from src into dst (tileSize² values),
// zero beyond the frame. Pixel (x0-halo, y0-halo) lands at dst[0].
func load(dst []float32, src *frame.Image, t tile, halo int) {
	for j := range tileSize {
		row := dst[j*tileSize : (j+1)*tileSize]
		y := t.y0 - halo + j
		if y < 0 || y >= src.Height || y >= t.y1+halo {
			clear(row)
			continue
		}
		loadRow(row, src.Row(y), t.x0-halo, t.x1+halo)
	}
}

// loadRow copies src[from:to] to the start of dst with zeros beyond the ends.
func loadRow(dst, src []float32, from, to int) {
	n := 0
	if from < 0 {
		n = min(-from, len(dst))
		clear(dst[:n])
		from = 0
	}
	to = min(to, len(src))
	if to > from {
		n += copy(dst[n:], src[from:to])
	}
	clear(dst[n:])
}

// spectrumOfKernel writes the half spectrum of a square kernel whose centre is
// its middle pixel.
func spectrumOfKernel(plan *fft.Plan, dst []complex64, scratch []float32, kernel []float64, half int) {
	clear(scratch)
	n := 2*half + 1
	for j := range n {
		y := (j - half + tileSize) % tileSize
		for i := range n {
			x := (i - half + tileSize) % tileSize
			scratch[y*tileSize+x] = float32(kernel[j*n+i])
		}
	}
	plan.Forward(dst, scratch)
}

// scaleReal multiplies a spectrum by a real, even transfer function.
func scaleReal(dst []complex64, f []float32) {
	f = f[:len(dst)]
	for i, v := range f {
		dst[i] = complex(real(dst[i])*v, imag(dst[i])*v)
	}
}
