package align

import (
	"encoding/json"
	"fmt"
	"strconv"
	"strings"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/photometry"
	"nightsift/internal/stars"
	"nightsift/internal/startable"
	"nightsift/internal/wcs"
)

// The extensions of aligned.fits.
const (
	extNew               = "NEW"
	extNewVariance       = "NEW_VARIANCE"
	extNewFlags          = "NEW_FLAGS"
	extReference         = "REFERENCE"
	extReferenceVariance = "REFERENCE_VARIANCE"
	extReferenceFlags    = "REFERENCE_FLAGS"
	extSkyMesh           = "NEW_SKY_MESH"
	extNoiseMesh         = "NEW_NOISE_MESH"
	extNewStars          = "NEW_STARS"
	extReferenceStars    = "REFERENCE_STARS"
	extMatches           = "MATCHES"
	extSummary           = "ALIGNMENT"
	extTransform         = "TRANSFORM"
)

// item is one value of the summary table: p points to a float64, int, string
// or bool.
type item struct {
	name, unit, description string
	p                       any
}

// summary lists every scalar of a pair. Write and Read both go by it.
func summary(p *Pair, fitted *bool, newOrigin, refOrigin *string) []item {
	list := []item{
		{"flux_scale", "", "counts on the new frame for one on the reference", &p.FluxScale},
		{"flux_scale_err", "", "1 sigma", &p.FluxScaleErr},
		{"flux_scale_stars", "", "stars behind it", &p.FluxScaleStars},
		{"reference_fwhm", "pix", "on the grid of the new frame", &p.ReferenceFWHM},
		{"parity", "", "-1 if one frame mirrors the other", &p.Parity},
		{"rotation", "deg", "direction of the new x axis on the reference", &p.Rotation},
		{"scale", "", "reference pixels per new pixel", &p.Scale},
		{"overlap", "", "fraction of the new frame covered", &p.Overlap},
		{"rms_x", "pix", "residual of bright stars", &p.RMSX},
		{"rms_y", "pix", "residual of bright stars", &p.RMSY},
		{"rms_x_all", "pix", "residual of all stars used", &p.RMSXAll},
		{"rms_y_all", "pix", "residual of all stars used", &p.RMSYAll},
		{"bright_stars", "", "stars behind rms_x and rms_y", &p.BrightStars},
		{"floor", "pix", "error added to the centroids' own", &p.Floor},
		{"condition", "", "of the normal matrix", &p.Condition},
		{"method", "", "how the match was found", &p.Method},
		{"log_odds", "", "log10 of the odds of a chance match", &p.LogOdds},
		{"wcs_fitted", "", "the WCS was carried over from the reference", fitted},
		{"wcs_rms", "pix", "of its representation", &p.WCSRMS},
	}
	for _, f := range []struct {
		prefix string
		f      *frame.Frame
		v      *stars.VarianceReport
		origin *string
	}{{"new_", p.New, &p.NewVariance, newOrigin}, {"ref_", p.Reference, &p.ReferenceVariance, refOrigin}} {
		m := &f.f.Meta
		for _, i := range []item{
			{"name", "", "of the frame", &f.f.Name},
			{"path", "", "of the file", &f.f.Path},
			{"sha256", "", "of the file", &f.f.Checksum},
			{"gain", "electron/count", "", &m.Gain},
			{"read_noise", "electron", "", &m.ReadNoise},
			{"saturation", "count", "", &m.Saturation},
			{"exposure", "s", "", &m.Exposure},
			{"mid_mjd", "d", "UTC, middle of the exposure", &m.MidMJD},
			{"zero_point", "mag", "of one count", &m.ZeroPoint},
			{"airmass", "", "", &m.Airmass},
			{"filter", "", "", &m.Filter},
			{"field", "", "", &m.Field},
			{"origin", "", "where the values came from, JSON", f.origin},
			{"variance_source", "", "what filled the variance", &f.v.Source},
			{"variance_reason", "", "why", &f.v.Reason},
			{"model_noise", "count", "from gain, read noise and sky", &f.v.ModelNoise},
			{"measured_noise", "count", "white noise of the pixels", &f.v.MeasuredNoise},
			{"clipped_noise", "count", "clipped standard deviation", &f.v.ClippedNoise},
			{"noise_correlation", "", "of second differences two pixels apart", &f.v.Correlation},
			{"sky_gain", "electron/count", "that would explain the noise", &f.v.SkyGain},
		} {
			i.name = f.prefix + i.name
			list = append(list, i)
		}
	}
	b := p.NewBackground
	l := p.NewStars
	return append(list,
		item{"sky", "count", "median of the new frame", &b.MedianSky},
		item{"sky_noise", "count", "median white noise of the new frame", &b.MedianNoise},
		item{"sky_clipped_noise", "count", "median clipped standard deviation", &b.ClippedNoise},
		item{"sky_noise_ratio", "", "clipped over white noise", &b.NoiseRatio},
		item{"sky_correlation", "", "of second differences two pixels apart", &b.Correlation},
		item{"sky_masked", "", "fraction of pixels masked as sources", &b.Masked},
		item{"sky_filled_cells", "", "cells filled from neighbours", &b.FilledCells},
		item{"new_fwhm", "pix", "median of the clean stars", &l.FWHM},
		item{"new_roundness", "", "median of the clean stars", &l.Roundness},
		item{"new_clean", "", "number of clean stars", &l.Clean},
		item{"new_sharp", "", "sources sharper than the PSF", &l.Sharp},
		item{"new_window", "pix", "sigma of the window of the moments", &l.Window},
	)
}

