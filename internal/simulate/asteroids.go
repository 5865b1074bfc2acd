package simulate

import (
	_ "embed"
	"encoding/csv"
	"fmt"
	"strconv"
	"strings"
)

// asteroidTable holds invented minor planets that cross the demonstration's
// fields: their orbits, and where the station sees them in its nights.
// makeasteroids.py made it with the Earth of ERFA.
//
//go:embed asteroids.csv
var asteroidTable string

// elementColumns is the number of columns of asteroidTable that tell the orbit.
const elementColumns = 11

// asteroid is one row of asteroidTable.
type asteroid struct {
	orbit        []string // designation and elements
	field, night int
	mjd          float64 // UTC, of the place
	ra, dec      float64 // deg
	east, north  float64 // arcsec/d
	mag          float64
}

// asteroids reads asteroidTable; header holds the names of the orbit's columns.
func asteroids() (header []string, list []asteroid) {
	rows, err := csv.NewReader(strings.NewReader(asteroidTable)).ReadAll()
	if err != nil {
		panic(fmt.Sprintf("simulate: asteroids.csv: %v", err))
	}
	number := func(s string) float64 {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			panic(fmt.Sprintf("simulate: asteroids.csv: %v", err))
		}
		return v
	}
	for _, r := range rows[1:] {
		v := r[elementColumns:]
		list = append(list, asteroid{orbit: r[:elementColumns], field: int(number(v[0])), night: int(number(v[1])), mjd: number(v[2]),
			ra: number(v[3]), dec: number(v[4]), east: number(v[5]), north: number(v[6]), mag: number(v[7])})
	}
	return rows[0][:elementColumns], list
}

// AsteroidID is the identifier of the event of a minor planet of the
// demonstration.
func AsteroidID(designation string) string { return "AS-" + designation }

// Discovered reports whether the orbit of an asteroid, told by the identifier of
// its event, is known: of four in five.
func Discovered(id string) bool { return !strings.HasSuffix(id, "0") && !strings.HasSuffix(id, "5") }
