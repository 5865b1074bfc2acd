package photometry

import (
	"fmt"
	"math"
	"path/filepath"
	"slices"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
	"nightsift/internal/wcs"
)

// Standard is a star of a frame with a known magnitude.
type Standard struct {
	Star        int     // index into the frame's list of stars
	X, Y        float64 // FITS pixels, where the star was found
	Mag, MagErr float64 // MagErr NaN if unknown
	Colour      float64 // NaN if unknown
}

// Standards are the stars of one frame that stand in a catalogue.
type Standards struct {
	Catalogue string // base name of its file
	Checksum  string // SHA-256 of the file
	Column    string // of the magnitudes
	Settings  Settings

	Stars []Standard // bright first

	Known            int     // catalogue stars on the frame
	Tried            int     // stars of the frame that were looked for
	Chance           float64 // matches expected by chance
	OffsetX, OffsetY float64 // px, common shift of the frame's stars against the catalogue
	Blended          int     // left out because another catalogue star stands as near
	Refusal          string  // why Stars cannot serve; empty if they can
}

// MatchConfig says how stars are matched. Start from DefaultMatchConfig.
type MatchConfig struct {
	// Tolerance [arcsec] is by how much the positions of the catalogue and the
	// frame's world coordinates may disagree. Half of the FWHM is added in
	// quadrature.
	Tolerance float64
	Settings  Settings
}

// DefaultMatchConfig returns a tolerance of 1.5 arcsec and DefaultSettings.
func DefaultMatchConfig() MatchConfig {
	return MatchConfig{Tolerance: 1.5, Settings: DefaultSettings()}
}

// blendSteps are the accepted shares of light from other catalogue stars, from
// the wanted one on, until enoughStandards remain.
var blendSteps = [...]float64{0.003, 0.006, 0.012, 0.024}

const enoughStandards = 30

const (
	maxStandards = 1000 // the brightest serve

	// Other catalogue stars within so many FWHM are looked at for the light
	// that they add.
	blendRadius = 2.5

	// For every star of the frame so many of the catalogue's brightest are
	// matched: the faint ones of a deep catalogue only match by chance.
	depthRatio = 3

	chanceShare = 0.2 // largest accepted part of the matches expected by chance
)

// Field is what Match needs to know of a frame.
type Field struct {
	Stars         *stars.List
	WCS           *wcs.WCS // nil if there is none
	Width, Height int      // px
	MidMJD        float64  // NaN if unknown: proper motions are then not applied
	Filter        string
}

