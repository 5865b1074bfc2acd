// Package startable keeps star lists in FITS binary tables, without loss.
package startable

import (
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// number describes one numeric column.
type number struct {
	name, unit, description string
	field                   func(*stars.Star) *float64
}

var numbers = []number{
	{"x_px", "pixel", "FITS convention: the first pixel's centre is 1", func(s *stars.Star) *float64 { return &s.X }},
	{"y_px", "pixel", "", func(s *stars.Star) *float64 { return &s.Y }},
	{"x_px_err", "pixel", "1 sigma", func(s *stars.Star) *float64 { return &s.XErr }},
	{"y_px_err", "pixel", "1 sigma", func(s *stars.Star) *float64 { return &s.YErr }},
	{"flux", "count", "of a point source", func(s *stars.Star) *float64 { return &s.Flux }},
	{"flux_err", "count", "1 sigma", func(s *stars.Star) *float64 { return &s.FluxErr }},
	{"peak", "count", "brightest pixel above the sky", func(s *stars.Star) *float64 { return &s.Peak }},
	{"signal_to_noise", "", "", func(s *stars.Star) *float64 { return &s.SN }},
	{"fwhm_px", "pixel", "", func(s *stars.Star) *float64 { return &s.FWHM }},
	{"moment_xx", "pixel2", "windowed second moment", func(s *stars.Star) *float64 { return &s.Mxx }},
	{"moment_yy", "pixel2", "", func(s *stars.Star) *float64 { return &s.Myy }},
	{"moment_xy", "pixel2", "", func(s *stars.Star) *float64 { return &s.Mxy }},
	{"roundness", "", "minor to major axis", func(s *stars.Star) *float64 { return &s.Roundness }},
	{"neighbour_px", "pixel", "distance of the nearest comparable source", func(s *stars.Star) *float64 { return &s.Neighbour }},
}

// New returns a table of the stars, in their order.
func New(name string, list []stars.Star) *fits.Table {
	t := &fits.Table{Name: name}
	for _, n := range numbers {
		data := make([]float64, len(list))
		for i := range list {
			data[i] = *n.field(&list[i])
		}
		t.Columns = append(t.Columns, fits.Column{Name: n.name, Unit: n.unit, Description: n.description, Data: data})
	}
	flags := make([]int32, len(list))
	clean, extended := make([]bool, len(list)), make([]bool, len(list))
	for i := range list {
		flags[i], clean[i], extended[i] = int32(list[i].Flags), list[i].Clean, list[i].Extended
	}
	t.Columns = append(t.Columns,
		fits.Column{Name: "flags", Description: "bits of the flag plane in the core", Data: flags},
		fits.Column{Name: "clean", Description: "fit to learn a PSF from", Data: clean},
		fits.Column{Name: "extended", Description: "wider or longer than a star", Data: extended})
	return t
}

// Read returns the stars of a table.
func Read(t *fits.Table) ([]stars.Star, error) {
	list := make([]stars.Star, t.Rows())
	for _, n := range numbers {
		data, err := t.Floats(n.name)
		if err != nil {
			return nil, err
		}
		for i := range list {
			*n.field(&list[i]) = data[i]
		}
	}
	flags, err := t.Ints("flags")
	if err != nil {
		return nil, err
	}
	clean, err := t.Bools("clean")
	if err != nil {
		return nil, err
	}
	extended, err := t.Bools("extended")
	if err != nil {
		return nil, err
	}
	for i := range list {
		list[i].Flags, list[i].Clean, list[i].Extended = frame.Flag(flags[i]), clean[i], extended[i]
	}
	return list, nil
}
