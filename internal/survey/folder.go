package survey

import (
	"context"
	"errors"
	"fmt"
	"hash/fnv"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"sort"
	"strings"
	"sync"
	"time"

	"nightsift/catalog"
	"nightsift/configs"
	"nightsift/detect"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/wholefile"
)

// Selection says which frames of a survey a run looks at.
type Selection struct {
	Frames []string // files or folders; empty: the incoming folder
	Night  string   // YYYY-MM-DD; empty: every night
	Shard  int      // 1-based; 0: all frames
	Shards int
}

// Folder is an opened survey.
type Folder struct {
	Dir    string
	Config Config
}

// OpenFolder reads the configuration of a survey folder.
func OpenFolder(dir string) (*Folder, error) {
	c, err := LoadConfig(dir)
	if err != nil {
		return nil, err
	}
	return &Folder{Dir: dir, Config: c}, nil
}

// path returns a configured path, relative to the survey folder unless it is
// absolute.
func (f *Folder) path(p string) string {
	if filepath.IsAbs(p) {
		return p
	}
	return filepath.Join(f.Dir, p)
}

// Reference is one deep frame of the survey.
type Reference struct {
	Path, Field, Filter string
}

// References lists the references by what their headers say. Two for one
// field and filter, or one without a field, are an error that names them.
func (f *Folder) References() ([]Reference, error) {
	dir := f.path(f.Config.Folders.References)
	k, err := f.Config.LoadKeywords()
	if err != nil {
		return nil, err
	}
	files, err := ExpandFrames([]string{dir}, k)
	if err != nil {
		return nil, err
	}
	var refs []Reference
	at := map[[2]string]string{}
	for _, file := range files {
		h, err := load.Describe(file, k)
		if err != nil {
			return nil, &ConfigError{fmt.Sprintf("reference %s: %v", file, err)}
		}
		if h.Meta.Field == "" {
			return nil, &ConfigError{fmt.Sprintf("reference %s: its header names no field (tried %s); add the keyword, or name another under [keywords] field in %s",
				file, strings.Join(k.Field, ", "), ConfigName)}
		}
		key := [2]string{canonical(h.Meta.Field), canonical(h.Meta.Filter)}
		if other, ok := at[key]; ok {
			return nil, &ConfigError{fmt.Sprintf("references %s and %s are both of field %q, filter %q: keep one", other, file, h.Meta.Field, h.Meta.Filter)}
		}
		at[key] = file
		refs = append(refs, Reference{Path: file, Field: h.Meta.Field, Filter: h.Meta.Filter})
	}
	return refs, nil
}

// canonical compares names without regard to case and spaces.
func canonical(s string) string { return strings.ToLower(strings.Join(strings.Fields(s), " ")) }

// Plan lists the tasks of a selection with their references.
func (f *Folder) Plan(s Selection) ([]*Task, error) {
	refs, err := f.References()
	if err != nil {
		return nil, err
	}
	paths := s.Frames
	if len(paths) == 0 {
		paths = []string{f.path(f.Config.Folders.Incoming)}
	}
	k, err := f.Config.LoadKeywords()
	if err != nil {
		return nil, err
	}
	files, err := ExpandFrames(paths, k)
	if err != nil {
		return nil, err
	}
	tasks := make([]*Task, 0, len(files))
	for _, file := range files {
		t, meta, err := newTask(file, k, f.Config.Survey.LongitudeDeg)
		if err != nil {
			return nil, err
		}
		if t.Problem == nil {
			t.Reference, t.Problem = pick(refs, meta, f.Config.Search.AnyFilter)
		}
		tasks = append(tasks, t)
	}
	nights := f.path(f.Config.Folders.Nights)
	placeTasks(tasks, f.Dir, func(t *Task) string { return filepath.Join(nights, t.Night) })
	kept := tasks[:0]
	for _, t := range tasks {
		if s.Night != "" && t.Night != s.Night {
			continue
		}
		if s.Shards > 0 && shardOf(t.Name, s.Shards) != s.Shard-1 {
			continue
		}
		kept = append(kept, t)
	}
	return kept, nil
}

