package catalog

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"strings"
	"text/tabwriter"
	"time"

	"nightsift/detect"
)

// ErrNotFound is the error, wrapped with what was asked for, of a query for
// one thing that is not in the catalogue.
var ErrNotFound = errors.New("not in the catalogue")

// Object is a place where light changed, with what its detections say.
type Object struct {
	Name              string  // designation by position; the key
	RA, Dec           float64 // deg, ICRS: weighted mean
	RAErr, DecErr     float64 // arcsec on the sky, 1 sigma
	Kind              detect.Kind
	RealProbability   float64 // highest of a detection
	Detections        int     // frames
	Nights            int
	FirstMJD, LastMJD float64 // d; NaN if unknown
	FirstNight        string
	LastNight         string
	PeakMag, PeakMJD  float64 // brightest detection; NaN without magnitudes
	PeakSignificance  float64 // sigma, signed: that of the largest size
	Filters           string  // with blanks between
	Founder           string  // identifier of the earliest detection
	State             State   // the latest that was set

	covariance float64 // arcsec²
	id         int64
}

const objectQuery = `SELECT id, name, ra_deg, dec_deg, ra_err_arcsec, dec_err_arcsec, covariance_arcsec2, kind, real_probability,
	detections, nights, first_mjd, last_mjd, first_night, last_night, peak_mag, peak_mjd, peak_significance, filters, founder,
	` + objectState + " FROM objects"

const objectState = `coalesce((SELECT state FROM remarks WHERE remarks.object = objects.id AND state IS NOT NULL ORDER BY time DESC, remarks.id LIMIT 1), 'new')`

func scanObject(rows interface{ Scan(...any) error }) (Object, error) {
	var o Object
	var kind, state string
	var real [6]sql.NullFloat64
	var text [3]sql.NullString
	err := rows.Scan(&o.id, &o.Name, &o.RA, &o.Dec, &o.RAErr, &o.DecErr, &o.covariance, &kind, &real[0],
		&o.Detections, &o.Nights, &real[1], &real[2], &text[0], &text[1], &real[3], &real[4], &real[5], &text[2], &o.Founder, &state)
	o.State = State(state)
	o.Kind = detect.Kind(kind)
	for i, to := range []*float64{&o.RealProbability, &o.FirstMJD, &o.LastMJD, &o.PeakMag, &o.PeakMJD, &o.PeakSignificance} {
		*to = math.NaN()
		if real[i].Valid {
			*to = real[i].Float64
		}
	}
	o.FirstNight, o.LastNight, o.Filters = text[0].String, text[1].String, text[2].String
	return o, err
}

// ObjectQuery says which objects to list. The zero value lists all.
type ObjectQuery struct {
	Night          string  // detected in this night
	Field          string  // detected on a frame of this field
	State          State   // at present
	MinProbability float64 // of the best detection
	MinDetections  int     // frames
	MinNights      int
	Cone           *Cone
	Condition      string // in SQL, on view_objects: see Where
}

// Cone is a circle on the sky.
type Cone struct {
	RA, Dec float64 // deg
	Radius  float64 // arcsec
}

// where collects conditions and their values.
type where struct {
	conditions []string
	values     []any
}

func (w *where) and(condition string, values ...any) {
	w.conditions = append(w.conditions, condition)
	w.values = append(w.values, values...)
}

// cone restricts column cell to cells that cover a circle.
func (w *where) cone(c *Cone) {
	var parts []string
	for _, r := range cone(nil, c.RA, c.Dec, c.Radius) {
		parts = append(parts, "cell BETWEEN ? AND ?")
		w.values = append(w.values, r.from, r.to)
	}
	w.conditions = append(w.conditions, "("+strings.Join(parts, " OR ")+")")
}

// view adds a condition in SQL on a view of which key is the key.
func (w *where) view(view, key, condition string) error {
	if condition == "" {
		return nil
	}
	if err := checkCondition(condition); err != nil {
		return fmt.Errorf("condition %q: %w", condition, err)
	}
	name, column, _ := strings.Cut(key, " ")
	w.conditions = append(w.conditions, name+" IN (SELECT "+column+" FROM "+view+" WHERE ("+condition+"\n))")
	return nil
}

// ask runs a query in a transaction that can only read, and calls scan for
// each row.
func (s *Store) ask(ctx context.Context, query string, values []any, scan func(*sql.Rows) error) error {
	tx, err := s.snapshot(ctx)
	if err != nil {
		return s.explain(err)
	}
	defer tx.Rollback()
	rows, err := tx.QueryContext(ctx, query, values...)
	if err != nil {
		return s.explain(err)
	}
	defer rows.Close()
	for rows.Next() {
		if err := scan(rows); err != nil {
			return s.explain(err)
		}
	}
	return s.explain(rows.Err())
}

