package survey

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"os"
	"path/filepath"
	"sort"
	"time"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/report"
	"nightsift/internal/tracklets"
	"nightsift/internal/wholefile"
)

// Names of the tables and the report of a folder of frames.
const (
	CandidatesFITS = "candidates.fits"
	CandidatesCSV  = "candidates.csv"
	FramesCSV      = "frames.csv"
	ReportName     = "report.html"

	// collectedName holds the digest of the receipts that the tables show.
	collectedName = ".collected"
)

// binder is what a survey adds to the collection of a night. The zero value adds
// nothing.
type binder struct {
	digest string              // of the orbits
	movers func() *moverFinder // nil, or gives nil, without orbits
	// enter brings what the collection says of a frame's candidates into the
	// catalogue, and reports whether it is there now; may be nil.
	enter func(rec catalog.FrameRecord, candidates []detect.Candidate) bool
}

// collectChanged does what collect does, unless the tables show the receipts as
// they are.
func collectChanged(dir, title, version string, b *binder) (changed bool, err error) {
	if collected(dir, title, version, b.digest) {
		return false, nil
	}
	return true, collect(dir, title, version, b)
}

// collected reports whether the tables are there and show all receipts.
func collected(dir, title, version, orbits string) bool {
	for _, name := range []string{CandidatesFITS, CandidatesCSV, FramesCSV, TrackletsCSV, MoversCSV, ReportName} {
		if _, err := os.Stat(filepath.Join(dir, name)); err != nil {
			return false
		}
	}
	mark, err := os.ReadFile(filepath.Join(dir, collectedName))
	if err != nil {
		return false
	}
	now, err := digestOf(dir, title, version, orbits)
	return err == nil && string(mark) == now
}

// digestOf identifies the receipts in a folder and the orbits of minor planets.
func digestOf(dir, title, version, orbits string) (string, error) {
	entries, err := os.ReadDir(dir)
	if err != nil {
		return "", err
	}
	h := sha256.New()
	fmt.Fprintf(h, "%q %q %q\n", title, version, orbits)
	for _, entry := range entries {
		if !entry.IsDir() {
			continue
		}
		if data, err := os.ReadFile(filepath.Join(dir, entry.Name(), ReceiptName)); err == nil {
			fmt.Fprintf(h, "%q %d\n", entry.Name(), len(data))
			h.Write(data)
		}
	}
	return hex.EncodeToString(h.Sum(nil)) + "\n", nil
}

// collect joins the results of all frames in a folder into one table of
// candidates, one of frames and a report. Each is replaced whole. Runs that
// share the folder take turns, so that the last one shows everything.
func collect(dir, title, version string, b *binder) error {
	held, err := lockFolder(dir)
	if err != nil {
		return err
	}
	defer held.release()
	digest, err := digestOf(dir, title, version, b.digest)
	if err != nil {
		return err
	}
	receipts, candidates, err := results(dir)
	if err != nil {
		return err
	}
	records := make([]catalog.FrameRecord, len(receipts))
	for i, r := range receipts {
		records[i] = r.Record
	}
	var finder *moverFinder
	if b.movers != nil {
		finder = b.movers()
	}
	found := judgeNight(records, candidates, finder)
	if err := tracklets.WriteCSV(filepath.Join(dir, TrackletsCSV), found.tracklets, found.linked); err != nil {
		return err
	}
	if err := catalog.WriteCSV(filepath.Join(dir, MoversCSV), MoverSheet(found.list)); err != nil {
		return err
	}
	if err := detect.WriteTable(filepath.Join(dir, CandidatesFITS), candidates); err != nil {
		return err
	}
	if err := catalog.WriteCandidatesCSV(filepath.Join(dir, CandidatesCSV), candidates); err != nil {
		return err
	}
	if err := catalog.WriteFramesCSV(filepath.Join(dir, FramesCSV), records); err != nil {
		return err
	}
	measured, err := nightEfficiency(dir, receipts)
	if err != nil { // no reason to do without a report
		measured = &report.Efficiency{Sentence: fmt.Sprintf("What was missed cannot be shown: %v.", err)}
	}
	if err := report.Write(filepath.Join(dir, ReportName), report.Input{Title: title, Version: version, Frames: records, Candidates: candidates, Efficiency: measured, Known: found.names()}); err != nil {
		return err
	}
	if b.enter != nil {
		byFrame := map[string][]detect.Candidate{}
		for _, c := range candidates {
			byFrame[c.Frame] = append(byFrame[c.Frame], c)
		}
		entered := true
		for _, r := range records {
			if r.Status == catalog.Searched {
				entered = b.enter(r, byFrame[r.Frame]) && entered
			}
		}
		if !entered {
			return nil // the next run collects once more
		}
	}
	return wholefile.WriteBytes(filepath.Join(dir, collectedName), []byte(digest))
}

// results reads the receipts and candidates of all frames in a folder, in the
// order of time, then of name.
func results(dir string) ([]*Receipt, []detect.Candidate, error) {
	entries, err := os.ReadDir(dir)
	if err != nil {
		return nil, nil, err
	}
	var receipts []*Receipt
	for _, entry := range entries {
		if !entry.IsDir() {
			continue
		}
		if r := readReceipt(filepath.Join(dir, entry.Name())); r != nil && r.Record.Frame == entry.Name() {
			receipts = append(receipts, r)
		}
	}
	sort.SliceStable(receipts, func(a, b int) bool {
		x, y := &receipts[a].Record, &receipts[b].Record
		if x.MidMJD != y.MidMJD {
			// Frames without a time come last.
			if x.MidMJD == x.MidMJD || y.MidMJD == y.MidMJD {
				return x.MidMJD < y.MidMJD || y.MidMJD != y.MidMJD
			}
		}
		return x.Frame < y.Frame
	})
	var all []detect.Candidate
	for _, r := range receipts {
		if r.Record.Status != catalog.Searched {
			continue
		}
		path := filepath.Join(dir, r.Record.Frame, candidatesName)
		c, err := detect.ReadTable(path)
		if err != nil {
			return nil, nil, fmt.Errorf("%w; remove its folder and run again", err)
		}
		all = append(all, c...)
	}
	return receipts, all, nil
}

// cleanUp removes what killed runs have left in a folder of frames and in the
// folders in it. It only tidies: what it cannot remove does no harm.
func cleanUp(dir string) {
	const age = time.Hour
	_, _ = wholefile.Clean(dir, age)
	entries, _ := os.ReadDir(dir)
	for _, e := range entries {
		if e.IsDir() {
			_, _ = wholefile.Clean(filepath.Join(dir, e.Name()), age)
		}
	}
}

// ReadResults returns what the frames in a folder of results have given, in the
// order of the tables.
func ReadResults(dir string) ([]catalog.FrameRecord, []detect.Candidate, error) {
	receipts, candidates, err := results(dir)
	records := make([]catalog.FrameRecord, len(receipts))
	for i, r := range receipts {
		records[i] = r.Record
	}
	return records, candidates, err
}
