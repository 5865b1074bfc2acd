package photometry

import (
	"fmt"
	"math"
	"math/rand/v2"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
)

const side = 1000 // px

// sky is an invented frame of stars and the text of its catalogue.
type sky struct {
	field Field
	rows  []string // of the catalogue, "ra,dec,mag,colour"
}

func newSky(t *testing.T, scale float64, bright, faint int, seed uint64) *sky {
	t.Helper()
	r := rand.New(rand.NewPCG(seed, 3))
	s := scale / 3600
	w, err := wcs.NewTAN(side/2, side/2, 359.99, 62, [2][2]float64{{-s, 0}, {0, s}})
	if err != nil {
		t.Fatal(err)
	}
	k := &sky{field: Field{Stars: &stars.List{FWHM: 3}, WCS: w, Width: side, Height: side, MidMJD: math.NaN(), Filter: "r"}}
	add := func(mag float64, onFrame bool) {
		x, y := 1+r.Float64()*(side-1), 1+r.Float64()*(side-1)
		ra, dec, err := w.PixelToSky(x, y)
		if err != nil {
			t.Fatal(err)
		}
		k.rows = append(k.rows, fmt.Sprintf("%.8f,%.8f,%.4f,%.3f", ra, dec, mag, 0.5))
		if onFrame {
			flux := math.Pow(10, -0.4*(mag-25))
			k.field.Stars.Stars = append(k.field.Stars.Stars, stars.Star{X: x + 0.03*r.NormFloat64(), Y: y + 0.03*r.NormFloat64(),
				Flux: flux, FluxErr: 0.01 * flux, SN: 100, Neighbour: math.Inf(1), Clean: true})
		}
	}
	for range bright {
		add(14+4*r.Float64(), true)
	}
	for range faint {
		add(19+3*r.Float64(), false)
	}
	slices.SortFunc(k.field.Stars.Stars, func(a, b stars.Star) int { return int(1e3 * (b.Flux - a.Flux)) })
	return k
}

