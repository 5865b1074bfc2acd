package catalog

import (
	"bytes"
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/detect"
	"nightsift/internal/frame"
)

var ctx = context.Background()

// night is one frame with its candidates.
type night struct {
	rec        FrameRecord
	candidates []detect.Candidate
}

// invented is a small survey of known sources.
type invented struct {
	frames  []night
	sources [][2]float64 // deg
	member  map[string]int
}

// scale is the pixel scale of the invented frames [arcsec].
const scale = 0.8

func newCandidate(id string, rec *FrameRecord) detect.Candidate {
	n := math.NaN()
	return detect.Candidate{ID: id, Frame: rec.Frame, Filter: rec.Filter, Night: rec.Night, MidMJD: rec.MidMJD,
		X: n, Y: n, XErr: n, YErr: n, RA: n, Dec: n, Flux: n, FluxErr: n, Mag: n, MagErr: n, MagLimit: n, Significance: n,
		RealProbability: n, ReferenceDistance: n, ReferenceMag: n, FitChi2: n, Length: n, Angle: n}
}

func record(k int) FrameRecord {
	r := NewFrameRecord(fmt.Sprintf("frame%03d", k), Searched)
	r.Night, r.Filter, r.Field = fmt.Sprintf("2031-03-%02d", 1+k/2), []string{"g", "r"}[k%2], "A1"
	r.MidMJD, r.Exposure, r.Width, r.Height = 62900.25+float64(k)/2, 60, 2000, 1500
	r.Jacobian = [4]float64{-scale, 0, 0, scale}
	r.Version, r.Configuration = "0.1", "abc"
	r.Inputs = []Input{{"new", r.Frame + ".fits", strings.Repeat("0", 64)}}
	return r
}

func identifier(parts ...any) string {
	h := sha256.Sum256([]byte(fmt.Sprintln(parts...)))
	return hex.EncodeToString(h[:8])
}

// survey invents frames that each show most of the sources, false candidates
// without a source, and candidates that must not form objects.
func survey(seed uint64, frames, sources, false_ int, ra, dec float64) *invented {
	r := rand.New(rand.NewPCG(seed, 1))
	s := &invented{member: map[string]int{}}
	centre := newPlane(ra, dec)
	for range sources {
		a, d := centre.direction((r.Float64()-0.5)*1400, (r.Float64()-0.5)*1000).position()
		s.sources = append(s.sources, [2]float64{a, d})
	}
	for k := range frames {
		n := night{rec: record(k)}
		add := func(ra, dec, snr, probability float64, kind detect.Kind) *detect.Candidate {
			i := len(n.candidates)
			c := newCandidate(identifier(k, i), &n.rec)
			plane := newPlane(ra, dec)
			c.XErr, c.YErr = 1.2/snr, 1.5/snr
			c.RA, c.Dec = plane.direction(math.Hypot(c.XErr*scale, 0.2)*r.NormFloat64(), math.Hypot(c.YErr*scale, 0.2)*r.NormFloat64()).position()
			xi, eta := centre.offset(unit(c.RA, c.Dec))
			c.X, c.Y = 1000-xi/scale, 750+eta/scale
			c.Significance, c.Flux, c.FluxErr = snr, snr*50, 50
			c.Mag, c.MagErr, c.MagLimit = 25-2.5*math.Log10(c.Flux), 1.086/snr, 20.5
			c.RealProbability, c.Kind, c.Flags = probability, kind, frame.Flag(i%4)
			n.candidates = append(n.candidates, c)
			return &n.candidates[i]
		}
		for i, p := range s.sources {
			switch u := r.Float64(); {
			case u < 0.7:
				kind := []detect.Kind{detect.NewSource, detect.Brightened, detect.Faded}[i%3]
				s.member[add(p[0], p[1], 6+30*r.Float64(), 0.5+0.5*r.Float64(), kind).ID] = i
			case u < 0.85: // too improbable to form an object, but there
				add(p[0], p[1], 5+2*r.Float64(), 0.15+0.3*r.Float64(), detect.NewSource)
			}
		}
		for i := range false_ {
			a, d := centre.direction((r.Float64()-0.5)*1400, (r.Float64()-0.5)*1000).position()
			kind := detect.Kinds[i%len(detect.Kinds)]
			probability := 0.3 * r.Float64()
			if i%5 == 0 {
				probability = 0.9
			}
			c := add(a, d, 5+5*r.Float64(), probability, kind)
			switch i % 11 {
			case 3:
				c.RA, c.Dec = math.NaN(), math.NaN()
			case 5:
				c.Mag, c.MagErr, c.Filter, c.Night = math.NaN(), math.NaN(), "", ""
			case 7:
				c.XErr = 9 // too uncertain
			}
		}
		n.rec.Candidates = len(n.candidates)
		s.frames = append(s.frames, n)
	}
	return s
}

func open(t testing.TB, path string) *Store {
	t.Helper()
	s, err := Open(ctx, path, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.Close() })
	return s
}

