package catalog

import (
	"context"
	"database/sql"
	"encoding/json"
	"math"
)

// outline returns the corners of a frame and the middles of its edges on the
// sky, around the frame; nil where the projection fails.
func outline(w Projection, width, height int) [][2]float64 {
	left, right, bottom, top := 0.5, float64(width)+0.5, 0.5, float64(height)+0.5
	x, y := (left+right)/2, (bottom+top)/2
	var list [][2]float64
	for _, p := range [][2]float64{{left, bottom}, {x, bottom}, {right, bottom}, {right, y}, {right, top}, {x, top}, {left, top}, {left, y}} {
		ra, dec, err := w.PixelToSky(p[0], p[1])
		if err != nil || !onSky(ra, dec) {
			return nil
		}
		list = append(list, [2]float64{ra, dec})
	}
	return list
}

func encodeOutline(list [][2]float64) any {
	if len(list) == 0 {
		return nil
	}
	b, err := json.Marshal(list)
	if err != nil { // infinite or NaN: not a place
		return nil
	}
	return string(b)
}

// circle returns the centre of an outline and the angle [arcsec] from it to the
// farthest corner; ok is false if there is no outline or it is as large as half
// of the sky.
func circle(list [][2]float64) (centre vector, radius float64, ok bool) {
	if len(list) < 3 {
		return centre, 0, false
	}
	for _, p := range list {
		if !onSky(p[0], p[1]) {
			return centre, 0, false
		}
		v := unit(p[0], p[1])
		for k := range centre {
			centre[k] += v[k]
		}
	}
	norm := math.Sqrt(dot(centre, centre))
	if norm < 1e-6*float64(len(list)) {
		return centre, 0, false
	}
	for k := range centre {
		centre[k] /= norm
	}
	for _, p := range list {
		radius = max(radius, separation(centre, unit(p[0], p[1])))
	}
	return centre, radius, radius < 80*3600
}

// Covers reports whether a position [deg] lies on the frame, by its Footprint.
// It is false where that is unknown.
func (r *FrameRecord) Covers(ra, dec float64) bool {
	centre, radius, ok := circle(r.Footprint)
	if !ok || !onSky(ra, dec) {
		return false
	}
	v := unit(ra, dec)
	if separation(centre, v) > radius+1 {
		return false
	}
	// Great circles are straight lines in the plane that touches the centre.
	at := newPlane(centre.position())
	x, y := at.offset(v)
	inside := false
	last := r.Footprint[len(r.Footprint)-1]
	x1, y1 := at.offset(unit(last[0], last[1]))
	for _, p := range r.Footprint {
		x2, y2 := at.offset(unit(p[0], p[1]))
		if (y1 > y) != (y2 > y) && x < (x2-x1)*(y-y1)/(y2-y1)+x1 {
			inside = !inside
		}
		x1, y1 = x2, y2
	}
	return inside
}

// Tiles cut the sky as cells do, but are half a degree large: they find the
// frames that may cover a position.
const (
	tileZones  = 360
	tileStride = 1 << 10
)

func tilesIn(zone int) int {
	low, high := math.Abs(float64(zone)/2-90), math.Abs(float64(zone+1)/2-90)
	return max(1, int(720*math.Cos(min(low, high)*radian)))
}

func tileOf(ra, dec float64) int64 {
	z := min(max(int((dec+90)*2), 0), tileZones-1)
	return int64(z)*tileStride + int64(column(ra, tilesIn(z)))
}

// tiles lists the tiles that a circle touches, and some more.
func tiles(ra, dec, radius float64) []int64 {
	var list []int64
	r := radius/3600 + 1e-6
	first, last := int(math.Floor((dec-r+90)*2)), int(math.Floor((dec+r+90)*2))
	for z := max(first, 0); z <= min(last, tileZones-1); z++ {
		n := tilesIn(z)
		from, count := 0, n
		if c, s := math.Cos(dec*radian), math.Sin(r*radian); math.Abs(dec)+r < 90 && s < c {
			half := math.Asin(s/c)/radian + 1e-6
			if 2*half < 350 {
				from = column(ra-half, n)
				count = min(n, (column(ra+half, n)-from+n)%n+1)
			}
		}
		for k := range count {
			list = append(list, int64(z)*tileStride+int64((from+k)%n))
		}
	}
	return list
}

// addCoverage notes the tiles of a searched frame.
func addCoverage(ctx context.Context, tx *sql.Tx, rec *FrameRecord) error {
	centre, radius, ok := circle(rec.Footprint)
	if !ok || rec.Status != Searched {
		return nil
	}
	insert, err := tx.PrepareContext(ctx, "INSERT INTO coverage (tile, frame) VALUES (?, ?)")
	if err != nil {
		return err
	}
	defer insert.Close()
	ra, dec := centre.position()
	for _, t := range tiles(ra, dec, radius) {
		if _, err := insert.ExecContext(ctx, t, rec.Frame); err != nil {
			return err
		}
	}
	return nil
}