// Match finds the clean, unflagged stars of a frame in a catalogue. What
// forbids it is in Standards.Refusal.
//
// Whether the two lists show the same stars is tested with the catalogue
// shifted in eight directions: what then matches, matches by chance.
func Match(f Field, c *Catalogue, cfg MatchConfig) *Standards {
	s := &Standards{Catalogue: filepath.Base(c.Path), Checksum: c.Checksum, Settings: cfg.Settings}
	refuse := func(format string, args ...any) *Standards {
		s.Stars, s.Refusal = nil, fmt.Sprintf(format, args...)
		return s
	}
	mag, magErr, ok := c.Columns.Filter(f.Filter)
	if !ok {
		return refuse("there is no column of magnitudes for filter %q", f.Filter)
	}
	s.Column = mag
	if f.WCS == nil {
		return refuse("the frame has no world coordinates")
	}
	onFrame, err := c.onFrame(f, mag)
	if err != nil {
		return refuse("%v", err)
	}
	s.Known = len(onFrame)

	usable := func(t *stars.Star) bool {
		return t.Flags&frame.Unusable == 0 && !t.Extended && t.Flux > 0 && t.FluxErr > 0
	}
	var list []int
	for i := range f.Stars.Stars {
		if t := &f.Stars.Stars[i]; t.Clean && usable(t) {
			list = append(list, i)
		}
	}
	if len(list) < 2*cfg.Settings.MinStars {
		list = list[:0]
		for i := range f.Stars.Stars {
			if t := &f.Stars.Stars[i]; usable(t) && t.SN >= 10 && t.Neighbour > 3*f.Stars.FWHM {
				list = append(list, i)
			}
		}
	}
	slices.SortStableFunc(list, func(a, b int) int {
		x, y := f.Stars.Stars[a].Flux, f.Stars.Stars[b].Flux
		switch {
		case x > y:
			return -1
		case x < y:
			return 1
		}
		return 0
	})
	list = list[:min(len(list), maxStandards)]
	s.Tried = len(list)
	switch {
	case s.Known < cfg.Settings.MinStars:
		return refuse("the catalogue has %d stars with a magnitude %s on the frame, want %d", s.Known, mag, cfg.Settings.MinStars)
	case len(list) < cfg.Settings.MinStars:
		return refuse("the frame has %d clean stars, want %d", len(list), cfg.Settings.MinStars)
	}
	slices.SortFunc(onFrame, func(a, b known) int {
		switch {
		case a.mag != b.mag && a.mag < b.mag:
			return -1
		case a.mag != b.mag:
			return 1
		}
		return int(a.star) - int(b.star)
	})
	brighter := 0 // stars of the frame down to the faintest that serves
	for i := range f.Stars.Stars {
		if f.Stars.Stars[i].Flux >= f.Stars.Stars[list[len(list)-1]].Flux {
			brighter++
		}
	}
	deep := newCells(onFrame, f.Width, f.Height, 8)
	bright := onFrame[:min(len(onFrame), depthRatio*brighter+20)]

	scale := f.WCS.PixelScale()
	fwhm := f.Stars.FWHM
	if !(fwhm > 0) {
		fwhm = 3
	}
	tolerance := math.Hypot(cfg.Tolerance/scale, 0.5*fwhm)
	cells := newCells(bright, f.Width, f.Height, tolerance)
	place := make([][2]float64, len(list))
	for k, i := range list {
		place[k] = [2]float64{f.Stars.Stars[i].X, f.Stars.Stars[i].Y}
	}
	// The common shift first, then a tolerance as narrow as the agreement allows.
	found := cells.match(place, 0, 0, tolerance)
	var dx, dy []float64
	for k, m := range found {
		if m >= 0 {
			dx, dy = append(dx, place[k][0]-bright[m].x), append(dy, place[k][1]-bright[m].y)
		}
	}
	if len(dx) >= cfg.Settings.MinStars {
		var sx, sy float64
		s.OffsetX, sx = robust.MedianMAD(dx)
		s.OffsetY, sy = robust.MedianMAD(dy)
		tolerance = min(tolerance, max(5*math.Max(sx, sy), 0.2*fwhm, 0.3))
		found = cells.match(place, s.OffsetX, s.OffsetY, tolerance)
	}
	matched := count(found)
	far := max(6*tolerance, 3*fwhm)
	for k := range 8 {
		sin, cos := math.Sincos(2 * math.Pi * (float64(k) + 0.3) / 8)
		r := far * (1 + float64(k%3)/3)
		s.Chance += float64(count(cells.match(place, s.OffsetX+r*cos, s.OffsetY+r*sin, tolerance))) / 8
	}
	at := fmt.Sprintf("%d of %d stars stand in the catalogue within %.2g arcsec", matched, len(list), tolerance*scale)
	switch {
	case matched < cfg.Settings.MinStars:
		return refuse("%s, want %d; the catalogue shows %d stars on the frame", at, cfg.Settings.MinStars, s.Known)
	case float64(matched) < s.Chance+4*math.Sqrt(s.Chance+1) || s.Chance > chanceShare*float64(matched):
		return refuse("%s, %.1f would do so by chance", at, s.Chance)
	}
	share := make([]float64, len(found))
	for k, m := range found {
		if m >= 0 {
			share[k] = deep.foreign(&bright[m], fwhm)
		}
	}
	for _, limit := range blendSteps {
		s.Stars = s.Stars[:0]
		for k, m := range found {
			if m < 0 || share[k] > limit {
				continue
			}
			b := &bright[m]
			s.Stars = append(s.Stars, Standard{Star: list[k], X: place[k][0], Y: place[k][1],
				Mag: b.mag, MagErr: c.Value(magErr, int(b.star)), Colour: c.Colour(int(b.star))})
		}
		if len(s.Stars) >= enoughStandards {
			break
		}
	}
	s.Blended = matched - len(s.Stars)
	if len(s.Stars) < cfg.Settings.MinStars {
		return refuse("%s, %d of them with another star as near that it spoils them; want %d", at, s.Blended, cfg.Settings.MinStars)
	}
	return s
}

func count(found []int) int {
	n := 0
	for _, m := range found {
		if m >= 0 {
			n++
		}
	}
	return n
}

// known is a catalogue star on the frame.
type known struct {
	star int32
	x, y float64 // FITS pixels
	mag  float64
}