func (w *where) String() string {
	if len(w.conditions) == 0 {
		return ""
	}
	return " WHERE " + strings.Join(w.conditions, " AND ")
}

// widest is the largest radius of a cone search [arcsec]: two degrees.
const widest = 7200

func (c *Cone) check() error {
	if !onSky(c.RA, c.Dec) {
		return fmt.Errorf("cone search: position %g %g is not on the sky: expected right ascension 0 to 360, declination -90 to 90 degrees", c.RA, c.Dec)
	}
	if !(c.Radius >= 0 && c.Radius <= widest) {
		return fmt.Errorf("cone search: radius %g arcsec: expected 0 to %d", c.Radius, widest)
	}
	return nil
}

// Objects lists objects by name; a cone search lists the nearest first.
func (s *Store) Objects(ctx context.Context, q ObjectQuery) ([]Object, error) {
	if err := q.State.check(); err != nil {
		return nil, err
	}
	var w where
	if q.Night != "" {
		w.and("id IN (SELECT object FROM candidates WHERE night = ? AND object IS NOT NULL)", q.Night)
	}
	if q.MinProbability > 0 {
		w.and("real_probability >= ?", q.MinProbability)
	}
	if q.MinDetections > 0 {
		w.and("detections >= ?", q.MinDetections)
	}
	if q.MinNights > 0 {
		w.and("nights >= ?", q.MinNights)
	}
	if q.Cone != nil {
		if err := q.Cone.check(); err != nil {
			return nil, err
		}
		w.cone(q.Cone)
	}
	if q.Field != "" {
		w.and("id IN (SELECT object FROM candidates JOIN frames ON frames.frame = candidates.frame WHERE field = ? AND object IS NOT NULL)", q.Field)
	}
	if q.State != "" {
		w.and(objectState+" = ?", string(q.State))
	}
	if err := w.view("view_objects", "name object", q.Condition); err != nil {
		return nil, err
	}
	var list []Object
	err := s.ask(ctx, objectQuery+w.String()+" ORDER BY name", w.values, func(rows *sql.Rows) error {
		o, err := scanObject(rows)
		list = append(list, o)
		return err
	})
	if err != nil {
		return nil, err
	}
	if q.Cone != nil {
		list = nearest(list, q.Cone, func(o *Object) (float64, float64) { return o.RA, o.Dec })
	}
	return list, nil
}

// Object returns the object of a name, of a former name, or with a candidate
// of this identifier. The error is ErrNotFound if there is none.
func (s *Store) Object(ctx context.Context, name string) (Object, error) {
	o, err := findObject(ctx, s.readers, name)
	if errors.Is(err, ErrNotFound) {
		return o, err
	}
	return o, s.explain(err)
}

// FormerNames lists other names under which an object has been known.
func (s *Store) FormerNames(ctx context.Context, o Object) ([]string, error) {
	rows, err := s.readers.QueryContext(ctx, "SELECT name FROM names WHERE object = (SELECT id FROM objects WHERE name = ?) ORDER BY name", o.Name)
	if err != nil {
		return nil, s.explain(err)
	}
	defer rows.Close()
	var list []string
	for rows.Next() {
		var n string
		if err := rows.Scan(&n); err != nil {
			return nil, s.explain(err)
		}
		list = append(list, n)
	}
	return list, s.explain(rows.Err())
}

// Member is a detection of an object: a point of its light curve.
type Member struct {
	detect.Candidate
	Forms bool // it forms the object; else it was found near it with a lower probability
	// ChiSquare is the distance from the object's position in units of the
	// errors: for seeds with their own error (the mean holds them), for others
	// with both.
	ChiSquare float64
	// FalseMatch is the chance that something unrelated on this frame would
	// have fallen within the limit: 1 - exp(-ρπ·limit·√det C), with ρ the
	// frame's density of seeds and joiners other than this. NaN where the
	// frame's size on the sky is unknown.
	FalseMatch float64
}

