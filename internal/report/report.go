// Package report writes the page that shows a run's results: one HTML file
// that needs nothing else, with the frames, what became of each, and the
// candidates with their stamps.
package report

import (
	_ "embed"
	"encoding/base64"
	"fmt"
	"html/template"
	"io"
	"math"
	"sort"
	"strings"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/astro"
	"nightsift/internal/wholefile"
)

// Input is what a report shows.
type Input struct {
	Title      string
	Version    string // of the program
	Frames     []catalog.FrameRecord
	Candidates []detect.Candidate
	Efficiency *Efficiency       // nil if none was measured
	Known      map[string]string // names of known minor planets by candidate_id
}

// Efficiency is what artificial sources in the frames have shown.
type Efficiency struct {
	Sentence string
	Figure   []byte // SVG, drawn by this program
}

// The page's size is bounded: so many candidates are shown with stamps, of
// probability one half and more and of less; so many frames as maps. Those left
// out are counted on the page and stand in the tables.
const (
	mostCards    = 300
	mostDoubtful = 60
	mostMaps     = 48
)

//go:embed report.html
var page string

var tmpl = template.Must(template.New("report").Parse(page))

type card struct {
	Candidate              *detect.Candidate
	New, Reference, Differ template.URL
	Kind, X, Y             string
	Place, Brightness      string
	Score, Probability     string
	Near, Flags, Known     string
	Percent                int
}

type row struct {
	Record                                             *catalog.FrameRecord
	Status, Reason                                     string
	FWHM, Stars, RMS, Noise, Limit, Half, Count, Start string
}

// mapped is a frame with the places of its candidates, in the picture's
// coordinates: y downwards from the top.
type mapped struct {
	Frame         string
	Width, Height int
	Points        []point
}

type point struct {
	X, Y, R int
	Class   string
}

type kindCount struct {
	Kind  detect.Kind
	Name  string
	Count int
}

type view struct {
	Title, Version             string
	Searched, SetAside, Failed int
	Likely, All, Unlikely      int
	Left                       int // likely ones without a card
	Rows                       []row
	Maps                       []mapped
	Kinds                      []kindCount
	Cards, Doubtful            []card
	Columns                    int    // of the table of frames
	Missed                     string // a sentence on what artificial sources have shown
	MissedFigure               template.URL
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
	v := &view{Title: in.Title, Version: in.Version, All: len(in.Candidates), Columns: 10}
	if e := in.Efficiency; e != nil {
		v.Missed, v.Columns = e.Sentence, 11
		if len(e.Figure) > 0 {
			v.MissedFigure = template.URL("data:image/svg+xml;base64," + base64.StdEncoding.EncodeToString(e.Figure))
		}
	}
	order := make([]*detect.Candidate, len(in.Candidates))
	byFrame := map[string][]*detect.Candidate{}
	likelyOn := map[string]int{}
	kinds := map[detect.Kind]int{}
	for i := range in.Candidates {
		c := &in.Candidates[i]
		order[i] = c
		byFrame[c.Frame] = append(byFrame[c.Frame], c)
		if likely(c) {
			v.Likely++
			likelyOn[c.Frame]++
			kinds[c.Kind]++
		}
	}
	v.Unlikely = v.All - v.Likely
	for _, k := range detect.Kinds {
		if kinds[k] > 0 {
			v.Kinds = append(v.Kinds, kindCount{k, words(string(k)), kinds[k]})
		}
	}
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
		v.Rows = append(v.Rows, rowOf(f, likelyOn[f.Frame]))
		if f.Status == catalog.Searched && f.Width > 0 && f.Height > 0 && len(v.Maps) < mostMaps {
			v.Maps = append(v.Maps, mapOf(f, byFrame[f.Frame]))
		}
	}
	sort.SliceStable(order, func(a, b int) bool {
		x, y := order[a], order[b]
		// Probabilities that look alike on the page are ordered by significance.
		if p, q := math.Round(1000*x.RealProbability), math.Round(1000*y.RealProbability); p != q {
			return p > q
		}
		return math.Abs(x.Significance) > math.Abs(y.Significance)
	})
	for _, c := range order {
		list, most := &v.Cards, mostCards
		if !likely(c) {
			list, most = &v.Doubtful, mostDoubtful
		}
		if len(*list) == most {
			continue
		}
		k, err := cardOf(c)
		if err != nil {
			return nil, err
		}
		k.Known = in.Known[c.ID]
		*list = append(*list, k)
	}
	v.Left = v.Likely - len(v.Cards)
	return v, nil
}

