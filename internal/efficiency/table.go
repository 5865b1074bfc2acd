package efficiency

import (
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"strconv"

	"nightsift/detect"
	"nightsift/internal/fits"
	"nightsift/internal/wholefile"
)

// TableName is the name of the binary table of injected sources. It is not that
// of candidates.
const TableName = "INJECTIONS"

// column joins a column of the table to its place in Injection.
type column struct {
	name, unit, description string
	text                    func(*Injection) *string
	real                    func(*Injection) *float64
}

var columns = []column{
	{"injection_id", "", "identifier; never that of a candidate", func(s *Injection) *string { return &s.ID }, nil},
	{"frame", "", "name of the new frame", func(s *Injection) *string { return &s.Frame }, nil},
	{"filter", "", "filter of the new frame", func(s *Injection) *string { return &s.Filter }, nil},
	{"places", "", "kind of place: sky, galaxies or cores", func(s *Injection) *string { return (*string)(&s.Where) }, nil},
	{"x_px", "pixel", "true position, first pixel is 1", nil, func(s *Injection) *float64 { return &s.X }},
	{"y_px", "pixel", "true position, first pixel is 1", nil, func(s *Injection) *float64 { return &s.Y }},
	{"ra_deg", "deg", "right ascension, ICRS", nil, func(s *Injection) *float64 { return &s.RA }},
	{"dec_deg", "deg", "declination, ICRS", nil, func(s *Injection) *float64 { return &s.Dec }},
	{"chip_x", "", "place on the chip along x, 0 to 1", nil, func(s *Injection) *float64 { return &s.U }},
	{"chip_y", "", "place on the chip along y, 0 to 1", nil, func(s *Injection) *float64 { return &s.V }},
	{"flux", "count", "true flux", nil, func(s *Injection) *float64 { return &s.Flux }},
	{"mag", "mag", "magnitude of it", nil, func(s *Injection) *float64 { return &s.Mag }},
	{"relative_mag", "mag", "the same relative to the 5 sigma limit", nil, func(s *Injection) *float64 { return &s.Relative }},
	{"signal_to_noise", "", "on empty sky", nil, func(s *Injection) *float64 { return &s.SN }},
	{"host_light", "count/pixel", "light of the reference there", nil, func(s *Injection) *float64 { return &s.HostLight }},
	{"host_brightness", "mag/arcsec2", "the same as surface brightness", nil, func(s *Injection) *float64 { return &s.HostBrightness }},
	{"host_distance_px", "pixel", "from the centre of the galaxy on which it was put", nil, func(s *Injection) *float64 { return &s.HostDistance }},
	{"fate", "", "what became of it", func(s *Injection) *string { return (*string)(&s.Fate) }, nil},
	{"found_significance", "", "of what was found there", nil, func(s *Injection) *float64 { return &s.Significance }},
	{"found_probability", "", "real_probability of it", nil, func(s *Injection) *float64 { return &s.RealProbability }},
	{"found_x_px", "pixel", "position of it", nil, func(s *Injection) *float64 { return &s.FoundX }},
	{"found_y_px", "pixel", "position of it", nil, func(s *Injection) *float64 { return &s.FoundY }},
	{"found_flux", "count", "flux of it", nil, func(s *Injection) *float64 { return &s.FoundFlux }},
	{"found_flux_err", "count", "1 sigma error of found_flux", nil, func(s *Injection) *float64 { return &s.FoundFluxErr }},
	{"found_kind", "", "kind of it", func(s *Injection) *string { return (*string)(&s.Kind) }, nil},
}

// Table returns sources as a FITS table. Nulls of numbers are NaN.
func Table(list []Injection) *fits.Table {
	t := &fits.Table{Name: TableName}
	for _, c := range columns {
		f := fits.Column{Name: c.name, Unit: c.unit, Description: c.description}
		if c.text != nil {
			v := make([]string, len(list))
			for i := range list {
				v[i] = *c.text(&list[i])
			}
			f.Data = v
		} else {
			v := make([]float64, len(list))
			for i := range list {
				v[i] = *c.real(&list[i])
			}
			f.Data = v
		}
		t.Columns = append(t.Columns, f)
	}
	round := make([]int32, len(list))
	for i := range list {
		round[i] = int32(list[i].Round)
	}
	t.Columns = append(t.Columns, fits.Column{Name: "round", Description: "sources of one round were put in together", Data: round})
	return t
}

