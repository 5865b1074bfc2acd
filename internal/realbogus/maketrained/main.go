// Command maketrained trains the shipped real/bogus model anew:
//
//	go run ./internal/realbogus/maketrained -out internal/realbogus/model.json
//
// With the same code, arguments and date it writes the same file.
package main

import (
	"context"
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
	flag.IntVar(&cfg.Frames, "frames", cfg.Frames, "frames of each scenario")
	flag.Uint64Var(&cfg.FirstSeed, "seed", cfg.FirstSeed, "first seed")
	flag.IntVar(&cfg.Workers, "workers", cfg.Workers, "frames in work at once")
	flag.StringVar(&train.Made, "date", "", "date to write into the model, YYYY-MM-DD; empty: today")
	flag.Parse()
	cfg.Scenarios = strings.Split(*only, ",")
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt)
	defer stop()
	m, s, err := trainset.Train(ctx, cfg, train, func(line string) { fmt.Fprintln(os.Stderr, line) })
	fmt.Fprintln(os.Stderr, s)
	if err != nil {
		return err
	}
	fmt.Printf("AUC %.4f, log loss %.4f, calibration error %.4f, missed at 1 %% false %.4f\n",
		m.Metrics.AUC, m.Metrics.LogLoss, m.Metrics.CalibrationError, m.Metrics.MissedAt1)
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
