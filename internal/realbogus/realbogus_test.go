package realbogus

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// invent draws labelled examples whose true probability is known: a logistic
// function of a few features with an interaction.
func invent(n int, seed uint64, groups int) (ex []Example, truth []float64) {
	rng := rand.New(rand.NewPCG(seed, 5))
	for k := range n {
		var f Features
		for i := range f {
			d := &Descriptions[i]
			f[i] = d.Low + (d.High-d.Low)*rng.Float64()
		}
		f[Sign] = 1
		z := 1.5*f[Chi2Excess] - 3*f[Flagged]*f[DipoleSum] + 0.6*f[Size] - 1.2
		if f[Oppose] > 1 {
			z -= 2
		}
		p := logistic(z)
		truth = append(truth, p)
		ex = append(ex, Example{Features: f, Real: rng.Float64() < p, Weight: 1, Group: fmt.Sprintf("g%d", k%groups)})
	}
	return ex, truth
}

func testConfig() TrainConfig {
	// The invented truth goes against trends: trees alone.
	c := DefaultTrainConfig()
	c.Trees, c.Made, c.Base, c.Guarded = 80, "2026-01-02", nil, false
	return c
}

// Trained probabilities are the true ones: held-out metrics say so, and a
// fresh sample agrees.
func TestTrainedProbabilities(t *testing.T) {
	ex, _ := invent(4000, 1, 30)
	m, err := Train(ex, testConfig())
	if err != nil {
		t.Fatal(err)
	}
	fresh, truth := invent(4000, 2, 10)
	var p, w []float64
	var real []bool
	var worst, rms, best float64
	for i := range fresh {
		q := m.Probability(&fresh[i].Features)
		p, w, real = append(p, q), append(w, 1), append(real, fresh[i].Real)
		rms += (q - truth[i]) * (q - truth[i])
		worst = math.Max(worst, math.Abs(q-truth[i]))
		b := truth[i]
		if !fresh[i].Real {
			b = 1 - b
		}
		best -= math.Log(b)
	}
	rms = math.Sqrt(rms / float64(len(fresh)))
	_, ece := Reliability(p, real, w, 10)
	t.Logf("held out: AUC %.4f, log loss %.4f (truth itself %.4f), calibration error %.4f, missed at 1 %% false %.3f; fresh: calibration error %.4f, rms against truth %.3f",
		m.Metrics.AUC, m.Metrics.LogLoss, best/float64(len(fresh)), m.Metrics.CalibrationError, m.Metrics.MissedAt1, ece, rms)
	if ece > 0.03 || m.Metrics.CalibrationError > 0.03 {
		t.Errorf("calibration error %.3f fresh, %.3f held out", ece, m.Metrics.CalibrationError)
	}
	if rms > 0.1 {
		t.Errorf("probabilities differ from the truth by %.3f rms", rms)
	}
	if d := m.Metrics.LogLoss - best/float64(len(fresh)); d > 0.06 {
		t.Errorf("log loss is %.3f above that of the truth", d)
	}
}

