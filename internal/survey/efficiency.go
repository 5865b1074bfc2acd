package survey

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sort"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/efficiency"
	"nightsift/internal/fits"
	"nightsift/internal/frame/load"
	"nightsift/internal/report"
	"nightsift/subtract"
)

// Names of the files about injected sources in a frame's own folder.
const (
	EfficiencyFITS = "efficiency.fits"
	EfficiencyCSV  = "efficiency.csv"
)

// efficiencySeed is the seed of the nightly job: the sources differ from frame to
// frame all the same.
const efficiencySeed = 1

// Efficiency is what a receipt says about the sources put into a frame.
type Efficiency struct {
	Injected int    `json:"injected"`
	Found    int    `json:"found"`
	Seed     uint64 `json:"seed"`
	// The fitted curve, in magnitudes; with a Form of "" there is none.
	Form    efficiency.Form `json:"form,omitempty"`
	Plateau float64         `json:"plateau,omitempty"`
	Middle  float64         `json:"middle_mag,omitempty"`
	Width   float64         `json:"width_mag,omitempty"`
	// Note says why there is no curve, or no measurement at all.
	Note string `json:"note,omitempty"`
}

// Curve returns the fitted curve, nil if there is none.
func (e *Efficiency) Curve() *efficiency.Curve {
	if e == nil || e.Form == "" {
		return nil
	}
	return &efficiency.Curve{Form: e.Form, Plateau: e.Plateau, Middle: e.Middle, Width: e.Width}
}

// measureEfficiency puts sources into a frame that was just searched and fills
// the record. What goes wrong with it is noted; the search of the frame stands.
// The error is only for a cancelled context or a file that cannot be written.
func (e *engine) measureEfficiency(ctx context.Context, t *Task, s *subtract.Solution, d *subtract.Difference, found []detect.Candidate, out *outcome) error {
	c := efficiency.DefaultConfig()
	c.Count, c.Seed = e.efficiency, efficiencySeed
	kept := &Efficiency{Seed: c.Seed}
	out.receipt.Efficiency = kept
	var r *efficiency.Result
	err := e.guarded(func() error {
		var err error
		r, err = efficiency.Shared(ctx, s, d, found, e.stages.detect, c)
		return err
	})
	if ctx.Err() != nil {
		return ctx.Err()
	}
	if err != nil {
		kept.Note = err.Error()
		return nil
	}
	kept.Injected, kept.Found = len(r.Injections), efficiency.Count(r.Injections)[efficiency.Found]
	switch {
	case r.Curve == nil:
		kept.Note = "all sources met the same fate, so that no curve could be fitted"
	case !r.HasMagnitudes:
		kept.Note = "no zero point: the table has signal to noise and counts, and there are no magnitudes"
	default:
		kept.Form, kept.Plateau, kept.Middle, kept.Width = r.Curve.Form, r.Curve.Plateau, r.Curve.Middle, r.Curve.Width
		out.receipt.Record.Efficiency50 = r.Curve.Mag50
	}
	primary := &fits.Header{}
	primary.Set("CREATOR", "nightsift "+e.version, "program")
	primary.Set("SEED", int64(c.Seed), "of the injected sources")
	if err := fits.Write(filepath.Join(t.Dir, EfficiencyFITS), primary, efficiency.Table(r.Injections)); err != nil {
		return &writeError{err}
	}
	if err := efficiency.WriteCSV(filepath.Join(t.Dir, EfficiencyCSV), r.Injections); err != nil {
		return &writeError{err}
	}
	return nil
}

// nightEfficiency joins what was measured on the frames of a folder for the
// report; nil if nothing was.
func nightEfficiency(dir string, receipts []*Receipt) (*report.Efficiency, error) {
	var all []efficiency.Injection
	var frames []*Receipt
	for _, r := range receipts {
		if r.Record.Status != catalog.Searched || r.Efficiency == nil || r.Efficiency.Injected == 0 {
			continue
		}
		list, err := efficiency.ReadTable(filepath.Join(dir, r.Record.Frame, EfficiencyFITS))
		if errors.Is(err, os.ErrNotExist) {
			continue
		}
		if err != nil {
			return nil, fmt.Errorf("%w; remove its folder and run again", err)
		}
		all = append(all, list...)
		frames = append(frames, r)
	}
	if len(all) == 0 {
		return nil, nil
	}
	var limits []float64
	for _, r := range frames {
		if m := r.Record.Efficiency50; m == m {
			limits = append(limits, m)
		}
	}
	sort.Float64s(limits)
	svg, err := efficiency.Overview(all)
	if err != nil {
		return nil, err
	}
	return &report.Efficiency{Sentence: efficiency.Sentence(all, len(frames), limits), Figure: svg}, nil
}

