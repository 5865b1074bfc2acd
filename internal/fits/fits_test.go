package fits

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"math/bits"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"unsafe"

	"nightsift/internal/outside"
)

func randomFloats(n int, seed uint64) []float32 {
	rng := rand.New(rand.NewPCG(seed, 1))
	pix := make([]float32, n)
	for i := range pix {
		pix[i] = float32(rng.NormFloat64() * 100)
	}
	return pix
}

func nasty(pix []float32) []float32 {
	copy(pix, []float32{nan32(), float32(math.Inf(1)), float32(math.Inf(-1)), 0, float32(math.Copysign(0, -1)),
		math.SmallestNonzeroFloat32, math.MaxFloat32, -math.MaxFloat32})
	return pix
}

func sameBits(a, b float32) bool {
	return math.Float32bits(a) == math.Float32bits(b) || a != a && b != b
}

func checkPix(t *testing.T, what string, got, want []float32) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: %d pixels, want %d", what, len(got), len(want))
	}
	for i := range got {
		if !sameBits(got[i], want[i]) {
			t.Fatalf("%s: element %d is %g, want %g", what, i, got[i], want[i])
		}
	}
}

// verify runs fitsverify, the checker that comes with cfitsio, and wants
// neither warning nor error.
func verify(t *testing.T, path string) {
	t.Helper()
	if full := string(outside.Command(t, "fitsverify", path)); !strings.Contains(full, "found 0 warning(s) and 0 error(s)") {
		t.Fatalf("fitsverify on %s:\n%s", path, full)
	}
}

func exampleHeader() *Header {
	h := &Header{}
	h.Set("OBJECT", "field 'A' of O''Neil", "quotes")
	h.Set("EXPTIME", 120.5, "[s] exposure")
	h.Set("BIG", 1.5e300, "")
	h.Set("TINY", -2.5e-300, "a comment that is so long that it cannot stand in one card and has to be cut somewhere")
	h.Set("COUNT", 42, "a whole number")
	h.Set("ROUND", 1e6, "")
	h.Set("FLAG", true, "logical")
	h.Set("NOVALUE", nil, "nothing known")
	h.Set("EMPTY", "", "")
	h.Set("GAIN", float32(1.7), "shortest decimal")
	h.Set("SOURCE", strings.Repeat("/data/the old night/", 12)+"end", "long string")
	h.Set("QUOTES", strings.Repeat("/data/the ''old' night'/", 12), "read wrongly by astropy 5.2, rightly by cfitsio")
	h.Set("SPACES", strings.Repeat("word      ", 20)+".", "")
	h.Set("AMPER", "ends with &", "")
	h.Set("CPLX", complex(1.5, -2), "")
	h.Set("HIERARCH STATION INSTRUMENT NAME", "wide camera", "long keyword")
	h.Set("STATION INSTRUMENT PATH", strings.Repeat("abc/", 40), "")
	h.AddHistory("made for a test; " + strings.Repeat("long history ", 12))
	h.AddComment("plain words")
	return h
}

func checkHeader(t *testing.T, got, want *Header) {
	t.Helper()
	for _, c := range want.Cards() {
		if c.commentary() {
			continue
		}
		if c.Value == nil {
			if got.Has(c.Key) {
				t.Errorf("%s is there, want it left out", c.Key)
			}
			continue
		}
		g, ok := got.Get(c.Key)
		if !ok || !reflect.DeepEqual(g.Value, c.Value) {
			t.Errorf("%s = %#v, want %#v", c.Key, g.Value, c.Value)
		}
	}
	if w := got.Warnings(); len(w) > 0 {
		t.Errorf("warnings on a header written here: %q", w)
	}
}

func exampleTable(rows int, seed uint64) *Table {
	rng := rand.New(rand.NewPCG(seed, 2))
	null := int64(-1)
	t := &Table{Name: "CANDIDATES", Header: &Header{}}
	t.Header.Set("NIGHT", "2031-02-03", "")
	f64, f32, i64, i32, i16, u8 := make([]float64, rows), make([]float32, rows), make([]int64, rows), make([]int32, rows), make([]int16, rows), make([]uint8, rows)
	b, s, stamp, pair := make([]bool, rows), make([]string, rows), make([][]float32, rows), make([][]int64, rows)
	for i := range rows {
		f64[i], f32[i] = rng.NormFloat64(), float32(rng.NormFloat64())
		i64[i], i32[i], i16[i], u8[i] = int64(rng.Uint64()), int32(rng.Uint32()), int16(rng.Uint32()), uint8(rng.Uint32())
		b[i] = rng.IntN(2) == 1
		s[i] = strings.Repeat("xyz", rng.IntN(6))
		stamp[i] = randomFloats(51*51, seed+uint64(i))
		pair[i] = []int64{int64(i), -int64(i)}
	}
	if rows > 2 {
		f64[1], f32[1], i64[1] = math.NaN(), nan32(), null
		stamp[2] = nil
	}
	t.Columns = []Column{
		{Name: "ra_deg", Unit: "deg", Description: "right ascension, ICRS", Data: f64},
		{Name: "flux", Unit: "count", Description: "a description that is much too long to stand behind the name of the column in one card of eighty bytes", Data: f32},
		{Name: "number", Data: i64, Null: &null},
		{Name: "flags", Data: i32},
		{Name: "small", Data: i16},
		{Name: "byte", Data: u8},
		{Name: "real", Data: b},
		{Name: "name", Data: s},
		{Name: "stamp", Unit: "count", Dim: "(51,51)", Data: stamp},
		{Name: "pair", Dim: "(2)", Data: pair},
	}
	return t
}

