// Package healpix divides the sky into pixels of equal area, numbered by the
// nested scheme (Górski et al. 2005, ApJ 622, 759), and lists those within an
// outline.
//
// A position is first mapped to the plane of the HEALPix projection (Calabretta
// & Roukema 2007, MNRAS 381, 865), in which the twelve faces are squares that
// stand on a corner. With t the right ascension in quarter turns and y the
// height in the plane, a face is a square along b = t+y (towards the north-east)
// and a = t-y (towards the south-east).
package healpix

import (
	"fmt"
	"math"
)

// MaxOrder is the highest order: pixels of 0.4 milliarcseconds, whose numbers
// still fit into 64 bits.
const MaxOrder = 29

// Pixels returns the number of pixels of an order, 12·4^order.
func Pixels(order int) int64 { return 12 << (2 * order) }

// check panics for an order that does not exist.
func check(order int) {
	if order < 0 || order > MaxOrder {
		panic(fmt.Sprintf("healpix: order %d, want 0 to %d", order, MaxOrder))
	}
}

// Pixel returns the nested number of the pixel of an order that holds a
// position [deg]. A declination beyond ±90 panics, and so does NaN.
func Pixel(order int, ra, dec float64) int64 {
	check(order)
	if !(math.Abs(dec) <= 90) || math.IsNaN(ra) || math.IsInf(ra, 0) {
		panic(fmt.Sprintf("healpix: position %g %g, want one on the sky", ra, dec))
	}
	t := math.Mod(ra/90, 4)
	if t < 0 {
		t += 4
	}
	if t >= 4 { // rounded up from just below zero
		t = 0
	}
	z, cos := math.Sin(dec*math.Pi/180), math.Cos(dec*math.Pi/180)
	size := float64(int64(1) << order)
	var face int
	var x, y float64 // within the face, 0 to 1: north-east and north-west from its southern corner
	if math.Abs(z) <= 2./3 {
		height := 0.75 * z
		a, b := t-height+0.5, t+height+0.5
		ja, jb := math.Floor(a), math.Floor(b)
		x, y = b-jb, 1-(a-ja)
		switch {
		case jb > ja:
			face = int(ja) & 3
		case jb == ja:
			face = 4 + int(ja)&3
		default:
			face = 8 + int(jb)&3
		}
	} else {
		// sigma is 1 where the cap begins and 0 at the pole; 1-|z| without loss.
		sigma := math.Sqrt(3 * cos * cos / (1 + math.Abs(z)))
		quarter := math.Floor(t)
		face = int(quarter)
		east, west := sigma*(t-quarter), sigma*(1-(t-quarter))
		if z > 0 {
			x, y = 1-west, 1-east
		} else {
			face += 8
			x, y = east, west
		}
	}
	last := int64(size) - 1
	ix := min(max(int64(x*size), 0), last)
	iy := min(max(int64(y*size), 0), last)
	return int64(face)<<(2*order) | spread(ix) | spread(iy)<<1
}

// Centre returns the position [deg] of a pixel's centre.
func Centre(order int, pixel int64) (ra, dec float64) {
	check(order)
	if pixel < 0 || pixel >= Pixels(order) {
		panic(fmt.Sprintf("healpix: pixel %d of order %d, want 0 to %d", pixel, order, Pixels(order)-1))
	}
	size := float64(int64(1) << order)
	within := pixel & (1<<(2*order) - 1)
	x := (float64(gather(within)) + 0.5) / size
	y := (float64(gather(within>>1)) + 0.5) / size
	return position(int(pixel>>(2*order)), x, y)
}

// position returns the place [deg] of a point of a face.
func position(face int, x, y float64) (ra, dec float64) {
	k := float64(face & 3)
	var a, b float64 // of the face's southern and western corners
	switch face >> 2 {
	case 0:
		a, b = k+0.5, k+0.5
	case 1:
		a, b = k+0.5, k-0.5
	default:
		a, b = k+1.5, k-0.5
	}
	a, b = a-y, b+x
	t, height := (a+b)/2, (b-a)/2
	var z, cos float64
	if math.Abs(height) <= 0.5 {
		z = height * 4 / 3
		cos = math.Sqrt(1 - z*z)
	} else {
		sigma := 2 * (1 - math.Abs(height))
		q := sigma * sigma / 3 // 1-|z|
		z, cos = math.Copysign(1-q, height), math.Sqrt(q*(2-q))
		middle := k + 0.5
		if sigma > 0 {
			t = middle + (t-middle)/sigma
		} else {
			t = middle
		}
	}
	if t < 0 {
		t += 4
	}
	return t * 90, math.Atan2(z, cos) * 180 / math.Pi
}

// spread puts the bits of v at the even places.
func spread(v int64) int64 {
	u := uint64(v)
	u = (u | u<<16) & 0x0000ffff0000ffff
	u = (u | u<<8) & 0x00ff00ff00ff00ff
	u = (u | u<<4) & 0x0f0f0f0f0f0f0f0f
	u = (u | u<<2) & 0x3333333333333333
	return int64((u | u<<1) & 0x5555555555555555)
}

// gather takes the bits of v at the even places.
func gather(v int64) int64 {
	u := uint64(v) & 0x5555555555555555
	u = (u | u>>1) & 0x3333333333333333
	u = (u | u>>2) & 0x0f0f0f0f0f0f0f0f
	u = (u | u>>4) & 0x00ff00ff00ff00ff
	u = (u | u>>8) & 0x0000ffff0000ffff
	return int64((u | u>>16) & 0x00000000ffffffff)
}
