package catalog

import (
	"bytes"
	"encoding/json"
	"errors"
	"image"
	"image/png"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/detect"
	"nightsift/internal/outside"
)

// stampStore has one object, seen on a turned and a mirrored frame far from the
// frames' middle at high declination; a star stands north of it on both.
func stampStore(t *testing.T, ra, dec float64) (s *Store, ids []string) {
	s = newStore(t)
	for k, turn := range []float64{25, -140} {
		r := record(k)
		at := mirrored{pointing{ra: ra, dec: dec, turn: turn, width: 2000, height: 1500}, k == 1}
		r.SetWCS(at, 2000, 1500)
		c := newCandidate(identifier("stamp", k), &r)
		c.X, c.Y = 1900.3, 1400.8
		if k == 1 { // the same place on the other frame
			c.X, c.Y = findPixel(at, placeOf(t, s, ids[0]))
		}
		c.RA, c.Dec, _ = at.PixelToSky(c.X, c.Y)
		c.XErr, c.YErr, c.Significance, c.RealProbability, c.Kind, c.Mag, c.MagErr, c.Flux, c.FluxErr = 0.1, 0.1, 20+float64(k), 0.99, detect.NewSource, 19, 0.05, 1000, 50
		const n = detect.StampSize
		c.StampNew, c.StampReference, c.StampDifference = make([]float32, n*n), make([]float32, n*n), make([]float32, n*n)
		i0, j0 := math.Round(c.X)-1-n/2, math.Round(c.Y)-1-n/2
		around := newPlane(c.RA, c.Dec)
		north := around.direction(0, 15*scale)
		for j := range n {
			for i := range n {
				p := j*n + i
				a, d, _ := at.PixelToSky(i0+float64(i+1), j0+float64(j+1))
				star := separation(unit(a, d), north) / scale
				noise := float32((i*7919+j*104729)%101)/10 - 5
				c.StampNew[p] = noise + float32(5000*math.Exp(-star*star/4))
				c.StampReference[p] = c.StampNew[p]
				c.StampDifference[p] = noise
			}
		}
		c.StampDifference[(n/2)*n+n/2] = 500
		if err := s.AddFrame(ctx, r, []detect.Candidate{c}); err != nil {
			t.Fatal(err)
		}
		ids = append(ids, c.ID)
	}
	return s, ids
}

// mirrored is a pointing with x the other way round, or not.
type mirrored struct {
	pointing
	flip bool
}

func (m mirrored) PixelToSky(x, y float64) (float64, float64, error) {
	if m.flip {
		x = float64(m.width+1) - x
	}
	return m.pointing.PixelToSky(x, y)
}

// placeOf is the place of a candidate.
func placeOf(t *testing.T, s *Store, id string) [2]float64 {
	c, err := s.Candidate(ctx, id)
	if err != nil {
		t.Fatal(err)
	}
	return [2]float64{c.RA, c.Dec}
}

func findPixel(p Projection, place [2]float64) (x, y float64) {
	x, y = 1000, 750
	step := 1000.0
	away := func(x, y float64) float64 {
		a, d, _ := p.PixelToSky(x, y)
		return separation(unit(a, d), unit(place[0], place[1]))
	}
	for step > 1e-6 {
		best := away(x, y)
		switch {
		case away(x+step, y) < best:
			x += step
		case away(x-step, y) < best:
			x -= step
		case away(x, y+step) < best:
			y += step
		case away(x, y-step) < best:
			y -= step
		default:
			step /= 2
		}
	}
	return x, y
}

func TestStampPictures(t *testing.T) {
	s, ids := stampStore(t, 200, 75)
	for _, id := range ids {
		st, err := s.Stamp(ctx, id, 41)
		if err != nil {
			t.Fatal(err)
		}
		var plain, up bytes.Buffer
		if err := errors.Join(st.EncodePNG(&plain, false), st.EncodePNG(&up, true)); err != nil {
			t.Fatal(err)
		}
		img, err := png.Decode(&plain)
		if err != nil {
			t.Fatal(err)
		}
		side := (img.Bounds().Dx() - 2*gap) / 3
		if side%41 != 0 || side < panel || img.Bounds().Dy() != side {
			t.Errorf("picture of %v", img.Bounds())
		}
		// New and reference are the same pixels here: one stretch makes them equal.
		for y := range side {
			for x := range side {
				if img.At(x, y) != img.At(x+side+gap, y) {
					t.Fatalf("new and reference differ at %d %d", x, y)
				}
			}
		}
		turned, err := png.Decode(&up)
		if err != nil {
			t.Fatal(err)
		}
		// The star: 15 pixels north of the middle.
		x, y := brightestSpot(turned, image.Rect(0, 0, side, side))
		zoom := float64(side) / 41
		if math.Abs(x-float64(side)/2) > 1.5*zoom || math.Abs(float64(side)/2-y-15*zoom) > 1.5*zoom {
			t.Errorf("%s: with north up the star is %.1f px to the right and %.1f px above the middle, want 0 and 15", id,
				(x-float64(side)/2)/zoom, (float64(side)/2-y)/zoom)
		}
	}
}

