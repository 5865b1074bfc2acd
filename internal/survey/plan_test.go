package survey

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/frame"
)

// header makes a survey of frames that hold nothing but headers to plan by.
func headerSurvey(t *testing.T, references, frames map[string]map[string]any) *Folder {
	t.Helper()
	dir := t.TempDir()
	if err := Init(dir); err != nil {
		t.Fatal(err)
	}
	pix := make([]float32, 64)
	for path, h := range references {
		plane(t, filepath.Join(dir, "references", path), pix, 8, 8, h)
	}
	for path, h := range frames {
		plane(t, filepath.Join(dir, "incoming", path), pix, 8, 8, h)
	}
	f, err := OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func plan(t *testing.T, f *Folder, s Selection) map[string]*Task {
	t.Helper()
	tasks, err := f.Plan(s)
	if err != nil {
		t.Fatal(err)
	}
	m := map[string]*Task{}
	for _, task := range tasks {
		if m[task.key()] != nil {
			t.Errorf("two tasks are named %s", task.key())
		}
		m[task.key()] = task
	}
	return m
}

func TestReferencesArePickedByFieldAndFilter(t *testing.T) {
	const night = "2027-01-05T21:00:00"
	f := headerSurvey(t, map[string]map[string]any{
		"ar.fits": {"OBJECT": "MR 101", "FILTER": "r"},
		"ag.fits": {"OBJECT": "MR 101", "FILTER": "g"},
		"br.fits": {"OBJECT": "MR 102", "FILTER": "r"},
	}, map[string]map[string]any{
		"1.fits":     {"OBJECT": "mr  101", "FILTER": "R", "DATE-OBS": night},
		"2.fits":     {"OBJECT": "MR 101", "FILTER": "g", "DATE-OBS": night},
		"3.fits":     {"OBJECT": "MR 102", "FILTER": "g", "DATE-OBS": night},
		"4.fits":     {"OBJECT": "MR 103", "FILTER": "r", "DATE-OBS": night},
		"5.fits":     {"FILTER": "r", "DATE-OBS": night},
		"6.fits":     {"OBJECT": "MR 101", "FILTER": "r"},
		"sub/7.fit":  {"OBJECT": "MR 101", "FILTER": "r", "DATE-OBS": "2027-01-06T02:00:00"},
		"sub/8.fits": {"OBJECT": "MR 101", "FILTER": "r", "DATE-OBS": "2027-01-06T13:00:00"},
		".9.fits":    {"OBJECT": "MR 101", "FILTER": "r", "DATE-OBS": night},
	})
	write(t, filepath.Join(f.Dir, "incoming", "notes.txt"), []byte("not a frame"))
	tasks := plan(t, f, Selection{})
	for key, want := range map[string]string{
		"2027-01-05/1": "ar.fits", "2027-01-05/2": "ag.fits",
		"2027-01-05/3": frame.ProblemNoReference, "2027-01-05/4": frame.ProblemNoReference, "2027-01-05/5": frame.ProblemMissingKeyword,
		"undated/6": "ar.fits", "2027-01-05/7": "ar.fits", "2027-01-06/8": "ar.fits",
	} {
		task := tasks[key]
		if task == nil {
			t.Errorf("%s is not planned", key)
			continue
		}
		got := filepath.Base(task.Reference)
		if task.Problem != nil {
			got = task.Problem.Slug
		}
		if got != want {
			t.Errorf("%s: found %s, expected %s", key, got, want)
		}
		if task.Dir != filepath.Join(f.Dir, "nights", filepath.FromSlash(key)) {
			t.Errorf("%s: its folder is %s", key, task.Dir)
		}
	}
	if len(tasks) != 8 {
		t.Errorf("found %d tasks, expected 8", len(tasks))
	}
	if !strings.Contains(tasks["2027-01-05/3"].Problem.Detail, `"r"`) {
		t.Errorf("the detail does not name the filters there are: %s", tasks["2027-01-05/3"].Problem.Detail)
	}

	if one := plan(t, f, Selection{Night: "2027-01-06"}); len(one) != 1 || one["2027-01-06/8"] == nil {
		t.Errorf("one night: found %d tasks", len(one))
	}
	f.Config.Survey.LongitudeDeg = 170 // noon there is an hour after midnight UTC
	if east := plan(t, f, Selection{Night: "2027-01-06"}); len(east) != 2 {
		t.Errorf("another longitude: found %d tasks of the night, expected 2", len(east))
	}
	f.Config.Survey.LongitudeDeg = 0
	f.Config.Search.AnyFilter = true
	if task := plan(t, f, Selection{})["2027-01-05/3"]; filepath.Base(task.Reference) != "br.fits" {
		t.Errorf("any filter: found reference %q", task.Reference)
	}
}

func TestShardsShareTheFrames(t *testing.T) {
	frames := map[string]map[string]any{}
	for _, name := range strings.Fields("a b c d e f g h i j k l m n o p q r s t") {
		frames[name+".fits"] = map[string]any{"OBJECT": "A", "DATE-OBS": "2027-01-05T21:00:00"}
	}
	f := headerSurvey(t, map[string]map[string]any{"A.fits": {"OBJECT": "A"}}, frames)
	seen := map[string]int{}
	for shard := 1; shard <= 3; shard++ {
		list := plan(t, f, Selection{Shard: shard, Shards: 3})
		if len(list) == 0 || len(list) == len(frames) {
			t.Errorf("shard %d has %d of %d frames", shard, len(list), len(frames))
		}
		for key := range list {
			seen[key]++
		}
	}
	for key, n := range seen {
		if n != 1 {
			t.Errorf("%s is in %d shards", key, n)
		}
	}
	if len(seen) != len(frames) {
		t.Errorf("the shards hold %d frames, expected %d", len(seen), len(frames))
	}
}

func TestEqualStemsGetNamesOfTheirOwn(t *testing.T) {
	h := map[string]any{"OBJECT": "A", "DATE-OBS": "2027-01-05T21:00:00"}
	f := headerSurvey(t, map[string]map[string]any{"A.fits": {"OBJECT": "A"}},
		map[string]map[string]any{"x/a.fits": h, "y/a.fits": h, "z/a.fits": {"OBJECT": "A", "DATE-OBS": "2027-01-09T21:00:00"}})
	tasks := plan(t, f, Selection{})
	if len(tasks) != 3 {
		t.Fatalf("found %d names, expected 3", len(tasks))
	}
	first, other := tasks["2027-01-05/a"], tasks["2027-01-09/a"]
	if first == nil || other == nil || !strings.Contains(first.Path, "/x/") {
		t.Fatalf("the plain name is not that of the first file in each night: %v", tasks)
	}
	// The plain name stays with the file that has results under it, whatever
	// else arrives.
	write(t, filepath.Join(first.Dir, ReceiptName), []byte(`{"frame_file":{"path":"`+filepath.Join(f.Dir, "incoming", "y", "a.fits")+`"},"record":{"frame":"a"}}`))
	if again := plan(t, f, Selection{})["2027-01-05/a"]; !strings.Contains(again.Path, "/y/") {
		t.Errorf("the name went to %s", again.Path)
	}
	if err := os.Remove(filepath.Join(f.Dir, "incoming", "y", "a.fits")); err != nil {
		t.Fatal(err)
	}
	if again := plan(t, f, Selection{})["2027-01-05/a"]; !strings.Contains(again.Path, "/x/") {
		t.Errorf("after its file went away the name is with %s", again.Path)
	}
}

func TestBadReferencesAreNamed(t *testing.T) {
	for name, refs := range map[string]map[string]map[string]any{
		"two of one field": {"one.fits": {"OBJECT": "A", "FILTER": "r"}, "two.fits": {"OBJECT": "a", "FILTER": "r"}},
		"no field":         {"one.fits": {"FILTER": "r"}},
	} {
		f := headerSurvey(t, refs, nil)
		_, err := f.Plan(Selection{})
		var bad *ConfigError
		if !errors.As(err, &bad) || !strings.Contains(err.Error(), "one.fits") {
			t.Errorf("%s: found %v, expected a *ConfigError that names the file", name, err)
		}
	}
}
