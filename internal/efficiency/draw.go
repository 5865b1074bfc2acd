package efficiency

import (
	"hash/fnv"
	"io"
	"math"
	"math/rand/v2"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
	"nightsift/subtract"
)

// drawer draws sources for one frame.
type drawer struct {
	cfg    *Config
	d      *subtract.Difference
	fwhm   float64
	random *rand.Rand
	hosts  []host
}

// host is an extended source of the reference.
type host struct {
	x, y   float64 // FITS px
	radius float64 // px within which its light is sought
	flux   float64
}

// newDrawer prepares the draw. The stream of numbers depends on the seed, the
// frame and the kind of place, not on the order in which frames come.
func newDrawer(cfg *Config, d *subtract.Difference) (*drawer, error) {
	h := fnv.New64a()
	io.WriteString(h, d.Frame.Name+"\x00"+d.Frame.Checksum+"\x00"+string(cfg.Where))
	w := &drawer{cfg: cfg, d: d, fwhm: d.Info.FWHMNew, random: rand.New(rand.NewPCG(cfg.Seed, h.Sum64()))}
	if cfg.Where == OnSky {
		return w, nil
	}
	for i := range d.ReferenceStars {
		if s := &d.ReferenceStars[i]; isHost(s) && w.covered(s.X, s.Y) {
			w.hosts = append(w.hosts, host{s.X, s.Y, hostRadius(s, w.fwhm), s.Flux})
		}
	}
	if len(w.hosts) == 0 {
		return nil, frame.Problemf(ProblemNoGalaxies, "the reference shows no extended source on %s; put sources on the sky instead", d.Frame.Name)
	}
	return w, nil
}

// ProblemNoGalaxies is the slug of frames without a place to put sources.
const ProblemNoGalaxies = "no_galaxies"

func isHost(s *stars.Star) bool {
	return s.Extended && s.Flux > 0 && s.SN > 10 && s.Flags&frame.Unusable == 0 && !math.IsNaN(s.X+s.Y)
}

// hostRadius is where the light of a source ends, for the draw: three times the
// root of its second moments, at least one FWHM, at most 60 px.
func hostRadius(s *stars.Star, fwhm float64) float64 {
	r := 3 * math.Sqrt(math.Max(0, (s.Mxx+s.Myy)/2))
	if math.IsNaN(r) {
		r = 2 * fwhm
	}
	return math.Min(60, math.Max(r, fwhm))
}

// covered reports whether the place is on the frame and on the reference. What is
// masked for another reason stays: it is what a night misses.
func (w *drawer) covered(x, y float64) bool {
	i, j := int(math.Round(x))-1, int(math.Round(y))-1
	f := w.d.Flags
	return i >= 0 && j >= 0 && i < f.Width && j < f.Height && f.Row(j)[i]&(frame.NoReference|frame.NoData) == 0
}

// place is where a source goes.
type place struct {
	x, y         float64
	hostDistance float64
}

// round draws up to n places that keep their distance. It gives fewer where the
// frame, or its galaxies, hold no more.
func (w *drawer) round(n int) []place {
	var out []place
	space := spacing(w.fwhm)
	near := newNeighbours(space)
	add := func(p place) bool {
		if !w.covered(p.x, p.y) || near.any(p.x, p.y, space) {
			return false
		}
		near.add(p.x, p.y)
		out = append(out, p)
		return true
	}
	if w.cfg.Where == OnSky {
		width, height := float64(w.d.Flags.Width), float64(w.d.Flags.Height)
		for try := 0; len(out) < n && try < 50*n+1000; try++ {
			add(place{0.5 + width*w.random.Float64(), 0.5 + height*w.random.Float64(), math.NaN()})
		}
		return out
	}
	// Galaxies in random order, those of more light first more often: the
	// exponential times of Efraimidis & Spirakis 2006, Inf. Process. Lett. 97,
	// 181, for drawing without replacement.
	times := make([]float64, len(w.hosts))
	for i, h := range w.hosts {
		times[i] = w.random.ExpFloat64() / h.flux
	}
	for _, i := range sortedBy(len(times), func(a, b int) bool { return times[a] < times[b] }) {
		if len(out) >= n {
			break
		}
		h := w.hosts[i]
		for range 5 {
			if add(w.on(h)) {
				break
			}
		}
	}
	return out
}