// Against scikit-learn's GradientBoostingClassifier of the same size: as good
// on fresh examples. Isotonic regression and Platt's fit against its own.
func TestAgainstScikitLearn(t *testing.T) {
	ex, _ := invent(2000, 3, 20)
	fresh, _ := invent(3000, 4, 20)
	cfg := testConfig()
	cfg.Trees = 50
	m := boost(ex, cfg)
	rng := rand.New(rand.NewPCG(9, 9))
	type file struct {
		X, F       [][]float64
		Y, G       []int
		S, W       []float64
		L          []int
		Trees      int
		Depth      int
		Rate       float64
		Ascending  []float64
		AscendingW []float64
	}
	d := file{Trees: cfg.Trees, Depth: cfg.Depth, Rate: cfg.Rate}
	label := func(b bool) int {
		if b {
			return 1
		}
		return 0
	}
	for i := range ex {
		d.X, d.Y = append(d.X, ex[i].Features[:]), append(d.Y, label(ex[i].Real))
	}
	var score, weight []float64
	var real []bool
	for i := range fresh {
		d.F, d.G = append(d.F, fresh[i].Features[:]), append(d.G, label(fresh[i].Real))
		score = append(score, m.Score(&fresh[i].Features))
		weight = append(weight, 0.5+rng.Float64())
		real = append(real, fresh[i].Real)
	}
	d.S, d.W, d.L = score, weight, d.G
	for i := range 200 {
		d.Ascending = append(d.Ascending, float64(i)/200+rng.NormFloat64()*0.3)
		d.AscendingW = append(d.AscendingW, 0.2+rng.Float64())
	}
	data, err := json.Marshal(d)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "d.json")
	if err := os.WriteFile(path, data, 0o644); err != nil {
		t.Fatal(err)
	}
	text := outside.Python(t, `
import json, sys
import numpy as np
try:
    from sklearn.ensemble import GradientBoostingClassifier
except ImportError:
    print('"missing"'); sys.exit(0)
from sklearn.isotonic import IsotonicRegression
from sklearn.metrics import average_precision_score, brier_score_loss, log_loss, precision_recall_curve, roc_auc_score, roc_curve
from scipy.optimize import minimize
d = json.load(open(sys.argv[1]))
X, Y, F, G = (np.array(d[k]) for k in "XYFG")
m = GradientBoostingClassifier(n_estimators=d["Trees"], max_depth=d["Depth"], learning_rate=d["Rate"], random_state=1).fit(X, Y)
p = m.predict_proba(F)[:, 1]
w = np.array(d["W"])
s = np.array(d["S"])
iso = IsotonicRegression().fit_transform(np.arange(len(d["Ascending"])), d["Ascending"], sample_weight=d["AscendingW"])
n1, n0 = w[G == 1].sum(), w[G == 0].sum()
t = np.where(G == 1, (n1 + 1) / (n1 + 2), 1 / (n0 + 2))
def loss(q):
    z = q[0] * s + q[1]
    return np.sum(w * (np.logaddexp(0, z) - t * z))
r = minimize(loss, [1, 0], method="BFGS", options={"gtol": 1e-9})
fpr, tpr, cut = roc_curve(G, s, sample_weight=w, drop_intermediate=False)
pre, rec, _ = precision_recall_curve(G, s, sample_weight=w)
q = 1 / (1 + np.exp(-s))
json.dump({"FPR": fpr[1:].tolist(), "TPR": tpr[1:].tolist(), "Cut": cut[1:].tolist(), "Precision": pre[:-1][::-1].tolist(), "Recall": rec[:-1][::-1].tolist(),
           "AP": average_precision_score(G, s, sample_weight=w), "Brier": brier_score_loss(G, q, sample_weight=w), "WeightedLoss": log_loss(G, q, sample_weight=w),
           "Loss": log_loss(G, p), "AUC": roc_auc_score(G, p), "MyAUC": roc_auc_score(G, s, sample_weight=w),
           "Iso": iso.tolist(), "A": r.x[0], "B": r.x[1]}, sys.stdout)
`, path)
	if strings.TrimSpace(string(text)) == `"missing"` {
		if os.Getenv("CI") == "true" {
			t.Fatal("scikit-learn is not installed: test.sh must install python3-sklearn")
		}
		t.Skip("scikit-learn is not installed")
	}
	var want struct {
		Loss, AUC, MyAUC, A, B, AP, Brier, WeightedLoss float64
		Iso, FPR, TPR, Cut, Precision, Recall           []float64
	}
	if err := json.NewDecoder(bytes.NewReader(text)).Decode(&want); err != nil {
		t.Fatal(err)
	}
	p := make([]float64, len(score))
	for i := range p {
		p[i] = logistic(score[i])
	}
	judged := make([]Judged, len(fresh))
	for i := range judged {
		judged[i] = Judged{Example: fresh[i], Score: score[i], P: p[i]}
	}
	mine := Measure(judged)
	t.Logf("AUC %.4f, scikit-learn %.4f; log loss %.4f, scikit-learn %.4f", mine.AUC, want.AUC, mine.LogLoss, want.Loss)
	if mine.AUC < want.AUC-0.006 || mine.LogLoss > want.Loss+0.012 {
		t.Errorf("AUC %.4f and log loss %.4f, scikit-learn's %.4f and %.4f", mine.AUC, mine.LogLoss, want.AUC, want.Loss)
	}
	for i := range judged {
		judged[i].Weight = weight[i]
	}
	mine = Measure(judged)
	for _, c := range []struct {
		what      string
		got, want float64
	}{
		{"weighted AUC", mine.AUC, want.MyAUC}, {"average precision", mine.AveragePrecision, want.AP},
		{"Brier score", mine.Brier, want.Brier}, {"weighted log loss", mine.LogLoss, want.WeightedLoss},
	} {
		if math.Abs(c.got-c.want) > 1e-9 {
			t.Errorf("%s %.10f, scikit-learn %.10f", c.what, c.got, c.want)
		}
	}
	curve := NewCurve(score, real, weight)[1:]
	if len(curve) != len(want.FPR) {
		t.Fatalf("%d cuts, scikit-learn has %d", len(curve), len(want.FPR))
	}
	for i, q := range curve {
		if math.Abs(q.False-want.FPR[i]) > 1e-9 || math.Abs(q.Kept-want.TPR[i]) > 1e-9 || math.Abs(q.Score-want.Cut[i]) > 1e-12 {
			t.Fatalf("cut %d: %+v, scikit-learn %g false, %g kept at %g", i, q, want.FPR[i], want.TPR[i], want.Cut[i])
		}
		// scikit-learn may stop where everything real is kept.
		if i < len(want.Recall) && (math.Abs(q.Precision-want.Precision[i]) > 1e-9 || math.Abs(q.Kept-want.Recall[i]) > 1e-9) {
			t.Fatalf("cut %d: precision %g, recall %g, scikit-learn %g, %g", i, q.Precision, q.Kept, want.Precision[i], want.Recall[i])
		}
	}
	for i, v := range poolAdjacent(d.Ascending, d.AscendingW) {
		if math.Abs(v-want.Iso[i]) > 1e-9 {
			t.Fatalf("isotonic fit at %d: %g, scikit-learn %g", i, v, want.Iso[i])
		}
	}
	c := FitPlatt(score, real, weight)
	if math.Abs(c.A-want.A) > 1e-4 || math.Abs(c.B-want.B) > 1e-4 {
		t.Errorf("Platt %.6f, %.6f; scipy %.6f, %.6f", c.A, c.B, want.A, want.B)
	}
}

