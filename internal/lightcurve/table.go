package lightcurve

import (
	"nightsift/catalog"
	"nightsift/detect"
)

// tableColumn is a column of the table of points.
type tableColumn struct {
	catalog.Column
	value func(*Point) any
}

var tableColumns = []tableColumn{
	{catalog.Column{Name: "night", Description: "date of the evening", Type: detect.Text}, func(p *Point) any { return p.Night }},
	{catalog.Column{Name: "frame", Description: "name of the new frame", Type: detect.Text}, func(p *Point) any { return p.Frame }},
	{catalog.Column{Name: "filter", Description: "filter of the new frame", Type: detect.Text}, func(p *Point) any { return p.Filter }},
	{catalog.Column{Name: "reference", Description: "name of the reference that was taken away", Type: detect.Text}, func(p *Point) any { return p.Reference }},
	{catalog.Column{Name: "mid_mjd", Unit: "d", Description: "middle of the exposure, MJD UTC", Type: detect.Real}, func(p *Point) any { return p.MidMJD }},
	{catalog.Column{Name: "status", Description: "measured, outside, masked or missing", Type: detect.Text}, func(p *Point) any { return string(p.Status) }},
	{catalog.Column{Name: "flux", Description: "flux, 1 at magnitude 25, without the baseline", Type: detect.Real}, func(p *Point) any { return p.Flux }},
	{catalog.Column{Name: "flux_err", Description: "1 sigma error of flux, with the zero point's", Type: detect.Real}, func(p *Point) any { return p.FluxErr }},
	{catalog.Column{Name: "mag", Unit: "mag", Description: "magnitude, where detected", Type: detect.Real}, func(p *Point) any { return p.Mag }},
	{catalog.Column{Name: "mag_err", Unit: "mag", Description: "1 sigma error of mag", Type: detect.Real}, func(p *Point) any { return p.MagErr }},
	{catalog.Column{Name: "mag_limit", Unit: "mag", Description: "upper limit, where not detected", Type: detect.Real}, func(p *Point) any { return p.MagLimit }},
	{catalog.Column{Name: "counts", Unit: "count", Description: "PSF flux at the fixed place, signed", Type: detect.Real}, func(p *Point) any { return p.Counts }},
	{catalog.Column{Name: "counts_err", Unit: "count", Description: "1 sigma error of counts", Type: detect.Real}, func(p *Point) any { return p.CountsErr }},
	{catalog.Column{Name: "zero_point", Unit: "mag", Description: "magnitude of one count", Type: detect.Real}, func(p *Point) any { return p.ZeroPoint }},
	{catalog.Column{Name: "zero_point_err", Unit: "mag", Description: "1 sigma error of zero_point", Type: detect.Real}, func(p *Point) any { return p.ZeroError }},
	{catalog.Column{Name: "baseline", Description: "flux that was taken off", Type: detect.Real}, func(p *Point) any { return p.Baseline }},
	{catalog.Column{Name: "baseline_err", Description: "1 sigma error of baseline, common to a filter", Type: detect.Real}, func(p *Point) any { return p.BaselineErr }},
	{catalog.Column{Name: "x_px", Unit: "pixel", Description: "the place on the frame, first pixel is 1", Type: detect.Real}, func(p *Point) any { return p.X }},
	{catalog.Column{Name: "y_px", Unit: "pixel", Description: "the place on the frame, first pixel is 1", Type: detect.Real}, func(p *Point) any { return p.Y }},
	{catalog.Column{Name: "lost", Description: "share of the squared PSF on unusable pixels", Type: detect.Real}, func(p *Point) any { return p.Lost }},
	{catalog.Column{Name: "flags", Description: "bits set in the footprint", Type: detect.Integer}, func(p *Point) any { return int64(p.Flags) }},
	{catalog.Column{Name: "fit_chi2", Description: "reduced chi-square of the footprint", Type: detect.Real}, func(p *Point) any { return p.Chi2 }},
	{catalog.Column{Name: "reason", Description: "why there is no flux", Type: detect.Text}, func(p *Point) any { return p.Reason }},
}

// Sheet returns the points as a table, a row a frame, in the order of time.
// Every format of the catalogue's exports can write it.
func (c *Curve) Sheet() *catalog.Sheet {
	s := &catalog.Sheet{Name: "lightcurve", Rows: len(c.Points)}
	for _, t := range tableColumns {
		column := catalog.SheetColumn{Column: t.Column}
		for i := range c.Points {
			switch v := t.value(&c.Points[i]).(type) {
			case string:
				column.Text = append(column.Text, v)
			case float64:
				column.Real = append(column.Real, v)
			case int64:
				column.Integer = append(column.Integer, v)
			}
		}
		s.Columns = append(s.Columns, column)
	}
	return s
}
