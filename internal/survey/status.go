package survey

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"sort"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/frame"
)

// NightStatus counts the frames of one night.
type NightStatus struct {
	Night                               string
	Searched, SetAside, Failed, Waiting int
	Candidates, Likely                  int
	NotSearched                         []catalog.FrameRecord // with reason and detail
}

// Status says what has run, what is waiting and what was set aside, by night.
func (f *Folder) Status(version string) ([]NightStatus, error) {
	tasks, err := f.Plan(Selection{})
	if err != nil {
		return nil, err
	}
	byNight := map[string]*NightStatus{}
	digest := f.Config.Digest()
	for _, t := range tasks {
		n := byNight[t.Night]
		if n == nil {
			n = &NightStatus{Night: t.Night}
			byNight[t.Night] = n
		}
		r := t.done(version, digest, f.Config.Search.Keep)
		if r == nil {
			// A failed frame is waiting for another try, but says why it failed.
			if old := readReceipt(t.Dir); old != nil && old.Record.Status == catalog.Failed {
				n.count(old)
			} else {
				n.Waiting++
			}
			continue
		}
		n.count(r)
	}
	// Frames that were searched and then moved away count as well.
	planned := map[string]bool{}
	for _, t := range tasks {
		planned[absolute(t.Dir)] = true
	}
	f.eachResult(func(p place, r *Receipt) {
		if r == nil || planned[absolute(p.dir)] {
			return
		}
		n := byNight[p.night]
		if n == nil {
			n = &NightStatus{Night: p.night}
			byNight[p.night] = n
		}
		n.count(r)
	})
	var nights []NightStatus
	for _, n := range byNight {
		nights = append(nights, *n)
	}
	sort.Slice(nights, func(a, b int) bool { return nights[a].Night < nights[b].Night })
	return nights, nil
}

func (n *NightStatus) count(r *Receipt) {
	switch r.Record.Status {
	case catalog.Searched:
		n.Searched++
		n.Candidates += r.Record.Candidates
		n.Likely += r.Likely
		return
	case catalog.SetAside:
		n.SetAside++
	default:
		n.Failed++
	}
	n.NotSearched = append(n.NotSearched, r.Record)
}

// Finding is one thing that `check` noticed.
type Finding struct {
	Wrong  bool // else a remark
	Place  string
	Text   string
	Remedy string
}

// Check looks over a survey folder and returns everything that it finds, in a
// fixed order: configuration, folders, references, results, catalogue.
func (f *Folder) Check(ctx context.Context, version string) []Finding {
	var found []Finding
	wrong := func(place, remedy, format string, args ...any) {
		found = append(found, Finding{Wrong: true, Place: place, Text: fmt.Sprintf(format, args...), Remedy: remedy})
	}
	remark := func(place, format string, args ...any) {
		found = append(found, Finding{Place: place, Text: fmt.Sprintf(format, args...)})
	}
	for _, d := range []struct{ key, path string }{
		{"incoming", f.Config.Folders.Incoming}, {"references", f.Config.Folders.References},
	} {
		info, err := os.Stat(f.path(d.path))
		switch {
		case errors.Is(err, fs.ErrNotExist):
			wrong(f.path(d.path), "make it, or change folders."+d.key+" in "+ConfigName, "folder %s does not exist", d.key)
		case err != nil:
			wrong(f.path(d.path), "", "%v", err)
		case !info.IsDir():
			wrong(f.path(d.path), "", "%s is not a folder", d.key)
		}
	}
	refs, err := f.References()
	if err != nil {
		wrong(f.path(f.Config.Folders.References), "", "%v", err)
	} else {
		remark(f.path(f.Config.Folders.References), "%d references", len(refs))
	}
	dir := f.path(f.Config.Folders.Nights)
	if _, err := os.ReadDir(dir); err != nil && !errors.Is(err, fs.ErrNotExist) {
		wrong(dir, "", "%v", err)
	}
	done := 0
	nights := map[string]bool{}
	f.eachResult(func(p place, r *Receipt) {
		nights[p.night] = true
		switch {
		case r == nil:
			remark(p.dir, "not finished; the next run does it")
			return
		case r.Version != version:
			remark(p.dir, "made by version %s; the next run makes it anew", r.Version)
		case r.Record.Status == catalog.Searched:
			if list, err := detect.ReadTable(filepath.Join(p.dir, candidatesName)); err != nil {
				wrong(p.dir, "remove this folder and run the night again", "%v", err)
			} else if len(list) != r.Record.Candidates {
				wrong(p.dir, "remove this folder and run the night again", "its table holds %d candidates, its receipt says %d", len(list), r.Record.Candidates)
			}
		}
		done++
	})
	orbits, err := f.orbitsDigest()
	if err != nil {
		wrong(filepath.Join(f.Dir, ConfigName), "name a file that can be read, or none", "%v", err)
	}
	for _, n := range slices.Sorted(maps.Keys(nights)) {
		if !collected(f.nightDir(n), f.nightTitle(n), version, orbits) {
			remark(f.nightDir(n), "tables and report are not up to date; the next run over this night writes them")
		}
	}
	remark(dir, "%d frames done", done)
	s, err := f.ReadStore(ctx)
	switch {
	case errors.Is(err, catalog.ErrAbsent):
		remark(f.StorePath(), "no catalogue yet; the first run makes it")
	case err != nil:
		wrong(f.StorePath(), "", "%v", err)
	default:
		defer s.Close()
		faults, err := s.Check(ctx)
		switch {
		case err != nil:
			wrong(f.StorePath(), "", "%v", err)
		case len(faults) == 0:
			remark(f.StorePath(), "sound")
		}
		for _, fault := range faults {
			wrong(f.StorePath(), fault.Remedy, "%s: %s", fault.Place, fault.Problem)
		}
	}
	return found
}

// problemOf returns the frame's own fault in an error, if it is one.
func problemOf(err error) *frame.Problem {
	var p *frame.Problem
	if errors.As(err, &p) {
		return p
	}
	return nil
}
