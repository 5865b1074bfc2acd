// Package tracklets links detections of one night that move across the sky.
//
// Over hours a body of the solar system moves evenly on a great circle to well
// below the error of a position, so a tracklet is a straight line in time on a
// tangent plane: place and rate by weighted least squares, with a chi-square
// (Kubica et al. 2007, Icarus 189, 151 gives the task its usual form). How many
// such links chance alone would make follows from the density of detections:
// each detection after the first is asked for in a known area.
package tracklets

import (
	"cmp"
	"crypto/sha256"
	"encoding/hex"
	"maps"
	"math"
	"slices"
	"strings"

	"gonum.org/v1/gonum/stat/combin"
	"gonum.org/v1/gonum/stat/distuv"
)

// Detection is one candidate that may belong to a mover.
type Detection struct {
	ID      string
	Frame   string  // detections of one frame are never linked with each other
	MJD     float64 // d, UTC, middle of the exposure
	RA, Dec float64 // deg, ICRS
	Err     float64 // arcsec, 1 sigma for each axis
	Mag     float64 // NaN: unknown
	MagErr  float64
}

// Exposure is a frame of the night.
type Exposure struct {
	Frame string
	Area  float64 // square degrees that were searched
}

// Config says what is linked. Start from DefaultConfig.
type Config struct {
	MaxRate   float64 // arcsec/h
	Sigmas    float64 // detections may be this far from the line, in their joint errors
	Floor     float64 // arcsec, added in quadrature to every error: registration between frames
	Still     float64 // sigmas: detections that moved less are at rest
	MagSpread float64 // mag, largest change of brightness beyond three errors
	MaxFalse  float64 // tracklets with a larger chance to be accidental are not made
}

// DefaultConfig links up to 300 arcsec/h (main-belt bodies move by up to 60,
// near ones faster) with a chance of one in a hundred to be accidental.
func DefaultConfig() Config {
	return Config{MaxRate: 300, Sigmas: 4, Floor: 0.05, Still: 5, MagSpread: 0.7, MaxFalse: 0.01}
}

// Tracklet is a line through two or more detections.
type Tracklet struct {
	ID      string // stable: the same members give the same
	Members []int  // indices into the list of detections, in order of time

	MJD              float64 // d, mean time of the members; place and errors hold there
	RA, Dec          float64 // deg
	RAErr, DecErr    float64 // arcsec on the sky, 1 sigma
	East, North      float64 // arcsec/h
	EastErr          float64
	NorthErr         float64
	Rate, Angle      float64 // arcsec/h; deg from north through east, 0…360
	Chi2             float64
	Free             int     // degrees of freedom: 0 for two members
	Expected         float64 // accidental links at least as good that the density makes one expect for the first member
	FalseProbability float64 // 1 - exp(-Expected)
}

const arcsec = math.Pi / 180 / 3600

// plane maps positions to a tangent plane [arcsec] by the gnomonic projection.
type plane struct{ ra, sin, cos float64 }

func newPlane(ra, dec float64) plane {
	s, c := math.Sincos(dec * math.Pi / 180)
	return plane{ra * math.Pi / 180, s, c}
}

func (p *plane) to(ra, dec float64) (x, y float64) {
	s, c := math.Sincos(dec * math.Pi / 180)
	sd, cd := math.Sincos(ra*math.Pi/180 - p.ra)
	w := p.sin*s + p.cos*c*cd
	if w <= 0 {
		return math.NaN(), math.NaN()
	}
	return c * sd / w / arcsec, (p.cos*s - p.sin*c*cd) / w / arcsec
}

func (p *plane) from(x, y float64) (ra, dec float64) {
	x, y = x*arcsec, y*arcsec
	den := p.cos - y*p.sin
	ra = math.Mod((p.ra+math.Atan2(x, den))*180/math.Pi+720, 360)
	return ra, math.Atan2(p.sin+y*p.cos, math.Hypot(x, den)) * 180 / math.Pi
}

// Find links detections. The result does not depend on their order, apart from
// the indices. Every detection is in one tracklet at most: that with the most
// members, then the one that chance explains worst. Detections without a
// position, an error or a time are not linked.
func Find(list []Detection, exposures []Exposure, cfg Config) []Tracklet {
	f := &finder{list: list, cfg: cfg, density: map[string]float64{}, side: map[string]float64{}}
	f.prepare(exposures)
	var all []Tracklet
	for a := range f.order {
		all = append(all, f.from(a)...)
	}
	slices.SortFunc(all, func(p, q Tracklet) int {
		return cmp.Or(cmp.Compare(len(q.Members), len(p.Members)), cmp.Compare(p.Expected, q.Expected), cmp.Compare(p.Chi2, q.Chi2), cmp.Compare(p.ID, q.ID))
	})
	taken := make([]bool, len(list))
	var out []Tracklet
	for _, t := range all {
		if t.FalseProbability > cfg.MaxFalse || slices.ContainsFunc(t.Members, func(i int) bool { return taken[i] }) {
			continue
		}
		for _, i := range t.Members {
			taken[i] = true
		}
		out = append(out, t)
	}
	slices.SortFunc(out, func(p, q Tracklet) int { return cmp.Or(cmp.Compare(p.MJD, q.MJD), cmp.Compare(p.ID, q.ID)) })
	return out
}