// printable text goes into a table as it is, other text quoted in ASCII.
func tableText(s string) string {
	for i := range len(s) {
		if s[i] < 32 || s[i] > 126 {
			return strconv.QuoteToASCII(s)
		}
	}
	if strings.HasPrefix(s, `"`) || strings.HasPrefix(s, " ") || strings.HasSuffix(s, " ") {
		return strconv.QuoteToASCII(s)
	}
	return s
}

func fromTableText(s string) (string, error) {
	if !strings.HasPrefix(s, `"`) {
		return s, nil
	}
	return strconv.Unquote(s)
}

// Write writes the pair as aligned.fits: planes, star lists and every number
// that Read needs to give the same pair again. provenance (nil for none) goes
// into the primary header.
func (p *Pair) Write(path string, provenance *fits.Header) error {
	return p.WriteCompressed(path, provenance, fits.Compression{})
}

// WriteCompressed is Write with the planes compressed. Without quantisation
// the file gives the same pair.
func (p *Pair) WriteCompressed(path string, provenance *fits.Header, c fits.Compression) error {
	n, r := p.New, p.Reference
	w, h := n.Image.Width, n.Image.Height
	sky := &fits.Header{}
	if n.WCS != nil {
		for _, c := range n.WCS.Cards() {
			sky.Add(fits.Card{Key: c.Key, Value: c.Value, Comment: c.Comment})
		}
	}
	counts := func(unit string) *fits.Header {
		c := sky.Clone()
		c.Set("BUNIT", unit, "")
		return c
	}
	bits := func(m *frame.Mask) []uint16 {
		b := make([]uint16, len(m.Bits))
		for i, f := range m.Bits {
			b[i] = uint16(f)
		}
		return b
	}
	described := sky.Clone()
	for i, f := range frame.FlagNames {
		described.Set(fmt.Sprintf("FLAG%02d", i), f.Name, fmt.Sprintf("bit value %d: %s", f.Bit, f.Meaning))
	}
	b := p.NewBackground
	mesh := func(name string, v []float32) *fits.ImageHDU {
		c := &fits.Header{}
		c.Set("BUNIT", "count", "")
		return &fits.ImageHDU{Name: name, Header: c, Width: b.NX, Height: b.NY, Float: v}
	}

	newOrigin, err := json.Marshal(n.Meta.Origin)
	if err != nil {
		return err
	}
	refOrigin, err := json.Marshal(r.Meta.Origin)
	if err != nil {
		return err
	}
	fitted := p.WCS != nil
	no, ro := string(newOrigin), string(refOrigin)
	table := &fits.Table{Name: extSummary}
	for _, i := range summary(p, &fitted, &no, &ro) {
		c := fits.Column{Name: i.name, Unit: i.unit, Description: i.description}
		switch v := i.p.(type) {
		case *float64:
			c.Data = []float64{*v}
		case *int:
			c.Data = []int64{int64(*v)}
		case *string:
			c.Data = []string{tableText(*v)}
		case *bool:
			c.Data = []bool{*v}
		default:
			panic(fmt.Sprintf("align: summary item %s has type %T", i.name, i.p))
		}
		table.Columns = append(table.Columns, c)
	}
	t := p.Transform
	th := &fits.Header{}
	th.Set("ORDER", t.Order, "total degree of the Legendre polynomials")
	th.Set("CENTREX", t.X0, "[pix] u = (x-CENTREX)/HALFX")
	th.Set("CENTREY", t.Y0, "[pix] v = (y-CENTREY)/HALFY")
	th.Set("HALFX", t.HalfX, "[pix]")
	th.Set("HALFY", t.HalfY, "[pix]")
	var du, dv []int32
	for d := 0; d <= t.Order; d++ {
		for j := 0; j <= d; j++ {
			du, dv = append(du, int32(d-j)), append(dv, int32(j))
		}
	}
	transform := &fits.Table{Name: extTransform, Header: th, Columns: []fits.Column{
		{Name: "degree_u", Description: "degree of the polynomial in u", Data: du},
		{Name: "degree_v", Description: "degree of the polynomial in v", Data: dv},
		{Name: "x", Unit: "pix", Description: "coefficient of x on the reference", Data: t.CX},
		{Name: "y", Unit: "pix", Description: "coefficient of y on the reference", Data: t.CY},
	}}

	match := struct {
		a, b   []int32
		dx, dy []float64
		used   []bool
	}{}
	for _, m := range p.Matches {
		match.a, match.b = append(match.a, int32(m.New)), append(match.b, int32(m.Reference))
		match.dx, match.dy, match.used = append(match.dx, m.DX), append(match.dy, m.DY), append(match.used, m.Used)
	}
	matches := &fits.Table{Name: extMatches, Columns: []fits.Column{
		{Name: "new", Description: "row of " + extNewStars + ", from 0", Data: match.a},
		{Name: "reference", Description: "row of " + extReferenceStars + ", from 0", Data: match.b},
		{Name: "dx", Unit: "pix", Description: "measured minus fitted", Data: match.dx},
		{Name: "dy", Unit: "pix", Description: "measured minus fitted", Data: match.dy},
		{Name: "used", Description: "entered the fit", Data: match.used},
	}}

	planes := []fits.HDUWriter{
		&fits.ImageHDU{Name: extNew, Header: counts("count"), Width: w, Height: h, Float: n.Image.Pix},
		&fits.ImageHDU{Name: extNewVariance, Header: counts("count2"), Width: w, Height: h, Float: n.Variance.Pix},
		&fits.ImageHDU{Name: extNewFlags, Header: described, Width: w, Height: h, Bits: bits(n.Flags)},
		&fits.ImageHDU{Name: extReference, Header: counts("count"), Width: w, Height: h, Float: r.Image.Pix},
		&fits.ImageHDU{Name: extReferenceVariance, Header: counts("count2"), Width: w, Height: h, Float: r.Variance.Pix},
		&fits.ImageHDU{Name: extReferenceFlags, Header: described, Width: w, Height: h, Bits: bits(r.Flags)},
		mesh(extSkyMesh, b.SkyMesh), mesh(extNoiseMesh, b.NoiseMesh),
		table, transform, startable.New(extNewStars, p.NewStars.Stars), startable.New(extReferenceStars, p.ReferenceStars), matches,
	}
	if p.Standards != nil {
		planes = append(planes, p.Standards.Table())
	}
	return fits.WriteCompressed(path, c, provenance, planes...)
}

