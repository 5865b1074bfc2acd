package artefacts

import (
	"math"
	"math/rand/v2"
	"testing"

	"nightsift/internal/frame"
)

// addTrail draws a Gaussian trail from (x0,y0) to (x1,y1) [FITS px] onto a
// sky-subtracted frame, without its photon noise.
func addTrail(img *frame.Image, x0, y0, x1, y1, fwhm, peak float64) {
	length := math.Hypot(x1-x0, y1-y0)
	ux, uy := (x1-x0)/length, (y1-y0)/length
	s := fwhm / 2.3548
	for j := range img.Height {
		for i := range img.Width {
			dx, dy := float64(i+1)-x0, float64(j+1)-y0
			t, o := dx*ux+dy*uy, dy*ux-dx*uy
			if math.Abs(o) > 6*s {
				continue
			}
			end := 0.5 * (math.Erf(t/(s*math.Sqrt2)) - math.Erf((t-length)/(s*math.Sqrt2)))
			img.Pix[j*img.Width+i] += float32(peak * end * math.Exp(-o*o/(2*s*s)))
		}
	}
}

// noiseFrame is an empty sky of unit noise, gain and variance 1.
func noiseFrame(w, h int, seed uint64) Input {
	rng := rand.New(rand.NewPCG(seed, 7))
	img, v := frame.NewImage(w, h), frame.NewImage(w, h)
	for k := range img.Pix {
		img.Pix[k], v.Pix[k] = float32(rng.NormFloat64()), 1
	}
	return Input{Image: img, Variance: v, Flags: frame.NewMask(w, h), FWHM: 3, Gain: 1}
}

func angleBetween(a, b float64) float64 {
	d := math.Mod(a-b+270, 180) - 90
	return math.Abs(d)
}

