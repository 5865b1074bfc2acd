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

	"nightsift/catalog"
	"nightsift/configs"
	"nightsift/detect"
	"nightsift/internal/reference"
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

	Writing  simulate.Progress        // told of each invented file; may be nil
	Building func(reference.Progress) // told of the references; may be nil
	Observe  func(survey.Event)       // told of the search; may be nil
}

// Result is what a demonstration gives.
type Result struct {
	Summary survey.Summary
	Score   *score.Result
	Reports []string
	Store   string

	References []survey.ReferenceState
	Missed     []float64 // mag, where half is found, of each frame that was searched; NaN if it could not be measured
	Supernovae []Supernova
	Movers     Movers

	Writing  time.Duration // spent on inventing; 0 when that was done before
	Building time.Duration // on the references
	Search   time.Duration
	Follow   time.Duration // on light curves and movers
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
	r.References, err = f.SurveyReferences(ctx, survey.ReferenceOptions{Version: o.Version, Build: true, Frames: []string{filepath.Join(o.Dir, simulate.ArchiveName)},
		Set: func(c *reference.Config) { c.Observe = o.Building }})
	if err != nil {
		return nil, err
	}
	for _, s := range r.References {
		if s.Fault != "" {
			return nil, fmt.Errorf("the reference of field %s, filter %s: %s", s.Field, s.Filter, s.Fault)
		}
	}
	r.Building = time.Since(start)
	start = time.Now()
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
		records, _, err := survey.ReadResults(dir)
		if err != nil {
			return nil, err
		}
		// What is scored is what the user gets, after the night was judged as a whole.
		candidates, err := detect.ReadTable(filepath.Join(dir, survey.CandidatesFITS))
		if err != nil {
			return nil, err
		}
		for i := range records {
			if records[i].Status == catalog.Searched {
				r.Missed = append(r.Missed, records[i].Efficiency50)
			}
			statuses = append(statuses, score.Status{Frame: records[i].Frame, Status: string(records[i].Status), Reason: records[i].Reason})
		}
		found = append(found, scored(candidates)...)
	}
	cfg := score.DefaultConfig()
	cfg.Limit = f.Config.Search.ThresholdSigma
	r.Score = score.Compare(truth, found, statuses, cfg)
	start = time.Now()
	if r.Supernovae, err = followSupernovae(ctx, f); err != nil {
		return nil, err
	}
	if r.Movers, err = nameMovers(f, truth); err != nil {
		return nil, err
	}
	r.Follow = time.Since(start)
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
	if err := os.MkdirAll(filepath.Join(o.Dir, "references"), 0o755); err != nil {
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

// injected is the number of artificial sources in a copy of each frame.
const injected = 60

// galaxies is the part of survey.toml about the invented galaxies.
const galaxies = `[[crossmatch]]
name = "galaxies"
file = "` + simulate.GalaxiesName + `"
kind = "galaxy"
columns = { ra = "ra_deg", dec = "dec_deg", name = "galaxy", redshift = "redshift", semi_major = "semi_major_arcsec", semi_minor = "semi_minor_arcsec", angle = "angle_deg", mag = "mag" }
`

// config is the shipped configuration with the invented station in it.
func config() string {
	c := configs.Survey
	for _, change := range [][2]string{
		{`name = "unnamed survey"`, fmt.Sprintf("name = %q", simulate.StationName)},
		{"longitude_deg = 0.0", fmt.Sprintf("longitude_deg = %.1f", simulate.StationLongitude)},
		{"\nefficiency = 0 ", fmt.Sprintf("\nefficiency = %d ", injected)},
		{"[minor_planets]\nelements = \"\"", fmt.Sprintf("%s\n[minor_planets]\nelements = %q", galaxies, simulate.ElementsName)},
		{"latitude_deg = \"\"", fmt.Sprintf("latitude_deg = %.1f", simulate.StationLatitude)},
		{"height_m = 0.0", fmt.Sprintf("height_m = %.1f", float64(simulate.StationHeight))},
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
	r.writeFollowed(w)
	fmt.Fprintln(w)
	for _, path := range r.Reports {
		fmt.Fprintf(w, "report     %s\n", path)
	}
	_, err := fmt.Fprintf(w, "catalogue  %s\n", r.Store)
	return err
}