// Read reads what Write wrote. The error names the file, the extension and
// what is wrong with it.
func Read(path string) (*Pair, error) {
	f, err := fits.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	r := pairReader{f: f, path: path}
	p := &Pair{
		New: &frame.Frame{}, Reference: &frame.Frame{},
		NewBackground: &stars.Background{}, NewStars: &stars.List{},
	}
	p.New.Image, p.New.WCS = r.image(extNew)
	p.New.Variance, _ = r.image(extNewVariance)
	p.New.Flags = r.mask(extNewFlags)
	p.Reference.Image, _ = r.image(extReference)
	p.Reference.Variance, _ = r.image(extReferenceVariance)
	p.Reference.Flags = r.mask(extReferenceFlags)
	skyMesh, _ := r.image(extSkyMesh)
	noiseMesh, _ := r.image(extNoiseMesh)
	p.NewStars.Stars = r.stars(extNewStars)
	p.ReferenceStars = r.stars(extReferenceStars)
	p.Transform = r.transform()
	p.Matches = r.matches(len(p.NewStars.Stars), len(p.ReferenceStars))
	p.Standards = r.standards()
	if r.err != nil {
		return nil, r.err
	}
	size := p.New.Image
	for name, m := range map[string]*frame.Image{extNewVariance: p.New.Variance, extReference: p.Reference.Image, extReferenceVariance: p.Reference.Variance} {
		if !m.SameShape(size) {
			return nil, r.wrong(name, "is %d×%d pixels, %s is %d×%d", m.Width, m.Height, extNew, size.Width, size.Height)
		}
	}
	for name, m := range map[string]*frame.Mask{extNewFlags: p.New.Flags, extReferenceFlags: p.Reference.Flags} {
		if m.Width != size.Width || m.Height != size.Height {
			return nil, r.wrong(name, "is %d×%d pixels, %s is %d×%d", m.Width, m.Height, extNew, size.Width, size.Height)
		}
	}
	if !skyMesh.SameShape(noiseMesh) {
		return nil, r.wrong(extNoiseMesh, "is %d×%d cells, %s is %d×%d", noiseMesh.Width, noiseMesh.Height, extSkyMesh, skyMesh.Width, skyMesh.Height)
	}
	p.NewBackground, err = stars.BackgroundFromMesh(size.Width, size.Height, skyMesh.Width, skyMesh.Height, skyMesh.Pix, noiseMesh.Pix)
	if err != nil {
		return nil, fmt.Errorf("%s[%s]: %w", path, extSkyMesh, err)
	}
	if err := r.summary(p); err != nil {
		return nil, err
	}
	return p, nil
}

