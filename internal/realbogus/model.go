package realbogus

import (
	"bytes"
	"crypto/sha256"
	_ "embed"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"slices"
	"sync"
)

// Format is the version of the model file.
const Format = 1

// largest bounds every number of a model, so that no sum of them overflows.
const largest = 1e9

// The kinds of model.
const (
	KindPrior   = "prior"   // a logistic function with coefficients set by reasoning, trained on nothing
	KindBoosted = "boosted" // trained trees
)

// Model is a real/bogus model as its file holds it. It is read-only after
// Decode or Train: any number of goroutines may use it at once.
type Model struct {
	Format   int      `json:"format"`
	Kind     string   `json:"kind"`
	Made     string   `json:"made"` // date, YYYY-MM-DD
	Note     string   `json:"note"`
	Features []string `json:"features"`
	Training Training `json:"training"`

	Bias  float64 `json:"bias"`
	Terms []Term  `json:"terms,omitempty"`
	Trees []Tree  `json:"trees,omitempty"`

	Calibration Calibration `json:"calibration"`
	Metrics     *Metrics    `json:"metrics,omitempty"`

	// Digest is the SHA-256 of this file's content with an empty digest.
	Digest string `json:"digest"`

	at []int // of each of the model's features, its index in Features
}

// Training says what a model was made from.
type Training struct {
	Digest string `json:"digest"` // SHA-256 of the examples
	Real   int    `json:"real"`
	Bogus  int    `json:"bogus"`
	Groups int    `json:"groups"` // frames
	// Odds are the numbers of real ones over bogus ones for which the calibration
	// holds. 0: those of the survey in which the model was trained and is used.
	Odds float64 `json:"odds,omitempty"`
}

// Term is one part of a prior: Weight × the feature limited to [Low, High].
type Term struct {
	Feature string  `json:"feature"`
	Low     float64 `json:"low"`
	High    float64 `json:"high"`
	Weight  float64 `json:"weight"`
	index   int
}

// Tree is one shallow tree in array form. Node n asks whether feature
// Feature[n] is below Cut[n]; if so its child is Left[n], else Left[n]+1. A
// Left of 0 marks a leaf with the value Cut[n].
type Tree struct {
	Feature []int     `json:"f"`
	Cut     []float64 `json:"c"`
	Left    []int     `json:"l"`
}

func (t *Tree) value(f *Features, at []int) float64 {
	n := 0
	for t.Left[n] != 0 {
		if f[at[t.Feature[n]]] < t.Cut[n] {
			n = t.Left[n]
		} else {
			n = t.Left[n] + 1
		}
	}
	return t.Cut[n]
}

// Score returns the model's raw score: log odds before calibration.
func (m *Model) Score(f *Features) float64 {
	s := m.Bias
	for i := range m.Terms {
		t := &m.Terms[i]
		s += t.Weight * math.Max(t.Low, math.Min(t.High, f[t.index]))
	}
	for i := range m.Trees {
		s += m.Trees[i].value(f, m.at)
	}
	return s
}

// Probability returns the calibrated probability that the features are those
// of a real change and not of a defect, at the base rate of the training set.
// It does not know of noise peaks: see Posterior.
func (m *Model) Probability(f *Features) float64 { return m.Calibration.Apply(m.Score(f)) }

// Here turns a calibrated probability into the one that holds where real changes
// and defects are as frequent as rates says: Bayes' rule, with the likelihood
// ratio that the probability stands for at the odds of the training set. That of a
// model trained in the survey itself stays as it is.
func (m *Model) Here(p float64, rates Rates) float64 {
	if !(m.Training.Odds > 0) || !(rates.DefectsPerMpx > 0) {
		return p
	}
	factor := rates.RealPerMpx / rates.DefectsPerMpx / m.Training.Odds
	return p * factor / (p*factor + 1 - p)
}

// Encode returns the model as a file's content, with a fresh digest.
func (m *Model) Encode() ([]byte, error) {
	c := *m
	c.Digest = ""
	plain, err := json.MarshalIndent(&c, "", " ")
	if err != nil {
		return nil, fmt.Errorf("encode model: %w", err)
	}
	sum := sha256.Sum256(plain)
	m.Digest = hex.EncodeToString(sum[:])
	c.Digest = m.Digest
	out, err := json.MarshalIndent(&c, "", " ")
	if err != nil {
		return nil, fmt.Errorf("encode model: %w", err)
	}
	return append(out, '\n'), nil
}

// Decode reads a model and refuses one that is damaged or does not fit this
// program: name is used in errors.
func Decode(name string, data []byte) (*Model, error) {
	var m Model
	if err := json.Unmarshal(data, &m); err != nil {
		return nil, fmt.Errorf("%s: not a real/bogus model: %w", name, err)
	}
	if m.Format != Format {
		return nil, fmt.Errorf("%s: model format %d, expected %d: train it again with this version", name, m.Format, Format)
	}
	if err := m.place(name); err != nil {
		return nil, err
	}
	if found := contentDigest(data, m.Digest); m.Digest != found {
		return nil, fmt.Errorf("%s: digest is %.12q, its content gives %.12q: the file was changed or damaged, restore it or train again", name, m.Digest, found)
	}
	if !(math.Abs(m.Bias) <= largest) {
		return nil, fmt.Errorf("%s: the bias is %g, expected at most %g", name, m.Bias, largest)
	}
	if !(m.Training.Odds >= 0 && m.Training.Odds <= largest) {
		return nil, fmt.Errorf("%s: the odds of the training are %g, expected 0 to %g", name, m.Training.Odds, largest)
	}
	known := Names()
	for i := range m.Terms {
		t := &m.Terms[i]
		t.index = slices.Index(known, t.Feature)
		if t.index < 0 || !(t.Low <= t.High) || !(math.Abs(t.Low) <= largest && math.Abs(t.High) <= largest && math.Abs(t.Weight) <= largest) {
			return nil, fmt.Errorf("%s: term %d: weight %g of feature %q between %g and %g makes no sense", name, i, t.Weight, t.Feature, t.Low, t.High)
		}
	}
	for i := range m.Trees {
		if err := m.Trees[i].check(len(m.Features)); err != nil {
			return nil, fmt.Errorf("%s: tree %d: %w", name, i, err)
		}
	}
	if err := m.Calibration.check(); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	switch m.Kind {
	case KindPrior, KindBoosted:
	default:
		return nil, fmt.Errorf("%s: model kind %q is unknown, expected %q or %q", name, m.Kind, KindPrior, KindBoosted)
	}
	return &m, nil
}

