package survey

import (
	"nightsift/catalog"
	"nightsift/detect"
)

// addText adds a column of texts to a sheet of a known number of rows.
func addText(s *catalog.Sheet, name, description string, value func(row int) string) {
	c := catalog.SheetColumn{Column: catalog.Column{Name: name, Description: description, Type: detect.Text}}
	for i := range s.Rows {
		c.Text = append(c.Text, value(i))
	}
	s.Columns = append(s.Columns, c)
}

// addNumber adds a column of numbers, NaN for unknown ones.
func addNumber(s *catalog.Sheet, name, unit, description string, value func(row int) float64) {
	c := catalog.SheetColumn{Column: catalog.Column{Name: name, Unit: unit, Description: description, Type: detect.Real}}
	for i := range s.Rows {
		c.Real = append(c.Real, value(i))
	}
	s.Columns = append(s.Columns, c)
}
