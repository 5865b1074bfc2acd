package survey

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"hash/fnv"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"runtime/debug"
	"sort"
	"strings"
	"time"

	"nightsift/align"
	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/astro"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/wholefile"
	"nightsift/subtract"
)

// Names of the files in a frame's own folder.
const (
	ReceiptName    = "receipt.json"
	DifferenceName = "difference.fits"
	AlignedName    = "aligned.fits"
	candidatesName = "candidates.fits"
)

// Task is one frame to be searched.
type Task struct {
	Path      string // of the frame, possibly with [EXTNAME] or [n]
	Reference string // path of its reference; empty with a Problem
	Dir       string // the frame's own folder for results
	Name      string // unique within a run: the stem of the file
	Night     string // evening's date, or "undated"

	// Problem, when set, was found while planning: the frame is set aside
	// without being read again.
	Problem *frame.Problem

	pixels float64
}

// key names the task's frame in the catalogue, which holds many nights.
func (t *Task) key() string { return catalogueKey(t.Night, t.Name) }

func catalogueKey(night, name string) string { return night + "/" + name }

// undated is the night of frames without a time.
const undated = "undated"

// newTask looks at the headers of a frame. What is wrong with the file becomes
// the task's Problem.
func newTask(path string, k load.Keywords, longitude float64) (*Task, frame.Meta, error) {
	t := &Task{Path: path, Name: load.Stem(path), Night: undated}
	if _, hdu := fits.SplitName(path); hdu != "" {
		t.Name += "_" + load.Stem(hdu)
	}
	d, err := load.Describe(path, k)
	if err != nil {
		if errors.As(err, &t.Problem) {
			return t, frame.UnknownMeta(), nil
		}
		return nil, frame.Meta{}, err
	}
	t.Name, t.pixels = d.Name, float64(d.Width)*float64(d.Height)
	if mjd := d.Meta.MidMJD; mjd == mjd {
		t.Night = astro.NightOf(mjd, longitude)
	}
	return t, d.Meta, nil
}

// Receipt is written last into a frame's folder: where it stands, the frame is
// done. It says what was made from which inputs.
type Receipt struct {
	Version   string              `json:"version"`
	Digest    string              `json:"configuration_digest"`
	Frame     fileState           `json:"frame_file"`
	Reference fileState           `json:"reference_file"`
	Night     string              `json:"night"`
	Record    catalog.FrameRecord `json:"record"`
	Likely    int                 `json:"likely"` // candidates with a probability of at least one half

	Efficiency *Efficiency `json:"efficiency,omitempty"` // of injected sources; nil if none were asked for
}

// fileState identifies the content of an input: equal name, size and time of
// change are taken for equal content, so that a survey may be moved as a whole.
type fileState struct {
	Path     string `json:"path"` // absolute
	Size     int64  `json:"size"`
	Modified string `json:"modified"`
	Checksum string `json:"sha256,omitempty"`
}

func stateOf(path string) fileState {
	s := fileState{Path: absolute(path)}
	if info, err := os.Stat(bareName(path)); err == nil {
		s.Size = info.Size()
		s.Modified = info.ModTime().UTC().Format(time.RFC3339Nano)
	}
	return s
}

// bareName strips [EXTNAME] or [n] from a frame's path.
func bareName(path string) string {
	file, _ := fits.SplitName(path)
	return file
}

// absolute returns the path from the root, and the empty path for none.
func absolute(path string) string {
	if path == "" {
		return ""
	}
	if a, err := filepath.Abs(path); err == nil {
		return a
	}
	return path
}

func (s fileState) same(o fileState) bool {
	return filepath.Base(s.Path) == filepath.Base(o.Path) && s.Size == o.Size && s.Modified == o.Modified
}

// readReceipt returns the receipt in a folder, or nil when there is none that
// can be read.
func readReceipt(dir string) *Receipt {
	data, err := os.ReadFile(filepath.Join(dir, ReceiptName))
	if err != nil {
		return nil
	}
	var r Receipt
	if json.Unmarshal(data, &r) != nil || r.Record.Frame == "" {
		return nil
	}
	return &r
}

