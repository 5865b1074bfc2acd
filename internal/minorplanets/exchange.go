package minorplanets

import (
	"fmt"
	"io"
	"math"
	"strings"

	"nightsift/internal/astro"
	"nightsift/internal/wholefile"
)

// Astrometry is one place of something that moved.
type Astrometry struct {
	Designation    string // of a known minor planet; empty for a new one
	Tracklet       string // the finder's own name of the track, at most 8 letters and digits
	MJD            float64
	RA, Dec        float64 // deg, ICRS
	RAErr, DecErr  float64 // arcsec on the sky, NaN if unknown
	Mag, MagErr    float64 // NaN if unknown
	Band           string  // of Mag
	StarsCatalogue string  // from which the astrometry comes, as the standard abbreviates it; empty: UNK
}

// Sender says who observed, for the heading of the exchange form.
type Sender struct {
	Station   string // code of the observatory, three or four letters and digits
	Submitter string
	Observers []string
	Measurers []string
	Design    string  // of the telescope: Reflector, Refractor…
	Aperture  float64 // m
	Detector  string  // CCD, CMO…
}

// Check reports what the heading lacks.
func (s *Sender) Check() error {
	code := strings.TrimFunc(s.Station, func(r rune) bool { return r >= '0' && r <= '9' || r >= 'A' && r <= 'Z' || r >= 'a' && r <= 'z' })
	switch {
	case len(s.Station) < 3 || len(s.Station) > 4 || code != "":
		return fmt.Errorf("station %q: want the observatory's code of three or four letters and digits", s.Station)
	case s.Submitter == "" || len(s.Observers) == 0 || len(s.Measurers) == 0:
		return fmt.Errorf("the exchange form needs a submitter, observers and measurers")
	case s.Design == "" || s.Detector == "" || !(s.Aperture > 0):
		return fmt.Errorf("the exchange form needs the telescope's design, its aperture in metres and its detector")
	}
	return nil
}

// WriteExchange writes places in the standard form for the exchange of astrometry
// (ADES, version 2022, adopted by the IAU in 2015; its form of lines, PSV): whole
// or not at all. Known minor planets stand under their number or provisional
// designation, others under the name of the track.
func WriteExchange(path string, s Sender, list []Astrometry) error {
	if err := s.Check(); err != nil {
		return err
	}
	for i := range list {
		if err := list[i].check(); err != nil {
			return fmt.Errorf("place %d: %w", i+1, err)
		}
	}
	return wholefile.Write(path, func(w io.Writer) error { return encodeExchange(w, s, list) })
}

func (a *Astrometry) check() error {
	switch {
	case a.Designation == "" && (a.Tracklet == "" || len(a.Tracklet) > 8 || strings.ContainsAny(a.Tracklet, "| \t\n")):
		return fmt.Errorf("track %q: want 1 to 8 letters and digits", a.Tracklet)
	case astro.MJDToISO(a.MJD) == "":
		return fmt.Errorf("time MJD %v: want a date", a.MJD)
	case !(a.RA >= 0 && a.RA < 360 && a.Dec >= -90 && a.Dec <= 90):
		return fmt.Errorf("place %v, %v: want right ascension from 0 to 360 and declination from -90 to 90 degrees", a.RA, a.Dec)
	}
	return nil
}

// exchangeFields are the columns in the order of the form.
var exchangeFields = []struct {
	name  string
	width int
	value func(*Astrometry, *Sender) string
}{
	{"permID", 7, func(a *Astrometry, _ *Sender) string { p, _ := parted(a.Designation); return p }},
	{"provID", 11, func(a *Astrometry, _ *Sender) string { _, p := parted(a.Designation); return p }},
	{"trkSub", 8, func(a *Astrometry, _ *Sender) string { return a.Tracklet }},
	{"mode", 4, func(_ *Astrometry, s *Sender) string { return s.Detector }},
	{"stn", 4, func(_ *Astrometry, s *Sender) string { return s.Station }},
	{"obsTime", 24, func(a *Astrometry, _ *Sender) string { return astro.MJDToISO(a.MJD) + "Z" }},
	{"ra", 11, func(a *Astrometry, _ *Sender) string { return fmt.Sprintf("%.7f", a.RA) }},
	{"dec", 11, func(a *Astrometry, _ *Sender) string { return fmt.Sprintf("%+.7f", a.Dec) }},
	{"rmsRA", 6, func(a *Astrometry, _ *Sender) string { return known("%.3f", a.RAErr) }},
	{"rmsDec", 6, func(a *Astrometry, _ *Sender) string { return known("%.3f", a.DecErr) }},
	{"astCat", 8, func(a *Astrometry, _ *Sender) string {
		if a.StarsCatalogue == "" {
			return "UNK"
		}
		return a.StarsCatalogue
	}},
	{"mag", 6, func(a *Astrometry, _ *Sender) string { return known("%.2f", a.Mag) }},
	{"rmsMag", 6, func(a *Astrometry, _ *Sender) string { return known("%.3f", a.MagErr) }},
	{"band", 4, func(a *Astrometry, _ *Sender) string {
		if a.Mag != a.Mag {
			return ""
		}
		return a.Band
	}},
}

func known(format string, v float64) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return ""
	}
	return fmt.Sprintf(format, v)
}

// parted tells a permanent number, "(12345) Name", from a provisional designation.
func parted(designation string) (permanent, provisional string) {
	if rest, ok := strings.CutPrefix(designation, "("); ok {
		if number, _, ok := strings.Cut(rest, ")"); ok {
			return number, ""
		}
	}
	return "", designation
}

func encodeExchange(w io.Writer, s Sender, list []Astrometry) error {
	var b strings.Builder
	plain := func(text string) string { return strings.NewReplacer("|", " ", "\n", " ", "\r", " ").Replace(text) }
	fmt.Fprintf(&b, "# version=2022\n# observatory\n! mpcCode %s\n# submitter\n! name %s\n# observers\n", s.Station, plain(s.Submitter))
	for _, n := range s.Observers {
		fmt.Fprintf(&b, "! name %s\n", plain(n))
	}
	b.WriteString("# measurers\n")
	for _, n := range s.Measurers {
		fmt.Fprintf(&b, "! name %s\n", plain(n))
	}
	fmt.Fprintf(&b, "# telescope\n! design %s\n! aperture %g\n! detector %s\n", plain(s.Design), s.Aperture, plain(s.Detector))
	for k, f := range exchangeFields {
		if k > 0 {
			b.WriteByte('|')
		}
		fmt.Fprintf(&b, "%-*s", f.width, f.name)
	}
	b.WriteByte('\n')
	for i := range list {
		for k, f := range exchangeFields {
			if k > 0 {
				b.WriteByte('|')
			}
			fmt.Fprintf(&b, "%-*s", f.width, plain(f.value(&list[i], &s)))
		}
		b.WriteByte('\n')
	}
	_, err := io.WriteString(w, b.String())
	return err
}
