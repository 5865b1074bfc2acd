package vetting

import (
	"context"
	"errors"
	"fmt"
	"html/template"
	"math"
	"slices"
	"strings"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/astro"
	"nightsift/internal/report"
)

// stamp is one cut-out; Missing says why there is none.
type stamp struct {
	Name, Missing string
	Picture       template.URL
}

// fact is a number with its name.
type fact struct{ Name, Value string }

// Long reports whether the value needs the width of two.
func (f fact) Long() bool { return len([]rune(f.Value)) > 24 }

// compass tells how the sky lies on the stamps: the ends of arrows to the north
// and east in a square from -1 to 1, y downwards.
type compass struct{ NorthX, NorthY, EastX, EastY float64 }

// ToX and ToY are the way from the end of the arrow to its letter.
func (c *compass) ToX() float64 { return c.NorthX / 2 }
func (c *compass) ToY() float64 { return c.NorthY / 2 }

// card is what a page shows of a candidate.
type card struct {
	Candidate *detect.Candidate
	Stamps    []stamp
	Compass   *compass
	Width     string // of a stamp on the sky
	Kind      string
	Percent   int // of the probability; -1 if unknown
	Facts     []fact
	Gaps      []string // what is missing in the catalogue
	Object    *catalog.Object
	History   string          // of its object
	Others    []detection     // of its object, the newest first
	More      int             // detections of the object that are not listed
	Labels    []catalog.Label // that count
	Own       *catalog.Label  // of this reviewer
	Disputed  bool            // real to one and bogus to another
}

// detection is a line of an object's history.
type detection struct {
	ID, When, Filter, Mag, Score, Probability, Kind string
	Joined                                          bool // too improbable to form the object
}

const mostOthers = 6

// cards prepares the candidates of a page. They are read one by one, so that a
// damaged one does not hide the others.
func (s *Server) cards(ctx context.Context, list []detect.Candidate, labels map[string][]catalog.Label, reviewer string) ([]*card, error) {
	if len(list) == 0 {
		return nil, nil
	}
	ids, names := make([]string, len(list)), map[string]bool{}
	for i := range list {
		ids[i], names[list[i].Frame] = list[i].ID, true
	}
	var frames []string
	for f := range names {
		frames = append(frames, f)
	}
	records, err := s.store.Frames(ctx, catalog.FrameQuery{Condition: oneOf("frame", frames)})
	if err != nil {
		return nil, err
	}
	frameOf := map[string]*catalog.FrameRecord{}
	for i := range records {
		frameOf[records[i].Frame] = &records[i]
	}
	objects, err := s.objectsOf(ctx, ids)
	if err != nil {
		return nil, err
	}
	out := make([]*card, len(list))
	for i := range list {
		c := list[i]
		full, err := s.store.Candidate(ctx, c.ID)
		switch {
		case err == nil:
			c = full
		case ctx.Err() != nil:
			return nil, err
		}
		k := newCard(&c, frameOf[c.Frame], labels[c.ID], reviewer)
		if err != nil && !errors.Is(err, catalog.ErrNotFound) {
			k.Gaps = append(k.Gaps, "cut-outs and features cannot be read: "+err.Error())
		}
		if o := objects[c.ID]; o != nil {
			k.Object = &o.Object
			k.History = historyWords(&o.Object)
			if o.broken != nil {
				k.Gaps = append(k.Gaps, "the object's other detections, which cannot be read: "+o.broken.Error())
			}
			for j := len(o.members) - 1; j >= 0; j-- {
				m := &o.members[j]
				if m.ID == c.ID {
					continue
				}
				if len(k.Others) == mostOthers {
					k.More++
					continue
				}
				k.Others = append(k.Others, detectionOf(m))
			}
		}
		out[i] = k
	}
	return out, nil
}

// known is an object with its detections by time, or why they cannot be read.
type known struct {
	catalog.Object
	members []catalog.Member
	broken  error
}

