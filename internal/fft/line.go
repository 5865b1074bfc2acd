package fft

import "math"

// line is a complex transform of one length, applied to batches.
type line struct {
	n      int
	passes []pass
}

// pass is one self-sorting step: it splits transforms of length n into radix
// transforms of length n/radix, for s interleaved transforms.
type pass struct {
	radix, n, s int
	// factors holds, for p = 0…n/radix-1, the radix-1 complex factors
	// exp(-2πi p·q/n), q = 1…radix-1, as pairs of cosine and minus sine.
	factors [][2 * 7]float32
}

func newLine(n int) *line {
	l := &line{n: n}
	var radices []int
	rest := n
	for _, f := range []int{5, 3} {
		for rest%f == 0 {
			radices = append(radices, f)
			rest /= f
		}
	}
	// Powers of two: as few passes as possible, of radix 8 and 4.
	for rest > 1 {
		switch {
		case rest == 2:
			radices = append(radices, 2)
			rest /= 2
		case rest == 4 || rest == 16:
			radices = append(radices, 4)
			rest /= 4
		default:
			radices = append(radices, 8)
			rest /= 8
		}
	}
	s := 1
	for _, r := range radices {
		p := pass{radix: r, n: n, s: s}
		for k := 0; k < n/r; k++ {
			var f [14]float32
			for q := 1; q < r; q++ {
				sin, cos := math.Sincos(2 * math.Pi * float64(k*q) / float64(n))
				f[2*q-2], f[2*q-1] = float32(cos), float32(-sin)
			}
			p.factors = append(p.factors, f)
		}
		l.passes = append(l.passes, p)
		n /= r
		s *= r
	}
	return l
}

// transform transforms a batch of b lines whose element k of line r is
// one[k*b+r]. Both slices are scratch; the result lies in the one returned.
func (l *line) transform(one, two []complex64, b int, inverse bool) []complex64 {
	for i := range l.passes {
		l.passes[i].run(two, b, one, b, b, inverse)
		one, two = two, one
	}
	return one
}

// transformStrided transforms in place a batch of b lines whose element k of
// line r is data[k*stride+r]. The slices one and two are scratch.
func (l *line) transformStrided(data []complex64, stride, b int, one, two []complex64, inverse bool) {
	src, ss := data, stride
	for i := range l.passes {
		dst, ds := one, b
		if i == len(l.passes)-1 {
			dst, ds = data, stride
		}
		l.passes[i].run(dst, ds, src, ss, b, inverse)
		src, ss = dst, ds
		one, two = two, one
	}
}

// run does one pass for a batch of b lines, from rows of b values every ss
// elements to rows of b values every ds elements. dst and src must not
// overlap, unless they are the same and the pass is the line's only one.
//
// With m = n/radix, element p+k·m of the input (k = 0…radix-1) goes through a
// transform of length radix, is multiplied by its factor and becomes element
// radix·p+k of the output. The inverse takes the inputs in reverse order, which
// conjugates the short transform, and the conjugate factors.
func (c *pass) run(dst []complex64, ds int, src []complex64, ss, b int, inverse bool) {
	m, s := c.n/c.radix, c.s
	count := b
	inner := s
	if ss == b && ds == b { // everything is contiguous: one long loop
		count, inner = b*s, 1
	}
	// Distance between the radix inputs, and between the radix outputs.
	in, out := m*s*ss, s*ds
	for p := 0; p < m; p++ {
		f := c.factors[p]
		step := in
		if inverse {
			step = -in
			for i := 1; i < len(f); i += 2 {
				f[i] = -f[i]
			}
		}
		for q := 0; q < inner; q++ {
			x := (q + s*p) * ss
			y := (q + s*c.radix*p) * ds
			last := x
			if inverse {
				last = x + in*c.radix // inputs 1, 2, … are taken from the end
			}
			switch c.radix {
			case 2:
				butterfly2(dst[y:], dst[y+out:], src[x:], src[x+in:], count, &f, p == 0)
			case 3:
				butterfly3(dst[y:], out, src[x:], src[last+step:], src[last+2*step:], count, &f)
			case 4:
				if p == 0 {
					butterfly4plain(dst[y:], out, src[x:], src[last+step:], src[last+2*step:], src[last+3*step:], count)
				} else {
					butterfly4(dst[y:], out, src[x:], src[last+step:], src[last+2*step:], src[last+3*step:], count, &f)
				}
			case 5:
				butterfly5(dst[y:], out, src[x:], src[last+step:], src[last+2*step:], src[last+3*step:], src[last+4*step:], count, &f)
			case 8:
				butterfly8(dst[y:], out, src[x:], last+step-x, step, count, &f)
			}
		}
	}
}

