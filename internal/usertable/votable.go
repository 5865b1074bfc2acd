package usertable

import (
	"bufio"
	"encoding/base64"
	"encoding/binary"
	"encoding/xml"
	"errors"
	"fmt"
	"golang.org/x/text/encoding/htmlindex"
	"io"
	"math"
	"strconv"
	"strings"
)

// field is a FIELD of a VOTable.
type field struct {
	name, datatype, unit, null string
	size                       int  // values; 1 for a scalar
	variable                   bool // arraysize ends in *
}

// widths of the datatypes in BINARY streams [byte].
var widths = map[string]int{
	"boolean": 1, "unsignedByte": 1, "short": 2, "int": 4, "long": 8, "char": 1, "unicodeChar": 2, "float": 4, "double": 8, "floatComplex": 8, "doubleComplex": 16,
}

// readVOTable reads the first table of a VOTable.
func (t *Table) readVOTable(r io.Reader, want []Column) error {
	d := xml.NewDecoder(r)
	d.CharsetReader = func(charset string, in io.Reader) (io.Reader, error) {
		e, err := htmlindex.Get(charset)
		if err != nil {
			return nil, fmt.Errorf("the encoding %q is not known", charset)
		}
		return e.NewDecoder().Reader(in), nil
	}
	wrong := func(format string, args ...any) error {
		line, column := d.InputPos()
		return fmt.Errorf("%s:%d:%d: %s", t.Path, line, column, fmt.Sprintf(format, args...))
	}
	var fields []field
	var at []int
	root, inTable := false, false
	for {
		token, err := d.Token()
		if errors.Is(err, io.EOF) {
			if !root {
				return fmt.Errorf("%s: there is no VOTABLE in the file", t.Path)
			}
			return fmt.Errorf("%s: the VOTable holds no table with data", t.Path)
		}
		if err != nil {
			return wrong("%v", err)
		}
		switch e := token.(type) {
		case xml.StartElement:
			switch e.Name.Local {
			case "VOTABLE":
				root = true
			case "TABLE":
				inTable, fields = true, nil
			case "FIELD":
				if !inTable {
					continue
				}
				f, err := newField(e)
				if err != nil {
					return wrong("%v", err)
				}
				fields = append(fields, f)
			case "VALUES":
				for _, a := range e.Attr {
					if a.Name.Local == "null" && len(fields) > 0 {
						fields[len(fields)-1].null = a.Value
					}
				}
			case "TABLEDATA", "BINARY", "BINARY2", "FITS", "PARQUET":
				if !inTable {
					return wrong("%s outside of a TABLE", e.Name.Local)
				}
				names := make([]string, len(fields))
				for i := range fields {
					names[i] = fields[i].name
				}
				if at, err = t.find(t.Path, names, want); err != nil {
					return err
				}
				for k, w := range want {
					if !w.Text {
						if err := t.unit(w, fields[at[k]].unit); err != nil {
							return err
						}
					}
				}
				switch e.Name.Local {
				case "TABLEDATA":
					return t.readRows(d, fields, at, want, wrong)
				case "BINARY", "BINARY2":
					return t.readStream(d, fields, at, want, e.Name.Local == "BINARY2", wrong)
				}
				return wrong("data as %s inside of a VOTable cannot be read; want TABLEDATA, BINARY or BINARY2, or give that file itself", e.Name.Local)
			}
		case xml.EndElement:
			if e.Name.Local == "TABLE" {
				inTable = false
			}
		}
	}
}

