package fits

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"strconv"
	"strings"

	"github.com/astrogo/fitsio"
)

// Variable-length columns and ASCII tables are rare: catalogues that others
// made. They are decoded by astrogo/fitsio, one column at a time, from a small
// table rebuilt here. fitsio panics on a header that lies, so it gets none of
// the file's own: every size in the rebuilt one has been checked, and a panic
// that happens all the same becomes an error.

// maxForeignBytes bounds what one such column may take in memory. It is a
// variable for the tests.
var maxForeignBytes int64 = 1 << 30

// variableColumns reads the columns whose cells point into the heap.
func (f *File) variableColumns(h *HDU, t *Table, fields []field) error {
	for n := range fields {
		fd, c := &fields[n], &t.Columns[n]
		if !fd.variable {
			continue
		}
		if err := f.variableColumn(h, c, fd); err != nil {
			return err
		}
		if c.Data == nil {
			t.Header.warn("column %s: format %s is not read", c.Name, c.Format)
		}
	}
	return nil
}

func (f *File) variableColumn(h *HDU, c *Column, fd *field) error {
	at := strings.IndexByte(c.Format, fd.letter)
	if fd.repeat == 0 || at+1 >= len(c.Format) {
		return nil
	}
	element := c.Format[at+1]
	size := int64(elementBytes[element])
	switch element {
	case 'L', 'B', 'I', 'J', 'K', 'E', 'D', 'A':
	default:
		return nil
	}
	// Gather the descriptors and the pieces of the heap that they point at.
	heapBytes := h.dataBytes - h.heapOffset
	var total int64
	counts, starts := make([]int64, h.Rows), make([]int64, h.Rows)
	cell := make([]byte, fd.width)
	for row := range h.Rows {
		if err := f.readAll(h, cell, h.dataOffset+int64(row)*int64(h.RowBytes)+int64(fd.offset)); err != nil {
			return err
		}
		if fd.letter == 'P' {
			counts[row], starts[row] = int64(get32(cell)), int64(binary.BigEndian.Uint32(cell[4:]))
		} else {
			counts[row], starts[row] = get64(cell), get64(cell[8:])
		}
		n, start := counts[row], starts[row]
		if n < 0 || start < 0 || n > heapBytes/size || start > heapBytes-n*size {
			return f.formatError(h.Index, "column %s, row %d: points at %d elements from byte %d of a heap of %d bytes", c.Name, row+1, n, start, heapBytes)
		}
		if total += n * size; total > maxForeignBytes {
			return f.unsupported(h.Index, "column %s holds more than %d bytes", c.Name, maxForeignBytes)
		}
	}
	heap := make([]byte, total)
	descriptors := make([]byte, 0, 8*h.Rows)
	var end int64
	for row := range h.Rows {
		n := counts[row] * size
		if err := f.readAll(h, heap[end:end+n], h.dataOffset+h.heapOffset+starts[row]); err != nil {
			return err
		}
		descriptors = binary.BigEndian.AppendUint32(descriptors, uint32(counts[row]))
		descriptors = binary.BigEndian.AppendUint32(descriptors, uint32(end))
		end += n
	}
	letter := element
	if element == 'A' || element == 'L' {
		letter = 'B'
	}
	var err error
	scaled := fd.scale != 1 || fd.zero != 0
	switch letter {
	case 'B':
		var raw [][]uint8
		if raw, err = foreignRows[[]uint8]("1P"+string(letter), 8, descriptors, heap, h.Rows); err != nil {
			break
		}
		switch element {
		case 'A':
			text := make([]string, len(raw))
			for i, p := range raw {
				text[i] = textCell(p)
			}
			c.Data = text
		case 'L':
			c.Data = mapCells(raw, func(v uint8) bool { return v == 'T' })
		default:
			c.Data = scaleCells(raw, scaled, fd)
		}
	case 'I':
		c.Data, err = foreignScaled[int16](letter, descriptors, heap, h.Rows, scaled, fd)
	case 'J':
		c.Data, err = foreignScaled[int32](letter, descriptors, heap, h.Rows, scaled, fd)
	case 'K':
		c.Data, err = foreignScaled[int64](letter, descriptors, heap, h.Rows, scaled, fd)
	case 'E':
		c.Data, err = foreignScaled[float32](letter, descriptors, heap, h.Rows, scaled, fd)
	case 'D':
		c.Data, err = foreignScaled[float64](letter, descriptors, heap, h.Rows, scaled, fd)
	}
	if err != nil {
		return f.formatError(h.Index, "column %s: %v", c.Name, err)
	}
	return nil
}

