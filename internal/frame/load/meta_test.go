package load

import (
	"math"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
)

// cards makes a header of key, value and comment.
func cards(triples ...any) *fits.Header {
	h := &fits.Header{}
	for i := 0; i < len(triples); i += 3 {
		h.Set(triples[i].(string), triples[i+1], triples[i+2].(string))
	}
	return h
}

// understand reads a header without pixels.
func understand(t *testing.T, h *fits.Header, change func(kw *Keywords)) (frame.Meta, *Report) {
	t.Helper()
	kw := DefaultKeywords()
	if change != nil {
		change(&kw)
	}
	_, report, err := Read(write(t, "a.fits", h, noisy(1200, 1)), kw)
	if err != nil {
		t.Fatal(err)
	}
	d, err := Describe(write(t, "a.fits", h, noisy(1200, 1)), kw)
	if err != nil {
		t.Fatal(err)
	}
	return d.Meta, report
}

func TestHeaderForms(t *testing.T) {
	const start = 60310.0
	for _, c := range []struct {
		name    string
		h       *fits.Header
		change  func(kw *Keywords)
		key     string // of Origin
		value   float64
		origin  string
		remark  string // a part of a remark on the key; "" for none at all
		unknown bool
	}{
		{"text with unit", cards("GAIN", "2.1 e-/ADU", ""), nil, "gain", 2.1, "GAIN", "", false},
		{"decimal comma", cards("GAIN", "2,1", ""), nil, "gain", 2.1, "GAIN", "decimal comma", false},
		{"inverse gain", cards("GAIN", 0.5, "[ADU/e-] conversion"), nil, "gain", 2, "GAIN (inverted)", "counts per electron", false},
		{"inverse gain as text", cards("GAIN", "0.5 ADU per electron", ""), nil, "gain", 2, "GAIN (inverted)", "inverted", false},
		{"not inverse", cards("GAIN", 1.7, "gain, electrons per adu"), nil, "gain", 1.7, "GAIN", "", false},
		{"setting", cards("GAIN", 120, "camera gain setting"), nil, "gain", 0, "", "setting of the camera", true},
		{"zero gain", cards("GAIN", 0.0, ""), nil, "gain", 0, "", "makes no sense", true},
		{"word", cards("GAIN", "high", ""), nil, "gain", 0, "", "holds no number", true},
		{"date is no number", cards("GAIN", "2024-01-01", ""), nil, "gain", 0, "", "holds no number", true},
		{"amplifiers", cards("GAIN1", 1.4, "", "GAIN2", 1.6, ""), nil, "gain", 1.5, "GAIN1 to GAIN2, mean of 2", "amplifiers differ", false},
		{"lettered amplifiers", cards("ATODGNA", 2.0, "", "ATODGNB", 2.0, ""), nil, "gain", 2, "ATODGNA to ATODGNB, mean of 2", "", false},
		{"noise of amplifiers", cards("RDNOISEA", 3.0, "", "RDNOISEB", 4.0, ""), nil, "read_noise", math.Sqrt(12.5), "RDNOISEA to RDNOISEB, root of the mean square of 2", "differ", false},
		{"electrons", cards("BUNIT", "electron", "", "GAIN", 2.5, ""), nil, "gain", 1, "BUNIT", "electrons already", false},
		{"counts per second", cards("BUNIT", "adu/s", "", "GAIN", 2.0, "", "EXPTIME", 30, ""), nil, "gain", 60, "GAIN times exposure", "per second", false},
		{"electrons per second", cards("BUNIT", "ELECTRONS/S", "", "EXPTIME", 30, ""), nil, "gain", 30, "BUNIT times exposure", "per second", false},
		{"rate of unknown exposure", cards("BUNIT", "ct s-1", "", "GAIN", 2.0, ""), nil, "gain", 0, "", "exposure is unknown", true},
		{"flux unit", cards("BUNIT", "Jy", "", "GAIN", 2.0, ""), nil, "gain", 0, "", "no counts", true},
		{"fixed gain holds", cards("BUNIT", "adu/s", "", "GAIN", 2.0, ""), func(kw *Keywords) { kw.Fixed = map[string]any{"gain": 9.0} }, "gain", 9, "configuration", "", false},
		{"own keyword", cards("GAIN", 2.0, "", "MYGAIN", 3.0, ""), func(kw *Keywords) { kw.Gain = []string{"MYGAIN"} }, "gain", 3, "MYGAIN", "", false},
		{"read noise in counts", cards("GAIN", 2.0, "", "RDNOISE", 4.0, "[ADU] read noise"), nil, "read_noise", 8, "RDNOISE (times gain)", "in counts", false},
		{"read noise in electrons", cards("GAIN", 2.0, "", "RDNOISE", 4.0, "[e-] read noise"), nil, "read_noise", 4, "RDNOISE", "", false},
		{"saturation in electrons", cards("GAIN", 2.0, "", "SATURATE", 80000, "[electron] full well"), nil, "saturation", 40000, "SATURATE (electrons by gain)", "", false},
		{"thousands", cards("SATURATE", "65,535", ""), nil, "saturation", 65535, "SATURATE", "read as 65535", false},
		{"saturation of a rate", cards("BUNIT", "adu/s", "", "EXPTIME", 10, "", "SATURATE", 50000, "[adu]"), nil, "saturation", 5000, "SATURATE (by exposure)", "", false},
		{"milliseconds", cards("EXPTIME", 1500, "[ms] exposure"), nil, "exposure", 1.5, "EXPTIME (from ms)", "milliseconds", false},
		{"zero point", cards("MAGZP", 27.5, "zero point"), nil, "zero_point", 27.5, "MAGZP", "", false},
		{"zero point of a second", cards("MAGZPT", 25.0, "magnitude of 1 count/s", "EXPTIME", 100, ""), nil, "zero_point", 30, "MAGZPT (per second)", "one count per second", false},
		{"zero point of a second, rate", cards("MAGZPT", 25.0, "magnitude of 1 count/s", "EXPTIME", 100, "", "BUNIT", "count/s", ""), nil, "zero_point", 25, "MAGZPT", "", false},
		{"listed zero point of a second", cards("ZPS", 25.0, "", "EXPTIME", 100, ""), func(kw *Keywords) { kw.ZeroPointPerSecond = []string{"ZPS"} }, "zero_point", 30, "ZPS (per second)", "brought to", false},
		{"place holder", cards("MAGZP", 0.0, ""), nil, "zero_point", 0, "", "place holder", true},
		{"airmass", cards("AIRMASS", 1.23, ""), nil, "airmass", 1.23, "AIRMASS", "", false},
		{"airmass of ends", cards("AMSTART", 1.2, "", "AMEND", 1.4, ""), nil, "airmass", 1.3, "mean of AMSTART and AMEND", "", false},
		{"no airmass", cards("AIRMASS", 0.0, ""), nil, "airmass", 0, "", "makes no sense", true},

		{"end by its comment", cards("MJD-OBS", start, "MJD at end of exposure", "EXPTIME", 100, ""), nil, "mid_mjd", start - 50./86400, "MJD-OBS (end)", "its card says so", false},
		{"middle by its comment", cards("DATE-OBS", "2024-01-01T00:00:00", "UTC of mid-exposure", "EXPTIME", 100, ""), nil, "mid_mjd", start, "DATE-OBS (middle)", "its card says so", false},
		{"end by comparison", cards("MJD-OBS", start+100./86400, "", "DATE-OBS", "2024-01-01T00:00:00", "", "EXPTIME", 100, ""), nil,
			"mid_mjd", start + 50./86400, "MJD-OBS (end)", "one exposure after DATE-OBS", false},
		{"middle by comparison", cards("MJD-OBS", start+50./86400, "", "DATE-OBS", "2024-01-01T00:00:00", "", "EXPTIME", 100, ""), nil,
			"mid_mjd", start + 50./86400, "MJD-OBS (middle)", "half of an exposure", false},
		{"contradiction", cards("MJD-OBS", start+1, "", "DATE-OBS", "2024-01-01T00:00:00", "", "EXPTIME", 100, ""), nil,
			"mid_mjd", start + 1 + 50./86400, "MJD-OBS", "differ by 86400 s", false},
		{"end by configuration", cards("SHUT", "2024-01-01T00:00:00", "", "EXPTIME", 100, ""), func(kw *Keywords) { kw.Time = []string{"SHUT:end"} },
			"mid_mjd", start - 50./86400, "SHUT (end)", "configuration", false},
		{"from start to end", cards("DATE-BEG", "2024-01-01T00:00:00", "", "DATE-END", "2024-01-01T00:01:40", ""), nil, "mid_mjd", start + 50./86400, "DATE-BEG", "", false},
		{"exposure from ends", cards("DATE-OBS", "2024-01-01T00:00:00", "", "DATE-END", "2024-01-01T00:01:40", ""), nil, "exposure", 100, "estimated: from start to end", "no keyword holds it", false},
		{"late end", cards("DATE-OBS", "2024-01-01T00:00:00", "", "DATE-END", "2024-01-01T00:02:10", "", "EXPTIME", 100, ""), nil, "mid_mjd", start + 50./86400, "DATE-OBS", "30 s from start", false},
		{"shutter pauses", cards("DATE-OBS", "2024-01-01T00:00:00", "", "TELAPSE", 300.0, "", "EXPTIME", 100, ""), nil, "mid_mjd", start + 150./86400, "DATE-OBS", "TELAPSE", false},
		{"elapsed alone", cards("DATE-OBS", "2024-01-01T00:00:00", "", "TELAPSE", 300.0, ""), nil, "mid_mjd", start + 150./86400, "DATE-OBS", "is not said", false},
		{"old date", cards("DATE-OBS", "01/12/98", "", "UT", "06:00:00", "", "EXPTIME", 0, ""), nil, "mid_mjd", 51148.25, "DATE-OBS and UT", "1998-12-01", false},
		{"no date", cards("DATE-OBS", "last night", ""), nil, "mid_mjd", 0, "", "is no date", true},
		{"unknown scale", cards("DATE-OBS", "2024-01-01T00:00:00", "", "TIMESYS", "LOCAL", "", "EXPTIME", 0, ""), nil, "mid_mjd", start, "DATE-OBS", "no time scale", false},
		{"TAI", cards("DATE-OBS", "2024-01-01T00:00:37", "", "TIMESYS", "TAI", "", "EXPTIME", 0, ""), nil, "mid_mjd", start, "DATE-OBS", "37.000 s taken off", false},
	} {
		m, report := understand(t, c.h, c.change)
		got := map[string]float64{"gain": m.Gain, "read_noise": m.ReadNoise, "saturation": m.Saturation, "exposure": m.Exposure, "zero_point": m.ZeroPoint, "airmass": m.Airmass, "mid_mjd": m.MidMJD}[c.key]
		tolerance := 1e-7 * math.Abs(c.value)
		if c.key == "mid_mjd" {
			tolerance = 2e-8 // 2 ms
		}
		if c.unknown != math.IsNaN(got) || !c.unknown && math.Abs(got-c.value) > tolerance || m.Origin[c.key] != c.origin {
			t.Errorf("%s: %s = %.9g from %q, want %.9g from %q", c.name, c.key, got, m.Origin[c.key], c.value, c.origin)
		}
		var said []string
		for _, r := range report.Remarks {
			if r.About == c.key {
				said = append(said, r.Text)
			}
		}
		if all := strings.Join(said, "; "); c.remark == "" && all != "" || !strings.Contains(all, c.remark) {
			t.Errorf("%s: remarks %q, want %q", c.name, all, c.remark)
		}
	}
}

