// Package score compares what a search found with what was there.
//
// It knows nothing of the pipeline: candidates come as plain values, the truth
// from package simulate. Fractions carry Wilson's binomial interval (Wilson 1927,
// JASA 22, 209), robust spreads their own statistical error.
package score

import (
	"fmt"
	"io"
	"math"
	"sort"
	"strings"

	"nightsift/internal/robust"
	"nightsift/internal/simulate"
)

// Found is one candidate of a search. Positions follow the FITS convention,
// fluxes are counts of the frame.
type Found struct {
	ID              string
	Frame           string
	X, Y            float64 // px
	XErr, YErr      float64 // px, 1 sigma
	Flux, FluxErr   float64 // count
	Significance    float64
	RealProbability float64
	Kind            string
}

// Status is what became of a frame.
type Status struct {
	Frame  string
	Status string // searched, set_aside or failed
	Reason string // slug
}

// Config says what counts as found.
type Config struct {
	Radius      float64 // px, always allowed between truth and candidate
	Sigmas      float64 // times the candidate's own position error, added to Radius
	Near        float64 // px: a candidate nearer than this to any event, or to the trail of one, is not false
	Probability float64 // least real probability of a candidate that counts
	Searchable  float64 // S/N above which events should be found
	Bright      float64 // S/N above which the flux bias is measured
	Pulls       float64 // S/N above which pulls are measured
	Limit       float64 // significance threshold of the search
}

// DefaultConfig returns the usual values.
func DefaultConfig() Config {
	return Config{Radius: 0.3, Sigmas: 4, Near: 6, Probability: 0.5, Searchable: 8, Bright: 20, Pulls: 10, Limit: 5}
}

// Fraction is k of n with the 68 % Wilson interval.
type Fraction struct {
	K, N             int
	Value, Low, High float64 // NaN, 0 and 1 when N is 0
}

// NewFraction makes a Fraction.
func NewFraction(k, n int) Fraction {
	f := Fraction{K: k, N: n, Value: math.NaN(), Low: 0, High: 1}
	if n == 0 {
		return f
	}
	f.Value = float64(k) / float64(n)
	f.Low, f.High = robust.Wilson(float64(k), float64(n), 1)
	return f
}

func (f Fraction) String() string {
	if f.N == 0 {
		return "none"
	}
	return fmt.Sprintf("%.1f %% (%d of %d, %.1f to %.1f)", 100*f.Value, f.K, f.N, 100*f.Low, 100*f.High)
}

// Spread describes a sample by median and robust spread, with errors.
type Spread struct {
	N                  int
	Median, MedianErr  float64
	Spread, SpreadErr  float64 // half the interval between the 15.87th and 84.13th percentile
	Beyond3, Expected3 float64 // fraction beyond three spreads, and that of a Gaussian
}

// NewSpread describes values; it sorts them. Fewer than 3 give NaN.
func NewSpread(v []float64) Spread {
	s := Spread{N: len(v), Median: math.NaN(), MedianErr: math.NaN(), Spread: math.NaN(), SpreadErr: math.NaN(), Expected3: 0.0027}
	if len(v) < 3 {
		return s
	}
	sort.Float64s(v)
	at := func(q float64) float64 {
		f := q * float64(len(v)-1)
		i := min(int(f), len(v)-2)
		return v[i] + (f-float64(i))*(v[i+1]-v[i])
	}
	n := float64(len(v))
	s.Median = at(0.5)
	s.Spread = (at(0.841345) - at(0.158655)) / 2
	s.MedianErr = 1.2533 * s.Spread / math.Sqrt(n)
	// Variance of a Gaussian's quantile: q(1-q)/(n φ²); the two are correlated by (1-q)/q.
	s.SpreadErr = s.Spread * math.Sqrt(0.1587*(1-2*0.1587)/2) / 0.24197 / math.Sqrt(n)
	for _, x := range v {
		if math.Abs(x-s.Median) > 3*s.Spread {
			s.Beyond3 += 1 / n
		}
	}
	return s
}

