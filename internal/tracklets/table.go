package tracklets

import (
	"bytes"
	"encoding/csv"
	"math"
	"strconv"
	"strings"

	"nightsift/internal/wholefile"
)

// WriteCSV writes a line for each tracklet, with the members' identifiers joined
// by semicolons. mag_mean is weighted by the errors; unknown numbers are empty.
func WriteCSV(path string, tracklets []Tracklet, list []Detection) error {
	var b bytes.Buffer
	w := csv.NewWriter(&b)
	_ = w.Write([]string{"tracklet_id", "members", "candidate_ids", "first_mjd", "last_mjd", "mid_mjd", "ra_deg", "dec_deg", "ra_err_arcsec", "dec_err_arcsec",
		"rate_arcsec_per_hour", "angle_deg", "east_arcsec_per_hour", "north_arcsec_per_hour", "east_err", "north_err", "chi2", "degrees_of_freedom", "false_probability", "mag_mean"})
	number := func(v float64, digits int) string {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return ""
		}
		return strconv.FormatFloat(v, 'f', digits, 64)
	}
	for i := range tracklets {
		t := &tracklets[i]
		ids := make([]string, len(t.Members))
		var sum, weight float64
		for k, m := range t.Members {
			d := &list[m]
			ids[k] = d.ID
			if e := d.MagErr; !math.IsNaN(d.Mag) && e > 0 {
				sum, weight = sum+d.Mag/(e*e), weight+1/(e*e)
			}
		}
		_ = w.Write([]string{t.ID, strconv.Itoa(len(t.Members)), strings.Join(ids, ";"),
			number(list[t.Members[0]].MJD, 7), number(list[t.Members[len(t.Members)-1]].MJD, 7), number(t.MJD, 7), number(t.RA, 7), number(t.Dec, 7),
			number(t.RAErr, 3), number(t.DecErr, 3), number(t.Rate, 3), number(t.Angle, 2), number(t.East, 3), number(t.North, 3), number(t.EastErr, 3), number(t.NorthErr, 3),
			number(t.Chi2, 2), strconv.Itoa(t.Free), strconv.FormatFloat(t.FalseProbability, 'g', 3, 64), number(sum/weight, 3)})
	}
	w.Flush()
	return wholefile.WriteBytes(path, b.Bytes())
}
