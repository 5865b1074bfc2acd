package efficiency

import (
	"fmt"
	"strings"
)

// Overview draws the recovered fraction of sources of one or more frames against
// the magnitude relative to each frame's limit.
func Overview(list []Injection) ([]byte, error) {
	mag := make([]float64, len(list))
	found := make([]bool, len(list))
	for i := range list {
		mag[i], found[i] = list[i].Relative, list[i].Fate == Found
	}
	p, err := Figure("", "magnitudes fainter than five sigma on empty sky", property("relative_magnitude").Bins(list), FitCurve(mag, found))
	if err != nil {
		return nil, err
	}
	return SVG(p)
}

// property returns one of Properties.
func property(name string) *Against {
	for i := range Properties {
		if Properties[i].Name == name {
			return &Properties[i]
		}
	}
	panic("efficiency: no property " + name)
}

// Sentence tells in plain words what was measured on a number of frames, whose
// limits of one half [mag] are given in rising order, as far as they are known.
func Sentence(list []Injection, frames int, limits []float64) string {
	count := Count(list)
	var b strings.Builder
	one := "one frame"
	if frames != 1 {
		one = fmt.Sprintf("%d frames", frames)
	}
	fmt.Fprintf(&b, "To learn what was missed, %d artificial stars were put into copies of %s and searched for: %d came back. ", len(list), one, count[Found])
	switch n := len(limits); {
	case n == 1:
		fmt.Fprintf(&b, "A new star of magnitude %.2f has an even chance to be found; fainter ones are mostly missed. ", limits[0])
	case n > 1:
		fmt.Fprintf(&b, "A new star of magnitude %.2f has an even chance to be found on a typical frame (from %.2f on the shallowest to %.2f on the deepest); fainter ones are mostly missed. ",
			limits[n/2], limits[0], limits[n-1])
	default:
		b.WriteString("Without a zero point the limit has no magnitude. ")
	}
	bright, lost := 0, map[Fate]int{}
	for i := range list {
		if s := &list[i]; s.SN >= 2*brightSN {
			bright++
			lost[s.Fate]++
		}
	}
	if bright > 0 {
		fmt.Fprintf(&b, "Of %d that were well above the limit, %d were lost", bright, bright-lost[Found])
		var parts []string
		for _, f := range Fates[1:] {
			if lost[f] > 0 {
				parts = append(parts, fmt.Sprintf("%d %s", lost[f], meaning[f]))
			}
		}
		if len(parts) > 0 {
			b.WriteString(": " + strings.Join(parts, ", "))
		}
		b.WriteString(".")
	}
	return strings.TrimSpace(b.String())
}

// meaning says a fate in words that follow a number.
var meaning = map[Fate]string{
	Found: "found", Masked: "on pixels that are masked", NotDetected: "not seen", Rejected: "taken for artefacts", Confused: "mixed up with something else there",
}