// done returns the receipt of a task whose results are in place, with the
// products to keep, made by this version with this configuration from these
// files; else nil.
func (t *Task) done(version, digest, keep string) *Receipt {
	r := readReceipt(t.Dir)
	if r == nil || r.Version != version || r.Digest != digest {
		return nil
	}
	if !r.Frame.same(stateOf(t.Path)) || !r.Reference.same(stateOf(t.Reference)) {
		return nil
	}
	if r.Record.Status == catalog.Failed {
		return nil // try again: the fault may have been the machine's
	}
	if r.Record.Status == catalog.Searched {
		for _, name := range products(keep) {
			if _, err := os.Stat(filepath.Join(t.Dir, name)); err != nil {
				return nil
			}
		}
	}
	return r
}

// products lists the files in the folder of a searched frame.
func products(keep string) []string {
	switch keep {
	case KeepAligned:
		return []string{candidatesName, DifferenceName, AlignedName}
	case KeepDifference:
		return []string{candidatesName, DifferenceName}
	}
	return []string{candidatesName}
}

// outcome is what one task produced.
type outcome struct {
	task       *Task
	receipt    Receipt
	candidates []detect.Candidate
}

// process runs the stages for one frame and writes its folder. The error is
// only for what stops the whole run: a cancelled context, an output that
// cannot be written. Everything else is in the outcome.
func (e *engine) process(ctx context.Context, t *Task) (outcome, error) {
	start := time.Now()
	out := outcome{task: t, receipt: Receipt{Version: e.version, Digest: e.digest, Night: t.Night,
		Frame: stateOf(t.Path), Reference: stateOf(t.Reference), Record: catalog.NewFrameRecord(t.Name, catalog.Failed)}}
	rec := &out.receipt.Record
	rec.Version, rec.Configuration, rec.Night = e.version, e.digest, t.Night
	// Without its receipt a folder counts as unfinished: what is written from
	// here on cannot be taken for the results of an earlier run.
	if err := os.Remove(filepath.Join(t.Dir, ReceiptName)); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return out, &writeError{err}
	}
	var candidates []detect.Candidate
	err := e.guarded(func() error {
		if t.Problem != nil {
			return t.Problem
		}
		var err error
		candidates, err = e.search(ctx, e, t, &out)
		return err
	})
	if ctx.Err() != nil {
		return out, ctx.Err()
	}
	var problem *frame.Problem
	var unwritable *writeError
	switch {
	case err == nil:
		rec.Status = catalog.Searched
		out.candidates = candidates
		rec.Candidates = len(candidates)
		out.receipt.Likely = likely(candidates)
	case errors.As(err, &unwritable):
		return out, err
	case errors.As(err, &problem):
		rec.Status, rec.Reason, rec.Detail = catalog.SetAside, problem.Slug, detailOf(err, problem)
	default:
		rec.Status, rec.Reason, rec.Detail = catalog.Failed, "internal_error", err.Error()
	}
	rec.Seconds = time.Since(start).Seconds()
	if err := e.finish(t, &out); err != nil {
		return out, err
	}
	return out, nil
}

// detailOf keeps what was wrapped around a problem as context.
func detailOf(err error, p *frame.Problem) string {
	return strings.Replace(err.Error(), p.Error(), p.Detail, 1)
}

// guarded turns a panic into an error, so that one frame cannot end the night.
func (e *engine) guarded(f func() error) (err error) {
	defer func() {
		if v := recover(); v != nil {
			err = fmt.Errorf("the program met a fault of its own: %v; please report it with this frame\n%s", v, debug.Stack())
		}
	}()
	return f()
}

// writeError marks a failure to write results: the whole run stops.
type writeError struct{ err error }

func (w *writeError) Error() string { return w.err.Error() }
func (w *writeError) Unwrap() error { return w.err }