// objectsOf returns the objects of candidates, by candidate.
func (s *Server) objectsOf(ctx context.Context, ids []string) (map[string]*known, error) {
	list, err := s.store.Objects(ctx, catalog.ObjectQuery{
		Condition: "object IN (SELECT object FROM view_candidates WHERE " + oneOf("candidate_id", ids) + ")"})
	if err != nil {
		return nil, err
	}
	out := map[string]*known{}
	for i := range list {
		k := &known{Object: list[i]}
		if k.members, k.broken = s.store.Members(ctx, k.Object); k.broken == nil {
			for j := range k.members {
				out[k.members[j].ID] = k
			}
			continue
		}
		// One of them is damaged; the others are still its detections.
		some, err := s.store.Candidates(ctx, catalog.CandidateQuery{Condition: oneOf("candidate_id", ids) + " AND object = " + quoted(k.Name)})
		if err != nil {
			return nil, err
		}
		for j := range some {
			out[some[j].ID] = k
		}
	}
	return out, nil
}

func newCard(c *detect.Candidate, rec *catalog.FrameRecord, labels []catalog.Label, reviewer string) *card {
	k := &card{Candidate: c, Kind: words(string(c.Kind)), Percent: -1, Labels: labels, Disputed: disputed(labels)}
	if i := slices.IndexFunc(labels, func(l catalog.Label) bool { return l.Reviewer == reviewer }); i >= 0 {
		k.Own = &labels[i]
	}
	if p := c.RealProbability; p >= 0 && p <= 1 {
		k.Percent = int(math.Round(100 * p))
	}
	if k.Kind == "" {
		k.Kind = "kind not known"
		k.Gaps = append(k.Gaps, "kind")
	}
	k.stamps()
	if rec == nil {
		k.Gaps = append(k.Gaps, "the frame's record")
	} else {
		k.orient(rec.Jacobian)
	}
	k.facts(rec)
	return k
}

// stamps renders the three cut-outs.
func (k *card) stamps() {
	c := k.Candidate
	n, r, d, err := report.Pictures(c)
	uris := []string{n, r, d}
	for i, name := range []string{"new", "reference", "difference"} {
		st := stamp{Name: name, Picture: template.URL(uris[i])}
		plane := *detect.Stamps[i].Plane(c)
		const want = detect.StampSize * detect.StampSize
		switch {
		case err != nil:
			st.Missing = "no picture: " + err.Error()
		case plane == nil:
			st.Missing = "no cut-out stored"
		case len(plane) != want:
			st.Missing = fmt.Sprintf("cut-out damaged: %d pixels, expected %d", len(plane), want)
		case !slices.ContainsFunc(plane, func(v float32) bool { return v == v }):
			st.Missing = "cut-out without any value"
		}
		if st.Missing != "" {
			st.Picture = ""
			k.Gaps = append(k.Gaps, "cut-out "+name)
		}
		k.Stamps = append(k.Stamps, st)
	}
}

// orient sets compass and width from the change of the sky position with the
// pixel, arcsec per px.
func (k *card) orient(j [4]float64) {
	area := math.Abs(j[0]*j[3] - j[1]*j[2])
	if !(area > 0) || math.IsInf(area, 0) {
		return
	}
	k.Width = fmt.Sprintf("%.0f″", detect.StampSize*math.Sqrt(area))
	// The pixel step to the north: the inverse of the matrix applied to (0, 1).
	arrow := func(x, y float64) (float64, float64) {
		n := math.Hypot(x, y)
		return 0.8 * x / n, -0.8 * y / n
	}
	det := j[0]*j[3] - j[1]*j[2]
	var c compass
	c.NorthX, c.NorthY = arrow(-j[1]/det, j[0]/det)
	c.EastX, c.EastY = arrow(j[3]/det, -j[2]/det)
	k.Compass = &c
}