func addAll(t testing.TB, s *Store, frames []night) {
	t.Helper()
	for _, n := range frames {
		if err := s.AddFrame(ctx, n.rec, n.candidates); err != nil {
			t.Fatal(err)
		}
	}
}

// state is everything that a user can see in a catalogue.
func state(t testing.TB, s *Store) string {
	t.Helper()
	var b bytes.Buffer
	for _, table := range []string{"frames", "candidates", "objects"} {
		sheet, err := s.Sheet(ctx, table)
		if err != nil {
			t.Fatal(err)
		}
		fmt.Fprintln(&b, "#", table, sheet.Rows)
		if err := EncodeCSV(&b, sheet); err != nil {
			t.Fatal(err)
		}
	}
	return b.String()
}

func healthy(t testing.TB, s *Store) {
	t.Helper()
	found, err := s.Check(ctx)
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range found {
		t.Errorf("check: %s", f)
	}
}

// difference returns the first lines in which two texts differ.
func difference(a, b string) string {
	x, y := strings.Split(a, "\n"), strings.Split(b, "\n")
	for i := range min(len(x), len(y)) {
		if x[i] != y[i] {
			return fmt.Sprintf("line %d:\n%s\n%s", i+1, x[i], y[i])
		}
	}
	return fmt.Sprintf("%d and %d lines", len(x), len(y))
}

func TestSourcesBecomeObjects(t *testing.T) { onEachStore(t, testSourcesBecomeObjects) }

func testSourcesBecomeObjects(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	for _, at := range [][2]float64{{150, 20}, {0.01, -5}, {359.99, 60}, {45, 89.95}, {200, -89.9}} {
		s := newStore(t)
		inv := survey(11, 12, 60, 40, at[0], at[1])
		addAll(t, s, inv.frames)
		healthy(t, s)
		objects, err := s.Objects(ctx, ObjectQuery{MinDetections: 3})
		if err != nil {
			t.Fatal(err)
		}
		if len(objects) < 58 || len(objects) > 62 {
			t.Errorf("%v: %d objects of three detections or more, want the 60 sources", at, len(objects))
		}
		seen := map[int]bool{}
		strays, joined := 0, 0
		var pull float64
		for _, o := range objects {
			members, err := s.Members(ctx, o)
			if err != nil {
				t.Fatal(err)
			}
			source := -1
			for _, m := range members {
				if i, ok := inv.member[m.ID]; ok && source < 0 {
					source = i
				} else if ok && i != source {
					strays++
				}
				if !m.Forms {
					joined++
				}
			}
			if source < 0 {
				t.Errorf("%v: object %s has no detection of a source", at, o.Name)
				continue
			}
			seen[source] = true
			p := newPlane(o.RA, o.Dec)
			xi, eta := p.offset(unit(inv.sources[source][0], inv.sources[source][1]))
			pull += xi*xi/(o.RAErr*o.RAErr) + eta*eta/(o.DecErr*o.DecErr)
		}
		pull = math.Sqrt(pull / float64(2*len(objects)))
		if len(seen) < 59 || strays > 2 || joined < 60 {
			t.Errorf("%v: %d sources found, %d detections at the wrong object, %d joined", at, len(seen), strays, joined)
		}
		// 120 squares: the expected spread of the root mean square is 0.065.
		if pull < 0.8 || pull > 1.2 {
			t.Errorf("%v: positions differ from the truth by %.2f of their errors, want 1", at, pull)
		}
	}
}

// The same set of frames in any order, with any frames added twice or changed
// and changed back, must give the same tables.
func TestOrderDoesNotMatter(t *testing.T) { onEachStore(t, testOrderDoesNotMatter) }

func testOrderDoesNotMatter(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	r := rand.New(rand.NewPCG(4, 4))
	for _, crowd := range []int{20, 80} { // sparse; and so dense that clusters touch
		inv := survey(uint64(crowd), 7, crowd, crowd, 359.9, 30)
		if crowd == 80 { // squeeze 80 sources into a few arcseconds each way
			for k := range inv.frames {
				for i := range inv.frames[k].candidates {
					c := &inv.frames[k].candidates[i]
					p := newPlane(359.9, 30)
					xi, eta := p.offset(unit(c.RA, c.Dec))
					if !math.IsNaN(xi) {
						c.RA, c.Dec = p.direction(xi/40, eta/40).position()
					}
				}
			}
		}
		plain := newStore(t)
		addAll(t, plain, inv.frames)
		want := state(t, plain)
		healthy(t, plain)
		for trial := range 4 {
			s := newStore(t)
			order := r.Perm(len(inv.frames))
			for _, k := range order {
				if trial > 1 && r.IntN(2) == 0 { // first another version of it
					other := inv.frames[k]
					other.candidates = slices.Clone(other.candidates)
					for i := range other.candidates {
						other.candidates[i].RealProbability = r.Float64()
					}
					addAll(t, s, []night{{other.rec, other.candidates[:r.IntN(len(other.candidates))]}})
				}
				addAll(t, s, inv.frames[k:k+1])
				if r.IntN(3) == 0 { // and some earlier one again
					addAll(t, s, []night{inv.frames[order[r.IntN(len(order))]]})
				}
			}
			if got := state(t, s); got != want {
				t.Fatalf("%d sources, trial %d, order %v: %s", crowd, trial, order, difference(want, got))
			}
			healthy(t, s)
			if err := s.Rebuild(ctx); err != nil {
				t.Fatal(err)
			}
			if got := state(t, s); got != want {
				t.Fatalf("%d sources, trial %d: rebuilt: %s", crowd, trial, difference(want, got))
			}
		}
		if strings.Count(want, "\n") < 200 {
			t.Error("the survey is too small to show anything")
		}
	}
}