// on draws a place on a galaxy.
func (w *drawer) on(h host) place {
	if w.cfg.Where == NearCores {
		sin, cos := math.Sincos(2 * math.Pi * w.random.Float64())
		r := w.cfg.CoreDistance
		return place{h.x + r*cos, h.y + r*sin, r}
	}
	// Among the pixels of the reference, as it was brought to the new frame, with
	// the light in each as its weight, and anywhere in the pixel.
	image := w.d.Reference
	x0, x1 := max(0, int(h.x-h.radius)-1), min(image.Width-1, int(h.x+h.radius))
	y0, y1 := max(0, int(h.y-h.radius)-1), min(image.Height-1, int(h.y+h.radius))
	light := func(x, y int) float64 {
		dx, dy := float64(x+1)-h.x, float64(y+1)-h.y
		v := float64(image.Row(y)[x])
		if dx*dx+dy*dy > h.radius*h.radius || !(v > 0) || math.IsInf(v, 0) {
			return 0
		}
		return v
	}
	total := 0.0
	for y := y0; y <= y1; y++ {
		for x := x0; x <= x1; x++ {
			total += light(x, y)
		}
	}
	left := total * w.random.Float64()
	px, py := h.x, h.y
	for y := y0; y <= y1 && left > 0; y++ {
		for x := x0; x <= x1 && left > 0; x++ {
			if l := light(x, y); l > 0 {
				left -= l
				px, py = float64(x+1), float64(y+1)
			}
		}
	}
	px += w.random.Float64() - 0.5
	py += w.random.Float64() - 0.5
	return place{px, py, math.Hypot(px-h.x, py-h.y)}
}

// The range of magnitudes relative to the limit of five sigma. Most sources go to
// where the fraction falls, the others to where the plateau is seen.
const (
	plateauFrom = -3.5
	fallFrom    = -1.3
	fallTo      = 0.8
	fallPart    = 0.75
)

// magnitudes draws n magnitudes relative to the limit, one from each of n strata,
// in random order. shift [mag] is by how much more light lies under the sources
// than on empty sky: the range grows by it towards the bright end.
func (w *drawer) magnitudes(n int, shift float64) []float64 {
	out := make([]float64, n)
	for i := range out {
		q := (float64(i) + w.random.Float64()) / float64(n)
		if q < fallPart {
			out[i] = fallTo - q/fallPart*(fallTo-fallFrom+shift)
		} else {
			out[i] = fallFrom - shift - (q-fallPart)/(1-fallPart)*(fallFrom-plateauFrom)
		}
	}
	w.random.Shuffle(n, func(a, b int) { out[a], out[b] = out[b], out[a] })
	return out
}

// shift tells how much brighter than on empty sky nine tenths of the places ask a
// source to be, for equal signal to noise, from the variance there [mag].
func (w *drawer) shift(places []place) float64 {
	if len(places) == 0 {
		return 0
	}
	sky := sq(w.d.Info.SkyNoise)
	var more []float64
	for _, p := range places {
		v := float64(w.d.Variance.Row(int(math.Round(p.y)) - 1)[int(math.Round(p.x))-1])
		m := 0.0
		if v > sky && sky > 0 && !math.IsInf(v, 0) {
			m = 1.25 * math.Log10(v/sky)
		}
		more = append(more, m)
	}
	order := sortedBy(len(more), func(a, b int) bool { return more[a] < more[b] })
	return math.Min(6, more[order[len(order)*9/10]])
}

// neighbours finds out whether a point is near others.
type neighbours struct {
	cell   float64
	bucket map[[2]int][][2]float64
}

func newNeighbours(cell float64) *neighbours {
	return &neighbours{cell, map[[2]int][][2]float64{}}
}

func (n *neighbours) key(x, y float64) [2]int {
	return [2]int{int(math.Floor(x / n.cell)), int(math.Floor(y / n.cell))}
}

func (n *neighbours) add(x, y float64) {
	k := n.key(x, y)
	n.bucket[k] = append(n.bucket[k], [2]float64{x, y})
}

// any reports a point nearer than r, which is at most the side of a cell.
func (n *neighbours) any(x, y, r float64) bool {
	k := n.key(x, y)
	for b := -1; b <= 1; b++ {
		for a := -1; a <= 1; a++ {
			for _, p := range n.bucket[[2]int{k[0] + a, k[1] + b}] {
				if math.Hypot(p[0]-x, p[1]-y) < r {
					return true
				}
			}
		}
	}
	return false
}
