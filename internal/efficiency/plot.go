package efficiency

import (
	"bytes"
	"fmt"
	"image/color"
	"math"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgsvg"
)

var (
	ink    = color.NRGBA{0x1f, 0x4e, 0x79, 0xff}
	faint  = color.NRGBA{0x1f, 0x4e, 0x79, 0x60}
	accent = color.NRGBA{0xb0, 0x3a, 0x2e, 0xff}
	grey   = color.NRGBA{0x90, 0x90, 0x90, 0xff}
)

// points are bins with their Wilson intervals as error bars.
type points []Bin

func (p points) Len() int                { return len(p) }
func (p points) XY(i int) (x, y float64) { return p[i].Mean, p[i].Fraction }
func (p points) YError(i int) (lo, hi float64) {
	return p[i].Fraction - p[i].WilsonLow, p[i].WilsonHigh - p[i].Fraction
}
func (p points) XError(i int) (lo, hi float64) { return p[i].Mean - p[i].Low, p[i].High - p[i].Mean }

// Figure draws recovered fractions with their intervals and, where there is one,
// the fitted curve with its limits.
func Figure(title, axis string, bins []Bin, curve *Curve) (*plot.Plot, error) {
	p := plot.New()
	p.Title.Text = title
	p.X.Label.Text, p.Y.Label.Text = axis, "fraction found"
	p.Y.Min, p.Y.Max = 0, 1.02
	grid := plotter.NewGrid()
	grid.Horizontal.Color, grid.Vertical.Color = color.Gray{0xe4}, color.Gray{0xe4}
	p.Add(grid)
	if len(bins) > 0 {
		across, err := plotter.NewXErrorBars(points(bins))
		if err != nil {
			return nil, err
		}
		across.LineStyle.Color = faint
		across.CapWidth = 0
		bars, err := plotter.NewYErrorBars(points(bins))
		if err != nil {
			return nil, err
		}
		bars.LineStyle.Color = ink
		dots, err := plotter.NewScatter(points(bins))
		if err != nil {
			return nil, err
		}
		dots.GlyphStyle = draw.GlyphStyle{Color: ink, Radius: vg.Points(2.5), Shape: draw.CircleGlyph{}}
		p.Add(across, bars, dots)
	}
	if curve != nil && len(bins) > 0 {
		f := plotter.NewFunction(curve.At)
		f.Samples = 200
		f.LineStyle = draw.LineStyle{Color: accent, Width: vg.Points(1.2)}
		p.Add(f)
		for _, limit := range []struct{ m, fraction float64 }{{curve.Mag50, 0.5}, {curve.Mag90, 0.9}} {
			if math.IsNaN(limit.m) {
				continue
			}
			line, err := plotter.NewLine(plotter.XYs{{X: limit.m, Y: 0}, {X: limit.m, Y: limit.fraction}})
			if err != nil {
				return nil, err
			}
			line.LineStyle = draw.LineStyle{Color: grey, Width: vg.Points(0.8), Dashes: []vg.Length{vg.Points(3), vg.Points(2)}}
			label, err := plotter.NewLabels(plotter.XYLabels{XYs: plotter.XYs{{X: limit.m, Y: 0.03}}, Labels: []string{fmt.Sprintf("%.0f %%: %.2f", 100*limit.fraction, limit.m)}})
			if err != nil {
				return nil, err
			}
			label.TextStyle[0].Rotation = math.Pi / 2
			p.Add(line, label)
		}
	}
	// Later additions widen the range of the axes.
	p.Y.Min, p.Y.Max = 0, 1.02
	return p, nil
}

const figureWidth, figureHeight = 5.6 * vg.Inch, 3.4 * vg.Inch

// PNG and SVG draw a figure as a file's bytes. Equal figures give equal bytes.
func PNG(p *plot.Plot) ([]byte, error) {
	c := vgimg.PngCanvas{Canvas: vgimg.NewWith(vgimg.UseWH(figureWidth, figureHeight), vgimg.UseDPI(144))}
	p.Draw(draw.New(c))
	var b bytes.Buffer
	_, err := c.WriteTo(&b)
	return b.Bytes(), err
}

// SVG draws a figure as scalable graphics.
func SVG(p *plot.Plot) ([]byte, error) {
	c := vgsvg.New(figureWidth, figureHeight)
	p.Draw(draw.New(c))
	var b bytes.Buffer
	_, err := c.WriteTo(&b)
	return b.Bytes(), err
}
