package minorplanets

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/astro"
	"nightsift/internal/outside"
)

// invented returns orbits of the main belt, of near-Earth objects and of far ones.
func invented(n int, seed uint64) []Orbit {
	r := rand.New(rand.NewPCG(seed, 7))
	list := make([]Orbit, n)
	for i := range list {
		o := Orbit{Designation: fmt.Sprintf("(%d) Invented", i+1), Epoch: 61000, MeanAnomaly: 360 * r.Float64(), Perihelion: 360 * r.Float64(), Node: 360 * r.Float64(),
			Inclination: 25 * r.Float64(), Eccentricity: 0.3 * r.Float64(), SemiMajor: 2.2 + 1.1*r.Float64(), H: 14, G: 0.15, Uncertainty: i % 3}
		switch i % 8 {
		case 5:
			o.SemiMajor, o.Eccentricity, o.Inclination = 1+r.Float64(), 0.7*r.Float64(), 90*r.Float64()
		case 6:
			o.SemiMajor, o.Eccentricity = 40+10*r.Float64(), 0.3*r.Float64()
		case 7:
			o.SemiMajor, o.Eccentricity, o.Inclination, o.MeanAnomaly = 20, 0.97, 160, 2*r.Float64()-1
		}
		list[i] = o
	}
	return list
}

// A site on a mountain, invented.
var site = astro.Site{Longitude: -70.4, Latitude: -24.6, Height: 2600}

// The geometry from other sources: Kepler's equation by scipy, the Earth by ERFA's
// epv00, the site by astropy, light time by iteration.
func TestAgainstERFA(t *testing.T) {
	const script = `
import sys, json, warnings
import numpy as np, erfa
from scipy.optimize import brentq
from astropy.time import Time
from astropy.coordinates import EarthLocation
from astropy import units as u
from astropy.utils import iers
iers.conf.auto_download = False
iers.conf.iers_degraded_accuracy = "warn"
warnings.simplefilter("ignore")
d = json.load(open(sys.argv[1]))
k, c = 0.01720209895, 299792.458 * 86400 / 149597870.7
eps = np.radians(84381.448 / 3600)
loc = EarthLocation.from_geodetic(d["Lon"] * u.deg, d["Lat"] * u.deg, d["Height"] * u.m)
def rot(axis, a):
    c_, s_ = np.cos(a), np.sin(a)
    return np.array([[1, 0, 0], [0, c_, -s_], [0, s_, c_]]) if axis == 0 else np.array([[c_, -s_, 0], [s_, c_, 0], [0, 0, 1]])
out = []
for mjd in d["Times"]:
    time = Time(mjd, format="mjd", scale="utc")
    pvh, pvb = erfa.epv00(time.tt.jd1, time.tt.jd2)
    obs = np.array(pvh["p"]) + loc.get_gcrs_posvel(time)[0].xyz.to_value(u.au)
    for o in d["Orbits"]:
        R = rot(0, eps) @ rot(2, np.radians(o["Node"])) @ rot(0, np.radians(o["Inclination"])) @ rot(2, np.radians(o["Perihelion"]))
        e, a = o["Eccentricity"], o["SemiMajor"]
        def at(tt):
            M = (np.radians(o["MeanAnomaly"]) + k * a**-1.5 * (tt - o["Epoch"])) % (2 * np.pi)
            E = brentq(lambda x: x - e * np.sin(x) - M, -0.1, 2 * np.pi + 0.1, xtol=1e-14)
            return R @ np.array([a * (np.cos(E) - e), a * np.sqrt(1 - e * e) * np.sin(E), 0])
        tt = time.tt.mjd
        delta = 0
        for _ in range(6):
            v = at(tt - delta / c) - obs
            delta = np.linalg.norm(v)
        out.append([np.degrees(np.arctan2(v[1], v[0])) % 360, np.degrees(np.arcsin(v[2] / delta)), delta])
print(json.dumps(out))
`
	orbits := invented(40, 1)
	times := []float64{60970.2, 61000.4, 61030.9, 61015.13}
	want := python(t, script, map[string]any{"Orbits": orbits, "Times": times, "Lon": site.Longitude, "Lat": site.Latitude, "Height": site.Height})
	c := NewCatalogue(orbits)
	worst, k := 0.0, 0
	for _, mjd := range times {
		for _, p := range c.Predict(&site, mjd) {
			d := astro.Separation(p.RA, p.Dec, want[k][0], want[k][1]) * 3600
			// The Earth's place is good to 7e-7 au: what is near shows it.
			if give := 0.05 + 0.2/p.Distance; d > give || math.Abs(p.Distance-want[k][2]) > 3e-6 {
				t.Errorf("%s at MJD %.2f: off by %.3f arcsec, distance %.7f, want %.7f", p.Designation, mjd, d, p.Distance, want[k][2])
			}
			worst = max(worst, d)
			k++
		}
	}
	t.Logf("largest difference %.3f arcsec over %d places", worst, k)
}

