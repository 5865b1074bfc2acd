package simulate

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"sync"

	"nightsift/internal/wholefile"
)

// The invented station of the demonstration survey.
const (
	StationName      = "Marrow Ridge"
	StationLongitude = 21.4  // deg, east positive
	StationLatitude  = -31.8 // deg
	StationHeight    = 1720  // m
)

// DemoTruth is what WriteDemo put where.
type DemoTruth struct {
	Truth
	Dir        string
	Archive    []string // paths of the exposures for the references
	Frames     []string // paths, in the order of Truth.Frames
	Nights     []string // YYYY-MM-DD of the evening
	Supernovae []Event
}

// Progress is told after each file is done. Calls do not overlap.
type Progress func(done, total int, file string)

// demoFrame is one frame to be rendered.
type demoFrame struct {
	Conditions
	field    int
	folder   string
	expected string
	wrong    bool // another part of the sky than the header says
	cut      bool // file truncated
}

const (
	demoSize  = 1024
	demoFirst = 61466 // MJD of 0h UTC of the first evening's date, 2027-03-02

	demoExposures = 8 // of each field, for its reference
)

// ArchiveName is the folder of the exposures from which the demonstration's
// references are built.
const ArchiveName = "archive"

var (
	demoNights = []int{0, 4, 9, 13, 20, 28} // days after the first
	demoFields = []struct {
		name    string
		ra, dec float64
	}{{"MR-101", 148.21, -8.43}, {"MR-117", 171.94, 4.72}, {"MR-132", 196.38, -14.19}}
)

// WriteDemo invents a small survey and writes it into dir: three fields, with
// exposures of the season before for their references (dir/archive/*.fits), six
// nights of frames (dir/incoming/<night>/*.fits) with supernovae that rise and
// fade on their hosts, asteroids, variable stars and cosmic rays; among the
// frames a truncated file, one of another field than its header says, one
// through cloud, one crossed by a satellite. The orbits of most asteroids go to
// dir/minor-planets.csv, the galaxies to dir/galaxies.csv, the truth to dir/truth.fits, truth.csv and
// truth-frames.csv. Its best signal-to-noise ratios are those against a
// reference that holds all exposures of the archive at their mean width.
// The same seed gives the same bytes. progress may be nil.
func WriteDemo(ctx context.Context, dir string, seed uint64, progress Progress) (*DemoTruth, error) {
	return writeDemo(ctx, dir, seed, demoSize, progress)
}

// WriteSmallDemo is WriteDemo with frames of another side [px].
func WriteSmallDemo(ctx context.Context, dir string, seed uint64, size int, progress Progress) (*DemoTruth, error) {
	return writeDemo(ctx, dir, seed, size, progress)
}

