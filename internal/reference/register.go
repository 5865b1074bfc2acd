package reference

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"slices"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/wcs"
)

func (c *candidate) field() align.Field {
	return align.Field{Name: c.Name, Width: c.Width, Height: c.Height, WCS: c.wcs, Filter: c.Filter, Stars: c.list}
}

// registerAll chooses the anchor and finds every other frame's place and scale
// against it. Where the best frame is of another field than the rest, the next
// one is tried.
func registerAll(ctx context.Context, list []*candidate, cfg *Config) (anchor *candidate, err error) {
	left := remaining(list)
	byDepth := slices.Clone(left)
	scaled := allScaled(left)
	// Deep first, and of equal depth the sharper one: it gives the grid.
	slices.SortStableFunc(byDepth, func(a, b *candidate) int { return cmp.Compare(b.Depth/b.width(scaled), a.Depth/a.width(scaled)) })
	if cfg.Anchor != "" {
		i := slices.IndexFunc(left, func(c *candidate) bool { return c.Name == cfg.Anchor || c.Path == cfg.Anchor })
		if i < 0 {
			for _, c := range list {
				if c.Name == cfg.Anchor || c.Path == cfg.Anchor {
					return nil, fmt.Errorf("%s is to give the grid but cannot be used: %s", cfg.Anchor, c.Detail)
				}
			}
			return nil, fmt.Errorf("%s is to give the grid but is not among the frames", cfg.Anchor)
		}
		byDepth = []*candidate{left[i]}
	}
	type attempt struct {
		anchor *candidate
		pairs  []*align.Pair
		faults []*frame.Problem
		good   int
	}
	var best attempt
	attempts := 0
	for _, a := range byDepth {
		if cfg.Grid != nil && a.wcs == nil {
			continue
		}
		if attempts++; attempts > 4 {
			break
		}
		t := attempt{anchor: a, pairs: make([]*align.Pair, len(left)), faults: make([]*frame.Problem, len(left))}
		for i, c := range left {
			pair, err := align.Register(ctx, a.field(), c.field(), cfg.Align)
			var p *frame.Problem
			if errors.As(err, &p) {
				t.faults[i] = p
			} else if err != nil {
				return nil, err
			} else {
				t.pairs[i] = pair
				t.good++
			}
			cfg.observe(StageRegister, i+1, len(left), c.Name)
		}
		if best.anchor == nil || t.good > best.good {
			best = t
		}
		if 2*t.good >= len(left) {
			break
		}
	}
	if best.anchor == nil {
		return nil, errors.New("a grid was asked for by its place in the sky, but no usable frame has world coordinates; leave --center out, or solve the frames first")
	}
	anchor = best.anchor
	anchor.Anchor = true
	for i, c := range left {
		if best.faults[i] != nil && c != anchor {
			c.leaveFor(best.faults[i])
			continue
		}
		c.pair = best.pairs[i]
		if c == anchor {
			c.Scale, c.ScaleErr, c.Stars, c.RMS = 1, 0, len(c.list.Stars), 0
			continue
		}
		p := c.pair
		if !(p.FluxScale > 0) || math.IsInf(p.FluxScale, 0) {
			c.leave(frame.ProblemTooFewStars, "no star in common with "+anchor.Name+" gives the ratio of their fluxes")
			continue
		}
		c.Scale, c.ScaleErr, c.Stars, c.RMS = p.FluxScale, p.FluxScaleErr, len(p.Matches), p.RMS()
	}
	return anchor, nil
}

// grid is the pixel grid of the stack.
type grid struct {
	width, height int
	wcs           *wcs.WCS         // nil if unknown
	toAnchor      *align.Transform // nil: the anchor's own
	exact         func(x, y float64) (u, v float64, ok bool)
}

func newGrid(anchor *candidate, cfg *Config) (*grid, error) {
	if cfg.Grid == nil {
		return &grid{width: anchor.Width, height: anchor.Height, wcs: anchor.wcs}, nil
	}
	q := cfg.Grid
	s := q.Scale / 3600
	w, err := wcs.NewTAN(float64(q.Width+1)/2, float64(q.Height+1)/2, q.RA, q.Dec, [2][2]float64{{-s, 0}, {0, s}})
	if err != nil {
		return nil, err
	}
	g := &grid{width: q.Width, height: q.Height, wcs: w}
	g.exact = func(x, y float64) (u, v float64, ok bool) {
		ra, dec, err := w.PixelToSky(x, y)
		if err != nil {
			return 0, 0, false
		}
		u, v, err = anchor.wcs.SkyToPixel(ra, dec)
		return u, v, err == nil
	}
	near := func(x, y float64) (u, v float64, ok bool) {
		u, v, ok = g.exact(x, y)
		mx, my := float64(anchor.Width)/4, float64(anchor.Height)/4
		return u, v, ok && u > -mx && v > -my && u < float64(anchor.Width)+mx && v < float64(anchor.Height)+my
	}
	var worst float64
	if g.toAnchor, worst = align.FitTransform(q.Width, q.Height, near); g.toAnchor == nil || worst > maxMisfit {
		return nil, frame.Problemf(frame.ProblemNoOverlap, "the grid asked for, %d×%d px of %.3g arcsec about %.5f %+.5f, does not lie on %s, which is at %.5f %+.5f", q.Width, q.Height, q.Scale, q.RA, q.Dec, anchor.Name, anchor.RA, anchor.Dec)
	}
	return g, nil
}

// maxMisfit [px] is by how much the polynomial to a frame's pixels may miss the
// chain of projections it stands for.
const maxMisfit = 0.02

// place fills the candidate's transform and its stars on the grid.
func (g *grid) place(c *candidate) error {
	if g.exact == nil {
		if c.Anchor {
			c.transform = identity(g.width, g.height)
			c.placed = c.list.Stars
			return nil
		}
		c.transform, c.placed = c.pair.Transform, c.pair.ReferenceStars
		return nil
	}
	onto := func(x, y float64) (u, v float64, ok bool) {
		if u, v, ok = g.exact(x, y); !ok {
			return
		}
		if !c.Anchor {
			u, v = c.pair.Transform.Apply(u, v)
		}
		mx, my := 0.05*float64(c.Width), 0.05*float64(c.Height)
		return u, v, u > -mx && v > -my && u < float64(c.Width)+mx && v < float64(c.Height)+my
	}
	var worst float64
	c.transform, worst = align.FitTransform(g.width, g.height, onto)
	if c.transform == nil {
		return frame.Problemf(frame.ProblemNoOverlap, "%s does not reach the grid asked for", c.Name)
	}
	if worst > maxMisfit {
		return frame.Problemf(frame.ProblemAlignmentPoor, "the way from the grid to %s is off by %.3f px when written as a polynomial (accepted %.2f px)", c.Name, worst, maxMisfit)
	}
	from := c.list.Stars
	if !c.Anchor {
		from = c.pair.ReferenceStars
	}
	c.placed = nil
	for _, s := range from {
		if m, ok := g.toAnchor.Carry(s); ok {
			c.placed = append(c.placed, m)
		}
	}
	return nil
}

// identity maps every position to itself.
func identity(width, height int) *align.Transform {
	x0, y0 := float64(width+1)/2, float64(height+1)/2
	hx, hy := float64(width)/2, float64(height)/2
	return &align.Transform{Order: 1, X0: x0, Y0: y0, HalfX: hx, HalfY: hy, CX: []float64{x0, hx, 0}, CY: []float64{y0, 0, hy}}
}
