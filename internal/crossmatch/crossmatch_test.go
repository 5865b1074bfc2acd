package crossmatch

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
	"nightsift/internal/cosmology"
	"nightsift/internal/outside"
)

// catalogue reads text.
func catalogue(t testing.TB, kind Kind, text string, change func(*Config)) (*Catalogue, error) {
	t.Helper()
	path := filepath.Join(t.TempDir(), "c.csv")
	if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	cfg := DefaultConfig(kind)
	cfg.Name, cfg.File = "list", path
	if change != nil {
		change(&cfg)
	}
	return Read(cfg)
}

// Nearest rows and distances as astropy gives them, over the whole sky, at the
// poles and over the wrap, with proper motions applied.
func TestAgainstAstropy(t *testing.T) {
	const script = `
import sys, json, warnings
import numpy as np
from astropy.coordinates import SkyCoord, Distance
from astropy.time import Time
from astropy import units as u
from astropy.table import Table
warnings.simplefilter("ignore")
c = Table.read(sys.argv[1], format="ascii.csv")
q = Table.read(sys.argv[2], format="ascii.csv")
sky = SkyCoord(c["ra"]*u.deg, c["dec"]*u.deg, pm_ra_cosdec=c["pmra"]*u.mas/u.yr, pm_dec=c["pmdec"]*u.mas/u.yr, distance=1e6*u.pc*np.ones(len(c)),
    radial_velocity=0*u.km/u.s*np.ones(len(c)), obstime=Time(c["epoch"], format="jyear", scale="tdb"))
moved = sky.apply_space_motion(new_obstime=Time(61000.25, format="mjd", scale="tdb"))
at = SkyCoord(q["ra"]*u.deg, q["dec"]*u.deg)
i, d, _ = at.match_to_catalog_sky(SkyCoord(moved.ra, moved.dec))
e, n = SkyCoord(moved.ra, moved.dec)[i].spherical_offsets_to(at)
print(json.dumps({"row": [int(x) for x in i], "d": list(d.arcsec), "e": list(e.arcsec), "n": list(n.arcsec)}))
`
	r := rand.New(rand.NewPCG(2, 3))
	var list, query strings.Builder
	list.WriteString("id,ra,dec,pmra,pmdec,epoch\n")
	query.WriteString("ra,dec\n")
	var places [][2]float64
	for i := range 4000 {
		ra, dec := 360*r.Float64(), math.Asin(2*r.Float64()-1)*astro.Radian
		switch {
		case i%10 == 0: // about the poles
			dec = math.Copysign(90-0.02*r.Float64(), dec)
		case i%10 == 1: // and the wrap
			ra = astro.Wrap360(0.01 * r.NormFloat64())
		}
		east, north := 300*r.NormFloat64(), 300*r.NormFloat64()
		if i%50 == 7 {
			east, north = 4000, -3000
		}
		fmt.Fprintf(&list, "s%d,%.9f,%.9f,%.3f,%.3f,%.1f\n", i, ra, dec, east, north, 1990+25*r.Float64())
		if i%2 == 0 {
			a, d := astro.Offset(ra, dec, 360*r.Float64(), 20*r.Float64()/3600)
			places = append(places, [2]float64{a, d})
			fmt.Fprintf(&query, "%.9f,%.9f\n", a, d)
		}
	}
	c, err := catalogue(t, Star, list.String(), func(cfg *Config) {
		cfg.Columns.Name, cfg.Columns.PMRA, cfg.Columns.PMDec, cfg.Columns.Epoch, cfg.Radius = "id", "pmra", "pmdec", "epoch", 60
	})
	if err != nil {
		t.Fatal(err)
	}
	queries := filepath.Join(t.TempDir(), "q.csv")
	if err := os.WriteFile(queries, []byte(query.String()), 0o644); err != nil {
		t.Fatal(err)
	}
	var want struct {
		Row     []int
		D, E, N []float64
	}
	if err := json.Unmarshal(outside.Python(t, script, c.Config.File, queries), &want); err != nil {
		t.Fatal(err)
	}
	matched := 0
	for i, p := range places {
		m, found := c.Find(p[0], p[1], 61000.25, cosmology.Default())
		if found != (want.D[i] <= 60) {
			t.Errorf("place %v: found %v, astropy's nearest is at %.3f arcsec", p, found, want.D[i])
			continue
		}
		if !found {
			continue
		}
		matched++
		if name := fmt.Sprintf("s%d", want.Row[i]); m.Name != name || math.Abs(m.Distance-want.D[i]) > 0.002 {
			t.Errorf("place %v: %s at %.4f arcsec, astropy %s at %.4f", p, m.Name, m.Distance, name, want.D[i])
		}
		// Offsets in a tangential frame differ from astropy's near the poles only.
		if math.Abs(p[1]) < 80 && (math.Abs(m.East-want.E[i]) > 0.02 || math.Abs(m.North-want.N[i]) > 0.02) {
			t.Errorf("place %v: offsets %.3f %.3f, astropy %.3f %.3f", p, m.East, m.North, want.E[i], want.N[i])
		}
	}
	if matched < 1900 {
		t.Errorf("%d matches of %d", matched, len(places))
	}
}

