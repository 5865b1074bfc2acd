package align

import (
	"context"
	"errors"
	"math"
	"math/rand/v2"
	"path/filepath"
	"reflect"
	"sync"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/outside"
	"nightsift/internal/wcs"
)

// exposure is an invented frame: how it sees the common sky of unit pixels.
type exposure struct {
	name          string
	width, height int
	see           *Transform // frame pixel to sky pixel
	sigma         float64    // px, of the round Gaussian PSF
	flux          float64    // counts for one of the sky's list
	sky, gain     float64    // count, electron/count
	readNoise     float64    // electron
	saturation    float64    // count
	hits          int        // cosmic-ray hits
	seed          uint64
	wcs           *wcs.WCS
}

// source of the sky: place in sky pixels and flux.
type light struct{ x, y, flux float64 }

func lights(seed uint64, n int, x0, y0, x1, y1 float64) []light {
	r := rand.New(rand.NewPCG(seed, 41))
	out := make([]light, n)
	for i := range out {
		out[i] = light{x0 + (x1-x0)*r.Float64(), y0 + (y1-y0)*r.Float64(), min(1000/math.Pow(r.Float64(), 1.3), 3e6)}
	}
	return out
}

func (e exposure) take(sky []light) *frame.Frame {
	r := rand.New(rand.NewPCG(e.seed, 42))
	img := frame.NewImage(e.width, e.height)
	for _, l := range sky {
		x, y, ok := e.see.Inverse(l.x, l.y)
		if ok && x > -20 && y > -20 && x < float64(e.width+20) && y < float64(e.height+20) {
			render(img, x, y, e.sigma, l.flux*e.flux)
		}
	}
	f := frame.New(e.name, img)
	for i, v := range img.Pix {
		electrons := (float64(v) + e.sky) * e.gain
		img.Pix[i] = float32((electrons + math.Sqrt(electrons+e.readNoise*e.readNoise)*r.NormFloat64()) / e.gain)
		if e.saturation > 0 && float64(img.Pix[i]) > e.saturation {
			img.Pix[i] = float32(e.saturation)
			f.Flags.Bits[i] |= frame.Saturated
		}
	}
	for range e.hits {
		img.Pix[r.IntN(len(img.Pix))] += float32(2000 + 20000*r.Float64())
	}
	f.Meta.Gain, f.Meta.ReadNoise, f.Meta.Saturation = e.gain, e.readNoise, e.saturation
	f.Meta.Filter, f.Meta.MidMJD = "r", 61234.5678901234
	f.Meta.Origin = map[string]string{"gain": "GAIN", "filter": "configuration"}
	f.WCS = e.wcs
	f.Path, f.Checksum = "/data/nächte/"+e.name+".fits", "0123abcd"
	return f
}

// refExposure sees the sky pixel for pixel.
func refExposure(n int) exposure {
	return exposure{name: "reference", width: n, height: n, see: fromAffine(affine{xx: 1, yy: 1}, float64(n), float64(n)),
		sigma: 1.35, flux: 4, sky: 900, gain: 1.7, readNoise: 6, saturation: 60000, seed: 1}
}

func newExposure(n int, see *Transform) exposure {
	return exposure{name: "new", width: n, height: n, see: see, sigma: 1.6, flux: 1, sky: 300, gain: 1.7, readNoise: 8,
		saturation: 60000, hits: 30, seed: 2}
}

func problem(t *testing.T, err error, slug string) {
	t.Helper()
	var p *frame.Problem
	if !errors.As(err, &p) || p.Slug != slug {
		t.Errorf("error %v, want a problem %s", err, slug)
	}
}

func mustWCS(t *testing.T, x, y, ra, dec, scale, deg float64) *wcs.WCS {
	t.Helper()
	s, c := math.Sincos(deg * math.Pi / 180)
	k := scale / 3600
	w, err := wcs.NewTAN(x, y, ra, dec, [2][2]float64{{-k * c, k * s}, {k * s, k * c}})
	if err != nil {
		t.Fatal(err)
	}
	return w
}

