package catalog

import (
	"bufio"
	"encoding/json"
	"io"
	"math"
	"strconv"
)

// EncodeJSONLines writes a sheet as JSON, one object a line and row, its
// members in the order of the columns. Null is null; an infinite number, for
// which JSON has no word, is 1e999, which readers take for infinite.
func EncodeJSONLines(w io.Writer, s *Sheet) error {
	out := bufio.NewWriter(w)
	names := make([]string, len(s.Columns))
	for k := range s.Columns {
		name, err := json.Marshal(s.Columns[k].Name)
		if err != nil {
			return err
		}
		names[k] = string(name) + ":"
		if k > 0 {
			names[k] = "," + names[k]
		}
	}
	for row := range s.Rows {
		out.WriteByte('{')
		for k := range s.Columns {
			out.WriteString(names[k])
			value, err := jsonValue(s.Columns[k].value(row))
			if err != nil {
				return err
			}
			out.WriteString(value)
		}
		out.WriteString("}\n")
	}
	return out.Flush()
}

func jsonValue(v any) (string, error) {
	switch x := v.(type) {
	case float64:
		switch {
		case math.IsNaN(x):
			return "null", nil
		case math.IsInf(x, 1):
			return "1e999", nil
		case math.IsInf(x, -1):
			return "-1e999", nil
		}
		return strconv.FormatFloat(x, 'g', -1, 64), nil
	case string:
		if x == "" {
			return "null", nil
		}
	}
	b, err := json.Marshal(v)
	return string(b), err
}
