package align

import (
	"context"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// sky is an invented field: positions in pixels of a plane with unit scale,
// magnitudes with the usual slope of star counts.
type skyStar struct {
	p   point
	mag float64
}

func inventSky(r *rand.Rand, n int, x0, y0, x1, y1 float64) []skyStar {
	s := make([]skyStar, n)
	for i := range s {
		// N(<m) ∝ 10^(0.3 m): m = log10(u)/0.3.
		s[i] = skyStar{point{x0 + (x1-x0)*r.Float64(), y0 + (y1-y0)*r.Float64()}, math.Log10(r.Float64()) / 0.3}
	}
	return s
}

// view is how a frame sees the sky: pixel = map(sky), with noise, lost stars
// and false ones.
type view struct {
	t             affine // sky to pixel
	width, height float64
	noise         float64 // px
	magNoise      float64
	lost          float64 // fraction
	extra         int
	limit         float64 // mag
	bend          float64 // px of cubic distortion at the corner
}

func (v view) see(r *rand.Rand, sky []skyStar) field {
	f := field{width: v.width, height: v.height}
	var mags []float64
	for _, s := range sky {
		if r.Float64() < v.lost {
			continue
		}
		m := s.mag + v.magNoise*r.NormFloat64()
		if m > v.limit {
			continue
		}
		q := v.t.apply(s.p)
		if v.bend != 0 {
			x, y := (q.x-v.width/2)/(v.width/2), (q.y-v.height/2)/(v.height/2)
			q.x += v.bend * x * (x*x + y*y) / 2
			q.y += v.bend * y * (x*x + y*y) / 2
		}
		q.x += v.noise * r.NormFloat64()
		q.y += v.noise * r.NormFloat64()
		if f.contains(q) {
			f.pts = append(f.pts, q)
			mags = append(mags, m)
		}
	}
	for range v.extra {
		f.pts = append(f.pts, point{0.5 + v.width*r.Float64(), 0.5 + v.height*r.Float64()})
		mags = append(mags, v.limit+math.Log10(r.Float64())/0.3)
	}
	order := make([]int, len(f.pts))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		if mags[a] < mags[b] {
			return -1
		}
		return 1
	})
	pts := make([]point, len(order))
	for i, k := range order {
		pts[i] = f.pts[k]
	}
	f.pts = pts
	return f
}

// turn returns the map that scales, mirrors (x) and rotates about the sky point
// c and puts c at pixel p.
func turn(deg, scale float64, mirrored bool, c, p point) affine {
	s, k := math.Sincos(deg * math.Pi / 180)
	m := 1.0
	if mirrored {
		m = -1
	}
	t := affine{xx: scale * k * m, xy: -scale * s, yx: scale * s * m, yy: scale * k}
	t.x0 = p.x - t.xx*c.x - t.xy*c.y
	t.y0 = p.y - t.yx*c.x - t.yy*c.y
	return t
}

func compose(outer, inner affine) affine {
	o := outer.apply(point{inner.x0, inner.y0})
	return affine{
		x0: o.x, xx: outer.xx*inner.xx + outer.xy*inner.yx, xy: outer.xx*inner.xy + outer.xy*inner.yy,
		y0: o.y, yx: outer.yx*inner.xx + outer.yy*inner.yx, yy: outer.yx*inner.xy + outer.yy*inner.yy,
	}
}

var anyScale = search{scaleLo: 0.1, scaleHi: 10, tolerance: 2, minStars: 6}
var knownScale = search{scaleLo: 0.97, scaleHi: 1.03, tolerance: 2, minStars: 6}