// pick finds the reference of a frame by field and filter.
func pick(refs []Reference, m frame.Meta, anyFilter bool) (string, *frame.Problem) {
	if m.Field == "" {
		return "", frame.Problemf(frame.ProblemMissingKeyword, "the header names no field, so no reference can be chosen; map the keyword under [keywords] field in %s", ConfigName)
	}
	field, filter := canonical(m.Field), canonical(m.Filter)
	var others []string
	for _, r := range refs {
		if canonical(r.Field) != field {
			continue
		}
		if canonical(r.Filter) == filter || (anyFilter && len(others) == 0) {
			return r.Path, nil
		}
		others = append(others, fmt.Sprintf("%q", r.Filter))
	}
	if len(others) > 0 {
		return "", frame.Problemf(frame.ProblemNoReference, "field %q has references in filter %s, none in %q", m.Field, strings.Join(others, ", "), m.Filter)
	}
	return "", frame.Problemf(frame.ProblemNoReference, "no reference for field %q, filter %q", m.Field, m.Filter)
}

// shardOf spreads frames over shards by their name, so that several machines
// agree without talking.
func shardOf(name string, shards int) int {
	h := fnv.New32a()
	io.WriteString(h, name)
	return int(h.Sum32() % uint32(shards))
}

// Run searches the frames of a selection that are not done yet, and brings
// catalogue, tables and reports up to date.
//
// What is true at any time, also after a kill: a frame's folder with a receipt
// holds all of its results; the catalogue holds a frame with all of its
// candidates or not at all; tables and reports are whole. What the next run
// repairs: receipts that are not in the catalogue yet, tables and reports that
// do not show them yet, folders without a receipt.
func (f *Folder) Run(ctx context.Context, s Selection, o Options) (Summary, error) {
	// Shards may work side by side, but not beside a run over everything.
	mode := exclusive
	if s.Shards > 0 {
		mode = shared
		held, err := takeLock(f.Dir, fmt.Sprintf("%s-%d-of-%d", lockName, s.Shard, s.Shards), exclusive)
		if err != nil {
			return Summary{}, err
		}
		defer held.release()
	}
	held, err := takeLock(f.Dir, lockName, mode)
	if err != nil {
		return Summary{}, err
	}
	defer held.release()
	tasks, err := f.Plan(s)
	if err != nil {
		return Summary{}, err
	}
	return f.runTasks(ctx, tasks, o)
}

func (f *Folder) runTasks(ctx context.Context, tasks []*Task, o Options) (Summary, error) {
	store, err := f.OpenStore(ctx)
	if err != nil {
		return Summary{}, err
	}
	defer store.Close()
	e, err := newEngine(&f.Config, o, tasks)
	if err != nil {
		return Summary{}, err
	}
	nights := map[string]bool{}
	for _, t := range tasks {
		nights[t.Night] = true
	}
	old := f.superseded(tasks)
	var clerk clerk
	step := func(ctx context.Context, out *outcome) error {
		if err := enter(ctx, store, out); err != nil {
			return err
		}
		for _, o := range old[out.task] {
			// First the catalogue, then the folder: a kill in between leaves
			// a folder that the next run finds again.
			if _, err := store.RemoveFrame(ctx, catalogueKey(o.night, o.name)); err != nil {
				return err
			}
			if err := os.RemoveAll(o.dir); err != nil {
				return err
			}
			nights[o.night] = true
		}
		return nil
	}
	sum, err := e.run(ctx, tasks, func(out *outcome) error {
		kept := *out
		return clerk.do(ctx, func(ctx context.Context) error { return step(ctx, &kept) }, func() { kept.candidates = nil })
	})
	if err != nil {
		return sum, err
	}
	unfinished := clerk.finish(ctx)
	if ctx.Err() != nil {
		return sum, errors.Join(unfinished, ctx.Err())
	}
	// Orbits that cannot be read leave minor planets without a name, no night
	// without its tables.
	orbits, err := f.orbitsDigest()
	finder := sync.OnceValues(f.moverFinder)
	noOrbits := func(err error) {
		if unfinished == nil {
			unfinished = &UnfinishedError{fmt.Errorf("everything was searched and written, but minor planets are not named: run again when this is mended: %w", err)}
		}
	}
	if err != nil {
		noOrbits(err)
		orbits, finder = "", func() (*moverFinder, error) { return nil, nil }
	}
	for n := range nights {
		dir := f.nightDir(n)
		if _, err := os.Stat(dir); err != nil {
			continue
		}
		changed, err := collectChanged(dir, f.nightTitle(n), o.Version, &binder{digest: orbits,
			movers: func() *moverFinder {
				m, err := finder()
				if err != nil {
					noOrbits(err)
				}
				return m
			},
			enter: func(rec catalog.FrameRecord, candidates []detect.Candidate) bool {
				entered, err := enterJudged(ctx, store, n, rec, candidates)
				if err != nil && unfinished == nil {
					unfinished = &UnfinishedError{fmt.Errorf("the night's tables are written, but the catalogue did not take what they say of movers and repeated places: run again when this is mended: %w", err)}
				}
				return entered
			}})
		if err != nil {
			return sum, err
		}
		cleanUp(dir)
		sum.Folders = append(sum.Folders, dir)
		if changed {
			e.observe(Event{Kind: EventWritten, Detail: dir})
		}
	}
	sort.Strings(sum.Folders)
	return sum, unfinished
}

