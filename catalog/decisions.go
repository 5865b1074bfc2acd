package catalog

import (
	"cmp"
	"context"
	"database/sql"
	"errors"
	"fmt"
	"slices"
	"time"
)

// # What people decide about objects
//
// A merge says that what is found at several places is one object. It is kept
// as the founders of the objects that were joined: their identifiers, positions
// and errors. Seeds at any of the places are linked, and after a component is
// divided, the clusters at the places (that of the founder, or else the nearest
// one within the limit) are made one.
//
// A split says that some detections of an object belong to another one. It is
// kept as the lists of both sides. In dividing a component, the seeds of each
// list start a cluster of their own and stay in it; all others join the nearest
// as ever. Of several splits that name a seed, the latest counts.
//
// So decisions are part of the rule by which objects are formed: re-association,
// Rebuild and Check follow them, whatever the order of frames.

// mergedPlace is one of the places that a merge joins.
type mergedPlace struct {
	founder string
	ra, dec float64
	dir     vector
	cov     covariance // floor included
}

// holds reports whether a seed is at the place.
func (m *mergedPlace) holds(p *point, limit float64) bool {
	return p.id == m.founder || m.chi2(p.dir, covariance{p.xx, p.yy, p.xy}, limit) <= limit
}

// chi2 is the distance of a position with its error from the place; a value
// beyond the limit may be a lower bound.
func (m *mergedPlace) chi2(dir vector, c covariance, limit float64) float64 {
	trace := m.cov.xx + m.cov.yy + c.xx + c.yy
	if d := chord2(m.dir, dir) / (arcsec * arcsec) / trace; d > limit {
		return d
	}
	plane := newPlane(m.ra, m.dec)
	x, y := plane.offset(dir)
	return covariance{m.cov.xx + c.xx, m.cov.yy + c.yy, m.cov.xy + c.xy}.distance(x, y)
}

// decisions are those that hold.
type decisions struct {
	merges [][]mergedPlace
	pins   map[string]pin // by candidate
}

// pin is the side of a split on which a candidate stands.
type pin struct{ decision, part int }

func loadDecisions(ctx context.Context, tx *sql.Tx, cfg *Config) (*decisions, error) {
	d := &decisions{pins: map[string]pin{}}
	var some bool
	if err := tx.QueryRowContext(ctx, "SELECT count(*) > 0 FROM decisions WHERE withdrawn IS NULL").Scan(&some); err != nil || !some {
		return d, err
	}
	rows, err := tx.QueryContext(ctx, `SELECT decisions.id, founder, ra_deg, dec_deg, xi_var, eta_var, xi_eta_cov
		FROM decision_places JOIN decisions ON decisions.id = decision WHERE withdrawn IS NULL ORDER BY time, decisions.id, place`)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	last := ""
	for rows.Next() {
		var id string
		var m mergedPlace
		if err := rows.Scan(&id, &m.founder, &m.ra, &m.dec, &m.cov.xx, &m.cov.yy, &m.cov.xy); err != nil {
			return nil, err
		}
		m.dir = unit(m.ra, m.dec)
		if id != last {
			d.merges, last = append(d.merges, nil), id
		}
		k := len(d.merges) - 1
		d.merges[k] = append(d.merges[k], m)
	}
	if err := errors.Join(rows.Err(), rows.Close()); err != nil {
		return nil, err
	}
	members, err := tx.QueryContext(ctx, `SELECT decisions.id, part, attached
		FROM decision_members JOIN decisions ON decisions.id = decision
		WHERE withdrawn IS NULL AND attached IS NOT NULL ORDER BY time, decisions.id, candidate_id`)
	if err != nil {
		return nil, err
	}
	defer members.Close()
	last = ""
	n := 0
	for members.Next() {
		var id, candidate string
		var part int
		if err := members.Scan(&id, &part, &candidate); err != nil {
			return nil, err
		}
		if id != last {
			n, last = n+1, id
		}
		d.pins[candidate] = pin{n, part}
	}
	return d, members.Err()
}

