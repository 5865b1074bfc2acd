package survey

import (
	"errors"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/astro"
	"nightsift/internal/minorplanets"
)

const orbits = `designation,epoch_mjd,mean_anomaly_deg,perihelion_deg,node_deg,inclination_deg,eccentricity,semi_major_au,h_mag,g_slope,uncertainty
(7) Invented,61400,100,50,20,5,0.1,2.6,9,0.15,
X2,61400,200,50,20,5,0.1,2.6,12,,
`

// A detection where a minor planet is predicted gets its name; one elsewhere and one
// that is not likely real do not. The table and the exchange form show it.
func TestMinorPlanetsAreNamed(t *testing.T) {
	dir := t.TempDir()
	if err := Init(dir); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, ConfigName)
	text := strings.Replace(read(t, path), `elements = "" `, `elements = "orbits.csv" `, 1)
	write(t, path, []byte(text))
	var wrong *ConfigError
	if _, err := OpenFolder(dir); !errors.As(err, &wrong) || !strings.Contains(err.Error(), "minor_planets.latitude_deg") {
		t.Errorf("elements without a latitude: %v", err)
	}
	text = strings.Replace(text, `latitude_deg = "" `, `latitude_deg = -30.5 `, 1)
	write(t, path, []byte(text))
	f, err := OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := f.NameMovers("2027-01-05"); !errors.As(err, &wrong) {
		t.Errorf("a night without results: %v", err)
	}
	if err := os.MkdirAll(f.nightDir("2027-01-05"), 0o755); err != nil {
		t.Fatal(err)
	}
	if _, err := f.NameMovers("2027-01-05"); !errors.As(err, &wrong) || !strings.Contains(err.Error(), "orbits.csv") {
		t.Errorf("without the file of elements: %v", err)
	}
	write(t, filepath.Join(dir, "orbits.csv"), []byte(orbits))
	if list, err := f.NameMovers("2027-01-05"); err != nil || len(list) != 0 {
		t.Errorf("an empty night: %v, %v", list, err)
	}
	known, err := minorplanets.Read(filepath.Join(dir, "orbits.csv"))
	if err != nil {
		t.Fatal(err)
	}
	c := minorplanets.NewCatalogue(known)
	site, ok := f.Config.site()
	if !ok || site.Latitude != -30.5 {
		t.Fatalf("site %+v", site)
	}
	var records []catalog.FrameRecord
	var list []detect.Candidate
	for k, mjd := range []float64{61410.1, 61410.2} {
		r := catalog.NewFrameRecord([]string{"a", "b"}[k], catalog.Searched)
		r.Width, r.Height, r.Jacobian = 1000, 1000, [4]float64{-0.6, 0, 0, 0.6}
		records = append(records, r)
		for n, p := range c.Predict(&site, mjd) {
			ra, dec := astro.Offset(p.RA, p.Dec, 45, 1.0/3600)
			list = append(list, detect.Candidate{ID: r.Frame + string(rune('0'+n)), Frame: r.Frame, Filter: "r", MidMJD: mjd, RA: ra, Dec: dec, XErr: 0.2, YErr: 0.2,
				Mag: 18, MagErr: 0.1, Kind: detect.NewSource, RealProbability: []float64{0.9, 0.05}[n]})
		}
		list = append(list, detect.Candidate{ID: r.Frame + "s", Frame: r.Frame, MidMJD: mjd, RA: 10, Dec: 10, XErr: 0.2, YErr: 0.2, Kind: detect.NewSource, RealProbability: 0.9})
	}
	movers := findMovers(records, list, &moverFinder{c, site, minorplanets.DefaultLimits()}).list
	if len(movers) != 2 {
		t.Fatalf("%d movers, want 2: %+v", len(movers), movers)
	}
	for _, m := range movers {
		if !m.Known || m.Match.Designation != "(7) Invented" || m.Candidate.Kind != detect.Moving || math.Abs(m.Match.Offset-1) > 0.01 {
			t.Errorf("%+v", m)
		}
	}
	s := MoverSheet(movers)
	if s.Rows != 2 || s.Columns[0].Text[0] != "(7) Invented" {
		t.Errorf("%+v", s)
	}
	out := filepath.Join(dir, "movers.psv")
	if err := f.WriteMovers(out, movers); !errors.As(err, &wrong) {
		t.Errorf("without a sender: %v", err)
	}
	m := &f.Config.MinorPlanets
	m.Station, m.Submitter, m.Observers, m.Measurers, m.TelescopeApertureM = "XXX", "A. Example", "A. Example, B. Example", "A. Example", 0.5
	if err := f.WriteMovers(out, movers); err != nil {
		t.Fatal(err)
	}
	if text := read(t, out); strings.Count(text, "\n7 ") != 2 || strings.Count(text, "! name B. Example") != 1 {
		t.Errorf("exchange form:\n%s", text)
	}
}

