package subtract

import (
	"math/rand/v2"
	"testing"

	"nightsift/internal/frame"
)

// growSquares against the plain double loop.
func TestGrowSquares(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 3))
	for _, size := range [][3]int{{1, 1, 0}, {7, 5, 1}, {23, 31, 3}, {9, 40, 12}, {40, 9, 2}} {
		w, h, reach := size[0], size[1], size[2]
		marks := make([]bool, w*h)
		for i := range marks {
			marks[i] = rng.Float64() < 0.02
		}
		want := make([]bool, w*h)
		for y := range h {
			for x := range w {
				for v := max(0, y-reach); v <= min(h-1, y+reach); v++ {
					for u := max(0, x-reach); u <= min(w-1, x+reach); u++ {
						want[y*w+x] = want[y*w+x] || marks[v*w+u]
					}
				}
			}
		}
		growSquares(marks, w, h, reach)
		for i := range want {
			if marks[i] != want[i] {
				t.Fatalf("%v: pixel %d is %v, want %v", size, i, marks[i], want[i])
			}
		}
	}
}

// A flagged pixel marks its surroundings as far as the kernel carries its
// error above the noise, and no farther.
func TestGrowFlagsByWeight(t *testing.T) {
	in, out := frame.NewMask(41, 41), frame.NewMask(41, 41)
	in.Row(20)[20] = frame.CosmicRay
	const half = 6
	kernel := gaussianKernel(blur{xx: 2, yy: 2}, half)
	at := func([]float64, float64, float64) []float64 { return kernel }
	growFlags(out, in, func(int, int, frame.Flag) float64 { return 100 }, at, half, 1)
	for j := range 41 {
		for i := range 41 {
			u, v := i-20+half, j-20+half
			weight := 0.0
			if u >= 0 && v >= 0 && u <= 2*half && v <= 2*half {
				weight = kernel[v*(2*half+1)+u]
			}
			want := frame.Flag(0)
			if 100*weight > 0.5 {
				want = frame.CosmicRay
			}
			if got := out.Row(j)[i]; got != want {
				t.Fatalf("pixel %d,%d: flags %v, want %v (weight %.4f)", i, j, got, want, weight)
			}
		}
	}
}

func TestReachOf(t *testing.T) {
	k := gaussianKernel(blur{xx: 4, yy: 4}, 12)
	// A square of half side 2.33·2 px leaves out 2 % along one axis, 4 % in all;
	// one of 2.58·2 px leaves out 2 %.
	if r := reachOf(k, 12, 0.02); r < 5 || r > 6 {
		t.Errorf("reach %d px", r)
	}
}
