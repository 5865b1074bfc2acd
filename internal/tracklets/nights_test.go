package tracklets

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// several makes tracklets of bodies with constant accelerations in some nights,
// measured over half an hour, and of strangers in one night each.
func several(seed uint64, bodies, strangers int) (list []Night, owner map[string]int) {
	r := rand.New(rand.NewPCG(3, seed))
	owner = map[string]int{}
	const area, err = 4.0, 0.15 // square degrees; arcsec
	rateErr := err * math.Sqrt2 / 0.5
	add := func(body, night int, east, north, ve, vn float64) {
		t := Tracklet{ID: fmt.Sprintf("%d-%d-%d", seed, body, night), MJD: 61000.8 + float64(night) + 0.02*r.Float64(), Dec: 2 + (north+err*r.NormFloat64())/3600,
			RAErr: err, DecErr: err, East: ve + rateErr*r.NormFloat64(), North: vn + rateErr*r.NormFloat64(), EastErr: rateErr, NorthErr: rateErr}
		t.RA = 150 + (east+err*r.NormFloat64())/3600/math.Cos(t.Dec*math.Pi/180)
		owner[t.ID] = body
		list = append(list, Night{t, fmt.Sprint("night ", night), area})
	}
	for b := range bodies {
		x, y := (r.Float64()-0.5)*7200, (r.Float64()-0.5)*7200
		ve, vn := -20-20*r.Float64(), 10*r.NormFloat64()
		ae, an := 0.1*r.NormFloat64(), 0.1*r.NormFloat64() // arcsec/h per day
		for _, night := range []int{0, 1, 4} {
			d := float64(night)
			add(b+1, night, x+(ve*d+ae*d*d/2)*24, y+(vn*d+an*d*d/2)*24, ve+ae*d, vn+an*d)
		}
	}
	for s := range strangers {
		v, angle := 10+50*r.Float64(), 2*math.Pi*r.Float64()
		add(-1-s, []int{0, 1, 4}[s%3], (r.Float64()-0.5)*7200, (r.Float64()-0.5)*7200, v*math.Cos(angle), v*math.Sin(angle))
	}
	return list, owner
}

// Tracklets of one body are joined over nights, those of strangers are not, and
// the order of the list does not matter.
func TestBodiesAreFollowedOverNights(t *testing.T) {
	whole, bodies, mixed := 0, 0, 0
	for seed := range uint64(8) {
		list, owner := several(seed, 6, 9)
		bodies += 6
		tracks := Join(list, DefaultNightsConfig())
		for _, k := range tracks {
			of := owner[list[k.Links[0].Index].ID]
			same := of > 0
			for i, l := range k.Links {
				same = same && owner[list[l.Index].ID] == of
				if i > 0 && (l.Sigma > 3*math.Sqrt2 || !(l.Expected <= 0.1) || math.Abs(l.Rate-math.Hypot(list[l.Index].East, list[l.Index].North)) > 8) {
					t.Errorf("a link of %+v", l)
				}
			}
			switch {
			case !same:
				mixed++
			case len(k.Links) == 3:
				whole++
			}
		}
		turned := slices.Clone(list)
		slices.Reverse(turned)
		again := Join(turned, DefaultNightsConfig())
		if len(again) != len(tracks) {
			t.Fatalf("%d tracks, of the list turned round %d", len(tracks), len(again))
		}
		for i := range again {
			if again[i].ID != tracks[i].ID {
				t.Errorf("track %d depends on the order of the list", i)
			}
		}
	}
	t.Logf("%d of %d bodies whole, %d tracks with a stranger", whole, bodies, mixed)
	if whole < bodies*9/10 || mixed > bodies/10 {
		t.Errorf("%d of %d bodies whole, %d tracks with a stranger", whole, bodies, mixed)
	}
}
