package survey

import (
	"context"
	"fmt"
	"math"
	"path/filepath"

	"nightsift/catalog"
	"nightsift/internal/cosmology"
	"nightsift/internal/crossmatch"
)

// CrossmatchConfig is one [[crossmatch]] of survey.toml.
type CrossmatchConfig struct {
	Name         string  `toml:"name"`
	File         string  `toml:"file"`
	Kind         string  `toml:"kind"`
	RadiusArcsec float64 `toml:"radius_arcsec"`   // 0: the kind's own
	MaxRadii     float64 `toml:"max_light_radii"` // 0: the usual one

	Columns struct {
		RA        string `toml:"ra"`
		Dec       string `toml:"dec"`
		Name      string `toml:"name"`
		PMRA      string `toml:"pm_ra"`
		PMDec     string `toml:"pm_dec"`
		Epoch     any    `toml:"epoch"`
		Redshift  string `toml:"redshift"`
		SemiMajor string `toml:"semi_major"`
		SemiMinor string `toml:"semi_minor"`
		Angle     string `toml:"angle"`
		Mag       string `toml:"mag"`
	} `toml:"columns"`
}

// catalogue understands the section; key names what is wrong.
func (c *CrossmatchConfig) catalogue() (cfg crossmatch.Config, key, want string) {
	cfg = crossmatch.DefaultConfig(crossmatch.Kind(c.Kind))
	cfg.Name, cfg.File = c.Name, c.File
	if c.RadiusArcsec != 0 {
		cfg.Radius = c.RadiusArcsec
	}
	if c.MaxRadii != 0 {
		cfg.MaxDLR = c.MaxRadii
	}
	k, from := &cfg.Columns, &c.Columns
	if from.RA != "" {
		k.RA = from.RA
	}
	if from.Dec != "" {
		k.Dec = from.Dec
	}
	k.Name, k.PMRA, k.PMDec, k.Redshift, k.Mag = from.Name, from.PMRA, from.PMDec, from.Redshift, from.Mag
	k.SemiMajor, k.SemiMinor, k.Angle = from.SemiMajor, from.SemiMinor, from.Angle
	if from.Epoch != nil {
		if year, ok := asNumber(from.Epoch); ok {
			k.Year = year
		} else if k.Epoch, ok = asText(from.Epoch); !ok || k.Epoch == "" {
			return cfg, "columns.epoch", "a Julian year, or the name of a column of them"
		}
	}
	key, want = cfg.Check()
	return cfg, key, want
}

// crossmatches checks all [[crossmatch]] sections.
func (c *Config) crossmatches() (key, want string) {
	seen := map[string]bool{}
	for i := range c.Crossmatch {
		_, key, want := c.Crossmatch[i].catalogue()
		place := fmt.Sprintf("crossmatch[%d]", i+1)
		if key != "" {
			return place + "." + key, want
		}
		if seen[c.Crossmatch[i].Name] {
			return place + ".name", "a name that no other one has"
		}
		seen[c.Crossmatch[i].Name] = true
	}
	return "", ""
}

// Universe is the cosmology of the configuration.
func (c *Config) Universe() cosmology.Flat {
	return cosmology.Flat{H0: c.Cosmology.H0, OmegaMatter: c.Cosmology.OmegaMatter}
}

// Catalogues reads the user's catalogues of all [[crossmatch]] sections, in order.
func (f *Folder) Catalogues() ([]*crossmatch.Catalogue, error) {
	var list []*crossmatch.Catalogue
	for i := range f.Config.Crossmatch {
		cfg, key, want := f.Config.Crossmatch[i].catalogue()
		if key != "" {
			return nil, &ConfigError{fmt.Sprintf("crossmatch[%d].%s: want %s", i+1, key, want)}
		}
		cfg.File = f.path(cfg.File)
		c, err := crossmatch.Read(cfg)
		if err != nil {
			return nil, &ConfigError{fmt.Sprintf("crossmatch[%d]: %v", i+1, err)}
		}
		list = append(list, c)
	}
	return list, nil
}

