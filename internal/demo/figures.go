package demo

import (
	"context"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/simulate"
	"nightsift/internal/trial"
	"nightsift/subtract"
)

// Figures searches scenarios (none named: all) in memory with the settings in
// use when nothing is said, and returns how good the search is. size is the
// side of the frames [px]. report is told of each scenario; it may be nil.
func Figures(ctx context.Context, scenarios []string, size, frames int, seed uint64, report func(*trial.Outcome)) ([]*trial.Outcome, error) {
	if len(scenarios) == 0 {
		scenarios = simulate.Names()
	}
	return trial.Run(ctx, trial.Config{
		Scenarios: scenarios, Size: size, Seeds: frames, FirstSeed: seed,
		Align: align.DefaultConfig(), Subtract: subtract.DefaultConfig(), Detect: detect.DefaultConfig(),
	}, report)
}
