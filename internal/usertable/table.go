// Package usertable reads columns of the tables that users keep: text with
// separated values, tables of FITS files, VOTable (IVOA Recommendation 1.4; data
// as TABLEDATA, BINARY or BINARY2 in the file itself) and, where package
// parquettable is imported, Parquet. Text and VOTable may be compressed with gzip.
// Only the columns asked for are kept.
//
// Errors name the file, the line or row, and the column.
package usertable

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"

	"nightsift/internal/fits"
)

// Column is a column that is wanted.
type Column struct {
	Name string // upper and lower case are alike
	Text bool   // else numbers

	// Want says in messages what a number should be; empty: a number, or nothing if
	// it is unknown.
	Want string

	// Units, if any, are the accepted spellings of a unit that the file may
	// state, without blanks and in lower case; the first serves in messages.
	Units []string
}

// Table holds the wanted columns.
type Table struct {
	Path string
	Rows int

	numbers map[string][]float64
	texts   map[string][]string
	lines   []int32 // of text; nil for others
}

// Numbers returns a wanted column of numbers, NaN where the file has none.
func (t *Table) Numbers(name string) []float64 { return t.numbers[strings.ToLower(name)] }

// Texts returns a wanted column of text, empty where the file has none.
func (t *Table) Texts(name string) []string { return t.texts[strings.ToLower(name)] }

// Errorf makes an error about a value: it says where it stands.
func (t *Table) Errorf(row int, column, format string, args ...any) error {
	return fmt.Errorf("%s: column %s: %s", t.where(row), column, fmt.Sprintf(format, args...))
}

func (t *Table) where(row int) string {
	if t.lines != nil {
		return fmt.Sprintf("%s:%d", t.Path, t.lines[row])
	}
	return fmt.Sprintf("%s: row %d", t.Path, row+1)
}

// Reader reads a further format: it fills a table with the wanted columns and
// sets Rows.
type Reader func(t *Table, f *os.File, want []Column) error

// readers are the further formats by how their files begin.
var readers = map[string]Reader{}

// Register makes a format known by the four characters with which its files
// begin. It is called while packages are initialised.
func Register(magic string, r Reader) { readers[magic] = r }

// AddNumber appends a value to a wanted column of numbers.
func (t *Table) AddNumber(w Column, v float64) {
	key := strings.ToLower(w.Name)
	t.numbers[key] = append(t.numbers[key], v)
}

// AddText appends a value to a wanted column of text.
func (t *Table) AddText(w Column, v string) {
	key := strings.ToLower(w.Name)
	t.texts[key] = append(t.texts[key], v)
}

// Find returns the places of the wanted columns among a file's names.
func (t *Table) Find(names []string, want []Column) ([]int, error) {
	return t.find(t.Path, names, want)
}

// Spellings of units, for Column.Units.
var (
	Degrees    = []string{"deg", "degree", "degrees"}
	MasPerYear = []string{"mas/yr", "mas.yr-1", "masyr-1", "mas/year", "mas.yr**-1", "masyr**-1", "mas*yr-1", "mas.a-1", "mas/a"}
	Years      = []string{"yr", "a", "year"}
	Arcseconds = []string{"arcsec", "\"", "arcseconds", "asec"}
)

// distinct leaves out unnamed columns, and those that are wanted twice as the same
// type.
func distinct(want []Column) []Column {
	var out []Column
	for _, w := range want {
		if w.Name != "" && !slices.ContainsFunc(out, func(o Column) bool { return strings.EqualFold(o.Name, w.Name) && o.Text == w.Text }) {
			out = append(out, w)
		}
	}
	return out
}

// Read reads columns of a file. Its format is recognised by its content.
// "file.fits[NAME]" selects a table of a FITS file; else it is the first. Columns
// without a name and those named before are passed over.
func Read(path string, want []Column) (*Table, error) {
	want = distinct(want)
	file, hdu := fits.SplitName(path)
	f, err := os.Open(file)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	t := &Table{Path: path, numbers: map[string][]float64{}, texts: map[string][]string{}}
	b := bufio.NewReaderSize(f, 1<<20)
	if head, _ := b.Peek(4); readers[string(head)] != nil {
		return t, readers[string(head)](t, f, want)
	} else if string(head) == "PAR1" {
		return nil, fmt.Errorf("%s: a Parquet file cannot be read for this purpose; want separated text, a FITS table or a VOTable", path)
	}
	if head, _ := b.Peek(2); len(head) == 2 && head[0] == 0x1f && head[1] == 0x8b {
		z, err := gzip.NewReader(b)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", path, err)
		}
		b = bufio.NewReaderSize(z, 1<<20)
	}
	head, _ := b.Peek(9)
	if string(head) == "SIMPLE  =" {
		return t, t.readFITS(hdu, want)
	}
	if hdu != "" {
		return nil, fmt.Errorf("%s: [%s] selects a table of a FITS file, and this is none", path, hdu)
	}
	if bom, _ := b.Peek(3); bytes.Equal(bom, []byte{0xef, 0xbb, 0xbf}) {
		b.Discard(3)
	}
	start, _ := b.Peek(512)
	if start = bytes.TrimLeft(start, " \t\r\n"); bytes.HasPrefix(start, []byte("<?xml")) || bytes.HasPrefix(start, []byte("<VOTABLE")) || bytes.HasPrefix(start, []byte("<!--")) {
		return t, t.readVOTable(b, want)
	}
	return t, t.readText(b, want)
}

