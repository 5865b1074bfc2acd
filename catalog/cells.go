package catalog

import "math"

// The sky is cut into zones of equal declination, one arcminute high, and each
// zone into cells of about one arcminute. A cell's number rises along a zone
// and from zone to zone, so that a stretch of a zone is one range of numbers:
// an index on the number serves cone searches of any size. (The idea of zones:
// Gray, Nieto-Santisteban & Szalay 2006, MSR-TR-2006-52.)
const (
	zones      = 180 * 60
	zoneHeight = 180.0 / zones // deg
	cellStride = 1 << 16       // numbers reserved for a zone; more than 360*60
	radian     = math.Pi / 180
	arcsec     = radian / 3600
)

// cellsIn returns the number of cells of a zone: the length of its longer edge
// in arcminutes, at least one.
func cellsIn(zone int) int {
	low := math.Abs(float64(zone)*zoneHeight - 90)
	high := math.Abs(float64(zone+1)*zoneHeight - 90)
	return max(1, int(360/zoneHeight*math.Cos(min(low, high)*radian)))
}

func zoneOf(dec float64) int {
	return min(max(int(math.Floor((dec+90)/zoneHeight)), 0), zones-1)
}

// column returns the cell within a zone of n cells; ra may be outside 0…360.
func column(ra float64, n int) int {
	ra = math.Mod(ra, 360)
	if ra < 0 {
		ra += 360
	}
	return min(int(ra/360*float64(n)), n-1)
}

// cellOf returns the number of the cell that holds a position [deg].
func cellOf(ra, dec float64) int64 {
	z := zoneOf(dec)
	return int64(z)*cellStride + int64(column(ra, cellsIn(z)))
}

// cellRange is a range of cell numbers, both ends included.
type cellRange struct{ from, to int64 }

// cone appends to dst ranges of cells that cover all positions within radius
// [arcsec] of a position [deg], and some more.
func cone(dst []cellRange, ra, dec, radius float64) []cellRange {
	r := radius/3600 + 1e-9
	for z, last := zoneOf(dec-r), zoneOf(dec+r); z <= last; z++ {
		base, n := int64(z)*cellStride, cellsIn(z)
		// Half width in right ascension: sin(Δα) = sin(r)/cos(δ) at the
		// tangent points; all of the zone where the cone holds a pole.
		half := 180.0
		if c, s := math.Cos(dec*radian), math.Sin(r*radian); math.Abs(dec)+r < 90 && s < c {
			half = math.Asin(s/c)/radian + 1e-9
		}
		if 2*half >= 360 {
			dst = append(dst, cellRange{base, base + int64(n) - 1})
			continue
		}
		a, b := column(ra-half, n), column(ra+half, n)
		switch {
		case a <= b && 2*half < 180:
			dst = append(dst, cellRange{base + int64(a), base + int64(b)})
		case a > b:
			dst = append(dst, cellRange{base + int64(a), base + int64(n) - 1}, cellRange{base, base + int64(b)})
		default: // wide and perhaps around the whole zone
			dst = append(dst, cellRange{base, base + int64(n) - 1})
		}
	}
	return dst
}

// vector is a direction on the unit sphere.
type vector [3]float64

func unit(ra, dec float64) vector {
	sa, ca := math.Sincos(ra * radian)
	sd, cd := math.Sincos(dec * radian)
	return vector{cd * ca, cd * sa, sd}
}

// position returns right ascension (0…360) and declination [deg].
func (v vector) position() (ra, dec float64) {
	ra = math.Atan2(v[1], v[0]) / radian
	if ra < 0 {
		ra += 360
	}
	if ra >= 360 {
		ra = 0
	}
	return ra, math.Atan2(v[2], math.Hypot(v[0], v[1])) / radian
}

// plane is the plane that touches the sphere at one point.
type plane struct{ at, east, north vector }

func newPlane(ra, dec float64) plane {
	sa, ca := math.Sincos(ra * radian)
	sd, cd := math.Sincos(dec * radian)
	return plane{vector{cd * ca, cd * sa, sd}, vector{-sa, ca, 0}, vector{-sd * ca, -sd * sa, cd}}
}

func dot(a, b vector) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

// offset returns the gnomonic coordinates [arcsec], eastward and northward, of
// a direction in the same half of the sky.
func (p *plane) offset(v vector) (xi, eta float64) {
	d := dot(v, p.at) * arcsec
	return dot(v, p.east) / d, dot(v, p.north) / d
}

// direction undoes offset.
func (p *plane) direction(xi, eta float64) vector {
	xi, eta = xi*arcsec, eta*arcsec
	var v vector
	norm := 1 / math.Sqrt(1+xi*xi+eta*eta)
	for k := range v {
		v[k] = (p.at[k] + xi*p.east[k] + eta*p.north[k]) * norm
	}
	return v
}

// chord2 returns the square of the distance of two directions.
func chord2(a, b vector) float64 {
	x, y, z := a[0]-b[0], a[1]-b[1], a[2]-b[2]
	return x*x + y*y + z*z
}

// separation returns the angle [arcsec] between two directions.
func separation(a, b vector) float64 {
	return 2 * math.Asin(min(1, math.Sqrt(chord2(a, b))/2)) / arcsec
}