func TestRerunKeepsNumbersAndNames(t *testing.T) { onEachStore(t, testRerunKeepsNumbersAndNames) }

func testRerunKeepsNumbersAndNames(t *testing.T) {
	s := newStore(t)
	inv := survey(5, 8, 40, 30, 100, 0)
	addAll(t, s, inv.frames)
	numbers := func() map[string]int64 {
		list, err := s.Objects(ctx, ObjectQuery{})
		if err != nil {
			t.Fatal(err)
		}
		m := map[string]int64{}
		for _, o := range list {
			m[o.Name] = o.id
		}
		return m
	}
	before := numbers()
	for range 2 {
		addAll(t, s, inv.frames)
	}
	after := numbers()
	if len(before) == 0 || fmt.Sprint(before) != fmt.Sprint(after) {
		t.Errorf("a rerun changed objects: %d before, %d after", len(before), len(after))
	}

	// An earlier frame changes founders and so names; the former ones still lead
	// to the objects. Then it goes again.
	early := inv.frames[0]
	early.rec.Frame, early.rec.MidMJD, early.rec.Night = "earliest", 62000, "2028-09-01"
	early.candidates = slices.Clone(early.candidates)
	for i := range early.candidates {
		c := &early.candidates[i]
		c.ID, c.Frame, c.MidMJD, c.Night = identifier("early", i), "earliest", 62000, "2028-09-01"
		c.RA += 0.3 / 3600
	}
	wantState := state(t, s)
	addAll(t, s, []night{early})
	renamed := 0
	for name, id := range before {
		o, err := s.Object(ctx, name)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if o.id == id && o.Name != name {
			renamed++
			former, err := s.FormerNames(ctx, o)
			if err != nil || !slices.Contains(former, name) {
				t.Errorf("%s: former names %v, %v", o.Name, former, err)
			}
		}
	}
	if renamed < 10 {
		t.Errorf("only %d objects got a new name", renamed)
	}
	healthy(t, s)
	if found, err := s.RemoveFrame(ctx, "earliest"); !found || err != nil {
		t.Fatal(found, err)
	}
	if found, err := s.RemoveFrame(ctx, "earliest"); found || err != nil {
		t.Fatal(found, err)
	}
	if got := state(t, s); got != wantState {
		t.Errorf("a frame came and went: %s", difference(wantState, got))
	}
	healthy(t, s)
}

func TestDesignation(t *testing.T) {
	for _, c := range []struct {
		ra, dec float64
		want    string
	}{
		{15 * (12 + 34/60.0 + 56.789/3600), -(1 + 23/60.0 + 45.67/3600), "A J123456.78-012345.6"},
		{0, 0, "A J000000.00+000000.0"},
		{359.99999999999, 89.99999999999, "A J000000.00+900000.0"},
		{-15, -0.0001, "A J230000.00-000000.3"},
		{15 * (7 + 8/60.0 + 9.01/3600), 10 + 11/60.0 + 12.3/3600, "A J070809.01+101112.3"},
	} {
		if got := designation(c.ra, c.dec, "A"); got != c.want {
			t.Errorf("(%v, %v): %s, want %s", c.ra, c.dec, got, c.want)
		}
	}
}

func TestWhatFormsObjects(t *testing.T) { onEachStore(t, testWhatFormsObjects) }

