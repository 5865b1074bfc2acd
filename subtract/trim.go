package subtract

import (
	"context"
	"math"

	"golang.org/x/sync/errgroup"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
)

// A trim corrects B̂, the transfer function that takes the reference to the new
// frame, for what the two models of the point-spread function got wrong
// together: light, place, width and finer shape. It is a kernel of 5 × 5 pixels
// made of products of differences along x and y,
//
//	C = 1 + Σ c_pq X_p(ω_x) X_q(ω_y),  X = 1, i sin ω, 2 cos ω − 2, X₁X₂, X₂X₂,
//
// each coefficient a polynomial in position. They are found from what the
// subtraction leaves at stars, by the machinery that solves for kernels: linear
// least squares, clipped, terms and order chosen by prediction of stars left
// out. All terms but the first have no sum.
type trim struct{ kernel *Kernel }

const (
	trimDegree = 4 // highest p+q
	trimTerms  = (trimDegree + 1) * (trimDegree + 2) / 2
	trimReach  = 2 // half size of the correction [px]
)

// trimPowers lists p and q of the terms, by rising degree.
var trimPowers = func() (powers [trimTerms][2]int) {
	n := 0
	for degree := 0; degree <= trimDegree; degree++ {
		for q := 0; q <= degree; q++ {
			powers[n] = [2]int{degree - q, q}
			n++
		}
	}
	return powers
}()

// trimDifference holds the kernels of X_p: the value at pixel i is the sum of
// weight[k] times that at i+k-trimReach.
var trimDifference = [trimDegree + 1][2*trimReach + 1]float32{
	{0, 0, 1, 0, 0},
	{0, -0.5, 0, 0.5, 0},
	{0, 1, -2, 1, 0},
	{-0.5, 1, 0, -1, 0.5},
	{1, -4, 6, -4, 1},
}

func (t *trim) at(c *[trimTerms]float64, x, y float64) {
	var buffer [trimTerms]float64
	copy(c[:], t.kernel.weights(buffer[:0:trimTerms], x, y))
}

// trimTransfer returns X_p at ω = 2πf: real or imaginary.
func trimTransfer(p int, f float64) complex64 {
	s, c := math.Sincos(2 * math.Pi * f)
	switch d := 2*c - 2; p {
	case 0:
		return 1
	case 1:
		return complex(0, float32(s))
	case 2:
		return complex(float32(d), 0)
	case 3:
		return complex(0, float32(s*d))
	default:
		return complex(float32(d*d), 0)
	}
}

// trimSpectrum multiplies dst by Σ c_pq X_p X_q, plus one, on a plan's half
// spectrum. It serves one goroutine.
type trimSpectrum struct {
	x, y [trimDegree + 1][]complex64
}

func newTrimSpectrum(plan *fft.Plan) *trimSpectrum {
	s := &trimSpectrum{}
	for p := range trimDegree + 1 {
		for u := range plan.SpectrumWidth() {
			s.x[p] = append(s.x[p], trimTransfer(p, float64(u)/float64(plan.Width)))
		}
		for v := range plan.Height {
			s.y[p] = append(s.y[p], trimTransfer(p, float64(v)/float64(plan.Height)))
		}
	}
	return s
}

// row writes base + Σ c_pq X_p X_q for row v of the half spectrum.
func (s *trimSpectrum) row(dst []complex64, c *[trimTerms]float64, v int, base float32) {
	var a [trimDegree + 1]complex64
	for k, pq := range trimPowers {
		a[pq[0]] += complex(float32(c[k]), 0) * s.y[pq[1]][v]
	}
	a[0] += complex(base, 0)
	x1, x2, x3, x4 := s.x[1][:len(dst)], s.x[2][:len(dst)], s.x[3][:len(dst)], s.x[4][:len(dst)]
	for u := range dst {
		i1, r2, i3, r4 := imag(x1[u]), real(x2[u]), imag(x3[u]), real(x4[u])
		re := real(a[0]) - i1*imag(a[1]) + r2*real(a[2]) - i3*imag(a[3]) + r4*real(a[4])
		im := imag(a[0]) + i1*real(a[1]) + r2*imag(a[2]) + i3*real(a[3]) + r4*imag(a[4])
		dst[u] = complex(re, im)
	}
}

// trimStamp is the side of the small Fourier tiles around stars.
func (m *properMatch) trimStamp() int {
	if max(m.newPSF.Radius(), m.refPSF.Radius()) > 20 {
		return 128
	}
	return 64
}

// refine finds the trim.
func (m *properMatch) refine(ctx context.Context, info *Info) error {
	stamps, err := m.trimStamps(ctx)
	if err != nil {
		return err
	}
	if len(stamps) < m.cfg.StampsMin {
		return nil // the models stand alone
	}
	sol, err := m.fitTrim(stamps)
	if err != nil {
		return err
	}
	m.stamps = stamps
	info.KernelStamps, info.KernelClipped, info.KernelChi2 = sol.kept, sol.clipped, sol.chi2
	info.KernelTerms = sol.shape.unknowns()
	if len(sol.shape.used) > 0 {
		m.trim = &trim{sol.kernel}
		m.trimShape = sol.shape
		info.KernelOrder = sol.shape.order[0]
	}
	info.KernelSum = m.scale(float64(m.width+1)/2, float64(m.height+1)/2)
	return nil
}