func python(t *testing.T, script string, input any) [][]float64 {
	t.Helper()
	data, err := json.Marshal(input)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "in.json")
	if err := os.WriteFile(path, data, 0o644); err != nil {
		t.Fatal(err)
	}
	var out [][]float64
	if err := json.Unmarshal(outside.Python(t, script, path), &out); err != nil {
		t.Fatal(err)
	}
	return out
}

// PyEphem follows the same ellipses with its own Sun and Earth.
func TestAgainstPyEphem(t *testing.T) {
	const script = `
import sys, json, math, ephem
d = json.load(open(sys.argv[1]))
out = []
for mjd in d["Times"]:
    for o in d["Orbits"]:
        b = ephem.EllipticalBody()
        b._a, b._e, b._inc, b._Om, b._om, b._M = o["SemiMajor"], o["Eccentricity"], math.radians(o["Inclination"]), math.radians(o["Node"]), math.radians(o["Perihelion"]), math.radians(o["MeanAnomaly"])
        b._inc, b._Om, b._om, b._M = o["Inclination"], o["Node"], o["Perihelion"], o["MeanAnomaly"]
        b._epoch_M = ephem.Date(o["Epoch"] - 69.184 / 86400 + 2400000.5 - 2415020)
        b._epoch = ephem.J2000
        b._H, b._G = o["H"], o["G"]
        b.compute(ephem.Date(mjd + 2400000.5 - 2415020), epoch=ephem.J2000)
        out.append([math.degrees(b.a_ra), math.degrees(b.a_dec), b.mag, b.earth_distance])
print(json.dumps(out))
`
	var orbits []Orbit
	for _, o := range invented(60, 2) {
		if o.Eccentricity < 0.9 && o.SemiMajor > 1.5 {
			orbits = append(orbits, o)
		}
	}
	times := []float64{60970.2, 61000.4, 61030.9}
	want := python(t, script, map[string]any{"Orbits": orbits, "Times": times})
	c := NewCatalogue(orbits)
	worst, k := 0.0, 0
	for _, mjd := range times {
		for _, p := range c.Predict(nil, mjd) {
			d := astro.Separation(p.RA, p.Dec, want[k][0], want[k][1]) * 3600
			if d > 2 {
				t.Errorf("%s at MJD %.1f: off by %.2f arcsec from PyEphem", p.Designation, mjd, d)
			}
			if math.Abs(p.Mag-want[k][2]) > 0.03 {
				t.Errorf("%s: %.2f mag, PyEphem %.2f", p.Designation, p.Mag, want[k][2])
			}
			worst = max(worst, d)
			k++
		}
	}
	t.Logf("largest difference %.2f arcsec over %d places", worst, k)
}