// ReadTable reads the sources of a file.
func ReadTable(path string) ([]Injection, error) {
	t, err := fits.ReadTable(path, TableName)
	if err != nil {
		return nil, err
	}
	list := make([]Injection, t.Rows())
	for _, c := range columns {
		if c.text != nil {
			v, err := t.Strings(c.name)
			if err != nil {
				return nil, fmt.Errorf("%s: %w", path, err)
			}
			for i := range list {
				*c.text(&list[i]) = v[i]
			}
			continue
		}
		v, err := t.Floats(c.name)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", path, err)
		}
		for i := range list {
			*c.real(&list[i]) = v[i]
		}
	}
	rounds, err := t.Ints("round")
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	for i := range list {
		list[i].Round = int(rounds[i])
		if !(&detect.Candidate{ID: list[i].ID}).Injected() {
			return nil, fmt.Errorf("%s: row %d has the identifier %q, expected one that begins with %s", path, i+1, list[i].ID, detect.InjectedPrefix)
		}
	}
	return list, nil
}

// WriteCSV writes the sources as text, whole or not at all. Nulls are empty.
func WriteCSV(path string, list []Injection) error {
	header := make([]string, 0, len(columns)+1)
	for _, c := range columns {
		header = append(header, c.name)
	}
	rows := make([][]string, len(list))
	for i := range list {
		for _, c := range columns {
			if c.text != nil {
				rows[i] = append(rows[i], *c.text(&list[i]))
			} else {
				rows[i] = append(rows[i], number(*c.real(&list[i])))
			}
		}
		rows[i] = append(rows[i], strconv.Itoa(list[i].Round))
	}
	return writeCSV(path, append(header, "round"), rows)
}

func writeCSV(path string, header []string, rows [][]string) error {
	return wholefile.Write(path, func(w io.Writer) error {
		c := csv.NewWriter(w)
		if err := c.Write(header); err != nil {
			return err
		}
		return c.WriteAll(rows)
	})
}

// number writes a value in the fewest digits that give it back; null is empty.
func number(v float64) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return ""
	}
	return strconv.FormatFloat(v, 'g', -1, 64)
}

// binHeader and binRow are the text form of bins.
var binHeader = []string{"against", "low", "high", "mean", "injected", "found", "fraction", "wilson_low", "wilson_high", "clopper_pearson_low", "clopper_pearson_high",
	"masked", "not_detected", "rejected", "confused"}

func binRow(b *Bin) []string {
	row := []string{b.Against, number(b.Low), number(b.High), number(b.Mean), strconv.Itoa(b.Injected), strconv.Itoa(b.Found),
		number(b.Fraction), number(b.WilsonLow), number(b.WilsonHigh), number(b.ExactLow), number(b.ExactHigh)}
	for _, f := range Fates[1:] {
		row = append(row, strconv.Itoa(b.Lost[f]))
	}
	return row
}

// WriteBins writes recovered fractions as text, whole or not at all.
func WriteBins(path string, bins []Bin) error {
	rows := make([][]string, len(bins))
	for i := range bins {
		rows[i] = binRow(&bins[i])
	}
	return writeCSV(path, binHeader, rows)
}

// BinTable is the FITS form of the same.
func BinTable(bins []Bin) *fits.Table {
	t := &fits.Table{Name: "FRACTIONS"}
	names := make([]string, len(bins))
	for i := range bins {
		names[i] = bins[i].Against
	}
	t.Columns = append(t.Columns, fits.Column{Name: "against", Description: "property that the row is a range of", Data: names})
	real := func(name, description string, value func(*Bin) float64) {
		v := make([]float64, len(bins))
		for i := range bins {
			v[i] = value(&bins[i])
		}
		t.Columns = append(t.Columns, fits.Column{Name: name, Description: description, Data: v})
	}
	whole := func(name, description string, value func(*Bin) int) {
		v := make([]int32, len(bins))
		for i := range bins {
			v[i] = int32(value(&bins[i]))
		}
		t.Columns = append(t.Columns, fits.Column{Name: name, Description: description, Data: v})
	}
	real("low", "least value of the range", func(b *Bin) float64 { return b.Low })
	real("high", "end of the range", func(b *Bin) float64 { return b.High })
	real("mean", "mean of the sources", func(b *Bin) float64 { return b.Mean })
	whole("injected", "sources put in", func(b *Bin) int { return b.Injected })
	whole("found", "sources found", func(b *Bin) int { return b.Found })
	real("fraction", "found of injected", func(b *Bin) float64 { return b.Fraction })
	real("wilson_low", "68.3 % interval of Wilson", func(b *Bin) float64 { return b.WilsonLow })
	real("wilson_high", "68.3 % interval of Wilson", func(b *Bin) float64 { return b.WilsonHigh })
	real("clopper_pearson_low", "68.3 % interval of Clopper and Pearson", func(b *Bin) float64 { return b.ExactLow })
	real("clopper_pearson_high", "68.3 % interval of Clopper and Pearson", func(b *Bin) float64 { return b.ExactHigh })
	for _, f := range Fates[1:] {
		whole(string(f), "lost so", func(b *Bin) int { return b.Lost[f] })
	}
	return t
}