func butterfly2(y0, y1, x0, x1 []complex64, n int, f *[14]float32, plain bool) {
	x0, x1, y0, y1 = x0[:n], x1[:n], y0[:n], y1[:n]
	if plain {
		for i := range x0 {
			ar, ai := real(x0[i]), imag(x0[i])
			br, bi := real(x1[i]), imag(x1[i])
			y0[i] = complex(ar+br, ai+bi)
			y1[i] = complex(ar-br, ai-bi)
		}
		return
	}
	wr, wi := f[0], f[1]
	for i := range x0 {
		ar, ai := real(x0[i]), imag(x0[i])
		br, bi := real(x1[i]), imag(x1[i])
		y0[i] = complex(ar+br, ai+bi)
		dr, di := ar-br, ai-bi
		y1[i] = complex(dr*wr-di*wi, dr*wi+di*wr)
	}
}

func butterfly3(dst []complex64, out int, x0, x1, x2 []complex64, n int, f *[14]float32) {
	const c = 0.866025403784438646763723170752936183 // sin(2π/3)
	x0, x1, x2 = x0[:n], x1[:n], x2[:n]
	y0, y1, y2 := dst[:n], dst[out:][:n], dst[2*out:][:n]
	w1r, w1i, w2r, w2i := f[0], f[1], f[2], f[3]
	for i := range x0 {
		ar, ai := real(x0[i]), imag(x0[i])
		br, bi := real(x1[i]), imag(x1[i])
		dr, di := real(x2[i]), imag(x2[i])
		sr, si := br+dr, bi+di
		tr, ti := (bi-di)*c, (dr-br)*c // -i·sin(2π/3)·(x1-x2)
		y0[i] = complex(ar+sr, ai+si)
		ar -= 0.5 * sr
		ai -= 0.5 * si
		ur, ui := ar+tr, ai+ti
		y1[i] = complex(ur*w1r-ui*w1i, ur*w1i+ui*w1r)
		ur, ui = ar-tr, ai-ti
		y2[i] = complex(ur*w2r-ui*w2i, ur*w2i+ui*w2r)
	}
}

func butterfly4plain(dst []complex64, out int, x0, x1, x2, x3 []complex64, n int) {
	x0, x1, x2, x3 = x0[:n], x1[:n], x2[:n], x3[:n]
	y0, y1, y2, y3 := dst[:n], dst[out:][:n], dst[2*out:][:n], dst[3*out:][:n]
	for i := range x0 {
		ar, ai := real(x0[i]), imag(x0[i])
		br, bi := real(x1[i]), imag(x1[i])
		cr, ci := real(x2[i]), imag(x2[i])
		dr, di := real(x3[i]), imag(x3[i])
		sr, si := ar+cr, ai+ci
		tr, ti := ar-cr, ai-ci
		ur, ui := br+dr, bi+di
		vr, vi := bi-di, dr-br // -i·(b-d)
		y0[i] = complex(sr+ur, si+ui)
		y1[i] = complex(tr+vr, ti+vi)
		y2[i] = complex(sr-ur, si-ui)
		y3[i] = complex(tr-vr, ti-vi)
	}
}

func butterfly4(dst []complex64, out int, x0, x1, x2, x3 []complex64, n int, f *[14]float32) {
	x0, x1, x2, x3 = x0[:n], x1[:n], x2[:n], x3[:n]
	y0, y1, y2, y3 := dst[:n], dst[out:][:n], dst[2*out:][:n], dst[3*out:][:n]
	w1r, w1i, w2r, w2i, w3r, w3i := f[0], f[1], f[2], f[3], f[4], f[5]
	for i := range x0 {
		ar, ai := real(x0[i]), imag(x0[i])
		br, bi := real(x1[i]), imag(x1[i])
		cr, ci := real(x2[i]), imag(x2[i])
		dr, di := real(x3[i]), imag(x3[i])
		sr, si := ar+cr, ai+ci
		tr, ti := ar-cr, ai-ci
		ur, ui := br+dr, bi+di
		vr, vi := bi-di, dr-br // -i·(b-d)
		y0[i] = complex(sr+ur, si+ui)
		gr, gi := tr+vr, ti+vi
		y1[i] = complex(gr*w1r-gi*w1i, gr*w1i+gi*w1r)
		gr, gi = sr-ur, si-ui
		y2[i] = complex(gr*w2r-gi*w2i, gr*w2i+gi*w2r)
		gr, gi = tr-vr, ti-vi
		y3[i] = complex(gr*w3r-gi*w3i, gr*w3i+gi*w3r)
	}
}

