package align

import (
	"cmp"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/outside"
	"nightsift/internal/stars"
)

func TestTransformDerivativesAndInverse(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 31))
	for _, mirrored := range []bool{false, true} {
		tr := bent(33, 1.2, mirrored, 1000, 800, 5)
		for range 200 {
			x, y := 1000*r.Float64(), 800*r.Float64()
			xx, xy, yx, yy := tr.Jacobian(x, y)
			const h = 1e-3
			ax, ay := tr.Apply(x+h, y)
			bx, by := tr.Apply(x-h, y)
			cx, cy := tr.Apply(x, y+h)
			dx, dy := tr.Apply(x, y-h)
			for k, d := range []float64{xx - (ax-bx)/(2*h), yx - (ay-by)/(2*h), xy - (cx-dx)/(2*h), yy - (cy-dy)/(2*h)} {
				if math.Abs(d) > 1e-8 {
					t.Fatalf("derivative %d at (%.1f,%.1f) differs from finite differences by %g", k, x, y, d)
				}
			}
			u, v := tr.Apply(x, y)
			x2, y2, ok := tr.Inverse(u, v)
			if !ok || math.Abs(x2-x)+math.Abs(y2-y) > 1e-8 {
				t.Fatalf("inverse of (%.3f,%.3f) gives (%.3f,%.3f), %v", x, y, x2, y2, ok)
			}
		}
	}
}

// Against scipy.linalg.lstsq on numpy's Legendre matrix.
func TestFitAgainstScipy(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 31))
	for order := 1; order <= MaxOrder; order++ {
		truth := bent(200, 0.9, true, 2000, 1500, 8)
		var s []sample
		for range 120 {
			p := sample{x: 1 + 2000*r.Float64(), y: 1 + 1500*r.Float64(), sigma2: math.Pow(10, -4+3*r.Float64())}
			p.u, p.v = truth.Apply(p.x, p.y)
			p.u += math.Sqrt(p.sigma2) * r.NormFloat64()
			p.v += math.Sqrt(p.sigma2) * r.NormFloat64()
			s = append(s, p)
		}
		sol, ok := fitOnce(s, nil, order, uniform(0.03))
		if !ok {
			t.Fatalf("order %d: no solution", order)
		}
		var in strings.Builder
		fmt.Fprintf(&in, "%d %.17g %.17g %.17g %.17g", order, sol.t.X0, sol.t.Y0, sol.t.HalfX, sol.t.HalfY)
		for _, p := range s {
			fmt.Fprintf(&in, " %.17g %.17g %.17g %.17g %.17g", p.x, p.y, p.u, p.v, 1/math.Sqrt(p.sigma2+0.03*0.03))
		}
		out := outside.Python(t, `
import sys, json, numpy as np
from scipy.linalg import lstsq
from numpy.polynomial import legendre as L
a = np.array(sys.argv[1].split(), float)
order = int(a[0]); x0, y0, hx, hy = a[1:5]
x, y, u, v, w = a[5:].reshape(-1, 5).T
p, q = L.legvander((x-x0)/hx, order), L.legvander((y-y0)/hy, order)
A = np.stack([p[:, n-j]*q[:, j] for n in range(order+1) for j in range(n+1)], 1)
Aw = A*w[:, None]
cov = np.linalg.inv(Aw.T@Aw)
b = A[7]
json.dump({"cx": list(lstsq(Aw, u*w)[0]), "cy": list(lstsq(Aw, v*w)[0]), "error": float(np.sqrt(b@cov@b))}, sys.stdout)
`, in.String())
		var want struct {
			CX, CY []float64
			Error  float64
		}
		if err := json.Unmarshal(out, &want); err != nil {
			t.Fatal(err)
		}
		for k := range want.CX {
			if math.Abs(want.CX[k]-sol.t.CX[k]) > 1e-8 || math.Abs(want.CY[k]-sol.t.CY[k]) > 1e-8 {
				t.Errorf("order %d, term %d: (%.12g, %.12g), scipy gives (%.12g, %.12g)", order, k, sol.t.CX[k], sol.t.CY[k], want.CX[k], want.CY[k])
			}
		}
		if got := sol.predictedError(s[7].x, s[7].y); math.Abs(got/want.Error-1) > 1e-6 {
			t.Errorf("order %d: predicted error %g, numpy gives %g", order, got, want.Error)
		}
	}
}