func checkTable(t *testing.T, got, want *Table) {
	t.Helper()
	if got.Name != want.Name || got.Rows() != want.Rows() || len(got.Columns) != len(want.Columns) {
		t.Fatalf("table %s of %d rows and %d columns, want %s, %d, %d", got.Name, got.Rows(), len(got.Columns), want.Name, want.Rows(), len(want.Columns))
	}
	for i := range want.Columns {
		g, w := got.Columns[i], want.Columns[i]
		if g.Name != w.Name || g.Unit != w.Unit || g.Description != w.Description || g.Dim != w.Dim {
			t.Errorf("column %d is %q %q %q %q, want %q %q %q %q", i, g.Name, g.Unit, g.Description, g.Dim, w.Name, w.Unit, w.Description, w.Dim)
		}
		if (g.Null == nil) != (w.Null == nil) || g.Null != nil && *g.Null != *w.Null {
			t.Errorf("column %s: null value differs", w.Name)
		}
		switch v := w.Data.(type) {
		case []float32:
			checkPix(t, w.Name, g.Data.([]float32), v)
		case []float64:
			for r, x := range g.Data.([]float64) {
				if math.Float64bits(x) != math.Float64bits(v[r]) && !(x != x && v[r] != v[r]) {
					t.Fatalf("%s row %d = %g, want %g", w.Name, r, x, v[r])
				}
			}
		case [][]float32:
			for r, x := range g.Data.([][]float32) {
				if v[r] == nil {
					v[r] = make([]float32, len(x))
					for k := range v[r] {
						v[r][k] = nan32()
					}
				}
				checkPix(t, fmt.Sprint(w.Name, r), x, v[r])
			}
		default:
			if !reflect.DeepEqual(g.Data, w.Data) {
				t.Errorf("column %s differs: %v, want %v", w.Name, g.Data, w.Data)
			}
		}
	}
}

// writeExample writes one HDU of each kind.
func writeExample(t *testing.T, path string) (img, cube *ImageHDU, flags *ImageHDU, table *Table) {
	t.Helper()
	img = &ImageHDU{Name: "DIFFERENCE", Header: exampleHeader(), Width: 123, Height: 77, Float: nasty(randomFloats(123*77, 1))}
	cube = &ImageHDU{Name: "PSF", Width: 11, Height: 13, Depth: 6, Float: randomFloats(11*13*6, 2)}
	flags = &ImageHDU{Name: "FLAGS", Width: 300, Height: 257, Bits: make([]uint16, 300*257)}
	for i := range flags.Bits {
		flags.Bits[i] = uint16(i * 7)
	}
	table = exampleTable(23, 3)
	if err := Write(path, exampleHeader(), img, cube, flags, table); err != nil {
		t.Fatal(err)
	}
	return
}

