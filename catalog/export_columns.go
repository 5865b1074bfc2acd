package catalog

import (
	"fmt"

	"nightsift/detect"
)

// descriptors are the unified content descriptors of the columns of all
// exports, by name (IVOA UCD1+ controlled vocabulary, version 1.4). Columns
// without a fitting word are not listed.
var descriptors = map[string]string{
	"candidate_id": "meta.id", "frame": "meta.id", "object": "meta.id", "founder": "meta.id", "reference": "meta.id",
	"tracklet": "meta.id", "designation": "meta.id", "field": "meta.id;obs.field", "fields": "meta.id;obs.field",
	"filter": "meta.id;instr.filter", "filters": "meta.id;instr.filter", "configuration": "meta.id", "version": "meta.version",
	"night": "time.epoch", "first_night": "time.epoch", "last_night": "time.epoch", "mid_mjd": "time.epoch",
	"first_mjd": "time.epoch", "last_mjd": "time.epoch", "peak_mjd": "time.epoch",
	"exposure_s": "time.duration;obs.exposure", "seconds": "time.duration",
	"x_px": "pos.cartesian.x;instr.det", "y_px": "pos.cartesian.y;instr.det",
	"x_px_err": "stat.error;pos.cartesian.x", "y_px_err": "stat.error;pos.cartesian.y",
	"ra_deg": "pos.eq.ra;meta.main", "dec_deg": "pos.eq.dec;meta.main",
	"ra_err_arcsec": "stat.error;pos.eq.ra", "dec_err_arcsec": "stat.error;pos.eq.dec", "err_arcsec": "stat.error;pos.eq",
	"flux": "phot.flux", "flux_err": "stat.error;phot.flux", "counts": "phot.count", "counts_err": "stat.error;phot.count",
	"baseline": "phot.flux;arith.diff", "baseline_err": "stat.error;phot.flux",
	"mag": "phot.mag", "mag_err": "stat.error;phot.mag", "reference_mag": "phot.mag", "peak_mag": "phot.mag;stat.min",
	"predicted_mag": "phot.mag;em.opt.V", "mag_limit": "phot.mag;stat.max", "mag_limit_5sigma": "phot.mag;stat.max",
	"efficiency_50_mag": "phot.mag;stat.max", "zero_point": "phot.mag;arith.zp", "zero_point_err": "stat.error;phot.mag;arith.zp",
	"expected_snr": "stat.snr", "chance": "stat.probability",
	"significance": "stat.snr", "peak_significance": "stat.snr", "real_probability": "stat.probability", "false_match": "stat.probability",
	"kind": "meta.code.class", "flags": "meta.code", "status": "meta.code.status", "state": "meta.code.status",
	"object_state": "meta.code.status", "verdict": "meta.code.qual", "detected": "meta.code", "forms": "meta.code",
	"reason": "meta.note", "detail": "meta.note", "zero_point_source": "meta.note", "description": "meta.note",
	"column": "meta.id", "unit": "meta.unit", "ucd": "meta.ucd", "type": "meta.code.class",
	"verdicts": "meta.number", "remarks": "meta.number", "detections": "meta.number", "nights": "meta.number",
	"candidates": "meta.number", "stars_matched": "meta.number",
	"reference_distance_arcsec": "pos.angDistance", "offset_arcsec": "pos.angDistance", "predicted_err_arcsec": "stat.error;pos.eq",
	"predicted_rate": "pos.pm", "predicted_angle": "pos.posAng", "angle_deg": "pos.posAng", "length_px": "phys.angSize",
	"fit_chi2": "stat.fit.chi2", "offset_chi2": "stat.fit.chi2", "astrometry_rms_px": "stat.fit.residual",
	"fwhm_px": "instr.det.psf", "reference_fwhm_px": "instr.det.psf", "sky": "instr.skyLevel", "sky_noise": "stat.stdev;instr.skyLevel",
	"flux_scale": "arith.factor", "noise_ratio": "stat.stdev",
}

// UCD returns the unified content descriptor of a column, empty if there is no
// fitting one.
func (c *Column) UCD() string { return descriptors[c.Name] }

// Describe returns the table of a sheet's columns: name, type, unit, UCD and
// description of each. Formats without a place for these go with it.
func (s *Sheet) Describe() *Sheet {
	d := newSheet("columns", []Column{
		{"column", "", "name of the column", detect.Text},
		{"type", "", "text, real or integer", detect.Text},
		{"unit", "", "unit as in FITS and VOUnits", detect.Text},
		{"ucd", "", "unified content descriptor (IVOA)", detect.Text},
		{"description", "", "what it holds", detect.Text},
	})
	for i := range s.Columns {
		c := &s.Columns[i]
		for k, v := range []string{c.Name, typeName(c.Type), c.Unit, c.UCD(), c.Description} {
			d.Columns[k].append(v)
		}
	}
	d.Rows = len(s.Columns)
	return d
}

func typeName(t detect.Type) string {
	switch t {
	case detect.Text:
		return "text"
	case detect.Real:
		return "real"
	case detect.Integer:
		return "integer"
	}
	panic(fmt.Sprintf("catalog: no name for the type %d", t))
}
