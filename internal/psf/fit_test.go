package psf

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// long skips a test of accuracy under the race detector.
func long(t *testing.T) {
	if raceDetector {
		t.Skip("accuracy is tested without the race detector")
	}
}

func fitScene(t *testing.T, s *scene) *Model {
	t.Helper()
	m, err := Fit(s.img, s.var_, s.flags, s.list, s.gain, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	return m
}

// Fluxes and shapes against the truth, which scene_test.go integrates by brute
// force from closed forms of unit flux.
func TestFitProfiles(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	for _, c := range []struct {
		name              string
		p                 density
		gap               float64
		mean, worst, norm float64
	}{
		{"moffat 2.5", trueMoffat(2.5, varying(3.5)), 36, 0.003, 0.008, 0.010},
		{"moffat 3.5", trueMoffat(3.5, varying(3.5)), 36, 0.003, 0.008, 0.010},
		{"moffat 4.5", trueMoffat(4.5, varying(3.5)), 36, 0.003, 0.008, 0.010},
		{"gauss", trueGauss(varying(3.5)), 36, 0.003, 0.006, 0.010},
		{"double gauss", mix(0.8, trueGauss(varying(3.2)), trueGauss(varying(6.5))), 36, 0.003, 0.008, 0.010},
		{"kolmogorov", kolmogorov(varying(3.5)), 36, 0.003, 0.008, 0.010},
		{"coma", coma(trueMoffat(3, varying(3.2)), 3.2), 36, 0.003, 0.010, 0.016},
		{"undersampled", trueMoffat(3, varying(1.8)), 30, 0.003, 0.010, 0.012},
		{"broad", trueMoffat(3.5, varying(8)), 50, 0.004, 0.012, 0.018},
	} {
		if raceDetector && c.name != "coma" {
			continue
		}
		t.Run(c.name, func(t *testing.T) {
			s := newScene(800, 800, c.p, 100, 2, 11)
			s.scatter(120, 3e3, 3e5, c.gap, 0.6, 36)
			s.expose(0.03)
			m := fitScene(t, s)
			mean, worst, norm := compare(m, s)
			t.Logf("stars %d-%d, order %d, grid %d, beta %.2f, c %.2f, chi2 %.3f, uncertainty %.4f: flux bias mean %+.4f, worst %.4f, norm %.4f",
				m.Stars, m.Rejected, m.ShapeOrder, m.GridOrder, m.Beta, m.prof.c, m.Chi2, m.ModelFrac, mean, worst, norm)
			if !(math.Abs(mean) < c.mean) || !(worst < c.worst) || !(norm < c.norm) {
				t.Errorf("flux bias %+.4f (limit %.4f), worst %.4f (%.4f), norm %.4f (%.4f)", mean, c.mean, worst, c.worst, norm, c.norm)
			}
			if !(m.Chi2 > 0.9 && m.Chi2 < 1.1) {
				t.Errorf("reduced chi2 of the cores %.3f", m.Chi2)
			}
			// Windowed centroids of the model's stars are where it says.
			limit := 0.01
			if c.name == "undersampled" { // its samples do not fix a centroid
				limit = 0.03
			}
			stamp := make([]float32, 41*41)
			for _, x := range []float64{50, 400, 750} {
				m.Render(stamp, x, 800-x, 0.3, -0.2)
				if mom, ok := adaptiveMoments(stamp, nil, 41, 41, 20, 20, 3, 40); !ok || math.Hypot(mom.x-20.3, mom.y-19.8) > limit {
					t.Errorf("centroid of a star at offset (0.3, -0.2): (%.4f, %.4f)", mom.x-20, mom.y-20)
				}
			}
			if m.Rejected > 8 {
				t.Errorf("%d good stars rejected", m.Rejected)
			}
		})
	}
}

// Stars the fit never saw, up to S/N 300: χ² per pixel, flux bias and pulls.
func TestHeldOutStars(t *testing.T) {
	long(t)
	t.Run("symmetric", func(t *testing.T) { heldOut(t, trueMoffat(3.2, varying(3.3)), true) })
	t.Run("coma", func(t *testing.T) { heldOut(t, coma(trueMoffat(3.2, varying(3.3)), 2), false) })
}

func heldOut(t *testing.T, p density, symmetric bool) {
	s := newScene(900, 900, p, 400, 1.5, 5)
	s.scatter(130, 5e3, 5e5, 38, 0.6, 40)
	learn := len(s.truth)
	s.scatter(120, 4e3, 1.3e5, 38, 0.4, 40)
	s.expose(0.03)
	test := s.list[learn:]
	s.list = s.list[:learn]
	m := fitScene(t, s)
	var chi, bias, wsum, worst float64
	var px, py, pf []float64
	for k, st := range test {
		truth := s.truth[learn+k]
		fit, ok := m.FitStar(s.img, s.var_, s.flags, st.X, st.Y, s.gain, StarOptions{})
		if !ok {
			t.Errorf("star %d of S/N %.0f has no fit: %+v", k, st.SN, fit)
			continue
		}
		if sn := fit.Flux / fit.FluxErr; sn > 310 {
			continue
		}
		chi += fit.Chi2
		worst = math.Max(worst, fit.Chi2)
		w := 1 / math.Pow(fit.FluxErr/fit.Flux, 2)
		bias += w * (fit.Flux/truth.flux - 1)
		wsum += w
		px = append(px, (fit.X-truth.x)/fit.XErr)
		py = append(py, (fit.Y-truth.y)/fit.YErr)
		pf = append(pf, (fit.Flux-truth.flux)/fit.FluxErr)
	}
	n := float64(len(pf))
	t.Logf("%d stars: chi2 mean %.3f worst %.3f, flux bias %+.4f ± %.4f, pull scatter x %.2f y %.2f flux %.2f", len(pf), chi/n, worst, bias/wsum, 1/math.Sqrt(wsum), spread(px), spread(py), spread(pf))
	if len(pf) < 90 {
		t.Fatalf("only %d stars compared", len(pf))
	}
	if !(chi/n < 1.1) || !(chi/n > 0.9) {
		t.Errorf("chi2 per pixel of stars left out: %.3f, want 1", chi/n)
	}
	if !(math.Abs(bias/wsum) < 0.003) {
		t.Errorf("flux bias %+.4f", bias/wsum)
	}
	for i, v := range []float64{spread(pf), spread(px), spread(py)} {
		if i > 0 && !symmetric {
			break // the truth's centre is not the model's
		}
		if !(v > 0.82 && v < 1.2) {
			t.Errorf("pull scatter %d is %.2f", i, v)
		}
	}
}

// spread is the root mean square about 0.
func spread(v []float64) float64 {
	var s float64
	for _, x := range v {
		s += x * x
	}
	return math.Sqrt(s / float64(len(v)))
}

func TestFewStars(t *testing.T) {
	for _, n := range []int{9, 15} {
		s := newScene(800, 800, trueMoffat(3, varying(3)), 100, 2, 21)
		s.scatter(n, 8e3, 1e5, 60, 0.6, 40)
		s.expose(0.05)
		m := fitScene(t, s)
		mean, worst, norm := compare(m, s)
		t.Logf("%d stars: %d used, order %d, grid %d, beta %.2f, uncertainty %.4f, in the corner %.4f: bias %+.4f worst %.4f norm %.4f", n, m.Stars, m.ShapeOrder, m.GridOrder, m.Beta, m.ModelFrac, m.Uncertainty(1, 1), mean, worst, norm)
		if !(math.Abs(mean) < 0.05) || !(worst < 0.12) || !(norm < 0.12) {
			t.Errorf("%d stars: bias %+.4f worst %.4f norm %.4f", n, mean, worst, norm)
		}
		if m.GridOrder > 0 {
			t.Errorf("%d stars carry a grid of order %d", n, m.GridOrder)
		}
	}
	s := newScene(300, 300, trueMoffat(3, constant(3)), 100, 2, 21)
	s.scatter(7, 8e3, 1e5, 60, 0.6, 40)
	s.expose(0.05)
	_, err := Fit(s.img, s.var_, s.flags, s.list, s.gain, DefaultConfig())
	var p *frame.Problem
	if !errors.As(err, &p) || p.Slug != frame.ProblemTooFewStars {
		t.Errorf("7 stars: error %v, want %s", err, frame.ProblemTooFewStars)
	}
}

func TestCrowded(t *testing.T) {
	long(t)
	s := newScene(700, 700, trueMoffat(3, varying(3.2)), 100, 2, 31)
	s.scatter(2000, 300, 2e5, 3.5, 0.7, 20)
	s.expose(0.1)
	m := fitScene(t, s)
	mean, worst, norm := compare(m, s)
	t.Logf("%d used %d rejected, order %d, grid %d, beta %.2f, chi2 %.2f, uncertainty %.4f: bias %+.4f worst %.4f norm %.4f", m.Stars, m.Rejected, m.ShapeOrder, m.GridOrder, m.Beta, m.Chi2, m.ModelFrac, mean, worst, norm)
	if !(math.Abs(mean) < 0.015) || !(worst < 0.03) || !(norm < 0.03) {
		t.Errorf("bias %+.4f worst %.4f norm %.4f", mean, worst, norm)
	}
}

// A fifth of the listed stars is spoilt: saturated and flagged, hit by cosmic
// rays, blended with an unlisted star, or a galaxy.
func TestContaminated(t *testing.T) {
	long(t)
	s := newScene(800, 800, trueMoffat(3, varying(3.2)), 100, 2, 41)
	s.scatter(100, 5e3, 2e5, 40, 0.6, 40)
	for k := range s.truth {
		q := s.truth[k]
		switch k % 10 {
		case 0: // unlisted companion, a third as bright
			n := len(s.truth)
			s.add(q.x+3, q.y-2, q.flux*0.3, 30)
			s.truth = s.truth[:n]
		case 1: // galaxy: three more blobs around
			n := len(s.truth)
			s.add(q.x+1.2, q.y+0.8, q.flux*0.7, 30)
			s.add(q.x-1.1, q.y-0.9, q.flux*0.7, 30)
			s.truth = s.truth[:n]
		}
	}
	s.expose(0.03)
	for k, q := range s.truth {
		i, j := int(math.Round(q.x))-1, int(math.Round(q.y))-1
		switch k % 10 {
		case 2: // unflagged hits near the core
			for d := range 4 {
				s.img.Pix[(j+1)*s.w+i-3+d] += 4000
			}
		case 3: // saturated and flagged
			for dj := -1; dj <= 1; dj++ {
				for di := -1; di <= 1; di++ {
					s.img.Pix[(j+dj)*s.w+i+di] = 500
					s.flags.Bits[(j+dj)*s.w+i+di] |= frame.Saturated
				}
			}
		case 4: // a dead column through the wing and NaN
			for dj := -8; dj <= 8; dj++ {
				if jj := j + dj; jj >= 0 && jj < s.h {
					s.img.Pix[jj*s.w+i+5] = float32(math.NaN())
				}
			}
		}
	}
	m := fitScene(t, s)
	mean, worst, norm := compare(m, s)
	t.Logf("%d used %d rejected, order %d, grid %d, beta %.2f, chi2 %.2f: bias %+.4f worst %.4f norm %.4f", m.Stars, m.Rejected, m.ShapeOrder, m.GridOrder, m.Beta, m.Chi2, mean, worst, norm)
	if !(math.Abs(mean) < 0.006) || !(worst < 0.02) || !(norm < 0.02) {
		t.Errorf("bias %+.4f worst %.4f norm %.4f", mean, worst, norm)
	}
}

// The result must not depend on the number of processors nor on the order of
// the list.
func TestFitRepeats(t *testing.T) {
	s := newScene(500, 500, coma(trueMoffat(3, varying(3)), 2), 100, 2, 51)
	s.scatter(60, 5e3, 2e5, 30, 0.6, 30)
	s.expose(0.03)
	a := fitScene(t, s)
	rand.New(rand.NewPCG(1, 1)).Shuffle(len(s.list), func(i, j int) { s.list[i], s.list[j] = s.list[j], s.list[i] })
	b := fitScene(t, s)
	p, q := make([]float32, 31*31), make([]float32, 31*31)
	a.Render(p, 100, 400, 0.1, 0.2)
	b.Render(q, 100, 400, 0.1, 0.2)
	for k := range p {
		if p[k] != q[k] {
			t.Fatalf("pixel %d: %g and %g", k, p[k], q[k])
		}
	}
}

func TestUglyInputs(t *testing.T) {
	nan, inf := math.NaN(), math.Inf(1)
	rng := rand.New(rand.NewPCG(9, 9))
	odd := []float64{nan, inf, -inf, 0, -1, 1e-300, 1e30, -1e30, 1e300, 17, 100}
	pick := func() float64 { return odd[rng.IntN(len(odd))] }
	base := newScene(260, 240, trueMoffat(3, constant(3)), 100, 2, 61)
	base.scatter(25, 8e3, 1e5, 25, 0.6, 25)
	base.expose(0.05)
	compared := 0
	try := func(name string, img, vr *frame.Image, fl *frame.Mask, list []stars.Star, gain float64) {
		t.Helper()
		m, err := Fit(img, vr, fl, list, gain, DefaultConfig())
		if err != nil {
			var p *frame.Problem
			if !errors.As(err, &p) {
				t.Errorf("%s: error %v is no *frame.Problem", name, err)
			}
			return
		}
		compared++
		dst := make([]float32, 21*21)
		for _, x := range []float64{1, 100, -1e9, 1e9, nan, inf} {
			m.Render(dst, x, x, 0.1, 0.2)
			for _, v := range dst {
				if x-x == 0 && v-v != 0 {
					t.Errorf("%s: model at %g renders %g", name, x, v)
					return
				}
			}
			m.FWHM(x, x)
			m.Moments(x, x)
			m.Uncertainty(x, x)
			m.FitStar(img, vr, fl, x, x, gain, StarOptions{FreeSky: true})
		}
	}
	try("as it is", base.img, base.var_, base.flags, base.list, 2)
	if compared != 1 {
		t.Error("the plain case has no model")
	}
	try("no flags", base.img, base.var_, nil, base.list, 2)
	for _, g := range odd {
		try("gain", base.img, base.var_, nil, base.list, g)
	}
	try("empty", base.img, base.var_, nil, nil, 2)
	for _, v := range odd {
		flat := frame.NewImage(260, 240)
		for k := range flat.Pix {
			flat.Pix[k] = float32(v)
		}
		try("flat image", flat, base.var_, nil, base.list, 2)
		try("flat variance", base.img, flat, nil, base.list, 2)
	}
	rounds := 12
	if raceDetector {
		rounds = 2
	}
	for range rounds {
		img, vr := base.img.Clone(), base.var_.Clone()
		for range 2000 {
			img.Pix[rng.IntN(len(img.Pix))] = float32(pick())
			vr.Pix[rng.IntN(len(vr.Pix))] = float32(pick())
		}
		try("sprinkled", img, vr, base.flags, base.list, 2)
		list := append([]stars.Star(nil), base.list...)
		for range 10 {
			s := &list[rng.IntN(len(list))]
			switch rng.IntN(4) {
			case 0:
				s.X = pick()
			case 1:
				s.Y = pick()
			case 2:
				s.Flux = pick()
			case 3:
				s.SN = pick()
			}
		}
		try("odd list", base.img, base.var_, base.flags, list, 2)
	}
	same := append([]stars.Star(nil), base.list...)
	for k := range same {
		same[k] = same[0]
	}
	try("one star many times", base.img, base.var_, nil, same, 2)
	noise := frame.NewImage(260, 240)
	for k := range noise.Pix {
		noise.Pix[k] = float32(10 * rng.NormFloat64())
	}
	try("no stars there", noise, base.var_, nil, base.list, 2)
	tiny := frame.NewImage(5, 4)
	tv := frame.NewImage(5, 4)
	for k := range tv.Pix {
		tv.Pix[k] = 1
	}
	try("tiny", tiny, tv, nil, base.list, 2)
}

// The whole way from pixels: sky, star list and model, as the stages use them.
// Here the sky is not known but measured, and so are the list's positions.
func TestFromPixels(t *testing.T) {
	long(t)
	s := newScene(900, 900, trueMoffat(3, varying(3.2)), 150, 1.5, 71)
	s.scatter(500, 1e3, 2e5, 6, 0.6, 36)
	s.expose(0)
	for k := range s.img.Pix {
		s.img.Pix[k] += 300
	}
	bg, err := stars.EstimateBackground(s.img, s.flags, stars.DefaultBackgroundConfig())
	if err != nil {
		t.Fatal(err)
	}
	sub := bg.Subtract(frame.NewImage(s.w, s.h), s.img)
	list, err := stars.Find(sub, bg, s.flags, s.gain, stars.DefaultFindConfig())
	if err != nil {
		t.Fatal(err)
	}
	vr := frame.NewImage(s.w, s.h)
	for j := range s.h {
		row := vr.Row(j)
		bg.NoiseRow(row, j)
		for i, v := range row {
			row[i] = v * v
		}
	}
	m, err := Fit(sub, vr, s.flags, list.Stars, s.gain, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	mean, worst, norm := compare(m, s)
	t.Logf("%d listed, %d clean, %d used, %d rejected, order %d, grid %d, beta %.2f, chi2 %.3f, uncertainty %.4f: bias %+.4f worst %.4f norm %.4f",
		len(list.Stars), list.Clean, m.Stars, m.Rejected, m.ShapeOrder, m.GridOrder, m.Beta, m.Chi2, m.ModelFrac, mean, worst, norm)
	if m.Stars < 30 || !(math.Abs(mean) < 0.008) || !(worst < 0.015) || !(norm < 0.015) {
		t.Errorf("bias %+.4f worst %.4f norm %.4f", mean, worst, norm)
	}
}
