package trial

import (
	"errors"
	"fmt"
	"io"
	"math"
	"strings"

	"nightsift/internal/frame"
	"nightsift/internal/score"
)

func asProblem(err error, p **frame.Problem) bool { return errors.As(err, p) }

// joined pools the sky of several frames.
func joined(sky []score.Sky) (mean, spread float64, beyond int, gaussian float64) {
	n := 0.0
	for _, s := range sky {
		mean += s.Mean * float64(s.N)
		spread += s.Spread * float64(s.N)
		beyond += s.Above5 + s.Below5
		gaussian += 2 * s.Gaussian
		n += float64(s.N)
	}
	return mean / n, spread / n, beyond, gaussian
}

func worst(v []float64) float64 {
	w := math.NaN()
	for _, x := range v {
		if !(x <= w) {
			w = x
		}
	}
	return w
}

// WriteTable writes one line for each scenario.
func WriteTable(w io.Writer, all []*Outcome) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%-21s %7s %7s %7s %11s %12s %15s %12s %11s %11s %14s %8s %7s %17s\n",
		"scenario", "align", "sky", "sky", "beyond 5σ", "found", "false/Mpx", "flux bias", "flux", "x,y", "half found", "stars", "star", "on hosts, stars")
	fmt.Fprintf(&b, "%-21s %7s %7s %7s %11s %12s %15s %12s %11s %11s %14s %8s %7s %17s\n",
		"", "px", "mean", "spread", "(Gaussian)", "S/N > 8", "p ≥ 0.5", "S/N > 20, %", "pull", "pulls", "mag from limit", "listed", "χ²", "bias %, pull")
	for _, o := range all {
		r := o.Result
		mean, spread, beyond, gaussian := joined(o.Sky)
		fmt.Fprintf(&b, "%-21s %7.4f %+7.3f %7.3f %5d (%.1f) %11.1f%% %8.2f ± %.2f %+6.2f ± %.2f %11.3f %5.2f %5.2f %+7.3f ± %.3f %3d/%4d %7.3f %+6.2f ± %.2f %4.2f\n",
			o.Scenario, worst(o.AlignmentRMS), mean, spread, beyond, gaussian, 100*r.Found.Value, r.FalsePerMpx, r.FalseErr,
			100*r.FluxBias.Median, 100*r.FluxBias.MedianErr, r.FluxPulls.Spread, r.XPulls.Spread, r.YPulls.Spread, r.HalfDetected.Mag, r.HalfDetected.MagErr,
			o.StarsFound, o.Stars, o.StarChi2,
			100*o.OnLightBias.Median, 100*o.OnLightBias.MedianErr, o.OnLightPulls.Spread)
		for _, p := range o.Problems {
			fmt.Fprintf(&b, "  set aside: %s\n", p)
		}
	}
	_, err := io.WriteString(w, b.String())
	return err
}