// Members lists an object's detections by time.
func (s *Store) Members(ctx context.Context, o Object) ([]Member, error) {
	rows, err := s.readers.QueryContext(ctx, "SELECT "+candidateColumns+`, xi_var, eta_var, xi_eta_cov, role,
		(SELECT count(*) FROM candidates AS other WHERE other.frame = candidates.frame AND other.role > 0 AND other.candidate_id <> candidates.candidate_id),
		(SELECT abs(xi_x * eta_y - xi_y * eta_x) * width_px * height_px FROM frames WHERE frames.frame = candidates.frame)
		FROM candidates WHERE object = (SELECT id FROM objects WHERE name = ?) ORDER BY mid_mjd IS NULL, mid_mjd, candidate_id`, o.Name)
	if err != nil {
		return nil, s.explain(err)
	}
	defer rows.Close()
	var list []Member
	plane := newPlane(o.RA, o.Dec)
	for rows.Next() {
		var m Member
		var xx, yy, xy, area sql.NullFloat64
		var role, others int
		if err := scanCandidate(rows, &m.Candidate, &xx, &yy, &xy, &role, &others, &area); err != nil {
			return nil, s.explain(err)
		}
		m.Forms = role == roleForms
		c := s.cfg.covariance(xx, yy, xy)
		if !m.Forms {
			c.xx += o.RAErr * o.RAErr
			c.yy += o.DecErr * o.DecErr
			c.xy += o.covariance
		}
		x, y := plane.offset(unit(m.RA, m.Dec))
		m.ChiSquare = c.distance(x, y)
		m.FalseMatch = math.NaN()
		if area.Valid && area.Float64 > 0 {
			ellipse := math.Pi * s.cfg.limit() * math.Sqrt(c.xx*c.yy-c.xy*c.xy)
			m.FalseMatch = -math.Expm1(-float64(others) / area.Float64 * ellipse)
		}
		list = append(list, m)
	}
	return list, s.explain(rows.Err())
}

// scanCandidate reads the columns of candidateColumns, then more.
func scanCandidate(rows interface{ Scan(...any) error }, c *detect.Candidate, more ...any) error {
	values := make([]any, len(detect.Columns))
	to := make([]any, 0, len(values)+len(more))
	for i := range values {
		to = append(to, &values[i])
	}
	if err := rows.Scan(append(to, more...)...); err != nil {
		return err
	}
	for i := range values {
		if err := detect.Columns[i].Set(c, values[i]); err != nil {
			return err
		}
	}
	return nil
}

// CandidateQuery says which candidates to list. The zero value lists all.
type CandidateQuery struct {
	Frame          string
	Night          string
	Kind           detect.Kind
	Field          string
	State          State // of its object; those without object have none
	MinProbability float64
	Cone           *Cone
	Condition      string // in SQL, on view_candidates: see Where
}

// Candidates lists candidates by frame and identifier, without stamps; a cone
// search lists the nearest first.
func (s *Store) Candidates(ctx context.Context, q CandidateQuery) ([]detect.Candidate, error) {
	var w where
	if q.Frame != "" {
		w.and("frame = ?", q.Frame)
	}
	if q.Night != "" {
		w.and("night = ?", q.Night)
	}
	if q.Kind != "" {
		w.and("kind = ?", string(q.Kind))
	}
	if q.MinProbability > 0 {
		w.and("real_probability >= ?", q.MinProbability)
	}
	if q.Cone != nil {
		if err := q.Cone.check(); err != nil {
			return nil, err
		}
		w.cone(q.Cone)
	}
	if q.Field != "" {
		w.and("frame IN (SELECT frame FROM frames WHERE field = ?)", q.Field)
	}
	if q.State != "" {
		w.and("object IN (SELECT id FROM objects WHERE "+objectState+" = ?)", string(q.State))
	}
	if err := w.view("view_candidates", "candidate_id candidate_id", q.Condition); err != nil {
		return nil, err
	}
	var list []detect.Candidate
	err := s.ask(ctx, "SELECT "+candidateColumns+" FROM candidates"+w.String()+" ORDER BY frame, candidate_id", w.values, func(rows *sql.Rows) error {
		var c detect.Candidate
		err := scanCandidate(rows, &c)
		list = append(list, c)
		return err
	})
	if err != nil {
		return nil, err
	}
	if q.Cone != nil {
		list = nearest(list, q.Cone, func(c *detect.Candidate) (float64, float64) { return c.RA, c.Dec })
	}
	return list, nil
}

