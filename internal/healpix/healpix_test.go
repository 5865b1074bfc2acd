package healpix

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"nightsift/internal/outside"
)

func TestPixelsHoldTheirCentres(t *testing.T) {
	for order := range 6 {
		for pixel := range Pixels(order) {
			if got := Pixel(order, direct(Centre(order, pixel))[0], direct(Centre(order, pixel))[1]); got != pixel {
				t.Fatalf("order %d: the centre of %d is in %d", order, pixel, got)
			}
		}
	}
	r := rand.New(rand.NewPCG(5, 5))
	for range 20000 {
		order := r.IntN(MaxOrder + 1)
		pixel := r.Int64N(Pixels(order))
		ra, dec := Centre(order, pixel)
		if order > 24 { // beyond, a position in float64 degrees is as coarse as a pixel
			continue
		}
		if got := Pixel(order, ra, dec); got != pixel {
			t.Errorf("order %d: the centre %v %v of %d is in %d", order, ra, dec, pixel, got)
		}
	}
	for _, p := range [][2]float64{{0, 90}, {0, -90}, {360, 0}, {-1e-300, 41.8}, {720.5, -41.9}, {45, 90}, {90, 89.9999999999}} {
		if got := Pixel(MaxOrder, p[0], p[1]); got < 0 || got >= Pixels(MaxOrder) {
			t.Errorf("%v is in pixel %d", p, got)
		}
	}
}

func direct(ra, dec float64) [2]float64 { return [2]float64{ra, dec} }

// Pixels of random places, centres and outlines, by healpy.
func TestAgainstHealpy(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 6))
	type place struct {
		Order   int
		RA, Dec float64
		Pixel   int64
		Centre  [2]float64
	}
	type outline struct {
		Order   int
		Corners [][2]float64
		Pixels  []int64
	}
	var places []place
	for range 5000 {
		p := place{Order: r.IntN(25), RA: 360 * r.Float64(), Dec: math.Asin(2*r.Float64()-1) * 180 / math.Pi}
		switch r.IntN(6) {
		case 0: // close to a pole
			p.Dec = math.Copysign(90-math.Pow(10, -6*r.Float64()), p.Dec)
		case 1: // on the border of the caps
			p.Dec = math.Copysign(math.Asin(2./3)*180/math.Pi+1e-7*r.NormFloat64(), p.Dec)
		}
		p.Pixel = Pixel(p.Order, p.RA, p.Dec)
		p.Centre = direct(Centre(p.Order, p.Pixel))
		places = append(places, p)
	}
	var outlines []outline
	for k := range 40 {
		o := outline{Order: 4 + k%8}
		// Four corners and the middles of the sides, pushed out a little: convex.
		half := math.Pow(2, -float64(o.Order)) * (200 + 1200*r.Float64()) // deg
		ra, dec := 360*r.Float64(), math.Asin(2*r.Float64()-1)*180/math.Pi
		switch k {
		case 3:
			dec = 89.9999
		case 5:
			dec = -89.5
		case 7:
			ra = 0
		}
		half = min(half, 15)
		turn := 2 * math.Pi * r.Float64()
		for i := range 8 {
			d := half
			if i%2 == 1 {
				d *= 0.78
			}
			a := turn + float64(i)*math.Pi/4
			if k%2 == 1 {
				a = turn - float64(i)*math.Pi/4
			}
			o.Corners = append(o.Corners, away(ra, dec, d, a))
		}
		for _, r := range Within(o.Order, o.Corners) {
			for p := r.From; p < r.To; p++ {
				o.Pixels = append(o.Pixels, p)
			}
		}
		outlines = append(outlines, o)
	}
	text, err := json.Marshal(map[string]any{"places": places, "outlines": outlines})
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "in.json")
	if err := os.WriteFile(path, text, 0o644); err != nil {
		t.Fatal(err)
	}
	out := outside.Python(t, `
import json, sys
import healpy as hp, numpy as np
data = json.load(open(sys.argv[1]))
worst = 0
for p in data['places']:
    n = 2**p['Order']
    assert hp.ang2pix(n, p['RA'], p['Dec'], nest=True, lonlat=True) == p['Pixel'], p
    v = hp.ang2vec(*p['Centre'], lonlat=True) - np.array(hp.pix2vec(n, p['Pixel'], nest=True))
    worst = max(worst, np.linalg.norm(v))
assert worst < 1e-14, worst
total = 0
for o in data['outlines']:
    n = 2**o['Order']
    v = np.array([hp.ang2vec(*c, lonlat=True) for c in o['Corners']])
    want = np.sort(hp.query_polygon(n, v, inclusive=False, nest=True))
    assert np.array_equal(want, np.array(o['Pixels'] or [], dtype=int)), (o['Order'], len(want), len(o['Pixels'] or []))
    total += len(want)
for order in range(1, 20):
    assert hp.max_pixrad(2**order) * 2**order < 0.69 * np.pi / 2
print(json.dumps([len(data['places']), total, worst]))
`, path)
	t.Log(string(out))
	var n [3]float64
	if err := json.Unmarshal(out, &n); err != nil || n[0] < 1000 || n[1] < 5000 {
		t.Errorf("compared: %v %v: too few", n, err)
	}
}

// away goes a distance [deg] from a place into a direction [rad].
func away(ra, dec, distance, angle float64) [2]float64 {
	sd, cd := math.Sincos(dec * math.Pi / 180)
	s, c := math.Sincos(distance * math.Pi / 180)
	sa, ca := math.Sincos(angle)
	d := math.Asin(max(-1, min(1, sd*c+cd*s*ca)))
	return [2]float64{ra + math.Atan2(sa*s*cd, c-sd*math.Sin(d))*180/math.Pi, d * 180 / math.Pi}
}

func TestStrangeOutlines(t *testing.T) {
	if got := Within(5, [][2]float64{{1, 1}, {2, 2}}); got != nil {
		t.Errorf("two corners hold %v", got)
	}
	square := [][2]float64{{10, 10}, {12, 10}, {12, 12}, {10, 12}}
	twice := [][2]float64{{10, 10}, {10, 10}, {12, 10}, {12, 12}, {12, 12}, {10, 12}}
	a, b := Within(9, square), Within(9, twice)
	if len(a) == 0 || len(a) != len(b) {
		t.Errorf("%d ranges, with corners doubled %d", len(a), len(b))
	}
	// Sides bent inwards: a third fewer, as the area says.
	star := [][2]float64{{10, -1}, {11, -0.5}, {12, -1}, {11.5, 0}, {12, 1}, {11, 0.5}, {10, 1}, {10.5, 0}}
	var n int64
	for _, r := range Within(12, star) {
		n += r.To - r.From
	}
	area := float64(n) / float64(Pixels(12)) * 41252.96
	if math.Abs(area-2) > 0.01 {
		t.Errorf("a star of 2 square degrees has %.4f", area)
	}
}

// A frame of one degree at order 13.
func BenchmarkWithin(b *testing.B) {
	frame := [][2]float64{{10, 40}, {10.65, 40}, {11.3, 40}, {11.3, 40.5}, {11.3, 41}, {10.65, 41}, {10, 41}, {10, 40.5}}
	for b.Loop() {
		Within(13, frame)
	}
}