// The index finds what a look at all rows finds.
func TestIndexMissesNothing(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 4))
	var list strings.Builder
	list.WriteString("ra,dec\n")
	for range 3000 {
		fmt.Fprintf(&list, "%.7f,%.7f\n", 360*r.Float64(), math.Asin(2*r.Float64()-1)*astro.Radian)
	}
	for _, p := range []string{"0,90", "123,90", "0,-90", "359.99999,0", "-0.00001,0", "360,10"} {
		list.WriteString(p + "\n")
	}
	c, err := catalogue(t, Variable, list.String(), nil)
	if err != nil {
		t.Fatal(err)
	}
	for _, radius := range []float64{1, 500, 3600} {
		for i := range 300 {
			ra, dec := 360*r.Float64(), math.Asin(2*r.Float64()-1)*astro.Radian
			switch i % 6 {
			case 0:
				dec = 90 - 0.3*r.Float64()
			case 1:
				ra = astro.Wrap360(r.NormFloat64())
			case 2:
				dec = -90
			}
			want, got := 0, 0
			for k := range c.ra {
				if astro.Separation(ra, dec, c.ra[k], c.dec[k])*3600 <= radius {
					want++
				}
			}
			seen := map[int]bool{}
			c.around(ra, dec, math.NaN(), radius, func(row int, _, _, _ float64) {
				got++
				seen[row] = true
			})
			if got != want || len(seen) != got {
				t.Fatalf("within %g arcsec of %v, %v: %d rows, %d different, want %d", radius, ra, dec, got, len(seen), want)
			}
		}
	}
}