// eachMerge calls visit for every place of the merges that hold a seed.
func (d *decisions) eachMerge(p *point, limit float64, visit func(*mergedPlace) error) error {
	for _, places := range d.merges {
		if !slices.ContainsFunc(places, func(m mergedPlace) bool { return m.holds(p, limit) }) {
			continue
		}
		for k := range places {
			if err := visit(&places[k]); err != nil {
				return err
			}
		}
	}
	return nil
}

// parts gives to each seed the number of the group that splits put it into,
// -1 for none; nil if they concern no seed.
func (d *decisions) parts(seeds []*point) []int {
	if len(d.pins) == 0 {
		return nil
	}
	var groups []pin
	for _, p := range seeds {
		if g, ok := d.pins[p.id]; ok && !slices.Contains(groups, g) {
			groups = append(groups, g)
		}
	}
	if len(groups) == 0 {
		return nil
	}
	slices.SortFunc(groups, func(a, b pin) int {
		return cmp.Or(cmp.Compare(a.decision, b.decision), cmp.Compare(a.part, b.part))
	})
	out := make([]int, len(seeds))
	for i, p := range seeds {
		out[i] = -1
		if g, ok := d.pins[p.id]; ok {
			out[i] = slices.Index(groups, g)
		}
	}
	return out
}

// united joins groups of seeds that merges declare one. at tells the place of a
// group and its error.
func (d *decisions) united(groups [][]int, at func(int) (vector, covariance), seeds []*point, limit float64) [][]int {
	for _, places := range d.merges {
		into := -1
		for k := range places {
			m := &places[k]
			found, best := -1, limit
			for g, list := range groups {
				if len(list) == 0 {
					continue
				}
				if slices.ContainsFunc(list, func(i int) bool { return seeds[i].id == m.founder }) {
					found = g
					break
				}
				if chi := func() float64 { dir, c := at(g); return m.chi2(dir, c, limit) }(); chi <= best {
					found, best = g, chi
				}
			}
			switch {
			case found < 0 || found == into:
			case into < 0:
				into = found
			default:
				groups[into] = append(groups[into], groups[found]...)
				groups[found] = nil
			}
		}
	}
	return groups
}

// Decision is a merge or a split, as a list shows it.
type Decision struct {
	ID        string
	Kind      string   // "merge" or "split"
	About     []string // names of the objects joined; identifiers of the candidates parted from the others
	Remark    Remark   // who, when, why
	Withdrawn string   // when and by whom; empty while it holds
}

// Decisions lists all merges and splits in order of time, also withdrawn ones.
func (s *Store) Decisions(ctx context.Context) ([]Decision, error) {
	rows, err := s.readers.QueryContext(ctx, `SELECT id, kind, author, time, comment, withdrawn, withdrawn_by, coalesce(name, candidate_id)
		FROM decisions LEFT JOIN decision_places ON decision_places.decision = id
		LEFT JOIN decision_members ON decision_members.decision = id AND part = 1
		ORDER BY time, id, place, candidate_id`)
	if err != nil {
		return nil, s.explain(err)
	}
	defer rows.Close()
	var list []Decision
	for rows.Next() {
		var d Decision
		var at string
		var comment, withdrawn, by, about sql.NullString
		if err := rows.Scan(&d.ID, &d.Kind, &d.Remark.Author, &at, &comment, &withdrawn, &by, &about); err != nil {
			return nil, s.explain(err)
		}
		if d.Remark.Time, err = time.Parse(timeForm, at); err != nil {
			return nil, s.explain(err)
		}
		d.Remark.Comment = comment.String
		if withdrawn.Valid {
			d.Withdrawn = withdrawn.String + " by " + by.String
		}
		if n := len(list); n == 0 || list[n-1].ID != d.ID {
			list = append(list, d)
		}
		if about.Valid {
			list[len(list)-1].About = append(list[len(list)-1].About, about.String)
		}
	}
	return list, s.explain(rows.Err())
}

