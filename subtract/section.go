package subtract

import (
	"errors"
	"math"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/wcs"
)

// ErrOutside tells that a place in the sky is not on a difference.
var ErrOutside = errors.New("the place is not on the frame")

// Section is the square of a difference file around one place in the sky.
type Section struct {
	Name   string // of the new frame
	Meta   frame.Meta
	Info   Info
	WCS    *wcs.WCS
	PSF    *psf.Grid
	X, Y   float64 // the place, FITS pixels of the whole frame
	I0, J0 int     // array indices, in the whole frame, of the section's first pixel

	Image, Variance, Significance *frame.Image // as in Difference
	Flags                         *frame.Mask
}

// ReadSection reads what a measurement at one place (ra, dec [deg], ICRS) needs
// from a file made by Write: the pixels within the reach of the point-spread
// function and margin px more, as far as they are on the frame. Of the large
// planes only these are read. The error is ErrOutside for a place that is not
// on the frame, a *frame.Problem for a file that cannot be used.
func ReadSection(path string, ra, dec float64, margin int) (*Section, error) {
	f, err := fits.Open(path)
	if err != nil {
		return nil, frame.Problemf(frame.ProblemUnreadable, "%v", err)
	}
	defer f.Close()
	s := &Section{Meta: frame.UnknownMeta(), Info: unknownInfo()}
	fr := &frame.Frame{Meta: s.Meta}
	readFrame(fr, f.HDUs()[0].Header)
	readInfo(&s.Info, f.HDUs()[0].Header)
	s.Name, s.Meta = fr.Name, fr.Meta
	at, err := f.Find(extDifference)
	if err != nil {
		return nil, notOurs(path, err)
	}
	h := f.HDUs()[at]
	if s.WCS, err = wcs.FromKeywords(h.Header); err != nil {
		return nil, notOurs(path, err)
	}
	if s.WCS == nil {
		return nil, notOurs(path, errors.New(extDifference+" has no world coordinates"))
	}
	s.X, s.Y, err = s.WCS.SkyToPixel(ra, dec)
	if err != nil || !(s.X >= 0.5 && s.Y >= 0.5 && s.X < float64(h.Width)+0.5 && s.Y < float64(h.Height)+0.5) {
		return nil, ErrOutside
	}
	k, err := f.Find(extPSF)
	if err != nil {
		return nil, notOurs(path, err)
	}
	cube, err := f.Cube(k)
	if err != nil {
		return nil, notOurs(path, err)
	}
	if s.PSF, err = psf.Decode(cube); err != nil {
		return nil, notOurs(path, err)
	}
	reach := s.PSF.Size/2 + margin
	i, j := int(math.Round(s.X))-1, int(math.Round(s.Y))-1
	s.I0, s.J0 = max(0, i-reach), max(0, j-reach)
	width, height := min(h.Width, i+reach+1)-s.I0, min(h.Height, j+reach+1)-s.J0
	plane := func(name string) (*frame.Image, error) {
		k, err := f.Find(name)
		if err != nil {
			return nil, notOurs(path, err)
		}
		img, err := f.Section(k, s.I0+1, s.J0+1, width, height)
		if err != nil {
			return nil, notOurs(path, err)
		}
		return &frame.Image{Width: width, Height: height, Pix: img.Pix}, nil
	}
	for _, p := range []struct {
		name string
		dst  **frame.Image
	}{{extDifference, &s.Image}, {extVariance, &s.Variance}, {extSignificance, &s.Significance}} {
		if *p.dst, err = plane(p.name); err != nil {
			return nil, err
		}
	}
	bits, err := plane(extFlags)
	if err != nil {
		return nil, err
	}
	s.Flags = frame.NewMask(width, height)
	for k, v := range bits.Pix {
		s.Flags.Bits[k] = frame.Flag(v)
	}
	return s, nil
}
