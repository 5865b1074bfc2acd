package usertable_test

import (
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/parquet-go/parquet-go"

	"nightsift/internal/outside"
	. "nightsift/internal/usertable"
	_ "nightsift/internal/usertable/parquettable"
)

var wanted = []Column{{Name: "RA", Units: []string{"deg"}}, {Name: "dec"}, {Name: "z"}, {Name: "count"}, {Name: "label", Text: true}, {Name: "fixed", Text: true}}

type row struct {
	RA    float64  `parquet:"ra"`
	Dec   float64  `parquet:"dec"`
	Z     *float32 `parquet:"z,optional"`
	Count int32    `parquet:"count"`
	Label string   `parquet:"label"`
	Fixed string   `parquet:"fixed"`
	Other []int64  `parquet:"other,list"`
}

// The same rows in every format give the same columns.
func TestFormatsHoldTheSame(t *testing.T) {
	dir := t.TempDir()
	outside.Python(t, `
import sys, numpy as np
from astropy.table import Table, MaskedColumn
from astropy import units as u
from astropy.io.votable import from_table
n = 50
t = Table()
t["other"] = np.arange(n) * 2
t["ra"] = np.arange(n) * 7.1 * u.deg
t["dec"] = np.linspace(-89.5, 88.25, n) * u.deg
t["z"] = MaskedColumn((np.arange(n) / 64).astype("f4"), mask=np.arange(n) % 5 == 0)
t["count"] = (np.arange(n) - 20).astype("i4")
t["label"] = ["s %d" % i + "x" * (i % 7) for i in range(n)]
t["fixed"] = ["ab%02d" % i for i in range(n)]
d = sys.argv[1] + "/"
t.write(d + "a.csv", format="ascii.csv")
t.write(d + "a.tsv", format="ascii.tab")
t.write(d + "a.fits")
t["array"] = np.ones((n, 3))
for f in ("tabledata", "binary2", "binary"):
    t.write(d + f + ".vot", format="votable", tabledata_format=f)
import gzip
open(d + "z.vot.gz", "wb").write(gzip.compress(open(d + "tabledata.vot", "rb").read()))
`, dir)
	var rows []row
	for i := range 50 {
		r := row{RA: float64(i) * 7.1, Dec: -89.5 + 177.75*float64(i)/49, Count: int32(i - 20), Label: "s " + itoa(i) + strings.Repeat("x", i%7), Fixed: "ab" + string(rune('0'+i/10)) + string(rune('0'+i%10)), Other: []int64{1, 2}[:i%3]}
		if z := float32(i) / 64; i%5 != 0 {
			r.Z = &z
		}
		rows = append(rows, r)
	}
	if err := parquet.WriteFile(filepath.Join(dir, "a.parquet"), rows); err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{"a.csv", "a.tsv", "a.fits", "a.fits[1]", "tabledata.vot", "binary2.vot", "binary.vot", "z.vot.gz", "a.parquet"} {
		got, err := Read(filepath.Join(dir, name), wanted)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		if got.Rows != 50 {
			t.Errorf("%s: %d rows", name, got.Rows)
			continue
		}
		for i, r := range rows {
			z := math.NaN()
			if r.Z != nil {
				z = float64(*r.Z)
			}
			same := func(a, b float64) bool { return math.Abs(a-b) < 1e-12*(1+math.Abs(b)) || a != a && b != b }
			if !same(got.Numbers("ra")[i], r.RA) || !same(got.Numbers("dec")[i], r.Dec) || !same(got.Numbers("z")[i], z) || got.Numbers("count")[i] != float64(r.Count) ||
				got.Texts("label")[i] != r.Label || got.Texts("fixed")[i] != r.Fixed {
				t.Errorf("%s: row %d: %v %v %v %v %q %q, want %+v", name, i+1, got.Numbers("ra")[i], got.Numbers("dec")[i], got.Numbers("z")[i], got.Numbers("count")[i],
					got.Texts("label")[i], got.Texts("fixed")[i], r)
				break
			}
		}
	}
}

func itoa(i int) string {
	if i < 10 {
		return string(rune('0' + i))
	}
	return itoa(i/10) + itoa(i%10)
}

const votable = `<?xml version="1.0"?><VOTABLE version="1.4"><RESOURCE><TABLE>
<FIELD name="ra" datatype="double" unit="UNIT"/><FIELD name="dec" datatype="double"/>
<DATA><TABLEDATA>
<TR><TD>1</TD><TD>2</TD></TR>
BODY
</TABLEDATA></DATA></TABLE></RESOURCE></VOTABLE>`