func testWhatFormsObjects(t *testing.T) {
	s := newStore(t)
	rec := record(0)
	put := func(id string, ra float64, probability float64, kind detect.Kind) detect.Candidate {
		c := newCandidate(id, &rec)
		c.RA, c.Dec, c.X, c.Y, c.XErr, c.YErr = ra, 10, 5, 5, 0.1, 0.1
		c.RealProbability, c.Kind, c.Significance = probability, kind, 9
		return c
	}
	list := []detect.Candidate{
		put("new", 1, 0.5, detect.NewSource),
		put("faded", 2, 0.9, detect.Faded),
		put("brightened", 3, 0.9, detect.Brightened),
		put("mover", 4, 0.99, detect.Moving),
		put("dipole", 5, 0.99, detect.Dipole),
		put("doubtful", 6, 0.49, detect.NewSource),
		put("unknown", 7, math.NaN(), detect.NewSource),
		put("joins", 1, 0.2, detect.NewSource),
		put("hopeless", 1, 0.05, detect.NewSource),
	}
	if err := s.AddFrame(ctx, rec, list); err != nil {
		t.Fatal(err)
	}
	for id, want := range map[string]bool{"new": true, "faded": true, "brightened": true, "mover": false, "dipole": false,
		"doubtful": false, "unknown": false, "joins": true, "hopeless": false} {
		_, err := s.Object(ctx, id)
		if want != (err == nil) || err != nil && !errors.Is(err, ErrNotFound) {
			t.Errorf("candidate %s: object %v, want %v", id, err, want)
		}
	}
	// The same in a catalogue with other settings, and after a change of them.
	cfg := DefaultConfig()
	cfg.FormProbability, cfg.JoinProbability, cfg.Kinds = 0.4, 0.4, []detect.Kind{detect.NewSource, detect.Moving}
	s.Close()
	s2, err := Open(ctx, s.place, cfg)
	if err != nil {
		t.Fatal(err)
	}
	defer s2.Close()
	healthy(t, s2)
	for id, want := range map[string]bool{"new": true, "faded": false, "mover": true, "doubtful": true, "joins": false} {
		if _, err := s2.Object(ctx, id); want != (err == nil) {
			t.Errorf("other settings: candidate %s: object %v, want %v", id, err, want)
		}
	}
}

// A seed's chance to be lost is MissProbability: measured over many sources
// with two detections each.
func TestMissProbability(t *testing.T) {
	const pairs = 4000
	cfg := DefaultConfig()
	cfg.MissProbability = 0.02
	s, err := Open(ctx, filepath.Join(t.TempDir(), FileName), cfg)
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	r := rand.New(rand.NewPCG(2, 2))
	for k := range 2 {
		rec := record(k)
		var list []detect.Candidate
		rec.Jacobian = [4]float64{-0.5, 0.3, 0.4, 0.9} // rotated and stretched
		for i := range pairs {
			c := newCandidate(identifier(k, i), &rec)
			c.XErr, c.YErr, c.RealProbability, c.Kind = 0.1+0.5*r.Float64(), 0.2+0.8*r.Float64(), 1, detect.NewSource
			x, y := c.XErr*r.NormFloat64(), c.YErr*r.NormFloat64()
			plane := newPlane(float64(i%80)*0.1, 40+float64(i/80)*0.1)
			j := rec.Jacobian
			c.RA, c.Dec = plane.direction(j[0]*x+j[1]*y+cfg.ErrorFloor*r.NormFloat64(), j[2]*x+j[3]*y+cfg.ErrorFloor*r.NormFloat64()).position()
			list = append(list, c)
		}
		if err := s.AddFrame(ctx, rec, list); err != nil {
			t.Fatal(err)
		}
	}
	objects, err := s.Objects(ctx, ObjectQuery{})
	if err != nil {
		t.Fatal(err)
	}
	lost := float64(len(objects)-pairs) / pairs
	if sigma := math.Sqrt(0.02 * 0.98 / pairs); math.Abs(lost-0.02) > 4*sigma {
		t.Errorf("%.4f of the pairs were not joined, want 0.02 ± %.4f", lost, sigma)
	}
}

func TestQueries(t *testing.T) { onEachStore(t, testQueries) }

