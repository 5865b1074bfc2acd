package demo

import (
	"bytes"
	"context"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/internal/survey"
)

// The whole job on a small demonstration: every bad frame is set aside and no
// other, and most events bright enough are found.
func TestDemonstration(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	dir := filepath.Join(t.TempDir(), "demo")
	written := 0
	o := Options{Dir: dir, Seed: 2, Size: 300, Version: "test", Writing: func(done, total int, file string) { written++ }}
	r, err := Run(context.Background(), o)
	if err != nil {
		t.Fatal(err)
	}
	var text bytes.Buffer
	if err := r.WriteText(&text); err != nil {
		t.Fatal(err)
	}
	if !r.OK() || r.Summary.SetAside != 3 || r.Summary.Failed != 0 || r.Summary.Searched < 15 {
		t.Errorf("found %+v\n%s", r.Summary, &text)
	}
	found := r.Score.Found
	if found.N < 15 || found.Value < 0.8 {
		t.Errorf("found %s of the clear events", found)
	}
	if r.Score.FalsePerMpx > 10 {
		t.Errorf("%.1f false candidates per Mpx", r.Score.FalsePerMpx)
	}
	t.Logf("found %s, %.2f false per Mpx", found, r.Score.FalsePerMpx)
	for _, path := range append(r.Reports, r.Store) {
		if info, err := os.Stat(path); err != nil || info.Size() == 0 {
			t.Errorf("%s: %v", path, err)
		}
		if !strings.Contains(text.String(), path) {
			t.Errorf("%s is not named", path)
		}
	}
	for _, want := range []string{"SN-", "AS-", "set aside as it should be", "frames searched"} {
		if !strings.Contains(text.String(), want) {
			t.Errorf("%q is missing in\n%s", want, &text)
		}
	}
	// The references were built, the supernovae followed, the asteroids named.
	if len(r.References) != 3 || r.References[0].Entry == nil || len(r.References[0].Entry.Frames) < 5 {
		t.Errorf("references: %+v", r.References)
	}
	followed := 0
	for _, s := range r.Supernovae {
		if s.Object != "" && s.Points >= 4 {
			followed++
			if info, err := os.Stat(s.Plot); err != nil || info.Size() == 0 {
				t.Errorf("plot of %s: %v", s.Truth.ID, err)
			}
		}
	}
	if len(r.Supernovae) != 6 || followed < 4 {
		t.Errorf("%d of %d supernovae followed", followed, len(r.Supernovae))
	}
	if m := r.Movers; m.Seen < 10 || m.Named < m.Seen*9/10 || m.Wrong > 0 {
		t.Errorf("asteroids: %+v", m)
	}
	f, err := survey.OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	hosts, err := f.MatchSheet(context.Background(), catalog.ObjectQuery{})
	if err != nil || hosts.Rows < followed {
		t.Errorf("%+v, %v", hosts, err)
	}
	for _, x := range f.Check(context.Background(), "test") {
		if x.Wrong {
			t.Errorf("check: %s: %s", x.Place, x.Text)
		}
	}

	// Once more: nothing is invented or searched again, the figures are equal.
	files := written
	again, err := Run(context.Background(), o)
	if err != nil {
		t.Fatal(err)
	}
	if written != files || again.Summary.Skipped != r.Summary.Searched+r.Summary.SetAside {
		t.Errorf("second time: %d files written, %+v", written-files, again.Summary)
	}
	var same bytes.Buffer
	if err := again.WriteText(&same); err != nil || same.String() != text.String() {
		t.Errorf("the second time gives another text (%v)", err)
	}
	// Another seed needs another folder.
	o.Seed++
	var refused *survey.ConfigError
	if _, err := Run(context.Background(), o); !errors.As(err, &refused) || !strings.Contains(err.Error(), "seed 2") {
		t.Errorf("another seed: found %v", err)
	}
}

func TestForeignFoldersAreRefused(t *testing.T) {
	dir := t.TempDir()
	if err := os.WriteFile(filepath.Join(dir, "thesis.txt"), []byte("x"), 0o644); err != nil {
		t.Fatal(err)
	}
	var refused *survey.ConfigError
	if _, err := Run(context.Background(), Options{Dir: dir, Seed: 1, Version: "test"}); !errors.As(err, &refused) {
		t.Errorf("found %v, expected a *ConfigError", err)
	}
	entries, err := os.ReadDir(dir)
	if err != nil || len(entries) != 1 {
		t.Errorf("the folder was changed: %v", entries)
	}
}

// An interruption while frames are written leaves a folder that the next call
// completes.
func TestInterruptedWritingGoesOn(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "demo")
	ctx, cancel := context.WithCancel(context.Background())
	o := Options{Dir: dir, Seed: 2, Size: 200, Version: "test", Writing: func(done, total int, file string) { cancel() }}
	if _, err := Run(ctx, o); !errors.Is(err, context.Canceled) {
		t.Fatalf("found %v, expected context.Canceled", err)
	}
	if ready, err := prepared(o); ready || err != nil {
		t.Errorf("half a survey counts as ready (%v)", err)
	}
	if err := write(context.Background(), o); err != nil {
		t.Fatal(err)
	}
	if ready, err := prepared(o); !ready || err != nil {
		t.Errorf("a whole survey does not count as ready (%v)", err)
	}
}

func TestInstallation(t *testing.T) {
	found := CheckInstallation(context.Background(), "test")
	if len(found) < 3 {
		t.Errorf("found only %v", found)
	}
	for _, f := range found {
		if f.Wrong {
			t.Errorf("%s: %s", f.Place, f.Text)
		}
	}
	t.Setenv("TMPDIR", filepath.Join(t.TempDir(), "none"))
	found = CheckInstallation(context.Background(), "test")
	if last := found[len(found)-1]; !last.Wrong || last.Remedy == "" {
		t.Errorf("without a temporary folder: %+v", last)
	}
}
