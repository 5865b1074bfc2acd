package moc

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/healpix"
	"nightsift/internal/outside"
)

// Two overlapping squares: the map as FITS and as JSON has the pixels of both
// and each only once, as few as possible; astropy and healpy say so.
func TestMapsReadElsewhere(t *testing.T) {
	const order = 9
	m := MOC{Order: order}
	squares := [][][2]float64{
		{{359, -1}, {2, -1}, {2, 3}, {359, 3}},
		{{1, 1}, {6, 1}, {6, 5}, {1, 5}},
		{{100, 80}, {110, 80}, {110, 84}, {100, 84}},
	}
	for _, s := range squares {
		m.Add(healpix.Within(order, s))
	}
	dir := t.TempDir()
	write := func(name string, m *MOC) string {
		path := filepath.Join(dir, name)
		f, err := os.Create(path)
		if err != nil {
			t.Fatal(err)
		}
		encode := m.EncodeFITS
		if strings.HasSuffix(name, ".json") {
			encode = m.EncodeJSON
		}
		if err := encode(f); err != nil {
			t.Fatal(err)
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
		return path
	}
	a, b := write("a.fits", &m), write("a.json", &m)
	none, bare := write("none.fits", &MOC{Order: 7}), write("none.json", &MOC{Order: 7})
	for _, path := range []string{a, none} {
		if report := outside.Command(t, "fitsverify", path); !strings.Contains(string(report), "0 warning(s) and 0 error(s)") {
			t.Errorf("fitsverify:\n%s", report)
		}
	}
	if text, _ := os.ReadFile(bare); string(text) != "{\"7\":[]}\n" {
		t.Errorf("an empty map is %q", text)
	}
	corners, _ := json.Marshal(squares)
	out := outside.Python(t, `
import json, sys
import healpy as hp, numpy as np
from astropy.io import fits
a, b, squares = sys.argv[1:]
order, want = 9, set()
for s in json.loads(squares):
    want |= set(hp.query_polygon(2**order, np.array([hp.ang2vec(*c, lonlat=True) for c in s]), nest=True).tolist())
with fits.open(a, checksum=True) as f:
    h = f[1].header
    assert (h['MOCVERS'], h['MOCDIM'], h['ORDERING'], h['COORDSYS'], h['MOCORD_S']) == ('2.0', 'SPACE', 'NUNIQ', 'C', order)
    assert h['TFIELDS'] == 1 and h['TFORM1'].strip() in ('K', '1K'), h['TFORM1']
    uniq = f[1].data['UNIQ']
assert (np.diff(uniq) > 0).all()
cells = {}
got = []
for u in uniq.tolist():
    o = (u.bit_length() - 1) // 2 - 1
    p = u - 4 * 4**o
    assert 0 <= p < 12 * 4**o
    cells.setdefault(str(o), []).append(p)
    got += range(p << 2 * (order - o), (p + 1) << 2 * (order - o))
assert len(got) == len(set(got)) and set(got) == want, (len(got), len(want))
assert cells == json.load(open(b))
for o, list in cells.items():
    assert int(o) == 0 or max(np.bincount([p >> 2 for p in list])) < 4, 'four that could be one'
print(len(want) * hp.nside2pixarea(2**order, degrees=True))
`, a, b, string(corners))
	var area float64
	if err := json.Unmarshal(out, &area); err != nil {
		t.Fatal(err)
	}
	t.Logf("%.3f square degrees in %d ranges", area, len(m.ranges))
	if math.Abs(m.Area()-area) > 1e-9 {
		t.Errorf("area %v, want %v", m.Area(), area)
	}
}
