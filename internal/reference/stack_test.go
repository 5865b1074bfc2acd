//go:build !race

package reference

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"path/filepath"
	"testing"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
	"nightsift/internal/outside"
)

// flat is a layer whose truth is known in every pixel.
type flat struct {
	fwhm, noise, scale float64
	gauss              bool // a Gaussian, else Moffat's profile of exponent 3
	extra              []skyStar
	seed               uint64
}

const stampSide = 41

func (f *flat) stamp(dx, dy float64) []float32 {
	out := make([]float32, stampSide*stampSide)
	sigma := f.fwhm / 2.3548200450309493
	edge := func(x float64) float64 { return math.Erf(x/sigma/math.Sqrt2) / 2 }
	for j := range stampSide {
		for i := range stampSide {
			x, y := float64(i-stampSide/2)-dx, float64(j-stampSide/2)-dy
			if f.gauss {
				out[j*stampSide+i] = float32((edge(x+0.5) - edge(x-0.5)) * (edge(y+0.5) - edge(y-0.5)))
			} else {
				out[j*stampSide+i] = float32(moffat(x, y, f.fwhm, 3, 1))
			}
		}
	}
	return out
}

// image draws stars at pixels (0-based, in the middle of the frame) and noise.
func (f *flat) image(side int, sky []skyStar) *frame.Image {
	img := frame.NewImage(side, side)
	r := rand.New(rand.NewPCG(f.seed, 9))
	for _, list := range [][]skyStar{sky, f.extra} {
		for _, s := range list {
			x, y := s.x+float64(side)/2, s.y+float64(side)/2
			i, j := int(math.Round(x)), int(math.Round(y))
			stamp := f.stamp(x-float64(i), y-float64(j))
			for b := range stampSide {
				for a := range stampSide {
					u, v := i+a-stampSide/2, j+b-stampSide/2
					if u >= 0 && v >= 0 && u < side && v < side {
						img.Row(v)[u] += float32(s.flux) * stamp[b*stampSide+a]
					}
				}
			}
		}
	}
	for p := range img.Pix {
		img.Pix[p] = (img.Pix[p] + float32(f.noise*r.NormFloat64())) / float32(f.scale)
	}
	return img
}

// layersOf writes parts for frames of known truth.
func layersOf(t testing.TB, side int, sky []skyStar, list []flat) ([]layer, []*frame.Image, depths) {
	t.Helper()
	dir := t.TempDir()
	var layers []layer
	var images []*frame.Image
	n := len(list)
	overlap, variance := make([][]float64, n), make([]float64, n)
	for k := range list {
		f := &list[k]
		if f.scale == 0 {
			f.scale = 1
		}
		img := f.image(side, sky)
		images = append(images, img)
		p := &part{path: filepath.Join(dir, fmt.Sprint(k)), partHeader: partHeader{Width: side, Height: side, NX: lattice(side), NY: lattice(side), FWHM: f.fwhm, PSFSize: stampSide}}
		p.variance = make([]float32, p.NX*p.NY)
		for i := range p.variance {
			p.variance[i] = float32(f.noise * f.noise / f.scale / f.scale)
		}
		if err := p.write(&frame.Frame{Image: img, Flags: frame.NewMask(side, side)}, func(dst []float32, _, _, _, _ float64) { copy(dst, f.stamp(0, 0)) }); err != nil {
			t.Fatal(err)
		}
		variance[k] = f.noise * f.noise
		overlap[k] = make([]float64, n)
		layers = append(layers, layer{part: p, scale: f.scale, gain: math.Inf(1), variance: variance[k]})
	}
	for i := range list {
		for j := range list {
			overlap[i][j] = dot(list[i].stamp(0, 0), list[j].stamp(0, 0))
		}
	}
	d := predict(overlap, variance)
	for k := range layers {
		layers[k].weight = d.weights[k]
	}
	return layers, images, d
}

