package survey

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/astro"
	"nightsift/internal/minorplanets"
	"nightsift/internal/tracklets"
)

// Mover is a detection of something that moves: a known minor planet, a member of
// a tracklet, or both.
type Mover struct {
	Candidate detect.Candidate // of kind moving
	Err       float64          // arcsec, of its place in each axis
	Tracklet  string           // identifier; empty for none
	Known     bool
	Match     minorplanets.Match // where Known
}

// site is the place on the Earth; ok is false where the latitude is not given.
func (c *Config) site() (s astro.Site, ok bool) {
	latitude, ok := asNumber(c.MinorPlanets.LatitudeDeg)
	return astro.Site{Longitude: c.Survey.LongitudeDeg, Latitude: latitude, Height: c.MinorPlanets.HeightM}, ok
}

// minorPlanets checks the section [minor_planets]; key names what is wrong.
func (c *Config) minorPlanets() (limits minorplanets.Limits, key, want string) {
	m := &c.MinorPlanets
	limits = minorplanets.DefaultLimits()
	limits.Radius, limits.MaxError = m.RadiusArcsec, m.MaxErrorArcsec
	latitude, given := asNumber(m.LatitudeDeg)
	switch {
	case !given && m.LatitudeDeg != "" || given && !(latitude >= -90 && latitude <= 90):
		return limits, "latitude_deg", "-90 to 90"
	case !given && m.Elements != "":
		return limits, "latitude_deg", "the site's latitude, because there are elements: near objects are seen elsewhere from another place"
	case !(m.HeightM >= -500 && m.HeightM <= 9000):
		return limits, "height_m", "-500 to 9000"
	case !(m.RadiusArcsec > 0 && m.RadiusArcsec <= 60):
		return limits, "radius_arcsec", "more than 0, at most 60"
	case !(m.MaxErrorArcsec > 0 && m.MaxErrorArcsec <= 600):
		return limits, "max_error_arcsec", "more than 0, at most 600"
	}
	return limits, "", ""
}

// MoversCSV is the table of what moves in a night, with the names of known minor
// planets.
const MoversCSV = "movers.csv"

// moverFinder knows orbits and the site.
type moverFinder struct {
	known  *minorplanets.Catalogue
	site   astro.Site
	limits minorplanets.Limits
}

// moverFinder reads the configured file of elements; nil without one.
func (f *Folder) moverFinder() (*moverFinder, error) {
	limits, key, want := f.Config.minorPlanets()
	if key != "" {
		return nil, &ConfigError{fmt.Sprintf("minor_planets.%s: want %s", key, want)}
	}
	if f.Config.MinorPlanets.Elements == "" {
		return nil, nil
	}
	orbits, err := minorplanets.Read(f.path(f.Config.MinorPlanets.Elements))
	if err != nil {
		return nil, &ConfigError{fmt.Sprintf("minor_planets.elements: %v", err)}
	}
	site, _ := f.Config.site()
	return &moverFinder{minorplanets.NewCatalogue(orbits), site, limits}, nil
}

// orbitsDigest tells one set of orbits, and of settings on which the naming
// depends, from others; empty without orbits.
func (f *Folder) orbitsDigest() (string, error) {
	m := &f.Config.MinorPlanets
	if m.Elements == "" {
		return "", nil
	}
	sum, err := fileChecksum(f.path(m.Elements))
	if err != nil {
		return "", &ConfigError{fmt.Sprintf("minor_planets.elements: %v", err)}
	}
	return fmt.Sprint(sum, f.Config.Survey.LongitudeDeg, m.LatitudeDeg, m.HeightM, m.RadiusArcsec, m.MaxErrorArcsec), nil
}

// NameMovers lists what moves in a night that was searched: candidates that belong
// to a tracklet, and those at the place where a minor planet of the configured
// file of elements is predicted. All are given the kind moving. Without elements
// only tracklets are listed.
func (f *Folder) NameMovers(night string) ([]Mover, error) {
	dir := f.nightDir(night)
	if _, err := os.Stat(dir); err != nil {
		return nil, &ConfigError{fmt.Sprintf("night %s: there are no results in %s", night, dir)}
	}
	records, candidates, err := ReadResults(dir)
	if err != nil {
		return nil, err
	}
	finder, err := f.moverFinder()
	if err != nil {
		return nil, err
	}
	return judgeNight(records, candidates, finder).list, nil
}

