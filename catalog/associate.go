package catalog

import (
	"cmp"
	"context"
	"database/sql"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"strings"
)

// # How candidates become objects
//
// A candidate of a kind that takes part, with RealProbability of at least
// FormProbability and a position good enough, is a seed. Two seeds are linked
// when the chi-square of their distance,
//
//	dᵀ (C₁ + C₂)⁻¹ d,   C = measured covariance on the sky + floor²·1,
//
// is at most -2·ln(MissProbability): with two degrees of freedom the tail of
// chi-square beyond t is exp(-t/2), so that is the chance to separate two
// detections of one source at rest. Linked seeds form components, whatever the
// order in which they came. Within a component, seeds are taken in order of
// their position error, the best first and equal ones by identifier; each joins
// the cluster with the smallest chi-square to its weighted mean, if that is
// within the same limit, or founds a new one. A second round gives every seed
// to the cluster whose mean is nearest, so that the first ones' order matters
// little. Each cluster is an object at the weighted mean of its seeds.
//
// A component depends on nothing outside it. AddFrame therefore takes the seeds
// that the frame brings, and those near seeds that it takes away, follows the
// links, and clusters these components again; all others stay as they are.
// Rebuild does the same with every seed, and Check compares the two.
//
// Candidates of JoinProbability and more are then given to the nearest object
// within the limit. They count as its detections but do not move it.
//
// What people decided overrules this: see decisions.go.
//
// An object is named for the position of its founder: its earliest seed. The
// row of the table keeps its number when detections come and go; a former name
// is kept as a second name.

// Roles of a candidate.
const (
	roleNone = iota
	roleJoins
	roleForms
)

// point is what association needs to know of a candidate.
type point struct {
	id         string
	mjd        float64
	ra, dec    float64 // deg
	dir        vector
	xx, yy, xy float64 // arcsec², floor included
	role       int
	object     int64 // at present, 0 for none
	visited    bool
}

// covariance is that of a position on the sky [arcsec²], eastward, northward.
type covariance struct{ xx, yy, xy float64 }

// distance returns the chi-square of an offset (x,y) [arcsec].
func (c covariance) distance(x, y float64) float64 {
	det := c.xx*c.yy - c.xy*c.xy
	return (c.yy*x*x - 2*c.xy*x*y + c.xx*y*y) / det
}

func (p *point) covariance() covariance { return covariance{p.xx, p.yy, p.xy} }

// linked reports whether two seeds are linked. The result does not depend on
// their order.
func linked(a, b *point, limit float64) bool {
	// Chi-square is at least distance² / (sum of both traces): most pairs are
	// settled without trigonometry. The chord is shorter than the tangent.
	if chord2(a.dir, b.dir) > limit*(a.xx+a.yy+b.xx+b.yy)*(arcsec*arcsec) {
		return false
	}
	if b.id < a.id {
		a, b = b, a
	}
	p := newPlane(a.ra, a.dec)
	x, y := p.offset(b.dir)
	return covariance{a.xx + b.xx, a.yy + b.yy, a.xy + b.xy}.distance(x, y) <= limit
}

// cluster is a group of seeds: an object to be.
type cluster struct {
	members []*point // founder first: by time, then identifier
	at      vector
	cov     covariance
}

// mean collects a weighted mean of positions in a plane: the sum of inverse
// covariances and of inverse covariances times positions.
type mean struct{ ixx, iyy, ixy, bx, by float64 }

func (m *mean) add(p *point, x, y float64) {
	det := p.xx*p.yy - p.xy*p.xy
	xx, yy, xy := p.yy/det, p.xx/det, -p.xy/det
	m.ixx += xx
	m.iyy += yy
	m.ixy += xy
	m.bx += xx*x + xy*y
	m.by += xy*x + yy*y
}

func (m *mean) value() (x, y float64, c covariance) {
	det := m.ixx*m.iyy - m.ixy*m.ixy
	c = covariance{m.iyy / det, m.ixx / det, -m.ixy / det}
	return c.xx*m.bx + c.xy*m.by, c.xy*m.bx + c.yy*m.by, c
}

