package catalog

import (
	"fmt"
	"io"
	"strings"

	"nightsift/detect"
	"nightsift/internal/fits"
)

// EncodeFITS writes a sheet as a binary table, null as NaN or as a blank text.
// The table's name is the sheet's in capitals. Characters outside printable
// ASCII, which FITS does not allow, become question marks.
func EncodeFITS(w io.Writer, s *Sheet) error {
	table := &fits.Table{Name: strings.ToUpper(s.Name), Header: &fits.Header{}}
	for i := range s.Columns {
		c := &s.Columns[i]
		column := fits.Column{Name: c.Name, Unit: c.Unit, Description: c.Description}
		switch c.Type {
		case detect.Text:
			text := make([]string, len(c.Text))
			for k, v := range c.Text {
				text[k] = printable(v)
			}
			column.Data = text
		case detect.Real:
			column.Data = nonNil(c.Real)
		case detect.Integer:
			column.Data = nonNil(c.Integer)
		default:
			panic(fmt.Sprintf("catalog: column %s has unknown type %d", c.Name, c.Type))
		}
		table.Columns = append(table.Columns, column)
	}
	return fits.Encode(w, nil, table)
}

func nonNil[T any](v []T) []T {
	if v == nil {
		return []T{}
	}
	return v
}

func printable(s string) string {
	return strings.Map(func(r rune) rune {
		if r < ' ' || r > '~' {
			return '?'
		}
		return r
	}, s)
}
