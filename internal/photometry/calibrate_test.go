package photometry

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// invented returns stars that obey the equation, with errors and a scatter.
func invented(n int, zero, term, scatter float64, seed uint64) []Measured {
	r := rand.New(rand.NewPCG(seed, 1))
	list := make([]Measured, n)
	for i := range list {
		m := &list[i]
		m.Colour = 0.7 + 0.4*r.NormFloat64()
		m.MagErr = 0.003 + 0.01*r.Float64()
		natural := 15 + 4*r.Float64()
		flux := math.Pow(10, -0.4*(natural-zero))
		m.FluxErr = math.Sqrt(flux/1.5 + 2500)
		m.Flux = flux + m.FluxErr*r.NormFloat64()
		m.Mag = natural + term*m.Colour + math.Hypot(m.MagErr, scatter)*r.NormFloat64()
	}
	return list
}

func TestCalibrateRecoversTheTruth(t *testing.T) {
	for _, c := range []struct {
		name     string
		settings Settings
		term     float64
		bad      int
	}{
		{"no colour", Settings{MinStars: 5, MaxScatter: 0.2}, 0, 0},
		{"fixed term", Settings{MinStars: 5, MaxScatter: 0.2, ColourTerm: 0.05}, 0.05, 0},
		{"fitted term", Settings{MinStars: 5, MaxScatter: 0.2, FitColour: true}, 0.05, 0},
		{"fitted, one in eight variable", Settings{MinStars: 5, MaxScatter: 0.2, FitColour: true}, -0.08, 8},
		{"at another colour", Settings{MinStars: 5, MaxScatter: 0.2, FitColour: true, SourceColour: 0.5}, 0.1, 0},
	} {
		t.Run(c.name, func(t *testing.T) {
			// Pulls over many frames: the error is what it says.
			const frames = 400
			var sum, square, termSquare, scatter float64
			for k := range frames {
				list := invented(60, 26.3, c.term, 0.01, uint64(k)+100)
				for i := range list {
					if c.bad > 0 && i%c.bad == 0 {
						list[i].Mag -= 0.8
					}
				}
				r := Calibrate(list, c.settings)
				if r.Refusal != "" {
					t.Fatalf("refused: %s", r.Refusal)
				}
				pull := (r.ZeroPoint - 26.3 - c.term*c.settings.SourceColour) / r.Err
				sum, square, scatter = sum+pull, square+pull*pull, scatter+r.Scatter/frames
				if c.settings.FitColour {
					p := (r.ColourTerm - c.term) / r.ColourTermErr
					termSquare += p * p
				}
				if r.Stars+r.Clipped != 60 || c.bad > 0 && r.Clipped < 8 {
					t.Errorf("%d stars, %d clipped", r.Stars, r.Clipped)
				}
			}
			mean, spread := sum/frames, math.Sqrt(square/frames)
			t.Logf("pull %.3f ± %.3f, term %.3f, scatter %.4f", mean, spread, math.Sqrt(termSquare/frames), scatter)
			// The errors of 400 pulls: 0.05 of the mean, 0.035 of the spread; a
			// scatter that is estimated broadens them by a few per cent.
			if math.Abs(mean) > 0.2 || spread < 0.88 || spread > 1.15 {
				t.Errorf("zero point: mean pull %.3f, spread %.3f; want 0 and 1", mean, spread)
			}
			if c.settings.FitColour && (termSquare/frames < 0.78 || termSquare/frames > 1.32) {
				t.Errorf("colour term: pulls spread by %.3f", math.Sqrt(termSquare/frames))
			}
			if math.Abs(scatter-0.01) > 0.001 {
				t.Errorf("scatter %.4f, want 0.01", scatter)
			}
		})
	}
}

