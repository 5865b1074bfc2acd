package survey

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"sort"
	"strings"

	"nightsift/catalog"
	"nightsift/internal/frame/load"
	"nightsift/internal/reference"
	"nightsift/internal/robust"
	"nightsift/internal/stars"
	"nightsift/internal/wholefile"
)

// LedgerName is the file in the folder of references that keeps their history.
const LedgerName = "ledger.json"

// LedgerEntry is one reference that serves or served a field and filter.
type LedgerEntry struct {
	Field    string   `json:"field"`
	Filter   string   `json:"filter"`
	File     string   `json:"file"` // relative to the folder of references
	Checksum string   `json:"sha256"`
	Version  string   `json:"version,omitempty"` // of the program that built it; empty for one handed in
	Method   string   `json:"method,omitempty"`
	Frames   []string `json:"frames,omitempty"` // names of those in the stack
	Limit    float64  `json:"limit_count"`      // point source at 5 sigma, in its own counts
	MagLimit float64  `json:"limit_mag,omitempty"`
	Current  bool     `json:"current"`
	Nights   []string `json:"nights_searched,omitempty"` // with this very file
}

// ReferenceState says how one field and filter stands.
type ReferenceState struct {
	Field, Filter string
	Offered       int // frames that could be stacked
	Entry         *LedgerEntry
	Former        []LedgerEntry // oldest first

	// Best is the limit [count of the reference] that all searched frames
	// together would reach, and Gain [mag] by how much fainter sources a typical
	// frame's difference would then show. NaN without searched frames.
	Best, Gain float64
	Verdict    string // none, poor or good
	Advice     string // a sentence

	Built *reference.Product // what was built now; nil if nothing was
	Own   int                // frames in what was built that a run over the incoming folder searches too
	Fault string             // why it could not be built
}

// The verdicts on a reference.
const (
	VerdictNone = "none"
	VerdictPoor = "poor"
	VerdictGood = "good"
)

// ReferenceOptions of a survey's references.
type ReferenceOptions struct {
	Version   string
	Build     bool    // build those that are missing
	Improve   bool    // replace those that are poor; the next run then searches their frames anew
	LeastGain float64 // mag of Gain from which a reference is poor
	Frames    []string
	Set       func(*reference.Config) // may be nil
	Parts     string                  // as reference.Config.Parts; a folder is made for each field and filter
}

// SurveyReferences looks over the references of a survey, builds what is
// missing, and brings the ledger up to date. It holds the survey's lock.
func (f *Folder) SurveyReferences(ctx context.Context, o ReferenceOptions) ([]ReferenceState, error) {
	held, err := takeLock(f.Dir, lockName, exclusive)
	if err != nil {
		return nil, err
	}
	defer held.release()
	refs, err := f.References()
	if err != nil {
		return nil, err
	}
	offered, err := f.offered(o.Frames)
	if err != nil {
		return nil, err
	}
	ledger, err := f.readLedger()
	if err != nil {
		return nil, err
	}
	records := f.searchedRecords()
	type key [2]string
	states := map[key]*ReferenceState{}
	at := func(field, filter string) *ReferenceState {
		k := key{canonical(field), canonical(filter)}
		if states[k] == nil {
			states[k] = &ReferenceState{Field: field, Filter: filter, Best: math.NaN(), Gain: math.NaN()}
		}
		return states[k]
	}
	frames := map[*ReferenceState][]string{}
	for _, d := range offered {
		s := at(d.Field, d.Filter)
		s.Offered++
		frames[s] = append(frames[s], d.Path)
	}
	for _, r := range refs {
		e, err := f.entryOf(r, ledger)
		if err != nil {
			return nil, err
		}
		at(r.Field, r.Filter).Entry = e
	}
	for i := range ledger {
		s := at(ledger[i].Field, ledger[i].Filter)
		if s.Entry == nil || s.Entry.Checksum != ledger[i].Checksum {
			old := ledger[i]
			old.Current = false
			s.Former = append(s.Former, old)
		}
	}
	var list []*ReferenceState
	for _, s := range states {
		list = append(list, s)
	}
	sort.Slice(list, func(a, b int) bool {
		if x, y := canonical(list[a].Field), canonical(list[b].Field); x != y {
			return x < y
		}
		return canonical(list[a].Filter) < canonical(list[b].Filter)
	})
	dir := f.path(f.Config.Folders.References)
	for _, s := range list {
		s.judge(records, o.LeastGain)
		s.markNights(records)
		if !(o.Build && s.Verdict == VerdictNone || o.Improve && s.Verdict == VerdictPoor) {
			continue
		}
		if err := f.buildOne(ctx, s, frames[s], dir, o); err != nil {
			return nil, err
		}
	}
	var all []LedgerEntry
	var out []ReferenceState
	for _, s := range list {
		all = append(all, s.Former...)
		if s.Entry != nil {
			s.Entry.Current = true
			all = append(all, *s.Entry)
		}
		out = append(out, *s)
	}
	return out, f.writeLedger(all)
}

