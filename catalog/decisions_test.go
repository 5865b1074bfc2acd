package catalog

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"nightsift/detect"
)

func adaAt(second int) Remark { return Remark{Author: "Ada", Time: at(second)} }

// pairs invents frames with one detection of each of several sources, given as
// offsets [arcsec] from a position.
func pairs(seed uint64, frames int, offsets ...[2]float64) []night {
	r := rand.New(rand.NewPCG(seed, 3))
	plane := newPlane(210, -30)
	var list []night
	for k := range frames {
		n := night{rec: record(k)}
		for i, o := range offsets {
			c := newCandidate(fmt.Sprintf("f%02ds%d", k, i), &n.rec)
			c.XErr, c.YErr, c.RealProbability, c.Kind, c.Significance = 0.1, 0.1, 0.9, detect.NewSource, 20
			x, y := o[0]+0.1*r.NormFloat64(), o[1]+0.1*r.NormFloat64()
			c.RA, c.Dec = plane.direction(x, y).position()
			c.X, c.Y = 1000-x/scale, 750+y/scale
			c.Mag = 19 + r.Float64()
			n.candidates = append(n.candidates, c)
		}
		n.rec.Candidates = len(n.candidates)
		list = append(list, n)
	}
	return list
}

// everyWay adds frames again in other orders, also to a rebuilt catalogue, and
// expects the same objects.
func everyWay(t *testing.T, s *Store, frames []night) {
	t.Helper()
	want := state(t, s)
	healthy(t, s)
	r := rand.New(rand.NewPCG(5, 5))
	for range 3 {
		for _, k := range r.Perm(len(frames)) {
			addAll(t, s, frames[k:k+1])
		}
		if got := state(t, s); got != want {
			t.Fatalf("frames added again: %s", difference(want, got))
		}
	}
	if err := s.Rebuild(ctx); err != nil {
		t.Fatal(err)
	}
	if got := state(t, s); got != want {
		t.Fatalf("rebuilt: %s", difference(want, got))
	}
	for _, k := range r.Perm(len(frames)) { // all out but the last, and in again
		if k > 0 {
			if _, err := s.RemoveFrame(ctx, frames[k].rec.Frame); err != nil {
				t.Fatal(err)
			}
		}
	}
	healthy(t, s)
	addAll(t, s, frames)
	if got := state(t, s); got != want {
		t.Fatalf("frames taken out and added: %s", difference(want, got))
	}
	healthy(t, s)
}

func TestMergeHolds(t *testing.T) { onEachStore(t, testMergeHolds) }

