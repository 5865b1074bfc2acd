package catalog

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/detect"
	"nightsift/internal/outside"
)

// Every format of every table, read by others, holds the rows of the CSV: FITS,
// VOTable and ECSV by astropy, VOTable by GAVO's library as well and by
// xmllint against the schema of version 1.4, JSON by Python, Parquet by a reader
// of the published format (testdata/parquet.py) and, where it is installed, by
// pyarrow. The CSV in turn is compared with the database by Python's sqlite3.
func TestExportsReadElsewhere(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	s := newStore(t)
	inv := survey(13, 5, 20, 30, 120, -10)
	inv.frames[2].rec.Detail = `a "quoted", comma; <tag> & ünïcode, and two
lines`
	inv.frames[2].candidates[0].Flux = -1.5e-300
	inv.frames[2].candidates[1].Flux = 1e25
	for i := range inv.frames {
		inv.frames[i].rec.SetWCS(pointing{ra: 120, dec: -10, width: 2000, height: 1500}, 2000, 1500)
	}
	addAll(t, s, inv.frames)
	bad := NewFrameRecord("zz", Failed)
	if err := s.AddFrame(ctx, bad, nil); err != nil {
		t.Fatal(err)
	}
	objects, err := s.Objects(ctx, ObjectQuery{MinNights: 2})
	if err != nil || len(objects) == 0 {
		t.Fatal(len(objects), err)
	}
	if err := s.SetState(ctx, objects[0].Name, Remark{State: StateWatched, Author: "Ada", Time: at(1)}); err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	for _, table := range Exports {
		sheet, err := s.Select(ctx, Selection{Table: table})
		if err != nil {
			t.Fatal(err)
		}
		for _, f := range Formats {
			path := filepath.Join(dir, table+"."+f.Name)
			if err := f.Write(path, sheet); err != nil {
				t.Fatal(err)
			}
			first, _ := os.ReadFile(path)
			if err := s.Export(ctx, table, f.Name, path); err != nil {
				t.Fatal(err)
			}
			if again, _ := os.ReadFile(path); !bytes.Equal(first, again) {
				t.Errorf("%s: a second export differs", path)
			}
		}
		if err := Formats[0].Write(filepath.Join(dir, table+".columns"), sheet.Describe()); err != nil {
			t.Fatal(err)
		}
	}
	words, err := json.Marshal(descriptors)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "descriptors.json"), words, 0o644); err != nil {
		t.Fatal(err)
	}
	script, err := os.ReadFile("testdata/readexports.py")
	if err != nil {
		t.Fatal(err)
	}
	out := outside.Python(t, string(script), dir, s.Path(), "testdata")
	var result map[string]map[string]int
	if err := json.Unmarshal(out, &result); err != nil {
		t.Fatal(err, string(out))
	}
	t.Log(string(out))
	for _, table := range Exports {
		n := result[table]
		if n["rows"] < 6 || n["nulls"] == 0 && table != "objects" {
			t.Errorf("%s: %v compared: too few to show anything", table, n)
		}
		for _, reader := range []string{"fits", "votable", "gavo", "ecsv", "parquet", "jsonl"} {
			if n[reader] < 100 || n[reader] != n["rows"]*n["columns"] {
				t.Errorf("%s: %d values compared by %s, want %d", table, n[reader], reader, n["rows"]*n["columns"])
			}
		}
	}
	for _, table := range Exports {
		report := outside.Command(t, "fitsverify", filepath.Join(dir, table+".fits"))
		if !strings.Contains(string(report), "0 warning(s) and 0 error(s)") {
			t.Errorf("fitsverify %s:\n%s", table, report)
		}
	}
}

// Filters of exports choose what the views say.
func TestSelect(t *testing.T) { onEachStore(t, testSelect) }

