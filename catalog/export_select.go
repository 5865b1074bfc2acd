package catalog

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/detect"
)

// Exports are the tables that can be exported. The first three are the views of
// the same names; "lightcurve" has the detections of objects and the searched
// frames that show nothing at their places.
var Exports = []string{"candidates", "objects", "frames", "lightcurve"}

// Selection says which rows of which table to export. All that is set must hold;
// the zero value of a filter lets everything pass.
type Selection struct {
	Table          string // one of Exports
	Night          string // frames: of this night; else detected in it
	Field          string // frames: of this field; else detected on one
	State          State  // of the object, at present; not for frames
	MinProbability float64
	Object         string // the only object, for light curves
	Condition      string // in SQL, on view_candidates, view_frames or (objects, light curves) view_objects: see Where
}

// Check refuses what cannot be selected, in words for people.
func (q *Selection) Check() error {
	switch {
	case !slices.Contains(Exports, q.Table):
		return fmt.Errorf("no table %q: expected one of %s", q.Table, strings.Join(Exports, ", "))
	case q.Table == "frames" && (q.State != "" || q.MinProbability != 0):
		return fmt.Errorf("frames have neither state nor probability: select them by night, field or condition")
	case q.Object != "" && q.Table != "lightcurve":
		return fmt.Errorf("one object is for light curves: of %s select those with a condition such as object = '%s'", q.Table, q.Object)
	case q.Object != "" && (q.Night != "" || q.Field != "" || q.State != "" || q.MinProbability != 0 || q.Condition != ""):
		return fmt.Errorf("either one object or filters: found object %q and a filter", q.Object)
	case !(q.MinProbability >= 0 && q.MinProbability <= 1):
		return fmt.Errorf("least probability %g: expected 0 to 1", q.MinProbability)
	}
	return q.State.check()
}

// Select reads a table of the catalogue in a fixed order: equal catalogues give
// equal sheets. Candidates, objects and frames are those of one state of the
// catalogue, also while frames are added.
func (s *Store) Select(ctx context.Context, q Selection) (*Sheet, error) {
	if err := q.Check(); err != nil {
		return nil, fmt.Errorf("export: %w", err)
	}
	if q.Table == "lightcurve" {
		return s.lightCurves(ctx, q)
	}
	var w where
	detected := func(condition, value string) {
		w.and("object IN (SELECT name FROM objects WHERE id IN (SELECT object FROM candidates WHERE "+condition+" AND object IS NOT NULL))", value)
	}
	const onField = "frame IN (SELECT frame FROM frames WHERE field = ?)"
	state := "object_state"
	switch {
	case q.Table == "objects":
		state = "state"
		if q.Night != "" {
			detected("night = ?", q.Night)
		}
		if q.Field != "" {
			detected(onField, q.Field)
		}
	default:
		if q.Night != "" {
			w.and("night = ?", q.Night)
		}
		if q.Field != "" {
			w.and(onField, q.Field)
		}
	}
	if q.State != "" {
		w.and(state+" = ?", string(q.State))
	}
	if q.MinProbability > 0 {
		w.and("real_probability >= ?", q.MinProbability)
	}
	k := slices.IndexFunc(Views, func(v View) bool { return v.Name == "view_"+q.Table })
	return s.look(ctx, &Views[k], w, q.Condition)
}

var lightCurveColumns = []Column{
	{"object", "", "designation of the object", detect.Text},
	{"mid_mjd", "d", "middle of the exposure, MJD UTC", detect.Real},
	{"night", "", "date of the evening", detect.Text},
	{"field", "", "field of the frame", detect.Text},
	{"frame", "", "name of the frame", detect.Text},
	{"filter", "", "filter of the frame", detect.Text},
	{"detected", "", "1: found on this frame; 0: searched, not found", detect.Integer},
	{"mag", "mag", "magnitude of flux", detect.Real},
	{"mag_err", "mag", "1 sigma error of mag", detect.Real},
	{"mag_limit", "mag", "5 sigma limit: at the detection, else of the frame", detect.Real},
	{"flux", "count", "PSF flux on the difference, signed", detect.Real},
	{"flux_err", "count", "1 sigma error of flux", detect.Real},
	{"zero_point", "mag", "magnitude of one count", detect.Real},
	{"significance", "", "signed peak score in sigma", detect.Real},
	{"real_probability", "", "calibrated probability to be real", detect.Real},
	{"kind", "", "what it looks like", detect.Text},
	{"flags", "", "bits set in the footprint", detect.Integer},
	{"ra_deg", "deg", "right ascension of the detection, ICRS", detect.Real},
	{"dec_deg", "deg", "declination of the detection, ICRS", detect.Real},
	{"offset_chi2", "", "squared distance from the object in its errors", detect.Real},
	{"false_match", "", "chance that something unrelated fell here", detect.Real},
	{"candidate_id", "", "identifier of the detection", detect.Text},
}

