package catalog

import (
	"fmt"
	"io"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"nightsift/detect"
)

// ParseCone reads a circle "RA,DEC,RADIUS": degrees, degrees, arcseconds.
func ParseCone(text string) (*Cone, error) {
	parts := strings.Split(text, ",")
	var v [3]float64
	if len(parts) != len(v) {
		return nil, fmt.Errorf("found %q, expected RA,DEC,RADIUS in degrees, degrees and arcseconds", text)
	}
	for i, p := range parts {
		x, err := strconv.ParseFloat(strings.TrimSpace(p), 64)
		if err != nil || x-x != 0 {
			return nil, fmt.Errorf("found %q in %q, expected a number: RA,DEC,RADIUS in degrees, degrees and arcseconds", p, text)
		}
		v[i] = x
	}
	c := &Cone{v[0], v[1], v[2]}
	return c, c.check()
}

// writeTable writes rows for people, columns aligned.
func writeTable(w io.Writer, head string, rows int, row func(int) string) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, head)
	for i := range rows {
		fmt.Fprintln(t, row(i))
	}
	return t.Flush()
}

// ListObjects writes objects for people, a line each.
func ListObjects(w io.Writer, list []Object) error {
	return writeTable(w, "object\tra_deg\tdec_deg\tstate\tkind\tprobability\tdetections\tnights\tfirst_night\tlast_night\tpeak_mag\tfilters", len(list), func(i int) string {
		o := &list[i]
		return fmt.Sprintf("%s\t%.6f\t%+.6f\t%s\t%s\t%s\t%d\t%d\t%s\t%s\t%s\t%s", o.Name, o.RA, o.Dec, o.State, o.Kind, number("%.3f", o.RealProbability),
			o.Detections, o.Nights, dash(o.FirstNight), dash(o.LastNight), number("%.3f", o.PeakMag), dash(o.Filters))
	})
}

// ListCandidates writes candidates for people, a line each.
func ListCandidates(w io.Writer, list []detect.Candidate) error {
	return writeTable(w, "candidate\tra_deg\tdec_deg\tkind\tprobability\tsignificance\tmag\tfilter\tnight\tframe", len(list), func(i int) string {
		c := &list[i]
		return fmt.Sprintf("%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s", c.ID, number("%.6f", c.RA), number("%+.6f", c.Dec), c.Kind, number("%.3f", c.RealProbability),
			number("%.1f", c.Significance), number("%.3f", c.Mag), dash(c.Filter), dash(c.Night), c.Frame)
	})
}

// ListFrames writes frames for people, a line each.
func ListFrames(w io.Writer, list []FrameRecord) error {
	return writeTable(w, "frame\tstatus\tfield\tfilter\tmid_mjd\tlimit_mag\tcandidates\treason", len(list), func(i int) string {
		r := &list[i]
		return fmt.Sprintf("%s\t%s\t%s\t%s\t%s\t%s\t%d\t%s", r.Frame, r.Status, dash(r.Field), dash(r.Filter), number("%.5f", r.MidMJD),
			number("%.3f", r.MagLimit5Sigma), r.Candidates, dash(r.Reason))
	})
}

// ListLabels writes labels for people, a line each.
func ListLabels(w io.Writer, list []Label) error {
	return writeTable(w, "candidate\tverdict\treviewer\ttime\tframe\tx_px\ty_px\tcomment", len(list), func(i int) string {
		l := &list[i]
		now := l.Candidate
		if now == "" {
			now = "(gone) " + l.Given
		}
		return fmt.Sprintf("%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s", now, l.Verdict, l.Reviewer, l.Time.Format(time.DateTime), l.Frame,
			number("%.1f", l.X), number("%.1f", l.Y), oneLine(l.Comment))
	})
}

// ListDecisions writes merges and splits for people, a line each.
func ListDecisions(w io.Writer, list []Decision) error {
	return writeTable(w, "decision\tkind\tabout\tby\ttime\twithdrawn\tcomment", len(list), func(i int) string {
		d := &list[i]
		return fmt.Sprintf("%s\t%s\t%s\t%s\t%s\t%s\t%s", d.ID, d.Kind, strings.Join(d.About, ", "), d.Remark.Author, d.Remark.Time.Format(time.DateTime),
			dash(d.Withdrawn), oneLine(d.Remark.Comment))
	})
}

func oneLine(s string) string { return dash(strings.Join(strings.Fields(s), " ")) }
