package catalog

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
)

// Finding is something wrong in a catalogue.
type Finding struct {
	Place   string // table and key
	Problem string // what was found and expected
	Remedy  string
}

func (f Finding) String() string { return f.Place + ": " + f.Problem + ": " + f.Remedy }

const (
	remedyFile    = "restore a copy, or move the file away and add the candidate files again"
	remedyFrame   = "run the frame again"
	remedyRebuild = "nightsift catalog rebuild"
)

// most is the largest number of findings of one sort.
const most = 20

// Check tests the whole catalogue and returns all that is wrong with it:
// the file's structure, references between tables, counts, and whether the
// objects are those that their candidates form. It changes nothing and shows
// one state of the catalogue. The error says that the check could not be done.
func (s *Store) Check(ctx context.Context) ([]Finding, error) {
	tx, err := s.snapshot(ctx)
	if err != nil {
		return nil, s.explain(err)
	}
	defer tx.Rollback()
	var found []Finding

	type question struct{ query, problem, remedy string }
	var questions []question
	if !s.server { // a server checks its files and references itself
		structure, err := texts(ctx, tx, fmt.Sprintf("PRAGMA integrity_check(%d)", most))
		if err != nil {
			return nil, s.explain(err)
		}
		if !slices.Equal(structure, []string{"ok"}) {
			for _, t := range structure {
				found = append(found, Finding{"file " + s.path, t, remedyFile})
			}
			return found, nil // nothing read from it can be trusted
		}
		questions = append(questions, question{`SELECT 'table ' || "table" || ' row ' || coalesce(rowid, '') || ' refers to ' || parent FROM pragma_foreign_key_check LIMIT 20`,
			"the row referred to is missing", remedyFile})
	}
	for _, c := range append(questions, []question{
		{`SELECT 'frame ' || f.frame FROM frames f WHERE candidates <> (SELECT count(*) FROM candidates c WHERE c.frame = f.frame) ORDER BY frame LIMIT 20`,
			"the number of candidates differs from the count of its rows", remedyFrame},
		{`SELECT 'candidate ' || candidate_id FROM candidates WHERE cell IS NULL AND (role > 0 OR object IS NOT NULL) LIMIT 20`,
			"has a part in objects but no place on the sky", remedyRebuild},
		{`SELECT 'candidate ' || candidate_id FROM candidates WHERE role = 0 AND object IS NOT NULL LIMIT 20`,
			"belongs to an object but may not take part", remedyRebuild},
		{`SELECT 'name ' || names.name FROM names JOIN objects USING (name) LIMIT 20`,
			"is both a former name and one in use", remedyRebuild},
		{`SELECT 'object ' || name FROM objects WHERE id NOT IN (SELECT object FROM candidates WHERE object IS NOT NULL) LIMIT 20`,
			"has no detection", remedyRebuild},
		{`SELECT 'label ' || id || ' of candidate ' || candidate_id FROM labels
			WHERE attached IS NOT NULL AND attached NOT IN (SELECT candidate_id FROM candidates) LIMIT 20`,
			"is attached to a candidate that is missing", remedyFrame},
		{`SELECT 'decision ' || decision || ' about candidate ' || candidate_id FROM decision_members
			WHERE attached IS NOT NULL AND attached NOT IN (SELECT candidate_id FROM candidates) LIMIT 20`,
			"is attached to a candidate that is missing", remedyFrame},
		{`SELECT 'remark ' || id || ' on object ' || name FROM remarks
			WHERE object IS NOT NULL AND object NOT IN (SELECT id FROM objects) LIMIT 20`,
			"is attached to an object that is missing", remedyRebuild},
	}...) {
		places, err := texts(ctx, tx, c.query)
		if err != nil {
			return nil, s.explain(err)
		}
		for _, p := range places {
			found = append(found, Finding{p, c.problem, c.remedy})
		}
	}
	more, err := s.checkObjects(ctx, tx)
	return append(found, more...), s.explain(err)
}

func texts(ctx context.Context, tx *sql.Tx, query string, values ...any) ([]string, error) {
	rows, err := tx.QueryContext(ctx, query, values...)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var list []string
	for rows.Next() {
		var t string
		if err := rows.Scan(&t); err != nil {
			return nil, err
		}
		list = append(list, t)
	}
	return list, rows.Err()
}

