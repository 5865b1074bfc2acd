// Package report writes the page that shows a run's results: one HTML file
// that needs nothing else, with the frames, what became of each, and the
// candidates with their stamps.
package report

import (
	_ "embed"
	"fmt"
	"html/template"
	"io"
	"math"
	"sort"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/wholefile"
)

// Input is what a report shows.
type Input struct {
	Title      string
	Version    string // of the program
	Frames     []catalog.FrameRecord
	Candidates []detect.Candidate
}

// mostCards bounds the candidates shown with stamps, and so the page's size.
// Those left out are counted on the page and stand in the tables.
const mostCards = 300

//go:embed report.html
var page string

var tmpl = template.Must(template.New("report").Parse(page))

type card struct {
	Candidate                *detect.Candidate
	New, Reference, Differ   template.URL
	Place, Brightness, Score string
	Probability, Near, Flags string
	Likely                   bool
}

type row struct {
	Record                                              *catalog.FrameRecord
	FWHM, Stars, RMS, Noise, Depth, Limit, Count, Start string
}

type view struct {
	Title                      string
	Searched, SetAside, Failed int
	Likely, All, Shown, Left   int
	Rows                       []row
	Cards                      []card
}

// Write writes the report, whole or not at all.
func Write(path string, in Input) error {
	v, err := arrange(in)
	if err != nil {
		return fmt.Errorf("report %s: %w", path, err)
	}
	return wholefile.Write(path, func(w io.Writer) error { return tmpl.Execute(w, v) })
}

func arrange(in Input) (*view, error) {
	v := &view{Title: in.Title, All: len(in.Candidates)}
	for i := range in.Frames {
		f := &in.Frames[i]
		switch f.Status {
		case catalog.Searched:
			v.Searched++
		case catalog.SetAside:
			v.SetAside++
		default:
			v.Failed++
		}
		r := row{Record: f, FWHM: number("%.2f", f.FWHM), RMS: number("%.3f", f.AstrometryRMS), Noise: number("%.3f", f.NoiseRatio),
			Limit: number("%.2f", f.MagLimit5Sigma), Start: number("%.5f", f.MidMJD)}
		if f.StarsMatched > 0 {
			r.Stars = fmt.Sprint(f.StarsMatched)
		}
		if f.Status == catalog.Searched {
			r.Count = fmt.Sprint(f.Candidates)
		}
		v.Rows = append(v.Rows, r)
	}
	order := make([]*detect.Candidate, len(in.Candidates))
	for i := range in.Candidates {
		order[i] = &in.Candidates[i]
		if order[i].RealProbability >= 0.5 {
			v.Likely++
		}
	}
	sort.SliceStable(order, func(a, b int) bool { return order[a].RealProbability > order[b].RealProbability })
	if len(order) > mostCards {
		v.Left = len(order) - mostCards
		order = order[:mostCards]
	}
	v.Shown = len(order)
	for _, c := range order {
		n, r, d, err := pictures(c)
		if err != nil {
			return nil, err
		}
		k := card{Candidate: c, New: template.URL(n), Reference: template.URL(r), Differ: template.URL(d),
			Place:       fmt.Sprintf("x %.2f, y %.2f", c.X, c.Y),
			Score:       fmt.Sprintf("%+.1f σ", c.Significance),
			Probability: number("%.3f", c.RealProbability), Likely: c.RealProbability >= 0.5}
		if !math.IsNaN(c.RA) {
			k.Place = fmt.Sprintf("RA %.5f°, Dec %+.5f° (x %.1f, y %.1f)", c.RA, c.Dec, c.X, c.Y)
		}
		if !math.IsNaN(c.Mag) {
			k.Brightness = fmt.Sprintf("%.2f ± %.2f mag", c.Mag, c.MagErr)
		} else {
			k.Brightness = fmt.Sprintf("%.4g ± %.2g counts", c.Flux, c.FluxErr)
		}
		if !math.IsNaN(c.ReferenceDistance) {
			k.Near = fmt.Sprintf("%.1f″", c.ReferenceDistance)
			if !math.IsNaN(c.ReferenceMag) {
				k.Near += fmt.Sprintf(" (%.2f mag)", c.ReferenceMag)
			}
		}
		k.Flags = c.Flags.String()
		v.Cards = append(v.Cards, k)
	}
	return v, nil
}

func number(format string, x float64) string {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return ""
	}
	return fmt.Sprintf(format, x)
}
