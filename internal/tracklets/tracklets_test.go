package tracklets

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// night invents the detections of one field over a night: bodies that move,
// stars that flare at rest, and others that are seen once.
type night struct {
	list      []Detection
	exposures []Exposure
	owner     map[string]int // of each detection of a body
}

const side = 0.3 // deg

func newNight(seed uint64, frames, bodies, still, single int, rate float64) *night {
	r := rand.New(rand.NewPCG(seed, 3))
	n := &night{owner: map[string]int{}}
	ra, dec := 359.95, 48.0
	cos := math.Cos(dec * math.Pi / 180)
	at := func(k int) float64 { return 61300.2 + 0.9/24*float64(k) }
	see := func(k int, east, north, mag float64) string {
		e := 0.08 + 0.1*r.Float64()
		d := Detection{ID: fmt.Sprintf("d%05d", r.IntN(1e9)), Frame: fmt.Sprint("f", k), MJD: at(k), Err: e, Mag: mag + 0.1*r.NormFloat64(), MagErr: 0.1,
			RA: math.Mod(ra+(east+e*r.NormFloat64())/3600/cos+360, 360), Dec: dec + (north+e*r.NormFloat64())/3600}
		n.list = append(n.list, d)
		return d.ID
	}
	place := func() (float64, float64) { return (r.Float64() - 0.5) * side * 3600, (r.Float64() - 0.5) * side * 3600 }
	for k := range frames {
		n.exposures = append(n.exposures, Exposure{fmt.Sprint("f", k), side * side})
	}
	for b := range bodies {
		x, y := place()
		sin, c := math.Sincos(2 * math.Pi * r.Float64())
		v := rate * (0.2 + 0.8*r.Float64())
		for k := range frames {
			t := (at(k) - at(0)) * 24
			n.owner[see(k, x+v*t*sin, y+v*t*c, 19+0.05*float64(b%20))] = b + 1
		}
	}
	for range still {
		x, y := place()
		for k := range frames {
			see(k, x, y, 19.5)
		}
	}
	for range single {
		x, y := place()
		see(r.IntN(frames), x, y, 18.5+2*r.Float64())
	}
	return n
}

// Bodies are found whole, what is at rest is not, and errors are honest.
func TestBodiesAreFound(t *testing.T) {
	var whole, bodies, mixed int
	var chi2, free float64
	for seed := range uint64(6) {
		n := newNight(seed, 4, 12, 20, 60, 50)
		bodies += 12
		for _, k := range Find(n.list, n.exposures, DefaultConfig()) {
			of := n.owner[n.list[k.Members[0]].ID]
			same := true
			for _, i := range k.Members {
				same = same && of > 0 && n.owner[n.list[i].ID] == of
			}
			switch {
			case !same:
				mixed++
			case len(k.Members) == 4:
				whole++
				chi2, free = chi2+k.Chi2, free+float64(k.Free)
			}
			if k.Rate < 5 {
				t.Errorf("a tracklet of %.2f arcsec/h: it stands still", k.Rate)
			}
		}
	}
	t.Logf("%d of %d bodies whole, %d tracklets with a stranger; chi-square %.1f of %g", whole, bodies, mixed, chi2, free)
	if whole < bodies-3 || mixed > 2 {
		t.Errorf("%d of %d bodies whole, %d tracklets with a stranger", whole, bodies, mixed)
	}
	// The floor widens errors of 0.08 to 0.18 arcsec a little.
	if r := chi2 / free; r < 0.65 || r > 1.15 {
		t.Errorf("chi-square per degree of freedom is %.2f, expected a little below 1", r)
	}
}

// Rate, direction and place are those of the motion, also across zero hours.
func TestRateAndAngle(t *testing.T) {
	var list []Detection
	var exposures []Exposure
	cos := math.Cos(-30 * math.Pi / 180)
	for k := range 3 {
		h := float64(k) * 0.5
		list = append(list, Detection{ID: fmt.Sprint(k), Frame: fmt.Sprint(k), MJD: 61300 + h/24, Err: 0.1, Mag: math.NaN(),
			RA: math.Mod(359.999+30*h/3600/cos, 360), Dec: -30 + 40*h/3600})
		exposures = append(exposures, Exposure{fmt.Sprint(k), 0.1})
	}
	got := Find(list, exposures, DefaultConfig())
	if len(got) != 1 || len(got[0].Members) != 3 {
		t.Fatalf("found %+v", got)
	}
	k := got[0]
	if math.Abs(k.Rate-50) > 0.02 || math.Abs(k.Angle-36.8699) > 0.02 || math.Abs(k.MJD-61300-0.5/24) > 1e-9 || math.Abs(k.Dec+30-20./3600) > 1e-6 {
		t.Errorf("found %+v, expected 50 arcsec/h towards 36.87 deg", k)
	}
	// Two of three equal errors half an hour from the middle: e/√(2·0.5²).
	if want := math.Hypot(0.1, 0.05) / math.Sqrt(0.5); math.Abs(k.EastErr-want) > 1e-9 {
		t.Errorf("error of the rate %.4f, expected %.4f", k.EastErr, want)
	}
}

