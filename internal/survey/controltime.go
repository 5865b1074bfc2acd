package survey

import (
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"sort"
	"strconv"

	"nightsift/catalog"
	"nightsift/internal/controltime"
	"nightsift/internal/cosmology"
	"nightsift/internal/efficiency"
	"nightsift/internal/supernova"
	"nightsift/internal/wholefile"
)

// ControlTimeCSV is the name of the table of control times.
const ControlTimeCSV = "control-time.csv"

// Watched is a field in a filter with its searched frames.
type Watched struct {
	Field, Filter string
	Frames        int
	Assumed       int     // of these, without a curve of their own: a threshold of five sigma is taken
	Unknown       int     // frames left out, without date or limit
	First, Last   float64 // MJD
	Area          float64 // square degrees, median over the frames; NaN if unknown

	watch *controltime.Watch
	areas []float64
}

// ControlSettings say for what the control time is wanted.
type ControlSettings struct {
	Peak, StretchSpread float64 // absolute magnitude at the maximum, spread of the stretch
	Needed              int     // frames that must find an object
	Farthest            float64 // redshift
	Rate, Evolution     float64 // events for each Mpc³ and year, and the power of 1+z
	Cosmology           cosmology.Flat

	// Galaxies at redshift Farthest in each field, and events for each and year.
	Galaxies, GalaxyRate float64
}

// DefaultControlSettings returns type Ia supernovae found once, out to redshift
// 0.2, at 2.5e-5 for each Mpc³ and year.
func DefaultControlSettings() ControlSettings {
	return ControlSettings{Peak: supernova.StandardPeak, StretchSpread: 0.1, Needed: 1, Farthest: 0.2, Rate: 2.5e-5, GalaxyRate: 1.0 / 500, Cosmology: cosmology.Default()}
}

// Check reports a setting that makes no sense.
func (s *ControlSettings) Check() error {
	switch {
	case !(s.Peak > -30 && s.Peak < 0):
		return fmt.Errorf("peak %g mag: want -30 to 0", s.Peak)
	case !(s.StretchSpread >= 0 && s.StretchSpread <= 0.15):
		return fmt.Errorf("spread of the stretch %g: want 0 to 0.15", s.StretchSpread)
	case s.Needed < 1 || s.Needed > 100:
		return fmt.Errorf("%d frames needed: want 1 to 100", s.Needed)
	case !(s.Farthest > 0 && s.Farthest <= 2):
		return fmt.Errorf("redshift %g: want more than 0, at most 2", s.Farthest)
	case !(s.Rate >= 0) || math.IsInf(s.Rate, 0) || !(math.Abs(s.Evolution) <= 10):
		return fmt.Errorf("rate %g with the power %g of 1+z: want 0 or more, and -10 to 10", s.Rate, s.Evolution)
	}
	if !(s.Galaxies >= 0) || !(s.GalaxyRate >= 0) || math.IsInf(s.Galaxies+s.GalaxyRate, 0) {
		return fmt.Errorf("%g galaxies with a rate of %g: want 0 or more", s.Galaxies, s.GalaxyRate)
	}
	return s.Cosmology.Check()
}

// gaussianWidth is the width [mag] of the curve of a threshold of five sigma in
// Gaussian noise.
const gaussianWidth = 2.5 / math.Ln10 / 5