func TestRoundTrip(t *testing.T) {
	for _, name := range []string{"a.fits", "a.fits.gz"} {
		path := filepath.Join(t.TempDir(), name)
		img, cube, flags, table := writeExample(t, path)
		f, err := Open(path + "[flags]")
		if err != nil {
			t.Fatal(err)
		}
		defer f.Close()
		if f.Selected != 3 || len(f.HDUs()) != 5 || len(f.Warnings) != 0 {
			t.Fatalf("selected %d of %d HDUs, warnings %q", f.Selected, len(f.HDUs()), f.Warnings)
		}
		for i, want := range []struct {
			kind    Kind
			w, h, d int
		}{{Empty, 0, 0, 0}, {ImageData, 123, 77, 1}, {CubeData, 11, 13, 6}, {ImageData, 300, 257, 1}, {BinaryTable, 0, 0, 0}} {
			h := f.HDUs()[i]
			if h.Kind != want.kind || h.Width != want.w || h.Height != want.h || h.Depth != want.d {
				t.Errorf("HDU %d is %v %d×%d×%d, want %v", i, h.Kind, h.Width, h.Height, h.Depth, want)
			}
			if present, err := f.Verify(i); !present || err != nil {
				t.Errorf("HDU %d: checksum present %v, %v", i, present, err)
			}
		}
		checkHeader(t, f.HDUs()[0].Header, exampleHeader())
		got, err := f.Image(1)
		if err != nil {
			t.Fatal(err)
		}
		checkPix(t, "image", got.Pix, img.Float)
		checkHeader(t, got.Header, exampleHeader())
		c, err := f.Cube(2)
		if err != nil {
			t.Fatal(err)
		}
		checkPix(t, "cube", c.Pix, cube.Float)
		p, err := f.Plane(2, 4)
		if err != nil {
			t.Fatal(err)
		}
		checkPix(t, "plane", p.Pix, c.Plane(4))
		b, err := f.Flags(3)
		if err != nil {
			t.Fatal(err)
		}
		if !reflect.DeepEqual(b.Bits, flags.Bits) {
			t.Error("flags differ")
		}
		tab, err := f.Table(4)
		if err != nil {
			t.Fatal(err)
		}
		checkTable(t, tab, table)
		if night, _ := tab.Header.Str("NIGHT"); night != "2031-02-03" {
			t.Errorf("NIGHT = %q", night)
		}
		// What cannot be had says why, with the type that fits.
		var format *FormatError
		var unsupported *UnsupportedError
		if _, err := f.Image(2); !errors.As(err, &unsupported) || !strings.Contains(err.Error(), "two-dimensional") {
			t.Errorf("image of a cube: %v", err)
		}
		if _, err := f.Image(4); !errors.As(err, &format) {
			t.Errorf("image of a table: %v", err)
		}
		if _, err := f.Table(1); !errors.As(err, &format) {
			t.Errorf("table of an image: %v", err)
		}
		if _, err := f.Plane(2, 6); !errors.As(err, &format) {
			t.Errorf("plane 6 of 6: %v", err)
		}
		if _, err := f.Flags(1); !errors.As(err, &format) || !strings.Contains(err.Error(), "pixel (1,1)") {
			t.Errorf("flags of a float image: %v", err)
		}
		if _, err := Open(path + "[NOSUCH]"); !errors.As(err, &format) || !strings.Contains(err.Error(), "[DIFFERENCE]") {
			t.Errorf("missing extension: %v", err)
		}
	}
}

// TestTableSizes goes over row counts around the chunk of the encoder, zero
// included, and over odd row widths.
func TestTableSizes(t *testing.T) {
	for _, rows := range []int{0, 1, 2, 3, 4, 5, 7, 23, 24, 25, 31, 101} {
		path := filepath.Join(t.TempDir(), "t.fits")
		want := exampleTable(rows, uint64(rows))
		if err := Write(path, nil, want); err != nil {
			t.Fatal(err)
		}
		f, err := Open(path)
		if err != nil {
			t.Fatal(err)
		}
		got, err := f.Table(1)
		if err != nil {
			t.Fatal(err)
		}
		checkTable(t, got, want)
		if _, err := f.Verify(1); err != nil {
			t.Error(err)
		}
		f.Close()
	}
}

