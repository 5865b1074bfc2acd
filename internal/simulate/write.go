package simulate

import (
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strconv"

	"nightsift/internal/fits"
	"nightsift/internal/wholefile"
)

// column describes one column of a truth table of rows R.
type column[R any] struct {
	name, unit, about string
	get               func(*R) any // string, float64, int64 or bool
	set               func(*R, any)
}

func text[R any](name, about string, at func(*R) *string) column[R] {
	return column[R]{name, "", about, func(r *R) any { return *at(r) }, func(r *R, v any) { *at(r) = v.(string) }}
}

func number[R any](name, unit, about string, at func(*R) *float64) column[R] {
	return column[R]{name, unit, about, func(r *R) any { return *at(r) }, func(r *R, v any) { *at(r) = v.(float64) }}
}

var sourceColumns = []column[Source]{
	text("frame", "frame name", func(s *Source) *string { return &s.Frame }),
	text("id", "event", func(s *Source) *string { return &s.ID }),
	text("kind", "transient, faded, variable, supernova or asteroid", func(s *Source) *string { return &s.Kind }),
	number("ra_deg", "deg", "right ascension, ICRS, mid-exposure", func(s *Source) *float64 { return &s.RA }),
	number("dec_deg", "deg", "declination, ICRS, mid-exposure", func(s *Source) *float64 { return &s.Dec }),
	number("x_px", "pixel", "position on the frame, first pixel is 1", func(s *Source) *float64 { return &s.X }),
	number("y_px", "pixel", "position on the frame, first pixel is 1", func(s *Source) *float64 { return &s.Y }),
	number("flux", "count", "change against the reference, counts of the frame", func(s *Source) *float64 { return &s.Flux }),
	number("mag", "mag", "of the absolute change, in clear air", func(s *Source) *float64 { return &s.Mag }),
	number("optimal_sn", "", "best possible signal-to-noise ratio, sky noise only", func(s *Source) *float64 { return &s.SN }),
	number("local_sn", "", "the same with the photon noise of the constant light", func(s *Source) *float64 { return &s.LocalSN }),
	number("light", "count", "constant light per pixel there", func(s *Source) *float64 { return &s.Light }),
	number("trail_px", "pixel", "motion during the exposure", func(s *Source) *float64 { return &s.Trail }),
	{"defects", "", "bits of bad pixels within one FWHM: 1 saturated, 2 bled, 4 column, 8 particle, 16 streak, 32 hot, 64 no data",
		func(s *Source) any { return int64(s.Defects) }, func(s *Source, v any) { s.Defects = uint16(v.(int64)) }},
	{"covered", "", "well inside the frame and the reference",
		func(s *Source) any { return s.Covered }, func(s *Source, v any) { s.Covered = v.(bool) }},
	text("host", "galaxy", func(s *Source) *string { return &s.Host }),
	number("host_distance_arcsec", "arcsec", "from the galaxy's centre", func(s *Source) *float64 { return &s.HostDistance }),
	number("host_mag", "mag", "of the galaxy", func(s *Source) *float64 { return &s.HostMag }),
}

func frameColumnsOf() []column[FrameTruth] {
	type F = FrameTruth
	l := []column[F]{
		text("frame", "frame name", func(f *F) *string { return &f.Frame }),
		text("path", "file, from the folder of this table", func(f *F) *string { return &f.Path }),
		text("field", "as the header says", func(f *F) *string { return &f.Field }),
		text("filter", "", func(f *F) *string { return &f.Filter }),
		text("night", "date of the evening", func(f *F) *string { return &f.Night }),
		text("expected", "slug with which it should be set aside; empty for a good frame", func(f *F) *string { return &f.Expected }),
		number("mid_mjd", "d", "UTC, middle of the exposure", func(f *F) *float64 { return &f.MidMJD }),
		number("exposure_s", "s", "exposure time", func(f *F) *float64 { return &f.Exposure }),
		number("fwhm_px", "pixel", "at the centre, before pixel integration", func(f *F) *float64 { return &f.FWHM }),
		number("fwhm_major_px", "pixel", "along the major axis", func(f *F) *float64 { return &f.Major }),
		number("fwhm_minor_px", "pixel", "along the minor axis", func(f *F) *float64 { return &f.Minor }),
		number("angle_deg", "deg", "of the major axis, from +x towards +y", func(f *F) *float64 { return &f.Angle }),
		number("moffat_beta", "", "exponent of the profile, 0 for a Gaussian", func(f *F) *float64 { return &f.Beta }),
		number("sky", "count", "per pixel at the centre", func(f *F) *float64 { return &f.Sky }),
		number("noise", "count", "white noise per pixel at the centre", func(f *F) *float64 { return &f.Noise }),
		number("flux_scale", "", "counts per reference count at the centre", func(f *F) *float64 { return &f.FluxScale }),
		number("zero_point", "mag", "of one count, transparency included", func(f *F) *float64 { return &f.ZeroPoint }),
		number("mag_limit_5sigma", "mag", "best possible limit in the difference at the centre", func(f *F) *float64 { return &f.Limit }),
		number("distortion_px", "pixel", "largest departure from the affine map", func(f *F) *float64 { return &f.Distortion }),
		number("reference_fwhm_px", "pixel", "of the reference, its own pixels", func(f *F) *float64 { return &f.ReferenceFWHM }),
		number("reference_noise", "count", "of the reference, its own counts", func(f *F) *float64 { return &f.ReferenceNoise }),
	}
	l = append(l, number("area_mpx", "", "million pixels common with the reference", func(f *F) *float64 { return &f.Area }))
	for k := range 6 {
		l = append(l, number(fmt.Sprintf("map_%d", k), "pixel", "reference x = map_0 + map_1 x + map_2 y, y = map_3 + map_4 x + map_5 y",
			func(f *F) *float64 { return &f.Affine[k] }))
	}
	return l
}

