package survey

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"sort"
	"strings"

	"golang.org/x/sync/errgroup"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/fits"
	"nightsift/internal/frame/load"
)

// Event is told to the observer of a run.
type Event struct {
	Kind    EventKind
	Total   int // frames planned
	Done    int // frames finished so far, those of earlier runs included
	Frame   string
	Status  catalog.Status
	Reason  string
	Detail  string
	Count   int // candidates on the frame
	Seconds float64
	Skipped bool // done by an earlier run
}

// EventKind says what an Event tells.
type EventKind string

// The events of a run, in the order in which they come.
const (
	EventPlanned  EventKind = "planned"
	EventStarted  EventKind = "frame_started"
	EventFinished EventKind = "frame_finished"
	EventWritten  EventKind = "results_written"
)

// Summary counts what became of the frames of a run.
type Summary struct {
	Searched, SetAside, Failed int
	Skipped                    int // of these, done by an earlier run
	Candidates                 int
	Likely                     int      // with real_probability of at least one half
	Folders                    []string // where tables and reports are
}

// Options of a run that do not change its results.
type Options struct {
	Jobs      int     // frames at once; 0: one for each core
	MemoryGiB float64 // bound for the frames in flight; 0: half of the machine's
	Version   string
	Observe   func(Event) // may be nil; called from one goroutine at a time

	search searcher // in place of the stages, for tests
}

// Loose describes a run on loose frames, without a survey folder.
type Loose struct {
	Frames    []string // files or folders
	Reference string
	Out       string
	Config    Config
}

// engine runs tasks.
type engine struct {
	version     string
	digest      string
	keep        string
	compression fits.Compression // of products
	efficiency  int              // sources put into each frame; 0: none
	keywords    load.Keywords
	stages      stages
	references  *referenceCache
	known       standardStars
	jobs        int
	observe     func(Event)
	search      searcher
}

// searcher sends one frame through the stages: it writes the products to keep
// and fills the outcome's record.
type searcher func(ctx context.Context, e *engine, t *Task, out *outcome) ([]detect.Candidate, error)

func newEngine(c *Config, o Options, tasks []*Task) (*engine, error) {
	k, err := c.LoadKeywords()
	if err != nil {
		return nil, err
	}
	jobs := o.Jobs
	if jobs == 0 {
		jobs = c.Run.Jobs
	}
	cores := runtime.GOMAXPROCS(0)
	if jobs <= 0 {
		jobs = cores
	}
	jobs = min(jobs, max(1, len(tasks)))
	budget := o.MemoryGiB
	if budget == 0 {
		budget = c.Run.MemoryGiB
	}
	jobs = min(jobs, jobsInMemory(budget, tasks))
	workers := max(1, cores/jobs)
	e := &engine{version: o.Version, digest: c.Digest(), keep: c.Search.Keep, compression: c.compression(), efficiency: c.Search.Efficiency, keywords: k, jobs: jobs,
		stages: c.stages(workers), observe: o.Observe, search: o.search}
	if e.search == nil {
		e.search = search
	}
	if e.observe == nil {
		e.observe = func(Event) {}
	}
	e.references = newReferenceCache(jobs, k, e.stages.align)
	if c.Photometry.Catalogue != "" && !allDone(tasks, e) {
		if e.known, err = c.standardStars(); err != nil {
			return nil, err
		}
	}
	return e, nil
}

// planesOfPair is the memory that one pair takes at most, in float32 planes,
// and planesOfReference what its prepared reference adds.
const (
	planesOfPair      = 16
	planesOfReference = 3
)