func testQueries(t *testing.T) {
	s := newStore(t)
	inv := survey(3, 6, 30, 30, 10, -45)
	addAll(t, s, inv.frames)
	bad := NewFrameRecord("clouded", SetAside)
	bad.Reason, bad.Detail, bad.Night = "too_few_stars", "found 3 stars, expected 8", "2031-03-02"
	if err := s.AddFrame(ctx, bad, nil); err != nil {
		t.Fatal(err)
	}
	all, err := s.Candidates(ctx, CandidateQuery{})
	if err != nil {
		t.Fatal(err)
	}
	for _, q := range []CandidateQuery{{Frame: "frame002"}, {Night: "2031-03-02"}, {Kind: detect.Dipole}, {MinProbability: 0.7},
		{Cone: &Cone{10, -45, 200}}, {Cone: &Cone{all[4].RA, all[4].Dec, 60}, MinProbability: all[4].RealProbability}} {
		got, err := s.Candidates(ctx, q)
		if err != nil {
			t.Fatal(err)
		}
		want := 0
		for i := range all {
			c := &all[i]
			ok := (q.Frame == "" || c.Frame == q.Frame) && (q.Night == "" || c.Night == q.Night) && (q.Kind == "" || c.Kind == q.Kind) &&
				(q.MinProbability == 0 || c.RealProbability >= q.MinProbability)
			if q.Cone != nil {
				ok = ok && separation(unit(q.Cone.RA, q.Cone.Dec), unit(c.RA, c.Dec)) <= q.Cone.Radius
			}
			if ok {
				want++
			}
		}
		if len(got) != want || want == 0 {
			t.Errorf("%+v: %d candidates, want %d", q, len(got), want)
		}
	}
	// A candidate comes back as it went in, with stamps and features.
	c := inv.frames[0].candidates[0]
	c.ID, c.Frame = "withstamps", "stamps"
	c.StampNew, c.StampDifference = make([]float32, detect.StampSize*detect.StampSize), []float32{1, float32(math.NaN()), -3e7}
	c.StampNew[7] = 0.1
	c.Features = []float64{0.1, math.Inf(1), -2}
	rec := record(0)
	rec.Frame = "stamps"
	if err := s.AddFrame(ctx, rec, []detect.Candidate{c}); err != nil {
		t.Fatal(err)
	}
	got, err := s.Candidate(ctx, "withstamps")
	if err != nil {
		t.Fatal(err)
	}
	if a, b := fmt.Sprintf("%+v", got), fmt.Sprintf("%+v", c); a != b {
		t.Errorf("stored\n%s\nread\n%s", b, a)
	}
	if _, err := s.Candidate(ctx, "nobody"); !errors.Is(err, ErrNotFound) {
		t.Errorf("unknown candidate: %v", err)
	}
	if _, err := s.Object(ctx, "nobody"); !errors.Is(err, ErrNotFound) {
		t.Errorf("unknown object: %v", err)
	}
	frames, err := s.Frames(ctx, FrameQuery{Night: "2031-03-02", Status: SetAside})
	if err != nil || len(frames) != 1 || fmt.Sprintf("%+v", frames[0]) != fmt.Sprintf("%+v", bad) {
		t.Errorf("set aside: %+v, %v; want %+v", frames, err, bad)
	}
	objects, err := s.Objects(ctx, ObjectQuery{Night: "2031-03-01", MinProbability: 0.8, MinNights: 2})
	if err != nil || len(objects) == 0 {
		t.Fatal(len(objects), err)
	}
	for _, o := range objects {
		members, err := s.Members(ctx, o)
		if err != nil {
			t.Fatal(err)
		}
		frames, nights, tonight, best := map[string]bool{}, map[string]bool{}, false, math.Inf(1)
		for i, m := range members {
			if i > 0 && m.MidMJD < members[i-1].MidMJD {
				t.Errorf("%s: detections are not in order of time", o.Name)
			}
			frames[m.Frame] = true
			if m.Night != "" {
				nights[m.Night] = true
			}
			tonight = tonight || m.Night == "2031-03-01"
			if m.Mag < best {
				best = m.Mag
			}
			if m.ChiSquare > 30 || !(m.FalseMatch >= 0 && m.FalseMatch < 0.01) {
				t.Errorf("%s: detection %s: chi-square %g, false match %g", o.Name, m.ID, m.ChiSquare, m.FalseMatch)
			}
		}
		if !tonight || o.RealProbability < 0.8 || o.Nights < 2 || o.Nights != len(nights) || o.Detections != len(frames) || o.PeakMag != best {
			t.Errorf("object %+v does not agree with its detections or the query", o)
		}
	}
	cone, err := s.Objects(ctx, ObjectQuery{Cone: &Cone{objects[0].RA, objects[0].Dec, 300}})
	if err != nil || len(cone) == 0 || cone[0].Name != objects[0].Name {
		t.Errorf("cone search about %s: %d objects, %v", objects[0].Name, len(cone), err)
	}
	if _, err := s.Objects(ctx, ObjectQuery{Cone: &Cone{0, 91, 1}}); err == nil {
		t.Error("a cone off the sky was searched")
	}
	var b bytes.Buffer
	if err := s.Show(ctx, &b, objects[0].Name); err != nil || !strings.Contains(b.String(), objects[0].Founder) {
		t.Errorf("show: %v\n%s", err, b.String())
	}
	b.Reset()
	if err := s.Show(ctx, &b, all[0].ID); err != nil || b.Len() == 0 {
		t.Errorf("show candidate: %v", err)
	}
	if err := s.Show(ctx, &b, "nobody"); !errors.Is(err, ErrNotFound) {
		t.Errorf("show nobody: %v", err)
	}
}

// Without world coordinates in the record the scale comes from the candidates
// themselves; with too few of them, an error is assumed.
func TestScaleFromCandidates(t *testing.T) { onEachStore(t, testScaleFromCandidates) }

func testScaleFromCandidates(t *testing.T) {
	inv := survey(8, 1, 20, 0, 77, 33)
	list := inv.frames[0].candidates
	j := jacobianFrom(list)
	for i, want := range []float64{-scale, 0, 0, scale} {
		if math.Abs(j[i]-want) > 5e-3 {
			t.Errorf("element %d is %g, want %g", i, j[i], want)
		}
	}
	if j := jacobianFrom(list[:2]); !math.IsNaN(j[0]) {
		t.Errorf("from two candidates: %v", j)
	}
	s := newStore(t)
	for k := range 2 {
		rec := NewFrameRecord(fmt.Sprint("bare", k), Searched)
		c := list[0]
		c.ID, c.Frame = fmt.Sprint("c", k), rec.Frame
		c.RealProbability = 1
		if err := s.AddFrame(ctx, rec, []detect.Candidate{c}); err != nil {
			t.Fatal(err)
		}
	}
	if o, err := s.Object(ctx, "c1"); err != nil || o.Detections != 2 {
		t.Errorf("%+v, %v", o, err)
	}
}

