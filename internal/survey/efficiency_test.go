package survey

import (
	"context"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/align"
	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/efficiency"
	"nightsift/internal/fits"
	"nightsift/internal/frame/load"
	"nightsift/subtract"
)

// A night with injected sources has the candidates of a night without, and its
// limit in every place where frames are listed.
func TestNightWithInjectedSources(t *testing.T) {
	ctx := context.Background()
	plain, f := newSurvey(t, 1), newSurvey(t, 1)
	runWith(t, plain, options)
	f.Config.Search.Efficiency = 12
	runWith(t, f, options)
	nights := "nights/2027-01-05"
	for _, name := range []string{CandidatesCSV, "a-1/candidates.fits"} {
		a, b := read(t, filepath.Join(plain.Dir, nights, name)), read(t, filepath.Join(f.Dir, nights, name))
		if a != b {
			t.Errorf("%s differs when sources are injected", name)
		}
	}
	if text := read(t, filepath.Join(f.Dir, nights, CandidatesCSV)); strings.Contains(text, detect.InjectedPrefix) {
		t.Error("injected sources stand among the candidates")
	}
	records, _, err := ReadResults(filepath.Join(f.Dir, nights))
	if err != nil {
		t.Fatal(err)
	}
	store, err := f.ReadStore(ctx)
	if err != nil {
		t.Fatal(err)
	}
	defer store.Close()
	kept, err := store.Frames(ctx, catalog.FrameQuery{})
	if err != nil {
		t.Fatal(err)
	}
	for i, r := range records {
		if !(math.Abs(r.Efficiency50-r.MagLimit5Sigma) < 1) {
			t.Errorf("%s: half found at %.2f, limit of five sigma %.2f", r.Frame, r.Efficiency50, r.MagLimit5Sigma)
		}
		if kept[i].Efficiency50 != r.Efficiency50 {
			t.Errorf("the catalogue has %.4f for %s, the table %.4f", kept[i].Efficiency50, r.Frame, r.Efficiency50)
		}
		list, err := efficiency.ReadTable(filepath.Join(f.Dir, nights, r.Frame, EfficiencyFITS))
		if err != nil || len(list) != 12 {
			t.Errorf("%s: %d injected sources, %v", r.Frame, len(list), err)
		}
	}
	if page := read(t, filepath.Join(f.Dir, nights, ReportName)); !strings.Contains(page, "24 artificial stars were put into copies of 2 frames") || !strings.Contains(page, "data:image/svg") {
		t.Error("the report does not show what was missed")
	}
	control(t, f, 0)
	// The same again without: the files about injected sources go.
	f.Config.Search.Efficiency = 0
	runWith(t, f, options)
	if _, err := os.Stat(filepath.Join(f.Dir, nights, "a-1", EfficiencyFITS)); !os.IsNotExist(err) {
		t.Errorf("efficiency.fits of an earlier run is left: %v", err)
	}
	control(t, f, 1)
}

// control computes the control times of a survey with one frame in each of two
// fields, of which so many have no measured efficiency.
func control(t *testing.T, f *Folder, assumed int) {
	t.Helper()
	watched, err := f.Watched(1)
	if err != nil || len(watched) != 2 {
		t.Fatalf("%d fields, %v", len(watched), err)
	}
	s := DefaultControlSettings()
	s.Galaxies = 100
	var list []Expected
	for _, w := range watched {
		e := w.Expect(&s)
		list = append(list, e)
		if w.Frames != 1 || w.Assumed != assumed || !(w.Area > 0) || w.Unknown != 0 {
			t.Errorf("%s: %d frames, %d assumed, %g square degrees", w.Field, w.Frames, w.Assumed, w.Area)
		}
		if !(e.Days[0] > 5 && e.Days[0] < 200) || !(e.Days[redshiftCells-1] <= e.Days[0]) || !(e.Events >= 0) || !(e.InHosts >= 0) {
			t.Errorf("%s: watched for %v days, %g events, %g in galaxies", w.Field, e.Days, e.Events, e.InHosts)
		}
	}
	dir := t.TempDir()
	if err := WriteControlTimes(dir, list, &s); err != nil {
		t.Fatal(err)
	}
	if n := strings.Count(read(t, filepath.Join(dir, ControlTimeCSV)), "\n"); n != 1+2*redshiftCells {
		t.Errorf("the table of control times has %d lines", n)
	}
	for _, change := range []func(*ControlSettings){
		func(s *ControlSettings) { s.Peak = 3 }, func(s *ControlSettings) { s.StretchSpread = -1 }, func(s *ControlSettings) { s.Needed = 0 },
		func(s *ControlSettings) { s.Farthest = math.NaN() }, func(s *ControlSettings) { s.Rate = math.Inf(1) }, func(s *ControlSettings) { s.Galaxies = -1 },
		func(s *ControlSettings) { s.Cosmology.H0 = 0 },
	} {
		bad := DefaultControlSettings()
		change(&bad)
		if bad.Check() == nil {
			t.Errorf("accepted %+v", bad)
		}
	}
}

