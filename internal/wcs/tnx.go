package wcs

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// tnx reads the distortion of the TNX convention (FITS registry): each axis has
// in its keywords WATi_001, WATi_002 … a polynomial in the intermediate
// coordinates [deg] that is added to its own. It becomes a TPV of the same
// values.
func (h header) tnx(axis [2]int) (*tpv, error) {
	t := &tpv{}
	for i, f := range [2]*polynomial{&t.lon, &t.lat} {
		name := [2]string{"lngcor", "latcor"}[i]
		list, ok := attribute(h.watText(axis[i]), name)
		if ok {
			if err := surface(f, list); err != nil {
				return nil, fmt.Errorf("wcs: %s in WAT%d_001 …: %w", name, axis[i], err)
			}
		}
	}
	return t.identity(), nil
}

// identity adds to each axis its own coordinate.
func (t *tpv) identity() *tpv {
	t.lon.order, t.lat.order = max(t.lon.order, 1), max(t.lat.order, 1)
	t.lon.c[1][0]++
	t.lat.c[0][1]++
	return t
}

// zpx reads the same for the ZPX convention, whose projection is ZPN with its
// parameters, projp0 to projp9, in the same keywords. It returns nil when there
// is no distortion.
func (h header) zpx(axis [2]int, p *parameters) (*tpv, error) {
	for i := range 2 {
		text := h.watText(axis[i])
		for m := range 10 {
			name := fmt.Sprintf("projp%d", m)
			_, rest, ok := strings.Cut(text, name)
			if !ok {
				continue
			}
			words := strings.Fields(strings.TrimLeft(rest, " ="))
			if len(words) == 0 {
				return nil, fmt.Errorf("wcs: %s in WAT%d_001 … has no value", name, axis[i])
			}
			v, err := strconv.ParseFloat(words[0], 64)
			if err != nil || !finite(v) {
				return nil, fmt.Errorf("wcs: %s in WAT%d_001 … is %q; want a number", name, axis[i], words[0])
			}
			p.pv[m] = v
		}
	}
	t, err := h.tnx(axis)
	if err != nil {
		return nil, err
	}
	if none := (&tpv{}).identity(); t.lon.c == none.lon.c && t.lat.c == none.lat.c {
		return nil, nil
	}
	return t, nil
}

// watCards gives the texts of the keywords WATi_nnn of ZPX for an axis.
func (w *WCS) watCards(latitude bool) (texts []string) {
	f, g, kind, name := w.polynomial.lon, (&tpv{}).identity().lon, "ra", "lngcor"
	if latitude {
		f, g, kind, name = w.polynomial.lat, (&tpv{}).identity().lat, "dec", "latcor"
	}
	var b strings.Builder
	fmt.Fprintf(&b, "wtype=zpx axtype=%s", kind)
	for m, v := range w.parameter.pv {
		if v != 0 {
			fmt.Fprintf(&b, " projp%d=%v", m, v)
		}
	}
	fmt.Fprintf(&b, ` %s = "3. %d. %d. 2. -1. 1. -1. 1.`, name, f.order+1, f.order+1)
	for q := 0; q <= f.order; q++ {
		for p := 0; p+q <= f.order; p++ {
			fmt.Fprintf(&b, " %v", f.c[p][q]-g.c[p][q])
		}
	}
	b.WriteString(`"`)
	s := b.String()
	for len(s) > watLength {
		texts = append(texts, s[:watLength])
		s = s[watLength:]
	}
	return append(texts, s)
}

// watLength is how many characters a keyword WATi_nnn holds.
const watLength = 68

// watText joins the WATi_nnn of an axis. Each but the last stands for 68
// characters, whose final blanks a FITS reader takes away.
func (h header) watText(axis int) string {
	var b strings.Builder
	for n := 1; n <= 999; n++ {
		s, ok := h.Str(fmt.Sprintf("WAT%d_%03d", axis, n))
		if !ok {
			break
		}
		if b.Len()%watLength != 0 {
			b.WriteString(strings.Repeat(" ", watLength-b.Len()%watLength))
		}
		b.WriteString(s)
	}
	return b.String()
}

