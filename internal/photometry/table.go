package photometry

import (
	"fmt"
	"math"

	"nightsift/internal/fits"
)

// Extension is the name of the table of standards in files.
const Extension = "STANDARDS"

// Table returns the standards as a table; FromTable reads it.
func (s *Standards) Table() *fits.Table {
	h := &fits.Header{}
	h.Set("CATALOG", s.Catalogue, "catalogue of stars")
	h.Set("CATSHA", s.Checksum, "SHA-256 of its file")
	h.Set("CATMAG", s.Column, "its column of magnitudes")
	h.Set("REFUSAL", s.Refusal, "why the stars cannot serve")
	h.Set("COLTERM", s.Settings.ColourTerm, "coefficient of the colour")
	h.Set("COLFIT", s.Settings.FitColour, "it is to be fitted")
	h.Set("COLZERO", s.Settings.SourceColour, "[mag] colour for which magnitudes hold")
	h.Set("MINSTARS", int64(s.Settings.MinStars), "fewest stars")
	h.Set("MAXSCAT", s.Settings.MaxScatter, "[mag] largest scatter")
	h.Set("NKNOWN", int64(s.Known), "catalogue stars on the frame")
	h.Set("NTRIED", int64(s.Tried), "stars of the frame that were looked for")
	h.Set("NCHANCE", s.Chance, "matches expected by chance")
	h.Set("OFFSETX", s.OffsetX, "[pix] shift of the frame's stars")
	h.Set("OFFSETY", s.OffsetY, "[pix] shift of the frame's stars")
	h.Set("NBLEND", int64(s.Blended), "left out: another catalogue star is as near")
	n := len(s.Stars)
	star, x, y := make([]int32, n), make([]float64, n), make([]float64, n)
	mag, magErr, colour := make([]float64, n), make([]float64, n), make([]float64, n)
	for i, t := range s.Stars {
		star[i], x[i], y[i], mag[i], magErr[i], colour[i] = int32(t.Star), t.X, t.Y, t.Mag, t.MagErr, t.Colour
	}
	return &fits.Table{Name: Extension, Header: h, Columns: []fits.Column{
		{Name: "star", Description: "row of the list of stars, from 0", Data: star},
		{Name: "x", Unit: "pix", Description: "FITS pixel of the new frame", Data: x},
		{Name: "y", Unit: "pix", Description: "FITS pixel of the new frame", Data: y},
		{Name: "mag", Unit: "mag", Description: "of the catalogue", Data: mag},
		{Name: "mag_err", Unit: "mag", Description: "1 sigma", Data: magErr},
		{Name: "colour", Unit: "mag", Description: "of the catalogue", Data: colour},
	}}
}

// FromTable reads what Table made.
func FromTable(t *fits.Table) (*Standards, error) {
	s := &Standards{}
	if t.Header == nil {
		return nil, fmt.Errorf("table %s has no header", t.Name)
	}
	var missing string
	float := func(key string, to *float64) {
		v, ok := t.Header.Float(key)
		if !ok {
			missing = key
		}
		*to = v
	}
	whole := func(key string, to *int) {
		v, ok := t.Header.Int(key)
		if !ok {
			missing = key
		}
		*to = int(v)
	}
	s.Catalogue, _ = t.Header.Str("CATALOG")
	s.Checksum, _ = t.Header.Str("CATSHA")
	s.Column, _ = t.Header.Str("CATMAG")
	s.Refusal, _ = t.Header.Str("REFUSAL")
	s.Settings.FitColour, _ = t.Header.Bool("COLFIT")
	float("COLTERM", &s.Settings.ColourTerm)
	float("COLZERO", &s.Settings.SourceColour)
	float("MAXSCAT", &s.Settings.MaxScatter)
	float("NCHANCE", &s.Chance)
	float("OFFSETX", &s.OffsetX)
	float("OFFSETY", &s.OffsetY)
	whole("MINSTARS", &s.Settings.MinStars)
	whole("NKNOWN", &s.Known)
	whole("NTRIED", &s.Tried)
	whole("NBLEND", &s.Blended)
	if missing != "" {
		return nil, fmt.Errorf("table %s: keyword %s is missing or no number", t.Name, missing)
	}
	star, err := t.Ints("star")
	if err != nil {
		return nil, err
	}
	if len(star) > 0 {
		s.Stars = make([]Standard, len(star))
	}
	for i, v := range star {
		s.Stars[i].Star = int(v)
	}
	for _, c := range []struct {
		name string
		at   func(*Standard) *float64
	}{
		{"x", func(s *Standard) *float64 { return &s.X }}, {"y", func(s *Standard) *float64 { return &s.Y }},
		{"mag", func(s *Standard) *float64 { return &s.Mag }}, {"mag_err", func(s *Standard) *float64 { return &s.MagErr }},
		{"colour", func(s *Standard) *float64 { return &s.Colour }},
	} {
		v, err := t.Floats(c.name)
		if err != nil {
			return nil, err
		}
		for i, x := range v {
			*c.at(&s.Stars[i]) = x
		}
	}
	for i := range s.Stars {
		if t := &s.Stars[i]; math.IsNaN(t.X) || math.IsNaN(t.Y) || t.Star < 0 {
			return nil, fmt.Errorf("table STANDARDS: row %d has no place", i+1)
		}
	}
	return s, nil
}
