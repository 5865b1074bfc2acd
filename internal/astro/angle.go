// Package astro holds small facts about places in the sky and about time:
// angles and how they are written, calendar dates and modified Julian dates,
// the name of a night, the designation of a source by its position.
//
// Angles are float64 degrees unless a name says otherwise. Every function is
// pure and safe for concurrent use.
package astro

import "math"

// Radian is one radian in degrees.
const Radian = 180 / math.Pi

// Wrap360 brings an angle [deg] into [0, 360). NaN and infinities give NaN.
func Wrap360(deg float64) float64 {
	r := math.Mod(deg, 360)
	if r < 0 {
		r += 360
	}
	if r >= 360 { // -1e-17 + 360 rounds to 360
		r = 0
	}
	return r + 0 // -0 becomes 0
}

// Wrap180 brings an angle [deg] into [-180, 180).
func Wrap180(deg float64) float64 {
	r := Wrap360(deg)
	if r >= 180 {
		r -= 360
	}
	return r
}

// Separation returns the angle [deg] between two places in the sky [deg]. It
// is accurate at all distances, for near neighbours, poles and antipodes alike
// (Vincenty 1975, Survey Review 23, 88, on a sphere).
func Separation(ra1, dec1, ra2, dec2 float64) float64 {
	sa, ca := math.Sincos(Wrap180(ra2-ra1) / Radian)
	s1, c1 := math.Sincos(dec1 / Radian)
	s2, c2 := math.Sincos(dec2 / Radian)
	across := math.Hypot(c2*sa, c1*s2-s1*c2*ca)
	return math.Atan2(across, s1*s2+c1*c2*ca) * Radian
}

// PositionAngle returns the direction [deg], in [0, 360), from the first place
// to the second: 0 is north, 90 is east. Two equal places give 0.
func PositionAngle(ra1, dec1, ra2, dec2 float64) float64 {
	sa, ca := math.Sincos(Wrap180(ra2-ra1) / Radian)
	s1, c1 := math.Sincos(dec1 / Radian)
	s2, c2 := math.Sincos(dec2 / Radian)
	return Wrap360(math.Atan2(c2*sa, c1*s2-s1*c2*ca) * Radian)
}

// Offset returns the place [deg] reached from (ra, dec) by going distance
// [deg] along the great circle that leaves at a position angle [deg]. Its right
// ascension is in [0, 360).
func Offset(ra, dec, positionAngle, distance float64) (ra2, dec2 float64) {
	sp, cp := math.Sincos(positionAngle / Radian)
	sd, cd := math.Sincos(distance / Radian)
	s1, c1 := math.Sincos(dec / Radian)
	north := cd*c1 - sd*cp*s1
	east := sd * sp
	up := cd*s1 + sd*cp*c1
	return Wrap360(ra + math.Atan2(east, north)*Radian), math.Atan2(up, math.Hypot(north, east)) * Radian
}