// offeredFrame is a frame that may enter a reference.
type offeredFrame struct{ Path, Field, Filter string }

func (f *Folder) offered(paths []string) ([]offeredFrame, error) {
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
	var out []offeredFrame
	for _, file := range files {
		d, err := load.Describe(file, k)
		if problemOf(err) != nil || err == nil && d.Meta.Field == "" {
			continue // a run names these
		} else if err != nil {
			return nil, err
		}
		out = append(out, offeredFrame{file, d.Meta.Field, d.Meta.Filter})
	}
	return out, nil
}

// searched is a frame that was searched, and with which reference.
type searched struct {
	catalog.FrameRecord
	reference string // checksum
}

func (f *Folder) searchedRecords() []searched {
	var out []searched
	f.eachResult(func(p place, r *Receipt) {
		if r != nil && r.Record.Status == catalog.Searched {
			rec := searched{r.Record, r.Reference.Checksum}
			rec.Night = p.night
			out = append(out, rec)
		}
	})
	return out
}

// entryOf describes a reference in place: as the ledger does, or anew.
func (f *Folder) entryOf(r Reference, ledger []LedgerEntry) (*LedgerEntry, error) {
	sum, err := fileChecksum(bareName(r.Path))
	if err != nil {
		return nil, err
	}
	file, err := filepath.Rel(absolute(f.path(f.Config.Folders.References)), absolute(r.Path))
	if err != nil {
		file = r.Path
	}
	for _, e := range ledger {
		if e.Checksum == sum && canonical(e.Field) == canonical(r.Field) && canonical(e.Filter) == canonical(r.Filter) {
			e.File = file
			return &e, nil
		}
	}
	e := &LedgerEntry{Field: r.Field, Filter: r.Filter, File: file, Checksum: sum}
	k, err := f.Config.LoadKeywords()
	if err != nil {
		return nil, err
	}
	img, err := load.Frame(r.Path, k)
	if err != nil {
		return nil, fmt.Errorf("reference %s: %w", r.Path, err)
	}
	c := f.Config.stages(1).align
	bg, err := stars.EstimateBackground(img.Image, img.Flags, c.Background)
	if err != nil {
		return nil, fmt.Errorf("reference %s: %w", r.Path, err)
	}
	found, err := stars.Find(bg.Subtract(nil, img.Image), bg, img.Flags, img.Meta.Gain, c.Stars)
	if err != nil {
		return nil, fmt.Errorf("reference %s: %w", r.Path, err)
	}
	e.Limit = 5 * math.Sqrt(fluxVariance(bg.MedianNoise, found.FWHM))
	if m := img.Meta.ZeroPoint - 2.5*math.Log10(e.Limit); m-m == 0 {
		e.MagLimit = m
	}
	return e, nil
}

// fluxVariance is that of the best flux of a point source on white noise, for
// a Gaussian profile: noise² · 4πσ².
func fluxVariance(noise, fwhm float64) float64 {
	sigma := fwhm / 2.3548
	return noise * noise * 4 * math.Pi * sigma * sigma
}

// judge predicts what a reference of all searched frames would bring. Their
// records hold everything needed, in counts of the reference that they were
// searched with.
func (s *ReferenceState) judge(records []searched, least float64) {
	if s.Entry == nil {
		s.Verdict = VerdictNone
		s.Advice = fmt.Sprintf("no reference; %d frames could give one", s.Offered)
		return
	}
	var variances []float64
	total := 0.0
	for _, r := range records {
		if r.reference != s.Entry.Checksum || !(r.FluxScale > 0) {
			continue
		}
		if v := fluxVariance(r.SkyNoise/r.FluxScale, r.FWHM); v > 0 && !math.IsInf(v, 0) {
			variances = append(variances, v)
			total += 1 / v
		}
	}
	s.Verdict, s.Advice = VerdictGood, "good"
	if len(variances) == 0 {
		s.Advice = "no frame was searched with it yet, so nothing can be said of its depth beside theirs"
		return
	}
	typical := robust.Median(slices.Clone(variances))
	own := s.Entry.Limit * s.Entry.Limit / 25
	s.Best = 5 / math.Sqrt(total)
	s.Gain = 1.25 * math.Log10((typical+own)/(typical+1/total))
	if s.Gain >= least {
		s.Verdict = VerdictPoor
		s.Advice = fmt.Sprintf("one of the %d frames searched with it would show sources fainter by %.2f mag in a typical difference; --improve builds it, and the next run searches the frames anew", len(variances), s.Gain)
	} else {
		s.Advice = fmt.Sprintf("one of the %d frames searched with it would gain %.2f mag", len(variances), max(s.Gain, 0))
	}
}