// brightestSpot is the centre of what is white.
func brightestSpot(img image.Image, r image.Rectangle) (x, y float64) {
	n := 0.0
	for j := r.Min.Y; j < r.Max.Y; j++ {
		for i := r.Min.X; i < r.Max.X; i++ {
			if v, _, _, _ := img.At(i, j).RGBA(); v > 0xf000 {
				x, y, n = x+float64(i)+0.5, y+float64(j)+0.5, n+1
			}
		}
	}
	return x / n, y / n
}

// The world coordinates of stamps, read by astropy, are those of the frame.
func TestStampCoordinates(t *testing.T) {
	s, ids := stampStore(t, 10, -60)
	dir := t.TempDir()
	for k, id := range ids {
		c, err := s.Candidate(ctx, id)
		if err != nil {
			t.Fatal(err)
		}
		st, err := s.Stamp(ctx, id, detect.StampSize)
		if err != nil {
			t.Fatal(err)
		}
		var b bytes.Buffer
		if err := st.EncodeFITS(&b); err != nil {
			t.Fatal(err)
		}
		path := filepath.Join(dir, id+".fits")
		if err := os.WriteFile(path, b.Bytes(), 0o644); err != nil {
			t.Fatal(err)
		}
		if report := outside.Command(t, "fitsverify", path); !strings.Contains(string(report), "0 warning(s) and 0 error(s)") {
			t.Errorf("fitsverify:\n%s", report)
		}
		out := outside.Python(t, `
import json, sys, warnings
from astropy.io import fits
from astropy.wcs import WCS
with fits.open(sys.argv[1], checksum=True) as f:
    assert [h.name for h in f[1:]] == ['NEW', 'REFERENCE', 'DIFFERENCE']
    w = WCS(f['NEW'].header)
    assert f['DIFFERENCE'].data[25, 25] == 500 and f[0].header['CANDID']
    print(json.dumps([list(map(float, w.all_pix2world(x, y, 1))) for x, y in ((1, 1), (51, 1), (51, 51), (1, 51), (26, 26))]))
`, path)
		var sky [][2]float64
		if err := json.Unmarshal(out, &sky); err != nil {
			t.Fatal(err)
		}
		at := mirrored{pointing{ra: 10, dec: -60, turn: []float64{25, -140}[k], width: 2000, height: 1500}, k == 1}
		i0, j0 := math.Round(c.X)-26, math.Round(c.Y)-26
		for i, p := range [][2]float64{{1, 1}, {51, 1}, {51, 51}, {1, 51}, {26, 26}} {
			ra, dec, _ := at.PixelToSky(i0+p[0], j0+p[1])
			if d := separation(unit(ra, dec), unit(sky[i][0], sky[i][1])); d > 1e-4 {
				t.Errorf("%s: pixel %v is off by %g arcsec", id, p, d)
			}
		}
	}
}

func TestStampOfWhat(t *testing.T) {
	s, ids := stampStore(t, 10, -60)
	objects, err := s.Objects(ctx, ObjectQuery{})
	if err != nil || len(objects) != 1 {
		t.Fatal(len(objects), err)
	}
	st, err := s.Stamp(ctx, objects[0].Name, 21)
	if err != nil || st.Candidate.ID != ids[1] || len(st.Diff.Pix) != 21*21 || slices.Max(st.Diff.Pix) != st.Diff.Pix[10*21+10] {
		t.Errorf("stamp of the object: %v", err)
	}
	for _, size := range []int{0, 4, 52} {
		if _, err := s.Stamp(ctx, ids[0], size); err == nil {
			t.Errorf("a stamp of %d pixels", size)
		}
	}
	if _, err := s.Stamp(ctx, "nobody", 21); !errors.Is(err, ErrNotFound) {
		t.Errorf("stamp of nobody: %v", err)
	}
	// Without stamps, and without a scale.
	r := record(7)
	r.Jacobian = NewFrameRecord("", Searched).Jacobian
	bare, blind := newCandidate("bare", &r), newCandidate("blind", &r)
	blind.X, blind.Y, blind.RA, blind.Dec = 100, 100, 10, 10
	zero := make([]float32, detect.StampSize*detect.StampSize)
	blind.StampNew, blind.StampReference, blind.StampDifference = zero, zero, zero
	if err := s.AddFrame(ctx, r, []detect.Candidate{bare, blind}); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Stamp(ctx, "bare", 21); err == nil || !strings.Contains(err.Error(), "no new stamp") {
		t.Errorf("stamp of a candidate without: %v", err)
	}
	st, err = s.Stamp(ctx, "blind", 21)
	if err != nil || st.WCS != nil {
		t.Fatal(err)
	}
	var b bytes.Buffer
	if err := st.EncodePNG(&b, true); err == nil || b.Len() > 0 {
		t.Error("north up without a scale")
	}
	if err := errors.Join(st.EncodePNG(&b, false), st.EncodeFITS(&b)); err != nil {
		t.Error(err)
	}
}