// divide clusters the seeds of one component. The result depends on the set of
// seeds and the decisions about them alone, not on their order.
func divide(component []*point, limit float64, by *decisions) []cluster {
	// Best position first.
	seeds := slices.Clone(component)
	slices.SortFunc(seeds, func(a, b *point) int {
		return cmp.Or(cmp.Compare(a.xx+a.yy, b.xx+b.yy), cmp.Compare(a.id, b.id))
	})
	plane := newPlane(seeds[0].ra, seeds[0].dec)
	xs, ys := make([]float64, len(seeds)), make([]float64, len(seeds))
	for i, p := range seeds {
		xs[i], ys[i] = plane.offset(p.dir)
	}
	type place struct {
		mean
		x, y float64
		c    covariance
	}
	nearest := func(i int, places []place, own bool) (best int, chi float64) {
		best, chi = -1, math.Inf(1)
		p := seeds[i]
		for k := range places {
			g := &places[k]
			dx, dy := xs[i]-g.x, ys[i]-g.y
			c := covariance{p.xx, p.yy, p.xy}
			if !own { // the mean does not hold the seed yet
				c.xx += g.c.xx
				c.yy += g.c.yy
				c.xy += g.c.xy
			}
			if d := c.distance(dx, dy); d < chi {
				best, chi = k, d
			}
		}
		return best, chi
	}
	var places []place
	pinned := by.parts(seeds)
	for i, k := range pinned {
		for len(places) <= k {
			places = append(places, place{})
		}
		if k >= 0 {
			places[k].add(seeds[i], xs[i], ys[i])
		}
	}
	for k := range places {
		places[k].x, places[k].y, places[k].c = places[k].value()
	}
	for i, p := range seeds {
		if pinned != nil && pinned[i] >= 0 {
			continue
		}
		k, chi := nearest(i, places, false)
		if k < 0 || chi > limit {
			k = len(places)
			places = append(places, place{})
		}
		g := &places[k]
		g.add(p, xs[i], ys[i])
		g.x, g.y, g.c = g.value()
	}
	groups := make([][]int, len(places))
	for i := range seeds {
		k, _ := nearest(i, places, true)
		if pinned != nil && pinned[i] >= 0 {
			k = pinned[i]
		}
		groups[k] = append(groups[k], i)
	}
	var out []cluster
	for _, g := range by.united(groups, func(k int) (vector, covariance) { return plane.direction(places[k].x, places[k].y), places[k].c }, seeds, limit) {
		if len(g) == 0 {
			continue
		}
		var m mean
		var c cluster
		for _, i := range g {
			m.add(seeds[i], xs[i], ys[i])
			c.members = append(c.members, seeds[i])
		}
		x, y, cov := m.value()
		c.at, c.cov = plane.direction(x, y), cov
		slices.SortFunc(c.members, earlier)
		out = append(out, c)
	}
	slices.SortFunc(out, func(a, b cluster) int { return earlier(a.members[0], b.members[0]) })
	return out
}

// earlier orders by time, unknown times last, then by identifier.
func earlier(a, b *point) int {
	switch an, bn := math.IsNaN(a.mjd), math.IsNaN(b.mjd); {
	case an && !bn:
		return 1
	case bn && !an:
		return -1
	}
	return cmp.Or(cmp.Compare(a.mjd, b.mjd), cmp.Compare(a.id, b.id))
}

// sky finds points by place; it loads cells when they are first asked for.
type sky struct {
	load  func(cell int64) ([]*point, error)
	cells map[int64][]*point
	reach float64 // arcsec
	limit float64
	by    *decisions
}

func (s *sky) cell(n int64) ([]*point, error) {
	c, ok := s.cells[n]
	if !ok && s.load != nil {
		var err error
		if c, err = s.load(n); err != nil {
			return nil, err
		}
		s.cells[n] = c
	}
	return c, nil
}

