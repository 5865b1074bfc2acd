package fits

import (
	"bytes"
	"os"
	"path/filepath"
	"reflect"
	"runtime"
	"testing"
)

// TestOpenHeaders: what passes by gives the same HDUs, warnings and errors as
// what is kept, and takes neither memory nor a temporary file.
func TestOpenHeaders(t *testing.T) {
	dir := t.TempDir()
	big := func(name string) []byte {
		head := cards("XTENSION= 'IMAGE'", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 3000", "NAXIS2  = 4000", "PCOUNT  = 0", "GCOUNT  = 1", "EXTNAME = '"+name+"'")
		return append(head, make([]byte, padded(3000*4000*2))...)
	}
	good := bytes.Join([][]byte{image8("OBJECT  = 'x'"), big("C1"), big("C2"), image8()}, nil)
	junk := append(bytes.Clone(good), "rubbish"...)
	broken := zipped(good)
	broken[len(broken)/2] ^= 0x55
	badSum := zipped(good)
	badSum[len(badSum)-7] ^= 1
	files := map[string][]byte{
		"good": zipped(good), "plain": good, "junk": zipped(junk), "unfilled": zipped(good[:len(good)-100]), "short": zipped(good[:len(good)-5000]),
		"noend": zipped(good[:len(image8())+300]), "empty": zipped(nil), "text": zipped([]byte("hello")), "cut": zipped(good)[:2000], "broken": broken, "badsum": badSum,
	}
	for name, content := range files {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, content, 0o644); err != nil {
			t.Fatal(err)
		}
		f, err := OpenHeaders(path)
		want, wantErr := Open(path)
		if (err == nil) != (wantErr == nil) || err != nil && err.Error() != wantErr.Error() {
			t.Errorf("%s: error %v, want %v", name, err, wantErr)
			continue
		}
		if err != nil {
			continue
		}
		if !reflect.DeepEqual(f.HDUs(), want.HDUs()) || !reflect.DeepEqual(f.Warnings, want.Warnings) || len(f.HDUs()) != 3 {
			t.Errorf("%s: %d HDUs %q, want %d %q", name, len(f.HDUs()), f.Warnings, len(want.HDUs()), want.Warnings)
		}
		want.Close()
	}
	t.Setenv("TMPDIR", filepath.Join(dir, "none"))
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	f, err := OpenHeaders(filepath.Join(dir, "good") + "[C2]")
	runtime.ReadMemStats(&after)
	if err != nil || f.Selected != 2 {
		t.Fatal(f, err)
	}
	if n := after.TotalAlloc - before.TotalAlloc; n > 1<<20 {
		t.Errorf("headers of %d inflated bytes took %d bytes of memory", len(good), n)
	}
}
