package survey

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/detect"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// starCatalogue is the text of a catalogue of an invented sky's stars, in a
// system that differs from the frames' own by term × colour.
func starCatalogue(p *simulate.Pairs, term float64) string {
	r := rand.New(rand.NewPCG(11, 12))
	var b strings.Builder
	b.WriteString("RA_ICRS,DE_ICRS,rmag,e_rmag,b,v\n")
	for _, s := range p.Scene.Stars {
		colour, err := 0.8+0.35*r.NormFloat64(), 0.004+0.008*r.Float64()
		fmt.Fprintf(&b, "%.7f,%.7f,%.4f,%.4f,%.4f,%.4f\n", s.RA, s.Dec, s.Mag+term*colour+err*r.NormFloat64(), err, 15+colour, 15.0)
	}
	return b.String()
}

const starSettings = `
[photometry]
catalogue = "stars.csv"
ra = "RA_ICRS"
dec = "DE_ICRS"
mag = { r = "rmag", i = "imag" }
mag_err = "e_rmag"
colour = ["b", "v"]
colour_term = { r = "fit", i = 0.02 }
source_colour = 0.2
`

// From files to candidates: magnitudes in the system of the catalogue, though
// the headers are wrong by a third of a magnitude.
func TestMagnitudesFromACatalogue(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	const term = 0.06
	p, err := simulate.Scenario("plain", 512, 17)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	newPath, refPath := filepath.Join(dir, "new.fits"), filepath.Join(dir, "reference.fits")
	put(t, newPath, p.New[0], map[string]any{"MAGZP": 20.0})
	put(t, refPath, p.Reference, map[string]any{"MAGZP": p.Reference.Conditions.ZeroPoint + 0.33})
	write(t, filepath.Join(dir, "stars.csv"), []byte(starCatalogue(p, term)))
	write(t, filepath.Join(dir, ConfigName), []byte(strings.Replace(starSettings, ", i = \"imag\"", "", 1)))
	c, err := LoadConfig(dir)
	if err != nil {
		t.Fatal(err)
	}
	c.Search.Keep = KeepAligned
	ctx := context.Background()
	out := filepath.Join(dir, "out")
	sum, err := RunLoose(ctx, Loose{Frames: []string{newPath}, Reference: refPath, Out: out, Config: c}, Options{Version: "test"})
	if err != nil || sum.Searched != 1 {
		t.Fatalf("%+v, %v", sum, err)
	}
	d, err := subtract.Read(filepath.Join(out, "new", DifferenceName))
	if err != nil {
		t.Fatal(err)
	}
	i := d.Info
	want := p.Truth.Frames[0].ZeroPoint + term*0.2
	t.Logf("zero point %.4f ± %.4f, true %.4f; colour term %.3f ± %.3f; scatter %.4f; %d stars, %d clipped; %s",
		i.ZeroPoint, i.ZeroPointErr, want, i.ColourTerm, i.ColourTermErr, i.ZeroPointScatter, i.ZeroPointStars, i.ZeroPointClipped, i.ZeroPointSource)
	if !(math.Abs(i.ZeroPoint-want) < 3.5*i.ZeroPointErr) || !(i.ZeroPointErr < 0.01) {
		t.Errorf("zero point %.4f ± %.4f, true %.4f", i.ZeroPoint, i.ZeroPointErr, want)
	}
	if !(math.Abs(i.ColourTerm-term) < 3.5*i.ColourTermErr) || !(i.ColourTermErr < 0.02) {
		t.Errorf("colour term %.4f ± %.4f, true %.4f", i.ColourTerm, i.ColourTermErr, term)
	}
	if !strings.Contains(i.ZeroPointSource, "stars.csv") || !strings.Contains(i.ZeroPointSource, "rmag") || len(i.ZeroPointChecksum) != 64 || i.ZeroPointStars < 20 {
		t.Errorf("origin %q, checksum %q, %d stars", i.ZeroPointSource, i.ZeroPointChecksum, i.ZeroPointStars)
	}
	// New sources of the source colour: their magnitudes within their errors.
	found, err := detect.ReadTable(filepath.Join(out, "new", candidatesName))
	if err != nil {
		t.Fatal(err)
	}
	var n int
	var square, weight, mean float64
	for _, s := range p.Truth.Sources {
		if s.Flux <= 0 || s.LocalSN < 10 || !s.Covered || s.Masked() || s.Trail > 0.5 {
			continue
		}
		for _, q := range found {
			if math.Hypot(q.X-s.X, q.Y-s.Y) < 1.5 && q.Mag == q.Mag {
				delta := q.Mag - (s.Mag + term*0.2)
				e := math.Hypot(q.MagErr, i.ZeroPointErr)
				n++
				square += delta * delta / (e * e)
				weight += 1 / (q.MagErr * q.MagErr)
				mean += delta / (q.MagErr * q.MagErr)
			}
		}
	}
	mean /= weight
	t.Logf("%d sources: mean departure %.4f ± %.4f mag, pulls %.2f", n, mean, math.Hypot(1/math.Sqrt(weight), i.ZeroPointErr), math.Sqrt(square/float64(n)))
	if n < 5 || math.Abs(mean) > 3.5*math.Hypot(1/math.Sqrt(weight), i.ZeroPointErr) || square/float64(n) > 3 {
		t.Errorf("%d sources, mean departure %.4f mag, squared pulls %.2f", n, mean, square/float64(n))
	}

	// Stage by stage, from files, the same bytes.
	aligned, difference := filepath.Join(dir, AlignedName), filepath.Join(dir, DifferenceName)
	if _, err := AlignFile(ctx, newPath, refPath, aligned, c, "test"); err != nil {
		t.Fatal(err)
	}
	if _, err := SubtractFile(ctx, aligned, difference, c, "test"); err != nil {
		t.Fatal(err)
	}
	for name, alone := range map[string]string{AlignedName: aligned, DifferenceName: difference} {
		if read(t, alone) != read(t, filepath.Join(out, "new", name)) {
			t.Errorf("%s made alone differs from that of a run", name)
			describeDifference(t, alone, filepath.Join(out, "new", name))
		}
	}

	// A catalogue of another field is refused, and the reference's zero point
	// serves, with the reason. As its content is another, the frame is searched anew.
	other, err := simulate.Scenario("plain", 512, 18)
	if err != nil {
		t.Fatal(err)
	}
	for k := range other.Scene.Stars { // to the same place on the sky
		s := &other.Scene.Stars[k]
		s.RA += p.Scene.RA - other.Scene.RA
		s.Dec += p.Scene.Dec - other.Scene.Dec
	}
	write(t, filepath.Join(dir, "stars.csv"), []byte(starCatalogue(other, term)))
	sum, err = RunLoose(ctx, Loose{Frames: []string{newPath}, Reference: refPath, Out: out, Config: c}, Options{Version: "test"})
	if err != nil || sum.Searched != 1 || sum.Skipped != 0 {
		t.Fatalf("%+v, %v", sum, err)
	}
	if d, err = subtract.Read(filepath.Join(out, "new", DifferenceName)); err != nil {
		t.Fatal(err)
	}
	t.Log(d.Info.ZeroPointSource)
	if !strings.Contains(d.Info.ZeroPointSource, "stars.csv was not used") || !strings.Contains(d.Info.ZeroPointSource, "reference") || !math.IsNaN(d.Info.ZeroPointErr) {
		t.Errorf("origin %q, error %v", d.Info.ZeroPointSource, d.Info.ZeroPointErr)
	}
	if off := d.Info.ZeroPoint - p.Truth.Frames[0].ZeroPoint; math.Abs(off-0.33) > 0.02 {
		t.Errorf("zero point off by %.3f, the reference's header is by 0.33", off)
	}

	// A broken catalogue ends the run before any frame.
	write(t, filepath.Join(dir, "stars.csv"), []byte("RA_ICRS,DE_ICRS,rmag,e_rmag,b,v\n1,2,x,4,5,6\n"))
	_, err = RunLoose(ctx, Loose{Frames: []string{newPath}, Reference: refPath, Out: out, Config: c}, Options{Version: "test"})
	var bad *ConfigError
	if !errors.As(err, &bad) || !strings.Contains(err.Error(), "stars.csv:2: column rmag") {
		t.Errorf("broken catalogue: %v", err)
	}
	if err := os.Remove(filepath.Join(dir, "stars.csv")); err != nil {
		t.Fatal(err)
	}
	if _, err := AlignFile(ctx, newPath, refPath, aligned, c, "test"); !errors.As(err, &bad) || !strings.Contains(err.Error(), "stars.csv") {
		t.Errorf("missing catalogue: %v", err)
	}
}