// TestFaintTrails: trails of one sigma per pixel on the axis and 300 px or more
// are found among ordinary stars, measured, and masked; nothing else is.
func TestFaintTrails(t *testing.T) {
	for seed := uint64(70); seed < 73; seed++ {
		s := photograph(t, "plain", 768, seed)
		rng := rand.New(rand.NewPCG(seed, 3))
		angle := rng.Float64() * math.Pi
		length := 320 + rng.Float64()*300
		cx, cy := 384+rng.Float64()*60, 384+rng.Float64()*60
		u, v := length/2*math.Cos(angle), length/2*math.Sin(angle)
		addTrail(s.in.Image, cx-u, cy-v, cx+u, cy+v, s.in.FWHM, s.exposure.SkyNoise)
		r, err := Find(s.in, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		if len(r.Streaks) != 1 {
			t.Errorf("seed %d: %d trails, want 1: %+v", seed, len(r.Streaks), r.Streaks)
			continue
		}
		st := r.Streaks[0]
		// A centroid error of 0.3 px at both ends of 320 px is 0.08 deg; the
		// bound below is four times as much.
		if d := angleBetween(st.Angle, angle*180/math.Pi); d > 0.3 {
			t.Errorf("seed %d: angle wrong by %.3f deg", seed, d)
		}
		if math.Abs(st.Length/length-1) > 0.25 || st.FWHM < 0.75*s.in.FWHM || st.FWHM > 1.5*s.in.FWHM {
			t.Errorf("seed %d: length %.0f, FWHM %.2f: want %.0f and %.2f", seed, st.Length, st.FWHM, length, s.in.FWHM)
		}
		if q := st.Peak / s.exposure.SkyNoise; q < 0.7 || q > 1.2 {
			t.Errorf("seed %d: peak %.2f sigma, want 1", seed, q)
		}
		// Nine tenths of the trail's axis are flagged.
		hit := 0
		for k := range 100 {
			a := (float64(k)+0.5)/50 - 1
			i, j := int(math.Round(cx+a*u))-1, int(math.Round(cy+a*v))-1
			if s.in.Flags.Bits[j*768+i]&frame.Streak != 0 {
				hit++
			}
		}
		if hit < 85 {
			t.Errorf("seed %d: %d %% of the axis flagged", seed, hit)
		}
	}
}

// TestTrailMeasured: a bright trail on empty sky gives back what was drawn.
func TestTrailMeasured(t *testing.T) {
	for seed, c := range [][6]float64{ // x0 y0 x1 y1 FWHM peak
		{-50, 100, 900, 522, 3.2, 6}, {200.3, 120.7, 520.9, 560.2, 4, 9}, {330, -20, 330, 700, 3.5, 4}, {-9, 411.4, 700, 411.4, 6, 12}, {100, 500, 420, 180, 9, 5},
	} {
		in := noiseFrame(640, 640, uint64(seed))
		addTrail(in.Image, c[0], c[1], c[2], c[3], c[4], c[5])
		r, err := Find(in, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		if len(r.Streaks) != 1 {
			t.Errorf("trail %d: %d found", seed, len(r.Streaks))
			continue
		}
		s := r.Streaks[0]
		want := math.Atan2(c[3]-c[1], c[2]-c[0]) * 180 / math.Pi
		if d := angleBetween(s.Angle, want); d > 0.06 {
			t.Errorf("trail %d: angle %.3f, want %.3f", seed, s.Angle, want)
		}
		// Distance of the middle from the true line.
		length := math.Hypot(c[2]-c[0], c[3]-c[1])
		mx, my := (s.X0+s.X1)/2-c[0], (s.Y0+s.Y1)/2-c[1]
		if d := math.Abs(my*(c[2]-c[0])-mx*(c[3]-c[1])) / length; d > 0.25 {
			t.Errorf("trail %d: %.2f px aside", seed, d)
		}
		if math.Abs(s.FWHM/c[4]-1) > 0.15 || math.Abs(s.Peak/c[5]-1) > 0.12 {
			t.Errorf("trail %d: FWHM %.2f, peak %.2f: want %.2f, %.2f", seed, s.FWHM, s.Peak, c[4], c[5])
		}
		// Closed form: a Gaussian of this peak holds peak·sigma·√2π per px of length.
		if total := c[5] * c[4] / 2.3548 * math.Sqrt(2*math.Pi); math.Abs(s.Brightness/total-1) > 0.12 {
			t.Errorf("trail %d: %.2f count per px of length, want %.2f", seed, s.Brightness, total)
		}
		if seed == 1 || seed == 4 {
			if math.Abs(s.Length-length) > 50 || s.WholeFrame {
				t.Errorf("trail %d: length %.0f, want %.0f", seed, s.Length, length)
			}
		} else if !s.WholeFrame {
			t.Errorf("trail %d crosses the frame, report says otherwise", seed)
		}
		// What is not flagged holds no more than a tenth of a sigma of it.
		for k, b := range in.Flags.Bits {
			x, y := float64(k%640+1)-c[0], float64(k/640+1)-c[1]
			o := (y*(c[2]-c[0]) - x*(c[3]-c[1])) / length
			a := (x*(c[2]-c[0]) + y*(c[3]-c[1])) / length
			sg := c[4] / 2.3548
			if v := c[5] * math.Exp(-o*o/(2*sg*sg)); b&frame.Streak == 0 && v > 0.25 && a > 40 && a < length-40 {
				t.Errorf("trail %d: %.2f sigma left at %d,%d", seed, v, k%640+1, k/640+1)
				break
			}
		}
	}
}

// TestNoTrails: what is long but no trail: an edge-on galaxy, the spikes of a
// bright star, a bleed trail, a chain of stars.
func TestNoTrails(t *testing.T) {
	type drawing struct {
		name string
		draw func(in *Input)
	}
	for _, d := range []drawing{
		{"empty", func(in *Input) {}},
		{"galaxy", func(in *Input) {
			addLine(in, 0.4, 320, 320, func(t float64) float64 { return 60 * math.Exp(-math.Abs(t)/30) }, 5)
		}},
		{"spikes", func(in *Input) {
			for _, a := range []float64{0.1, 0.1 + math.Pi/2} {
				addLine(in, a, 320, 320, func(t float64) float64 { return min(500, 3000/(1+math.Abs(t))*math.Exp(-math.Abs(t)/120)) }, 3)
			}
			addStar(in.Image, 320, 320, 3, 2e6)
			in.Stars = append(in.Stars, star(320, 320, 2e6))
		}},
		{"bleed", func(in *Input) {
			addStar(in.Image, 320, 320, 3, 3e6)
			for j := 100; j < 560; j++ {
				for i := 318; i < 321; i++ {
					in.Image.Pix[j*640+i] = 60000
					in.Flags.Bits[j*640+i] |= frame.Saturated | frame.Bleed
				}
			}
		}},
		{"chain", func(in *Input) {
			for k := range 14 {
				addStar(in.Image, 120+28*float64(k), 200+13*float64(k), 3, 800+300*float64(k%4))
			}
		}},
		{"gradient", func(in *Input) {
			for k := range in.Image.Pix {
				in.Image.Pix[k] += float32(k%640) * 0.01
			}
		}},
	} {
		for seed := uint64(1); seed <= 2; seed++ {
			in := noiseFrame(640, 640, 90+seed)
			d.draw(&in)
			r, err := Find(in, DefaultConfig())
			if err != nil {
				t.Fatal(err)
			}
			if len(r.Streaks) > 0 {
				t.Errorf("%s: %+v", d.name, r.Streaks)
			}
		}
	}
}

// addLine draws light along a line through (x,y) [FITS px] whose brightness
// depends on the distance from there.
func addLine(in *Input, angle, x, y float64, level func(float64) float64, fwhm float64) {
	sin, cos := math.Sincos(angle)
	s := fwhm / 2.3548
	for k := range in.Image.Pix {
		dx, dy := float64(k%in.Image.Width+1)-x, float64(k/in.Image.Width+1)-y
		t, o := dx*cos+dy*sin, dy*cos-dx*sin
		if math.Abs(o) < 6*s {
			in.Image.Pix[k] += float32(level(t) * math.Exp(-o*o/(2*s*s)))
		}
	}
}

// TestTransformAgainstDefinition compares the fast transform with sums along
// the discrete lines that its recursion defines, at sizes that are no powers
// of two.
func TestTransformAgainstDefinition(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 5))
	for _, size := range [][2]int{{1, 1}, {5, 3}, {16, 16}, {13, 22}, {40, 9}} {
		w, h := size[0], size[1]
		pix := make([]float32, w*h)
		for k := range pix {
			pix[k] = float32(rng.NormFloat64())
		}
		tr := newTransform(w, h)
		_, pad, wide := tr.level(0)
		cur, next := tr.a, tr.b
		for j := range tr.n {
			row := cur[j*wide : (j+1)*wide]
			clear(row)
			if j < h {
				copy(row[pad:], pix[j*w:(j+1)*w])
			}
		}
		for m := 0; 1<<m < tr.n; m++ {
			for odd := 1; odd >= 0; odd-- {
				tr.step(next, cur, m, odd)
				rows, pad, wide := tr.level(m + 1)
				for block := range tr.n / rows {
					first := block*rows + odd*rows/2
					for s := range rows {
						for x := -pad; x < w; x++ {
							want := 0.0
							for r := range rows {
								i, j := x+lineOffset(m+1, s, r), first+r
								if i >= 0 && i < w && j < h && first+rows <= tr.n {
									want += float64(pix[j*w+i])
								}
							}
							if got := float64(next[(block*rows+s)*wide+x+pad]); math.Abs(got-want) > 1e-4 {
								t.Fatalf("%d×%d level %d odd %d block %d shift %d start %d: %g, want %g", w, h, m+1, odd, block, s, x, got, want)
							}
						}
					}
				}
			}
			cur, next = next, cur
		}
	}
}