type finder struct {
	list    []Detection
	cfg     Config
	order   []int              // indices of the movers in order of time, then of name
	density map[string]float64 // per square arcsec, by frame
	side    map[string]float64 // deg, by frame
}

// err2 is the variance of a position for each axis [arcsec²].
func (f *finder) err2(d *Detection) float64 { return d.Err*d.Err + f.cfg.Floor*f.cfg.Floor }

// prepare leaves out what stands still and counts the rest for each frame.
func (f *finder) prepare(exposures []Exposure) {
	var good []int
	for i := range f.list {
		d := &f.list[i]
		if !math.IsNaN(d.RA+d.Dec+d.MJD) && !math.IsInf(d.RA+d.Dec+d.MJD, 0) && d.Err > 0 && d.Err < 1e4 && math.Abs(d.Dec) <= 90 {
			good = append(good, i)
		}
	}
	slices.SortFunc(good, func(a, b int) int {
		return cmp.Or(cmp.Compare(f.list[a].MJD, f.list[b].MJD), cmp.Compare(f.list[a].ID, f.list[b].ID))
	})
	byDec := slices.Clone(good)
	slices.SortStableFunc(byDec, func(a, b int) int { return cmp.Compare(f.list[a].Dec, f.list[b].Dec) })
	still := make([]bool, len(f.list))
	widest := 0.0
	for _, i := range good {
		widest = math.Max(widest, f.err2(&f.list[i]))
	}
	for k, i := range byDec {
		p := &f.list[i]
		for _, j := range byDec[k+1:] {
			q := &f.list[j]
			if (q.Dec-p.Dec)*3600 > f.cfg.Still*math.Sqrt(2*widest) {
				break
			}
			if p.Frame == q.Frame {
				continue
			}
			pl := newPlane(p.RA, p.Dec)
			x, y := pl.to(q.RA, q.Dec)
			if x*x+y*y < f.cfg.Still*f.cfg.Still*(f.err2(p)+f.err2(q)) {
				still[i], still[j] = true, true
			}
		}
	}
	count := map[string]float64{}
	for _, i := range good {
		if !still[i] {
			f.order = append(f.order, i)
			count[f.list[i].Frame]++
		}
	}
	for _, e := range exposures {
		if e.Area > 0 {
			f.density[e.Frame] = count[e.Frame] / (e.Area * 3600 * 3600)
			f.side[e.Frame] = math.Sqrt(e.Area)
		}
	}
}

// alike reports whether two brightnesses may be those of one body.
func (f *finder) alike(a, b *Detection) bool {
	d := math.Abs(a.Mag - b.Mag)
	if math.IsNaN(d) {
		return true
	}
	e := math.Hypot(a.MagErr, b.MagErr)
	if math.IsNaN(e) {
		e = 0
	}
	return d <= f.cfg.MagSpread+3*e
}

// visit is a later look at a place.
type visit struct {
	frame string
	hours float64
}

// visits lists, by name, the frames that looked at the place of a detection later:
// those with a detection within a frame's side of it.
func (f *finder) visits(first *Detection) []visit {
	later := map[string]float64{}
	cos := math.Cos(first.Dec * math.Pi / 180)
	for i := range f.list {
		d := &f.list[i]
		side, t := f.side[d.Frame], (d.MJD-first.MJD)*24
		if t > 0 && math.Abs(d.Dec-first.Dec) <= side && math.Abs(math.Remainder(d.RA-first.RA, 360))*cos <= side {
			later[d.Frame] = t
		}
	}
	var list []visit
	for _, name := range slices.Sorted(maps.Keys(later)) {
		list = append(list, visit{name, later[name]})
	}
	return list
}

