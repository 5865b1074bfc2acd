package voevent

import "encoding/xml"

// The elements in the order in which the schema has them. Only the root has a
// prefix: the schema's elements are unqualified.

type xmlEvent struct {
	XMLName xml.Name `xml:"voe:VOEvent"`
	VOE     string   `xml:"xmlns:voe,attr"`
	XSI     string   `xml:"xmlns:xsi,attr"`
	Schema  string   `xml:"xsi:schemaLocation,attr"`
	IVORN   string   `xml:"ivorn,attr"`
	Role    string   `xml:"role,attr"`
	Version string   `xml:"version,attr"`

	Who struct {
		AuthorIVORN string
		Author      xmlAuthor
		Date        string
	}
	What struct {
		Params      []xmlParam `xml:"Param"`
		Groups      []xmlGroup `xml:"Group"`
		Tables      []xmlTable `xml:"Table"`
		Description string     `xml:",omitempty"`
	}
	Where xmlWhere `xml:"WhereWhen"`
	How   struct {
		Description string
	}
	Why struct {
		Concept     string
		Name        string
		Description string
		Inference   *xmlInference
	}
	Citations *xmlCitations
}

type xmlAuthor struct {
	Title        string `xml:"title,omitempty"`
	ShortName    string `xml:"shortName,omitempty"`
	ContactName  string `xml:"contactName,omitempty"`
	ContactEmail string `xml:"contactEmail,omitempty"`
}

type xmlParam struct {
	Name        string `xml:"name,attr"`
	Value       string `xml:"value,attr"`
	UCD         string `xml:"ucd,attr,omitempty"`
	Unit        string `xml:"unit,attr,omitempty"`
	Type        string `xml:"dataType,attr"`
	Description string `xml:",omitempty"`
}

type xmlGroup struct {
	Name        string     `xml:"name,attr"`
	Params      []xmlParam `xml:"Param"`
	Description string     `xml:",omitempty"`
}

type xmlTable struct {
	Name        string     `xml:"name,attr"`
	Description string     `xml:",omitempty"`
	Fields      []xmlField `xml:"Field"`
	Rows        []xmlRow   `xml:"Data>TR"`
}

type xmlField struct {
	Name        string `xml:"name,attr"`
	UCD         string `xml:"ucd,attr,omitempty"`
	Unit        string `xml:"unit,attr,omitempty"`
	Type        string `xml:"dataType,attr"`
	Description string `xml:",omitempty"`
}

type xmlRow struct {
	Cells []string `xml:"TD"`
}

type xmlSystem struct {
	ID string `xml:"id,attr"`
}

type xmlSiteCoords struct {
	System   string `xml:"coord_system_id,attr"`
	Position struct {
		Unit  string `xml:"unit,attr"`
		Name1 string
		Name2 string
		Name3 string
		C1    string `xml:"Value3>C1"`
		C2    string `xml:"Value3>C2"`
		C3    string `xml:"Value3>C3"`
	} `xml:"Position3D"`
}

type xmlWhere struct {
	Data struct {
		Site struct {
			ID     string         `xml:"id,attr"`
			System *xmlSystem     `xml:"AstroCoordSystem"`
			Coords *xmlSiteCoords `xml:"AstroCoords"`
		} `xml:"ObservatoryLocation"`
		Observation struct {
			System xmlSystem `xml:"AstroCoordSystem"`
			Coords struct {
				System string `xml:"coord_system_id,attr"`
				Time   struct {
					Unit  string `xml:"unit,attr"`
					ISO   string `xml:"TimeInstant>ISOTime"`
					Error string
				}
				Position struct {
					Unit  string `xml:"unit,attr"`
					Name1 string
					Name2 string
					C1    string `xml:"Value2>C1"`
					C2    string `xml:"Value2>C2"`
					Error string `xml:"Error2Radius"`
				} `xml:"Position2D"`
			} `xml:"AstroCoords"`
		} `xml:"ObservationLocation"`
	} `xml:"ObsDataLocation"`
}

type xmlInference struct {
	Probability string `xml:"probability,attr"`
	Name        string
	Concept     string
}

type xmlCitations struct {
	Events []xmlCitation `xml:"EventIVORN"`
}

type xmlCitation struct {
	Cite string `xml:"cite,attr"`
	Text string `xml:",chardata"`
}