// around calls visit for every seed not visited yet within reach of a place.
func (s *sky) around(ra, dec float64, dir vector, visit func(*point)) error {
	var buf [4]cellRange
	reach2 := s.reach * s.reach * (arcsec * arcsec) * (1 + 1e-6)
	for _, r := range cone(buf[:0], ra, dec, s.reach) {
		for n := r.from; n <= r.to; n++ {
			points, err := s.cell(n)
			if err != nil {
				return err
			}
			for _, p := range points {
				if !p.visited && p.role == roleForms && chord2(p.dir, dir) <= reach2 {
					visit(p)
				}
			}
			s.compact(points, n)
		}
	}
	return nil
}

// cellsAround adds the cells within reach of a place.
func (s *sky) cellsAround(cells map[int64]bool, ra, dec float64) {
	var buf [4]cellRange
	for _, r := range cone(buf[:0], ra, dec, s.reach) {
		for n := r.from; n <= r.to; n++ {
			cells[n] = true
		}
	}
}

// compact drops visited points from a cell when they are half of it or more, so
// that a crowd of detections of one source is looked at once and not once by
// each of them.
func (s *sky) compact(points []*point, n int64) {
	var rest []*point
	for _, p := range points {
		if !p.visited {
			rest = append(rest, p)
		}
	}
	if 2*len(rest) <= len(points) {
		s.cells[n] = rest
	}
}

// component collects everything linked to a seed, directly or through others,
// and marks it as visited.
func (s *sky) component(start *point) ([]*point, error) {
	start.visited = true
	list := []*point{start}
	for k := 0; k < len(list); k++ {
		p := list[k]
		err := s.around(p.ra, p.dec, p.dir, func(q *point) {
			if linked(p, q, s.limit) {
				q.visited = true
				list = append(list, q)
			}
		})
		if err != nil {
			return nil, err
		}
		err = s.by.eachMerge(p, s.limit, func(m *mergedPlace) error {
			return s.around(m.ra, m.dec, m.dir, func(q *point) {
				if m.holds(q, s.limit) {
					q.visited = true
					list = append(list, q)
				}
			})
		})
		if err != nil {
			return nil, err
		}
	}
	return list, nil
}

const pointColumns = `candidate_id, mid_mjd, ra_deg, dec_deg, xi_var, eta_var, xi_eta_cov, role, object`

func scanPoint(rows *sql.Rows, cfg *Config) (*point, error) {
	p := new(point)
	var mjd, xx, yy, xy sql.NullFloat64
	var object sql.NullInt64
	if err := rows.Scan(&p.id, &mjd, &p.ra, &p.dec, &xx, &yy, &xy, &p.role, &object); err != nil {
		return nil, err
	}
	p.mjd = math.NaN()
	if mjd.Valid {
		p.mjd = mjd.Float64
	}
	p.object = object.Int64
	c := cfg.covariance(xx, yy, xy)
	p.xx, p.yy, p.xy = c.xx, c.yy, c.xy
	p.dir = unit(p.ra, p.dec)
	return p, nil
}

// worker associates within one transaction.
type worker struct {
	ctx   context.Context
	tx    *sql.Tx
	cfg   *Config
	sky   sky
	limit float64
	by    *decisions

	orphans bool // there are remarks without object

	// former tells the object of candidates that the transaction has removed
	// and may have put back.
	former map[string]int64

	byCell  *sql.Stmt
	byRange *sql.Stmt
	objects *sql.Stmt
	assign  *sql.Stmt
	named   *sql.Stmt
	update  *sql.Stmt
	create  *sql.Stmt
	unname  *sql.Stmt
	holder  *sql.Stmt

	places map[int64][]spot // by cell, once objects have their places

	dirty map[int64]bool // objects whose summary must be made anew
	moved map[int64]bool // objects made or moved: joiners near them must be asked again
}

