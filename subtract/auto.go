package subtract

import (
	"context"
	"errors"
	"fmt"
	"math"

	"nightsift/internal/frame"
)

// regionSize is the side of the squares on which two ways are compared [px].
const regionSize = 128

// comparison is what one way leaves on the trial regions of a frame.
type comparison struct {
	match matcher
	info  Info
	err   error // why it cannot be used; the rest is empty then

	stars       map[int]float64 // by match: see residue
	spread      float64         // of the score on empty sky
	spreadErr   float64
	correlation float64     // of neighbouring pixels of the difference on empty sky
	limit       float64     // count, five sigma at the frame's centre
	flags       *frame.Mask // grown
	usable      int         // pixels without an unusable flag and off the edge
	heldOut     bool        // whether the stars were unknown to the fit
}

// chooseByTrial prepares both ways, subtracts some regions around bright stars
// in each and takes the better one:
//
//  1. not one whose score on empty sky spreads by more than 3 % off one while
//     the other's does not;
//  2. not one that must leave out two hundredths more of the frame, around
//     edges and saturated stars;
//  3. the one that leaves less at stars, if the difference is significant;
//  4. the deeper one, if by more than a hundredth of a magnitude;
//  5. proper subtraction, which has the fewer unknowns.
//
// The stars of the regions are left out of what each way learns from stars for
// the trial; the models of the point-spread functions, which both ways share
// in part, have seen them.
func (j *job) chooseByTrial(ctx context.Context, info *Info) error {
	ways := [2]comparison{{info: *info}, {info: *info}}
	proper, kernel := &ways[0], &ways[1]
	regions := j.trialRegions()
	j.allocate()

	p, err := j.newProperMatch(ctx, &proper.info)
	if err == nil {
		proper.match = p
		trial, held := p.heldOut(regions)
		proper.heldOut = held
		err = j.tryOut(ctx, proper, trial, regions)
	}
	proper.err = err
	k, err := j.newKernelMatch(ctx, &kernel.info)
	if err == nil {
		kernel.match = k
		trial, held := k.heldOut(regions)
		kernel.heldOut = held
		err = j.tryOut(ctx, kernel, trial, regions)
	}
	kernel.err = err
	for i := range ways {
		if w := &ways[i]; w.err == nil {
			j.match = w.match
			w.match.grow()
			w.flags = j.flags
			for _, bits := range j.flags.Bits {
				if bits&(frame.Unusable|frame.Edge) == 0 {
					w.usable++
				}
			}
		}
	}
	for _, w := range ways {
		var problem *frame.Problem
		if w.err != nil && !errors.As(w.err, &problem) {
			return w.err
		}
	}
	chosen, reason := decide(proper, kernel)
	if chosen.err != nil {
		return chosen.err
	}
	*info = chosen.info
	info.MethodReason = reason
	j.match, j.flags, j.grownFlags = chosen.match, chosen.flags, true
	return nil
}

// decide applies the rules of chooseByTrial.
func decide(proper, kernel *comparison) (*comparison, string) {
	if proper.err != nil || kernel.err != nil {
		chosen, other := proper, kernel
		if proper.err != nil {
			chosen, other = kernel, proper
		}
		return chosen, fmt.Sprintf("the other way cannot be used: %v", other.err)
	}
	var p, k, d []float64
	for i, q := range proper.stars {
		if r, both := kernel.stars[i]; both {
			p, k, d = append(p, q), append(k, r), append(d, q-r)
		}
	}
	facts := fmt.Sprintf("%d stars", len(d))
	if len(d) >= 5 {
		facts = fmt.Sprintf("what is left at %d stars is %.2f by proper subtraction and %.2f by the kernel, in units of noise variance", len(d), trimmedMean(p), trimmedMean(k))
		if proper.heldOut && kernel.heldOut {
			facts += ", stars held out"
		}
	}
	facts += fmt.Sprintf("; empty sky spreads by %.3f and %.3f, neighbouring pixels correlate by %+.3f and %+.3f", proper.spread, kernel.spread, proper.correlation, kernel.correlation)
	deeper := 2.5 * math.Log10(kernel.limit/proper.limit)
	facts += fmt.Sprintf("; proper subtraction is deeper by %+.3f mag", deeper)

	more := float64(proper.usable)/float64(max(1, kernel.usable)) - 1
	facts += fmt.Sprintf(" and searches %+.1f %% of pixels", 100*more)

	off := func(c *comparison) bool { return math.Abs(c.spread-1) > max(0.03, 3*c.spreadErr) }
	switch {
	case off(proper) && !off(kernel):
		return kernel, "whiter sky: " + facts
	case off(kernel) && !off(proper):
		return proper, "whiter sky: " + facts
	}
	switch {
	case more < -0.02:
		return kernel, "more of the frame can be searched: " + facts
	case more > 0.02:
		return proper, "more of the frame can be searched: " + facts
	}
	if len(d) >= 5 {
		mean := trimmedMean(d)
		if e := standardError(d, mean); math.Abs(mean) > 2*e && math.Abs(mean) > 0.1*trimmedMean(k) {
			if mean > 0 {
				return kernel, "less is left at stars: " + facts
			}
			return proper, "less is left at stars: " + facts
		}
	}
	switch {
	case deeper > 0.01:
		return proper, "deeper: " + facts
	case deeper < -0.01:
		return kernel, "deeper: " + facts
	}
	return proper, "no difference, fewer unknowns: " + facts
}

