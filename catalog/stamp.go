package catalog

import (
	"context"
	"errors"
	"fmt"
	"image"
	"image/color"
	"io"
	"math"

	"github.com/disintegration/imaging"

	"nightsift/detect"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/picture"
	"nightsift/internal/wcs"
)

// Stamp is what a candidate looks like: square cut-outs of the new frame, of the
// reference as it was compared, and of their difference, all on the new frame's
// pixels [count].
type Stamp struct {
	Candidate detect.Candidate
	Size      int // px
	New       *frame.Image
	Reference *frame.Image
	Diff      *frame.Image

	// WCS of the cut-outs; nil where the candidate's place or the frame's scale
	// is unknown. It is the tangent plane through the candidate with the scale
	// of the frame's centre: exact at the candidate, and off by what the
	// distortion changes within the cut-out.
	WCS *wcs.WCS
}

// panel is the least side of a cut-out in a picture [px], and gap what lies
// between two.
const (
	panel = 306
	gap   = 6
)

// Stamp returns the cut-outs of a candidate, or of an object's most significant
// detection that has some, size pixels wide.
func (s *Store) Stamp(ctx context.Context, id string, size int) (*Stamp, error) {
	if size < 5 || size > detect.StampSize {
		return nil, fmt.Errorf("stamp of %d pixels: expected 5 to %d, which is what the catalogue keeps", size, detect.StampSize)
	}
	c, err := s.Candidate(ctx, id)
	if errors.Is(err, ErrNotFound) {
		c, err = s.brightest(ctx, id)
	}
	if err != nil {
		return nil, err
	}
	stamp := &Stamp{Candidate: c, Size: size}
	for _, plane := range []struct {
		name string
		pix  []float32
		to   **frame.Image
	}{{"new", c.StampNew, &stamp.New}, {"reference", c.StampReference, &stamp.Reference}, {"difference", c.StampDifference, &stamp.Diff}} {
		if len(plane.pix) != detect.StampSize*detect.StampSize {
			return nil, fmt.Errorf("candidate %s: the catalogue has no %s stamp: found %d pixels, expected %d × %d", c.ID, plane.name,
				len(plane.pix), detect.StampSize, detect.StampSize)
		}
		*plane.to = middle(plane.pix, size)
	}
	frames, err := s.Frames(ctx, FrameQuery{Frame: c.Frame})
	if err != nil {
		return nil, err
	}
	if len(frames) == 1 {
		if w := frames[0].around(c.X, c.Y, c.RA, c.Dec); w != nil {
			// The pixel of the frame before the first of the stamp.
			before := func(x float64) float64 {
				return math.Round(x) - 1 - detect.StampSize/2 + float64((detect.StampSize-size)/2)
			}
			stamp.WCS = w.Shifted(before(c.X), before(c.Y))
		}
	}
	return stamp, nil
}

// brightest returns the most significant detection of an object that has stamps.
func (s *Store) brightest(ctx context.Context, name string) (detect.Candidate, error) {
	var best detect.Candidate
	o, err := s.Object(ctx, name)
	if err != nil {
		return best, err
	}
	members, err := s.Members(ctx, o)
	if err != nil {
		return best, err
	}
	found := false
	for i := range members {
		if found && !(math.Abs(members[i].Significance) > math.Abs(best.Significance)) {
			continue
		}
		c, err := s.Candidate(ctx, members[i].ID)
		if err != nil {
			return best, err
		}
		if c.StampDifference != nil {
			best, found = c, true
		}
	}
	if !found {
		return best, fmt.Errorf("object %s: none of its %s has stamps in the catalogue", o.Name, count(len(members), "detection"))
	}
	return best, nil
}

// middle cuts the middle out of a stamp as it is kept.
func middle(pix []float32, size int) *frame.Image {
	m := frame.NewImage(size, size)
	first := (detect.StampSize - size) / 2
	for j := range size {
		copy(m.Row(j), pix[(first+j)*detect.StampSize+first:][:size])
	}
	return m
}

// around returns a tangent plane with the frame's Jacobian that puts a pixel at a
// place [deg]; nil where something of this is unknown.
func (r *FrameRecord) around(x, y, ra, dec float64) *wcs.WCS {
	j := r.Jacobian
	x0, y0 := float64(r.Width+1)/2, float64(r.Height+1)/2
	dx, dy := x-x0, y-y0
	xi, eta := j[0]*dx+j[1]*dy, j[2]*dx+j[3]*dy // arcsec from the frame's centre
	if !onSky(ra, dec) || math.IsNaN(xi) || math.IsNaN(eta) {
		return nil
	}
	// The centre of the frame from which the place has this offset. North there
	// is not parallel to north at the place.
	target := newPlane(ra, dec)
	ra0, dec0 := target.direction(-xi, -eta).position()
	for range 5 {
		at := newPlane(ra0, dec0)
		offX, offY := target.offset(at.direction(xi, eta))
		ra0, dec0 = at.direction(-offX, -offY).position()
	}
	w, err := wcs.NewTAN(x0, y0, ra0, dec0, [2][2]float64{{j[0] / 3600, j[1] / 3600}, {j[2] / 3600, j[3] / 3600}})
	if err != nil {
		return nil
	}
	return w
}

