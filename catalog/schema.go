package catalog

import (
	"context"
	"database/sql"
	"fmt"
)

// applicationID marks the file as a catalogue (PRAGMA application_id): the
// letters "nsft" as a big-endian number.
const applicationID = 0x6e736674

// migrations brings a file from schema n to n+1. They are never changed once
// released, only added to; the number of entries is the current schema. The
// version is kept in PRAGMA user_version.
var migrations = []string{schema1, schema2}

const schema1 = `
CREATE TABLE settings (
  name  TEXT PRIMARY KEY,
  value TEXT NOT NULL
) WITHOUT ROWID;

-- One row a frame, also for frames that were not searched. Unknown numbers and
-- texts are NULL.
CREATE TABLE frames (
  frame             TEXT PRIMARY KEY,
  status            TEXT NOT NULL CHECK (status IN ('searched', 'set_aside', 'failed')),
  reason            TEXT,
  detail            TEXT,
  filter            TEXT,
  mid_mjd           REAL,
  exposure_s        REAL,
  fwhm_px           REAL,
  reference_fwhm_px REAL,
  sky               REAL,
  sky_noise         REAL,
  zero_point        REAL,
  flux_scale        REAL,
  stars_matched     INTEGER NOT NULL,
  astrometry_rms_px REAL,
  noise_ratio       REAL,
  mag_limit_5sigma  REAL,
  efficiency_50_mag REAL,
  candidates        INTEGER NOT NULL,
  seconds           REAL,
  night             TEXT,
  field             TEXT,
  width_px          INTEGER NOT NULL,
  height_px         INTEGER NOT NULL,
  xi_x              REAL, -- arcsec per pixel: change of (xi, eta), eastward and
  xi_y              REAL, -- northward, with x and y at the frame's centre
  eta_x             REAL,
  eta_y             REAL,
  version           TEXT,
  configuration     TEXT, -- digest
  inputs            TEXT  -- JSON list of {"role", "name", "checksum"}
) WITHOUT ROWID;
CREATE INDEX frames_night ON frames (night, frame);

CREATE TABLE objects (
  id                INTEGER PRIMARY KEY,
  name              TEXT NOT NULL UNIQUE,
  cell              INTEGER NOT NULL,
  ra_deg            REAL NOT NULL,
  dec_deg           REAL NOT NULL,
  ra_err_arcsec     REAL NOT NULL, -- on the sky: times cos(dec)
  dec_err_arcsec    REAL NOT NULL,
  covariance_arcsec2 REAL NOT NULL,
  kind              TEXT NOT NULL, -- of the most significant detection
  real_probability  REAL,          -- the highest of a detection
  detections        INTEGER NOT NULL,
  nights            INTEGER NOT NULL,
  first_mjd         REAL,
  last_mjd          REAL,
  first_night       TEXT,
  last_night        TEXT,
  peak_mag          REAL,
  peak_mjd          REAL,
  peak_significance REAL,
  filters           TEXT,
  founder           TEXT NOT NULL  -- candidate_id of the earliest detection
);
CREATE INDEX objects_cell ON objects (cell);
CREATE INDEX objects_last ON objects (last_night);

-- Earlier names of objects.
CREATE TABLE names (
  name   TEXT PRIMARY KEY,
  object INTEGER NOT NULL REFERENCES objects (id) ON DELETE CASCADE
) WITHOUT ROWID;
CREATE INDEX names_object ON names (object);

CREATE TABLE candidates (
  candidate_id      TEXT NOT NULL UNIQUE,
  frame             TEXT NOT NULL REFERENCES frames (frame) ON DELETE CASCADE,
  filter            TEXT,
  night             TEXT,
  mid_mjd           REAL,
  x_px              REAL,
  y_px              REAL,
  x_px_err          REAL,
  y_px_err          REAL,
  ra_deg            REAL,
  dec_deg           REAL,
  flux              REAL,
  flux_err          REAL,
  mag               REAL,
  mag_err           REAL,
  mag_limit         REAL,
  significance      REAL,
  real_probability  REAL,
  kind              TEXT,
  flags             INTEGER,
  reference_distance_arcsec REAL,
  reference_mag     REAL,
  fit_chi2          REAL,
  length_px         REAL,
  angle_deg         REAL,
  xi_var            REAL,    -- arcsec2, measured position error on the sky
  eta_var           REAL,
  xi_eta_cov        REAL,
  cell              INTEGER, -- where on the sky; NULL without position
  role              INTEGER NOT NULL, -- 2 forms objects, 1 joins them, 0 neither
  object            INTEGER REFERENCES objects (id)
);
CREATE INDEX candidates_frame ON candidates (frame, candidate_id);
CREATE INDEX candidates_night ON candidates (night);
CREATE INDEX candidates_cell ON candidates (cell) WHERE role > 0;
CREATE INDEX candidates_object ON candidates (object) WHERE object IS NOT NULL;

-- Cut-outs and features: little-endian float32 and float64.
CREATE TABLE stamps (
  candidate_id TEXT PRIMARY KEY REFERENCES candidates (candidate_id) ON DELETE CASCADE,
  stamp_new        BLOB,
  stamp_reference  BLOB,
  stamp_difference BLOB,
  features         BLOB
);
`