func writeDemo(ctx context.Context, dir string, seed uint64, size int, progress Progress) (*DemoTruth, error) {
	d := &DemoTruth{Dir: dir}
	var references []Conditions
	var scenes []*Scene
	var frames []demoFrame
	for k := range demoFields {
		references = append(references, demoReference(k, size, seed))
	}
	for n := range demoNights {
		night := strings.SplitN(isoDate(float64(demoFirst+demoNights[n])), "T", 2)[0]
		d.Nights = append(d.Nights, night)
		frames = append(frames, demoNight(n, size, night, references, seed)...)
	}
	for k := range references {
		var of []*Conditions
		for i := range frames {
			if frames[i].field == k {
				of = append(of, &frames[i].Conditions)
			}
		}
		scenes = append(scenes, demoScene(k, &references[k], of, seed))
	}
	for _, s := range scenes {
		for _, e := range s.Events {
			if e.Supernova != nil {
				d.Supernovae = append(d.Supernovae, e)
			}
		}
	}
	elsewhere := demoScene(len(demoFields), &references[1], nil, seed)

	archive := demoArchive(references, seed)
	folders := []string{filepath.Join(dir, ArchiveName)}
	for _, n := range d.Nights {
		folders = append(folders, filepath.Join(dir, "incoming", n))
	}
	for _, f := range folders {
		if err := os.MkdirAll(f, 0o777); err != nil {
			return nil, err
		}
	}
	total := len(archive) + len(frames)
	done := 0
	var mu sync.Mutex
	report := func(path string) {
		mu.Lock()
		defer mu.Unlock()
		done++
		if progress != nil {
			progress(done, total, path)
		}
	}

	type shared struct {
		light   []float32
		defects []uint16
	}
	share := make([]shared, len(references))
	err := parallel(ctx, len(references), func(k int) error {
		e := render(&references[k], scenes[k])
		share[k] = shared{e.Light, e.Defects}
		return nil
	})
	if err != nil {
		return nil, err
	}
	d.Archive = make([]string, len(archive))
	err = parallel(ctx, len(archive), func(i int) error {
		a := &archive[i]
		d.Archive[i] = filepath.Join(dir, ArchiveName, a.Name+".fits")
		if err := render(&a.Conditions, scenes[a.field]).Write(d.Archive[i]); err != nil {
			return err
		}
		report(d.Archive[i])
		return nil
	})
	if err != nil {
		return nil, err
	}
	d.Frames = make([]string, len(frames))
	truths := make([]FrameTruth, len(frames))
	sources := make([][]Source, len(frames))
	err = parallel(ctx, len(frames), func(i int) error {
		f := &frames[i]
		scene := scenes[f.field]
		if f.wrong {
			scene = elsewhere
		}
		b := newBrush(&f.Conditions)
		b.static(scene)
		p := newPairing(&f.Conditions, &references[f.field])
		p.rLight, p.rDefects = share[f.field].light, share[f.field].defects
		p.nLight = append([]float32(nil), b.pix...)
		if !f.wrong {
			for k := range scene.Events {
				e := &scene.Events[k]
				x, y, _, _ := f.path(e)
				b.event(e, f.counts(e.shines(&f.Conditions), x, y))
			}
		}
		e := f.finish(b.pix, f.faults())
		p.nDefects = e.Defects
		if !f.wrong {
			for k := range scene.Events {
				if s, ok := p.source(&scene.Events[k]); ok {
					sources[i] = append(sources[i], s)
				}
			}
		}
		t := p.truth()
		t.Night, t.Expected = f.folder, f.expected
		t.Path = "incoming/" + f.folder + "/" + f.Name + ".fits"
		truths[i] = t
		path := filepath.Join(dir, filepath.FromSlash(t.Path))
		d.Frames[i] = path
		if err := e.Write(path); err != nil {
			return err
		}
		if f.cut {
			if err := truncate(path); err != nil {
				return err
			}
		}
		report(path)
		return nil
	})
	if err != nil {
		return nil, err
	}
	d.Truth.Frames = truths
	for _, s := range sources {
		d.Sources = append(d.Sources, s...)
	}
	if err := errors.Join(writeElements(dir, scenes), writeGalaxies(dir, scenes), writeSupernovae(dir, d.Supernovae)); err != nil {
		return nil, err
	}
	return d, d.Truth.Write(dir)
}

// truncate keeps two fifths of a file, as a transfer that broke would.
func truncate(path string) error {
	whole, err := os.ReadFile(path)
	if err != nil {
		return err
	}
	return wholefile.WriteBytes(path, whole[:len(whole)*2/5+37])
}

// parallel runs f(0…n-1) on all processors and returns the first errors.
func parallel(ctx context.Context, n int, f func(int) error) error {
	next := make(chan int)
	errs := make([]error, n)
	var wg sync.WaitGroup
	for range min(n, runtime.GOMAXPROCS(0)) {
		wg.Go(func() {
			for k := range next {
				if err := ctx.Err(); err != nil {
					errs[k] = err
					continue
				}
				errs[k] = f(k)
			}
		})
	}
	for k := range n {
		next <- k
	}
	close(next)
	wg.Wait()
	if err := ctx.Err(); err != nil {
		return err
	}
	return errors.Join(errs...)
}

// render makes a whole frame of a scene.
func render(c *Conditions, s *Scene) *Exposure {
	b := newBrush(c)
	b.static(s)
	for i := range s.Events {
		e := &s.Events[i]
		x, y, _, _ := c.path(e)
		b.event(e, c.counts(e.shines(c), x, y))
	}
	return c.finish(b.pix, c.faults())
}

// demoReference are the conditions of all exposures of a field's archive
// together.
func demoReference(k, size int, seed uint64) Conditions {
	_, r := baseConditions(size, seed)
	rng := stream(seed, 31, uint64(k))
	f := demoFields[k]
	r.Name = strings.ToLower(f.name) + "-r-reference"
	r.Field = f.name
	r.Camera.RA, r.Camera.Dec = f.ra, f.dec
	r.Camera.Rotation = uniform(rng, -0.5, 0.5)
	r.PSF.FWHM = uniform(rng, 2.6, 3.1)
	r.MidMJD = demoFirst - 120 - 10*float64(k)
	r.Bleed = true
	r.Stack = demoExposures
	r.Seed = mix(seed ^ mix(100+uint64(k)))
	return r
}