// trialRegions returns squares around bright stars all over the frame: about
// one for every nine Fourier tiles.
func (j *job) trialRegions() []tile {
	const margin = 24
	if j.width < regionSize+2*margin || j.height < regionSize+2*margin {
		return nil
	}
	most := min(24, max(8, len(tiling(j.width, j.height, 32))/9))
	// What is computed around two regions must not overlap: the order of tiles
	// would show.
	const apart = regionSize + 2*32
	var regions []tile
	for _, p := range chooseStamps(j.stampPositions(), j.width, j.height, apart*3/4, 4*most) {
		x := min(j.width-margin-regionSize, max(margin, int(p.x)-regionSize/2))
		y := min(j.height-margin-regionSize, max(margin, int(p.y)-regionSize/2))
		clear := len(regions) < most
		for _, t := range regions {
			clear = clear && (abs(t.x0-x) >= apart || abs(t.y0-y) >= apart)
		}
		if clear {
			regions = append(regions, tile{x, y, x + regionSize, y + regionSize})
		}
	}
	return regions
}

func within(x, y int, regions []tile) bool {
	for _, t := range regions {
		if x > t.x0 && x <= t.x1 && y > t.y0 && y <= t.y1 {
			return true
		}
	}
	return false
}

// without returns the kept stamps that lie in none of the regions, and whether
// they are enough to do without the others.
func without(stamps []*stamp, regions []tile, least int) ([]*stamp, bool) {
	var rest []*stamp
	for _, s := range keptOf(stamps) {
		if !within(s.x, s.y, regions) {
			rest = append(rest, s)
		}
	}
	return rest, len(rest) >= max(least, len(keptOf(stamps))/2)
}

// heldOut returns the same kernel learnt without the stars in the regions.
func (m *kernelMatch) heldOut(regions []tile) (matcher, bool) {
	rest, enough := without(m.stamps, regions, m.cfg.StampsMin)
	if !enough {
		return m, false
	}
	sol, err := solveOnce(m.kernel.basis, rest, m.shape, m.width, m.height)
	if err != nil {
		return m, false
	}
	trial := *m
	trial.kernel = sol.kernel
	return &trial, true
}

// heldOut returns the same with a trim learnt without the stars in the regions.
func (m *properMatch) heldOut(regions []tile) (matcher, bool) {
	if m.trim == nil {
		return m, true
	}
	rest, enough := without(m.stamps, regions, m.cfg.StampsMin)
	if !enough {
		return m, false
	}
	sol, err := solveOnce(m.trim.kernel.basis, rest, m.trimShape, m.width, m.height)
	if err != nil {
		return m, false
	}
	trial := *m
	trial.trim = &trim{sol.kernel}
	return &trial, true
}