func newWorker(ctx context.Context, tx *sql.Tx, cfg *Config) (*worker, error) {
	w := &worker{ctx: ctx, tx: tx, cfg: cfg, limit: cfg.limit(), former: map[string]int64{}, places: map[int64][]spot{}, dirty: map[int64]bool{}, moved: map[int64]bool{}}
	var err error
	if w.by, err = loadDecisions(ctx, tx, cfg); err != nil {
		return nil, err
	}
	if err := tx.QueryRowContext(ctx, "SELECT count(*) > 0 FROM remarks WHERE object IS NULL").Scan(&w.orphans); err != nil {
		return nil, err
	}
	w.sky = sky{cells: map[int64][]*point{}, reach: cfg.reach(), limit: w.limit, by: w.by, load: w.loadCell}
	for _, s := range []struct {
		to    **sql.Stmt
		query string
	}{
		{&w.byRange, "SELECT " + pointColumns + " FROM candidates WHERE cell BETWEEN ? AND ? AND role > 0 ORDER BY cell, candidate_id"},
		{&w.byCell, "SELECT " + pointColumns + " FROM candidates WHERE cell = ? AND role > 0 ORDER BY candidate_id"},
		{&w.objects, "SELECT id, ra_deg, dec_deg, ra_err_arcsec, dec_err_arcsec, covariance_arcsec2, name, cell FROM objects WHERE cell BETWEEN ? AND ?"},
		{&w.assign, "UPDATE candidates SET object = ? WHERE candidate_id = ?"},
		{&w.holder, "SELECT object FROM candidates WHERE candidate_id = ?"},
		{&w.named, "SELECT id FROM objects WHERE name = ?"},
		{&w.unname, "DELETE FROM names WHERE name = ?"},
		{&w.update, `UPDATE objects SET name = ?, cell = ?, ra_deg = ?, dec_deg = ?,
			ra_err_arcsec = ?, dec_err_arcsec = ?, covariance_arcsec2 = ?, founder = ? WHERE id = ?`},
		{&w.create, `INSERT INTO objects (name, cell, ra_deg, dec_deg, ra_err_arcsec, dec_err_arcsec,
			covariance_arcsec2, founder, kind, detections, nights) VALUES (?, ?, ?, ?, ?, ?, ?, ?, '', 0, 0) RETURNING id`},
	} {
		if *s.to, err = tx.PrepareContext(ctx, s.query); err != nil {
			w.close()
			return nil, err
		}
	}
	return w, nil
}

func (w *worker) close() {
	for _, s := range []*sql.Stmt{w.byCell, w.byRange, w.objects, w.assign, w.holder, w.named, w.unname, w.update, w.create} {
		if s != nil {
			s.Close()
		}
	}
}

func (w *worker) loadCell(cell int64) ([]*point, error) {
	rows, err := w.byCell.QueryContext(w.ctx, cell)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var list []*point
	for rows.Next() {
		p, err := w.scan(rows)
		if err != nil {
			return nil, err
		}
		list = append(list, p)
	}
	return list, rows.Err()
}

// runs calls visit with ranges that hold all of the cells, few of them for
// cells that lie close together.
func runs(cells map[int64]bool, visit func(from, to int64) error) error {
	list := slices.Sorted(maps.Keys(cells))
	for i := 0; i < len(list); {
		k := i
		for k+1 < len(list) && list[k+1]-list[k] <= 3 {
			k++
		}
		if err := visit(list[i], list[k]); err != nil {
			return err
		}
		i = k + 1
	}
	return nil
}

// preload loads the points of cells together, which is quicker than one cell
// after the other.
func (w *worker) preload(cells map[int64]bool) error {
	return runs(cells, func(from, to int64) error {
		rows, err := w.byRange.QueryContext(w.ctx, from, to)
		if err != nil {
			return err
		}
		defer rows.Close()
		fresh := map[int64]bool{}
		for n := from; n <= to; n++ {
			if _, known := w.sky.cells[n]; !known {
				w.sky.cells[n] = nil
				fresh[n] = true
			}
		}
		for rows.Next() {
			p, err := w.scan(rows)
			if err != nil {
				return err
			}
			if n := cellOf(p.ra, p.dec); fresh[n] {
				w.sky.cells[n] = append(w.sky.cells[n], p)
			}
		}
		return rows.Err()
	})
}

// scan reads a point and what it was before this transaction.
func (w *worker) scan(rows *sql.Rows) (*point, error) {
	p, err := scanPoint(rows, w.cfg)
	if err != nil {
		return nil, err
	}
	if o, ok := w.former[p.id]; ok && p.object == 0 {
		p.object = -o // counts for the identity, is not stored
	}
	return p, nil
}

