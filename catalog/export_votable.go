package catalog

import (
	"bufio"
	"encoding/xml"
	"fmt"
	"io"
	"strings"

	"nightsift/detect"
)

// EncodeVOTable writes a sheet as a VOTable 1.4 (Ochsenbein, Taylor, Donaldson
// et al. 2019, IVOA Recommendation) with TABLEDATA: unit, UCD and description of
// each column, ICRS for positions, UTC at the observatory for dates. Null is an
// empty cell.
func EncodeVOTable(w io.Writer, s *Sheet) error {
	out := bufio.NewWriter(w)
	votableHead(out, s)
	out.WriteString("<DATA>\n<TABLEDATA>\n")
	for row := range s.Rows {
		out.WriteString("<TR>")
		for k := range s.Columns {
			out.WriteString("<TD>")
			c := &s.Columns[k]
			text := field(c.value(row))
			if c.Type == detect.Text {
				text = xmlText(text)
			}
			out.WriteString(text)
			out.WriteString("</TD>")
		}
		out.WriteString("</TR>\n")
	}
	out.WriteString("</TABLEDATA>\n</DATA>\n")
	out.WriteString(votableTail)
	return out.Flush()
}

const votableTail = "</TABLE>\n</RESOURCE>\n</VOTABLE>\n"

// votableHead writes everything that stands before the data.
func votableHead(out *bufio.Writer, s *Sheet) {
	out.WriteString(xml.Header)
	out.WriteString(`<VOTABLE version="1.4" xmlns="http://www.ivoa.net/xml/VOTable/v1.3">` + "\n<RESOURCE>\n")
	var places, dates bool
	for i := range s.Columns {
		places = places || reference(&s.Columns[i].Column) == "icrs"
		dates = dates || reference(&s.Columns[i].Column) == "utc"
	}
	if places {
		out.WriteString(`<COOSYS ID="icrs" system="ICRS"/>` + "\n")
	}
	if dates {
		out.WriteString(`<TIMESYS ID="utc" timeorigin="MJD-origin" timescale="UTC" refposition="TOPOCENTER"/>` + "\n")
	}
	fmt.Fprintf(out, "<TABLE name=\"%s\" nrows=\"%d\">\n", xmlText(s.Name), s.Rows)
	for i := range s.Columns {
		c := &s.Columns[i]
		fmt.Fprintf(out, "<FIELD name=\"%s\"", xmlText(c.Name))
		switch c.Type {
		case detect.Real:
			out.WriteString(` datatype="double"`)
		case detect.Integer:
			out.WriteString(` datatype="long"`)
		default:
			fmt.Fprintf(out, ` datatype="%s" arraysize="*"`, textType(c.Text))
		}
		if c.Unit != "" {
			fmt.Fprintf(out, ` unit="%s"`, xmlText(c.Unit))
		}
		if ucd := c.UCD(); ucd != "" {
			fmt.Fprintf(out, ` ucd="%s"`, xmlText(ucd))
		}
		if ref := reference(&c.Column); ref != "" {
			fmt.Fprintf(out, ` ref="%s"`, ref)
		}
		fmt.Fprintf(out, "><DESCRIPTION>%s</DESCRIPTION></FIELD>\n", xmlText(c.Description))
	}
}

// reference names the system that a column's values refer to.
func reference(c *Column) string {
	switch {
	case c.Name == "ra_deg" || c.Name == "dec_deg":
		return "icrs"
	case c.Type == detect.Real && c.UCD() == "time.epoch":
		return "utc"
	}
	return ""
}

// textType is char unless a value needs more than ASCII.
func textType(list []string) string {
	for _, s := range list {
		for i := range len(s) {
			if s[i] >= 0x80 {
				return "unicodeChar"
			}
		}
	}
	return "char"
}

// xmlText escapes a text; what XML cannot hold becomes U+FFFD.
func xmlText(s string) string {
	var b strings.Builder
	if err := xml.EscapeText(&b, []byte(s)); err != nil {
		panic(err) // a strings.Builder takes everything
	}
	return b.String()
}