func TestPointing(t *testing.T) {
	_, r := understand(t, cards("OBJCTRA", "01 02 03", "", "OBJCTDEC", "-10 30 00", "", "SECPIX", 0.6, "", "IMAGETYP", "Flat Field", ""), nil)
	if math.Abs(r.RA-15.5125) > 1e-9 || r.Dec != -10.5 || r.PixelScale != 0.6 || r.Origin["pointing"] != "OBJCTRA and OBJCTDEC" {
		t.Errorf("%+v", r)
	}
	if len(r.Remarks) == 0 || !strings.Contains(r.Remarks[len(r.Remarks)-1].Text, "no exposure of the sky") {
		t.Errorf("remarks %v", r.Remarks)
	}
}

func TestInherit(t *testing.T) {
	path := filepath.Join(t.TempDir(), "m.fits")
	image := func(name string, inherit any) *fits.ImageHDU {
		return &fits.ImageHDU{Name: name, Header: header("INHERIT", inherit), Width: 40, Height: 30, Float: noisy(1200, 1)}
	}
	if err := fits.Write(path, header("GAIN", 2.5), image("A", true), image("B", false), image("C", nil)); err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string]string{"A": "GAIN of the primary HDU", "B": "", "C": "GAIN of the primary HDU"} {
		d, err := Describe(path+"["+name+"]", DefaultKeywords())
		if err != nil || d.Meta.Origin["gain"] != want {
			t.Errorf("%s: gain from %q (%v), want %q", name, d.Meta.Origin["gain"], err, want)
		}
	}
}

