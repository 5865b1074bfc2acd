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

// CSV, FITS and the database itself, read by the csv and sqlite3 modules of
// Python and by astropy.io.fits, hold the same rows.
func TestExportsReadElsewhere(t *testing.T) {
	s := newStore(t)
	inv := survey(13, 5, 20, 30, 120, -10)
	inv.frames[2].rec.Detail = `a "quoted", comma; and two
lines`
	inv.frames[2].candidates[0].Flux = -1.5e-300
	inv.frames[2].candidates[1].Flux = 1e25
	addAll(t, s, inv.frames)
	bad := NewFrameRecord("zz", Failed)
	if err := s.AddFrame(ctx, bad, nil); err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	for _, table := range []string{"candidates", "objects", "frames"} {
		for _, format := range FormatNames() {
			path := filepath.Join(dir, table+"."+format)
			if err := s.Export(ctx, table, format, path); err != nil {
				t.Fatal(err)
			}
			first, _ := os.ReadFile(path)
			if err := s.Export(ctx, table, format, path); err != nil {
				t.Fatal(err)
			}
			if again, _ := os.ReadFile(path); !bytes.Equal(first, again) {
				t.Errorf("%s: a second export differs", path)
			}
		}
	}
	out := outside.Python(t, `
import sys, csv, json, sqlite3, math
from astropy.io import fits
folder, catalog = sys.argv[1:]
db = sqlite3.connect('file:' + catalog + '?mode=ro', uri=True)
assert db.execute('pragma integrity_check').fetchall() == [('ok',)]
result = {}
for table in ('candidates', 'objects', 'frames'):
    rows = list(csv.reader(open(folder + '/' + table + '.csv', newline='')))
    names, rows = rows[0], rows[1:]
    with fits.open(folder + '/' + table + '.fits', checksum=True) as f:
        hdu = f[table.upper()]
        assert list(hdu.columns.names) == names, (hdu.columns.names, names)
        assert len(hdu.data) == len(rows), (len(hdu.data), len(rows))
        compared = nulls = 0
        for k, row in enumerate(rows):
            for name, text in zip(names, row):
                value = hdu.data[name][k]
                if hdu.columns[name].format.endswith('A'):
                    plain = ''.join(c if ' ' <= c <= '~' else '?' for c in text)
                    assert value == plain, (table, name, k, value, text)
                elif text == '':
                    nulls += 1
                    assert math.isnan(value), (table, name, k, value)
                else:
                    assert float(text) == value, (table, name, k, value, text)
                compared += 1
    where = {'objects': 'name', 'frames': 'frame', 'candidates': 'candidate_id'}[table]
    keys = {'name': 'object'}.get(where, where)
    columns = [{'object': 'name'}.get(n, n) if table == 'objects' else n for n in names]
    if table == 'candidates':
        columns[-1] = '(select name from objects where id = object)'
    for row in rows:
        stored = db.execute('select ' + ','.join(columns) + ' from ' + table + ' where ' + where + ' = ?', (row[names.index(keys)],)).fetchall()
        assert len(stored) == 1, (table, row)
        for name, text, value in zip(names, row, stored[0]):
            if isinstance(value, float):
                assert float(text) == value, (table, name, text, value)
            else:
                assert text == ('' if value is None else str(value)), (table, name, text, value)
    assert db.execute('select count(*) from ' + table).fetchone()[0] == len(rows)
    result[table] = [len(rows), compared, nulls]
print(json.dumps(result))
`, dir, s.Path())
	var result map[string][3]int
	if err := json.Unmarshal(out, &result); err != nil {
		t.Fatal(err, string(out))
	}
	t.Log(result)
	for table, n := range result {
		if n[0] < 6 || n[1] < 100 || n[2] == 0 && table != "objects" {
			t.Errorf("%s: %d rows, %d values, %d nulls compared: too few to show anything", table, n[0], n[1], n[2])
		}
	}
	if len(result) != 3 {
		t.Errorf("%d tables compared", len(result))
	}
	for _, table := range []string{"candidates", "objects", "frames"} {
		report := outside.Command(t, "fitsverify", filepath.Join(dir, table+".fits"))
		if !strings.Contains(string(report), "0 warning(s) and 0 error(s)") {
			t.Errorf("fitsverify %s:\n%s", table, report)
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
		} else if b, _ := os.ReadFile(path); len(b) == 0 {
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
