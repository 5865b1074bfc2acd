package catalog

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"
	"strings"

	"nightsift/detect"
)

// EncodeECSV writes a sheet as Enhanced Character Separated Values 1.0
// (Astropy Proposal for Enhancement 6, 2020): a header in YAML with type, unit
// and description of each column, then comma-separated values. Null is an empty
// value. Line breaks in texts become blanks, since a row is a line.
func EncodeECSV(w io.Writer, s *Sheet) error {
	out := bufio.NewWriter(w)
	out.WriteString("# %ECSV 1.0\n# ---\n# delimiter: ','\n# datatype:\n")
	for i := range s.Columns {
		c := &s.Columns[i]
		kind := map[detect.Type]string{detect.Text: "string", detect.Real: "float64", detect.Integer: "int64"}[c.Type]
		fmt.Fprintf(out, "# - {name: %s, ", yaml(c.Name))
		if c.Unit != "" {
			fmt.Fprintf(out, "unit: %s, ", yaml(c.Unit))
		}
		fmt.Fprintf(out, "datatype: %s, description: %s", kind, yaml(c.Description))
		if ucd := c.UCD(); ucd != "" {
			fmt.Fprintf(out, ", meta: {ucd: %s}", yaml(ucd))
		}
		out.WriteString("}\n")
	}
	fmt.Fprintf(out, "# meta: {name: %s}\n", yaml(s.Name))
	for k := range s.Columns {
		separate(out, k)
		out.WriteString(s.Columns[k].Name)
	}
	out.WriteByte('\n')
	for row := range s.Rows {
		for k := range s.Columns {
			separate(out, k)
			c := &s.Columns[k]
			text := field(c.value(row))
			if c.Type == detect.Text {
				text = ecsvText(text)
			}
			out.WriteString(text)
		}
		out.WriteByte('\n')
	}
	return out.Flush()
}

func separate(out *bufio.Writer, k int) {
	if k > 0 {
		out.WriteByte(',')
	}
}

// yaml quotes a text: a JSON string is a YAML string in double quotes.
func yaml(s string) string {
	b, err := json.Marshal(s)
	if err != nil {
		panic(err) // a string can always be encoded
	}
	return string(b)
}

// ecsvText quotes what a reader could take for something else.
func ecsvText(s string) string {
	s = strings.Map(func(r rune) rune {
		if r < ' ' {
			return ' '
		}
		return r
	}, s)
	if !strings.ContainsAny(s, "\",# '") {
		return s
	}
	return `"` + strings.ReplaceAll(s, `"`, `""`) + `"`
}
