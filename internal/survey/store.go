package survey

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"path/filepath"

	"nightsift/catalog"
	"nightsift/detect"
)

// StorePath returns the path of the catalogue.
func (f *Folder) StorePath() string { return f.path(f.Config.Folders.Store) }

func (f *Folder) storeConfig() catalog.Config {
	c := catalog.DefaultConfig()
	c.Prefix = f.Config.Survey.Prefix
	return c
}

// OpenStore opens the catalogue, and makes it when there is none.
func (f *Folder) OpenStore(ctx context.Context) (*catalog.Store, error) {
	return catalog.Open(ctx, f.StorePath(), f.storeConfig())
}

// ReadStore opens the catalogue for reading.
func (f *Folder) ReadStore(ctx context.Context) (*catalog.Store, error) {
	return catalog.OpenReadOnly(ctx, f.StorePath(), f.storeConfig())
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
	return store.AddFrame(ctx, rec, under(rec.Frame, found))
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
