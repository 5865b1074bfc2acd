package catalog

import (
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"slices"
	"sort"
	"strconv"
	"strings"

	"nightsift/detect"
	"nightsift/internal/wholefile"
)

// Sheet is a table in memory, column by column, on its way to a file. Rows
// have a fixed order, so that equal catalogues give equal files.
type Sheet struct {
	Name    string // "candidates", "objects", "frames"
	Columns []SheetColumn
	Rows    int
}

// SheetColumn holds the values of one column in the slice of its type. A Real
// is null where it is NaN, a Text where it is empty; an Integer is never null.
type SheetColumn struct {
	Column
	Text    []string
	Real    []float64
	Integer []int64
}

// append adds a value of the column's type.
func (c *SheetColumn) append(v any) {
	switch x := v.(type) {
	case string:
		c.Text = append(c.Text, x)
	case float64:
		c.Real = append(c.Real, x)
	case int64:
		c.Integer = append(c.Integer, x)
	case int:
		c.Integer = append(c.Integer, int64(x))
	default:
		panic(fmt.Sprintf("catalog: column %s cannot hold a %T", c.Name, v))
	}
}

// value returns the value in a row.
func (c *SheetColumn) value(row int) any {
	switch c.Type {
	case detect.Text:
		return c.Text[row]
	case detect.Real:
		return c.Real[row]
	}
	return c.Integer[row]
}

func newSheet(name string, columns []Column) *Sheet {
	s := &Sheet{Name: name, Columns: make([]SheetColumn, len(columns))}
	for i, c := range columns {
		s.Columns[i].Column = c
	}
	return s
}

// CandidateSheet returns the scalar columns of candidates, in their order.
func CandidateSheet(list []detect.Candidate) *Sheet {
	s := newSheet("candidates", detectColumns())
	for i := range list {
		s.addCandidate(&list[i])
	}
	return s
}

func detectColumns() []Column {
	columns := make([]Column, len(detect.Columns))
	for i, c := range detect.Columns {
		columns[i] = Column{c.Name, c.Unit, c.Description, c.Type}
	}
	return columns
}

func (s *Sheet) addCandidate(c *detect.Candidate) {
	for k := range detect.Columns {
		s.Columns[k].append(detect.Columns[k].Value(c))
	}
	s.Rows++
}

// FrameSheet returns the table of frames that a run writes, in the order of the
// list.
func FrameSheet(list []FrameRecord) *Sheet { return frameSheet(list, tableColumns) }

func frameSheet(list []FrameRecord, columns int) *Sheet {
	s := newSheet("frames", nil)
	for k := range columns {
		c := SheetColumn{Column: frameColumns[k].Column}
		for i := range list {
			switch f := &frameColumns[k]; {
			case f.text != nil:
				c.append(*f.text(&list[i]))
			case f.real != nil:
				c.append(*f.real(&list[i]))
			default:
				c.append(*f.num(&list[i]))
			}
		}
		s.Columns = append(s.Columns, c)
	}
	s.Rows = len(list)
	return s
}

var objectColumns = []Column{
	{"object", "", "designation", detect.Text},
	{"ra_deg", "deg", "right ascension, ICRS, weighted mean", detect.Real},
	{"dec_deg", "deg", "declination, ICRS, weighted mean", detect.Real},
	{"ra_err_arcsec", "arcsec", "1 sigma error on the sky", detect.Real},
	{"dec_err_arcsec", "arcsec", "1 sigma error", detect.Real},
	{"kind", "", "kind of the most significant detection", detect.Text},
	{"real_probability", "", "highest of a detection", detect.Real},
	{"detections", "", "frames on which it was found", detect.Integer},
	{"nights", "", "nights in which it was found", detect.Integer},
	{"first_mjd", "d", "first detection, MJD UTC", detect.Real},
	{"last_mjd", "d", "last detection, MJD UTC", detect.Real},
	{"first_night", "", "night of the first detection", detect.Text},
	{"last_night", "", "night of the last detection", detect.Text},
	{"peak_mag", "mag", "brightest detection", detect.Real},
	{"peak_mjd", "d", "time of the brightest detection, MJD UTC", detect.Real},
	{"peak_significance", "", "signed score of the largest size in sigma", detect.Real},
	{"filters", "", "filters in which it was found", detect.Text},
	{"founder", "", "identifier of the earliest detection", detect.Text},
}

// Format is a way to write a Sheet. A new one is an entry in Formats and
// nothing else.
type Format struct {
	Name   string
	Text   bool // can be shown on a terminal
	Encode func(w io.Writer, s *Sheet) error
}

// Write writes a sheet to a file, whole or not at all.
func (f Format) Write(path string, s *Sheet) error {
	return wholefile.Write(path, func(w io.Writer) error { return f.Encode(w, s) })
}

// Formats are the formats of exports.
var Formats = []Format{
	{"csv", true, EncodeCSV},
	{"ecsv", true, EncodeECSV},
	{"fits", false, EncodeFITS},
	{"votable", true, EncodeVOTable},
	{"parquet", false, EncodeParquet},
	{"jsonl", true, EncodeJSONLines},
}

// FormatNames lists the names of the formats.
func FormatNames() []string {
	names := make([]string, len(Formats))
	for i, f := range Formats {
		names[i] = f.Name
	}
	return names
}

// FindFormat returns the format of a name.
func FindFormat(name string) (Format, error) {
	k := slices.IndexFunc(Formats, func(f Format) bool { return f.Name == name })
	if k < 0 {
		return Format{}, fmt.Errorf("no format %q: expected one of %s", name, strings.Join(FormatNames(), ", "))
	}
	return Formats[k], nil
}

// WriteCSV writes a sheet as comma-separated values (RFC 4180, but with a line
// feed at the end of a line): one line of column names, null as nothing,
// numbers with as many digits as give the value back.
func WriteCSV(path string, s *Sheet) error {
	return wholefile.Write(path, func(w io.Writer) error { return EncodeCSV(w, s) })
}

// EncodeCSV writes what WriteCSV writes to a stream.
func EncodeCSV(w io.Writer, s *Sheet) error {
	out := csv.NewWriter(w)
	record := make([]string, len(s.Columns))
	for k := range s.Columns {
		record[k] = s.Columns[k].Name
	}
	if err := out.Write(record); err != nil {
		return err
	}
	for row := range s.Rows {
		for k := range s.Columns {
			record[k] = field(s.Columns[k].value(row))
		}
		if err := out.Write(record); err != nil {
			return err
		}
	}
	out.Flush()
	return out.Error()
}

// field formats a value, null as an empty text.
func field(v any) string {
	switch x := v.(type) {
	case string:
		return x
	case float64:
		if math.IsNaN(x) {
			return ""
		}
		return strconv.FormatFloat(x, 'g', -1, 64)
	case int64:
		return strconv.FormatInt(x, 10)
	}
	panic(fmt.Sprintf("catalog: cannot format a %T", v))
}

// WriteCandidatesCSV writes the scalar columns of candidates, in their order.
func WriteCandidatesCSV(path string, list []detect.Candidate) error {
	return WriteCSV(path, CandidateSheet(list))
}

// WriteFramesCSV writes a run's table of frames, in the order of the list.
func WriteFramesCSV(path string, list []FrameRecord) error {
	return WriteCSV(path, FrameSheet(list))
}

func sortStable[T any](list []T, less func(a, b T) bool) {
	sort.SliceStable(list, func(i, j int) bool { return less(list[i], list[j]) })
}
