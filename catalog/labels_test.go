package catalog

import (
	"errors"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"nightsift/detect"
)

func at(seconds int) time.Time {
	return time.Date(2031, 3, 5, 20, 0, seconds, 250e6, time.UTC)
}

func TestLabelsOutliveTheirFrames(t *testing.T) { onEachStore(t, testLabelsOutliveTheirFrames) }

func testLabelsOutliveTheirFrames(t *testing.T) {
	s := newStore(t)
	inv := survey(12, 2, 20, 20, 150, 2)
	addAll(t, s, inv.frames)
	f := inv.frames[0]
	judge := func(id string, v Verdict, who string, second int, comment string) {
		t.Helper()
		for range 2 { // twice is once
			if err := s.AddLabel(ctx, Label{Candidate: id, Verdict: v, Reviewer: who, Time: at(second), Comment: comment}); err != nil {
				t.Fatal(err)
			}
		}
	}
	kept, moved, lost, other := &f.candidates[0], &f.candidates[1], &f.candidates[2], &inv.frames[1].candidates[0]
	judge(kept.ID, Bogus, "Ada", 1, "")
	judge(kept.ID, Real, "Ada", 2, "on second thoughts")
	judge(kept.ID, Unsure, "Ben", 3, "")
	judge(moved.ID, Real, "Ada", 4, "")
	judge(lost.ID, Bogus, "Ada", 5, "")
	judge(other.ID, Bogus, "Ada", 6, "")

	want := func(step string, candidates ...string) {
		t.Helper()
		list, err := s.Labels(ctx)
		if err != nil {
			t.Fatal(err)
		}
		var got []string
		for _, l := range list {
			got = append(got, l.Candidate+" "+string(l.Verdict)+" "+l.Reviewer)
		}
		if !slices.Equal(got, candidates) {
			t.Errorf("%s: labels\n%s\nwant\n%s", step, strings.Join(got, "\n"), strings.Join(candidates, "\n"))
		}
	}
	want("given", kept.ID+" real Ada", kept.ID+" unsure Ben", moved.ID+" real Ada", lost.ID+" bogus Ada", other.ID+" bogus Ada")
	list, err := s.Labels(ctx)
	if err != nil {
		t.Fatal(err)
	}
	l := list[0]
	if l.Given != kept.ID || l.Frame != f.rec.Frame || l.X != kept.X || l.RA != kept.RA || !l.Time.Equal(at(2)) || l.Comment != "on second thoughts" {
		t.Errorf("label %+v of candidate %+v", l, kept)
	}

	// The frame again: one candidate as before, one under another identifier
	// nearby, one gone, and where it was a change of the other sign.
	again := slices.Clone(f.candidates)
	again[1].ID, again[1].X = "other name", moved.X+0.9
	again[2].ID, again[2].Significance = "other sign", -lost.Significance
	for range 2 {
		addAll(t, s, []night{{f.rec, again}})
		want("again", kept.ID+" real Ada", kept.ID+" unsure Ben", "other name real Ada", " bogus Ada", other.ID+" bogus Ada")
	}
	if _, err := s.RemoveFrame(ctx, f.rec.Frame); err != nil {
		t.Fatal(err)
	}
	want("removed", " real Ada", " unsure Ben", " real Ada", " bogus Ada", other.ID+" bogus Ada")
	addAll(t, s, []night{f})
	want("back", kept.ID+" real Ada", kept.ID+" unsure Ben", moved.ID+" real Ada", lost.ID+" bogus Ada", other.ID+" bogus Ada")
	healthy(t, s)
}

// Two old candidates near one new one do not share it.
func TestLabelsGoToOneCandidateEach(t *testing.T) {
	old := []said{{"a", 10, 10, 8}, {"b", 11, 10, 8}, {"c", 50, 50, math.NaN()}}
	now := []detect.Candidate{{ID: "x", X: 10.8, Y: 10, Significance: 9}, {ID: "y", X: 50, Y: 51, Significance: -9}, {ID: "z", X: math.NaN(), Y: 1}}
	got := successors(old, now, 1.5)
	if len(got) != 2 || got["b"] != "x" || got["c"] != "y" {
		t.Errorf("successors %v", got)
	}
}

func TestWrongLabelsAreRefused(t *testing.T) { onEachStore(t, testWrongLabelsAreRefused) }

func testWrongLabelsAreRefused(t *testing.T) {
	s := newStore(t)
	inv := survey(12, 1, 5, 5, 150, 2)
	addAll(t, s, inv.frames)
	good := Label{Candidate: inv.frames[0].candidates[0].ID, Verdict: Real, Reviewer: "Ada", Time: at(0)}
	for name, change := range map[string]func(*Label){
		"verdict":  func(l *Label) { l.Verdict = "maybe" },
		"reviewer": func(l *Label) { l.Reviewer = " " },
		"time":     func(l *Label) { l.Time = time.Time{} },
		"comment":  func(l *Label) { l.Comment = "a\x00b" },
	} {
		l := good
		change(&l)
		if err := s.AddLabel(ctx, l); err == nil || errors.Is(err, ErrNotFound) {
			t.Errorf("%s: %v", name, err)
		}
	}
	nobody := good
	nobody.Candidate = "nobody"
	if err := s.AddLabel(ctx, nobody); !errors.Is(err, ErrNotFound) {
		t.Errorf("unknown candidate: %v", err)
	}
	if list, err := s.Labels(ctx); err != nil || len(list) != 0 {
		t.Errorf("labels %v, %v", list, err)
	}
}
