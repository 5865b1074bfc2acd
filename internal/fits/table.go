package fits

import (
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
)

// Table is a binary table. All columns have the same number of rows.
type Table struct {
	Name    string
	Header  *Header // further cards; those that describe the structure are left out when written
	Columns []Column
}

// Column is one column. Data is one of
//
//	[]float64 []float32 []int64 []int32 []int16 []uint8 []bool []string
//	[][]float64 [][]float32 [][]int64 [][]int32 [][]int16 [][]uint8 [][]bool
//
// where the second line holds vectors: of one length in all rows when written,
// of any when read. A nil vector is written as NaN, zero or false. When read,
// Data has the stored type unless TSCAL or TZERO turn it into []float64 (or
// [][]float64), or into []int64 for unsigned integers of up to 32 bits. Data
// is nil for a column of complex numbers or of no elements; Header.Warnings of
// the table says so.
type Column struct {
	Name        string
	Unit        string // "" for none
	Description string // comment of TTYPEn, or TCOMMn when it is too long for that
	Format      string // TFORMn as read; set by what Data holds when written
	Dim         string // TDIMn, such as "(51,51)": the shape of a vector
	Null        *int64 // TNULLn: the integer that stands for "no value"
	Data        any
}

// Rows returns the number of rows, that of the first column.
func (t *Table) Rows() int {
	for i := range t.Columns {
		if n := rowsOf(t.Columns[i].Data); n >= 0 {
			return n
		}
	}
	return 0
}

// Column returns the column with a name, upper and lower case alike, or nil.
func (t *Table) Column(name string) *Column {
	for i := range t.Columns {
		if strings.EqualFold(t.Columns[i].Name, name) {
			return &t.Columns[i]
		}
	}
	return nil
}

func (t *Table) need(name string) (*Column, error) {
	c := t.Column(name)
	if c == nil {
		names := make([]string, len(t.Columns))
		for i := range names {
			names[i] = t.Columns[i].Name
		}
		return nil, fmt.Errorf("table %s has no column %s; it has %s", t.Name, name, strings.Join(names, ", "))
	}
	return c, nil
}

func (t *Table) wrongType(c *Column, want string) error {
	return fmt.Errorf("table %s, column %s: format %s cannot be read as %s", t.Name, c.Name, c.Format, want)
}

// Floats returns any numeric scalar column as float64, with NaN where an
// integer is null. The slice may be the column's own.
func (t *Table) Floats(name string) ([]float64, error) {
	c, err := t.need(name)
	if err != nil {
		return nil, err
	}
	switch v := c.Data.(type) {
	case []float64:
		return v, nil
	case []float32:
		return toFloats(v, nil), nil
	case []int64:
		return toFloats(v, c.Null), nil
	case []int32:
		return toFloats(v, c.Null), nil
	case []int16:
		return toFloats(v, c.Null), nil
	case []uint8:
		return toFloats(v, c.Null), nil
	}
	return nil, t.wrongType(c, "numbers")
}

func toFloats[T float32 | int64 | int32 | int16 | uint8](v []T, null *int64) []float64 {
	out := make([]float64, len(v))
	for i, x := range v {
		out[i] = float64(x)
		if null != nil && int64(x) == *null {
			out[i] = math.NaN()
		}
	}
	return out
}

// Ints returns an integer scalar column as int64. The slice may be the
// column's own.
func (t *Table) Ints(name string) ([]int64, error) {
	c, err := t.need(name)
	if err != nil {
		return nil, err
	}
	switch v := c.Data.(type) {
	case []int64:
		return v, nil
	case []int32:
		return toInts(v), nil
	case []int16:
		return toInts(v), nil
	case []uint8:
		return toInts(v), nil
	}
	return nil, t.wrongType(c, "whole numbers")
}

func toInts[T int32 | int16 | uint8](v []T) []int64 {
	out := make([]int64, len(v))
	for i, x := range v {
		out[i] = int64(x)
	}
	return out
}

// Strings returns a column of strings.
func (t *Table) Strings(name string) ([]string, error) {
	c, err := t.need(name)
	if err != nil {
		return nil, err
	}
	if v, ok := c.Data.([]string); ok {
		return v, nil
	}
	return nil, t.wrongType(c, "strings")
}

