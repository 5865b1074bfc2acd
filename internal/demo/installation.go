package demo

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"runtime"

	"nightsift/internal/score"
	"nightsift/internal/simulate"
	"nightsift/internal/survey"
)

// CheckInstallation searches a small invented frame in a temporary folder with
// every stage and file format, and returns what it finds out.
func CheckInstallation(ctx context.Context, version string) []survey.Finding {
	place := fmt.Sprintf("nightsift %s, %s/%s", version, runtime.GOOS, runtime.GOARCH)
	found := []survey.Finding{{Place: place, Text: fmt.Sprintf("%d cores, %.1f GiB of memory", runtime.GOMAXPROCS(0), survey.MachineGiB())}}
	fail := func(place string, err error, remedy string) []survey.Finding {
		return append(found, survey.Finding{Wrong: true, Place: place, Text: err.Error(), Remedy: remedy})
	}
	dir, err := os.MkdirTemp("", "nightsift-check-")
	if err != nil {
		return fail("temporary folder", err, "set TMPDIR to a folder that can be written")
	}
	defer os.RemoveAll(dir)
	found = append(found, survey.Finding{Place: "temporary folder", Text: filepath.Dir(dir) + " can be written"})

	p, err := simulate.Scenario("plain", 400, 11)
	if err == nil {
		err = p.Write(dir)
	}
	if err != nil {
		return fail("inventing a frame", err, "")
	}
	var files []string
	for _, e := range p.New {
		files = append(files, filepath.Join(dir, e.Name+".fits"))
	}
	out := filepath.Join(dir, "results")
	_, err = survey.RunLoose(ctx, survey.Loose{Frames: files, Reference: filepath.Join(dir, p.Reference.Name+".fits"), Out: out, Config: survey.DefaultConfig()},
		survey.Options{Version: version})
	if err != nil {
		return fail("searching an invented frame", err, "")
	}
	records, candidates, err := survey.ReadResults(out)
	if err != nil {
		return fail("reading results", err, "")
	}
	for _, r := range records {
		if r.Reason != "" {
			return fail("searching an invented frame", fmt.Errorf("%s, %s: %s", r.Status, r.Reason, r.Detail), "")
		}
	}
	truth := &simulate.Truth{Frames: p.Truth.Frames, Sources: p.Truth.Sources}
	result := score.Compare(truth, scored(candidates), nil, score.DefaultConfig())
	text := fmt.Sprintf("%d of %d clear new sources found, %d false", result.Found.K, result.Found.N, len(result.False))
	return append(found, survey.Finding{Wrong: 2*result.Found.K < result.Found.N, Place: "searching an invented frame", Text: text})
}
