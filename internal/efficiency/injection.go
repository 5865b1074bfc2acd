package efficiency

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"

	"nightsift/detect"
)

// Fate says what became of an injected source.
type Fate string

// The fates.
const (
	Found       Fate = "found"
	Masked      Fate = "masked"       // its place is flagged or too near an edge: not searched
	NotDetected Fate = "not_detected" // nothing was found there
	Rejected    Fate = "rejected"     // found and judged not to be real
	Confused    Fate = "confused"     // what was found there is another source, or too far off
)

// Fates lists the fates, the good one first.
var Fates = []Fate{Found, Masked, NotDetected, Rejected, Confused}

// Injection is one source that was put in. Unknown numbers are NaN.
type Injection struct {
	ID     string // begins with detect.InjectedPrefix; never that of a candidate
	Frame  string
	Filter string
	Where  Where
	Round  int // of those put in together, from 1

	X, Y    float64 // FITS px of the new frame
	RA, Dec float64 // deg, ICRS
	U, V    float64 // position on the chip, 0…1 along x and y

	Flux float64 // count of the new frame
	Mag  float64 // mag; NaN without zero point
	// Relative is the magnitude relative to the frame's limit of five sigma on
	// empty sky, positive for fainter.
	Relative float64
	SN       float64 // signal to noise on empty sky

	HostLight       float64 // count/px of the reference there, in counts of the new frame
	HostBrightness  float64 // mag/arcsec²; NaN without zero point, scale or light
	HostDistance    float64 // px to the source of the reference on which it was put; NaN for none
	Fate            Fate
	Significance    float64 // of the candidate found there; NaN for none, as what follows
	RealProbability float64
	FoundX, FoundY  float64     // px
	FoundFlux       float64     // count
	FoundFluxErr    float64     // count
	Kind            detect.Kind // of the candidate found there
}

// name gives the source its identifier.
func (s *Injection) name(checksum string, seed uint64, number int) {
	h := sha256.Sum256(fmt.Appendf(nil, "injection\x00%s\x00%s\x00%d\x00%s\x00%d", s.Frame, checksum, seed, s.Where, number))
	s.ID = detect.InjectedPrefix + hex.EncodeToString(h[:8])
}