// Everything that could take injected sources for candidates is tried.
func TestInjectedSourcesNeverEnterTheCatalogue(t *testing.T) {
	ctx := context.Background()
	f := newSurvey(t, 0)
	p := scene(t, 0)
	dir := t.TempDir()
	put(t, filepath.Join(dir, "new.fits"), p.New[0], nil)
	put(t, filepath.Join(dir, "reference.fits"), p.Reference, nil)
	n, err := load.Frame(filepath.Join(dir, "new.fits"), load.DefaultKeywords())
	if err != nil {
		t.Fatal(err)
	}
	r, err := load.Frame(filepath.Join(dir, "reference.fits"), load.DefaultKeywords())
	if err != nil {
		t.Fatal(err)
	}
	pair, err := align.Align(ctx, n, r, align.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	d, solution, err := subtract.Solve(ctx, pair, subtract.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	size := 2*solution.PSF().Radius() + 1
	light := subtract.Light{X: 150, Y: 160, Radius: solution.PSF().Radius(), Counts: make([]float32, size*size)}
	solution.PSF().Render(light.Counts, 150, 160, 0, 0)
	for i := range light.Counts {
		light.Counts[i] *= float32(6 * d.Info.FluxLimit5)
	}
	injected, err := solution.With(ctx, []subtract.Light{light})
	if err != nil {
		t.Fatal(err)
	}
	found, err := detect.Detect(ctx, injected, detect.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	there := false
	for i := range found {
		if !found[i].Injected() {
			t.Errorf("%s has the name of a candidate", found[i].ID)
		}
		there = there || math.Hypot(found[i].X-150, found[i].Y-160) < 1
	}
	if !there {
		t.Fatal("the injected source was not found, so that this test shows nothing")
	}

	refused := func(what string, err error) {
		t.Helper()
		if err == nil {
			t.Errorf("%s: not refused", what)
		}
	}
	refused("difference with injected sources", injected.Write(filepath.Join(dir, "difference.fits"), nil))
	refused("table of candidates", detect.WriteTable(filepath.Join(dir, "candidates.fits"), found))
	for _, name := range []string{"difference.fits", "candidates.fits"} {
		if _, err := os.Stat(filepath.Join(dir, name)); !os.IsNotExist(err) {
			t.Errorf("%s was written: %v", name, err)
		}
	}
	// A table made by another program, and that of the injected sources itself,
	// also under the name of the other.
	forged := filepath.Join(dir, "forged.fits")
	if err := fits.Write(forged, nil, detect.Table(found)); err != nil {
		t.Fatal(err)
	}
	_, _, err = f.AddTable(ctx, forged, "test")
	refused("forged table", err)
	list := []efficiency.Injection{{ID: detect.InjectedPrefix + "0123456789abcdef", Frame: "new"}}
	table := efficiency.Table(list)
	own := filepath.Join(dir, "efficiency.fits")
	if err := fits.Write(own, nil, table); err != nil {
		t.Fatal(err)
	}
	_, _, err = f.AddTable(ctx, own, "test")
	refused("table of injected sources", err)
	table.Name = detect.TableName
	if err := fits.Write(own, nil, table); err != nil {
		t.Fatal(err)
	}
	_, _, err = f.AddTable(ctx, own, "test")
	refused("table of injected sources under another name", err)

	store, err := f.OpenStore(ctx)
	if err != nil {
		t.Fatal(err)
	}
	defer store.Close()
	refused("catalogue", store.AddFrame(ctx, catalog.NewFrameRecord("new", catalog.Searched), found))
	if frames, err := store.Frames(ctx, catalog.FrameQuery{}); err != nil || len(frames) != 0 {
		t.Errorf("the catalogue holds %d frames, %v", len(frames), err)
	}
}

// What cannot be measured is noted; the frame keeps its search.
func TestFrameWithoutMeasurementKeepsItsSearch(t *testing.T) {
	p := scene(t, 0)
	dir := t.TempDir()
	put(t, filepath.Join(dir, "new.fits"), p.New[0], map[string]any{"MAGZERO": nil, "MAGZPT": nil, "ZEROPT": nil, "MAGZP": nil, "PHOTZP": nil})
	put(t, filepath.Join(dir, "reference.fits"), p.Reference, map[string]any{"MAGZERO": nil, "MAGZPT": nil, "ZEROPT": nil, "MAGZP": nil, "PHOTZP": nil})
	c := DefaultConfig()
	c.Search.Efficiency = 12
	out := filepath.Join(dir, "out")
	sum, err := RunLoose(context.Background(), Loose{Frames: []string{filepath.Join(dir, "new.fits")}, Reference: filepath.Join(dir, "reference.fits"), Out: out, Config: c}, Options{Version: "test"})
	if err != nil || sum.Searched != 1 {
		t.Fatalf("%+v, %v", sum, err)
	}
	r := readReceipt(filepath.Join(out, "new"))
	if r == nil || r.Efficiency == nil || r.Efficiency.Injected != 12 || !strings.Contains(r.Efficiency.Note, "zero point") || !math.IsNaN(r.Record.Efficiency50) {
		t.Fatalf("receipt %+v", r)
	}
	list, err := efficiency.ReadTable(filepath.Join(out, "new", EfficiencyFITS))
	if err != nil || len(list) != 12 || !(list[0].SN > 0) || !math.IsNaN(list[0].Mag) {
		t.Errorf("table without zero point: %v", err)
	}
}

func TestMeasuringLooseFramesAndNights(t *testing.T) {
	ctx := context.Background()
	p := scene(t, 0)
	dir := t.TempDir()
	put(t, filepath.Join(dir, "in", "new.fits"), p.New[0], nil)
	put(t, filepath.Join(dir, "reference.fits"), p.Reference, nil)
	write(t, filepath.Join(dir, "in", "broken.fits"), []byte("no FITS"))
	s := efficiency.DefaultConfig()
	s.Count = 10
	m := Injection{Frames: []string{filepath.Join(dir, "in")}, Reference: filepath.Join(dir, "reference.fits"), Out: filepath.Join(dir, "out"), Config: DefaultConfig(), Settings: s, Shared: true, Version: "test"}
	frames, err := MeasureLoose(ctx, m)
	if err != nil {
		t.Fatal(err)
	}
	if len(frames) != 2 || frames[0].Status != "unreadable" || frames[1].Status != "measured" || len(frames[1].Injections) != 10 {
		t.Errorf("%+v", frames)
	}
	for _, name := range []string{"efficiency.fits", "efficiency.csv", "fractions.csv", "limits.csv", "efficiency-magnitude.png", "efficiency-magnitude.svg", "efficiency-signal.svg"} {
		if info, err := os.Stat(filepath.Join(m.Out, name)); err != nil || info.Size() == 0 {
			t.Errorf("%s: %v", name, err)
		}
	}
	first := read(t, filepath.Join(m.Out, "efficiency.csv")) + read(t, filepath.Join(m.Out, "efficiency-magnitude.svg"))
	if _, err := MeasureLoose(ctx, m); err != nil {
		t.Fatal(err)
	}
	if read(t, filepath.Join(m.Out, "efficiency.csv"))+read(t, filepath.Join(m.Out, "efficiency-magnitude.svg")) != first {
		t.Error("the same seed gave other files")
	}
	m.Frames = nil
	if _, err := MeasureLoose(ctx, m); err == nil {
		t.Error("no frames, and no error")
	}
	f := newSurvey(t, 1)
	if _, err := f.MeasureNights(ctx, m, ""); err == nil {
		t.Error("nothing was searched, and no error")
	}
	run(t, f)
	if frames, err = f.MeasureNights(ctx, m, "2027-01-05"); err != nil || len(frames) != 2 || frames[0].Result == nil {
		t.Errorf("night: %+v, %v", frames, err)
	}
	if _, err := f.MeasureNights(ctx, m, "2027-02-05"); err == nil {
		t.Error("a night without results, and no error")
	}
}