// jobsInMemory returns how many frames fit into the budget [GiB] at once,
// judged by the largest file among a sample of the tasks; at least one.
func jobsInMemory(budget float64, tasks []*Task) int {
	if budget <= 0 {
		budget = 0.5 * MachineGiB()
	}
	if budget <= 0 {
		return len(tasks) + 1
	}
	largest := 0.0
	step := max(1, len(tasks)/50)
	for i := 0; i < len(tasks); i += step {
		largest = max(largest, tasks[i].pixels)
	}
	if largest == 0 {
		return len(tasks) + 1
	}
	each := largest * 4 * (planesOfPair + planesOfReference) / (1 << 30)
	return max(1, int(budget/each))
}

// MachineGiB returns the memory of this machine, or 0 when it cannot be told.
func MachineGiB() float64 {
	data, err := os.ReadFile("/proc/meminfo")
	if err != nil {
		return 0
	}
	var kib float64
	if _, err := fmt.Sscanf(string(data), "MemTotal: %f kB", &kib); err != nil {
		return 0
	}
	return kib / (1 << 20)
}

// RunLoose searches loose frames against one reference.
func RunLoose(ctx context.Context, l Loose, o Options) (Summary, error) {
	k, err := l.Config.LoadKeywords()
	if err != nil {
		return Summary{}, &ConfigError{err.Error()}
	}
	files, err := ExpandFrames(l.Frames, k)
	if err != nil {
		return Summary{}, err
	}
	if len(files) == 0 {
		return Summary{}, &ConfigError{"no frames: name FITS files, or folders that hold some"}
	}
	if _, err := os.Stat(bareName(l.Reference)); err != nil {
		return Summary{}, &ConfigError{fmt.Sprintf("reference %s: %v", l.Reference, err)}
	}
	if err := os.MkdirAll(l.Out, 0o755); err != nil {
		return Summary{}, fmt.Errorf("output folder: %w", err)
	}
	held, err := takeLock(l.Out, lockName, exclusive)
	if err != nil {
		return Summary{}, err
	}
	defer held.release()
	cleanUp(l.Out)
	var tasks []*Task
	for _, f := range files {
		t, _, err := newTask(f, k, l.Config.Survey.LongitudeDeg)
		if err != nil {
			return Summary{}, err
		}
		t.Reference = l.Reference
		tasks = append(tasks, t)
	}
	placeTasks(tasks, l.Out, func(*Task) string { return l.Out })
	e, err := newEngine(&l.Config, o, tasks)
	if err != nil {
		return Summary{}, err
	}
	if !allDone(tasks, e) {
		// One reference serves all: without it nothing can be done.
		_, release, err := e.references.get(ctx, l.Reference)
		if err != nil {
			return Summary{}, fmt.Errorf("reference %s: %w", l.Reference, err)
		}
		release()
	}
	sum, err := e.run(ctx, tasks, nil)
	if err != nil {
		return sum, err
	}
	if err := collect(l.Out, "Frames against "+filepath.Base(l.Reference), o.Version, &binder{}); err != nil {
		return sum, err
	}
	sum.Folders = []string{l.Out}
	e.observe(Event{Kind: EventWritten, Detail: l.Out})
	return sum, nil
}

func allDone(tasks []*Task, e *engine) bool {
	for _, t := range tasks {
		if t.done(e.version, e.digest, e.keep) == nil {
			return false
		}
	}
	return true
}

