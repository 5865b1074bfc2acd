package survey

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/simulate"
)

// The invented frames that the tests share: two fields, each with a reference
// and a new frame, made once.
const frameSize = 320

var scenes = sync.OnceValues(func() ([]*simulate.Pairs, error) {
	var list []*simulate.Pairs
	for _, seed := range []uint64{3, 4} {
		p, err := simulate.Scenario("plain", frameSize, seed)
		if err != nil {
			return nil, err
		}
		list = append(list, p)
	}
	return list, nil
})

func scene(t testing.TB, k int) *simulate.Pairs {
	t.Helper()
	list, err := scenes()
	if err != nil {
		t.Fatal(err)
	}
	return list[k]
}

// put writes an invented frame with some header values changed; nil removes
// one.
func put(t testing.TB, path string, e *simulate.Exposure, change map[string]any) {
	t.Helper()
	c := *e
	c.Header = nil
	for _, k := range e.Header {
		if v, ok := change[k.Key]; ok {
			if v == nil {
				continue
			}
			k.Value = v
		}
		c.Header = append(c.Header, k)
	}
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := c.Write(path); err != nil {
		t.Fatal(err)
	}
}

// newSurvey makes a survey folder with two fields, A and B, a reference for
// each, and the given number of frames of each, one field after the other,
// over two nights.
func newSurvey(t testing.TB, each int) *Folder {
	t.Helper()
	dir := filepath.Join(t.TempDir(), "survey")
	if err := Init(dir); err != nil {
		t.Fatal(err)
	}
	for k, field := range []string{"A", "B"} {
		p := scene(t, k)
		put(t, filepath.Join(dir, "references", field+".fits"), p.Reference, map[string]any{"OBJECT": field})
		for n := range each {
			put(t, filepath.Join(dir, "incoming", fmt.Sprintf("%s-%d.fits", strings.ToLower(field), n+1)), p.New[0],
				map[string]any{"OBJECT": field, "DATE-OBS": fmt.Sprintf("2027-01-%02dT21:%02d:00", 5+n%2, n)})
		}
	}
	f, err := OpenFolder(dir)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// rawFITS returns a FITS file with the given axes and zeros for data.
func rawFITS(axes ...int) []byte {
	var b strings.Builder
	card := func(s string) { fmt.Fprintf(&b, "%-80s", s) }
	card("SIMPLE  =                    T")
	card("BITPIX  =                  -32")
	card(fmt.Sprintf("NAXIS   = %20d", len(axes)))
	size := 4
	for i, n := range axes {
		card(fmt.Sprintf("NAXIS%d  = %20d", i+1, n))
		size *= n
	}
	card("OBJECT  = 'A       '")
	card("FILTER  = 'r       '")
	card("DATE-OBS= '2027-01-05T22:00:00'")
	card("END")
	for b.Len()%2880 != 0 {
		b.WriteByte(' ')
	}
	data := make([]byte, (size+2879)/2880*2880)
	return append([]byte(b.String()), data...)
}

func write(t testing.TB, path string, data []byte) {
	t.Helper()
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, data, 0o644); err != nil {
		t.Fatal(err)
	}
}

func read(t testing.TB, path string) string {
	t.Helper()
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return string(data)
}

// plane writes a primary image of one field's header.
func plane(t testing.TB, path string, pix []float32, width, height int, header map[string]any) {
	t.Helper()
	h := &fits.Header{}
	for _, key := range []string{"OBJECT", "FILTER", "DATE-OBS"} {
		if v, ok := header[key]; ok {
			h.Set(key, v, "")
		}
	}
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := fits.WritePrimary(path, &fits.ImageHDU{Header: h, Width: width, Height: height, Float: pix}); err != nil {
		t.Fatal(err)
	}
}