func TestPhotometrySettings(t *testing.T) {
	c, err := ParseConfig("s.toml", []byte(strings.Replace(starSettings, "\n[photometry]", "[photometry]\npm_ra = \"a\"\npm_dec = \"d\"\nepoch = \"year\"", 1)))
	if err != nil {
		t.Fatal(err)
	}
	s, key, want := c.standards()
	if key != "" {
		t.Fatal(key, want)
	}
	if m, e, ok := s.columns.Filter("i"); m != "imag" || e != "e_rmag" || !ok {
		t.Errorf("filter i: %q %q %v", m, e, ok)
	}
	if _, _, ok := s.columns.Filter("z"); ok {
		t.Error("filter z has a column")
	}
	if s.terms["r"] != (colourTerm{fit: true}) || s.terms["i"] != (colourTerm{value: 0.02}) || s.columns.Epoch != "year" || s.columns.PMRA != "a" {
		t.Errorf("%+v", s)
	}
	for _, q := range []struct {
		text string
		want []string
	}{
		{"mag = 3", []string{"photometry.mag = 3", "column"}},
		{"mag = { r = 3 }", []string{"photometry.mag"}},
		{"colour = [\"a\"]", []string{"photometry.colour", "two columns"}},
		{"colour_term = \"fitted\"\ncolour = \"c\"", []string{"photometry.colour_term = fitted", `"fit"`}},
		{"colour_term = 0.1", []string{"photometry.colour", "colour_term asks for it"}},
		{"epoch = true", []string{"photometry.epoch = true", "Julian year"}},
		{"epoch = 15.5\npm_ra = \"a\"\npm_dec = \"b\"", []string{"photometry.catalogue", "1800 to 2200"}},
		{"tolerance_arcsec = 0", []string{"photometry.tolerance_arcsec = 0"}},
		{"min_stars = 0", []string{"photometry.min_stars = 0"}},
		{"max_scatter = nan", []string{"photometry.max_scatter = NaN"}},
		{"magnitude = \"r\"", []string{"magnitude"}},
	} {
		_, err := ParseConfig("s.toml", []byte("[photometry]\n"+q.text+"\n"))
		var bad *ConfigError
		if !errors.As(err, &bad) {
			t.Errorf("%s: found %v, expected a *ConfigError", q.text, err)
			continue
		}
		for _, w := range q.want {
			if !strings.Contains(err.Error(), w) {
				t.Errorf("%s: %q is missing in %q", q.text, w, err)
			}
		}
	}
}
