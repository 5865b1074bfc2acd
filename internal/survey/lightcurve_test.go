package survey

import (
	"context"
	"errors"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/internal/lightcurve"
	"nightsift/internal/simulate"
)

// A place is measured on every frame of its field; the other field's frames and
// one without a difference say why they are not.
func TestLightCurveOfASurvey(t *testing.T) {
	f := newSurvey(t, 2)
	ctx := context.Background()
	if _, err := f.Run(ctx, Selection{}, Options{Version: "test"}); err != nil {
		t.Fatal(err)
	}
	p := scene(t, 0)
	k := slices.IndexFunc(p.Truth.Sources, func(s simulate.Source) bool {
		return s.Frame == p.New[0].Name && s.Covered && s.SN > 15 && s.SN < 200 && s.Trail < 0.1 && s.Flux > 0
	})
	if k < 0 {
		t.Fatal("the scene has no clear source")
	}
	s := p.Truth.Sources[k]
	cfg := lightcurve.DefaultConfig()
	c, err := f.LightCurve(ctx, Place{RA: s.RA, Dec: s.Dec}, cfg, 2)
	if err != nil {
		t.Fatal(err)
	}
	count := map[lightcurve.Status]int{}
	for _, q := range c.Points {
		count[q.Status]++
		if strings.HasPrefix(q.Frame, "a-") {
			if math.Abs(q.Counts-s.Flux) > 5*q.CountsErr || !(q.Counts > 10*q.CountsErr) || q.Night == "" || q.Filter == "" {
				t.Errorf("%+v; want %.0f counts", q, s.Flux)
			}
		}
	}
	if len(c.Points) != 4 || count[lightcurve.Measured] != 4 {
		t.Errorf("states %v, want 4 measured: both fields show the place", count)
	}
	away, err := f.LightCurve(ctx, Place{RA: s.RA, Dec: -s.Dec}, cfg, 2)
	if err != nil {
		t.Fatal(err)
	}
	for _, q := range away.Points {
		if q.Status != lightcurve.Outside || q.Reason == "" || q.MidMJD != q.MidMJD {
			t.Errorf("%+v: want it outside, with a reason and a time", q)
		}
	}
	again, err := f.LightCurve(ctx, Place{RA: s.RA, Dec: s.Dec}, cfg, 1)
	if err != nil {
		t.Fatal(err)
	}
	one, two := filepath.Join(t.TempDir(), "a.csv"), filepath.Join(t.TempDir(), "b.csv")
	if err := errors.Join(catalog.WriteCSV(one, c.Sheet()), catalog.WriteCSV(two, again.Sheet())); err != nil {
		t.Fatal(err)
	}
	if read(t, one) != read(t, two) {
		t.Error("two calls give different tables")
	}
	gone := 0
	f.eachResult(func(p place, r *Receipt) {
		if gone == 0 {
			gone++
			os.Remove(filepath.Join(p.dir, DifferenceName))
		} else if gone == 1 {
			gone++
			os.WriteFile(filepath.Join(p.dir, DifferenceName), []byte("SIMPLE  ="), 0o644)
		}
	})
	c, err = f.LightCurve(ctx, Place{RA: s.RA, Dec: s.Dec}, cfg, 2)
	if err != nil {
		t.Fatal(err)
	}
	missing := 0
	for _, q := range c.Points {
		if q.Status == lightcurve.Missing && q.Reason != "" && q.MidMJD == q.MidMJD {
			missing++
		}
	}
	if missing != 2 {
		t.Errorf("%d frames without a usable difference, want 2: %+v", missing, c.Points)
	}
}

func TestFindPlace(t *testing.T) {
	f := newSurvey(t, 0)
	ctx := context.Background()
	for text, want := range map[string][2]float64{"150.5,-2.25": {150.5, -2.25}, "10:02:00, -02:15:00": {150.5, -2.25}, "0,90": {0, 90}} {
		p, err := f.FindPlace(ctx, text)
		if err != nil || math.Abs(p.RA-want[0]) > 1e-9 || math.Abs(p.Dec-want[1]) > 1e-9 {
			t.Errorf("%q: %+v, %v", text, p, err)
		}
	}
	var wrong *ConfigError
	for _, text := range []string{"150.5,-95", "a,b", "1,2,3", ","} {
		if _, err := f.FindPlace(ctx, text); !errors.As(err, &wrong) {
			t.Errorf("%q: %v", text, err)
		}
	}
	s, err := f.OpenStore(ctx)
	if err != nil {
		t.Fatal(err)
	}
	s.Close()
	if _, err := f.FindPlace(ctx, "NS J000000.0+000000"); err == nil {
		t.Error("an unknown object was found")
	}
}
