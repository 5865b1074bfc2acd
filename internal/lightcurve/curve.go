// Package lightcurve measures the brightness at one fixed place on all
// differences of a survey, whether anything was detected there or not (forced
// photometry), puts the frames on one scale, takes off the light that the
// reference holds, and shows the result as a table and as a plot.
package lightcurve

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// Config says how a light curve is made. Start from DefaultConfig.
type Config struct {
	MaxLost        float64 // largest share of the squared PSF on unusable pixels
	DetectionSigma float64 // from so many errors on a flux is shown as a magnitude
	LimitSigma     float64 // of upper limits

	// The baseline is the mean flux, by filter and reference, of the frames
	// from BaselineFrom to BaselineTo [MJD]. Where these are NaN it is taken
	// from the nights that end BaselineGap days before the first detection, if
	// there are BaselineNights of them.
	NoBaseline               bool
	BaselineFrom, BaselineTo float64
	BaselineGap              float64 // d
	BaselineNights           int
}

// DefaultConfig returns limits of three sigma, frames of which at least half of
// the footprint is good, and an automatic baseline of the nights that end 20
// days, the rise of a type Ia supernova, before the first detection.
func DefaultConfig() Config {
	n := math.NaN()
	return Config{MaxLost: 0.5, DetectionSigma: 3, LimitSigma: 3, BaselineFrom: n, BaselineTo: n, BaselineGap: 20, BaselineNights: 2}
}

// Baseline is the mean flux of a filter and reference without the source.
type Baseline struct {
	Filter, Reference string
	Flux, Err         float64 // on the scale of Point.Flux; Err grows with the scatter
	Frames            int
	FromMJD, ToMJD    float64
	Chi2              float64 // of the frames about the mean, per degree of freedom; NaN for one
}

// Curve is the light curve of one place.
type Curve struct {
	Name      string // of the object; empty for a bare place
	RA, Dec   float64
	Points    []Point // by time, then frame
	Baselines []Baseline
	Notes     []string // what a reader should know, as sentences
}

// New puts points on one scale.
func New(name string, ra, dec float64, points []Point, cfg Config) *Curve {
	c := &Curve{Name: name, RA: ra, Dec: dec, Points: slices.Clone(points)}
	slices.SortStableFunc(c.Points, func(a, b Point) int {
		switch {
		case a.MidMJD < b.MidMJD || a.MidMJD == a.MidMJD && b.MidMJD != b.MidMJD:
			return -1
		case a.MidMJD > b.MidMJD || b.MidMJD == b.MidMJD && a.MidMJD != a.MidMJD:
			return 1
		}
		return strings.Compare(a.Night+"/"+a.Frame, b.Night+"/"+b.Frame)
	})
	unscaled := 0
	for i := range c.Points {
		p := &c.Points[i]
		if p.Status != Measured {
			continue
		}
		scale := math.Pow(10, -0.4*(p.ZeroPoint-FluxZeroPoint))
		if scale-scale != 0 {
			unscaled++
			continue
		}
		p.Flux, p.FluxErr = p.Counts*scale, p.CountsErr*scale
		p.Baseline, p.BaselineErr = 0, 0
	}
	if unscaled > 0 {
		c.Notes = append(c.Notes, fmt.Sprintf("%d frames have no zero point: their counts are given, but no flux and no magnitude", unscaled))
	}
	if !cfg.NoBaseline {
		c.takeBaseline(cfg)
	}
	for i := range c.Points {
		c.Points[i].finish(cfg)
	}
	return c
}

// finish computes magnitudes and limits, and adds the zero point's error.
func (p *Point) finish(cfg Config) {
	if !(p.FluxErr > 0) {
		return
	}
	err := math.Hypot(p.FluxErr, p.BaselineErr)
	if p.Flux >= cfg.DetectionSigma*err {
		p.Mag = FluxZeroPoint - 2.5*math.Log10(p.Flux)
	} else {
		p.MagLimit = FluxZeroPoint - 2.5*math.Log10(max(p.Flux, 0)+cfg.LimitSigma*err)
	}
	if p.ZeroError > 0 {
		p.FluxErr = math.Hypot(p.FluxErr, magPerRelative*p.ZeroError*p.Flux)
	}
	if p.Mag == p.Mag {
		p.MagErr = p.FluxErr / p.Flux / magPerRelative
	}
}

// magPerRelative is ln(10)/2.5: a relative error for one of magnitude.
const magPerRelative = 0.4 * math.Ln10

func (p *Point) scaled() bool {
	return p.Status == Measured && p.FluxErr > 0 && p.Flux-p.Flux == 0 && p.MidMJD == p.MidMJD
}

