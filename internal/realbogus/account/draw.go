package account

import (
	"bytes"
	"fmt"
	"image"
	"image/color"
	"image/png"
	"math"

	"golang.org/x/image/font"
	"golang.org/x/image/font/basicfont"
	"golang.org/x/image/math/fixed"
	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"

	"nightsift/internal/realbogus"
)

type drawing struct {
	name string
	svg  []byte
}

var blue, grey = color.RGBA{R: 20, G: 90, B: 170, A: 255}, color.RGBA{R: 150, G: 150, B: 150, A: 255}

// drawings draws all curves.
func drawings(in *Input) ([]drawing, error) {
	score, _, real, weight := realbogus.Columns(in.Judged)
	curve := realbogus.NewCurve(score, real, weight)
	var out []drawing
	add := func(name, title, x, y string, fill func(p *plot.Plot) error) error {
		p := plot.New()
		p.Title.Text, p.X.Label.Text, p.Y.Label.Text = title, x, y
		if err := fill(p); err != nil {
			return fmt.Errorf("plot %s: %w", name, err)
		}
		w, err := p.WriterTo(11*vg.Centimeter, 9*vg.Centimeter, "svg")
		if err != nil {
			return fmt.Errorf("plot %s: %w", name, err)
		}
		var b bytes.Buffer
		if _, err := w.WriteTo(&b); err != nil {
			return fmt.Errorf("plot %s: %w", name, err)
		}
		svg := b.Bytes()
		// The declaration has no place inside a page.
		if at := bytes.Index(svg, []byte("<svg")); at > 0 {
			svg = svg[at:]
		}
		out = append(out, drawing{name, svg})
		return nil
	}
	line := func(p *plot.Plot, points plotter.XYs, c color.Color) error {
		l, err := plotter.NewLine(points)
		if err != nil {
			return err
		}
		l.Color, l.Width = c, vg.Points(1.4)
		p.Add(l)
		return nil
	}
	err := add("roc", "Real ones kept against bogus ones kept", "fraction of bogus kept", "fraction of real kept", func(p *plot.Plot) error {
		const low = 1e-4
		var points plotter.XYs
		for _, q := range curve {
			if q.False >= low {
				points = append(points, plotter.XY{X: q.False, Y: q.Kept})
			}
		}
		if len(points) < 2 {
			points = plotter.XYs{{X: low, Y: 1}, {X: 1, Y: 1}}
		}
		p.X.Scale, p.X.Tick.Marker = plot.LogScale{}, plot.LogTicks{Prec: 1}
		p.X.Min, p.X.Max = low, 1
		p.Add(plotter.NewGrid())
		return line(p, thin(points), blue)
	})
	if err != nil {
		return nil, err
	}
	err = add("precision", "Precision against completeness", "fraction of real kept", "fraction of kept that is real", func(p *plot.Plot) error {
		var points plotter.XYs
		for _, q := range curve {
			points = append(points, plotter.XY{X: q.Kept, Y: q.Precision})
		}
		p.Add(plotter.NewGrid())
		return line(p, thin(points), blue)
	})
	if err != nil {
		return nil, err
	}
	err = add("completeness", "Completeness against strength", "signal-to-noise ratio", "fraction kept", func(p *plot.Plot) error {
		var half, at1 plotter.XYs
		for _, r := range Completeness(in.Judged) {
			if r.Real == 0 {
				continue
			}
			x := math.Sqrt(r.From * math.Min(r.To, 100))
			half, at1 = append(half, plotter.XY{X: x, Y: r.Kept}), append(at1, plotter.XY{X: x, Y: r.At1})
		}
		p.X.Scale, p.X.Tick.Marker = plot.LogScale{}, plot.LogTicks{Prec: 0}
		p.X.Min, p.X.Max = 5, 100
		p.Y.Max = 1
		p.Add(plotter.NewGrid())
		p.Title.Text += " (blue: p ≥ 0.5, grey: 1 % false)"
		if err := line(p, at1, grey); err != nil {
			return err
		}
		return line(p, half, blue)
	})
	if err != nil {
		return nil, err
	}
	err = add("reliability", "Stated probability against what was found", "stated", "found", func(p *plot.Plot) error {
		var points reliability
		for _, b := range in.Model.Metrics.Reliability {
			if b.Weight > 0 {
				points = append(points, b)
			}
		}
		p.X.Min, p.X.Max, p.Y.Min, p.Y.Max = 0, 1, 0, 1
		p.Add(plotter.NewGrid())
		if err := line(p, plotter.XYs{{X: 0, Y: 0}, {X: 1, Y: 1}}, grey); err != nil {
			return err
		}
		bars, err := plotter.NewYErrorBars(points)
		if err != nil {
			return err
		}
		dots, err := plotter.NewScatter(points)
		if err != nil {
			return err
		}
		bars.Color, dots.Color = blue, blue
		p.Add(bars, dots)
		return nil
	})
	return out, err
}

