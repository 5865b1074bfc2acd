// Package voevent writes VOEvent 2.0 packets (Seaman, Williams, Allan et al.
// 2011, "Sky Event Reporting Metadata", IVOA Recommendation): who saw what,
// where and when, how, and why it matters, in XML for programs that react to it.
package voevent

import (
	"encoding/xml"
	"errors"
	"fmt"
	"io"
	"math"
	"regexp"
	"strconv"
	"strings"
)

// Packet is one event. Fill the exported fields and call Encode.
type Packet struct {
	IVORN string // "ivo://authority/stream#local": names this packet for good
	Test  bool   // not an observation to act on

	Author Author
	Date   string // of the packet, ISO 8601, UTC

	What []Entry
	Note string // on What
	List *Table

	Where Where
	How   string
	Why   Why

	Supersedes []string // IVORNs of earlier packets of the same event
}

// Author says who sends.
type Author struct{ IVORN, Title, ShortName, ContactName, ContactEmail string }

// Entry is a named value of What: a Param, or with Entries a Group of them.
type Entry struct {
	Name, UCD, Unit, Description string
	Value                        any // string, float64 (NaN: left out) or int
	Entries                      []Entry
}

// Table is a table of What. A value is a string, a float64 (NaN: empty) or an int.
type Table struct {
	Name, Description string
	Fields            []Entry // without values
	Rows              [][]any
}

// Where is a place [deg, ICRS] with its 1 sigma error [deg], and a time (ISO
// 8601, UTC) with its error [s], seen from a site.
type Where struct {
	RA, Dec, Error float64
	Time           string
	TimeError      float64
	Site           string // short name of the place of observation
	// Longitude, Latitude [deg] and Height [m] of the site; NaN if unknown.
	Longitude, Latitude, Height float64
}

// Why says what it is held to be.
type Why struct {
	Name        string // of the object
	Concept     string // UCD or a term
	Description string
	Probability float64 // of the concept; NaN for none
}

var ivorn = regexp.MustCompile(`^ivo://[A-Za-z0-9][A-Za-z0-9._~*'()+=-]{2,}(/[A-Za-z0-9._~*'()+=-]+)*(#[A-Za-z0-9/._~*'()+=:@-]+)?$`)

// CheckIVORN refuses what is no identifier of the Virtual Observatory: authority,
// resource, and for packets what stands after #.
func CheckIVORN(text string, packet bool) error {
	switch {
	case !ivorn.MatchString(text):
		return fmt.Errorf("found %q, expected an identifier such as ivo://authority/stream#local", text)
	case packet && !strings.Contains(text, "#"):
		return fmt.Errorf("found %q, expected a local part after #", text)
	}
	return nil
}

// Encode writes the packet as XML. Equal packets give equal bytes.
func (p *Packet) Encode(w io.Writer) error {
	if err := p.check(); err != nil {
		return fmt.Errorf("VOEvent packet: %w", err)
	}
	role := "observation"
	if p.Test {
		role = "test"
	}
	x := xmlEvent{
		IVORN: p.IVORN, Role: role, Version: "2.0",
		VOE: "http://www.ivoa.net/xml/VOEvent/v2.0", XSI: "http://www.w3.org/2001/XMLSchema-instance",
		Schema: "http://www.ivoa.net/xml/VOEvent/v2.0 http://www.ivoa.net/xml/VOEvent/VOEvent-v2.0.xsd",
	}
	x.Who.AuthorIVORN, x.Who.Date = p.Author.IVORN, p.Date
	x.Who.Author = xmlAuthor{p.Author.Title, p.Author.ShortName, p.Author.ContactName, p.Author.ContactEmail}
	for _, e := range p.What {
		if e.Entries == nil {
			x.What.Params = appendParam(x.What.Params, e)
			continue
		}
		g := xmlGroup{Name: e.Name, Description: e.Description}
		for _, inner := range e.Entries {
			g.Params = appendParam(g.Params, inner)
		}
		x.What.Groups = append(x.What.Groups, g)
	}
	if p.List != nil {
		x.What.Tables = append(x.What.Tables, p.List.xml())
	}
	x.What.Description = p.Note
	x.Where = p.Where.xml()
	x.How.Description = p.How
	x.Why.Name, x.Why.Concept, x.Why.Description = p.Why.Name, p.Why.Concept, p.Why.Description
	if !math.IsNaN(p.Why.Probability) {
		x.Why.Inference = &xmlInference{Probability: number(p.Why.Probability), Name: p.Why.Name, Concept: p.Why.Concept}
	}
	if len(p.Supersedes) > 0 {
		x.Citations = &xmlCitations{}
		for _, s := range p.Supersedes {
			x.Citations.Events = append(x.Citations.Events, xmlCitation{"supersedes", s})
		}
	}
	if _, err := io.WriteString(w, xml.Header); err != nil {
		return err
	}
	e := xml.NewEncoder(w)
	e.Indent("", " ")
	if err := e.Encode(x); err != nil {
		return err
	}
	_, err := io.WriteString(w, "\n")
	return err
}