func TestAlignImages(t *testing.T) {
	const n = 640
	sky := lights(3, 6000, -n, -n, 2*n, 2*n)
	ref := refExposure(n)
	ref.wcs = mustWCS(t, n/2, n/2, 210, 45, 0.6, 0)
	rf := ref.take(sky)
	prepared, err := Prepare(rf, DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	off := bent(0, 1, false, n, n, 0)
	off.CX[0] += 300 // 3 arcmin at 0.6 arcsec a pixel
	off.CY[0] -= 250
	partly := bent(100, 1, false, n, n, 0)
	partly.CX[0] += 450
	partly.CY[0] += 330
	for _, c := range []struct {
		name string
		see  *Transform
		wcs  *wcs.WCS
		size int
	}{
		{"rotated 12°", bent(12, 1, false, n, n, 0), nil, n},
		{"mirrored, 90°", bent(90, 1, true, n, n, 0), nil, n},
		{"good coordinates", bent(0.3, 1, false, n, n, 0.3), mustWCS(t, n/2, n/2, 210.001, 45.001, 0.6, 0.3), n},
		{"pointing wrong by 4 arcmin", off, mustWCS(t, n/2, n/2, 210, 45, 0.6, 0), n},
		{"scale 1 %", bent(-5, 1.01, false, n, n, 0), nil, n},
		{"scale 1.5, widened kernel", bent(-5, 1.5, false, n, n, 0), nil, n},
		{"overlap a fifth", partly, nil, n},
	} {
		t.Run(c.name, func(t *testing.T) {
			e := newExposure(c.size, c.see)
			e.wcs = c.wcs
			nf := e.take(sky)
			kept := nf.Image.Clone()
			p, err := AlignTo(context.Background(), nf, prepared, DefaultConfig())
			if err != nil {
				t.Fatal(err)
			}
			if !reflect.DeepEqual(kept.Pix, p.New.Image.Pix) {
				t.Error("the new frame's pixels were changed")
			}
			worst, common := 0.0, 0
			for j := range 17 {
				for i := range 17 {
					x, y := 0.5+n*(float64(i)+0.5)/17, 0.5+n*(float64(j)+0.5)/17
					u, v := c.see.Apply(x, y)
					if u < 1 || v < 1 || u > n || v > n {
						continue
					}
					common++
					gu, gv := p.Transform.Apply(x, y)
					worst = max(worst, math.Hypot(gu-u, gv-v))
					if p.WCS == nil {
						t.Fatal("no WCS carried over")
					}
					ra, dec, err1 := p.WCS.PixelToSky(x, y)
					ra2, dec2, err2 := rf.WCS.PixelToSky(u, v)
					if err1 != nil || err2 != nil || wcs.Separation(ra, dec, ra2, dec2)*3600 > 0.06 {
						t.Errorf("sky position off by %.3f arcsec (%v, %v)", wcs.Separation(ra, dec, ra2, dec2)*3600, err1, err2)
					}
				}
			}
			// The sky pixels of the truth: the new frame has 1 count where the
			// reference has 4.
			t.Logf("%s, %d matched, order %d, worst %.4f px, rms %.4f %.4f px (%d), all %.3f %.3f, floor %.4f, scale %.4f ± %.4f, overlap %.2f, wcs %.1e px, odds 1e%.0f",
				p.Method, len(p.Matches), p.Transform.Order, worst, p.RMSX, p.RMSY, p.BrightStars, p.RMSXAll, p.RMSYAll, p.Floor, p.FluxScale, p.FluxScaleErr, p.Overlap, p.WCSRMS, p.LogOdds)
			// Many terms, or few stars, are uncertain in a corner.
			limit := []float64{0, 0.03, 0.06, 0.08, 0.08, 0.1}[p.Transform.Order]
			if len(p.Matches) < 150 {
				limit *= 2
			}
			if worst > limit {
				t.Errorf("transform off by %.4f px", worst)
			}
			if p.RMS() > 0.06 {
				t.Errorf("rms of bright stars %.4f px", p.RMS())
			}
			if math.Abs(p.FluxScale*4-1) > 0.01 {
				t.Errorf("flux scale %.4f, want 0.25", p.FluxScale)
			}
			if want := float64(common) / (17 * 17); math.Abs(p.Overlap-want) > 0.06 {
				t.Errorf("overlap %.3f, want %.3f", p.Overlap, want)
			}
			// What the reference shows on the new grid is the sky's light in
			// its own counts: compare with a noiseless rendering.
			clean := frame.NewImage(n, n)
			for _, l := range sky {
				if x, y, ok := c.see.Inverse(l.x, l.y); ok && x > -20 && y > -20 && x < n+20 && y < n+20 {
					render(clean, x, y, ref.sigma/p.Scale, l.flux*ref.flux)
				}
			}
			if p.Scale < widenFrom {
				var q, r float64
				count := 0
				for k, v := range p.Reference.Image.Pix {
					if p.Reference.Flags.Bits[k]&frame.Unusable != 0 {
						continue
					}
					d := float64(v - clean.Pix[k])
					s2 := float64(p.Reference.Variance.Pix[k]) + float64(clean.Pix[k])/ref.gain
					if d*d < 36*s2 {
						q, r, count = q+d/math.Sqrt(s2), r+d*d/s2, count+1
					}
				}
				mean, spread := q/float64(count), math.Sqrt(r/float64(count))
				t.Logf("%d pixels of the resampled reference against the truth: mean %.4f, spread %.4f of the noise", count, mean, spread)
				if math.Abs(mean) > 0.08 || spread < 0.8 || spread > 1.05 {
					t.Errorf("mean %.4f, spread %.4f", mean, spread)
				}
			}
		})
	}
}

func TestPreparedReferenceServesManyAtOnce(t *testing.T) {
	const n = 400
	sky := lights(4, 600, 0, 0, n, n)
	prepared, err := Prepare(refExposure(n).take(sky), DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	var wg sync.WaitGroup
	pairs := make([]*Pair, 3)
	for i := range pairs {
		wg.Add(1)
		go func() {
			defer wg.Done()
			cfg := DefaultConfig()
			cfg.Workers = i + 1
			scale := 1 + 0.3*float64(i%2)
			p, err := AlignTo(context.Background(), newExposure(n, bent(12, scale, false, n, n, 0)).take(sky), prepared, cfg)
			if err != nil {
				t.Error(err)
			}
			pairs[i] = p
		}()
	}
	wg.Wait()
	if t.Failed() {
		return
	}
	if !reflect.DeepEqual(pairs[0].Reference.Image, pairs[2].Reference.Image) || !reflect.DeepEqual(pairs[0].Reference.Flags, pairs[2].Reference.Flags) || !reflect.DeepEqual(pairs[0].Transform, pairs[2].Transform) {
		t.Error("one worker and three give different pairs")
	}
}

func TestProblems(t *testing.T) {
	const n = 400
	ctx := context.Background()
	cfg := DefaultConfig()
	sky, other := lights(5, 150, 0, 0, n, n), lights(6, 150, 0, 0, n, n)
	ref := refExposure(n)
	ref.wcs = mustWCS(t, n/2, n/2, 210, 45, 0.6, 0)
	prepared, err := Prepare(ref.take(sky), cfg)
	if err != nil {
		t.Fatal(err)
	}
	e := newExposure(n, bent(12, 1, false, n, n, 0))

	_, err = AlignTo(ctx, e.take(other), prepared, cfg)
	problem(t, err, frame.ProblemNoMatch)

	e.wcs = mustWCS(t, n/2, n/2, 213, 45, 0.6, 0)
	_, err = AlignTo(ctx, e.take(other), prepared, cfg)
	problem(t, err, frame.ProblemNoOverlap)

	e.hits = 0
	_, err = AlignTo(ctx, e.take(nil), prepared, cfg)
	problem(t, err, frame.ProblemTooFewStars)

	f := e.take(sky)
	f.Meta.Filter = "i"
	_, err = AlignTo(ctx, f, prepared, cfg)
	problem(t, err, frame.ProblemWrongFilter)
	cfg.AnyFilter = true
	if _, err = AlignTo(ctx, f, prepared, cfg); err != nil {
		t.Errorf("another filter was allowed: %v", err)
	}
	f.Meta.Filter = ""
	cfg.AnyFilter = false
	if _, err = AlignTo(ctx, f, prepared, cfg); err != nil {
		t.Errorf("an unknown filter is no other filter: %v", err)
	}

	gone, cancel := context.WithCancel(ctx)
	cancel()
	if _, err = AlignTo(gone, f, prepared, cfg); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: error %v", err)
	}

	flat := frame.New("flat", constant(n, n, 100))
	_, err = Align(ctx, flat, ref.take(sky), cfg)
	var p *frame.Problem
	if !errors.As(err, &p) {
		t.Errorf("a frame of one value: error %v, want a problem", err)
	}
}

func TestPairRoundTrip(t *testing.T) {
	const n = 300
	sky := lights(5, 400, 0, 0, n, n)
	ref := refExposure(n)
	for _, withWCS := range []bool{true, false} {
		if withWCS {
			ref.wcs = mustWCS(t, n/2, n/2, 210, 45, 0.6, 0)
		} else {
			ref.wcs = nil
		}
		nf := newExposure(n, bent(12, 1, true, n, n, 0.2)).take(sky)
		nf.Image.Pix[1000] = float32(math.NaN())
		p, err := Align(context.Background(), nf, ref.take(sky), DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		path := filepath.Join(t.TempDir(), "aligned.fits")
		h := &fits.Header{}
		h.Set("ORIGIN", "test", "")
		if err := p.Write(path, h); err != nil {
			t.Fatal(err)
		}
		outside.Command(t, "fitsverify", "-q", path)
		got, err := Read(path)
		if err != nil {
			t.Fatal(err)
		}
		same(t, "pair", reflect.ValueOf(*got), reflect.ValueOf(*p))
		if len(got.Matches) < 20 || len(got.ReferenceStars) < 20 || (got.WCS != nil) != withWCS {
			t.Errorf("%d matches, %d reference stars, WCS %v", len(got.Matches), len(got.ReferenceStars), got.WCS != nil)
		}
		row, want := make([]float32, n), make([]float32, n)
		for j := range n {
			got.NewBackground.SkyRow(row, j)
			p.NewBackground.SkyRow(want, j)
			if !reflect.DeepEqual(row, want) {
				t.Fatalf("sky of row %d differs", j)
			}
		}
	}
	if _, err := Read(filepath.Join(t.TempDir(), "absent.fits")); err == nil {
		t.Error("an absent file was read")
	}
}

// same compares deeply, with NaN equal to NaN, and through the exported and
// unexported members alike.
func same(t *testing.T, at string, a, b reflect.Value) {
	t.Helper()
	switch a.Kind() {
	case reflect.Float32, reflect.Float64:
		x, y := a.Float(), b.Float()
		if x != y && !(math.IsNaN(x) && math.IsNaN(y)) {
			t.Errorf("%s: %v, want %v", at, x, y)
		}
	case reflect.Pointer:
		if a.IsNil() != b.IsNil() {
			t.Errorf("%s: nil %v, want %v", at, a.IsNil(), b.IsNil())
		} else if !a.IsNil() {
			same(t, at, a.Elem(), b.Elem())
		}
	case reflect.Struct:
		for i := range a.NumField() {
			same(t, at+"."+a.Type().Field(i).Name, a.Field(i), b.Field(i))
		}
	case reflect.Slice, reflect.Array:
		if a.Len() != b.Len() {
			t.Errorf("%s: %d elements, want %d", at, a.Len(), b.Len())
			return
		}
		for i := range a.Len() {
			if t.Failed() {
				return
			}
			same(t, at, a.Index(i), b.Index(i))
		}
	case reflect.Map:
		if a.Len() != b.Len() {
			t.Errorf("%s: %d entries, want %d", at, a.Len(), b.Len())
			return
		}
		for _, k := range b.MapKeys() {
			if !a.MapIndex(k).IsValid() {
				t.Errorf("%s: no %v", at, k)
				continue
			}
			same(t, at, a.MapIndex(k), b.MapIndex(k))
		}
	case reflect.String:
		if a.String() != b.String() {
			t.Errorf("%s: %q, want %q", at, a.String(), b.String())
		}
	case reflect.Int, reflect.Int32, reflect.Int64:
		if a.Int() != b.Int() {
			t.Errorf("%s: %d, want %d", at, a.Int(), b.Int())
		}
	case reflect.Uint16:
		if a.Uint() != b.Uint() {
			t.Errorf("%s: %d, want %d", at, a.Uint(), b.Uint())
		}
	case reflect.Bool:
		if a.Bool() != b.Bool() {
			t.Errorf("%s: %v, want %v", at, a.Bool(), b.Bool())
		}
	case reflect.Func:
	default:
		t.Errorf("%s: kind %s is not compared", at, a.Kind())
	}
}

func BenchmarkAlignTo2048(b *testing.B) {
	const n = 2048
	sky := lights(3, 12000, -200, -200, n+200, n+200)
	cfg := DefaultConfig()
	cfg.Workers = 1
	rf := refExposure(n).take(sky)
	prepared, err := Prepare(rf, cfg)
	if err != nil {
		b.Fatal(err)
	}
	nf := newExposure(n, bent(12, 1, false, n, n, 3)).take(sky)
	b.Run("prepare", func(b *testing.B) {
		for range b.N {
			if _, err := Prepare(rf, cfg); err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/(n*n), "ns/px")
	})
	b.Run("align", func(b *testing.B) {
		for range b.N {
			if _, err := AlignTo(context.Background(), nf, prepared, cfg); err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/(n*n), "ns/px")
	})
	b.Run("match", func(b *testing.B) {
		_, _, _, list, _, err := measure(nf, cfg)
		if err != nil {
			b.Fatal(err)
		}
		b.ResetTimer()
		for range b.N {
			g := newGeometry(nf, list, prepared, cfg)
			if err := g.find(context.Background()); err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(len(list.Stars)), "stars")
	})
	b.Run("match+fit", func(b *testing.B) {
		_, _, _, list, _, err := measure(nf, cfg)
		if err != nil {
			b.Fatal(err)
		}
		b.ResetTimer()
		for range b.N {
			g := newGeometry(nf, list, prepared, cfg)
			if err := g.find(context.Background()); err != nil {
				b.Fatal(err)
			}
			if err := g.refine(context.Background()); err != nil {
				b.Fatal(err)
			}
		}
	})
}
