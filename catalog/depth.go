package catalog

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/detect"
)

// Look is one searched frame over a position, and what a source of a given
// magnitude there would have given on it. Unknown numbers are NaN.
type Look struct {
	Frame FrameRecord
	// ExpectedSNR is 5·10^(0.4(limit-mag)), with the frame's limit for 5 sigma:
	// right where the sky's noise dominates, too high for a source that is
	// bright against the sky.
	ExpectedSNR float64
	// Chance is the probability that the frame would have found it. With the
	// magnitude at which half of all sources are found measured on the frame,
	// whose expected significance is s50, it is Φ(ExpectedSNR - s50): the
	// significance of a source scatters by 1 about its expectation. NaN where
	// that magnitude was not measured.
	Chance float64
}

// Depth is when and how deep a position was searched.
type Depth struct {
	RA, Dec float64 // deg
	Mag     float64 // of the source in question; NaN for none
	Looks   []Look  // by time, unknown times last
}

// Depth tells how a position [deg] was searched, in one filter or (empty) in all,
// and what a source of magnitude mag (NaN for none) would have given.
func (s *Store) Depth(ctx context.Context, ra, dec float64, filter string, mag float64) (*Depth, error) {
	frames, err := s.SearchedAt(ctx, ra, dec)
	if err != nil {
		return nil, err
	}
	d := &Depth{RA: ra, Dec: dec, Mag: mag}
	for i := range frames {
		f := &frames[i]
		if filter != "" && f.Filter != filter {
			continue
		}
		l := Look{Frame: *f, ExpectedSNR: expectedSNR(f.MagLimit5Sigma, mag)}
		l.Chance = math.Erfc(-(l.ExpectedSNR-expectedSNR(f.MagLimit5Sigma, f.Efficiency50))/math.Sqrt2) / 2
		d.Looks = append(d.Looks, l)
	}
	slices.SortStableFunc(d.Looks, func(a, b Look) int { return compareTimes(a.Frame.MidMJD, b.Frame.MidMJD) })
	return d, nil
}

func expectedSNR(limit, mag float64) float64 { return 5 * math.Pow(10, 0.4*(limit-mag)) }

// FoundAtLeastOnce is the probability that at least one look would have found
// the source, if their noise is independent; looks without a known chance count
// as none. known is the number of the others.
func (d *Depth) FoundAtLeastOnce() (chance float64, known int) {
	missed := 1.0
	for i := range d.Looks {
		if c := d.Looks[i].Chance; !math.IsNaN(c) {
			missed *= 1 - c
			known++
		}
	}
	return 1 - missed, known
}

var depthColumns = []Column{
	{"mid_mjd", "d", "middle of the exposure, MJD UTC", detect.Real},
	{"night", "", "date of the evening", detect.Text},
	{"field", "", "field of the frame", detect.Text},
	{"frame", "", "name of the frame", detect.Text},
	{"filter", "", "filter of the frame", detect.Text},
	{"exposure_s", "s", "exposure time", detect.Real},
	{"fwhm_px", "pixel", "width of the point-spread function", detect.Real},
	{"mag_limit_5sigma", "mag", "point source of 5 sigma", detect.Real},
	{"efficiency_50_mag", "mag", "half of all sources are found here", detect.Real},
	{"expected_snr", "", "expected significance of the source asked for", detect.Real},
	{"chance", "", "probability that the frame would have found it", detect.Real},
}

// Sheet returns the looks as a table.
func (d *Depth) Sheet() *Sheet {
	s := newSheet("depth", depthColumns)
	for i := range d.Looks {
		l := &d.Looks[i]
		f := &l.Frame
		for k, v := range []any{f.MidMJD, f.Night, f.Field, f.Frame, f.Filter, f.Exposure, f.FWHM, f.MagLimit5Sigma, f.Efficiency50, l.ExpectedSNR, l.Chance} {
			s.Columns[k].append(v)
		}
	}
	s.Rows = len(d.Looks)
	return s
}

// Describe says it for people.
func (d *Depth) Describe() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%.6f %+.6f deg (ICRS): ", d.RA, d.Dec)
	if len(d.Looks) == 0 {
		b.WriteString("never searched, on no frame whose footprint is known\n")
		return b.String()
	}
	nights := map[string]bool{}
	filters := map[string]float64{}
	for i := range d.Looks {
		f := &d.Looks[i].Frame
		nights[f.Night] = true
		if deepest, ok := filters[f.Filter]; !ok || !(deepest >= f.MagLimit5Sigma) {
			filters[f.Filter] = f.MagLimit5Sigma
		}
	}
	first, last := &d.Looks[0].Frame, &d.Looks[len(d.Looks)-1].Frame
	fmt.Fprintf(&b, "searched on %s in %s, MJD %s to %s\n", count(len(d.Looks), "frame"), count(len(nights), "night"),
		number("%.4f", first.MidMJD), number("%.4f", last.MidMJD))
	names := make([]string, 0, len(filters))
	for name := range filters {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		fmt.Fprintf(&b, "deepest in filter %s: 5 sigma at %s mag\n", dash(name), number("%.3f", filters[name]))
	}
	if math.IsNaN(d.Mag) {
		return b.String()
	}
	best := math.NaN()
	for i := range d.Looks {
		if snr := d.Looks[i].ExpectedSNR; !(best >= snr) && !math.IsNaN(snr) {
			best = snr
		}
	}
	fmt.Fprintf(&b, "a source of %g mag: up to %s sigma expected on a frame; ", d.Mag, number("%.1f", best))
	if chance, known := d.FoundAtLeastOnce(); known > 0 {
		fmt.Fprintf(&b, "found at least once with probability %.4f, by %s with a measured efficiency\n", chance, count(known, "frame"))
	} else {
		b.WriteString("no frame has a measured efficiency\n")
	}
	return b.String()
}