// pairReader keeps the first error, so that the calls can stand in a row.
type pairReader struct {
	f    *fits.File
	path string
	err  error
}

func (r *pairReader) wrong(ext, format string, args ...any) error {
	return fmt.Errorf("%s[%s]: %s; was the file written by nightsift align?", r.path, ext, fmt.Sprintf(format, args...))
}

func (r *pairReader) find(ext string) (int, bool) {
	if r.err != nil {
		return 0, false
	}
	for i, h := range r.f.HDUs() {
		if h.Name == ext {
			return i, true
		}
	}
	r.err = r.wrong(ext, "there is no such extension")
	return 0, false
}

func (r *pairReader) image(ext string) (*frame.Image, *wcs.WCS) {
	i, ok := r.find(ext)
	if !ok {
		return nil, nil
	}
	m, err := r.f.Image(i)
	if err != nil {
		r.err = err
		return nil, nil
	}
	w, err := wcs.FromKeywords(m.Header)
	if err != nil {
		r.err = fmt.Errorf("%s[%s]: %w", r.path, ext, err)
		return nil, nil
	}
	return &frame.Image{Width: m.Width, Height: m.Height, Pix: m.Pix}, w
}

func (r *pairReader) mask(ext string) *frame.Mask {
	i, ok := r.find(ext)
	if !ok {
		return nil
	}
	m, err := r.f.Flags(i)
	if err != nil {
		r.err = err
		return nil
	}
	k := frame.NewMask(m.Width, m.Height)
	for i, b := range m.Bits {
		k.Bits[i] = frame.Flag(b)
	}
	return k
}

func (r *pairReader) table(ext string) *fits.Table {
	i, ok := r.find(ext)
	if !ok {
		return nil
	}
	t, err := r.f.Table(i)
	if err != nil {
		r.err = err
		return nil
	}
	return t
}