// Watched lists the fields of a survey with their searched frames. A field is told
// by its name and filter.
func (f *Folder) Watched(needed int) ([]*Watched, error) {
	root := f.path(f.Config.Folders.Nights)
	nights, err := os.ReadDir(root)
	if err != nil && !errors.Is(err, os.ErrNotExist) {
		return nil, err
	}
	byKey := map[[2]string]*Watched{}
	visits := map[*Watched][]controltime.Visit{}
	for _, night := range nights {
		if !night.IsDir() {
			continue
		}
		folders, err := os.ReadDir(filepath.Join(root, night.Name()))
		if err != nil {
			return nil, err
		}
		for _, folder := range folders {
			r := readReceipt(filepath.Join(root, night.Name(), folder.Name()))
			if r == nil || r.Record.Status != catalog.Searched {
				continue
			}
			key := [2]string{r.Record.Field, r.Record.Filter}
			w := byKey[key]
			if w == nil {
				w = &Watched{Field: key[0], Filter: key[1], First: math.Inf(1), Last: math.Inf(-1), Area: math.NaN()}
				byKey[key] = w
			}
			curve := r.Efficiency.Curve()
			assumed := curve == nil && !math.IsNaN(r.Record.MagLimit5Sigma)
			if assumed {
				curve = &efficiency.Curve{Form: efficiency.FormFlux, Plateau: 1, Middle: r.Record.MagLimit5Sigma, Width: gaussianWidth}
			}
			if curve == nil || math.IsNaN(r.Record.MidMJD) {
				w.Unknown++
				continue
			}
			if assumed {
				w.Assumed++
			}
			w.Frames++
			w.First, w.Last = min(w.First, r.Record.MidMJD), max(w.Last, r.Record.MidMJD)
			if a := areaOf(&r.Record); a > 0 {
				w.areas = append(w.areas, a)
			}
			visits[w] = append(visits[w], controltime.Visit{MJD: r.Record.MidMJD, Efficiency: curve.At})
		}
	}
	var list []*Watched
	for _, w := range byKey {
		w.watch = controltime.NewWatch(visits[w], needed)
		if sort.Float64s(w.areas); len(w.areas) > 0 {
			w.Area = w.areas[len(w.areas)/2]
		}
		list = append(list, w)
	}
	sort.Slice(list, func(a, b int) bool {
		if list[a].Field != list[b].Field {
			return list[a].Field < list[b].Field
		}
		return list[a].Filter < list[b].Filter
	})
	return list, nil
}

// areaOf is a frame's size on the sky [square degrees], NaN if unknown.
func areaOf(r *catalog.FrameRecord) float64 {
	j := r.Jacobian
	return math.Abs(j[0]*j[3]-j[1]*j[2]) * float64(r.Width) * float64(r.Height) / (3600 * 3600)
}

// redshiftCells are the rows of the table of control times and the cells of the
// integral over the volume.
const redshiftCells = 40

// Expected is what a field's watch amounts to.
type Expected struct {
	*Watched
	Redshifts []float64
	Days      []float64 // control time [d of the observer] at each redshift
	Half      float64   // redshift at which it has fallen to half of that of the nearest row
	Events    float64   // expected on the field's area; NaN where that is unknown
	InHosts   float64   // expected in the galaxies
}

// Expect computes control times and expected numbers.
func (w *Watched) Expect(s *ControlSettings) Expected {
	kind := controltime.TypeIa(s.Peak, s.StretchSpread)
	e := Expected{Watched: w, Half: math.NaN()}
	for i := 1; i <= redshiftCells; i++ {
		z := s.Farthest * float64(i) / redshiftCells
		e.Redshifts = append(e.Redshifts, z)
		e.Days = append(e.Days, w.watch.AtRedshift(kind, s.Cosmology, z))
		if d := e.Days; math.IsNaN(e.Half) && i > 1 && d[i-1] < d[0]/2 {
			e.Half = z
		}
	}
	e.Events = w.watch.InVolume(kind, s.Cosmology, w.Area*math.Pi*math.Pi/(180*180), s.Farthest, s.Rate, s.Evolution, redshiftCells)
	e.InHosts = w.watch.InGalaxies(kind, s.Cosmology, s.Farthest, s.Galaxies, s.GalaxyRate)
	return e
}

// WriteControlTimes writes a row for each field, filter and redshift, whole or not
// at all.
func WriteControlTimes(dir string, list []Expected, s *ControlSettings) error {
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return err
	}
	return wholefile.Write(filepath.Join(dir, ControlTimeCSV), func(out io.Writer) error {
		w := csv.NewWriter(out)
		rows := [][]string{{"field", "filter", "frames", "area_deg2", "redshift", "peak_mag", "control_time_days"}}
		for _, e := range list {
			area := ""
			if !math.IsNaN(e.Area) {
				area = strconv.FormatFloat(e.Area, 'g', 6, 64)
			}
			for i, z := range e.Redshifts {
				rows = append(rows, []string{e.Field, e.Filter, strconv.Itoa(e.Frames), area, strconv.FormatFloat(z, 'g', 5, 64),
					strconv.FormatFloat(s.Peak+s.Cosmology.Modulus(z), 'f', 3, 64), strconv.FormatFloat(e.Days[i], 'f', 4, 64)})
			}
		}
		return w.WriteAll(rows)
	})
}
