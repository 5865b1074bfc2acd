package main

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/detect"
	"nightsift/internal/survey"
)

// A survey with a catalogue of two sources 4 arcsec apart on three frames, made
// from a table.
func newCatalogue(t testing.TB) (dir, table string) {
	t.Helper()
	dir = filepath.Join(t.TempDir(), "survey")
	if err := survey.Init(dir); err != nil {
		t.Fatal(err)
	}
	n := math.NaN()
	var list []detect.Candidate
	for k := range 3 {
		for i := range 2 {
			list = append(list, detect.Candidate{ID: fmt.Sprintf("c%d%d", k, i), Frame: fmt.Sprint("frame", k), Filter: "r", Night: fmt.Sprintf("2027-01-0%d", k+1),
				MidMJD: 61000.3 + float64(k), X: 100, Y: 200 + 5*float64(i), XErr: 0.1, YErr: 0.1, RA: 150, Dec: 2 + float64(i)*4/3600,
				Flux: 1000, FluxErr: 50, Mag: 19, MagErr: 0.05, MagLimit: 21, Significance: 20, RealProbability: 0.9, Kind: detect.NewSource,
				ReferenceDistance: n, ReferenceMag: n, FitChi2: 1, Length: n, Angle: n})
		}
	}
	table = filepath.Join(t.TempDir(), "candidates.fits")
	if err := detect.WriteTable(table, list); err != nil {
		t.Fatal(err)
	}
	expect(t, 0, "catalog", "add", table, "--survey", dir)
	return dir, table
}

func TestCatalogCommands(t *testing.T) {
	dir, table := newCatalogue(t)
	in := func(code int, args ...string) string {
		t.Helper()
		out, _ := expect(t, code, append(append([]string{"catalog"}, args...), "--survey", dir)...)
		return out
	}
	rows := func(text string) int { return strings.Count(text, "\n") - 1 }
	has := func(text string, parts ...string) {
		t.Helper()
		for _, p := range parts {
			if !strings.Contains(text, p) {
				t.Errorf("no %q in\n%s", p, text)
			}
		}
	}
	if n := rows(in(0, "list")); n != 2 {
		t.Errorf("%d objects, expected 2", n)
	}
	for args, want := range map[string]int{
		"--what candidates": 6, "--what candidates --night 2027-01-02": 2, "--what frames --night 2027-01-02": 1, "--night 2027-01-09": 0, "--field X": 0,
		"--state watched": 0, "--state new": 2, "--min-probability 0.95": 0, "--cone 150,2,2": 1, "--cone 150,2,5": 2,
		"--what candidates --where mag<19.5": 6, "--where nights>3": 0, "--what candidates --state new": 6,
	} {
		if n := rows(in(0, append([]string{"list"}, strings.Fields(args)...)...)); n != want {
			t.Errorf("list %s: %d rows, expected %d", args, n, want)
		}
	}
	for _, args := range []string{"list --cone 1,2", "list --cone 1,100,3", "list --what stars", "list --what frames --cone 1,2,3"} {
		in(2, strings.Fields(args)...)
	}
	for _, args := range []string{"list --where 1=1;DROP", "list --where nothing=1", "show nobody", "label nobody real --by Ada", "label c00 maybe --by Ada",
		"state c00 famous --by Ada", "comment nobody text --by Ada", "merge c00 c10 --by Ada", "split c00 c01 --by Ada", "withdraw none --by Ada", "restore none"} {
		in(1, strings.Fields(args)...)
	}
	in(0, "label", "c00", "bogus", "--by", "Ada", "--comment", "a ghost")
	in(0, "state", "c00", "watched", "--by", "Ada", "--comment", "odd colour")
	in(0, "comment", "c00", "near a galaxy", "--by", "Ben")
	has(in(0, "labels"), "c00", "bogus", "Ada", "a ghost")
	has(in(0, "show", "c00"), "watched: odd colour", "Ben: near a galaxy", "last missed")
	if n := rows(in(0, "list", "--state", "watched")); n != 1 {
		t.Errorf("%d watched objects, expected 1", n)
	}
	in(0, "merge", "c00", "c01", "--by", "Ada")
	expect(t, 0, "catalog", "add", table, "--survey", dir)
	if n := rows(in(0, "list")); n != 1 {
		t.Errorf("%d objects after the merge, expected 1", n)
	}
	decision := strings.Fields(strings.Split(in(0, "decisions"), "\n")[1])[0]
	in(0, "withdraw", decision, "--by", "Ada")
	if n := rows(in(0, "list")); n != 2 {
		t.Errorf("%d objects after the withdrawal, expected 2", n)
	}
	if n := rows(in(0, "split", "c00", "c20", "--by", "Ada")); n != 2 {
		t.Errorf("split into %d objects, expected 2", n)
	}
	has(in(0, "check"), "sound")
	copied := filepath.Join(t.TempDir(), "copy.sqlite")
	in(0, "backup", copied)
	want := in(0, "list")
	in(1, "restore", copied)
	for _, end := range []string{"", "-wal", "-shm"} {
		os.Remove(filepath.Join(dir, "catalog.sqlite"+end))
	}
	in(1, "list")
	in(0, "restore", copied)
	if got := in(0, "list"); got != want {
		t.Errorf("restored\n%s\nexpected\n%s", got, want)
	}
	has(in(0, "labels"), "a ghost")
}

func TestCatalogOnServer(t *testing.T) {
	dir, _ := newCatalogue(t)
	config := filepath.Join(dir, survey.ConfigName)
	data, err := os.ReadFile(config)
	if err != nil {
		t.Fatal(err)
	}
	text := strings.Replace(string(data), `"catalog.sqlite"`, `"postgres://ada:hidden@/none?host=/nowhere/at/all&connect_timeout=1"`, 1)
	if text == string(data) {
		t.Fatal("survey.toml has no store")
	}
	if err := os.WriteFile(config, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	_, stderr := expect(t, 1, "catalog", "list", "--survey", dir)
	if !strings.Contains(stderr, "does not answer") || strings.Contains(stderr, "hidden") {
		t.Errorf("a server that is not there: %s", stderr)
	}
}