func (p *Packet) check() error {
	if err := CheckIVORN(p.IVORN, true); err != nil {
		return fmt.Errorf("its name: %w", err)
	}
	if err := CheckIVORN(p.Author.IVORN, false); err != nil {
		return fmt.Errorf("its author: %w", err)
	}
	for _, s := range p.Supersedes {
		if err := CheckIVORN(s, true); err != nil {
			return fmt.Errorf("what it supersedes: %w", err)
		}
	}
	w := &p.Where
	switch {
	case !(w.RA >= 0 && w.RA < 360 && w.Dec >= -90 && w.Dec <= 90):
		return fmt.Errorf("position %g %g is not on the sky", w.RA, w.Dec)
	case !(w.Error >= 0) || math.IsInf(w.Error, 0):
		return fmt.Errorf("position error %g: expected 0 or more degrees", w.Error)
	case w.Time == "":
		return errors.New("no time: an event has one")
	case p.Date == "":
		return errors.New("no date of the packet")
	}
	return nil
}

func number(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }

// decimal has no exponent: positions are read by simple programs.
func decimal(v float64) string { return strconv.FormatFloat(v, 'f', -1, 64) }

// text returns a value and its dataType.
func text(v any) (value, kind string, known bool) {
	switch x := v.(type) {
	case float64:
		if math.IsNaN(x) {
			return "", "float", false
		}
		return number(x), "float", true
	case int:
		return strconv.Itoa(x), "int", true
	case string:
		return x, "string", true
	}
	panic(fmt.Sprintf("voevent: a value cannot be a %T", v))
}

func appendParam(list []xmlParam, e Entry) []xmlParam {
	value, kind, known := text(e.Value)
	if !known {
		return list
	}
	return append(list, xmlParam{e.Name, value, e.UCD, e.Unit, kind, e.Description})
}

func (t *Table) xml() xmlTable {
	x := xmlTable{Name: t.Name, Description: t.Description}
	for k, f := range t.Fields {
		kind := "string"
		if len(t.Rows) > 0 {
			_, kind, _ = text(t.Rows[0][k])
		}
		x.Fields = append(x.Fields, xmlField{f.Name, f.UCD, f.Unit, kind, f.Description})
	}
	for _, row := range t.Rows {
		var r xmlRow
		for _, v := range row {
			value, _, _ := text(v)
			r.Cells = append(r.Cells, value)
		}
		x.Rows = append(x.Rows, r)
	}
	return x
}

const celestial, terrestrial = "UTC-ICRS-TOPO", "UTC-GEOD-TOPO"

func (w *Where) xml() xmlWhere {
	var x xmlWhere
	site := &x.Data.Site
	site.ID = strings.Join(strings.Fields(w.Site), "-")
	if w.Latitude == w.Latitude && w.Longitude == w.Longitude {
		height := w.Height
		if height != height {
			height = 0
		}
		site.System = &xmlSystem{terrestrial}
		site.Coords = &xmlSiteCoords{System: terrestrial}
		site.Coords.Position.Unit = "deg-deg-m"
		site.Coords.Position.Name1, site.Coords.Position.Name2, site.Coords.Position.Name3 = "longitude", "latitude", "elevation"
		site.Coords.Position.C1, site.Coords.Position.C2, site.Coords.Position.C3 = decimal(w.Longitude), decimal(w.Latitude), decimal(height)
	}
	o := &x.Data.Observation
	o.System.ID, o.Coords.System = celestial, celestial
	o.Coords.Time.Unit, o.Coords.Time.ISO = "s", w.Time
	o.Coords.Time.Error = decimal(w.TimeError)
	p := &o.Coords.Position
	p.Unit, p.Name1, p.Name2 = "deg", "RA", "Dec"
	p.C1, p.C2, p.Error = decimal(w.RA), decimal(w.Dec), decimal(w.Error)
	return x
}