func (s Spread) String() string {
	if s.N < 3 {
		return fmt.Sprintf("too few (%d)", s.N)
	}
	return fmt.Sprintf("median %+.4f ± %.4f, spread %.3f ± %.3f (%d)", s.Median, s.MedianErr, s.Spread, s.SpreadErr, s.N)
}

// Outcome tells what became of one event on one frame.
type Outcome struct {
	simulate.Source
	Candidate *Found  // the nearest one of the same sign within reach; nil if none
	Distance  float64 // px to it
	Found     bool    // Candidate counts by its probability
	Reason    string  // why not found; empty when found
}

// Completeness is where half of the events are found, by a maximum-likelihood
// fit of Φ(S/N - a): a cut in significance at T gives a = T in Gaussian noise.
type Completeness struct {
	SN, SNErr   float64 // a
	Mag, MagErr float64 // 2.5 log10(a/limit): how much shallower than the analytic limit
	N           int     // events with S/N between limit-3 and limit+4
}

// Result is a comparison.
type Result struct {
	Config   Config
	Outcomes []Outcome
	False    []Found // counting candidates far from any event
	Area     float64 // Mpx searched

	Found        Fraction // events above Searchable, well inside, away from bad pixels, on searched frames
	Detected     Fraction // the same whatever the probability
	OnHosts      Fraction // Found of those with a host
	Masked       Fraction // Found of those on bad pixels
	FalsePerMpx  float64
	FalseErr     float64 // Poisson, at least that of one
	FluxBias     Spread  // (measured - true)/true above Bright
	FluxPulls    Spread  // (measured - true)/error above Pulls
	XPulls       Spread
	YPulls       Spread
	Half         Completeness // of counting candidates
	HalfDetected Completeness // whatever the probability
	Frames       []FrameVerdict
}

// FrameVerdict compares a frame's fate with what it should be.
type FrameVerdict struct {
	Frame, Expected, Status, Reason string
	OK                              bool // searched if good, set aside if bad
}

// The reasons for a miss.
const (
	ReasonBelow      = "below_limit"       // too faint to expect it
	ReasonMasked     = "on_masked_pixel"   // a bad pixel within one FWHM
	ReasonEdge       = "outside_common"    // at the edge or off the reference
	ReasonSetAside   = "frame_set_aside"   // the frame was not searched
	ReasonRejected   = "judged_not_real"   // detected, probability too low
	ReasonMisplaced  = "position_off"      // a candidate nearby, too far for its error
	ReasonUndetected = "not_detected"      // nothing there though it is bright enough
	ReasonUnlisted   = "frame_not_in_list" // the statuses do not name the frame
)

