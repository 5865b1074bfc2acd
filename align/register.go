package align

import (
	"context"
	"fmt"
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
)

// Field is what registering needs of a measured frame, without its pixels.
type Field struct {
	Name          string
	Width, Height int      // px
	WCS           *wcs.WCS // nil if unknown
	Filter        string   // empty if unknown
	Stars         *stars.List
}

func (f Field) frame() *frame.Frame {
	g := &frame.Frame{Name: f.Name, Image: &frame.Image{Width: f.Width, Height: f.Height}, WCS: f.WCS, Meta: frame.UnknownMeta()}
	g.Meta.Filter = f.Filter
	return g
}

// Register finds where the pixels of onto lie on from, and the ratio of their
// fluxes, from the stars alone: what AlignTo does, for a caller who resamples
// later. The pair has no planes, backgrounds or variances; onto is its new
// frame and from its reference. Neither is changed. The error is a
// *frame.Problem where the frames are at fault, or the context's.
func Register(ctx context.Context, onto, from Field, cfg Config) (*Pair, error) {
	n, r := onto.frame(), from.frame()
	if err := filterProblem(n, r, cfg); err != nil {
		return nil, err
	}
	list := *onto.Stars
	list.Stars = append([]stars.Star(nil), onto.Stars.Stars...)
	p := &Pair{New: n, NewStars: &list}
	g := newGeometry(n, p.NewStars, &PreparedReference{Frame: r, Stars: from.Stars}, cfg)
	if err := g.find(ctx); err != nil {
		return nil, err
	}
	if err := g.refine(ctx); err != nil {
		return nil, err
	}
	if err := g.fillPair(p); err != nil {
		return nil, err
	}
	return p, nil
}

// Carry moves a star of the reference to the new frame's pixels: position,
// errors, width and moments. The flux stays. ok is false where the transform
// has no inverse.
func (t *Transform) Carry(s stars.Star) (moved stars.Star, ok bool) {
	x, y, ok := t.Inverse(s.X, s.Y)
	if !ok {
		return s, false
	}
	xx, xy, yx, yy := t.Jacobian(x, y)
	inv, ok := affine{xx: xx, xy: xy, yx: yx, yy: yy}.inverse()
	if !ok {
		return s, false
	}
	area := math.Abs(xx*yy - xy*yx)
	scale := math.Sqrt(area)
	ex, ey := s.XErr, s.YErr
	mxx, myy, mxy := s.Mxx, s.Myy, s.Mxy
	s.X, s.Y = x, y
	s.XErr, s.YErr = math.Hypot(inv.xx*ex, inv.xy*ey), math.Hypot(inv.yx*ex, inv.yy*ey)
	s.Mxx = inv.xx*inv.xx*mxx + 2*inv.xx*inv.xy*mxy + inv.xy*inv.xy*myy
	s.Myy = inv.yx*inv.yx*mxx + 2*inv.yx*inv.yy*mxy + inv.yy*inv.yy*myy
	s.Mxy = inv.xx*inv.yx*mxx + (inv.xx*inv.yy+inv.xy*inv.yx)*mxy + inv.xy*inv.yy*myy
	s.FWHM /= scale
	s.Neighbour /= scale
	s.Peak *= area
	return s, true
}

// FitTransform returns the transform nearest to a mapping of positions, by
// least squares over a frame of width × height px, and its largest error
// [px of the result]. Positions for which ok is false are left out; without
// enough of them the result is nil.
func FitTransform(width, height int, mapping func(x, y float64) (u, v float64, ok bool)) (t *Transform, worst float64) {
	const n = 33
	var s []sample
	for j := range n {
		for i := range n {
			x, y := 0.5+float64(width)*float64(i)/(n-1), 0.5+float64(height)*float64(j)/(n-1)
			if u, v, ok := mapping(x, y); ok {
				s = append(s, sample{x: x, y: y, u: u, v: v, sigma2: 1})
			}
		}
	}
	order := highestOrder(len(s), MaxOrder)
	if len(s) < 3 {
		return nil, math.Inf(1)
	}
	for ; order >= 1; order-- {
		if r, ok := fitOnce(s, nil, order, floors{}); ok {
			for i := range s {
				u, v := r.t.Apply(s[i].x, s[i].y)
				worst = max(worst, math.Hypot(u-s[i].u, v-s[i].v))
			}
			return r.t, worst
		}
	}
	return nil, math.Inf(1)
}

// Resample brings a sky-subtracted image [count] onto a grid of width × height
// px. t maps positions on the grid to positions on the image. What AlignTo
// says of the planes of a Pair's reference holds for image, variance [count²]
// and flags returned: counts of a source are conserved, the variance is that
// of white noise with the power of the noise at low frequencies. The planes
// given are only read; their shapes must be equal.
//
// The error is the context's.
func Resample(ctx context.Context, img, variance *frame.Image, flags *frame.Mask, t *Transform, width, height, workers int) (*frame.Frame, error) {
	if err := t.check(); err != nil {
		panic(fmt.Sprintf("align: %v", err))
	}
	s := newSource(img, variance, flags)
	s.interpolate()
	scale := math.Sqrt(t.Area(float64(width+1)/2, float64(height+1)/2))
	r, err := s.forScale(scale).resample(ctx, t, width, height, workers)
	if err != nil {
		return nil, err
	}
	return &frame.Frame{Image: r.image, Variance: r.variance, Flags: r.flags, Meta: frame.UnknownMeta()}, nil
}