// TrackSheet joins the tracklets of several nights, from the first to the last
// named, that belong to no known minor planet, and lists those that one body may
// have made: a row for each tracklet of a track.
func (f *Folder) TrackSheet(from, to string) (*catalog.Sheet, error) {
	finder, err := f.moverFinder()
	if err != nil {
		return nil, err
	}
	entries, err := os.ReadDir(f.path(f.Config.Folders.Nights))
	if err != nil {
		return nil, err
	}
	var list []tracklets.Night
	members := map[string]string{}
	for _, entry := range entries {
		night := entry.Name()
		if !entry.IsDir() || night == undated || night < from || night > to {
			continue
		}
		records, candidates, err := ReadResults(f.nightDir(night))
		if err != nil {
			return nil, err
		}
		found := judgeNight(records, candidates, finder)
		names := found.names()
		// A tracklet is there once, however often its field was visited.
		fields := map[string]float64{}
		for i := range records {
			if r := &records[i]; r.Status == catalog.Searched && areaOf(r) > 0 {
				fields[r.Field] = max(fields[r.Field], areaOf(r))
			}
		}
		area := 0.0
		for _, a := range fields {
			area += a
		}
		for _, t := range found.tracklets {
			known := false
			var ids []string
			for _, m := range t.Members {
				ids = append(ids, found.linked[m].ID)
				known = known || names[found.linked[m].ID] != ""
			}
			if !known {
				list = append(list, tracklets.Night{Tracklet: t, Night: night, Area: area})
				members[t.ID] = strings.Join(ids, ";")
			}
		}
	}
	type row struct {
		track string
		*tracklets.Night
		tracklets.Link
	}
	var rows []row
	for _, t := range tracklets.Join(list, tracklets.DefaultNightsConfig()) {
		for _, l := range t.Links {
			rows = append(rows, row{t.ID, &list[l.Index], l})
		}
	}
	s := &catalog.Sheet{Name: "tracks", Rows: len(rows)}
	text := func(name, description string, value func(*row) string) {
		addText(s, name, description, func(i int) string { return value(&rows[i]) })
	}
	number := func(name, unit, description string, value func(*row) float64) {
		addNumber(s, name, unit, description, func(i int) float64 { return value(&rows[i]) })
	}
	text("track", "identifier of the track", func(r *row) string { return r.track })
	text("night", "evening of the tracklet", func(r *row) string { return r.Night.Night })
	text("tracklet", "identifier of the tracklet", func(r *row) string { return r.ID })
	text("members", "candidate_id of its detections", func(r *row) string { return members[r.ID] })
	number("mean_mjd", "d", "mean time of its detections, MJD UTC", func(r *row) float64 { return r.MJD })
	number("ra_deg", "deg", "right ascension then, ICRS", func(r *row) float64 { return r.RA })
	number("dec_deg", "deg", "declination then, ICRS", func(r *row) float64 { return r.Dec })
	number("rate", "arcsec/h", "motion within the night", func(r *row) float64 { return r.Tracklet.Rate })
	number("angle_deg", "deg", "its direction, from north through east", func(r *row) float64 { return r.Tracklet.Angle })
	number("rate_before", "arcsec/h", "motion since the tracklet before", func(r *row) float64 { return r.Link.Rate })
	number("angle_before_deg", "deg", "its direction", func(r *row) float64 { return r.Link.Angle })
	number("offset_arcsec", "arcsec", "from where the tracklet before and the mean of both rates lead", func(r *row) float64 { return r.Offset })
	number("offset_sigma", "", "the same in units of its error", func(r *row) float64 { return r.Sigma })
	number("expected_by_chance", "", "tracklets that chance would have put there", func(r *row) float64 { return r.Link.Expected })
	return s, nil
}

// foundMovers is what moves in a night.
type foundMovers struct {
	list      []Mover
	tracklets []tracklets.Tracklet
	linked    []tracklets.Detection // that the members of tracklets refer to
}

// names gives the designation by candidate_id of detections of known minor
// planets.
func (m *foundMovers) names() map[string]string {
	names := map[string]string{}
	for i := range m.list {
		if m.list[i].Known {
			names[m.list[i].Candidate.ID] = m.list[i].Match.Designation
		}
	}
	return names
}

// leastMover is the least probability of a candidate that is looked for among the
// minor planets: a known place speaks for it.
const leastMover = 0.1

// judgeNight brings to the candidates of a night what only the frames together
// show: what repeats on the detector, and what moves.
func judgeNight(records []catalog.FrameRecord, candidates []detect.Candidate, finder *moverFinder) *foundMovers {
	judgeRepeated(records, candidates)
	return findMovers(records, candidates, finder)
}

