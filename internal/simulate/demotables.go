package simulate

import (
	"encoding/csv"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"

	"nightsift/internal/wholefile"
)

// Tables in the demonstration's folder.
const (
	ElementsName   = "minor-planets.csv"    // orbits of most asteroids
	GalaxiesName   = "galaxies.csv"         // the galaxies of all fields
	supernovaeName = "truth-supernovae.csv" // for ReadSupernovae
)

// DemoSupernova is the truth about a supernova of the demonstration.
type DemoSupernova struct {
	ID      string
	RA, Dec float64 // deg
	Host    string
	PeakMag float64 // apparent
	Supernova
}

// writeElements writes the orbits that are known of the asteroids in the fields.
func writeElements(dir string, scenes []*Scene) error {
	there := map[string]bool{}
	for _, s := range scenes {
		for i := range s.Events {
			there[s.Events[i].ID] = Discovered(s.Events[i].ID)
		}
	}
	header, list := asteroids()
	rows := [][]string{header}
	for i := range list {
		if there[AsteroidID(list[i].orbit[0])] {
			rows = append(rows, list[i].orbit)
		}
	}
	return writeRows(filepath.Join(dir, ElementsName), rows)
}

// writeGalaxies writes a catalogue of the galaxies: ellipses that hold half of
// the light.
func writeGalaxies(dir string, scenes []*Scene) error {
	rows := [][]string{{"galaxy", "ra_deg", "dec_deg", "redshift", "semi_major_arcsec", "semi_minor_arcsec", "angle_deg", "mag"}}
	for k, s := range scenes {
		for _, g := range s.Galaxies {
			rows = append(rows, []string{demoFields[k].name + "-" + g.ID, fmt.Sprintf("%.6f", g.RA), fmt.Sprintf("%.6f", g.Dec), fmt.Sprintf("%.4f", g.Z),
				fmt.Sprintf("%.2f", g.Radius/math.Sqrt(g.Ratio)), fmt.Sprintf("%.2f", g.Radius*math.Sqrt(g.Ratio)), fmt.Sprintf("%.1f", g.Angle), fmt.Sprintf("%.2f", g.Mag)})
		}
	}
	return writeRows(filepath.Join(dir, GalaxiesName), rows)
}

func writeSupernovae(dir string, list []Event) error {
	rows := [][]string{{"id", "ra_deg", "dec_deg", "host", "peak_mjd", "peak_mag", "stretch", "redshift", "offset_mag"}}
	for _, e := range list {
		s := e.Supernova
		rows = append(rows, []string{e.ID, fmt.Sprintf("%.7f", e.RA), fmt.Sprintf("%.7f", e.Dec), e.Host, fmt.Sprintf("%.4f", s.PeakMJD),
			fmt.Sprintf("%.4f", s.PeakApparent()), fmt.Sprintf("%.4f", s.Stretch), fmt.Sprintf("%.4f", s.Z), fmt.Sprintf("%.4f", s.Offset)})
	}
	return writeRows(filepath.Join(dir, supernovaeName), rows)
}

// ReadSupernovae reads the truth about the supernovae in a folder that
// WriteDemo filled.
func ReadSupernovae(dir string) ([]DemoSupernova, error) {
	path := filepath.Join(dir, supernovaeName)
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	if len(rows) == 0 || len(rows[0]) != 9 {
		return nil, fmt.Errorf("%s: no table of supernovae", path)
	}
	var list []DemoSupernova
	for i, r := range rows[1:] {
		s := DemoSupernova{ID: r[0], Host: r[3]}
		for _, c := range []struct {
			text string
			to   *float64
		}{{r[1], &s.RA}, {r[2], &s.Dec}, {r[4], &s.PeakMJD}, {r[5], &s.PeakMag}, {r[6], &s.Stretch}, {r[7], &s.Z}, {r[8], &s.Offset}} {
			if *c.to, err = strconv.ParseFloat(c.text, 64); err != nil {
				return nil, fmt.Errorf("%s:%d: %w", path, i+2, err)
			}
		}
		list = append(list, s)
	}
	return list, nil
}

func writeRows(path string, rows [][]string) error {
	var b strings.Builder
	w := csv.NewWriter(&b)
	if err := w.WriteAll(rows); err != nil {
		return err
	}
	return wholefile.WriteBytes(path, []byte(b.String()))
}