func TestMaskBitsBecomeFlags(t *testing.T) {
	path := filepath.Join(t.TempDir(), "m.fits")
	mask := make([]uint16, 1200)
	mask[1], mask[2], mask[3], mask[4], mask[5] = 4, 8, 4|1, 2, 1<<15
	if err := fits.WritePrimary(path, &fits.ImageHDU{Width: 40, Height: 30, Float: noisy(1200, 1)}, &fits.ImageHDU{Name: "DQ", Width: 40, Height: 30, Bits: mask}); err != nil {
		t.Fatal(err)
	}
	kw := DefaultKeywords()
	kw.Mask = "DQ"
	kw.MaskFlags = map[frame.Flag]uint64{frame.Saturated: 4, frame.CosmicRay: 8 | 1<<15}
	for _, bits := range []uint64{0, 2} {
		kw.MaskBits = bits
		want := map[int]frame.Flag{1: frame.Saturated, 2: frame.CosmicRay, 3: frame.Saturated | frame.UserMasked, 4: frame.UserMasked, 5: frame.CosmicRay}
		if bits == 2 {
			want[3] = frame.Saturated
		}
		for p, flag := range load(t, path, kw).Flags.Bits {
			if flag != want[p] {
				t.Errorf("mask bits %d: pixel %d has flags %v, want %v", bits, p, flag, want[p])
			}
		}
	}
}

