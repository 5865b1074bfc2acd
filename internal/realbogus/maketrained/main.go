// Command maketrained trains the shipped real/bogus model anew:
//
//	go run ./internal/realbogus/maketrained -out internal/realbogus/model.json
//
// With the same code, arguments and date it writes the same file. Frames may be
// searched in several runs, each with -save, and joined with -from.
package main

import (
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"io"
	"os"
	"os/signal"
	"strings"

	"nightsift/internal/realbogus"
	"nightsift/internal/realbogus/trainset"
	"nightsift/internal/wholefile"
)

func main() {
	if err := run(); err != nil {
		fmt.Fprintln(os.Stderr, "maketrained:", err)
		os.Exit(1)
	}
}

func run() error {
	cfg, train := trainset.DefaultConfig(), realbogus.DefaultTrainConfig()
	out := flag.String("out", "", "model file to write; empty: none")
	only := flag.String("scenarios", strings.Join(cfg.Scenarios, ","), "scenarios to use")
	flag.IntVar(&cfg.Size, "size", cfg.Size, "side of the frames [px]")
	flag.IntVar(&cfg.Worn, "worn", cfg.Worn, "frames on which much goes wrong")
	flag.IntVar(&cfg.Frames, "frames", cfg.Frames, "frames of each scenario")
	flag.Uint64Var(&cfg.FirstSeed, "seed", cfg.FirstSeed, "first seed")
	flag.IntVar(&cfg.Workers, "workers", cfg.Workers, "frames in work at once")
	flag.StringVar(&cfg.Subtract.Method, "method", cfg.Subtract.Method, "method of subtraction")
	flag.StringVar(&train.Made, "date", "", "date to write into the model, YYYY-MM-DD; empty: today")
	flag.IntVar(&train.Folds, "folds", train.Folds, "parts that are held out in turn")
	save := flag.String("save", "", "file for the examples, to train from again; empty: none")
	from := flag.String("from", "", "files of saved examples, separated by commas, instead of frames")
	flag.Parse()
	cfg.Scenarios = nil
	if *only != "" {
		cfg.Scenarios = strings.Split(*only, ",")
	}
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
	defer stop()
	var examples []realbogus.Example
	if *from != "" {
		for name := range strings.SplitSeq(*from, ",") {
			data, err := os.ReadFile(name)
			if err != nil {
				return err
			}
			var list []realbogus.Example
			if err := json.Unmarshal(data, &list); err != nil {
				return fmt.Errorf("%s: not a file of examples: %w", name, err)
			}
			examples = append(examples, list...)
		}
		train.Note = "invented scenarios and worn frames through the whole pipeline, held out by scenario and frame"
	} else {
		list, s, err := trainset.Collect(ctx, cfg, func(line string) { fmt.Fprintln(os.Stderr, line) })
		fmt.Fprintln(os.Stderr, s)
		if err != nil {
			return err
		}
		examples, train.Note = list, trainset.Note(s)
	}
	if *save != "" {
		data, err := json.Marshal(examples)
		if err != nil {
			return err
		}
		if err := wholefile.WriteBytes(*save, data); err != nil {
			return err
		}
	}
	m, err := realbogus.Train(examples, train)
	if err != nil {
		return err
	}
	fmt.Printf("AUC %.4f, log loss %.4f, calibration error %.4f, missed at 1 %% false %.4f, at 0.1 %% %.4f\n",
		m.Metrics.AUC, m.Metrics.LogLoss, m.Metrics.CalibrationError, m.Metrics.MissedAt1, m.Metrics.MissedAt01)
	for _, b := range m.Metrics.Reliability {
		if b.Weight > 0 {
			fmt.Printf("stated %.3f, found %.3f (%.3f to %.3f) of %.0f\n", b.Stated, b.Found, b.FoundLow, b.FoundHigh, b.Weight)
		}
	}
	if *out == "" {
		return nil
	}
	data, err := m.Encode()
	if err != nil {
		return err
	}
	return wholefile.Write(*out, func(w io.Writer) error {
		_, err := w.Write(data)
		return err
	})
}