// checkObjects forms the objects again, from all candidates at once, and
// compares with the tables.
func (s *Store) checkObjects(ctx context.Context, tx *sql.Tx) ([]Finding, error) {
	var settings string
	err := tx.QueryRowContext(ctx, "SELECT value FROM settings WHERE name = 'association'").Scan(&settings)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return nil, err
	}
	if settings != s.cfg.String() {
		return []Finding{{"objects", fmt.Sprintf("formed with other settings (%s) than those in use (%s)", settings, &s.cfg),
			"open the catalogue for writing with the settings in use; that forms them anew"}}, nil
	}
	w := &worker{ctx: ctx, tx: tx, cfg: &s.cfg, limit: s.cfg.limit()}
	if w.by, err = loadDecisions(ctx, tx, &s.cfg); err != nil {
		return nil, err
	}
	w.sky = sky{cells: map[int64][]*point{}, reach: s.cfg.reach(), limit: w.limit, by: w.by}
	seeds, joiners, err := w.loadAll()
	if err != nil {
		return nil, err
	}
	var found []Finding
	report := func(place, format string, values ...any) {
		found = append(found, Finding{place, fmt.Sprintf(format, values...), remedyRebuild})
	}

	stored := map[int64]Object{}
	rows, err := tx.QueryContext(ctx, objectQuery)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	for rows.Next() {
		o, err := scanObject(rows)
		if err != nil {
			return nil, err
		}
		stored[o.id] = o
	}
	if err := errors.Join(rows.Err(), rows.Close()); err != nil {
		return nil, err
	}

	places := map[int64][]spot{} // by cell, for the joiners
	claimed := map[int64]bool{}
	for _, seed := range seeds {
		if seed.visited {
			continue
		}
		component, err := w.sky.component(seed)
		if err != nil {
			return nil, err
		}
		for _, c := range divide(component, w.limit, w.by) {
			if len(found) > most {
				return found, nil
			}
			id := c.members[0].object
			o, ok := stored[id]
			if !ok {
				report("candidate "+c.members[0].id, "forms no object, expected one")
				continue
			}
			place := "object " + o.Name
			if claimed[id] {
				report(place, "found one object, expected two: candidate %s founds another", c.members[0].id)
				continue
			}
			claimed[id] = true
			for _, p := range c.members {
				if p.object != id {
					report(place, "candidate %s is not among its detections, expected it there", p.id)
				}
			}
			ra, dec := c.at.position()
			if d := separation(c.at, unit(o.RA, o.Dec)); d > 1e-5 {
				report(place, "found it at %.7f %+.7f, expected %.7f %+.7f", o.RA, o.Dec, ra, dec)
			}
			if o.Founder != c.members[0].id {
				report(place, "found the founder %s, expected %s", o.Founder, c.members[0].id)
			}
			cell := cellOf(ra, dec)
			places[cell] = append(places[cell], spot{id, o.Name, o.RA, o.Dec, unit(o.RA, o.Dec), covariance{o.RAErr * o.RAErr, o.DecErr * o.DecErr, o.covariance}})
		}
	}
	for id, o := range stored {
		if !claimed[id] && len(found) <= most {
			report("object "+o.Name, "nothing forms it")
		}
	}
	for _, p := range joiners {
		var near []spot
		for _, r := range cone(nil, p.ra, p.dec, w.sky.reach) {
			for n := r.from; n <= r.to; n++ {
				near = append(near, places[n]...)
			}
		}
		if want := bestSpot(p, near, w.limit); want != p.object && len(found) <= most {
			report("candidate "+p.id, "found with object %q, expected %q", stored[p.object].Name, stored[want].Name)
		}
	}
	read, err := tx.PrepareContext(ctx, summaryQuery)
	if err != nil {
		return nil, err
	}
	defer read.Close()
	for id, o := range stored {
		if len(found) > most {
			break
		}
		m, err := summarise(ctx, read, id)
		if err != nil {
			return nil, err
		}
		var wrong []string
		same := func(name string, ok bool) {
			if !ok {
				wrong = append(wrong, name)
			}
		}
		eq := func(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }
		same("kind", string(o.Kind) == m.kind)
		same("real_probability", eq(o.RealProbability, m.probability))
		same("detections", o.Detections == m.detections)
		same("nights", o.Nights == m.nights)
		same("first_mjd", eq(o.FirstMJD, m.firstMJD))
		same("last_mjd", eq(o.LastMJD, m.lastMJD))
		same("first_night", o.FirstNight == m.firstNight)
		same("last_night", o.LastNight == m.last)
		same("peak_mag", eq(o.PeakMag, m.peakMag))
		same("peak_mjd", eq(o.PeakMJD, m.peakMJD))
		same("peak_significance", eq(o.PeakSignificance, m.peakSignificance))
		same("filters", o.Filters == m.filters)
		if len(wrong) > 0 {
			report("object "+o.Name, "%s not as its detections say", strings.Join(wrong, ", "))
		}
	}
	slices.SortFunc(found, func(a, b Finding) int { return strings.Compare(a.String(), b.String()) })
	return found, nil
}
