package load

import (
	"fmt"
	"math"
	"strings"

	"nightsift/internal/frame"
	"nightsift/internal/frame/noise"
)

// estimate fills in a gain or read noise that no keyword told, from the pixels,
// where they tell. In the origin such a value begins with "estimated".
//
// Gain and read noise together need several levels of light on the frame. With
// one of the two known, the noise of the sky gives the other; the gain only if
// no sky was subtracted, which a sky well above zero stands for.
func estimate(f *frame.Frame, report *Report) {
	m := &f.Meta
	noGain, noRead := math.IsNaN(m.Gain), math.IsNaN(m.ReadNoise)
	if !noGain && !noRead {
		return
	}
	n := noise.Measure(f.Image, f.Flags)
	report.Noise = n
	white := !strings.Contains(n.Why, "not white") && n.Noise > 0
	switch {
	case noGain && !math.IsNaN(n.Gain):
		m.Gain = n.Gain
		m.Origin["gain"] = fmt.Sprintf("estimated: ± %.2g, noise against level up to %.4g count", n.GainErr, n.Highest)
	case noGain && !noRead && white && n.Sky > 3*n.Noise:
		m.Gain = n.GainFor(m.ReadNoise)
		m.Origin["gain"] = fmt.Sprintf("estimated: the noise of a sky of %.4g count, if none was subtracted", n.Sky)
	}
	if noRead && white && !math.IsNaN(m.Gain) {
		read, err := n.ReadNoiseFor(m.Gain)
		if noGain {
			err = math.Max(err, n.ReadNoiseErr)
		}
		switch {
		case err < read:
			m.ReadNoise, m.Origin["read_noise"] = read, fmt.Sprintf("estimated: ± %.2g, what the noise of the sky leaves", err)
		case noGain:
			// With the estimated gain it makes the noise of the sky what it is.
			m.ReadNoise, m.Origin["read_noise"] = read, fmt.Sprintf("estimated: at most %.2g, what the noise of the sky leaves", math.Hypot(read, err))
		default:
			report.remark("read_noise", "the sky's photons hide it; it is at most %.2g electrons", math.Max(math.Sqrt(2)*err, read+err))
		}
	}
}
