package catalog

import (
	"database/sql"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"testing"
	"time"

	"nightsift/detect"
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

// Frames of 500 candidates on a field of their own each: what a frame costs
// where nothing was seen before.
func BenchmarkAddFrameOnNewSky(b *testing.B) {
	inv := survey(1, 1, 50, 450, 150, 20)
	s := open(b, filepath.Join(b.TempDir(), FileName))
	n := 0
	for b.Loop() {
		f := inv.frames[0]
		f.rec.Frame = fmt.Sprint("frame", n)
		f.candidates = slices.Clone(f.candidates)
		for i := range f.candidates {
			c := &f.candidates[i]
			c.ID, c.Frame, c.RA = identifier(f.rec.Frame, i), "", c.RA+0.6*float64(n)
		}
		if err := s.AddFrame(ctx, f.rec, f.candidates); err != nil {
			b.Fatal(err)
		}
		n++
	}
	b.ReportMetric(float64(n*len(inv.frames[0].candidates))/b.Elapsed().Seconds(), "candidates/s")
}

// crowd fills an empty catalogue with objects of one detection each, all over
// the sky, without association; NIGHTSIFT_BENCH_OBJECTS says how many.
func crowd(b *testing.B, s *Store) int {
	b.Helper()
	total := 20000
	if text := os.Getenv("NIGHTSIFT_BENCH_OBJECTS"); text != "" {
		var err error
		if total, err = strconv.Atoi(text); err != nil {
			b.Fatal(err)
		}
	}
	const each = 10000
	start := time.Now()
	for first := 0; first < total; first += each {
		err := s.update(ctx, func(tx *sql.Tx) error {
			name := fmt.Sprintf("crowd%06d", first/each)
			if _, err := tx.Exec(`INSERT INTO frames (frame, status, stars_matched, candidates, night, width_px, height_px)
				VALUES (?, 'searched', 0, ?, '2031-01-01', 1, 1)`, name, each); err != nil {
				return err
			}
			object, err := tx.Prepare(`INSERT INTO objects (id, name, cell, ra_deg, dec_deg, ra_err_arcsec, dec_err_arcsec, covariance_arcsec2, kind,
				detections, nights, founder) VALUES (?, ?, ?, ?, ?, 0.22, 0.22, 0, 'new_source', 1, 1, ?)`)
			if err != nil {
				return err
			}
			candidate, err := tx.Prepare(`INSERT INTO candidates (candidate_id, frame, night, mid_mjd, ra_deg, dec_deg, mag, significance, real_probability, kind, flags,
				xi_var, eta_var, xi_eta_cov, cell, role, object) VALUES (?, ?, '2031-01-01', 62000, ?, ?, 19, 10, 0.9, 'new_source', 0, 0.01, 0.01, 0, ?, 2, ?)`)
			if err != nil {
				return err
			}
			for i := range min(each, total-first) {
				id := first + i
				ra, dec := crowdPlace(id)
				cell, key := cellOf(ra, dec), identifier("crowd", id)
				if _, err := object.Exec(id+1, designation(ra, dec, "B")+"/"+strconv.Itoa(id), cell, ra, dec, key); err != nil {
					return err
				}
				if _, err := candidate.Exec(key, name, ra, dec, cell, id+1); err != nil {
					return err
				}
			}
			return nil
		})
		if err != nil {
			b.Fatal(err)
		}
	}
	if s.server {
		if _, err := s.writer.Exec("SELECT setval(pg_get_serial_sequence('objects', 'id'), ?)", total+1); err != nil {
			b.Fatal(err)
		}
		if _, err := s.writer.Exec("ANALYZE"); err != nil {
			b.Fatal(err)
		}
	}
	b.Logf("%d objects and candidates made in %.0f s", total, time.Since(start).Seconds())
	return total
}

// crowdPlace is the place of an object [deg], the same at every call.
func crowdPlace(id int) (ra, dec float64) {
	r := rand.New(rand.NewPCG(uint64(id), 77))
	return 360 * r.Float64(), math.Asin(2*r.Float64()-1) / radian
}

// Searches of circles of 30 arcsec about known objects, and the association of
// a night's frames of which half of the seeds are known objects, in a catalogue
// of many.
func BenchmarkCrowd(b *testing.B) {
	for _, k := range kinds {
		b.Run(k.name, func(b *testing.B) {
			s := open(b, k.make(b))
			if !s.server {
				if _, err := s.writer.Exec("PRAGMA synchronous = OFF"); err != nil {
					b.Fatal(err)
				}
			}
			total := crowd(b, s)
			r := rand.New(rand.NewPCG(3, 3))
			search := func(b *testing.B, find func(*Cone) (int, error)) {
				var took []float64
				for b.Loop() {
					ra, dec := crowdPlace(r.IntN(total))
					start := time.Now()
					n, err := find(&Cone{ra, dec, 30})
					took = append(took, time.Since(start).Seconds()*1000)
					if err != nil || n == 0 {
						b.Fatal(n, err)
					}
				}
				slices.Sort(took)
				b.ReportMetric(took[len(took)/2], "ms-median")
				b.ReportMetric(took[len(took)*9/10], "ms-90%")
			}
			b.Run("ConeObjects", func(b *testing.B) {
				search(b, func(c *Cone) (int, error) {
					list, err := s.Objects(ctx, ObjectQuery{Cone: c})
					return len(list), err
				})
			})
			b.Run("ConeCandidates", func(b *testing.B) {
				search(b, func(c *Cone) (int, error) {
					list, err := s.Candidates(ctx, CandidateQuery{Cone: c})
					return len(list), err
				})
			})
			b.Run("Night", func(b *testing.B) {
				n := 0
				for b.Loop() { // a frame of 500 each
					rec := record(0)
					rec.Frame, rec.Night = fmt.Sprint("night", n), "2031-01-02"
					var list []detect.Candidate
					for i := range 500 {
						ra, dec := crowdPlace(r.IntN(total))
						if i%2 == 0 {
							ra, dec = 360*r.Float64(), math.Asin(2*r.Float64()-1)/radian
						}
						c := newCandidate(identifier("night", n, i), &rec)
						c.RA, c.Dec, c.XErr, c.YErr, c.RealProbability, c.Kind = ra, dec, 0.1, 0.1, 0.9, detect.NewSource
						list = append(list, c)
					}
					if err := s.AddFrame(ctx, rec, list); err != nil {
						b.Fatal(err)
					}
					n++
				}
				b.ReportMetric(b.Elapsed().Seconds()/float64(n)*200, "s/100000-candidates")
			})
		})
	}
}