// demoArchive are the single exposures of each field, taken on some nights of
// the season before.
func demoArchive(references []Conditions, seed uint64) []demoFrame {
	var list []demoFrame
	for k := range references {
		rng := stream(seed, 34, uint64(k))
		for n := range demoExposures {
			c := references[k]
			c.Stack, c.Integers = 1, true
			c.MidMJD += float64(3*(n/2)) + 0.012*float64(n%2)
			c.Name = fmt.Sprintf("%s-r-%s-%02d", strings.ToLower(c.Field), strings.ReplaceAll(strings.SplitN(isoDate(c.MidMJD), "T", 2)[0], "-", ""), n+1)
			c.Camera.RA, c.Camera.Dec = offsetSky(c.Camera.RA, c.Camera.Dec, uniform(rng, -8, 8), uniform(rng, -8, 8))
			c.PSF.FWHM *= uniform(rng, 0.92, 1.1)
			c.PSF.E1, c.PSF.E2 = uniform(rng, -0.04, 0.04), uniform(rng, -0.04, 0.04)
			c.Sky *= uniform(rng, 0.85, 1.25)
			c.Transparency = uniform(rng, 0.92, 1)
			c.CosmicRays, c.HotPixels = 50, 4
			c.Streak = n == 5
			c.Seed = mix(seed ^ mix(5000+uint64(k)*100+uint64(n)))
			list = append(list, demoFrame{Conditions: c, field: k})
		}
	}
	return list
}

func demoNight(n, size int, night string, references []Conditions, seed uint64) []demoFrame {
	rng := stream(seed, 32, uint64(n))
	seeing := []float64{3.4, 4.4, 2.9, 3.6, 3.2, 3.9}[n]
	var list []demoFrame
	add := func(k int, hour float64) *demoFrame {
		c, _ := baseConditions(size, seed)
		ref := &references[k]
		number := len(list) + 1
		c.Name = fmt.Sprintf("%s-r-%s-%02d", strings.ToLower(ref.Field), strings.ReplaceAll(night, "-", ""), number)
		c.Field = ref.Field
		c.Camera.RA, c.Camera.Dec = offsetSky(ref.Camera.RA, ref.Camera.Dec, uniform(rng, -10, 10), uniform(rng, -10, 10))
		c.Camera.Rotation = uniform(rng, -0.3, 0.3)
		if n == 2 { // the mount observed on its other side
			c.Camera.Rotation += 180
		}
		c.PSF.FWHM = seeing * uniform(rng, 0.94, 1.08)
		c.PSF.E1, c.PSF.E2 = uniform(rng, -0.07, 0.07), uniform(rng, -0.07, 0.07)
		c.Sky = uniform(rng, 330, 520)
		c.GradientX, c.GradientY = uniform(rng, -0.05, 0.05), uniform(rng, -0.05, 0.05)
		c.Transparency = uniform(rng, 0.85, 1)
		c.CosmicRays, c.HotPixels, c.Bleed = 40, 4, true
		c.MidMJD = float64(demoFirst+demoNights[n]) + hour/24
		c.HeaderEast, c.HeaderNorth = uniform(rng, -15, 15), uniform(rng, -15, 15)
		c.Seed = mix(seed ^ mix(1000+uint64(n)*100+uint64(number)))
		list = append(list, demoFrame{Conditions: c, field: k, folder: night})
		return &list[len(list)-1]
	}
	add(0, 19.1)
	add(0, 19.6)
	add(1, 20.3)
	add(1, 20.8)
	add(2, 23.2)
	switch n {
	case 1:
		f := add(2, 23.7)
		f.cut, f.expected = true, "unreadable"
	case 2:
		f := add(1, 21.3)
		f.wrong, f.expected = true, "no_match"
		f = add(2, 23.7)
		f.Transparency, f.Sky, f.expected = 0.002, 700, "too_few_stars"
	case 3:
		list[2].Streak = true
	}
	return list
}