// from makes the tracklets whose first member is the a-th detection.
func (f *finder) from(a int) []Tracklet {
	first := &f.list[f.order[a]]
	pl := newPlane(first.RA, first.Dec)
	type near struct {
		i       int
		x, y, t float64 // arcsec, h after the first
	}
	var later []near
	for _, i := range f.order[a+1:] {
		d := &f.list[i]
		t := (d.MJD - first.MJD) * 24
		if d.Frame == first.Frame || !(t > 0) || math.Abs(d.Dec-first.Dec)*3600 > f.cfg.MaxRate*t || !f.alike(first, d) {
			continue
		}
		x, y := pl.to(d.RA, d.Dec)
		if math.Hypot(x, y) <= f.cfg.MaxRate*t {
			later = append(later, near{i, x, y, t})
		}
	}
	visits := f.visits(first)
	var out []Tracklet
	for _, b := range later {
		second := &f.list[b.i]
		vx, vy := b.x/b.t, b.y/b.t
		members := []int{f.order[a], b.i}
		// Of each further frame the detection nearest to the line, within the
		// error of line and place.
		type pick struct {
			i     int
			chi2  float64
			reach float64 // square arcsec in which it was looked for
		}
		best := map[string]pick{}
		for _, c := range later {
			d := &f.list[c.i]
			if d.Frame == second.Frame || c.i == b.i {
				continue
			}
			u := c.t / b.t
			v := f.err2(d) + (1-u)*(1-u)*f.err2(first) + u*u*f.err2(second)
			dx, dy := c.x-vx*c.t, c.y-vy*c.t
			chi2 := (dx*dx + dy*dy) / v
			if chi2 > f.cfg.Sigmas*f.cfg.Sigmas || !f.alike(second, d) {
				continue
			}
			if old, ok := best[d.Frame]; !ok || chi2 < old.chi2 || chi2 == old.chi2 && d.ID < f.list[old.i].ID {
				best[d.Frame] = pick{c.i, chi2, math.Pi * f.cfg.Sigmas * f.cfg.Sigmas * v}
			}
		}
		// Slower links would have been as good, on any later frame of this place.
		expected, rate := 0.0, math.Hypot(vx, vy)
		for _, v := range visits {
			expected += f.density[v.frame] * math.Pi * (rate * v.hours) * (rate * v.hours)
		}
		frames := make([]string, 0, len(best))
		for name := range best {
			frames = append(frames, name)
		}
		slices.Sort(frames)
		for _, name := range frames {
			members = append(members, best[name].i)
			expected *= math.Min(1, f.density[name]*best[name].reach)
		}
		// Chance had the choice among all further frames.
		if more := len(visits) - 1; more >= len(best) {
			expected *= combin.GeneralizedBinomial(float64(more), float64(len(best)))
		}
		slices.SortFunc(members, func(p, q int) int {
			return cmp.Or(cmp.Compare(f.list[p].MJD, f.list[q].MJD), cmp.Compare(f.list[p].ID, f.list[q].ID))
		})
		t := f.fit(pl, members)
		if t.Free > 0 && (distuv.ChiSquared{K: float64(t.Free)}).Survival(t.Chi2) < 1e-3 {
			continue
		}
		if !(t.Rate <= f.cfg.MaxRate) {
			continue
		}
		t.Expected, t.FalseProbability = expected, -math.Expm1(-expected)
		out = append(out, t)
	}
	return out
}

// fit is the weighted straight line through members.
func (f *finder) fit(pl plane, members []int) Tracklet {
	t := Tracklet{Members: members, Free: 2*len(members) - 4}
	ids := make([]string, len(members))
	var w, wt float64
	for k, i := range members {
		d := &f.list[i]
		ids[k] = d.ID
		v := 1 / f.err2(d)
		w += v
		wt += v * (d.MJD - f.list[members[0]].MJD)
	}
	h := sha256.Sum256([]byte("tracklet\x00" + strings.Join(ids, "\x00")))
	t.ID = hex.EncodeToString(h[:8])
	t.MJD = f.list[members[0]].MJD + wt/w
	// With times counted from the weighted mean, place and rate are independent.
	var x, y, vx, vy, tt float64
	for _, i := range members {
		d := &f.list[i]
		v, dt := 1/f.err2(d), (d.MJD-t.MJD)*24
		px, py := pl.to(d.RA, d.Dec)
		x += v * px / w
		y += v * py / w
		vx += v * dt * px
		vy += v * dt * py
		tt += v * dt * dt
	}
	t.East, t.North = vx/tt, vy/tt
	for _, i := range members {
		d := &f.list[i]
		v, dt := 1/f.err2(d), (d.MJD-t.MJD)*24
		px, py := pl.to(d.RA, d.Dec)
		t.Chi2 += v * ((px-x-t.East*dt)*(px-x-t.East*dt) + (py-y-t.North*dt)*(py-y-t.North*dt))
	}
	if t.Free == 0 {
		t.Chi2 = 0
	}
	t.RA, t.Dec = pl.from(x, y)
	t.RAErr, t.DecErr = math.Sqrt(1/w), math.Sqrt(1/w)
	t.EastErr, t.NorthErr = math.Sqrt(1/tt), math.Sqrt(1/tt)
	t.Rate = math.Hypot(t.East, t.North)
	t.Angle = math.Mod(math.Atan2(t.East, t.North)*180/math.Pi+360, 360)
	return t
}
