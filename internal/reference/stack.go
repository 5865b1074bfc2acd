package reference

import (
	"context"
	"math"
	"os"

	"golang.org/x/sync/errgroup"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// layer is one frame of the stack.
type layer struct {
	part        *part
	scale       float64 // counts of the stack for one of its own
	gain        float64 // electron per own count; +Inf if unknown
	weight      float64 // of the mean
	variance    float64 // count² of the stack, typical
	shift       float64 // px, 1 sigma, of what registering leaves
	uncertainty float64 // relative, of its point-spread function
}

// stacked is the sum of layers.
type stacked struct {
	mean, proper         *frame.Image // count; proper is nil unless asked for
	variance, properVar  *frame.Image // count², of the sky
	used, outliers       *frame.Image // frames in a pixel, frames left out there as outliers
	saturated            []bool
	rejected, considered []float64 // pixels of each layer
}

// stacker adds layers.
type stacker struct {
	layers        []layer
	width, height int
	clip          float64
	proper        bool
	workers       int
	observe       func(done, total int)
}

// Rejection knows these limits of the prediction.
const (
	fewestToClip = 3 // of fewer values none can be told to be the wrong one

	// Relative error of the predicted light, and of the difference between
	// prediction and stack, in the first round, whose stack is a median, and in
	// the second.
	roughLight, fineLight = 0.03, 0.006
	roughShape, fineShape = 0.5, 0.15
	leastShift            = 0.02 // px
	footprint             = 0.05 // sigma, to which the profile of a rejected source is followed
)

// Bits of a pixel of one layer.
const (
	covered uint8 = 1 << iota
	good          // covered and without defect
	full          // saturated or bled
	outlier
)

func (s *stacker) run(ctx context.Context) (*stacked, error) {
	n := len(s.layers)
	out := &stacked{mean: frame.NewImage(s.width, s.height), variance: frame.NewImage(s.width, s.height),
		used: frame.NewImage(s.width, s.height), outliers: frame.NewImage(s.width, s.height), saturated: make([]bool, s.width*s.height),
		rejected: make([]float64, n), considered: make([]float64, n)}
	if s.proper {
		out.proper, out.properVar = frame.NewImage(s.width, s.height), frame.NewImage(s.width, s.height)
	}
	tiles := tiling(s.width, s.height)
	// Tiles are added in their order, so that the sums over seams do not depend
	// on who was first.
	queue := make(chan int)
	slots := make([]chan *patch, len(tiles))
	for k := range slots {
		slots[k] = make(chan *patch, 1)
	}
	ahead := make(chan struct{}, s.workers+2)
	group, ctx := errgroup.WithContext(ctx)
	group.Go(func() error {
		defer close(queue)
		for k := range tiles {
			select {
			case ahead <- struct{}{}:
			case <-ctx.Done():
				return ctx.Err()
			}
			select {
			case queue <- k:
			case <-ctx.Done():
				return ctx.Err()
			}
		}
		return nil
	})
	for range s.workers {
		group.Go(func() error {
			w := newWorker(s)
			for k := range queue {
				p, err := w.tile(k, tiles[k])
				if err != nil {
					return err
				}
				slots[k] <- p
			}
			return nil
		})
	}
	group.Go(func() error {
		for k := range tiles {
			select {
			case p := <-slots[k]:
				out.add(p)
				<-ahead
				if s.observe != nil {
					s.observe(k+1, len(tiles))
				}
			case <-ctx.Done():
				return ctx.Err()
			}
		}
		return nil
	})
	if err := group.Wait(); err != nil {
		return nil, err
	}
	return out, nil
}

// patch is the result of one tile, with its seams.
type patch struct {
	tile                          tile
	x0, y0, x1, y1                int // 0-based, behind the last
	mean, variance                []float32
	proper, properVar             []float32
	used, outliers                []float32
	saturated                     []bool
	rejectedPixels, countedPixels []float64
}

func (o *stacked) add(p *patch) {
	width, height := o.mean.Width, o.mean.Height
	n := 0
	for y := p.y0; y < p.y1; y++ {
		by := blend(y, p.tile.y0, p.tile.y1, height)
		for x := p.x0; x < p.x1; x++ {
			b := by * blend(x, p.tile.x0, p.tile.x1, width)
			at := y*width + x
			o.mean.Pix[at] += b * p.mean[n]
			o.variance.Pix[at] += b * p.variance[n]
			if o.proper != nil {
				o.proper.Pix[at] += b * p.proper[n]
				o.properVar.Pix[at] += b * p.properVar[n]
			}
			if y >= p.tile.y0 && y < p.tile.y1 && x >= p.tile.x0 && x < p.tile.x1 {
				o.used.Pix[at], o.outliers.Pix[at], o.saturated[at] = p.used[n], p.outliers[n], p.saturated[n]
			}
			n++
		}
	}
	for j := range p.countedPixels {
		o.rejected[j] += p.rejectedPixels[j]
		o.considered[j] += p.countedPixels[j]
	}
}

// worker stacks tiles. It holds scratch: one a goroutine.
type worker struct {
	s        *stacker
	plan     *fft.Plan
	pixels   [][]float32 // of each layer, counts of the stack
	variance [][]float32 // of each layer's sky
	mask     [][]uint8
	psf      [][]complex64 // spectra of the point-spread functions, of sum 1
	stamps   [][]float32   // the functions themselves, size × size
	size     int
	active   []int

	flags            []frame.Flag
	bytes            []byte
	stack, predicted []float32
	resid, sigma     []float32
	score, sum, den  []float32
	next             []float32
	spec, work, gain []complex64
	stackPSF, zspec  []complex64
	properSum        []complex64
	properPow        []float32
}

func newWorker(s *stacker) *worker {
	w := &worker{s: s, plan: fft.NewPlan(tileSide, tileSide), flags: make([]frame.Flag, tileSide*tileSide), bytes: make([]byte, 4*tileSide)}
	n := tileSide * tileSide
	for _, p := range []*[]float32{&w.stack, &w.predicted, &w.resid, &w.sigma, &w.score, &w.sum, &w.den, &w.next} {
		*p = make([]float32, n)
	}
	m := w.plan.SpectrumLen()
	for _, p := range []*[]complex64{&w.spec, &w.work, &w.gain, &w.stackPSF, &w.zspec, &w.properSum} {
		*p = make([]complex64, m)
	}
	w.properPow = make([]float32, m)
	k := len(s.layers)
	w.pixels, w.variance, w.mask, w.psf, w.stamps = make([][]float32, k), make([][]float32, k), make([][]uint8, k), make([][]complex64, k), make([][]float32, k)
	for j := range s.layers {
		w.size = max(w.size, s.layers[j].part.PSFSize)
		w.pixels[j], w.variance[j], w.mask[j], w.psf[j] = make([]float32, n), make([]float32, n), make([]uint8, n), make([]complex64, m)
	}
	w.size = min(w.size, tileSide-1)
	for j := range s.layers {
		w.stamps[j] = make([]float32, w.size*w.size)
	}
	return w
}

// load reads the layers at a tile.
func (w *worker) load(k int, t tile) error {
	w.active = w.active[:0]
	x0, y0 := t.x0-tileHalo, t.y0-tileHalo
	for j := range w.s.layers {
		l := &w.s.layers[j]
		f, err := os.Open(l.part.path)
		if err != nil {
			return err
		}
		pix, mask := w.pixels[j], w.mask[j]
		err = l.part.window(f, pix, w.flags, x0, y0, tileSide, w.bytes)
		var stamp []float32
		if err == nil {
			stamp, err = l.part.stamp(f, k)
		}
		f.Close()
		if err != nil {
			return err
		}
		any := false
		scale := float32(l.scale)
		for p, bits := range w.flags {
			m := uint8(0)
			if bits&(frame.NoReference|frame.NoData|frame.UserMasked) == 0 {
				m, any = covered, true
				if bits&(frame.BadColumn|frame.CosmicRay|frame.Streak) == 0 {
					m |= good
				}
				if bits&(frame.Saturated|frame.Bleed) != 0 {
					m |= full
				}
			}
			mask[p] = m
			pix[p] *= scale
		}
		if !any {
			continue
		}
		w.active = append(w.active, j)
		v := w.variance[j]
		for b := range tileSide {
			for a := range tileSide {
				v[b*tileSide+a] = l.part.varianceAt(x0+a, y0+b) * scale * scale
			}
		}
		centre(w.stamps[j], w.size, stamp, l.part.PSFSize)
		w.transform(w.psf[j], w.stamps[j])
	}
	return nil
}

// centre copies one square stamp into the middle of another one.
func centre(dst []float32, side int, src []float32, from int) {
	clear(dst)
	h := min(side, from) / 2
	for j := -h; j <= h; j++ {
		copy(dst[(j+side/2)*side+side/2-h:][:2*h+1], src[(j+from/2)*from+from/2-h:])
	}
}

// transform turns a stamp into the spectrum of a function of sum one: light
// beyond the stamp is spread over the tile.
func (w *worker) transform(dst []complex64, stamp []float32) {
	fft.EmbedKernel(w.plan, w.next, stamp, w.size)
	sum := 0.0
	for _, v := range stamp {
		sum += float64(v)
	}
	rest := float32((1 - sum) / (tileSide * tileSide))
	for p := range w.next {
		w.next[p] += rest
	}
	w.plan.Forward(dst, w.next)
}

// tile works out one tile.
func (w *worker) tile(k int, t tile) (*patch, error) {
	if err := w.load(k, t); err != nil {
		return nil, err
	}
	s := w.s
	p := &patch{tile: t, x0: max(t.x0-tileSeam, 0), y0: max(t.y0-tileSeam, 0), x1: min(t.x1+tileSeam, s.width), y1: min(t.y1+tileSeam, s.height)}
	p.rejectedPixels, p.countedPixels = make([]float64, len(s.layers)), make([]float64, len(s.layers))
	n := (p.x1 - p.x0) * (p.y1 - p.y0)
	planes := make([]float32, 6*n)
	take := func() []float32 {
		q := planes[:n:n]
		planes = planes[n:]
		return q
	}
	p.mean, p.variance, p.proper, p.properVar, p.used, p.outliers = take(), take(), take(), take(), take(), take()
	p.saturated = make([]bool, n)
	if len(w.active) == 0 {
		return p, nil
	}
	w.median()
	w.medianPSF()
	w.round(roughLight, roughShape, false)
	w.meanPSF()
	w.round(fineLight, fineShape, s.proper)
	if s.proper {
		w.finishProper()
	}
	w.fill(p, t)
	return p, nil
}

// median sets the stack to the median of the layers.
func (w *worker) median() {
	values := make([]float32, 0, len(w.active))
	for p := range w.stack {
		values = values[:0]
		for _, want := range [...]uint8{good, covered} {
			for _, j := range w.active {
				if w.mask[j][p]&want != 0 {
					values = append(values, w.pixels[j][p])
				}
			}
			if len(values) > 0 {
				break
			}
		}
		switch len(values) {
		case 0:
			w.stack[p] = 0
		case 1:
			w.stack[p] = values[0]
		default:
			w.stack[p] = float32(robust.Median(values))
		}
	}
}

// medianPSF sets the stack's point-spread function to the median of the
// layers'.
func (w *worker) medianPSF() {
	stamp := make([]float32, w.size*w.size)
	values := make([]float32, len(w.active))
	for p := range stamp {
		for i, j := range w.active {
			values[i] = w.stamps[j][p]
		}
		stamp[p] = float32(robust.Median(values))
	}
	w.transform(w.stackPSF, stamp)
}

// meanPSF sets it to the weighted mean.
func (w *worker) meanPSF() {
	clear(w.stackPSF)
	sum := 0.0
	for _, j := range w.active {
		sum += w.s.layers[j].weight
	}
	for _, j := range w.active {
		fft.AddScaled(w.stackPSF, float32(w.s.layers[j].weight/sum), w.psf[j])
	}
}

// divisor fills gain with conj(S)/(|S|²+ε²), S the stack's point-spread
// function. ε is as small as the noise that the sharpest layer's prediction
// takes from the stack allows.
func (w *worker) divisor() {
	sharpest, most := w.active[0], 0.0
	total := 0.0
	for _, j := range w.active {
		if d := dot(w.stamps[j], w.stamps[j]); d > most {
			sharpest, most = j, d
		}
		total += 1 / w.s.layers[j].variance
	}
	allowed := 0.1 * w.s.layers[sharpest].variance * total
	for eps := float32(1e-4); ; eps *= 2 {
		var noise float64
		for i, q := range w.stackPSF {
			re, im := real(q), imag(q)
			d := re*re + im*im + eps*eps
			w.gain[i] = complex(re/d, -im/d)
			h := (w.psf[sharpest][i] - q) * w.gain[i]
			noise += float64(real(h)*real(h) + imag(h)*imag(h))
		}
		if noise/float64(len(w.stackPSF)) <= allowed || eps > 0.03 {
			return
		}
	}
}

// round predicts every layer from the stack, marks what departs from the
// prediction, and makes the stack anew.
func (w *worker) round(light, shape float64, proper bool) {
	w.divisor()
	w.plan.Forward(w.spec, w.stack)
	clear(w.sum)
	clear(w.den)
	if proper {
		clear(w.properSum)
		clear(w.properPow)
	}
	few := w.few()
	for _, j := range w.active {
		l := &w.s.layers[j]
		for i, q := range w.psf[j] {
			w.work[i] = w.spec[i] * (q - w.stackPSF[i]) * w.gain[i]
		}
		w.plan.Inverse(w.predicted, w.work)
		for p := range w.predicted {
			w.predicted[p] += w.stack[p]
		}
		w.judge(j, light, shape, few)
		weight := float32(l.weight * l.variance)
		mask, pix, v := w.mask[j], w.pixels[j], w.variance[j]
		for p, m := range mask {
			if m&covered == 0 {
				pix0 := w.predicted[p]
				w.resid[p] = pix0 // for the proper sum: what it would show
				continue
			}
			x := pix[p]
			if m&(good|outlier) != good {
				x = w.predicted[p]
			}
			w.resid[p] = x
			q := weight / v[p]
			w.sum[p] += q * x
			w.den[p] += q
		}
		if proper {
			w.addProper(j)
		}
	}
	for p, d := range w.den {
		if d > 0 {
			w.stack[p] = w.sum[p] / d
		}
	}
}

// few marks the pixels with too few values to tell which one is wrong.
func (w *worker) few() []bool {
	few := make([]bool, tileSide*tileSide)
	count := make([]uint16, tileSide*tileSide)
	for _, j := range w.active {
		for p, m := range w.mask[j] {
			if m&good != 0 {
				count[p]++
			}
		}
	}
	for p, c := range count {
		few[p] = c < fewestToClip
	}
	return few
}

// judge marks the outliers of a layer.
func (w *worker) judge(j int, light, shape float64, few []bool) {
	l := &w.s.layers[j]
	mask, pix, v, pred := w.mask[j], w.pixels[j], w.variance[j], w.predicted
	photons := float32(0)
	if l.gain > 0 && !math.IsInf(l.gain, 1) {
		photons = float32(l.scale / l.gain)
	}
	a := float32(math.Max(light, l.uncertainty))
	b := float32(shape)
	shift := float32(math.Max(leastShift, l.shift))
	limit := float32(w.s.clip)
	for p := range mask {
		mask[p] &^= outlier
	}
	for y := range tileSide {
		up, down := max(y-1, 0)*tileSide, min(y+1, tileSide-1)*tileSide
		for x := range tileSide {
			p := y*tileSide + x
			left, right := y*tileSide+max(x-1, 0), y*tileSide+min(x+1, tileSide-1)
			e := pred[p]
			gx, gy := (pred[right]-pred[left])/2, (pred[down+x]-pred[up+x])/2
			d := e - w.stack[p]
			q := v[p] + max(e, 0)*photons + a*a*e*e + b*b*d*d + shift*shift*(gx*gx+gy*gy)
			sigma := float32(math.Sqrt(float64(q)))
			w.sigma[p] = sigma
			w.resid[p] = 0
			if mask[p]&good != 0 && !few[p] {
				w.resid[p] = (pix[p] - e) / sigma
			}
		}
	}
	// Single pixels, and what touches them.
	for y := range tileSide {
		for x := range tileSide {
			z := w.resid[y*tileSide+x]
			if z < limit && z > -limit {
				continue
			}
			for b := max(y-1, 0); b <= min(y+1, tileSide-1); b++ {
				for a := max(x-1, 0); a <= min(x+1, tileSide-1); a++ {
					if q := w.resid[b*tileSide+a]; q > limit/2 || q < -limit/2 {
						mask[b*tileSide+a] |= outlier
					}
				}
			}
		}
	}
	// Sources that change, over their whole profile.
	w.plan.Forward(w.zspec, w.resid)
	fft.MultiplyConj(w.zspec, w.zspec, w.psf[j])
	w.plan.Inverse(w.score, w.zspec)
	stamp := w.stamps[j]
	norm := float32(math.Sqrt(dot(stamp, stamp)))
	limit *= norm
	h := w.size / 2
	for y := 1; y < tileSide-1; y++ {
		for x := 1; x < tileSide-1; x++ {
			p := y*tileSide + x
			z := w.score[p]
			if z < 0 {
				z = -z
			}
			if z < limit || !w.peak(p, z) {
				continue
			}
			// In units of the noise of a pixel here.
			flux := z / (norm * norm)
			for b := max(y-h, 0); b <= min(y+h, tileSide-1); b++ {
				for a := max(x-h, 0); a <= min(x+h, tileSide-1); a++ {
					q := b*tileSide + a
					if flux*stamp[(b-y+h)*w.size+a-x+h]*w.sigma[p] > footprint*w.sigma[q] {
						mask[q] |= outlier
					}
				}
			}
		}
	}
	for p := range mask {
		if few[p] {
			mask[p] &^= outlier
		}
	}
}

// peak tells whether the score at p is the largest around it in absolute value.
func (w *worker) peak(p int, z float32) bool {
	for _, d := range [...]int{-tileSide - 1, -tileSide, -tileSide + 1, -1, 1, tileSide - 1, tileSide, tileSide + 1} {
		if q := w.score[p+d]; q > z || -q > z {
			return false
		}
	}
	return true
}

// addProper adds a layer, as filled in by round, to the sums of proper
// coaddition.
func (w *worker) addProper(j int) {
	inverse := float32(1 / w.s.layers[j].variance)
	w.plan.Forward(w.work, w.resid)
	for i, q := range w.psf[j] {
		re, im := real(q), imag(q)
		w.properSum[i] += complex(inverse*re, -inverse*im) * w.work[i]
		w.properPow[i] += inverse * (re*re + im*im)
	}
}

// finishProper turns the sums into the coadded image, in predicted.
func (w *worker) finishProper() {
	total := 0.0
	for _, j := range w.active {
		total += 1 / w.s.layers[j].variance
	}
	scale := 1 / math.Sqrt(total)
	for i, q := range w.properSum {
		f := float32(0)
		if w.properPow[i] > 0 {
			f = float32(scale / math.Sqrt(float64(w.properPow[i])))
		}
		w.work[i] = q * complex(f, 0)
	}
	w.plan.Inverse(w.predicted, w.work)
}

// fill copies a tile's results.
func (w *worker) fill(out *patch, t tile) {
	n := 0
	for y := out.y0; y < out.y1; y++ {
		for x := out.x0; x < out.x1; x++ {
			p := (y-t.y0+tileHalo)*tileSide + x - t.x0 + tileHalo
			inCore := x >= t.x0 && x < t.x1 && y >= t.y0 && y < t.y1
			var top, sum, inverse float64
			for _, j := range w.active {
				l := &w.s.layers[j]
				m := w.mask[j][p]
				if inCore && m&covered != 0 {
					out.countedPixels[j]++
				}
				if m&full != 0 && l.weight > 0.02/float64(len(w.s.layers)) {
					out.saturated[n] = true
				}
				switch {
				case m&good == 0:
					continue
				case m&outlier != 0:
					out.outliers[n]++
					if inCore {
						out.rejectedPixels[j]++
					}
					continue
				}
				v := float64(w.variance[j][p])
				q := l.weight * l.variance / v
				sum += q
				top += q * q * v
				inverse += 1 / v
				out.used[n]++
			}
			if sum > 0 {
				out.mean[n], out.variance[n] = w.stack[p], float32(top/(sum*sum))
				if w.s.proper {
					out.proper[n], out.properVar[n] = w.predicted[p], float32(1/inverse)
				}
			}
			n++
		}
	}
}