// TestMaskValuesThatCannotBeTold: float32 planes hold whole numbers to 2^24.
func TestMaskValuesThatCannotBeTold(t *testing.T) {
	img := frame.New("m", frame.NewImage(2, 1))
	mask := &fits.Image{Width: 2, Height: 1, Pix: []float32{1 << 25, -1 << 15}, BitPix: 32}
	if err := applyMask(img, mask, &Keywords{MaskBits: 1}); err == nil {
		t.Error("bits beyond 2^24 were believed")
	}
	if err := applyMask(img, mask, &Keywords{}); err != nil || img.Flags.Bits[0] != frame.UserMasked {
		t.Errorf("a mask of which only zero matters: %v, %v", img.Flags.Bits, err)
	}
	mask.Pix[0], mask.BitPix = 0, 16 // the sign bit of 16 bits
	img = frame.New("m", frame.NewImage(2, 1))
	if err := applyMask(img, mask, &Keywords{MaskBits: 1 << 15}); err != nil || img.Flags.Bits[1] != frame.UserMasked {
		t.Errorf("bit 15 of a signed mask: %v, %v", img.Flags.Bits, err)
	}
}

// TestCompanionsOfMosaics: planes go to the image of their version, and to none
// when several images could claim them.
func TestCompanionsOfMosaics(t *testing.T) {
	plane := func(name string, version int, value float32) *fits.ImageHDU {
		pix := noisy(1200, uint64(version)+1)
		if value > 0 {
			for p := range pix {
				pix[p] = value
			}
		}
		h := &fits.Header{}
		if version > 0 {
			h.Set("EXTVER", version, "")
		}
		return &fits.ImageHDU{Name: name, Header: h, Width: 40, Height: 30, Float: pix}
	}
	dir := t.TempDir()
	numbered, loose := filepath.Join(dir, "n.fits"), filepath.Join(dir, "l.fits")
	if err := fits.Write(numbered, nil, plane("SCI", 1, 0), plane("VARIANCE", 1, 9), plane("SCI", 2, 0), plane("VARIANCE", 2, 16), plane("SCI", 3, 0)); err != nil {
		t.Fatal(err)
	}
	if err := fits.Write(loose, nil, plane("A", 0, 0), plane("B", 0, 0), plane("VARIANCE", 0, 9)); err != nil {
		t.Fatal(err)
	}
	for path, want := range map[string]float32{numbered + "[SCI,1]": 9, numbered + "[SCI,2]": 16, numbered + "[SCI,3]": 0, loose + "[A]": 0, loose + "[B]": 0} {
		f, report, err := Read(path, DefaultKeywords())
		if err != nil {
			t.Fatal(err)
		}
		got := float32(0)
		if f.Variance != nil {
			got = f.Variance.Pix[0]
		}
		if got != want || (want == 0) != (len(report.Remarks) > 0) {
			t.Errorf("%s: variance %g, remarks %v; want %g", path, got, report.Remarks, want)
		}
	}
	twins := filepath.Join(dir, "t.fits")
	if err := fits.Write(twins, nil, plane("CHIP", 0, 0), plane("CHIP", 0, 0)); err != nil {
		t.Fatal(err)
	}
	if a, b := load(t, twins+"[1]", DefaultKeywords()), load(t, twins+"[2]", DefaultKeywords()); a.Name == b.Name {
		t.Errorf("two images are both named %s", a.Name)
	}
}
