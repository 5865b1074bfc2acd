package cosmology

import (
	"encoding/json"
	"fmt"
	"math"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

func TestAgainstAstropy(t *testing.T) {
	// Tcmb0=0 leaves radiation out, as here.
	const script = `
import json
from astropy.cosmology import FlatLambdaCDM
out = []
for h0, om in [(70, 0.3), (67.4, 0.315), (73, 0.0), (50, 1.0)]:
    c = FlatLambdaCDM(H0=h0, Om0=om, Tcmb0=0)
    for z in [0.0001, 0.001, 0.01, 0.1, 0.5, 1, 2.5, 7, 20]:
        out.append([h0, om, z, c.comoving_distance(z).value, c.luminosity_distance(z).value, c.angular_diameter_distance(z).value,
            c.distmod(z).value, c.comoving_volume(z).value, c.differential_comoving_volume(z).value, c.kpc_proper_per_arcmin(z).value / 60])
print(json.dumps(out))
`
	var rows [][]float64
	if err := json.Unmarshal(outside.Python(t, script), &rows); err != nil {
		t.Fatal(err)
	}
	if len(rows) != 36 {
		t.Fatalf("astropy gave %d rows, want 36", len(rows))
	}
	for _, r := range rows {
		f := Flat{H0: r[0], OmegaMatter: r[1]}
		z := r[2]
		got := []float64{f.Comoving(z), f.Luminosity(z), f.AngularDiameter(z), f.Modulus(z), f.Volume(z), f.VolumeElement(z), f.KiloparsecPerArcsec(z)}
		for i, g := range got {
			if want := r[3+i]; !(math.Abs(g/want-1) < 1e-9) {
				t.Errorf("H0 %g, Ωm %g, z %g, number %d: %v, astropy %v", r[0], r[1], z, i, g, want)
			}
		}
	}
}

// Without a cosmological constant (Einstein and de Sitter's universe) and
// without matter the integral has a closed form.
func TestClosedForms(t *testing.T) {
	for _, z := range []float64{0, 0.03, 0.7, 3, 19} {
		matter := Flat{H0: 60, OmegaMatter: 1}
		if got, want := matter.Comoving(z), 2*matter.HubbleDistance()*(1-1/math.Sqrt(1+z)); math.Abs(got-want) > 1e-11*want {
			t.Errorf("z %g: %v, want %v", z, got, want)
		}
		empty := Flat{H0: 60, OmegaMatter: 0}
		if got, want := empty.Comoving(z), empty.HubbleDistance()*z; math.Abs(got-want) > 1e-11*want {
			t.Errorf("z %g: %v, want %v", z, got, want)
		}
	}
}

// The volume element is the derivative of the volume.
func TestVolumeElement(t *testing.T) {
	f := Default()
	for _, z := range []float64{0.01, 0.4, 2} {
		const h = 1e-4
		want := (f.Volume(z+h*z) - f.Volume(z-h*z)) / (2 * h * z) / (4 * math.Pi)
		if got := f.VolumeElement(z); math.Abs(got/want-1) > 1e-6 {
			t.Errorf("z %g: %v, difference quotient %v", z, got, want)
		}
	}
}

func TestOutOfRange(t *testing.T) {
	for _, z := range []float64{-0.001, 20.5, math.NaN(), math.Inf(1)} {
		if d := Default().Luminosity(z); !math.IsNaN(d) {
			t.Errorf("z %v: %v, want NaN", z, d)
		}
	}
	for _, f := range []Flat{{0, 0.3}, {70, -0.1}, {70, 1.1}, {math.NaN(), 0.3}, {70, math.NaN()}} {
		if err := f.Check(); err == nil || !strings.Contains(err.Error(), "want") {
			t.Errorf("%+v: error %v", f, err)
		}
	}
	if err := Default().Check(); err != nil {
		t.Error(err)
	}
}

func ExampleFlat_Modulus() {
	fmt.Printf("%.2f mag\n", Default().Modulus(0.05))
	// Output: 36.73 mag
}