func TestCrossmatchSections(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"[[crossmatch]]\nname = \"a\"\nfile = \"f\"\nkind = \"comet\"\n", "crossmatch[1].kind: want star, galaxy"},
		{"[[crossmatch]]\nfile = \"f\"\nkind = \"star\"\n", "crossmatch[1].name"},
		{"[[crossmatch]]\nname = \"a\"\nfile = \"f\"\nkind = \"star\"\n[[crossmatch]]\nname = \"a\"\nfile = \"g\"\nkind = \"star\"\n", "crossmatch[2].name"},
		{"[[crossmatch]]\nname = \"a\"\nfile = \"f\"\nkind = \"star\"\ncolumns = { epoch = true }\n", "crossmatch[1].columns.epoch"},
		{"[[crossmatch]]\nname = \"a\"\nfile = \"f\"\nkind = \"star\"\ncolumns = { colour = \"b\" }\n", "unknown key"},
		{"[cosmology]\nh0 = 0.7\n", "cosmology.h0"},
		{"[minor_planets]\nlatitude_deg = 100\n", "minor_planets.latitude_deg"},
		{"[minor_planets]\nradius_arcsec = 0\n", "minor_planets.radius_arcsec"},
	} {
		if _, err := ParseConfig("survey.toml", []byte(c.text)); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: %v, want %q", c.text, err, c.want)
		}
	}
	dir := t.TempDir()
	if err := Init(dir); err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(dir, ConfigName)
	before, err := LoadConfig(dir)
	if err != nil {
		t.Fatal(err)
	}
	write(t, path, []byte(read(t, path)+`
[[crossmatch]]
name = "stars"
file = "stars.csv"
kind = "star"
columns = { name = "id", pm_ra = "pmra", pm_dec = "pmdec", epoch = 2016 }
[[crossmatch]]
name = "galaxies"
file = "galaxies.csv"
kind = "galaxy"
columns = { name = "id", redshift = "z" }
`))
	f, err := OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	if f.Config.Digest() != before.Digest() {
		t.Error("candidates are taken to depend on what is known of a place")
	}
	if _, err := f.Known(Place{RA: 10, Dec: 20}, 61000); err == nil || !strings.Contains(err.Error(), "crossmatch[1]") {
		t.Errorf("without the file: %v", err)
	}
	write(t, filepath.Join(dir, "stars.csv"), []byte("id,ra,dec,pmra,pmdec\nfast,10,20,0,1000\n"))
	write(t, filepath.Join(dir, "galaxies.csv"), []byte("id,ra,dec,z\ng,10.001,20,0.05\n"))
	// Ten years after 2016 the star is 10 arcsec north.
	known, err := f.Known(Place{RA: 10, Dec: 20 + 10.0/3600}, 51544.5+26*365.25)
	if err != nil || len(known) != 2 || known[0].Name != "fast" || known[0].Distance > 0.01 || known[1].Name != "g" || known[1].Redshift < 0.049 {
		t.Errorf("%v %+v", err, known)
	}
	write(t, filepath.Join(dir, "stars.csv"), []byte("id,ra,dec,pmra,pmdec\nfast,10,20,0,oops\n"))
	if _, err := f.Known(Place{RA: 10, Dec: 20}, 61000); err == nil || !strings.Contains(err.Error(), "stars.csv:2: column pmdec") {
		t.Errorf("a broken file: %v", err)
	}
}
