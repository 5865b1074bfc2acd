package survey

import (
	"context"
	"fmt"
	"path/filepath"
	"syscall"
	"testing"
	"time"

	"nightsift/internal/simulate"
)

// What injected sources add to the time of a run: the same frame with and without,
// in turns, on one core. The metric is the part that they add.
func BenchmarkCostOfInjectedSources(b *testing.B) {
	p, err := simulate.Scenario("plain", 1024, 5)
	if err != nil {
		b.Fatal(err)
	}
	dir := b.TempDir()
	put(b, filepath.Join(dir, "new.fits"), p.New[0], nil)
	put(b, filepath.Join(dir, "reference.fits"), p.Reference, nil)
	for _, count := range []int{50, 100} {
		b.Run(fmt.Sprint(count), func(b *testing.B) {
			var spent [2]time.Duration
			for range b.N {
				for k := range spent {
					c := DefaultConfig()
					c.Search.Efficiency = k * count
					start := processorTime(b)
					if _, err := RunLoose(context.Background(), Loose{Frames: []string{filepath.Join(dir, "new.fits")}, Reference: filepath.Join(dir, "reference.fits"), Out: b.TempDir(), Config: c},
						Options{Version: "test", Jobs: 1}); err != nil {
						b.Fatal(err)
					}
					spent[k] += processorTime(b) - start
				}
			}
			b.ReportMetric(100*(spent[1].Seconds()/spent[0].Seconds()-1), "%added")
		})
	}
}

// processorTime is what this process has used on all cores.
func processorTime(b *testing.B) time.Duration {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		b.Fatal(err)
	}
	return time.Duration(u.Utime.Nano() + u.Stime.Nano())
}
