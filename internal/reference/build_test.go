//go:build !race

package reference

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/outside"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
)

func sameProducts(t *testing.T, what string, a, b *Product) {
	t.Helper()
	dir := t.TempDir()
	var files [2][]byte
	for k, p := range []*Product{a, b} {
		path := filepath.Join(dir, fmt.Sprint(k, ".fits"))
		if err := p.Write(path, nil); err != nil {
			t.Fatal(err)
		}
		files[k], _ = os.ReadFile(path)
	}
	if !bytes.Equal(files[0], files[1]) {
		t.Errorf("%s: the two files differ", what)
	}
}

// Neither order nor the number of goroutines matters, and adding frames to a
// reference gives what building of all gives, with kept parts or without.
func TestAddingGivesTheSameAsBuildingAnew(t *testing.T) {
	paths := shots(t, smallSky, 6, small)
	cfg := quick(t)
	cfg.Anchor = paths[1]
	whole := build(t, paths, cfg)
	other := cfg
	other.Workers = 1
	turned := slices.Clone(paths)
	slices.Reverse(turned)
	sameProducts(t, "other order, one goroutine", whole, build(t, turned, other))

	kept := cfg
	kept.Parts = filepath.Join(t.TempDir(), "parts")
	build(t, paths[:4], kept)
	before, _ := filepath.Glob(filepath.Join(kept.Parts, "*.part"))
	added := build(t, paths, kept)
	after, _ := filepath.Glob(filepath.Join(kept.Parts, "*.part"))
	sameProducts(t, "two frames added", whole, added)
	if len(before) != 4 || len(after) != 6 {
		t.Errorf("%d parts after four frames, %d after six", len(before), len(after))
	}
	// A damaged part is made anew.
	raw, err := os.ReadFile(after[0])
	if err != nil {
		t.Fatal(err)
	}
	writeFile(t, after[0], raw[:len(raw)/2])
	sameProducts(t, "with a part cut short", whole, build(t, paths, kept))
	if left, _ := os.ReadDir(cfg.Scratch); len(left) > 0 {
		t.Errorf("%d things are left in the scratch folder", len(left))
	}
}

// The file serves as a reference: its header, its variance and its flags say
// what the stack is.
func TestFileOfAReference(t *testing.T) {
	const n = 8
	paths := shots(t, smallSky, n, func(k int, s *shot) {
		small(k, s)
		s.fwhm, s.throughput, s.rays, s.saturation = 3.5, 1, 0, 5000
	})
	cfg := quick(t)
	p := build(t, paths, cfg)
	path := filepath.Join(t.TempDir(), "deep.fits")
	if err := p.Write(path, nil); err != nil {
		t.Fatal(err)
	}
	outside.Command(t, "fitsverify", "-q", path)
	names, err := load.DefaultKeywords().List(path)
	if err != nil || len(names) != 1 {
		t.Fatalf("images in the file: %q, %v; want one", names, err)
	}
	f, err := load.Frame(path, load.DefaultKeywords())
	if err != nil {
		t.Fatal(err)
	}
	m := f.Meta
	if m.Filter != "r" || m.Field != "Field 1" || m.Exposure != n*60 || math.Abs(m.MidMJD-60003.5) > 0.2 || math.Abs(m.ZeroPoint-25) > 0.02 {
		t.Errorf("header: %+v", m)
	}
	if r := m.Gain / (n * 1.5); math.Abs(r-1) > 0.03 {
		t.Errorf("gain %.3f, want %d times that of a frame", m.Gain, n)
	}
	// One frame: sqrt(400/1.5 + 16) = 16.81 counts.
	want := math.Sqrt(400/1.5+16) / math.Sqrt(n)
	if v := math.Sqrt(robust.MedianOf(f.Variance.Pix, nil)); math.Abs(v/want-1) > 0.04 {
		t.Errorf("noise of the sky by the variance %.3f, want %.3f", v, want)
	}
	if r := m.ReadNoise / m.Gain / want; math.Abs(r-1) > 0.04 {
		t.Errorf("read noise over gain is %.3f of the noise of the sky", r)
	}
	bg, err := stars.EstimateBackground(f.Image, f.Flags, stars.DefaultBackgroundConfig())
	if err != nil {
		t.Fatal(err)
	}
	if r, _ := stars.EstimateVariance(f, bg); r.Source != "extension" {
		t.Errorf("the variance is not believed: %s", r.Reason)
	}
	if math.Abs(bg.MedianSky) > 2 {
		t.Errorf("sky of %.2f counts is left", bg.MedianSky)
	}
	if r := p.BestFrame / p.Limit / math.Sqrt(n); math.Abs(r-1) > 0.1 {
		t.Errorf("measured depth is %.3f of √%d frames", r, n)
	}
	// Saturated cores stay flagged.
	a := p.anchorShot(small)
	brightest := smallSky[0]
	for _, s := range smallSky {
		if s.flux > brightest.flux && math.Abs(s.x) < 100 && math.Abs(s.y) < 100 {
			brightest = s
		}
	}
	u, v := a.at(brightest.x, brightest.y)
	if bits := f.Flags.Row(int(math.Round(v)) - 1)[int(math.Round(u))-1]; bits&frame.Saturated == 0 {
		t.Errorf("the core of a star of %.3g counts has flags %v", brightest.flux, bits)
	}
	if got, err := ReadInputs(path); err != nil || len(got) != n || !got[0].Used || got[0].Checksum != p.Inputs[0].Checksum || got[3].Weight != p.Inputs[3].Weight {
		t.Errorf("inputs read back: %v, %v", got, err)
	}
}

