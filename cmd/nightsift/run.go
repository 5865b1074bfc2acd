package main

import (
	"fmt"
	"path/filepath"
	"strconv"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"nightsift/internal/survey"
)

func newRun(out *output) *cobra.Command {
	var reference, dir, folder, night, shard, keep string
	var jobs, injected int
	var memory float64
	var watch bool
	var every time.Duration
	cmd := &cobra.Command{
		Use:   "run [FRAME|FOLDER]...",
		Short: "Search frames: the main job, on loose frames or on a survey folder",
		Long: `Search frames for what the reference does not show.

On loose frames, one reference serves all and results go to --out. In a survey
folder each frame's reference is picked by field and filter, and results go to
one folder a night and to the catalogue. What an earlier run finished is not
done again. A frame that cannot be searched is set aside with its reason and
the rest goes on.`,
		Example: `  nightsift run new-*.fits --reference deep.fits --out results
  nightsift run --survey my-survey --night 2026-11-30 --jobs 2`,
		Args: cobra.ArbitraryArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			options := survey.Options{Jobs: jobs, MemoryGiB: memory, Version: version, Observe: out.observer()}
			if jobs < 0 {
				return usagef("--jobs %d: want 0 or more", jobs)
			}
			if folder == "" {
				if len(args) == 0 || reference == "" || dir == "" {
					return usagef("loose frames need FRAME, --reference and --out; a survey needs --survey")
				}
				if night != "" || shard != "" || watch {
					return usagef("--night, --shard and --watch go with --survey")
				}
				c := survey.DefaultConfig()
				if keep != "" {
					c.Search.Keep = keep
				}
				c.Search.Efficiency = injected
				if err := c.Validate(); err != nil {
					return usageError{err}
				}
				sum, err := survey.RunLoose(cmd.Context(), survey.Loose{Frames: args, Reference: reference, Out: dir, Config: c}, options)
				if err != nil {
					return err
				}
				return conclude(cmd, sum)
			}
			if reference != "" || dir != "" {
				return usagef("--reference and --out do not go with --survey: the folder knows its own")
			}
			f, err := survey.OpenFolder(folder)
			if err != nil {
				return err
			}
			if keep != "" {
				f.Config.Search.Keep = keep
			}
			if cmd.Flags().Changed("efficiency") {
				f.Config.Search.Efficiency = injected
			}
			if err := f.Config.Validate(); err != nil {
				return usageError{err}
			}
			s := survey.Selection{Frames: args, Night: night}
			if night != "" {
				if _, err := time.Parse(time.DateOnly, night); err != nil {
					return usagef("--night %s: want YYYY-MM-DD", night)
				}
			}
			if shard != "" {
				if s.Shard, s.Shards, err = parseShard(shard); err != nil {
					return err
				}
			}
			if watch {
				return f.Watch(cmd.Context(), s, options, every, func(sum survey.Summary, err error) {
					printSummary(cmd, sum)
					if err != nil {
						out.lines.Warn(err.Error())
					}
				})
			}
			sum, err := f.Run(cmd.Context(), s, options)
			if err != nil {
				return err
			}
			return conclude(cmd, sum)
		},
	}
	cmd.Long += "\n" + exitHelp
	flags := cmd.Flags()
	flags.StringVar(&reference, "reference", "", "deep reference for loose frames")
	flags.StringVar(&dir, "out", "", "folder for the results of loose frames")
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&night, "night", "", "only this night, YYYY-MM-DD")
	flags.IntVar(&jobs, "jobs", 0, "frames at once; 0: one for each core")
	flags.Float64Var(&memory, "memory-gib", 0, "memory for the frames in flight; 0: half of the machine's")
	flags.StringVar(&shard, "shard", "", "work on part i of n, as i/n: several machines share a survey")
	flags.BoolVar(&watch, "watch", false, "stay and search new frames as they arrive")
	flags.DurationVar(&every, "every", 20*time.Second, "time between two looks with --watch")
	flags.IntVar(&injected, "efficiency", 0, "artificial sources put into a copy of each frame, to measure what is missed")
	flags.StringVar(&keep, "keep", "", "products to keep: none, difference or aligned")
	return cmd
}

func parseShard(s string) (i, n int, err error) {
	a, b, ok := strings.Cut(s, "/")
	i, err1 := strconv.Atoi(a)
	n, err2 := strconv.Atoi(b)
	if !ok || err1 != nil || err2 != nil || i < 1 || n < 1 || i > n {
		return 0, 0, usagef("--shard %s: want i/n with 1 ≤ i ≤ n", s)
	}
	return i, n, nil
}

func printSummary(cmd *cobra.Command, s survey.Summary) {
	w := cmd.OutOrStdout()
	fmt.Fprintf(w, "%d frames searched, %d set aside, %d failed", s.Searched, s.SetAside, s.Failed)
	if s.Skipped > 0 {
		fmt.Fprintf(w, " (%d of them by an earlier run)", s.Skipped)
	}
	fmt.Fprintf(w, "\n%d candidates, %d with a probability of 0.5 or more\n", s.Candidates, s.Likely)
	for _, dir := range s.Folders {
		fmt.Fprintln(w, filepath.Join(dir, "report.html"))
	}
}

func conclude(cmd *cobra.Command, s survey.Summary) error {
	printSummary(cmd, s)
	switch {
	case s.Failed > 0:
		return fmt.Errorf("%d frames failed; frames.csv says why", s.Failed)
	case s.SetAside > 0:
		return errSetAside
	}
	return nil
}