// identity returns the object to which a point belongs or belonged.
func (p *point) identity() int64 {
	if p.object < 0 {
		return -p.object
	}
	return p.object
}

// settle clusters the components of the given seeds and stores the objects.
// gone are objects that lost a seed; joiners are new candidates that may join.
func (w *worker) settle(seeds, joiners []*point, gone map[int64]bool) error {
	var clusters []cluster
	touched := gone
	for _, s := range seeds {
		if s.visited {
			continue
		}
		component, err := w.sky.component(s)
		if err != nil {
			return err
		}
		for _, p := range component {
			if o := p.identity(); o != 0 {
				touched[o] = true
			}
		}
		clusters = append(clusters, divide(component, w.limit, w.by)...)
	}
	ask := map[string]*point{} // joiners whose object may change
	for _, p := range joiners {
		ask[p.id] = p
	}
	for o := range touched {
		if err := w.joined(o, ask); err != nil {
			return err
		}
	}
	if err := w.store(clusters, touched); err != nil {
		return err
	}
	for o := range w.moved {
		if err := w.joinersNear(o, ask); err != nil {
			return err
		}
	}
	if err := w.join(ask); err != nil {
		return err
	}
	return w.summarise()
}

// joined adds the joiners that an object has now.
func (w *worker) joined(object int64, ask map[string]*point) error {
	rows, err := w.tx.QueryContext(w.ctx, "SELECT "+pointColumns+" FROM candidates WHERE object = ? AND role = 1", object)
	if err != nil {
		return err
	}
	defer rows.Close()
	for rows.Next() {
		p, err := scanPoint(rows, w.cfg)
		if err != nil {
			return err
		}
		ask[p.id] = p
	}
	return rows.Err()
}

// joinersNear adds the joiners within reach of an object.
func (w *worker) joinersNear(object int64, ask map[string]*point) error {
	var ra, dec float64
	if err := w.tx.QueryRowContext(w.ctx, "SELECT ra_deg, dec_deg FROM objects WHERE id = ?", object).Scan(&ra, &dec); err != nil {
		return err
	}
	dir := unit(ra, dec)
	for _, r := range cone(nil, ra, dec, w.sky.reach) {
		for n := r.from; n <= r.to; n++ {
			points, err := w.sky.cell(n)
			if err != nil {
				return err
			}
			for _, p := range points {
				if p.role == roleJoins && separation(p.dir, dir) <= w.sky.reach {
					ask[p.id] = p
				}
			}
		}
	}
	return nil
}

