package survey

import (
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/realbogus"
)

// The model that survey.toml names is used and part of the digest; one that
// cannot be used is refused before anything is searched.
func TestModelOfTheSurvey(t *testing.T) {
	dir := t.TempDir()
	write := func(name, text string) {
		t.Helper()
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	write(ConfigName, "")
	plain, err := LoadConfig(dir)
	if err != nil {
		t.Fatal(err)
	}
	write(ConfigName, "[search]\nmodel = \"own.json\"\n")
	data, err := realbogus.Prior().Encode()
	if err != nil {
		t.Fatal(err)
	}
	for name, c := range map[string]struct{ text, says string }{
		"truncated": {string(data[:len(data)/2]), "not a real/bogus model"},
		"changed":   {strings.Replace(string(data), `"made": "2026`, `"made": "2027`, 1), "changed or damaged"},
		"other":     {strings.Replace(string(data), `"format": 1`, `"format": 7`, 1), "format 7"},
	} {
		write("own.json", c.text)
		_, err := LoadConfig(dir)
		var wrong *ConfigError
		if !errors.As(err, &wrong) || !strings.Contains(err.Error(), c.says) || !strings.Contains(err.Error(), "search.model") || !strings.Contains(err.Error(), "own.json") {
			t.Errorf("%s model: error %v, expected a mistake in the configuration that says %q", name, err, c.says)
		}
	}
	if err := os.Remove(filepath.Join(dir, "own.json")); err != nil {
		t.Fatal(err)
	}
	if _, err := LoadConfig(dir); err == nil || !strings.Contains(err.Error(), "own.json") {
		t.Errorf("no model file: error %v", err)
	}
	write("own.json", string(data))
	own, err := LoadConfig(dir)
	if err != nil {
		t.Fatal(err)
	}
	if own.Digest() == plain.Digest() {
		t.Error("the digest of the configuration does not show the model")
	}
	if _, _, d := own.StageConfigs(1); d.Model == nil || d.Model.Kind != realbogus.KindPrior {
		t.Errorf("the search uses the model %+v", d.Model)
	}
	// Where it lies does not matter.
	write("moved.json", string(data))
	write(ConfigName, "[search]\nmodel = \"moved.json\"\n")
	if moved, err := LoadConfig(dir); err != nil || moved.Digest() != own.Digest() {
		t.Errorf("a model of another name changes the digest, or %v", err)
	}
}