// Injection describes a measurement on its own, on loose frames or on frames of a
// survey folder.
type Injection struct {
	Frames    []string // files or folders of loose frames
	Reference string
	Out       string
	Config    Config
	Settings  efficiency.Config
	Shared    bool // take what the search of the frame has solved
	Version   string
	Observe   func(m efficiency.Measured, done, total int) // may be nil
}

// MeasureLoose measures loose frames against one reference.
func MeasureLoose(ctx context.Context, m Injection) ([]efficiency.Measured, error) {
	k, err := m.Config.LoadKeywords()
	if err != nil {
		return nil, &ConfigError{err.Error()}
	}
	files, err := ExpandFrames(m.Frames, k)
	if err != nil {
		return nil, err
	}
	if len(files) == 0 {
		return nil, &ConfigError{"no frames: name FITS files, or folders that hold some"}
	}
	var tasks []*Task
	for _, f := range files {
		t, _, err := newTask(f, k, m.Config.Survey.LongitudeDeg)
		if err != nil {
			return nil, err
		}
		t.Reference = m.Reference
		tasks = append(tasks, t)
	}
	return m.measure(ctx, tasks)
}

// MeasureNights measures the frames of a survey that were searched, those of one
// night or of all nights.
func (f *Folder) MeasureNights(ctx context.Context, m Injection, night string) ([]efficiency.Measured, error) {
	m.Config = f.Config
	nights := []string{night}
	if night == "" {
		entries, err := os.ReadDir(f.path(f.Config.Folders.Nights))
		if err != nil && !errors.Is(err, os.ErrNotExist) {
			return nil, err
		}
		nights = nil
		for _, e := range entries {
			if e.IsDir() {
				nights = append(nights, e.Name())
			}
		}
	}
	var tasks []*Task
	for _, n := range nights {
		dir := filepath.Join(f.path(f.Config.Folders.Nights), n)
		receipts, _, err := results(dir)
		if errors.Is(err, os.ErrNotExist) {
			return nil, &ConfigError{fmt.Sprintf("night %s: %s has no results; `nightsift run --survey` makes them", n, dir)}
		}
		if err != nil {
			return nil, err
		}
		for _, r := range receipts {
			if r.Record.Status == catalog.Searched {
				tasks = append(tasks, &Task{Path: r.Frame.Path, Reference: r.Reference.Path, Name: r.Record.Frame, Night: r.Night})
			}
		}
	}
	if len(tasks) == 0 {
		return nil, &ConfigError{"no searched frames; `nightsift run --survey` searches them"}
	}
	return m.measure(ctx, tasks)
}

// measure goes through the frames one by one; stages use all cores. A frame that
// cannot be measured is noted and the others go on.
func (m *Injection) measure(ctx context.Context, tasks []*Task) ([]efficiency.Measured, error) {
	if err := m.Settings.Check(); err != nil {
		return nil, &ConfigError{err.Error()}
	}
	e, err := newEngine(&m.Config, Options{Jobs: 1, Version: m.Version}, tasks)
	if err != nil {
		return nil, err
	}
	var all []efficiency.Measured
	for i, t := range tasks {
		one := efficiency.Measured{Frame: t.Name, Status: "measured"}
		err := e.guarded(func() error {
			if t.Problem != nil {
				return t.Problem
			}
			var err error
			one.Result, err = m.one(ctx, e, t)
			return err
		})
		if ctx.Err() != nil {
			return all, ctx.Err()
		}
		if err != nil {
			one.Status, one.Detail, one.Result = "failed", err.Error(), nil
			if p := problemOf(err); p != nil {
				one.Status, one.Detail = p.Slug, detailOf(err, p)
			}
		}
		all = append(all, one)
		if m.Observe != nil {
			m.Observe(one, i+1, len(tasks))
		}
	}
	return all, efficiency.Write(m.Out, all, m.Settings.Seed, m.Version)
}

// one measures one frame.
func (m *Injection) one(ctx context.Context, e *engine, t *Task) (*efficiency.Result, error) {
	n, err := load.Frame(t.Path, e.keywords)
	if err != nil {
		return nil, err
	}
	n.Name = t.Name
	reference, release, err := e.references.get(ctx, t.Reference)
	if err != nil {
		return nil, fmt.Errorf("reference %s: %w", filepath.Base(t.Reference), err)
	}
	defer release()
	chain := efficiency.Chain{Align: e.stages.align, Subtract: e.stages.subtract, Detect: e.stages.detect, Reference: reference, Mark: e.known.mark}
	if m.Shared {
		return efficiency.SharedFrom(ctx, n, chain, m.Settings)
	}
	return efficiency.Full(ctx, n, chain, m.Settings)
}