type tilted struct{ fail bool }

func (p tilted) PixelToSky(x, y float64) (float64, float64, error) {
	if p.fail {
		return 0, 0, errors.New("off the sky")
	}
	plane := newPlane(359.9999, 70)
	ra, dec := plane.direction(0.3*(x-500.5)+0.2*(y-400.5), 0.1*(x-500.5)-0.4*(y-400.5)).position()
	return ra, dec, nil
}

func TestSetWCS(t *testing.T) {
	r := NewFrameRecord("a", Searched)
	r.SetWCS(tilted{}, 1000, 800)
	for i, want := range []float64{0.3, 0.2, 0.1, -0.4} {
		if math.Abs(r.Jacobian[i]-want) > 1e-6 {
			t.Errorf("element %d is %g, want %g", i, r.Jacobian[i], want)
		}
	}
	if a := r.area(); math.Abs(a-0.14*800000) > 1 {
		t.Errorf("area %g arcsec²", a)
	}
	// The covariance of a fit turned with the frame: compared with many draws.
	rng := rand.New(rand.NewPCG(1, 9))
	var sxx, syy, sxy float64
	const n = 200000
	for range n {
		x, y := 2*rng.NormFloat64(), 3*rng.NormFloat64()
		a, b := 0.3*x+0.2*y, 0.1*x-0.4*y
		sxx, syy, sxy = sxx+a*a, syy+b*b, sxy+a*b
	}
	xx, yy, xy := r.skyError(2, 3)
	if math.Abs(sxx/n-xx) > 0.01*xx || math.Abs(syy/n-yy) > 0.01*yy || math.Abs(sxy/n-xy) > 0.01*math.Abs(xy) {
		t.Errorf("covariance %g %g %g, drawn %g %g %g", xx, yy, xy, sxx/n, syy/n, sxy/n)
	}
	r.SetWCS(tilted{fail: true}, 10, 10)
	if !math.IsNaN(r.Jacobian[0]) || r.Width != 10 {
		t.Error("a failing projection left a Jacobian")
	}
}

// Candidates without frame records, as read from a table of many frames.
func TestAddCandidates(t *testing.T) { onEachStore(t, testAddCandidates) }

func testAddCandidates(t *testing.T) {
	inv := survey(9, 4, 20, 20, 33, 3)
	var list []detect.Candidate
	for _, n := range inv.frames {
		list = append(list, n.candidates...)
	}
	rand.New(rand.NewPCG(1, 1)).Shuffle(len(list), func(i, j int) { list[i], list[j] = list[j], list[i] })
	s := newStore(t)
	for range 2 {
		if n, err := s.AddCandidates(ctx, list); n != 4 || err != nil {
			t.Fatal(n, err)
		}
	}
	healthy(t, s)
	frames, err := s.Frames(ctx, FrameQuery{})
	if err != nil || len(frames) != 4 {
		t.Fatal(frames, err)
	}
	for k, f := range frames {
		want := &inv.frames[k].rec
		if f.Frame != want.Frame || f.Status != Searched || f.Filter != want.Filter || f.MidMJD != want.MidMJD || f.Night != want.Night || f.Candidates != want.Candidates {
			t.Errorf("frame %+v, want %+v", f, want)
		}
	}
	// A record that is there is kept.
	addAll(t, s, inv.frames)
	want := state(t, s)
	if _, err := s.AddCandidates(ctx, list); err != nil {
		t.Fatal(err)
	}
	if got := state(t, s); got != want {
		t.Errorf("records changed: %s", difference(want, got))
	}
	if _, err := s.AddCandidates(ctx, []detect.Candidate{{ID: "x"}}); err == nil {
		t.Error("a candidate without frame was accepted")
	}
}

func TestMistakesAreRefused(t *testing.T) { onEachStore(t, testMistakesAreRefused) }

