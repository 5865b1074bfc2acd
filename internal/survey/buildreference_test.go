//go:build !race

package survey

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/internal/reference"
	"nightsift/internal/simulate"
)

// A survey without references gets them from its own frames; they serve a
// run; the ledger knows which nights were searched with which; a better one
// replaces a poor one, and its history stays.
func TestReferencesOfASurvey(t *testing.T) {
	ctx := context.Background()
	dir := filepath.Join(t.TempDir(), "survey")
	if err := Init(dir); err != nil {
		t.Fatal(err)
	}
	// The invented nights bring three fields; one is enough here. Each has an
	// exposure of the season before handed in.
	demo, err := simulate.WriteSmallDemo(ctx, dir, 5, 320, nil)
	if err != nil {
		t.Fatal(err)
	}
	for _, path := range demo.Archive {
		if strings.HasSuffix(path, "-01.fits") {
			write(t, filepath.Join(dir, "references", filepath.Base(path)), []byte(read(t, path)))
		}
	}
	f, err := OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	refs, err := f.References()
	if err != nil || len(refs) < 2 {
		t.Fatalf("%d references, %v", len(refs), err)
	}
	field := refs[0].Field
	for _, r := range refs[1:] {
		if canonical(r.Field) != canonical(field) {
			continue
		}
		t.Fatal("two references of one field")
	}
	if err := os.Remove(refs[0].Path); err != nil {
		t.Fatal(err)
	}
	of := func(list []ReferenceState, field string) *ReferenceState {
		for i := range list {
			if canonical(list[i].Field) == canonical(field) {
				return &list[i]
			}
		}
		t.Fatalf("no state of field %s", field)
		return nil
	}
	options := ReferenceOptions{Version: "test", LeastGain: 0.1, Set: func(c *reference.Config) {
		c.PSF.MaxStars, c.PSF.GridOrder = 60, 0
	}}
	list, err := f.SurveyReferences(ctx, options)
	if err != nil {
		t.Fatal(err)
	}
	if s := of(list, field); s.Verdict != VerdictNone || s.Entry != nil || s.Offered < 3 || s.Built != nil {
		t.Errorf("field without reference: %+v", s)
	}
	if s := of(list, refs[1].Field); s.Verdict != VerdictGood || s.Entry == nil || s.Entry.Version != "" || !(s.Entry.Limit > 0) {
		t.Errorf("field with one handed in: %+v", s)
	}
	held, err := takeLock(dir, lockName, exclusive)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := f.SurveyReferences(ctx, options); !errors.Is(err, ErrLocked) {
		t.Errorf("beside a run: %v, want that it is locked", err)
	}
	held.release()

	offered, err := f.offered(nil)
	if err != nil {
		t.Fatal(err)
	}
	var own []string // of this field, by night
	for _, o := range offered {
		if canonical(o.Field) == canonical(field) {
			own = append(own, o.Path)
		}
	}
	early, late := own[:len(own)/2], own[len(own)/2:]
	options.Build, options.Frames = true, early
	if list, err = f.SurveyReferences(ctx, options); err != nil {
		t.Fatal(err)
	}
	s := of(list, field)
	if s.Built == nil || s.Entry == nil || s.Entry.Version != "test" || len(s.Entry.Frames) < 2 || s.Fault != "" {
		t.Fatalf("after building: %+v", s)
	}
	now, err := f.References()
	if err != nil || len(now) != len(refs) {
		t.Fatalf("%d references after building, %v", len(now), err)
	}
	// It serves a run over the later frames.
	sum, err := f.Run(ctx, Selection{Frames: late}, Options{Version: "test", Observe: func(e Event) {
		if e.Kind == EventFinished && e.Status != catalog.Searched {
			t.Logf("%s: %s, %s", e.Frame, e.Reason, e.Detail)
		}
	}})
	if err != nil || sum.Searched < len(late)/2 {
		t.Fatalf("run with the built reference: %+v, %v", sum, err)
	}
	options.Build = false
	if list, err = f.SurveyReferences(ctx, options); err != nil {
		t.Fatal(err)
	}
	if s = of(list, field); len(s.Entry.Nights) == 0 || !(s.Best > 0) || len(s.Former) != 0 {
		t.Errorf("after a run: %+v, nights %v", s, s.Entry.Nights)
	}
	first := s.Entry.Checksum
	// Any gain counts as poor now: it is built again and the old one remembered.
	options.Improve, options.LeastGain = true, -10
	options.Set = func(c *reference.Config) {
		c.PSF.MaxStars, c.PSF.GridOrder, c.MaxFrames = 60, 0, 2
	}
	if list, err = f.SurveyReferences(ctx, options); err != nil {
		t.Fatal(err)
	}
	if s = of(list, field); s.Built == nil || s.Entry.Checksum == first || len(s.Former) != 1 || s.Former[0].Checksum != first || len(s.Former[0].Nights) == 0 || s.Former[0].Current {
		t.Errorf("after improving: %+v", s)
	}
	ledger, err := f.readLedger()
	if err != nil || len(ledger) != len(refs)+1 {
		t.Errorf("ledger of %d entries, %v", len(ledger), err)
	}
	if err := os.WriteFile(f.ledgerPath(), []byte("{"), 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := f.SurveyReferences(ctx, options); err == nil || !strings.Contains(err.Error(), LedgerName) {
		t.Errorf("broken ledger: %v", err)
	}
}