// Bools returns a column of logical values.
func (t *Table) Bools(name string) ([]bool, error) {
	c, err := t.need(name)
	if err != nil {
		return nil, err
	}
	if v, ok := c.Data.([]bool); ok {
		return v, nil
	}
	return nil, t.wrongType(c, "logical values")
}

// Vectors returns a column of float32 vectors.
func (t *Table) Vectors(name string) ([][]float32, error) {
	c, err := t.need(name)
	if err != nil {
		return nil, err
	}
	if v, ok := c.Data.([][]float32); ok {
		return v, nil
	}
	return nil, t.wrongType(c, "vectors of float32")
}

// rowsOf returns the length of a column's data, -1 for none or another type.
func rowsOf(data any) int {
	switch v := data.(type) {
	case []float64:
		return len(v)
	case []float32:
		return len(v)
	case []int64:
		return len(v)
	case []int32:
		return len(v)
	case []int16:
		return len(v)
	case []uint8:
		return len(v)
	case []bool:
		return len(v)
	case []string:
		return len(v)
	case [][]float64:
		return len(v)
	case [][]float32:
		return len(v)
	case [][]int64:
		return len(v)
	case [][]int32:
		return len(v)
	case [][]int16:
		return len(v)
	case [][]uint8:
		return len(v)
	case [][]bool:
		return len(v)
	}
	return -1
}

// ---- writing ----

// packed is a column as it is laid out in a row.
type packed struct {
	letter byte
	repeat int
	width  int // bytes in a row
	put    func(dst []byte, row int)
}

func (p packed) form() string { return strconv.Itoa(p.repeat) + string(p.letter) }

func scalar[T any](v []T, letter byte, size int, put func([]byte, T)) packed {
	return packed{letter, 1, size, func(dst []byte, row int) { put(dst, v[row]) }}
}

func vector[T any](c *Column, v [][]T, letter byte, size int, missing T, put func([]byte, T)) (packed, error) {
	n, err := vectorLength(c, v)
	if err != nil {
		return packed{}, err
	}
	return packed{letter, n, n * size, func(dst []byte, row int) {
		cell := v[row]
		for i := range n {
			x := missing
			if cell != nil {
				x = cell[i]
			}
			put(dst[i*size:], x)
		}
	}}, nil
}

// vectorLength returns the common length of the vectors of a column, or that
// of its Dim if there is no row.
func vectorLength[T any](c *Column, v [][]T) (int, error) {
	n := -1
	if c.Dim != "" {
		dims, err := parseDim(c.Dim)
		if err != nil {
			return 0, fmt.Errorf("column %s: %w", c.Name, err)
		}
		n = 1
		for _, d := range dims {
			n *= d
		}
	}
	for row, cell := range v {
		if cell == nil {
			continue
		}
		if n < 0 {
			n = len(cell)
		}
		if len(cell) != n {
			return 0, fmt.Errorf("column %s, row %d: vector of %d elements, want %d", c.Name, row+1, len(cell), n)
		}
	}
	return max(n, 0), nil
}

func parseDim(dim string) ([]int, error) {
	inner, ok := strings.CutPrefix(strings.TrimSpace(dim), "(")
	inner, ok2 := strings.CutSuffix(inner, ")")
	if !ok || !ok2 {
		return nil, fmt.Errorf("TDIM = %q: want a list such as (51,51)", dim)
	}
	var dims []int
	total := 1
	for part := range strings.SplitSeq(inner, ",") {
		n, err := strconv.Atoi(strings.TrimSpace(part))
		if err != nil || n < 1 || n > math.MaxInt32 || total > math.MaxInt32/n {
			return nil, fmt.Errorf("TDIM = %q: want a list such as (51,51)", dim)
		}
		total *= n
		dims = append(dims, n)
	}
	return dims, nil
}

