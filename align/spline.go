package align

import "math"

// Interpolation by quintic B-splines (Unser, Aldroubi & Eden 1993, IEEE Trans.
// Signal Process. 41, 821 and 834). The plane is turned once into coefficients
// with which a sum over 6 × 6 pixels, as cheap as that of a Lanczos kernel,
// interpolates far more exactly. Largest error of a pixel-integrated Moffat
// star (β = 3) shifted by a fraction of a pixel, in thousandths of its peak:
//
//	FWHM [px]   Lanczos, 3 lobes   quintic spline
//	   2.2             18                15
//	   3.0              6.7               3.4
//	   3.5              4.9               1.4
//	   4.5              3.7               0.25

// splinePoles are the stable poles of the inverse of the sampled quintic
// B-spline (1, 26, 66, 26, 1)/120.
var splinePoles = [2]float32{-0.43057534709997825, -0.04309628820326465}

// splineGain is the gain of the recursions for both poles, for one axis.
var splineGain = func() float32 {
	g := 1.0
	for _, z := range splinePoles {
		g *= (1 - float64(z)) * (1 - 1/float64(z))
	}
	return float32(g)
}()

// bspline5 is the centred B-spline of degree five.
func bspline5(x float64) float64 {
	x = math.Abs(x)
	switch {
	case x < 1:
		return 11./20 + x*x*(-1./2+x*x*(1./4-x/12))
	case x < 2:
		return 17./40 + x*(5./8+x*(-7./4+x*(5./4+x*(-3./8+x/24))))
	case x < 3:
		d := 3 - x
		return d * d * d * d * d / 120
	}
	return 0
}

// splineLine replaces samples by spline coefficients in place; beyond its ends the
// line is mirrored about its first and last sample.
func splineLine(c []float32) {
	n := len(c)
	if n < 2 {
		return
	}
	for i := range c {
		c[i] *= splineGain
	}
	for _, z := range splinePoles {
		// Start of the forward recursion: Σ z^k·c[k], until z^k is nothing.
		sum, zk := c[0], z
		for k := 1; k < min(n, 24); k++ {
			sum += zk * c[k]
			zk *= z
		}
		c[0] = sum
		last := sum
		for k := 1; k < n; k++ {
			last = c[k] + z*last
			c[k] = last
		}
		last = z / (z*z - 1) * (c[n-1] + z*c[n-2])
		c[n-1] = last
		for k := n - 2; k >= 0; k-- {
			last = z * (last - c[k])
			c[k] = last
		}
	}
}

// splinePlane does the same along the rows and the columns of a plane.
func splinePlane(pix []float32, stride, rows int) {
	for j := range rows {
		splineLine(pix[j*stride : (j+1)*stride])
	}
	if rows < 2 {
		return
	}
	// Columns side by side, in strips that stay in the cache.
	const strip = 128
	for i0 := 0; i0 < stride; i0 += strip {
		w := min(strip, stride-i0)
		row := func(j int) []float32 { return pix[j*stride+i0:][:w] }
		for j := range rows {
			for i := range row(j) {
				row(j)[i] *= splineGain
			}
		}
		for _, z := range splinePoles {
			first := row(0)
			zk := z
			for k := 1; k < min(rows, 24); k++ {
				for i, v := range row(k) {
					first[i] += zk * v
				}
				zk *= z
			}
			previous := first
			for k := 1; k < rows; k++ {
				r := row(k)
				for i, v := range previous[:len(r)] {
					r[i] += z * v
				}
				previous = r
			}
			f := z / (z*z - 1)
			r := row(rows - 1)
			for i, v := range row(rows - 2) {
				r[i] = f * (r[i] + z*v)
			}
			previous = r
			for k := rows - 2; k >= 0; k-- {
				r := row(k)
				for i, v := range previous[:len(r)] {
					r[i] = z * (v - r[i])
				}
				previous = r
			}
		}
	}
}

// splineSamples is the inverse of splinePlane but for two pixels along the
// border: it returns the samples that belong to coefficients.
func splineSamples(c []float32, stride, rows int) []float32 {
	out := append([]float32(nil), c...)
	fir := func(at, step int) float32 {
		return (c[at-2*step] + c[at+2*step] + 26*(c[at-step]+c[at+step]) + 66*c[at]) / 120
	}
	for j := range rows {
		for i := 2; i < stride-2; i++ {
			out[j*stride+i] = fir(j*stride+i, 1)
		}
	}
	c = append([]float32(nil), out...)
	for j := 2; j < rows-2; j++ {
		for i := range stride {
			out[j*stride+i] = fir(j*stride+i, stride)
		}
	}
	return out
}

// newSplineTable tabulates the weights of the six coefficients around a
// position.
func newSplineTable() *kernelTable {
	return tabulate(6, 2, bspline5)
}

// newCardinalTable tabulates the weights of the pixels themselves that
// interpolation by the spline amounts to, over ten of them; farther ones carry
// less than a percent together.
func newCardinalTable() *kernelTable {
	line := make([]float32, 101)
	line[50] = 1
	splineLine(line)
	return tabulate(10, 4, func(x float64) float64 {
		sum := 0.0
		for k := int(math.Ceil(x - 3)); float64(k) < x+3; k++ {
			sum += float64(line[50+k]) * bspline5(x-float64(k))
		}
		return sum
	})
}