// lightCurves lists, object by object and by time, the detections and the
// searched frames without one.
func (s *Store) lightCurves(ctx context.Context, q Selection) (*Sheet, error) {
	var objects []Object
	if q.Object != "" {
		o, err := s.Object(ctx, q.Object)
		if err != nil {
			return nil, err
		}
		objects = append(objects, o)
	} else {
		var err error
		objects, err = s.Objects(ctx, ObjectQuery{Night: q.Night, Field: q.Field, State: q.State, MinProbability: q.MinProbability, Condition: q.Condition})
		if err != nil {
			return nil, err
		}
	}
	sheet := newSheet("lightcurve", lightCurveColumns)
	for i := range objects {
		if err := s.addLightCurve(ctx, sheet, objects[i]); err != nil {
			return nil, err
		}
	}
	return sheet, nil
}

func (s *Store) addLightCurve(ctx context.Context, sheet *Sheet, o Object) error {
	members, err := s.Members(ctx, o)
	if err != nil {
		return err
	}
	searched, err := s.SearchedAt(ctx, o.RA, o.Dec)
	if err != nil {
		return err
	}
	frames := map[string]*FrameRecord{}
	for i := range searched {
		frames[searched[i].Frame] = &searched[i]
	}
	type point struct {
		frame  *FrameRecord
		member *Member // nil: not detected
	}
	var points []point
	found := map[string]bool{}
	for i := range members {
		m := &members[i]
		f := frames[m.Frame]
		if f == nil { // without a footprint, or at its very edge
			list, err := s.Frames(ctx, FrameQuery{Frame: m.Frame})
			if err != nil {
				return err
			}
			if len(list) != 1 {
				return fmt.Errorf("catalogue %s: frame %s of candidate %s: %w", s.path, m.Frame, m.ID, ErrNotFound)
			}
			f = &list[0]
		}
		found[m.Frame] = true
		points = append(points, point{f, m})
	}
	for i := range searched {
		if !found[searched[i].Frame] {
			points = append(points, point{&searched[i], nil})
		}
	}
	slices.SortStableFunc(points, func(a, b point) int {
		if c := compareTimes(a.frame.MidMJD, b.frame.MidMJD); c != 0 {
			return c
		}
		return strings.Compare(a.frame.Frame, b.frame.Frame)
	})
	for _, p := range points {
		f, m, detected := p.frame, p.member, 1
		if m == nil {
			n := math.NaN()
			m, detected = &Member{ChiSquare: n, FalseMatch: n}, 0
			m.Mag, m.MagErr, m.MagLimit, m.Flux, m.FluxErr = n, n, f.MagLimit5Sigma, n, n
			m.Significance, m.RealProbability, m.RA, m.Dec = n, n, n, n
		}
		for k, v := range []any{o.Name, f.MidMJD, f.Night, f.Field, f.Frame, f.Filter, detected, m.Mag, m.MagErr, m.MagLimit, m.Flux, m.FluxErr,
			f.ZeroPoint, m.Significance, m.RealProbability, string(m.Kind), int64(m.Flags), m.RA, m.Dec, m.ChiSquare, m.FalseMatch, m.ID} {
			sheet.Columns[k].append(v)
		}
		sheet.Rows++
	}
	return nil
}

// compareTimes orders times with unknown ones last.
func compareTimes(a, b float64) int {
	switch {
	case a < b || a == a && b != b:
		return -1
	case b < a || b == b && a != a:
		return 1
	}
	return 0
}