// store writes clusters as objects. A cluster takes over the row of the object
// with which it shares most seeds; rows of touched objects that no cluster takes
// over are deleted.
func (w *worker) store(clusters []cluster, touched map[int64]bool) error {
	slices.SortFunc(clusters, func(a, b cluster) int { return earlier(a.members[0], b.members[0]) })
	type claim struct {
		object         int64
		cluster, count int
	}
	var claims []claim
	for k := range clusters {
		count := map[int64]int{}
		for _, p := range clusters[k].members {
			if o := p.identity(); o != 0 {
				count[o]++
			}
		}
		for o, n := range count {
			claims = append(claims, claim{o, k, n})
		}
	}
	slices.SortFunc(claims, func(a, b claim) int {
		return cmp.Or(-cmp.Compare(a.count, b.count), cmp.Compare(a.object, b.object), cmp.Compare(a.cluster, b.cluster))
	})
	row := make([]int64, len(clusters))
	heir := map[int64]int{} // object to the cluster that holds most of its seeds
	taken := map[int64]bool{}
	for _, c := range claims {
		if _, ok := heir[c.object]; !ok {
			heir[c.object] = c.cluster
		}
		if row[c.cluster] == 0 && !taken[c.object] {
			row[c.cluster] = c.object
			taken[c.object] = true
		}
	}

	// Present names of the touched objects.
	names := map[int64]string{}
	var ids []int64
	for o := range touched {
		ids = append(ids, o)
	}
	slices.Sort(ids)
	for _, o := range ids {
		var name string
		err := w.tx.QueryRowContext(w.ctx, "SELECT name FROM objects WHERE id = ?", o).Scan(&name)
		if errors.Is(err, sql.ErrNoRows) {
			continue
		}
		if err != nil {
			return err
		}
		names[o] = name
	}

	// Names first, so that two objects can change theirs.
	wanted := make([]string, len(clusters))
	inUse := map[string]bool{}
	for k, c := range clusters {
		f := c.members[0]
		base := designation(f.ra, f.dec, w.cfg.Prefix)
		name := base
		for n := 2; ; n++ {
			free, err := w.nameFree(name, touched)
			if err != nil {
				return err
			}
			if free && !inUse[name] {
				break
			}
			name = fmt.Sprintf("%s-%d", base, n)
		}
		inUse[name] = true
		wanted[k] = name
	}
	keeps := map[int64]bool{}
	for k, o := range row {
		keeps[o] = names[o] == wanted[k]
	}
	for _, o := range ids {
		if !keeps[o] {
			if _, err := w.tx.ExecContext(w.ctx, "UPDATE objects SET name = ? WHERE id = ?", fmt.Sprintf("\x01%d", o), o); err != nil {
				return err
			}
		}
	}
	var created []int
	for k := range clusters {
		c := &clusters[k]
		ra, dec := c.at.position()
		values := []any{wanted[k], cellOf(ra, dec), ra, dec, math.Sqrt(c.cov.xx), math.Sqrt(c.cov.yy), c.cov.xy, c.members[0].id}
		if row[k] != 0 {
			if _, err := w.update.ExecContext(w.ctx, append(values, row[k])...); err != nil {
				return err
			}
		} else {
			if err := w.create.QueryRowContext(w.ctx, values...).Scan(&row[k]); err != nil {
				return err
			}
			created = append(created, k)
		}
		w.dirty[row[k]], w.moved[row[k]] = true, true
		for _, p := range c.members {
			if p.object != row[k] {
				if _, err := w.assign.ExecContext(w.ctx, row[k], p.id); err != nil {
					return err
				}
				p.object = row[k]
			}
		}
	}
	// Former names lead to the heir; those of an object without heir go.
	for _, o := range ids {
		old, present := names[o]
		if !present {
			continue
		}
		k, ok := heir[o]
		if !ok {
			continue
		}
		if old != wanted[k] {
			if _, err := w.tx.ExecContext(w.ctx, "INSERT INTO names (name, object) VALUES (?, ?) ON CONFLICT (name) DO UPDATE SET object = excluded.object", old, row[k]); err != nil {
				return err
			}
		}
		if row[k] != o {
			for _, table := range []string{"names", "remarks"} {
				if _, err := w.tx.ExecContext(w.ctx, "UPDATE "+table+" SET object = ? WHERE object = ?", row[k], o); err != nil {
					return err
				}
			}
		}
	}
	for _, name := range wanted { // a name in use is not a former one
		if _, err := w.unname.ExecContext(w.ctx, name); err != nil {
			return err
		}
	}
	for _, o := range ids {
		if taken[o] {
			continue
		}
		for _, table := range []string{"candidates", "remarks"} {
			if _, err := w.tx.ExecContext(w.ctx, "UPDATE "+table+" SET object = NULL WHERE object = ?", o); err != nil {
				return err
			}
		}
		if _, err := w.tx.ExecContext(w.ctx, "DELETE FROM objects WHERE id = ?", o); err != nil {
			return err
		}
		delete(w.dirty, o)
		delete(w.moved, o)
		w.orphans = true
	}
	if !w.orphans {
		return nil
	}
	for _, k := range created {
		if err := w.adopt(row[k], clusters[k].at, clusters[k].cov); err != nil {
			return err
		}
	}
	return nil
}