// The last fit is a weighted linear one: scipy.optimize.curve_fit on the same
// stars with the same errors gives the same values and covariance.
func TestFitAgainstSciPy(t *testing.T) {
	list := invented(80, 25.1, 0.06, 0.015, 7)
	s := Settings{MinStars: 5, MaxScatter: 0.2, FitColour: true, SourceColour: 0.3}
	r := Calibrate(list, s)
	if r.Refusal != "" || r.Clipped != 0 || !r.FittedColour {
		t.Fatalf("%+v: the test wants all stars", r)
	}
	if math.Abs(r.ChiSquare-float64(r.Stars-2)) > 1e-3 {
		t.Errorf("chi-square %.6f with %d stars: the scatter is not the one that makes it the degrees of freedom", r.ChiSquare, r.Stars)
	}
	type row struct{ Mag, MagErr, Colour, Flux, FluxErr float64 }
	var rows []row
	for _, m := range list {
		rows = append(rows, row{m.Mag, m.MagErr, m.Colour - s.SourceColour, m.Flux, m.FluxErr})
	}
	data, err := json.Marshal(map[string]any{"rows": rows, "scatter": r.Scatter})
	if err != nil {
		t.Fatal(err)
	}
	var got struct {
		Fit []float64
		Cov [][]float64
	}
	out := outside.Python(t, `
import json, sys
import numpy as np
from scipy.optimize import curve_fit
d = json.loads(sys.argv[1])
v = {k: np.array([r[k] for r in d["rows"]]) for k in d["rows"][0]}
y = v["Mag"] + 2.5 * np.log10(v["Flux"])
e = np.sqrt((2.5 / np.log(10) * v["FluxErr"] / v["Flux"])**2 + v["MagErr"]**2 + d["scatter"]**2)
fit, cov = curve_fit(lambda c, a, b: a + b * c, v["Colour"], y, p0=[25, 0], sigma=e, absolute_sigma=True)
print(json.dumps({"Fit": fit.tolist(), "Cov": cov.tolist()}))
`, string(data))
	if err := json.Unmarshal(out, &got); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name      string
		ours, his float64
		tolerance float64
	}{
		{"zero point", r.ZeroPoint, got.Fit[0], 1e-6},
		{"colour term", r.ColourTerm, got.Fit[1], 1e-6},
		{"its error", r.Err, math.Sqrt(got.Cov[0][0]), 1e-7},
		{"error of the term", r.ColourTermErr, math.Sqrt(got.Cov[1][1]), 1e-7},
		{"covariance", r.Covariance, got.Cov[0][1], 1e-9},
	} {
		if math.Abs(c.ours-c.his) > c.tolerance {
			t.Errorf("%s: %.10g, scipy %.10g", c.name, c.ours, c.his)
		}
	}
}

func TestCalibrateRefuses(t *testing.T) {
	with := func(change func(i int, m *Measured)) []Measured {
		list := invented(30, 25, 0, 0.01, 3)
		for i := range list {
			change(i, &list[i])
		}
		return list
	}
	s := DefaultSettings()
	term := s
	term.ColourTerm = 0.1
	wild := rand.New(rand.NewPCG(5, 5))
	for _, c := range []struct {
		name     string
		list     []Measured
		settings Settings
		want     string
	}{
		{"none", nil, s, "0 stars"},
		{"few", invented(4, 25, 0, 0.01, 1), s, "4 stars with a flux and a magnitude, want 5"},
		{"no flux", with(func(_ int, m *Measured) { m.Flux = -1 }), s, "0 stars"},
		{"no colours", with(func(_ int, m *Measured) { m.Colour = math.NaN() }), term, "30 have no colour"},
		{"other stars", with(func(_ int, m *Measured) { m.Mag = 15 + 6*wild.Float64() }), s, "scatter"},
	} {
		r := Calibrate(c.list, c.settings)
		if !strings.Contains(r.Refusal, c.want) || !math.IsNaN(r.ZeroPoint) || !math.IsNaN(r.Err) {
			t.Errorf("%s: refusal %q, zero point %v; want %q and none", c.name, r.Refusal, r.ZeroPoint, c.want)
		}
	}
}

// Without enough colours the term is not fitted, and the result says so.
func TestColourTermNeedsColours(t *testing.T) {
	s := DefaultSettings()
	s.FitColour = true
	for _, c := range []struct {
		name string
		n    int
		one  float64
		want string
	}{{"few", 19, math.NaN(), "19 stars have a colour"}, {"narrow", 40, 0.7, "spread over"}} {
		list := invented(c.n, 25, 0, 0.01, 9)
		for i := range list {
			if c.one == c.one {
				list[i].Colour = c.one + 0.001*float64(i%7)
			}
		}
		r := Calibrate(list, s)
		if r.Refusal != "" || r.FittedColour || r.ColourTerm != 0 || !strings.Contains(r.Note, c.want) || math.Abs(r.ZeroPoint-25) > 5*r.Err {
			t.Errorf("%s: %+v; want a zero point of 25, and %q", c.name, r, c.want)
		}
	}
}

func TestFewStars(t *testing.T) {
	for n := 5; n < 12; n++ {
		var square float64
		const frames = 500
		refused := 0
		for k := range frames {
			r := Calibrate(invented(n, 25, 0, 0.02, uint64(1000*n+k)), DefaultSettings())
			if r.Refusal != "" {
				refused++
				continue
			}
			square += (r.ZeroPoint - 25) * (r.ZeroPoint - 25) / (r.Err * r.Err) / frames
		}
		if refused > frames/50 {
			t.Errorf("%d good stars: refused %d of %d times", n, refused, frames)
		}
		t.Logf("%d stars: refused %d of %d, squared pulls %.2f", n, refused, frames, square)
		// Student's t with n-1 degrees of freedom has the variance (n-1)/(n-3).
		if want := float64(n-1) / float64(n-3); square > 1.6*want {
			t.Errorf("%d stars: squared pulls have the mean %.2f, Student's t gives %.2f", n, square, want)
		}
	}
}