func testSelect(t *testing.T) {
	s := newStore(t)
	inv := survey(13, 6, 10, 10, 120, -10)
	for i := range inv.frames {
		inv.frames[i].rec.SetWCS(pointing{ra: 120, dec: -10, width: 2000, height: 1500}, 2000, 1500)
		inv.frames[i].rec.MagLimit5Sigma = 20 + float64(i)
		if i >= 4 {
			inv.frames[i].rec.Field = "B2"
		}
	}
	inv.frames[0].candidates = nil // searched, nothing found
	addAll(t, s, inv.frames)
	all, err := s.Objects(ctx, ObjectQuery{MinNights: 2})
	if err != nil || len(all) < 2 {
		t.Fatal(len(all), err)
	}
	o := all[0]
	if err := s.SetState(ctx, o.Name, Remark{State: StateWatched, Author: "Ada", Time: at(1)}); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		q      Selection
		column string
		good   func(Selection, string) bool
	}{
		{Selection{Table: "candidates", Night: "2031-03-02"}, "night", func(q Selection, v string) bool { return v == q.Night }},
		{Selection{Table: "candidates", Field: "B2"}, "field", func(q Selection, v string) bool { return v == q.Field }},
		{Selection{Table: "candidates", State: StateWatched}, "object", func(q Selection, v string) bool { return v == o.Name }},
		{Selection{Table: "candidates", Condition: "x_px > 1000"}, "x_px", func(q Selection, v string) bool { return len(v) >= 4 }},
		{Selection{Table: "objects", State: StateWatched}, "object", func(q Selection, v string) bool { return v == o.Name }},
		{Selection{Table: "objects", Field: "A1", Condition: "nights > 1"}, "nights", func(q Selection, v string) bool { return v != "1" }},
		{Selection{Table: "objects", Night: "2031-03-03"}, "last_night", func(q Selection, v string) bool { return v >= q.Night }},
		{Selection{Table: "frames", Night: "2031-03-01"}, "night", func(q Selection, v string) bool { return v == q.Night }},
		{Selection{Table: "frames", Field: "B2", Condition: "filter = 'g'"}, "filter", func(q Selection, v string) bool { return v == "g" }},
		{Selection{Table: "lightcurve", State: StateWatched}, "object", func(q Selection, v string) bool { return v == o.Name }},
		{Selection{Table: "lightcurve", Object: o.Founder}, "object", func(q Selection, v string) bool { return v == o.Name }},
	} {
		got, err := s.Select(ctx, c.q)
		if err != nil {
			t.Errorf("%+v: %v", c.q, err)
			continue
		}
		whole, err := s.Select(ctx, Selection{Table: c.q.Table})
		if err != nil {
			t.Fatal(err)
		}
		if got.Rows == 0 || got.Rows >= whole.Rows {
			t.Errorf("%+v: %d rows of %d", c.q, got.Rows, whole.Rows)
		}
		k := slices.IndexFunc(got.Columns, func(x SheetColumn) bool { return x.Name == c.column })
		for row := range got.Rows {
			if v := field(got.Columns[k].value(row)); !c.good(c.q, v) {
				t.Errorf("%+v: row %d has %s = %s", c.q, row, c.column, v)
			}
		}
	}
	// A light curve has a row for each frame that looked, by time; the first
	// found nothing and tells its limit.
	curve, err := s.Select(ctx, Selection{Table: "lightcurve", Object: o.Name})
	if err != nil {
		t.Fatal(err)
	}
	column := func(name string) *SheetColumn {
		return &curve.Columns[slices.IndexFunc(curve.Columns, func(x SheetColumn) bool { return x.Name == name })]
	}
	if curve.Rows != 6 || !slices.IsSorted(column("mid_mjd").Real) {
		t.Fatalf("%d rows at %v, want 6 by time", curve.Rows, column("mid_mjd").Real)
	}
	if column("detected").Integer[0] != 0 || column("mag_limit").Real[0] != 20 || !math.IsNaN(column("mag").Real[0]) || column("candidate_id").Text[0] != "" {
		t.Errorf("first frame: detected %d, limit %g, magnitude %g", column("detected").Integer[0], column("mag_limit").Real[0], column("mag").Real[0])
	}
	detections := 0
	for _, d := range column("detected").Integer {
		detections += int(d)
	}
	if detections != o.Detections {
		t.Errorf("%d detections, want %d", detections, o.Detections)
	}
	for _, q := range []Selection{
		{Table: "dogs"}, {Table: "frames", State: StateNew}, {Table: "frames", MinProbability: 0.5}, {Table: "objects", Object: "x"},
		{Table: "lightcurve", Object: o.Name, Night: "2031-03-01"}, {Table: "objects", State: "asleep"}, {Table: "objects", MinProbability: 2},
		{Table: "objects", Condition: "nights >"}, {Table: "objects", Condition: "1 = 1; DROP TABLE objects"}, {Table: "lightcurve", Object: "nobody"},
	} {
		if _, err := s.Select(ctx, q); err == nil {
			t.Errorf("%+v was accepted", q)
		}
	}
}