// What people say about candidates and objects stands in tables that no frame's
// replacement empties. Each row remembers what it was said about, by place and
// identifier, and is attached again to what is there now: a label by
// labels.attached, a remark by remarks.object, a decision by its places or
// members.
const schema2 = `
ALTER TABLE frames ADD COLUMN zero_point_err REAL;
ALTER TABLE frames ADD COLUMN zero_point_source TEXT;
ALTER TABLE frames ADD COLUMN footprint TEXT; -- JSON list of [ra, dec]

-- For cone searches over all candidates; the role tells association which rows
-- it need not look at.
DROP INDEX candidates_cell;
CREATE INDEX candidates_cell ON candidates (cell, role);

-- Tiles of half a degree that a searched frame touches.
CREATE TABLE coverage (
  tile  INTEGER NOT NULL,
  frame TEXT NOT NULL REFERENCES frames (frame) ON DELETE CASCADE,
  PRIMARY KEY (tile, frame)
) WITHOUT ROWID;
CREATE INDEX coverage_frame ON coverage (frame);

-- Verdicts of reviewers. candidate_id and the measures are those of the time of
-- the verdict.
CREATE TABLE labels (
  id           TEXT PRIMARY KEY, -- digest of candidate_id, reviewer, time, verdict, comment
  candidate_id TEXT NOT NULL,
  attached     TEXT,             -- candidate_id at present, NULL for none
  frame        TEXT NOT NULL,
  x_px         REAL,
  y_px         REAL,
  ra_deg       REAL,
  dec_deg      REAL,
  significance REAL,
  verdict      TEXT NOT NULL CHECK (verdict IN ('real', 'bogus', 'unsure')),
  reviewer     TEXT NOT NULL,
  time         TEXT NOT NULL,    -- UTC
  comment      TEXT
) WITHOUT ROWID;
CREATE INDEX labels_frame ON labels (frame);
CREATE INDEX labels_attached ON labels (attached);

-- Comments on objects and changes of their states. Name and position are those
-- of the time of the remark.
CREATE TABLE remarks (
  id      TEXT PRIMARY KEY,
  object  INTEGER,               -- at present, NULL for none
  name    TEXT NOT NULL,
  ra_deg  REAL NOT NULL,
  dec_deg REAL NOT NULL,
  cell    INTEGER NOT NULL,
  state   TEXT CHECK (state IN ('new', 'watched', 'confirmed', 'rejected', 'gone')),
  comment TEXT,
  author  TEXT NOT NULL,
  time    TEXT NOT NULL
) WITHOUT ROWID;
CREATE INDEX remarks_object ON remarks (object);
CREATE INDEX remarks_cell ON remarks (cell) WHERE object IS NULL;

-- Objects joined or parted by hand. A decision holds until it is withdrawn.
CREATE TABLE decisions (
  id           TEXT PRIMARY KEY,
  kind         TEXT NOT NULL CHECK (kind IN ('merge', 'split')),
  author       TEXT NOT NULL,
  time         TEXT NOT NULL,
  comment      TEXT,
  withdrawn    TEXT, -- when
  withdrawn_by TEXT
) WITHOUT ROWID;

-- The places that a merge makes one, with the errors of their positions.
CREATE TABLE decision_places (
  decision TEXT NOT NULL REFERENCES decisions (id) ON DELETE CASCADE,
  place    INTEGER NOT NULL,
  name     TEXT NOT NULL,         -- of the object
  founder  TEXT NOT NULL,         -- candidate_id, of which the rest is told
  ra_deg   REAL NOT NULL,
  dec_deg  REAL NOT NULL,
  xi_var   REAL NOT NULL, -- arcsec2
  eta_var  REAL NOT NULL,
  xi_eta_cov REAL NOT NULL,
  PRIMARY KEY (decision, place)
) WITHOUT ROWID;

-- The candidates that a split keeps apart: those of part 1 from those of part 0.
CREATE TABLE decision_members (
  decision     TEXT NOT NULL REFERENCES decisions (id) ON DELETE CASCADE,
  candidate_id TEXT NOT NULL,
  part         INTEGER NOT NULL,
  attached     TEXT,
  frame        TEXT NOT NULL,
  x_px         REAL,
  y_px         REAL,
  significance REAL,
  PRIMARY KEY (decision, candidate_id)
) WITHOUT ROWID;
CREATE INDEX decision_members_frame ON decision_members (frame);

CREATE VIEW view_candidates AS SELECT
  candidate_id, frame, filter, night, mid_mjd, x_px, y_px, x_px_err, y_px_err, ra_deg, dec_deg,
  flux, flux_err, mag, mag_err, mag_limit, significance, real_probability, kind, flags,
  reference_distance_arcsec, reference_mag, fit_chi2, length_px, angle_deg,
  (SELECT name FROM objects WHERE id = c.object) AS object,
  CASE WHEN object IS NOT NULL THEN coalesce((SELECT state FROM remarks AS r
    WHERE r.object = c.object AND state IS NOT NULL ORDER BY time DESC, r.id LIMIT 1), 'new') END AS object_state,
  (SELECT field FROM frames AS f WHERE f.frame = c.frame) AS field,
  (SELECT verdict FROM labels AS l WHERE attached = c.candidate_id ORDER BY time DESC, l.id DESC LIMIT 1) AS verdict,
  (SELECT count(*) FROM labels AS l WHERE attached = c.candidate_id) AS verdicts
  FROM candidates AS c;

CREATE VIEW view_objects AS SELECT
  name AS object, ra_deg, dec_deg, ra_err_arcsec, dec_err_arcsec, kind, real_probability, detections, nights,
  first_mjd, last_mjd, first_night, last_night, peak_mag, peak_mjd, peak_significance, filters, founder,
  coalesce((SELECT state FROM remarks AS r
    WHERE r.object = o.id AND state IS NOT NULL ORDER BY time DESC, r.id LIMIT 1), 'new') AS state,
  (SELECT count(*) FROM remarks AS r WHERE r.object = o.id) AS remarks,
  (SELECT field FROM frames AS f JOIN candidates AS c ON c.frame = f.frame WHERE c.candidate_id = o.founder) AS field
  FROM objects AS o;

CREATE VIEW view_frames AS SELECT
  frame, status, reason, detail, filter, mid_mjd, exposure_s, fwhm_px, reference_fwhm_px, sky, sky_noise, zero_point,
  flux_scale, stars_matched, astrometry_rms_px, noise_ratio, mag_limit_5sigma, efficiency_50_mag, candidates, seconds,
  night, field, width_px, height_px, xi_x, xi_y, eta_x, eta_y, zero_point_err, zero_point_source, version, configuration
  FROM frames;
`

