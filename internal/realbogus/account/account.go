// Package account draws what is known of a trained real/bogus model: one
// self-contained page, with its curves and the sheet of its worst mistakes also
// as files of their own.
package account

import (
	"bytes"
	"encoding/base64"
	"encoding/json"
	"fmt"
	"html/template"
	"io"
	"math"
	"os"
	"path/filepath"
	"sort"

	"nightsift/internal/realbogus"
	"nightsift/internal/wholefile"
)

// Input is what an account tells of.
type Input struct {
	Title   string
	Version string
	Model   *realbogus.Model
	Judged  []realbogus.Judged // held out
	Stamps  [][]byte           // of each: three square thumbnails of grey levels, one after the other; nil without
	Side    int                // px, of a thumbnail

	InUse      *realbogus.Metrics // of the model in use, on the same examples
	ByField    *realbogus.Metrics // held out by field; nil if there is one field only
	Importance []realbogus.Weighed
	Facts      []Fact // what the examples were made from
}

// Fact is one line of a table.
type Fact struct{ Name, Value string }

// Names of the files in an account's folder.
const (
	PageName    = "training.html"
	FiguresName = "training.json"
	SheetName   = "mistakes.png"
)

// Row is a line of the table of completeness.
type Row struct {
	From, To float64 // signal-to-noise ratio
	Real     int
	Kept     float64 // fraction with a probability of at least one half
	At1      float64 // fraction above the score that 1 % of the bogus ones reach
}

// Completeness tells how many of the real ones are kept, by their strength.
func Completeness(list []realbogus.Judged) []Row {
	edges := []float64{0, 5, 6, 7, 8, 10, 13, 20, 40, math.Inf(1)}
	score, _, real, weight := realbogus.Columns(list)
	cut := realbogus.NewCurve(score, real, weight).CutAt(0.01)
	rows := make([]Row, len(edges)-1)
	for k := range rows {
		rows[k].From, rows[k].To = edges[k], edges[k+1]
	}
	for i := range list {
		e := &list[i]
		if !e.Real {
			continue
		}
		k := max(0, min(len(rows)-1, sort.Search(len(edges), func(k int) bool { return edges[k] > e.Strength() })-1))
		rows[k].Real++
		if e.P >= 0.5 {
			rows[k].Kept++
		}
		if e.Score >= cut {
			rows[k].At1++
		}
	}
	for k := range rows {
		n := float64(rows[k].Real)
		rows[k].Kept /= n
		rows[k].At1 /= n
	}
	return rows
}

// worst returns the indices of the worst mistakes, the worst first: real ones
// of low and bogus ones of high probability.
func worst(list []realbogus.Judged, most int) []int {
	order := make([]int, len(list))
	for i := range order {
		order[i] = i
	}
	wrong := func(i int) float64 {
		if list[i].Real {
			return 1 - list[i].P
		}
		// A guess of little weight is a small mistake.
		return list[i].P * math.Min(1, list[i].Weight)
	}
	sort.SliceStable(order, func(a, b int) bool { return wrong(order[a]) > wrong(order[b]) })
	for k, i := range order {
		if k == most || wrong(i) < 0.5 {
			return order[:k]
		}
	}
	return order
}

