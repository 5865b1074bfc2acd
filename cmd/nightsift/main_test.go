package main

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"nightsift/internal/simulate"
	"nightsift/internal/survey"
)

// asCommand makes the test binary behave as the command, so that tests can run
// and kill the real thing.
const asCommand = "NIGHTSIFT_TEST_AS_COMMAND"

func TestMain(m *testing.M) {
	if os.Getenv(asCommand) != "" {
		os.Exit(execute())
	}
	os.Exit(m.Run())
}

func command(args ...string) *exec.Cmd {
	cmd := exec.Command(os.Args[0], args...)
	cmd.Env = append(os.Environ(), asCommand+"=1")
	return cmd
}

// start runs the command to its end and returns what it wrote and its code.
func start(t testing.TB, args ...string) (stdout, stderr string, code int) {
	t.Helper()
	var o, e bytes.Buffer
	cmd := command(args...)
	cmd.Stdout, cmd.Stderr = &o, &e
	err := cmd.Run()
	var exit *exec.ExitError
	if err != nil && !errors.As(err, &exit) {
		t.Fatal(err)
	}
	return o.String(), e.String(), cmd.ProcessState.ExitCode()
}

// expect runs the command and fails the test on another exit code.
func expect(t testing.TB, code int, args ...string) (stdout, stderr string) {
	t.Helper()
	stdout, stderr, got := start(t, args...)
	if got != code {
		t.Fatalf("nightsift %s: exit code %d, expected %d\n%s%s", strings.Join(args, " "), got, code, stdout, stderr)
	}
	return stdout, stderr
}