// What is wrong is named with file, line and column.
func TestErrorsSayWhere(t *testing.T) {
	dir := t.TempDir()
	vo := func(unit, body string) string {
		return strings.ReplaceAll(strings.ReplaceAll(votable, "UNIT", unit), "BODY", body)
	}
	for k, c := range []struct{ content, want string }{
		{"", "empty"},
		{"# only a remark\n", "empty"},
		{"ra,dec\n1,2\n3,x\n", ":3: column dec: \"x\"; want a number"},
		{"ra,dec\n1,2\n3\n", ":3:"},
		{"ra;dec\n1;2\n\n# remark\n3;inf\n", ":5: column dec"},
		{"ra,declination\n1,2\n", ":1: column dec: there is none of that name; the columns are ra, declination"},
		{"ra,dec,RA\n1,2,3\n", ":1: column ra: it is there twice"},
		{"ra,dec\n1,\"2\n", ":2:"},
		{vo("rad", ""), "column ra has the unit \"rad\"; want deg"},
		{vo("deg", "<TR><TD>1</TD><TD>abc</TD></TR>"), ":5:"},
		{vo("deg", "<TR><TD>1</TD></TR>"), "a row of 1 cells; want 2"},
		{vo("deg", "<TR><TD>1</TD><TD>"), ":"},
		{vo("deg", "")[:200], "cut off"},
		{`<?xml version="1.0"?><a/>`, "no VOTABLE"},
		{`<VOTABLE><RESOURCE><TABLE><FIELD name="ra" datatype="odd"/></TABLE></RESOURCE></VOTABLE>`, `datatype "odd"`},
		{`<VOTABLE><RESOURCE/></VOTABLE>`, "no table with data"},
		{`<VOTABLE><TABLE><FIELD name="ra" datatype="double"/><FIELD name="dec" datatype="int"/><DATA><BINARY><STREAM encoding="base64">AAAA</STREAM></BINARY></DATA></TABLE></VOTABLE>`, "row 1 is cut off"},
		{`<VOTABLE><TABLE><FIELD name="ra" datatype="double"/><FIELD name="dec" datatype="int"/><DATA><BINARY><STREAM href="http://x"/></BINARY></DATA></TABLE></VOTABLE>`, "another place"},
		{"PAR1 and nothing else", ""},
		{"SIMPLE  =                    T", ""},
	} {
		path := filepath.Join(dir, "f"+itoa(k))
		if err := os.WriteFile(path, []byte(c.content), 0o644); err != nil {
			t.Fatal(err)
		}
		_, err := Read(path, []Column{{Name: "ra", Units: []string{"deg", "degree"}}, {Name: "dec"}})
		if err == nil || !strings.Contains(err.Error(), c.want) || !strings.Contains(err.Error(), path) {
			t.Errorf("%q: %v; want %q with the path", c.content, err, c.want)
		}
	}
	if _, err := Read(filepath.Join(dir, "absent"), nil); err == nil {
		t.Error("an absent file was read")
	}
}

// Whatever a file holds, reading it ends with a table or an error.
func FuzzRead(f *testing.F) {
	f.Add([]byte("ra,dec\n1,2\n"))
	f.Add([]byte(strings.ReplaceAll(strings.ReplaceAll(votable, "UNIT", "deg"), "BODY", "")))
	f.Add([]byte(`<VOTABLE><TABLE><FIELD name="ra" datatype="double"/><FIELD name="dec" datatype="char" arraysize="*"/><DATA><BINARY2><STREAM encoding="base64">AEAAAAAAAAAAAAAAAmFi</STREAM></BINARY2></DATA></TABLE></VOTABLE>`))
	dir := f.TempDir()
	f.Fuzz(func(t *testing.T, data []byte) {
		path := filepath.Join(dir, "f")
		if err := os.WriteFile(path, data, 0o644); err != nil {
			t.Fatal(err)
		}
		table, err := Read(path, []Column{{Name: "ra"}, {Name: "dec", Text: true}})
		if err == nil && (len(table.Numbers("ra")) != table.Rows || len(table.Texts("dec")) != table.Rows) {
			t.Fatalf("%d rows, %d and %d values", table.Rows, len(table.Numbers("ra")), len(table.Texts("dec")))
		}
	})
}
