package survey

import (
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/tracklets"
)

// What moves between the exposures of a night becomes kind moving; what stands
// still, or is not likely real, keeps its kind. The order does not matter.
func TestMoversOfANight(t *testing.T) {
	var records []catalog.FrameRecord
	var list []detect.Candidate
	for k := range 3 {
		r := catalog.NewFrameRecord(fmt.Sprint("f", k), catalog.Searched)
		r.Width, r.Height, r.Jacobian = 1000, 1000, [4]float64{-0.6, 0, 0, 0.6}
		records = append(records, r)
		add := func(name string, east, p float64, kind detect.Kind) {
			list = append(list, detect.Candidate{ID: name + r.Frame, Frame: r.Frame, MidMJD: 61300 + float64(k)/48, RA: 150 + east/3600, Dec: 0, XErr: 0.1, YErr: 0.1,
				Mag: 20, MagErr: 0.1, RealProbability: p, Kind: kind})
		}
		add("mover", 12*float64(k), 0.9, detect.NewSource)
		add("star", 200, 0.9, detect.Brightened)
		add("doubtful", 300+12*float64(k), 0.2, detect.NewSource)
		add("hit", 400+12*float64(k), 0.9, detect.CosmicRay)
	}
	rand.New(rand.NewPCG(1, 2)).Shuffle(len(list), func(a, b int) { list[a], list[b] = list[b], list[a] })
	found, detections := linkMovers(records, list)
	if len(found) != 1 || len(found[0].Members) != 3 || found[0].Rate < 23.9 || found[0].Rate > 24.1 {
		t.Fatalf("found %+v, expected one tracklet of 24 arcsec/h", found)
	}
	for i := range list {
		if want := strings.HasPrefix(list[i].ID, "mover"); (list[i].Kind == detect.Moving) != want {
			t.Errorf("%s is of kind %s", list[i].ID, list[i].Kind)
		}
	}
	path := filepath.Join(t.TempDir(), TrackletsCSV)
	if err := tracklets.WriteCSV(path, found, detections); err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(path)
	if err != nil || strings.Count(string(text), "\n") != 2 || !strings.Contains(string(text), "moverf0;moverf1;moverf2") {
		t.Errorf("%v, table:\n%s", err, text)
	}
}
