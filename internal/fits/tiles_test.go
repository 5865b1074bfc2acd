package fits

import (
	"encoding/json"
	"fmt"
	"math"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// packedScript makes images of all types, compresses them in every way with
// cfitsio's fpack and with astropy, and expands each with cfitsio's funpack.
const packedScript = `
import sys, json, os, subprocess, warnings
import numpy as np
from astropy.io import fits
warnings.simplefilter("ignore")
out = sys.argv[1]
os.chdir(out)
rng = np.random.default_rng(9)
cases, commands, late = [], [], []
def expand(packed):
    plain = packed[:-3] + ".plain"
    hdus = [fits.PrimaryHDU()]
    with fits.open(packed) as f:
        for h in f[1:]:
            p = fits.ImageHDU(h.data, name=h.name); header(p.header); hdus.append(p)
        fits.HDUList(hdus).writeto(plain)
    cases.append([packed, plain])
def sky(shape, t):
    y, x = np.indices(shape[-2:])
    a = rng.normal(1000, 12, size=shape) + 20 * np.exp(-((x - 30.3)**2 + (y - 21.7)**2) / 8) * 400 + 3 * x
    return a.astype(t)
def header(h):
    h["OBJECT"] = ("field 'A'", "a comment")
    h["EXPTIME"] = 12.5
    h["LONGTEXT"] = "a long string " * 8
    h["HIERARCH STATION CAMERA NAME"] = "wide"
    h.add_history("made for a test")
shape = (83, 101)
images = {
  "u1": np.clip(sky(shape, "f4") / 60, 0, 255).astype("u1"), "i2": sky(shape, "i2"), "u2": sky(shape, "u2") + 31000, "i4": sky(shape, "i4") * 1000, "u4": sky(shape, "u4") * 1000,
  "f4": sky(shape, "f4"), "f8": sky(shape, "f8"), "ramp": (np.arange(83 * 101).reshape(shape) % 7).astype("i2"), "flat": np.full(shape, 7, "i2"),
  "wild": rng.integers(-32768, 32767, size=shape).astype("i2"), "wild4": rng.integers(-2**31, 2**31 - 1, size=shape).astype("i4"),
}
f = sky(shape, "f4"); f[3, 5:9] = np.nan; f[10] = np.nan; f[20:24] = 0; f[40] = 5; f[50, ::3] = 0
images["f4nan"] = f
images["f8nan"] = f.astype("f8")
mask = np.zeros(shape, "i2"); mask[10:30, 5:60] = 4; mask[rng.random(shape) < 0.02] += 1; mask[7, :] = 513
images["mask"] = mask
ints = ["u1", "i2", "u2", "i4", "u4", "ramp", "flat", "mask"]
floats = ["f4", "f8", "f4nan", "f8nan"]
def group(file, names):
    hdus = [fits.PrimaryHDU()]
    for name in names:
        h = fits.ImageHDU(images[name], name=name); header(h.header); hdus.append(h)
    fits.HDUList(hdus).writeto(file + ".fits", checksum=True)
group("ints", ints); group("floats", floats); group("masks", ["mask", "ramp", "flat", "u1"]); group("wild", ["wild", "wild4"]); group("shorts", ["i2", "u2", "f4"])
def fpack(name, flags, funpack=True):
    packed = f"{name}{flags.replace(' ', '_')}.fz"
    commands.append(f"fpack {flags} -O {packed} {name}.fits")
    if funpack:
        commands.append(f"funpack -O {packed[:-3]}.plain {packed}")
        cases.append([packed, packed[:-3] + ".plain"])
    else:
        late.append(packed)
for flags in ["-r", "-g1", "-g2", "-h", "-r -w", "-r -t 37,19", "-h -t 40,23", "-h -w", "-g2 -t 101,7", "-h -s 4", "-h -s -9 -w"]:
    fpack("ints", flags)
for flags in ["-r", "-g1", "-g2 -t 40,23"]:
    fpack("wild", flags)
for flags in ["-p", "-p -w", "-p -t 30,30"]:
    fpack("masks", flags)
fpack("shorts", "-d"); fpack("shorts", "-d -t 50,60")
for flags in ["-r", "-r -q 8", "-r -q0 4", "-r -qz 4", "-r -qz10000 2 -w", "-r -qt 4", "-r -q -0.5", "-g1 -q 0", "-g1 -qz 4", "-g2 -q 0",
              "-g2 -q9999 4", "-h -q 4", "-h -qz 4 -w", "-h -s 3 -q0 8"]:
    fpack("floats", flags)
# cfitsio 4.2.0 itself expands images with NaN wrongly when a tile is no whole row.
group("nonan", ["f4", "f8"]); fpack("nonan", "-r -q77 4 -t 37,19")
commands.append("fpack -r -q77 4 -t 37,19 -O nan.fz floats.fits")
fpack("floats", "-g2 -q 0 -t 30,30", funpack=False)
def astropy(file, names, **k):
    hdus = [fits.PrimaryHDU()]
    for name in names:
        h = fits.CompImageHDU(images[name], name=name, **k); header(h.header)
        hdus.append(h)
    fits.HDUList(hdus).writeto(file + ".fz", checksum=True)
    expand(file + ".fz")
for c in ["RICE_1", "GZIP_1", "GZIP_2", "HCOMPRESS_1"]:
    astropy("aints" + c, ints, compression_type=c); astropy("atiles" + c, ints, compression_type=c, tile_size=(29, 31))
    for m in [-1, 1, 2]:
        astropy(f"afloats{c}{m}", floats, compression_type=c, quantize_method=m, dither_seed=9999)
astropy("aplio", ["mask", "flat"], compression_type="PLIO_1")
astropy("alossless", floats, compression_type="GZIP_2", quantize_level=0)
for s in [3, 10, 40]:
    astropy(f"smooth{s}", ["i2", "u2", "i4", "f4"], compression_type="HCOMPRESS_1", hcomp_scale=s, hcomp_smooth=1, tile_size=[51, 42])
cube = sky((5, 23, 29), "i2")
fits.PrimaryHDU(cube).writeto("cube.fits")
fpack("cube", "-r"); fpack("cube", "-r -t 10,9,2"); fpack("cube", "-g -t 29,23,3")
four = sky((2, 3, 11, 13), "f4")
fits.PrimaryHDU(four).writeto("four.fits")
fpack("four", "-r"); fpack("four", "-g2 -t 5,4,2,2")
blank = images["i2"].copy(); blank[4, 4:90] = -99
h = fits.PrimaryHDU(blank); h.header["BLANK"] = -99; h.header["BSCALE"] = 0.5; h.header["BZERO"] = 3.0
h.writeto("blank.fits", output_verify="ignore")
for c in ["-r", "-g1", "-g2", "-h", "-d"]:
    fpack("blank", c)
line = sky((1, 900), "i2")[0]
fits.PrimaryHDU(line).writeto("line.fits")
fpack("line", "-r")
subprocess.run(["sh", "-e"], input="\n".join(commands), text=True, check=True, stdout=subprocess.DEVNULL)
for packed in late:
    expand(packed)
print(json.dumps(cases))
`

// TestReadPacked compares every way of compression with what cfitsio expands,
// bit for bit, header included.
func TestReadPacked(t *testing.T) {
	if testing.Short() {
		t.Skip("long: runs without the race detector")
	}
	dir := t.TempDir()
	outside.Command(t, "fpack", "-V")
	var cases [][2]string
	if err := json.Unmarshal(outside.Python(t, packedScript, dir), &cases); err != nil {
		t.Fatal(err)
	}
	if len(cases) < 60 {
		t.Fatalf("only %d cases", len(cases))
	}
	pixels := 0
	for _, c := range cases {
		n, err := comparePacked(filepath.Join(dir, c[0]), filepath.Join(dir, c[1]))
		if err != nil {
			t.Errorf("%s: %v", c[0], err)
		}
		pixels += n
	}
	compareNaN(t, filepath.Join(dir, "nan.fz"), filepath.Join(dir, "floats.fits"))
	t.Logf("%d files, %d pixels", len(cases), pixels)
}

func comparePacked(packed, plain string) (pixels int, err error) {
	f, err := Open(packed)
	if err != nil {
		return 0, err
	}
	defer f.Close()
	want, err := Open(plain)
	if err != nil {
		return 0, err
	}
	defer want.Close()
	if len(f.HDUs()) == len(want.HDUs())+1 { // fpack puts an empty primary HDU before
		f.hdus = f.hdus[1:]
	}
	if len(f.HDUs()) != len(want.HDUs()) {
		return 0, fmt.Errorf("%d HDUs, want %d", len(f.HDUs()), len(want.HDUs()))
	}
	for i, w := range want.HDUs() {
		g := f.HDUs()[i]
		if w.Kind == Empty {
			continue
		}
		if g.Kind != CompressedImage || g.BitPix != w.BitPix || !reflect.DeepEqual(g.Axes, w.Axes) || g.Name != w.Name {
			return 0, fmt.Errorf("HDU %d is a %s %d of %v named %q, want %d of %v named %q", i, g.Kind, g.BitPix, g.Axes, g.Name, w.BitPix, w.Axes, w.Name)
		}
		for _, c := range w.Header.Cards() {
			switch c.Key {
			case "SIMPLE", "XTENSION", "EXTEND", "PCOUNT", "GCOUNT", "CHECKSUM", "DATASUM", "COMMENT", "HISTORY", "":
				continue
			}
			if got, ok := g.Header.Get(c.Key); !ok || !reflect.DeepEqual(got.Value, c.Value) {
				return 0, fmt.Errorf("HDU %d: %s = %v, want %v", i, c.Key, got.Value, c.Value)
			}
		}
		for _, c := range g.Header.Cards() {
			if strings.HasPrefix(c.Key, "Z") {
				return 0, fmt.Errorf("HDU %d: %s is left in the header", i, c.Key)
			}
		}
		got, err := f.Cube(i)
		if err != nil {
			return 0, err
		}
		truth, err := want.Cube(i)
		if err != nil {
			return 0, err
		}
		for p, v := range truth.Pix {
			if !sameBits(v, got.Pix[p]) {
				return 0, fmt.Errorf("HDU %d: pixel %d = %v, want %v", i, p, got.Pix[p], v)
			}
		}
		for k := range got.Depth { // one plane alone is the same
			one, err := f.Plane(i, k)
			if err != nil {
				return 0, err
			}
			for p, v := range got.Plane(k) {
				if math.Float32bits(v) != math.Float32bits(one.Pix[p]) {
					return 0, fmt.Errorf("HDU %d: plane %d alone: pixel %d = %v, want %v", i, k, p, one.Pix[p], v)
				}
			}
		}
		if _, err := f.Verify(i); err != nil {
			return 0, err
		}
		pixels += len(truth.Pix)
	}
	return pixels, nil
}

// compareNaN wants NaN where the original has it, and elsewhere the original to
// half a step of the quantisation.
func compareNaN(t *testing.T, packed, original string) {
	f, err := Open(packed)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	o, err := Open(original)
	if err != nil {
		t.Fatal(err)
	}
	defer o.Close()
	for i := 1; i < len(f.HDUs()); i++ {
		got, err := f.Image(i)
		if err != nil {
			t.Fatal(err)
		}
		want, err := o.Image(i)
		if err != nil {
			t.Fatal(err)
		}
		for p, v := range want.Pix {
			if g := got.Pix[p]; (g != g) != (v != v) || math.Abs(float64(g-v)) > 2 {
				t.Fatalf("HDU %d: pixel %d = %v, want %v", i, p, g, v)
			}
		}
	}
}