// TestSegmentSums: the sum along a found line, bin by bin, is what the fast
// transform gave for it, in all four quadrants.
func TestSegmentSums(t *testing.T) {
	rng := rand.New(rand.NewPCG(6, 6))
	b := &binned{w: 90, h: 70, pix: make([]float32, 90*70)}
	for k := range b.pix {
		b.pix[k] = float32(rng.NormFloat64())
	}
	quadrants := map[[2]bool]int{}
	for _, s := range b.search(3, 2.5) {
		quadrants[[2]bool{s.flat, s.shift < 0}]++
		// The score is the sum over a noise that is at least white noise's.
		if sum := b.sum(s); sum < 2.4*math.Sqrt(float64(s.n)) || s.score > 1.1*sum/math.Sqrt(float64(s.n)) {
			t.Errorf("%+v: sum %.2f", s, sum)
		}
	}
	if len(quadrants) != 4 {
		t.Errorf("lines in %d quadrants", len(quadrants))
	}
}

// lineOffset is how far row r of a discrete line of 2^m rows and shift s is
// from its start: half of the shift, rounded down, in each half of the rows,
// the second half beginning where s is then complete.
func lineOffset(m, s, r int) int {
	if m == 0 {
		return 0
	}
	half := 1 << (m - 1)
	if r < half {
		return lineOffset(m-1, s/2, r)
	}
	return s - s/2 + lineOffset(m-1, s/2, r-half)
}