// What leaving the planets out costs: orbits integrated with the pull of Jupiter and
// Saturn over 30 days. The error that is given covers it.
func TestPullOfJupiter(t *testing.T) {
	const script = `
import sys, json
import numpy as np, erfa
from scipy.integrate import solve_ivp
d = json.load(open(sys.argv[1]))
k2 = 0.01720209895**2
planets = [(5, 1/1047.3486), (6, 1/3497.898)]
def acc(t, y):
    r = y[:3]
    a = -k2 * r / np.linalg.norm(r)**3
    for n, m in planets:
        p = np.array(erfa.plan94(2400000.5, t, n)["p"])
        a = a + k2 * m * ((p - r) / np.linalg.norm(p - r)**3 - p / np.linalg.norm(p)**3)
    return np.concatenate([y[3:], a])
out = []
for r, v in d["States"]:
    s = solve_ivp(acc, (61000, 61030), r + v, method="DOP853", rtol=1e-11, atol=1e-13)
    out.append(list(s.y[:3, -1]))
print(json.dumps(out))
`
	orbits := invented(48, 3)
	var kept []Orbit
	var states [][2][3]float64
	for i := range orbits {
		if i%8 > 4 { // the main belt
			continue
		}
		orbits[i].Uncertainty = 0
		p := newPath(&orbits[i])
		const h = 0.01
		before, now, after := p.at(61000-h), p.at(61000), p.at(61000+h)
		b2, a2 := p.at(61000-2*h), p.at(61000+2*h)
		var v [3]float64
		for k := range v {
			v[k] = (8*(after[k]-before[k]) - (a2[k] - b2[k])) / (12 * h)
		}
		kept = append(kept, orbits[i])
		states = append(states, [2][3]float64{now, v})
	}
	want := python(t, script, map[string]any{"States": states})
	var square, worst float64
	for i := range kept {
		p := newPath(&kept[i])
		r := p.at(61030)
		o := newObserver(nil, 61030)
		var a, b [3]float64
		for k := range r {
			a[k], b[k] = r[k]-o.place[k], want[i][k]-o.place[k]
		}
		ra1, dec1 := toSky(a)
		ra2, dec2 := toSky(b)
		d := astro.Separation(ra1, dec1, ra2, dec2) * 3600
		square, worst = square+d*d, max(worst, d)
		if given := positionError(&kept[i], 61030, norm(a), norm(r)); d > 3*given {
			t.Errorf("%s: the planets move it by %.2f arcsec in 30 days, the error given is %.2f", kept[i].Designation, d, given)
		}
	}
	rms := math.Sqrt(square / float64(len(kept)))
	t.Logf("the planets move %d main-belt objects by %.2f arcsec (rms), at most %.2f, in 30 days", len(kept), rms, worst)
	if rms > 2.5 {
		t.Errorf("rms %.2f arcsec: the package comment says about one", rms)
	}
}

func TestKepler(t *testing.T) {
	for _, e := range []float64{0, 0.1, 0.9, 0.99, 0.9999, 0.99999999} {
		for m := -7.0; m < 7; m += 0.0137 {
			x := kepler(m, e)
			if d := math.Remainder(x-e*math.Sin(x)-m, 2*math.Pi); math.Abs(d) > 1e-12 {
				t.Fatalf("e %v, m %v: residual %v", e, m, d)
			}
		}
	}
}

// line writes an orbit in the export format.
func line(o Orbit, packed, epoch, readable string) string {
	b := []byte(strings.Repeat(" ", 202))
	put := func(first int, text string) { copy(b[first-1:], text) }
	put(1, packed)
	put(9, fmt.Sprintf("%5.2f", o.H))
	put(15, fmt.Sprintf("%5.2f", o.G))
	put(21, epoch)
	put(27, fmt.Sprintf("%9.5f", o.MeanAnomaly))
	put(38, fmt.Sprintf("%9.5f", o.Perihelion))
	put(49, fmt.Sprintf("%9.5f", o.Node))
	put(60, fmt.Sprintf("%9.5f", o.Inclination))
	put(71, fmt.Sprintf("%9.7f", o.Eccentricity))
	put(81, fmt.Sprintf("%11.8f", 0.9856076686/(o.SemiMajor*math.Sqrt(o.SemiMajor))))
	put(93, fmt.Sprintf("%11.7f", o.SemiMajor))
	put(106, "2")
	put(167, readable)
	return string(b)
}

