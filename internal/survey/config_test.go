package survey

import (
	"errors"
	"reflect"
	"strings"
	"testing"

	"nightsift/configs"
)

func TestShippedConfigurationIsTheDefault(t *testing.T) {
	got, err := ParseConfig("survey.toml", []byte(configs.Survey))
	if err != nil {
		t.Fatal(err)
	}
	want := DefaultConfig()
	// Empty lists and tables stand for absent ones.
	for _, list := range []*[]string{&got.Keywords.Gain, &got.Keywords.ReadNoise, &got.Keywords.Saturation, &got.Keywords.Exposure,
		&got.Keywords.Time, &got.Keywords.Filter, &got.Keywords.Field, &got.Keywords.ZeroPoint,
		&got.Keywords.ZeroPointS, &got.Keywords.Airmass, &got.Keywords.PixelScale, &got.Keywords.RA, &got.Keywords.Dec} {
		if *list == nil {
			t.Error("a list of keywords is missing in the shipped file")
		}
		*list = nil
	}
	if len(got.Fixed) == 0 {
		got.Fixed = nil
	}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("found %+v\nexpected %+v", got, want)
	}
	// Every key of the configuration stands in the file.
	var walk func(v reflect.Type)
	walk = func(v reflect.Type) {
		for i := range v.NumField() {
			f := v.Field(i)
			if !f.IsExported() {
				continue
			}
			key := f.Tag.Get("toml")
			if key == "" {
				t.Errorf("field %s has no key", f.Name)
			}
			if f.Type.Kind() == reflect.Struct {
				if !strings.Contains(configs.Survey, "["+key+"]") {
					t.Errorf("section %s is missing in the shipped file", key)
				}
				walk(f.Type)
			} else if !strings.Contains(configs.Survey, "\n"+key+" =") && key != "fixed" && !strings.Contains(configs.Survey, "[["+key+"]]") {
				t.Errorf("key %s is missing in the shipped file", key)
			}
		}
	}
	walk(reflect.TypeOf(want))
}

func TestConfigurationErrorsNameThePlace(t *testing.T) {
	for _, c := range []struct {
		name, text string
		want       []string
	}{
		{"unknown key", "[search]\nthreshold_sigmas = 5\n", []string{"s.toml", "threshold_sigmas"}},
		{"unknown section", "[seach]\nkeep = \"none\"\n", []string{"s.toml", "seach"}},
		{"syntax", "[search\n", []string{"s.toml:1:"}},
		{"wrong type", "[run]\njobs = \"two\"\n", []string{"s.toml:2:", "two"}},
		{"threshold", "[search]\nthreshold_sigma = 1\n", []string{"search.threshold_sigma = 1", "3 to 100"}},
		{"threshold nan", "[search]\nthreshold_sigma = nan\n", []string{"search.threshold_sigma"}},
		{"rate", "[search]\nreal_sources_per_megapixel = 0\n", []string{"search.real_sources_per_megapixel"}},
		{"keep", "[search]\nkeep = \"all\"\n", []string{"search.keep = all", "none, difference or aligned"}},
		{"jobs", "[run]\njobs = -1\n", []string{"run.jobs = -1"}},
		{"memory", "[run]\nmemory_gib = -1\n", []string{"run.memory_gib"}},
		{"longitude", "[survey]\nlongitude_deg = 400\n", []string{"survey.longitude_deg = 400"}},
		{"folder", "[folders]\nnights = \"\"\n", []string{"folders.nights"}},
		{"fixed", "[fixed]\ngian = 2\n", []string{"s.toml", "gian"}},
	} {
		_, err := ParseConfig("s.toml", []byte(c.text))
		var bad *ConfigError
		if !errors.As(err, &bad) {
			t.Errorf("%s: found %v, expected a *ConfigError", c.name, err)
			continue
		}
		for _, w := range c.want {
			if !strings.Contains(err.Error(), w) {
				t.Errorf("%s: %q is missing in %q", c.name, w, err)
			}
		}
	}
	if _, err := LoadConfig(t.TempDir()); err == nil || !strings.Contains(err.Error(), "nightsift init") {
		t.Errorf("folder without configuration: %v", err)
	}
}

func TestDigestHoldsWhatMatters(t *testing.T) {
	base := DefaultConfig()
	same, other := base, base
	same.Run.Jobs, same.Survey.Name, same.Search.Keep, same.Folders.Nights = 7, "x", KeepNone, "y"
	same.Search.Compress, same.Search.Quantise = "rice", 4
	if base.Digest() != same.Digest() {
		t.Error("settings without effect on the result change the digest")
	}
	for name, change := range map[string]func(*Config){
		"threshold": func(c *Config) { c.Search.ThresholdSigma = 6 },
		"keyword":   func(c *Config) { c.Keywords.Gain = []string{"G"} },
		"fixed":     func(c *Config) { c.Fixed = map[string]any{"gain": 2.0} },
		"longitude": func(c *Config) { c.Survey.LongitudeDeg = 90 },
		"mask":      func(c *Config) { c.Planes.Mask = "MASK" },
	} {
		other = base
		change(&other)
		if base.Digest() == other.Digest() {
			t.Errorf("%s does not change the digest", name)
		}
	}
}

func TestInitKeepsWhatIsThere(t *testing.T) {
	dir := t.TempDir()
	if err := Init(dir); err != nil {
		t.Fatal(err)
	}
	if _, err := OpenFolder(dir); err != nil {
		t.Fatal(err)
	}
	write(t, dir+"/"+ConfigName, []byte("# mine\n"))
	if err := Init(dir); err == nil {
		t.Error("an existing configuration was replaced")
	}
	if got := read(t, dir+"/"+ConfigName); got != "# mine\n" {
		t.Errorf("the configuration is now %q", got)
	}
}
