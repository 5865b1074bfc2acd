package detect

import (
	"fmt"

	"nightsift/internal/fits"
	"nightsift/internal/realbogus"
)

// TableName is the name of the binary table of candidates.
const TableName = "CANDIDATES"

// Table returns candidates as a FITS table: the scalar Columns, the Stamps
// where any candidate has them, and what the model saw as one vector. Nulls of
// numbers are NaN.
func Table(list []Candidate) *fits.Table {
	t := &fits.Table{Name: TableName}
	for k := range Columns {
		c := &Columns[k]
		col := fits.Column{Name: c.Name, Unit: c.Unit, Description: c.Description}
		switch c.Type {
		case Text:
			v := make([]string, len(list))
			for i := range list {
				v[i] = c.Value(&list[i]).(string)
			}
			col.Data = v
		case Real:
			v := make([]float64, len(list))
			for i := range list {
				v[i] = c.Value(&list[i]).(float64)
			}
			col.Data = v
		case Integer:
			v := make([]int32, len(list))
			for i := range list {
				v[i] = int32(c.Value(&list[i]).(int64))
			}
			col.Data = v
		}
		t.Columns = append(t.Columns, col)
	}
	stamps, features := len(list) == 0, len(list) == 0
	for i := range list {
		stamps = stamps || list[i].StampDifference != nil
		features = features || list[i].Features != nil
	}
	if stamps {
		for _, s := range Stamps {
			v := make([][]float32, len(list))
			for i := range list {
				v[i] = *s.Plane(&list[i])
			}
			t.Columns = append(t.Columns, fits.Column{Name: s.Name, Unit: s.Unit, Description: s.Description,
				Dim: fmt.Sprintf("(%d,%d)", StampSize, StampSize), Data: v})
		}
	}
	if features {
		v := make([][]float64, len(list))
		for i := range list {
			v[i] = list[i].Features
		}
		t.Columns = append(t.Columns, fits.Column{Name: "features", Description: "what the real/bogus model saw",
			Dim: fmt.Sprintf("(%d)", realbogus.Count), Data: v})
	}
	return t
}

// FromTable reads candidates from a table. All scalar columns of this version
// must be there, in any order; stamps and features may be missing.
func FromTable(t *fits.Table) ([]Candidate, error) {
	list := make([]Candidate, t.Rows())
	for k := range Columns {
		c := &Columns[k]
		var value func(i int) any
		switch c.Type {
		case Text:
			v, err := t.Strings(c.Name)
			if err != nil {
				return nil, err
			}
			value = func(i int) any { return v[i] }
		case Real:
			v, err := t.Floats(c.Name)
			if err != nil {
				return nil, err
			}
			value = func(i int) any { return v[i] }
		case Integer:
			v, err := t.Ints(c.Name)
			if err != nil {
				return nil, err
			}
			value = func(i int) any { return v[i] }
		}
		for i := range list {
			if err := c.Set(&list[i], value(i)); err != nil {
				return nil, err
			}
		}
	}
	for _, s := range Stamps {
		if t.Column(s.Name) == nil {
			continue
		}
		v, err := t.Vectors(s.Name)
		if err != nil {
			return nil, err
		}
		for i := range list {
			if len(v[i]) != StampSize*StampSize {
				return nil, fmt.Errorf("table %s, column %s: vectors of %d, expected %d", t.Name, s.Name, len(v[i]), StampSize*StampSize)
			}
			*s.Plane(&list[i]) = v[i]
		}
	}
	if col := t.Column("features"); col != nil {
		if v, ok := col.Data.([][]float64); ok {
			for i := range list {
				list[i].Features = v[i]
			}
		}
	}
	return list, nil
}

// WriteTable writes candidates.fits, whole or not at all: one binary table
// CANDIDATES. provenance are cards for the primary header.
func WriteTable(path string, list []Candidate, provenance ...fits.Card) error {
	for i := range list {
		if list[i].Injected() {
			return fmt.Errorf("%s: %s was found with injected sources in the frame and is no candidate", path, list[i].ID)
		}
	}
	primary := &fits.Header{}
	for _, c := range provenance {
		primary.Set(c.Key, c.Value, c.Comment)
	}
	return fits.Write(path, primary, Table(list))
}

// ReadTable reads a file that WriteTable wrote, or any FITS file with such a
// table.
func ReadTable(path string) ([]Candidate, error) {
	t, err := fits.ReadTable(path, TableName)
	if err != nil {
		return nil, err
	}
	list, err := FromTable(t)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	return list, nil
}