func newField(e xml.StartElement) (field, error) {
	f := field{size: 1}
	array := ""
	for _, a := range e.Attr {
		switch a.Name.Local {
		case "name":
			f.name = a.Value
		case "datatype":
			f.datatype = a.Value
		case "unit":
			f.unit = a.Value
		case "arraysize":
			array = strings.TrimSpace(a.Value)
		}
	}
	if widths[f.datatype] == 0 && f.datatype != "bit" {
		return f, fmt.Errorf("FIELD %s: datatype %q: want one of VOTable's", f.name, f.datatype)
	}
	for _, part := range strings.Split(array, "x") {
		if part == "" && array == "" {
			break
		}
		if number, star := strings.CutSuffix(part, "*"); star {
			f.variable = true
			if _, err := strconv.Atoi(number); number != "" && err != nil {
				return f, fmt.Errorf("FIELD %s: arraysize %q: want numbers", f.name, array)
			}
			continue
		}
		n, err := strconv.Atoi(part)
		if err != nil || n < 1 || n > 1<<20 || f.size > 1<<20/n {
			return f, fmt.Errorf("FIELD %s: arraysize %q: want numbers of 1 to %d", f.name, array, 1<<20)
		}
		f.size *= n
	}
	return f, nil
}

// readRows reads TABLEDATA.
func (t *Table) readRows(d *xml.Decoder, fields []field, at []int, want []Column, wrong func(string, ...any) error) error {
	t.lines = []int32{}
	cells := make([]string, len(fields))
	for {
		token, err := d.Token()
		if err != nil {
			return wrong("the table is cut off: %v", err)
		}
		switch e := token.(type) {
		case xml.EndElement:
			if e.Name.Local == "TABLEDATA" {
				return nil
			}
		case xml.StartElement:
			if e.Name.Local != "TR" {
				return wrong("%s in TABLEDATA: want TR", e.Name.Local)
			}
			line, _ := d.InputPos()
			n, err := readCells(d, cells)
			if err != nil {
				return wrong("%v", err)
			}
			if n != len(fields) {
				return wrong("a row of %d cells; want %d, one for each FIELD", n, len(fields))
			}
			for k, w := range want {
				f, text := &fields[at[k]], strings.TrimSpace(cells[at[k]])
				if !w.Text && (text == f.null && f.null != "" || strings.EqualFold(text, "nan")) {
					text = ""
				}
				if err := t.append(w, text); err != nil {
					return wrong("%v", err)
				}
			}
			t.lines = append(t.lines, int32(line))
			t.Rows++
		}
	}
}

// readCells reads the TD of a row up to its end.
func readCells(d *xml.Decoder, cells []string) (n int, err error) {
	var text strings.Builder
	for {
		token, err := d.Token()
		if err != nil {
			return n, fmt.Errorf("a row is cut off: %w", err)
		}
		switch e := token.(type) {
		case xml.StartElement:
			if e.Name.Local != "TD" {
				return n, fmt.Errorf("%s in a row: want TD", e.Name.Local)
			}
			text.Reset()
		case xml.CharData:
			text.Write(e)
		case xml.EndElement:
			switch e.Name.Local {
			case "TD":
				if n < len(cells) {
					cells[n] = text.String()
				}
				n++
			case "TR":
				return n, nil
			}
		}
	}
}

