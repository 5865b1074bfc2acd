package catalog

import (
	"context"
	"fmt"
	"math"
	"strings"

	"nightsift/internal/astro"
	"nightsift/internal/voevent"
)

// AlertSettings say who sends an alert.
type AlertSettings struct {
	Survey       string // its name
	Authority    string // of identifiers in the Virtual Observatory; empty: made up from the prefix
	ContactName  string
	ContactEmail string
	Version      string   // of the program
	Date         string   // of the packet, ISO 8601, UTC
	Test         bool     // not to be acted on
	Supersedes   []string // identifiers of earlier packets about the object

	// Longitude, Latitude [deg] and Height [m] of the site; NaN if unknown.
	Longitude, Latitude, Height float64
}

// alertWarning stands in every packet.
const alertWarning = "This packet tells what was seen; it is no order to point a telescope. " +
	"The limits of each site (sun, horizon, weather, the safety of people and instruments) and its operators come first."

// Alert makes a VOEvent packet about an object, given by a name or a candidate of
// it: place and time of its first detection, what it was and is, and all
// detections. Its identifier ends in the number of detections, so that packets
// about later states are others. A rejected object is not announced.
func (s *Store) Alert(ctx context.Context, name string, a AlertSettings) (*voevent.Packet, error) {
	o, err := s.Object(ctx, name)
	if err != nil {
		return nil, err
	}
	if o.State == StateRejected {
		return nil, fmt.Errorf("object %s is in the state %s: it is announced only after another state was set", o.Name, o.State)
	}
	if math.IsNaN(o.FirstMJD) {
		return nil, fmt.Errorf("object %s: the time of its first detection is unknown: an alert needs one", o.Name)
	}
	members, err := s.Members(ctx, o)
	if err != nil {
		return nil, err
	}
	searched, err := s.SearchedAt(ctx, o.RA, o.Dec)
	if err != nil {
		return nil, err
	}
	if a.Authority == "" {
		a.Authority = madeUpAuthority(s.cfg.Prefix)
	}
	base := "ivo://" + a.Authority
	p := &voevent.Packet{
		IVORN: fmt.Sprintf("%s/new-objects#%s-n%d", base, localPart(o.Name, s.cfg.Prefix), o.Detections),
		Test:  a.Test,
		Author: voevent.Author{IVORN: base + "/nightsift", Title: "New objects of " + orThis(a.Survey), ShortName: s.cfg.Prefix,
			ContactName: a.ContactName, ContactEmail: a.ContactEmail},
		Date:       a.Date,
		Note:       "Magnitudes are of the difference from a deep reference. " + alertWarning,
		How:        "Difference imaging: frames compared with a deep reference of the same field, by nightsift " + a.Version + ".",
		Supersedes: a.Supersedes,
	}
	p.Where = voevent.Where{RA: astro.Wrap360(o.RA), Dec: o.Dec, Error: math.Hypot(o.RAErr, o.DecErr) / 3600, Time: astro.MJDToISO(o.FirstMJD),
		Site: orThis(a.Survey), Longitude: a.Longitude, Latitude: a.Latitude, Height: a.Height}
	for i := range searched {
		if f := &searched[i]; f.MidMJD == o.FirstMJD && !math.IsNaN(f.Exposure) {
			p.Where.TimeError = f.Exposure / 2
		}
	}
	p.Why = voevent.Why{Name: o.Name, Concept: "process.variation;em.opt", Probability: o.RealProbability,
		Description: "Light that changed against the reference: " + string(o.Kind) + ". The probability is that of a real change on the sky, not a defect of the data. " + alertWarning}
	h := history(o, searched, members)
	p.What = alertValues(o, members, h)
	p.List = &voevent.Table{Name: "detections", Description: "frames on which it was found, by time", Fields: []voevent.Entry{
		{Name: "mid_mjd", UCD: "time.epoch", Unit: "d", Description: "middle of the exposure, MJD UTC"},
		{Name: "filter", UCD: "meta.id;instr.filter"},
		{Name: "mag", UCD: "phot.mag", Unit: "mag"},
		{Name: "mag_err", UCD: "stat.error;phot.mag", Unit: "mag", Description: "1 sigma"},
		{Name: "significance", UCD: "stat.snr", Description: "signed peak score in sigma"},
		{Name: "real_probability", UCD: "stat.probability"},
		{Name: "candidate_id", UCD: "meta.id"},
	}}
	for i := range members {
		m := &members[i]
		p.List.Rows = append(p.List.Rows, []any{m.MidMJD, m.Filter, m.Mag, m.MagErr, m.Significance, m.RealProbability, m.ID})
	}
	return p, nil
}

