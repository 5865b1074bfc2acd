package subtract

// pixelHalfMost bounds the pixel basis: (2·7+1)² elements are as many as the
// stars of a frame can determine.
const pixelHalfMost = 7

// newPixelBasis builds the basis of single pixels (Bramich 2008, MNRAS 386,
// L77): any kernel within its square, with no shape presumed. Element 0 is the
// central pixel, the others are a pixel less the central one, so that the
// coefficient of element 0 is again the kernel's sum.
//
// Free as it is, it fits the noise of the stamps unless it is regularised:
// penalty holds the matrix of the sum of squared second differences of the
// kernel (Becker et al. 2012, MNRAS 425, 1341, section 3), in terms of the
// elements' coefficients.
func newPixelBasis(half int) *basis {
	b := &basis{half: half}
	b.terms = append(b.terms, basisTerm{pixel: true, sum: 1})
	for y := -half; y <= half; y++ {
		for x := -half; x <= half; x++ {
			if x != 0 || y != 0 {
				b.terms = append(b.terms, basisTerm{pixel: true, sum: 1, dx: x, dy: y, degree: max(abs(x), abs(y))})
			}
		}
	}
	b.penalty = b.roughness()
	return b
}

// roughness returns the matrix P for which cᵀPc is Σ (∂²K)², the five-point
// second differences along x and y summed over the kernel's square, with zeros
// beyond it.
func (b *basis) roughness() []float64 {
	n := b.len()
	side := b.side()
	at := func(x, y int) int { return (y+b.half)*side + x + b.half }
	// Rows of second differences as sparse sums of pixels.
	type entry struct {
		pixel  int
		weight float64
	}
	var rows [][]entry
	for y := -b.half; y <= b.half; y++ {
		for x := -b.half; x <= b.half; x++ {
			row := []entry{{at(x, y), -4}}
			for _, d := range [4][2]int{{1, 0}, {-1, 0}, {0, 1}, {0, -1}} {
				if u, v := x+d[0], y+d[1]; abs(u) <= b.half && abs(v) <= b.half {
					row = append(row, entry{at(u, v), 1})
				}
			}
			rows = append(rows, row)
		}
	}
	// A pixel's value in terms of the coefficients: its own element, and for
	// the centre element 0 less all others.
	element := make([]int, side*side)
	for k, t := range b.terms {
		element[at(t.dx, t.dy)] = k
	}
	centre := at(0, 0)
	p := make([]float64, n*n)
	line := make([]float64, n)
	for _, row := range rows {
		clear(line)
		for _, e := range row {
			if e.pixel != centre {
				line[element[e.pixel]] += e.weight
				continue
			}
			line[0] += e.weight
			for k := 1; k < n; k++ {
				line[k] -= e.weight
			}
		}
		for i, a := range line {
			if a == 0 {
				continue
			}
			for k, c := range line {
				p[i*n+k] += a * c
			}
		}
	}
	return p
}

// pixelShapes are the regularisations and spatial orders among which
// cross-validation chooses.
func pixelShapes(b *basis, orderMost int) []shape {
	var shapes []shape
	for order := 0; order <= min(1, orderMost); order++ {
		for _, smooth := range []float64{1e-1, 1e-2, 1e-3, 1e-4} {
			h := makeShape(b, []int{b.half}, order, min(order, 1), 1e-9)
			h.smooth, h.penalty = smooth, b.penalty
			shapes = append(shapes, h)
		}
	}
	return shapes
}

// addPenalty adds the roughness of the kernel, averaged over the field, to the
// normal equations. Its weight is the shape's smooth times the ratio of the
// mean diagonals, so that smooth has no unit.
func (s *system) addPenalty() {
	h := &s.shape
	if h.penalty == nil || h.smooth == 0 {
		return
	}
	elements := 0
	for elements*elements < len(h.penalty) {
		elements++
	}
	var data, rough float64
	count := polynomialCount(h.order[0])
	for a, e := range h.used {
		if a == 0 {
			continue
		}
		data += s.normal[a*count*s.n+a*count]
		rough += h.penalty[e*elements+e]
	}
	if rough == 0 {
		return
	}
	weight := h.smooth * data / rough
	// The mean over the field of a product of two Legendre products is zero
	// unless they are the same one.
	term := 0
	for degree := 0; degree <= h.order[0]; degree++ {
		for q := 0; q <= degree; q++ {
			norm := 1 / float64((2*(degree-q)+1)*(2*q+1))
			for a, ea := range h.used {
				for c := 0; c <= a; c++ {
					s.normal[(a*count+term)*s.n+c*count+term] += weight * norm * h.penalty[ea*elements+h.used[c]]
				}
			}
			term++
		}
	}
}