func TestChooseOrderFindsTheOrder(t *testing.T) {
	for order := 1; order <= MaxOrder; order++ {
		wrong := 0
		for seed := range uint64(20) {
			r := rand.New(rand.NewPCG(seed, 32))
			truth := fromAffine(affine{xx: 1, yy: 1}, 2000, 2000)
			truth.Order = order
			truth.CX = append(truth.CX, make([]float64, terms(order)-3)...)
			truth.CY = append(truth.CY, make([]float64, terms(order)-3)...)
			if order > 1 {
				truth.CX[terms(order)-1] = 0.1
				truth.CY[terms(order)-2] = 0.1
			}
			var s []sample
			for range 400 {
				p := sample{x: 1 + 2000*r.Float64(), y: 1 + 2000*r.Float64(), sigma2: 0.0004 + 0.01*r.Float64()}
				p.u, p.v = truth.Apply(p.x, p.y)
				p.u += math.Sqrt(p.sigma2) * r.NormFloat64()
				p.v += math.Sqrt(p.sigma2) * r.NormFloat64()
				s = append(s, p)
			}
			f, ok := chooseOrder(s, nil, MaxOrder, 0.001, 5, nil, nil)
			if !ok {
				t.Fatal("no fit")
			}
			if f.solution.t.Order != order {
				wrong++
			}
		}
		if wrong > 2 {
			t.Errorf("order %d: wrong in %d of 20 trials", order, wrong)
		}
	}
}

// starLists invents the lists of two frames: ref sees the sky as it is, the
// new frame through the inverse of truth.
func starLists(r *rand.Rand, n int, truth *Transform, width, height, refWidth, refHeight float64, floor float64) (a, b *stars.List) {
	a, b = &stars.List{FWHM: 3}, &stars.List{FWHM: 3}
	m := max(refWidth, refHeight)
	for range n {
		u, v := refWidth/2+1.5*m*(2*r.Float64()-1)/1, refHeight/2+1.5*m*(2*r.Float64()-1)
		flux := 800 / math.Pow(r.Float64(), 1.2)
		one := func(x, y, w, h, f, noise float64, list *stars.List) {
			if x < 0.5 || y < 0.5 || x > w+0.5 || y > h+0.5 {
				return
			}
			f *= 1 + 0.01*r.NormFloat64()
			sn := f / math.Sqrt(f+noise*noise)
			if sn < 5 {
				return
			}
			e := 1.3 / sn
			list.Stars = append(list.Stars, stars.Star{
				X: x + math.Hypot(e, floor)*r.NormFloat64(), Y: y + math.Hypot(e, floor)*r.NormFloat64(), XErr: e, YErr: e,
				Flux: f + f/sn*r.NormFloat64(), FluxErr: f / sn, SN: sn, FWHM: 3, Mxx: 2, Myy: 1.5, Mxy: 0.3, Clean: sn > 20, Peak: f / 10, Neighbour: 40,
			})
		}
		one(u, v, refWidth, refHeight, flux, 60, b)
		if x, y, ok := truth.Inverse(u, v); ok {
			one(x, y, width, height, 0.7*flux, 150, a)
		}
	}
	for _, l := range []*stars.List{a, b} {
		slices.SortStableFunc(l.Stars, func(p, q stars.Star) int {
			if p.Flux > q.Flux {
				return -1
			}
			return 1
		})
	}
	return a, b
}

func listsOnly(name string, w, h float64) *frame.Frame {
	f := frame.New(name, &frame.Image{Width: int(w), Height: int(h)})
	return f
}

// shifted moves a transform's images.
func shifted(t *Transform, dx, dy float64) *Transform {
	t.CX[0] += dx
	t.CY[0] += dy
	return t
}

// solve runs the geometric part on two star lists.
func solve(a, b *stars.List, w, h, rw, rh float64) (*Pair, error) {
	cfg := DefaultConfig()
	f := listsOnly("new", w, h)
	ref := &PreparedReference{Frame: listsOnly("ref", rw, rh), Stars: b}
	g := newGeometry(f, a, ref, cfg)
	if err := g.find(context.Background()); err != nil {
		return nil, err
	}
	if err := g.refine(context.Background()); err != nil {
		return nil, err
	}
	p := &Pair{New: f, NewStars: a}
	return p, g.fillPair(p)
}

