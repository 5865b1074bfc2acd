package survey

import (
	"context"
	"fmt"
	"math"
	"path/filepath"
	"strings"

	"nightsift/catalog"
	"nightsift/internal/fits"
	"nightsift/internal/reference"
)

// referenceConfig is what a survey's configuration says of building references.
func (c *Config) referenceConfig() (reference.Config, error) {
	r := reference.DefaultConfig()
	k, err := c.LoadKeywords()
	if err != nil {
		return r, &ConfigError{err.Error()}
	}
	r.Keywords = k
	r.Align.AnyFilter = c.Search.AnyFilter
	return r, nil
}

// ReferenceRequest says which reference to build from which frames.
type ReferenceRequest struct {
	Frames []string // files or folders
	Out    string
	Add    string // a reference whose frames are used as well, and whose grid and scale are kept; empty for none
	// Set changes the settings before the build; may be nil.
	Set func(*reference.Config)
}

// BuildReference builds a reference and writes it.
func BuildReference(ctx context.Context, q ReferenceRequest, c Config, version string) (*reference.Product, error) {
	rc, err := c.referenceConfig()
	if err != nil {
		return nil, err
	}
	files, err := ExpandFrames(q.Frames, rc.Keywords)
	if err != nil {
		return nil, err
	}
	if q.Add != "" {
		known, err := reference.ReadInputs(q.Add)
		if err != nil {
			return nil, err
		}
		have := map[string]bool{}
		for _, f := range files {
			have[absolute(f)] = true
		}
		for _, in := range known {
			if in.Anchor {
				rc.Anchor = in.Path
			}
			if !have[absolute(in.Path)] {
				files = append(files, in.Path)
			}
		}
	}
	if len(files) == 0 {
		return nil, &ConfigError{"no frames: name FITS files, or folders that hold some"}
	}
	rc.Scratch = filepath.Dir(q.Out)
	if q.Set != nil {
		q.Set(&rc)
	}
	p, err := reference.Build(ctx, files, rc)
	if err != nil {
		return nil, err
	}
	h := &fits.Header{}
	h.Set("CREATOR", "nightsift "+version, "program")
	h.Set("CONFDIG", c.Digest(), "digest of the configuration")
	return p, p.Write(q.Out, h)
}

// brightBefore and brightAfter [d] are how long before its first and after its last detection a
// source may shine unseen: a supernova of type Ia rises for about 20 days and
// fades for longer.
const brightBefore, brightAfter = 30, 100

// BrightTimes says when something in the catalogue was bright, so that frames
// of that time can be left out of a reference. what is an object's name, a
// candidate's identifier, or a place as RA,DEC in degrees or sexagesimal.
func (f *Folder) BrightTimes(ctx context.Context, what string) ([]reference.Exclusion, error) {
	store, err := f.ReadStore(ctx)
	if err != nil {
		return nil, err
	}
	defer store.Close()
	var objects []catalog.Object
	if strings.Contains(what, ",") {
		const radius = 5.0 // arcsec
		at, err := f.FindPlace(ctx, what)
		if err != nil {
			return nil, err
		}
		if objects, err = store.Objects(ctx, catalog.ObjectQuery{Cone: &catalog.Cone{RA: at.RA, Dec: at.Dec, Radius: radius}}); err != nil {
			return nil, err
		}
		if len(objects) == 0 {
			return nil, &ConfigError{fmt.Sprintf("the catalogue has no object within %g arcsec of %s", radius, what)}
		}
	} else {
		o, err := store.Object(ctx, what)
		if err != nil {
			return nil, &ConfigError{fmt.Sprintf("%s: %v; name an object, a candidate or a place as RA,DEC", what, err)}
		}
		objects = append(objects, o)
	}
	var out []reference.Exclusion
	for _, o := range objects {
		members, err := store.Members(ctx, o)
		if err != nil {
			return nil, err
		}
		e := reference.Exclusion{Name: o.Name, RA: o.RA, Dec: o.Dec, From: math.Inf(1), To: math.Inf(-1)}
		for _, m := range members {
			if m.Flux > 0 && m.MidMJD == m.MidMJD {
				e.From, e.To = min(e.From, m.MidMJD-brightBefore), max(e.To, m.MidMJD+brightAfter)
			}
		}
		if e.From < e.To {
			out = append(out, e)
		}
	}
	return out, nil
}
