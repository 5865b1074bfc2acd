package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/catalog"
)

func TestCatalogExports(t *testing.T) {
	dir, _ := newCatalogue(t)
	out := t.TempDir()
	in := func(code int, args ...string) (stdout, stderr string) {
		t.Helper()
		return expect(t, code, append(append([]string{"catalog"}, args...), "--survey", dir)...)
	}
	for _, what := range catalog.Exports {
		for _, f := range catalog.Formats {
			path := filepath.Join(out, what+"."+f.Name)
			in(0, "export", "--what", what, "--format", f.Name, "--out", path)
			written, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			if !f.Text {
				in(2, "export", "--what", what, "--format", f.Name)
				continue
			}
			if shown, _ := in(0, "export", "--what", what, "--format", f.Name); shown != string(written) {
				t.Errorf("%s %s: stdout and file differ", what, f.Name)
			}
		}
	}
	lines, _ := in(0, "export", "--format", "jsonl", "--night", "2027-01-02", "--min-probability", "0.5", "--where", "y_px > 200")
	var row map[string]any
	if err := json.Unmarshal([]byte(lines), &row); err != nil || row["candidate_id"] != "c11" {
		t.Errorf("%v: %s", err, lines)
	}
	curve, _ := in(0, "export", "--what", "lightcurve", "--object", "c01")
	if strings.Count(curve, "\n") != 4 || !strings.Contains(curve, "c21") || strings.Contains(curve, "c20") {
		t.Errorf("light curve:\n%s", curve)
	}
	if columns, _ := in(0, "export", "--what", "objects", "--describe"); !strings.Contains(columns, "ra_deg,real,deg,pos.eq.ra;meta.main,") {
		t.Errorf("columns:\n%s", columns)
	}
	// Tables that were added by hand have no footprints: nothing is claimed.
	none := filepath.Join(out, "none.json")
	if text, _ := in(0, "coverage", "--out", none, "--order", "8"); !strings.Contains(text, "3 more have no known footprint") {
		t.Errorf("coverage: %s", text)
	}
	if text, _ := os.ReadFile(none); string(text) != "{\"8\":[]}\n" {
		t.Errorf("coverage: %s", text)
	}
	if table, about := in(0, "depth", "150,2", "--mag", "19"); strings.Count(table, "\n") != 1 || !strings.Contains(about, "never searched") {
		t.Errorf("depth: %s %s", table, about)
	}
	event := filepath.Join(out, "event.xml")
	in(0, "alert", "c00", "--out", event, "--date", "2027-01-05T01:00:00", "--authority", "marrow-ridge.example", "--test")
	if text, _ := os.ReadFile(event); !strings.Contains(string(text), `ivorn="ivo://marrow-ridge.example/new-objects#J100000.00+020000.0-n3" role="test"`) {
		t.Errorf("alert:\n%s", text)
	}
	for _, args := range [][]string{
		{"export", "--format", "cuneiform"}, {"export", "--what", "dogs"}, {"export", "--what", "frames", "--state", "new"},
		{"coverage", "--out", "map.txt"}, {"coverage", "--out", "map.fits", "--order", "40"}, {"depth", "150,95"}, {"depth", "150,2", "--format", "fits"},
		{"alert", "c00"}, {"alert", "c00", "--out", event, "--date", "tomorrow"}, {"alert", "c00", "--out", event, "--authority", "a/b c"},
		{"alert", "c00", "--out", event, "--supersedes", "x"},
		{"stamp", "c00", "--out", "a.gif"}, {"stamp", "c00", "--out", "a.png", "--size", "999"}, {"stamp", "c00", "--out", "a.fits", "--north-up"},
	} {
		in(2, args...)
	}
	// The table has no stamps.
	if _, said := in(1, "stamp", "c00", "--out", filepath.Join(out, "a.png")); !strings.Contains(said, "no new stamp") {
		t.Errorf("stamp: %s", said)
	}
	if _, err := os.Stat(filepath.Join(out, "a.png")); err == nil {
		t.Error("a failed stamp left a file")
	}
}
