package catalog

import (
	"bufio"
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"reflect"
	"strings"

	"github.com/parquet-go/parquet-go"

	"nightsift/detect"
)

// parquetRows is the number of rows that are handed over at once, and
// parquetGroup that of a row group.
const (
	parquetRows  = 1024
	parquetGroup = 1 << 17
)

// EncodeParquet writes a sheet as Apache Parquet, compressed with gzip. Text and
// real columns are optional: null is null. Type, unit, UCD and description of
// the columns stand in the metadata of the file: as JSON under "columns", and as
// a VOTable without data under "IVOA.VOTable-Parquet.content" (Taylor et al.
// 2025, IVOA Note "Parquet in the VO").
func EncodeParquet(w io.Writer, s *Sheet) error {
	columns, err := json.Marshal(describeColumns(s))
	if err != nil {
		return err
	}
	var votable bytes.Buffer
	head := bufio.NewWriter(&votable)
	votableHead(head, s)
	head.WriteString(votableTail)
	if err := head.Flush(); err != nil {
		return err
	}
	out := parquet.NewWriter(w, parquetSchema(s),
		parquet.Compression(&parquet.Gzip), parquet.CreatedBy("nightsift", "", ""), parquet.MaxRowsPerRowGroup(parquetGroup),
		parquet.KeyValueMetadata("columns", string(columns)),
		parquet.KeyValueMetadata("IVOA.VOTable-Parquet.version", "1.0"),
		parquet.KeyValueMetadata("IVOA.VOTable-Parquet.content", votable.String()))
	rows := make([]parquet.Row, parquetRows)
	values := make([]parquet.Value, parquetRows*len(s.Columns))
	for from := 0; from < s.Rows; from += parquetRows {
		n := min(parquetRows, s.Rows-from)
		for i := range n {
			row := values[i*len(s.Columns) : (i+1)*len(s.Columns) : (i+1)*len(s.Columns)]
			for k := range s.Columns {
				row[k] = parquetValue(&s.Columns[k], from+i).Level(0, 0, k)
				if s.Columns[k].Type != detect.Integer && !row[k].IsNull() {
					row[k] = row[k].Level(0, 1, k)
				}
			}
			rows[i] = row
		}
		if _, err := out.WriteRows(rows[:n]); err != nil {
			return fmt.Errorf("parquet: %w", err)
		}
	}
	return out.Close()
}

func parquetValue(c *SheetColumn, row int) parquet.Value {
	switch c.Type {
	case detect.Text:
		if c.Text[row] == "" {
			return parquet.NullValue()
		}
		return parquet.ByteArrayValue([]byte(c.Text[row]))
	case detect.Real:
		if v := c.Real[row]; v == v {
			return parquet.DoubleValue(v)
		}
		return parquet.NullValue()
	}
	return parquet.Int64Value(c.Integer[row])
}

// parquetSchema gives the columns in their order; a parquet.Group would sort
// them by name.
func parquetSchema(s *Sheet) *parquet.Schema {
	fields := make([]reflect.StructField, len(s.Columns))
	for k := range s.Columns {
		c := &s.Columns[k]
		f := reflect.StructField{Name: fmt.Sprintf("Column%d", k)}
		switch c.Type {
		case detect.Text:
			f.Type, f.Tag = reflect.TypeFor[string](), reflect.StructTag(`parquet:"`+c.Name+`,optional,plain"`)
		case detect.Real:
			f.Type, f.Tag = reflect.TypeFor[float64](), reflect.StructTag(`parquet:"`+c.Name+`,optional,plain"`)
		default:
			f.Type, f.Tag = reflect.TypeFor[int64](), reflect.StructTag(`parquet:"`+c.Name+`,plain"`)
		}
		if strings.ContainsAny(c.Name, "\",`") {
			panic(fmt.Sprintf("catalog: column name %q: want a plain word", c.Name))
		}
		fields[k] = f
	}
	return parquet.NewSchema(s.Name, parquet.SchemaOf(reflect.New(reflect.StructOf(fields)).Interface()))
}

type columnDescription struct {
	Name        string `json:"name"`
	Type        string `json:"type"`
	Unit        string `json:"unit,omitempty"`
	UCD         string `json:"ucd,omitempty"`
	Description string `json:"description"`
}

func describeColumns(s *Sheet) []columnDescription {
	list := make([]columnDescription, len(s.Columns))
	for i := range s.Columns {
		c := &s.Columns[i]
		list[i] = columnDescription{c.Name, typeName(c.Type), c.Unit, c.UCD(), c.Description}
	}
	return list
}
