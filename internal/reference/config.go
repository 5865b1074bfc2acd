package reference

import (
	"math"
	"slices"

	"nightsift/align"
	"nightsift/internal/artefacts"
	"nightsift/internal/frame/load"
	"nightsift/internal/psf"
)

// The ways to add.
const (
	MethodMean   = "mean"
	MethodProper = "proper"
	MethodAuto   = "auto" // the deeper one as measured
)

// Methods lists the values of Config.Method.
func Methods() []string { return []string{MethodAuto, MethodMean, MethodProper} }

// Config says how a reference is built. Start from DefaultConfig.
type Config struct {
	Keywords  load.Keywords
	Align     align.Config
	PSF       psf.Config
	Artefacts artefacts.Config

	Method string // see Methods

	// Before and After bound the middle of the exposures [MJD, UTC]; NaN for no
	// bound. A frame without a time is left out when there is one.
	Before, After float64
	Exclude       []Exclusion
	Field         string // if not empty: other fields are left out

	MaxFrames int // the best so many are used; 0 for all
	MinFrames int // fewer usable ones are an error

	Grid   *Grid  // nil: that of the anchor
	Anchor string // name of the frame that gives grid and scale; empty: the best

	MaxWidthRatio float64 // a frame wider than this times the median is left out
	MinRoundness  float64 // a frame whose stars are longer than this is left out as trailed
	LeastShare    float64 // a frame with less than this share of the best frame's information is left out

	Clip float64 // sigma, of a pixel or a source that is left out

	// Parts is a folder where resampled frames are kept for the next time, empty
	// for none. Scratch is where they are put otherwise; empty means the
	// system's folder for temporary files.
	Parts, Scratch string

	Workers int // goroutines; the result does not depend on it

	// Observe, when not nil, is told of progress, from one goroutine at a time.
	Observe func(Progress)
}

// Exclusion is a time at which a place was brighter than usual.
type Exclusion struct {
	Name     string
	RA, Dec  float64 // deg
	From, To float64 // MJD, UTC
}

// Grid is a requested pixel grid: gnomonic, north up, east to the left.
type Grid struct {
	RA, Dec       float64 // deg, of the centre
	Scale         float64 // arcsec per px
	Width, Height int     // px
}

// Progress tells how far a build is.
type Progress struct {
	Stage       Stage
	Done, Total int
	Frame       string
}

// Stage is a step of a build.
type Stage string

// The steps, in order.
const (
	StageMeasure  Stage = "measured"
	StageRegister Stage = "registered"
	StageResample Stage = "resampled"
	StageStack    Stage = "stacked"
)

// DefaultConfig returns what suits most surveys.
func DefaultConfig() Config {
	a := align.DefaultConfig()
	a.Stars.MaxStars = 6000 // bright enough for geometry, scale and shape
	return Config{
		Keywords: load.DefaultKeywords(), Align: a, PSF: psf.DefaultConfig(), Artefacts: artefacts.DefaultConfig(),
		Method: MethodAuto, Before: math.NaN(), After: math.NaN(), MinFrames: 2,
		MaxWidthRatio: 1.8, MinRoundness: 0.6, LeastShare: 0.02, Clip: 5, Workers: a.Workers,
	}
}

func (c *Config) check() {
	if !slices.Contains(Methods(), c.Method) || c.MinFrames < 1 || c.Workers < 1 || !(c.Clip > 2) {
		panic("reference: Config not made by DefaultConfig")
	}
}

func (c *Config) observe(stage Stage, done, total int, name string) {
	if c.Observe != nil {
		c.Observe(Progress{Stage: stage, Done: done, Total: total, Frame: name})
	}
}
