// Package catalog keeps what a survey has found: frames, candidates, and the
// objects that candidates of many nights form, in one SQLite file that every
// tool can read, or on a PostgreSQL server that many machines share.
//
// # What is true at any time
//
// Must:
//   - A frame is in the catalogue with all of its candidates and the objects
//     they form, or not at all: AddFrame is one transaction, synced to disk
//     before it returns.
//   - What people said (labels, states, comments, merges, splits) outlives the
//     rows that it was said about.
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
// locks may not hold. For writers of several machines there is PostgreSQL: see
// postgres.go.
package catalog

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

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
	place    string // file or URL
	path     string // the same for messages, without a password
	server   bool   // PostgreSQL
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

// Open opens the catalogue at a place, a file or the URL of a PostgreSQL
// database (postgres://…), for reading and writing, and creates its tables if
// they are not there. An older schema is brought up to date; a newer one, or
// what is no catalogue, is refused with an error that says so. If the objects
// were formed with other settings than cfg, they are formed anew.
func Open(ctx context.Context, place string, cfg Config) (*Store, error) {
	if err := cfg.Validate(); err != nil {
		return nil, err
	}
	s := &Store{place: place, path: Display(place), server: IsServer(place), cfg: cfg}
	var err error
	if s.server {
		s.writer, err = s.connect(nil)
	} else {
		s.writer, err = sql.Open("sqlite", source(place, "mode=rwc", "_txlock=immediate", "_pragma=synchronous(FULL)"))
	}
	if err != nil {
		return nil, s.explain(err)
	}
	s.writer.SetMaxOpenConns(1)
	if err := s.retry(ctx, func() error { return s.prepare(ctx) }); err != nil {
		s.Close()
		return nil, s.explain(err)
	}
	return s, nil
}

// connect opens a pool of connections to the server.
func (s *Store) connect(settings map[string]string) (*sql.DB, error) {
	c, err := server(s.place, settings)
	if err != nil {
		return nil, err
	}
	return sql.OpenDB(c), nil
}

// openReaders opens the connections for queries, which cannot write.
func (s *Store) openReaders() (err error) {
	if s.server {
		s.readers, err = s.connect(map[string]string{"default_transaction_read_only": "on"})
	} else {
		s.readers, err = sql.Open("sqlite", source(s.place, "mode=ro", "_pragma=query_only(1)"))
	}
	if err == nil {
		s.readers.SetMaxOpenConns(4)
	}
	return err
}

// version returns the schema of the tables.
func (s *Store) version(ctx context.Context, db *sql.DB) (int, error) {
	if s.server {
		return serverVersion(ctx, db)
	}
	return schemaVersion(ctx, db, s.place)
}

func (s *Store) prepare(ctx context.Context) error {
	if s.server {
		if err := migrateServer(ctx, s.writer, migrations); err != nil {
			return err
		}
	} else {
		if err := migrate(ctx, s.writer, s.place, migrations); err != nil {
			return err
		}
		// Only now: write-ahead logging changes the file, and a foreign one must
		// not be touched.
		if _, err := s.writer.ExecContext(ctx, "PRAGMA journal_mode = WAL"); err != nil {
			return err
		}
	}
	var err error
	if s.readers == nil {
		if err := s.openReaders(); err != nil {
			return err
		}
	}
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

// ErrAbsent is the error, wrapped with the place, of OpenReadOnly where no
// catalogue is.
var ErrAbsent = errors.New("no catalogue yet")

// OpenReadOnly opens an existing catalogue for queries and exports. cfg serves
// for figures that depend on the settings, such as Member.FalseMatch.
func OpenReadOnly(ctx context.Context, place string, cfg Config) (*Store, error) {
	if err := cfg.Validate(); err != nil {
		return nil, err
	}
	s := &Store{place: place, path: Display(place), server: IsServer(place), cfg: cfg, readOnly: true}
	if !s.server {
		if _, err := os.Stat(place); err != nil {
			if errors.Is(err, os.ErrNotExist) {
				err = fmt.Errorf("%w: it is made by the first run that adds a frame: %w", ErrAbsent, err)
			}
			return nil, fmt.Errorf("catalogue %s: %w", s.path, err)
		}
	}
	if err := s.openReaders(); err != nil {
		return nil, s.explain(err)
	}
	version, err := s.version(ctx, s.readers)
	switch {
	case err != nil:
	case version == 0 && s.server:
		err = fmt.Errorf("%w: its tables are made by the first run that adds a frame", ErrAbsent)
	case version < len(migrations):
		err = fmt.Errorf("schema %d is older than this program's %d: open it once for writing (any run or catalog add does) to bring it up to date", version, len(migrations))
	case version > len(migrations):
		err = newerSchema(version, len(migrations))
	}
	if err != nil {
		s.readers.Close()
		return nil, s.explain(err)
	}
	return s, nil
}

// Path returns the file's path as given, or the URL without a password.
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
	options = append(options, "_pragma=busy_timeout(30000)", "_pragma=foreign_keys(1)", "_pragma=cache_size(-65536)")
	return u.String() + "?" + strings.Join(options, "&")
}