func (k *sky) catalogue(t *testing.T) *Catalogue {
	t.Helper()
	c, err := Read(file(t, "stars.csv", "ra,dec,mag,colour\n"+strings.Join(k.rows, "\n")+"\n"),
		Columns{RA: "ra", Dec: "dec", Mag: map[string]string{"": "mag"}, Colour: []string{"colour"}})
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// check compares each standard's magnitude with the flux of its star.
func (k *sky) check(t *testing.T, name string, s *Standards, least int) {
	t.Helper()
	if s.Refusal != "" {
		t.Errorf("%s: refused: %s", name, s.Refusal)
		return
	}
	wrong := 0
	for _, q := range s.Stars {
		star := k.field.Stars.Stars[q.Star]
		if math.Abs(q.Mag+2.5*math.Log10(star.Flux)-25) > 0.001 {
			wrong++
		}
		if q.X != star.X || q.Y != star.Y || q.Colour != 0.5 || !math.IsNaN(q.MagErr) {
			t.Errorf("%s: %+v is not of its star %+v", name, q, star)
		}
	}
	if len(s.Stars) < least || wrong > len(s.Stars)/50 {
		t.Errorf("%s: %d stars, want %d; %d of them are others", name, len(s.Stars), least, wrong)
	}
}

func TestMatchAtEveryScale(t *testing.T) {
	for _, scale := range []float64{0.15, 0.5, 1.5, 8} {
		k := newSky(t, scale, 80, 600, 1)
		s := Match(k.field, k.catalogue(t), DefaultMatchConfig())
		k.check(t, fmt.Sprintf("%g arcsec/px", scale), s, 70)
		if math.Abs(s.OffsetX) > 0.05 || math.Abs(s.OffsetY) > 0.05 {
			t.Errorf("offset %.3f %.3f px, there is none", s.OffsetX, s.OffsetY)
		}
	}
}

// World coordinates that are off by less than the tolerance do no harm.
func TestMatchFindsTheShift(t *testing.T) {
	k := newSky(t, 0.5, 80, 300, 2)
	for i := range k.field.Stars.Stars {
		k.field.Stars.Stars[i].X += 1.9
		k.field.Stars.Stars[i].Y -= 1.2
	}
	s := Match(k.field, k.catalogue(t), DefaultMatchConfig())
	k.check(t, "shifted", s, 70)
	if math.Abs(s.OffsetX-1.9) > 0.03 || math.Abs(s.OffsetY+1.2) > 0.03 {
		t.Errorf("offset %.3f %.3f px, want 1.9 -1.2", s.OffsetX, s.OffsetY)
	}
}

func TestChanceMatchesAreRejected(t *testing.T) {
	for _, c := range []struct {
		name  string
		scale float64
		bright,
		faint int
	}{{"thin", 0.5, 60, 300}, {"dense", 0.5, 3000, 20000}, {"wide tolerance", 0.2, 500, 5000}, {"crowded", 1.5, 6000, 6000}} {
		for seed := range uint64(6) {
			k := newSky(t, c.scale, c.bright, c.faint, 10+seed)
			other := newSky(t, c.scale, c.bright, c.faint, 900+seed)
			s := Match(k.field, other.catalogue(t), DefaultMatchConfig())
			if s.Refusal == "" || s.Stars != nil {
				t.Errorf("%s, seed %d: %d stars of another field were taken, %.1f expected by chance", c.name, seed, len(s.Stars), s.Chance)
			}
			if seed == 0 {
				t.Logf("%s: %s", c.name, s.Refusal)
			}
		}
	}
}

func TestMatchRefuses(t *testing.T) {
	k := newSky(t, 0.5, 80, 300, 4)
	c := k.catalogue(t)
	byFilter := *c
	byFilter.Columns.Mag = map[string]string{"g": "mag"}
	for _, x := range []struct {
		name   string
		change func(f *Field) *Catalogue
		want   string
	}{
		{"filter", func(*Field) *Catalogue { return &byFilter }, `filter "r"`},
		{"no world coordinates", func(f *Field) *Catalogue { f.WCS = nil; return c }, "no world coordinates"},
		{"elsewhere", func(f *Field) *Catalogue {
			w, err := wcs.NewTAN(500, 500, 120, -30, [2][2]float64{{-1e-4, 0}, {0, 1e-4}})
			if err != nil {
				t.Fatal(err)
			}
			f.WCS = w
			return c
		}, "0 stars with a magnitude mag on the frame"},
		{"flagged", func(f *Field) *Catalogue {
			l := *f.Stars
			l.Stars = slices.Clone(l.Stars)
			for i := range l.Stars {
				l.Stars[i].Flags = frame.Saturated
			}
			f.Stars = &l
			return c
		}, "0 clean stars"},
	} {
		f := k.field
		c := x.change(&f)
		s := Match(f, c, DefaultMatchConfig())
		if !strings.Contains(s.Refusal, x.want) || s.Stars != nil {
			t.Errorf("%s: %q, want %q", x.name, s.Refusal, x.want)
		}
	}
}

// Two catalogue stars in one image are no standard.
func TestBlendsAreLeftOut(t *testing.T) {
	k := newSky(t, 0.5, 80, 0, 5)
	first := k.field.Stars.Stars[3]
	for i, x := range []struct{ distance, mags float64 }{{2, 2}, {2, 8}, {40, 0}} {
		ra, dec, err := k.field.WCS.PixelToSky(first.X+x.distance, first.Y)
		if err != nil {
			t.Fatal(err)
		}
		q := *k
		q.rows = append(slices.Clone(k.rows), fmt.Sprintf("%.8f,%.8f,%.4f,0.5", ra, dec, 25-2.5*math.Log10(first.Flux)+x.mags))
		s := Match(q.field, q.catalogue(t), DefaultMatchConfig())
		has := slices.ContainsFunc(s.Stars, func(s Standard) bool { return s.Star == 3 })
		if has != (i > 0) {
			t.Errorf("companion at %g px, %g mag fainter: the star serves: %v", x.distance, x.mags, has)
		}
	}
}

func TestStandardsRoundTrip(t *testing.T) {
	k := newSky(t, 0.5, 40, 100, 6)
	cfg := DefaultMatchConfig()
	cfg.Settings.ColourTerm, cfg.Settings.FitColour, cfg.Settings.SourceColour = 0.03, true, -0.1
	full := Match(k.field, k.catalogue(t), cfg)
	if full.Refusal != "" {
		t.Fatal(full.Refusal)
	}
	for i := range full.Stars {
		full.Stars[i].MagErr = 0.01 // NaN is not equal to itself
	}
	k.field.WCS = nil
	for _, s := range []*Standards{full, Match(k.field, k.catalogue(t), cfg)} {
		path := filepath.Join(t.TempDir(), "s.fits")
		if err := fits.Write(path, nil, s.Table()); err != nil {
			t.Fatal(err)
		}
		f, err := fits.Open(path)
		if err != nil {
			t.Fatal(err)
		}
		table, err := f.Table(1)
		if err != nil {
			t.Fatal(err)
		}
		got, err := FromTable(table)
		f.Close()
		if err != nil {
			t.Fatal(err)
		}
		if !reflect.DeepEqual(got, s) {
			t.Errorf("found %+v\nwrote %+v", got, s)
		}
		table.Header.Delete("MINSTARS")
		if _, err := FromTable(table); err == nil || !strings.Contains(err.Error(), "MINSTARS") {
			t.Errorf("without MINSTARS: %v", err)
		}
	}
}