// A guarded model never gains from what speaks against a candidate, wherever
// in feature space, even when trained on a truth that goes the other way. The
// check is by construction: one feature alone is moved.
func TestGuardedModelKeepsTrends(t *testing.T) {
	ex, _ := invent(3000, 11, 20)
	cfg := testConfig()
	cfg.Guarded = true
	m := boost(ex, cfg)
	free := boost(ex, testConfig())
	rng := rand.New(rand.NewPCG(12, 12))
	var broken, used int
	for range 4000 {
		f := ex[rng.IntN(len(ex))].Features
		for k := range f {
			trend := float64(Descriptions[k].Trend)
			if trend == 0 {
				continue
			}
			g := f
			g[k] = f[k] + (Descriptions[k].High-f[k])*rng.Float64()
			a, b := m.Score(&f), m.Score(&g)
			if (b-a)*trend < -1e-9 {
				t.Fatalf("%s from %g to %g: the score goes from %g to %g", Descriptions[k].Name, f[k], g[k], a, b)
			}
			if a != b {
				used++
			}
			if (free.Score(&g)-free.Score(&f))*trend < -1e-9 {
				broken++
			}
		}
	}
	if used < 1000 || broken < 1000 {
		t.Errorf("%d moves changed the guarded score, %d went against a trend without the guard: the check is empty", used, broken)
	}
	// The free model is better there, of course; the guarded one must still learn the rest.
	fresh, _ := invent(2000, 13, 20)
	var score, ones []float64
	var real []bool
	for i := range fresh {
		score, ones, real = append(score, m.Score(&fresh[i].Features)), append(ones, 1), append(real, fresh[i].Real)
	}
	if a := NewCurve(score, real, ones).Area(); a < 0.65 {
		t.Errorf("area under the curve of the guarded model: %.3f", a)
	}
}