func put64(dst []byte, v int64)    { binary.BigEndian.PutUint64(dst, uint64(v)) }
func put32(dst []byte, v int32)    { binary.BigEndian.PutUint32(dst, uint32(v)) }
func put16(dst []byte, v int16)    { binary.BigEndian.PutUint16(dst, uint16(v)) }
func put8(dst []byte, v uint8)     { dst[0] = v }
func putF64(dst []byte, v float64) { binary.BigEndian.PutUint64(dst, math.Float64bits(v)) }
func putF32(dst []byte, v float32) { binary.BigEndian.PutUint32(dst, math.Float32bits(v)) }
func putBool(dst []byte, v bool)   { dst[0] = map[bool]byte{false: 'F', true: 'T'}[v] }
func nan32() float32               { return float32(math.NaN()) }
func putText(dst []byte, s string) { clear(dst[copy(dst, s):]) }

func (c *Column) pack() (packed, error) {
	switch v := c.Data.(type) {
	case []float64:
		return scalar(v, 'D', 8, putF64), nil
	case []float32:
		return scalar(v, 'E', 4, putF32), nil
	case []int64:
		return scalar(v, 'K', 8, put64), nil
	case []int32:
		return scalar(v, 'J', 4, put32), nil
	case []int16:
		return scalar(v, 'I', 2, put16), nil
	case []uint8:
		return scalar(v, 'B', 1, put8), nil
	case []bool:
		return scalar(v, 'L', 1, putBool), nil
	case []string:
		n := 1
		for _, s := range v {
			n = max(n, len(ascii(s)))
		}
		return packed{'A', n, n, func(dst []byte, row int) { putText(dst[:n], ascii(v[row])) }}, nil
	case [][]float64:
		return vector(c, v, 'D', 8, math.NaN(), putF64)
	case [][]float32:
		p, err := vector(c, v, 'E', 4, nan32(), putF32)
		p.put = func(dst []byte, row int) { // stamps are large: the fast loop
			if v[row] != nil {
				putFloats(dst, v[row])
				return
			}
			for i := range p.repeat {
				putF32(dst[4*i:], nan32())
			}
		}
		return p, err
	case [][]int64:
		return vector(c, v, 'K', 8, 0, put64)
	case [][]int32:
		return vector(c, v, 'J', 4, 0, put32)
	case [][]int16:
		return vector(c, v, 'I', 2, 0, put16)
	case [][]uint8:
		return vector(c, v, 'B', 1, 0, put8)
	case [][]bool:
		return vector(c, v, 'L', 1, false, putBool)
	}
	return packed{}, fmt.Errorf("column %s: cannot write data of type %T", c.Name, c.Data)
}

func (t *Table) kind() string { return "BINTABLE" }

func (t *Table) pack() (cols []packed, rowBytes int, err error) {
	if len(t.Columns) > 999 {
		return nil, 0, fmt.Errorf("table %s has %d columns: FITS allows 999", t.Name, len(t.Columns))
	}
	rows := t.Rows()
	for i := range t.Columns {
		c := &t.Columns[i]
		p, err := c.pack()
		if err != nil {
			return nil, 0, fmt.Errorf("table %s, %w", t.Name, err)
		}
		if n := rowsOf(c.Data); n != rows {
			panic(fmt.Sprintf("fits: table %s: column %s has %d rows, %s has %d", t.Name, c.Name, n, t.Columns[0].Name, rows))
		}
		cols = append(cols, p)
		rowBytes += p.width
	}
	return cols, rowBytes, nil
}

func (t *Table) prepare() ([]Card, *Header, string, error) {
	packs, rowBytes, err := t.pack()
	if err != nil {
		return nil, nil, "", err
	}
	cards := []Card{
		{"BITPIX", int64(8), "bytes"},
		{"NAXIS", int64(2), "a table"},
		{"NAXIS1", int64(rowBytes), "bytes of a row"},
		{"NAXIS2", int64(t.Rows()), "rows"},
		{"TFIELDS", int64(len(packs)), "columns"},
	}
	for i := range t.Columns {
		c, n := &t.Columns[i], strconv.Itoa(i+1)
		cards = append(cards, Card{"TTYPE" + n, c.Name, c.Description})
		// Where the comment does not fit behind the name, it gets its own card.
		if line, _, err := appendCard(nil, Card{"TTYPE" + n, c.Name, c.Description}); err != nil || !strings.HasSuffix(strings.TrimRight(string(line), " "), strings.TrimRight(ascii(c.Description), " ")) {
			cards = append(cards, Card{"TCOMM" + n, c.Description, ""})
		}
		cards = append(cards, Card{"TFORM" + n, packs[i].form(), ""})
		if c.Unit != "" {
			cards = append(cards, Card{"TUNIT" + n, c.Unit, ""})
		}
		if c.Dim != "" {
			cards = append(cards, Card{"TDIM" + n, c.Dim, ""})
		}
		if c.Null != nil {
			switch packs[i].letter {
			case 'K', 'J', 'I', 'B':
				cards = append(cards, Card{"TNULL" + n, *c.Null, "no value"})
			}
		}
	}
	return cards, t.Header, t.Name, nil
}

