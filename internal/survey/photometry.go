package survey

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"io"
	"os"

	"nightsift/align"
	"nightsift/internal/fits"
	"nightsift/internal/photometry"
)

// byFilter understands a setting that is one value or a table with a value for
// each filter; the one value stands under "".
func byFilter[T any](v any, one func(any) (T, bool)) (map[string]T, bool) {
	if x, ok := one(v); ok {
		return map[string]T{"": x}, true
	}
	table, ok := v.(map[string]any)
	if !ok || len(table) == 0 {
		return nil, false
	}
	out := map[string]T{}
	for filter, v := range table {
		x, ok := one(v)
		if !ok {
			return nil, false
		}
		out[filter] = x
	}
	return out, true
}

func asText(v any) (string, bool) {
	s, ok := v.(string)
	return s, ok
}

func asNumber(v any) (float64, bool) {
	switch x := v.(type) {
	case float64:
		return x, x-x == 0
	case int64:
		return float64(x), true
	}
	return 0, false
}

// colourTerm is a fixed coefficient, or one to be fitted.
type colourTerm struct {
	value float64
	fit   bool
}

func asColourTerm(v any) (colourTerm, bool) {
	if s, ok := v.(string); ok {
		return colourTerm{fit: true}, s == "fit"
	}
	x, ok := asNumber(v)
	return colourTerm{value: x}, ok && x > -2 && x < 2
}

// standards says which catalogue serves and how.
type standards struct {
	path    string // empty: none
	columns photometry.Columns
	match   photometry.MatchConfig
	terms   map[string]colourTerm
}

// standards understands the section [photometry]; key names what is wrong.
func (c *Config) standards() (s standards, key, want string) {
	p := &c.Photometry
	s.path, s.match = p.Catalogue, photometry.DefaultMatchConfig()
	k := &s.columns
	k.RA, k.Dec, k.PMRA, k.PMDec = p.RA, p.Dec, p.PMRA, p.PMDec
	var ok bool
	if k.Mag, ok = byFilter(p.Mag, asText); !ok {
		return s, "mag", `a column's name, or one for each filter such as { r = "rmag" }`
	}
	if k.MagErr, ok = byFilter(p.MagErr, asText); !ok {
		return s, "mag_err", `a column's name, or one for each filter such as { r = "rerr" }`
	}
	switch v := p.Colour.(type) {
	case string:
		if v != "" {
			k.Colour = []string{v}
		}
	case []any:
		for _, x := range v {
			name, _ := x.(string)
			k.Colour = append(k.Colour, name)
		}
		if len(v) != 2 {
			return s, "colour", "two columns, the first minus the second"
		}
	default:
		return s, "colour", `a column's name, or two whose difference it is such as ["gmag", "rmag"]`
	}
	if year, ok := asNumber(p.Epoch); ok {
		k.Year = year
	} else if k.Epoch, ok = asText(p.Epoch); !ok || k.Epoch == "" {
		return s, "epoch", "a Julian year, or the name of a column of them"
	}
	if s.terms, ok = byFilter(p.ColourTerm, asColourTerm); !ok {
		return s, "colour_term", `a number from -2 to 2, "fit", or one of these for each filter`
	}
	switch {
	case !(p.SourceColour > -10 && p.SourceColour < 10):
		return s, "source_colour", "-10 to 10"
	case !(p.ToleranceArcsec > 0 && p.ToleranceArcsec <= 60):
		return s, "tolerance_arcsec", "more than 0, at most 60"
	case !(p.MinStars >= 1):
		return s, "min_stars", "1 or more"
	case !(p.MaxScatter > 0 && p.MaxScatter <= 2):
		return s, "max_scatter", "more than 0, at most 2"
	}
	s.match.Tolerance = p.ToleranceArcsec
	s.match.Settings = photometry.Settings{SourceColour: p.SourceColour, MinStars: p.MinStars, MaxScatter: p.MaxScatter}
	for _, t := range s.terms {
		if len(k.Colour) == 0 && (t.fit || t.value != 0) {
			return s, "colour", "a column, because colour_term asks for it"
		}
	}
	if err := k.Check(); err != nil {
		return s, "catalogue", "sensible columns: " + err.Error()
	}
	return s, "", ""
}

// found returns the value of the key in [photometry].
func (c *Config) photometryValue(key string) any {
	p := &c.Photometry
	return map[string]any{"catalogue": p.Catalogue, "mag": p.Mag, "mag_err": p.MagErr, "colour": p.Colour, "epoch": p.Epoch, "colour_term": p.ColourTerm,
		"source_colour": p.SourceColour, "tolerance_arcsec": p.ToleranceArcsec, "min_stars": p.MinStars, "max_scatter": p.MaxScatter}[key]
}

// standardStars gives pairs the stars with known magnitudes. The zero value
// gives none.
type standardStars struct {
	standards
	catalogue *photometry.Catalogue
}

// standardStars reads the catalogue, where one is configured.
func (c *Config) standardStars() (standardStars, error) {
	s, key, want := c.standards()
	if key != "" {
		return standardStars{}, &ConfigError{fmt.Sprintf("photometry.%s: want %s", key, want)}
	}
	if s.path == "" {
		return standardStars{}, nil
	}
	cat, err := photometry.Read(s.path, s.columns)
	if err != nil {
		return standardStars{}, &ConfigError{fmt.Sprintf("photometry.catalogue: %v", err)}
	}
	return standardStars{s, cat}, nil
}

// mark sets the standards of a pair.
func (s standardStars) mark(p *align.Pair) {
	if s.catalogue == nil {
		return
	}
	cfg := s.match
	t, ok := s.terms[p.New.Meta.Filter]
	if !ok {
		t = s.terms[""]
	}
	cfg.Settings.ColourTerm, cfg.Settings.FitColour = t.value, t.fit
	p.Standards = photometry.Match(photometry.Field{Stars: p.NewStars, WCS: p.New.WCS, Width: p.New.Image.Width, Height: p.New.Image.Height,
		MidMJD: p.New.Meta.MidMJD, Filter: p.New.Meta.Filter}, s.catalogue, cfg)
}

// catalogueDigest names the content of the catalogue of stars.
func catalogueDigest(path string) string {
	file, hdu := fits.SplitName(path)
	f, err := os.Open(file)
	if err != nil {
		return "absent"
	}
	defer f.Close()
	h := sha256.New()
	if _, err := io.Copy(h, f); err != nil {
		return "unreadable"
	}
	return hex.EncodeToString(h.Sum(nil)) + hdu
}