// alertValues are what an alert says of an object in single values.
func alertValues(o Object, members []Member, h History) []voevent.Entry {
	list := []voevent.Entry{
		{Name: "object", UCD: "meta.id", Value: o.Name, Description: "designation by position"},
		{Name: "kind", UCD: "meta.code.class", Value: string(o.Kind), Description: "of the most significant detection"},
		{Name: "detections", UCD: "meta.number", Value: o.Detections, Description: "frames on which it was found"},
		{Name: "nights", UCD: "meta.number", Value: o.Nights, Description: "nights in which it was found"},
		{Name: "ra_err", UCD: "stat.error;pos.eq.ra", Unit: "arcsec", Value: o.RAErr, Description: "1 sigma on the sky"},
		{Name: "dec_err", UCD: "stat.error;pos.eq.dec", Unit: "arcsec", Value: o.DecErr, Description: "1 sigma"},
		{Name: "first_mjd", UCD: "time.epoch", Unit: "d", Value: o.FirstMJD, Description: "first detection, MJD UTC"},
		{Name: "last_mjd", UCD: "time.epoch", Unit: "d", Value: o.LastMJD, Description: "last detection, MJD UTC"},
		{Name: "rise", Unit: "mag/d", Value: h.Rise, Description: "brightening from the first detection to the peak in its filter"},
		{Name: "rise_at_least", Unit: "mag/d", Value: h.RiseLimit, Description: "brightening since the last frame without it, in the same filter"},
	}
	for k := len(members) - 1; k >= 0; k-- {
		if m := &members[k]; !math.IsNaN(m.Mag) {
			list = append(list, voevent.Entry{Name: "latest", Description: "the latest magnitude", Entries: []voevent.Entry{
				{Name: "mid_mjd", UCD: "time.epoch", Unit: "d", Value: m.MidMJD}, {Name: "filter", UCD: "meta.id;instr.filter", Value: m.Filter},
				{Name: "mag", UCD: "phot.mag", Unit: "mag", Value: m.Mag}, {Name: "mag_err", UCD: "stat.error;phot.mag", Unit: "mag", Value: m.MagErr}}})
			break
		}
	}
	if f := h.LastMissed; f != nil {
		list = append(list, voevent.Entry{Name: "last_missed", Description: "the last frame before the first detection, without it", Entries: []voevent.Entry{
			{Name: "mid_mjd", UCD: "time.epoch", Unit: "d", Value: f.MidMJD}, {Name: "filter", UCD: "meta.id;instr.filter", Value: f.Filter},
			{Name: "mag_limit", UCD: "phot.mag;stat.max", Unit: "mag", Value: f.MagLimit5Sigma, Description: "5 sigma"}}})
	}
	return list
}

func orThis(survey string) string {
	if survey == "" {
		return "this survey"
	}
	return survey
}

// madeUpAuthority turns a prefix of designations into a name that looks like an
// authority but is registered nowhere.
func madeUpAuthority(prefix string) string {
	return strings.ToLower(plainLetters(prefix)) + ".survey.invalid"
}

// localPart is a designation without prefix and blanks.
func localPart(name, prefix string) string {
	return plainLetters(strings.TrimSpace(strings.TrimPrefix(name, prefix)))
}

// plainLetters keeps what identifiers may hold.
func plainLetters(s string) string {
	return strings.Map(func(r rune) rune {
		switch {
		case 'a' <= r && r <= 'z', 'A' <= r && r <= 'Z', '0' <= r && r <= '9', r == '+', r == '-', r == '.':
			return r
		}
		return -1
	}, s)
}