func runStack(t testing.TB, side int, layers []layer, change func(*stacker)) *stacked {
	t.Helper()
	s := &stacker{layers: layers, width: side, height: side, clip: 5, workers: 2, proper: true}
	if change != nil {
		change(s)
	}
	out, err := s.run(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	return out
}

// filtered returns the image filtered by a point-spread function, as the flux
// of the best fit at each pixel.
func filtered(img *frame.Image, stamp []float32) []float32 {
	plan := fft.NewPlan(img.Height, img.Width)
	kernel := make([]float32, len(img.Pix))
	fft.EmbedKernel(plan, kernel, stamp, stampSide)
	a, b := make([]complex64, plan.SpectrumLen()), make([]complex64, plan.SpectrumLen())
	plan.Forward(a, img.Pix)
	plan.Forward(b, kernel)
	fft.MultiplyConj(a, a, b)
	out := make([]float32, len(img.Pix))
	plan.Inverse(out, a)
	norm := float32(dot(stamp, stamp))
	for p := range out {
		out[p] /= norm
	}
	return out
}

// spread is the standard deviation, the border left out.
func spread(v []float32, side, border int) float64 {
	var s, q, n float64
	for y := border; y < side-border; y++ {
		for x := border; x < side-border; x++ {
			f := float64(v[y*side+x])
			s, q, n = s+f, q+f*f, n+1
		}
	}
	return math.Sqrt(q/n - s*s/n/n)
}

// meanStamp is the point-spread function of the mean.
func meanStamp(list []flat, weights []float64) []float32 {
	out := make([]float32, stampSide*stampSide)
	for k := range list {
		for p, v := range list[k].stamp(0, 0) {
			out[p] += float32(weights[k]) * v
		}
	}
	return out
}

// properStamp is that of proper coaddition by its formula, in float64 as sums
// over frequencies.
func properStamp(t testing.TB, list []flat) []float32 {
	const n = 128
	plan := fft.NewPlan(n, n)
	power := make([]float64, plan.SpectrumLen())
	total := 0.0
	tile, spec := make([]float32, n*n), make([]complex64, plan.SpectrumLen())
	for k := range list {
		fft.EmbedKernel(plan, tile, list[k].stamp(0, 0), stampSide)
		plan.Forward(spec, tile)
		v := list[k].noise * list[k].noise
		for i, q := range spec {
			power[i] += (float64(real(q))*float64(real(q)) + float64(imag(q))*float64(imag(q))) / v
		}
		total += 1 / v
	}
	for i := range spec {
		spec[i] = complex(float32(math.Sqrt(power[i]/total)), 0)
	}
	plan.Inverse(tile, spec)
	out := make([]float32, stampSide*stampSide)
	for j := range stampSide {
		for i := range stampSide {
			out[j*stampSide+i] = tile[(j-stampSide/2+n)%n*n+(i-stampSide/2+n)%n]
		}
	}
	return out
}

// The depth of N equal frames is √N that of one, and with different seeing that
// of the optimum: of the weights that maximise the signal to noise for the
// mean, and the sum of all frames' information for proper coaddition.
func TestDepth(t *testing.T) {
	const side = 600
	for _, c := range []struct {
		name string
		list []flat
	}{
		{"equal", func() (l []flat) {
			for k := range 9 {
				l = append(l, flat{fwhm: 3.5, noise: 10, seed: uint64(k + 1)})
			}
			return
		}()},
		{"different", func() (l []flat) {
			for k := range 9 {
				l = append(l, flat{fwhm: 2.5 + 0.4*float64(k), noise: 8 + float64(k*5%7), scale: 1 + 0.1*float64(k%4), seed: uint64(k + 1)})
			}
			return
		}()},
	} {
		layers, _, d := layersOf(t, side, nil, c.list)
		out := runStack(t, side, layers, nil)
		if c.name == "equal" {
			if r := math.Sqrt(d.mean/d.best) / 3; math.Abs(r-1) > 1e-6 {
				t.Errorf("nine equal frames: predicted depth is %.6f of three times that of one", r)
			}
		} else if !(d.mean < 0.99*d.proper && d.mean > d.best) {
			t.Errorf("different: signal to noise squared %.4g of the mean, %.4g of the proper sum, %.4g of the best frame", d.mean, d.proper, d.best)
		}
		stamp := meanStamp(c.list, d.weights)
		noise := spread(filtered(out.mean, stamp), side, 50)
		if r := noise * math.Sqrt(d.mean); math.Abs(r-1) > 0.02 {
			t.Errorf("%s: noise of a flux on the mean is %.4f of the optimum", c.name, r)
		}
		noise = spread(filtered(out.proper, properStamp(t, c.list)), side, 50)
		if r := noise * math.Sqrt(d.proper); math.Abs(r-1) > 0.02 {
			t.Errorf("%s: noise of a flux on the proper sum is %.4f of the optimum", c.name, r)
		}
		// The planes say the same of single pixels.
		for _, p := range []struct {
			what          string
			img, variance *frame.Image
		}{{"mean", out.mean, out.variance}, {"proper", out.proper, out.properVar}} {
			if r := spread(p.img.Pix, side, 50) / math.Sqrt(float64(p.variance.Row(side / 2)[side/2])); math.Abs(r-1) > 0.01 {
				t.Errorf("%s, %s: pixels spread by %.4f of what the variance says", c.name, p.what, r)
			}
		}
	}
}

// Stars on a lattice, far apart.
func latticeOf(side, step int, flux float64) []skyStar {
	var out []skyStar
	k := 0
	for y := -side/2 + 45; y < side/2-45; y += step {
		for x := -side/2 + 45; x < side/2-45; x += step {
			k++
			out = append(out, skyStar{float64(x) + 0.37*float64(k%3-1), float64(y) + 0.29*float64(k%5-2), flux * (1 + float64(k%7))})
		}
	}
	return out
}

// The cores of stars of signal to noise 200 to 1,400 in one frame keep their
// flux under seeing that changes by a factor of two.
func TestCoresAreNotClipped(t *testing.T) {
	const side = 400
	var list []flat
	for k := range 10 {
		list = append(list, flat{fwhm: 2.8 + 0.3*float64(k), noise: 10, seed: uint64(k + 1)})
	}
	sky := latticeOf(side, 44, 16000)
	layers, _, d := layersOf(t, side, sky, list)
	out := runStack(t, side, layers, nil)
	plain := runStack(t, side, layers, func(s *stacker) { s.clip = 1e9 })
	stamp := meanStamp(list, d.weights)
	worst, sum := 0.0, 0.0
	a, b := filtered(out.mean, stamp), filtered(plain.mean, stamp)
	for _, s := range sky {
		p := int(math.Round(s.y)+side/2)*side + int(math.Round(s.x)+side/2)
		e := math.Abs(float64(a[p]/b[p]) - 1)
		worst, sum = max(worst, e), sum+float64(a[p]/b[p])-1
		// A peak as well.
		worst = max(worst, math.Abs(float64(out.mean.Pix[p]/plain.mean.Pix[p])-1))
	}
	if mean := sum / float64(len(sky)); worst > 0.002 || math.Abs(mean) > 0.0005 {
		t.Errorf("clipping changes the flux of a star's core by up to %.4f, %.5f on average", worst, mean)
	}
}

// Light on one of ten frames is gone from the stack, faint or bright, on sky
// and beside a star.
func TestLightOnOneFrameIsLeftOut(t *testing.T) {
	const side = 400
	sky := latticeOf(side, 88, 20000)
	for _, sn := range []float64{9, 20, 100, 1000} {
		var list, without []flat
		stamp := (&flat{fwhm: 3.5}).stamp(0, 0)
		flux := sn * 10 / math.Sqrt(dot(stamp, stamp))
		var events []skyStar
		for k, s := range sky {
			events = append(events, skyStar{s.x + 30.2, s.y + 25.4, flux})
			if k%2 == 0 {
				events[k].x, events[k].y = s.x+6, s.y+2
			}
		}
		for k := range 10 {
			f := flat{fwhm: 3 + 0.15*float64(k), noise: 10, seed: uint64(k + 1)}
			without = append(without, f)
			if k == 6 {
				f.extra = events
			}
			list = append(list, f)
		}
		layers, _, d := layersOf(t, side, sky, list)
		clean, _, _ := layersOf(t, side, sky, without)
		out, none := runStack(t, side, layers, nil), runStack(t, side, clean, nil)
		mean := filtered(difference(out.mean, none.mean), meanStamp(list, d.weights))
		proper := filtered(difference(out.proper, none.proper), properStamp(t, list))
		var m, q float64
		for _, e := range events {
			p := int(math.Round(e.y)+side/2)*side + int(math.Round(e.x)+side/2)
			m, q = m+float64(mean[p])/flux/float64(len(events)), q+float64(proper[p])/flux/float64(len(events))
		}
		if math.Abs(m) > 0.01 || math.Abs(q) > 0.01 {
			t.Errorf("events of signal to noise %.0f: %.4f of their flux is left in the mean, %.4f in the proper sum", sn, m, q)
		}
	}
}

func difference(a, b *frame.Image) *frame.Image {
	out := a.Clone()
	for p, v := range b.Pix {
		out.Pix[p] -= v
	}
	return out
}

// The same cube by numpy: weighted mean with the hit pixels masked, its
// variance, and proper coaddition as a literal transcription of equations 11
// and 13 of Zackay & Ofek 2017 in float64 over the whole frame.
func TestAgainstNumpy(t *testing.T) {
	const side = 240
	var list []flat
	for k := range 5 {
		list = append(list, flat{fwhm: 2.4 + 0.2*float64(k), gauss: true, noise: 9 + float64(k), scale: 1 + 0.2*float64(k), seed: uint64(k + 1)})
	}
	var sky []skyStar
	for k := range 6 {
		sky = append(sky, skyStar{float64(k*23 - 60), float64(k*k*3 - 40), 3000})
	}
	layers, images, d := layersOf(t, side, sky, list)
	// Hits of 60 sigma, one frame each.
	hits := [][3]int{{0, 100, 120}, {3, 150, 90}, {4, 77, 133}}
	for _, h := range hits {
		images[h[0]].Row(h[2])[h[1]] += float32(60 * list[h[0]].noise / list[h[0]].scale)
	}
	type input struct {
		Cube, PSF [][]float64
		Scale     []float64
		Noise     []float64
		Weight    []float64
		Hits      [][3]int
	}
	in := input{Hits: hits, Weight: d.weights}
	for k := range list {
		f := &list[k]
		if err := layers[k].part.write(&frame.Frame{Image: images[k], Flags: frame.NewMask(side, side)}, func(dst []float32, _, _, _, _ float64) { copy(dst, f.stamp(0, 0)) }); err != nil {
			t.Fatal(err)
		}
		in.Cube, in.PSF = append(in.Cube, wide(images[k].Pix)), append(in.PSF, wide(f.stamp(0, 0)))
		in.Scale, in.Noise = append(in.Scale, f.scale), append(in.Noise, f.noise)
	}
	script, err := json.Marshal(in)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "cube.json")
	writeFile(t, path, script)
	answer := outside.Python(t, `
import json
import numpy as np
q = json.load(open("`+path+`"))
n, m = `+fmt.Sprintf("%d, %d", side, stampSide)+`
scale = np.array(q["Scale"])[:, None, None]
cube = np.array(q["Cube"]).reshape(-1, n, n) * scale
bad = np.zeros(cube.shape, bool)
for k, x, y in q["Hits"]:
    bad[k, y, x] = True
w = np.array(q["Weight"])[:, None, None] * np.ones_like(cube)
v = (np.array(q["Noise"])**2)[:, None, None] * np.ones_like(cube)
masked = np.ma.array(cube, mask=bad)
mean, sum = np.ma.average(masked, axis=0, weights=w, returned=True)
good = ~bad
variance = (w*w*v*good).sum(0) / (w*good).sum(0)**2
# Proper coaddition of the frames whose hits are replaced by the mean.
top, bottom, total = 0, 0, 0
for k in range(len(cube)):
    image = np.where(bad[k], mean, cube[k])
    p = np.zeros((n, n))
    p[:m, :m] = np.array(q["PSF"][k]).reshape(m, m)
    p = np.roll(p, (-(m//2), -(m//2)), (0, 1))
    P, M = np.fft.fft2(p), np.fft.fft2(image)
    s2 = q["Noise"][k]**2
    top = top + np.conj(P)*M/s2
    bottom = bottom + np.abs(P)**2/s2
    total += 1/s2
R = np.fft.ifft2(top/np.sqrt(bottom)).real / np.sqrt(total)
print(json.dumps([np.asarray(mean).ravel().tolist(), variance.ravel().tolist(), R.ravel().tolist()]))
`)
	var want [3][]float64
	if err := json.Unmarshal(answer, &want); err != nil {
		t.Fatal(err)
	}
	out := runStack(t, side, layers, nil)
	isHit := map[int]bool{}
	for _, h := range hits {
		isHit[h[2]*side+h[1]] = true
	}
	noise := math.Sqrt(want[1][side*side/2])
	var worstMean, worstVariance, sumProper float64
	n := 0
	for y := 50; y < side-50; y++ {
		for x := 50; x < side-50; x++ {
			p := y*side + x
			e := math.Abs(float64(out.mean.Pix[p]) - want[0][p])
			if isHit[p] {
				if out.outliers.Pix[p] != 1 || e > noise {
					t.Errorf("hit at %d,%d: %.0f outliers, mean %.3f, numpy's %.3f", x, y, out.outliers.Pix[p], out.mean.Pix[p], want[0][p])
				}
				continue
			}
			if out.outliers.Pix[p] == 0 {
				worstMean = max(worstMean, e)
				worstVariance = max(worstVariance, math.Abs(float64(out.variance.Pix[p])/want[1][p]-1))
			}
			far := true
			for _, h := range hits {
				far = far && math.Hypot(float64(x-h[1]), float64(y-h[2])) > 18
			}
			if !far {
				continue
			}
			d := float64(out.proper.Pix[p]) - want[2][p]
			sumProper += d * d
			n++
		}
	}
	if worstMean > 1e-4*noise+1e-3 || worstVariance > 1e-5 {
		t.Errorf("mean differs from numpy's by up to %.2g (noise %.2g), variance by up to %.2g", worstMean, noise, worstVariance)
	}
	// Far from the hits: around them what is filled in differs.
	if rms := math.Sqrt(sumProper / float64(n)); rms > 0.003*noise {
		t.Errorf("proper coaddition differs from the formula by %.4f of its noise", rms/noise)
	}
}

func wide(v []float32) []float64 {
	out := make([]float64, len(v))
	for i, x := range v {
		out[i] = float64(x)
	}
	return out
}
