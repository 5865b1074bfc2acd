// Package moc holds regions of the sky as multi-order coverage maps (Fernique,
// Nebot, Durand et al. 2022, "MOC: Multi-Order Coverage map" version 2.0, IVOA
// Recommendation): sets of HEALPix pixels, in which four pixels that fill one of
// the next lower order are that one.
package moc

import (
	"bufio"
	"fmt"
	"io"
	"math"
	"slices"

	"nightsift/internal/fits"
	"nightsift/internal/healpix"
)

// MOC is a set of pixels of one order, in nested numbers.
type MOC struct {
	Order  int
	ranges []healpix.Range // sorted, apart
}

// Add makes pixels of the map's order, in ranges of any order, part of the map.
func (m *MOC) Add(list []healpix.Range) {
	all := append(m.ranges, list...)
	slices.SortFunc(all, func(a, b healpix.Range) int {
		switch {
		case a.From < b.From:
			return -1
		case a.From > b.From:
			return 1
		}
		return 0
	})
	kept := all[:0]
	for _, r := range all {
		if n := len(kept); n > 0 && r.From <= kept[n-1].To {
			kept[n-1].To = max(kept[n-1].To, r.To)
			continue
		}
		kept = append(kept, r)
	}
	m.ranges = kept
}

// Area returns the size of the region in square degrees.
func (m *MOC) Area() float64 {
	var n int64
	for _, r := range m.ranges {
		n += r.To - r.From
	}
	return float64(n) / float64(healpix.Pixels(m.Order)) * 4 * math.Pi * (180 / math.Pi) * (180 / math.Pi)
}

// cells returns the pixels by order, each list sorted: as few as possible.
func (m *MOC) cells() [][]int64 {
	list := make([][]int64, m.Order+1)
	for _, r := range m.ranges {
		for from := r.From; from < r.To; {
			// The largest pixel that begins here and ends within the range.
			up := 0
			for up < m.Order && from&(1<<(2*(up+1))-1) == 0 && from+1<<(2*(up+1)) <= r.To {
				up++
			}
			order := m.Order - up
			list[order] = append(list[order], from>>(2*up))
			from += 1 << (2 * up)
		}
	}
	return list
}

// EncodeFITS writes the map as a FITS table with the numbers 4·4^order + pixel
// (ordering NUNIQ).
func (m *MOC) EncodeFITS(w io.Writer) error {
	uniq := []int64{}
	for order, list := range m.cells() {
		for _, pixel := range list {
			uniq = append(uniq, 4<<(2*order)+pixel)
		}
	}
	h := &fits.Header{}
	h.Set("MOCVERS", "2.0", "version of the MOC standard")
	h.Set("MOCDIM", "SPACE", "region of the sky")
	h.Set("ORDERING", "NUNIQ", "4*4^order + nested pixel")
	h.Set("COORDSYS", "C", "ICRS")
	h.Set("MOCORD_S", m.Order, "highest order")
	h.Set("PIXTYPE", "HEALPIX", "")
	h.Set("MOCORDER", m.Order, "as MOCORD_S, for version 1")
	return fits.Encode(w, nil, &fits.Table{Name: "MOC", Header: h,
		Columns: []fits.Column{{Name: "UNIQ", Description: "order and pixel", Data: uniq}}})
}

// EncodeJSON writes the map as JSON: lists of pixels by order. The highest order
// is there even without pixels.
func (m *MOC) EncodeJSON(w io.Writer) error {
	out := bufio.NewWriter(w)
	separator := "{"
	for order, list := range m.cells() {
		if len(list) == 0 && order < m.Order {
			continue
		}
		fmt.Fprintf(out, "%s\"%d\":[", separator, order)
		for k, pixel := range list {
			if k > 0 {
				out.WriteByte(',')
			}
			fmt.Fprint(out, pixel)
		}
		out.WriteByte(']')
		separator = ",\n"
	}
	out.WriteString("}\n")
	return out.Flush()
}