// newSurvey makes a survey folder of one field with some frames.
func newSurvey(t testing.TB, frames int) string {
	t.Helper()
	dir := filepath.Join(t.TempDir(), "survey")
	if err := survey.Init(dir); err != nil {
		t.Fatal(err)
	}
	p, err := simulate.Scenario("plain", 300, 3)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Reference.Write(filepath.Join(dir, "references", "a.fits")); err != nil {
		t.Fatal(err)
	}
	e := *p.New[0]
	for n := range frames {
		e.Header = append([]simulate.Keyword(nil), p.New[0].Header...)
		for i := range e.Header {
			if e.Header[i].Key == "DATE-OBS" {
				e.Header[i].Value = fmt.Sprintf("2027-01-%02dT21:%02d:00", 5+n%2, n)
			}
		}
		if err := e.Write(filepath.Join(dir, "incoming", fmt.Sprintf("a-%d.fits", n+1))); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

// tables returns what a survey has given, without the time spent.
func tables(t testing.TB, dir string) string {
	t.Helper()
	var b strings.Builder
	err := filepath.WalkDir(filepath.Join(dir, "nights"), func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		name, _ := filepath.Rel(dir, path)
		if d.Name() != survey.FramesCSV && !strings.HasSuffix(d.Name(), ".fits") && d.Name() != survey.CandidatesCSV {
			return nil
		}
		data, err := os.ReadFile(path)
		if err != nil {
			return err
		}
		if d.Name() == survey.FramesCSV {
			data = []byte(withoutSeconds(t, string(data)))
		}
		fmt.Fprintf(&b, "%s %q\n", name, data)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for _, what := range []string{"candidates", "objects", "frames"} {
		text, _ := expect(t, 0, "catalog", "export", "--survey", dir, "--what", what)
		if what == "frames" {
			text = withoutSeconds(t, text)
		}
		fmt.Fprintf(&b, "catalogue %s\n%s", what, text)
	}
	return b.String()
}

func withoutSeconds(t testing.TB, text string) string {
	t.Helper()
	rows, err := csv.NewReader(strings.NewReader(text)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	found := false
	for k, name := range rows[0] {
		if name == "seconds" {
			found = true
			for _, row := range rows {
				row[k] = ""
			}
		}
	}
	if !found {
		t.Fatal("the table of frames has no column seconds")
	}
	return fmt.Sprint(rows)
}

// A run that is killed at any instant, again and again, ends with what an
// undisturbed run gives.
func TestKilledRunsLoseAndDoubleNothing(t *testing.T) {
	frames, most := 4, 8
	if raced {
		frames, most = 2, 2
	}
	dir := newSurvey(t, frames)
	begun := time.Now()
	expect(t, 0, "run", "--survey", dir, "--quiet")
	length := time.Since(begun)
	want := tables(t, dir)
	if !strings.Contains(want, fmt.Sprintf("a-%d", frames)) || strings.Count(want, "new_source") < frames {
		t.Fatalf("the undisturbed run gave too little: %.2000s", want)
	}
	const seed = 5
	rng := rand.New(rand.NewPCG(seed, 0))
	again := func() {
		for _, name := range []string{"nights", "catalog.sqlite", "catalog.sqlite-wal", "catalog.sqlite-shm"} {
			if err := os.RemoveAll(filepath.Join(dir, name)); err != nil {
				t.Fatal(err)
			}
		}
	}
	again()
	kills, rounds := 0, 0
	for kills < most && rounds < 5*most {
		rounds++
		cmd := command("run", "--survey", dir, "--quiet")
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		delay := time.Duration(rng.Float64() * float64(length) * 0.8)
		ended := make(chan error, 1)
		go func() { ended <- cmd.Wait() }()
		select {
		case <-time.After(delay):
			if err := cmd.Process.Signal(syscall.SIGKILL); err != nil && !errors.Is(err, os.ErrProcessDone) {
				t.Fatal(err)
			}
			<-ended
		case <-ended:
		}
		if status, ok := cmd.ProcessState.Sys().(syscall.WaitStatus); ok && status.Signaled() {
			kills++
			continue
		}
		if code := cmd.ProcessState.ExitCode(); code != 0 {
			t.Fatalf("round %d (seed %d): exit code %d", rounds, seed, code)
		}
		if got := tables(t, dir); got != want {
			t.Fatalf("round %d (seed %d), after %d kills: the result differs from that of an undisturbed run", rounds, seed, kills)
		}
		again()
	}
	if kills == 0 {
		t.Fatal("no run was killed")
	}
	expect(t, 0, "run", "--survey", dir, "--quiet")
	if got := tables(t, dir); got != want {
		t.Errorf("seed %d, after %d kills: the result differs from that of an undisturbed run", seed, kills)
	}
	expect(t, 0, "check", "--survey", dir)
	t.Logf("%d kills in %d rounds", kills, rounds)
}

func TestInterruptedRunCanGoOn(t *testing.T) {
	dir := newSurvey(t, 2)
	cmd := command("run", "--survey", dir, "--jobs", "1", "--log", "json")
	stderr, err := cmd.StderrPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	// Interrupt once the first frame is done.
	lines := json.NewDecoder(stderr)
	for {
		var line map[string]any
		if err := lines.Decode(&line); err != nil {
			t.Fatalf("no frame was searched: %v", err)
		}
		if line["msg"] == "frame searched" {
			break
		}
	}
	if err := cmd.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	rest := new(bytes.Buffer)
	_, _ = rest.ReadFrom(lines.Buffered())
	_, _ = rest.ReadFrom(stderr)
	_ = cmd.Wait()
	if code := cmd.ProcessState.ExitCode(); code != exitInterrupted {
		t.Fatalf("exit code %d, expected %d: %s", code, exitInterrupted, rest)
	}
	stdout, _ := expect(t, 0, "run", "--survey", dir)
	if !strings.Contains(stdout, "2 frames searched") || !strings.Contains(stdout, "by an earlier run") {
		t.Errorf("found %s", stdout)
	}
}

func TestExitCodes(t *testing.T) {
	dir := newSurvey(t, 1)
	frame, ref := filepath.Join(dir, "incoming", "a-1.fits"), filepath.Join(dir, "references", "a.fits")
	tmp := t.TempDir()
	out := filepath.Join(tmp, "out")

	stdout, stderr := expect(t, 0, "run", frame, "--reference", ref, "--out", out)
	if !strings.Contains(stdout, "1 frames searched, 0 set aside, 0 failed") || !strings.Contains(stdout, filepath.Join(out, "report.html")) {
		t.Errorf("stdout: %s", stdout)
	}
	if strings.Contains(stderr, "\r") || strings.Contains(stderr, "\x1b") {
		t.Errorf("stderr is no terminal, yet holds a progress bar: %q", stderr)
	}
	if _, stderr := expect(t, 0, "run", frame, "--reference", ref, "--out", out, "--quiet"); stderr != "" {
		t.Errorf("--quiet: stderr holds %q", stderr)
	}

	bad := filepath.Join(tmp, "bad.fits")
	if err := os.WriteFile(bad, []byte("no frame"), 0o644); err != nil {
		t.Fatal(err)
	}
	_, stderr = expect(t, 3, "run", frame, bad, "--reference", ref, "--out", out, "--log", "json")
	for _, line := range strings.Split(strings.TrimSpace(stderr), "\n") {
		var v map[string]any
		if err := json.Unmarshal([]byte(line), &v); err != nil {
			t.Errorf("--log json: %q is no JSON", line)
		}
	}
	if !strings.Contains(stderr, `"reason":"unreadable"`) {
		t.Errorf("stderr does not give the reason: %s", stderr)
	}
	expect(t, 3, "align", bad, "--reference", ref, "--out", filepath.Join(tmp, "x.fits"))
	expect(t, 3, "check", bad)
	expect(t, 0, "check", frame)

	for _, args := range [][]string{
		{"run"}, {"run", frame}, {"run", frame, "--reference", ref}, {"run", "--nonsense"}, {"nonsense"}, {"run", "--survey", tmp},
		{"run", "--survey", dir, "--night", "yesterday"}, {"run", "--survey", dir, "--shard", "3/2"}, {"run", "--survey", dir, "--keep", "all"},
		{"run", "--survey", dir, "--jobs", "-1"}, {"run", "--survey", dir, "--out", out}, {"run", frame, "--reference", tmp + "/none.fits", "--out", out},
		{"run", "--survey", dir, "--log", "xml"}, {"align", frame}, {"align"}, {"subtract", "x"}, {"detect", "x"}, {"detect", "x", "--out", "y", "--threshold", "1"},
		{"init"}, {"init", dir}, {"status"}, {"catalog", "nonsense"}, {"catalog", "export"}, {"catalog", "export", "--survey", dir, "--format", "xls"},
		{"catalog", "export", "--survey", dir, "--format", "fits"}, {"catalog", "export", "--survey", dir, "--what", "all"},
		{"simulate", "plain"}, {"simulate", "nonsense", "--out", tmp + "/s"}, {"simulate", "plain", "--size", "3", "--out", tmp + "/s"},
		{"demo", "--out", dir}, {"demo", "more"},
	} {
		if _, stderr, code := start(t, args...); code != exitUsage || stderr == "" {
			t.Errorf("nightsift %s: exit code %d, expected 2, with a message: %q", strings.Join(args, " "), code, stderr)
		}
	}
	for _, args := range [][]string{
		{"run", frame, "--reference", ref, "--out", filepath.Join(bad, "out")},
		{"subtract", filepath.Join(tmp, "none.fits"), "--out", filepath.Join(tmp, "d.fits")},
		{"catalog", "show", "none", "--survey", dir},
		{"catalog", "add", bad, "--survey", dir},
	} {
		if _, stderr, code := start(t, args...); (code != exitFailed && code != exitSetAside) || stderr == "" {
			t.Errorf("nightsift %s: exit code %d, expected 1 or 3, with a message: %q", strings.Join(args, " "), code, stderr)
		}
	}

	// Another run holds the survey.
	file, err := os.OpenFile(filepath.Join(dir, ".lock"), os.O_CREATE|os.O_RDWR, 0o644)
	if err != nil {
		t.Fatal(err)
	}
	if err := syscall.Flock(int(file.Fd()), syscall.LOCK_EX); err != nil {
		t.Fatal(err)
	}
	if _, stderr := expect(t, exitLocked, "run", "--survey", dir); !strings.Contains(stderr, "locked by process") {
		t.Errorf("stderr: %s", stderr)
	}
	file.Close()
}

// The stages one after the other, by hand, give the catalogue that a run gives.
func TestStagesByHand(t *testing.T) {
	dir := newSurvey(t, 1)
	expect(t, 0, "run", "--survey", dir)
	want, _ := expect(t, 0, "catalog", "export", "--survey", dir)
	tmp := t.TempDir()
	at := func(name string) string { return filepath.Join(tmp, name) }
	expect(t, 0, "align", filepath.Join(dir, "incoming", "a-1.fits"), "--reference", filepath.Join(dir, "references", "a.fits"), "--out", at("aligned.fits"), "--survey", dir)
	expect(t, 0, "subtract", at("aligned.fits"), "--out", at("difference.fits"), "--survey", dir)
	expect(t, 0, "detect", at("difference.fits"), "--out", at("candidates.fits"), "--survey", dir)
	for range 2 { // adding twice changes nothing
		expect(t, 0, "catalog", "add", at("candidates.fits"), "--survey", dir)
		if got, _ := expect(t, 0, "catalog", "export", "--survey", dir); got != want {
			t.Errorf("found\n%s\nexpected\n%s", got, want)
		}
	}
	other := filepath.Join(tmp, "other")
	expect(t, 0, "init", other)
	expect(t, 0, "catalog", "add", at("candidates.fits"), "--survey", other)
	// A table of candidates does not tell the field of its frames.
	if got, _ := expect(t, 0, "catalog", "export", "--survey", other); got != strings.ReplaceAll(want, ",MR-101,", ",,") {
		t.Errorf("in an empty catalogue: found\n%s\nexpected\n%s", got, want)
	}
	expect(t, 0, "catalog", "export", "--survey", dir, "--format", "fits", "--what", "objects", "--out", at("objects.fits"))
	rows, err := csv.NewReader(strings.NewReader(want)).ReadAll()
	if err != nil || len(rows) < 2 {
		t.Fatalf("%d rows, %v", len(rows), err)
	}
	if text, _ := expect(t, 0, "catalog", "show", rows[1][0], "--survey", dir); !strings.Contains(text, rows[1][0]) {
		t.Errorf("show: %s", text)
	}
}

// Every command has help with a worked example.
func TestEveryCommandHasHelp(t *testing.T) {
	root := newRoot()
	for _, c := range root.Commands() {
		if c.Name() == "help" || c.Name() == "completion" {
			continue
		}
		commands := append(c.Commands(), c)
		for _, x := range commands {
			if !strings.Contains(x.Example, "nightsift ") || x.Short == "" {
				t.Errorf("%s: no example or no summary", x.CommandPath())
			}
			var b bytes.Buffer
			x.SetOut(&b)
			if err := x.Help(); err != nil || !strings.Contains(b.String(), "Examples:") {
				t.Errorf("%s: help without example: %v", x.CommandPath(), err)
			}
		}
	}
	stdout, _ := expect(t, 0, "run", "--help")
	for code := range map[string]int{"0 ": 0, "1 ": 1, "2 ": 2, "3 ": 3, "4 ": 4, "130 ": 130} {
		if !strings.Contains(stdout, "\n  "+code) {
			t.Errorf("run --help does not explain exit code %s", code)
		}
	}
	if stdout, _ := expect(t, 0, "completion", "bash"); !strings.Contains(stdout, "nightsift") {
		t.Error("no shell completion")
	}
	if stdout, _ := expect(t, 0, "--version"); !strings.Contains(stdout, version) {
		t.Errorf("--version: %s", stdout)
	}
}

func TestWatchSearchesWhatArrives(t *testing.T) {
	dir := newSurvey(t, 1)
	ctx, cancel := context.WithTimeout(context.Background(), 2*time.Minute)
	defer cancel()
	cmd := exec.CommandContext(ctx, os.Args[0], "run", "--survey", dir, "--watch", "--every", "100ms", "--log", "json")
	cmd.Env = append(os.Environ(), asCommand+"=1")
	stderr, err := cmd.StderrPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	lines := json.NewDecoder(stderr)
	await := func(frame string) {
		t.Helper()
		for {
			var line map[string]any
			if err := lines.Decode(&line); err != nil {
				t.Fatalf("%s was not searched: %v", frame, err)
			}
			if line["msg"] == "frame searched" && line["frame"] == frame {
				return
			}
		}
	}
	await("a-1")
	data, err := os.ReadFile(filepath.Join(dir, "incoming", "a-1.fits"))
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(dir, "incoming", "late.fits"), data, 0o644); err != nil {
		t.Fatal(err)
	}
	await("late")
	if err := cmd.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	rest := new(bytes.Buffer)
	_, _ = rest.ReadFrom(stderr)
	_ = cmd.Wait()
	if code := cmd.ProcessState.ExitCode(); code != exitInterrupted {
		t.Errorf("exit code %d, expected %d", code, exitInterrupted)
	}
}
