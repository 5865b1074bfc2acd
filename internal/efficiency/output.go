package efficiency

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"

	"nightsift/internal/fits"
	"nightsift/internal/wholefile"
)

// Measured is what was measured on one of several frames.
type Measured struct {
	Frame   string
	Status  string // measured, or why not
	Detail  string
	*Result // nil if nothing was measured
}

// figures lists the figures of Write: the property, the file's stem and the label
// of the axis.
var figures = []struct{ property, file, axis string }{
	{"magnitude", "efficiency-magnitude", "magnitude"},
	{"relative_magnitude", "efficiency-relative", "magnitudes fainter than five sigma on empty sky"},
	{"signal_to_noise", "efficiency-signal", "signal to noise on empty sky"},
	{"host_brightness", "efficiency-host", "surface brightness of the reference, mag/arcsec², sources of S/N 8 and more"},
	{"chip_x", "efficiency-chip-x", "place along x, sources of S/N 8 and more"},
	{"chip_y", "efficiency-chip-y", "place along y, sources of S/N 8 and more"},
}

// Curves are the fitted curves of several frames together. Any may be nil.
type Curves struct {
	Magnitude *Curve // against magnitude, of the frames with a zero point
	Relative  *Curve // against magnitude relative to each frame's limit
}

// Fit fits the curves of all sources together.
func Fit(list []Injection) Curves {
	var mag, relative []float64
	var magFound, found []bool
	for i := range list {
		s := &list[i]
		relative, found = append(relative, s.Relative), append(found, s.Fate == Found)
		if !math.IsNaN(s.Mag) {
			mag, magFound = append(mag, s.Mag), append(magFound, s.Fate == Found)
		}
	}
	return Curves{FitCurve(mag, magFound), FitCurve(relative, found)}
}

// Write writes tables and figures into a folder, each whole or not at all:
// efficiency.fits and efficiency.csv with a row for each source, fractions.csv
// with the recovered fractions, limits.csv with a row for each frame, and figures
// as PNG and SVG.
func Write(dir string, frames []Measured, seed uint64, version string) error {
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return err
	}
	var all []Injection
	for _, f := range frames {
		if f.Result != nil {
			all = append(all, f.Injections...)
		}
	}
	var bins []Bin
	for i := range Properties {
		bins = append(bins, Properties[i].Bins(all)...)
	}
	primary := &fits.Header{}
	primary.Set("CREATOR", "nightsift "+version, "program")
	primary.Set("SEED", strconv.FormatUint(seed, 10), "of the injected sources")
	if err := fits.Write(filepath.Join(dir, "efficiency.fits"), primary, Table(all), BinTable(bins)); err != nil {
		return err
	}
	if err := WriteCSV(filepath.Join(dir, "efficiency.csv"), all); err != nil {
		return err
	}
	if err := WriteBins(filepath.Join(dir, "fractions.csv"), bins); err != nil {
		return err
	}
	if err := writeLimits(filepath.Join(dir, "limits.csv"), frames); err != nil {
		return err
	}
	curves := Fit(all)
	for _, f := range figures {
		var curve *Curve
		switch f.property {
		case "magnitude":
			curve = curves.Magnitude
		case "relative_magnitude":
			curve = curves.Relative
		}
		cells := property(f.property).Bins(all)
		if len(cells) == 0 {
			for _, ending := range []string{".png", ".svg"} {
				_ = os.Remove(filepath.Join(dir, f.file+ending)) // of an earlier run
			}
			continue
		}
		p, err := Figure(fmt.Sprintf("%d injected sources, seed %d", len(all), seed), f.axis, cells, curve)
		if err != nil {
			return err
		}
		png, err := PNG(p)
		if err != nil {
			return err
		}
		svg, err := SVG(p)
		if err != nil {
			return err
		}
		if err := wholefile.WriteBytes(filepath.Join(dir, f.file+".png"), png); err != nil {
			return err
		}
		if err := wholefile.WriteBytes(filepath.Join(dir, f.file+".svg"), svg); err != nil {
			return err
		}
	}
	return nil
}

// writeLimits writes a row for each frame.
func writeLimits(path string, frames []Measured) error {
	header := []string{"frame", "status", "detail", "injected", "found", "masked", "not_detected", "rejected", "confused", "mag_limit_5sigma",
		"mag_50", "mag_50_err", "mag_90", "mag_90_err", "form", "plateau", "plateau_err", "middle_mag", "middle_mag_err", "width_mag", "width_mag_err", "chi2", "cells"}
	var rows [][]string
	for _, f := range frames {
		row := []string{f.Frame, f.Status, f.Detail}
		if r := f.Result; r != nil {
			count := Count(r.Injections)
			row = append(row, strconv.Itoa(len(r.Injections)))
			for _, fate := range Fates {
				row = append(row, strconv.Itoa(count[fate]))
			}
			row = append(row, number(r.Limit5))
			if c := r.Curve; c != nil && r.HasMagnitudes {
				row = append(row, number(c.Mag50), number(c.Mag50Err), number(c.Mag90), number(c.Mag90Err), string(c.Form), number(c.Plateau), number(c.PlateauErr),
					number(c.Middle), number(c.MiddleErr), number(c.Width), number(c.WidthErr), number(c.Chi2), strconv.Itoa(c.Cells))
			}
		}
		for len(row) < len(header) {
			row = append(row, "")
		}
		rows = append(rows, row)
	}
	return writeCSV(path, header, rows)
}
