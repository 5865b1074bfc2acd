package catalog

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"
)

// State is where an object stands in its life, as people see it.
type State string

// The states. An object begins as new: nobody has decided anything.
const (
	StateNew       State = "new"
	StateWatched   State = "watched"   // of interest, to be looked at again
	StateConfirmed State = "confirmed" // what it is has been settled
	StateRejected  State = "rejected"  // nothing real, or of no interest
	StateGone      State = "gone"      // faded: no longer expected on new frames
)

// States lists every state.
var States = []State{StateNew, StateWatched, StateConfirmed, StateRejected, StateGone}

// check refuses what is neither a state nor empty.
func (s State) check() error {
	if s != "" && !slices.Contains(States, s) {
		return fmt.Errorf("no state %q: expected one of %s", s, listOf(States))
	}
	return nil
}

// Remark is what somebody said about an object: a state, a comment, or both.
type Remark struct {
	State   State // empty: unchanged
	Comment string
	Author  string
	Time    time.Time // UTC, kept to the millisecond
}

// queryer is a database or a transaction.
type queryer interface {
	QueryContext(ctx context.Context, query string, values ...any) (*sql.Rows, error)
	QueryRowContext(ctx context.Context, query string, values ...any) *sql.Row
}

// findObject returns the object of a name, of a former name, or with a
// candidate of this identifier.
func findObject(ctx context.Context, q queryer, name string) (Object, error) {
	o, err := scanObject(q.QueryRowContext(ctx, objectQuery+` WHERE id = coalesce(
		(SELECT id FROM objects WHERE name = ?), (SELECT object FROM names WHERE name = ?),
		(SELECT object FROM candidates WHERE candidate_id = ?))`, name, name, name))
	if errors.Is(err, sql.ErrNoRows) {
		return o, fmt.Errorf("object %s: %w", name, ErrNotFound)
	}
	return o, err
}

// SetState gives an object a state; r.Comment may say why. The object is named
// as for Object. The states it had stay in the list of remarks.
func (s *Store) SetState(ctx context.Context, object string, r Remark) error {
	if !slices.Contains(States, r.State) {
		return fmt.Errorf("object %s: found the state %q, expected one of %s", object, r.State, listOf(States))
	}
	return s.remark(ctx, object, r)
}

// AddComment stores a comment on an object, which is named as for Object.
func (s *Store) AddComment(ctx context.Context, object string, r Remark) error {
	if strings.TrimSpace(r.Comment) == "" || r.State != "" {
		return fmt.Errorf("object %s: found no comment, expected a text", object)
	}
	return s.remark(ctx, object, r)
}

func (s *Store) remark(ctx context.Context, object string, r Remark) error {
	err := person("author", r.Author, r.Time)
	if strings.ContainsRune(r.Comment, 0) {
		err = errors.Join(err, errors.New("found a zero byte in the comment, expected text"))
	}
	if err != nil {
		return fmt.Errorf("object %s: %w", object, err)
	}
	at := r.Time.UTC().Format(timeForm)
	return s.update(ctx, func(tx *sql.Tx) error {
		o, err := findObject(ctx, tx, object)
		if err != nil {
			return err
		}
		_, err = tx.ExecContext(ctx, `INSERT INTO remarks (id, object, name, ra_deg, dec_deg, cell, state, comment, author, time)
			VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?) ON CONFLICT (id) DO NOTHING`,
			digest("remark", o.Name, r.Author, at, string(r.State), r.Comment), o.id, o.Name, o.RA, o.Dec, cellOf(o.RA, o.Dec),
			nullText(string(r.State)), nullText(r.Comment), r.Author, at)
		return err
	})
}

// Remarks lists what was said about an object, in order of time.
func (s *Store) Remarks(ctx context.Context, o Object) ([]Remark, error) {
	rows, err := s.readers.QueryContext(ctx, `SELECT state, comment, author, time FROM remarks
		WHERE object = (SELECT id FROM objects WHERE name = ?) ORDER BY time, id`, o.Name)
	if err != nil {
		return nil, s.explain(err)
	}
	defer rows.Close()
	var list []Remark
	for rows.Next() {
		var r Remark
		var state, comment sql.NullString
		var at string
		if err := rows.Scan(&state, &comment, &r.Author, &at); err != nil {
			return nil, s.explain(err)
		}
		r.State, r.Comment = State(state.String), comment.String
		if r.Time, err = time.Parse(timeForm, at); err != nil {
			return nil, s.explain(err)
		}
		list = append(list, r)
	}
	return list, s.explain(rows.Err())
}

// adopt gives remarks whose object went to a new object at their place: within
// the limit of the object's error and the floor.
func (w *worker) adopt(object int64, at vector, cov covariance) error {
	ra, dec := at.position()
	type orphan struct {
		id      string
		ra, dec float64
	}
	var list []orphan
	for _, r := range cone(nil, ra, dec, w.sky.reach) {
		err := func() error {
			rows, err := w.tx.QueryContext(w.ctx, "SELECT id, ra_deg, dec_deg FROM remarks WHERE object IS NULL AND cell BETWEEN ? AND ?", r.from, r.to)
			if err != nil {
				return err
			}
			defer rows.Close()
			for rows.Next() {
				var o orphan
				if err := rows.Scan(&o.id, &o.ra, &o.dec); err != nil {
					return err
				}
				list = append(list, o)
			}
			return rows.Err()
		}()
		if err != nil {
			return err
		}
	}
	floor := w.cfg.ErrorFloor * w.cfg.ErrorFloor
	plane := newPlane(ra, dec)
	for _, o := range list {
		x, y := plane.offset(unit(o.ra, o.dec))
		if (covariance{2*cov.xx + floor, 2*cov.yy + floor, 2 * cov.xy}).distance(x, y) > w.limit {
			continue
		}
		if _, err := w.tx.ExecContext(w.ctx, "UPDATE remarks SET object = ? WHERE id = ?", object, o.id); err != nil {
			return err
		}
	}
	return nil
}

func listOf[T ~string](list []T) string {
	names := make([]string, len(list))
	for i, v := range list {
		names[i] = string(v)
	}
	return strings.Join(names, ", ")
}