// Candidate returns one candidate with its stamps and features, if they were
// stored. The error is ErrNotFound if there is none.
func (s *Store) Candidate(ctx context.Context, id string) (detect.Candidate, error) {
	var c detect.Candidate
	var blobs [4][]byte
	err := scanCandidate(s.readers.QueryRowContext(ctx, "SELECT "+candidateColumns+`,
		(SELECT stamp_new FROM stamps WHERE stamps.candidate_id = candidates.candidate_id),
		(SELECT stamp_reference FROM stamps WHERE stamps.candidate_id = candidates.candidate_id),
		(SELECT stamp_difference FROM stamps WHERE stamps.candidate_id = candidates.candidate_id),
		(SELECT features FROM stamps WHERE stamps.candidate_id = candidates.candidate_id)
		FROM candidates WHERE candidate_id = ?`, id), &c, &blobs[0], &blobs[1], &blobs[2], &blobs[3])
	if errors.Is(err, sql.ErrNoRows) {
		return c, fmt.Errorf("candidate %s: %w", id, ErrNotFound)
	}
	c.StampNew, c.StampReference, c.StampDifference = unblob32(blobs[0]), unblob32(blobs[1]), unblob32(blobs[2])
	c.Features = unblob64(blobs[3])
	return c, s.explain(err)
}

// FrameQuery says which frames to list. The zero value lists all.
type FrameQuery struct {
	Frame     string
	Night     string
	Field     string
	Status    Status
	Condition string // in SQL, on view_frames: see Where
}

// Frames lists frames by name.
func (s *Store) Frames(ctx context.Context, q FrameQuery) ([]FrameRecord, error) {
	var w where
	if q.Frame != "" {
		w.and("frame = ?", q.Frame)
	}
	if q.Night != "" {
		w.and("night = ?", q.Night)
	}
	if q.Status != "" {
		w.and("status = ?", string(q.Status))
	}
	if q.Field != "" {
		w.and("field = ?", q.Field)
	}
	if err := w.view("view_frames", "frame frame", q.Condition); err != nil {
		return nil, err
	}
	return s.frames(ctx, w.String(), w.values...)
}

// frames lists the frames for which a condition holds, by name.
func (s *Store) frames(ctx context.Context, where string, values ...any) ([]FrameRecord, error) {
	names := make([]string, len(frameColumns))
	for i := range frameColumns {
		names[i] = frameColumns[i].Name
	}
	var list []FrameRecord
	query := "SELECT " + strings.Join(names, ", ") + ", inputs, footprint FROM frames" + where + " ORDER BY frame"
	err := s.ask(ctx, query, values, func(rows *sql.Rows) error {
		values := make([]any, len(frameColumns))
		to := make([]any, 0, len(values)+2)
		for i := range values {
			to = append(to, &values[i])
		}
		var inputs, footprint sql.NullString
		if err := rows.Scan(append(to, &inputs, &footprint)...); err != nil {
			return err
		}
		r := NewFrameRecord("", Searched)
		for i := range values {
			if err := frameColumns[i].set(&r, values[i]); err != nil {
				return err
			}
		}
		if inputs.Valid {
			if err := json.Unmarshal([]byte(inputs.String), &r.Inputs); err != nil {
				return fmt.Errorf("frame %s: inputs: %w", r.Frame, err)
			}
		}
		if footprint.Valid {
			if err := json.Unmarshal([]byte(footprint.String), &r.Footprint); err != nil {
				return fmt.Errorf("frame %s: footprint: %w", r.Frame, err)
			}
		}
		list = append(list, r)
		return nil
	})
	return list, err
}

// nearest keeps what lies in a cone, nearest first; equal distances keep their
// order.
func nearest[T any](list []T, c *Cone, position func(*T) (ra, dec float64)) []T {
	type item struct {
		distance float64
		value    T
	}
	centre := unit(c.RA, c.Dec)
	var items []item
	for i := range list {
		if d := separation(centre, unit(position(&list[i]))); d <= c.Radius {
			items = append(items, item{d, list[i]})
		}
	}
	sortStable(items, func(a, b item) bool { return a.distance < b.distance })
	out := make([]T, len(items))
	for i := range items {
		out[i] = items[i].value
	}
	return out
}

// covariance returns a measured covariance with the floor, or the assumed one.
func (c *Config) covariance(xx, yy, xy sql.NullFloat64) covariance {
	floor, unknown := c.ErrorFloor*c.ErrorFloor, c.UnknownError*c.UnknownError
	if xx.Valid && yy.Valid && xy.Valid {
		return covariance{xx.Float64 + floor, yy.Float64 + floor, xy.Float64}
	}
	return covariance{unknown + floor, unknown + floor, 0}
}

