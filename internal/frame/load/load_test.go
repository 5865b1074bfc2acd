package load

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/outside"
)

func noisy(n int, seed uint64) []float32 {
	rng := rand.New(rand.NewPCG(seed, 3))
	pix := make([]float32, n)
	for i := range pix {
		pix[i] = float32(100 + 5*rng.NormFloat64())
	}
	return pix
}

func header(pairs ...any) *fits.Header {
	h := &fits.Header{}
	for i := 0; i < len(pairs); i += 2 {
		h.Set(pairs[i].(string), pairs[i+1], "")
	}
	return h
}

// write writes a primary image of 40 × 30 pixels.
func write(t *testing.T, name string, h *fits.Header, pix []float32, more ...fits.HDUWriter) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := fits.WritePrimary(path, &fits.ImageHDU{Header: h, Width: 40, Height: 30, Float: pix}, more...); err != nil {
		t.Fatal(err)
	}
	return path
}

func load(t *testing.T, path string, kw Keywords) *frame.Frame {
	t.Helper()
	f, err := Frame(path, kw)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func TestMeta(t *testing.T) {
	nan := math.NaN()
	type meta struct {
		gain, readNoise, saturation, exposure, mjd, zeroPoint float64
		filter, field                                         string
		origin                                                map[string]string
	}
	mid := 60310 + 60.0/86400
	for name, c := range map[string]struct {
		h     *fits.Header
		fixed map[string]any
		want  meta
	}{
		"nothing": {header(), nil, meta{nan, nan, nan, nan, nan, nan, "", "", map[string]string{}}},
		"usual": {header("GAIN", 1.5, "RDNOISE", 7, "SATURATE", 50000.0, "EXPTIME", 120, "DATE-OBS", "2024-01-01T00:00:00", "FILTER", "r ", "OBJECT", "Field 7", "MAGZP", 27.5), nil,
			meta{1.5, 7, 50000, 120, mid, 27.5, "r", "Field 7", map[string]string{"gain": "GAIN", "read_noise": "RDNOISE", "saturation": "SATURATE", "exposure": "EXPTIME",
				"mid_mjd": "DATE-OBS", "filter": "FILTER", "field": "OBJECT", "zero_point": "MAGZP"}}},
		"camera's setting": {header("GAIN", 120, "EGAIN", 0.8), nil, meta{0.8, nan, nan, nan, nan, nan, "", "", map[string]string{"gain": "EGAIN"}}},
		"senseless":        {header("GAIN", -1, "RON", -3, "RDNOISE", "unknown", "SATURATE", 0, "EXPTIME", "120.0"), nil, meta{nan, nan, nan, 120, nan, nan, "", "", map[string]string{"exposure": "EXPTIME"}}},
		"fixed": {header("GAIN", 1.5, "FILTER", "r", "DATE-OBS", "2024-01-01"), map[string]any{"gain": 2.5, "filter": "g", "exposure": int64(30), "mid_mjd": 60000.5},
			meta{2.5, nan, nan, 30, 60000.5, nan, "g", "", map[string]string{"gain": "configuration", "filter": "configuration", "exposure": "configuration", "mid_mjd": "configuration"}}},
		"middle given":   {header("DATE-OBS", "2024-01-01T00:00:00", "DATE-AVG", "2024-01-01T00:01:00", "EXPTIME", 999), nil, meta{nan, nan, nan, 999, mid, nan, "", "", map[string]string{"exposure": "EXPTIME", "mid_mjd": "DATE-AVG"}}},
		"end":            {header("DATE-END", "2024-01-01T00:02:00", "EXPTIME", 120), nil, meta{nan, nan, nan, 120, mid, nan, "", "", map[string]string{"exposure": "EXPTIME", "mid_mjd": "DATE-END"}}},
		"MJD":            {header("MJD-OBS", 60310.0, "EXPOSURE", 120), nil, meta{nan, nan, nan, 120, mid, nan, "", "", map[string]string{"exposure": "EXPOSURE", "mid_mjd": "MJD-OBS"}}},
		"JD":             {header("JD", 2460310.5, "EXPTIME", 120), nil, meta{nan, nan, nan, 120, mid, nan, "", "", map[string]string{"exposure": "EXPTIME", "mid_mjd": "JD"}}},
		"two cards":      {header("DATE-OBS", "2024-01-01", "UT", "00:00:00.0", "EXPTIME", 120), nil, meta{nan, nan, nan, 120, mid, nan, "", "", map[string]string{"exposure": "EXPTIME", "mid_mjd": "DATE-OBS and UT"}}},
		"day only":       {header("DATE-OBS", "2024-01-01"), nil, meta{nan, nan, nan, nan, 60310, nan, "", "", map[string]string{"mid_mjd": "DATE-OBS (no time of day) (exposure unknown: not the middle)"}}},
		"broken date":    {header("DATE-OBS", "yesterday", "MJD-OBS", 1.0), nil, meta{nan, nan, nan, nan, nan, nan, "", "", map[string]string{}}},
		"filter wheel":   {header("FILTER1", "Clear", "FILTER2", "V"), nil, meta{nan, nan, nan, nan, nan, nan, "V", "", map[string]string{"filter": "FILTER2"}}},
		"no filter":      {header("FILTER", "", "FILTER1", "Clear", "FILTER2", "open"), nil, meta{nan, nan, nan, nan, nan, nan, "Clear", "", map[string]string{"filter": "FILTER1"}}},
		"numbered field": {header("OBJECT", 17, "FILTER", 3), nil, meta{nan, nan, nan, nan, nan, nan, "3", "17", map[string]string{"filter": "FILTER", "field": "OBJECT"}}},
	} {
		t.Run(name, func(t *testing.T) {
			kw := DefaultKeywords()
			kw.Fixed = c.fixed
			m := load(t, write(t, "a.fits", c.h, noisy(1200, 1)), kw).Meta
			got := meta{m.Gain, m.ReadNoise, m.Saturation, m.Exposure, m.MidMJD, m.ZeroPoint, m.Filter, m.Field, m.Origin}
			close := func(a, b float64) bool { return math.Abs(a-b) < 1e-9 || a != a && b != b }
			w := c.want
			if !close(got.gain, w.gain) || !close(got.readNoise, w.readNoise) || !close(got.saturation, w.saturation) || !close(got.exposure, w.exposure) ||
				!close(got.mjd, w.mjd) || !close(got.zeroPoint, w.zeroPoint) || got.filter != w.filter || got.field != w.field || !reflect.DeepEqual(got.origin, w.origin) {
				t.Errorf("got  %+v\nwant %+v", got, w)
			}
		})
	}
}

func TestFixedValuesAreChecked(t *testing.T) {
	path := write(t, "a.fits", nil, noisy(1200, 1))
	for _, fixed := range []map[string]any{{"gian": 1.0}, {"gain": "high"}, {"gain": -1.0}, {"filter": 3}, {"exposure": math.NaN()}} {
		kw := DefaultKeywords()
		kw.Fixed = fixed
		_, err := Frame(path, kw)
		var problem *frame.Problem
		if err == nil || errors.As(err, &problem) {
			t.Errorf("%v: %v, want an error that is not the frame's fault", fixed, err)
		}
	}
}

// TestTimeSystems compares with astropy's Time, which uses ERFA.
// Days with a leap second are left out: ERFA stretches their MJD.
func TestTimeSystems(t *testing.T) {
	out := outside.Python(t, `
import json
from astropy.time import Time
r = []
for iso in ["1985-03-01T12:00:00", "1999-06-29T01:02:03", "2005-12-29T06:00:00", "2006-01-01T06:00:00", "2016-12-30T23:00:00.5", "2017-01-01T12:00:00", "2031-07-04T05:06:07.25"]:
    for scale in ["utc", "tai", "tt", "tdb"]:
        r.append([iso, scale.upper(), float(Time(iso, scale=scale).utc.mjd)])
print(json.dumps(r))
`)
	var cases [][]any
	if err := json.Unmarshal(out, &cases); err != nil {
		t.Fatal(err)
	}
	for _, c := range cases {
		h := header("DATE-OBS", c[0], "TIMESYS", c[1], "EXPTIME", 0)
		f := load(t, write(t, "a.fits", h, noisy(1200, 1)), DefaultKeywords())
		if d := (f.Meta.MidMJD - c[2].(float64)) * 86400; math.Abs(d) > 0.001 {
			t.Errorf("%v: differs by %.4f s", c, d)
		}
	}
}

func TestPixels(t *testing.T) {
	pix := noisy(1200, 2)
	want := append([]float32(nil), pix...)
	inf := float32(math.Inf(1))
	pix[3], pix[50], pix[700] = nan32, inf, -inf
	pix[801], pix[802] = 60000, 50000
	path := write(t, "sky.fits.gz", header("SATURATE", 50000.0, "CTYPE1", "RA---TAN", "CTYPE2", "DEC--TAN", "CRVAL1", 10.0, "CRVAL2", -5.0,
		"CRPIX1", 20.0, "CRPIX2", 15.0, "CD1_1", -1e-4, "CD1_2", 0.0, "CD2_1", 0.0, "CD2_2", 1e-4), pix)
	f := load(t, path, DefaultKeywords())
	for p := range want {
		var flag frame.Flag
		switch p {
		case 3, 50, 700:
			flag, want[p] = frame.NoData, nan32
		case 801, 802:
			flag, want[p] = frame.Saturated, pix[p]
		}
		if f.Flags.Bits[p] != flag {
			t.Errorf("pixel %d has flags %b, want %b", p, f.Flags.Bits[p], flag)
		}
		if got := f.Image.Pix[p]; got != want[p] && !(got != got && want[p] != want[p]) {
			t.Errorf("pixel %d = %g, want %g", p, got, want[p])
		}
	}
	raw, _ := os.ReadFile(path)
	sum := sha256.Sum256(raw)
	if f.Checksum != hex.EncodeToString(sum[:]) || f.Name != "sky" || f.Path != path || f.Variance != nil {
		t.Errorf("checksum %s, name %q, path %q, variance %v", f.Checksum, f.Name, f.Path, f.Variance)
	}
	if f.WCS == nil {
		t.Fatal("no WCS")
	}
	ra, dec, err := f.WCS.PixelToSky(20, 15)
	if err != nil || math.Abs(ra-10) > 1e-9 || math.Abs(dec+5) > 1e-9 {
		t.Errorf("centre at %v %v (%v)", ra, dec, err)
	}
}

func TestBrokenWCSIsNoProblem(t *testing.T) {
	f := load(t, write(t, "a.fits", header("CTYPE1", "RA---TAN", "CTYPE2", "DEC--TAN", "CRVAL1", 10.0, "CRVAL2", 5.0, "CRPIX1", 1.0, "CRPIX2", 1.0,
		"CD1_1", 0.0, "CD1_2", 0.0, "CD2_1", 0.0, "CD2_2", 0.0), noisy(1200, 1)), DefaultKeywords())
	if f.WCS != nil || !strings.HasPrefix(f.Meta.Origin["wcs"], "ignored: ") {
		t.Errorf("WCS %v, origin %q", f.WCS, f.Meta.Origin["wcs"])
	}
}

func TestIntegerSaturation(t *testing.T) {
	bits := make([]uint16, 1200)
	for i := range bits {
		bits[i] = uint16(1000 + i%7)
	}
	bits[605], bits[606] = 65535, 65534
	save := func(h *fits.Header) string {
		path := filepath.Join(t.TempDir(), "a.fits")
		if err := fits.WritePrimary(path, &fits.ImageHDU{Header: h, Width: 40, Height: 30, Bits: bits}); err != nil {
			t.Fatal(err)
		}
		return path
	}
	for _, c := range []struct {
		h      *fits.Header
		level  float64
		origin string
		flags  [2]frame.Flag
	}{
		{nil, 65535, "data type", [2]frame.Flag{frame.Saturated, 0}},
		{header("SATURATE", 65534), 65534, "SATURATE", [2]frame.Flag{frame.Saturated, frame.Saturated}},
		{header("SATURATE", 100000), 65535, "data type", [2]frame.Flag{frame.Saturated, 0}},
	} {
		f := load(t, save(c.h), DefaultKeywords())
		if f.Meta.Saturation != c.level || f.Meta.Origin["saturation"] != c.origin || f.Flags.Bits[605] != c.flags[0] || f.Flags.Bits[606] != c.flags[1] {
			t.Errorf("level %v from %q, flags %b %b; want %+v", f.Meta.Saturation, f.Meta.Origin["saturation"], f.Flags.Bits[605], f.Flags.Bits[606], c)
		}
	}
	bits[605] = 65534 // nothing at the end of the type: nothing is known
	f := load(t, save(nil), DefaultKeywords())
	if !math.IsNaN(f.Meta.Saturation) || f.Flags.Bits[605] != 0 {
		t.Errorf("level %v, flags %b", f.Meta.Saturation, f.Flags.Bits[605])
	}
}

// TestBleed draws a round core, one with a trail along a column, one along a
// row that reaches the edge, a saturated bad column and a close pair.
func TestBleed(t *testing.T) {
	m := frame.NewMask(120, 100)
	set := func(i, j int) { m.Bits[j*m.Width+i] |= frame.Saturated }
	disc := func(ci, cj, r int) {
		for j := cj - r; j <= cj+r; j++ {
			for i := ci - r; i <= ci+r; i++ {
				if (i-ci)*(i-ci)+(j-cj)*(j-cj) <= r*r+r/2 {
					set(i, j)
				}
			}
		}
	}
	disc(20, 20, 4) // round
	disc(50, 40, 3) // trail along column 50, rows 15 to 70
	for j := 15; j <= 70; j++ {
		set(50, j)
	}
	disc(110, 85, 3) // trail along row 85 to the edge
	for i := 80; i < 120; i++ {
		set(i, 85)
	}
	for j := 0; j < 100; j++ {
		set(70, j) // bad column
	}
	disc(20, 70, 4)
	disc(20, 78, 4) // pair
	flagBleed(m)
	bleed := func(i, j int) bool { return m.Bits[j*m.Width+i]&frame.Bleed != 0 }
	for _, c := range []struct {
		what string
		i, j int
		want bool
	}{
		{"round core", 20, 20, false}, {"pair", 20, 74, false}, {"core beside the trail", 52, 40, false},
		{"trail", 50, 15, true}, {"trail", 50, 70, true}, {"beyond its end", 50, 14, true}, {"beyond its end", 50, 71, true}, {"far beyond", 50, 5, false}, {"beside", 51, 60, false},
		{"row trail", 80, 85, true}, {"beyond its end", 79, 85, true}, {"at the edge", 119, 85, true}, {"beside", 90, 84, false},
		{"bad column", 70, 0, true}, {"bad column", 70, 99, true},
	} {
		if bleed(c.i, c.j) != c.want {
			t.Errorf("%s: bleed at (%d,%d) = %v, want %v", c.what, c.i, c.j, !c.want, c.want)
		}
	}
}

func TestBleedWholeFrame(t *testing.T) {
	m := frame.NewMask(300, 200)
	for p := range m.Bits {
		m.Bits[p] = frame.Saturated
	}
	flagBleed(m) // must end, and quickly
	if m.Bits[0]&frame.Saturated == 0 {
		t.Error("flags lost")
	}
}

func TestProblems(t *testing.T) {
	dir := t.TempDir()
	put := func(name string, content []byte) string {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, content, 0o644); err != nil {
			t.Fatal(err)
		}
		return path
	}
	good, _ := os.ReadFile(write(t, "g.fits", nil, noisy(1200, 1)))
	blank := make([]float32, 1200)
	for i := range blank {
		blank[i] = nan32
	}
	cube := filepath.Join(dir, "cube.fits")
	if err := fits.Write(cube, nil, &fits.ImageHDU{Name: "CUBE", Width: 2, Height: 2, Depth: 3, Float: make([]float32, 12)},
		&fits.Table{Name: "T", Columns: []fits.Column{{Name: "a", Data: []float64{1}}}}); err != nil {
		t.Fatal(err)
	}
	odd := write(t, "odd.fits", nil, noisy(1200, 1), &fits.ImageHDU{Name: "VARIANCE", Width: 3, Height: 3, Float: make([]float32, 9)})
	for _, c := range []struct{ what, path, slug, detail string }{
		{"absent", filepath.Join(dir, "absent.fits"), frame.ProblemUnreadable, "check the name"},
		{"folder", dir, frame.ProblemUnreadable, "no regular file"},
		{"empty", put("empty.fits", nil), frame.ProblemUnreadable, "is empty"},
		{"text", put("text.fits", []byte("not an image")), frame.ProblemUnreadable, "is not FITS"},
		{"truncated", put("cut.fits", good[:4000]), frame.ProblemUnreadable, "truncated"},
		{"extension absent", write(t, "a.fits", nil, noisy(1200, 1)) + "[SCI]", frame.ProblemUnreadable, "no HDU is named [SCI]: the file has [0]; check the name in brackets"},
		{"cube", cube, frame.ProblemNotAnImage, "cube of axes [2 2 3]"},
		{"cube selected", cube + "[CUBE]", frame.ProblemNotAnImage, "cube"},
		{"table selected", cube + "[T]", frame.ProblemNotAnImage, "binary table"},
		{"all NaN", write(t, "nan.fits", nil, blank), frame.ProblemNoData, "NaN"},
		{"constant", write(t, "zero.fits", nil, make([]float32, 1200)), frame.ProblemNoData, "same value 0"},
		{"variance of another size", odd, frame.ProblemUnreadable, "3×3"},
	} {
		_, err := Frame(c.path, DefaultKeywords())
		var problem *frame.Problem
		if !errors.As(err, &problem) || problem.Slug != c.slug || !strings.Contains(problem.Detail, c.detail) {
			t.Errorf("%s: %v, want %s: …%s…", c.what, err, c.slug, c.detail)
		}
	}
	for _, path := range []string{cube, filepath.Join(dir, "text.fits")} {
		var problem *frame.Problem
		if list, err := List(path); !errors.As(err, &problem) {
			t.Errorf("List(%s) = %v, %v", path, list, err)
		}
	}
}