// demoScene fills the sky of a field with constant and changing light.
func demoScene(k int, ref *Conditions, frames []*Conditions, seed uint64) *Scene {
	const m10 = 20.1 // mag of S/N 10 on an ordinary frame of the survey
	perArea := 1e6 * ref.Camera.Scale * ref.Camera.Scale / 3600
	plan := skyPlan{
		stars: 280 / perArea, starMag: m10, slope: 0.3, bright: m10 - 7.8, faint: m10 + 3.2,
		forced: 1, forcedMag: [2]float64{m10 - 9.5, m10 - 8},
		galaxies: 70 / perArea, galaxySlope: 0.4, galaxyMag: [2]float64{m10 - 4.5, m10 + 0.5},
		radius: [2]float64{0.8, 2.4},
	}
	s := newScene(ref.Camera.RA, ref.Camera.Dec, sceneSide(append(append([]*Conditions(nil), frames...), ref)...), plan, mix(seed^mix(500+uint64(k))))
	if len(frames) == 0 {
		return s
	}
	r := stream(seed, 33, uint64(k))
	half := float64(ref.Camera.Width) / 2 * ref.Camera.Scale
	within := func(ra, dec, part float64) bool {
		xi, eta := toTangent(ref.Camera.RA, ref.Camera.Dec, ra, dec)
		return math.Max(math.Abs(xi), math.Abs(eta))*3600 < part*half
	}
	// Stars too bright to look beside are avoided.
	clear := func(ra, dec float64) bool {
		for _, st := range s.Stars {
			if reach := 6 * math.Pow(10, 0.12*(m10-4-st.Mag)); st.Mag < m10-1 && separation(ra, dec, st.RA, st.Dec)*3600 < math.Max(4, reach) {
				return false
			}
		}
		return true
	}
	// Supernovae: two a field, on bright hosts of their own, exploding between eight
	// days before the first night and the second night.
	for n := range 2 {
		var g Galaxy
		var ra, dec, distance float64
		for range 5000 {
			a, d := offsetSky(ref.Camera.RA, ref.Camera.Dec, uniform(r, -0.8, 0.8)*half, uniform(r, -0.8, 0.8)*half)
			g = newGalaxy(r, fmt.Sprintf("H%04d", n+1), a, d, uniform(r, m10-4, m10-1.5), &plan)
			east, north := g.pointInside(r, 2.5)
			ra, dec = offsetSky(g.RA, g.Dec, east, north)
			distance = math.Hypot(east, north)
			if clear(ra, dec) {
				break
			}
		}
		sn := &Supernova{Stretch: 0.97 + 0.07*r.NormFloat64(), Z: math.Max(0.03, math.Min(0.10, g.Z)), Offset: 0.1 * r.NormFloat64()}
		sn.Stretch = math.Max(0.88, math.Min(1.15, sn.Stretch))
		g.Z = sn.Z
		s.Galaxies = append(s.Galaxies, g)
		explosion := demoFirst + uniform(r, -8, -3) + 7*float64(n)
		sn.PeakMJD = explosion + riseDays*sn.Stretch*(1+sn.Z)
		s.Events = append(s.Events, Event{
			ID: fmt.Sprintf("SN-%s-%d", demoFields[k].name, n+1), Kind: KindSupernova, RA: ra, Dec: dec,
			Light: func(t float64) float64 { return fluxOf(sn.Mag(t)) },
			Host:  g.ID, HostDistance: distance, HostMag: g.Mag, Supernova: sn,
		})
	}
	// Variable stars, about their brightness on the reference.
	for n, try := 0, 0; n < 2 && try < 100000; try++ {
		st := s.Stars[r.IntN(len(s.Stars))]
		if st.Mag > m10-0.5 || st.Mag < m10-3 || !within(st.RA, st.Dec, 0.9) {
			continue
		}
		n++
		amp, period, phase := fluxOf(st.Mag)*uniform(r, 0.15, 0.4), uniform(r, 3, 30), uniform(r, 0, 2*math.Pi)
		s.Events = append(s.Events, Event{
			ID: fmt.Sprintf("VS-%s-%d", demoFields[k].name, n), Kind: KindVariable, RA: st.RA, Dec: st.Dec,
			Light: func(t float64) float64 { return amp * math.Sin(2*math.Pi*t/period+phase) },
		})
	}
	// Asteroids: two others every night.
	_, moving := asteroids()
	seen := map[int]int{}
	for _, a := range moving {
		if a.field != k || seen[a.night] == 2 || !within(a.ra, a.dec, 0.8) || !clear(a.ra, a.dec) {
			continue
		}
		seen[a.night]++
		light := fluxOf(a.mag)
		s.Events = append(s.Events, Event{
			ID: AsteroidID(a.orbit[0]), Kind: KindAsteroid, RA: a.ra, Dec: a.dec, East: a.east, North: a.north, Epoch: a.mjd,
			Light: func(t float64) float64 {
				if math.Abs(t-a.mjd) > 0.5 {
					return 0 // far away on other nights
				}
				return light
			},
		})
	}
	return s
}
