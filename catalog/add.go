package catalog

import (
	"context"
	"database/sql"
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"strings"

	"nightsift/detect"
)

// Names of the columns of a candidate's row: the scalar columns of package
// detect, then the catalogue's own.
var (
	candidateColumns = func() string {
		names := make([]string, len(detect.Columns))
		for i, c := range detect.Columns {
			names[i] = c.Name
		}
		return strings.Join(names, ", ")
	}()
	insertCandidate = "INSERT INTO candidates (" + candidateColumns + ", xi_var, eta_var, xi_eta_cov, cell, role) VALUES (?" +
		strings.Repeat(", ?", len(detect.Columns)+4) + ")"
	insertStamps = "INSERT INTO stamps (candidate_id, stamp_new, stamp_reference, stamp_difference, features) VALUES (?, ?, ?, ?, ?)"
	insertFrame  = func() string {
		names := make([]string, len(frameColumns))
		for i, c := range frameColumns {
			names[i] = c.Name
		}
		return "INSERT INTO frames (" + strings.Join(names, ", ") + ", inputs, footprint) VALUES (?" + strings.Repeat(", ?", len(names)+1) + ")"
	}()
)

// AddFrame stores a frame with all of its candidates and brings the objects up
// to date, in one transaction. What the catalogue had of a frame of this name
// is replaced: with equal candidates nothing changes. A candidate's Frame must
// be the record's or empty; rec.Candidates is set to their number. Stamps and
// features are stored where a candidate has them.
//
// On an error, also when ctx ends, the catalogue is as before.
func (s *Store) AddFrame(ctx context.Context, rec FrameRecord, candidates []detect.Candidate) error {
	if rec.Frame == "" {
		return fmt.Errorf("catalogue %s: found a frame without name, expected one: frames are kept by name", s.path)
	}
	switch rec.Status {
	case Searched, SetAside, Failed:
	default:
		return fmt.Errorf("catalogue %s: frame %s: found status %q, expected %s, %s or %s", s.path, rec.Frame, rec.Status, Searched, SetAside, Failed)
	}
	ids := make(map[string]int, len(candidates))
	for i := range candidates {
		c := &candidates[i]
		if c.Frame != rec.Frame && c.Frame != "" {
			return fmt.Errorf("catalogue %s: candidate %s belongs to frame %s, expected %s", s.path, c.ID, c.Frame, rec.Frame)
		}
		if c.ID == "" {
			return fmt.Errorf("catalogue %s: frame %s: candidate %d has no identifier", s.path, rec.Frame, i+1)
		}
		if c.Injected() {
			return fmt.Errorf("catalogue %s: frame %s: %s was found with injected sources in the frame and is no candidate", s.path, rec.Frame, c.ID)
		}
		if j, twice := ids[c.ID]; twice {
			return fmt.Errorf("catalogue %s: frame %s: candidates %d and %d have one identifier, %s: expected different ones", s.path, rec.Frame, j+1, i+1, c.ID)
		}
		ids[c.ID] = i
	}
	rec.Candidates = len(candidates)
	if math.IsNaN(rec.Jacobian[0] + rec.Jacobian[1] + rec.Jacobian[2] + rec.Jacobian[3]) {
		rec.Jacobian = jacobianFrom(candidates)
	}
	return s.transact(ctx, true, func(tx *sql.Tx) error { return s.add(ctx, tx, &rec, candidates) })
}

