package catalog

import (
	"os"
	"path/filepath"
	"slices"
	"sync"
	"testing"
)

func TestBackupAndRestore(t *testing.T) { onEachStore(t, testBackupAndRestore) }

func testBackupAndRestore(t *testing.T) {
	s := newStore(t)
	inv := survey(15, 10, 20, 30, 200, 5)
	for k := range inv.frames[0].candidates { // with stamps
		inv.frames[0].candidates[k].StampNew = []float32{1, 2, float32(k)}
	}
	addAll(t, s, inv.frames[:4])
	id := inv.frames[0].candidates[0].ID
	if err := s.AddLabel(ctx, Label{Candidate: id, Verdict: Real, Reviewer: "Ada", Time: at(1)}); err != nil {
		t.Fatal(err)
	}
	objects, err := s.Objects(ctx, ObjectQuery{MinDetections: 2})
	if err != nil || len(objects) < 2 {
		t.Fatal(len(objects), err)
	}
	if err := s.SetState(ctx, objects[0].Name, Remark{State: StateGone, Author: "Ada", Time: at(1)}); err != nil {
		t.Fatal(err)
	}
	// While frames are added, every copy holds whole ones.
	path := filepath.Join(t.TempDir(), "copy.sqlite")
	var writing sync.WaitGroup
	writing.Go(func() {
		for _, n := range inv.frames[4:] {
			if err := s.AddFrame(ctx, n.rec, n.candidates); err != nil {
				t.Error(err)
			}
		}
	})
	for range 3 {
		if err := s.Backup(ctx, path); err != nil {
			t.Fatal(err)
		}
		c, err := OpenReadOnly(ctx, path, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		healthy(t, c)
		c.Close()
	}
	writing.Wait()
	if err := s.Backup(ctx, path); err != nil {
		t.Fatal(err)
	}
	want := state(t, s)
	same := func(step string, r *Store) {
		t.Helper()
		if got := state(t, r); got != want {
			t.Errorf("%s: %s", step, difference(want, got))
		}
		if l, err := r.Labels(ctx); err != nil || len(l) != 1 || l[0].Candidate != id {
			t.Errorf("%s: labels %v, %v", step, l, err)
		}
		if o, err := r.Object(ctx, objects[0].Name); err != nil || o.State != StateGone {
			t.Errorf("%s: %+v, %v", step, o, err)
		}
		if c, err := r.Candidate(ctx, id); err != nil || !slices.Equal(c.StampNew, []float32{1, 2, 0}) {
			t.Errorf("%s: stamp %v, %v", step, c.StampNew, err)
		}
		healthy(t, r)
	}
	c, err := OpenReadOnly(ctx, path, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	same("copy", c)
	c.Close()
	for _, k := range kinds { // onto either kind
		if k.name == "PostgreSQL" && os.Getenv(postgres) == "" {
			continue
		}
		r := open(t, k.make(t))
		if err := r.Restore(ctx, path); err != nil {
			t.Fatal(err)
		}
		same("restored on "+k.name, r)
		if err := r.Restore(ctx, path); err == nil {
			t.Error("restored onto a filled catalogue")
		}
		// And it goes on.
		addAll(t, r, inv.frames[:1])
		more := survey(16, 1, 10, 0, 20, 5).frames[0]
		more.rec.Frame = "later"
		for i := range more.candidates {
			more.candidates[i].ID, more.candidates[i].Frame = identifier("later", i), ""
		}
		addAll(t, r, []night{more})
		healthy(t, r)
	}
	if !s.server {
		if err := s.Backup(ctx, s.place); err == nil {
			t.Error("the catalogue was copied onto itself")
		}
	}
	if err := s.Backup(ctx, filepath.Join(t.TempDir(), "absent", "x")); err == nil {
		t.Error("a copy was written into a folder that is not there")
	}
	if list, _ := filepath.Glob(filepath.Join(filepath.Dir(path), ".*")); len(list) > 0 {
		t.Errorf("left behind: %v", list)
	}
	if err := open(t, newPlace(t)).Restore(ctx, filepath.Join(t.TempDir(), "none")); err == nil {
		t.Error("a missing backup was restored")
	}
}

// tables lists every table of the schema.
func TestBackupKnowsEveryTable(t *testing.T) {
	s := newStore(t)
	rows, err := s.readers.Query("SELECT name FROM sqlite_schema WHERE type = 'table'")
	if err != nil {
		t.Fatal(err)
	}
	defer rows.Close()
	n := 0
	for rows.Next() {
		var name string
		if err := rows.Scan(&name); err != nil {
			t.Fatal(err)
		}
		if n++; !slices.Contains(tables, name) {
			t.Errorf("table %s is not copied", name)
		}
	}
	if n != len(tables) {
		t.Errorf("%d tables, want %d", n, len(tables))
	}
}