// Compare matches candidates with the truth, frame by frame. statuses may be nil:
// then every frame counts as searched. A candidate serves one event at most, the
// pair of least distance first.
func Compare(truth *simulate.Truth, found []Found, statuses []Status, cfg Config) *Result {
	r := &Result{Config: cfg}
	status := map[string]Status{}
	for _, s := range statuses {
		status[s.Frame] = s
	}
	searched := func(frame string) bool { return statuses == nil || status[frame].Status == "searched" }
	for _, f := range truth.Frames {
		v := FrameVerdict{Frame: f.Frame, Expected: f.Expected, Status: "searched"}
		if statuses != nil {
			v.Status, v.Reason = status[f.Frame].Status, status[f.Frame].Reason
			if v.Status == "" {
				v.Status = "missing"
			}
		}
		v.OK = (f.Expected == "") == (v.Status == "searched")
		if v.Status == "searched" {
			r.Area += f.Area
		}
		r.Frames = append(r.Frames, v)
	}
	byFrame := map[string][]int{}
	for i := range found {
		byFrame[found[i].Frame] = append(byFrame[found[i].Frame], i)
	}
	r.Outcomes = make([]Outcome, len(truth.Sources))
	type link struct {
		event, candidate int
		distance         float64
	}
	var links []link
	near := make([]bool, len(found)) // close to some event
	beside := make(map[int]float64)  // event to the nearest candidate's distance
	for k, s := range truth.Sources {
		r.Outcomes[k] = Outcome{Source: s, Distance: math.NaN()}
		for _, i := range byFrame[s.Frame] {
			c := &found[i]
			d := math.Hypot(c.X-s.X, c.Y-s.Y)
			if d < cfg.Near+s.Trail/2 {
				near[i] = true
				if b, ok := beside[k]; !ok || d < b {
					beside[k] = d
				}
			}
			reach := cfg.Radius + cfg.Sigmas*finite(math.Hypot(c.XErr, c.YErr)/math.Sqrt2) + s.Trail/4
			if d <= reach && (c.Flux < 0) == (s.Flux < 0) {
				links = append(links, link{k, i, d})
			}
		}
	}
	sort.Slice(links, func(a, b int) bool {
		// A candidate that counts goes before a nearer one that does not.
		pa := found[links[a].candidate].RealProbability >= cfg.Probability
		pb := found[links[b].candidate].RealProbability >= cfg.Probability
		if pa != pb {
			return pa
		}
		if links[a].distance != links[b].distance {
			return links[a].distance < links[b].distance
		}
		return links[a].event < links[b].event
	})
	taken := make([]bool, len(found))
	for _, l := range links {
		o := &r.Outcomes[l.event]
		if o.Candidate != nil || taken[l.candidate] {
			continue
		}
		taken[l.candidate] = true
		o.Candidate, o.Distance = &found[l.candidate], l.distance
		o.Found = o.Candidate.RealProbability >= cfg.Probability
	}
	var bias, flux, px, py []float64
	var k, n, kd, kh, nh, km, nm int
	var sn []float64
	var hit, seen []bool
	for i := range r.Outcomes {
		o := &r.Outcomes[i]
		o.Reason = reason(o, statuses != nil, status, searched(o.Frame), cfg, beside, i)
		if !searched(o.Frame) || !o.Covered {
			continue
		}
		if o.LocalSN > cfg.Searchable && o.Masked() {
			nm++
			if o.Found {
				km++
			}
		}
		if o.Masked() {
			continue
		}
		sn = append(sn, o.LocalSN)
		hit = append(hit, o.Found)
		seen = append(seen, o.Candidate != nil)
		if o.LocalSN > cfg.Searchable {
			n++
			if o.Found {
				k++
			}
			if o.Candidate != nil {
				kd++
			}
			if o.Host != "" {
				nh++
				if o.Found {
					kh++
				}
			}
		}
		if c := o.Candidate; c != nil && o.Trail < 0.5 {
			if o.LocalSN > cfg.Bright {
				bias = append(bias, (c.Flux-o.Flux)/o.Flux)
			}
			if o.LocalSN > cfg.Pulls {
				flux = append(flux, (c.Flux-o.Flux)/c.FluxErr)
				px = append(px, (c.X-o.X)/c.XErr)
				py = append(py, (c.Y-o.Y)/c.YErr)
			}
		}
	}
	r.Found, r.Detected = NewFraction(k, n), NewFraction(kd, n)
	r.OnHosts, r.Masked = NewFraction(kh, nh), NewFraction(km, nm)
	r.FluxBias, r.FluxPulls, r.XPulls, r.YPulls = NewSpread(bias), NewSpread(flux), NewSpread(px), NewSpread(py)
	r.Half, r.HalfDetected = half(sn, hit, cfg.Limit), half(sn, seen, cfg.Limit)
	for i, c := range found {
		if c.RealProbability >= cfg.Probability && !near[i] && !taken[i] {
			r.False = append(r.False, c)
		}
	}
	r.FalsePerMpx, r.FalseErr = math.NaN(), math.NaN()
	if r.Area > 0 {
		r.FalsePerMpx = float64(len(r.False)) / r.Area
		r.FalseErr = math.Sqrt(math.Max(1, float64(len(r.False)))) / r.Area
	}
	return r
}