// trimStamps subtracts small tiles around stars and takes what is left, with
// the terms of the trim as they would change it.
func (m *properMatch) trimStamps(ctx context.Context) ([]*stamp, error) {
	side := m.trimStamp()
	fwhm := max(m.newPSF.FWHM(float64(m.width+1)/2, float64(m.height+1)/2), 2)
	reach := min(side/2-8, int(math.Ceil(1.6*fwhm))+1)
	chosen := chooseStamps(m.stampPositions(), m.width, m.height, reach, min(m.cfg.StampsMax, 200))
	stamps := make([]*stamp, len(chosen))
	workers := max(1, m.cfg.Workers)
	group, ctx := errgroup.WithContext(ctx)
	for w := range workers {
		group.Go(func() error {
			p := m.newTile(fft.NewPlan(side, side), side/2)
			for i := w; i < len(chosen); i += workers {
				if err := ctx.Err(); err != nil {
					return err
				}
				stamps[i] = m.trimStampAt(p, chosen[i], reach)
			}
			return nil
		})
	}
	if err := group.Wait(); err != nil {
		return nil, err
	}
	kept := stamps[:0]
	for _, s := range stamps {
		if s != nil {
			kept = append(kept, s)
		}
	}
	return kept, nil
}

func (m *properMatch) trimStampAt(p *properTile, pos candidatePosition, reach int) *stamp {
	cx, cy := int(math.Round(pos.x))-1, int(math.Round(pos.y))-1
	side := p.plan.Height
	if cx < side/2 || cy < side/2 || cx >= m.width-side/2 || cy >= m.height-side/2 {
		return nil
	}
	n := 2*reach + 1
	s := &stamp{x: cx + 1, y: cy + 1, star: pos.star, kept: true, data: make([]float32, n*n),
		good: make([]bool, n*n), weight: make([]float32, n*n), terms: make([][]float32, trimTerms)}
	core := max(1, reach/2)
	good := 0
	for v := -reach; v <= reach; v++ {
		for u := -reach; u <= reach; u++ {
			at := (cy+v)*m.width + cx + u
			ok := m.flags.Bits[at]&frame.Unusable == 0
			if !ok && abs(u) <= core && abs(v) <= core {
				return nil
			}
			if ok {
				s.good[(v+reach)*n+u+reach] = true
				good++
			}
		}
	}
	if good < n*n*6/10 {
		return nil
	}
	t := tile{cx, cy, cx + 1, cy + 1}
	p.transfers(pos.x, pos.y, tile{cx - side, cy - side, cx + side, cy + side})
	p.load(t)
	for i, psi := range p.psi {
		taken := complex(psi, 0) * p.b[i] * p.ref[i]
		p.slope[i] = taken
		p.product[i] = complex(psi, 0)*p.new[i] - taken
	}
	p.plan.Inverse(p.static, p.slope)
	p.plan.Inverse(p.diff, p.product)
	trimTermsOf(s.terms, p.static, side, reach)
	sum := float64(real(p.b[0]))
	perCount := p.photonsNew/m.newGain + p.photonsRef*sum/m.refGain
	for v := range n {
		for u := range n {
			k := v*n + u
			at := (side/2-reach+v)*side + side/2 - reach + u
			pixel := (cy-reach+v)*m.width + cx - reach + u
			c := p.static[at]
			s.data[k] = p.diff[at]
			if !s.good[k] {
				s.data[k] = 0
				continue
			}
			signal := math.Max(0, float64(c))
			variance := float64(m.pair.New.Variance.Pix[pixel]) + sum*sum*float64(m.pair.Reference.Variance.Pix[pixel]) +
				signal*perCount + modelFloor*modelFloor*signal*signal
			s.weight[k] = float32(1 / variance)
		}
	}
	s.accumulate()
	return s
}

// trimTermsOf applies the differences to the middle of a square tile of static
// light.
func trimTermsOf(terms [][]float32, static []float32, side, reach int) {
	n := 2*reach + 1
	corner := side/2 - reach
	along := make([]float32, (n+2*trimReach)*n)
	for k, pq := range trimPowers {
		terms[k] = make([]float32, n*n)
		dx, dy := &trimDifference[pq[0]], &trimDifference[pq[1]]
		for v := range n + 2*trimReach {
			row := static[(corner-trimReach+v)*side+corner-trimReach:]
			for u := range n {
				sum := float32(0)
				for i, w := range dx {
					sum += w * row[u+i]
				}
				along[v*n+u] = sum
			}
		}
		for v := range n {
			for u := range n {
				sum := float32(0)
				for i, w := range dy {
					sum += w * along[(v+i)*n+u]
				}
				terms[k][v*n+u] = sum
			}
		}
	}
}

// trimShapes are the forms a trim may have: nothing at all; light; light and
// place; these and width; and finer shape.
func trimShapes() []shape {
	shapes := []shape{{}}
	for _, terms := range []int{1, 3, 6, 10, trimTerms} {
		for order := 0; order <= 2; order++ {
			h := shape{ridge: 1e-8}
			for k := range terms {
				h.used = append(h.used, k)
				h.order = append(h.order, order)
			}
			shapes = append(shapes, h)
		}
	}
	return shapes
}

// fitTrim solves for the trim, clips what stands out and solves again.
func (m *properMatch) fitTrim(stamps []*stamp) (*solution, error) {
	shapes := trimShapes()
	basis := nilBasis(trimTerms)
	var sol *solution
	best := shapes[1]
	for round := range 3 {
		if round > 0 {
			best = chooseShape(stamps, shapes, trimTerms, m.width, m.height)
		}
		var err error
		if sol, err = solveOnce(basis, stamps, best, m.width, m.height); err != nil {
			return nil, err
		}
		clipStamps(stamps, sol)
	}
	return sol, nil
}