func newerSchema(found, known int) error {
	return fmt.Errorf("written by a newer version of the program (schema %d, this one knows up to %d): use that version, or restore a copy made before the change", found, known)
}

// schemaVersion returns the schema of the file, 0 for an empty one, or an
// error if the file holds something else.
func schemaVersion(ctx context.Context, db *sql.DB, path string) (int, error) {
	var version, id, tables int
	if err := db.QueryRowContext(ctx, "PRAGMA user_version").Scan(&version); err != nil {
		return 0, err
	}
	if err := db.QueryRowContext(ctx, "PRAGMA application_id").Scan(&id); err != nil {
		return 0, err
	}
	if err := db.QueryRowContext(ctx, "SELECT count(*) FROM sqlite_schema").Scan(&tables); err != nil {
		return 0, err
	}
	if id != applicationID && (tables > 0 || version != 0 || id != 0) {
		return 0, fmt.Errorf("found the database of another program (application id %#x, %d tables), expected a catalogue: name another path", uint32(id), tables)
	}
	return version, nil
}

// migrate brings the file to the last of the steps, in one transaction.
func migrate(ctx context.Context, db *sql.DB, path string, steps []string) error {
	version, err := schemaVersion(ctx, db, path)
	if err != nil {
		return err
	}
	if version == len(steps) {
		return nil
	}
	if version > len(steps) {
		return newerSchema(version, len(steps))
	}
	tx, err := db.BeginTx(ctx, nil)
	if err != nil {
		return err
	}
	defer tx.Rollback()
	// Another process may have been first.
	if err := tx.QueryRowContext(ctx, "PRAGMA user_version").Scan(&version); err != nil {
		return err
	}
	for ; version < len(steps); version++ {
		if _, err := tx.ExecContext(ctx, steps[version]); err != nil {
			return fmt.Errorf("bringing schema %d to %d: %w", version, version+1, err)
		}
	}
	if version > len(steps) {
		return newerSchema(version, len(steps))
	}
	if _, err := tx.ExecContext(ctx, fmt.Sprintf("PRAGMA user_version = %d; PRAGMA application_id = %d", version, applicationID)); err != nil {
		return err
	}
	return tx.Commit()
}