func finite(v float64) float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return 0
	}
	return v
}

func reason(o *Outcome, listed bool, status map[string]Status, searched bool, cfg Config, beside map[int]float64, i int) string {
	switch {
	case o.Found:
		return ""
	case listed && status[o.Frame].Status == "":
		return ReasonUnlisted
	case !searched:
		return ReasonSetAside
	case o.Candidate != nil:
		return ReasonRejected
	case !o.Covered:
		return ReasonEdge
	case o.Masked():
		return ReasonMasked
	case o.LocalSN < cfg.Limit+2:
		return ReasonBelow
	}
	if _, ok := beside[i]; ok {
		return ReasonMisplaced
	}
	return ReasonUndetected
}

// half fits Φ(S/N - a) to hits by maximum likelihood.
func half(sn []float64, hit []bool, limit float64) Completeness {
	c := Completeness{SN: math.NaN(), SNErr: math.NaN(), Mag: math.NaN(), MagErr: math.NaN()}
	for _, s := range sn {
		if s > limit-3 && s < limit+4 {
			c.N++
		}
	}
	yes := 0
	for i, s := range sn {
		if s > limit-3 && s < limit+4 && hit[i] {
			yes++
		}
	}
	if yes == 0 || yes == c.N {
		return c
	}
	like := func(a float64) float64 {
		sum := 0.0
		for i, s := range sn {
			// Events far from the limit that are lost for other reasons do not pull
			// the fit: 2 % of all are allowed to be.
			p := 0.98*0.5*math.Erfc((a-s)/math.Sqrt2) + 0.001
			if !hit[i] {
				p = 1 - p
			}
			sum += math.Log(p)
		}
		return sum
	}
	best, at := math.Inf(-1), 0.0
	for a := limit - 4; a < limit+12; a += 0.1 {
		if l := like(a); l > best {
			best, at = l, a
		}
	}
	lo, hi := at-0.1, at+0.1
	for range 50 {
		a, b := lo+0.382*(hi-lo), lo+0.618*(hi-lo)
		if like(a) > like(b) {
			hi = b
		} else {
			lo = a
		}
	}
	c.SN = (lo + hi) / 2
	const h = 0.2
	curve := -(like(c.SN+h) - 2*like(c.SN) + like(c.SN-h)) / (h * h)
	if curve > 0 {
		c.SNErr = 1 / math.Sqrt(curve)
	}
	c.Mag = 2.5 * math.Log10(c.SN/limit)
	c.MagErr = 2.5 / math.Ln10 * c.SNErr / c.SN
	return c
}

// Sky describes the significance on empty sky.
type Sky struct {
	N        int     // pixels
	Mean     float64 // of values within six spreads
	Median   float64
	Spread   float64 // half the interval between the 15.87th and 84.13th percentile
	Above5   int     // pixels above +5
	Below5   int     // pixels below -5
	Gaussian float64 // expected on one side for independent N(0,1)
}