func (t *Table) datasum() (sum, error) {
	var s sum
	err := t.data(func(p []byte) error {
		s.bytes(p)
		return nil
	})
	return s, err
}

// data encodes the rows in pieces of a multiple of four rows.
func (t *Table) data(emit func([]byte) error) error {
	cols, rowBytes, err := t.pack()
	if err != nil || rowBytes == 0 {
		return err
	}
	step := max(4, chunkBytes/rowBytes/4*4)
	rows := t.Rows()
	buffer := make([]byte, min(step, rows)*rowBytes)
	for first := 0; first < rows; first += step {
		n := min(step, rows-first)
		offset := 0
		for i := range cols {
			at, put := offset, cols[i].put
			for row := first; row < first+n; row++ {
				put(buffer[at:at+cols[i].width], row)
				at += rowBytes
			}
			offset += cols[i].width
		}
		if err := emit(buffer[:n*rowBytes]); err != nil {
			return err
		}
	}
	return nil
}

// ---- reading ----

// field is a column as the header of a table describes it.
type field struct {
	letter   byte
	repeat   int
	width    int // bytes in a row
	offset   int // in a row
	variable bool
	scale    float64
	zero     float64
}

var elementBytes = map[byte]int{'L': 1, 'B': 1, 'I': 2, 'J': 4, 'K': 8, 'A': 1, 'E': 4, 'D': 8, 'C': 8, 'M': 16, 'P': 8, 'Q': 16}

// ReadTable reads the table of that name in a file. The error is ErrNoHDU, wrapped,
// when there is none.
func ReadTable(path, name string) (*Table, error) {
	f, err := Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	i, err := f.Find(name)
	if err != nil {
		return nil, err
	}
	return f.Table(i)
}

// Table reads the table of HDU i, an index into HDUs.
func (f *File) Table(i int) (*Table, error) {
	h := &f.hdus[i]
	switch h.Kind {
	case BinaryTable:
	case ASCIITable:
		return f.asciiTable(i)
	default:
		return nil, f.formatError(i, "holds no table (kind: %s)", h.Kind)
	}
	t := &Table{Name: h.Name, Header: h.Header.Clone()}
	fields, err := f.fields(h, t)
	if err != nil {
		return nil, err
	}
	readers := make([]func(row int, cell []byte), len(fields))
	for n := range fields {
		c, fd := &t.Columns[n], &fields[n]
		if fd.variable {
			continue
		}
		if fd.repeat == 0 {
			t.Header.warn("column %s: format %s has no elements", c.Name, c.Format)
			continue
		}
		if readers[n] = c.reader(fd, h.Rows); readers[n] == nil {
			t.Header.warn("column %s: format %s is not read", c.Name, c.Format)
		}
	}
	if h.RowBytes > 0 {
		step := max(1, chunkBytes/h.RowBytes)
		buffer := make([]byte, min(step, h.Rows)*h.RowBytes)
		for first := 0; first < h.Rows; first += step {
			part := buffer[:min(step, h.Rows-first)*h.RowBytes]
			if err := f.readAll(h, part, h.dataOffset+int64(first)*int64(h.RowBytes)); err != nil {
				return nil, err
			}
			for n, read := range readers {
				if read == nil {
					continue
				}
				at, row := fields[n].offset, first
				for ; at < len(part); at += h.RowBytes {
					read(row, part[at:at+fields[n].width])
					row++
				}
			}
		}
	}
	return t, f.variableColumns(h, t, fields)
}

