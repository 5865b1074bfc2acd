package survey

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync"

	"golang.org/x/sync/errgroup"

	"nightsift/catalog"
	"nightsift/internal/astro"
	"nightsift/internal/lightcurve"
)

// Place is a place in the sky (RA, Dec [deg], ICRS), perhaps that of an object.
type Place struct {
	Name    string // designation of the object, or identifier of the candidate; empty for a bare place
	RA, Dec float64
}

// FindPlace understands "RA,DEC" (degrees, or hours and degrees with colons),
// the designation of an object of the catalogue, or the identifier of a
// candidate.
func (f *Folder) FindPlace(ctx context.Context, text string) (Place, error) {
	if a, b, ok := strings.Cut(text, ","); ok {
		ra, err := astro.ParseRA(a)
		if err != nil {
			return Place{}, &ConfigError{fmt.Sprintf("place %q: %v", text, err)}
		}
		dec, err := astro.ParseDec(b)
		if err != nil {
			return Place{}, &ConfigError{fmt.Sprintf("place %q: %v", text, err)}
		}
		if !(dec >= -90 && dec <= 90) {
			return Place{}, &ConfigError{fmt.Sprintf("place %q: declination %v: want -90 to 90 degrees", text, dec)}
		}
		return Place{RA: ra, Dec: dec}, nil
	}
	s, err := f.ReadStore(ctx)
	if err != nil {
		return Place{}, err
	}
	defer s.Close()
	o, err := s.Object(ctx, text)
	if err == nil {
		return Place{Name: o.Name, RA: o.RA, Dec: o.Dec}, nil
	}
	if c, err := s.Candidate(ctx, text); err == nil {
		return Place{Name: c.ID, RA: c.RA, Dec: c.Dec}, nil
	}
	return Place{}, err
}

// LightCurve measures a place on all frames of the survey that were searched,
// several at once.
func (f *Folder) LightCurve(ctx context.Context, at Place, cfg lightcurve.Config, workers int) (*lightcurve.Curve, error) {
	if _, err := os.ReadDir(f.path(f.Config.Folders.Nights)); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return nil, err
	}
	var points []lightcurve.Point
	var lock sync.Mutex
	var g errgroup.Group
	g.SetLimit(max(1, workers))
	f.eachResult(func(p place, r *Receipt) {
		if r == nil || r.Record.Status != catalog.Searched || ctx.Err() != nil {
			return
		}
		g.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			path := filepath.Join(p.dir, DifferenceName)
			point := lightcurve.NoFile(r.Record.MidMJD, r.Record.Filter)
			if _, err := os.Stat(path); err == nil {
				point = lightcurve.Measure(path, at.RA, at.Dec, cfg.MaxLost)
			}
			point.Night, point.Frame = p.night, p.name
			if point.MidMJD != point.MidMJD {
				point.MidMJD, point.Filter = r.Record.MidMJD, r.Record.Filter
			}
			lock.Lock()
			points = append(points, point)
			lock.Unlock()
			return nil
		})
	})
	if err := g.Wait(); err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	return lightcurve.New(at.Name, at.RA, at.Dec, points, cfg), nil
}