// EmptySky describes a plane of significances where empty is true; see
// simulate.Pairs.EmptySky. Pixels that are NaN or exactly zero, the value of
// flagged pixels, are left out. It panics when the lengths differ.
func EmptySky(significance []float32, empty []bool) Sky {
	if len(significance) != len(empty) {
		panic(fmt.Sprintf("score: %d pixels and a mask of %d", len(significance), len(empty)))
	}
	const reach, bins = 10.0, 20000
	var hist [bins]int
	s := Sky{Mean: math.NaN(), Median: math.NaN(), Spread: math.NaN()}
	for k, v := range significance {
		if !empty[k] || v != v || v == 0 {
			continue
		}
		s.N++
		if v > 5 {
			s.Above5++
		} else if v < -5 {
			s.Below5++
		}
		b := int((float64(v) + reach) * bins / (2 * reach))
		hist[min(bins-1, max(0, b))]++
	}
	s.Gaussian = float64(s.N) * 0.5 * math.Erfc(5/math.Sqrt2)
	if s.N == 0 {
		return s
	}
	quantile := func(q float64) float64 {
		want, sum := q*float64(s.N), 0.0
		for b, n := range hist {
			if sum+float64(n) >= want && n > 0 {
				return (float64(b)+(want-sum)/float64(n))*2*reach/bins - reach
			}
			sum += float64(n)
		}
		return reach
	}
	s.Median = quantile(0.5)
	s.Spread = (quantile(0.841345) - quantile(0.158655)) / 2
	sum, n := 0.0, 0
	for k, v := range significance {
		if empty[k] && v != 0 && math.Abs(float64(v)-s.Median) < 6*s.Spread {
			sum += float64(v)
			n++
		}
	}
	s.Mean = sum / float64(n)
	return s
}

func (s Sky) String() string {
	return fmt.Sprintf("mean %+.4f, spread %.4f, %d above +5 and %d below -5 (Gaussian %.2f each) of %d px",
		s.Mean, s.Spread, s.Above5, s.Below5, s.Gaussian, s.N)
}

// WriteText writes the comparison as a plain table.
func (r *Result) WriteText(w io.Writer) error {
	var b strings.Builder
	line := func(name, format string, args ...any) {
		fmt.Fprintf(&b, "%-34s %s\n", name, fmt.Sprintf(format, args...))
	}
	searched := 0
	for _, f := range r.Frames {
		if f.Status == "searched" {
			searched++
		}
	}
	line("frames searched", "%d of %d, %.2f Mpx", searched, len(r.Frames), r.Area)
	line(fmt.Sprintf("found, S/N > %g, p ≥ %g", r.Config.Searchable, r.Config.Probability), "%s", r.Found)
	line("  of those with a host", "%s", r.OnHosts)
	line("  whatever the probability", "%s", r.Detected)
	line("  on bad pixels", "%s", r.Masked)
	line("false per Mpx", "%.2f ± %.2f (%d)", r.FalsePerMpx, r.FalseErr, len(r.False))
	line(fmt.Sprintf("flux bias, S/N > %g", r.Config.Bright), "%s", percent(r.FluxBias))
	line(fmt.Sprintf("flux pull, S/N > %g", r.Config.Pulls), "%s", r.FluxPulls)
	line("x pull", "%s", r.XPulls)
	line("y pull", "%s", r.YPulls)
	line("half found at S/N", "%s", r.Half)
	line("half detected at S/N", "%s", r.HalfDetected)
	_, err := io.WriteString(w, b.String())
	return err
}

func percent(s Spread) string {
	if s.N < 3 {
		return s.String()
	}
	return fmt.Sprintf("%+.2f ± %.2f %% (%d)", 100*s.Median, 100*s.MedianErr, s.N)
}

func (c Completeness) String() string {
	if math.IsNaN(c.SN) {
		return fmt.Sprintf("not measured (%d events near the limit)", c.N)
	}
	return fmt.Sprintf("%.2f ± %.2f, %+.3f ± %.3f mag from the analytic limit (%d events near it)", c.SN, c.SNErr, c.Mag, c.MagErr, c.N)
}