// search is the way of one frame through the stages.
func search(ctx context.Context, e *engine, t *Task, out *outcome) ([]detect.Candidate, error) {
	rec := &out.receipt.Record
	n, err := load.Frame(t.Path, e.keywords)
	if err != nil {
		return nil, err
	}
	n.Name = t.Name
	out.receipt.Frame.Checksum = n.Checksum
	fromFrame(rec, n)
	ref, release, err := e.references.get(ctx, t.Reference)
	if err != nil {
		// Not this frame's fault: it waits for a better reference.
		if p := problemOf(err); p != nil {
			return nil, frame.Problemf(frame.ProblemNoReference, "the reference %s cannot be used, %s", filepath.Base(t.Reference), err)
		}
		return nil, fmt.Errorf("reference %s: %w", t.Reference, err)
	}
	defer release()
	out.receipt.Reference.Checksum = ref.Frame.Checksum
	pair, err := align.AlignTo(ctx, n, ref, e.stages.align)
	if err != nil {
		return nil, err
	}
	e.known.mark(pair)
	fromPair(rec, pair)
	if err := os.MkdirAll(t.Dir, 0o755); err != nil {
		return nil, &writeError{err}
	}
	provenance := Provenance(e.version, e.digest, n, pair.Reference)
	if e.keep == KeepAligned {
		if err := pair.WriteCompressed(filepath.Join(t.Dir, AlignedName), provenance, e.compression); err != nil {
			return nil, &writeError{err}
		}
	}
	difference, solution, err := subtract.Solve(ctx, pair, e.stages.subtract)
	if err != nil {
		return nil, err
	}
	fromDifference(rec, difference)
	candidates, err := detect.Detect(ctx, difference, e.stages.detect)
	if err != nil {
		return nil, err
	}
	if e.keep != KeepNone {
		if err := difference.WriteCompressed(filepath.Join(t.Dir, DifferenceName), provenance, e.compression); err != nil {
			return nil, &writeError{err}
		}
	}
	if e.efficiency > 0 {
		if err := e.measureEfficiency(ctx, t, solution, difference, candidates, out); err != nil {
			return nil, err
		}
	}
	return candidates, nil
}

// finish writes candidates, then the receipt, and removes products of an
// earlier run that no longer belong.
func (e *engine) finish(t *Task, out *outcome) error {
	if err := os.MkdirAll(t.Dir, 0o755); err != nil {
		return &writeError{err}
	}
	searched := out.receipt.Record.Status == catalog.Searched
	if searched {
		if err := detect.WriteTable(filepath.Join(t.Dir, candidatesName), out.candidates); err != nil {
			return &writeError{err}
		}
	}
	if !searched || e.keep == KeepNone {
		remove(filepath.Join(t.Dir, DifferenceName))
	}
	if !searched {
		remove(filepath.Join(t.Dir, candidatesName))
	}
	if !searched || out.receipt.Efficiency == nil || out.receipt.Efficiency.Injected == 0 {
		remove(filepath.Join(t.Dir, EfficiencyFITS))
		remove(filepath.Join(t.Dir, EfficiencyCSV))
	}
	if !searched || e.keep != KeepAligned {
		remove(filepath.Join(t.Dir, AlignedName))
	}
	data, err := json.MarshalIndent(out.receipt, "", "  ")
	if err != nil {
		return fmt.Errorf("receipt of %s: %w", t.Name, err)
	}
	err = wholefile.Write(filepath.Join(t.Dir, ReceiptName), func(w io.Writer) error {
		_, err := w.Write(append(data, '\n'))
		return err
	})
	if err != nil {
		return &writeError{err}
	}
	return nil
}

func remove(path string) {
	// A file that is not there is as good as removed; one that cannot be
	// removed stays older than the receipt and is replaced by the next run.
	_ = os.Remove(path)
}

// placeTasks gives each task its folder below the one that parent names, and
// with it a name that is unique there. Two files may share a stem: the plain
// name belongs to the one that has results under it, else to the first by path;
// the others add a short digest of their path relative to root.
func placeTasks(tasks []*Task, root string, parent func(*Task) string) {
	sort.SliceStable(tasks, func(a, b int) bool { return tasks[a].Path < tasks[b].Path })
	rivals := map[string][]*Task{}
	var order []string
	for _, t := range tasks {
		t.Dir = filepath.Join(parent(t), t.Name)
		if rivals[t.Dir] == nil {
			order = append(order, t.Dir)
		}
		rivals[t.Dir] = append(rivals[t.Dir], t)
	}
	for _, dir := range order {
		owner := ""
		if r := readReceipt(dir); r != nil {
			if _, err := os.Stat(bareName(r.Frame.Path)); err == nil {
				owner = r.Frame.Path
			}
		}
		for _, t := range rivals[dir] {
			path := absolute(t.Path)
			if owner == "" {
				owner = path
			}
			if path == owner {
				continue
			}
			if rel, err := filepath.Rel(absolute(root), path); err == nil {
				path = rel
			}
			h := fnv.New32a()
			io.WriteString(h, filepath.ToSlash(path))
			t.Name = fmt.Sprintf("%s.%08x", t.Name, h.Sum32())
			t.Dir = filepath.Join(parent(t), t.Name)
		}
	}
	sort.SliceStable(tasks, func(a, b int) bool { return tasks[a].Dir < tasks[b].Dir })
}

func likely(list []detect.Candidate) int {
	n := 0
	for i := range list {
		if list[i].RealProbability >= 0.5 {
			n++
		}
	}
	return n
}
