// Package catalog keeps what a survey has found: frames, candidates, and the
// objects that candidates of many nights form, in one SQLite file that every
// tool can read.
//
// # What is true at any time
//
// Must:
//   - A frame is in the catalogue with all of its candidates and the objects
//     they form, or not at all: AddFrame is one transaction, synced to disk
//     before it returns.
//   - Adding a frame again replaces what it had. Nothing is doubled.
//   - Objects depend on the set of candidates, not on the order in which frames
//     came: see associate.go for the rule.
//   - A name that an object once had leads to it for ever (or to what took over
//     its detections), also after a rerun changed its founding detection.
//
// Should (Check finds and Rebuild repairs it):
//   - Every summary in table objects is the one that its candidates give.
//
// # Goroutines and processes
//
// A Store may be used by many goroutines. Writers, also of other processes on
// the same machine, take turns; readers see the last committed state and do not
// wait. SQLite's write-ahead log needs a local disk: on a network file system
// locks may not hold.
package catalog

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"math"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"sync"

	_ "modernc.org/sqlite" // the driver

	"nightsift/detect"
)

// Config says which candidates form objects and when two belong together.
type Config struct {
	// FormProbability is the least RealProbability of a candidate that
	// founds or joins an object and moves its position.
	FormProbability float64
	// JoinProbability is the least RealProbability of a candidate that is
	// shown as a detection of an object at its place, but neither founds one
	// nor moves its position. At or above FormProbability it has no effect.
	JoinProbability float64
	// Kinds are the kinds that take part. Movers do not.
	Kinds []detect.Kind
	// ErrorFloor [arcsec] is the systematic position error per axis of one
	// frame, added in quadrature to the measured error.
	ErrorFloor float64
	// MaxError [arcsec] is the largest position error per axis, without the
	// floor, with which a candidate takes part.
	MaxError float64
	// UnknownError [arcsec] is the position error per axis assumed where the
	// frame's scale, or the error in pixels, is not known.
	UnknownError float64
	// MissProbability is the chance that two detections of one source at rest
	// are not joined: the tail of chi-square with two degrees of freedom beyond
	// the limit, exp(-limit/2).
	MissProbability float64
	// Prefix begins every object's designation.
	Prefix string
}

// DefaultConfig returns the values used where survey.toml says nothing.
func DefaultConfig() Config {
	return Config{
		FormProbability: 0.5,
		JoinProbability: 0.1,
		Kinds:           []detect.Kind{detect.NewSource, detect.Brightened, detect.Faded},
		ErrorFloor:      0.2,
		MaxError:        2,
		UnknownError:    0.5,
		MissProbability: 1e-4,
		Prefix:          "NSIFT",
	}
}

// Validate returns an error that names the first value out of range.
func (c *Config) Validate() error {
	in := func(name string, v, low, high float64) error {
		if v >= low && v <= high {
			return nil
		}
		return fmt.Errorf("catalogue configuration: %s = %g: expected %g to %g", name, v, low, high)
	}
	known := make(map[detect.Kind]bool)
	for _, k := range detect.Kinds {
		known[k] = true
	}
	var kinds error
	if len(c.Kinds) == 0 {
		kinds = errors.New("catalogue configuration: no kind forms objects: expected at least one")
	}
	for _, k := range c.Kinds {
		if !known[k] {
			kinds = fmt.Errorf("catalogue configuration: unknown kind %q: expected one of %v", k, detect.Kinds)
		}
	}
	var prefix error
	if strings.TrimSpace(c.Prefix) != c.Prefix || strings.ContainsAny(c.Prefix, "\t\n\r\x00") {
		prefix = fmt.Errorf("catalogue configuration: prefix %q: expected no blank at its ends and no line break", c.Prefix)
	}
	return errors.Join(
		in("form_probability", c.FormProbability, 0, 1),
		in("join_probability", c.JoinProbability, 0, 1),
		in("error_floor_arcsec", c.ErrorFloor, 0.001, 60),
		in("max_error_arcsec", c.MaxError, 0.001, 60),
		in("unknown_error_arcsec", c.UnknownError, 0.001, 60),
		in("miss_probability", c.MissProbability, 1e-12, 0.5),
		kinds, prefix)
}

