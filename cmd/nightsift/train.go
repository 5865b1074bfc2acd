package main

import (
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/internal/realbogus"
	"nightsift/internal/realbogus/account"
	"nightsift/internal/realbogus/trainset"
	"nightsift/internal/survey"
	"nightsift/internal/wholefile"
)

func newTrain(out *output) *cobra.Command {
	var dir, labels, to, made string
	var evenIfWorse, evaluate bool
	var sets, models []string
	own, figures := trainset.DefaultOwnConfig(), trainset.EvaluateConfig{Config: trainset.DefaultConfig()}
	figures.FirstSeed = 1
	cmd := &cobra.Command{
		Use:   "train --survey DIR",
		Short: "Fit the real/bogus model to a survey's own frames",
		Long: `Fit the model that tells real changes from defects to a survey's own frames.

Real examples are sources that are put into the survey's frames: on sky, on and
beside galaxies, on stars, down to the limit, some of them trailed. Bogus ones
are the detections on the frames as they are, less those that recur on another
night where they might be real. A reviewer's label counts five times, on the
reviewer's side; labels come from the catalogue and from --labels, a CSV file
with the columns candidate_id and label (real or bogus).

The examples of each frame are kept in DIR/training/examples, so that a second
start goes on where the first one ended. DIR/training/training.html shows what
was measured on frames and fields that the judging model had not seen.

The model is written when it is at least as good as the one in use on held-out
frames. To use it, set in survey.toml: [search] model = "model.json".

With --evaluate nothing is trained: models are judged on invented frames, and a
table is printed. Seeds from 7000001 on were used in training.`,
		Example: "  nightsift train --survey my-survey --labels labels.csv",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			if evaluate {
				if dir != "" || labels != "" || to != "" {
					return usagef("--evaluate goes without --survey, --labels and --out")
				}
				figures.Sets = sets
				return runEvaluate(cmd, out, figures, models)
			}
			for _, name := range []string{"set", "model", "frames-per-set", "size"} {
				if cmd.Flags().Changed(name) {
					return usagef("--%s goes with --evaluate", name)
				}
			}
			if dir == "" {
				return usagef("train needs --survey DIR, or --evaluate")
			}
			if own.PerMpx <= 0 || own.PerMpx > 1000 || own.Rounds < 1 || own.Rounds > 100 || own.Frames < 0 {
				return usagef("--per-megapixel %g, --rounds %d, --frames %d: want more than 0 and at most 1000, 1 to 100, 0 or more", own.PerMpx, own.Rounds, own.Frames)
			}
			return runTrain(cmd, out, dir, labels, to, made, evenIfWorse, own)
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&dir, "survey", "", "folder of the survey")
	flags.StringVar(&labels, "labels", "", "CSV file of reviewers' labels")
	flags.StringVar(&to, "out", "", "where to write the model (default DIR/model.json)")
	flags.BoolVar(&evenIfWorse, "even-if-worse", false, "write the model also when it is worse than the one in use")
	flags.IntVar(&own.Frames, "frames", 0, "use this many frames at most; 0: all")
	flags.Float64Var(&own.PerMpx, "per-megapixel", own.PerMpx, "sources put in for each megapixel and round")
	flags.IntVar(&own.Rounds, "rounds", own.Rounds, "times that sources are put into a frame")
	flags.StringVar(&made, "date", "", "date to write into the model, YYYY-MM-DD; empty: today")
	flags.BoolVar(&evaluate, "evaluate", false, "judge models on invented frames and print a table")
	flags.StringSliceVar(&sets, "set", trainset.Sets(), "with --evaluate: sets of frames")
	flags.StringSliceVar(&models, "model", nil, "with --evaluate: model files to judge besides the shipped one")
	flags.IntVar(&figures.PerSet, "frames-per-set", 20, "with --evaluate: frames of each set")
	flags.IntVar(&figures.Size, "size", figures.Size, "with --evaluate: side of the frames, px")
	flags.Uint64Var(&figures.FirstSeed, "seed", figures.FirstSeed, "with --evaluate: first seed")
	return cmd
}

func runEvaluate(cmd *cobra.Command, out *output, cfg trainset.EvaluateConfig, models []string) error {
	switch {
	case cfg.PerSet < 1:
		return usagef("--frames-per-set %d: want 1 or more", cfg.PerSet)
	case cfg.Size < 256 || cfg.Size > 8192:
		return usagef("--size %d: want 256 to 8192", cfg.Size)
	}
	for _, s := range cfg.Sets {
		if !slices.Contains(trainset.Sets(), s) {
			return usagef("no set %q: want some of %s", s, strings.Join(trainset.Sets(), ", "))
		}
	}
	shipped, err := realbogus.Shipped()
	if err != nil {
		return err
	}
	judges := []trainset.Judge{{Name: "shipped", Model: shipped}}
	for _, path := range models {
		m, err := realbogus.Load(path)
		if err != nil {
			return usageError{err}
		}
		judges = append(judges, trainset.Judge{Name: strings.TrimSuffix(filepath.Base(path), ".json"), Model: m})
	}
	list, err := trainset.Evaluate(cmd.Context(), cfg, judges, out.progress("searching"))
	if err != nil {
		return err
	}
	return trainset.WriteVerdicts(cmd.OutOrStdout(), list)
}