// run works through the tasks, several at once. record, when given, is called
// for each finished frame, those of earlier runs included, one at a time and
// never concurrently.
func (e *engine) run(ctx context.Context, tasks []*Task, record func(*outcome) error) (Summary, error) {
	var sum Summary
	e.observe(Event{Kind: EventPlanned, Total: len(tasks)})
	// Frames that share a reference are worked on together, so that it is read
	// and prepared once.
	order := append([]*Task(nil), tasks...)
	sort.SliceStable(order, func(a, b int) bool { return order[a].Reference < order[b].Reference })

	type message struct {
		started bool
		skipped bool
		outcome outcome
	}
	messages := make(chan message)
	group, ctx := errgroup.WithContext(ctx)
	queue := make(chan *Task)
	group.Go(func() error {
		defer close(queue)
		for _, t := range order {
			select {
			case queue <- t:
			case <-ctx.Done():
				return ctx.Err()
			}
		}
		return nil
	})
	send := func(m message) error {
		select {
		case messages <- m:
			return nil
		case <-ctx.Done():
			return ctx.Err()
		}
	}
	workers, workersCtx := errgroup.WithContext(ctx)
	for range e.jobs {
		workers.Go(func() error {
			for t := range queue {
				if r := t.done(e.version, e.digest, e.keep); r != nil {
					if err := send(message{skipped: true, outcome: outcome{task: t, receipt: *r}}); err != nil {
						return err
					}
					continue
				}
				if err := send(message{started: true, outcome: outcome{task: t}}); err != nil {
					return err
				}
				out, err := e.process(workersCtx, t)
				if err != nil {
					return err
				}
				if err := send(message{outcome: out}); err != nil {
					return err
				}
			}
			return nil
		})
	}
	group.Go(func() error {
		defer close(messages)
		return workers.Wait()
	})
	group.Go(func() error {
		done := 0
		for m := range messages {
			t := m.outcome.task
			if m.started {
				e.observe(Event{Kind: EventStarted, Total: len(tasks), Done: done, Frame: t.Name})
				continue
			}
			done++
			r := &m.outcome.receipt
			switch r.Record.Status {
			case catalog.Searched:
				sum.Searched++
			case catalog.SetAside:
				sum.SetAside++
			default:
				sum.Failed++
			}
			if m.skipped {
				sum.Skipped++
			}
			sum.Candidates += r.Record.Candidates
			sum.Likely += r.Likely
			if record != nil {
				if err := record(&m.outcome); err != nil {
					return err
				}
			}
			e.observe(Event{Kind: EventFinished, Total: len(tasks), Done: done, Frame: t.Name, Status: r.Record.Status,
				Reason: r.Record.Reason, Detail: r.Record.Detail, Count: r.Record.Candidates, Seconds: r.Record.Seconds, Skipped: m.skipped})
		}
		return nil
	})
	err := group.Wait()
	return sum, err
}

// ExpandFrames returns the FITS files among files and in folders, sorted, each
// once. A file of several image extensions is expanded into one entry for
// each. A folder's files are chosen by their ending, hidden ones left out; a file
// named outright is taken whatever it is called.
func ExpandFrames(paths []string, k load.Keywords) ([]string, error) {
	seen := map[string]bool{}
	var out []string
	add := func(p string) {
		for _, f := range extensions(p, k) {
			if !seen[f] {
				seen[f] = true
				out = append(out, f)
			}
		}
	}
	for _, p := range paths {
		info, err := os.Stat(p)
		if err != nil {
			if errors.Is(err, fs.ErrNotExist) && strings.HasSuffix(p, "]") {
				add(p)
				continue
			}
			return nil, &ConfigError{err.Error()}
		}
		if !info.IsDir() {
			add(p)
			continue
		}
		err = filepath.WalkDir(p, func(path string, d fs.DirEntry, err error) error {
			if err != nil {
				return err
			}
			hidden := strings.HasPrefix(d.Name(), ".") && path != p
			if d.IsDir() {
				if hidden {
					return fs.SkipDir
				}
				return nil
			}
			if !hidden && load.IsFrameName(d.Name()) {
				add(path)
			}
			return nil
		})
		if err != nil {
			return nil, err
		}
	}
	sort.Strings(out)
	return out, nil
}

// extensions lists the frames in one file. A file that cannot be read stays in
// the list under its own name: it is set aside with the reason.
func extensions(path string, k load.Keywords) []string {
	if bareName(path) != path {
		return []string{path}
	}
	names, err := k.List(path)
	if err != nil || len(names) < 2 {
		return []string{path}
	}
	for i, n := range names {
		names[i] = path + "[" + n + "]"
	}
	return names
}
