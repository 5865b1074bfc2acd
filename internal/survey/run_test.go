package survey

import (
	"bytes"
	"context"
	"encoding/csv"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sort"
	"strings"
	"sync"
	"testing"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/wholefile"
)

// With options the real stages run, with quick a stand-in that takes no time.
var (
	options = Options{Version: "test", Jobs: 2}
	quick   = Options{Version: "test", Jobs: 2, search: standIn}
)

// standIn reads the frame as the stages do, and gives three candidates at
// places that its checksum decides.
func standIn(ctx context.Context, e *engine, t *Task, out *outcome) ([]detect.Candidate, error) {
	n, err := load.Frame(t.Path, e.keywords)
	if err != nil {
		return nil, err
	}
	out.receipt.Frame.Checksum = n.Checksum
	fromFrame(&out.receipt.Record, n)
	if err := os.MkdirAll(t.Dir, 0o755); err != nil {
		return nil, &writeError{err}
	}
	for _, name := range products(e.keep)[1:] {
		if err := wholefile.WriteBytes(filepath.Join(t.Dir, name), []byte(n.Checksum)); err != nil {
			return nil, &writeError{err}
		}
	}
	var list []detect.Candidate
	for k := range 3 {
		c := detect.Candidate{ID: fmt.Sprintf("%s-%d", n.Checksum[:12], k), Frame: t.Name, Filter: n.Meta.Filter, Night: t.Night, MidMJD: n.Meta.MidMJD,
			X: float64(n.Checksum[k]), Y: float64(n.Checksum[k+3]), XErr: 0.1, YErr: 0.1, RA: 100 + float64(k)/10, Dec: float64(n.Checksum[k+6]) / 1e4,
			Flux: 1000, FluxErr: 100, Mag: math.NaN(), MagErr: math.NaN(), MagLimit: 21, Significance: 10, RealProbability: 0.4 * float64(k),
			Kind: detect.NewSource, ReferenceDistance: math.NaN(), ReferenceMag: math.NaN(), FitChi2: 1, Length: math.NaN(), Angle: math.NaN()}
		list = append(list, c)
	}
	return list, nil
}

func run(t testing.TB, f *Folder) Summary { return runWith(t, f, quick) }

func runWith(t testing.TB, f *Folder, o Options) Summary {
	t.Helper()
	sum, err := f.Run(context.Background(), Selection{}, o)
	if err != nil {
		t.Fatal(err)
	}
	return sum
}