func TestRefineReachesTheCentroidNoise(t *testing.T) {
	const n = 4096
	for _, c := range []struct {
		name     string
		stars    int
		truth    *Transform
		floor    float64
		w, h     float64
		accuracy float64 // px, of the transform in the common area
		rms      float64 // px, of bright stars
	}{
		{"plain", 40000, bent(12, 1, false, n, n, 0), 0, n, n, 0.004, 0.02},
		{"distorted", 40000, bent(12, 1.01, false, n, n, 8), 0, n, n, 0.02, 0.02},
		{"strongly distorted, mirrored", 60000, bent(178, 1, true, n, n, 25), 0, n, n, 0.02, 0.02},
		{"turbulent", 40000, bent(90, 1, false, n, n, 3), 0.08, n, n, 0.08, 0.2},
		{"few", 400, bent(90, 1, false, n, n, 0), 0, n, n, 0.05, 0.1},
		{"small", 30000, bent(-40, 1, false, 1024, 1024, 0), 0, 1024, 1024, 0.03, 0.07},
		{"a fifth in common", 60000, shifted(bent(33, 1, false, n, n, 4), 2300, 2000), 0, n, n, 0.05, 0.03},
		{"crowded", 180000, bent(3, 1, false, n, n, 8), 0, n, n, 0.02, 0.02},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := rand.New(rand.NewPCG(7, 33))
			a, b := starLists(r, c.stars, c.truth, c.w, c.h, n, n, c.floor)
			p, err := solve(a, b, c.w, c.h, n, n)
			if err != nil {
				t.Fatal(err)
			}
			worst := 0.0
			for j := range 17 {
				for i := range 17 {
					x, y := 1+(c.w-1)*float64(i)/16, 1+(c.h-1)*float64(j)/16
					u, v := c.truth.Apply(x, y)
					gu, gv := p.Transform.Apply(x, y)
					if u < -200 || v < -200 || u > n+200 || v > n+200 {
						if gu > 0 && gv > 0 && gu < n && gv < n {
							t.Errorf("(%.0f,%.0f), far outside the reference, is mapped into it", x, y)
						}
						continue
					}
					if u < 1 || v < 1 || u > n || v > n {
						continue
					}
					worst = max(worst, math.Hypot(gu-u, gv-v))
				}
			}
			t.Logf("%d and %d stars, %d matched, order %d, worst error %.4f px, rms bright %.4f %.4f (%d), all %.3f, floor %.4f, flux scale %.4f ± %.4f",
				len(a.Stars), len(b.Stars), len(p.Matches), p.Transform.Order, worst, p.RMSX, p.RMSY, p.BrightStars, p.RMSXAll, p.Floor, p.FluxScale, p.FluxScaleErr)
			if worst > c.accuracy {
				t.Errorf("transform off by %.4f px, want below %.4f", worst, c.accuracy)
			}
			if c.floor == 0 && p.RMS() > c.rms || c.floor > 0 && math.Abs(p.Floor/(c.floor*math.Sqrt2)-1) > 0.15 {
				t.Errorf("rms %.4f, floor %.4f px", p.RMS(), p.Floor)
			}
			if math.Abs(p.FluxScale-0.7) > 0.01+4*p.FluxScaleErr {
				t.Errorf("flux scale %.4f ± %.4f, want 0.7", p.FluxScale, p.FluxScaleErr)
			}
			// The errors given explain the residuals.
			var chi2 float64
			k := 0
			for _, m := range p.Matches {
				if m.Used {
					s, q := p.NewStars.Stars[m.New], p.ReferenceStars[m.Reference]
					chi2 += (m.DX*m.DX + m.DY*m.DY) / (s.XErr*s.XErr + q.XErr*q.XErr + p.Floor*p.Floor) / 2
					k++
				}
			}
			// A floor of at least 0.01 px is added, which these stars do not need.
			if c := chi2 / float64(k); c < 0.75 || c > 1.1+5*math.Sqrt(1/float64(k)) {
				t.Errorf("chi-square per freedom of %d stars is %.3f", k, chi2/float64(k))
			}
		})
	}
}

func TestPoorAlignmentIsRefused(t *testing.T) {
	const n = 2048
	r := rand.New(rand.NewPCG(9, 34))
	a, b := starLists(r, 8000, bent(3, 1, false, n, n, 0), n, n, n, n, 0.4)
	_, err := solve(a, b, n, n, n, n)
	problem(t, err, frame.ProblemAlignmentPoor)
}