// anchorShot is the shot behind the anchor, by the number in its name.
func (p *Product) anchorShot(change func(int, *shot)) shot {
	for _, in := range p.Inputs {
		var k int
		if _, err := fmt.Sscanf(in.Name, "frame-%d", &k); err == nil && in.Anchor {
			s := defaultShot(k)
			change(k, &s)
			return s
		}
	}
	panic("no anchor")
}

// Whatever is wrong with a frame, it is named and the others are stacked.
func TestBadFrames(t *testing.T) {
	good := shots(t, smallSky, 5, small)
	far := drawSky(90, 330, 8e5, 99)
	dir := t.TempDir()
	bad := map[string]string{} // path to reason
	add := func(name, reason string, sky []skyStar, change func(s *shot)) string {
		s := defaultShot(len(bad) + 20)
		small(3, &s)
		change(&s)
		path := filepath.Join(dir, name+".fits")
		s.write(t, path, sky)
		bad[path] = reason
		return path
	}
	add("filter", frame.ProblemWrongFilter, smallSky, func(s *shot) { s.filter = "i" })
	add("field", frame.ProblemNoMatch, far, func(s *shot) {})
	add("elsewhere", frame.ProblemNoOverlap, far, func(s *shot) { s.header = map[string]any{"CRVAL1": 10.0} })
	add("late", ReasonTooLate, smallSky, func(s *shot) { s.mjd = 61000 })
	add("early", ReasonTooEarly, smallSky, func(s *shot) { s.mjd = 50000 })
	add("timeless", ReasonNoTime, smallSky, func(s *shot) { s.header = map[string]any{"MJD-AVG": nil} })
	add("blurred", ReasonWide, smallSky, func(s *shot) { s.fwhm = 8 })
	add("cloud", ReasonShallow, smallSky, func(s *shot) { s.throughput, s.fwhm, s.sky = 0.35, 5, 3000 })
	add("bright", ReasonExcluded, smallSky, func(s *shot) { s.mjd = 60100 })
	add("same-time", ReasonDuplicate, smallSky, func(s *shot) { s.mjd, s.throughput = 60000, 0.6; jitter(0, s) })
	coarse := add("coarse", "", smallSky, func(s *shot) { s.pixel, s.width, s.height, s.mjd = 1.25, 250, 250, 60030 })
	gain := add("gain", "", smallSky, func(s *shot) { s.mjd = 60031; s.header = map[string]any{"GAIN": 9.0} })
	raw, err := os.ReadFile(good[2])
	if err != nil {
		t.Fatal(err)
	}
	for name, content := range map[string][]byte{"copy": raw, "cut": raw[:20000], "text": []byte("no image")} {
		path := filepath.Join(dir, name+".fits")
		writeFile(t, path, content)
		bad[path] = map[string]string{"copy": ReasonDuplicate, "cut": frame.ProblemUnreadable, "text": frame.ProblemUnreadable}[name]
	}
	bad[filepath.Join(dir, "absent.fits")] = frame.ProblemUnreadable
	paths := slices.Clone(good)
	for path := range bad {
		paths = append(paths, path)
	}
	cfg := quick(t)
	cfg.Before, cfg.After = 60500, 55000
	cfg.Exclude = []Exclusion{{Name: "an event", RA: 150, Dec: -20, From: 60090, To: 60110}}
	cfg.Anchor = good[1]
	p := build(t, paths, cfg)
	if len(p.Inputs) != len(paths) {
		t.Errorf("%d inputs for %d paths", len(p.Inputs), len(paths))
	}
	copies := 0
	for _, in := range p.Inputs {
		want, isBad := bad[in.Path]
		switch {
		case in.Reason == ReasonDuplicate && (strings.HasSuffix(in.Path, "copy.fits") || in.Path == good[2]):
			copies++ // either of the two
		case strings.HasSuffix(in.Path, "copy.fits"):
		case isBad && in.Reason != want, !isBad && !in.Used, in.Used != (in.Reason == ""), in.Reason != "" && in.Detail == "":
			t.Errorf("%s: used %v, reason %q (%s), want %q", in.Name, in.Used, in.Reason, in.Detail, want)
		}
		if in.Path == gain && !strings.Contains(in.Detail, "gain of 9") {
			t.Errorf("the wrong gain is not named: %q", in.Detail)
		}
		if in.Path == coarse && math.Abs(in.Scale/p.anchorShot(small).throughput-1) > 0.03 {
			t.Errorf("scale of a frame with larger pixels: %.3f", in.Scale)
		}
	}
	if copies != 1 {
		t.Errorf("%d of two equal files are left out as copies", copies)
	}
}