// onFrame lists the stars with a magnitude that fall on the frame.
func (c *Catalogue) onFrame(f Field, column string) ([]known, error) {
	w, h := float64(f.Width), float64(f.Height)
	ra, dec, err := f.WCS.PixelToSky((w+1)/2, (h+1)/2)
	if err != nil {
		return nil, fmt.Errorf("the world coordinates fail at the frame's centre: %w", err)
	}
	radius := 0.0
	const steps = 8
	for k := range steps + 1 {
		t := float64(k) / steps
		for _, p := range [][2]float64{{0.5 + t*w, 0.5}, {0.5 + t*w, h + 0.5}, {0.5, 0.5 + t*h}, {w + 0.5, 0.5 + t*h}} {
			a, d, err := f.WCS.PixelToSky(p[0], p[1])
			if err != nil {
				return nil, fmt.Errorf("the world coordinates fail at the frame's border: %w", err)
			}
			radius = max(radius, wcs.Separation(ra, dec, a, d))
		}
	}
	year := math.NaN()
	if f.MidMJD == f.MidMJD {
		year = JulianYear(f.MidMJD)
	}
	var out []known
	for _, i := range c.Cone(nil, ra, dec, 1.02*radius, year) {
		mag := c.Value(column, int(i))
		if mag != mag {
			continue
		}
		a, d := c.Position(int(i), year)
		x, y, err := f.WCS.SkyToPixel(a, d)
		if err == nil && x >= 0.5 && y >= 0.5 && x <= w+0.5 && y <= h+0.5 {
			out = append(out, known{i, x, y, mag})
		}
	}
	return out, nil
}

// cells sorts points into square cells.
type cells struct {
	list  []known
	side  float64
	nx    int
	ny    int
	start []int32 // of each cell in order, and the end
	order []int32
}

func newCells(list []known, width, height int, side float64) *cells {
	// Not many more cells than points.
	side = max(side, math.Sqrt(float64(width)*float64(height)/float64(4*len(list)+64)))
	c := &cells{list: list, side: side}
	c.nx, c.ny = int(float64(width)/side)+1, int(float64(height)/side)+1
	c.start = make([]int32, c.nx*c.ny+1)
	for i := range list {
		c.start[c.cell(list[i].x, list[i].y)+1]++
	}
	for k := 1; k < len(c.start); k++ {
		c.start[k] += c.start[k-1]
	}
	next := slices.Clone(c.start)
	c.order = make([]int32, len(list))
	for i := range list {
		k := c.cell(list[i].x, list[i].y)
		c.order[next[k]] = int32(i)
		next[k]++
	}
	return c
}

func (c *cells) column(v float64, n int) int { return min(n-1, max(0, int(v/c.side))) }

func (c *cells) cell(x, y float64) int { return c.column(y, c.ny)*c.nx + c.column(x, c.nx) }

// near calls do for each point within radius, in order of cells.
func (c *cells) near(x, y, radius float64, do func(i int32, distance2 float64)) {
	for j := c.column(y-radius, c.ny); j <= c.column(y+radius, c.ny); j++ {
		for i := c.column(x-radius, c.nx); i <= c.column(x+radius, c.nx); i++ {
			for _, p := range c.order[c.start[j*c.nx+i]:c.start[j*c.nx+i+1]] {
				dx, dy := c.list[p].x-x, c.list[p].y-y
				if d := dx*dx + dy*dy; d <= radius*radius {
					do(p, d)
				}
			}
		}
	}
}

// match returns for each place, less the shift, the nearest point within the
// tolerance, or -1. A point is given to the nearest place alone.
func (c *cells) match(place [][2]float64, shiftX, shiftY, tolerance float64) []int {
	found := make([]int, len(place))
	distance := make([]float64, len(place))
	owner := map[int32]int{}
	for k, p := range place {
		best, at := math.Inf(1), int32(-1)
		c.near(p[0]-shiftX, p[1]-shiftY, tolerance, func(i int32, d float64) {
			if d < best || d == best && i < at {
				best, at = d, i
			}
		})
		found[k], distance[k] = int(at), best
		if at < 0 {
			continue
		}
		if o, taken := owner[at]; taken {
			if distance[o] <= best {
				found[k] = -1
				continue
			}
			found[o] = -1
		}
		owner[at] = k
	}
	return found
}

// foreign returns the light that other catalogue stars add to a star's PSF
// flux, as a share of it: the overlap of two Gaussians of this FWHM.
func (c *cells) foreign(b *known, fwhm float64) float64 {
	light := 0.0
	c.near(b.x, b.y, blendRadius*fwhm, func(i int32, d2 float64) {
		if c.list[i].star != b.star {
			light += math.Pow(10, 0.4*(b.mag-c.list[i].mag)) * math.Exp(-2*math.Ln2*d2/(fwhm*fwhm))
		}
	})
	return light
}