// find returns the places of the wanted columns among names.
func (t *Table) find(place string, names []string, want []Column) ([]int, error) {
	at := make([]int, len(want))
	for k, w := range want {
		at[k] = -1
		for i, n := range names {
			if !strings.EqualFold(strings.TrimSpace(n), w.Name) {
				continue
			}
			if at[k] >= 0 {
				return nil, fmt.Errorf("%s: column %s: it is there twice", place, w.Name)
			}
			at[k] = i
		}
		if at[k] < 0 {
			return nil, fmt.Errorf("%s: column %s: there is none of that name; the columns are %s", place, w.Name, shortened(names))
		}
	}
	return at, nil
}

// shortened lists names, not more than a screen of them.
func shortened(names []string) string {
	const most = 60
	if len(names) > most {
		return strings.Join(names[:most], ", ") + fmt.Sprintf(" and %d more", len(names)-most)
	}
	return strings.Join(names, ", ")
}

// unit checks what a file says of a column's unit.
func (t *Table) unit(w Column, found string) error {
	unit := strings.ToLower(strings.ReplaceAll(strings.TrimSpace(found), " ", ""))
	if unit == "" || len(w.Units) == 0 || slices.Contains(w.Units, unit) {
		return nil
	}
	return fmt.Errorf("%s: column %s has the unit %q; want %s", t.Path, w.Name, found, w.Units[0])
}

// append adds a value from its text.
func (t *Table) append(w Column, text string) error {
	text = strings.TrimSpace(text)
	if w.Text {
		t.AddText(w, strings.Clone(text))
		return nil
	}
	v := math.NaN()
	if text != "" {
		var err error
		if v, err = strconv.ParseFloat(text, 64); err != nil || math.IsInf(v, 0) {
			want := w.Want
			if want == "" {
				want = "a number, or nothing if it is unknown"
			}
			return fmt.Errorf("column %s: %q; want %s", w.Name, cut(text), want)
		}
	}
	t.AddNumber(w, v)
	return nil
}

func cut(s string) string {
	if len(s) > 40 {
		return s[:40] + "…"
	}
	return s
}

// readText reads lines of separated values: a line of column names, fields
// separated by commas, semicolons or tabs, comments after #.
func (t *Table) readText(b *bufio.Reader, want []Column) error {
	r := csv.NewReader(b)
	r.Comment, r.ReuseRecord = '#', true
	r.Comma = separator(b)
	r.TrimLeadingSpace = r.Comma != '\t' // else it eats empty fields
	csvError := func(err error) error {
		var p *csv.ParseError
		if errors.As(err, &p) {
			return fmt.Errorf("%s:%d:%d: %w", t.Path, p.Line, p.Column, p.Err)
		}
		return fmt.Errorf("%s: %w", t.Path, err)
	}
	header, err := r.Read()
	if err == io.EOF {
		return fmt.Errorf("%s: it is empty; want a line of column names and lines of values", t.Path)
	}
	if err != nil {
		return csvError(err)
	}
	line, _ := r.FieldPos(0)
	at, err := t.find(fmt.Sprintf("%s:%d", t.Path, line), slices.Clone(header), want)
	if err != nil {
		return err
	}
	t.lines = []int32{}
	for {
		record, err := r.Read()
		if err == io.EOF {
			return nil
		}
		if err != nil {
			return csvError(err)
		}
		for k, w := range want {
			if err := t.append(w, record[at[k]]); err != nil {
				line, _ := r.FieldPos(at[k])
				return fmt.Errorf("%s:%d: %w", t.Path, line, err)
			}
		}
		line, _ := r.FieldPos(0)
		t.lines = append(t.lines, int32(line))
		t.Rows++
	}
}

// separator chooses between the separators by the first line of names.
func separator(b *bufio.Reader) rune {
	head, _ := b.Peek(b.Size() / 2)
	for line := range bytes.Lines(head) {
		if len(bytes.TrimSpace(line)) == 0 || line[0] == '#' {
			continue
		}
		best, most := ',', bytes.Count(line, []byte{','})
		for _, s := range []rune{';', '\t'} {
			if n := bytes.Count(line, []byte(string(s))); n > most {
				best, most = s, n
			}
		}
		return best
	}
	return ','
}

// readFITS reads a table of a FITS file.
func (t *Table) readFITS(hdu string, want []Column) error {
	f, err := fits.Open(t.Path)
	if err != nil {
		return err
	}
	defer f.Close()
	which := f.Selected
	if hdu == "" {
		which = slices.IndexFunc(f.HDUs(), func(h fits.HDU) bool { return h.Kind == fits.BinaryTable || h.Kind == fits.ASCIITable })
	}
	if which < 0 {
		return fmt.Errorf("%s: there is no table in the file", t.Path)
	}
	table, err := f.Table(which)
	if err != nil {
		return err
	}
	names := make([]string, len(table.Columns))
	for i := range names {
		names[i] = table.Columns[i].Name
	}
	if _, err := t.find(t.Path, names, want); err != nil {
		return err
	}
	for _, w := range want {
		key := strings.ToLower(w.Name)
		if w.Text {
			if t.texts[key], err = table.Strings(w.Name); err != nil {
				// A number that serves as a name.
				v, other := table.Ints(w.Name)
				if other != nil {
					return fmt.Errorf("%s: %w", t.Path, err)
				}
				t.texts[key] = make([]string, len(v))
				for i, n := range v {
					t.texts[key][i] = strconv.FormatInt(n, 10)
				}
			}
			continue
		}
		if t.numbers[key], err = table.Floats(w.Name); err != nil {
			return fmt.Errorf("%s: %w", t.Path, err)
		}
		if err := t.unit(w, table.Column(w.Name).Unit); err != nil {
			return err
		}
	}
	t.Rows = table.Rows()
	return nil
}
