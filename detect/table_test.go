package detect

import (
	"encoding/json"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/outside"
)

func sample(t testing.TB) []Candidate {
	s := newScene(200, 200, gaussian{1.3, 1.3}, 10, 3)
	s.add(50.2, 60.7, 40*s.unit())
	s.add(120, 15, -30*s.unit())
	s.add(4, 190, 25*s.unit())
	s.score()
	list := s.find(t, DefaultConfig())
	if len(list) < 3 {
		t.Fatalf("%d candidates, put in 3", len(list))
	}
	for k := range list {
		list[k].ID = identify("frame", "", "ref", "", list[k].X, list[k].Y)
		list[k].Frame, list[k].Filter, list[k].Night, list[k].MidMJD = "frame", "r", "2026-12-01", 61375.5
	}
	return list
}

func sameFloats[T float32 | float64](a, b []T) bool {
	if len(a) != len(b) {
		return false
	}
	for i := range a {
		if a[i] != b[i] && !(a[i] != a[i] && b[i] != b[i]) {
			return false
		}
	}
	return true
}

func TestTableRoundTrip(t *testing.T) {
	list := sample(t)
	for _, n := range []int{0, 1, len(list)} {
		path := filepath.Join(t.TempDir(), "candidates.fits")
		if err := WriteTable(path, list[:n], fits.Card{Key: "VERSION", Value: "test"}); err != nil {
			t.Fatal(err)
		}
		back, err := ReadTable(path)
		if err != nil {
			t.Fatal(err)
		}
		if len(back) != n {
			t.Fatalf("%d rows back, wrote %d", len(back), n)
		}
		for i := range back {
			for k := range Columns {
				c := &Columns[k]
				a, b := c.Value(&list[i]), c.Value(&back[i])
				if f, ok := a.(float64); ok && math.IsNaN(f) {
					if g := b.(float64); !math.IsNaN(g) {
						t.Errorf("row %d, %s: NaN became %g", i, c.Name, g)
					}
				} else if a != b {
					t.Errorf("row %d, %s: %v became %v", i, c.Name, a, b)
				}
			}
			for _, s := range Stamps {
				if !sameFloats(*s.Plane(&list[i]), *s.Plane(&back[i])) {
					t.Errorf("row %d, %s changed", i, s.Name)
				}
			}
			if !sameFloats(list[i].Features, back[i].Features) {
				t.Errorf("row %d: features changed", i)
			}
		}
		outside.Command(t, "fitsverify", "-q", path)
	}
}

// astropy must find the contract's columns, units and stamps.
func TestTableAgainstAstropy(t *testing.T) {
	list := sample(t)
	path := filepath.Join(t.TempDir(), "candidates.fits")
	if err := WriteTable(path, list); err != nil {
		t.Fatal(err)
	}
	text := outside.Python(t, `
import json, sys
from astropy.io import fits
h = fits.open(sys.argv[1])["CANDIDATES"]
d = h.data
json.dump({"names": d.names, "units": [c.unit or "" for c in h.columns],
  "shape": list(d["stamp_new"].shape), "x": d["x_px"].tolist(), "kind": [str(k) for k in d["kind"]],
  "centre": d["stamp_difference"][:, 25, 25].tolist()}, sys.stdout)
`, path)
	var got struct {
		Names, Units, Kind []string
		Shape              []int
		X, Centre          []float64
	}
	if err := json.Unmarshal(text, &got); err != nil {
		t.Fatal(err)
	}
	want := strings.Fields(`candidate_id frame filter night mid_mjd x_px y_px x_px_err y_px_err ra_deg dec_deg flux flux_err
		mag mag_err mag_limit significance real_probability kind flags reference_distance_arcsec reference_mag
		stamp_new stamp_reference stamp_difference`)
	have := map[string]string{}
	for i, n := range got.Names {
		have[n] = got.Units[i]
	}
	for _, n := range want {
		if _, ok := have[n]; !ok {
			t.Errorf("column %s is missing", n)
		}
	}
	for n, u := range map[string]string{"x_px": "pixel", "ra_deg": "deg", "flux": "count", "mid_mjd": "d", "stamp_new": "count", "reference_distance_arcsec": "arcsec"} {
		if have[n] != u {
			t.Errorf("unit of %s is %q, expected %q", n, have[n], u)
		}
	}
	if len(got.Shape) != 3 || got.Shape[1] != StampSize || got.Shape[2] != StampSize {
		t.Errorf("stamps have shape %v", got.Shape)
	}
	for i := range list {
		if got.X[i] != list[i].X || got.Kind[i] != string(list[i].Kind) || got.Centre[i] != float64(list[i].StampDifference[25*StampSize+25]) {
			t.Errorf("row %d: astropy reads x %g, kind %s, centre %g", i, got.X[i], got.Kind[i], got.Centre[i])
		}
	}
}

func TestColumnsRefuseWrongTypes(t *testing.T) {
	var k Candidate
	for i := range Columns {
		if err := Columns[i].Set(&k, struct{}{}); err == nil {
			t.Errorf("column %s takes a struct", Columns[i].Name)
		}
		if err := Columns[i].Set(&k, nil); err != nil {
			t.Errorf("column %s refuses null: %v", Columns[i].Name, err)
		}
	}
	if _, err := FromTable(&fits.Table{Name: TableName}); err == nil {
		t.Error("a table without columns is taken")
	}
}

// Identifiers: equal for equal input, different for neighbours and frames.
func TestIdentify(t *testing.T) {
	a := identify("f", "1", "r", "2", 100.1, 200.2)
	if a != identify("f", "1", "r", "2", 100.12, 200.21) {
		t.Error("a hundredth of a pixel changes the identifier")
	}
	for _, b := range []string{identify("g", "1", "r", "2", 100.1, 200.2), identify("f", "3", "r", "2", 100.1, 200.2),
		identify("f", "1", "r", "4", 100.1, 200.2), identify("f", "1", "r", "2", 102, 200.2), identify("f", "1", "r", "2", 200.2, 100.1)} {
		if a == b || len(b) != 16 {
			t.Errorf("identifier %s against %s", b, a)
		}
	}
}
