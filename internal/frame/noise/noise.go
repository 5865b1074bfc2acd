// Package noise reads gain and read noise off a single frame: the variance of
// its pixels against their level (the photon transfer of Janesick 2007,
// Photon Transfer, SPIE Press, on one frame instead of a series of flats).
//
// The noise of a pixel is seen in second and fourth differences along both
// axes, which take away what is smooth in the image (the second differences are
// the mask of Immerkær 1996, Comput. Vis. Image Underst. 64, 300). Levels come
// from vignetting, gradients, galaxies and stars. What remains of the stars'
// own form grows with the square of the level above the sky, unlike photon
// noise, and is fitted along:
//
//	variance = (read noise/gain)² + level/gain + c (level − sky)²   [count²]
//
// with c ≥ 0. Hits and hot pixels are sharper than stars and are left out first.
package noise

import (
	"fmt"
	"math"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// Result is what the pixels say. Unknown numbers are NaN.
type Result struct {
	Sky   float64 // count, level where most pixels are
	Noise float64 // count, standard deviation of the white noise of a pixel there

	NoiseErr float64 // count, 1σ

	Gain, GainErr           float64 // electron per count; NaN when the levels do not tell
	ReadNoise, ReadNoiseErr float64 // electron; where a sky was subtracted, with the noise of that sky

	Levels  int     // bins of level that entered the fit
	Highest float64 // count, level of the highest of them
	Chi2    float64 // of the fit for each degree of freedom

	Why string // why there is no gain, as a part of a sentence; "" when there is one
}

// GainFor returns the gain [electron per count] that explains the noise of the
// sky with a known read noise [electron]: the root of
// Noise² gain² − Sky gain − readNoise² = 0. It holds only when no sky was
// subtracted. With a read noise of 0 it is the least gain that is possible.
func (r *Result) GainFor(readNoise float64) float64 {
	if !(r.Noise > 0) || !(r.Sky > 0) {
		return math.NaN()
	}
	v := r.Noise * r.Noise
	return (r.Sky + math.Sqrt(r.Sky*r.Sky+4*v*readNoise*readNoise)) / (2 * v)
}

// ReadNoiseFor returns the read noise [electron] that explains the noise of
// the sky with a known gain, and its 1σ error.
// It is 0 where the photons of the sky explain all of the noise.
func (r *Result) ReadNoiseFor(gain float64) (readNoise, err float64) {
	variance := gain * gain * r.Noise * r.Noise // electron²
	square := variance - gain*math.Max(r.Sky, 0)
	squareErr := 2 * variance * r.NoiseErr / r.Noise
	readNoise = math.Sqrt(math.Max(square, 0))
	if readNoise*readNoise < squareErr {
		return readNoise, math.Sqrt(squareErr)
	}
	return readNoise, squareErr / (2 * readNoise)
}

const (
	maxPixels = 4 << 20 // pixels looked at; more are thinned out by rows
	maxInBin  = 1 << 16
	maxSample = 500000 // pixels from which sky, its noise and the bins are found
	// effective over the number of pixels of a bin is the relative variance of its
	// variance, measured on white noise. Independent values and a plain variance
	// would have 2; the differences overlap, and percentiles cost something.
	effective = 16.5
	// maxGainError is the largest relative error of a gain that is still told.
	maxGainError = 0.12
)

// sums are the local differences and levels along one row.
type sums struct {
	fourth, second []float64 // count, each with the variance of a pixel
	box, level     []float64 // count: plain mean of 5 × 5, and with the weights of the fourth difference's variance
}

// row computes the sums around the middle of five rows for the columns 2 to
// width-3. NaN pixels make all that they touch NaN. The plain mean carries no
// noise in common with the differences, so pixels may be chosen by it. v is
// scratch.
func (s *sums) row(rows [5][]float64, v *[4][]float64) {
	width := len(s.box)
	r0, r1, r2, r3, r4 := rows[0][:width], rows[1][:width], rows[2][:width], rows[3][:width], rows[4][:width]
	a, b, c, d := v[0][:width], v[1][:width], v[2][:width], v[3][:width]
	for i := range width {
		outer, inner, middle := r0[i]+r4[i], r1[i]+r3[i], r2[i]
		a[i] = outer - 4*inner + 6*middle
		b[i] = inner - 2*middle
		c[i] = outer + inner + middle
		d[i] = outer + 16*inner + 36*middle
	}
	for i := 2; i < width-2; i++ {
		s.fourth[i] = (a[i-2] + a[i+2] - 4*(a[i-1]+a[i+1]) + 6*a[i]) / 70
		s.second[i] = (b[i-1] + b[i+1] - 2*b[i]) / 6
		s.box[i] = (c[i-2] + c[i-1] + c[i] + c[i+1] + c[i+2]) / 25
		s.level[i] = (d[i-2] + d[i+2] + 16*(d[i-1]+d[i+1]) + 36*d[i]) / 4900
	}
}

// each calls visit for rows spread evenly over the frame. Flagged pixels count
// as NaN, and so do those of the bits in hit; both may be nil.
func each(img *frame.Image, flags *frame.Mask, hit []uint64, visit func(s *sums)) {
	width, height := img.Width, img.Height
	lines := make([]float64, 13*width)
	line := func(k int) []float64 { return lines[k*width : (k+1)*width] }
	s := &sums{line(0), line(1), line(2), line(3)}
	v := [4][]float64{line(4), line(5), line(6), line(7)}
	var rows [5][]float64 // row j is rows[j%5]
	held := [5]int{-1, -1, -1, -1, -1}
	for k := range rows {
		rows[k] = line(8 + k)
	}
	step := 1 + (width*height-1)/maxPixels
	for j := 2; j < height-2; j += step {
		var around [5][]float64
		for k := range around {
			q := j + k - 2
			around[k] = rows[q%5]
			if held[q%5] != q {
				held[q%5] = q
				take(around[k], img, flags, hit, q*width)
			}
		}
		s.row(around, &v)
		visit(s)
	}
}

// take copies the row of pixels from place p on.
func take(dst []float64, img *frame.Image, flags *frame.Mask, hit []uint64, p int) {
	for i, v := range img.Pix[p : p+len(dst)] {
		dst[i] = float64(v)
	}
	if flags != nil {
		for i, b := range flags.Bits[p : p+len(dst)] {
			if b&(frame.Unusable|frame.Interpolated) != 0 {
				dst[i] = math.NaN()
			}
		}
	}
	if hit == nil {
		return
	}
	for q := p; q < p+len(dst); q++ {
		if word := hit[q>>6]; word == 0 {
			q |= 63
		} else if word>>(q&63)&1 != 0 {
			dst[q-p] = math.NaN()
		}
	}
}

// hits returns, a bit for each pixel, what is sharper than a star can be, and
// the pixels around it: 5σ from the sky with a pair of opposite neighbours,
// along x or y, whose mean departs from the sky by less than a quarter of that.
// A star as narrow as 1.8 pixels keeps 0.4.
func hits(img *frame.Image, sky, noise float64) []uint64 {
	width, height := img.Width, img.Height
	out := make([]uint64, (width*height+63)/64)
	least := 5 * noise
	for j := 1; j < height-1; j++ {
		for i := 1; i < width-1; i++ {
			p := j*width + i
			d := float64(img.Pix[p]) - sky
			if !(math.Abs(d) > least) {
				continue
			}
			across := (float64(img.Pix[p-1])+float64(img.Pix[p+1]))/2 - sky
			along := (float64(img.Pix[p-width])+float64(img.Pix[p+width]))/2 - sky
			if math.Min(across/d, along/d) < 0.25 {
				for dj := -width; dj <= width; dj += width {
					for q := p + dj - 1; q <= p+dj+1; q++ {
						out[q>>6] |= 1 << (q & 63)
					}
				}
			}
		}
	}
	return out
}

// bin holds the pixels of one range of levels.
type bin struct {
	fourth, second []float64
	level          float64 // sum, then mean
	count          int     // of all pixels, also those beyond maxInBin
}

// Measure looks at a frame in counts; flags may be nil. Its time is that of
// about four million pixels however large the frame is.
func Measure(img *frame.Image, flags *frame.Mask) *Result {
	nan := math.NaN()
	r := &Result{Sky: nan, Noise: nan, NoiseErr: nan, Gain: nan, GainErr: nan, ReadNoise: nan, ReadNoiseErr: nan, Highest: nan, Chi2: nan}
	every := 1 + min(img.Width*img.Height, maxPixels)/maxSample
	room := min(img.Width*img.Height, maxPixels)/every + img.Width
	boxes, fourths, seconds := make([]float64, 0, room), make([]float64, 0, room), make([]float64, 0, room)
	highest := math.Inf(-1)
	n := 0
	each(img, flags, nil, func(s *sums) {
		for i := 2; i < img.Width-2; i++ {
			if b := s.box[i]; b-b == 0 && s.fourth[i]-s.fourth[i] == 0 {
				highest = math.Max(highest, b)
				if n++; n%every == 0 {
					boxes, fourths, seconds = append(boxes, b), append(fourths, s.fourth[i]), append(seconds, s.second[i])
				}
			}
		}
	})
	if len(boxes) < 500 {
		r.Why = "too few usable pixels"
		return r
	}
	sorted := slices.Clone(boxes)
	slices.Sort(sorted)
	// The sky is where most pixels are. Their level and noise go together, so
	// that both are of one place of the gradient.
	from, to := quantile(sorted, 0.2), quantile(sorted, 0.6)
	sky4, sky2 := make([]float64, 0, len(boxes)/2), make([]float64, 0, len(boxes)/2)
	sum := 0.0
	for k, b := range boxes {
		if b >= from && b <= to {
			sum += b
			sky4, sky2 = append(sky4, fourths[k]), append(sky2, seconds[k])
		}
	}
	r.Sky, r.Noise = sum/float64(len(sky4)), math.Sqrt(variance(sky4))
	r.NoiseErr = r.Noise * (0.5*math.Sqrt(effective/float64(len(sky4))) + 0.003)
	if !(r.Noise > 0) {
		r.Why = "the pixels of the sky have no noise"
		return r
	}
	if ratio := variance(sky2) / variance(sky4); ratio > 1.12 || ratio < 0.9 {
		r.Why = fmt.Sprintf("the noise is not white (second and fourth differences disagree by a factor %.2f): the frame was resampled or smoothed, or is very crowded", ratio)
		return r
	}

	// Bins: equal numbers of pixels in the bulk, equal factors above it.
	var edges []float64
	for q := 0.0; q < 0.96; q += 0.12 {
		edges = append(edges, quantile(sorted, q))
	}
	for up := math.Max(quantile(sorted, 0.97)-r.Sky, 2*r.Noise); r.Sky+up < highest && len(edges) < 60; up *= 1.5 {
		edges = append(edges, r.Sky+up)
	}
	bins := make([]bin, len(edges))
	hit := hits(img, r.Sky, r.Noise)
	each(img, flags, hit, func(s *sums) {
		for i := 2; i < img.Width-2; i++ {
			b := s.box[i]
			if !(b >= edges[0]) || s.fourth[i]-s.fourth[i] != 0 {
				continue
			}
			k, found := slices.BinarySearch(edges, b)
			if !found {
				k--
			}
			c := &bins[k]
			c.level += s.level[i]
			c.count++
			if len(c.fourth) < maxInBin {
				if len(c.fourth) == 1024 { // most such bins fill up
					c.fourth, c.second = slices.Grow(c.fourth, maxInBin-1024), slices.Grow(c.second, maxInBin-1024)
				}
				c.fourth, c.second = append(c.fourth, s.fourth[i]), append(c.second, s.second[i])
			} else if c.count%13 == 0 { // later rows take part too
				k := c.count / 13 % maxInBin
				c.fourth[k], c.second[k] = s.fourth[i], s.second[i]
			}
		}
	})
	r.fit(bins)
	return r
}

// fit solves the photon transfer.
func (r *Result) fit(bins []bin) {
	var level, v, relative []float64 // mean level, variance, relative variance of the variance
	for _, b := range bins {
		if b.count < 60 {
			continue
		}
		v4, v2 := variance(b.fourth), variance(b.second)
		if !(v4 > 0) || v2/v4 > 4 || v2/v4 < 0.96 {
			continue // forms of stars, or hits and hot pixels
		}
		level, v = append(level, b.level/float64(b.count)), append(v, v4)
		relative = append(relative, effective/float64(len(b.fourth))+0.01*0.01)
	}
	r.Levels = len(level)
	one := fmt.Sprintf("away from the sky of %.4g count too few pixels show their noise to part the two", r.Sky)
	if len(level) < 3 {
		r.Why = one
		return
	}
	// What is no noise can only add to the variance: as long as the line does
	// not hold, the bin farthest above it is dropped.
	for len(level) >= 3 {
		p, covariance, chi2, ok := transfer(level, v, relative, r.Sky)
		if !ok {
			break
		}
		r.Levels, r.Highest, r.Chi2 = len(level), slices.Max(level), chi2
		if chi2 > 1.6 && len(level) > 5 {
			worst, most := 0, math.Inf(-1)
			for k := range level {
				model := p[0] + p[1]*level[k] + p[2]*(level[k]-r.Sky)*(level[k]-r.Sky)
				if d := (v[k] - model) / (model * math.Sqrt(relative[k])); d > most {
					worst, most = k, d
				}
			}
			level, v, relative = slices.Delete(level, worst, worst+1), slices.Delete(v, worst, worst+1), slices.Delete(relative, worst, worst+1)
			continue
		}
		slope, slopeErr := p[1], math.Sqrt(covariance[1][1]*math.Max(1, chi2))
		if !(slope > 0) || slopeErr > maxGainError*slope || chi2 > 4 {
			break
		}
		r.Gain, r.GainErr = 1/slope, slopeErr/(slope*slope)
		// read noise² = p0/p1²
		square := p[0] / (slope * slope)
		d0, d1 := 1/(slope*slope), -2*p[0]/(slope*slope*slope)
		e := math.Sqrt(math.Max(1, chi2) * (d0*d0*covariance[0][0] + 2*d0*d1*covariance[0][1] + d1*d1*covariance[1][1]))
		if square > 0 {
			r.ReadNoise = math.Sqrt(square)
			r.ReadNoiseErr = e / (2 * r.ReadNoise)
		} else {
			r.ReadNoise = 0
		}
		if !(r.ReadNoiseErr < r.ReadNoise) { // no more than a limit
			r.ReadNoiseErr = math.Sqrt(math.Max(square, 0) + e)
		}
		return
	}
	r.Why = one
}

// transfer fits v = p0 + p1 level + p2 (level-sky)² with p2 ≥ 0, weights from
// the model itself. The covariance is that of p0 and p1.
func transfer(level, v, relative []float64, sky float64) (p [3]float64, covariance [2][2]float64, chi2 float64, ok bool) {
	model := slices.Clone(v)
	terms := 3
	if len(level) < 5 {
		terms = 2
	}
	unit := math.Max(slices.Max(level)-slices.Min(level), 1e-30)
	for round := 0; round < 12; round++ {
		var a [3][4]float64
		for k := range level {
			x := [3]float64{1, level[k] / unit, (level[k] - sky) * (level[k] - sky) / (unit * unit)}
			w := 1 / (model[k] * model[k] * relative[k])
			for i := range terms {
				for j := range terms {
					a[i][j] += w * x[i] * x[j]
				}
				a[i][3] += w * x[i] * v[k]
			}
		}
		inverse, good := invert(a, terms)
		if !good {
			return p, covariance, 0, false
		}
		p = [3]float64{}
		for i := range terms {
			for j := range terms {
				p[i] += inverse[i][j] * a[j][3]
			}
		}
		if terms == 3 && p[2] < 0 {
			terms = 2
			round-- // this one gave nothing
			continue
		}
		p[1], p[2] = p[1]/unit, p[2]/(unit*unit)
		covariance = [2][2]float64{{inverse[0][0], inverse[0][1] / unit}, {inverse[0][1] / unit, inverse[1][1] / (unit * unit)}}
		chi2 = 0
		least := slices.Min(v) / 2
		for k := range level {
			model[k] = math.Max(p[0]+p[1]*level[k]+p[2]*(level[k]-sky)*(level[k]-sky), least)
			d := v[k] - model[k]
			chi2 += d * d / (model[k] * model[k] * relative[k])
		}
		chi2 /= math.Max(1, float64(len(level)-terms))
	}
	return p, covariance, chi2, true
}

// invert returns the inverse of the leading n × n part by Gauss and Jordan.
func invert(a [3][4]float64, n int) (inverse [3][3]float64, ok bool) {
	for i := range n {
		inverse[i][i] = 1
	}
	for c := range n {
		best := c
		for r := c + 1; r < n; r++ {
			if math.Abs(a[r][c]) > math.Abs(a[best][c]) {
				best = r
			}
		}
		if !(math.Abs(a[best][c]) > 0) {
			return inverse, false
		}
		a[c], a[best] = a[best], a[c]
		inverse[c], inverse[best] = inverse[best], inverse[c]
		f := 1 / a[c][c]
		for k := range n {
			a[c][k] *= f
			inverse[c][k] *= f
		}
		for r := range n {
			if r == c {
				continue
			}
			f := a[r][c]
			for k := range n {
				a[r][k] -= f * a[c][k]
				inverse[r][k] -= f * inverse[c][k]
			}
		}
	}
	return inverse, true
}

// variance is that of a Gaussian with the same tenth and ninetieth
// percentiles. It reorders x.
func variance(x []float64) float64 {
	sigma := (robust.Percentile(x, 90) - robust.Percentile(x, 10)) / (2 * 1.2815515655446004)
	return sigma * sigma
}

// quantile interpolates in a sorted slice.
func quantile(sorted []float64, q float64) float64 {
	at := q * float64(len(sorted)-1)
	k := int(at)
	if k+1 >= len(sorted) {
		return sorted[len(sorted)-1]
	}
	f := at - float64(k)
	return sorted[k]*(1-f) + sorted[k+1]*f
}
