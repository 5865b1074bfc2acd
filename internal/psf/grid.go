package psf

import (
	"errors"
	"fmt"
	"math"
)

// Grid is a point spread function tabulated at NX × NY field positions, each
// with Oversample samples per pixel. It can hold any point spread function, for
// example that of a difference.
//
// Position (a,b) is plane b·NX+a; a plane has Side() rows and columns and its
// sample (s,t), 0-based, is the value of the pixel-integrated point spread
// function at offset ((s-c)/Oversample, (t-c)/Oversample) px from the source,
// c = (Side()-1)/2. Between field positions it is the cubic polynomial through
// the nearest four along each axis; between samples a cubic spline (Unser 1999, IEEE Signal Processing Magazine
// 16(6), 22). A Grid is read-only after it was made; many goroutines may use it.
type Grid struct {
	NX, NY     int
	Size       int       // pixels of a tabulated stamp along a side, odd
	Oversample int       // samples per pixel
	X, Y       []float64 // field positions of columns and rows [FITS px], rising
	Pix        []float32

	coef []float32 // spline coefficients, padded by one before and two behind
}

// maxGridSize and maxOversample bound what a file may ask for.
const (
	maxGridSize   = 255
	maxOversample = 9
)

// Side returns the number of samples along a side of a plane.
func (g *Grid) Side() int { return gridSide(g.Size, g.Oversample) }

func gridSide(size, oversample int) int { return oversample*(size-1) + 2*((oversample+1)/2) + 1 }

// NewGrid tabulates a point spread function over a frame of width × height px
// at nx × ny evenly spread positions: the middles of as many equal parts of the
// frame. size is odd; render writes the size² pixels of the point spread
// function at field position (x,y) shifted by (dx,dy) px from the stamp's
// centre, as Model.Render does, and is asked for shifts within ±0.5 px, or a
// little more if oversample is odd.
// An oversample of 4 suits FWHM from 2 px.
func NewGrid(width, height, nx, ny, size, oversample int, render func(dst []float32, x, y, dx, dy float64)) *Grid {
	if width < 1 || height < 1 || nx < 1 || ny < 1 || nx > 999 || ny > 999 || size < 3 || size%2 == 0 || size > maxGridSize || oversample < 1 || oversample > maxOversample {
		panic(fmt.Sprintf("psf: no grid of %d×%d positions with stamps of %d px, oversampled %d, on a frame of %d×%d", nx, ny, size, oversample, width, height))
	}
	g := &Grid{NX: nx, NY: ny, Size: size, Oversample: oversample, X: make([]float64, nx), Y: make([]float64, ny)}
	for a := range g.X {
		g.X[a] = 0.5 + (float64(a)+0.5)*float64(width)/float64(nx)
	}
	for b := range g.Y {
		g.Y[b] = 0.5 + (float64(b)+0.5)*float64(height)/float64(ny)
	}
	n := g.Side()
	g.Pix = make([]float32, nx*ny*n*n)
	stamp := make([]float32, size*size)
	half := (oversample + 1) / 2
	for b := range ny {
		for a := range nx {
			plane := g.Pix[(b*nx+a)*n*n : (b*nx+a+1)*n*n]
			for q := -half; q <= half; q++ {
				for p := -half; p <= half; p++ {
					render(stamp, g.X[a], g.Y[b], -float64(p)/float64(oversample), -float64(q)/float64(oversample))
					// The stamp's pixel (i,j) is offset i-(size-1)/2 + p/oversample.
					for j := range size {
						t := j*oversample + q + half
						for i := range size {
							plane[t*n+i*oversample+p+half] = stamp[j*size+i]
						}
					}
				}
			}
		}
	}
	g.prepare()
	return g
}