// takeBaseline finds and takes off the baselines.
func (c *Curve) takeBaseline(cfg Config) {
	type key struct{ filter, reference string }
	groups := map[key][]int{}
	var order []key
	for i := range c.Points {
		if p := &c.Points[i]; p.scaled() {
			k := key{p.Filter, p.Reference}
			if groups[k] == nil {
				order = append(order, k)
			}
			groups[k] = append(groups[k], i)
		}
	}
	slices.SortFunc(order, func(a, b key) int { return strings.Compare(a.filter+"\x00"+a.reference, b.filter+"\x00"+b.reference) })
	from, to := cfg.BaselineFrom, cfg.BaselineTo
	automatic := from != from || to != to
	if automatic {
		var all [][]int
		for _, k := range order {
			all = append(all, groups[k])
		}
		var why string
		if to, why = c.quietUntil(all, cfg); why != "" {
			c.Notes = append(c.Notes, "no baseline was taken off: "+why)
			return
		}
		from = math.Inf(-1)
	}
	for _, k := range order {
		b := Baseline{Filter: k.filter, Reference: k.reference, FromMJD: math.Inf(1), ToMJD: math.Inf(-1), Chi2: math.NaN()}
		var sum, weight, square float64
		nights := map[string]bool{}
		for _, i := range groups[k] {
			p := &c.Points[i]
			if p.MidMJD < from || p.MidMJD > to {
				continue
			}
			w := 1 / (p.FluxErr * p.FluxErr)
			sum, weight, square = sum+w*p.Flux, weight+w, square+w*p.Flux*p.Flux
			b.FromMJD, b.ToMJD = min(b.FromMJD, p.MidMJD), max(b.ToMJD, p.MidMJD)
			b.Frames++
			nights[nightOf(p)] = true
		}
		label := fmt.Sprintf("filter %q, reference %s", k.filter, k.reference)
		if b.Frames == 0 || automatic && len(nights) < cfg.BaselineNights {
			c.Notes = append(c.Notes, fmt.Sprintf("%s: no baseline was taken off: it has %d nights in the time before the source, want %d", label, len(nights), max(1, cfg.BaselineNights)))
			continue
		}
		b.Flux, b.Err = sum/weight, 1/math.Sqrt(weight)
		if b.Frames > 1 {
			b.Chi2 = max(0, square-sum*sum/weight) / float64(b.Frames-1)
			b.Err *= math.Sqrt(max(1, b.Chi2))
		}
		for _, i := range groups[k] {
			p := &c.Points[i]
			p.Flux -= b.Flux
			p.Baseline, p.BaselineErr = b.Flux, b.Err
		}
		c.Baselines = append(c.Baselines, b)
	}
}

// quietUntil returns the time up to which the source was not there yet: the gap
// before the first night on which any group of points stood above its level
// long before the brightest.
func (c *Curve) quietUntil(groups [][]int, cfg Config) (until float64, why string) {
	const (
		sigma  = 5  // of a night's mean above the level
		before = 40 // d before the brightest night: a first guess of the level
	)
	first, brightest := math.Inf(1), math.NaN()
	for _, g := range groups {
		n := c.nights(g)
		top := 0
		for i := range n {
			if n[i].flux > n[top].flux {
				top = i
			}
		}
		var level []float64
		for i := range n {
			if n[i].mjd < n[top].mjd-before {
				level = append(level, n[i].flux)
			}
		}
		if len(level) < cfg.BaselineNights {
			// Without a level of its own the group says nothing of the start.
			continue
		}
		base := robust.Median(level)
		brightest = n[top].mjd
		for i := range n {
			if n[i].flux-base > sigma*n[i].err {
				first = min(first, n[i].mjd)
				break
			}
		}
	}
	switch {
	case brightest != brightest:
		return 0, fmt.Sprintf("there are not %d nights earlier than %d days before the brightest", cfg.BaselineNights, before)
	case math.IsInf(first, 1):
		return 0, fmt.Sprintf("no night stands %d sigma above the others", sigma)
	}
	return first - cfg.BaselineGap, ""
}

// night is the weighted mean of a night's points of one group.
type night struct{ mjd, flux, err float64 }

func nightOf(p *Point) string {
	if p.Night != "" {
		return p.Night
	}
	return fmt.Sprintf("%.0f", p.MidMJD)
}

// nights joins points, which are in order of time.
func (c *Curve) nights(group []int) []night {
	var out []night
	last := ""
	var sum, weight, when float64
	flush := func() {
		if weight > 0 {
			out = append(out, night{when / weight, sum / weight, 1 / math.Sqrt(weight)})
		}
		sum, weight, when = 0, 0, 0
	}
	for _, i := range group {
		p := &c.Points[i]
		if n := nightOf(p); n != last {
			flush()
			last = n
		}
		w := 1 / (p.FluxErr * p.FluxErr)
		sum, weight, when = sum+w*p.Flux, weight+w, when+w*p.MidMJD
	}
	flush()
	return out
}

// lostReason says which flags took the footprint away.
func lostReason(lost float64, flags frame.Flag) string {
	text := fmt.Sprintf("%.0f %% of the footprint is on pixels that cannot be used", 100*lost)
	if bad := flags & excluded; bad != 0 {
		text += ": " + bad.String()
	}
	return text
}
