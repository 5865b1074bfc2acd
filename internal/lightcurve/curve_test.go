package lightcurve

import (
	"bytes"
	"image/png"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/internal/outside"
)

// invented makes a light curve of a night every two days in two filters: a
// triangle of light that starts at day 60, over a reference that holds `held`.
func invented(seed uint64, held float64) []Point {
	r := rand.New(rand.NewPCG(seed, 3))
	var points []Point
	for day := 0.0; day < 120; day += 2 {
		for k, filter := range []string{"g", "r"} {
			p := unmeasured(Measured, "")
			p.Filter, p.Reference, p.MidMJD, p.Frame = filter, "ref-"+filter, 61000+day+0.01*float64(k), "f"
			p.ZeroPoint, p.ZeroError = 24+0.5*float64(k), 0.01
			scale := math.Pow(10, -0.4*(p.ZeroPoint-FluxZeroPoint))
			light := max(0, 100*(1-math.Abs(day-78)/18)) - held
			p.Counts, p.CountsErr = (light+3*r.NormFloat64())/scale, 3/scale
			points = append(points, p)
		}
	}
	return points
}

func TestBaseline(t *testing.T) {
	var pulls []float64
	for seed := range uint64(40) {
		c := New("", 10, 20, invented(seed, 30), DefaultConfig())
		if len(c.Baselines) != 2 {
			t.Fatalf("%d baselines; notes %q", len(c.Baselines), c.Notes)
		}
		for _, b := range c.Baselines {
			pulls = append(pulls, (b.Flux+30)/b.Err)
			if b.ToMJD > 61000+60-10 {
				t.Errorf("baseline to MJD %.1f: the source starts at 61060", b.ToMJD)
			}
		}
		first, limits := math.Inf(1), 0
		for i := range c.Points {
			p := &c.Points[i]
			if p.Mag == p.Mag {
				first = min(first, p.MidMJD)
				if p.MagLimit == p.MagLimit {
					t.Fatal("a detection has a limit")
				}
			} else if p.MagLimit == p.MagLimit {
				limits++
			}
		}
		if limits < 60 {
			t.Errorf("%d limits", limits)
		}
	}
	var square float64
	for _, p := range pulls {
		square += p * p
	}
	if s := math.Sqrt(square / float64(len(pulls))); math.Abs(s-1) > 0.3 {
		t.Errorf("pulls of the baseline spread by %.2f", s)
	}
	// Named dates are used as they are; without a quiet time nothing is taken off.
	cfg := DefaultConfig()
	cfg.BaselineFrom, cfg.BaselineTo = 61000, 61009
	if c := New("", 10, 20, invented(1, 30), cfg); len(c.Baselines) != 2 || c.Baselines[0].Frames != 5 {
		t.Errorf("named dates: %+v", c.Baselines)
	}
	late := slices.DeleteFunc(invented(1, 0), func(p Point) bool { return p.MidMJD < 61050 })
	if c := New("", 10, 20, late, DefaultConfig()); len(c.Baselines) != 0 || len(c.Notes) != 1 {
		t.Errorf("no quiet time: %+v, %q", c.Baselines, c.Notes)
	}
}

func TestMagnitudes(t *testing.T) {
	p := unmeasured(Measured, "")
	p.MidMJD, p.ZeroPoint, p.ZeroError, p.Counts, p.CountsErr = 61000, 27, 0.02, 1000, 20
	q := p
	q.Counts, q.MidMJD = -30, 61001
	cfg := DefaultConfig()
	cfg.NoBaseline = true
	c := New("", 0, 0, []Point{q, p}, cfg)
	// 1000 counts at a zero point of 27 are magnitude 19.5; the errors add up to √(0.02171² + 0.02²).
	if d := c.Points[0]; math.Abs(d.Mag-19.5) > 1e-9 || math.Abs(d.MagErr-math.Hypot(0.0217147, 0.02)) > 1e-6 || d.MagLimit == d.MagLimit {
		t.Errorf("%+v", d)
	}
	// Nothing there: 3·20 counts are magnitude 27 − 2.5 log10(60).
	if d := c.Points[1]; math.Abs(d.MagLimit-(27-2.5*math.Log10(60))) > 1e-9 || d.Mag == d.Mag {
		t.Errorf("%+v", d)
	}
	p.ZeroPoint = math.NaN()
	if c := New("", 0, 0, []Point{p}, cfg); c.Points[0].Flux == c.Points[0].Flux || len(c.Notes) != 1 {
		t.Errorf("without a zero point: %+v %q", c.Points[0], c.Notes)
	}
}

func TestTablesAndPlots(t *testing.T) {
	points := append(invented(2, 0), NoFile(math.NaN(), "r"))
	c := New("NS J004000.00+200000.0", 10, 20, points, DefaultConfig())
	s := c.Sheet()
	dir := t.TempDir()
	for _, f := range catalog.Formats {
		if err := f.Write(filepath.Join(dir, "lc."+f.Name), s); err != nil {
			t.Errorf("%s: %v", f.Name, err)
		}
	}
	out := outside.Python(t, `
import sys
from astropy.table import Table
t = Table.read(sys.argv[1])
c = Table.read(sys.argv[2], format="ascii.csv")
print(len(t), len(c), t["mag"].unit, t["mid_mjd"].unit, repr(float(t["flux"][3])), repr(float(c["flux"][3])), (t["status"] == "missing").sum())
`, filepath.Join(dir, "lc.fits"), filepath.Join(dir, "lc.csv"))
	f := strings.Fields(string(out))
	if len(f) != 7 || f[0] != "121" || f[1] != "121" || f[2] != "mag" || f[3] != "d" || f[4] != f[5] || f[6] != "1" {
		t.Errorf("astropy reads %q", f)
	}
	lines := []Line{{Filter: "g", From: 61060, To: 61100, Flux: func(mjd float64) float64 { return 50 }}}
	for _, name := range []string{"a.png", "a.svg", "b.png", "b.svg"} {
		if err := c.WritePlot(filepath.Join(dir, name), lines); err != nil {
			t.Fatal(err)
		}
	}
	read := func(name string) []byte {
		data, err := os.ReadFile(filepath.Join(dir, name))
		if err != nil {
			t.Fatal(err)
		}
		return data
	}
	if img, err := png.Decode(bytes.NewReader(read("a.png"))); err != nil || img.Bounds().Dx() < 400 {
		t.Errorf("PNG: %v", err)
	}
	if !bytes.Contains(read("a.svg"), []byte("<svg")) || !bytes.Equal(read("a.svg"), read("b.svg")) || !bytes.Equal(read("a.png"), read("b.png")) {
		t.Error("a plot drawn twice differs, or is no SVG")
	}
	if err := c.WritePlot(filepath.Join(dir, "a.gif"), nil); err == nil || !strings.Contains(err.Error(), ".png, .svg") {
		t.Errorf("an unknown ending: %v", err)
	}
	if err := New("", 0, 0, nil, DefaultConfig()).WritePlot(filepath.Join(dir, "c.png"), nil); err == nil {
		t.Error("an empty curve was drawn")
	}
}