// facts lists what a reviewer needs to know, and as gaps what is not known.
func (k *card) facts(rec *catalog.FrameRecord) {
	c := k.Candidate
	add := func(name, value string) {
		if value == "" {
			k.Gaps = append(k.Gaps, name)
			return
		}
		k.Facts = append(k.Facts, fact{name, value})
	}
	add("probability", number("%.3f", c.RealProbability))
	if v := number("%+.1f", c.Significance); v != "" {
		add("significance", v+" σ")
	} else {
		add("significance", "")
	}
	switch {
	case finite(c.Mag):
		add("brightness", withError("%.2f", c.Mag, c.MagErr)+" mag")
	case finite(c.Flux):
		add("brightness", withError("%.0f", c.Flux, c.FluxErr)+" counts")
	default:
		add("brightness", "")
	}
	if v := number("%.2f", c.MagLimit); v != "" {
		add("5σ limit here", v+" mag")
	}
	if onSky(c.RA, c.Dec) {
		add("position", position(c.RA, c.Dec))
		add("in degrees", degrees(c.RA, c.Dec))
	} else {
		add("position", "")
	}
	near := "nothing known"
	if v := number("%.1f", c.ReferenceDistance); v != "" {
		near = "nearest source " + v + "″ away"
		if m := number("%.2f", c.ReferenceMag); m != "" {
			near += ", " + m + " mag"
		}
	}
	add("on the reference", near)
	add("seen", strings.TrimSpace(when(c.MidMJD)+" "+c.Filter))
	add("frame", c.Frame)
	if finite(c.X) && finite(c.Y) {
		add("on the frame", fmt.Sprintf("x %.1f, y %.1f", c.X, c.Y))
	} else {
		add("place on the frame", "")
	}
	if finite(c.Length) {
		add("trail", fmt.Sprintf("%.1f px long, %s° from +x", c.Length, number("%.0f", c.Angle)))
	}
	if v := number("%.2f", c.FitChi2); v != "" {
		add("fit", "χ² "+v+" for each pixel")
	}
	if c.Flags != 0 {
		add("flags", strings.ReplaceAll(c.Flags.String(), "_", " "))
	}
	if rec != nil {
		if v := number("%.1f", rec.FWHM); v != "" {
			add("sharpness", v+" px FWHM")
		}
		if rec.Field != "" {
			add("field", rec.Field)
		}
	}
}

func detectionOf(m *catalog.Member) detection {
	d := detection{ID: m.ID, When: when(m.MidMJD), Filter: m.Filter, Kind: words(string(m.Kind)), Joined: !m.Forms,
		Score: number("%+.1f", m.Significance), Probability: number("%.2f", m.RealProbability), Mag: number("%.2f", m.Mag)}
	if d.Mag != "" {
		d.Mag = withError("%.2f", m.Mag, m.MagErr)
	}
	return d
}

func historyWords(o *catalog.Object) string {
	text := fmt.Sprintf("%s in %s", count(o.Detections, "detection"), count(o.Nights, "night"))
	if o.FirstNight != "" && o.LastNight != "" && o.FirstNight != o.LastNight {
		text += ", " + o.FirstNight + " to " + o.LastNight
	} else if o.FirstNight != "" {
		text += ", " + o.FirstNight
	}
	if v := number("%.2f", o.PeakMag); v != "" {
		text += ", brightest " + v + " mag"
	}
	return text
}

func count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

func onSky(ra, dec float64) bool { return ra >= 0 && ra < 360 && dec >= -90 && dec <= 90 }

// position writes a place [deg] in hours and degrees, with minutes and seconds.
func position(ra, dec float64) string {
	return astro.FormatRA(ra, 2) + " " + astro.FormatDec(dec, 1)
}

func degrees(ra, dec float64) string { return fmt.Sprintf("%.5f %+.5f", ra, dec) }

// number formats a number, an unknown one as nothing.
func number(format string, x float64) string {
	if !finite(x) {
		return ""
	}
	return fmt.Sprintf(format, x)
}

func withError(format string, x, err float64) string {
	text := number(format, x)
	if e := number(format, err); e != "" {
		text += " ± " + e
	}
	return text
}

// when writes a date to the minute, nothing if it is unknown or absurd.
func when(mjd float64) string {
	if !(mjd > -600000 && mjd < 2900000) {
		return ""
	}
	text := strings.Replace(astro.MJDToISO(mjd), "T", " ", 1)
	if day, clock, ok := strings.Cut(text, " "); ok && len(clock) >= 5 {
		return day + " " + clock[:5]
	}
	return text
}

// words turns a slug into plain words.
func words(slug string) string { return strings.ReplaceAll(slug, "_", " ") }
