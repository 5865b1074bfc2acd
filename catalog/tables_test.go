package catalog

import (
	"context"
	"database/sql"
	"fmt"

	"nightsift/detect"
)

// Sheet reads a whole table of the catalogue ("candidates" with the object of
// each, "objects" or "frames") from the tables behind the views: what tests
// compare with.
func (s *Store) Sheet(ctx context.Context, table string) (*Sheet, error) {
	switch table {
	case "objects":
		list, err := s.Objects(ctx, ObjectQuery{})
		if err != nil {
			return nil, err
		}
		return objectSheet(list), nil
	case "frames":
		list, err := s.Frames(ctx, FrameQuery{})
		if err != nil {
			return nil, err
		}
		return frameSheet(list, len(frameColumns)), nil
	case "candidates":
		sheet := newSheet("candidates", append(detectColumns(), Column{"object", "", "designation of its object", detect.Text}))
		rows, err := s.readers.QueryContext(ctx, "SELECT "+candidateColumns+`, (SELECT name FROM objects WHERE id = candidates.object)
			FROM candidates ORDER BY frame, candidate_id`)
		if err != nil {
			return nil, s.explain(err)
		}
		defer rows.Close()
		for rows.Next() {
			var c detect.Candidate
			var object sql.NullString
			if err := scanCandidate(rows, &c, &object); err != nil {
				return nil, s.explain(err)
			}
			sheet.addCandidate(&c)
			sheet.Columns[len(detect.Columns)].append(object.String)
		}
		return sheet, s.explain(rows.Err())
	}
	return nil, fmt.Errorf("catalogue %s: no table %q: expected candidates, objects or frames", s.path, table)
}

// objectSheet returns objects in the order of the list.
func objectSheet(list []Object) *Sheet {
	s := newSheet("objects", objectColumns)
	for i := range list {
		o := &list[i]
		for k, v := range []any{o.Name, o.RA, o.Dec, o.RAErr, o.DecErr, string(o.Kind), o.RealProbability, o.Detections, o.Nights,
			o.FirstMJD, o.LastMJD, o.FirstNight, o.LastNight, o.PeakMag, o.PeakMJD, o.PeakSignificance, o.Filters, o.Founder} {
			s.Columns[k].append(v)
		}
	}
	s.Rows = len(list)
	return s
}

// Export writes a table of the catalogue to a file, as the command does.
func (s *Store) Export(ctx context.Context, table, format, path string) error {
	f, err := FindFormat(format)
	if err != nil {
		return err
	}
	sheet, err := s.Select(ctx, Selection{Table: table})
	if err != nil {
		return err
	}
	return f.Write(path, sheet)
}