// TestAgainstAstropy has astropy read what is written here and compares bit by
// bit; fitsverify must be silent.
func TestAgainstAstropy(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "a.fits")
	img, cube, flags, table := writeExample(t, path)
	verify(t, path)
	primary := filepath.Join(dir, "p.fits")
	if err := WritePrimary(primary, &ImageHDU{Header: exampleHeader(), Width: 123, Height: 77, Float: img.Float}); err != nil {
		t.Fatal(err)
	}
	verify(t, primary)
	out := outside.Python(t, `
import sys, json, warnings
import numpy as np
from astropy.io import fits
warnings.simplefilter("error")
path, primary, out = sys.argv[1:]
with fits.open(path, checksum=True) as f:
    f.verify("exception")
    r = {"names": [h.name for h in f]}
    f["DIFFERENCE"].data.astype("<f4").tofile(out + "/image")
    f["PSF"].data.astype("<f4").tofile(out + "/cube")
    assert f["FLAGS"].data.dtype == np.uint16
    f["FLAGS"].data.astype("<u2").tofile(out + "/flags")
    h = f[0].header
    r["header"] = {k: h[k] for k in ["OBJECT", "EXPTIME", "BIG", "TINY", "COUNT", "FLAG", "GAIN", "SOURCE", "SPACES", "AMPER",
        "STATION INSTRUMENT NAME", "STATION INSTRUMENT PATH"]}
    r["cplx"] = [h["CPLX"].real, h["CPLX"].imag]
    r["novalue"] = "NOVALUE" not in h
    r["history"] = "".join(h["HISTORY"])
    t = f["CANDIDATES"]
    r["columns"] = [[c.name, c.unit, c.dim, c.format] for c in t.columns]
    r["tcomm2"] = t.header["TCOMM2"]
    r["shape"] = t.data["stamp"].shape
    t.data["stamp"].astype("<f4").tofile(out + "/stamp")
    t.data["ra_deg"].astype("<f8").tofile(out + "/ra")
    r["number"] = [str(v) for v in t.data["number"]]
    r["real"] = [bool(v) for v in t.data["real"]]
    r["name"] = [str(v) for v in t.data["name"]]
    r["pair"] = t.data["pair"].tolist()
with fits.open(primary, checksum=True) as f:
    assert len(f) == 1
    f[0].data.astype("<f4").tofile(out + "/primary")
print(json.dumps(r))
`, path, primary, dir)
	var r struct {
		Names   []string
		Header  map[string]any
		Cplx    []float64
		NoValue bool
		History string
		Columns [][]any
		TComm2  string
		Shape   []int
		Number  []string
		Real    []bool
		Name    []string
		Pair    [][]int64
	}
	if err := json.Unmarshal(out, &r); err != nil {
		t.Fatal(err)
	}
	if want := []string{"PRIMARY", "DIFFERENCE", "PSF", "FLAGS", "CANDIDATES"}; !reflect.DeepEqual(r.Names, want) {
		t.Errorf("extensions %q", r.Names)
	}
	checkPix(t, "image", rawFloats(t, dir+"/image"), img.Float)
	checkPix(t, "primary", rawFloats(t, dir+"/primary"), img.Float)
	checkPix(t, "cube", rawFloats(t, dir+"/cube"), cube.Float)
	raw, _ := os.ReadFile(dir + "/flags")
	for i, want := range flags.Bits {
		if got := binary.LittleEndian.Uint16(raw[2*i:]); got != want {
			t.Fatalf("flag %d is %d, want %d", i, got, want)
		}
	}
	want := exampleHeader()
	for k, v := range r.Header {
		c, _ := want.Get(k)
		if n, ok := c.Value.(int64); ok {
			c.Value = float64(n) // JSON
		}
		if c.Value != v {
			t.Errorf("astropy reads %s as %v, want %v", k, v, c.Value)
		}
	}
	if len(r.Header) != 12 || !r.NoValue || r.Cplx[0] != 1.5 || r.Cplx[1] != -2 || !strings.HasPrefix(r.History, "made for a test; long history") {
		t.Errorf("header: %+v", r)
	}
	if r.TComm2 != table.Columns[1].Description || !reflect.DeepEqual(r.Shape, []int{23, 51, 51}) {
		t.Errorf("TCOMM2 %q, stamps of shape %v", r.TComm2, r.Shape)
	}
	var stamps []float32
	for _, s := range table.Column("stamp").Data.([][]float32) {
		if s == nil {
			s = make([]float32, 51*51)
			for i := range s {
				s[i] = nan32()
			}
		}
		stamps = append(stamps, s...)
	}
	checkPix(t, "stamps", rawFloats(t, dir+"/stamp"), stamps)
	for i, v := range table.Column("number").Data.([]int64) {
		if fmt.Sprint(v) != r.Number[i] {
			t.Errorf("number %d is %s, want %d", i, r.Number[i], v)
		}
	}
	if !reflect.DeepEqual(r.Real, table.Column("real").Data) || !reflect.DeepEqual(r.Name, table.Column("name").Data) || !reflect.DeepEqual(r.Pair, table.Column("pair").Data) {
		t.Error("logical values, strings or vectors differ")
	}
}

func rawFloats(t *testing.T, path string) []float32 {
	t.Helper()
	raw, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	pix := make([]float32, len(raw)/4)
	for i := range pix {
		pix[i] = math.Float32frombits(binary.LittleEndian.Uint32(raw[4*i:]))
	}
	return pix
}