func (s *Store) add(ctx context.Context, tx *sql.Tx, rec *FrameRecord, candidates []detect.Candidate) error {
	if s.server {
		// Other writers wait with this frame from here on, but with objects only
		// from where this writer looks at them.
		if err := lock(ctx, tx, lockFrame, rec.Frame); err != nil {
			return err
		}
		var there bool
		if err := tx.QueryRowContext(ctx, "SELECT count(*) > 0 FROM frames WHERE frame = ?", rec.Frame).Scan(&there); err != nil {
			return err
		}
		if there {
			if err := lock(ctx, tx, lockObjects); err != nil {
				return err
			}
		}
	}
	removed, err := removeFrame(ctx, tx, &s.cfg, rec.Frame)
	if err != nil {
		return err
	}
	inputs, err := encodeInputs(rec.Inputs)
	if err != nil {
		return err
	}
	values := make([]any, 0, len(frameColumns)+2)
	for i := range frameColumns {
		values = append(values, frameColumns[i].value(rec))
	}
	if _, err := tx.ExecContext(ctx, insertFrame, append(values, inputs, encodeOutline(rec.Footprint))...); err != nil {
		return fmt.Errorf("frame %s: %w", rec.Frame, err)
	}
	if err := addCoverage(ctx, tx, rec); err != nil {
		return fmt.Errorf("frame %s: %w", rec.Frame, err)
	}

	insert, stamps := tx.StmtContext(ctx, s.insert), tx.StmtContext(ctx, s.stamps)
	row := make([]any, len(detect.Columns)+5)
	var cells []int64
	fresh := make(map[string]bool)
	for i := range candidates {
		c := &candidates[i]
		for k := range detect.Columns {
			v := detect.Columns[k].Value(c)
			switch x := v.(type) {
			case float64:
				v = nullReal(x)
			case string:
				v = nullText(x)
			}
			if detect.Columns[k].Name == "frame" {
				v = rec.Frame
			}
			row[k] = v
		}
		own := row[len(detect.Columns):]
		xx, yy, xy := rec.skyError(c.XErr, c.YErr)
		own[0], own[1], own[2] = nullReal(xx), nullReal(yy), nullReal(xy)
		role := s.cfg.role(c.Kind, c.RealProbability, c.RA, c.Dec, xx, yy)
		own[3], own[4] = nil, role
		if onSky(c.RA, c.Dec) {
			cell := cellOf(c.RA, c.Dec)
			own[3] = cell
			if role != roleNone {
				cells = append(cells, cell)
				fresh[c.ID] = true
			}
		}
		if _, err := insert.ExecContext(ctx, row...); err != nil {
			if text := err.Error(); strings.Contains(text, "UNIQUE") || strings.Contains(text, "23505") {
				return fmt.Errorf("frame %s: candidate %s is in the catalogue already, under another frame: were two files processed under different names, or one file twice? Give them one name", rec.Frame, c.ID)
			}
			return fmt.Errorf("frame %s: candidate %s: %w", rec.Frame, c.ID, err)
		}
		if c.StampNew != nil || c.StampReference != nil || c.StampDifference != nil || c.Features != nil {
			if _, err := stamps.ExecContext(ctx, c.ID, blob32(c.StampNew), blob32(c.StampReference), blob32(c.StampDifference), blob64(c.Features)); err != nil {
				return fmt.Errorf("frame %s: stamps of candidate %s: %w", rec.Frame, c.ID, err)
			}
		}
	}

	if err := reattach(ctx, tx, rec, candidates); err != nil {
		return fmt.Errorf("frame %s: labels: %w", rec.Frame, err)
	}

	if s.server {
		if err := lock(ctx, tx, lockObjects); err != nil {
			return err
		}
	}
	w, err := newWorker(ctx, tx, &s.cfg)
	if err != nil {
		return err
	}
	defer w.close()
	w.forget(removed)

	// Association starts from the new seeds and from those near removed ones.
	near := map[int64]bool{}
	for i := range candidates {
		if c := &candidates[i]; fresh[c.ID] {
			w.sky.cellsAround(near, c.RA, c.Dec)
		}
	}
	for _, p := range removed {
		w.sky.cellsAround(near, p.ra, p.dec)
	}
	if err := w.preload(near); err != nil {
		return err
	}
	var seeds, joiners []*point
	for _, cell := range cells {
		points, err := w.sky.cell(cell)
		if err != nil {
			return err
		}
		for _, p := range points {
			if !fresh[p.id] {
				continue
			}
			delete(fresh, p.id)
			if p.role == roleForms {
				seeds = append(seeds, p)
			} else {
				joiners = append(joiners, p)
			}
		}
	}
	left, gone, err := w.left(removed)
	if err != nil {
		return err
	}
	return w.settle(append(seeds, left...), joiners, gone)
}

