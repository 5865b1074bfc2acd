// Package parquettable teaches usertable to read Parquet, when it is imported for
// that effect. It stands apart because the decoder brings packages along that
// numeric packages do without.
package parquettable

import (
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strconv"
	"strings"

	"github.com/parquet-go/parquet-go"

	"nightsift/internal/usertable"
)

func init() { usertable.Register("PAR1", read) }

// read reads top-level columns of a Parquet file.
func read(t *usertable.Table, f *os.File, want []usertable.Column) (err error) {
	// The decoder trusts what it reads; a broken file must not end the program.
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("%s: broken Parquet file: %v", t.Path, p)
		}
	}()
	info, err := f.Stat()
	if err != nil {
		return err
	}
	file, err := parquet.OpenFile(f, info.Size())
	if err != nil {
		return fmt.Errorf("%s: %w", t.Path, err)
	}
	var names []string
	for _, field := range file.Schema().Fields() {
		names = append(names, field.Name())
	}
	at, err := t.Find(names, want)
	if err != nil {
		return err
	}
	for k, w := range want {
		leaf, ok := file.Schema().Lookup(names[at[k]])
		if !ok || leaf.Node.Repeated() {
			return fmt.Errorf("%s: column %s: it holds no single values", t.Path, w.Name)
		}
		rows := 0
		for _, group := range file.RowGroups() {
			n, err := readChunk(t, group.ColumnChunks()[leaf.ColumnIndex], w, rows)
			if err != nil {
				return err
			}
			rows += n
		}
		if k > 0 && rows != t.Rows {
			return fmt.Errorf("%s: column %s has %d rows, column %s has %d: broken Parquet file", t.Path, w.Name, rows, want[0].Name, t.Rows)
		}
		t.Rows = rows
	}
	return nil
}

// readChunk reads a column of one group of rows, the first being row `first`.
func readChunk(t *usertable.Table, chunk parquet.ColumnChunk, w usertable.Column, first int) (rows int, err error) {
	pages := chunk.Pages()
	defer pages.Close()
	values := make([]parquet.Value, 1024)
	for {
		page, err := pages.ReadPage()
		if errors.Is(err, io.EOF) {
			return rows, nil
		}
		if err != nil {
			return rows, fmt.Errorf("%s: column %s: %w", t.Path, w.Name, err)
		}
		reader := page.Values()
		for {
			n, err := reader.ReadValues(values)
			for _, v := range values[:n] {
				if w.Text {
					text, ok := parquetText(v)
					if !ok {
						return rows, t.Errorf(first+rows, w.Name, "holds %s; want text", v.Kind())
					}
					t.AddText(w, text)
				} else {
					x, ok := parquetNumber(v)
					if !ok {
						return rows, t.Errorf(first+rows, w.Name, "holds %s; want a finite number", v.Kind())
					}
					t.AddNumber(w, x)
				}
				rows++
			}
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				return rows, fmt.Errorf("%s: column %s: %w", t.Path, w.Name, err)
			}
		}
		parquet.Release(page)
	}
}

func parquetNumber(v parquet.Value) (float64, bool) {
	if v.IsNull() {
		return math.NaN(), true
	}
	x := math.NaN()
	switch v.Kind() {
	case parquet.Double:
		x = v.Double()
	case parquet.Float:
		x = float64(v.Float())
	case parquet.Int32:
		x = float64(v.Int32())
	case parquet.Int64:
		x = float64(v.Int64())
	default:
		return 0, false
	}
	return x, !math.IsInf(x, 0)
}

func parquetText(v parquet.Value) (string, bool) {
	if v.IsNull() {
		return "", true
	}
	switch v.Kind() {
	case parquet.ByteArray, parquet.FixedLenByteArray:
		return strings.TrimSpace(string(v.ByteArray())), true
	case parquet.Int32:
		return strconv.Itoa(int(v.Int32())), true
	case parquet.Int64:
		return strconv.FormatInt(v.Int64(), 10), true
	}
	return "", false
}