// Trees that start from a base learn what it lacks, and keep its terms.
func TestTreesCorrectBase(t *testing.T) {
	rng := rand.New(rand.NewPCG(14, 14))
	var ex []Example
	for k := range 2000 {
		var f Features
		f[HitMargin], f[SizeSig] = 0.2*rng.Float64(), -8+16*rng.Float64()
		z := 2 - 20*f[HitMargin]
		if f[SizeSig] > 3 {
			z += 3
		}
		ex = append(ex, Example{Features: f, Real: rng.Float64() < logistic(z), Weight: 1, Group: fmt.Sprint("g", k%20)})
	}
	cfg := testConfig()
	cfg.Base, cfg.Guarded = Prior(), true
	m, err := Train(ex, cfg)
	if err != nil {
		t.Fatal(err)
	}
	at := func(hit, size float64) float64 {
		var f Features
		f[HitMargin], f[SizeSig] = hit, size
		return m.Probability(&f)
	}
	if a, b := at(0.1, 0), at(0.1, 6); math.Abs(a-0.5) > 0.12 || math.Abs(b-logistic(3)) > 0.08 {
		t.Errorf("probabilities %.3f and %.3f, expected 0.5 and %.3f", a, b, logistic(3))
	}
	// Far beyond the examples the base goes on where trees stand still.
	var near, far Features
	near[HitMargin], far[HitMargin] = 0.2, 0.5
	if m.Score(&far) > m.Score(&near)-1 || len(m.Terms) != len(Prior().Terms) {
		t.Errorf("score %.2f at the end of the examples, %.2f far beyond", m.Score(&near), m.Score(&far))
	}
}

func TestTrainingIsDeterministic(t *testing.T) {
	ex, _ := invent(600, 7, 10)
	a, err := Train(ex, testConfig())
	if err != nil {
		t.Fatal(err)
	}
	b, err := Train(slices.Clone(ex), testConfig())
	if err != nil {
		t.Fatal(err)
	}
	if a.Digest != b.Digest {
		t.Error("two trainings on the same examples differ")
	}
	ex[3].Real = !ex[3].Real
	c, err := Train(ex, testConfig())
	if err != nil {
		t.Fatal(err)
	}
	if c.Training.Digest == a.Training.Digest {
		t.Error("another label, the same digest of examples")
	}
}

func TestTrainRefuses(t *testing.T) {
	ex, _ := invent(300, 8, 10)
	for name, change := range map[string]func([]Example) []Example{
		"few":       func(e []Example) []Example { return e[:30] },
		"one frame": func(e []Example) []Example { return setAll(e, func(x *Example) { x.Group = "a" }) },
		"one class": func(e []Example) []Example { return setAll(e, func(x *Example) { x.Real = true }) },
		"weight":    func(e []Example) []Example { return setAll(e, func(x *Example) { x.Weight = math.NaN() }) },
		"class in one frame": func(e []Example) []Example {
			return setAll(e, func(x *Example) { x.Group = fmt.Sprint(x.Real) })
		},
	} {
		if _, err := Train(change(slices.Clone(ex)), testConfig()); err == nil {
			t.Errorf("%s: trained", name)
		}
	}
}

func setAll(e []Example, f func(*Example)) []Example {
	for i := range e {
		f(&e[i])
	}
	return e
}

