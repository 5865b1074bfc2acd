package subtract

import (
	"math"
	"testing"
)

func constantWidths(xx, yy, xy float64) widths {
	return func(x, y float64) (float64, float64, float64) { return xx, yy, xy }
}

func TestDirection(t *testing.T) {
	for _, c := range []struct {
		name     string
		new, ref widths
		want     string
	}{
		{"reference sharper", constantWidths(4, 4.2, 0.1), constantWidths(2, 2, 0), "reference"},
		{"equal", constantWidths(3, 3, 0), constantWidths(3, 3, 0), "reference"},
		{"new sharper", constantWidths(2, 2, 0), constantWidths(4, 4, 0), "both"},
		{"crossed", constantWidths(4, 2, 0), constantWidths(2, 4, 0), "both"},
		{"crossed at 45 degrees", constantWidths(3, 3, 1), constantWidths(3, 3, -1), "both"},
	} {
		d := chooseDirection(c.new, c.ref, 1000, 800)
		if d.name != c.want {
			t.Errorf("%s: %s (%s), want %s", c.name, d.name, d.reason, c.want)
		}
		// After the blur the new frame is broader in every direction.
		nxx, nyy, nxy := c.new(1, 1)
		rxx, ryy, rxy := c.ref(1, 1)
		b := d.blur
		if d.name == "both" {
			_, low, _ := eigen(nxx+b.xx-rxx, nyy+b.yy-ryy, nxy+b.xy-rxy)
			if low < matchMargin-1e-9 {
				t.Errorf("%s: after the blur the smallest eigenvalue is %.3f, want %.3f", c.name, low, matchMargin)
			}
		} else if !b.none() {
			t.Errorf("%s: blurred by %v", c.name, b)
		}
	}
}

// One place where the new frame is sharper is enough.
func TestDirectionLooksAtTheWholeField(t *testing.T) {
	n := func(x, y float64) (float64, float64, float64) { s := 3.2 - 1.6*x/1000; return s, s, 0 }
	d := chooseDirection(n, constantWidths(2.4, 2.4, 0), 1000, 1000)
	if d.name != "both" {
		t.Errorf("direction %s (%s)", d.name, d.reason)
	}
}

func TestEigen(t *testing.T) {
	high, low, angle := eigen(3, 1, 1)
	if math.Abs(high-(2+math.Sqrt2)) > 1e-12 || math.Abs(low-(2-math.Sqrt2)) > 1e-12 || math.Abs(angle-22.5) > 1e-9 {
		t.Errorf("eigen = %g, %g, %g", high, low, angle)
	}
}