// Merge decides that two objects, named as for Object, are one, and returns it.
// Splits that had parted them are withdrawn. The object keeps all names,
// remarks and the state set last.
func (s *Store) Merge(ctx context.Context, first, second string, r Remark) (Object, error) {
	var merged Object
	if err := person("author", r.Author, r.Time); err != nil {
		return merged, fmt.Errorf("merging %s and %s: %w", first, second, err)
	}
	err := s.decide(ctx, func(tx *sql.Tx) error {
		var pair [2]Object
		for k, name := range []string{first, second} {
			var err error
			if pair[k], err = findObject(ctx, tx, name); err != nil {
				return err
			}
		}
		if pair[0].id == pair[1].id {
			return fmt.Errorf("%s and %s are one object, %s, already: expected two", first, second, pair[0].Name)
		}
		if d := separation(unit(pair[0].RA, pair[0].Dec), unit(pair[1].RA, pair[1].Dec)); d > furthestMerge {
			return fmt.Errorf("%s and %s are %.1f arcsec apart: expected %d at most for one source at rest", pair[0].Name, pair[1].Name, d, furthestMerge)
		}
		slices.SortFunc(pair[:], func(a, b Object) int { return cmp.Compare(a.Name, b.Name) })
		if err := withdrawWhere(ctx, tx, r, `SELECT DISTINCT a.decision FROM decision_members AS a JOIN decision_members AS b ON a.decision = b.decision AND a.part <> b.part
			WHERE a.attached IN (SELECT candidate_id FROM candidates WHERE object = ?) AND b.attached IN (SELECT candidate_id FROM candidates WHERE object = ?)`,
			pair[0].id, pair[1].id); err != nil {
			return err
		}
		id := digest("merge", pair[0].Name, pair[1].Name, r.Author, r.Time.UTC().Format(timeForm))
		if err := insertDecision(ctx, tx, id, "merge", r); err != nil {
			return err
		}
		for k, o := range pair {
			rows, err := tx.QueryContext(ctx, "SELECT "+pointColumns+" FROM candidates WHERE candidate_id = ?", o.Founder)
			if err != nil {
				return err
			}
			list, err := scanPoints(rows, &s.cfg)
			if err != nil {
				return err
			}
			if len(list) != 1 {
				return fmt.Errorf("object %s: its founder %s is missing: check the catalogue", o.Name, o.Founder)
			}
			p := list[0]
			if _, err := tx.ExecContext(ctx, `INSERT INTO decision_places (decision, place, name, founder, ra_deg, dec_deg, xi_var, eta_var, xi_eta_cov)
				VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)`, id, k, o.Name, p.id, p.ra, p.dec, p.xx, p.yy, p.xy); err != nil {
				return err
			}
		}
		if err := s.settleObjects(ctx, tx, pair[0].id, pair[1].id); err != nil {
			return err
		}
		var err error
		merged, err = findObject(ctx, tx, pair[0].Founder)
		return err
	})
	return merged, err
}

// furthestMerge [arcsec] bounds what a merge can join, and with it the part of
// the sky that one decision makes depend on each other.
const furthestMerge = 30

