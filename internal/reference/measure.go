package reference

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"slices"

	"golang.org/x/sync/errgroup"

	"nightsift/align"
	"nightsift/internal/artefacts"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/psf"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
)

// candidate is a frame on its way into the stack. It holds no planes.
type candidate struct {
	Input
	wcs        *wcs.WCS
	list       *stars.List
	background *stars.Background
	defects    []defect // flags beyond those that loading gives
	gain       float64  // electron per count in use; +Inf if unknown
	pair       *align.Pair
	transform  *align.Transform // of the grid's pixels to its own
	placed     []stars.Star     // its stars on the grid
	part       *part
}

// defect is a run of pixels with one set of flags.
type defect struct {
	from, to int32
	bits     frame.Flag
}

// measureAll measures the frames not left out yet, several at once.
func measureAll(ctx context.Context, list []*candidate, cfg *Config) error {
	total, done := 0, 0
	for _, c := range list {
		if c.Reason == "" {
			total++
		}
	}
	told := make(chan string)
	group, ctx := errgroup.WithContext(ctx)
	group.SetLimit(max(1, min(cfg.Workers, 2))) // two frames in memory at once
	finished := make(chan struct{})
	go func() {
		defer close(finished)
		for name := range told {
			done++
			cfg.observe(StageMeasure, done, total, name)
		}
	}()
	for _, c := range list {
		if c.Reason != "" {
			continue
		}
		group.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			err := c.measure(cfg)
			var p *frame.Problem
			if errors.As(err, &p) {
				c.leaveFor(p)
				err = nil
			}
			told <- c.Name
			return err
		})
	}
	err := group.Wait()
	close(told)
	<-finished
	return err
}

// read loads the frame and gives it the flags that measuring found.
func (c *candidate) read(cfg *Config) (*frame.Frame, error) {
	f, err := load.Frame(c.Path, cfg.Keywords)
	if err != nil {
		return nil, err
	}
	if c.Checksum != "" && f.Checksum != c.Checksum {
		return nil, fmt.Errorf("%s changed while it was being used: its checksum was %.12s, now it is %.12s", c.Path, c.Checksum, f.Checksum)
	}
	for _, d := range c.defects {
		for p := d.from; p < d.to; p++ {
			f.Flags.Bits[p] |= d.bits
		}
	}
	return f, nil
}

// measure fills in what one frame says of itself.
func (c *candidate) measure(cfg *Config) error {
	f, err := c.read(cfg)
	if err != nil {
		return err
	}
	c.Checksum, c.Pixels = f.Checksum, pixelDigest(f.Image)
	m := f.Meta
	c.Gain, c.ReadNoise, c.Saturation, c.ZeroPoint = m.Gain, m.ReadNoise, m.Saturation, m.ZeroPoint
	c.Width, c.Height, c.wcs = f.Image.Width, f.Image.Height, f.WCS
	if f.WCS != nil {
		if ra, dec, err := f.WCS.PixelToSky(float64(c.Width+1)/2, float64(c.Height+1)/2); err == nil {
			c.RA, c.Dec = ra, dec
		}
	}
	bg, err := stars.EstimateBackground(f.Image, f.Flags, cfg.Align.Background)
	if err != nil {
		return err
	}
	report, err := stars.EstimateVariance(f, bg)
	if err != nil {
		return err
	}
	c.background, c.Sky, c.Noise = bg, bg.MedianSky, bg.MedianNoise
	c.judgeGain(report)
	counts := f.Image
	sub := bg.Subtract(nil, counts)
	list, err := stars.Find(sub, bg, f.Flags, c.gain, cfg.Align.Stars)
	if err != nil {
		return err
	}
	if len(list.Stars) < cfg.Align.MinStars {
		return frame.Problemf(frame.ProblemTooFewStars, "%s has %d stars, at least %d are needed; look for clouds, a wrong focus or a closed shutter", c.Name, len(list.Stars), cfg.Align.MinStars)
	}
	before := f.Flags.Clone()
	in := artefacts.Input{Image: sub, Variance: f.Variance, Flags: f.Flags, Counts: counts, FWHM: list.FWHM, Gain: c.gain, Stars: list.Stars}
	if model, err := psf.Fit(sub, f.Variance, f.Flags, list.Stars, c.gain, cfg.PSF); err == nil {
		in.PSF = model
	}
	if _, err := artefacts.Find(in, cfg.Artefacts); err != nil {
		return err
	}
	c.defects = runsOf(before, f.Flags)
	c.list, c.FWHM, c.Roundness = list, list.FWHM, list.Roundness
	c.Depth = depthOf(list)
	return nil
}

// judgeGain takes the gain of the header unless the noise contradicts it.
func (c *candidate) judgeGain(r *stars.VarianceReport) {
	c.gain = c.Gain
	known := c.Gain > 0 && !math.IsInf(c.Gain, 0)
	if !known {
		c.gain = math.Inf(1)
		if r.SkyGain > 0 {
			c.gain = r.SkyGain
			c.remark(fmt.Sprintf("no gain in its header; its noise gives %.3g electron per count", c.gain))
		}
		return
	}
	const doubtful = 1.2
	// A noise that gain, read noise and sky do not explain: either the gain is
	// wrong, or the frame is no single exposure.
	if ratio := r.ModelNoise / r.MeasuredNoise; (ratio > doubtful || ratio < 1/doubtful) && r.SkyGain > 0 && r.Source != "extension" {
		c.remark(fmt.Sprintf("a gain of %.3g predicts a noise of %.4g counts, measured are %.4g; the measured noise is used, and a gain of %.3g that explains it",
			c.Gain, r.ModelNoise, r.MeasuredNoise, r.SkyGain))
		c.gain = r.SkyGain
	}
}

// depthOf is the signal to noise of the 60th brightest star, or the middle one of fewer.
func depthOf(list *stars.List) float64 {
	var sn []float64
	for i := range list.Stars {
		s := &list.Stars[i]
		if s.Flags&frame.Unusable == 0 && !s.Extended && s.SN > 0 {
			sn = append(sn, s.SN)
		}
	}
	if len(sn) == 0 {
		return math.NaN()
	}
	slices.SortFunc(sn, func(a, b float64) int {
		if a > b {
			return -1
		}
		if a < b {
			return 1
		}
		return 0
	})
	return sn[min(59, len(sn)/2)]
}

// runsOf lists where after has bits that before has not.
func runsOf(before, after *frame.Mask) []defect {
	var out []defect
	for p, b := range after.Bits {
		added := b &^ before.Bits[p]
		if added == 0 {
			continue
		}
		if n := len(out); n > 0 && out[n-1].to == int32(p) && out[n-1].bits == added {
			out[n-1].to++
			continue
		}
		out = append(out, defect{int32(p), int32(p + 1), added})
	}
	return out
}

// pixelDigest is the SHA-256 of the pixel values.
func pixelDigest(img *frame.Image) string {
	h := sha256.New()
	var size [8]byte
	binary.LittleEndian.PutUint32(size[:], uint32(img.Width))
	binary.LittleEndian.PutUint32(size[4:], uint32(img.Height))
	h.Write(size[:])
	row := make([]byte, 4*img.Width)
	for j := range img.Height {
		for i, v := range img.Row(j) {
			if v != v {
				v = float32(math.NaN())
			}
			binary.LittleEndian.PutUint32(row[4*i:], math.Float32bits(v))
		}
		h.Write(row)
	}
	return hex.EncodeToString(h.Sum(nil))
}
