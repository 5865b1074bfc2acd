package main

import (
	"fmt"
	"log/slog"
	"os"
	"time"

	"github.com/schollz/progressbar/v3"
	"golang.org/x/term"

	"nightsift/catalog"
	"nightsift/internal/survey"
)

// output says how messages reach the user: lines on stderr, as text or JSON,
// and a bar when stderr is a terminal.
type output struct {
	log   string
	quiet bool
	lines *slog.Logger
}

func (o *output) start() error {
	level := slog.LevelInfo
	if o.quiet {
		level = slog.LevelWarn
	}
	options := &slog.HandlerOptions{Level: level}
	switch o.log {
	case "text":
		options.ReplaceAttr = func(groups []string, a slog.Attr) slog.Attr {
			if a.Key == slog.TimeKey {
				return slog.String(slog.TimeKey, a.Value.Time().UTC().Format("15:04:05Z"))
			}
			return a
		}
		o.lines = slog.New(slog.NewTextHandler(os.Stderr, options))
	case "json":
		o.lines = slog.New(slog.NewJSONHandler(os.Stderr, options))
	default:
		return usagef("--log %s: want text or json", o.log)
	}
	return nil
}

func (o *output) bar() bool {
	return o.log == "text" && !o.quiet && term.IsTerminal(int(os.Stderr.Fd()))
}

// observer shows the events of a run.
func (o *output) observer() func(survey.Event) {
	var bar *progressbar.ProgressBar
	return func(e survey.Event) {
		switch e.Kind {
		case survey.EventPlanned:
			if o.bar() && e.Total > 0 {
				bar = progressbar.NewOptions(e.Total, progressbar.OptionSetWriter(os.Stderr), progressbar.OptionSetDescription("frames"),
					progressbar.OptionShowCount(), progressbar.OptionSetPredictTime(true), progressbar.OptionThrottle(100*time.Millisecond), progressbar.OptionClearOnFinish())
				return
			}
			o.lines.Info("frames planned", "total", e.Total)
		case survey.EventFinished:
			switch {
			case e.Skipped: // an earlier run told
			case e.Status != catalog.Searched:
				if bar != nil {
					_ = bar.Clear()
				}
				o.lines.Warn("frame not searched", "frame", e.Frame, "status", string(e.Status), "reason", e.Reason, "detail", e.Detail)
			case bar == nil:
				o.lines.Info("frame searched", "frame", e.Frame, "done", fmt.Sprintf("%d/%d", e.Done, e.Total), "candidates", e.Count, "seconds", fmt.Sprintf("%.2f", e.Seconds))
			}
			if bar != nil {
				_ = bar.Add(1)
			}
		case survey.EventWritten:
			if bar != nil {
				_ = bar.Finish()
			}
			o.lines.Info("results written", "folder", e.Detail)
		}
	}
}

// progress returns a function that shows the progress of a long step.
func (o *output) progress(what string) func(done, total int) {
	var bar *progressbar.ProgressBar
	return func(done, total int) {
		if !o.bar() {
			if done == total {
				o.lines.Info(what, "done", done)
			}
			return
		}
		if bar == nil {
			bar = progressbar.NewOptions(total, progressbar.OptionSetWriter(os.Stderr), progressbar.OptionSetDescription(what), progressbar.OptionShowCount(), progressbar.OptionClearOnFinish())
		}
		_ = bar.Set(done)
	}
}