func testMistakesAreRefused(t *testing.T) {
	s := newStore(t)
	inv := survey(3, 2, 10, 10, 10, 10)
	addAll(t, s, inv.frames[:1])
	want := state(t, s)
	rec := inv.frames[1].rec
	list := func(change func([]detect.Candidate)) []detect.Candidate {
		l := slices.Clone(inv.frames[1].candidates)
		change(l)
		return l
	}
	for name, f := range map[string]func() error{
		"no name":       func() error { return s.AddFrame(ctx, NewFrameRecord("", Searched), nil) },
		"status":        func() error { return s.AddFrame(ctx, NewFrameRecord("x", "done"), nil) },
		"other frame":   func() error { return s.AddFrame(ctx, rec, list(func(l []detect.Candidate) { l[3].Frame = "y" })) },
		"no identifier": func() error { return s.AddFrame(ctx, rec, list(func(l []detect.Candidate) { l[3].ID = "" })) },
		"twice":         func() error { return s.AddFrame(ctx, rec, list(func(l []detect.Candidate) { l[3].ID = l[4].ID })) },
		"in another frame": func() error {
			return s.AddFrame(ctx, rec, list(func(l []detect.Candidate) { l[len(l)-1].ID = inv.frames[0].candidates[2].ID }))
		},
		"cancelled": func() error {
			c, cancel := context.WithCancel(ctx)
			cancel()
			return s.AddFrame(c, rec, inv.frames[1].candidates)
		},
	} {
		err := f()
		if err == nil {
			t.Errorf("%s: accepted", name)
		} else {
			t.Logf("%s: %v", name, err)
		}
		if got := state(t, s); got != want {
			t.Fatalf("%s: changed the catalogue: %s", name, difference(want, got))
		}
	}
	for name, change := range map[string]func(*Config){
		"probability": func(c *Config) { c.FormProbability = 1.5 },
		"floor":       func(c *Config) { c.ErrorFloor = 0 },
		"NaN":         func(c *Config) { c.MaxError = math.NaN() },
		"kind":        func(c *Config) { c.Kinds = []detect.Kind{"nova"} },
		"no kinds":    func(c *Config) { c.Kinds = nil },
		"prefix":      func(c *Config) { c.Prefix = "A\n" },
	} {
		cfg := DefaultConfig()
		change(&cfg)
		if _, err := Open(ctx, filepath.Join(t.TempDir(), "x"), cfg); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
}

func TestForeignAndNewerFilesAreRefused(t *testing.T) {
	dir := t.TempDir()
	raw := func(name string, statements ...string) string {
		path := filepath.Join(dir, name)
		db, err := sql.Open("sqlite", source(path))
		if err != nil {
			t.Fatal(err)
		}
		defer db.Close()
		for _, q := range statements {
			if _, err := db.Exec(q); err != nil {
				t.Fatal(err)
			}
		}
		return path
	}
	text := filepath.Join(dir, "text")
	if err := os.WriteFile(text, bytes.Repeat([]byte("not a database\n"), 1000), 0o644); err != nil {
		t.Fatal(err)
	}
	newer := filepath.Join(dir, "newer")
	s := open(t, newer)
	addAll(t, s, survey(1, 1, 3, 3, 1, 1).frames)
	s.Close()
	raw("newer", fmt.Sprintf("PRAGMA user_version = %d", len(migrations)+1))
	for path, want := range map[string]string{
		newer: "newer version",
		raw("other", "CREATE TABLE cats (name TEXT)", "INSERT INTO cats VALUES ('tom')"): "another program",
		raw("numbered", "PRAGMA application_id = 77"):                                    "another program",
		text: "another kind of file",
	} {
		before, _ := os.ReadFile(path)
		_, err := Open(ctx, path, DefaultConfig())
		_, roErr := OpenReadOnly(ctx, path, DefaultConfig())
		for _, e := range []error{err, roErr} {
			if e == nil || !strings.Contains(e.Error(), want) || !strings.Contains(e.Error(), path) {
				t.Errorf("%s: %v; want a sentence with %q", path, e, want)
			}
		}
		if after, _ := os.ReadFile(path); !bytes.Equal(before, after) {
			t.Errorf("%s: changed by the refusal", path)
		}
	}
	if _, err := OpenReadOnly(ctx, filepath.Join(dir, "absent"), DefaultConfig()); err == nil {
		t.Error("an absent file was opened for reading")
	}
	if _, err := os.Stat(filepath.Join(dir, "absent")); err == nil {
		t.Error("opening for reading made a file")
	}
}

// Steps added later bring an older file forward, keep its rows, and are undone
// together when one fails.
func TestMigrations(t *testing.T) {
	path := filepath.Join(t.TempDir(), "odd name?#%41.sqlite")
	s := open(t, path)
	addAll(t, s, survey(1, 2, 5, 5, 1, 1).frames)
	want := state(t, s)
	s.Close()
	if _, err := os.Stat(path); err != nil {
		t.Fatalf("the file has another name: %v", err)
	}
	db, err := sql.Open("sqlite", source(path))
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	good := append(slices.Clone(migrations), "ALTER TABLE frames ADD COLUMN humidity REAL", "UPDATE frames SET humidity = 0.5")
	bad := append(slices.Clone(migrations), good[len(migrations)], "UPDATE nothing SET x = 1")
	if err := migrate(ctx, db, path, bad); err == nil {
		t.Fatal("a failing step passed")
	}
	if v, err := schemaVersion(ctx, db, path); v != len(migrations) || err != nil {
		t.Fatalf("schema %d after a failed step, want %d; %v", v, len(migrations), err)
	}
	if err := migrate(ctx, db, path, good); err != nil {
		t.Fatal(err)
	}
	var n int
	if err := db.QueryRow("SELECT count(*) FROM frames WHERE humidity = 0.5").Scan(&n); err != nil || n != 2 {
		t.Fatalf("%d frames after the steps, want 2; %v", n, err)
	}
	if _, err := Open(ctx, path, DefaultConfig()); err == nil || !strings.Contains(err.Error(), "newer version") {
		t.Errorf("the newer file: %v", err)
	}
	if _, err := db.Exec(fmt.Sprintf("ALTER TABLE frames DROP COLUMN humidity; PRAGMA user_version = %d", len(migrations))); err != nil {
		t.Fatal(err)
	}
	if got := state(t, open(t, path)); got != want {
		t.Errorf("rows changed: %s", difference(want, got))
	}
}

// Every scalar column of a candidate has its column in the table: a new one
// needs a step of migration.
func TestSchemaHoldsEveryColumn(t *testing.T) { onEachStore(t, testSchemaHoldsEveryColumn) }

func testSchemaHoldsEveryColumn(t *testing.T) {
	s := newStore(t)
	for table, columns := range map[string]int{"candidates": len(detect.Columns) + 6, "frames": len(frameColumns) + 2} {
		rows, err := s.readers.Query("SELECT * FROM " + table + " LIMIT 0")
		if err != nil {
			t.Fatal(err)
		}
		names, err := rows.Columns()
		rows.Close()
		if err != nil || len(names) != columns {
			t.Errorf("table %s has %d columns, want %d; %v", table, len(names), columns, err)
		}
	}
	for i, c := range frameColumns[:tableColumns] {
		want := strings.Fields("frame status reason detail filter mid_mjd exposure_s fwhm_px reference_fwhm_px sky sky_noise zero_point flux_scale stars_matched astrometry_rms_px noise_ratio mag_limit_5sigma efficiency_50_mag candidates seconds")[i]
		if c.Name != want {
			t.Errorf("column %d of the table of frames is %s, want %s", i, c.Name, want)
		}
	}
}

func TestCheckFindsDamage(t *testing.T) {
	for name, damage := range map[string]string{
		"count":       "UPDATE frames SET candidates = candidates + 1 WHERE frame = 'frame001'",
		"lost":        "DELETE FROM candidates WHERE candidate_id = (SELECT founder FROM objects WHERE detections > 3 LIMIT 1)",
		"moved":       "UPDATE objects SET ra_deg = ra_deg + 0.01 WHERE id = 1",
		"summary":     "UPDATE objects SET peak_mag = 3, nights = 70 WHERE id = 2",
		"association": "UPDATE candidates SET object = (SELECT max(id) FROM objects) WHERE rowid = (SELECT rowid FROM candidates WHERE object = 1 LIMIT 1)",
		"unlinked":    "UPDATE candidates SET object = NULL WHERE object = 3",
		"joiner":      "UPDATE candidates SET object = 1 WHERE rowid = (SELECT rowid FROM candidates WHERE role = 1 AND object IS NULL LIMIT 1)",
		"no part":     "UPDATE candidates SET object = 1 WHERE rowid = (SELECT rowid FROM candidates WHERE role = 0 LIMIT 1)",
		"settings":    "UPDATE settings SET value = 'other'",
		"orphan":      "PRAGMA foreign_keys = 0; DELETE FROM frames WHERE frame = 'frame002'",
		"name":        "INSERT INTO names SELECT name, 1 FROM objects WHERE id = 4",
	} {
		s := newStore(t)
		addAll(t, s, survey(6, 5, 20, 40, 50, 50).frames)
		healthy(t, s)
		if _, err := s.writer.Exec(damage); err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		found, err := s.Check(ctx)
		if err != nil || len(found) == 0 {
			t.Errorf("%s: nothing found, %v", name, err)
		}
		for _, f := range found {
			if f.Place == "" || f.Problem == "" || f.Remedy == "" {
				t.Errorf("%s: %+v", name, f)
			}
		}
		if slices.Contains([]string{"moved", "summary", "association", "unlinked", "joiner", "settings"}, name) {
			if err := s.Rebuild(ctx); err != nil {
				t.Fatal(err)
			}
			healthy(t, s)
		}
	}
	// A damaged page.
	s := newStore(t)
	addAll(t, s, survey(6, 5, 20, 40, 50, 50).frames)
	s.Close()
	data, err := os.ReadFile(s.Path())
	if err != nil {
		t.Fatal(err)
	}
	for i := 20 * 4096; i < 24*4096; i++ {
		data[i] ^= 0x5a
	}
	if err := os.WriteFile(s.Path(), data, 0o644); err != nil {
		t.Fatal(err)
	}
	s, err = OpenReadOnly(ctx, s.Path(), DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	if found, err := s.Check(ctx); len(found) == 0 && err == nil {
		t.Error("a damaged page was not found")
	}
}