// left returns the seeds that removed candidates may have held together and
// the objects that lost one.
func (w *worker) left(removed []*point) (seeds []*point, gone map[int64]bool, err error) {
	gone = map[int64]bool{}
	add := func(q *point) { seeds = append(seeds, q) }
	for _, p := range removed {
		if p.role != roleForms {
			if p.object != 0 {
				w.dirty[p.object] = true
			}
			continue
		}
		if p.object != 0 {
			gone[p.object] = true
		}
		if err := w.sky.around(p.ra, p.dec, p.dir, add); err != nil {
			return nil, nil, err
		}
		err := w.by.eachMerge(p, w.limit, func(m *mergedPlace) error { return w.sky.around(m.ra, m.dec, m.dir, add) })
		if err != nil {
			return nil, nil, err
		}
	}
	return seeds, gone, nil
}

// AddCandidates stores candidates of any number of frames, such as those of a
// table of candidates, each frame in a transaction of its own in order of its
// name. It replaces the candidates of these frames; the record of a frame that
// is in the catalogue is kept, for others one is made of what the candidates
// say. It returns the number of frames stored.
func (s *Store) AddCandidates(ctx context.Context, list []detect.Candidate) (frames int, err error) {
	byFrame := map[string][]detect.Candidate{}
	names := map[string]bool{}
	for i := range list {
		c := &list[i]
		if c.Frame == "" {
			return 0, fmt.Errorf("catalogue %s: candidate %s names no frame, expected one", s.path, c.ID)
		}
		byFrame[c.Frame] = append(byFrame[c.Frame], *c)
		names[c.Frame] = true
	}
	for _, name := range sorted(names) {
		found, err := s.Frames(ctx, FrameQuery{Frame: name})
		if err != nil {
			return frames, err
		}
		group := byFrame[name]
		rec := NewFrameRecord(name, Searched)
		if len(found) == 1 {
			rec = found[0]
		} else {
			for i := range group {
				if rec.Filter == "" {
					rec.Filter = group[i].Filter
				}
				if rec.Night == "" {
					rec.Night = group[i].Night
				}
				if math.IsNaN(rec.MidMJD) {
					rec.MidMJD = group[i].MidMJD
				}
			}
		}
		if err := s.AddFrame(ctx, rec, group); err != nil {
			return frames, err
		}
		frames++
	}
	return frames, nil
}

// removeFrame deletes a frame and returns what association must know of the
// candidates it had.
func removeFrame(ctx context.Context, tx *sql.Tx, cfg *Config, name string) ([]*point, error) {
	rows, err := tx.QueryContext(ctx, "SELECT "+pointColumns+" FROM candidates WHERE frame = ? AND role > 0", name)
	if err != nil {
		return nil, err
	}
	removed, err := scanPoints(rows, cfg)
	if err != nil {
		return nil, err
	}
	if err := detach(ctx, tx, name); err != nil {
		return nil, err
	}
	_, err = tx.ExecContext(ctx, "DELETE FROM frames WHERE frame = ?", name)
	return removed, err
}

// forget notes to which objects removed candidates belonged.
func (w *worker) forget(removed []*point) {
	for _, p := range removed {
		if p.object != 0 {
			w.former[p.id] = p.object
		}
	}
}

