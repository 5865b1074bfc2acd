package survey

import (
	"math"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/astro"
)

// What stands on one pixel of the detector on several frames of a night, though
// these see other sky there, is the detector's or the telescope's own: a hot
// pixel, a ghost.
const (
	repeatedRadius = 1.5 // px, within which two detections stand on the same place of the detector
	repeatedApart  = 4.0 // px, by which the sky must have moved
	// repeatedShare is the chance that a defect which is fixed to the detector shows
	// again on another frame of the night (a guess; the result hardly depends on it).
	repeatedShare = 0.5
)

// judgeRepeated lowers the probabilities of candidates that repeat on the detector,
// by Bayes' rule: their odds are multiplied by the chance that something unrelated
// stands there on another frame, 1 - exp(-Σ ρ π r²) with ρ the density of
// detections on those frames, over repeatedShare. What was a point source and
// falls below one half becomes an artefact. Frames of one size are taken for those
// of one detector.
func judgeRepeated(records []catalog.FrameRecord, candidates []detect.Candidate) {
	type size [2]int
	type spot struct {
		size
		i, j int
	}
	frames := map[string]*catalog.FrameRecord{}
	count := map[string]int{}
	for i := range records {
		if r := &records[i]; r.Status == catalog.Searched && r.Width > 0 && r.Height > 0 {
			frames[r.Frame] = r
		}
	}
	cells := map[spot][]int{}
	at := func(c *detect.Candidate, r *catalog.FrameRecord) spot {
		return spot{size{r.Width, r.Height}, int(math.Floor(c.X / repeatedRadius)), int(math.Floor(c.Y / repeatedRadius))}
	}
	for k := range candidates {
		c := &candidates[k]
		if r := frames[c.Frame]; r != nil && c.X-c.X == 0 && c.Y-c.Y == 0 {
			count[c.Frame]++
			s := at(c, r)
			cells[s] = append(cells[s], k)
		}
	}
	total := map[size]float64{} // detections per px² on all frames of a size together
	for name, r := range frames {
		total[size{r.Width, r.Height}] += float64(count[name]) / (float64(r.Width) * float64(r.Height))
	}
	odds := make([]float64, len(candidates)) // factor; 0: does not repeat
	for k := range candidates {
		c := &candidates[k]
		r := frames[c.Frame]
		if r == nil || !(c.RealProbability > 0) {
			continue
		}
		scale := math.Sqrt(math.Abs(r.Jacobian[0]*r.Jacobian[3] - r.Jacobian[1]*r.Jacobian[2]))
		middle := at(c, r)
		for dj := -1; dj <= 1; dj++ {
			for di := -1; di <= 1; di++ {
				for _, n := range cells[spot{middle.size, middle.i + di, middle.j + dj}] {
					o := &candidates[n]
					if o.Frame == c.Frame || math.Hypot(o.X-c.X, o.Y-c.Y) > repeatedRadius || !(astro.Separation(c.RA, c.Dec, o.RA, o.Dec)*3600 > repeatedApart*scale) {
						continue
					}
					others := total[middle.size] - float64(count[c.Frame])/(float64(r.Width)*float64(r.Height))
					odds[k] = min(1, -math.Expm1(-others*math.Pi*repeatedRadius*repeatedRadius)/repeatedShare)
				}
			}
		}
	}
	for k, factor := range odds {
		if factor == 0 {
			continue
		}
		c := &candidates[k]
		p := c.RealProbability
		c.RealProbability = p * factor / (p*factor + 1 - p)
		switch c.Kind {
		case detect.NewSource, detect.Brightened, detect.Faded:
			if c.RealProbability < 0.5 {
				c.Kind = detect.Artefact
			}
		}
	}
}