// WriteEvents writes one line per event and frame with what became of it, then
// the false candidates and the frames with another fate than expected.
func (r *Result) WriteEvents(w io.Writer) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%-16s %-11s %-26s %7s %7s %8s %8s  %s\n", "event", "kind", "frame", "mag", "S/N", "x", "y", "outcome")
	for i := range r.Outcomes {
		o := &r.Outcomes[i]
		what := "found"
		switch {
		case o.Found:
			what = fmt.Sprintf("found %.1f sigma, p = %.2f, %.2f px off", o.Candidate.Significance, o.Candidate.RealProbability, o.Distance)
		case o.Candidate != nil:
			what = fmt.Sprintf("missed: %s, %.1f sigma, p = %.2f", o.Reason, o.Candidate.Significance, o.Candidate.RealProbability)
		default:
			what = "missed: " + o.Reason
		}
		fmt.Fprintf(&b, "%-16s %-11s %-26s %7.2f %7.1f %8.2f %8.2f  %s\n", o.ID, o.Kind, o.Frame, o.Mag, o.LocalSN, o.X, o.Y, what)
	}
	for _, f := range r.False {
		fmt.Fprintf(&b, "%-16s %-11s %-26s %7s %7.1f %8.2f %8.2f  p = %.2f\n", "false", f.Kind, f.Frame, "", f.Significance, f.X, f.Y, f.RealProbability)
	}
	for _, f := range r.Frames {
		if f.Status == "searched" && f.OK {
			continue
		}
		verdict := "as it should be"
		if !f.OK {
			verdict = "UNEXPECTED"
		}
		if f.Expected == "" {
			f.Expected = "a search"
		}
		fmt.Fprintf(&b, "frame %s: %s %s, expected %s: %s\n", f.Frame, f.Status, f.Reason, f.Expected, verdict)
	}
	_, err := io.WriteString(w, b.String())
	return err
}

// EventSummary is one event over all frames.
type EventSummary struct {
	ID, Kind       string
	Frames         int     // on which it shines
	Expected       int     // of those where it should be found
	Found          int     // of all
	FirstFrame     string  // first on which it was found; empty if never
	BestSN         float64 // over searched frames
	MissedExpected int
	Reasons        map[string]int // of the misses
}

// Events sums up the outcomes by event, in the order of the truth.
func (r *Result) Events() []EventSummary {
	index := map[string]int{}
	var list []EventSummary
	for i := range r.Outcomes {
		o := &r.Outcomes[i]
		k, ok := index[o.ID]
		if !ok {
			k = len(list)
			index[o.ID] = k
			list = append(list, EventSummary{ID: o.ID, Kind: o.Kind, Reasons: map[string]int{}})
		}
		e := &list[k]
		e.Frames++
		idle := o.Reason == ReasonSetAside || o.Reason == ReasonUnlisted
		due := !idle && o.Covered && !o.Masked() && o.LocalSN > r.Config.Searchable
		if due {
			e.Expected++
		}
		if !idle {
			e.BestSN = math.Max(e.BestSN, o.LocalSN)
		}
		if o.Found {
			if e.Found == 0 {
				e.FirstFrame = o.Frame
			}
			e.Found++
			continue
		}
		e.Reasons[o.Reason]++
		if due {
			e.MissedExpected++
		}
	}
	return list
}

// WriteSummary writes one line per event: on how many frames it should have been
// found, on how many it was, where first, and why it was missed elsewhere.
func (r *Result) WriteSummary(w io.Writer) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%-16s %-11s %9s %7s %6s  %-26s %s\n", "event", "kind", "best S/N", "due on", "found", "first found on", "missed elsewhere because")
	for _, e := range r.Events() {
		var why []string
		for reason, n := range e.Reasons {
			why = append(why, fmt.Sprintf("%s (%d)", strings.ReplaceAll(reason, "_", " "), n))
		}
		sort.Strings(why)
		first := e.FirstFrame
		if first == "" {
			first = "-"
		}
		fmt.Fprintf(&b, "%-16s %-11s %9.1f %7d %6d  %-26s %s\n", e.ID, e.Kind, e.BestSN, e.Expected, e.Found, first, strings.Join(why, ", "))
	}
	_, err := io.WriteString(w, b.String())
	return err
}