// explain puts the place before an error and a remedy behind the common ones.
func (s *Store) explain(err error) error {
	if err == nil {
		return nil
	}
	if strings.HasPrefix(err.Error(), "catalogue ") { // said by an inner call
		return err
	}
	if s.server {
		return explainServer(s.place, err)
	}
	return explainFile(s.path, err)
}

func explainFile(path string, err error) error {
	text := err.Error()
	switch {
	case strings.Contains(text, "SQLITE_BUSY") || strings.Contains(text, "database is locked"):
		return fmt.Errorf("catalogue %s: another program holds it for more than 30 s: try again when that has ended: %w", path, err)
	case strings.Contains(text, "not a database"):
		return fmt.Errorf("catalogue %s: found another kind of file, expected an SQLite database: name another path: %w", path, err)
	case strings.Contains(text, "malformed") || strings.Contains(text, "SQLITE_CORRUPT"):
		return fmt.Errorf("catalogue %s: the file is damaged: restore a copy, or move it away and add the candidate files again: %w", path, err)
	case strings.Contains(text, "SQLITE_READONLY") || strings.Contains(text, "readonly database"):
		return fmt.Errorf("catalogue %s: the file or its folder cannot be written: correct its permissions, or name another path: nothing was changed: %w", path, err)
	case strings.Contains(text, "unable to open database file"):
		return fmt.Errorf("catalogue %s: the file cannot be opened or made: see whether its folder exists and may be written: %w", path, err)
	case strings.Contains(text, "disk is full") || strings.Contains(text, "SQLITE_FULL"):
		return fmt.Errorf("catalogue %s: no space left on the disk: nothing was changed: %w", path, err)
	}
	return fmt.Errorf("catalogue %s: %w", path, err)
}

// update runs fill in one write transaction: committed and synced if it
// returns nil, else without any effect. On a server fill runs again when the
// transaction was broken from outside, also at its end, where it may have been
// committed: it must come to the same when it is done twice.
func (s *Store) update(ctx context.Context, fill func(*sql.Tx) error) error {
	return s.transact(ctx, true, func(tx *sql.Tx) error {
		if s.server {
			if err := lock(ctx, tx, lockObjects); err != nil {
				return err
			}
		}
		return fill(tx)
	})
}

// decide is update for what must not be done twice: a commit that was broken is
// an error.
func (s *Store) decide(ctx context.Context, fill func(*sql.Tx) error) error {
	return s.transact(ctx, false, func(tx *sql.Tx) error {
		if s.server {
			if err := lock(ctx, tx, lockObjects); err != nil {
				return err
			}
		}
		return fill(tx)
	})
}

func (s *Store) transact(ctx context.Context, twice bool, fill func(*sql.Tx) error) error {
	if s.writer == nil {
		return fmt.Errorf("catalogue %s: opened for reading only", s.path)
	}
	s.writing.Lock()
	defer s.writing.Unlock()
	var doubtful error
	err := s.retry(ctx, func() error {
		tx, err := s.writer.BeginTx(ctx, nil)
		if err != nil {
			return err
		}
		defer tx.Rollback() // without effect after Commit
		if err := fill(tx); err != nil {
			return err
		}
		err = tx.Commit()
		if err != nil && !twice && s.server {
			doubtful = err
			return nil
		}
		return err
	})
	if doubtful != nil {
		return fmt.Errorf("catalogue %s: the connection broke while the decision was stored: see whether it is there before it is made again: %w", s.path, doubtful)
	}
	return s.explain(err)
}

// snapshot begins a transaction for reading that shows one state of the
// catalogue.
func (s *Store) snapshot(ctx context.Context) (*sql.Tx, error) {
	options := &sql.TxOptions{ReadOnly: true}
	if s.server {
		options.Isolation = sql.LevelRepeatableRead
	}
	return s.readers.BeginTx(ctx, options)
}

// retry runs do until it succeeds, as long as a server's errors are of the
// passing sort and patience lasts. A file is locked by SQLite itself, which
// waits.
func (s *Store) retry(ctx context.Context, do func() error) error {
	start, wait := time.Now(), 20*time.Millisecond
	for {
		err := do()
		if err == nil || !s.server || !passing(err) || ctx.Err() != nil || time.Since(start) > patience {
			return err
		}
		// Writers that hit each other shall not do so again in step.
		select {
		case <-time.After(wait/2 + rand.N(wait)):
		case <-ctx.Done():
			return err
		}
		wait = min(2*wait, 2*time.Second)
	}
}