func TestHashMatchFindsTheTransform(t *testing.T) {
	const w = 2048
	centre := point{w / 2, w / 2}
	plain := turn(0, 1, false, centre, centre)
	cases := []struct {
		name  string
		stars int // on the sky of 3w × 3w centred on the reference
		new   view
		ref   view
		find  search
	}{
		{"same", 5000, view{t: plain}, view{}, knownScale},
		{"rotated 12°", 5000, view{t: turn(12, 1, false, centre, centre)}, view{}, knownScale},
		{"rotated 90°", 5000, view{t: turn(90, 1, false, centre, centre)}, view{}, knownScale},
		{"mirrored, rotated 201°", 5000, view{t: turn(201, 1, true, centre, centre)}, view{}, knownScale},
		{"scale 1 %", 5000, view{t: turn(3, 1.01, false, centre, centre)}, view{}, knownScale},
		{"scale 1 % unknown", 5000, view{t: turn(3, 1.01, false, centre, centre)}, view{}, anyScale},
		{"scale 2 unknown", 5000, view{t: turn(77, 2, false, centre, centre)}, view{}, anyScale},
		{"scale 0.4 mirrored unknown", 9000, view{t: turn(77, 0.4, true, centre, centre)}, view{}, anyScale},
		{"overlap 20 %", 5000, view{t: turn(5, 1, false, point{w/2 + 0.55*w, w/2 + 0.55*w}, centre)}, view{}, knownScale},
		{"overlap 10 %", 9000, view{t: turn(5, 1, false, point{w/2 + 0.68*w, w/2 - 0.68*w}, centre)}, view{}, knownScale},
		{"overlap 20 % any scale", 5000, view{t: turn(-35, 1, false, point{w/2 + 0.55*w, w/2 + 0.55*w}, centre)}, view{}, anyScale},
		{"lost and extra", 5000, view{t: turn(12, 1, false, centre, centre), lost: 0.3, extra: 200}, view{lost: 0.3, extra: 200}, knownScale},
		{"depths differ", 20000, view{t: turn(12, 1, false, centre, centre), limit: -1.5}, view{limit: 1}, knownScale},
		{"crowded", 100000, view{t: turn(12, 1, true, centre, centre), lost: 0.1}, view{lost: 0.1}, knownScale},
		{"distorted", 5000, view{t: turn(12, 1, false, centre, centre), bend: 12}, view{}, knownScale},
		{"few", 100, view{t: turn(140, 1, false, centre, centre)}, view{}, knownScale},
		{"small new frame", 20000, view{t: turn(30, 1, false, point{700, 1200}, point{256, 256}), width: 512, height: 512}, view{}, knownScale},
		{"large new frame", 20000, view{t: turn(30, 1, false, centre, centre)}, view{t: turn(0, 1, false, point{700, 1200}, point{256, 256}), width: 512, height: 512}, knownScale},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			const trials = 6
			for seed := range uint64(trials) {
				r := rand.New(rand.NewPCG(seed, 11))
				sky := inventSky(r, c.stars, -w, -w, 2*w, 2*w)
				for _, v := range []*view{&c.new, &c.ref} {
					if v.width == 0 {
						v.width, v.height = w, w
					}
					if v.t == (affine{}) {
						v.t = plain
					}
					v.noise, v.magNoise = 0.15, 0.1
				}
				a, b := c.new.see(r, sky), c.ref.see(r, sky)
				got, e, ok, err := hashMatch(context.Background(), a, b, c.find)
				if err != nil || !ok {
					t.Errorf("seed %d: not found (%d and %d stars): best %+v, error %v", seed, len(a.pts), len(b.pts), e, err)
					continue
				}
				back, _ := c.new.t.inverse()
				want := compose(c.ref.t, back)
				// Compare in the common area, by its lattice.
				worst := 0.0
				for j := range 9 {
					for i := range 9 {
						p := point{c.new.width * float64(i) / 8, c.new.height * float64(j) / 8}
						if q := want.apply(p); b.contains(q) {
							g := got.apply(p)
							worst = max(worst, math.Hypot(g.x-q.x, g.y-q.y)/want.scale())
						}
					}
				}
				if worst > 3+2*c.new.bend {
					t.Errorf("seed %d: off by %.2f px, evidence %+v", seed, worst, e)
				}
			}
		})
	}
}

// A pattern that is not there must not be found: independent skies of many
// densities, two hundred pairs.
func TestHashMatchRejectsOtherFields(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	const w = 2048
	centre := point{w / 2, w / 2}
	worst := 0.0
	for seed := range uint64(200) {
		r := rand.New(rand.NewPCG(seed, 12))
		n := []int{9, 25, 80, 250, 900, 3000}[seed%6]
		find := knownScale
		if seed%5 == 0 {
			find = anyScale
			n = min(n, 80)
		}
		v := view{t: turn(0, 1, false, centre, centre), width: w, height: w, limit: 1}
		a := v.see(r, inventSky(r, n, 0, 0, w, w))
		b := v.see(r, inventSky(r, n, 0, 0, w, w))
		_, e, ok, err := hashMatch(context.Background(), a, b, find)
		if err != nil || ok {
			t.Errorf("seed %d: two independent skies of %d stars matched: %+v, error %v", seed, n, e, err)
		}
		worst = min(worst, e.logOdds)
	}
	t.Logf("strongest false evidence: log10 odds %.1f, accepted below %.1f", worst, math.Log10(falseOdds))
}