// limit is the largest chi-square of two positions that are joined.
func (c *Config) limit() float64 { return -2 * math.Log(c.MissProbability) }

// reach [arcsec] is the largest distance at which two positions can be joined.
func (c *Config) reach() float64 {
	return math.Sqrt(c.limit() * 2 * (c.MaxError*c.MaxError + c.ErrorFloor*c.ErrorFloor))
}

func (c *Config) takesPart(k detect.Kind) bool {
	for _, x := range c.Kinds {
		if x == k {
			return true
		}
	}
	return false
}

// String gives the settings on which objects depend, for comparison with those
// kept in the file.
func (c *Config) String() string {
	kinds := make([]string, len(c.Kinds))
	for i, k := range c.Kinds {
		kinds[i] = string(k)
	}
	return fmt.Sprintf("form=%g join=%g kinds=%s floor=%g max=%g unknown=%g miss=%g prefix=%q",
		c.FormProbability, c.JoinProbability, strings.Join(kinds, ","), c.ErrorFloor, c.MaxError, c.UnknownError, c.MissProbability, c.Prefix)
}

// Store is an open catalogue.
type Store struct {
	path     string
	cfg      Config
	readOnly bool
	readers  *sql.DB

	writing sync.Mutex // held during every write transaction of this Store
	writer  *sql.DB    // one connection; nil in a read-only Store
	insert  *sql.Stmt  // prepared on the writer
	stamps  *sql.Stmt
}

// FileName is the customary name of the catalogue in a survey folder.
const FileName = "catalog.sqlite"

// Open opens the catalogue at path for reading and writing, and creates it if
// it is not there. An older schema is brought up to date; a newer one, or a
// file that is no catalogue, is refused with an error that says so. If the
// objects in the file were formed with other settings than cfg, they are formed
// anew.
func Open(ctx context.Context, path string, cfg Config) (*Store, error) {
	if err := cfg.Validate(); err != nil {
		return nil, err
	}
	writer, err := sql.Open("sqlite", source(path, "mode=rwc", "_txlock=immediate", "_pragma=synchronous(FULL)"))
	if err != nil {
		return nil, fmt.Errorf("catalogue %s: %w", path, err)
	}
	writer.SetMaxOpenConns(1)
	s := &Store{path: path, cfg: cfg, writer: writer}
	if err := s.prepare(ctx); err != nil {
		s.Close()
		return nil, explain(path, err)
	}
	return s, nil
}

func (s *Store) prepare(ctx context.Context) error {
	if err := migrate(ctx, s.writer, s.path, migrations); err != nil {
		return err
	}
	// Only now: write-ahead logging changes the file, and a foreign one must
	// not be touched.
	if _, err := s.writer.ExecContext(ctx, "PRAGMA journal_mode = WAL"); err != nil {
		return err
	}
	var err error
	if s.readers, err = sql.Open("sqlite", source(s.path, "mode=ro", "_pragma=query_only(1)")); err != nil {
		return err
	}
	s.readers.SetMaxOpenConns(4)
	if s.insert, err = s.writer.PrepareContext(ctx, insertCandidate); err != nil {
		return err
	}
	if s.stamps, err = s.writer.PrepareContext(ctx, insertStamps); err != nil {
		return err
	}
	var settings string
	err = s.writer.QueryRowContext(ctx, "SELECT value FROM settings WHERE name = 'association'").Scan(&settings)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return err
	}
	if settings != s.cfg.String() {
		return s.Rebuild(ctx)
	}
	return nil
}