// TestReadAstropyImages reads every BITPIX, the unsigned conventions, BLANK,
// scaling, .gz and odd sizes as astropy writes them. The expected values come
// from numpy: float32 of the physical values.
func TestReadAstropyImages(t *testing.T) {
	dir := t.TempDir()
	out := outside.Python(t, `
import sys, json
import numpy as np
from astropy.io import fits
out = sys.argv[1]
rng = np.random.default_rng(5)
cases = []
def save(name, hdu, want, ext=0):
    h = fits.HDUList([hdu] if ext == 0 else [fits.PrimaryHDU(), hdu])
    h.writeto(f"{out}/{name}", checksum=True)
    np.asarray(want).astype("<f4").tofile(f"{out}/{name}.want")
    cases.append({"name": name, "ext": ext, "width": want.shape[1], "height": want.shape[0]})
shape = (37, 53)
for t in ["u1", "i2", "i4", "i8", "f4", "f8", "i1", "u2", "u4", "u8"]:
    if t[0] == "f":
        a = (rng.normal(size=shape) * 1e3).astype(t); a[3, 4] = np.nan; a[5, 6] = np.inf
    else:
        i = np.iinfo(t); a = rng.integers(i.min, i.max, size=shape, dtype=t, endpoint=True); a[0, 0] = i.min; a[0, 1] = i.max
        a[1, :50] = np.arange(50)
    with np.errstate(all="ignore"):
        want = a.astype("f4")
    save(f"{t}.fits", fits.PrimaryHDU(a), want)
    save(f"{t}-ext.fits.gz", fits.ImageHDU(a, name="SCI"), want, 1)
def raw(name, stored, **cards):
    # Stored integers with BSCALE, BZERO and BLANK as they stand in the header.
    h = fits.PrimaryHDU(stored)
    for k, v in cards.items():
        h.header[k] = v
    h.writeto(f"{out}/{name}", output_verify="ignore")
    v = stored.astype("f8") * cards.get("BSCALE", 1) + cards.get("BZERO", 0)
    if "BLANK" in cards:
        v[stored == cards["BLANK"]] = np.nan
    v.astype("<f4").tofile(f"{out}/{name}.want")
    cases.append({"name": name, "ext": 0, "width": stored.shape[1], "height": stored.shape[0]})
for t in ["u1", "i2", "i4", "i8"]:
    a = rng.integers(0, 100, size=shape).astype(t)
    raw(f"{t}-blank.fits", a, BLANK=7)
    raw(f"{t}-scaled.fits", a, BLANK=9, BSCALE=0.25, BZERO=-3.5)
    raw(f"{t}-negative.fits", a, BSCALE=-2.0, BZERO=1000.0)
a = rng.integers(-32768, 32767, size=shape).astype("i2")
raw("u2-blank.fits", a, BLANK=-32768, BZERO=32768)
raw("f4-scaled.fits", rng.normal(size=shape).astype("f4"), BSCALE=3.0, BZERO=100.0)
a = rng.normal(size=(1, 20, 30)).astype("f4")
fits.PrimaryHDU(a).writeto(f"{out}/thin.fits")
a.astype("<f4").tofile(f"{out}/thin.fits.want")
cases.append({"name": "thin.fits", "ext": 0, "width": 30, "height": 20})
print(json.dumps(cases))
`, dir)
	var cases []struct {
		Name               string
		Ext, Width, Height int
	}
	if err := json.Unmarshal(out, &cases); err != nil {
		t.Fatal(err)
	}
	if len(cases) < 30 {
		t.Fatalf("only %d cases", len(cases))
	}
	for _, c := range cases {
		t.Run(c.Name, func(t *testing.T) {
			f, err := Open(filepath.Join(dir, c.Name))
			if err != nil {
				t.Fatal(err)
			}
			defer f.Close()
			img, err := f.Image(c.Ext)
			if err != nil {
				t.Fatal(err)
			}
			if img.Width != c.Width || img.Height != c.Height {
				t.Fatalf("%d×%d, want %d×%d", img.Width, img.Height, c.Width, c.Height)
			}
			checkPix(t, c.Name, img.Pix, rawFloats(t, filepath.Join(dir, c.Name+".want")))
			if _, err := f.Verify(c.Ext); err != nil {
				t.Error(err)
			}
		})
	}
	for name, want := range map[string]float64{"u2.fits": 65535, "i2.fits": 32767, "u1.fits": 255, "i4.fits": math.MaxInt32, "u4.fits": math.MaxUint32, "i2-negative.fits": 66536} {
		f, _ := Open(filepath.Join(dir, name))
		img, _ := f.Image(0)
		f.Close()
		if img.TypeMax != want {
			t.Errorf("%s: TypeMax = %v, want %v", name, img.TypeMax, want)
		}
	}
}