// prepare computes the spline coefficients.
func (g *Grid) prepare() {
	n := g.Side()
	m := n + 3
	g.coef = make([]float32, g.NX*g.NY*m*m)
	line, up := make([]float64, n), make([]float64, n)
	work := make([]float64, n*n)
	for k := range g.NX * g.NY {
		for i, v := range g.Pix[k*n*n : (k+1)*n*n] {
			work[i] = float64(v)
		}
		for j := range n {
			splineCoefficients(work[j*n:(j+1)*n], up)
		}
		for i := range n {
			for j := range n {
				line[j] = work[j*n+i]
			}
			splineCoefficients(line, up)
			for j := range n {
				work[j*n+i] = line[j]
			}
		}
		dst := g.coef[k*m*m : (k+1)*m*m]
		for j := range n {
			row := dst[(j+1)*m : (j+2)*m]
			for i := range n {
				row[i+1] = float32(work[j*n+i])
			}
			row[0], row[n+1] = 2*row[1]-row[2], 2*row[n]-row[n-1]
			row[n+2] = 2*row[n+1] - row[n]
		}
		for i := range m {
			dst[i] = 2*dst[m+i] - dst[2*m+i]
			dst[(n+1)*m+i] = 2*dst[n*m+i] - dst[(n-1)*m+i]
			dst[(n+2)*m+i] = 2*dst[(n+1)*m+i] - dst[n*m+i]
		}
	}
}

// splineCoefficients replaces three or more samples by the coefficients of the
// cubic B-spline through them that has no curvature at the ends.
func splineCoefficients(v []float64, up []float64) {
	// (c[k-1] + 4c[k] + c[k+1])/6 = v[k], and c = v at both ends: tridiagonal.
	n := len(v)
	up[0] = 0
	for k := 1; k < n-1; k++ {
		up[k] = 1 / (4 - up[k-1])
		v[k] = (6*v[k] - v[k-1]) * up[k]
	}
	for k := n - 2; k > 0; k-- {
		v[k] -= up[k] * v[k+1]
	}
}

// cubicWeights are the cubic B-spline's weights of samples -1, 0, 1, 2 at t in
// [0,1) and their derivatives.
func cubicWeights(t float64) (w, d [4]float64) {
	s := 1 - t
	w = [4]float64{s * s * s / 6, (4 - 6*t*t + 3*t*t*t) / 6, (4 - 6*s*s + 3*s*s*s) / 6, t * t * t / 6}
	d = [4]float64{-s * s / 2, (-12*t + 9*t*t) / 6, (12*s - 9*s*s) / 6, t * t / 2}
	return
}

// around finds the positions next to v, up to four, and the weights of the
// polynomial through them (Lagrange). Beyond the outer positions it goes on for
// half a step, which reaches the frame's edge.
func around(at []float64, v float64) (first, n int, w [4]float64) {
	n = min(4, len(at))
	if n == 1 {
		return 0, 1, [4]float64{1}
	}
	step := at[1] - at[0]
	v = max(at[0]-step/2, min(at[len(at)-1]+step/2, v))
	if v != v {
		v = at[0]
	}
	k := 0
	for k+2 < len(at) && v >= at[k+1] {
		k++
	}
	// Two on each side where there are.
	first = max(0, min(k-(n-2)/2, len(at)-n))
	for a := range n {
		w[a] = 1
		for b := range n {
			if b != a {
				w[a] *= (v - at[first+b]) / (at[first+a] - at[first+b])
			}
		}
	}
	return first, n, w
}

// Render writes the size×size pixels of the point spread function at field
// position (x,y), shifted by (dx,dy) px from the stamp's centre, into dst. size
// is odd; pixels outside the table are 0. Nothing is allocated for tables of up
// to 512 samples a side.
func (g *Grid) Render(dst []float32, size int, x, y, dx, dy float64) {
	g.render(dst, nil, nil, size, x, y, dx, dy)
}

// RenderGradient writes the values as Render does and their derivatives with
// respect to dx and dy [1/px].
func (g *Grid) RenderGradient(dst, gx, gy []float32, size int, x, y, dx, dy float64) {
	if len(gx) != len(dst) || len(gy) != len(dst) {
		panic("psf: gradient stamps differ in length from the value's")
	}
	g.render(dst, gx, gy, size, x, y, dx, dy)
}