// OpenReadOnly opens an existing catalogue for queries and exports. cfg serves
// for figures that depend on the settings, such as Member.FalseMatch.
func OpenReadOnly(ctx context.Context, path string, cfg Config) (*Store, error) {
	if err := cfg.Validate(); err != nil {
		return nil, err
	}
	if _, err := os.Stat(path); err != nil {
		return nil, fmt.Errorf("catalogue: %w; it is made by the first run that adds a frame", err)
	}
	readers, err := sql.Open("sqlite", source(path, "mode=ro", "_pragma=query_only(1)"))
	if err != nil {
		return nil, fmt.Errorf("catalogue %s: %w", path, err)
	}
	readers.SetMaxOpenConns(4)
	s := &Store{path: path, cfg: cfg, readOnly: true, readers: readers}
	version, err := schemaVersion(ctx, readers, path)
	if err == nil && version < len(migrations) {
		err = fmt.Errorf("schema %d is older than this program's %d: open it once for writing (any run or catalog add does) to bring it up to date", version, len(migrations))
	}
	if err == nil && version > len(migrations) {
		err = newerSchema(version, len(migrations))
	}
	if err != nil {
		readers.Close()
		return nil, explain(path, err)
	}
	return s, nil
}

// Path returns the file's path as given.
func (s *Store) Path() string { return s.path }

// Config returns the settings of the Store.
func (s *Store) Config() Config { return s.cfg }

// Close ends all connections. What was added is on the disk already.
func (s *Store) Close() error {
	var errs []error
	for _, st := range []*sql.Stmt{s.insert, s.stamps} {
		if st != nil {
			errs = append(errs, st.Close())
		}
	}
	if s.readers != nil {
		errs = append(errs, s.readers.Close())
	}
	if s.writer != nil {
		errs = append(errs, s.writer.Close())
	}
	return errors.Join(errs...)
}

// source builds the driver's name of a database file, safe for any character
// in the path.
func source(path string, options ...string) string {
	if abs, err := filepath.Abs(path); err == nil {
		path = abs
	}
	u := url.URL{Scheme: "file", Path: filepath.ToSlash(path)}
	options = append(options, "_pragma=busy_timeout(30000)", "_pragma=foreign_keys(1)")
	return u.String() + "?" + strings.Join(options, "&")
}

// explain puts the path before an error and a remedy behind the common ones.
func explain(path string, err error) error {
	if err == nil {
		return nil
	}
	text := err.Error()
	switch {
	case strings.Contains(text, "SQLITE_BUSY") || strings.Contains(text, "database is locked"):
		return fmt.Errorf("catalogue %s: another program holds it for more than 30 s: try again when that has ended: %w", path, err)
	case strings.Contains(text, "not a database"):
		return fmt.Errorf("catalogue %s: found another kind of file, expected an SQLite database: name another path: %w", path, err)
	case strings.Contains(text, "malformed") || strings.Contains(text, "SQLITE_CORRUPT"):
		return fmt.Errorf("catalogue %s: the file is damaged: restore a copy, or move it away and add the candidate files again: %w", path, err)
	case strings.Contains(text, "disk is full") || strings.Contains(text, "SQLITE_FULL"):
		return fmt.Errorf("catalogue %s: no space left on the disk: nothing was changed: %w", path, err)
	}
	return fmt.Errorf("catalogue %s: %w", path, err)
}

// update runs fill in one write transaction: committed and synced if it
// returns nil, else without any effect.
func (s *Store) update(ctx context.Context, fill func(*sql.Tx) error) error {
	if s.writer == nil {
		return fmt.Errorf("catalogue %s: opened for reading only", s.path)
	}
	s.writing.Lock()
	defer s.writing.Unlock()
	tx, err := s.writer.BeginTx(ctx, nil)
	if err != nil {
		return explain(s.path, err)
	}
	defer tx.Rollback() // without effect after Commit
	if err := fill(tx); err != nil {
		return explain(s.path, err)
	}
	return explain(s.path, tx.Commit())
}