// Lists of eight stars in common with as many others on either side.
func TestEightCommonStars(t *testing.T) {
	const n = 2048
	found := 0
	const trials = 40
	for seed := range uint64(trials) {
		r := rand.New(rand.NewPCG(seed, 35))
		truth := bent(360*r.Float64(), 1, seed%2 == 0, n, n, 0)
		list := func() *stars.List { return &stars.List{FWHM: 3} }
		a, b := list(), list()
		star := func(x, y, flux float64) stars.Star {
			return stars.Star{X: x + 0.05*r.NormFloat64(), Y: y + 0.05*r.NormFloat64(), XErr: 0.05, YErr: 0.05, Flux: flux, FluxErr: flux / 50, SN: 50, FWHM: 3, Clean: true, Neighbour: 100}
		}
		for range 8 {
			for {
				x, y := 1+(n-1)*r.Float64(), 1+(n-1)*r.Float64()
				u, v := truth.Apply(x, y)
				if u > 1 && v > 1 && u < n && v < n {
					f := 1000 / r.Float64()
					a.Stars, b.Stars = append(a.Stars, star(x, y, f)), append(b.Stars, star(u, v, f))
					break
				}
			}
		}
		for range 8 {
			a.Stars = append(a.Stars, star(1+(n-1)*r.Float64(), 1+(n-1)*r.Float64(), 1000/r.Float64()))
			b.Stars = append(b.Stars, star(1+(n-1)*r.Float64(), 1+(n-1)*r.Float64(), 1000/r.Float64()))
		}
		for _, l := range []*stars.List{a, b} {
			slices.SortStableFunc(l.Stars, func(p, q stars.Star) int { return cmp.Compare(q.Flux, p.Flux) })
		}
		p, err := solve(a, b, n, n, n, n)
		if err != nil {
			t.Logf("seed %d: %v", seed, err)
			continue
		}
		u, v := truth.Apply(n/2, n/2)
		gu, gv := p.Transform.Apply(n/2, n/2)
		if math.Hypot(gu-u, gv-v) > 0.3 {
			t.Errorf("seed %d: a wrong transform was accepted, off by %.1f px", seed, math.Hypot(gu-u, gv-v))
		}
		found++
	}
	t.Logf("found %d of %d", found, trials)
	if found < trials*9/10 {
		t.Errorf("found %d of %d", found, trials)
	}
}

// Ten stars hold the transform among many galaxies whose light moved, bright
// ones before all, and the galaxies do not pass for badly aligned stars.
func TestFewStarsAmongGalaxies(t *testing.T) {
	const n = 1024
	var errs []float64
	for seed := range uint64(20) {
		r := rand.New(rand.NewPCG(seed, 36))
		truth := bent(3, 1, false, n, n, 0)
		a, b := &stars.List{FWHM: 3.5}, &stars.List{FWHM: 3}
		for i := range 50 {
			x, y := 20+(n-40)*r.Float64(), 20+(n-40)*r.Float64()
			u, v := truth.Apply(x, y)
			sn := 15 * math.Pow(10, r.Float64())
			e, moved, ratio := 1.8/sn, 0.0, 0.7
			if i >= 10 {
				moved, ratio = 0.6, 0.7+3*r.Float64()
			}
			one := func(x, y, e, flux float64) stars.Star {
				return stars.Star{X: x + e*r.NormFloat64(), Y: y + e*r.NormFloat64(), XErr: e, YErr: e, Flux: flux, FluxErr: flux / sn, SN: sn, FWHM: 3,
					Extended: i >= 10, Clean: i < 10 && sn > 20, Neighbour: 100}
			}
			s := one(x, y, e, 100*sn*ratio)
			s.X, s.Y = s.X+moved*r.NormFloat64(), s.Y+moved*r.NormFloat64()
			a.Stars = append(a.Stars, s)
			b.Stars = append(b.Stars, one(u, v, e/4, 100*sn))
		}
		for _, l := range []*stars.List{a, b} {
			slices.SortStableFunc(l.Stars, func(p, q stars.Star) int { return cmp.Compare(q.Flux, p.Flux) })
		}
		p, err := solve(a, b, n, n, n, n)
		if err != nil {
			t.Errorf("seed %d: %v", seed, err)
			continue
		}
		sum := 0.0
		for j := range 5 {
			for i := range 5 {
				x, y := 1+(n-1)*float64(i)/4, 1+(n-1)*float64(j)/4
				u, v := truth.Apply(x, y)
				gu, gv := p.Transform.Apply(x, y)
				sum += ((gu-u)*(gu-u) + (gv-v)*(gv-v)) / 50
			}
		}
		errs = append(errs, math.Sqrt(sum))
	}
	slices.Sort(errs)
	t.Logf("errors %.3f (median) and %.3f px (largest)", errs[len(errs)/2], errs[len(errs)-1])
	// Ten stars of S/N 15 to 150, three coefficients: 0.02 to 0.04 px. The
	// galaxies alone would leave 0.15 px.
	if errs[len(errs)/2] > 0.05 || errs[len(errs)-1] > 0.12 {
		t.Errorf("transforms off by %.3f (median) and %.3f px (largest)", errs[len(errs)/2], errs[len(errs)-1])
	}
}