// readStream reads BINARY or BINARY2, which puts a mask of nulls before each row.
func (t *Table) readStream(d *xml.Decoder, fields []field, at []int, want []Column, masked bool, wrong func(string, ...any) error) error {
	for i := range fields {
		if fields[i].datatype == "bit" {
			return wrong("FIELD %s: columns of bits in a stream cannot be read", fields[i].name)
		}
	}
	for {
		token, err := d.Token()
		if err != nil {
			return wrong("the stream is cut off: %v", err)
		}
		e, ok := token.(xml.StartElement)
		if !ok {
			continue
		}
		if e.Name.Local != "STREAM" {
			return wrong("%s: want STREAM", e.Name.Local)
		}
		encoding := ""
		for _, a := range e.Attr {
			switch a.Name.Local {
			case "encoding":
				encoding = a.Value
			case "href":
				return wrong("the stream is in another place (%s); want it in the file", cut(a.Value))
			}
		}
		if encoding != "base64" {
			return wrong("a stream with the encoding %q; want base64", encoding)
		}
		break
	}
	r := bufio.NewReaderSize(base64.NewDecoder(base64.StdEncoding, &charData{d: d}), 1<<16)
	wanted := make([][]Column, len(fields)) // one field may serve as number and as text
	for k, i := range at {
		wanted[i] = append(wanted[i], want[k])
	}
	mask := make([]byte, (len(fields)+7)/8)
	var cell []byte
	for {
		if masked {
			if _, err := io.ReadFull(r, mask); err == io.EOF {
				return nil
			} else if err != nil {
				return wrong("row %d is cut off: %v", t.Rows+1, err)
			}
		} else if _, err := r.Peek(1); err == io.EOF {
			return nil
		}
		for i := range fields {
			f := &fields[i]
			n := f.size * widths[f.datatype]
			if f.variable {
				var length [4]byte
				if _, err := io.ReadFull(r, length[:]); err != nil {
					return wrong("row %d is cut off: %v", t.Rows+1, err)
				}
				count := int64(binary.BigEndian.Uint32(length[:]))
				if count*int64(n) > 1<<26 {
					return wrong("row %d: FIELD %s: an array of %d values", t.Rows+1, f.name, count)
				}
				n *= int(count)
			}
			if cap(cell) < n {
				cell = make([]byte, n)
			}
			cell = cell[:n]
			if _, err := io.ReadFull(r, cell); err != nil {
				return wrong("row %d is cut off: %v", t.Rows+1, err)
			}
			if wanted[i] == nil {
				continue
			}
			text := ""
			if !(masked && mask[i/8]&(0x80>>(i%8)) != 0) {
				var err error
				if text, err = f.text(cell); err != nil {
					return wrong("row %d: column %s: %v", t.Rows+1, f.name, err)
				}
			}
			for _, w := range wanted[i] {
				if err := t.append(w, text); err != nil {
					return wrong("row %d: %v", t.Rows+1, err)
				}
			}
		}
		t.Rows++
	}
}

// text is the value of a cell, empty for none.
func (f *field) text(cell []byte) (string, error) {
	text := ""
	switch {
	case f.datatype == "char":
		s, _, _ := strings.Cut(string(cell), "\x00")
		return s, nil
	case f.datatype == "unicodeChar":
		var s strings.Builder
		for k := 0; k+1 < len(cell); k += 2 {
			if c := rune(binary.BigEndian.Uint16(cell[k:])); c != 0 {
				s.WriteRune(c)
			}
		}
		return s.String(), nil
	case f.size != 1 || f.variable:
		return "", errors.New("it holds arrays; want single values")
	case f.datatype == "double":
		text = number(math.Float64frombits(binary.BigEndian.Uint64(cell)))
	case f.datatype == "float":
		text = number(float64(math.Float32frombits(binary.BigEndian.Uint32(cell))))
	case f.datatype == "long":
		text = strconv.FormatInt(int64(binary.BigEndian.Uint64(cell)), 10)
	case f.datatype == "int":
		text = strconv.Itoa(int(int32(binary.BigEndian.Uint32(cell))))
	case f.datatype == "short":
		text = strconv.Itoa(int(int16(binary.BigEndian.Uint16(cell))))
	case f.datatype == "unsignedByte":
		text = strconv.Itoa(int(cell[0]))
	default:
		return "", fmt.Errorf("datatype %s; want a number or text", f.datatype)
	}
	if f.null != "" && text == f.null {
		return "", nil
	}
	return text, nil
}

func number(v float64) string {
	if math.IsNaN(v) {
		return ""
	}
	return strconv.FormatFloat(v, 'g', -1, 64)
}

// charData reads the text of the element in which the decoder stands, without
// blanks.
type charData struct {
	d    *xml.Decoder
	rest []byte
	err  error
}

func (c *charData) Read(p []byte) (int, error) {
	for len(c.rest) == 0 {
		if c.err != nil {
			return 0, c.err
		}
		token, err := c.d.Token()
		switch e := token.(type) {
		case xml.CharData:
			for _, b := range e {
				if b > ' ' {
					c.rest = append(c.rest, b)
				}
			}
		case xml.EndElement:
			c.err = io.EOF
		}
		if err != nil {
			c.err = io.ErrUnexpectedEOF
		}
	}
	n := copy(p, c.rest)
	c.rest = c.rest[n:]
	return n, nil
}