func testMergeHolds(t *testing.T) {
	s := newStore(t)
	frames := pairs(1, 6, [2]float64{0, 0}, [2]float64{4, 0}, [2]float64{0, 60})
	addAll(t, s, frames[:4])
	before := state(t, s)
	a, err := s.Object(ctx, "f00s0")
	if err != nil {
		t.Fatal(err)
	}
	b, err := s.Object(ctx, "f00s1")
	if err != nil || a.Name == b.Name {
		t.Fatal(a, b, err)
	}
	if err := s.SetState(ctx, b.Name, Remark{State: StateWatched, Author: "Ben", Time: at(9)}); err != nil {
		t.Fatal(err)
	}
	far, err := s.Object(ctx, "f00s2")
	if err != nil {
		t.Fatal(err)
	}
	for name, try := range map[string]func() error{
		"itself": func() error { _, err := s.Merge(ctx, a.Name, "f02s0", adaAt(0)); return err },
		"far":    func() error { _, err := s.Merge(ctx, a.Name, far.Name, adaAt(0)); return err },
		"nobody": func() error { _, err := s.Merge(ctx, "someone", a.Name, Remark{Time: at(0)}); return err },
		"absent": func() error { _, err := s.Merge(ctx, "someone", a.Name, adaAt(0)); return err },
	} {
		if err := try(); err == nil {
			t.Errorf("%s: merged", name)
		}
	}
	m, err := s.Merge(ctx, a.Name, b.Name, adaAt(1))
	if err != nil {
		t.Fatal(err)
	}
	if m.Detections != 4 || m.Nights != 2 || m.State != StateWatched {
		t.Errorf("merged object %+v", m)
	}
	for _, name := range []string{a.Name, b.Name} {
		if o, err := s.Object(ctx, name); err != nil || o.Name != m.Name {
			t.Errorf("%s leads to %s, %v", name, o.Name, err)
		}
	}
	everyWay(t, s, frames[:4])
	addAll(t, s, frames) // later frames follow the decision
	if list, err := s.Objects(ctx, ObjectQuery{}); err != nil || len(list) != 2 {
		t.Errorf("%d objects, %v, want 2", len(list), err)
	}
	everyWay(t, s, frames)

	list, err := s.Decisions(ctx)
	if err != nil || len(list) != 1 || list[0].Kind != "merge" || !slices.Contains(list[0].About, a.Name) || len(list[0].About) != 2 {
		t.Fatalf("decisions %+v, %v", list, err)
	}
	for _, k := range []int{4, 5} {
		if _, err := s.RemoveFrame(ctx, frames[k].rec.Frame); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.Withdraw(ctx, list[0].ID, adaAt(2)); err != nil {
		t.Fatal(err)
	}
	if got := state(t, s); got != before {
		t.Errorf("withdrawn: %s", difference(before, got))
	}
	everyWay(t, s, frames[:4])
	if err := s.Withdraw(ctx, list[0].ID, adaAt(3)); err == nil {
		t.Error("withdrawn twice")
	}
	if err := s.Withdraw(ctx, "none", adaAt(3)); !errors.Is(err, ErrNotFound) {
		t.Errorf("unknown decision: %v", err)
	}
}

func TestSplitHolds(t *testing.T) { onEachStore(t, testSplitHolds) }

func testSplitHolds(t *testing.T) {
	s := newStore(t)
	frames := pairs(2, 8, [2]float64{0, 0}, [2]float64{0.7, 0}, [2]float64{0, 60})
	addAll(t, s, frames[:5])
	o, err := s.Object(ctx, "f00s0")
	if err != nil || o.Detections != 5 {
		t.Fatalf("%+v, %v", o, err)
	}
	if m, err := s.Members(ctx, o); err != nil || len(m) != 10 {
		t.Fatalf("%d members, %v, want both sources", len(m), err)
	}
	before := state(t, s)
	second := []string{"f00s1", "f01s1", "f02s1", "f03s1", "f04s1"}
	for name, list := range map[string][]string{"none": nil, "stranger": {"f00s2"}, "all": append([]string{"f00s0", "f01s0", "f02s0", "f03s0", "f04s0"}, second...)} {
		if _, err := s.Split(ctx, o.Name, list, adaAt(1)); err == nil {
			t.Errorf("%s: split", name)
		}
	}
	parts, err := s.Split(ctx, o.Name, second, adaAt(1))
	if err != nil || len(parts) != 2 {
		t.Fatalf("%+v, %v", parts, err)
	}
	everyWay(t, s, frames[:5])
	addAll(t, s, frames)
	for i := range 2 {
		p, err := s.Object(ctx, fmt.Sprintf("f00s%d", i))
		if err != nil {
			t.Fatal(err)
		}
		members, err := s.Members(ctx, p)
		if err != nil {
			t.Fatal(err)
		}
		right := 0
		for _, m := range members {
			if strings.HasSuffix(m.ID, fmt.Sprint("s", i)) {
				right++
			}
		}
		if right < 7 || len(members)-right > 1 {
			t.Errorf("source %d: %d detections, %d of them right", i, len(members), right)
		}
	}
	everyWay(t, s, frames)

	// The same frame with other identifiers: the decision finds them by place.
	other := slices.Clone(frames[1].candidates)
	for i := range other {
		other[i].ID = "again" + other[i].ID
		other[i].X += 0.05
	}
	addAll(t, s, []night{{frames[1].rec, other}})
	a, err := s.Object(ctx, "againf01s0")
	if err != nil {
		t.Fatal(err)
	}
	if b, err := s.Object(ctx, "againf01s1"); err != nil || a.Name == b.Name {
		t.Errorf("%s and %s, %v: the split is forgotten", a.Name, b.Name, err)
	}
	healthy(t, s)
	addAll(t, s, frames)

	// Merging them ends the split.
	if _, err := s.Merge(ctx, "f00s0", "f00s1", adaAt(5)); err != nil {
		t.Fatal(err)
	}
	for k := 5; k < 8; k++ {
		if _, err := s.RemoveFrame(ctx, frames[k].rec.Frame); err != nil {
			t.Fatal(err)
		}
	}
	if got := state(t, s); got != before {
		t.Errorf("merged again: %s", difference(before, got))
	}
	// And splitting ends the merge.
	if parts, err = s.Split(ctx, "f00s0", second, adaAt(6)); err != nil || len(parts) != 2 {
		t.Fatalf("%+v, %v", parts, err)
	}
	list, err := s.Decisions(ctx)
	if err != nil || len(list) != 3 || list[0].Withdrawn == "" || list[1].Withdrawn == "" || list[2].Withdrawn != "" {
		t.Errorf("decisions %+v, %v", list, err)
	}
	everyWay(t, s, frames[:5])
}

func TestRemarksFollowTheirObject(t *testing.T) { onEachStore(t, testRemarksFollowTheirObject) }

func testRemarksFollowTheirObject(t *testing.T) {
	s := newStore(t)
	frames := pairs(3, 4, [2]float64{0, 0}, [2]float64{0, 60})
	addAll(t, s, frames)
	if o, err := s.Object(ctx, "f02s0"); err != nil || o.State != StateNew {
		t.Fatalf("%+v, %v", o, err)
	}
	for k, r := range []Remark{{State: StateConfirmed, Comment: "spectrum", Author: "Ada", Time: at(2)}, {State: StateWatched, Author: "Ada", Time: at(1)}} {
		if err := s.SetState(ctx, "f02s0", r); err != nil {
			t.Fatal(k, err)
		}
	}
	if err := s.AddComment(ctx, "f00s0", Remark{Comment: "near a bright star", Author: "Ben", Time: at(3)}); err != nil {
		t.Fatal(err)
	}
	check := func(step string) {
		t.Helper()
		o, err := s.Object(ctx, "f01s0")
		if err != nil || o.State != StateConfirmed {
			t.Fatalf("%s: %+v, %v", step, o, err)
		}
		list, err := s.Remarks(ctx, o)
		if err != nil || len(list) != 3 || list[0].State != StateWatched || list[2].Comment != "near a bright star" || list[2].Author != "Ben" || !list[1].Time.Equal(at(2)) {
			t.Fatalf("%s: remarks %+v, %v", step, list, err)
		}
		if o, err := s.Object(ctx, "f01s1"); err != nil || o.State != StateNew {
			t.Fatalf("%s: the other object %+v, %v", step, o, err)
		}
		healthy(t, s)
	}
	check("set")
	addAll(t, s, frames)
	check("again")
	for _, n := range frames { // also when nothing of it is left for a while
		if _, err := s.RemoveFrame(ctx, n.rec.Frame); err != nil {
			t.Fatal(err)
		}
	}
	addAll(t, s, frames[1:2])
	check("back")
	if err := s.SetState(ctx, "f01s0", Remark{State: "famous", Author: "Ada", Time: at(4)}); err == nil {
		t.Error("an unknown state was set")
	}
	if err := s.AddComment(ctx, "f01s0", Remark{Author: "Ada", Time: at(4)}); err == nil {
		t.Error("an empty comment was stored")
	}
	if err := s.AddComment(ctx, "nobody", Remark{Comment: "x", Author: "Ada", Time: at(4)}); !errors.Is(err, ErrNotFound) {
		t.Errorf("unknown object: %v", err)
	}
}