func (f *Folder) nightTitle(night string) string { return f.Config.Survey.Name + ", night of " + night }

func (f *Folder) nightDir(night string) string {
	return filepath.Join(f.path(f.Config.Folders.Nights), night)
}

// place is a frame's folder from an earlier run.
type place struct{ dir, night, name string }

// superseded lists, for each task, other folders with results of the same file:
// its night changed with its header or with the configuration, or its name.
func (f *Folder) superseded(tasks []*Task) map[*Task][]place {
	byPath := make(map[string]*Task, len(tasks))
	for _, t := range tasks {
		byPath[absolute(t.Path)] = t
	}
	old := map[*Task][]place{}
	f.eachResult(func(p place, r *Receipt) {
		if r == nil {
			return
		}
		if t := byPath[r.Frame.Path]; t != nil && absolute(t.Dir) != absolute(p.dir) {
			old[t] = append(old[t], p)
		}
	})
	return old
}

// eachResult calls visit for every frame's folder of the survey, with its
// receipt or nil.
func (f *Folder) eachResult(visit func(place, *Receipt)) {
	nights, _ := os.ReadDir(f.path(f.Config.Folders.Nights))
	for _, n := range nights {
		if !n.IsDir() {
			continue
		}
		frames, _ := os.ReadDir(f.nightDir(n.Name()))
		for _, e := range frames {
			if e.IsDir() {
				dir := filepath.Join(f.nightDir(n.Name()), e.Name())
				visit(place{dir, n.Name(), e.Name()}, readReceipt(dir))
			}
		}
	}
}

// Watch looks for new frames at every interval and runs when there are some,
// until the context ends. A frame still being copied is left alone: a run
// starts only when nothing changed between two looks. after is told of every run;
// one that ends with an *UnfinishedError is made up for at the next look.
func (f *Folder) Watch(ctx context.Context, s Selection, o Options, every time.Duration, after func(Summary, error)) error {
	paths := s.Frames
	if len(paths) == 0 {
		paths = []string{f.path(f.Config.Folders.Incoming)}
	}
	k, err := f.Config.LoadKeywords()
	if err != nil {
		return err
	}
	var last, processed string
	for {
		files, err := ExpandFrames(paths, k)
		if err != nil {
			return err
		}
		var look strings.Builder
		for _, file := range files {
			state := stateOf(file)
			fmt.Fprintln(&look, state.Path, state.Size, state.Modified)
		}
		if now := look.String(); now == last && now != processed {
			sum, err := f.Run(ctx, s, o)
			if unfinished := (*UnfinishedError)(nil); err != nil && (ctx.Err() != nil || !errors.As(err, &unfinished)) {
				return err
			}
			after(sum, err)
			if err == nil {
				processed = now
			}
		} else {
			last = now
		}
		select {
		case <-ctx.Done():
			return ctx.Err()
		case <-time.After(every):
		}
	}
}

// Init makes a survey folder with a commented configuration. An existing
// configuration is left as it is and reported as an error.
func Init(dir string) error {
	path := filepath.Join(dir, ConfigName)
	if _, err := os.Stat(path); err == nil {
		return &ConfigError{fmt.Sprintf("%s exists already; nothing was changed", path)}
	} else if !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	c := DefaultConfig()
	for _, d := range []string{c.Folders.Incoming, c.Folders.References, c.Folders.Nights} {
		if err := os.MkdirAll(filepath.Join(dir, d), 0o755); err != nil {
			return err
		}
	}
	return wholefile.Write(path, func(w io.Writer) error {
		_, err := io.WriteString(w, configs.Survey)
		return err
	})
}