func TestRunTables(t *testing.T) {
	inv := survey(14, 2, 5, 5, 1, 1)
	dir := t.TempDir()
	list := inv.frames[0].candidates
	if err := WriteCandidatesCSV(filepath.Join(dir, "candidates.csv"), list); err != nil {
		t.Fatal(err)
	}
	bad := NewFrameRecord("empty", SetAside)
	bad.Reason = "no_data"
	if err := WriteFramesCSV(filepath.Join(dir, "frames.csv"), []FrameRecord{inv.frames[1].rec, bad, inv.frames[0].rec}); err != nil {
		t.Fatal(err)
	}
	read := func(name string) [][]string {
		f, err := os.Open(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		defer f.Close()
		rows, err := csv.NewReader(f).ReadAll()
		if err != nil {
			t.Fatal(err)
		}
		return rows
	}
	rows := read("candidates.csv")
	if len(rows) != len(list)+1 || len(rows[0]) != len(detect.Columns) {
		t.Fatalf("%d lines of %d columns", len(rows), len(rows[0]))
	}
	for i, row := range rows[1:] {
		if row[0] != list[i].ID || row[slices.Index(rows[0], "flux")] != fmt.Sprint(list[i].Flux) {
			t.Errorf("line %d: %v", i+2, row)
		}
		if mag := row[slices.Index(rows[0], "mag")]; (mag == "") != math.IsNaN(list[i].Mag) {
			t.Errorf("line %d: mag %q of %g", i+2, mag, list[i].Mag)
		}
	}
	rows = read("frames.csv")
	if got := strings.Join(rows[2], ","); got != "empty,set_aside,no_data,,,,,,,,,,,0,,,,,0," {
		t.Errorf("frame set aside: %s", got)
	}
	if rows[1][0] != "frame001" || rows[3][0] != "frame000" || len(rows[0]) != tableColumns {
		t.Errorf("frames: %v", rows)
	}
	// Empty tables still have their columns.
	for _, f := range Formats {
		path := filepath.Join(dir, "none."+f.Name)
		if err := f.Write(path, CandidateSheet(nil)); err != nil {
			t.Errorf("%s: %v", f.Name, err)
		} else if b, _ := os.ReadFile(path); len(b) == 0 && f.Name != "jsonl" {
			t.Errorf("%s: an empty table gave an empty file", f.Name)
		}
	}
	s := newStore(t)
	if err := s.Export(ctx, "candidates", "cuneiform", filepath.Join(dir, "x")); err == nil || !strings.Contains(err.Error(), "csv") {
		t.Errorf("unknown format: %v", err)
	}
	if err := s.Export(ctx, "dogs", "csv", filepath.Join(dir, "x")); err == nil || !strings.Contains(err.Error(), "objects") {
		t.Errorf("unknown table: %v", err)
	}
}
