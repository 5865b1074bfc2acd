package catalog

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"nightsift/detect"
)

// pointing is a TAN projection about a centre, turned by an angle.
type pointing struct {
	ra, dec, turn float64 // deg
	width, height int
}

func (p pointing) PixelToSky(x, y float64) (float64, float64, error) {
	s, c := math.Sincos(p.turn * radian)
	u, v := scale*(x-float64(p.width+1)/2), scale*(y-float64(p.height+1)/2)
	plane := newPlane(p.ra, p.dec)
	ra, dec := plane.direction(-c*u+s*v, s*u+c*v).position()
	return ra, dec, nil
}

// A position is on the frame if, and only if, it lies between its pixels, at any
// place of the sky, and its tile is among those of the frame.
func TestFootprintCovers(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 8))
	in, out := 0, 0
	for range 400 {
		p := pointing{360 * r.Float64(), math.Asin(2*r.Float64()-1) / radian, 360 * r.Float64(), 500 + r.IntN(20000), 500 + r.IntN(9000)}
		switch r.IntN(4) {
		case 0:
			p.dec = (90 - r.Float64()) * float64(1-2*r.IntN(2))
		case 1:
			p.ra = math.Mod(360+0.5*r.NormFloat64(), 360)
		}
		rec := NewFrameRecord("f", Searched)
		rec.SetWCS(p, p.width, p.height)
		if len(rec.Footprint) != 8 {
			t.Fatalf("footprint %v", rec.Footprint)
		}
		centre, radius, ok := circle(rec.Footprint)
		if !ok {
			t.Fatalf("%+v has no circle", p)
		}
		known := map[int64]bool{}
		ra, dec := centre.position()
		for _, tile := range tiles(ra, dec, radius) {
			if known[tile] {
				t.Fatalf("%+v: tile %d twice", p, tile)
			}
			known[tile] = true
		}
		for range 60 {
			x, y := 0.5+(1.4*r.Float64()-0.2)*float64(p.width), 0.5+(1.4*r.Float64()-0.2)*float64(p.height)
			want := x > 0.5 && y > 0.5 && x < float64(p.width)+0.5 && y < float64(p.height)+0.5
			if ra, dec, _ := p.PixelToSky(x, y); rec.Covers(ra, dec) != want {
				t.Fatalf("%+v: pixel (%g,%g) at (%g,%g) on the frame: %v", p, x, y, ra, dec, !want)
			} else if want {
				in++
				if !known[tileOf(ra, dec)] {
					t.Fatalf("%+v: the tile of (%g,%g) is not noted", p, ra, dec)
				}
			} else {
				out++
			}
		}
	}
	if in < 5000 || out < 5000 {
		t.Errorf("only %d inside and %d outside", in, out)
	}
	bare := NewFrameRecord("f", Searched)
	if bare.Covers(1, 1) {
		t.Error("a frame without footprint covers a place")
	}
}

func TestHistory(t *testing.T) { onEachStore(t, testHistory) }

func testHistory(t *testing.T) {
	s := newStore(t)
	p := pointing{359.99, 12, 30, 2000, 1500}
	add := func(k int, mjd float64, filter string, limit, mag, significance float64, at pointing, status Status) {
		t.Helper()
		rec := record(k)
		rec.MidMJD, rec.Filter, rec.MagLimit5Sigma, rec.Status = mjd, filter, limit, status
		rec.SetWCS(at, at.width, at.height)
		var list []detect.Candidate
		if !math.IsNaN(significance) {
			c := newCandidate(identifier(k), &rec)
			c.X, c.Y, c.XErr, c.YErr = 1500, 300, 0.1, 0.1
			c.RA, c.Dec, _ = p.PixelToSky(1500, 300)
			c.Mag, c.MagErr, c.Significance, c.RealProbability, c.Kind = mag, 0.03, significance, 0.9, detect.NewSource
			list = append(list, c)
		}
		if err := s.AddFrame(ctx, rec, list); err != nil {
			t.Fatal(err)
		}
	}
	n := math.NaN()
	elsewhere := p
	elsewhere.dec += 1
	add(0, 100, "g", 21, n, n, p, Searched)
	add(1, 102, "g", 20.5, n, n, p, Searched) // the last one in g before
	add(2, 103, "r", 20.8, n, n, p, Searched) // the last one before
	add(3, 103.2, "r", n, n, n, p, Searched)  // without a limit
	add(4, 103.5, "g", 22, n, n, elsewhere, Searched)
	add(5, 103.6, "g", 22, n, n, p, SetAside)
	add(6, 104, "g", 20.5, 19.5, 12, p, Searched)
	add(7, 105, "r", 20.5, 18, 40, p, Searched)
	add(8, 108, "g", 20.5, 18.3, 40, p, Searched)
	add(9, 110, "g", 20.5, 18.9, 30, p, Searched)
	add(10, 109, "g", 17, n, n, p, Searched) // too shallow, between
	add(11, 150, "g", 21, n, n, p, Searched)
	o, err := s.Object(ctx, identifier(6))
	if err != nil {
		t.Fatal(err)
	}
	h, err := s.History(ctx, o)
	if err != nil {
		t.Fatal(err)
	}
	if h.Searches != 10 || h.Before != 4 || h.Since != 1 || h.LastMissed == nil || h.LastMissed.Frame != "frame002" || h.LastMissed.MagLimit5Sigma != 20.8 {
		t.Errorf("history %+v, last missed %+v", h, h.LastMissed)
	}
	// 19.5 to 18.3 in 4 days; 20.5 to 19.5 in 2 days or less.
	if math.Abs(h.Rise-0.3) > 1e-9 || math.Abs(h.RiseErr-0.03*math.Sqrt2/4) > 1e-9 || math.Abs(h.RiseLimit-0.5) > 1e-9 {
		t.Errorf("rise %g ± %g, limit %g; want 0.3 ± 0.0106, limit 0.5", h.Rise, h.RiseErr, h.RiseLimit)
	}
	var b strings.Builder
	if err := s.Show(ctx, &b, o.Name); err != nil || !strings.Contains(b.String(), "20.800") || !strings.Contains(b.String(), "0.300") {
		t.Errorf("show: %v\n%s", err, b.String())
	}
	// A later detection that goes, and the frame with it.
	if _, err := s.RemoveFrame(ctx, "frame002"); err != nil {
		t.Fatal(err)
	}
	if h, err = s.History(ctx, o); err != nil || h.LastMissed == nil || h.LastMissed.Frame != "frame001" {
		t.Errorf("history %+v, %v", h, err)
	}
}
