package catalog

import (
	"cmp"
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"nightsift/detect"
)

// Verdict is what a reviewer says of a candidate.
type Verdict string

// The verdicts.
const (
	Real   Verdict = "real"
	Bogus  Verdict = "bogus"
	Unsure Verdict = "unsure"
)

// Label is a reviewer's verdict on a candidate. It outlives the candidate: when
// its frame is processed again, it goes to the candidate of the same identifier
// or else to the one at the same place on the frame.
type Label struct {
	Candidate string // identifier of the candidate at present; empty if none is there any more
	Given     string // identifier for which the verdict was given

	Frame        string
	X, Y         float64 // px, FITS convention, of the candidate judged
	RA, Dec      float64 // deg; NaN if unknown
	Significance float64 // of the candidate judged

	Verdict  Verdict
	Reviewer string
	Time     time.Time // UTC, kept to the millisecond
	Comment  string
}

// timeForm sorts as text in order of time.
const timeForm = "2006-01-02T15:04:05.000Z"

// digest names a row by what it says, so that writing it twice is writing it
// once.
func digest(parts ...string) string {
	h := sha256.Sum256([]byte(strings.Join(parts, "\x00")))
	return hex.EncodeToString(h[:12])
}

// person checks the name of who says something, and when.
func person(role, name string, at time.Time) error {
	if strings.TrimSpace(name) == "" || strings.ContainsAny(name, "\x00\n\r\t") {
		return fmt.Errorf("found the %s %q, expected a name without line breaks: say who it is", role, name)
	}
	if at.Year() < 1900 || at.Year() > 9999 {
		return fmt.Errorf("found the time %s of %s %s, expected the date of the decision", at, role, name)
	}
	return nil
}

// AddLabel stores a verdict. l.Candidate names the candidate, which must be in
// the catalogue (else the error is ErrNotFound); Verdict, Reviewer and Time must
// be set, Comment may be; the rest is taken from the candidate. Earlier verdicts
// of the same reviewer stay in the table, but the latest one counts. The same
// label twice is stored once.
func (s *Store) AddLabel(ctx context.Context, l Label) error {
	err := person("reviewer", l.Reviewer, l.Time)
	switch l.Verdict {
	case Real, Bogus, Unsure:
	default:
		err = errors.Join(err, fmt.Errorf("found verdict %q, expected %s, %s or %s", l.Verdict, Real, Bogus, Unsure))
	}
	if strings.ContainsRune(l.Comment, 0) {
		err = errors.Join(err, errors.New("found a zero byte in the comment, expected text"))
	}
	if err != nil {
		return fmt.Errorf("label of candidate %s: %w", l.Candidate, err)
	}
	at := l.Time.UTC().Format(timeForm)
	id := digest("label", l.Candidate, l.Reviewer, at, string(l.Verdict), l.Comment)
	return s.update(ctx, func(tx *sql.Tx) error {
		result, err := tx.ExecContext(ctx, `INSERT INTO labels
			(id, candidate_id, attached, frame, x_px, y_px, ra_deg, dec_deg, significance, verdict, reviewer, time, comment)
			SELECT ?, candidate_id, candidate_id, frame, x_px, y_px, ra_deg, dec_deg, significance, ?, ?, ?, ?
			FROM candidates WHERE candidate_id = ? ON CONFLICT (id) DO NOTHING`,
			id, string(l.Verdict), l.Reviewer, at, nullText(l.Comment), l.Candidate)
		if err != nil {
			return err
		}
		if n, err := result.RowsAffected(); n > 0 || err != nil {
			return err
		}
		var there bool
		if err := tx.QueryRowContext(ctx, "SELECT count(*) > 0 FROM candidates WHERE candidate_id = ?", l.Candidate).Scan(&there); err != nil {
			return err
		}
		if !there {
			return fmt.Errorf("candidate %s: %w", l.Candidate, ErrNotFound)
		}
		return nil
	})
}