// tryOut subtracts the regions and looks at stars and at empty sky.
func (j *job) tryOut(ctx context.Context, c *comparison, m matcher, regions []tile) error {
	j.match = m
	c.stars = map[int]float64{}
	if err := m.difference(ctx, regions); err != nil {
		return err
	}
	render := j.renderPSF()
	radius := j.newPSF.Radius()
	size := 2*radius + 1
	stamp, gx, gy := make([]float32, size*size), make([]float32, size*size), make([]float32, size*size)
	fwhm := c.info.FWHMNew
	reach := min(radius, int(math.Ceil(1.5*fwhm)))
	var scores []float64
	var pairs, squares float64
	matched := float32(m.squares())
	step := max(2, int(fwhm/1.5))
	for _, t := range regions {
		x, y := t.centre()
		inner := tile{t.x0 + radius + 1, t.y0 + radius + 1, t.x1 - radius - 1, t.y1 - radius - 1}
		for i, match := range j.pair.Matches {
			s := &j.pair.NewStars.Stars[match.New]
			px, py := int(math.Round(s.X)), int(math.Round(s.Y))
			if !s.Clean || !(s.SN > 30) || s.Flags&frame.Unusable != 0 || !within(px, py, []tile{inner}) || j.fluxes.changed(j.pair, i) {
				continue
			}
			render(stamp, x, y, s.X-math.Round(s.X), s.Y-math.Round(s.Y))
			gradients(gx, gy, stamp, size)
			q, ok := probeStar(j.diff, j.vari, j.static, j.flags, s.X, s.Y, stamp, gx, gy, radius, fwhm)
			if ok && q.static > 20 {
				c.stars[i] = residue(q, s.SN, fwhm)
			}
		}
		render(stamp, x, y, 0, 0)
		for v := inner.y0; v < inner.y1; v += step {
			for u := inner.x0; u < inner.x1; u += step {
				s, ok := j.skyScore(stamp, radius, reach, u, v, matched)
				if !ok {
					continue
				}
				scores = append(scores, s)
				for b := v - 1; b <= v+1; b++ {
					for a := u - 1; a <= u+1; a++ {
						at := b*j.width + a
						d := float64(j.diff.Pix[at]) / math.Sqrt(float64(j.vari.Pix[at]))
						squares += d * d
						pairs += d * 0.5 * float64(j.diff.Pix[at+1]+j.diff.Pix[at+j.width]) / math.Sqrt(float64(j.vari.Pix[at]))
					}
				}
			}
		}
	}
	c.spread, c.spreadErr = 1, math.Inf(1)
	if len(scores) > 100 {
		_, c.spread = meanAndSpread(scores)
		// Scores closer than a point-spread function are not independent.
		independent := float64(len(scores)) * min(1, float64(step*step)/(fwhm*fwhm))
		c.spreadErr = 1.17 / math.Sqrt(2*independent)
		c.correlation = pairs / squares
	}
	c.limit = j.depth()(tile{0, 0, j.width, j.height})
	return nil
}

// residue is the sum of squares of what is left of a star: as a change of flux
// and as a shift along both axes, each in units of the error with which the new
// frame alone gives it. Both ways are measured by the same rod so.
func residue(q starProbe, sn, fwhm float64) float64 {
	flux := q.score / q.static * sn
	// The lever of a shift by a pixel, for a Gaussian profile.
	lever := 1.665 / fwhm * sn
	dx, dy := q.shiftX/q.gradientX*lever, q.shiftY/q.gradientY*lever
	return flux*flux + dx*dx + dy*dy
}

// gradients writes the central differences of a square stamp.
func gradients(gx, gy, stamp []float32, size int) {
	clear(gx)
	clear(gy)
	for v := 1; v < size-1; v++ {
		for u := 1; u < size-1; u++ {
			at := v*size + u
			gx[at] = (stamp[at-1] - stamp[at+1]) / 2
			gy[at] = (stamp[at-size] - stamp[at+size]) / 2
		}
	}
}

// skyScore is the matched filter at a 0-based pixel, if all it touches is
// empty sky: matched is the variance of static for a reference of unit variance.
func (j *job) skyScore(stamp []float32, radius, reach, x, y int, matched float32) (float64, bool) {
	var sum, squares float64
	size := 2*radius + 1
	for v := -reach; v <= reach; v++ {
		at := (y+v)*j.width + x
		for u := -reach; u <= reach; u++ {
			if j.flags.Bits[at+u]&frame.Unusable != 0 {
				return 0, false
			}
			variance := j.vari.Pix[at+u]
			// A star in the middle is no sky; within its own noise the matched
			// reference must not choose.
			if s := j.static.Pix[at+u]; u*u+v*v < 4 && s*s > 0.04*variance+16*matched*j.pair.Reference.Variance.Pix[at+u] {
				return 0, false
			}
			p := stamp[(v+radius)*size+radius+u]
			sum += float64(p*j.diff.Pix[at+u]) / float64(variance)
			squares += float64(p*p) / float64(variance)
		}
	}
	s := sum / math.Sqrt(squares)
	return s, math.Abs(s) < 5
}