// designation names a place in the IAU's style, JHHMMSS.ss±DDMMSS.s, digits cut
// and not rounded. A hundredth of a second of time and a tenth of an arcsecond
// are finer than the distance at which two detections are always linked, so
// that only objects of one component can come to the same name; these are
// numbered in order of their founders.
func designation(ra, dec float64, prefix string) string {
	const nearly = 1e-6 // of a last digit: what float64 makes of a decimal
	t := int64(math.Floor(math.Mod(math.Mod(ra, 360)+360, 360)*24000+nearly)) % 8640000
	d := int64(math.Floor(math.Abs(dec)*36000 + nearly))
	sign := '+'
	if dec < 0 {
		sign = '-'
	}
	name := fmt.Sprintf("J%02d%02d%02d.%02d%c%02d%02d%02d.%d", t/360000, t/6000%60, t/100%60, t%100, sign, d/36000, d/600%60, d/10%60, d%10)
	if prefix == "" {
		return name
	}
	return prefix + " " + name
}

// nameFree reports whether no object but touched ones has the name.
func (w *worker) nameFree(name string, touched map[int64]bool) (bool, error) {
	var other int64
	err := w.named.QueryRowContext(w.ctx, name).Scan(&other)
	if errors.Is(err, sql.ErrNoRows) {
		return true, nil
	}
	return touched[other], err
}

// spot is an object's place.
type spot struct {
	id      int64
	name    string
	ra, dec float64
	dir     vector
	cov     covariance
}

// spots returns the objects in the cells around a place. They must not change
// after the first call.
func (w *worker) spots(ra, dec float64) ([]spot, error) {
	var list []spot
	var buf [4]cellRange
	for _, r := range cone(buf[:0], ra, dec, w.sky.reach) {
		for n := r.from; n <= r.to; n++ {
			known, ok := w.places[n]
			if !ok {
				var err error
				if err = w.loadSpots(n, n); err != nil {
					return nil, err
				}
				known = w.places[n]
			}
			list = append(list, known...)
		}
	}
	return list, nil
}

// loadSpots fills places for a range of cells.
func (w *worker) loadSpots(from, to int64) error {
	rows, err := w.objects.QueryContext(w.ctx, from, to)
	if err != nil {
		return err
	}
	defer rows.Close()
	for n := from; n <= to; n++ {
		w.places[n] = nil
	}
	for rows.Next() {
		var s spot
		var ex, ey float64
		var cell int64
		if err := rows.Scan(&s.id, &s.ra, &s.dec, &ex, &ey, &s.cov.xy, &s.name, &cell); err != nil {
			return err
		}
		s.cov.xx, s.cov.yy, s.dir = ex*ex, ey*ey, unit(s.ra, s.dec)
		w.places[cell] = append(w.places[cell], s)
	}
	return rows.Err()
}

// join gives each of the joiners to the nearest object within the limit, or to
// none.
func (w *worker) join(joiners map[string]*point) error {
	cells := map[int64]bool{}
	for _, p := range joiners {
		w.sky.cellsAround(cells, p.ra, p.dec)
	}
	if err := runs(cells, w.loadSpots); err != nil {
		return err
	}
	for _, p := range joiners {
		spots, err := w.spots(p.ra, p.dec)
		if err != nil {
			return err
		}
		object := bestSpot(p, spots, w.limit)
		var stored int64
		var now sql.NullInt64
		if err := w.holder.QueryRowContext(w.ctx, p.id).Scan(&now); err != nil {
			return err
		}
		stored = now.Int64
		if stored == object {
			continue
		}
		var value any
		if object != 0 {
			value = object
			w.dirty[object] = true
		}
		if stored != 0 {
			w.dirty[stored] = true
		}
		if _, err := w.assign.ExecContext(w.ctx, value, p.id); err != nil {
			return err
		}
	}
	return nil
}

// bestSpot returns the object nearest to a joiner, in units of both errors, or
// 0 if none is within the limit; the first by name of equal ones.
func bestSpot(p *point, spots []spot, limit float64) int64 {
	var object int64
	best, name := math.Inf(1), ""
	for _, s := range spots {
		// As in linked: settle most without trigonometry.
		if chord2(p.dir, s.dir) > limit*(p.xx+p.yy+s.cov.xx+s.cov.yy)*(arcsec*arcsec) {
			continue
		}
		plane := newPlane(s.ra, s.dec)
		x, y := plane.offset(p.dir)
		chi := covariance{p.xx + s.cov.xx, p.yy + s.cov.yy, p.xy + s.cov.xy}.distance(x, y)
		if chi <= limit && (chi < best || chi == best && s.name < name) {
			best, object, name = chi, s.id, s.name
		}
	}
	return object
}

