// Package demo runs the whole job on an invented survey and compares what was
// found with what was put in.
package demo

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"time"

	"nightsift/configs"
	"nightsift/detect"
	"nightsift/internal/score"
	"nightsift/internal/simulate"
	"nightsift/internal/survey"
	"nightsift/internal/wholefile"
)

// Options of a demonstration.
type Options struct {
	Dir     string // made if it is not there
	Seed    uint64
	Size    int // px, side of the frames; 0: the usual size
	Jobs    int
	Version string

	Writing simulate.Progress  // told of each invented file; may be nil
	Observe func(survey.Event) // told of the search; may be nil
}

// Result is what a demonstration gives.
type Result struct {
	Summary survey.Summary
	Score   *score.Result
	Reports []string
	Store   string
	Writing time.Duration // spent on inventing; 0 when that was done before
	Search  time.Duration
}

// OK reports whether every frame met the fate it was meant for.
func (r *Result) OK() bool {
	for _, f := range r.Score.Frames {
		if !f.OK {
			return false
		}
	}
	return true
}

// markName is the file that tells a demonstration's folder from others.
const markName = "demo.json"

// mark is what it says.
type mark struct {
	Seed    uint64 `json:"seed"`
	Version string `json:"version"`
	Written bool   `json:"frames_written"` // all of them
}

// Run invents the survey in o.Dir, unless that was done before with the same
// seed, searches it as a user would, and scores the result. A folder that holds
// anything else is refused.
func Run(ctx context.Context, o Options) (*Result, error) {
	r := &Result{}
	ready, err := prepared(o)
	if err != nil {
		return nil, err
	}
	if !ready {
		start := time.Now()
		if err := write(ctx, o); err != nil {
			return nil, err
		}
		r.Writing = time.Since(start)
	}
	f, err := survey.OpenFolder(o.Dir)
	if err != nil {
		return nil, err
	}
	start := time.Now()
	r.Summary, err = f.Run(ctx, survey.Selection{}, survey.Options{Jobs: o.Jobs, Version: o.Version, Observe: o.Observe})
	if err != nil {
		return nil, err
	}
	r.Search = time.Since(start)
	r.Store = f.StorePath()
	truth, err := simulate.ReadTruth(filepath.Join(o.Dir, "truth.fits"))
	if err != nil {
		return nil, err
	}
	var found []score.Found
	var statuses []score.Status
	for _, dir := range r.Summary.Folders {
		r.Reports = append(r.Reports, filepath.Join(dir, survey.ReportName))
		records, candidates, err := survey.ReadResults(dir)
		if err != nil {
			return nil, err
		}
		for i := range records {
			statuses = append(statuses, score.Status{Frame: records[i].Frame, Status: string(records[i].Status), Reason: records[i].Reason})
		}
		found = append(found, scored(candidates)...)
	}
	cfg := score.DefaultConfig()
	cfg.Limit = f.Config.Search.ThresholdSigma
	r.Score = score.Compare(truth, found, statuses, cfg)
	return r, nil
}

// scored turns candidates into what package score compares.
func scored(list []detect.Candidate) []score.Found {
	out := make([]score.Found, len(list))
	for i := range list {
		c := &list[i]
		out[i] = score.Found{ID: c.ID, Frame: c.Frame, X: c.X, Y: c.Y, XErr: c.XErr, YErr: c.YErr, Flux: c.Flux, FluxErr: c.FluxErr,
			Significance: c.Significance, RealProbability: c.RealProbability, Kind: string(c.Kind)}
	}
	return out
}