func (g *Grid) render(dst, gx, gy []float32, size int, x, y, dx, dy float64) {
	if size < 1 || size%2 == 0 || len(dst) != size*size {
		panic(fmt.Sprintf("psf: stamp of %d values for a size of %d; want the square of an odd size", len(dst), size))
	}
	clear(dst)
	clear(gx)
	clear(gy)
	m := g.Side() + 3
	os := g.Oversample
	a0, na, wa := around(g.X, x)
	b0, nb, wb := around(g.Y, y)
	type corner struct {
		at int
		w  float32
	}
	var cs [16]corner
	nc := 0
	for b := range nb {
		for a := range na {
			if w := wa[a] * wb[b]; w != 0 {
				cs[nc] = corner{((b0+b)*g.NX + a0 + a) * m * m, float32(w)}
				nc++
			}
		}
	}
	// Index of a sample in the padded table for pixel i: (i-h-dx)·os + c.
	c := float64(m-2) / 2
	h := float64(size-1) / 2
	start := func(d float64) (first int, w, dw [4]float64, ok bool) {
		f := (-h-d)*float64(os) + c
		if !(math.Abs(f) < 1e6) {
			return 0, w, dw, false
		}
		k := math.Floor(f)
		w, dw = cubicWeights(f - k)
		return int(k) - 1, w, dw, true
	}
	fx, wx64, dwx64, okx := start(dx)
	fy, wy64, dwy64, oky := start(dy)
	if !okx || !oky {
		return
	}
	var wx, dwx [4]float32
	for k := range 4 {
		wx[k], dwx[k] = float32(wx64[k]), float32(-dwx64[k]*float64(os))
	}
	// Columns that lie inside the padded table: fx + i·os + 0…3.
	i0, i1 := 0, size-1
	if fx < 0 {
		i0 = (-fx + os - 1) / os
	}
	if last := m - 4 - fx; last < 0 {
		return
	} else if last/os < i1 {
		i1 = last / os
	}
	if i0 > i1 {
		return
	}
	lo := fx + i0*os
	hi := fx + i1*os + 4
	var fixed [2][520]float32
	row, drow := fixed[0][:], fixed[1][:]
	if hi-lo > len(row) {
		row, drow = make([]float32, hi-lo), make([]float32, hi-lo)
	}
	row, drow = row[:hi-lo], drow[:hi-lo]
	for j := range size {
		t := fy + j*os
		if t < 0 || t+3 >= m {
			continue
		}
		clear(row)
		if gy != nil {
			clear(drow)
		}
		for _, c := range cs[:nc] {
			base := c.at + t*m
			r0 := g.coef[base+lo : base+hi]
			r1 := g.coef[base+m+lo : base+m+hi]
			r2 := g.coef[base+2*m+lo : base+2*m+hi]
			r3 := g.coef[base+3*m+lo : base+3*m+hi]
			r1, r2, r3 = r1[:len(r0)], r2[:len(r0)], r3[:len(r0)]
			out := row[:len(r0)]
			w0, w1, w2, w3 := c.w*float32(wy64[0]), c.w*float32(wy64[1]), c.w*float32(wy64[2]), c.w*float32(wy64[3])
			for k := range r0 {
				out[k] += w0*r0[k] + w1*r1[k] + w2*r2[k] + w3*r3[k]
			}
			if gy != nil {
				o := c.w * float32(-os)
				d0, d1, d2, d3 := o*float32(dwy64[0]), o*float32(dwy64[1]), o*float32(dwy64[2]), o*float32(dwy64[3])
				out := drow[:len(r0)]
				for k := range r0 {
					out[k] += d0*r0[k] + d1*r1[k] + d2*r2[k] + d3*r3[k]
				}
			}
		}
		out := dst[j*size+i0 : j*size+i1+1]
		for i := range out {
			k := i * os
			out[i] = wx[0]*row[k] + wx[1]*row[k+1] + wx[2]*row[k+2] + wx[3]*row[k+3]
		}
		if gx != nil {
			ox, oy := gx[j*size+i0:j*size+i1+1], gy[j*size+i0:j*size+i1+1]
			for i := range ox {
				k := i * os
				ox[i] = dwx[0]*row[k] + dwx[1]*row[k+1] + dwx[2]*row[k+2] + dwx[3]*row[k+3]
				oy[i] = wx[0]*drow[k] + wx[1]*drow[k+1] + wx[2]*drow[k+2] + wx[3]*drow[k+3]
			}
		}
	}
}

