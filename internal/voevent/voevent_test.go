package voevent

import (
	"bytes"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

func sample() Packet {
	n := math.NaN()
	return Packet{
		IVORN:  "ivo://marrow-ridge.survey/new-objects#J095304.88-082412.1-n2",
		Author: Author{"ivo://marrow-ridge.survey/nightsift", "Marrow Ridge <search> & more", "MR", "A. Person", "a@example.org"},
		Date:   "2027-01-06T05:00:00",
		What: []Entry{
			{Name: "mag", UCD: "phot.mag", Unit: "mag", Description: "at the latest detection", Value: 19.25},
			{Name: "nights", Value: 2}, {Name: "filter", Value: "r"}, {Name: "unknown", Value: n},
			{Name: "before", Entries: []Entry{{Name: "limit", Unit: "mag", Value: 20.5}}},
		},
		Note: "note",
		List: &Table{Name: "detections", Description: "all", Fields: []Entry{{Name: "mjd", Unit: "d"}, {Name: "id"}},
			Rows: [][]any{{61000.25, "a"}, {n, "b"}}},
		Where: Where{RA: 148.27033, Dec: -8.40336, Error: 2e-7, Time: "2027-01-05T04:00:00.000", TimeError: 30,
			Site: "Marrow Ridge", Longitude: -70.5, Latitude: -30.25, Height: 2400},
		How:        "how",
		Why:        Why{"NS J095304.88-082412.1", "process.variation;em.opt", "why", 0.97},
		Supersedes: []string{"ivo://marrow-ridge.survey/new-objects#J095304.88-082412.1-n1"},
	}
}

// A packet obeys the rules of VOEvent 2.0, as a schema for xmllint; what breaks
// one of them is refused by it, so that it shows something. Python's own reader
// finds the values.
func TestPacketObeysTheRules(t *testing.T) {
	var b bytes.Buffer
	p := sample()
	if err := p.Encode(&b); err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	path := filepath.Join(dir, "event.xml")
	if err := os.WriteFile(path, b.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
	outside.Command(t, "xmllint", "--noout", "--nonet", "--schema", "testdata/voevent20.xsd", path)
	out := outside.Python(t, `
import sys
import xml.etree.ElementTree as E
e = E.parse(sys.argv[1]).getroot()
assert e.tag == '{http://www.ivoa.net/xml/VOEvent/v2.0}VOEvent', e.tag
assert e.get('role') == 'observation' and e.get('version') == '2.0'
p = {x.get('name'): x for x in e.findall('What/Param')}
assert set(p) == {'mag', 'nights', 'filter'}
assert float(p['mag'].get('value')) == 19.25 and p['mag'].get('unit') == 'mag' and p['mag'].get('dataType') == 'float'
assert int(p['nights'].get('value')) == 2 and p['filter'].get('value') == 'r'
assert e.find('What/Group/Param').get('value') == '20.5'
rows = [[c.text for c in r] for r in e.findall('What/Table/Data/TR')]
assert rows == [['61000.25', 'a'], [None, 'b']], rows
assert e.findtext('Who/Author/title') == 'Marrow Ridge <search> & more'
at = e.find('WhereWhen/ObsDataLocation/ObservationLocation/AstroCoords')
assert at.get('coord_system_id') == 'UTC-ICRS-TOPO'
assert [float(at.findtext('Position2D/Value2/' + c)) for c in ('C1', 'C2')] == [148.27033, -8.40336]
assert at.findtext('Position2D/Error2Radius') == '0.0000002'
assert at.findtext('Time/TimeInstant/ISOTime') == '2027-01-05T04:00:00.000'
assert e.find('Why/Inference').get('probability') == '0.97'
assert e.find('Citations/EventIVORN').get('cite') == 'supersedes'
print('ok')
`, path)
	if strings.TrimSpace(string(out)) != "ok" {
		t.Errorf("read: %s", out)
	}
	for _, change := range [][2]string{
		{`version="2.0"`, `version="1.1"`}, {`role="observation"`, `role="rumour"`}, {"#J0953", "/J0953"}, {"<C1>148.27033</C1>", "<C1>east</C1>"},
		{"T04:00:00.000", " 4 o'clock"}, {`dataType="int"`, `dataType="long"`}, {`probability="0.97"`, `probability="97"`},
		{"UTC-ICRS-TOPO", "ICRS"}, {`cite="supersedes"`, `cite="replaces"`}, {"<Who>", "<Who><Friend/>"}, {"<TD>a</TD>", "<TH>a</TH>"},
	} {
		bad := bytes.Replace(b.Bytes(), []byte(change[0]), []byte(change[1]), 1)
		if bytes.Equal(bad, b.Bytes()) {
			t.Errorf("%q is not in the packet", change[0])
		}
		if err := os.WriteFile(path, bad, 0o644); err != nil {
			t.Fatal(err)
		}
		if exec.Command("xmllint", "--noout", "--nonet", "--schema", "testdata/voevent20.xsd", path).Run() == nil {
			t.Errorf("the schema takes %q for %q", change[1], change[0])
		}
	}
}

func TestNoisePacketsAreRefused(t *testing.T) {
	for name, spoil := range map[string]func(*Packet){
		"name without local part": func(p *Packet) { p.IVORN = "ivo://marrow-ridge.survey/new-objects" },
		"name of the web":         func(p *Packet) { p.IVORN = "http://example.org#1" },
		"short authority":         func(p *Packet) { p.Author.IVORN = "ivo://a/b" },
		"no position":             func(p *Packet) { p.Where.RA = math.NaN() },
		"declination":             func(p *Packet) { p.Where.Dec = -91 },
		"error":                   func(p *Packet) { p.Where.Error = math.NaN() },
		"no time":                 func(p *Packet) { p.Where.Time = "" },
		"no date":                 func(p *Packet) { p.Date = "" },
		"superseded":              func(p *Packet) { p.Supersedes = []string{"yesterday's"} },
	} {
		p := sample()
		spoil(&p)
		var b bytes.Buffer
		if err := p.Encode(&b); err == nil || b.Len() > 0 {
			t.Errorf("%s: %v, %d bytes", name, err, b.Len())
		}
	}
	p := sample()
	p.Test, p.Where.Latitude, p.Why.Probability, p.Supersedes, p.List = true, math.NaN(), math.NaN(), nil, nil
	var b bytes.Buffer
	if err := p.Encode(&b); err != nil || !strings.Contains(b.String(), `role="test"`) || strings.Contains(b.String(), "Position3D") {
		t.Errorf("%v\n%s", err, &b)
	}
}