// EncodePNG writes new, reference and difference side by side. New and reference
// have one stretch, the difference has its own. With northUp north is up and
// east to the left.
func (st *Stamp) EncodePNG(w io.Writer, northUp bool) error {
	angle, parity := 0.0, 1
	if northUp {
		if st.WCS == nil {
			return fmt.Errorf("candidate %s: where north is on frame %s is unknown", st.Candidate.ID, st.Candidate.Frame)
		}
		var err error
		at := float64(st.Size+1) / 2
		if angle, parity, err = st.WCS.Orientation(at, at); err != nil {
			return fmt.Errorf("candidate %s: %w", st.Candidate.ID, err)
		}
	}
	panels := append(shade(st.New, st.Reference), shade(st.Diff)...)
	zoom := (panel + st.Size - 1) / st.Size
	side := zoom * st.Size
	sheet := imaging.New(3*side+2*gap, side, color.White)
	for k := range panels {
		img := imaging.Resize(panels[k], side, side, imaging.NearestNeighbor)
		if northUp {
			img = imaging.CropCenter(picture.NorthUp(img, angle, parity), side, side)
		}
		sheet = imaging.Paste(sheet, img, image.Pt(k*(side+gap), 0))
	}
	return picture.Encode(w, sheet)
}

// softness bends the stretch: below a third of the range of the sky's noise values
// are shown in proportion, far above it by their logarithm.
const softness = 3

// shade paints planes with one stretch: from the dark end of the sky's noise to
// the brightest pixel of all, through an inverse hyperbolic sine, so that sky,
// host and new light all have their grey.
func shade(planes ...*frame.Image) []*image.Gray {
	n := len(planes[0].Pix)
	all := frame.NewImage(planes[0].Width, len(planes)*planes[0].Height)
	for k, p := range planes {
		copy(all.Pix[k*n:], p.Pix)
	}
	low, high := picture.Stretch(all)
	most := 1.0
	for i, v := range all.Pix {
		t := (float64(v) - low) / (high - low)
		all.Pix[i] = float32(math.Asinh(softness * t))
		if t > most && !math.IsInf(t, 0) {
			most = t
		}
	}
	list := make([]*image.Gray, len(planes))
	for k, p := range planes {
		soft := &frame.Image{Width: p.Width, Height: p.Height, Pix: all.Pix[k*n : (k+1)*n]}
		list[k] = picture.Grey(soft, 0, math.Asinh(softness*most))
	}
	return list
}

// EncodeFITS writes the cut-outs as the extensions NEW, REFERENCE and DIFFERENCE
// with world coordinates where they are known.
func (st *Stamp) EncodeFITS(w io.Writer) error {
	c := &st.Candidate
	primary := &fits.Header{}
	primary.Set("CANDID", c.ID, "identifier of the candidate")
	primary.Set("FRAME", printable(c.Frame), "new frame")
	if c.Filter != "" {
		primary.Set("FILTER", printable(c.Filter), "filter of the new frame")
	}
	for _, v := range []struct {
		key     string
		value   float64
		comment string
	}{{"MJD-AVG", c.MidMJD, "middle of the exposure, UTC"}, {"RA", c.RA, "[deg] of the candidate, ICRS"}, {"DEC", c.Dec, "[deg] of the candidate, ICRS"}} {
		if v.value == v.value {
			primary.Set(v.key, v.value, v.comment)
		}
	}
	var list []fits.HDUWriter
	for _, p := range []struct {
		name  string
		plane *frame.Image
	}{{"NEW", st.New}, {"REFERENCE", st.Reference}, {"DIFFERENCE", st.Diff}} {
		h := &fits.Header{}
		h.Set("BUNIT", "count", "")
		if st.WCS != nil {
			for _, card := range st.WCS.Cards() {
				h.Set(card.Key, card.Value, card.Comment)
			}
		}
		list = append(list, &fits.ImageHDU{Name: p.name, Header: h, Width: st.Size, Height: st.Size, Float: p.plane.Pix})
	}
	return fits.Encode(w, primary, list...)
}
