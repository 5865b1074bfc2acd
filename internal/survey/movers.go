package survey

import (
	"math"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/tracklets"
)

// TrackletsCSV is the table of what moves within a night.
const TrackletsCSV = "tracklets.csv"

// linkMovers links the night's likely real point sources and trails and makes
// those of a tracklet kind moving. The kinds depend on which frames there are,
// but not on the order in which they were searched.
func linkMovers(records []catalog.FrameRecord, candidates []detect.Candidate) ([]tracklets.Tracklet, []tracklets.Detection) {
	frames := map[string]*catalog.FrameRecord{}
	var exposures []tracklets.Exposure
	for i := range records {
		r := &records[i]
		if area := areaOf(r); r.Status == catalog.Searched && area > 0 {
			frames[r.Frame] = r
			exposures = append(exposures, tracklets.Exposure{Frame: r.Frame, Area: area})
		}
	}
	var list []tracklets.Detection
	var of []int
	for i := range candidates {
		c := &candidates[i]
		r := frames[c.Frame]
		if r == nil || !(c.RealProbability >= 0.5) {
			continue
		}
		switch c.Kind {
		case detect.NewSource, detect.Brightened, detect.Moving:
		default:
			continue
		}
		j := r.Jacobian
		scale := math.Sqrt(math.Abs(j[0]*j[3] - j[1]*j[2]))
		list = append(list, tracklets.Detection{ID: c.ID, Frame: c.Frame, MJD: c.MidMJD, RA: c.RA, Dec: c.Dec,
			Err: scale * math.Hypot(c.XErr, c.YErr) / math.Sqrt2, Mag: c.Mag, MagErr: c.MagErr})
		of = append(of, i)
	}
	found := tracklets.Find(list, exposures, tracklets.DefaultConfig())
	for _, t := range found {
		for _, m := range t.Members {
			candidates[of[m]].Kind = detect.Moving
		}
	}
	return found, list
}