// RemoveFrame takes a frame and its candidates out and brings the objects up to
// date. It reports whether the frame was there.
func (s *Store) RemoveFrame(ctx context.Context, name string) (found bool, err error) {
	err = s.update(ctx, func(tx *sql.Tx) error {
		var there bool
		if err := tx.QueryRowContext(ctx, "SELECT count(*) > 0 FROM frames WHERE frame = ?", name).Scan(&there); err != nil {
			return err
		}
		found = found || there
		removed, err := removeFrame(ctx, tx, &s.cfg, name)
		if err != nil {
			return err
		}
		w, err := newWorker(ctx, tx, &s.cfg)
		if err != nil {
			return err
		}
		defer w.close()
		w.forget(removed)
		seeds, gone, err := w.left(removed)
		if err != nil {
			return err
		}
		return w.settle(seeds, nil, gone)
	})
	return found && err == nil, err
}

// Rebuild forms all objects anew from the candidates, with the settings of the
// Store, in one transaction. Objects that come out the same keep their number.
func (s *Store) Rebuild(ctx context.Context) error {
	return s.update(ctx, func(tx *sql.Tx) error {
		if err := setRoles(ctx, tx, &s.cfg); err != nil {
			return err
		}
		w, err := newWorker(ctx, tx, &s.cfg)
		if err != nil {
			return err
		}
		defer w.close()
		seeds, joiners, err := w.loadAll()
		if err != nil {
			return err
		}
		gone := map[int64]bool{}
		rows, err := tx.QueryContext(ctx, "SELECT id FROM objects")
		if err != nil {
			return err
		}
		defer rows.Close()
		for rows.Next() {
			var id int64
			if err := rows.Scan(&id); err != nil {
				return err
			}
			gone[id] = true
		}
		if err := errors.Join(rows.Err(), rows.Close()); err != nil {
			return err
		}
		if err := w.settle(seeds, joiners, gone); err != nil {
			return err
		}
		_, err = tx.ExecContext(ctx, `INSERT INTO settings (name, value) VALUES ('association', ?)
			ON CONFLICT (name) DO UPDATE SET value = excluded.value`, s.cfg.String())
		return err
	})
}

// loadAll fills the worker's sky with every seed and joiner.
func (w *worker) loadAll() (seeds, joiners []*point, err error) {
	w.sky.load = nil
	rows, err := w.tx.QueryContext(w.ctx, "SELECT "+pointColumns+" FROM candidates WHERE role > 0 ORDER BY candidate_id")
	if err != nil {
		return nil, nil, err
	}
	defer rows.Close()
	for rows.Next() {
		p, err := scanPoint(rows, w.cfg)
		if err != nil {
			return nil, nil, err
		}
		cell := cellOf(p.ra, p.dec)
		w.sky.cells[cell] = append(w.sky.cells[cell], p)
		if p.role == roleForms {
			seeds = append(seeds, p)
		} else {
			joiners = append(joiners, p)
		}
	}
	return seeds, joiners, rows.Err()
}

// setRoles decides anew which candidates form and join objects.
func setRoles(ctx context.Context, tx *sql.Tx, cfg *Config) error {
	rows, err := tx.QueryContext(ctx, "SELECT candidate_id, kind, real_probability, ra_deg, dec_deg, xi_var, eta_var, role FROM candidates")
	if err != nil {
		return err
	}
	defer rows.Close()
	change := map[string]int{}
	for rows.Next() {
		var id string
		var kind sql.NullString
		var v [5]sql.NullFloat64
		var role int
		if err := rows.Scan(&id, &kind, &v[0], &v[1], &v[2], &v[3], &v[4], &role); err != nil {
			return err
		}
		var f [5]float64
		for i := range v {
			f[i] = math.NaN()
			if v[i].Valid {
				f[i] = v[i].Float64
			}
		}
		if now := cfg.role(detect.Kind(kind.String), f[0], f[1], f[2], f[3], f[4]); now != role {
			change[id] = now
		}
	}
	if err := errors.Join(rows.Err(), rows.Close()); err != nil {
		return err
	}
	set, err := tx.PrepareContext(ctx, "UPDATE candidates SET role = ?, object = NULLIF(object * ?, 0) WHERE candidate_id = ?")
	if err != nil {
		return err
	}
	defer set.Close()
	for id, role := range change {
		if _, err := set.ExecContext(ctx, role, min(role, 1), id); err != nil {
			return err
		}
	}
	return nil
}