func TestMosaicAndCompanions(t *testing.T) {
	path := filepath.Join(t.TempDir(), "night 1.mosaic.fits")
	variance, mask := make([]float32, 1200), make([]uint16, 1200)
	for p := range variance {
		variance[p] = 25
	}
	variance[7], variance[8], mask[9], mask[10] = 0, nan32, 4, 1
	image := func(name string, seed uint64, gain float64) *fits.ImageHDU {
		return &fits.ImageHDU{Name: name, Header: header("GAIN", gain), Width: 40, Height: 30, Float: noisy(1200, seed)}
	}
	if err := fits.Write(path, header("EXPTIME", 60, "FILTER", "i", "GAIN", 9.0), image("CCD1", 1, 1.5), image("CCD2", 2, 1.6), image("", 3, 1.7),
		&fits.ImageHDU{Name: "CCD2_VAR", Width: 40, Height: 30, Float: variance},
		&fits.ImageHDU{Name: "CCD2_BAD", Width: 40, Height: 30, Bits: mask}); err != nil {
		t.Fatal(err)
	}
	kw := DefaultKeywords()
	kw.Variance, kw.Mask = "{hdu}_VAR", "{hdu}_bad"
	list, err := kw.List(path)
	if err != nil || !reflect.DeepEqual(list, []string{"CCD1", "CCD2", "3"}) {
		t.Errorf("List = %q, %v", list, err)
	}
	first := load(t, path, kw)
	if first.Name != "night-1.mosaic" || first.Meta.Gain != 1.5 || first.Meta.Exposure != 60 || first.Meta.Filter != "i" || first.Variance != nil {
		t.Errorf("first image: %q %+v", first.Name, first.Meta)
	}
	third := load(t, path+"[3]", kw)
	if third.Name != "night-1.mosaic_3" || third.Meta.Gain != 1.7 {
		t.Errorf("third image: %q %+v", third.Name, third.Meta)
	}
	for _, bits := range []uint64{0, 4, 3} {
		kw.MaskBits = bits
		f := load(t, path+"[ccd2]", kw)
		if f.Name != "night-1.mosaic_CCD2" || f.Meta.Gain != 1.6 || f.Variance == nil || f.Variance.Pix[0] != 25 || f.Meta.Origin["variance"] != "CCD2_VAR" {
			t.Fatalf("second image: %q %+v", f.Name, f.Meta)
		}
		want := map[int]frame.Flag{7: frame.NoData, 8: frame.NoData}
		if bits != 3 {
			want[9] = frame.UserMasked
		}
		if bits != 4 {
			want[10] = frame.UserMasked
		}
		for p, flag := range f.Flags.Bits {
			if flag != want[p] {
				t.Errorf("mask bits %d: pixel %d has flags %b, want %b", bits, p, flag, want[p])
			}
		}
	}
}

func TestStem(t *testing.T) {
	for path, want := range map[string]string{
		"/a/b.fits": "b", "b.FIT": "b", "b.fts.gz": "b", "b.fits.fz": "b", "x.y.fits[SCI]": "x.y", "b": "b", ".fits": ".fits", "a b,c.fits": "a-b-c", "..": "frame..", "b.fits.gz[2]": "b",
	} {
		if got := Stem(path); got != want {
			t.Errorf("Stem(%q) = %q, want %q", path, got, want)
		}
	}
}

func BenchmarkFrame(b *testing.B) {
	path := filepath.Join(b.TempDir(), "a.fits")
	if err := fits.WritePrimary(path, &fits.ImageHDU{Header: header("SATURATE", 115), Width: 4096, Height: 4096, Float: noisy(4096*4096, 1)}); err != nil {
		b.Fatal(err)
	}
	b.SetBytes(4096 * 4096 * 4)
	for b.Loop() {
		if _, err := Frame(path, DefaultKeywords()); err != nil {
			b.Fatal(err)
		}
	}
}