// column reads one column by a method of fits.Table, which names table and
// column in its errors.
func column[T any](r *pairReader, read func(name string) ([]T, error), name string) []T {
	if r.err != nil {
		return nil
	}
	v, err := read(name)
	if err != nil {
		r.err = fmt.Errorf("%s: %w", r.path, err)
	}
	return v
}

func (r *pairReader) stars(ext string) []stars.Star {
	t := r.table(ext)
	if t == nil {
		return nil
	}
	list, err := startable.Read(t)
	if err != nil {
		r.err = fmt.Errorf("%s: %w", r.path, err)
	}
	return list
}

func (r *pairReader) matches(na, nb int) []Match {
	t := r.table(extMatches)
	if t == nil {
		return nil
	}
	list := make([]Match, t.Rows())
	for i, v := range column(r, t.Ints, "new") {
		list[i].New = int(v)
	}
	for i, v := range column(r, t.Ints, "reference") {
		list[i].Reference = int(v)
	}
	for i, v := range column(r, t.Floats, "dx") {
		list[i].DX = v
	}
	for i, v := range column(r, t.Floats, "dy") {
		list[i].DY = v
	}
	for i, v := range column(r, t.Bools, "used") {
		list[i].Used = v
	}
	for i, m := range list {
		if r.err == nil && (m.New < 0 || m.New >= na || m.Reference < 0 || m.Reference >= nb) {
			r.err = r.wrong(extMatches, "row %d joins stars %d and %d, the lists have %d and %d", i+1, m.New, m.Reference, na, nb)
		}
	}
	return list
}

// standards returns nil when the file has none.
func (r *pairReader) standards() *photometry.Standards {
	for _, h := range r.f.HDUs() {
		if h.Name != photometry.Extension {
			continue
		}
		t := r.table(photometry.Extension)
		if t == nil {
			return nil
		}
		s, err := photometry.FromTable(t)
		if err != nil {
			r.err = fmt.Errorf("%s: %w", r.path, err)
			return nil
		}
		return s
	}
	return nil
}

func (r *pairReader) transform() *Transform {
	table := r.table(extTransform)
	if table == nil {
		return nil
	}
	t := &Transform{CX: column(r, table.Floats, "x"), CY: column(r, table.Floats, "y")}
	order, _ := table.Header.Int("ORDER")
	t.Order = int(order)
	t.X0, _ = table.Header.Float("CENTREX")
	t.Y0, _ = table.Header.Float("CENTREY")
	t.HalfX, _ = table.Header.Float("HALFX")
	t.HalfY, _ = table.Header.Float("HALFY")
	if r.err == nil {
		if err := t.check(); err != nil {
			r.err = r.wrong(extTransform, "%v", err)
		}
	}
	return t
}

func (r *pairReader) summary(p *Pair) error {
	t := r.table(extSummary)
	if r.err != nil {
		return r.err
	}
	if t.Rows() != 1 {
		return r.wrong(extSummary, "has %d rows, want 1", t.Rows())
	}
	var fitted bool
	var newOrigin, refOrigin string
	for _, i := range summary(p, &fitted, &newOrigin, &refOrigin) {
		switch v := i.p.(type) {
		case *float64:
			if c := column(r, t.Floats, i.name); r.err == nil {
				*v = c[0]
			}
		case *int:
			if c := column(r, t.Ints, i.name); r.err == nil {
				*v = int(c[0])
			}
		case *string:
			if c := column(r, t.Strings, i.name); r.err == nil {
				s, err := fromTableText(c[0])
				if err != nil {
					return r.wrong(extSummary, "column %s: %q is not a quoted string", i.name, c[0])
				}
				*v = s
			}
		case *bool:
			if c := column(r, t.Bools, i.name); r.err == nil {
				*v = c[0]
			}
		}
	}
	if r.err != nil {
		return r.err
	}
	for _, o := range []struct {
		text string
		to   *map[string]string
	}{{newOrigin, &p.New.Meta.Origin}, {refOrigin, &p.Reference.Meta.Origin}} {
		if err := json.Unmarshal([]byte(o.text), o.to); err != nil {
			return r.wrong(extSummary, "origin %q is not JSON: %v", o.text, err)
		}
	}
	if fitted {
		p.WCS = p.New.WCS
		p.Reference.WCS = p.New.WCS
	}
	return nil
}