func onSky(ra, dec float64) bool {
	return ra >= -360 && ra <= 720 && dec >= -90 && dec <= 90
}

// role says what part a candidate takes in association. xx and yy are the
// measured variances [arcsec²], NaN where unknown.
func (c *Config) role(kind detect.Kind, probability, ra, dec, xx, yy float64) int {
	limit := c.MaxError * c.MaxError
	switch {
	case !c.takesPart(kind) || !onSky(ra, dec) || xx > limit || yy > limit:
		return roleNone
	case probability >= c.FormProbability:
		return roleForms
	case probability >= c.JoinProbability:
		return roleJoins
	}
	return roleNone
}

// jacobianFrom estimates a frame's Jacobian from its candidates' positions in
// pixels and on the sky, by a linear fit; NaN where fewer than three, or three
// on a line, have both.
func jacobianFrom(list []detect.Candidate) [4]float64 {
	n := math.NaN()
	unknown := [4]float64{n, n, n, n}
	var plane *plane
	var sums struct{ n, x, y, xi, eta, xx, xy, yy, xxi, yxi, xeta, yeta float64 }
	var x0, y0 float64
	for i := range list {
		c := &list[i]
		if !onSky(c.RA, c.Dec) || math.IsNaN(c.X) || math.IsNaN(c.Y) {
			continue
		}
		if plane == nil {
			p := newPlane(c.RA, c.Dec)
			plane, x0, y0 = &p, c.X, c.Y
		}
		d := unit(c.RA, c.Dec)
		if dot(d, plane.at) < 0.5 {
			return unknown
		}
		xi, eta := plane.offset(d)
		x, y := c.X-x0, c.Y-y0
		sums.n++
		sums.x += x
		sums.y += y
		sums.xi += xi
		sums.eta += eta
		sums.xx += x * x
		sums.xy += x * y
		sums.yy += y * y
		sums.xxi += x * xi
		sums.yxi += y * xi
		sums.xeta += x * eta
		sums.yeta += y * eta
	}
	if sums.n < 3 {
		return unknown
	}
	xx := sums.xx - sums.x*sums.x/sums.n
	xy := sums.xy - sums.x*sums.y/sums.n
	yy := sums.yy - sums.y*sums.y/sums.n
	det := xx*yy - xy*xy
	if !(det > 1e-6*xx*yy) {
		return unknown
	}
	solve := func(bx, by float64) (float64, float64) { return (yy*bx - xy*by) / det, (xx*by - xy*bx) / det }
	var j [4]float64
	j[0], j[1] = solve(sums.xxi-sums.x*sums.xi/sums.n, sums.yxi-sums.y*sums.xi/sums.n)
	j[2], j[3] = solve(sums.xeta-sums.x*sums.eta/sums.n, sums.yeta-sums.y*sums.eta/sums.n)
	return j
}

func blob32(v []float32) any {
	if v == nil {
		return nil
	}
	b := make([]byte, 0, 4*len(v))
	for _, x := range v {
		b = binary.LittleEndian.AppendUint32(b, math.Float32bits(x))
	}
	return b
}

func blob64(v []float64) any {
	if v == nil {
		return nil
	}
	b := make([]byte, 0, 8*len(v))
	for _, x := range v {
		b = binary.LittleEndian.AppendUint64(b, math.Float64bits(x))
	}
	return b
}

func unblob32(b []byte) []float32 {
	if b == nil {
		return nil
	}
	v := make([]float32, len(b)/4)
	for i := range v {
		v[i] = math.Float32frombits(binary.LittleEndian.Uint32(b[4*i:]))
	}
	return v
}

func unblob64(b []byte) []float64 {
	if b == nil {
		return nil
	}
	v := make([]float64, len(b)/8)
	for i := range v {
		v[i] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*i:]))
	}
	return v
}