func runTrain(cmd *cobra.Command, out *output, dir, labels, to, made string, evenIfWorse bool, cfg trainset.OwnConfig) error {
	f, err := survey.OpenFolder(dir)
	if err != nil {
		return err
	}
	if cfg.Model, err = f.Config.Model(); err != nil {
		return err
	}
	if cfg.Labels, err = reviewersLabels(cmd.Context(), f, labels); err != nil {
		return err
	}
	if to == "" {
		to = filepath.Join(dir, "model.json")
	}
	cfg.Folder, cfg.Cache = f, filepath.Join(dir, "training", "examples")
	own, err := trainset.CollectOwn(cmd.Context(), cfg, out.progress("frames"))
	if err != nil {
		return err
	}
	train := realbogus.DefaultTrainConfig()
	// The shipped model, which has seen none of these frames, is the start.
	if train.Base, err = realbogus.Shipped(); err != nil {
		return err
	}
	train.Trees, train.Depth, train.MinLeaf, train.Made = 60, 3, 6, made
	train.Note = fmt.Sprintf("%d frames of %s, held out by frame", own.Frames-own.SetAside, f.Config.Survey.Name)
	out.lines.Info("training", "real", own.Recovered+own.LabelledReal, "bogus", own.Bogus+own.LabelledBogus)
	learned, err := trainset.Learn(own, cfg.Model, train)
	if err != nil {
		return err
	}
	told := account.Input{
		Title: "Real/bogus model of " + f.Config.Survey.Name, Version: version, Model: learned.Model, Judged: learned.Judged, Stamps: learned.Stamps,
		Side: trainset.ThumbnailSize, InUse: learned.InUse, ByField: learned.ByField, Importance: learned.Importance,
		Facts: []account.Fact{
			{Name: "frames", Value: fmt.Sprintf("%d, of which %d could not be searched and %d were done before; %.1f Mpx", own.Frames, own.SetAside, own.Reused, own.Mpx)},
			{Name: "put in", Value: fmt.Sprintf("%d sources, %d found", own.Injected, own.Recovered)},
			{Name: "without a label", Value: fmt.Sprintf("%d count as bogus, %d recur and are left out", own.Bogus, own.Recurring)},
			{Name: "labels", Value: fmt.Sprintf("%d real, %d bogus, %d without a candidate", own.LabelledReal, own.LabelledBogus, own.LabelsUnused)},
			{Name: "rate", Value: fmt.Sprintf("%g real sources for each Mpx expected: odds %.3g times those of the examples", f.Config.Search.RealPerMpx, math.Exp(own.Shift))},
		},
	}
	if own.LabelsUnused > 0 {
		out.lines.Warn("labels without a candidate: their frames were not used, or changed", "labels", own.LabelsUnused)
	}
	page := filepath.Join(dir, "training")
	if err := account.Write(page, told); err != nil {
		return err
	}
	if err := account.WriteText(cmd.OutOrStdout(), told); err != nil {
		return err
	}
	fmt.Fprintln(cmd.OutOrStdout(), filepath.Join(page, account.PageName))
	if !learned.Better() && !evenIfWorse {
		return fmt.Errorf("the new model is worse than the one in use on held-out frames (log loss %.4f, in use %.4f) and was not written; --even-if-worse writes it all the same",
			learned.Model.Metrics.LogLoss, learned.InUse.LogLoss)
	}
	data, err := learned.Model.Encode()
	if err != nil {
		return err
	}
	if err := wholefile.WriteBytes(to, data); err != nil {
		return err
	}
	fmt.Fprintln(cmd.OutOrStdout(), to)
	if f.Config.Search.Model == "" || !sameFile(f.Config.Search.Model, to) {
		out.lines.Info("to use the model, name it in survey.toml", "key", "[search] model")
	}
	return nil
}

func sameFile(a, b string) bool {
	p, err := os.Stat(a)
	if err != nil {
		return false
	}
	q, err := os.Stat(b)
	return err == nil && os.SameFile(p, q)
}

// reviewersLabels joins the labels of the catalogue with those of a file.
func reviewersLabels(ctx context.Context, f *survey.Folder, path string) (trainset.Labels, error) {
	list := trainset.Labels{}
	store, err := f.ReadStore(ctx)
	if err == nil {
		defer store.Close()
		labels, err := store.Labels(ctx)
		if err != nil {
			return nil, err
		}
		for _, l := range labels {
			if l.Candidate == "" || l.Verdict == catalog.Unsure {
				continue
			}
			if err := list.Add(l.Candidate, l.Verdict == catalog.Real, "the label of "+l.Reviewer); err != nil {
				return nil, fmt.Errorf("%s: %w", f.StorePath(), err)
			}
		}
	} else if !errors.Is(err, catalog.ErrAbsent) {
		return nil, err
	}
	if path == "" {
		return list, nil
	}
	more, err := trainset.ReadLabels(path)
	if err != nil {
		return nil, usageError{err}
	}
	ids := make([]string, 0, len(more))
	for id := range more {
		ids = append(ids, id)
	}
	slices.Sort(ids)
	for _, id := range ids {
		if err := list.Add(id, more[id], path); err != nil {
			return nil, err
		}
	}
	return list, nil
}
