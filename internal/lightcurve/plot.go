package lightcurve

import (
	"fmt"
	"image/color"
	"io"
	"path/filepath"
	"slices"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"

	"nightsift/internal/wholefile"
)

// Line is a model to be drawn over the points of a filter.
type Line struct {
	Filter   string
	From, To float64                   // MJD
	Flux     func(mjd float64) float64 // on the scale of Point.Flux
}

// PlotFormats are the endings of files that WritePlot writes.
var PlotFormats = []string{".png", ".svg"}

// series are told apart by colour and by form.
var series = []struct {
	colour color.RGBA
	shape  draw.GlyphDrawer
}{
	{color.RGBA{0x00, 0x72, 0xb2, 0xff}, draw.CircleGlyph{}},
	{color.RGBA{0xd5, 0x5e, 0x00, 0xff}, draw.SquareGlyph{}},
	{color.RGBA{0x00, 0x9e, 0x73, 0xff}, draw.TriangleGlyph{}},
	{color.RGBA{0xcc, 0x79, 0xa7, 0xff}, draw.PyramidGlyph{}},
	{color.RGBA{0x56, 0xb4, 0xe9, 0xff}, draw.RingGlyph{}},
	{color.RGBA{0x33, 0x33, 0x33, 0xff}, draw.PlusGlyph{}},
}

// errorPoints are points with vertical error bars.
type errorPoints struct {
	plotter.XYs
	plotter.YErrors
}

// WritePlot draws flux against time, each filter in its colour and form, with
// error bars of one sigma and lines for models, as PNG or SVG by the ending of
// the path. Points without a flux are left out; fainter than the errors they
// are shown as they are, also below zero.
func (c *Curve) WritePlot(path string, lines []Line) error {
	ending := strings.ToLower(filepath.Ext(path))
	if !slices.Contains(PlotFormats, ending) {
		return fmt.Errorf("plot %s: its ending must be one of %s", path, strings.Join(PlotFormats, ", "))
	}
	filters := map[string]bool{}
	for i := range c.Points {
		if c.Points[i].scaled() {
			filters[c.Points[i].Filter] = true
		}
	}
	if len(filters) == 0 {
		return fmt.Errorf("plot %s: no frame gave a flux on a known scale at this place", path)
	}
	names := make([]string, 0, len(filters))
	for f := range filters {
		names = append(names, f)
	}
	slices.Sort(names)
	p := plot.New()
	p.Title.Text = c.Name
	if p.Title.Text == "" {
		p.Title.Text = fmt.Sprintf("%.5f %+.5f", c.RA, c.Dec)
	}
	p.X.Label.Text, p.Y.Label.Text = "MJD (UTC)", "flux (1 at magnitude 25)"
	p.X.Tick.Marker = plot.DefaultTicks{}
	p.Add(plotter.NewGrid())
	p.Legend.Top = true
	for n, filter := range names {
		style := series[n%len(series)]
		var e errorPoints
		for i := range c.Points {
			q := &c.Points[i]
			if q.scaled() && q.Filter == filter {
				e.XYs = append(e.XYs, plotter.XY{X: q.MidMJD, Y: q.Flux})
				e.YErrors = append(e.YErrors, struct{ Low, High float64 }{q.FluxErr, q.FluxErr})
			}
		}
		marks, err := plotter.NewScatter(e.XYs)
		if err != nil {
			return fmt.Errorf("plot %s: %w", path, err)
		}
		marks.GlyphStyle = draw.GlyphStyle{Color: style.colour, Radius: vg.Points(3), Shape: style.shape}
		bars, err := plotter.NewYErrorBars(e)
		if err != nil {
			return fmt.Errorf("plot %s: %w", path, err)
		}
		bars.Color = style.colour
		p.Add(bars, marks)
		p.Legend.Add(filter, marks)
		for _, l := range lines {
			if l.Filter != filter || !(l.To > l.From) {
				continue
			}
			const steps = 300
			curve := make(plotter.XYs, steps+1)
			for k := range curve {
				t := l.From + (l.To-l.From)*float64(k)/steps
				curve[k] = plotter.XY{X: t, Y: l.Flux(t)}
			}
			line, err := plotter.NewLine(curve)
			if err != nil {
				return fmt.Errorf("plot %s: %w", path, err)
			}
			line.Color = style.colour
			p.Add(line)
		}
	}
	w, err := p.WriterTo(18*vg.Centimeter, 11*vg.Centimeter, ending[1:])
	if err != nil {
		return fmt.Errorf("plot %s: %w", path, err)
	}
	return wholefile.Write(path, func(out io.Writer) error {
		_, err := w.WriteTo(out)
		return err
	})
}
