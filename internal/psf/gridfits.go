package psf

import (
	"fmt"

	"nightsift/internal/fits"
)

// Encode returns the grid as an image of three axes: axis 1 and 2 are the
// samples of a plane, axis 3 the field positions, x fastest. The header says
// how to read it: GRIDNX, GRIDNY, the positions GRIDX1… and GRIDY1…, STAMPPIX
// (pixels along a side) and OVERSAMP (samples per pixel). The pixels are
// shared with the grid.
func (g *Grid) Encode(name string) *fits.ImageHDU {
	h := &fits.Header{}
	h.Set("GRIDNX", int64(g.NX), "field positions along x")
	h.Set("GRIDNY", int64(g.NY), "field positions along y")
	h.Set("STAMPPIX", int64(g.Size), "[pix] tabulated side of the PSF")
	h.Set("OVERSAMP", int64(g.Oversample), "samples per pixel of the pixel-integrated PSF")
	for k, v := range g.X {
		h.Set(fmt.Sprintf("GRIDX%d", k+1), v, "[pix] x of this column of positions")
	}
	for k, v := range g.Y {
		h.Set(fmt.Sprintf("GRIDY%d", k+1), v, "[pix] y of this row of positions")
	}
	n := g.Side()
	return &fits.ImageHDU{Name: name, Header: h, Width: n, Height: n, Depth: g.NX * g.NY, Float: g.Pix}
}

// Decode makes a grid from what Encode wrote. Errors say which card is
// missing or does not fit the pixels.
func Decode(c *fits.Cube) (*Grid, error) {
	number := func(key string) (int, error) {
		v, ok := c.Header.Int(key)
		if !ok {
			return 0, fmt.Errorf("psf: keyword %s is missing or no integer: not a tabulated PSF", key)
		}
		if v < 1 || v > 1<<20 {
			return 0, fmt.Errorf("psf: %s = %d: want a small positive number", key, v)
		}
		return int(v), nil
	}
	g := &Grid{Pix: c.Pix}
	for _, k := range []struct {
		key string
		to  *int
	}{{"GRIDNX", &g.NX}, {"GRIDNY", &g.NY}, {"STAMPPIX", &g.Size}, {"OVERSAMP", &g.Oversample}} {
		v, err := number(k.key)
		if err != nil {
			return nil, err
		}
		*k.to = v
	}
	if g.NX > 999 || g.NY > 999 {
		return nil, fmt.Errorf("psf: GRIDNX, GRIDNY = %d, %d: want at most 999", g.NX, g.NY)
	}
	for _, k := range []struct {
		key string
		n   int
		to  *[]float64
	}{{"GRIDX", g.NX, &g.X}, {"GRIDY", g.NY, &g.Y}} {
		for i := range k.n {
			v, ok := c.Header.Float(fmt.Sprintf("%s%d", k.key, i+1))
			if !ok {
				return nil, fmt.Errorf("psf: keyword %s%d is missing or no number", k.key, i+1)
			}
			*k.to = append(*k.to, v)
		}
	}
	if n := g.Side(); c.Width != n || c.Height != n || c.Depth != g.NX*g.NY {
		return nil, fmt.Errorf("psf: image of %d×%d×%d, the header tells of %d×%d×%d", c.Width, c.Height, c.Depth, n, n, g.NX*g.NY)
	}
	if err := g.check(); err != nil {
		return nil, fmt.Errorf("psf: %w", err)
	}
	g.prepare()
	return g, nil
}
