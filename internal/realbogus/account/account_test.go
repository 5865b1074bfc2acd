package account

import (
	"bytes"
	"encoding/xml"
	"fmt"
	"image/png"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/realbogus"
)

func input(t *testing.T) Input {
	t.Helper()
	r := rand.New(rand.NewPCG(1, 2))
	var list []realbogus.Example
	in := Input{Title: "A <survey>", Version: "test", Side: 25}
	for k := range 900 {
		e := realbogus.Example{Real: k%3 == 0, Weight: 1, Group: fmt.Sprint(k % 9), SN: 5 + 40*r.Float64(), Significance: 10, Place: fmt.Sprintf("frame %d (1, 2)", k)}
		e.Features[realbogus.HitMargin] = 0.3 * r.NormFloat64()
		if e.Real {
			e.Features[realbogus.HitMargin] -= 0.6
		}
		e.Features.Clean()
		list = append(list, e)
		stamp := make([]byte, 3*25*25)
		for i := range stamp {
			stamp[i] = byte(r.IntN(256))
		}
		in.Stamps = append(in.Stamps, stamp)
	}
	cfg := realbogus.DefaultTrainConfig()
	cfg.Trees, cfg.Folds, cfg.Made = 10, 3, "2026-01-01"
	var err error
	if in.Model, in.Judged, err = realbogus.TrainJudged(list, cfg); err != nil {
		t.Fatal(err)
	}
	if in.Importance, err = realbogus.Importance(list, cfg); err != nil {
		t.Fatal(err)
	}
	in.InUse = realbogus.Measure(realbogus.Rejudge(realbogus.Prior(), list, cfg))
	return in
}

// The page holds everything and asks for nothing outside; its drawings are XML,
// the sheet is an image, and equal input gives equal bytes.
func TestWrite(t *testing.T) {
	in := input(t)
	if in.Importance[0].Feature != "hit_margin" || in.Importance[0].Loss < 0.05 {
		t.Errorf("the most important feature is %+v", in.Importance[0])
	}
	a, b := t.TempDir(), t.TempDir()
	for _, dir := range []string{a, b} {
		if err := Write(dir, in); err != nil {
			t.Fatal(err)
		}
	}
	page, err := os.ReadFile(filepath.Join(a, PageName))
	if err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"A &lt;survey&gt;", "<svg", "data:image/png", "hit_margin", "worst mistakes"} {
		if !bytes.Contains(page, []byte(want)) {
			t.Errorf("the page has no %q", want)
		}
	}
	for _, no := range []string{"src=\"http", "href=\"http", "@import"} {
		if bytes.Contains(page, []byte(no)) {
			t.Errorf("the page asks for something outside: %q", no)
		}
	}
	names, err := filepath.Glob(filepath.Join(a, "*"))
	if err != nil || len(names) < 6 {
		t.Fatalf("%v, files %v", err, names)
	}
	for _, name := range names {
		one, err := os.ReadFile(name)
		if err != nil {
			t.Fatal(err)
		}
		two, err := os.ReadFile(filepath.Join(b, filepath.Base(name)))
		if err != nil || !bytes.Equal(one, two) {
			t.Errorf("%s differs between two calls, or %v", filepath.Base(name), err)
		}
		switch {
		case strings.HasSuffix(name, ".svg"):
			d := xml.NewDecoder(bytes.NewReader(one))
			for err == nil {
				_, err = d.Token()
			}
			if err != io.EOF {
				t.Errorf("%s: %v", name, err)
			}
		case strings.HasSuffix(name, ".png"):
			if _, err := png.Decode(bytes.NewReader(one)); err != nil {
				t.Errorf("%s: %v", name, err)
			}
		}
	}
	var text bytes.Buffer
	if err := WriteText(&text, in); err != nil || !strings.Contains(text.String(), "held out by frame") {
		t.Errorf("%v, text:\n%s", err, text.String())
	}
}