// Write writes the page, the figures and the sheet into a folder, each whole.
func Write(dir string, in Input) error {
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return err
	}
	figures, err := drawings(&in)
	if err != nil {
		return err
	}
	type drawn struct {
		Name  string
		Plain template.HTML
	}
	data := struct {
		Input
		Metrics    *realbogus.Metrics
		Rows       []Row
		Drawings   []drawn
		Sheet      template.URL
		Mistakes   int
		Calibrated string
	}{Input: in, Metrics: in.Model.Metrics, Rows: Completeness(in.Judged)}
	for _, f := range figures {
		// Our own drawing, without anything from outside.
		data.Drawings = append(data.Drawings, drawn{f.name, template.HTML(f.svg)})
		if err := wholefile.WriteBytes(filepath.Join(dir, f.name+".svg"), f.svg); err != nil {
			return err
		}
	}
	data.Calibrated = in.Model.Calibration.Kind
	if list := worst(in.Judged, 50); len(list) > 0 && in.Stamps != nil {
		sheet, err := drawSheet(in.Judged, in.Stamps, in.Side, list)
		if err != nil {
			return err
		}
		data.Mistakes = len(list)
		data.Sheet = template.URL("data:image/png;base64," + base64.StdEncoding.EncodeToString(sheet))
		if err := wholefile.WriteBytes(filepath.Join(dir, SheetName), sheet); err != nil {
			return err
		}
	}
	plain, err := json.MarshalIndent(struct {
		Digest     string              `json:"model_digest"`
		Metrics    *realbogus.Metrics  `json:"held_out_by_frame"`
		ByField    *realbogus.Metrics  `json:"held_out_by_field"`
		InUse      *realbogus.Metrics  `json:"model_in_use"`
		Importance []realbogus.Weighed `json:"importance"`
	}{in.Model.Digest, in.Model.Metrics, in.ByField, in.InUse, in.Importance}, "", " ")
	if err != nil {
		return fmt.Errorf("figures of the training: %w", err)
	}
	if err := wholefile.WriteBytes(filepath.Join(dir, FiguresName), append(plain, '\n')); err != nil {
		return err
	}
	var page bytes.Buffer
	if err := layout.Execute(&page, data); err != nil {
		return fmt.Errorf("page of the training: %w", err)
	}
	return wholefile.WriteBytes(filepath.Join(dir, PageName), page.Bytes())
}

// WriteText writes the figures as text.
func WriteText(w io.Writer, in Input) error {
	var b bytes.Buffer
	line := func(what string, m *realbogus.Metrics) {
		if m == nil {
			return
		}
		fmt.Fprintf(&b, "%-24s area %.4f  missed at 1 %% false %s  at 0.1 %% %s  above S/N 7 %s  above S/N 10 %s  log loss %.4f  Brier %.4f  calibration error %.4f\n",
			what, m.AUC, percent(m.MissedAt1), percent(m.MissedAt01), percentOf(m.MissedAbove7), percentOf(m.MissedAbove10), m.LogLoss, m.Brier, m.CalibrationError)
	}
	for _, f := range in.Facts {
		fmt.Fprintf(&b, "%-24s %s\n", f.Name, f.Value)
	}
	line("held out by frame", in.Model.Metrics)
	line("held out by field", in.ByField)
	line("model in use", in.InUse)
	for _, r := range Completeness(in.Judged) {
		if r.Real > 0 {
			fmt.Fprintf(&b, "S/N %3.0f to %3.0f           %d real, %s at p ≥ 0.5, %s at 1 %% false\n", r.From, r.To, r.Real, percent(r.Kept), percent(r.At1))
		}
	}
	for _, c := range in.Model.Metrics.Reliability {
		if c.Weight > 0 {
			fmt.Fprintf(&b, "stated %.3f             found %.3f (%.3f to %.3f) of %.0f\n", c.Stated, c.Found, c.FoundLow, c.FoundHigh, c.Weight)
		}
	}
	for k, f := range in.Importance {
		if k == 10 {
			break
		}
		fmt.Fprintf(&b, "importance %-24s %.4f\n", f.Feature, f.Loss)
	}
	_, err := w.Write(b.Bytes())
	return err
}

func percent(v float64) string {
	if math.IsNaN(v) {
		return "none"
	}
	return fmt.Sprintf("%.2f %%", 100*v)
}

func percentOf(v *float64) string {
	if v == nil {
		return "none"
	}
	return percent(*v)
}

