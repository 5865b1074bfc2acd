package artefacts

import (
	"fmt"
	"syscall"
	"testing"
)

// BenchmarkFind measures the whole search, one core, as ns of this process per pixel, by the
// clock and by processor time: other work on the machine spoils only the first.
func BenchmarkFind(b *testing.B) {
	for _, c := range []struct {
		name string
		size int
	}{{"dirty", 4096}, {"plain", 2048}, {"crowded", 2048}, {"undersampled", 2048}} {
		b.Run(fmt.Sprintf("%s%d", c.name, c.size), func(b *testing.B) {
			s := photograph(b, c.name, c.size, 5)
			kept := s.in.Flags.Clone()
			b.ResetTimer()
			start := cpuTime()
			for range b.N {
				copy(s.in.Flags.Bits, kept.Bits)
				if _, err := Find(s.in, DefaultConfig()); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(cpuTime()-start)/float64(b.N)/float64(c.size*c.size), "cpu-ns/px")
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(c.size*c.size), "ns/px")
			b.ReportMetric(0, "ns/op")
		})
	}
}

// cpuTime is the processor time this process has used [ns].
func cpuTime() int64 {
	var u syscall.Rusage
	if syscall.Getrusage(syscall.RUSAGE_SELF, &u) != nil {
		return 0
	}
	return u.Utime.Nano() + u.Stime.Nano()
}
