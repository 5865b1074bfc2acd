package reference

import (
	"math"
	"testing"
)

// A grid that was asked for has its centre and scale, and stars lie on it
// where the sky has them.
func TestRequestedGrid(t *testing.T) {
	paths := shots(t, smallSky, 3, small)
	cfg := quick(t)
	cfg.Method = MethodMean
	cfg.Grid = &Grid{RA: 150, Dec: -20, Scale: 0.9, Width: 280, Height: 260}
	p := build(t, paths, cfg)
	if p.Frame.Image.Width != 280 || p.Frame.Image.Height != 260 {
		t.Fatalf("%d×%d px", p.Frame.Image.Width, p.Frame.Image.Height)
	}
	seen := 0
	for _, s := range smallSky {
		// The sky of these tests runs east along −x.
		u, v := s.x/0.9+140.5, s.y/0.9+130.5
		i, j := int(math.Round(u))-1, int(math.Round(v))-1
		if s.flux < 20000 || i < 20 || j < 20 || i > 259 || j > 239 {
			continue
		}
		var sum, x, y float64
		for b := -4; b <= 4; b++ {
			for a := -4; a <= 4; a++ {
				q := float64(p.Frame.Image.Row(j + b)[i+a])
				sum, x, y = sum+q, x+q*float64(i+a+1), y+q*float64(j+b+1)
			}
		}
		seen++
		if d := math.Hypot(x/sum-u, y/sum-v); d > 0.3 {
			t.Errorf("a star of %.0f counts lies %.2f px from its place", s.flux, d)
		}
	}
	if seen < 3 {
		t.Errorf("only %d stars compared", seen)
	}
}