var layout = template.Must(template.New("page").Funcs(template.FuncMap{"percent": percent, "percentOf": percentOf, "edge": func(v float64) string {
	if math.IsInf(v, 0) {
		return "∞"
	}
	return fmt.Sprintf("%g", v)
}}).Parse(`<!doctype html>
<html lang="en"><head><meta charset="utf-8"><meta name="viewport" content="width=device-width"><title>{{.Title}}</title>
<style>body{font:15px/1.45 system-ui,sans-serif;margin:2em auto;max-width:74em;padding:0 1em;color:#222}
table{border-collapse:collapse;margin:.6em 0 1.4em}td,th{padding:.15em .7em;border-bottom:1px solid #ddd;text-align:right}
td:first-child,th:first-child{text-align:left}.plots{display:flex;flex-wrap:wrap;gap:1em}.plots svg{width:23em;height:auto}img{max-width:100%}</style></head><body>
<h1>{{.Title}}</h1>
<p>nightsift {{.Version}}. Model of {{.Model.Made}}, digest {{printf "%.12s" .Model.Digest}}, calibration: {{.Calibrated}}.</p>
<table>{{range .Facts}}<tr><td>{{.Name}}</td><td>{{.Value}}</td></tr>{{end}}</table>
<h2>Figures</h2>
<p>Every example is judged by a model that has not seen its frame (second column: its field). The model in use is judged on the same examples, its calibration fitted anew.</p>
<table><tr><th></th><th>by frame</th>{{if .ByField}}<th>by field</th>{{end}}<th>in use</th></tr>
<tr><td>area under the curve</td><td>{{printf "%.4f" .Metrics.AUC}}</td>{{with .ByField}}<td>{{printf "%.4f" .AUC}}</td>{{end}}<td>{{printf "%.4f" .InUse.AUC}}</td></tr>
<tr><td>average precision</td><td>{{printf "%.4f" .Metrics.AveragePrecision}}</td>{{with .ByField}}<td>{{printf "%.4f" .AveragePrecision}}</td>{{end}}<td>{{printf "%.4f" .InUse.AveragePrecision}}</td></tr>
<tr><td>missed at 1 % false</td><td>{{percent .Metrics.MissedAt1}}</td>{{with .ByField}}<td>{{percent .MissedAt1}}</td>{{end}}<td>{{percent .InUse.MissedAt1}}</td></tr>
<tr><td>missed at 0.1 % false</td><td>{{percent .Metrics.MissedAt01}}</td>{{with .ByField}}<td>{{percent .MissedAt01}}</td>{{end}}<td>{{percent .InUse.MissedAt01}}</td></tr>
<tr><td>missed at 1 % false, S/N above 7</td><td>{{percentOf .Metrics.MissedAbove7}}</td>{{with .ByField}}<td>{{percentOf .MissedAbove7}}</td>{{end}}<td>{{percentOf .InUse.MissedAbove7}}</td></tr>
<tr><td>missed at 1 % false, S/N above 10</td><td>{{percentOf .Metrics.MissedAbove10}}</td>{{with .ByField}}<td>{{percentOf .MissedAbove10}}</td>{{end}}<td>{{percentOf .InUse.MissedAbove10}}</td></tr>
<tr><td>log loss</td><td>{{printf "%.4f" .Metrics.LogLoss}}</td>{{with .ByField}}<td>{{printf "%.4f" .LogLoss}}</td>{{end}}<td>{{printf "%.4f" .InUse.LogLoss}}</td></tr>
<tr><td>Brier score</td><td>{{printf "%.4f" .Metrics.Brier}}</td>{{with .ByField}}<td>{{printf "%.4f" .Brier}}</td>{{end}}<td>{{printf "%.4f" .InUse.Brier}}</td></tr>
<tr><td>calibration error</td><td>{{printf "%.4f" .Metrics.CalibrationError}}</td>{{with .ByField}}<td>{{printf "%.4f" .CalibrationError}}</td>{{end}}<td>{{printf "%.4f" .InUse.CalibrationError}}</td></tr></table>
<div class="plots">{{range .Drawings}}{{.Plain}}{{end}}</div>
<h2>Completeness</h2>
<table><tr><th>S/N</th><th>real</th><th>kept at p ≥ 0.5</th><th>kept at 1 % false</th></tr>
{{range .Rows}}{{if .Real}}<tr><td>{{edge .From}} to {{edge .To}}</td><td>{{.Real}}</td><td>{{percent .Kept}}</td><td>{{percent .At1}}</td></tr>{{end}}{{end}}</table>
<h2>Importance of features</h2>
<table><tr><th>feature</th><th>rise of the log loss</th></tr>{{range .Importance}}<tr><td>{{.Feature}}</td><td>{{printf "%.4f" .Loss}}</td></tr>{{end}}</table>
{{if .Mistakes}}<h2>The {{.Mistakes}} worst mistakes</h2><p>New, reference, difference; the stated probability of each, whether it is real, its significance, its place.</p><img alt="cut-outs of mistakes" src="{{.Sheet}}">{{end}}
</body></html>
`))