// Labels returns the labels that count: of each reviewer and candidate the
// latest, in order of time. Those that found no candidate after their frame was
// processed again are among them, with an empty Candidate.
func (s *Store) Labels(ctx context.Context) ([]Label, error) {
	rows, err := s.readers.QueryContext(ctx, `SELECT candidate_id, attached, frame, x_px, y_px, ra_deg, dec_deg, significance, verdict, reviewer, time, comment
		FROM labels ORDER BY time, id`)
	if err != nil {
		return nil, s.explain(err)
	}
	defer rows.Close()
	type key struct{ candidate, reviewer string }
	latest := map[key]int{}
	var list []Label
	for rows.Next() {
		var l Label
		var verdict, at string
		var attached, comment sql.NullString
		var v [5]sql.NullFloat64
		if err := rows.Scan(&l.Given, &attached, &l.Frame, &v[0], &v[1], &v[2], &v[3], &v[4], &verdict, &l.Reviewer, &at, &comment); err != nil {
			return nil, s.explain(err)
		}
		for i, to := range []*float64{&l.X, &l.Y, &l.RA, &l.Dec, &l.Significance} {
			*to = math.NaN()
			if v[i].Valid {
				*to = v[i].Float64
			}
		}
		l.Candidate, l.Verdict, l.Comment = attached.String, Verdict(verdict), comment.String
		if l.Time, err = time.Parse(timeForm, at); err != nil {
			return nil, s.explain(fmt.Errorf("labels: candidate %s: %w", l.Given, err))
		}
		k := key{cmp.Or(l.Candidate, "\x00"+l.Given), l.Reviewer}
		if old, ok := latest[k]; ok {
			list[old].Reviewer = "" // overruled
		}
		latest[k] = len(list)
		list = append(list, l)
	}
	list = slices.DeleteFunc(list, func(l Label) bool { return l.Reviewer == "" })
	return list, s.explain(rows.Err())
}

// detach loosens what was said about candidates of a frame that goes.
func detach(ctx context.Context, tx *sql.Tx, frame string) error {
	for _, table := range []string{"labels", "decision_members"} {
		if _, err := tx.ExecContext(ctx, "UPDATE "+table+" SET attached = NULL WHERE frame = ? AND attached IS NOT NULL", frame); err != nil {
			return err
		}
	}
	return nil
}

// said is a candidate of which something was said.
type said struct {
	id                 string
	x, y, significance float64
}

// sameSpot [px] is how far from its old place a candidate of another identifier
// may be to count as the same: half the width of a star, and not less than what
// a centroid moves by.
func sameSpot(rec *FrameRecord) float64 {
	if rec.FWHM > 3 {
		return rec.FWHM / 2
	}
	return 1.5
}

// reattach joins what was said about candidates of a frame to those that it has
// now: by identifier, else the nearest pairs first, each candidate once, if the
// sign of the change is the same.
func reattach(ctx context.Context, tx *sql.Tx, rec *FrameRecord, candidates []detect.Candidate) error {
	for _, table := range []string{"labels", "decision_members"} {
		list, err := saidOf(ctx, tx, table, rec.Frame)
		if err != nil {
			return err
		}
		for old, now := range successors(list, candidates, sameSpot(rec)) {
			if _, err := tx.ExecContext(ctx, "UPDATE "+table+" SET attached = ? WHERE frame = ? AND candidate_id = ?", now, rec.Frame, old); err != nil {
				return err
			}
		}
	}
	return nil
}

func saidOf(ctx context.Context, tx *sql.Tx, table, frame string) ([]said, error) {
	rows, err := tx.QueryContext(ctx, "SELECT DISTINCT candidate_id, x_px, y_px, significance FROM "+table+" WHERE frame = ? ORDER BY candidate_id", frame)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var list []said
	for rows.Next() {
		var s said
		var v [3]sql.NullFloat64
		if err := rows.Scan(&s.id, &v[0], &v[1], &v[2]); err != nil {
			return nil, err
		}
		for i, to := range []*float64{&s.x, &s.y, &s.significance} {
			*to = math.NaN()
			if v[i].Valid {
				*to = v[i].Float64
			}
		}
		if len(list) == 0 || list[len(list)-1].id != s.id {
			list = append(list, s)
		}
	}
	return list, rows.Err()
}

// successors maps old identifiers to present ones.
func successors(list []said, candidates []detect.Candidate, reach float64) map[string]string {
	if len(list) == 0 {
		return nil
	}
	out, taken, present := map[string]string{}, map[string]bool{}, map[string]bool{}
	for i := range candidates {
		present[candidates[i].ID] = true
	}
	for _, l := range list {
		if present[l.id] {
			out[l.id], taken[l.id] = l.id, true
		}
	}
	type pair struct {
		distance float64
		old, now string
	}
	var pairs []pair
	for _, l := range list {
		if out[l.id] != "" {
			continue
		}
		for i := range candidates {
			c := &candidates[i]
			d := math.Hypot(c.X-l.x, c.Y-l.y)
			if d <= reach && !(c.Significance*l.significance < 0) && !taken[c.ID] {
				pairs = append(pairs, pair{d, l.id, c.ID})
			}
		}
	}
	slices.SortFunc(pairs, func(a, b pair) int {
		return cmp.Or(cmp.Compare(a.distance, b.distance), cmp.Compare(a.old, b.old), cmp.Compare(a.now, b.now))
	})
	for _, p := range pairs {
		if out[p.old] == "" && !taken[p.now] {
			out[p.old], taken[p.now] = p.now, true
		}
	}
	return out
}
