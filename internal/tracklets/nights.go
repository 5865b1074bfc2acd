package tracklets

import (
	"fmt"
	"hash/fnv"
	"math"
	"slices"
	"sort"

	"nightsift/internal/astro"
)

// NightsConfig says which tracklets of different nights are joined. Start from
// DefaultNightsConfig.
type NightsConfig struct {
	LeastDays, MostDays float64 // d between two tracklets
	Sigmas              float64 // by which the second may be off the way of the first, on either axis
	RateFloor           float64 // arcsec/h, common error of the rates of a night: the observer turns with the Earth
	Acceleration        float64 // arcsec/h per day, largest change of the rate, beyond Sigmas errors
	MaxExpected         float64 // accidental tracklets that may be expected where one is joined
}

// DefaultNightsConfig joins over half a day to five days, with 1 arcsec/h for the
// parallax of the day (at most 2.3 at a distance of 1 au) and a change of the
// rate by 1 arcsec/h in a day, ten times that of the main belt near opposition.
func DefaultNightsConfig() NightsConfig {
	return NightsConfig{LeastDays: 0.5, MostDays: 5, Sigmas: 3, RateFloor: 1, Acceleration: 1, MaxExpected: 0.1}
}

// Night is a tracklet with the night it belongs to.
type Night struct {
	Tracklet
	Night string
	Area  float64 // square degrees that were searched in the night
}

// Track is a chain of tracklets that one body may have made.
type Track struct {
	ID    string // stable: the same tracklets give the same
	Links []Link // in order of time
}

// Link is a tracklet of a Track. The numbers tell of the way from the one before;
// they are NaN for the first.
type Link struct {
	Index       int     // of the list given
	Offset      float64 // arcsec, from the place that the mean of both rates leads to
	Sigma       float64 // the same in units of its error
	Rate, Angle float64 // arcsec/h; deg from north through east, between the two
	Expected    float64 // tracklets that chance would have put within the limits
}

// Join links tracklets of different nights. On a tangent plane a body with a
// constant acceleration goes from one to the other by the mean of its two rates
// times the time, so this place is where the second is looked for; its error is
// that of the rates times the time. Pairs are taken in the order of what chance
// would have put there; a tracklet has one before it and one after it at most.
// The result does not depend on the order of the list, apart from the indices.
func Join(list []Night, cfg NightsConfig) []Track {
	type pair struct {
		a, b int
		Link
	}
	count := map[string]int{}
	for i := range list {
		count[list[i].Night]++
	}
	var pairs []pair
	for a := range list {
		for b := range list {
			days := list[b].MJD - list[a].MJD
			if list[a].Night == list[b].Night || !(days >= cfg.LeastDays && days <= cfg.MostDays) {
				continue
			}
			if l, ok := link(&list[a].Tracklet, &list[b].Tracklet, days, cfg); ok {
				density := float64(count[list[b].Night]) / list[b].Area // per square degree
				l.Index = b
				l.Expected *= density / (3600 * 3600)
				if l.Expected <= cfg.MaxExpected {
					pairs = append(pairs, pair{a, b, l})
				}
			}
		}
	}
	sort.Slice(pairs, func(i, j int) bool {
		p, q := &pairs[i], &pairs[j]
		if p.Expected != q.Expected {
			return p.Expected < q.Expected
		}
		if x, y := list[p.a].ID, list[q.a].ID; x != y {
			return x < y
		}
		return list[p.b].ID < list[q.b].ID
	})
	after, before := map[int]pair{}, map[int]bool{}
	for _, p := range pairs {
		if _, taken := after[p.a]; !taken && !before[p.b] {
			after[p.a], before[p.b] = p, true
		}
	}
	var tracks []Track
	for i := range list {
		p, leads := after[i]
		if before[i] || !leads {
			continue
		}
		nan := math.NaN()
		t := Track{Links: []Link{{Index: i, Offset: nan, Sigma: nan, Rate: nan, Angle: nan, Expected: nan}}}
		for ; leads; p, leads = after[p.b] {
			t.Links = append(t.Links, p.Link)
		}
		h := fnv.New64a()
		for _, l := range t.Links {
			fmt.Fprintf(h, "%q", list[l.Index].ID)
		}
		t.ID = fmt.Sprintf("%016x", h.Sum64())
		tracks = append(tracks, t)
	}
	slices.SortFunc(tracks, func(s, t Track) int {
		x, y := &list[s.Links[0].Index], &list[t.Links[0].Index]
		switch {
		case x.MJD != y.MJD && x.MJD < y.MJD:
			return -1
		case x.MJD != y.MJD:
			return 1
		case s.ID < t.ID:
			return -1
		}
		return 1
	})
	return tracks
}

// link compares two tracklets. Expected is the area [arcsec²] within the limits.
func link(a, b *Tracklet, days float64, cfg NightsConfig) (l Link, ok bool) {
	hours := 24 * days
	for _, axis := range [][2]float64{{b.East - a.East, math.Hypot(a.EastErr, b.EastErr)}, {b.North - a.North, math.Hypot(a.NorthErr, b.NorthErr)}} {
		if !(math.Abs(axis[0]) <= cfg.Acceleration*days+cfg.Sigmas*math.Hypot(axis[1], cfg.RateFloor)) {
			return l, false
		}
	}
	sin, cos := math.Sincos(astro.PositionAngle(a.RA, a.Dec, b.RA, b.Dec) * math.Pi / 180)
	way := astro.Separation(a.RA, a.Dec, b.RA, b.Dec) * 3600
	east, north := way*sin, way*cos
	dx, dy := east-(a.East+b.East)/2*hours, north-(a.North+b.North)/2*hours
	along := func(place, placeB, rate, rateB float64) float64 {
		return math.Sqrt(place*place + placeB*placeB + hours*hours*((rate*rate+rateB*rateB)/4+cfg.RateFloor*cfg.RateFloor))
	}
	sx, sy := along(a.RAErr, b.RAErr, a.EastErr, b.EastErr), along(a.DecErr, b.DecErr, a.NorthErr, b.NorthErr)
	if !(math.Abs(dx) <= cfg.Sigmas*sx && math.Abs(dy) <= cfg.Sigmas*sy) {
		return l, false
	}
	l.Offset, l.Sigma = math.Hypot(dx, dy), math.Hypot(dx/sx, dy/sy)
	l.Rate = math.Hypot(east, north) / hours
	l.Angle = math.Mod(math.Atan2(east, north)*180/math.Pi+360, 360)
	// The rates must agree as well: of tracklets at random up to 60 arcsec/h fast
	// in all directions, this part does.
	window := func(err float64) float64 {
		return 2 * (cfg.Acceleration*days + cfg.Sigmas*math.Hypot(err, cfg.RateFloor))
	}
	const fast = 60
	rates := window(math.Hypot(a.EastErr, b.EastErr)) * window(math.Hypot(a.NorthErr, b.NorthErr)) / (math.Pi * fast * fast)
	l.Expected = 4 * cfg.Sigmas * cfg.Sigmas * sx * sy * math.Min(1, rates)
	return l, true
}