// Too little to stack is an error that names every frame, and leaves no file.
func TestTooFewFrames(t *testing.T) {
	good := shots(t, smallSky, 2, small)
	poor := shots(t, smallSky[:2], 3, small)
	cfg := quick(t)
	for _, c := range []struct {
		what  string
		paths []string
		want  string
	}{
		{"one", good[:1], "1 of 1 frames can be used, at least 2"},
		{"none", nil, "0 of 0 frames"},
		{"one twice", []string{good[0], good[0]}, ReasonDuplicate},
		{"poor", poor, frame.ProblemTooFewStars},
	} {
		_, err := Build(context.Background(), c.paths, cfg)
		var few *NoFramesError
		if !errors.As(err, &few) || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v, want %q", c.what, err, c.want)
		}
	}
	cfg.Anchor = "nobody"
	if _, err := Build(context.Background(), good, cfg); err == nil || !strings.Contains(err.Error(), "nobody") {
		t.Errorf("unknown anchor: %v", err)
	}
	cfg.Anchor = ""
	cfg.Grid = &Grid{RA: 10, Dec: 50, Scale: 1, Width: 300, Height: 300}
	var problem *frame.Problem
	if _, err := Build(context.Background(), good, cfg); !errors.As(err, &problem) || problem.Slug != frame.ProblemNoOverlap {
		t.Errorf("grid elsewhere: %v", err)
	}
	if left, _ := os.ReadDir(cfg.Scratch); len(left) > 0 {
		t.Errorf("%d things are left in the scratch folder", len(left))
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := Build(ctx, good, quick(t)); !errors.Is(err, context.Canceled) {
		t.Errorf("interrupted: %v", err)
	}
}