// readAll reads bytes that are known to be there.
func (f *File) readAll(h *HDU, dst []byte, offset int64) error {
	if n, err := f.src.ReadAt(dst, offset); n < len(dst) {
		if err == io.EOF || err == nil {
			return f.formatError(h.Index, "truncated while it was read")
		}
		return fmt.Errorf("%s[%d]: %w", f.Path, h.Index, err)
	}
	return nil
}

// fields reads the description of all columns of a binary table, and appends
// them to t, still without data.
func (f *File) fields(h *HDU, t *Table) ([]field, error) {
	count, err := f.integer(h, "TFIELDS", 0, 999)
	if err != nil {
		return nil, err
	}
	var fields []field
	offset := 0
	for n := 1; n <= int(count); n++ {
		c, err := f.column(h, n)
		if err != nil {
			return nil, err
		}
		fd := field{scale: 1}
		digits := 0
		for digits < len(c.Format) && c.Format[digits] >= '0' && c.Format[digits] <= '9' {
			digits++
		}
		fd.repeat = 1
		if digits > 0 {
			if fd.repeat, err = strconv.Atoi(c.Format[:digits]); err != nil {
				fd.repeat = math.MaxInt32
			}
		}
		if digits == len(c.Format) {
			return nil, f.formatError(h.Index, "TFORM%d = %q: want a count and a letter", n, c.Format)
		}
		fd.letter = c.Format[digits]
		size, ok := elementBytes[fd.letter]
		switch {
		case fd.letter == 'X':
			fd.width = (fd.repeat + 7) / 8
		case !ok:
			return nil, f.formatError(h.Index, "TFORM%d = %q: %q is no type of a column", n, c.Format, fd.letter)
		case fd.repeat > h.RowBytes:
			return nil, f.formatError(h.Index, "TFORM%d = %q: wider than the row of NAXIS1 = %d bytes", n, c.Format, h.RowBytes)
		default:
			fd.width = fd.repeat * size
			fd.variable = fd.letter == 'P' || fd.letter == 'Q'
		}
		fd.offset = offset
		if offset += fd.width; offset > h.RowBytes {
			return nil, f.formatError(h.Index, "the columns up to TFORM%d = %q need %d bytes, NAXIS1 is %d", n, c.Format, offset, h.RowBytes)
		}
		for _, k := range []struct {
			key  string
			into *float64
		}{{"TSCAL", &fd.scale}, {"TZERO", &fd.zero}} {
			if v, ok := h.Header.Float(k.key + strconv.Itoa(n)); ok {
				*k.into = v
			}
		}
		t.Columns = append(t.Columns, c)
		fields = append(fields, fd)
	}
	if offset < h.RowBytes {
		t.Header.warn("the columns need %d bytes of a row, NAXIS1 is %d: the rest is ignored", offset, h.RowBytes)
	}
	return fields, nil
}

// column reads the keywords that describe column n, counted from 1.
func (f *File) column(h *HDU, n int) (Column, error) {
	number := strconv.Itoa(n)
	form, ok := h.Header.Str("TFORM" + number)
	form = strings.TrimSpace(form)
	if !ok || form == "" {
		return Column{}, f.formatError(h.Index, "TFORM%d is missing", n)
	}
	c := Column{Format: form}
	card, _ := h.Header.Get("TTYPE" + number)
	c.Description = card.Comment
	if c.Name, ok = card.Value.(string); !ok || c.Name == "" {
		c.Name = "column" + number
	}
	c.Unit, _ = h.Header.Str("TUNIT" + number)
	c.Dim, _ = h.Header.Str("TDIM" + number)
	if text, ok := h.Header.Str("TCOMM" + number); ok {
		c.Description = text
	}
	if v, ok := h.Header.Int("TNULL" + number); ok {
		c.Null = &v
	}
	return c, nil
}

func get64(p []byte) int64    { return int64(binary.BigEndian.Uint64(p)) }
func get32(p []byte) int32    { return int32(binary.BigEndian.Uint32(p)) }
func get16(p []byte) int16    { return int16(binary.BigEndian.Uint16(p)) }
func get8(p []byte) uint8     { return p[0] }
func getF64(p []byte) float64 { return math.Float64frombits(binary.BigEndian.Uint64(p)) }
func getF32(p []byte) float32 { return math.Float32frombits(binary.BigEndian.Uint32(p)) }
func getBool(p []byte) bool   { return p[0] == 'T' }