// A supernova in the outskirts of a large galaxy belongs to it though a small one
// is nearer on the sky.
func TestHosts(t *testing.T) {
	c, err := catalogue(t, Galaxy, "id,ra,dec,a,b,pa,z,r\nlarge,10,20,12,4,90,0.05,15.1\nsmall,10.003,20.0012,0.5,0.5,0,0.3,21\nunsized,10.0034,20.001,,,,,22\n", func(cfg *Config) {
		cfg.Columns.Name, cfg.Columns.SemiMajor, cfg.Columns.SemiMinor, cfg.Columns.Angle, cfg.Columns.Redshift, cfg.Columns.Mag = "id", "a", "b", "pa", "z", "r"
	})
	if err != nil {
		t.Fatal(err)
	}
	universe := cosmology.Default()
	// 10.8 arcsec east of the large one's middle, along its major axis.
	east := 10.8 / 3600 / math.Cos(20/astro.Radian)
	m, found := c.Find(10+east, 20, 61000, universe)
	if !found || m.Name != "large" || math.Abs(m.LightRadii-10.8/12) > 1e-3 || math.Abs(m.East-10.8) > 1e-3 || math.Abs(m.North) > 1e-3 {
		t.Errorf("%+v", m)
	}
	if want := m.Distance * universe.KiloparsecPerArcsec(float64(float32(0.05))); math.Abs(m.Kiloparsec-want) > 1e-9 {
		t.Errorf("%v kpc, want %v", m.Kiloparsec, want)
	}
	if got := m.Absolute(17.5); math.Abs(got-(17.5-36.73)) > 0.02 {
		t.Errorf("absolute magnitude %.3f", got)
	}
	// The same way to the north is along the minor axis: 2.7 radii.
	if m, _ = c.Find(10, 20+10.8/3600, 61000, universe); m.Name != "large" || math.Abs(m.LightRadii-2.7) > 1e-3 || !m.Host || HostRedshift([]Match{m}) != m.Redshift {
		t.Errorf("%+v", m)
	}
	// Beyond four radii of all, the nearest on the sky.
	if m, found = c.Find(10.006, 20.005, 61000, universe); !found || m.Name == "large" || m.LightRadii <= 4 || m.Host || HostRedshift([]Match{m}) != 0 {
		t.Errorf("%+v", m)
	}
	if _, found = c.Find(11, 20, 61000, universe); found {
		t.Error("a host a degree away")
	}
	// The ellipse itself: x²/a² + y²/b² = 1.
	for phi := 0.0; phi < 360; phi += 17 {
		r := DirectionalRadius(5, 2, 30, phi)
		sin, cos := math.Sincos((phi - 30) / astro.Radian)
		if s := math.Pow(r*cos/5, 2) + math.Pow(r*sin/2, 2); math.Abs(s-1) > 1e-12 {
			t.Errorf("position angle %g: radius %v is not on the ellipse", phi, r)
		}
	}
}

func TestBadCatalogues(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"ra,dec\n1,2\n400,3\n", "c.csv:3: column ra: right ascension 400; want 0 to 360"},
		{"ra,dec\n1,2\n,3\n", "c.csv:3: column ra"},
		{"ra,dec\n1,-91\n", "c.csv:2: column dec: declination -91"},
		{"ra,dec\n1,oops\n", "c.csv:2: column dec"},
	} {
		if _, err := catalogue(t, Star, c.text, nil); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: %v, want %q", c.text, err, c.want)
		}
	}
	for key, change := range map[string]func(*Config){
		"name": func(c *Config) { c.Name = "" }, "kind": func(c *Config) { c.Kind = "planet" }, "radius_arcsec": func(c *Config) { c.Radius = 0 },
		"pm_ra": func(c *Config) { c.Columns.PMRA = "x" }, "semi_major": func(c *Config) { c.Columns.SemiMajor = "x" }, "epoch": func(c *Config) { c.Columns.Year = 0 },
		"angle": func(c *Config) { c.Columns.SemiMajor, c.Columns.SemiMinor = "x", "y" },
	} {
		cfg := DefaultConfig(Galaxy)
		cfg.Name, cfg.File = "n", "f"
		change(&cfg)
		if got, want := cfg.Check(); got != key || want == "" {
			t.Errorf("%s: Check names %q (%q)", key, got, want)
		}
	}
	if _, err := catalogue(t, Star, "ra,dec,pm,pn\n1,2,30000,0\n", func(c *Config) { c.Columns.PMRA, c.Columns.PMDec = "pm", "pn" }); err == nil {
		t.Error("an impossible proper motion was taken")
	}
}

// One search among ten million stars.
func BenchmarkFind(b *testing.B) {
	const n = 10_000_000
	r := rand.New(rand.NewPCG(1, 1))
	ra, dec := make([]float64, n), make([]float64, n)
	for i := range ra {
		ra[i], dec[i] = 360*r.Float64(), math.Asin(2*r.Float64()-1)*astro.Radian
	}
	c := &Catalogue{Config: DefaultConfig(Star)}
	c.index(ra, dec)
	b.ResetTimer()
	for range b.N {
		c.Find(360*r.Float64(), math.Asin(2*r.Float64()-1)*astro.Radian, 61000, cosmology.Default())
	}
}
