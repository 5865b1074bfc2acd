package catalog

import (
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

func TestWhere(t *testing.T) { onEachStore(t, testWhere) }

func testWhere(t *testing.T) {
	s := newStore(t)
	inv := survey(14, 6, 30, 30, 10, -45)
	addAll(t, s, inv.frames)
	first := inv.frames[0].candidates[0].ID
	for k, v := range []Verdict{Bogus, Real} {
		if err := s.AddLabel(ctx, Label{Candidate: first, Verdict: v, Reviewer: "Ada", Time: at(k)}); err != nil {
			t.Fatal(err)
		}
	}
	objects, err := s.Objects(ctx, ObjectQuery{MinNights: 2})
	if err != nil || len(objects) == 0 {
		t.Fatal(len(objects), err)
	}
	if err := s.SetState(ctx, objects[0].Name, Remark{State: StateWatched, Author: "Ada", Time: at(1)}); err != nil {
		t.Fatal(err)
	}
	// Every view gives its columns, and without a condition the rows of the
	// sheet of that table.
	for _, v := range Views {
		got, err := s.Where(ctx, v.Name, "")
		if err != nil {
			t.Fatal(err)
		}
		want, err := s.Sheet(ctx, strings.TrimPrefix(v.Name, "view_"))
		if err != nil {
			t.Fatal(err)
		}
		if got.Rows != want.Rows || got.Rows == 0 || got.Name != want.Name {
			t.Errorf("%s: %d rows, want %d", v.Name, got.Rows, want.Rows)
		}
		for _, c := range want.Columns {
			k := slices.IndexFunc(got.Columns, func(x SheetColumn) bool { return x.Name == c.Name })
			if k < 0 {
				t.Errorf("%s has no column %s", v.Name, c.Name)
				continue
			}
			for row := range want.Rows {
				if a, b := field(got.Columns[k].value(row)), field(c.value(row)); a != b {
					t.Errorf("%s: row %d: %s is %s, want %s", v.Name, row, c.Name, a, b)
					break
				}
			}
		}
	}
	for _, q := range []struct {
		view, condition string
		rows            int
	}{
		{"view_objects", "nights >= 2", len(objects)},
		{"view_objects", "state = 'watched' AND remarks = 1 AND field = 'A1'", 1},
		{"view_candidates", "verdict = 'real' AND verdicts = 2", 1},
		{"view_candidates", "object IN (SELECT object FROM view_objects WHERE state = 'watched') AND object_state <> 'watched'", 0},
		{"view_candidates", "kind = 'it''s (not) one' OR 1 = 0", 0},
		{"view_frames", "night = '2031-03-01'", 2},
	} {
		if got, err := s.Where(ctx, q.view, q.condition); err != nil || got.Rows != q.rows {
			t.Errorf("%s where %s: %v, %v, want %d rows", q.view, q.condition, got, err, q.rows)
		}
	}
	// What a condition must not do.
	want := state(t, s)
	other := filepath.Join(t.TempDir(), "other.sqlite")
	for _, condition := range []string{
		" ", "1 = 1; DELETE FROM frames", "1 = 1) ; DELETE FROM frames; --", "1 = 1) OR (1 = 1", "mag <", "nothing = 1", "'", "(1 = 1", "x = 'a\\'",
		"1 = 1 -- ", "1 = 1 /* ", "$$ = 1", "1 = ?",
		"1 = 1) UNION SELECT * FROM frames WHERE (1 = 1",
		"EXISTS (DELETE FROM frames RETURNING 1)", "load_extension('x') IS NULL",
		"1); ATTACH '" + other + "' AS o; CREATE TABLE o.x (y); SELECT (1",
	} {
		if got, err := s.Where(ctx, "view_frames", condition); err == nil {
			t.Errorf("%q: %d rows, want an error", condition, got.Rows)
		}
	}
	if got := state(t, s); got != want {
		t.Errorf("a condition changed the catalogue: %s", difference(want, got))
	}
	if _, err := os.Stat(other); err == nil {
		t.Error("a condition wrote a file")
	}
	if _, err := s.Where(ctx, "labels", ""); err == nil {
		t.Error("a table is no view")
	}
}