// reliability serves the plotter.
type reliability []realbogus.Bin

func (r reliability) Len() int                { return len(r) }
func (r reliability) XY(i int) (x, y float64) { return r[i].Stated, r[i].Found }
func (r reliability) YError(i int) (low, high float64) {
	return r[i].Found - r[i].FoundLow, r[i].FoundHigh - r[i].Found
}

// thin leaves out points that a drawing does not show.
func thin(points plotter.XYs) plotter.XYs {
	const most = 1500
	if len(points) <= most {
		return points
	}
	var out plotter.XYs
	last := len(points) - 1
	for k, q := range points {
		if n := len(out); k == last || n == 0 || math.Hypot(math.Log(q.X/out[n-1].X), q.Y-out[n-1].Y) > 0.002 || math.Abs(q.X-out[n-1].X) > 0.002 {
			out = append(out, q)
		}
	}
	return out
}

// drawSheet draws the cut-outs of mistakes.
func drawSheet(list []realbogus.Judged, stamps [][]byte, side int, chosen []int) ([]byte, error) {
	const scale, gap, columns, text = 4, 6, 5, 30
	cellW, cellH := 3*side*scale/2+2*gap+gap, side*scale/2+text+gap
	rows := (len(chosen) + columns - 1) / columns
	sheet := image.NewRGBA(image.Rect(0, 0, columns*cellW+gap, rows*cellH+gap))
	for i := range sheet.Pix {
		sheet.Pix[i] = 255
	}
	for k, i := range chosen {
		x0, y0 := gap+k%columns*cellW, gap+k/columns*cellH
		if len(stamps[i]) == 3*side*side {
			for plane := range 3 {
				for v := range side * scale / 2 {
					for u := range side * scale / 2 {
						// Rows from the lowest y, as frames are shown.
						g := stamps[i][plane*side*side+(side-1-v*2/scale)*side+u*2/scale]
						sheet.Set(x0+plane*(side*scale/2+2)+u, y0+v, color.Gray{Y: g})
					}
				}
			}
		}
		e := &list[i]
		word, c := "bogus", color.RGBA{R: 170, A: 255}
		if e.Real {
			word, c = "real", color.RGBA{G: 110, A: 255}
		}
		label := func(line int, s string) {
			d := font.Drawer{Dst: sheet, Src: image.NewUniform(c), Face: basicfont.Face7x13, Dot: fixed.P(x0, y0+side*scale/2+13*(line+1))}
			if most := (cellW - gap) / 7; len(s) > most {
				s = s[:most]
			}
			d.DrawString(s)
		}
		label(0, fmt.Sprintf("%s p %.3f S %.1f", word, e.P, e.Significance))
		label(1, e.Place)
	}
	var b bytes.Buffer
	if err := png.Encode(&b, sheet); err != nil {
		return nil, fmt.Errorf("sheet of mistakes: %w", err)
	}
	return b.Bytes(), nil
}