// attribute finds name = "value" in the text of WATi.
func attribute(text, name string) (string, bool) {
	_, rest, ok := strings.Cut(text, name)
	if !ok {
		return "", false
	}
	rest = strings.TrimLeft(rest, " ")
	if !strings.HasPrefix(rest, "=") {
		return "", false
	}
	rest = strings.TrimLeft(rest[1:], " ")
	if !strings.HasPrefix(rest, `"`) {
		return "", false
	}
	value, _, _ := strings.Cut(rest[1:], `"`)
	return value, true
}

// surface reads a polynomial: its kind (1 Chebyshev, 2 Legendre, 3 powers), the
// numbers of terms in x and y, which products there are (0 none, 1 all, 2 those
// of the lower degrees), the ranges of x and y that the first two kinds bring to
// -1 … 1, and the coefficients.
func surface(f *polynomial, list string) error {
	var v []float64
	for _, word := range strings.Fields(list) {
		x, err := strconv.ParseFloat(word, 64)
		if err != nil || math.IsNaN(x) || math.IsInf(x, 0) {
			return fmt.Errorf("%q is not a number", word)
		}
		v = append(v, x)
	}
	if len(v) < 8 {
		return fmt.Errorf("%d numbers; want at least 8", len(v))
	}
	kind, nx, ny, cross := v[0], v[1], v[2], v[3]
	if kind != 1 && kind != 2 && kind != 3 {
		return fmt.Errorf("kind of polynomial %g; want 1, 2 or 3", kind)
	}
	const most = maxTPVOrder + 1
	for _, n := range [2]float64{nx, ny} {
		if n != math.Trunc(n) || n < 1 || n > most {
			return fmt.Errorf("%g terms in one coordinate; want 1 to %d", n, most)
		}
	}
	if cross != 0 && cross != 1 && cross != 2 {
		return fmt.Errorf("code of the products %g; want 0, 1 or 2", cross)
	}
	xs, err := basis(kind, int(nx), v[4], v[5])
	if err != nil {
		return err
	}
	ys, err := basis(kind, int(ny), v[6], v[7])
	if err != nil {
		return err
	}
	v = v[8:]
	inX := int(nx)
	for j := range int(ny) {
		for i := range inX {
			if len(v) == 0 {
				return fmt.Errorf("coefficients are missing")
			}
			c := v[0]
			v = v[1:]
			if c == 0 {
				continue
			}
			if i+j > maxTPVOrder {
				return fmt.Errorf("a term of degree %d; want at most %d", i+j, maxTPVOrder)
			}
			f.order = max(f.order, i+j)
			for p := range i + 1 {
				for q := range j + 1 {
					f.c[p][q] += c * xs[i][p] * ys[j][q]
				}
			}
		}
		switch {
		case cross == 0:
			inX = 1
		case cross == 2 && j+1+int(nx) > max(int(nx), int(ny)):
			inX = max(0, inX-1)
		}
	}
	if len(v) != 0 {
		return fmt.Errorf("%d coefficients too many", len(v))
	}
	for p := range f.c {
		for _, c := range f.c[p] {
			if math.IsInf(c, 0) || math.IsNaN(c) {
				return fmt.Errorf("the polynomial overflows")
			}
		}
	}
	return nil
}

// basis returns the first n functions as powers of x, for the range low to high.
func basis(kind float64, n int, low, high float64) (b [maxTPVOrder + 1][maxTPVOrder + 1]float64, err error) {
	scale, shift := 1., 0.
	if kind != 3 {
		if !(high > low) {
			return b, fmt.Errorf("range %g to %g is empty", low, high)
		}
		scale, shift = 2/(high-low), -(high+low)/(high-low)
	}
	b[0][0] = 1
	for k := 1; k < n; k++ {
		// b[k] = rise s b[k-1] - fall b[k-2], with s = scale x + shift.
		rise, fall := 1., 0.
		switch {
		case kind == 1 && k > 1:
			rise, fall = 2, 1
		case kind == 2:
			rise, fall = float64(2*k-1)/float64(k), float64(k-1)/float64(k)
		}
		for p := range k {
			b[k][p] += rise * shift * b[k-1][p]
			b[k][p+1] += rise * scale * b[k-1][p]
			if k > 1 {
				b[k][p] -= fall * b[k-2][p]
			}
		}
	}
	return b, nil
}