// prepared reports whether the folder holds this demonstration's frames, all of
// them.
func prepared(o Options) (bool, error) {
	refuse := func(what string) error {
		return &survey.ConfigError{Message: fmt.Sprintf("%s %s: name another folder with --out, or remove it", o.Dir, what)}
	}
	entries, err := os.ReadDir(o.Dir)
	if errors.Is(err, fs.ErrNotExist) || err == nil && len(entries) == 0 {
		return false, nil
	}
	if err != nil {
		return false, err
	}
	data, err := os.ReadFile(filepath.Join(o.Dir, markName))
	if errors.Is(err, fs.ErrNotExist) {
		return false, refuse("is not empty and holds no demonstration")
	}
	if err != nil {
		return false, err
	}
	var m mark
	if err := json.Unmarshal(data, &m); err != nil {
		return false, refuse("holds a demonstration whose " + markName + " cannot be read")
	}
	if m.Seed != o.Seed || m.Version != o.Version {
		return false, refuse(fmt.Sprintf("holds a demonstration with seed %d of version %s", m.Seed, m.Version))
	}
	return m.Written, nil
}

func write(ctx context.Context, o Options) error {
	if err := os.MkdirAll(o.Dir, 0o755); err != nil {
		return err
	}
	put := func(written bool) error {
		data, err := json.Marshal(mark{o.Seed, o.Version, written})
		if err != nil {
			return err
		}
		return wholefile.WriteBytes(filepath.Join(o.Dir, markName), append(data, '\n'))
	}
	if err := put(false); err != nil {
		return err
	}
	if err := wholefile.WriteBytes(filepath.Join(o.Dir, survey.ConfigName), []byte(config())); err != nil {
		return err
	}
	var err error
	if o.Size == 0 {
		_, err = simulate.WriteDemo(ctx, o.Dir, o.Seed, o.Writing)
	} else {
		_, err = simulate.WriteSmallDemo(ctx, o.Dir, o.Seed, o.Size, o.Writing)
	}
	if err != nil {
		return err
	}
	return put(true)
}

// config is the shipped configuration with the invented station in it.
func config() string {
	c := configs.Survey
	for _, change := range [][2]string{
		{`name = "unnamed survey"`, fmt.Sprintf("name = %q", simulate.StationName)},
		{"longitude_deg = 0.0", fmt.Sprintf("longitude_deg = %.1f", simulate.StationLongitude)},
	} {
		if !strings.Contains(c, change[0]) {
			panic("demo: the shipped survey.toml has no " + change[0])
		}
		c = strings.Replace(c, change[0], change[1], 1)
	}
	return c
}

// WriteText writes the result for people: what became of each event and frame,
// what was found that is not there, and the measures.
func (r *Result) WriteText(w io.Writer) error {
	if err := r.Score.WriteSummary(w); err != nil {
		return err
	}
	fmt.Fprintln(w)
	if len(r.Score.False) == 0 {
		fmt.Fprintln(w, "no false candidate")
	}
	for _, c := range r.Score.False {
		fmt.Fprintf(w, "false: %s on %s at x %.1f, y %.1f, %s, %+.1f sigma, probability %.2f\n", c.ID, c.Frame, c.X, c.Y, c.Kind, c.Significance, c.RealProbability)
	}
	fmt.Fprintln(w)
	for _, f := range r.Score.Frames {
		switch {
		case f.OK && f.Status == "searched":
		case f.OK && f.Reason == f.Expected:
			fmt.Fprintf(w, "frame %s: set aside as it should be, %s\n", f.Frame, f.Reason)
		case f.OK:
			fmt.Fprintf(w, "frame %s: set aside as it should be, %s (made to be %s)\n", f.Frame, f.Reason, f.Expected)
		case f.Expected == "":
			fmt.Fprintf(w, "frame %s: %s, %s, though it is good\n", f.Frame, strings.ReplaceAll(f.Status, "_", " "), f.Reason)
		default:
			fmt.Fprintf(w, "frame %s: %s, though it was made to be %s\n", f.Frame, f.Status, f.Expected)
		}
	}
	fmt.Fprintln(w)
	if err := r.Score.WriteText(w); err != nil {
		return err
	}
	fmt.Fprintln(w)
	for _, path := range r.Reports {
		fmt.Fprintf(w, "report     %s\n", path)
	}
	_, err := fmt.Fprintf(w, "catalogue  %s\n", r.Store)
	return err
}