// A model file that was changed, is of another version or of other features is
// refused with a reason.
func TestModelFile(t *testing.T) {
	ex, _ := invent(600, 7, 10)
	m, err := Train(ex, testConfig())
	if err != nil {
		t.Fatal(err)
	}
	good, err := m.Encode()
	if err != nil {
		t.Fatal(err)
	}
	back, err := Decode("m.json", good)
	if err != nil {
		t.Fatal(err)
	}
	for i := range ex {
		if a, b := m.Probability(&ex[i].Features), back.Probability(&ex[i].Features); a != b {
			t.Fatalf("probability %g became %g", a, b)
		}
	}
	again, err := back.Encode()
	if err != nil || !bytes.Equal(good, again) {
		t.Error("a model changes when it is read and written")
	}
	resign := func(change func(*Model)) []byte {
		c, err := Decode("m.json", good)
		if err != nil {
			t.Fatal(err)
		}
		change(c)
		b, err := c.Encode()
		if err != nil {
			t.Fatal(err)
		}
		return b
	}
	for name, c := range map[string]struct {
		data []byte
		says string
	}{
		"not JSON": {[]byte("hello"), "not a real/bogus model"},
		"empty":    {nil, "not a real/bogus model"},
		"changed":  {bytes.Replace(good, []byte(`"note": ""`), []byte(`"note": "x"`), 1), "changed or damaged"},
		"format":   {resign(func(m *Model) { m.Format = 99 }), "format 99"},
		"features": {resign(func(m *Model) { m.Features[0] = "other" }), "does not measure"},
		"twice":    {resign(func(m *Model) { m.Features[0] = m.Features[1] }), "twice"},
		"bare":     {resign(func(m *Model) { m.Features = nil }), "no features"},
		"kind":     {resign(func(m *Model) { m.Kind = "guess" }), "kind"},
		"loop":     {resign(func(m *Model) { m.Trees[0].Left[len(m.Trees[0].Left)-1] = 1 }), "node"},
		"index":    {resign(func(m *Model) { m.Trees[0].Feature[0] = 77 }), "feature 77"},
		"lengths":  {resign(func(m *Model) { m.Trees[0].Cut = m.Trees[0].Cut[:1] }), "lengths"},
		"slope":    {resign(func(m *Model) { m.Calibration = Calibration{Kind: "platt", A: -1} }), "slope"},
		"knots": {resign(func(m *Model) {
			m.Calibration = Calibration{Kind: "isotonic", Knots: [][2]float64{{0, 0.5}, {1, 0.2}}}
		}), "knot 1"},
	} {
		_, err := Decode("m.json", c.data)
		if err == nil || !strings.Contains(err.Error(), c.says) || !strings.Contains(err.Error(), "m.json") {
			t.Errorf("%s: error %v, expected one that says %q and names the file", name, err, c.says)
		}
	}
}

// The shipped model is readable and says what it is.
func TestShipped(t *testing.T) {
	m, err := Shipped()
	if err != nil {
		t.Fatal(err)
	}
	if m.Kind == KindPrior {
		want, err := Prior().Encode()
		if err != nil || !bytes.Equal(want, shippedFile) {
			t.Error("model.json is not what Prior makes: write it again")
		}
	} else if m.Metrics == nil || m.Training.Real == 0 || m.Metrics.AUC < 0.9 {
		t.Errorf("the trained model's record: %+v %+v", m.Training, m.Metrics)
	}
	clean := Features{}
	clean[LogSN], clean[Sign], clean[DipoleSum], clean[StarDistance] = 1.2, 1, 1, 10
	clean[SaturationDistance], clean[ReferenceContrast], clean[EdgeDistance] = 1.4, 1, 1.4
	clean[StarGlare], clean[ExpectedResidual], clean[NewFlux] = -5, 1.2, 1
	clean[HitMargin], clean[BroadMargin] = -0.5, -0.3
	if p := m.Probability(&clean); p < 0.8 {
		t.Errorf("a clean bright source gets %g", p)
	}
	bad := clean
	bad[Chi2Excess], bad[HitMargin], bad[Size], bad[SizeSig] = 0.9, 0.4, -1.5, -4
	if p := m.Probability(&bad); p > 0.2 {
		t.Errorf("a hit gets %g", p)
	}
}

func TestFeaturesClean(t *testing.T) {
	f := Features{}
	for i := range f {
		f[i] = []float64{math.NaN(), math.Inf(1), math.Inf(-1), 1e300}[i%4]
	}
	f.Clean()
	for i, v := range f {
		if d := Descriptions[i]; !(v >= d.Low && v <= d.High) || d.Name == "" || d.Meaning == "" {
			t.Errorf("feature %d %s is %g", i, d.Name, v)
		}
	}
}