// EffectiveArea returns 1/ΣP² [px] at (x,y) for a source in the middle of a
// pixel.
func (g *Grid) EffectiveArea(x, y float64) float64 {
	stamp := make([]float32, g.Size*g.Size)
	g.Render(stamp, g.Size, x, y, 0, 0)
	return effectiveArea(stamp)
}

// Moments returns adaptive second moments [px²] at (x,y), as Model.Moments.
func (g *Grid) Moments(x, y float64) (xx, yy, xy float64) {
	stamp := make([]float32, g.Size*g.Size)
	g.Render(stamp, g.Size, x, y, 0, 0)
	c := float64(g.Size-1) / 2
	area := effectiveArea(stamp) / (4 * math.Pi) // sigma² of a Gaussian
	mom, ok := adaptiveMoments(stamp, nil, g.Size, g.Size, c, c, area, 60)
	if !ok {
		return area, area, 0
	}
	return mom.xx, mom.yy, mom.xy
}

// FWHM returns the diameter [px] of the circle whose area is that inside half
// of the central value, as Model.FWHM.
func (g *Grid) FWHM(x, y float64) float64 {
	var stamp [1]float32
	g.Render(stamp[:], 1, x, y, 0, 0)
	half := stamp[0] / 2
	const rays = 12
	var sum float64
	for k := range rays {
		sin, cos := math.Sincos(2 * math.Pi * (float64(k) + 0.5) / rays)
		// Outwards until below one half, then by bisection.
		lo, hi := 0.0, float64(g.Size)/2
		for r := 0.25; r < hi; r += 0.25 {
			g.Render(stamp[:], 1, x, y, -r*cos, -r*sin)
			if stamp[0] < half {
				hi = r
				break
			}
			lo = r
		}
		for range 16 {
			mid := (lo + hi) / 2
			g.Render(stamp[:], 1, x, y, -mid*cos, -mid*sin)
			if stamp[0] > half {
				lo = mid
			} else {
				hi = mid
			}
		}
		sum += lo * lo
	}
	return 2 * math.Sqrt(sum/rays)
}

// check reports what is wrong with a grid that came from a file.
func (g *Grid) check() error {
	switch {
	case g.NX < 1 || g.NY < 1 || g.NX > 999 || g.NY > 999:
		return fmt.Errorf("%d×%d positions: want 1 to 999 each way", g.NX, g.NY)
	case g.Size < 3 || g.Size%2 == 0 || g.Size > maxGridSize:
		return fmt.Errorf("stamps of %d px: want an odd number from 3 to %d", g.Size, maxGridSize)
	case g.Oversample < 1 || g.Oversample > maxOversample:
		return fmt.Errorf("%d samples per pixel: want 1 to %d", g.Oversample, maxOversample)
	case len(g.X) != g.NX || len(g.Y) != g.NY:
		return errors.New("number of positions and their coordinates differ")
	case len(g.Pix) != g.NX*g.NY*g.Side()*g.Side():
		return fmt.Errorf("%d samples: want %d planes of %d×%d", len(g.Pix), g.NX*g.NY, g.Side(), g.Side())
	}
	for _, at := range [2][]float64{g.X, g.Y} {
		for k, v := range at {
			if v-v != 0 || (k > 0 && !(v > at[k-1])) {
				return errors.New("field positions are not finite and rising")
			}
		}
	}
	for _, v := range g.Pix {
		if v-v != 0 {
			return errors.New("samples that are not finite")
		}
	}
	return nil
}