// Known returns what the user's catalogues have at a place at a time [MJD; NaN:
// without proper motions], one match a catalogue at most.
func (f *Folder) Known(at Place, mjd float64) ([]crossmatch.Match, error) {
	catalogues, err := f.Catalogues()
	if err != nil {
		return nil, err
	}
	var out []crossmatch.Match
	for _, c := range catalogues {
		if m, ok := c.Find(at.RA, at.Dec, mjd, f.Config.Universe()); ok {
			out = append(out, m)
		}
	}
	return out, nil
}

// MatchSheet lists what the user's catalogues have at the places of objects: a row
// for each object and catalogue with a match. Stars are taken where they were when
// the object was brightest.
func (f *Folder) MatchSheet(ctx context.Context, q catalog.ObjectQuery) (*catalog.Sheet, error) {
	catalogues, err := f.Catalogues()
	if err != nil {
		return nil, err
	}
	if len(catalogues) == 0 {
		return nil, &ConfigError{filepath.Join(f.Dir, ConfigName) + ": there is no [[crossmatch]]: name a catalogue to compare with"}
	}
	store, err := f.ReadStore(ctx)
	if err != nil {
		return nil, err
	}
	defer store.Close()
	objects, err := store.Objects(ctx, q)
	if err != nil {
		return nil, err
	}
	type row struct {
		object *catalog.Object
		crossmatch.Match
	}
	var rows []row
	for i := range objects {
		for _, c := range catalogues {
			if m, ok := c.Find(objects[i].RA, objects[i].Dec, objects[i].PeakMJD, f.Config.Universe()); ok {
				rows = append(rows, row{&objects[i], m})
			}
		}
	}
	s := &catalog.Sheet{Name: "matches", Rows: len(rows)}
	text := func(name, description string, value func(*row) string) {
		addText(s, name, description, func(i int) string { return value(&rows[i]) })
	}
	number := func(name, unit, description string, value func(*row) float64) {
		addNumber(s, name, unit, description, func(i int) float64 { return value(&rows[i]) })
	}
	text("object", "designation", func(r *row) string { return r.object.Name })
	number("ra_deg", "deg", "right ascension of the object, ICRS", func(r *row) float64 { return r.object.RA })
	number("dec_deg", "deg", "declination of the object, ICRS", func(r *row) float64 { return r.object.Dec })
	text("catalogue", "the user's catalogue", func(r *row) string { return r.Catalogue })
	text("kind", "what that catalogue holds", func(r *row) string { return string(r.Kind) })
	text("host", "of a galaxy: whether its light reaches the place", func(r *row) string {
		switch {
		case r.Kind != crossmatch.Galaxy:
			return ""
		case r.Host:
			return "yes"
		}
		return "no"
	})
	text("name", "of the matched row", func(r *row) string { return r.Name })
	number("offset_arcsec", "arcsec", "distance from the match to the object", func(r *row) float64 { return r.Distance })
	number("offset_east_arcsec", "arcsec", "its part towards the east", func(r *row) float64 { return r.East })
	number("offset_north_arcsec", "arcsec", "its part towards the north", func(r *row) float64 { return r.North })
	number("offset_light_radii", "", "the distance in units of the directional light radius", func(r *row) float64 { return r.LightRadii })
	number("offset_kpc", "kpc", "the distance at the redshift", func(r *row) float64 { return r.Kiloparsec })
	number("redshift", "", "of the match", func(r *row) float64 { return r.Redshift })
	number("match_mag", "mag", "magnitude of the match", func(r *row) float64 { return r.Mag })
	number("peak_mag", "mag", "brightest detection of the object", func(r *row) float64 { return r.object.PeakMag })
	number("peak_absolute_mag", "mag", "the same at the distance of the match, without K-correction and dust; not for galaxies that are no hosts", func(r *row) float64 {
		if r.Kind == crossmatch.Galaxy && !r.Host {
			return math.NaN()
		}
		return r.Absolute(r.object.PeakMag)
	})
	return s, nil
}