func butterfly5(dst []complex64, out int, x0, x1, x2, x3, x4 []complex64, n int, f *[14]float32) {
	const (
		c1 = 0.309016994374947424102293417182819059  // cos(2π/5)
		c2 = -0.809016994374947424102293417182819059 // cos(4π/5)
		s1 = 0.951056516295153572116439333379382143  // sin(2π/5)
		s2 = 0.587785252292473129168705954639072769  // sin(4π/5)
	)
	x0, x1, x2, x3, x4 = x0[:n], x1[:n], x2[:n], x3[:n], x4[:n]
	y0, y1, y2, y3, y4 := dst[:n], dst[out:][:n], dst[2*out:][:n], dst[3*out:][:n], dst[4*out:][:n]
	for i := range x0 {
		ar, ai := real(x0[i]), imag(x0[i])
		pr, pi := real(x1[i])+real(x4[i]), imag(x1[i])+imag(x4[i])
		mr, mi := real(x1[i])-real(x4[i]), imag(x1[i])-imag(x4[i])
		qr, qi := real(x2[i])+real(x3[i]), imag(x2[i])+imag(x3[i])
		nr, ni := real(x2[i])-real(x3[i]), imag(x2[i])-imag(x3[i])
		y0[i] = complex(ar+pr+qr, ai+pi+qi)
		er, ei := ar+c1*pr+c2*qr, ai+c1*pi+c2*qi
		gr, gi := s1*mi+s2*ni, -(s1*mr + s2*nr) // -i·(s1·m + s2·n)
		ur, ui := er+gr, ei+gi
		y1[i] = complex(ur*f[0]-ui*f[1], ur*f[1]+ui*f[0])
		ur, ui = er-gr, ei-gi
		y4[i] = complex(ur*f[6]-ui*f[7], ur*f[7]+ui*f[6])
		er, ei = ar+c2*pr+c1*qr, ai+c2*pi+c1*qi
		gr, gi = s2*mi-s1*ni, -(s2*mr - s1*nr) // -i·(s2·m - s1·n)
		ur, ui = er+gr, ei+gi
		y2[i] = complex(ur*f[2]-ui*f[3], ur*f[3]+ui*f[2])
		ur, ui = er-gr, ei-gi
		y3[i] = complex(ur*f[4]-ui*f[5], ur*f[5]+ui*f[4])
	}
}

// butterfly8 takes its inputs from src[0], src[first], src[first+step], …; the
// offsets may be negative multiples when the whole slice is passed from the
// first input on, so the caller passes a slice that begins at the first input
// and offsets that stay inside it.
func butterfly8(dst []complex64, out int, src []complex64, first, step, n int, f *[14]float32) {
	const h = 0.707106781186547524400844362104849039 // cos(π/4)
	x0 := src[:n]
	x1, x2, x3, x4 := src[first:][:n], src[first+step:][:n], src[first+2*step:][:n], src[first+3*step:][:n]
	x5, x6, x7 := src[first+4*step:][:n], src[first+5*step:][:n], src[first+6*step:][:n]
	y0, y1, y2, y3 := dst[:n], dst[out:][:n], dst[2*out:][:n], dst[3*out:][:n]
	y4, y5, y6, y7 := dst[4*out:][:n], dst[5*out:][:n], dst[6*out:][:n], dst[7*out:][:n]
	for i := range x0 {
		// Even inputs: a transform of length 4.
		ar, ai := real(x0[i]), imag(x0[i])
		br, bi := real(x4[i]), imag(x4[i])
		sr, si := ar+br, ai+bi
		tr, ti := ar-br, ai-bi
		ar, ai = real(x2[i]), imag(x2[i])
		br, bi = real(x6[i]), imag(x6[i])
		ur, ui := ar+br, ai+bi
		vr, vi := ai-bi, br-ar
		e0r, e0i := sr+ur, si+ui
		e1r, e1i := tr+vr, ti+vi
		e2r, e2i := sr-ur, si-ui
		e3r, e3i := tr-vr, ti-vi
		// Odd inputs.
		ar, ai = real(x1[i]), imag(x1[i])
		br, bi = real(x5[i]), imag(x5[i])
		sr, si = ar+br, ai+bi
		tr, ti = ar-br, ai-bi
		ar, ai = real(x3[i]), imag(x3[i])
		br, bi = real(x7[i]), imag(x7[i])
		ur, ui = ar+br, ai+bi
		vr, vi = ai-bi, br-ar
		o0r, o0i := sr+ur, si+ui
		gr, gi := tr+vr, ti+vi
		o1r, o1i := h*(gr+gi), h*(gi-gr) // exp(-iπ/4)
		o2r, o2i := si-ui, ur-sr         // exp(-iπ/2)
		gr, gi = tr-vr, ti-vi
		o3r, o3i := h*(gi-gr), -h*(gr+gi) // exp(-3iπ/4)

		y0[i] = complex(e0r+o0r, e0i+o0i)
		gr, gi = e0r-o0r, e0i-o0i
		y4[i] = complex(gr*f[6]-gi*f[7], gr*f[7]+gi*f[6])
		gr, gi = e1r+o1r, e1i+o1i
		y1[i] = complex(gr*f[0]-gi*f[1], gr*f[1]+gi*f[0])
		gr, gi = e1r-o1r, e1i-o1i
		y5[i] = complex(gr*f[8]-gi*f[9], gr*f[9]+gi*f[8])
		gr, gi = e2r+o2r, e2i+o2i
		y2[i] = complex(gr*f[2]-gi*f[3], gr*f[3]+gi*f[2])
		gr, gi = e2r-o2r, e2i-o2i
		y6[i] = complex(gr*f[10]-gi*f[11], gr*f[11]+gi*f[10])
		gr, gi = e3r+o3r, e3i+o3i
		y3[i] = complex(gr*f[4]-gi*f[5], gr*f[5]+gi*f[4])
		gr, gi = e3r-o3r, e3i-o3i
		y7[i] = complex(gr*f[12]-gi*f[13], gr*f[13]+gi*f[12])
	}
}
