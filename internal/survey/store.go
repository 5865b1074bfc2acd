package survey

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"time"

	"nightsift/catalog"
	"nightsift/detect"
)

// StorePath returns the path of the catalogue's file, or the URL of its server
// as it may be shown.
func (f *Folder) StorePath() string { return catalog.Display(f.storePlace()) }

// storePlace is the file or the URL.
func (f *Folder) storePlace() string {
	if catalog.IsServer(f.Config.Folders.Store) {
		return f.Config.Folders.Store
	}
	return f.path(f.Config.Folders.Store)
}

func (f *Folder) storeConfig() catalog.Config {
	c := catalog.DefaultConfig()
	c.Prefix = f.Config.Survey.Prefix
	return c
}

// OpenStore opens the catalogue, and makes it when there is none.
func (f *Folder) OpenStore(ctx context.Context) (*catalog.Store, error) {
	return catalog.Open(ctx, f.storePlace(), f.storeConfig())
}

// ReadStore opens the catalogue for reading. The error is catalog.ErrAbsent when
// there is none.
func (f *Folder) ReadStore(ctx context.Context) (*catalog.Store, error) {
	return catalog.OpenReadOnly(ctx, f.storePlace(), f.storeConfig())
}

// UnfinishedError tells that all frames were searched and their results written,
// but that something beside them was not done; the next run makes up for it.
type UnfinishedError struct{ err error }

func (e *UnfinishedError) Error() string { return e.err.Error() }

// Unwrap returns the cause.
func (e *UnfinishedError) Unwrap() error { return e.err }

// clerk enters frames into the catalogue and keeps those for later that it does
// not take, so that a broken or locked catalogue does not end the night: their
// results are in their folders.
type clerk struct {
	later []func(context.Context) error
	since time.Time // of the last failure that took long
}

// The clerk does not ask a catalogue that made it wait for longer than slow
// again before pause is over.
const (
	slow  = 5 * time.Second
	pause = time.Minute
)

// do runs a step now or keeps it for later. drop is called before it is kept: what
// the folder's files say as well need not stay in memory.
func (c *clerk) do(ctx context.Context, step func(context.Context) error, drop func()) error {
	keep := func() {
		drop()
		c.later = append(c.later, step)
	}
	if !c.since.IsZero() && time.Since(c.since) < pause {
		keep()
		return nil
	}
	start := time.Now()
	err := step(ctx)
	if err == nil || ctx.Err() != nil {
		return err
	}
	keep()
	if time.Since(start) > slow {
		c.since = time.Now()
	}
	return nil
}

// finish tries what was kept once more. The error says how many frames the
// catalogue still does not have.
func (c *clerk) finish(ctx context.Context) error {
	failed := 0
	var first error
	for _, step := range c.later {
		start := time.Now()
		err := step(ctx)
		if ctx.Err() != nil {
			return ctx.Err()
		}
		if err == nil {
			continue
		}
		if failed++; first == nil {
			first = err
		}
		if time.Since(start) > slow { // the rest would wait as long
			failed = len(c.later)
			break
		}
	}
	if failed == 0 {
		return nil
	}
	return &UnfinishedError{fmt.Errorf("the frames' results are written, but of %d frames at most the catalogue did not take %d: run again when this is mended: %w", len(c.later), failed, first)}
}

// enter puts a frame into the catalogue, unless it is there.
func enter(ctx context.Context, store *catalog.Store, out *outcome) error {
	rec := out.receipt.Record
	rec.Frame = out.task.key()
	known, err := store.Frames(ctx, catalog.FrameQuery{Frame: rec.Frame})
	if err != nil {
		return err
	}
	if len(known) == 1 && sameRecord(known[0], rec) {
		return nil
	}
	found := out.candidates
	if found == nil && rec.Status == catalog.Searched {
		if found, err = detect.ReadTable(filepath.Join(out.task.Dir, candidatesName)); err != nil {
			return fmt.Errorf("%w; remove its folder and run again", err)
		}
	}
	// The night is to be collected again: what that says of this frame must reach
	// the catalogue, even if this run ends before.
	if err := os.Remove(filepath.Join(filepath.Dir(out.task.Dir), collectedName)); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	return store.AddFrame(ctx, rec, under(rec.Frame, found))
}

// enterJudged brings what a night's collection changed, the kinds of movers and
// what repeats on the detector, into the catalogue, where it differs. entered is
// false when the catalogue does not hold the frame, or not so.
func enterJudged(ctx context.Context, store *catalog.Store, night string, rec catalog.FrameRecord, candidates []detect.Candidate) (entered bool, err error) {
	rec.Frame = catalogueKey(night, rec.Frame)
	known, err := store.Candidates(ctx, catalog.CandidateQuery{Frame: rec.Frame})
	if err != nil {
		return false, err
	}
	if len(known) != len(candidates) {
		return false, nil // the run tells, and the next one enters it
	}
	type judged struct {
		kind        detect.Kind
		probability float64
	}
	before := make(map[string]judged, len(known))
	for i := range known {
		before[known[i].ID] = judged{known[i].Kind, known[i].RealProbability}
	}
	for i := range candidates {
		c := &candidates[i]
		if b, there := before[c.ID]; !there || b.kind != c.Kind || b.probability != c.RealProbability && !math.IsNaN(c.RealProbability) {
			err := store.AddFrame(ctx, rec, under(rec.Frame, candidates))
			return err == nil, err
		}
	}
	return true, nil
}

// under returns the candidates with the frame's name in the catalogue.
func under(key string, list []detect.Candidate) []detect.Candidate {
	out := append([]detect.Candidate(nil), list...)
	for i := range out {
		out[i].Frame = key
	}
	return out
}

// sameRecord compares all that a receipt says; the catalogue may have filled in
// the frame's scale.
func sameRecord(a, b catalog.FrameRecord) bool {
	a.Jacobian, b.Jacobian = [4]float64{}, [4]float64{}
	x, err1 := json.Marshal(a)
	y, err2 := json.Marshal(b)
	return err1 == nil && err2 == nil && bytes.Equal(x, y)
}

// AddTable puts the candidates of a file into the catalogue and returns the
// numbers of frames and candidates. Of a frame that the catalogue knows only
// the candidates are replaced; of another it knows what the table says.
func (f *Folder) AddTable(ctx context.Context, path, version string) (frames, candidates int, err error) {
	list, err := detect.ReadTable(path)
	if err != nil {
		return 0, 0, err
	}
	store, err := f.OpenStore(ctx)
	if err != nil {
		return 0, 0, err
	}
	defer store.Close()
	byFrame := map[string][]detect.Candidate{}
	var order []string
	for _, c := range list {
		key := catalogueKey(orElse(c.Night, undated), c.Frame)
		if byFrame[key] == nil {
			order = append(order, key)
		}
		byFrame[key] = append(byFrame[key], c)
	}
	for _, key := range order {
		found := byFrame[key]
		known, err := store.Frames(ctx, catalog.FrameQuery{Frame: key})
		if err != nil {
			return frames, candidates, err
		}
		rec := catalog.NewFrameRecord(key, catalog.Searched)
		rec.Filter, rec.MidMJD, rec.Night, rec.Version = found[0].Filter, found[0].MidMJD, orElse(found[0].Night, undated), version
		if len(known) == 1 && known[0].Status == catalog.Searched {
			rec = known[0]
		}
		if err := store.AddFrame(ctx, rec, under(key, found)); err != nil {
			return frames, candidates, fmt.Errorf("%s: %w", path, err)
		}
		frames++
		candidates += len(found)
	}
	return frames, candidates, nil
}
