package reference

import (
	"cmp"
	"slices"

	"nightsift/internal/frame"
)

// Input is what became of one frame that was offered. Unknown numbers are NaN.
type Input struct {
	Name, Path string
	Checksum   string // SHA-256 of the file
	Pixels     string // SHA-256 of the pixel values
	Filter     string
	Field      string

	MidMJD, Exposure                       float64 // d UTC, s
	RA, Dec                                float64 // deg, of the centre by its header
	Width, Height                          int     // px
	Gain, ReadNoise, Saturation, ZeroPoint float64 // by its header
	FWHM, Roundness                        float64 // px of its own
	Sky, Noise                             float64 // count of its own
	Depth                                  float64 // signal to noise of its 60th brightest star

	Scale, ScaleErr float64 // counts of the reference for one of its own
	Stars           int     // matched
	RMS             float64 // px, residual of bright stars
	GridFWHM        float64 // px of the reference
	GridNoise       float64 // count of the reference
	Share           float64 // signal to noise squared of a point source of 1 count of the reference
	Weight          float64 // in the mean; the sum is 1
	Rejected        float64 // share of its pixels left out as outliers

	Used   bool
	Anchor bool
	Reason string // slug; empty if used
	Detail string // a sentence; also a remark on a used frame
}

// The reasons to leave a frame out, beyond those of package frame.
const (
	ReasonTooEarly   = "too_early"
	ReasonTooLate    = "too_late"
	ReasonNoTime     = "no_time"
	ReasonExcluded   = "source_was_bright"
	ReasonDuplicate  = "duplicate"
	ReasonOtherField = "other_field"
	ReasonWide       = "poor_seeing"
	ReasonTrailed    = "trailed"
	ReasonShallow    = "too_shallow"
	ReasonSurplus    = "not_among_the_best"
)

func (in *Input) leave(reason, detail string) {
	in.Used, in.Reason, in.Detail = false, reason, detail
}

func (in *Input) leaveFor(p *frame.Problem) { in.leave(p.Slug, p.Detail) }

func (in *Input) remark(text string) {
	if in.Detail != "" {
		in.Detail += "; "
	}
	in.Detail += text
}

// inOrder sorts by time, then name and path: the order in which frames are added.
func inOrder(list []*candidate) {
	slices.SortFunc(list, func(a, b *candidate) int {
		return cmp.Or(cmp.Compare(a.MidMJD, b.MidMJD), cmp.Compare(a.Name, b.Name), cmp.Compare(a.Checksum, b.Checksum), cmp.Compare(a.Path, b.Path))
	})
}