func likely(c *detect.Candidate) bool { return c.RealProbability >= 0.5 }

// words turns a slug into plain words.
func words(slug string) string { return strings.ReplaceAll(slug, "_", " ") }

func rowOf(f *catalog.FrameRecord, likely int) row {
	r := row{Record: f, Status: words(string(f.Status)), Reason: words(f.Reason), FWHM: number("%.2f", f.FWHM), RMS: number("%.3f", f.AstrometryRMS),
		Noise: number("%.3f", f.NoiseRatio), Limit: number("%.2f", f.MagLimit5Sigma), Half: number("%.2f", f.Efficiency50)}
	if ref := number("%.2f", f.ReferenceFWHM); ref != "" {
		r.FWHM += " (" + ref + ")"
	}
	if !math.IsNaN(f.MidMJD) {
		r.Start, _, _ = strings.Cut(strings.Replace(astro.MJDToISO(f.MidMJD), "T", " ", 1), ".")
	}
	if f.StarsMatched > 0 {
		r.Stars = fmt.Sprint(f.StarsMatched)
	}
	if f.Status == catalog.Searched {
		r.Count = fmt.Sprintf("%d (%d)", f.Candidates, likely)
	}
	return r
}

func mapOf(f *catalog.FrameRecord, list []*detect.Candidate) mapped {
	m := mapped{Frame: f.Frame, Width: f.Width, Height: f.Height}
	unit := float64(max(f.Width, f.Height)) / 172 // a pixel of the page
	for _, front := range []bool{false, true} {
		for _, c := range list {
			if likely(c) != front || math.IsNaN(c.X) || math.IsNaN(c.Y) {
				continue
			}
			p := point{X: int(math.Round(c.X)), Y: f.Height + 1 - int(math.Round(c.Y)), R: int(math.Ceil(1.3 * unit)), Class: "other"}
			if front {
				p.R, p.Class = int(math.Ceil(2.8*unit)), "likely"
			}
			m.Points = append(m.Points, p)
		}
	}
	return m
}

func cardOf(c *detect.Candidate) (card, error) {
	n, r, d, err := Pictures(c)
	if err != nil {
		return card{}, err
	}
	k := card{Candidate: c, New: template.URL(n), Reference: template.URL(r), Differ: template.URL(d),
		Kind: words(string(c.Kind)), X: fmt.Sprintf("%.1f", c.X), Y: fmt.Sprintf("%.1f", c.Y),
		Score: fmt.Sprintf("%+.1f σ", c.Significance), Probability: number("%.3f", c.RealProbability), Flags: c.Flags.String(),
		Place: "place on the sky unknown"}
	if !math.IsNaN(c.RealProbability) {
		k.Percent = int(math.Round(100 * c.RealProbability))
	}
	if !math.IsNaN(c.RA) && !math.IsNaN(c.Dec) {
		k.Place = fmt.Sprintf("%s %s (%.5f° %+.5f°)", astro.FormatRA(c.RA, 2), astro.FormatDec(c.Dec, 1), c.RA, c.Dec)
	}
	if !math.IsNaN(c.Mag) {
		k.Brightness = fmt.Sprintf("%.2f ± %.2f mag", c.Mag, c.MagErr)
	} else {
		k.Brightness = fmt.Sprintf("%.0f ± %.0f counts", c.Flux, c.FluxErr)
	}
	if !math.IsNaN(c.ReferenceDistance) {
		k.Near = fmt.Sprintf("%.1f″", c.ReferenceDistance)
		if !math.IsNaN(c.ReferenceMag) {
			k.Near += fmt.Sprintf(", %.2f mag", c.ReferenceMag)
		}
	}
	return k, nil
}

func number(format string, x float64) string {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return ""
	}
	return fmt.Sprintf(format, x)
}