// findMovers links tracklets and finds known minor planets (finder may be nil),
// and makes the candidates that belong to either kind moving.
func findMovers(records []catalog.FrameRecord, candidates []detect.Candidate, finder *moverFinder) *foundMovers {
	out := &foundMovers{}
	out.tracklets, out.linked = linkMovers(records, candidates)
	tracklet := map[string]string{}
	for _, t := range out.tracklets {
		for _, m := range t.Members {
			tracklet[out.linked[m].ID] = t.ID
		}
	}
	scale := map[string]float64{}
	for _, r := range records {
		j := r.Jacobian
		scale[r.Frame] = math.Sqrt(math.Abs(j[0]*j[3] - j[1]*j[2]))
	}
	var sky *minorplanets.Sky
	if first, last := span(candidates); finder != nil && last >= first {
		sky = finder.known.At(&finder.site, (first+last)/2)
	}
	for i := range candidates {
		c := &candidates[i]
		m := Mover{Err: scale[c.Frame] * math.Hypot(c.XErr, c.YErr) / math.Sqrt2, Tracklet: tracklet[c.ID]}
		switch c.Kind {
		case detect.NewSource, detect.Brightened, detect.Moving:
			if sky != nil && c.RealProbability >= leastMover {
				m.Match, m.Known = sky.Match(c.RA, c.Dec, c.MidMJD, m.Err, finder.limits)
			}
		}
		if m.Known || m.Tracklet != "" {
			c.Kind = detect.Moving
			m.Candidate = *c
			out.list = append(out.list, m)
		}
	}
	return out
}

// span returns the times of the first and the last candidate.
func span(list []detect.Candidate) (first, last float64) {
	first, last = math.Inf(1), math.Inf(-1)
	for i := range list {
		if t := list[i].MidMJD; t == t {
			first, last = min(first, t), max(last, t)
		}
	}
	return first, last
}

// MoverSheet returns movers as a table.
func MoverSheet(list []Mover) *catalog.Sheet {
	s := &catalog.Sheet{Name: "movers", Rows: len(list)}
	text := func(name, description string, value func(*Mover) string) {
		addText(s, name, description, func(i int) string { return value(&list[i]) })
	}
	number := func(name, unit, description string, known bool, value func(*Mover) float64) {
		addNumber(s, name, unit, description, func(i int) float64 {
			if known && !list[i].Known {
				return math.NaN()
			}
			return value(&list[i])
		})
	}
	text("designation", "of the known minor planet", func(m *Mover) string { return m.Match.Designation })
	text("tracklet", "identifier of the tracklet", func(m *Mover) string { return m.Tracklet })
	text("candidate_id", "identifier of the detection", func(m *Mover) string { return m.Candidate.ID })
	text("frame", "name of the new frame", func(m *Mover) string { return m.Candidate.Frame })
	text("filter", "filter of the new frame", func(m *Mover) string { return m.Candidate.Filter })
	number("mid_mjd", "d", "middle of the exposure, MJD UTC", false, func(m *Mover) float64 { return m.Candidate.MidMJD })
	number("ra_deg", "deg", "right ascension, ICRS", false, func(m *Mover) float64 { return m.Candidate.RA })
	number("dec_deg", "deg", "declination, ICRS", false, func(m *Mover) float64 { return m.Candidate.Dec })
	number("err_arcsec", "arcsec", "1 sigma error of the place", false, func(m *Mover) float64 { return m.Err })
	number("mag", "mag", "magnitude", false, func(m *Mover) float64 { return m.Candidate.Mag })
	number("offset_arcsec", "arcsec", "distance from the predicted place", true, func(m *Mover) float64 { return m.Match.Offset })
	number("predicted_err_arcsec", "arcsec", "1 sigma error of the predicted place", true, func(m *Mover) float64 { return m.Match.Error })
	number("predicted_mag", "mag", "predicted V magnitude", true, func(m *Mover) float64 { return m.Match.Mag })
	number("predicted_rate", "arcsec/h", "predicted motion", true, func(m *Mover) float64 { return m.Match.Rate })
	number("predicted_angle", "deg", "its direction, from north through east", true, func(m *Mover) float64 { return m.Match.Angle })
	return s
}

// WriteMovers writes movers in the standard form for the exchange of astrometry,
// with the sender that [minor_planets] names.
func (f *Folder) WriteMovers(path string, list []Mover) error {
	m := &f.Config.MinorPlanets
	names := func(text string) []string {
		var out []string
		for _, n := range strings.Split(text, ",") {
			if n = strings.TrimSpace(n); n != "" {
				out = append(out, n)
			}
		}
		return out
	}
	sender := minorplanets.Sender{Station: m.Station, Submitter: m.Submitter, Observers: names(m.Observers), Measurers: names(m.Measurers),
		Design: m.TelescopeDesign, Aperture: m.TelescopeApertureM, Detector: m.Detector}
	if err := sender.Check(); err != nil {
		return &ConfigError{fmt.Sprintf("%s: minor_planets: %v", filepath.Join(f.Dir, ConfigName), err)}
	}
	var places []minorplanets.Astrometry
	for i := range list {
		c := &list[i].Candidate
		a := minorplanets.Astrometry{Designation: list[i].Match.Designation, MJD: c.MidMJD, RA: c.RA, Dec: c.Dec, RAErr: list[i].Err, DecErr: list[i].Err,
			Mag: c.Mag, MagErr: c.MagErr, Band: c.Filter}
		if t := list[i].Tracklet; t != "" {
			a.Tracklet = t[:min(8, len(t))]
		}
		places = append(places, a)
	}
	return minorplanets.WriteExchange(path, sender, places)
}
