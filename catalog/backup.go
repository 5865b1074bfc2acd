package catalog

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
)

// tables are all tables in an order in which rows refer to earlier ones only.
var tables = []string{"settings", "frames", "objects", "names", "candidates", "stamps", "coverage", "labels", "remarks",
	"decisions", "decision_places", "decision_members"}

// Backup writes a copy of the whole catalogue, as it is at one instant, to an
// SQLite file, while others may read and write the catalogue. The copy is itself
// a catalogue. A file of this name is replaced when the copy is complete.
func (s *Store) Backup(ctx context.Context, path string) error {
	if !s.server {
		a, err1 := os.Stat(s.place)
		b, err2 := os.Stat(path)
		if err1 == nil && err2 == nil && os.SameFile(a, b) {
			return fmt.Errorf("backup %s: this is the catalogue itself: name another file", path)
		}
	}
	partial := filepath.Join(filepath.Dir(path), "."+filepath.Base(path)+".partial")
	defer os.Remove(partial)
	if err := os.Remove(partial); err != nil && !errors.Is(err, os.ErrNotExist) {
		return fmt.Errorf("backup %s: %w", path, err)
	}
	var err error
	if s.server {
		err = s.copyTo(ctx, partial)
	} else {
		err = s.vacuumInto(ctx, partial)
	}
	if err == nil {
		err = syncFile(partial)
	}
	if err == nil {
		err = os.Rename(partial, path)
	}
	if err == nil {
		err = syncFile(filepath.Dir(path))
	}
	if err != nil {
		return fmt.Errorf("backup %s: %w", path, err)
	}
	return nil
}

func syncFile(path string) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	return errors.Join(f.Sync(), f.Close())
}

// vacuumInto lets SQLite copy the file.
func (s *Store) vacuumInto(ctx context.Context, path string) error {
	db, err := sql.Open("sqlite", source(s.place, "mode=ro"))
	if err != nil {
		return err
	}
	defer db.Close()
	if _, err := db.ExecContext(ctx, "VACUUM INTO ?", path); err != nil {
		return s.explain(err)
	}
	return nil
}

// copyTo copies every table of a server into a new file.
func (s *Store) copyTo(ctx context.Context, path string) error {
	from, err := s.snapshot(ctx)
	if err != nil {
		return s.explain(err)
	}
	defer from.Rollback()
	db, err := sql.Open("sqlite", source(path, "mode=rwc"))
	if err != nil {
		return err
	}
	defer db.Close()
	if err := migrate(ctx, db, path, migrations); err != nil {
		return err
	}
	to, err := db.BeginTx(ctx, nil)
	if err != nil {
		return err
	}
	defer to.Rollback()
	if err := copyTables(ctx, from, to); err != nil {
		return err
	}
	return errors.Join(to.Commit(), db.Close())
}

// Restore fills an empty catalogue with what a backup holds, in one
// transaction.
func (s *Store) Restore(ctx context.Context, path string) error {
	backup, err := OpenReadOnly(ctx, path, s.cfg)
	if err != nil {
		return fmt.Errorf("backup: %w", err)
	}
	defer backup.Close()
	err = s.update(ctx, func(tx *sql.Tx) error {
		var n int
		if err := tx.QueryRowContext(ctx, "SELECT (SELECT count(*) FROM frames) + (SELECT count(*) FROM labels) + (SELECT count(*) FROM remarks)").Scan(&n); err != nil {
			return err
		}
		if n > 0 {
			return fmt.Errorf("found a catalogue with %d frames, labels and remarks, expected an empty one: restore into a new place", n)
		}
		from, err := backup.snapshot(ctx)
		if err != nil {
			return err
		}
		defer from.Rollback()
		if _, err := tx.ExecContext(ctx, "DELETE FROM settings"); err != nil {
			return err
		}
		if err := copyTables(ctx, from, tx); err != nil {
			return err
		}
		if s.server {
			_, err = tx.ExecContext(ctx, "SELECT setval(pg_get_serial_sequence('objects', 'id'), (SELECT coalesce(max(id), 0) + 1 FROM objects), false)")
		}
		return err
	})
	if err != nil {
		return err
	}
	// The backup's objects may have been formed with other settings.
	var settings string
	err = s.readers.QueryRowContext(ctx, "SELECT value FROM settings WHERE name = 'association'").Scan(&settings)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return s.explain(err)
	}
	if settings != s.cfg.String() {
		return s.Rebuild(ctx)
	}
	return nil
}

// copyTables copies all rows; both sides have the same schema.
func copyTables(ctx context.Context, from, to *sql.Tx) error {
	for _, table := range tables {
		if err := copyTable(ctx, from, to, table); err != nil {
			return fmt.Errorf("table %s: %w", table, err)
		}
	}
	return nil
}

func copyTable(ctx context.Context, from, to *sql.Tx, table string) error {
	rows, err := from.QueryContext(ctx, "SELECT * FROM "+table)
	if err != nil {
		return err
	}
	defer rows.Close()
	names, err := rows.Columns()
	if err != nil {
		return err
	}
	insert, err := to.PrepareContext(ctx, "INSERT INTO "+table+" ("+strings.Join(names, ", ")+") VALUES (?"+strings.Repeat(", ?", len(names)-1)+")")
	if err != nil {
		return err
	}
	defer insert.Close()
	values := make([]any, len(names))
	at := make([]any, len(names))
	for i := range values {
		at[i] = &values[i]
	}
	for rows.Next() {
		if err := rows.Scan(at...); err != nil {
			return err
		}
		if _, err := insert.ExecContext(ctx, values...); err != nil {
			return err
		}
	}
	return rows.Err()
}