var frameColumns = frameColumnsOf()

func tableOf[R any](name string, columns []column[R], rows []R) *fits.Table {
	t := &fits.Table{Name: name}
	var zero R
	for _, c := range columns {
		col := fits.Column{Name: c.name, Unit: c.unit, Description: c.about}
		switch c.get(&zero).(type) {
		case string:
			col.Data = gather[R, string](c, rows)
		case float64:
			col.Data = gather[R, float64](c, rows)
		case int64:
			col.Data = gather[R, int64](c, rows)
		case bool:
			col.Data = gather[R, bool](c, rows)
		default:
			panic("simulate: column " + c.name + " has no type")
		}
		t.Columns = append(t.Columns, col)
	}
	return t
}

func gather[R, T any](c column[R], rows []R) []T {
	d := make([]T, len(rows))
	for i := range rows {
		d[i] = c.get(&rows[i]).(T)
	}
	return d
}

func rowsOf[R any](t *fits.Table, columns []column[R]) ([]R, error) {
	rows := make([]R, t.Rows())
	var zero R
	for _, c := range columns {
		var err error
		switch c.get(&zero).(type) {
		case string:
			err = spread(c, rows, t.Strings)
		case float64:
			err = spread(c, rows, t.Floats)
		case int64:
			err = spread(c, rows, t.Ints)
		case bool:
			err = spread(c, rows, t.Bools)
		}
		if err != nil {
			return nil, err
		}
	}
	return rows, nil
}

func spread[R, T any](c column[R], rows []R, read func(string) ([]T, error)) error {
	v, err := read(c.name)
	if err != nil {
		return err
	}
	for i := range rows {
		c.set(&rows[i], v[i])
	}
	return nil
}

func writeCSV[R any](path string, columns []column[R], rows []R) error {
	return wholefile.Write(path, func(w io.Writer) error {
		out := csv.NewWriter(w)
		line := make([]string, len(columns))
		for i, c := range columns {
			line[i] = c.name
		}
		if err := out.Write(line); err != nil {
			return err
		}
		for k := range rows {
			for i, c := range columns {
				switch v := c.get(&rows[k]).(type) {
				case string:
					line[i] = v
				case float64:
					line[i] = ""
					if !math.IsNaN(v) {
						line[i] = strconv.FormatFloat(v, 'g', 12, 64)
					}
				case int64:
					line[i] = strconv.FormatInt(v, 10)
				case bool:
					line[i] = strconv.FormatBool(v)
				}
			}
			if err := out.Write(line); err != nil {
				return err
			}
		}
		out.Flush()
		return out.Error()
	})
}

// Write writes truth.fits (tables TRUTH and FRAMES), truth.csv and
// truth-frames.csv into a folder.
func (t *Truth) Write(dir string) error {
	h := &fits.Header{}
	h.Set("ORIGIN", "nightsift simulate", "invented")
	err := fits.Write(filepath.Join(dir, "truth.fits"), h,
		tableOf("TRUTH", sourceColumns, t.Sources), tableOf("FRAMES", frameColumns, t.Frames))
	if err != nil {
		return err
	}
	if err := writeCSV(filepath.Join(dir, "truth.csv"), sourceColumns, t.Sources); err != nil {
		return err
	}
	return writeCSV(filepath.Join(dir, "truth-frames.csv"), frameColumns, t.Frames)
}

// ReadTruth reads a truth.fits.
func ReadTruth(path string) (*Truth, error) {
	f, err := fits.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	t := &Truth{}
	read := func(name string, use func(*fits.Table) error) error {
		i, err := f.Find(name)
		if err != nil {
			return err
		}
		table, err := f.Table(i)
		if err != nil {
			return err
		}
		if err := use(table); err != nil {
			return fmt.Errorf("%s: %w", path, err)
		}
		return nil
	}
	err = read("TRUTH", func(tb *fits.Table) (err error) { t.Sources, err = rowsOf(tb, sourceColumns); return })
	if err != nil {
		return nil, err
	}
	err = read("FRAMES", func(tb *fits.Table) (err error) { t.Frames, err = rowsOf(tb, frameColumns); return })
	if err != nil {
		return nil, err
	}
	return t, nil
}

// Write writes the frame as the primary image of a FITS file: unsigned 16-bit
// integers if Integers, else 32-bit floats.
func (e *Exposure) Write(path string) error {
	h := &fits.Header{}
	for _, k := range e.Header {
		h.Set(k.Key, k.Value, k.Comment)
	}
	img := &fits.ImageHDU{Header: h, Width: e.Width, Height: e.Height}
	if e.Integers {
		img.Bits = make([]uint16, len(e.Pix))
		for i, v := range e.Pix {
			img.Bits[i] = uint16(v)
		}
	} else {
		img.Float = e.Pix
	}
	return fits.WritePrimary(path, img)
}

// Write writes reference.fits, every new frame by its name, and the truth into
// a folder, which is made if need be.
func (p *Pairs) Write(dir string) error {
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return err
	}
	if err := p.Reference.Write(filepath.Join(dir, p.Reference.Name+".fits")); err != nil {
		return err
	}
	for _, e := range p.New {
		if err := e.Write(filepath.Join(dir, e.Name+".fits")); err != nil {
			return err
		}
		if t := p.Truth.Frame(e.Name); t != nil {
			t.Path = e.Name + ".fits"
		}
	}
	return p.Truth.Write(dir)
}