// The number of accidental links that is stated is the one that chance makes.
func TestChanceIsStated(t *testing.T) {
	var found int
	var stated float64
	cfg := DefaultConfig()
	cfg.MaxFalse, cfg.MaxRate, cfg.MagSpread = 1, 40, 9
	const nights, each = 60, 40
	for seed := range uint64(nights) {
		n := newNight(100+seed, 2, 0, 0, 2*each, 50)
		f := &finder{list: n.list, cfg: cfg, density: map[string]float64{}, side: map[string]float64{}}
		f.prepare(n.exposures)
		for a := range f.order {
			found += len(f.from(a))
			if f.list[f.order[a]].Frame == "f0" {
				// All links up to the largest rate, as Expected counts them.
				r := cfg.MaxRate * 0.9
				stated += f.density["f1"] * math.Pi * r * r
			}
		}
	}
	t.Logf("%d accidental pairs, %.1f expected", found, stated)
	if d := math.Abs(float64(found) - stated); d > 4*math.Sqrt(stated) {
		t.Errorf("%d accidental pairs, %.1f expected", found, stated)
	}
}

// What a tracklet states of chance is right on nights of several frames too: of
// strangers on the first frame, the part with a link of Expected below e is
// 1 - exp(-e).
func TestChanceAmongSeveralFrames(t *testing.T) {
	cfg := DefaultConfig()
	cfg.MaxFalse, cfg.MaxRate, cfg.MagSpread = 1, 40, 9
	const frames, each, below = 5, 40, 0.2
	firsts, linked := 0, 0
	for seed := range uint64(40) {
		n := newNight(500+seed, frames, 0, 0, frames*each, 50)
		f := &finder{list: n.list, cfg: cfg, density: map[string]float64{}, side: map[string]float64{}}
		f.prepare(n.exposures)
		for a := range f.order {
			if f.list[f.order[a]].Frame != "f0" {
				continue
			}
			firsts++
			least := math.Inf(1)
			for _, k := range f.from(a) {
				if len(k.Members) == 2 {
					least = min(least, k.Expected)
				}
			}
			if least < below {
				linked++
			}
		}
	}
	want := float64(firsts) * -math.Expm1(-below)
	t.Logf("%d of %d linked, %.1f expected", linked, firsts, want)
	// Some lie near an edge, and few links have a third member.
	if d := float64(linked) - want; d > 4*math.Sqrt(want) || d < -4*math.Sqrt(want)-0.15*want {
		t.Errorf("%d of %d linked, %.1f expected", linked, firsts, want)
	}
}

// The order of the detections does not matter.
func TestOrderDoesNotMatter(t *testing.T) {
	n := newNight(9, 3, 8, 5, 40, 60)
	names := func(list []Detection) []string {
		var out []string
		for _, k := range Find(list, n.exposures, DefaultConfig()) {
			out = append(out, fmt.Sprintf("%s %d %.9g %.9g %.9g", k.ID, len(k.Members), k.Rate, k.Angle, k.Expected))
		}
		return out
	}
	want := names(n.list)
	if len(want) < 5 {
		t.Fatalf("%d tracklets", len(want))
	}
	mixed := slices.Clone(n.list)
	r := rand.New(rand.NewPCG(1, 1))
	for range 5 {
		r.Shuffle(len(mixed), func(a, b int) { mixed[a], mixed[b] = mixed[b], mixed[a] })
		if got := names(mixed); !slices.Equal(got, want) {
			t.Fatalf("in another order: %v, expected %v", got, want)
		}
	}
}

// Useless detections are passed over.
func TestUselessDetections(t *testing.T) {
	nan := math.NaN()
	list := []Detection{{ID: "a", Frame: "1", MJD: nan, RA: 1, Dec: 1, Err: 0.1}, {ID: "b", Frame: "1", MJD: 1, RA: nan, Dec: 1, Err: 0.1},
		{ID: "c", Frame: "2", MJD: 2, RA: 1, Dec: 1, Err: nan}, {ID: "d", Frame: "3", MJD: 2, RA: 1, Dec: 91, Err: 1}, {ID: "e", Frame: "4", MJD: math.Inf(1), RA: 1, Dec: 1, Err: 1}}
	if got := Find(list, nil, DefaultConfig()); len(got) != 0 {
		t.Errorf("found %+v", got)
	}
	if got := Find(nil, nil, DefaultConfig()); got != nil {
		t.Errorf("found %+v of nothing", got)
	}
}