// cells makes the data of a column and the function that reads one cell of it.
func cells[T any](c *Column, fd *field, rows, size int, get func([]byte) T) func(int, []byte) {
	if fd.repeat == 1 && c.Dim == "" {
		out := make([]T, rows)
		c.Data = out
		return func(row int, cell []byte) { out[row] = get(cell) }
	}
	// One block for all vectors.
	all, out := make([]T, rows*fd.repeat), make([][]T, rows)
	for row := range out {
		out[row] = all[row*fd.repeat : (row+1)*fd.repeat : (row+1)*fd.repeat]
	}
	c.Data = out
	return func(row int, cell []byte) {
		for i := range out[row] {
			out[row][i] = get(cell[i*size:])
		}
	}
}

// reader allocates a column and returns what decodes one cell; nil if the type
// is not read. All sizes lie within the file: the caller has checked them.
func (c *Column) reader(fd *field, rows int) func(row int, cell []byte) {
	if fd.scale != 1 || fd.zero != 0 {
		if read := c.scaledReader(fd, rows); read != nil {
			return read
		}
	}
	switch fd.letter {
	case 'L':
		return cells(c, fd, rows, 1, getBool)
	case 'B':
		return cells(c, fd, rows, 1, get8)
	case 'I':
		return cells(c, fd, rows, 2, get16)
	case 'J':
		return cells(c, fd, rows, 4, get32)
	case 'K':
		return cells(c, fd, rows, 8, get64)
	case 'E':
		return cells(c, fd, rows, 4, getF32)
	case 'D':
		return cells(c, fd, rows, 8, getF64)
	case 'A':
		out := make([]string, rows)
		c.Data = out
		return func(row int, cell []byte) { out[row] = textCell(cell) }
	case 'X':
		out := make([][]bool, rows)
		c.Data = out
		repeat := fd.repeat
		return func(row int, cell []byte) {
			out[row] = make([]bool, repeat)
			for i := range out[row] {
				out[row][i] = cell[i/8]>>(7-i%8)&1 == 1
			}
		}
	}
	return nil
}

// textCell ends a string at the first zero byte and drops trailing blanks.
func textCell(cell []byte) string {
	s := string(cell)
	if i := strings.IndexByte(s, 0); i >= 0 {
		s = s[:i]
	}
	return strings.TrimRight(s, " ")
}

// scaledReader reads columns with TSCAL or TZERO.
func (c *Column) scaledReader(fd *field, rows int) func(row int, cell []byte) {
	var raw func([]byte) int64
	size := elementBytes[fd.letter]
	scale, zero, null := fd.scale, fd.zero, c.Null
	switch fd.letter {
	case 'B':
		raw = func(p []byte) int64 { return int64(p[0]) }
	case 'I':
		raw = func(p []byte) int64 { return int64(get16(p)) }
	case 'J':
		raw = func(p []byte) int64 { return int64(get32(p)) }
	case 'K':
		raw = get64
	case 'E':
		return cells(c, fd, rows, size, func(p []byte) float64 { return zero + scale*float64(getF32(p)) })
	case 'D':
		return cells(c, fd, rows, size, func(p []byte) float64 { return zero + scale*getF64(p) })
	default:
		return nil
	}
	if scale == 1 && fd.letter != 'K' && zero == math.Trunc(zero) && math.Abs(zero) < 1<<40 {
		shift := int64(zero)
		if null != nil {
			v := *null + shift
			c.Null = &v
		}
		return cells(c, fd, rows, size, func(p []byte) int64 { return raw(p) + shift })
	}
	c.Null = nil // becomes NaN
	return cells(c, fd, rows, size, func(p []byte) float64 {
		v := raw(p)
		if null != nil && v == *null {
			return math.NaN()
		}
		if scale == 1 && zero == 1<<63 {
			return float64(uint64(v) ^ 1<<63)
		}
		return zero + scale*float64(v)
	})
}