func TestFilesOfOrbits(t *testing.T) {
	o := invented(1, 5)[0]
	dir := t.TempDir()
	file := func(text string) string {
		path := filepath.Join(dir, "orbits")
		if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
		return path
	}
	good := line(o, "00001", "K25BL", "     (1) Invented")
	list, err := Read(file("A heading, of many words\n\n-------------\n" + good + "\n\n" + line(o, "K25T00A", "K25BL", "")[:110] + "\n"))
	if err != nil || len(list) != 2 {
		t.Fatalf("%v, %d orbits", err, len(list))
	}
	// 2025-11-21 is MJD 61000.
	if g := list[0]; g.Designation != "(1) Invented" || g.Epoch != 61000 || math.Abs(g.SemiMajor-o.SemiMajor) > 1e-6 || math.Abs(g.MeanAnomaly-o.MeanAnomaly) > 1e-5 || g.Uncertainty != 2 {
		t.Errorf("%+v", g)
	}
	if list[1].Designation != "2025 TA" {
		t.Errorf("designation %q", list[1].Designation)
	}
	table := "designation,epoch_mjd,mean_anomaly_deg,perihelion_deg,node_deg,inclination_deg,eccentricity,semi_major_au,h_mag,g_slope,uncertainty\n"
	if list, err = Read(file(table + "X1,61000,10,20,30,5,0.1,2.5,,,\nX2,61000,10,20,30,5,0.1,2.5,,,3\n")); err != nil || len(list) != 2 ||
		list[0].H == list[0].H || list[0].G != 0.15 || list[0].Uncertainty != -1 || list[1].Uncertainty != 3 {
		t.Errorf("%v %+v", err, list)
	}
	for _, c := range []struct{ text, want string }{
		{good[:90], "orbits:1: 90 characters; want at least 103"},
		{good + "\n" + strings.Replace(good, "K25BL", "K25BW", 1), "orbits:2: columns 21 to 25, epoch: \"K25BW\""},
		{good[:70] + "1.0000000" + good[79:], "orbits:1: eccentricity: 1: a parabola or hyperbola"},
		{good[:26] + "  12.abc " + good[35:], "orbits:1: columns 27 to 35, mean anomaly"},
		{"", "holds no orbit"},
		{table + "X1,61000,10,20,30,5,1.2,2.5,,,\n", "orbits:2: column eccentricity: 1.2: a parabola"},
		{table + "X1,61000,10,20,30,x,0.2,2.5,,,\n", "orbits:2: column inclination_deg"},
		{table + "X1,61000,10,20,30,4,0.2,2.5,,,12\n", "orbits:2: column uncertainty: 12"},
		{table + "X1,610,10,20,30,4,0.2,2.5,,,\n", "orbits:2: column epoch"},
	} {
		if _, err := Read(file(c.text)); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%.60q: %v, want %q", c.text, err, c.want)
		}
	}
}

// Examples of packed designations and dates from their published description.
func TestPacked(t *testing.T) {
	for packed, want := range map[string]string{
		"J95X00A": "1995 XA", "J95X01L": "1995 XL1", "J95F13B": "1995 FB13", "J98SA8Q": "1998 SQ108", "J98SC7V": "1998 SV127", "J98SG2S": "1998 SS162",
		"K99AJ3Z": "2099 AZ193", "K08Aa0A": "2008 AA360", "K07Tf8A": "2007 TA418", "PLS2040": "2040 P-L", "T1S3138": "3138 T-1", "T2S1010": "1010 T-2",
		"00433": "(433)", "03202": "(3202)", "50000": "(50000)", "A0345": "(100345)", "a0017": "(360017)", "K3289": "(203289)", "~0000": "(620000)", "~000z": "(620061)", "~AZaz": "(3140113)",
		"odd": "odd",
	} {
		if got := unpackDesignation(packed); got != want {
			t.Errorf("%s: %q, want %q", packed, got, want)
		}
	}
	for packed, want := range map[string]string{"J9611": "1996-01-01", "J961A": "1996-01-10", "J969U": "1996-09-30", "J96AV": "1996-10-31", "K01AM": "2001-10-22"} {
		mjd, err := unpackEpoch(packed)
		if got := astro.MJDToISO(mjd); err != nil || !strings.HasPrefix(got, want) {
			t.Errorf("%s: %s %v, want %s", packed, got, err, want)
		}
	}
}

func TestMatch(t *testing.T) {
	orbits := invented(3000, 9)
	c := NewCatalogue(orbits)
	s := c.At(&site, 61005.2)
	at := c.Predict(&site, 61005.31)
	found := 0
	for i, p := range at {
		if p.Error > 20 {
			continue
		}
		ra, dec := astro.Offset(p.RA, p.Dec, 77, 0.8/3600)
		m, ok := s.Match(ra, dec, 61005.31, 0.3, DefaultLimits())
		if !ok || m.Designation != orbits[i].Designation || math.Abs(m.Offset-0.8) > 0.01 {
			t.Errorf("%s: found %v, %s at %.2f arcsec", orbits[i].Designation, ok, m.Designation, m.Offset)
		}
		found++
		if ra, dec = astro.Offset(p.RA, p.Dec, 200, (3+4*math.Hypot(p.Error, 0.3))/3600); i%10 == 0 {
			if m, ok := s.Match(ra, dec, 61005.31, 0.3, DefaultLimits()); ok && m.Designation == orbits[i].Designation {
				t.Errorf("%s: matched at %.1f arcsec, %.1f sigma", m.Designation, m.Offset, m.Sigma)
			}
		}
	}
	if found < 2000 {
		t.Errorf("only %d places are known well enough", found)
	}
	for _, bad := range [][3]float64{{math.NaN(), 0, 61005}, {0, 95, 61005}, {0, 0, math.NaN()}, {0, 0, 51000}} {
		if _, ok := s.Match(bad[0], bad[1], bad[2], 1, DefaultLimits()); ok {
			t.Errorf("%v: matched", bad)
		}
	}
}

