package load

import (
	"os"
	"path/filepath"
	"reflect"
	"testing"

	"nightsift/internal/fits"
)

// TestHeadersAreRemembered: the list of a mosaic and the description of each
// chip come from one pass, until the file is another one.
func TestHeadersAreRemembered(t *testing.T) {
	chip := func(name string, gain float64) *fits.ImageHDU {
		return &fits.ImageHDU{Name: name, Header: header("GAIN", gain), Width: 40, Height: 30, Float: noisy(1200, 1)}
	}
	path := write(t, "mosaic.fits.gz", header("EXPTIME", 30.0, "GAIN", 1.0), noisy(1200, 2), chip("A", 2), chip("B", 3))
	gains := func() (out []float64) {
		t.Helper()
		for _, selector := range []string{"", "[0]", "[A]", "[B]"} {
			d, err := Describe(path+selector, DefaultKeywords())
			if err != nil {
				t.Fatal(err)
			}
			if d.Meta.Exposure != 30 || d.Width != 40 {
				t.Errorf("%s: %+v", selector, d)
			}
			out = append(out, d.Meta.Gain)
		}
		return out
	}
	names, err := List(path)
	if err != nil || !reflect.DeepEqual(names, []string{"0", "A", "B"}) {
		t.Fatalf("%q, %v", names, err)
	}
	before := recent.file.HDUs()
	if g := gains(); !reflect.DeepEqual(g, []float64{1, 1, 2, 3}) {
		t.Errorf("gains %v", g)
	}
	if after := recent.file.HDUs(); &before[0] != &after[0] {
		t.Error("the headers were read more than once")
	}
	if _, err := Describe(path+"[C]", DefaultKeywords()); err == nil {
		t.Error("an extension that is not there was described")
	}
	other := write(t, "other.fits.gz", header("EXPTIME", 30.0, "GAIN", 5.0), noisy(1200, 2), chip("A", 6), chip("B", 7))
	if err := os.Rename(other, path); err != nil {
		t.Fatal(err)
	}
	if g := gains(); !reflect.DeepEqual(g, []float64{5, 5, 6, 7}) {
		t.Errorf("gains of the new file %v", g)
	}
	if _, err := Describe(filepath.Join(t.TempDir(), "none.fits"), DefaultKeywords()); err == nil {
		t.Error("a missing file was described")
	}
}