// Split decides that some detections of an object, given by their identifiers,
// belong to another object than its other ones, and returns the objects that
// come of it, in order of their names. Merges that made the object are
// withdrawn.
func (s *Store) Split(ctx context.Context, object string, candidates []string, r Remark) ([]Object, error) {
	if err := person("author", r.Author, r.Time); err != nil {
		return nil, fmt.Errorf("splitting %s: %w", object, err)
	}
	var list []Object
	err := s.decide(ctx, func(tx *sql.Tx) error {
		list = nil
		o, err := findObject(ctx, tx, object)
		if err != nil {
			return err
		}
		rows, err := tx.QueryContext(ctx, "SELECT "+pointColumns+" FROM candidates WHERE object = ? ORDER BY candidate_id", o.id)
		if err != nil {
			return err
		}
		members, err := scanPoints(rows, &s.cfg)
		if err != nil {
			return err
		}
		forms, part := 0, map[string]int{}
		for _, p := range members {
			if p.role == roleForms {
				forms++
				part[p.id] = 0
			}
		}
		apart := 0
		for _, c := range candidates {
			if k, ok := part[c]; !ok {
				return fmt.Errorf("object %s: candidate %s is not among the detections that form it: `catalog show` lists them", o.Name, c)
			} else if k == 0 {
				part[c] = 1
				apart++
			}
		}
		if apart == 0 || apart == forms {
			return fmt.Errorf("object %s: found %d of its %d forming detections to be parted, expected some and not all", o.Name, apart, forms)
		}
		by, err := loadDecisions(ctx, tx, &s.cfg)
		if err != nil {
			return err
		}
		if err := withdrawMerges(ctx, tx, by, members, s.cfg.limit(), r); err != nil {
			return err
		}
		id := digest(append([]string{"split", o.Name, r.Author, r.Time.UTC().Format(timeForm)}, slices.Sorted(slices.Values(candidates))...)...)
		if err := insertDecision(ctx, tx, id, "split", r); err != nil {
			return err
		}
		for _, p := range members {
			k, ok := part[p.id]
			if !ok {
				continue
			}
			if _, err := tx.ExecContext(ctx, `INSERT INTO decision_members (decision, candidate_id, part, attached, frame, x_px, y_px, significance)
				SELECT ?, candidate_id, ?, candidate_id, frame, x_px, y_px, significance FROM candidates WHERE candidate_id = ?`, id, k, p.id); err != nil {
				return err
			}
		}
		if err := s.settleObjects(ctx, tx, o.id); err != nil {
			return err
		}
		seen := map[int64]bool{}
		for _, p := range members {
			if p.role != roleForms {
				continue
			}
			n, err := findObject(ctx, tx, p.id)
			if err != nil {
				return err
			}
			if !seen[n.id] {
				seen[n.id] = true
				list = append(list, n)
			}
		}
		slices.SortFunc(list, func(a, b Object) int { return cmp.Compare(a.Name, b.Name) })
		return nil
	})
	return list, err
}

// Withdraw ends a decision, given by its identifier: objects are formed as if it
// had not been made. It stays in the list of decisions.
func (s *Store) Withdraw(ctx context.Context, decision string, r Remark) error {
	if err := person("author", r.Author, r.Time); err != nil {
		return fmt.Errorf("decision %s: %w", decision, err)
	}
	return s.decide(ctx, func(tx *sql.Tx) error {
		var ended sql.NullString
		err := tx.QueryRowContext(ctx, "SELECT withdrawn FROM decisions WHERE id = ?", decision).Scan(&ended)
		if errors.Is(err, sql.ErrNoRows) {
			return fmt.Errorf("decision %s: %w", decision, ErrNotFound)
		}
		if err != nil {
			return err
		}
		if ended.Valid {
			return fmt.Errorf("decision %s was withdrawn on %s already", decision, ended.String)
		}
		if err := withdraw(ctx, tx, decision, r); err != nil {
			return err
		}
		objects, err := numbers(ctx, tx, `SELECT DISTINCT object FROM candidates WHERE object IS NOT NULL AND
			(candidate_id IN (SELECT attached FROM decision_members WHERE decision = ?) OR candidate_id IN (SELECT founder FROM decision_places WHERE decision = ?))
			ORDER BY object`, decision, decision)
		if err != nil {
			return err
		}
		// Founders may have other identifiers by now: also what is at the places.
		places, err := tx.QueryContext(ctx, "SELECT ra_deg, dec_deg FROM decision_places WHERE decision = ?", decision)
		if err != nil {
			return err
		}
		defer places.Close()
		var around []Cone
		for places.Next() {
			c := Cone{Radius: s.cfg.reach()}
			if err := places.Scan(&c.RA, &c.Dec); err != nil {
				return err
			}
			around = append(around, c)
		}
		if err := errors.Join(places.Err(), places.Close()); err != nil {
			return err
		}
		for i := range around {
			var q where
			q.cone(&around[i])
			more, err := numbers(ctx, tx, "SELECT DISTINCT object FROM candidates"+q.String()+" AND object IS NOT NULL", q.values...)
			if err != nil {
				return err
			}
			objects = append(objects, more...)
		}
		return s.settleObjects(ctx, tx, objects...)
	})
}

