package demo

import (
	"context"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"slices"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/crossmatch"
	"nightsift/internal/lightcurve"
	"nightsift/internal/robust"
	"nightsift/internal/simulate"
	"nightsift/internal/supernova"
	"nightsift/internal/survey"
)

// CurvesName is the folder of the light curves.
const CurvesName = "lightcurves"

// Supernova is what the survey knows of an invented supernova.
type Supernova struct {
	Truth  simulate.DemoSupernova
	Object string // designation in the catalogue; empty if it was not found
	Host   string // as the catalogue of galaxies has it
	Points int    // of the light curve, measured
	Fit    supernova.Result
	Plot   string // file
}

// Movers is how the detections of moving asteroids were named.
type Movers struct {
	Seen     int // detections of asteroids whose orbit is known
	Named    int // of these, those under the right name
	Wrong    int // detections of anything under a wrong name
	Tracks   int // detections of asteroids without a known orbit
	Followed int // of these, those that were linked to a tracklet
}

// followSupernovae measures the light curves at the places of the objects that
// the survey has found, writes them as tables and plots, and fits the template.
func followSupernovae(ctx context.Context, f *survey.Folder) ([]Supernova, error) {
	truth, err := simulate.ReadSupernovae(f.Dir)
	if err != nil {
		return nil, err
	}
	dir := filepath.Join(f.Dir, CurvesName)
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return nil, err
	}
	store, err := f.ReadStore(ctx)
	if err != nil {
		return nil, err
	}
	defer store.Close()
	var list []Supernova
	for _, t := range truth {
		s := Supernova{Truth: t}
		objects, err := store.Objects(ctx, catalog.ObjectQuery{Cone: &catalog.Cone{RA: t.RA, Dec: t.Dec, Radius: 1}})
		if err != nil {
			return nil, err
		}
		if len(objects) > 0 {
			if err := s.follow(ctx, f, objects[0], dir); err != nil {
				return nil, err
			}
		}
		list = append(list, s)
	}
	return list, nil
}

func (s *Supernova) follow(ctx context.Context, f *survey.Folder, o catalog.Object, dir string) error {
	s.Object = o.Name
	at := survey.Place{Name: o.Name, RA: o.RA, Dec: o.Dec}
	curve, err := f.LightCurve(ctx, at, lightcurve.DefaultConfig(), runtime.GOMAXPROCS(0))
	if err != nil {
		return err
	}
	for _, p := range curve.Points {
		if p.Status == lightcurve.Measured {
			s.Points++
		}
	}
	known, err := f.Known(at, curve.Middle())
	if err != nil {
		return err
	}
	model := supernova.DefaultConfig()
	model.Cosmology = f.Config.Universe()
	model.Redshift = crossmatch.HostRedshift(known)
	for _, m := range known {
		s.Host = m.Name // the only catalogue is that of galaxies
	}
	s.Fit = curve.Fit(model)
	s.Plot = filepath.Join(dir, s.Truth.ID+".png")
	if err := curve.WritePlot(s.Plot, lightcurve.Lines(&s.Fit)); err != nil {
		return err
	}
	return catalog.WriteCSV(filepath.Join(dir, s.Truth.ID+".csv"), curve.Sheet())
}

// nameMovers compares the names that movers of all nights were given with the
// truth.
func nameMovers(f *survey.Folder, truth *simulate.Truth) (Movers, error) {
	var m Movers
	var nights []string
	for i := range truth.Frames {
		nights = append(nights, truth.Frames[i].Night)
	}
	slices.Sort(nights)
	for _, night := range slices.Compact(nights) {
		list, err := f.NameMovers(night)
		if err != nil {
			return m, err
		}
		for i := range list {
			m.count(&list[i], truth)
		}
	}
	return m, nil
}

func (m *Movers) count(found *survey.Mover, truth *simulate.Truth) {
	is := sourceAt(&found.Candidate, truth)
	switch {
	case is == nil || is.Kind != simulate.KindAsteroid:
		if found.Known {
			m.Wrong++
		}
	case simulate.Discovered(is.ID):
		m.Seen++
		if found.Known && simulate.AsteroidID(found.Match.Designation) == is.ID {
			m.Named++
		} else if found.Known {
			m.Wrong++
		}
	default:
		m.Tracks++
		if found.Known {
			m.Wrong++
		} else if found.Tracklet != "" {
			m.Followed++
		}
	}
}

// sourceAt returns what was put where a candidate was found, nil for nothing.
func sourceAt(c *detect.Candidate, truth *simulate.Truth) *simulate.Source {
	var best *simulate.Source
	nearest := 3.0 // px
	for i := range truth.Sources {
		s := &truth.Sources[i]
		if s.Frame != c.Frame {
			continue
		}
		if d := math.Hypot(s.X-c.X, s.Y-c.Y); d < nearest {
			best, nearest = s, d
		}
	}
	return best
}

// writeFollowed tells what became of the references, the supernovae and the
// movers.
func (r *Result) writeFollowed(w io.Writer) {
	for _, s := range r.References {
		if s.Entry != nil {
			fmt.Fprintf(w, "reference of %s, filter %s: %d of %d exposures, %s, 5 sigma at %.2f mag\n", s.Field, s.Filter, len(s.Entry.Frames), s.Offered, s.Entry.Method, s.Entry.MagLimit)
		}
	}
	if measured := slices.DeleteFunc(slices.Clone(r.Missed), math.IsNaN); len(measured) > 0 {
		fmt.Fprintf(w, "half of the artificial sources found at %.2f mag (median of %d frames, %.2f to %.2f)\n",
			robust.Median(measured), len(measured), slices.Min(measured), slices.Max(measured))
	}
	for _, s := range r.Supernovae {
		t := &s.Truth
		if s.Object == "" {
			fmt.Fprintf(w, "%s: not in the catalogue\n", t.ID)
			continue
		}
		fmt.Fprintf(w, "%s is %s, in %s: %d points; ", t.ID, s.Object, orNone(s.Host), s.Points)
		if len(s.Fit.Peaks) > 0 && !math.IsNaN(s.Fit.MJD) {
			p := s.Fit.Peaks[0]
			fmt.Fprintf(w, "maximum %.1f ± %.1f d (true %.1f), %.2f ± %.2f mag (true %.2f), ", s.Fit.MJD, s.Fit.MJDErr, t.PeakMJD, p.Mag, p.MagErr, t.PeakMag)
		}
		fmt.Fprintf(w, "type Ia template: %s\n", s.Fit.Verdict)
	}
	m := r.Movers
	fmt.Fprintf(w, "asteroids with a known orbit: %d of %d detections named rightly, %d detections named wrongly; without one: %d of %d detections in tracklets\n",
		m.Named, m.Seen, m.Wrong, m.Followed, m.Tracks)
}

func orNone(s string) string {
	if s == "" {
		return "no known galaxy"
	}
	return s
}