// outcomes returns everything a survey has given that must not depend on the
// way there, by path: the tables of all nights without the time spent, the
// names of all other files, and the catalogue's tables.
func outcomes(t testing.TB, f *Folder) map[string]string {
	t.Helper()
	all := map[string]string{}
	root := f.path(f.Config.Folders.Nights)
	err := filepath.Walk(root, func(path string, info os.FileInfo, err error) error {
		if err != nil || info.IsDir() {
			return err
		}
		name, _ := filepath.Rel(root, path)
		switch filepath.Base(path) {
		case FramesCSV:
			all[name] = withoutSeconds(t, read(t, path))
		case CandidatesFITS, CandidatesCSV, ReportName:
			all[name] = read(t, path)
		default:
			all[name] = ""
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	s, err := f.ReadStore(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	for _, table := range []string{"candidates", "objects", "frames"} {
		sheet, err := s.Select(context.Background(), catalog.Selection{Table: table})
		if err != nil {
			t.Fatal(err)
		}
		var b bytes.Buffer
		if err := catalog.EncodeCSV(&b, sheet); err != nil {
			t.Fatal(err)
		}
		all["catalogue "+table] = b.String()
		if table == "frames" {
			all["catalogue "+table] = withoutSeconds(t, b.String())
		}
	}
	return all
}

func withoutSeconds(t testing.TB, text string) string {
	t.Helper()
	rows, err := csv.NewReader(strings.NewReader(text)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	drop := -1
	for k, name := range rows[0] {
		if name == "seconds" {
			drop = k
		}
	}
	if drop < 0 {
		t.Fatal("the table of frames has no column seconds")
	}
	for _, row := range rows {
		row[drop] = ""
	}
	return fmt.Sprint(rows)
}

func compare(t testing.TB, what string, got, want map[string]string) {
	t.Helper()
	for name := range want {
		if _, ok := got[name]; !ok {
			t.Errorf("%s: %s is missing", what, name)
		} else if got[name] != want[name] {
			t.Errorf("%s: %s differs", what, name)
		}
	}
	for name := range got {
		if _, ok := want[name]; !ok {
			t.Errorf("%s: %s is too much", what, name)
		}
	}
}

// sound fails the test for everything that check finds wrong.
func sound(t testing.TB, f *Folder) {
	t.Helper()
	for _, x := range f.Check(context.Background(), options.Version) {
		if x.Wrong || strings.Contains(x.Text, "next run") {
			t.Errorf("check: %s: %s", x.Place, x.Text)
		}
	}
}

func TestRunSearchesResumesAndRepeats(t *testing.T) {
	f := newSurvey(t, 2)
	if err := os.Remove(filepath.Join(f.Dir, "incoming", "b-1.fits")); err != nil {
		t.Fatal(err)
	}
	sum := run(t, f)
	if sum.Searched != 3 || sum.SetAside+sum.Failed+sum.Skipped != 0 || sum.Candidates == 0 || sum.Likely == 0 {
		t.Fatalf("found %+v, expected 3 frames searched and candidates", sum)
	}
	sound(t, f)
	first := outcomes(t, f)
	for _, night := range []string{"2027-01-05", "2027-01-06"} {
		for _, name := range []string{CandidatesFITS, CandidatesCSV, FramesCSV, ReportName} {
			if first[night+"/"+name] == "" {
				t.Errorf("%s/%s is missing", night, name)
			}
		}
	}
	// A second run does nothing.
	before := stamps(t, f)
	again := run(t, f)
	if again.Skipped != 3 || again.Candidates != sum.Candidates || again.Likely != sum.Likely {
		t.Errorf("second run: %+v, expected all frames skipped with the same counts", again)
	}
	if after := stamps(t, f); after != before {
		t.Errorf("the second run changed files:\n%s\nwere\n%s", after, before)
	}
	// A changed frame, a changed setting and a lost table are done again.
	put(t, filepath.Join(f.Dir, "incoming", "a-1.fits"), scene(t, 0).New[0], map[string]any{"OBJECT": "A", "DATE-OBS": "2027-01-05T21:30:00"})
	if sum := run(t, f); sum.Skipped != 2 {
		t.Errorf("after one frame changed %d were skipped, expected 2", sum.Skipped)
	}
	if err := os.Remove(filepath.Join(f.Dir, "nights", "2027-01-06", "b-2", CandidatesFITS)); err != nil {
		t.Fatal(err)
	}
	if sum := run(t, f); sum.Skipped != 2 {
		t.Errorf("after one table was lost %d were skipped, expected 2", sum.Skipped)
	}
	f.Config.Search.Keep = KeepAligned
	if sum := run(t, f); sum.Skipped != 0 {
		t.Errorf("with more products to keep %d were skipped, expected 0", sum.Skipped)
	}
	f.Config.Search.Keep = KeepNone
	if sum := run(t, f); sum.Skipped != 3 {
		t.Errorf("with fewer products to keep %d were skipped, expected 3", sum.Skipped)
	}
	sound(t, f)
}

// stamps lists the files under a survey's nights with the times of change.
func stamps(t testing.TB, f *Folder) string {
	t.Helper()
	var lines []string
	err := filepath.Walk(f.path(f.Config.Folders.Nights), func(path string, info os.FileInfo, err error) error {
		if err == nil && !info.IsDir() {
			lines = append(lines, fmt.Sprintln(path, info.Size(), info.ModTime().UnixNano()))
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	sort.Strings(lines)
	return strings.Join(lines, "")
}

func startAnew(t testing.TB, f *Folder) {
	t.Helper()
	for _, name := range []string{"nights", "catalog.sqlite", "catalog.sqlite-wal", "catalog.sqlite-shm"} {
		if err := os.RemoveAll(filepath.Join(f.Dir, name)); err != nil {
			t.Fatal(err)
		}
	}
}

func TestJobsDoNotMatter(t *testing.T) {
	f := newSurvey(t, 1)
	o := options
	o.Jobs = 1
	sum := runWith(t, f, o)
	if sum.Searched != 2 || sum.Candidates == 0 {
		t.Fatalf("found %+v, expected 2 frames searched and candidates", sum)
	}
	want := outcomes(t, f)

	// Most of what was put in is found at its place.
	s, err := f.ReadStore(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	found, err := s.Candidates(context.Background(), catalog.CandidateQuery{Frame: "2027-01-05/a-1"})
	s.Close()
	if err != nil {
		t.Fatal(err)
	}
	due, hits := 0, 0
	for _, e := range scene(t, 0).Truth.Sources {
		if !e.Covered || e.Defects != 0 || e.LocalSN < 12 {
			continue
		}
		due++
		for i := range found {
			if math.Hypot(found[i].X-e.X, found[i].Y-e.Y) < 1 && found[i].RealProbability >= 0.5 {
				hits++
				break
			}
		}
	}
	if due == 0 || 4*hits < 3*due {
		t.Errorf("found %d of %d clear events", hits, due)
	}

	startAnew(t, f)
	o.Jobs, o.MemoryGiB = 8, 64
	runWith(t, f, o)
	compare(t, "eight jobs", outcomes(t, f), want)
	sound(t, f)
}

func TestShardsTogetherGiveTheSame(t *testing.T) {
	f := newSurvey(t, 8)
	run(t, f)
	want := outcomes(t, f)
	startAnew(t, f)
	var group sync.WaitGroup
	var sums [3]Summary
	var errs [3]error
	for k := range 3 { // side by side, as on three machines
		group.Go(func() { sums[k], errs[k] = f.Run(context.Background(), Selection{Shard: k + 1, Shards: 3}, quick) })
	}
	group.Wait()
	done := 0
	for k := range 3 {
		if errs[k] != nil {
			t.Fatal(errs[k])
		}
		done += sums[k].Searched
	}
	if done != 16 {
		t.Errorf("the shards searched %d frames, expected 16", done)
	}
	compare(t, "three shards", outcomes(t, f), want)
	sound(t, f)
}

// A fault of the program on one frame fails this frame, not the run, and it is
// tried again.
func TestAFaultEndsOneFrameOnly(t *testing.T) {
	f := newSurvey(t, 2)
	o := quick
	o.search = func(ctx context.Context, e *engine, t *Task, out *outcome) ([]detect.Candidate, error) {
		switch t.Name {
		case "a-1":
			panic("a bug")
		case "b-1":
			return nil, errors.New("a fault of the machine")
		}
		return standIn(ctx, e, t, out)
	}
	sum := runWith(t, f, o)
	if sum.Failed != 2 || sum.Searched != 2 {
		t.Errorf("found %+v, expected two frames failed", sum)
	}
	text := read(t, filepath.Join(f.Dir, "nights", "2027-01-05", FramesCSV))
	for _, want := range []string{"a-1,failed,internal_error", "a bug", "b-1,failed,internal_error,a fault of the machine"} {
		if !strings.Contains(text, want) {
			t.Errorf("frames.csv does not say %q: %s", want, text)
		}
	}
	if sum := run(t, f); sum.Searched != 4 || sum.Skipped != 2 {
		t.Errorf("found %+v, expected the two frames searched now", sum)
	}
	sound(t, f)
}

func TestStageAloneGivesTheSame(t *testing.T) {
	dir := t.TempDir()
	p := scene(t, 0)
	frame, ref := filepath.Join(dir, "new.fits"), filepath.Join(dir, "ref.fits")
	put(t, frame, p.New[0], nil)
	put(t, ref, p.Reference, nil)
	c := DefaultConfig()
	c.Search.Keep = KeepAligned
	ctx := context.Background()
	out := filepath.Join(dir, "out")
	if _, err := RunLoose(ctx, Loose{Frames: []string{frame}, Reference: ref, Out: out, Config: c}, options); err != nil {
		t.Fatal(err)
	}
	aligned, difference, candidates := filepath.Join(dir, AlignedName), filepath.Join(dir, DifferenceName), filepath.Join(dir, CandidatesFITS)
	if _, err := AlignFile(ctx, frame, ref, aligned, c, "test"); err != nil {
		t.Fatal(err)
	}
	if _, err := SubtractFile(ctx, aligned, difference, c, "test"); err != nil {
		t.Fatal(err)
	}
	if _, err := DetectFile(ctx, difference, candidates, c); err != nil {
		t.Fatal(err)
	}
	for name, alone := range map[string]string{AlignedName: aligned, DifferenceName: difference, CandidatesFITS: candidates} {
		if read(t, alone) != read(t, filepath.Join(out, "new", name)) {
			t.Errorf("%s made alone differs from that of a run", name)
			describeDifference(t, alone, filepath.Join(out, "new", name))
		}
	}
	if list, err := detect.ReadTable(candidates); err != nil || len(list) == 0 {
		t.Errorf("found %d candidates, %v", len(list), err)
	}

	// Compressed products hold the same planes.
	c.Search.Compress = fits.CompressRice
	if _, err := AlignFile(ctx, frame, ref, aligned, c, "test"); err != nil {
		t.Fatal(err)
	}
	if _, err := SubtractFile(ctx, aligned, difference, c, "test"); err != nil {
		t.Fatal(err)
	}
	if _, err := DetectFile(ctx, difference, candidates, c); err != nil {
		t.Fatal(err)
	}
	if read(t, candidates) != read(t, filepath.Join(out, "new", CandidatesFITS)) {
		t.Error("compressed products give other candidates")
	}
	if packed, plain := len(read(t, difference)), len(read(t, filepath.Join(out, "new", DifferenceName))); packed > plain*95/100 {
		t.Errorf("difference.fits has %d bytes compressed and %d plain", packed, plain)
	}
}

// describeDifference names the HDUs and cards in which two FITS files differ.
func describeDifference(t *testing.T, a, b string) {
	x, err1 := fits.Open(a)
	y, err2 := fits.Open(b)
	if err1 != nil || err2 != nil {
		t.Log(err1, err2)
		return
	}
	defer x.Close()
	defer y.Close()
	for i := range min(len(x.HDUs()), len(y.HDUs())) {
		u, v := x.HDUs()[i].Header, y.HDUs()[i].Header
		if s, w := fmt.Sprint(u), fmt.Sprint(v); s != w {
			t.Logf("HDU %d: %.3000s\n%.3000s", i, s, w)
		}
	}
}

func TestBadFramesAreSetAside(t *testing.T) {
	f := newSurvey(t, 1)
	in := func(name string) string { return filepath.Join(f.Dir, "incoming", name) }
	good := scene(t, 0).New[0]
	whole := []byte(read(t, in("a-1.fits")))
	headers := map[string]any{"OBJECT": "A", "FILTER": "r", "DATE-OBS": "2027-01-05T22:00:00"}
	same := func(v float32) []float32 {
		pix := make([]float32, 200*200)
		for i := range pix {
			pix[i] = v
		}
		return pix
	}
	rng := rand.New(rand.NewPCG(1, 2))
	noise := same(300)
	for i := range noise {
		noise[i] += float32(17 * rng.NormFloat64())
	}
	write(t, in("cut-header.fits"), whole[:1000])
	write(t, in("cut-data.fits"), whole[:len(whole)/2])
	write(t, in("empty.fits"), nil)
	write(t, in("text.fits"), []byte("this is no frame\n"))
	write(t, in("zip.fits.gz"), []byte("neither is this"))
	write(t, in("line.fits"), rawFITS(4000))
	write(t, in("cube.fits"), rawFITS(20, 20, 5))
	write(t, in("nothing.fits"), rawFITS())
	plane(t, in("nan.fits"), same(float32(math.NaN())), 200, 200, headers)
	plane(t, in("constant.fits"), same(7), 200, 200, headers)
	plane(t, in("noise.fits"), noise, 200, 200, headers)
	put(t, in("elsewhere.fits"), scene(t, 1).New[0], map[string]any{"OBJECT": "A"})
	put(t, in("far.fits"), good, map[string]any{"OBJECT": "B"})
	put(t, in("no-field.fits"), good, map[string]any{"OBJECT": nil})
	put(t, in("other-filter.fits"), good, map[string]any{"OBJECT": "A", "FILTER": "g"})
	put(t, in("unknown-field.fits"), good, map[string]any{"OBJECT": "C"})
	// A reference that is no use sets its frames aside, not the run.
	plane(t, filepath.Join(f.Dir, "references", "D.fits"), same(7), 200, 200, map[string]any{"OBJECT": "D", "FILTER": "r"})
	put(t, in("bad-reference.fits"), good, map[string]any{"OBJECT": "D"})

	want := map[string][]string{
		"cut-header": {frame.ProblemUnreadable}, "cut-data": {frame.ProblemUnreadable}, "empty": {frame.ProblemUnreadable},
		"text": {frame.ProblemUnreadable}, "zip": {frame.ProblemUnreadable},
		"line": {frame.ProblemNotAnImage}, "cube": {frame.ProblemNotAnImage}, "nothing": {frame.ProblemNotAnImage},
		"nan": {frame.ProblemNoData}, "constant": {frame.ProblemNoData}, "noise": {frame.ProblemTooFewStars},
		"elsewhere": {frame.ProblemNoMatch, frame.ProblemNoOverlap}, "far": {frame.ProblemNoMatch, frame.ProblemNoOverlap},
		"no-field": {frame.ProblemMissingKeyword}, "other-filter": {frame.ProblemNoReference}, "unknown-field": {frame.ProblemNoReference},
		"bad-reference": {frame.ProblemNoReference},
	}
	sum := runWith(t, f, options)
	if sum.Searched != 2 || sum.Failed != 0 || sum.SetAside != len(want) {
		t.Errorf("found %+v, expected 2 searched and %d set aside", sum, len(want))
	}
	listed := map[string]bool{}
	for _, dir := range sum.Folders {
		rows, err := csv.NewReader(strings.NewReader(read(t, filepath.Join(dir, FramesCSV)))).ReadAll()
		if err != nil {
			t.Fatal(err)
		}
		for _, row := range rows[1:] {
			name, status, reason, detail := row[0], row[1], row[2], row[3]
			listed[name] = true
			slugs, bad := want[name]
			if !bad {
				if status != "searched" || reason != "" || detail != "" {
					t.Errorf("%s: found %s %s %s, expected it searched", name, status, reason, detail)
				}
				continue
			}
			if status != "set_aside" || !strings.Contains(strings.Join(slugs, " "), reason) || reason == "" {
				t.Errorf("%s: found %s, %s (%s), expected it set aside, %v", name, status, reason, detail, slugs)
			}
			if len(detail) < 15 || !strings.Contains(detail, " ") {
				t.Errorf("%s: the detail %q is no sentence", name, detail)
			}
			if _, err := os.Stat(filepath.Join(dir, name, DifferenceName)); err == nil {
				t.Errorf("%s: there is a difference of a frame that was not searched", name)
			}
		}
	}
	for name := range want {
		if !listed[name] {
			t.Errorf("%s is not in frames.csv", name)
		}
	}
	sound(t, f)
	// They are not tried again until something changes.
	if sum := runWith(t, f, options); sum.Skipped != 2+len(want) {
		t.Errorf("second run: %d skipped, expected %d", sum.Skipped, 2+len(want))
	}
	// A frame whose copy is complete now moves from undated to its night.
	write(t, in("cut-data.fits"), whole)
	if sum := run(t, f); sum.Searched != 3 {
		t.Errorf("after the file was completed %d frames are searched, expected 3", sum.Searched)
	}
	s, err := f.ReadStore(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	for key, n := range map[string]int{"undated/cut-data": 0, "2027-01-05/cut-data": 1} {
		if list, err := s.Frames(context.Background(), catalog.FrameQuery{Frame: key}); err != nil || len(list) != n {
			t.Errorf("the catalogue has %d frames %s, expected %d (%v)", len(list), key, n, err)
		}
	}
	if strings.Contains(read(t, filepath.Join(f.Dir, "nights", "undated", FramesCSV)), "cut-data") {
		t.Error("the frame is still listed as undated")
	}
	sound(t, f)
}

func TestLooseFrames(t *testing.T) {
	dir := t.TempDir()
	p := scene(t, 0)
	for _, name := range []string{"x/new.fits", "y/new.fits"} {
		put(t, filepath.Join(dir, name), p.New[0], nil)
	}
	put(t, filepath.Join(dir, "x", "g.fits"), p.New[0], map[string]any{"FILTER": "g"})
	ref := filepath.Join(dir, "ref.fits")
	put(t, ref, p.Reference, nil)
	l := Loose{Frames: []string{filepath.Join(dir, "x"), filepath.Join(dir, "y", "new.fits")}, Reference: ref, Out: filepath.Join(dir, "out"), Config: DefaultConfig()}
	sum, err := RunLoose(context.Background(), l, options)
	if err != nil || sum.Searched != 2 || sum.SetAside != 1 {
		t.Fatalf("found %+v, %v; expected two frames searched, one set aside", sum, err)
	}
	if text := read(t, filepath.Join(l.Out, FramesCSV)); !strings.Contains(text, "g,set_aside,"+frame.ProblemWrongFilter) {
		t.Errorf("the frame of another filter: %s", text)
	}
	for _, c := range []struct {
		name   string
		change func(*Loose)
		config bool
	}{
		{"no such reference", func(l *Loose) { l.Reference = dir + "/none.fits" }, true},
		{"no frames", func(l *Loose) { l.Frames = []string{filepath.Join(dir, "out", "new")}; l.Frames[0] = t.TempDir() }, true},
		{"no such frame", func(l *Loose) { l.Frames = []string{dir + "/none.fits"} }, true},
		{"the reference is no frame", func(l *Loose) { l.Reference = filepath.Join(l.Out, FramesCSV); l.Out = dir + "/out2" }, false},
		{"a file where the folder should be", func(l *Loose) { l.Out = ref }, false},
	} {
		broken := l
		c.change(&broken)
		_, err := RunLoose(context.Background(), broken, options)
		var bad *ConfigError
		if err == nil || errors.As(err, &bad) != c.config {
			t.Errorf("%s: found %v", c.name, err)
		}
	}
}

// Each product in turn cannot be written: the run stops with an error that
// names it, and the next run completes the work as if nothing had been.
func TestEachWriteFailsOnce(t *testing.T) {
	f := newSurvey(t, 1)
	if err := os.Remove(filepath.Join(f.Dir, "incoming", "b-1.fits")); err != nil {
		t.Fatal(err)
	}
	run(t, f)
	want := outcomes(t, f)
	const night = "nights/2027-01-05/"
	for _, path := range []string{
		night + "a-1", night + "a-1/" + CandidatesFITS, night + "a-1/" + DifferenceName, night + "a-1/" + ReceiptName,
		night + CandidatesFITS, night + CandidatesCSV, night + FramesCSV, night + ReportName, night + collectedName, "catalog.sqlite",
	} {
		gone := []string{"catalog.sqlite", "catalog.sqlite-wal", "catalog.sqlite-shm", path, night + collectedName}
		if strings.HasPrefix(path, night+"a-1") {
			gone = append(gone, "nights") // the frame is searched again
		}
		for _, name := range gone {
			if err := os.RemoveAll(filepath.Join(f.Dir, filepath.FromSlash(name))); err != nil {
				t.Fatal(err)
			}
		}
		obstacle := filepath.Join(f.Dir, filepath.FromSlash(path))
		if filepath.Base(path) == "a-1" {
			write(t, obstacle, []byte("a file where a folder should be"))
		} else {
			write(t, filepath.Join(obstacle, "in-the-way"), nil)
		}
		_, err := f.Run(context.Background(), Selection{}, quick)
		if err == nil || !strings.Contains(err.Error(), filepath.Base(path)) {
			t.Errorf("%s cannot be written: found %v, expected an error that names it", path, err)
		}
		if err := os.RemoveAll(obstacle); err != nil {
			t.Fatal(err)
		}
		run(t, f)
		compare(t, path, outcomes(t, f), want)
		sound(t, f)
	}
}

func TestLockAndInterruption(t *testing.T) {
	f := newSurvey(t, 2)
	held, err := takeLock(f.Dir, lockName, exclusive)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := f.Run(context.Background(), Selection{}, quick); !errors.Is(err, ErrLocked) {
		t.Errorf("a second run: found %v, expected ErrLocked", err)
	}
	if _, err := f.Run(context.Background(), Selection{Shard: 1, Shards: 2}, quick); !errors.Is(err, ErrLocked) {
		t.Errorf("a shard beside a whole run: found %v, expected ErrLocked", err)
	}
	held.release()
	if held, err = takeLock(f.Dir, lockName+"-1-of-2", exclusive); err != nil {
		t.Fatal(err)
	}
	if _, err := f.Run(context.Background(), Selection{Shard: 1, Shards: 2}, quick); !errors.Is(err, ErrLocked) {
		t.Errorf("the same shard twice: found %v, expected ErrLocked", err)
	}
	held.release()

	ctx, cancel := context.WithCancel(context.Background())
	o := quick
	o.Jobs = 1
	finished := 0
	o.Observe = func(e Event) {
		if e.Kind == EventFinished {
			finished++
			cancel()
		}
	}
	if _, err := f.Run(ctx, Selection{}, o); !errors.Is(err, context.Canceled) {
		t.Errorf("interrupted run: found %v, expected context.Canceled", err)
	}
	sum := run(t, f)
	if sum.Skipped == 0 || sum.Skipped > 3 || sum.Searched != 4 {
		t.Errorf("after an interruption: %+v, expected 4 searched, some of them before", sum)
	}
	sound(t, f)
}

func TestStatusCountsByNight(t *testing.T) {
	f := newSurvey(t, 2)
	write(t, filepath.Join(f.Dir, "incoming", "c.fits"), nil)
	waiting, err := f.Status("test")
	if err != nil {
		t.Fatal(err)
	}
	total := 0
	for _, n := range waiting {
		total += n.Waiting
	}
	if total != 5 {
		t.Errorf("before the run %d frames wait, expected 5", total)
	}
	sum := run(t, f)
	nights, err := f.Status("test")
	if err != nil {
		t.Fatal(err)
	}
	var searched, candidates int
	for _, n := range nights {
		searched += n.Searched
		candidates += n.Candidates
		if n.Night == undated && (n.SetAside != 1 || len(n.NotSearched) != 1 || n.NotSearched[0].Reason != frame.ProblemUnreadable) {
			t.Errorf("the empty file: %+v", n)
		}
		if n.Waiting != 0 {
			t.Errorf("after the run frames wait: %+v", n)
		}
	}
	if err := os.Remove(filepath.Join(f.Dir, "incoming", "a-1.fits")); err != nil {
		t.Fatal(err)
	}
	after, err := f.Status("test")
	if err != nil {
		t.Fatal(err)
	}
	if a, b := fmt.Sprint(after), fmt.Sprint(nights); a != b {
		t.Errorf("after a frame was moved away: %s, was %s", a, b)
	}
	if searched != 4 || candidates != sum.Candidates {
		t.Errorf("status counts %d frames, %d candidates, the run %d, %d", searched, candidates, 4, sum.Candidates)
	}
}