type number interface {
	uint8 | int16 | int32 | int64 | float32 | float64
}

func foreignScaled[T number](letter byte, descriptors, heap []byte, rows int, scaled bool, fd *field) (any, error) {
	raw, err := foreignRows[[]T]("1P"+string(letter), 8, descriptors, heap, rows)
	if err != nil {
		return nil, err
	}
	return scaleCells(raw, scaled, fd), nil
}

func scaleCells[T number](raw [][]T, scaled bool, fd *field) any {
	if !scaled {
		return raw
	}
	return mapCells(raw, func(v T) float64 { return fd.zero + fd.scale*float64(v) })
}

func mapCells[T, U any](raw [][]T, convert func(T) U) [][]U {
	out := make([][]U, len(raw))
	for i, cell := range raw {
		out[i] = make([]U, len(cell))
		for j, v := range cell {
			out[i][j] = convert(v)
		}
	}
	return out
}

// foreignRows builds a binary table of one column around the bytes of its rows
// and heap, and lets fitsio decode it.
func foreignRows[T any](form string, rowBytes int, rows, heap []byte, count int) (out []T, err error) {
	cards := []Card{
		{"XTENSION", "BINTABLE", ""}, {"BITPIX", int64(8), ""}, {"NAXIS", int64(2), ""},
		{"NAXIS1", int64(rowBytes), ""}, {"NAXIS2", int64(count), ""},
		{"PCOUNT", int64(len(heap)), ""}, {"GCOUNT", int64(1), ""}, {"TFIELDS", int64(1), ""},
		{"TTYPE1", "column", ""}, {"TFORM1", form, ""},
	}
	return decodeForeign[T](cards, rows, heap, count)
}

func decodeForeign[T any](cards []Card, rows, heap []byte, count int) (out []T, err error) {
	defer func() {
		if r := recover(); r != nil {
			out, err = nil, fmt.Errorf("cannot be decoded: %v", r)
		}
	}()
	var file bytes.Buffer
	if err := encodeHDU(&file, &empty{}, true, true); err != nil {
		return nil, err
	}
	var header []byte
	for _, c := range cards {
		if header, _, err = appendCard(header, c); err != nil {
			return nil, err
		}
	}
	header = appendLine(header, "END")
	for len(header)%blockSize != 0 {
		header = append(header, ' ')
	}
	file.Write(header)
	file.Write(rows)
	file.Write(heap)
	n := int64(len(rows) + len(heap))
	file.Write(make([]byte, padded(n)-n))

	decoded, err := fitsio.Open(&file)
	if err != nil {
		return nil, err
	}
	defer decoded.Close()
	table, ok := decoded.HDUs()[len(decoded.HDUs())-1].(*fitsio.Table)
	if !ok {
		return nil, fmt.Errorf("cannot be decoded: no table came out")
	}
	it, err := table.Read(0, int64(count))
	if err != nil {
		return nil, err
	}
	defer it.Close()
	out = make([]T, 0, count)
	for it.Next() {
		var v T
		if err := it.Scan(&v); err != nil {
			return nil, err
		}
		out = append(out, v)
	}
	if len(out) != count {
		return nil, fmt.Errorf("cannot be decoded: %d rows of %d", len(out), count)
	}
	return out, it.Err()
}

