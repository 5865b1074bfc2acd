package reference

// The stack goes by square tiles of Fourier transforms. Their inner parts, the
// cores, cover the grid; around each core lies a halo that is worked out but
// not kept, but for a seam over which neighbouring tiles are blended.
const (
	tileSide = 256 // px
	tileHalo = 40  // px
	tileCore = tileSide - 2*tileHalo
	tileSeam = 8 // px on either side of the border of two cores
)

// tile is one of them.
type tile struct {
	x0, y0 int     // of the core, 0-based
	x1, y1 int     // behind its last pixel
	x, y   float64 // FITS px, its middle
}

// tiling returns the tiles of a grid, row by row.
func tiling(width, height int) []tile {
	var out []tile
	for y0 := 0; y0 < height; y0 += tileCore {
		for x0 := 0; x0 < width; x0 += tileCore {
			t := tile{x0: x0, y0: y0, x1: min(x0+tileCore, width), y1: min(y0+tileCore, height)}
			t.x, t.y = 0.5+float64(t.x0+t.x1)/2, 0.5+float64(t.y0+t.y1)/2
			out = append(out, t)
		}
	}
	return out
}

// blend is the share of a tile at position p along an axis on which its core
// runs from p0 to p1 on a grid of n px: it falls linearly over the seams, so
// that those of neighbours add up to one.
func blend(p, p0, p1, n int) float32 {
	share := float32(1)
	if p0 > 0 {
		share = min(share, (float32(p-p0)+tileSeam+0.5)/(2*tileSeam))
	}
	if p1 < n {
		share = min(share, (float32(p1-p)+tileSeam-0.5)/(2*tileSeam))
	}
	return max(share, 0)
}
