package subtract

import (
	"context"
	"math"

	"golang.org/x/sync/errgroup"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
)

// trimTerms is the number of terms of a trim.
const trimTerms = 6

// A trim corrects B̂, the transfer function that takes the reference to the new
// frame, for what the two models of the point-spread function got wrong
// together: light, place and width. Its terms are the differences of one pixel
// along x and y,
//
//	C = 1 + c₀ + c₁·i sin ω_x + c₂·i sin ω_y + c₃(2 cos ω_x − 2) + c₄(2 cos ω_y − 2) − c₅ sin ω_x sin ω_y,
//
// each coefficient a polynomial in position. They are found from what the
// subtraction leaves at stars, by the machinery that solves for kernels: linear
// least squares, clipped, the order chosen by prediction of stars left out.
type trim struct{ kernel *Kernel }

func (t *trim) at(c *[trimTerms]float64, x, y float64) {
	var buffer [trimTerms]float64
	copy(c[:], t.kernel.weights(buffer[:0:trimTerms], x, y))
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
	for k := range s.terms {
		s.terms[k] = make([]float32, n*n)
	}
	sum := float64(real(p.b[0]))
	perCount := p.photonsNew/m.newGain + p.photonsRef*sum/m.refGain
	for v := range n {
		for u := range n {
			k := v*n + u
			at := (side/2-reach+v)*side + side/2 - reach + u
			pixel := (cy-reach+v)*m.width + cx - reach + u
			c := p.static[at]
			s.data[k] = p.diff[at]
			s.terms[0][k] = c
			s.terms[1][k] = (p.static[at+1] - p.static[at-1]) / 2
			s.terms[2][k] = (p.static[at+side] - p.static[at-side]) / 2
			s.terms[3][k] = p.static[at+1] - 2*c + p.static[at-1]
			s.terms[4][k] = p.static[at+side] - 2*c + p.static[at-side]
			s.terms[5][k] = (p.static[at+side+1] - p.static[at+side-1] - p.static[at-side+1] + p.static[at-side-1]) / 4
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

// trimShapes are the forms a trim may have: nothing at all; light; light and
// place; these and width.
func trimShapes() []shape {
	shapes := []shape{{}}
	for _, terms := range []int{1, 3, trimTerms} {
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
