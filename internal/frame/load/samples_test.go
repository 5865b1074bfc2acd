package load

import (
	"encoding/json"
	"errors"
	"math"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/outside"
)

// sample is what astropy says of one HDU.
type sample struct {
	Path   string
	HDU    int
	Shape  []int // NAXIS1 first
	BitPix int
	Values []*float64 // the first and last four pixels; nil for NaN
}

// TestSampleFrames walks over the images that Debian's astropy and drizzle
// packages bring along. Each is read as astropy reads it: size, type, first and
// last pixels; as a frame it is understood or refused as the frame's problem.
func TestSampleFrames(t *testing.T) {
	out := outside.Python(t, `
import glob, json, math, os, warnings
import numpy as np, astropy
from astropy.io import fits
warnings.simplefilter("ignore")
root = os.path.dirname(os.path.dirname(astropy.__file__))
names = []
for where in [root + "/astropy", "/usr/share/python-drizzle"]:
    for folder, _, files in os.walk(where):
        names += [os.path.join(folder, f) for f in files if f.endswith((".fits", ".fits.gz", ".fit", ".fts")) and not f.startswith(("reference_", "input3"))] # many large ones of one kind
result = []
for name in sorted(set(names)):
    entry = {"path": name, "hdus": None}
    try:
        with fits.open(name, ignore_missing_simple=True) as f:
            hdus = []
            for i, h in enumerate(f):
                if not isinstance(h, (fits.PrimaryHDU, fits.ImageHDU, fits.CompImageHDU)) or isinstance(h, fits.GroupsHDU):
                    continue
                a = h.data
                if a is None or a.ndim < 2 or a.size == 0 or np.prod(a.shape[:-2]) != 1 or a.dtype.kind not in "iuf":
                    continue
                flat = np.asarray(a, dtype=np.float64).ravel()
                flat = np.concatenate([flat[:4], flat[-4:]])
                bitpix = h._orig_bitpix if not isinstance(h, fits.CompImageHDU) else h._header["ZBITPIX"] if "ZBITPIX" in h._header else h.header["BITPIX"]
                hdus.append({"path": name, "hdu": i, "shape": list(a.shape[::-1]), "bitpix": int(bitpix), "values": [float(v) if math.isfinite(v) else None for v in flat]})
            entry["hdus"] = hdus
    except Exception as e:
        entry["error"] = str(e)
    result.append(entry)
print(json.dumps(result))
`)
	var files []struct {
		Path  string
		HDUs  []sample
		Error string
	}
	if err := json.Unmarshal(out, &files); err != nil {
		t.Fatal(err)
	}
	images, understood, refused := 0, 0, 0
	for _, file := range files {
		short := file.Path[strings.LastIndexByte(file.Path, '/')+1:]
		f, err := fits.Open(file.Path)
		if err != nil {
			var format *fits.FormatError
			var unsupported *fits.UnsupportedError
			if !errors.As(err, &format) && !errors.As(err, &unsupported) {
				t.Errorf("%s: %v", file.Path, err)
			}
			if len(file.HDUs) > 0 {
				t.Logf("%s: not opened, though astropy does: %v", short, err)
			}
		} else {
			for _, want := range file.HDUs {
				compare(t, f, want)
				images++
			}
			f.Close()
		}
		g, report, err := Read(file.Path, DefaultKeywords())
		var problem *frame.Problem
		switch {
		case err == nil && len(file.HDUs) > 0:
			understood++
			t.Logf("%s: %d × %d, filter %q, field %q, %d remarks", short, g.Image.Width, g.Image.Height, g.Meta.Filter, g.Meta.Field, len(report.Remarks))
		case err == nil:
			t.Errorf("%s: read as a frame, astropy sees no two-dimensional image in it", file.Path)
		case !errors.As(err, &problem) || !strings.Contains(problem.Detail, short):
			t.Errorf("%s: %v, want a problem of the frame that names the file", file.Path, err)
		default:
			refused++
			t.Logf("%s: refused: %s", short, strings.ReplaceAll(problem.Error(), file.Path, "…"))
		}
	}
	t.Logf("%d files: %d images compared with astropy, %d frames understood, %d refused", len(files), images, understood, refused)
	if len(files) < 30 || images < 15 || understood < 8 {
		t.Errorf("%d files, %d images, %d frames: the packages' samples are not where they were", len(files), images, understood)
	}
}

// compare compares one image with astropy's.
func compare(t *testing.T, f *fits.File, want sample) {
	t.Helper()
	img, err := f.Image(want.HDU)
	if err != nil {
		t.Errorf("%s[%d]: %v; astropy reads %v", want.Path, want.HDU, err, want.Shape)
		return
	}
	if img.Width != want.Shape[0] || img.Height != want.Shape[1] || img.BitPix != want.BitPix {
		t.Errorf("%s[%d]: %d × %d, BITPIX %d; astropy reads %v, %d", want.Path, want.HDU, img.Width, img.Height, img.BitPix, want.Shape, want.BitPix)
		return
	}
	n := len(img.Pix)
	for k, v := range want.Values {
		p := k
		if first := min(4, n); k >= first {
			p = n - len(want.Values) + k
		}
		got := float64(img.Pix[p])
		if v == nil {
			if got-got == 0 {
				t.Errorf("%s[%d]: pixel %d is %g, astropy's is not finite", want.Path, want.HDU, p, got)
			}
		} else if !(math.Abs(got-*v) <= 1e-6*math.Abs(*v)+1e-30) {
			t.Errorf("%s[%d]: pixel %d is %g, astropy's %g", want.Path, want.HDU, p, got, *v)
		}
	}
}