// TestReadAstropyTables reads all column types, variable-length ones, scaled
// ones and ASCII tables as astropy writes them.
func TestReadAstropyTables(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "t.fits")
	outside.Python(t, `
import sys
import numpy as np
from astropy.io import fits
n = 5
C = fits.Column
obj = lambda t, rows: np.array([np.array(r, dtype=t) for r in rows], dtype=object)
ragged = [[1, 2, 3], [], [4], [5, 6], [7, 8, 9, 10]]
cols = [
 C("L", "L", array=[True, False, True, True, False]), C("B", "B", array=np.arange(n)), C("I", "I", array=np.arange(n) - 3),
 C("J", "J", array=np.arange(n) * 100000), C("K", "K", array=np.arange(n) * 10**12), C("E", "E", array=np.arange(n) / 4), C("D", "D", array=np.arange(n) / 8),
 C("A", "7A", array=["a", "bc", "", "defghij", "k l"]), C("C", "C", array=np.arange(n) * 1j),
 C("U", "J", bzero=2**31, array=np.arange(n).astype("u4") + 3000000000), C("S", "E", bscale=0.5, bzero=10, array=np.arange(n) / 2.0),
 C("U8", "K", bzero=2**63, array=np.arange(n).astype("u8") + 2**63),
 C("3J", "3J", array=np.arange(3 * n).reshape(n, 3)), C("2D", "2D", array=np.arange(2 * n).reshape(n, 2) / 3), C("3L", "3L", array=np.arange(3 * n).reshape(n, 3) % 2 == 0),
 C("X", "10X", array=np.arange(10 * n).reshape(n, 10) % 3 == 0),
 C("PJ", "PJ()", array=obj("i4", ragged)), C("PD", "PD()", array=obj("f8", ragged)), C("QE", "QE()", array=obj("f4", ragged)), C("PB", "PB()", array=obj("u1", ragged)),
 C("PI", "PI()", array=obj("i2", ragged)), C("PK", "PK()", array=obj("i8", ragged)),
 C("N", "J", null=-99, array=[1, -99, 3, -99, 5]),
]
h = fits.BinTableHDU.from_columns(cols, name="ALL")
ascii = fits.TableHDU.from_columns([C("id", "I5", array=np.arange(n) * 7 - 2, ascii=True), C("mag", "F8.3", array=np.arange(n) / 3, ascii=True),
  C("e", "E15.7", array=np.arange(n) * 1.5e10, ascii=True), C("name", "A6", array=["p", "q r", "", "stuvwx", "y"], ascii=True)], name="TEXT")
ascii.header.set("TNULL1", "12")
fits.HDUList([fits.PrimaryHDU(), h, ascii]).writeto(sys.argv[1])
`, path)
	f, err := Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	tab, err := f.Table(1)
	if err != nil {
		t.Fatal(err)
	}
	want := map[string]any{
		"L": []bool{true, false, true, true, false}, "B": []uint8{0, 1, 2, 3, 4}, "I": []int16{-3, -2, -1, 0, 1},
		"J": []int32{0, 100000, 200000, 300000, 400000}, "K": []int64{0, 1e12, 2e12, 3e12, 4e12},
		"E": []float32{0, 0.25, 0.5, 0.75, 1}, "D": []float64{0, 0.125, 0.25, 0.375, 0.5},
		"A": []string{"a", "bc", "", "defghij", "k l"}, "C": nil,
		"U": []int64{3000000000, 3000000001, 3000000002, 3000000003, 3000000004}, "S": []float64{0, 0.5, 1, 1.5, 2},
		"U8": []float64{1 << 63, 1 << 63, 1 << 63, 1 << 63, 1 << 63},
		"3J": [][]int32{{0, 1, 2}, {3, 4, 5}, {6, 7, 8}, {9, 10, 11}, {12, 13, 14}},
		"3L": [][]bool{{true, false, true}, {false, true, false}, {true, false, true}, {false, true, false}, {true, false, true}},
		"PJ": [][]int32{{1, 2, 3}, {}, {4}, {5, 6}, {7, 8, 9, 10}}, "PD": [][]float64{{1, 2, 3}, {}, {4}, {5, 6}, {7, 8, 9, 10}},
		"QE": [][]float32{{1, 2, 3}, {}, {4}, {5, 6}, {7, 8, 9, 10}}, "PB": [][]uint8{{1, 2, 3}, {}, {4}, {5, 6}, {7, 8, 9, 10}},
		"PI": [][]int16{{1, 2, 3}, {}, {4}, {5, 6}, {7, 8, 9, 10}}, "PK": [][]int64{{1, 2, 3}, {}, {4}, {5, 6}, {7, 8, 9, 10}},
		"N": []int32{1, -99, 3, -99, 5},
	}
	for name, w := range want {
		c := tab.Column(name)
		if c == nil {
			t.Fatalf("no column %s", name)
		}
		if got := fmt.Sprintf("%T%v", c.Data, c.Data); got != fmt.Sprintf("%T%v", w, w) {
			t.Errorf("column %s = %s, want %T%v", name, got, w, w)
		}
	}
	if x := tab.Column("X").Data.([][]bool); len(x[1]) != 10 || x[1][2] != true || x[1][3] != false {
		t.Errorf("bits: %v", x)
	}
	if len(tab.Header.Warnings()) != 1 {
		t.Errorf("warnings %q, want one for the complex column", tab.Header.Warnings())
	}
	if v, err := tab.Floats("n"); err != nil || v[0] != 1 || !math.IsNaN(v[1]) {
		t.Errorf("nulls as floats: %v %v", v, err)
	}
	if v, err := tab.Ints("I"); err != nil || v[0] != -3 {
		t.Errorf("Ints: %v %v", v, err)
	}
	if _, err := tab.Strings("I"); err == nil {
		t.Error("numbers read as strings")
	}
	if _, err := tab.Floats("nosuch"); err == nil || !strings.Contains(err.Error(), "nosuch") {
		t.Errorf("missing column: %v", err)
	}
	text, err := f.Table(2)
	if err != nil {
		t.Fatal(err)
	}
	id := text.Column("id").Data.([]float64)
	if id[0] != -2 || !math.IsNaN(id[2]) || id[4] != 26 {
		t.Errorf("id = %v", id)
	}
	mag := text.Column("mag").Data.([]float64)
	if mag[1] != 0.333 || mag[4] != 1.333 {
		t.Errorf("mag = %v", mag)
	}
	if e := text.Column("e").Data.([]float64); e[3] != 4.5e10 {
		t.Errorf("e = %v", e)
	}
	if s := text.Column("name").Data.([]string); !reflect.DeepEqual(s, []string{"p", "q r", "", "stuvwx", "y"}) {
		t.Errorf("name = %q", s)
	}
}