// contentDigest is the SHA-256 of a file with the stated digest taken out, so
// that what another version knows to be in it counts as well.
func contentDigest(data []byte, stated string) string {
	const key = `"digest": "`
	text := bytes.TrimRight(data, "\n")
	at := bytes.LastIndex(text, []byte(key+stated+`"`))
	h := sha256.New()
	if at >= 0 {
		h.Write(text[:at+len(key)])
		h.Write(text[at+len(key)+len(stated):])
	}
	return hex.EncodeToString(h.Sum(nil))
}

// place finds the model's features among those of this version. A model may
// know fewer: one from before a feature was added goes on working.
func (m *Model) place(name string) error {
	known := Names()
	m.at = make([]int, len(m.Features))
	for k, f := range m.Features {
		m.at[k] = slices.Index(known, f)
		if m.at[k] < 0 {
			return fmt.Errorf("%s: the model asks for the feature %q, which this version does not measure: train it again", name, f)
		}
		if slices.Contains(m.at[:k], m.at[k]) {
			return fmt.Errorf("%s: the model names the feature %q twice: restore the file or train it again", name, f)
		}
	}
	if len(m.Features) == 0 {
		return fmt.Errorf("%s: the model names no features: restore the file or train it again", name)
	}
	return nil
}

func (t *Tree) check(features int) error {
	n := len(t.Left)
	if n == 0 || len(t.Feature) != n || len(t.Cut) != n {
		return fmt.Errorf("%d features, %d cuts, %d links: lengths must agree", len(t.Feature), len(t.Cut), len(t.Left))
	}
	for k := range n {
		l := t.Left[k]
		// Children follow their parent, so every walk ends.
		if l != 0 && (l <= k || l+1 >= n) {
			return fmt.Errorf("node %d points to %d of %d", k, l, n)
		}
		if t.Feature[k] < 0 || t.Feature[k] >= features {
			return fmt.Errorf("node %d asks for feature %d of %d", k, t.Feature[k], features)
		}
		if !(math.Abs(t.Cut[k]) <= largest) {
			return fmt.Errorf("node %d has the value %g, expected at most %g", k, t.Cut[k], largest)
		}
	}
	return nil
}

// Load reads a model file.
func Load(path string) (*Model, error) {
	data, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	return Decode(path, data)
}

//go:embed model.json
var shippedFile []byte

var shipped = sync.OnceValues(func() (*Model, error) { return Decode("shipped model", shippedFile) })

// Shipped returns the model that comes with the program.
func Shipped() (*Model, error) { return shipped() }

// Prior returns the model that reasoning alone gives: a candidate is the less
// likely real the worse a point source fits, the better hits, dipoles or
// blurred profiles do, the nearer it is to masked and saturated pixels, and
// the less it exceeds what an error of scale or registration would leave.
func Prior() *Model {
	m := &Model{
		Format: Format, Kind: KindPrior, Made: "2026-12-01", Features: Names(),
		Note: "coefficients set by reasoning, not trained: replace by a trained model",
		Bias: 3,
		Terms: []Term{
			{Feature: "chi2_excess", Low: 0.08, High: 1.2, Weight: -6},
			{Feature: "size", Low: 0.4, High: 3, Weight: -1.5},
			{Feature: "size", Low: -1, High: -0.3, Weight: 3},
			{Feature: "hit_margin", Low: 0, High: 0.5, Weight: -16},
			{Feature: "broad_margin", Low: 0, High: 0.5, Weight: -8},
			{Feature: "dipole_margin", Low: 0, High: 0.5, Weight: -8},
			{Feature: "contradicts", Low: 0.02, High: 0.4, Weight: -12},
			{Feature: "flagged", Low: 0, High: 0.6, Weight: -8},
			{Feature: "saturation_distance", Low: 0, High: 0.6, Weight: 4},
			{Feature: "expected_residual", Low: 0, High: 0.8, Weight: 5},
			{Feature: "crowding", Low: 0.6, High: 2, Weight: -1.5},
			{Feature: "absorbed", Low: 0.3, High: 2, Weight: -1},
			{Feature: "new_flux", Low: -1, High: 0, Weight: 2},
			{Feature: "elongation", Low: 4, High: 5, Weight: -8},
		},
		Calibration: Calibration{Kind: "none"},
	}
	// The terms that sit at a limit for a clean candidate are balanced here.
	m.Bias += 6*0.08 + 1.5*0.4 + 3*0.3 + 12*0.02 - 4*0.6 - 5*0.8 + 1.5*0.6 + 0.3 + 8*4
	for i := range m.Terms {
		m.Terms[i].index = slices.Index(m.Features, m.Terms[i].Feature)
	}
	if err := m.place("prior"); err != nil {
		panic("realbogus: " + err.Error())
	}
	if _, err := m.Encode(); err != nil {
		panic("realbogus: prior: " + err.Error())
	}
	return m
}
