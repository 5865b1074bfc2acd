package stars

import (
	"fmt"
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

// agreement is how far the noise from gain, read noise and sky, or from a
// variance extension, may lie from the measured noise and still be believed.
const agreement = 0.03

// EstimateVariance fills f.Variance with the variance [count²] of the empty
// sky in each pixel; the photon noise of sources is not in it and must be
// added from a smooth model, never from the noisy pixels.
//
// Three sources are compared with the white noise measured by bg: a variance
// plane that the frame brought along (brought down to its sky part by the
// median of each cell), the model
//
//	sky/gain + (read noise/gain)²   [count²]
//
// and the measurement itself. The first of extension and model that agrees
// with the measurement within 3 % (as a standard deviation, median over the
// cells) is used, because it follows the frame without a measurement's
// scatter; else the measurement. An extension may also give more, where pixels
// are correlated and their noise at the scale of a star allows it. f.Variance is
// replaced by a new plane.
//
// A background that does not belong to the frame is a panic. The error is
// always nil at present.
func EstimateVariance(f *frame.Frame, bg *Background) (*VarianceReport, error) {
	if f.Image.Width != bg.Width || f.Image.Height != bg.Height {
		panic(fmt.Sprintf("stars: frame %s is %dx%d, the background %dx%d", f.Name, f.Image.Width, f.Image.Height, bg.Width, bg.Height))
	}
	r := &VarianceReport{ModelNoise: math.NaN(), MeasuredNoise: bg.MedianNoise, ClippedNoise: bg.ClippedNoise, Correlation: bg.Correlation, SkyGain: math.NaN()}
	if bg.MedianSky > 0 {
		r.SkyGain = bg.MedianSky / (bg.MedianNoise * bg.MedianNoise)
	}
	measured := make([]float32, len(bg.NoiseMesh))
	for c, n := range bg.NoiseMesh {
		measured[c] = n * n
	}
	mesh := measured
	r.Source = "measured"

	gain, read := f.Meta.Gain, f.Meta.ReadNoise
	known := gain > 0 && !math.IsInf(gain, 0) && read >= 0 && !math.IsInf(read, 0)
	var model []float32
	if known {
		model = make([]float32, len(bg.SkyMesh))
		for c, s := range bg.SkyMesh {
			model[c] = float32(math.Max(float64(s), 0)/gain + read*read/(gain*gain))
		}
		r.ModelNoise = math.Sqrt(robust.MedianOf(model, nil))
	}
	var brought []float32
	ratio := math.NaN()
	if f.Variance != nil {
		if !f.Variance.SameShape(f.Image) {
			panic(fmt.Sprintf("stars: frame %s: variance is %dx%d, want %dx%d", f.Name, f.Variance.Width, f.Variance.Height, f.Image.Width, f.Image.Height))
		}
		brought = cellMedians(f.Variance, f.Flags, bg)
		ratio = noiseRatio(brought, measured)
	}
	switch m := noiseRatio(model, measured); {
	case bg.Correlation >= correlated && ratio > 1+agreement && ratio <= bg.coarse*(1+agreement):
		mesh, r.Source = brought, "extension"
		r.Reason = fmt.Sprintf("the variance extension gives %.3f of the noise of single pixels, which their correlation explains: at the scale of a star they show up to %.3f of it", ratio, bg.coarse)
	case math.Abs(ratio-1) <= agreement:
		mesh, r.Source = brought, "extension"
		r.Reason = fmt.Sprintf("the variance extension agrees with the measured noise (%.3f of it)", ratio)
	case math.Abs(m-1) <= agreement:
		mesh, r.Source = model, "model"
		r.Reason = fmt.Sprintf("gain, read noise and sky give %.3f of the measured noise", m)
	case known:
		r.Reason = fmt.Sprintf("gain, read noise and sky give %.3f of the measured noise: more than %g %% off", m, 100*agreement)
	default:
		r.Reason = "gain or read noise is unknown"
	}
	if r.Source != "extension" && f.Variance != nil {
		r.Reason += fmt.Sprintf("; the variance extension gives %.3f of the measured noise", ratio)
	}

	plane := frame.NewImage(bg.Width, bg.Height)
	floor := float32(math.Inf(1))
	for _, v := range mesh {
		floor = min(floor, v)
	}
	floor /= 4
	for j := 0; j < bg.Height; j++ {
		row := plane.Row(j)
		meshRow(row, mesh, bg.xc, bg.yc, 0, 1, float64(j))
		for i, v := range row {
			if v < floor {
				row[i] = floor
			}
		}
	}
	f.Variance = plane
	return r, nil
}

// noiseRatio is the median over the cells of sqrt(a/b), NaN for a nil mesh.
func noiseRatio(a, b []float32) float64 {
	if a == nil {
		return math.NaN()
	}
	list := make([]float64, len(a))
	for c := range a {
		list[c] = math.Sqrt(float64(a[c]) / float64(b[c]))
	}
	return robust.Median(list)
}

// cellMedians returns the median of the positive, finite, usable values of a
// plane in each cell of a background's mesh; cells without any take their
// neighbours'. It returns nil if there is no such value at all.
func cellMedians(plane *frame.Image, mask *frame.Mask, bg *Background) []float32 {
	bin := binFactor(bg.Width, bg.Height)
	ex, ey := cellEdges(bg.Width, bin, bg.NX), cellEdges(bg.Height, bin, bg.NY)
	out := make([]float32, bg.NX*bg.NY)
	ok := make([]bool, len(out))
	var s []float32
	for c := range out {
		cx, cy := c%bg.NX, c/bg.NX
		s = s[:0]
		for j := ey[cy] * bin; j < min(ey[cy+1]*bin, bg.Height); j++ {
			for i := ex[cx]*bin + j&1; i < min(ex[cx+1]*bin, bg.Width); i += 2 {
				v := plane.Pix[j*bg.Width+i]
				if v > 0 && v-v == 0 && (mask == nil || mask.Bits[j*bg.Width+i]&frame.Unusable == 0) {
					s = append(s, v)
				}
			}
		}
		if ok[c] = len(s) > 0; ok[c] {
			out[c] = float32(robust.Median(s))
		}
	}
	if !fillMesh(out, ok, bg.NX, bg.NY) {
		return nil
	}
	return out
}