// TestDeterministic writes twice and wants equal bytes.
func TestDeterministic(t *testing.T) {
	var a, b bytes.Buffer
	for _, w := range []io.Writer{&a, &b} {
		if err := Encode(w, exampleHeader(), &ImageHDU{Width: 3, Height: 5, Float: randomFloats(15, 1)}, exampleTable(9, 1)); err != nil {
			t.Fatal(err)
		}
	}
	if !bytes.Equal(a.Bytes(), b.Bytes()) {
		t.Error("two writes differ")
	}
}

// TestDamage flips one bit at many places: the checksum must notice.
func TestDamage(t *testing.T) {
	var buf bytes.Buffer
	if err := Encode(&buf, nil, &ImageHDU{Name: "A", Width: 40, Height: 40, Float: randomFloats(1600, 1)}); err != nil {
		t.Fatal(err)
	}
	for at := 2 * blockSize; at < buf.Len(); at += 97 {
		raw := bytes.Clone(buf.Bytes())
		raw[at] ^= 0x10
		f, err := newFile("a.fits", raw)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := f.Verify(1); err == nil {
			t.Errorf("a bit flipped at byte %d goes unnoticed", at)
		}
	}
}

func TestCopiedHeader(t *testing.T) {
	// The header of another file must not contradict what is written.
	h := exampleHeader()
	h.Set("BITPIX", 16, "")
	h.Set("NAXIS1", 7, "")
	h.Set("BZERO", 32768.0, "")
	h.Set("BLANK", -1, "")
	h.Set("CHECKSUM", "wrong", "")
	h.Set("TTYPE1", "wrong", "")
	h.Add(Card{"GAIN", 3.0, "a second one"})
	path := filepath.Join(t.TempDir(), "a.fits")
	if err := WritePrimary(path, &ImageHDU{Header: h, Width: 4, Height: 3, Float: make([]float32, 12)}); err != nil {
		t.Fatal(err)
	}
	f, err := Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	img, err := f.Image(0)
	if err != nil || img.Pix[0] != 0 || img.Width != 4 {
		t.Fatalf("%v %+v", err, img)
	}
	verify(t, path)
}

func TestWriteErrors(t *testing.T) {
	dir := t.TempDir()
	bad := &Table{Name: "T", Columns: []Column{{Name: "v", Data: [][]float32{{1, 2}, {1}}}}}
	if err := Write(filepath.Join(dir, "a.fits"), nil, bad); err == nil || !strings.Contains(err.Error(), "column v, row 2") {
		t.Errorf("ragged vectors: %v", err)
	}
	if err := Write(filepath.Join(dir, "b.fits"), nil, &Table{Columns: []Column{{Name: "v", Data: []complex64{1}}}}); err == nil {
		t.Error("a complex column was written")
	}
	h := &Header{}
	h.Set("A=B", 1, "")
	if err := Write(filepath.Join(dir, "c.fits"), h); err == nil {
		t.Error("a keyword with = was written")
	}
	func() {
		defer func() {
			if recover() == nil {
				t.Error("a mismatched shape did not panic")
			}
		}()
		Write(filepath.Join(dir, "d.fits"), nil, &ImageHDU{Width: 3, Height: 3, Float: make([]float32, 8)})
	}()
	if entries, _ := os.ReadDir(dir); len(entries) != 0 {
		t.Errorf("left behind: %v", entries)
	}
	if _, err := Open(filepath.Join(dir, "absent.fits")); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("absent file: %v", err)
	}
}