func insertDecision(ctx context.Context, tx *sql.Tx, id, kind string, r Remark) error {
	_, err := tx.ExecContext(ctx, "INSERT INTO decisions (id, kind, author, time, comment) VALUES (?, ?, ?, ?, ?)",
		id, kind, r.Author, r.Time.UTC().Format(timeForm), nullText(r.Comment))
	return err
}

func withdraw(ctx context.Context, tx *sql.Tx, decision string, r Remark) error {
	_, err := tx.ExecContext(ctx, "UPDATE decisions SET withdrawn = ?, withdrawn_by = ? WHERE id = ? AND withdrawn IS NULL",
		r.Time.UTC().Format(timeForm), r.Author, decision)
	return err
}

// withdrawWhere withdraws the decisions that a query names.
func withdrawWhere(ctx context.Context, tx *sql.Tx, r Remark, query string, values ...any) error {
	ids, err := texts(ctx, tx, query, values...)
	if err != nil {
		return err
	}
	for _, id := range ids {
		if err := withdraw(ctx, tx, id, r); err != nil {
			return err
		}
	}
	return nil
}

// withdrawMerges withdraws the merges of which two places or more hold members
// of an object.
func withdrawMerges(ctx context.Context, tx *sql.Tx, by *decisions, members []*point, limit float64, r Remark) error {
	for _, places := range by.merges {
		held := 0
		for k := range places {
			if slices.ContainsFunc(members, func(p *point) bool { return places[k].holds(p, limit) }) {
				held++
			}
		}
		if held < 2 {
			continue
		}
		if err := withdrawWhere(ctx, tx, r, "SELECT decision FROM decision_places WHERE founder = ? AND ra_deg = ? AND dec_deg = ?",
			places[0].founder, places[0].ra, places[0].dec); err != nil {
			return err
		}
	}
	return nil
}

// numbers returns the integers that a query gives.
func numbers(ctx context.Context, tx *sql.Tx, query string, values ...any) ([]int64, error) {
	rows, err := tx.QueryContext(ctx, query, values...)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var list []int64
	for rows.Next() {
		var n int64
		if err := rows.Scan(&n); err != nil {
			return nil, err
		}
		list = append(list, n)
	}
	return list, rows.Err()
}

// scanPoints reads and closes rows of pointColumns.
func scanPoints(rows *sql.Rows, cfg *Config) ([]*point, error) {
	defer rows.Close()
	var list []*point
	for rows.Next() {
		p, err := scanPoint(rows, cfg)
		if err != nil {
			return nil, err
		}
		list = append(list, p)
	}
	return list, rows.Err()
}

// settleObjects forms some objects anew, with the decisions as they are now.
func (s *Store) settleObjects(ctx context.Context, tx *sql.Tx, objects ...int64) error {
	w, err := newWorker(ctx, tx, &s.cfg)
	if err != nil {
		return err
	}
	defer w.close()
	gone := map[int64]bool{}
	wanted := map[string]bool{}
	cells := map[int64]bool{}
	for _, o := range objects {
		gone[o] = true
		rows, err := tx.QueryContext(ctx, "SELECT "+pointColumns+" FROM candidates WHERE object = ? AND role = 2", o)
		if err != nil {
			return err
		}
		list, err := scanPoints(rows, &s.cfg)
		if err != nil {
			return err
		}
		for _, p := range list {
			wanted[p.id] = true
			cells[cellOf(p.ra, p.dec)] = true
		}
	}
	var seeds []*point
	for cell := range cells {
		points, err := w.sky.cell(cell)
		if err != nil {
			return err
		}
		for _, p := range points {
			if wanted[p.id] {
				seeds = append(seeds, p)
			}
		}
	}
	return w.settle(seeds, nil, gone)
}
