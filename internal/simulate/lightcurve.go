package simulate

import "math"

// Facts of common practice about type Ia supernovae that the template holds.
const (
	riseDays   = 20.0  // from explosion to maximum, rest frame, stretch 1
	peakMag    = -19.5 // absolute magnitude at maximum: about five billion suns
	decline15  = 1.1   // magnitudes lost in the 15 days after maximum, stretch 1
	widthSlope = 1.5   // magnitudes brighter per unit of stretch: the slower, the brighter
	hubble     = 70.0  // km/s/Mpc
	lightSpeed = 299792.458
)

// Supernova is the light curve of a type Ia supernova.
type Supernova struct {
	PeakMJD float64 // d, time of maximum
	Stretch float64 // time scale; 1 is ordinary, above 1 slower and brighter
	Z       float64 // redshift
	Offset  float64 // mag, scatter about the relation, dust included
}

// PeakAbsolute is the absolute magnitude at maximum.
func (s Supernova) PeakAbsolute() float64 {
	return peakMag - widthSlope*(s.Stretch-1) + s.Offset
}

// PeakApparent is the apparent magnitude at maximum, without colour terms.
func (s Supernova) PeakApparent() float64 { return s.PeakAbsolute() + DistanceModulus(s.Z) }

// DistanceModulus is that of the linear Hubble law with first-order
// acceleration, d = cz/H₀ (1 + 0.75 z), good to a percent below z = 0.2.
func DistanceModulus(z float64) float64 {
	return 5*math.Log10(lightSpeed*z/hubble*(1+0.75*z)) + 25
}

// Explosion is the time [MJD] before which there is no light.
func (s Supernova) Explosion() float64 { return s.PeakMJD - riseDays*s.Stretch*(1+s.Z) }

// Mag returns the apparent magnitude at a time [MJD]; +Inf before the explosion.
func (s Supernova) Mag(mjd float64) float64 {
	f := templateFlux((mjd - s.PeakMJD) / (s.Stretch * (1 + s.Z)))
	if f <= 0 {
		return math.Inf(1)
	}
	return s.PeakApparent() - 2.5*math.Log10(f)
}

// templateFlux is the light, 1 at maximum, at a phase in days of stretch 1 from
// maximum. It rises as t² at first, u²(1.4 + 1.2u - 1.6u²) with u the fraction
// of the rise (0.4 ten days before maximum), and declines at a rate that grows
// to 0.122 mag/d within 12 days and falls to 0.016 mag/d between days 24 and 35.
func templateFlux(phase float64) float64 {
	if phase <= -riseDays {
		return 0
	}
	if phase < 0 {
		u := 1 + phase/riseDays
		return u * u * (1.4 + 1.2*u - 1.6*u*u)
	}
	const fast, late, t1, t2, t3 = 0.122, 0.016, 12.0, 24.0, 35.0
	m := 0.0
	switch {
	case phase < t1:
		m = 0.5 * fast / t1 * phase * phase
	case phase < t2:
		m = 0.5*fast*t1 + fast*(phase-t1)
	case phase < t3:
		d := phase - t2
		m = 0.5*fast*t1 + fast*(t2-t1) + fast*d + 0.5*(late-fast)/(t3-t2)*d*d
	default:
		m = 0.5*fast*t1 + fast*(t2-t1) + 0.5*(fast+late)*(t3-t2) + late*(phase-t3)
	}
	return math.Pow(10, -0.4*m)
}