// summary is what is kept in table objects about the detections of one.
type summary struct {
	kind                string
	probability         float64
	detections, nights  int
	firstMJD, lastMJD   float64
	firstNight, last    string
	peakMag, peakMJD    float64
	peakSignificance    float64
	filters             string
	strongest           float64
	frames, nightsKnown map[string]bool
	filterSet           map[string]bool
}

const summaryQuery = `SELECT frame, night, filter, mid_mjd, mag, significance, real_probability, kind
	FROM candidates WHERE object = ? ORDER BY mid_mjd IS NULL, mid_mjd, candidate_id`

func (w *worker) summarise() error {
	if len(w.dirty) == 0 {
		return nil
	}
	read, err := w.tx.PrepareContext(w.ctx, summaryQuery)
	if err != nil {
		return err
	}
	defer read.Close()
	for o := range w.dirty {
		s, err := summarise(w.ctx, read, o)
		if err != nil {
			return err
		}
		if _, err := w.tx.ExecContext(w.ctx, `UPDATE objects SET kind = ?, real_probability = ?, detections = ?, nights = ?,
			first_mjd = ?, last_mjd = ?, first_night = ?, last_night = ?, peak_mag = ?, peak_mjd = ?, peak_significance = ?, filters = ? WHERE id = ?`,
			s.kind, nullReal(s.probability), s.detections, s.nights, nullReal(s.firstMJD), nullReal(s.lastMJD),
			nullText(s.firstNight), nullText(s.last), nullReal(s.peakMag), nullReal(s.peakMJD), nullReal(s.peakSignificance), nullText(s.filters), o); err != nil {
			return err
		}
	}
	return nil
}

func summarise(ctx context.Context, read *sql.Stmt, object int64) (*summary, error) {
	rows, err := read.QueryContext(ctx, object)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	n := math.NaN()
	s := &summary{probability: n, firstMJD: n, lastMJD: n, peakMag: n, peakMJD: n, peakSignificance: n, strongest: -1,
		frames: map[string]bool{}, nightsKnown: map[string]bool{}, filterSet: map[string]bool{}}
	for rows.Next() {
		var frame string
		var night, filter, kind sql.NullString
		var mjd, mag, significance, probability sql.NullFloat64
		if err := rows.Scan(&frame, &night, &filter, &mjd, &mag, &significance, &probability, &kind); err != nil {
			return nil, err
		}
		s.frames[frame] = true
		if night.Valid {
			s.nightsKnown[night.String] = true
		}
		if filter.Valid {
			s.filterSet[filter.String] = true
		}
		if mjd.Valid {
			if !(s.firstMJD <= mjd.Float64) {
				s.firstMJD = mjd.Float64
			}
			if !(s.lastMJD >= mjd.Float64) {
				s.lastMJD = mjd.Float64
			}
		}
		if mag.Valid && !(s.peakMag <= mag.Float64) {
			s.peakMag, s.peakMJD = mag.Float64, n
			if mjd.Valid {
				s.peakMJD = mjd.Float64
			}
		}
		if a := math.Abs(significance.Float64); significance.Valid && a > s.strongest {
			s.strongest, s.peakSignificance, s.kind = a, significance.Float64, kind.String
		}
		if s.kind == "" {
			s.kind = kind.String
		}
		if probability.Valid && !(s.probability >= probability.Float64) {
			s.probability = probability.Float64
		}
	}
	s.detections, s.nights = len(s.frames), len(s.nightsKnown)
	nights := sorted(s.nightsKnown)
	if len(nights) > 0 {
		s.firstNight, s.last = nights[0], nights[len(nights)-1]
	}
	s.filters = strings.Join(sorted(s.filterSet), " ")
	return s, rows.Err()
}

func sorted(set map[string]bool) []string {
	var list []string
	for k := range set {
		list = append(list, k)
	}
	slices.Sort(list)
	return list
}