// asciiTable reads a TABLE extension. Text becomes []string, integers []int64,
// all other numbers, and integers with blank, null or scaled cells, []float64
// with NaN for blank and null ones.
func (f *File) asciiTable(i int) (*Table, error) {
	h := &f.hdus[i]
	t := &Table{Name: h.Name, Header: h.Header.Clone()}
	count, err := f.integer(h, "TFIELDS", 0, 999)
	if err != nil {
		return nil, err
	}
	if h.dataBytes > maxForeignBytes {
		return nil, f.unsupported(i, "an ASCII table of more than %d bytes", maxForeignBytes)
	}
	all := make([]byte, int64(h.RowBytes)*int64(h.Rows))
	if err := f.readAll(h, all, h.dataOffset); err != nil {
		return nil, err
	}
	used := 0
	for n := 1; n <= int(count); n++ {
		c, err := f.column(h, n)
		if err != nil {
			return nil, err
		}
		begin, err := f.integer(h, "TBCOL"+strconv.Itoa(n), 1, math.MaxInt32)
		if err != nil {
			return nil, err
		}
		digits, decimals, _ := strings.Cut(c.Format[1:], ".")
		width, err := strconv.Atoi(digits)
		if err != nil || width < 1 || int(begin)-1+width > h.RowBytes {
			return nil, f.formatError(i, "TFORM%d = %q, TBCOL%d = %d: want a field within the row of %d bytes", n, c.Format, n, begin, h.RowBytes)
		}
		if used += width; used > h.RowBytes {
			return nil, f.formatError(i, "TFORM%d = %q, TBCOL%d = %d: the fields overlap", n, c.Format, n, begin)
		}
		places, _ := strconv.Atoi(decimals)
		null, _ := h.Header.Text("TNULL" + strconv.Itoa(n))
		fd := field{letter: c.Format[0], width: width, offset: int(begin) - 1, scale: 1, repeat: places}
		if v, ok := h.Header.Float("TSCAL" + strconv.Itoa(n)); ok {
			fd.scale = v
		}
		if v, ok := h.Header.Float("TZERO" + strconv.Itoa(n)); ok {
			fd.zero = v
		}
		c.Null = nil
		if c.Data, err = asciiColumn(all, h, &fd, strings.TrimSpace(null)); err != nil {
			return nil, f.formatError(i, "column %s: %v", c.Name, err)
		}
		if c.Data == nil {
			t.Header.warn("column %s: format %s is not read", c.Name, c.Format)
		}
		t.Columns = append(t.Columns, c)
	}
	return t, nil
}

// asciiColumn cuts a column out of the rows and decodes it.
func asciiColumn(all []byte, h *HDU, fd *field, null string) (any, error) {
	text := make([]string, h.Rows)
	for row := range text {
		at := row*h.RowBytes + fd.offset
		text[row] = strings.TrimRight(string(all[at:at+fd.width]), " ")
	}
	switch fd.letter {
	case 'A':
		return text, nil
	case 'I', 'F', 'E', 'D':
	default:
		return nil, nil
	}
	// Every cell, brought to one spelling and width, goes through fitsio; null
	// cells as zeros that are replaced after.
	missing := make([]bool, h.Rows)
	const width = 32
	packed := bytes.Repeat([]byte{' '}, width*h.Rows)
	whole := fd.letter == 'I' && fd.scale == 1 && fd.zero == 0
	for row, s := range text {
		s = strings.TrimSpace(s)
		if s == "" || null != "" && s == null {
			missing[row], s = true, "0"
			whole = false
		}
		v := parseNumber(s)
		if v == nil || len(s) > width {
			return nil, fmt.Errorf("row %d: %q is no number", row+1, s)
		}
		if _, isInt := v.(int64); !isInt {
			whole = whole && fd.letter != 'I'
		}
		s = strings.NewReplacer("D", "E", "d", "E").Replace(s)
		copy(packed[row*width:], s)
	}
	form := "E32.16"
	if whole {
		form = "I32"
	}
	cards := []Card{
		{"XTENSION", "TABLE", ""}, {"BITPIX", int64(8), ""}, {"NAXIS", int64(2), ""},
		{"NAXIS1", int64(width), ""}, {"NAXIS2", int64(h.Rows), ""},
		{"PCOUNT", int64(0), ""}, {"GCOUNT", int64(1), ""}, {"TFIELDS", int64(1), ""},
		{"TTYPE1", "column", ""}, {"TBCOL1", int64(1), ""}, {"TFORM1", form, ""},
	}
	if whole {
		return decodeForeign[int64](cards, packed, nil, h.Rows)
	}
	out, err := decodeForeign[float64](cards, packed, nil, h.Rows)
	if err != nil {
		return nil, err
	}
	for row := range out {
		switch {
		case missing[row]:
			out[row] = math.NaN()
		default:
			// A number without a point has its last digits behind it (4.0,
			// section 7.2.5): F8.2 reads 1234 as 12.34.
			if fd.repeat > 0 && fd.letter != 'I' && !strings.ContainsAny(text[row], ".EDed") {
				out[row] /= math.Pow10(fd.repeat)
			}
			out[row] = fd.zero + fd.scale*out[row]
		}
	}
	return out, nil
}
