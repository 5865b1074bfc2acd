package reference

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/internal/astro"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/robust"
	"nightsift/internal/wcs"
)

// describe looks at the headers of all frames and leaves out what they rule out.
func describe(paths []string, cfg *Config) ([]*candidate, error) {
	var list []*candidate
	for _, path := range paths {
		n := math.NaN()
		c := &candidate{Input: Input{Name: load.Stem(path), Path: path, MidMJD: n, Exposure: n, RA: n, Dec: n, Gain: n, ReadNoise: n, Saturation: n, ZeroPoint: n,
			FWHM: n, Roundness: n, Sky: n, Noise: n, Depth: n, Scale: n, ScaleErr: n, RMS: n, GridFWHM: n, GridNoise: n, Share: n}}
		list = append(list, c)
		d, err := load.Describe(path, cfg.Keywords)
		var p *frame.Problem
		if errors.As(err, &p) {
			c.leaveFor(p)
			continue
		} else if err != nil {
			return nil, err
		}
		m := d.Meta
		c.Name, c.Filter, c.Field, c.MidMJD, c.Exposure = d.Name, m.Filter, m.Field, m.MidMJD, m.Exposure
		c.Width, c.Height = d.Width, d.Height
		date := func(mjd float64) string { return astro.MJDToISO(mjd) }
		switch dated := !math.IsNaN(cfg.Before) || !math.IsNaN(cfg.After); {
		case cfg.Field != "" && !sameName(c.Field, cfg.Field):
			c.leave(ReasonOtherField, fmt.Sprintf("its header names the field %q, wanted is %q", c.Field, cfg.Field))
		case dated && math.IsNaN(c.MidMJD):
			c.leave(ReasonNoTime, "its header has no time, so it cannot be told whether it is within the dates asked for")
		case c.MidMJD >= cfg.Before:
			c.leave(ReasonTooLate, fmt.Sprintf("taken %s, wanted are frames before %s", date(c.MidMJD), date(cfg.Before)))
		case c.MidMJD < cfg.After:
			c.leave(ReasonTooEarly, fmt.Sprintf("taken %s, wanted are frames after %s", date(c.MidMJD), date(cfg.After)))
		}
	}
	inOrder(list)
	// The filter that most frames have.
	count := map[string]int{}
	for _, c := range list {
		if c.Reason == "" {
			count[canonical(c.Filter)]++
		}
	}
	filter, most := "", 0
	for _, c := range list {
		if n := count[canonical(c.Filter)]; c.Reason == "" && c.Filter != "" && n > most {
			filter, most = c.Filter, n
		}
	}
	for _, c := range list {
		if c.Reason == "" && !cfg.Align.AnyFilter && c.Filter != "" && !sameName(c.Filter, filter) {
			c.leave(frame.ProblemWrongFilter, fmt.Sprintf("taken through filter %q, most others through %q", c.Filter, filter))
		}
	}
	return list, nil
}

func canonical(s string) string      { return strings.ToLower(strings.Join(strings.Fields(s), " ")) }
func sameName(a, b string) bool      { return canonical(a) == canonical(b) }
func (c *candidate) remaining() bool { return c.Reason == "" }

func remaining(list []*candidate) []*candidate {
	var out []*candidate
	for _, c := range list {
		if c.remaining() {
			out = append(out, c)
		}
	}
	return out
}

// leaveDuplicates keeps one of the frames that are the same exposure: equal
// pixels, or one time and one pointing. The best of each group stays.
func leaveDuplicates(list []*candidate) {
	left := remaining(list)
	for i, a := range left {
		for _, b := range left[:i] {
			if !b.remaining() || !a.remaining() {
				continue
			}
			why := ""
			switch {
			case a.Pixels != "" && a.Pixels == b.Pixels:
				why = "its pixels are those of "
			case math.Abs(a.MidMJD-b.MidMJD)*86400 < 0.5 && a.Exposure == b.Exposure && a.Width == b.Width && a.Height == b.Height &&
				wcs.Separation(a.RA, a.Dec, b.RA, b.Dec)*3600 < 5:
				why = "it has the time and pointing of "
			default:
				continue
			}
			worse, better := a, b
			if a.Depth > b.Depth {
				worse, better = b, a
			}
			worse.leave(ReasonDuplicate, why+better.Name+" ("+better.Path+")")
		}
	}
}

// leavePoor leaves out what is trailed or much wider than the others.
func leavePoor(list []*candidate, cfg *Config) {
	scaled := allScaled(remaining(list))
	var widths []float64
	for _, c := range remaining(list) {
		if c.FWHM > 0 {
			widths = append(widths, c.width(scaled))
		}
	}
	typical := robust.Median(widths)
	for _, c := range remaining(list) {
		switch w := c.width(scaled); {
		case !(w > 0):
			c.leave(frame.ProblemTooFewStars, "its stars do not allow to measure their width")
		case c.Roundness < cfg.MinRoundness:
			c.leave(ReasonTrailed, fmt.Sprintf("its stars are %.2f times as long as wide (width over length %.2f, wanted at least %.2f)", 1/c.Roundness, c.Roundness, cfg.MinRoundness))
		case w > cfg.MaxWidthRatio*typical:
			c.leave(ReasonWide, fmt.Sprintf("its stars are %.2f times as wide as is usual among these frames (accepted %.2f times)", w/typical, cfg.MaxWidthRatio))
		}
	}
}

// allScaled reports whether the scale of all frames is known, so that their widths
// can be compared in arcsec.
func allScaled(list []*candidate) bool {
	return !slices.ContainsFunc(list, func(c *candidate) bool { return c.wcs == nil })
}

// width is the width in arcsec if it is to be scaled, else in pixels.
func (c *candidate) width(scaled bool) float64 {
	if scaled {
		return c.FWHM * c.wcs.PixelScale()
	}
	return c.FWHM
}

// leaveBright leaves out frames taken while something in them was bright.
func leaveBright(list []*candidate, cfg *Config) {
	for _, e := range cfg.Exclude {
		for _, c := range remaining(list) {
			if math.IsNaN(c.MidMJD) || c.MidMJD < e.From || c.MidMJD > e.To {
				continue
			}
			if c.wcs != nil {
				x, y, err := c.wcs.SkyToPixel(e.RA, e.Dec)
				const margin = 60 // px, by which a header may be wrong
				if err != nil || x < -margin || y < -margin || x > float64(c.Width)+margin || y > float64(c.Height)+margin {
					continue
				}
			}
			c.leave(ReasonExcluded, fmt.Sprintf("%s was bright from %s to %s", e.Name, astro.MJDToISO(e.From), astro.MJDToISO(e.To)))
		}
	}
}

// leaveShallow leaves out what adds next to nothing, and what is beyond the
// number wanted.
func leaveShallow(list []*candidate, cfg *Config) {
	left := remaining(list)
	slices.SortStableFunc(left, func(a, b *candidate) int { return cmp.Compare(b.Share, a.Share) })
	if len(left) == 0 {
		return
	}
	best := left[0]
	for i, c := range left {
		switch {
		case c.Anchor:
		case !(c.Share >= cfg.LeastShare*best.Share):
			c.leave(ReasonShallow, fmt.Sprintf("it holds %.2g %% of the information on a faint star that %s holds (wanted at least %.2g %%): cloud, bright sky or bad seeing", 100*c.Share/best.Share, best.Name, 100*cfg.LeastShare))
		case cfg.MaxFrames > 0 && i >= cfg.MaxFrames:
			c.leave(ReasonSurplus, fmt.Sprintf("the %d best were asked for, it is number %d", cfg.MaxFrames, i+1))
		}
	}
}