// markNights notes which nights were searched with which reference.
func (s *ReferenceState) markNights(records []searched) {
	mark := func(e *LedgerEntry) {
		for _, r := range records {
			if r.reference == e.Checksum && !slices.Contains(e.Nights, r.Night) {
				e.Nights = append(e.Nights, r.Night)
			}
		}
		sort.Strings(e.Nights)
	}
	if s.Entry != nil {
		mark(s.Entry)
	}
	for i := range s.Former {
		mark(&s.Former[i])
	}
}

// buildOne builds the reference of one field and filter into its place.
func (f *Folder) buildOne(ctx context.Context, s *ReferenceState, frames []string, dir string, o ReferenceOptions) error {
	name := load.Stem(s.Field + ".fits")
	if s.Filter != "" {
		name += "_" + load.Stem(s.Filter+".fits")
	}
	q := ReferenceRequest{Frames: frames, Out: filepath.Join(dir, name+".fits")}
	if s.Entry != nil {
		q.Out = filepath.Join(dir, s.Entry.File)
		if bareName(q.Out) != q.Out {
			s.Fault = fmt.Sprintf("%s is one of several in its file; move the file away to have it built anew", q.Out)
			return nil
		}
		if s.Entry.Version != "" {
			q.Add = q.Out
		}
	} else if _, err := os.Stat(q.Out); err == nil {
		s.Fault = q.Out + " exists, but its header names another field or filter; move it away"
		return nil
	}
	q.Set = func(c *reference.Config) {
		if o.Parts != "" {
			c.Parts = filepath.Join(o.Parts, name)
		}
		if o.Set != nil {
			o.Set(c)
		}
	}
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return err
	}
	p, err := BuildReference(ctx, q, f.Config, o.Version)
	var few *reference.NoFramesError
	if errors.As(err, &few) || problemOf(err) != nil {
		s.Fault = err.Error()
		return nil
	}
	if err != nil {
		return err
	}
	sum, err := fileChecksum(q.Out)
	if err != nil {
		return err
	}
	if s.Entry != nil {
		old := *s.Entry
		old.Current = false
		s.Former = append(s.Former, old)
	}
	e := &LedgerEntry{Field: s.Field, Filter: s.Filter, File: filepath.Base(q.Out), Checksum: sum, Version: o.Version, Method: p.Method, Limit: p.Limit}
	if s.Entry != nil {
		e.File = s.Entry.File
	}
	if m := p.MagLimit(); m-m == 0 {
		e.MagLimit = m
	}
	incoming := absolute(f.path(f.Config.Folders.Incoming)) + string(filepath.Separator)
	for _, in := range p.Inputs {
		if in.Used {
			e.Frames = append(e.Frames, in.Name)
			if strings.HasPrefix(absolute(in.Path), incoming) {
				s.Own++
			}
		}
	}
	s.Entry, s.Built = e, p
	return nil
}

func (f *Folder) ledgerPath() string {
	return filepath.Join(f.path(f.Config.Folders.References), LedgerName)
}

func (f *Folder) readLedger() ([]LedgerEntry, error) {
	data, err := os.ReadFile(f.ledgerPath())
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	var list []LedgerEntry
	d := json.NewDecoder(bytes.NewReader(data))
	if err := d.Decode(&list); err != nil {
		return nil, fmt.Errorf("%s: %w; it only keeps the history: move it away to start a new one", f.ledgerPath(), err)
	}
	return list, nil
}

func (f *Folder) writeLedger(list []LedgerEntry) error {
	data, err := json.MarshalIndent(list, "", "  ")
	if err != nil {
		return err
	}
	data = append(data, '\n')
	if old, err := os.ReadFile(f.ledgerPath()); err == nil && bytes.Equal(old, data) {
		return nil
	}
	return wholefile.WriteBytes(f.ledgerPath(), data)
}

// fileChecksum is the SHA-256 of a file, as receipts hold it.
func fileChecksum(path string) (string, error) {
	file, err := os.Open(path)
	if err != nil {
		return "", err
	}
	defer file.Close()
	h := sha256.New()
	if _, err := io.Copy(h, file); err != nil {
		return "", fmt.Errorf("%s: %w", path, err)
	}
	return hex.EncodeToString(h.Sum(nil)), nil
}