func TestSplitName(t *testing.T) {
	dir := t.TempDir()
	odd := filepath.Join(dir, "night[1]")
	if err := os.WriteFile(odd, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	for _, c := range [][3]string{
		{"a.fits", "a.fits", ""}, {"a.fits[SCI]", "a.fits", "SCI"}, {"a.fits[2]", "a.fits", "2"},
		{"[x]/a.fits", "[x]/a.fits", ""}, {"a.fits[SCI, 2]", "a.fits", "SCI, 2"}, {odd, odd, ""}, {"[1]", "[1]", ""},
	} {
		if file, hdu := SplitName(c[0]); file != c[1] || hdu != c[2] {
			t.Errorf("SplitName(%q) = %q, %q, want %q, %q", c[0], file, hdu, c[1], c[2])
		}
	}
}

func TestFindVersions(t *testing.T) {
	var buf bytes.Buffer
	var hdus []HDUWriter
	for v := 1; v <= 3; v++ {
		h := &Header{}
		h.Set("EXTVER", v, "")
		hdus = append(hdus, &ImageHDU{Name: "SCI", Header: h, Width: 1, Height: 1, Float: []float32{float32(v)}})
	}
	if err := Encode(&buf, nil, hdus...); err != nil {
		t.Fatal(err)
	}
	f, err := newFile("a", buf.Bytes())
	if err != nil {
		t.Fatal(err)
	}
	for selector, want := range map[string]int{"SCI": 1, "sci,2": 2, "SCI, 3": 3, "0": 0, "2": 2} {
		if i, err := f.Find(selector); err != nil || i != want {
			t.Errorf("Find(%q) = %d, %v, want %d", selector, i, err, want)
		}
	}
	for _, selector := range []string{"9", "", "SCI,4", "-1"} {
		if i, err := f.Find(selector); err == nil {
			t.Errorf("Find(%q) = %d, want an error", selector, i)
		}
	}
}

// TestFloatLoops compares the unrolled loops with the plain definition, at all
// small lengths; guards before and behind must stay.
func TestFloatLoops(t *testing.T) {
	for n := range 40 {
		want := nasty(randomFloats(n+8, uint64(n)))[:n]
		raw := bytes.Repeat([]byte{0xab}, 4*n+2)
		putFloats(raw[1:4*n+1], want)
		var s sum
		s.floats(want)
		words := uint64(0)
		for i, v := range want {
			word := math.Float32bits(v)
			if got := binary.BigEndian.Uint32(raw[1+4*i:]); got != word {
				t.Fatalf("n = %d: word %d is %x, want %x", n, i, got, word)
			}
			if words += uint64(word); words>>32 != 0 {
				words = words&math.MaxUint32 + 1
			}
		}
		if s.value() != uint32(words) {
			t.Errorf("n = %d: sum %d, want %d", n, s.value(), words)
		}
		var b sum
		b.bytes(raw[1 : 4*n+1])
		if b.value() != s.value() {
			t.Errorf("n = %d: sum of bytes %d, of floats %d", n, b.value(), s.value())
		}
		got := randomFloats(n+2, 99)
		before, after := got[0], got[n+1]
		getFloats(got[1:n+1], raw[1:4*n+1])
		checkPix(t, "decoded", got[1:n+1], want)
		for start := range 2 { // a NaN keeps its bits only as bits
			turned := make([]uint32, n+3)
			for i := range turned {
				turned[i] = 0x01020304 * uint32(i+1)
			}
			turnBytes(unsafe.Slice((*float32)(unsafe.Pointer(&turned[0])), n+3)[1+start : 1+start+n])
			for i, v := range turned {
				want := 0x01020304 * uint32(i+1)
				if i > start && i <= start+n {
					want = bits.ReverseBytes32(want)
				}
				if v != want {
					t.Errorf("n = %d from %d: word %d turned is %x, want %x", n, start, i, v, want)
				}
			}
		}
		if got[0] != before || got[n+1] != after || raw[0] != 0xab || raw[4*n+1] != 0xab {
			t.Errorf("n = %d: a guard was overwritten", n)
		}
	}
}
