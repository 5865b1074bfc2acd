package efficiency

import (
	"context"
	"fmt"
	"math"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"sync"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/score"
	"nightsift/internal/simulate"
	"nightsift/subtract"
)

// searched is an invented frame that was searched.
type searched struct {
	frame      *frame.Frame
	chain      Chain
	solution   *subtract.Solution
	difference *subtract.Difference
	candidates []detect.Candidate
	truth      *simulate.Truth
}

func searchInvented(t testing.TB, scenario string, change simulate.Change, size int, seed uint64) *searched {
	t.Helper()
	pairs, err := simulate.Varied(scenario, change, size, seed)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	if err := pairs.Write(dir); err != nil {
		t.Fatal(err)
	}
	s := &searched{truth: pairs.Truth}
	reference, err := load.Frame(filepath.Join(dir, pairs.Reference.Name+".fits"), load.DefaultKeywords())
	if err != nil {
		t.Fatal(err)
	}
	if s.frame, err = load.Frame(filepath.Join(dir, pairs.New[0].Name+".fits"), load.DefaultKeywords()); err != nil {
		t.Fatal(err)
	}
	s.chain = Chain{Align: align.DefaultConfig(), Subtract: subtract.DefaultConfig(), Detect: detect.DefaultConfig()}
	if s.chain.Reference, err = align.Prepare(reference, s.chain.Align); err != nil {
		t.Fatal(err)
	}
	if s.difference, s.solution, s.candidates, err = s.chain.search(context.Background(), s.frame, false); err != nil {
		t.Fatal(err)
	}
	return s
}

// small is a frame that several tests share.
func small(t testing.TB) *searched {
	t.Helper()
	smallOnce.Do(func() { smallFrame = searchInvented(t, "plain", simulate.Change{}, 320, 21) })
	if smallFrame == nil {
		t.Fatal("the shared frame could not be made")
	}
	return smallFrame
}

var (
	smallOnce  sync.Once
	smallFrame *searched
)

func settings(count int, seed uint64, where Where) Config {
	c := DefaultConfig()
	c.Count, c.Seed, c.Where = count, seed, where
	return c
}

