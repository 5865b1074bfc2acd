package survey

import (
	"bytes"
	"image/png"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// TestAwkwardFrames: frames that are valid but strange, written by astropy, and
// the sentences by which they are explained.
func TestAwkwardFrames(t *testing.T) {
	dir := t.TempDir()
	outside.Python(t, `
import os, sys, warnings
import numpy as np
from astropy.io import fits
warnings.simplefilter("ignore")
os.chdir(sys.argv[1])
rng = np.random.default_rng(4)
N = 240
y, x = np.mgrid[0:N, 0:N]
light = np.zeros((N, N))
for k in range(70):
    cx, cy = rng.uniform(5, N - 5, 2)
    peak = 300 * 200 ** rng.uniform() if k > 6 else 200000
    light += peak * np.exp(-4 * np.log(2) * ((x - cx) ** 2 + (y - cy) ** 2) / 3.5 ** 2)
def frame(gain=1.5, read=6.0, sky=400.0, light=light):
    expected = (sky + light) * gain
    return (rng.poisson(expected) + rng.normal(0, read, (N, N))) / gain
def save(name, data, *cards, hdus=()):
    h = fits.PrimaryHDU(data)
    for c in cards:
        h.header.append(c, end=True)
    fits.HDUList([h, *hdus]).writeto(name)
usual = [("GAIN", 1.5), ("RDNOISE", 6.0), ("SATURATE", 60000.0), ("EXPTIME", 60.0), ("DATE-OBS", "2026-03-01T02:00:00"), ("FILTER", "r"), ("OBJECT", "MR-7")]
def but(*cards):
    keys = [c[0] for c in cards]
    return [c for c in usual if c[0] not in keys] + [c for c in cards if c[1] is not None]
plain = np.clip(frame(), 0, 60000)

counts = np.clip(np.rint(frame()), 0, 65535).astype(np.uint16)
h = fits.PrimaryHDU(counts)
for c in but(("SATURATE", None)): h.header.append(c, end=True)
h.header["BLANK"] = -32768   # stored; 0 as unsigned
h.data[3, 4:9] = 0
h.writeto("unsigned.fits")

save("end.fits", plain.astype("f4"), *but(("DATE-OBS", None), ("MJD-OBS", 61100.25, "[d] end of exposure")))
save("text.fits", plain.astype("f4"), *but(("GAIN", "1,5 e-/ADU"), ("RDNOISE", 0.0, "not measured")))
save("inverse.fits", plain.astype("f4"), *but(("GAIN", 1 / 1.5, "[ADU/e-]")))
save("electrons.fits", (plain * 1.5).astype("f4"), *but(("BUNIT", "electron")))
save("rate.fits", (plain / 60).astype("f4"), *but(("BUNIT", "adu/s"), ("SATURATE", 60000.0, "[adu]"), ("MAGZP", 25.0, "mag of 1 adu/s")))
swapped = [("CTYPE1", "RA---TAN"), ("CTYPE2", "DEC--TAN"), ("CRVAL1", 150.0), ("CRVAL2", 2.0), ("CRPIX1", 120.5), ("CRPIX2", 120.5), ("CD1_1", 1.5e-4), ("CD1_2", 0.0), ("CD2_1", 0.0), ("CD2_2", 1.5e-4)]
save("mirrored.fits", plain.astype("f4"), *but(*swapped))
save("timeless.fits", plain.astype("f4"), *but(("DATE-OBS", None), ("OBJCTRA", "10 00 00"), ("OBJCTDEC", "+02 00 00"), ("PIXSCALE", 0.54)))
save("tai.fits", plain.astype("f4"), *but(("TIMESYS", "TAI"), ("DATE-OBS", "2026-03-01T02:00:37")))
save("olddate.fits", plain.astype("f4"), *but(("DATE-OBS", "01/03/97"), ("TIME-OBS", "02:00:00")))
bits = np.zeros((N, N), np.int16); bits[10, 10:14] = 4; bits[20, 20:23] = 8; bits[30, 30] = 1
def chip(name, gain): return fits.ImageHDU(frame(gain).astype("f4"), fits.Header([("GAIN", gain)]), name=name)
p = fits.PrimaryHDU()
for c in but(("GAIN", None)): p.header.append(c, end=True)
fits.HDUList([p, chip("CHIP1", 1.4), fits.ImageHDU(bits, name="CHIP1_DQ"), chip("CHIP2", 1.6)]).writeto("mosaic.fits")
save("whole.fits", plain.astype("f4"), *usual)
data = open("whole.fits", "rb").read()
open("truncated.fits", "wb").write(data[:100000])
p = fits.PrimaryHDU()
c = fits.CompImageHDU(np.rint(plain).astype(np.int32), fits.Header(but(("SATURATE", None))), compression_type="RICE_1")
fits.HDUList([p, c]).writeto("tiles.fits.fz")
save("cube.fits", np.stack([plain] * 3).astype("f4"), *usual)
save("thin.fits", plain[None].astype("f4"), *usual)
flat = 1 + 0.008 * np.sin(x / 30.0)
save("clipped.fits", (np.minimum(frame(), 45000) * flat).astype("f4"), *but(("SATURATE", None)))
save("nothing.fits", frame(0.8, 9.0, 400 + 3 * x).astype("f4"))
save("wrong.fits", frame(0.8, 9.0, 100 + 5 * x).astype("f4"), *but(("GAIN", 2.4)))
`, dir)

	config := DefaultConfig()
	config.Planes.Mask, config.Planes.MaskSaturated, config.Planes.MaskCosmicRay = "{hdu}_DQ", 4, 8
	for _, c := range []struct {
		name string
		ok   bool
		want []string
	}{
		{"unsigned.fits", true, []string{"16-bit integers", "no_data 5", "saturation   65535 count (data type)"}},
		{"end.fits", true, []string{"T05:59:30.000 UTC, mid-exposure (MJD-OBS (end))", "MJD-OBS is the end of the exposure: its card says so"}},
		{"text.fits", true, []string{"gain         1.5 electron per count (GAIN)", `GAIN: "1,5 e-/ADU" read with a decimal comma`, "read noise   0 electron (RDNOISE)"}},
		{"inverse.fits", true, []string{"gain         1.5 electron per count (GAIN (inverted))", "is in counts per electron, as its card says: inverted"}},
		{"electrons.fits", true, []string{`electrons (BUNIT = "electron")`, "gain         1 electron per count (BUNIT)", "the pixels are electrons already; GAIN = 1.5 describes the camera"}},
		{"rate.fits", true, []string{`counts per second (BUNIT = "adu/s")`, "gain         90 electron per count (GAIN times exposure)", "saturation   1000 count (SATURATE (by exposure))",
			"zero point   25 mag of one count (MAGZP)"}},
		{"mirrored.fits", true, []string{"centre at RA 150.00000°, Dec +2.00000°; 0.5400 arcsec per px", "mirrored: with north up, east is to the right"}},
		{"timeless.fits", true, []string{"time         unknown: the frame counts as undated", "no world coordinates in the header; the star pattern decides", "the header points at RA 150.00000°, Dec +2.00000° (OBJCTRA and OBJCTDEC)",
			"0.54 arcsec per px (PIXSCALE)"}},
		{"tai.fits", true, []string{"2026-03-01T02:00:30.000 UTC", "TIMESYS = TAI: 37.000 s taken off to have UTC"}},
		{"olddate.fits", true, []string{"1997-03-01T02:00:30.000 UTC, mid-exposure (DATE-OBS and TIME-OBS)", "the old form day/month/year of the 1900s: read as 1997-03-01"}},
		{"mosaic.fits[CHIP1]", true, []string{"CHIP1 (240×240, 32-bit floats)", "named mosaic_CHIP1", "gain         1.4 electron per count (GAIN)", "read noise   6 electron (RDNOISE of the primary HDU)",
			"mask         extension CHIP1_DQ", "cosmic_ray 3", "user_masked 1"}},
		{"mosaic.fits[CHIP2]", true, []string{"gain         1.6 electron per count (GAIN)", "the configuration names the extension CHIP2_DQ for the mask; the file has none"}},
		{"truncated.fits", false, []string{"set aside    unreadable: ", "truncated: the header announces 230400 bytes of data, the file holds"}},
		{"tiles.fits.fz", true, []string{"240×240, 32-bit integers in tiles", "named tiles", "gain         1.5 electron per count (GAIN)"}},
		{"cube.fits", false, []string{"(240×240×3, 32-bit floats)", "set aside    not_an_image: ", "cube of axes [240 240 3]"}},
		{"thin.fits", true, []string{"image        240 × 240 px"}},
		{"clipped.fits", true, []string{"plateaus of bright stars)", "flagged      saturated "}},
		{"nothing.fits", true, []string{"field        unknown: in a survey no reference can be chosen", "filter       unknown: any reference is accepted", "time         unknown", "counts (guessed: there is no BUNIT)",
			"electron per count (estimated: ± ", "electron (estimated: ", "zero point   unknown: the reference's serves"}},
		{"wrong.fits", true, []string{"gain         2.4 electron per count (GAIN)", "WRONG? the noise against the level of light says 0.", "check the keyword"}},
	} {
		var out bytes.Buffer
		pictureFile := filepath.Join(dir, "picture.png")
		ok, err := DescribeFrame(&out, filepath.Join(dir, c.name), pictureFile, config)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		text := out.String()
		if ok != c.ok && !strings.Contains(text, "too_few_stars") {
			t.Errorf("%s: ok = %v\n%s", c.name, ok, text)
		}
		for _, w := range c.want {
			if !strings.Contains(text, w) {
				t.Errorf("%s: %q is missing in\n%s", c.name, w, text)
			}
		}
		file, err := os.Open(pictureFile)
		if !c.ok {
			if err == nil {
				t.Errorf("%s: a picture without pixels", c.name)
			}
			continue
		}
		if err != nil {
			t.Fatal(err)
		}
		if _, err := png.Decode(file); err != nil || !strings.Contains(text, "picture.png: one pixel is 1 of the frame") {
			t.Errorf("%s: picture: %v\n%s", c.name, err, text)
		}
		file.Close()
		os.Remove(pictureFile)
	}
}