func TestExchangeForm(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.psv")
	who := Sender{Station: "XXX", Submitter: "A. Example", Observers: []string{"A. Example"}, Measurers: []string{"B. Example"}, Design: "Reflector", Aperture: 0.6, Detector: "CCD"}
	n := math.NaN()
	list := []Astrometry{
		{Designation: "(1) Invented", Tracklet: "t1", MJD: 61005.25, RA: 10.5, Dec: -20.25, RAErr: 0.12, DecErr: 0.1, Mag: 18.25, MagErr: 0.05, Band: "r"},
		{Designation: "2025 TA", MJD: 61005.26, RA: 10.5, Dec: 0, RAErr: n, DecErr: n, Mag: n, MagErr: n, Band: "r"},
		{Tracklet: "NS0001", MJD: 61005.27, RA: 359.9999999, Dec: 89, RAErr: n, DecErr: n, Mag: 20, MagErr: n, Band: "g"},
	}
	if err := WriteExchange(path, who, list); err != nil {
		t.Fatal(err)
	}
	// Read as the form is defined: headings, then a line of names, then values
	// between upright strokes.
	var rows [][]string
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for _, l := range strings.Split(strings.TrimSpace(string(data)), "\n") {
		if l[0] == '#' || l[0] == '!' {
			continue
		}
		f := strings.Split(l, "|")
		for k := range f {
			f[k] = strings.TrimSpace(f[k])
		}
		rows = append(rows, f)
	}
	want := [][]string{
		{"permID", "provID", "trkSub", "mode", "stn", "obsTime", "ra", "dec", "rmsRA", "rmsDec", "astCat", "mag", "rmsMag", "band"},
		{"1", "", "t1", "CCD", "XXX", "2025-11-26T06:00:00.000Z", "10.5000000", "-20.2500000", "0.120", "0.100", "UNK", "18.25", "0.050", "r"},
		{"", "2025 TA", "", "CCD", "XXX", "2025-11-26T06:14:24.000Z", "10.5000000", "+0.0000000", "", "", "UNK", "", "", ""},
		{"", "", "NS0001", "CCD", "XXX", "2025-11-26T06:28:48.000Z", "359.9999999", "+89.0000000", "", "", "UNK", "20.00", "", "g"},
	}
	if fmt.Sprint(rows) != fmt.Sprint(want) || !strings.HasPrefix(string(data), "# version=2022\n# observatory\n! mpcCode XXX\n") {
		t.Errorf("wrote\n%s", data)
	}
	if err := WriteExchange(path, Sender{Station: "?"}, list); err == nil {
		t.Error("a heading without a sender was written")
	}
	if err := WriteExchange(path, who, []Astrometry{{MJD: 61005, RA: 1, Dec: 1}}); err == nil {
		t.Error("a place without a name was written")
	}
}

// Whatever a line holds, it gives an orbit within its ranges or an error.
func FuzzExport(f *testing.F) {
	o := invented(2, 5)
	f.Add(line(o[0], "00001", "K25BL", "(1) Invented"))
	f.Add(line(o[1], "K07Tf8A", "K25BL", "")[:103])
	f.Add("")
	f.Fuzz(func(t *testing.T, text string) {
		o, err := parseExport(text)
		if err != nil {
			return
		}
		if column, _ := o.check(); column != "" {
			t.Fatalf("%s is out of range: %+v", column, o)
		}
		p := newPath(&o)
		q := p.predict(newInstant(nil, 61000))
		if !(q.RA >= 0 && q.RA < 360 && q.Dec >= -90 && q.Dec <= 90) {
			t.Fatalf("%+v stands at %v, %v", o, q.RA, q.Dec)
		}
	})
}
