package catalog

import (
	"path/filepath"
	"testing"
)

// Frames of 500 candidates, of which a tenth form objects, on one field night
// after night.
func BenchmarkAddFrame(b *testing.B) {
	inv := survey(1, 20, 50, 450, 150, 20)
	s := open(b, filepath.Join(b.TempDir(), FileName))
	n := 0
	for b.Loop() {
		f := inv.frames[n%20]
		f.rec.Frame = f.rec.Frame + string(rune('a'+n/20%26)) + string(rune('a'+n/520))
		f.candidates = append(f.candidates[:0:0], f.candidates...)
		for i := range f.candidates {
			f.candidates[i].ID = identifier(f.rec.Frame, i)
			f.candidates[i].Frame = ""
		}
		if err := s.AddFrame(ctx, f.rec, f.candidates); err != nil {
			b.Fatal(err)
		}
		n++
	}
	total := float64(n) * float64(len(inv.frames[0].candidates))
	b.ReportMetric(total/b.Elapsed().Seconds(), "candidates/s")
}

func BenchmarkExport(b *testing.B) {
	inv := survey(1, 40, 50, 450, 150, 20)
	s := open(b, filepath.Join(b.TempDir(), FileName))
	addAll(b, s, inv.frames)
	for _, f := range FormatNames() {
		b.Run(f, func(b *testing.B) {
			for b.Loop() {
				if err := s.Export(ctx, "candidates", f, filepath.Join(b.TempDir(), "out")); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
