package psf

import (
	"testing"
	"time"
)

func TestFitProfiles(t *testing.T) {
	for _, c := range []struct {
		name string
		p    density
		n    int
	}{
		{"moffat 2.5", trueMoffat(2.5, varying(3.5)), 150},
		{"moffat 3.5", trueMoffat(3.5, varying(3.5)), 150},
		{"moffat 4.5", trueMoffat(4.5, varying(3.5)), 150},
		{"gauss", trueGauss(varying(3.5)), 150},
		{"double gauss", mix(0.8, trueGauss(varying(3.2)), trueGauss(varying(6.5))), 150},
		{"kolmogorov", kolmogorov(varying(3.5)), 150},
		{"coma", coma(trueMoffat(3, varying(3.2)), 3.2), 150},
		{"undersampled", trueMoffat(3, varying(1.8)), 150},
		{"broad", trueMoffat(3.5, varying(8)), 100},
	} {
		s := newScene(900, 900, c.p, 100, 2, 11)
		s.scatter(c.n, 3e3, 3e5, 40, 0.6, 60)
		s.expose(0.03)
		t0 := time.Now()
		m, err := Fit(s.img, s.var_, s.flags, s.list, s.gain, DefaultConfig())
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		dt := time.Since(t0)
		verbose = c.name == "coma"
		mean, f, n := compare(m, s)
		t.Logf("%-14s stars %d-%d order %d grid %d beta %.2f c %.2f chi2 %.3f frac %.4f: flux bias mean %+.4f worst %.4f norm %.4f  %v", c.name, m.Stars, m.Rejected, m.ShapeOrder, m.GridOrder, m.Beta, m.prof.c, m.Chi2, m.ModelFrac, mean, f, n, dt)
	}
}
