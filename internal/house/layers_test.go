package house

import (
	"bytes"
	"encoding/json"
	"errors"
	"io"
	"io/fs"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

const module = "nightsift"

// pkg is what `go list -json` tells of a package.
type pkg struct {
	ImportPath string
	Imports    []string // direct, without those of tests
	Deps       []string // direct and indirect, without those of tests
}

// packages lists the packages of this module by path without the module's name.
func packages(t *testing.T) map[string]pkg {
	t.Helper()
	// Looking at every folder makes go test forget a cached result when a file
	// changes; what a started program reads does not count for it.
	err := filepath.WalkDir("../..", func(path string, d fs.DirEntry, err error) error {
		if err == nil && d.IsDir() && d.Name() == ".git" {
			return fs.SkipDir
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command("go", "list", "-json=ImportPath,Imports,Deps", "./...")
	cmd.Dir = "../.."
	var stderr bytes.Buffer
	cmd.Stderr = &stderr
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("go list: %v\n%s", err, stderr.String())
	}
	all := map[string]pkg{}
	d := json.NewDecoder(bytes.NewReader(out))
	for {
		var p pkg
		if err := d.Decode(&p); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			t.Fatal(err)
		}
		all[strings.TrimPrefix(p.ImportPath, module+"/")] = p
	}
	if len(all) < 20 {
		t.Fatalf("go list shows %d packages: this test looks in the wrong place", len(all))
	}
	return all
}

// under reports whether path is one of the roots or below one.
func under(path string, roots ...string) bool {
	for _, r := range roots {
		if path == r || strings.HasPrefix(path, r+"/") {
			return true
		}
	}
	return false
}

// ours gives the paths of this module in a list of imports.
func ours(imports []string) []string {
	var own []string
	for _, p := range imports {
		if path, ok := strings.CutPrefix(p, module+"/"); ok {
			own = append(own, path)
		}
	}
	return own
}

// stages in the order of the data. Each may import the one before it.
var stages = []string{"align", "subtract", "detect", "catalog"}

// above are the packages that use stages. Everything else is below them.
var above = []string{
	"cmd", "internal/demo", "internal/efficiency", "internal/lightcurve", "internal/efficiency", "internal/realbogus/maketrained", "internal/realbogus/trainset", "internal/realsky",
	"internal/reference", "internal/report", "internal/survey", "internal/trial", "internal/vetting",
}

func TestStagesImportOnlyTheOneBefore(t *testing.T) {
	all := packages(t)
	for i, stage := range stages {
		p, ok := all[stage]
		if !ok {
			t.Fatalf("there is no package %s", stage)
		}
		for _, path := range ours(p.Imports) {
			if slices.Contains(stages, path) && (i == 0 || path != stages[i-1]) {
				t.Errorf("%s imports %s: a stage imports only the one before it", stage, path)
			}
			if under(path, above...) {
				t.Errorf("%s imports %s, which is above the stages", stage, path)
			}
		}
	}
}

func TestToolsKnowNoStage(t *testing.T) {
	for path, p := range packages(t) {
		if slices.Contains(stages, path) || under(path, above...) {
			continue
		}
		for _, d := range ours(p.Deps) {
			if slices.Contains(stages, d) || under(d, above...) {
				t.Errorf("%s depends on %s: it is below the stages (a package above them belongs into the list in this test)", path, d)
			}
		}
	}
}

// An error in the code that is judged must not cancel in the code that judges.
func TestInventedSkySharesNothingWithThePipeline(t *testing.T) {
	all := packages(t)
	p, ok := all["internal/simulate"]
	if !ok {
		t.Fatal("there is no package internal/simulate")
	}
	allowed := []string{"internal/fits", "internal/wholefile"}
	for _, d := range ours(p.Deps) {
		if !slices.Contains(allowed, d) {
			t.Errorf("internal/simulate depends on %s: only files may be shared (%s)", d, strings.Join(allowed, ", "))
		}
	}
}

func TestOutsideDependenciesStayInTheirPlace(t *testing.T) {
	rules := []struct {
		dep string   // path of the package or a parent
		who []string // may import it
		why string
	}{
		{"github.com/spf13", []string{"cmd"}, "only commands know flags"},
		{"github.com/schollz", []string{"cmd"}, "only commands know terminals"},
		{"golang.org/x/term", []string{"cmd"}, "only commands know terminals"},
		{"database/sql", []string{"catalog"}, "only the catalogue speaks SQL"},
		{"modernc.org", []string{"catalog"}, "only the catalogue speaks SQL"},
		{"github.com/pelletier", []string{"internal/survey"}, "only the survey has a configuration file"},
		{"github.com/astrogo", []string{"internal/fits"}, "FITS is read in one place"},
		{module + "/internal/outside", nil, "reference programs are for tests"},
	}
	all := packages(t)
	for _, r := range rules {
		used := false
		for path, p := range all {
			for _, i := range p.Imports {
				if !under(i, r.dep) {
					continue
				}
				used = true
				if !under(path, r.who...) {
					t.Errorf("%s imports %s: %s", path, i, r.why)
				}
			}
		}
		if !used && len(r.who) > 0 {
			t.Errorf("nobody imports %s any more: drop its rule", r.dep)
		}
	}
}

// What computes can be used without a database, a command line or a
// configuration file, also through its dependencies.
func TestNumericPackagesAreFree(t *testing.T) {
	numeric := []string{
		"align", "subtract", "detect", "internal/artefacts", "internal/astro", "internal/fft",
		"internal/frame", "internal/photometry", "internal/psf", "internal/realbogus", "internal/robust", "internal/stars", "internal/wcs",
	}
	banned := []string{"database/sql", "modernc.org", "github.com/spf13", "github.com/schollz", "github.com/pelletier", "net/http"}
	all := packages(t)
	for _, n := range numeric {
		p, ok := all[n]
		if !ok {
			t.Errorf("there is no package %s", n)
			continue
		}
		for _, d := range p.Deps {
			if under(d, banned...) {
				t.Errorf("%s depends on %s", n, d)
			}
		}
	}
}