// The odds of a probability follow the odds of real changes where it is used.
func TestProbabilityHere(t *testing.T) {
	m := &Model{}
	m.Training.Odds = 0.5
	rates := Rates{RealPerMpx: 2, DefectsPerMpx: 8} // odds 0.25, half of those of the training
	for _, c := range []struct{ p, want float64 }{{0, 0}, {0.5, 1.0 / 3}, {0.8, 2.0 / 3}, {1, 1}} {
		if got := m.Here(c.p, rates); math.Abs(got-c.want) > 1e-12 {
			t.Errorf("%g becomes %g, want %g", c.p, got, c.want)
		}
	}
	if got := m.Here(0.8, Rates{RealPerMpx: 4, DefectsPerMpx: 8}); math.Abs(got-0.8) > 1e-12 {
		t.Errorf("with the odds of the training 0.8 becomes %g", got)
	}
	m.Training.Odds = 0
	if got := m.Here(0.8, rates); got != 0.8 {
		t.Errorf("with a model of the survey's own 0.8 becomes %g", got)
	}
	if shipped, err := Shipped(); err != nil || shipped.Training.Odds == 0 {
		t.Errorf("the shipped model does not know its odds (%v)", err)
	}
}

// The density at a height is the derivative of the number above it, and the
// probability falls where noise peaks take over.
func TestPosterior(t *testing.T) {
	for u := 3.0; u < 8; u += 0.25 {
		const h = 1e-5
		want := (PeakDensity(0.3, u-h) - PeakDensity(0.3, u+h)) / (2 * h)
		if got := PeakDensityAt(0.3, u); math.Abs(got/want-1) > 1e-6 {
			t.Errorf("density at %g: %g, derivative %g", u, got, want)
		}
	}
	r := DefaultRates()
	// The counts integrate to half the rate per sign above the threshold.
	var sum float64
	for s := 5.0; s < 500; s += 0.01 {
		sum += r.At(s+0.005) * 0.01
	}
	if math.Abs(sum*1e6/(r.RealPerMpx/2)-1) > 0.01 {
		t.Errorf("%g real changes of one sign per Mpx, expected %g", sum*1e6, r.RealPerMpx/2)
	}
	last := 0.0
	for _, s := range []float64{4, 5, 5.5, 6, 8, 20} {
		p := Posterior(0.99, s, 0.3, r)
		if p < last || Posterior(0.99, -s, 0.3, r) != p {
			t.Errorf("probability at %g sigma: %g after %g", s, p, last)
		}
		last = p
	}
	if p := Posterior(0.99, 4, 0.3, r); p > 0.05 {
		t.Errorf("a 4 sigma peak gets %g", p)
	}
	if p := Posterior(0.99, 20, 0.3, r); math.Abs(p-0.99) > 1e-6 {
		t.Errorf("a 20 sigma peak gets %g", p)
	}
	// Expected noise candidates with p ≥ 0.5 in a million pixels: well under
	// one tenth for any width of the PSF.
	for _, fwhm := range []float64{1.8, 2.5, 4, 8} {
		sigma := fwhm / 2.3548
		rootDet := 1 / (2 * sigma * sigma)
		u := 5.0
		for Posterior(0.99, u, rootDet, r) < 0.5 {
			u += 0.01
		}
		n := 2e6 * PeakDensity(rootDet, u)
		t.Logf("FWHM %.1f px: p = 0.5 at %.2f sigma, %.3f noise candidates per Mpx above", fwhm, u, n)
		if n > 0.12 {
			t.Errorf("FWHM %g: %g noise candidates per Mpx", fwhm, n)
		}
	}
}

func TestReliability(t *testing.T) {
	p := []float64{0.05, 0.05, 0.95, 0.95, 1}
	real := []bool{false, true, true, true, true}
	table, ece := Reliability(p, real, []float64{1, 1, 1, 1, 1}, 10)
	if table[0].Found != 0.5 || table[9].Weight != 3 || math.Abs(ece-(2*0.45+3*(1-2.9/3))/5) > 1e-12 {
		t.Errorf("table %+v, error %g", table, ece)
	}
	if !(table[0].FoundLow > 0 && table[0].FoundHigh < 1 && table[0].FoundLow < 0.5) {
		t.Errorf("interval %g to %g", table[0].FoundLow, table[0].FoundHigh)
	}
}

func BenchmarkProbability(b *testing.B) {
	ex, _ := invent(2000, 7, 10)
	cfg := DefaultTrainConfig()
	m := boost(ex, cfg)
	m.Calibration = Calibration{Kind: "none"}
	k := 0
	for b.Loop() {
		k = (k + 1) % len(ex)
		m.Probability(&ex[k].Features)
	}
}