// Show writes what is known about an object or a candidate, for people. id is
// the name or a former name of an object, or the identifier of a candidate.
func (s *Store) Show(ctx context.Context, w io.Writer, id string) error {
	o, err := s.Object(ctx, id)
	if errors.Is(err, ErrNotFound) {
		c, cerr := s.Candidate(ctx, id)
		if errors.Is(cerr, ErrNotFound) {
			return fmt.Errorf("%s: %w: expected the name of an object or the identifier of a candidate", id, ErrNotFound)
		}
		if cerr != nil {
			return cerr
		}
		return showCandidate(w, &c)
	}
	if err != nil {
		return err
	}
	members, err := s.Members(ctx, o)
	if err != nil {
		return err
	}
	former, err := s.FormerNames(ctx, o)
	if err != nil {
		return err
	}
	searched, err := s.SearchedAt(ctx, o.RA, o.Dec)
	if err != nil {
		return err
	}
	remarks, err := s.Remarks(ctx, o)
	if err != nil {
		return err
	}
	h := history(o, searched, members)
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	line := func(name, format string, values ...any) {
		fmt.Fprintf(t, "%s\t%s\n", name, fmt.Sprintf(format, values...))
	}
	line("object", "%s", o.Name)
	if len(former) > 0 {
		line("also", "%s", strings.Join(former, ", "))
	}
	line("position", "%.6f %+.6f deg (ICRS), ±%.3f\" ±%.3f\"", o.RA, o.Dec, o.RAErr, o.DecErr)
	line("kind", "%s, probability to be real %s", o.Kind, number("%.3f", o.RealProbability))
	line("seen", "on %s in %s, filters %s", count(o.Detections, "frame"), count(o.Nights, "night"), dash(o.Filters))
	line("first, last", "%s, %s (MJD %s, %s)", dash(o.FirstNight), dash(o.LastNight), number("%.4f", o.FirstMJD), number("%.4f", o.LastMJD))
	line("peak", "%s mag at MJD %s; %s sigma", number("%.3f", o.PeakMag), number("%.4f", o.PeakMJD), number("%.1f", o.PeakSignificance))
	if m := h.LastMissed; m != nil {
		line("last missed", "MJD %s on %s, filter %s, limit %s mag", number("%.4f", m.MidMJD), m.Frame, dash(m.Filter), number("%.3f", m.MagLimit5Sigma))
	} else {
		line("last missed", "no searched frame with a known limit before the first detection")
	}
	line("rise", "%s ± %s mag/d from the first detection to the peak in its filter; %s mag/d or more before it",
		number("%.3f", h.Rise), number("%.3f", h.RiseErr), number("%.3f", h.RiseLimit))
	line("searched here", "%s, %d before the first detection, %d after the last", count(h.Searches, "frame"), h.Before, h.Since)
	line("state", "%s", o.State)
	for _, r := range remarks {
		said := string(r.State)
		if r.State != "" && r.Comment != "" {
			said += ": "
		}
		line("", "%s %s: %s", r.Time.Format(time.DateTime), r.Author, said+r.Comment)
	}
	if err := t.Flush(); err != nil {
		return err
	}
	fmt.Fprintln(w)
	fmt.Fprintln(t, "mid_mjd\tnight\tfilter\tmag\tmag_err\tflux\tflux_err\tsignificance\tprobability\tkind\tchi2\tfalse_match\tcandidate\tframe")
	for i := range members {
		m := &members[i]
		fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%.2f\t%s\t%s\t%s\n", number("%.5f", m.MidMJD), dash(m.Night), dash(m.Filter),
			number("%.3f", m.Mag), number("%.3f", m.MagErr), number("%.1f", m.Flux), number("%.1f", m.FluxErr),
			number("%.1f", m.Significance), number("%.3f", m.RealProbability), m.Kind, m.ChiSquare, number("%.1g", m.FalseMatch), m.ID, m.Frame)
	}
	return t.Flush()
}

func showCandidate(w io.Writer, c *detect.Candidate) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	for i := range detect.Columns {
		col := &detect.Columns[i]
		fmt.Fprintf(t, "%s\t%s\t%s\n", col.Name, dash(field(col.Value(c))), col.Unit)
	}
	fmt.Fprintf(t, "object\tnone: its kind, probability or position error keeps it from forming one\t\n")
	return t.Flush()
}

func dash(s string) string {
	if s == "" {
		return "-"
	}
	return s
}

func number(format string, v float64) string {
	if math.IsNaN(v) {
		return "-"
	}
	return fmt.Sprintf(format, v)
}

func count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}
