package catalog

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

// The map of what was searched has the pixels that healpy finds on one of the
// frames, and no others; a position is searched as often as it is covered.
func TestCoverageAndDepth(t *testing.T) {
	s := newStore(t)
	const order = 12
	var footprints [][][2]float64
	limits := []float64{20, 20.5, 21, 21.5}
	for k := range 6 {
		r := record(k) // filters g and r in turn, two frames a night
		r.SetWCS(pointing{ra: 359.9 + 0.1*float64(k), dec: -44 + 0.15*float64(k), turn: 30 * float64(k), width: 2000, height: 1500}, 2000, 1500)
		switch {
		case k == 4:
			r.Status, r.Reason = SetAside, "no_data"
		case k == 5:
			r.Footprint = nil
		default:
			r.MagLimit5Sigma = limits[k]
			r.Efficiency50 = limits[k] - 0.1
			footprints = append(footprints, r.Footprint)
		}
		if err := s.AddFrame(ctx, r, nil); err != nil {
			t.Fatal(err)
		}
	}
	all, err := s.Coverage(ctx, CoverageQuery{Order: order})
	if err != nil {
		t.Fatal(err)
	}
	if all.Frames != 4 || all.Footless != 1 || all.Shallowest != 20 || all.Deepest != 21.5 {
		t.Errorf("%d frames, %d without footprint, limits %g to %g", all.Frames, all.Footless, all.Shallowest, all.Deepest)
	}
	var text strings.Builder
	if err := all.Map.EncodeJSON(&text); err != nil {
		t.Fatal(err)
	}
	corners, _ := json.Marshal(footprints)
	dir := t.TempDir()
	for name, content := range map[string]string{"map.json": text.String(), "corners.json": string(corners)} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(content), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	out := outside.Python(t, `
import json, sys
import healpy as hp, numpy as np
folder, order = sys.argv[1], 12
want = set()
for corners in json.load(open(folder + '/corners.json')):
    # The middles of the edges are on the great circles between the corners.
    v = np.array([hp.ang2vec(*c, lonlat=True) for c in corners[::2]])
    want |= set(hp.query_polygon(2**order, v, nest=True).tolist())
got = set()
for o, list in json.load(open(folder + '/map.json')).items():
    for p in list:
        n = 4**(order - int(o))
        got |= set(range(p * n, (p + 1) * n))
print(json.dumps([len(want), len(got ^ want), len(want) * hp.nside2pixarea(2**order, degrees=True)]))
`, dir)
	var n [3]float64
	if err := json.Unmarshal(out, &n); err != nil {
		t.Fatal(err)
	}
	t.Logf("%g pixels, %g differ, %g square degrees", n[0], n[1], n[2])
	if n[0] < 500 || n[1] != 0 || math.Abs(n[2]-all.Map.Area()) > 1e-9 {
		t.Errorf("%g pixels, %g differ; area %g, want %g", n[0], n[1], all.Map.Area(), n[2])
	}
	for _, c := range []struct {
		q      CoverageQuery
		frames int
	}{
		{CoverageQuery{Night: "2031-03-01"}, 2}, {CoverageQuery{Filter: "g"}, 2}, {CoverageQuery{DeeperThan: 20.4}, 3},
		{CoverageQuery{Field: "A1", Night: "2031-03-02", Filter: "r"}, 1}, {CoverageQuery{Field: "Z"}, 0},
	} {
		c.q.Order = order
		got, err := s.Coverage(ctx, c.q)
		if err != nil || got.Frames != c.frames || (got.Map.Area() > 0) != (c.frames > 0) || got.Map.Area() >= all.Map.Area() {
			t.Errorf("%+v: %d frames, want %d: %v", c.q, got.Frames, c.frames, err)
		}
	}
	if _, err := s.Coverage(ctx, CoverageQuery{Order: 30}); err == nil {
		t.Error("order 30 was accepted")
	}
	// Each pixel of the map is searched where its centre is.
	for _, f := range footprints {
		for _, r := range healpix.Within(7, f) {
			for p := r.From; p < r.To; p++ {
				ra, dec := healpix.Centre(7, p)
				d, err := s.Depth(ctx, ra, dec, "", math.NaN())
				if err != nil || len(d.Looks) == 0 {
					t.Errorf("%g %g is in the map and searched %d times: %v", ra, dec, len(d.Looks), err)
				}
			}
		}
	}
	// What a source would have given: at the limit 5 sigma, where half are
	// found one half; 2.5 magnitudes brighter ten times that.
	d, err := s.Depth(ctx, 359.9, -44, "g", 19.9)
	if err != nil {
		t.Fatal(err)
	}
	if len(d.Looks) == 0 || d.Looks[0].Frame.Frame != "frame000" || math.Abs(d.Looks[0].Chance-0.5) > 1e-12 {
		t.Fatalf("%+v", d)
	}
	d, err = s.Depth(ctx, 359.9, -44, "g", 20)
	if err != nil || math.Abs(d.Looks[0].ExpectedSNR-5) > 1e-12 || d.Looks[0].Chance >= 0.5 {
		t.Errorf("at the limit: %g sigma, chance %g: %v", d.Looks[0].ExpectedSNR, d.Looks[0].Chance, err)
	}
	d, err = s.Depth(ctx, 359.9, -44, "", 17.5)
	if err != nil || math.Abs(d.Looks[0].ExpectedSNR-50) > 1e-9 || d.Looks[0].Chance < 0.9999999 {
		t.Errorf("2.5 mag brighter: %g sigma, chance %g: %v", d.Looks[0].ExpectedSNR, d.Looks[0].Chance, err)
	}
	if p, known := d.FoundAtLeastOnce(); p < 0.9999999 || known != len(d.Looks) {
		t.Errorf("at least once: %g by %d", p, known)
	}
	if sheet := d.Sheet(); sheet.Rows != len(d.Looks) || !strings.Contains(d.Describe(), "searched on") {
		t.Errorf("%d rows; %s", sheet.Rows, d.Describe())
	}
	never, err := s.Depth(ctx, 180, 45, "", 20)
	if err != nil || len(never.Looks) != 0 || !strings.Contains(never.Describe(), "never searched") {
		t.Errorf("%+v %v", never, err)
	}
	if _, err := s.Depth(ctx, 10, 95, "", 20); err == nil {
		t.Error("declination 95 was accepted")
	}
}