func (s *searched) shared(t testing.TB, c Config) *Result {
	t.Helper()
	r, err := Shared(context.Background(), s.solution, s.difference, s.candidates, s.chain.Detect, c)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// Equal seeds give equal sources with equal fates, other seeds others; the
// difference and the frame are left as they were.
func TestSharedRepeats(t *testing.T) {
	s := small(t)
	before := s.difference.Image.Clone()
	significance := s.difference.Significance.Clone()
	a, b, c := s.shared(t, settings(12, 5, OnSky)), s.shared(t, settings(12, 5, OnSky)), s.shared(t, settings(12, 6, OnSky))
	if fmt.Sprint(a.Injections) != fmt.Sprint(b.Injections) {
		t.Error("the same seed gave other sources or fates")
	}
	if a.Injections[0].X == c.Injections[0].X || a.Injections[0].ID == c.Injections[0].ID {
		t.Error("another seed gave the same sources")
	}
	if !reflect.DeepEqual(before.Pix, s.difference.Image.Pix) || !reflect.DeepEqual(significance.Pix, s.difference.Significance.Pix) || s.difference.Injected {
		t.Error("the difference of the search was changed")
	}
	for i := range a.Injections {
		q := &a.Injections[i]
		if !strings.HasPrefix(q.ID, detect.InjectedPrefix) {
			t.Errorf("identifier %q", q.ID)
		}
		for k := range i {
			if o := &a.Injections[k]; o.Round == q.Round && math.Hypot(o.X-q.X, o.Y-q.Y) < spacing(s.difference.Info.FWHMNew) {
				t.Errorf("two sources are %.1f px apart", math.Hypot(o.X-q.X, o.Y-q.Y))
			}
		}
	}
	if n := Density(320, 320, s.difference.Info.FWHMNew); a.Rounds != (12+n-1)/n {
		t.Errorf("%d rounds for 12 sources, %d at once", a.Rounds, n)
	}
}

// Bright sources on unmasked sky come back with their flux and place.
func TestBrightSourcesComeBack(t *testing.T) {
	s := small(t)
	var pulls []float64
	n, found := 0, 0
	r := s.shared(t, settings(60, 9, OnSky))
	for i := range r.Injections {
		q := &r.Injections[i]
		if q.SN < 12 || q.Fate == Masked || q.HostLight > 3*s.difference.Info.SkyNoise {
			continue
		}
		n++
		if q.Fate == Found {
			found++
			pulls = append(pulls, (q.FoundFlux-q.Flux)/q.FoundFluxErr)
		}
	}
	mean, square := 0.0, 0.0
	for _, p := range pulls {
		mean += p / float64(len(pulls))
		square += p * p / float64(len(pulls))
	}
	if n < 8 || found < n-1 || math.Abs(mean) > 3/math.Sqrt(float64(len(pulls))) || math.Sqrt(square) > 1.8 {
		t.Errorf("%d of %d found, pulls of the flux: mean %.2f, spread %.2f", found, n, mean, math.Sqrt(square))
	}
}

// The short way against all stages repeated, on the same sources: the fluxes
// agree, and so do the limits.
func TestSharedAgainstFull(t *testing.T) {
	if raceDetector {
		t.Skip("accuracy")
	}
	for _, where := range []Where{OnSky, OnGalaxies} {
		s := searchInvented(t, "plain", simulate.Change{Galaxies: 250}, 512, 33)
		c := settings(Density(512, 512, s.difference.Info.FWHMNew), 3, where)
		short := s.shared(t, c)
		long, err := Full(context.Background(), s.frame, s.chain, c)
		if err != nil {
			t.Fatal(err)
		}
		if len(short.Injections) != len(long.Injections) {
			t.Fatalf("%s: %d and %d sources", where, len(short.Injections), len(long.Injections))
		}
		other, both := 0, 0
		var apart []float64
		for i := range short.Injections {
			a, b := &short.Injections[i], &long.Injections[i]
			if a.ID != b.ID || a.X != b.X || a.Flux != b.Flux {
				t.Fatalf("%s: source %d differs between the ways", where, i)
			}
			if (a.Fate == Found) != (b.Fate == Found) {
				other++
			}
			if a.Fate == Found && b.Fate == Found {
				both++
				apart = append(apart, math.Abs(a.FoundFlux-b.FoundFlux)/b.FoundFluxErr)
			}
		}
		// Solved anew, the kernel is another one on bright galaxies that have gained a
		// source: a few fluxes differ by as much as their errors.
		square := 0.0
		for _, d := range apart {
			square += d * d / float64(len(apart))
		}
		rms := math.Sqrt(square)
		t.Logf("%s: %d sources, %d found both ways, %d with another fate; fluxes differ by %.2f of their errors (rms), at most %.2f",
			where, len(long.Injections), both, other, rms, slices.Max(apart))
		if other > max(1, len(long.Injections)/20) || both < len(long.Injections)/4 || rms > 0.5 {
			t.Errorf("%s: of %d sources %d met another fate; fluxes differ by %.2f of their errors (rms)", where, len(long.Injections), other, rms)
		}
		a, b := short.Curve, long.Curve
		if a == nil || b == nil || math.Abs(a.Mag50-b.Mag50) > math.Hypot(a.Mag50Err, b.Mag50Err) {
			t.Errorf("%s: limits of the two ways: %+v, %+v", where, a, b)
		}
	}
}

// Real sources that another program part invented before the noise was drawn, on
// the frames themselves, are found as often as those put in afterwards.
func TestAgainstInventedRealSources(t *testing.T) {
	if raceDetector {
		t.Skip("accuracy")
	}
	edges := []float64{3, 4, 4.8, 5.5, 6.3, 7.5, 10, 20, 200}
	var real, put [2][8]float64 // found, all
	bin := func(sn float64) int {
		for k := range 8 {
			if sn >= edges[k] && sn < edges[k+1] {
				return k
			}
		}
		return -1
	}
	for _, seed := range []uint64{51, 52, 53} {
		s := searchInvented(t, "plain", simulate.Change{Events: 250, Brightest: 30}, 640, seed)
		d := s.difference
		quiet := func(x, y float64) bool {
			return d.Searchable(x, y) && lightAt(d.Reference, x, y, d.Info.FWHMNew)/d.Frame.Meta.Gain < 0.3*sq(d.Info.SkyNoise)
		}
		var found []score.Found
		for i := range s.candidates {
			k := &s.candidates[i]
			found = append(found, score.Found{ID: k.ID, Frame: s.truth.Frames[0].Frame, X: k.X, Y: k.Y, XErr: k.XErr, YErr: k.YErr, Flux: k.Flux, FluxErr: k.FluxErr,
				Significance: k.Significance, RealProbability: k.RealProbability})
		}
		outcomes := score.Compare(s.truth, found, nil, score.DefaultConfig()).Outcomes
		for i := range outcomes {
			o := &outcomes[i]
			k := bin(5 * o.Flux / d.Info.FluxLimit5)
			if o.Kind != simulate.KindTransient || o.Host != "" || k < 0 || !quiet(o.X, o.Y) {
				continue
			}
			real[1][k]++
			if o.Found {
				real[0][k]++
			}
		}
		r := s.shared(t, settings(300, 8, OnSky))
		for i := range r.Injections {
			q := &r.Injections[i]
			k := bin(q.SN)
			if k < 0 || q.Fate == Confused || !quiet(q.X, q.Y) {
				continue
			}
			put[1][k]++
			if q.Fate == Found {
				put[0][k]++
			}
		}
	}
	chi2, degrees := 0.0, 0
	for k := range 8 {
		a, b := real[1][k], put[1][k]
		if a < 3 || b < 3 {
			continue
		}
		p := (real[0][k] + put[0][k] + 0.5) / (a + b + 1)
		chi2 += sq(real[0][k]/a-put[0][k]/b) / (p * (1 - p) * (1/a + 1/b))
		degrees++
		t.Logf("S/N %g to %g: %g of %g invented, %g of %g injected", edges[k], edges[k+1], real[0][k], a, put[0][k], b)
	}
	tail := 1 - distuv.ChiSquared{K: float64(degrees)}.CDF(chi2)
	t.Logf("chi-square %.1f of %d cells, probability %.2f", chi2, degrees, tail)
	if degrees < 6 || tail < 0.01 {
		t.Errorf("invented and injected sources are found differently: chi-square %.1f of %d cells, probability %.4f", chi2, degrees, tail)
	}
}

// A thousand sources give the limit of one half to 0.03 mag.
func TestLimitRepeats(t *testing.T) {
	if raceDetector {
		t.Skip("accuracy")
	}
	s := searchInvented(t, "plain", simulate.Change{}, 640, 61)
	a, b := s.shared(t, settings(1000, 1, OnSky)), s.shared(t, settings(1000, 2, OnSky))
	t.Logf("%.3f ± %.3f and %.3f ± %.3f, chi-square %.1f of %d and %.1f of %d", a.Curve.Mag50, a.Curve.Mag50Err, b.Curve.Mag50, b.Curve.Mag50Err,
		a.Curve.Chi2, a.Curve.Cells, b.Curve.Chi2, b.Curve.Cells)
	if math.Abs(a.Curve.Mag50-b.Curve.Mag50) > 0.03*math.Sqrt2 || !(a.Curve.Mag50Err < 0.03) || !(b.Curve.Mag50Err < 0.03) {
		t.Errorf("limits %.3f ± %.3f and %.3f ± %.3f, want 0.03 at most", a.Curve.Mag50, a.Curve.Mag50Err, b.Curve.Mag50, b.Curve.Mag50Err)
	}
}

// Sources on galaxies lie on them, near cores at their distance.
func TestPlacesOnGalaxies(t *testing.T) {
	s := small(t)
	for _, where := range []Where{OnGalaxies, NearCores} {
		r := s.shared(t, settings(6, 4, where))
		for i := range r.Injections {
			q := &r.Injections[i]
			nearest := math.Inf(1)
			for k := range s.difference.ReferenceStars {
				if h := &s.difference.ReferenceStars[k]; isHost(h) {
					nearest = math.Min(nearest, math.Hypot(h.X-q.X, h.Y-q.Y))
				}
			}
			if !(q.HostDistance >= 0) || nearest > q.HostDistance+1e-9 || where == NearCores && math.Abs(q.HostDistance-2) > 1e-9 {
				t.Errorf("%s: %.2f px from the core by its own word, %.2f px from the nearest", where, q.HostDistance, nearest)
			}
		}
	}
}

func TestWithoutZeroPoint(t *testing.T) {
	s := small(t)
	d := *s.difference
	d.Info.ZeroPoint, d.Info.MagLimit5 = math.NaN(), math.NaN()
	w := *s
	w.difference = &d
	r := w.shared(t, settings(30, 2, OnSky))
	if r.HasMagnitudes || !math.IsNaN(r.Injections[0].Mag) || !(r.Injections[0].SN > 0) || r.Curve == nil || math.IsNaN(r.Curve.Middle) {
		t.Errorf("without zero point: %+v", r.Curve)
	}
}

func TestSettingsAreChecked(t *testing.T) {
	for _, change := range []func(*Config){
		func(c *Config) { c.Count = 0 }, func(c *Config) { c.Count = -1 }, func(c *Config) { c.Where = "everywhere" },
		func(c *Config) { c.CoreDistance = math.NaN() }, func(c *Config) { c.Probability = 2 }, func(c *Config) { c.Radius = 0 },
	} {
		c := DefaultConfig()
		change(&c)
		if c.Check() == nil {
			t.Errorf("accepted %+v", c)
		}
	}
}
