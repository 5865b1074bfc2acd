package catalog

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"nightsift/detect"
)

// View is a table for conditions in SQL: its columns keep their names and
// meanings when the tables behind it change.
type View struct {
	Name    string
	Columns []Column
	order   string
}

// Views are what Store.Where can ask: view_candidates, view_objects and
// view_frames. NULL stands for an unknown number and for an empty text.
var Views = []View{
	{"view_candidates", slices.Concat(detectColumns(), []Column{
		{"object", "", "designation of its object", detect.Text},
		{"object_state", "", "state of its object", detect.Text},
		{"field", "", "field of the frame", detect.Text},
		{"verdict", "", "latest verdict of a reviewer: real, bogus, unsure", detect.Text},
		{"verdicts", "", "reviewers' verdicts, all", detect.Integer},
	}), "frame, candidate_id"},
	{"view_objects", slices.Concat(objectColumns, []Column{
		{"state", "", "new, watched, confirmed, rejected or gone", detect.Text},
		{"remarks", "", "comments and states said of it", detect.Integer},
		{"field", "", "field of the earliest detection", detect.Text},
	}), "object"},
	{"view_frames", frameViewColumns(), "frame"},
}

func frameViewColumns() []Column {
	list := make([]Column, len(frameColumns))
	for i := range frameColumns {
		list[i] = frameColumns[i].Column
	}
	return list
}

// checkCondition refuses what is not one condition: statements, comments,
// unclosed quotes and parentheses. The transaction can only read, whatever the
// condition says; this keeps it in its place within the query.
func checkCondition(condition string) error {
	if strings.TrimSpace(condition) == "" {
		return errors.New("found nothing, expected a condition in SQL such as: mag < 19 AND nights > 2")
	}
	depth := 0
	for i := 0; i < len(condition); i++ {
		rest := condition[i:]
		switch c := condition[i]; {
		case c == '\'' || c == '"':
			n := strings.IndexByte(rest[1:], c)
			if n < 0 {
				return fmt.Errorf("found a quote %c that does not end, at character %d", c, i+1)
			}
			i += n + 1
		case c == '(':
			depth++
		case c == ')':
			if depth--; depth < 0 {
				return fmt.Errorf("found a ) too many, at character %d", i+1)
			}
		case c == ';', c == '\\', c == '$', c == '?', c == 0, strings.HasPrefix(rest, "--"), strings.HasPrefix(rest, "/*"):
			return fmt.Errorf("found %q at character %d, expected one condition without statements, comments, parameters or backslashes", rest[:1], i+1)
		}
	}
	if depth > 0 {
		return fmt.Errorf("found %d ( without )", depth)
	}
	return nil
}

// Where returns the rows of a view for which a condition in SQL holds, in the
// order of the view's key, all of one state of the catalogue. An empty condition
// holds for all. The condition may name the columns of the view, and tables and
// views in sub-queries; it can change nothing. An error names what is wrong with
// it.
func (s *Store) Where(ctx context.Context, view, condition string) (*Sheet, error) {
	k := slices.IndexFunc(Views, func(v View) bool { return v.Name == view })
	if k < 0 {
		names := make([]string, len(Views))
		for i := range Views {
			names[i] = Views[i].Name
		}
		return nil, fmt.Errorf("catalogue %s: no view %q: expected one of %s", s.path, view, strings.Join(names, ", "))
	}
	return s.look(ctx, &Views[k], where{}, condition)
}

// look returns the rows of a view for which conditions on its columns hold, and
// one in SQL by the user unless it is empty.
func (s *Store) look(ctx context.Context, v *View, w where, condition string) (*Sheet, error) {
	names := make([]string, len(v.Columns))
	for i := range v.Columns {
		names[i] = v.Columns[i].Name
	}
	if condition != "" {
		if err := checkCondition(condition); err != nil {
			return nil, fmt.Errorf("condition %q: %w", condition, err)
		}
		// The line break ends a comment that the check above might not know.
		w.and("(" + condition + "\n)")
	}
	tx, err := s.snapshot(ctx)
	if err != nil {
		return nil, s.explain(err)
	}
	defer tx.Rollback()
	rows, err := tx.QueryContext(ctx, "SELECT "+strings.Join(names, ", ")+" FROM "+v.Name+w.String()+" ORDER BY "+v.order, w.values...)
	if err != nil {
		return nil, fmt.Errorf("condition %q on %s: %w", condition, v.Name, err)
	}
	defer rows.Close()
	sheet := newSheet(strings.TrimPrefix(v.Name, "view_"), v.Columns)
	values := make([]any, len(names))
	to := make([]any, len(names))
	for i := range values {
		to[i] = &values[i]
	}
	for rows.Next() {
		if err := rows.Scan(to...); err != nil {
			return nil, s.explain(err)
		}
		for i := range values {
			if err := sheet.Columns[i].add(values[i]); err != nil {
				return nil, s.explain(err)
			}
		}
		sheet.Rows++
	}
	if err := rows.Err(); err != nil {
		return nil, fmt.Errorf("condition %q on %s: %w", condition, v.Name, err)
	}
	return sheet, nil
}

// add appends a value as a database gives it.
func (c *SheetColumn) add(v any) error {
	switch x := v.(type) {
	case nil:
		switch c.Type {
		case detect.Text:
			c.append("")
		case detect.Real:
			c.append(math.NaN())
		default:
			c.append(0)
		}
		return nil
	case string:
		if c.Type == detect.Text {
			c.append(x)
			return nil
		}
	case int64:
		switch c.Type {
		case detect.Integer:
			c.append(x)
			return nil
		case detect.Real:
			c.append(float64(x))
			return nil
		}
	case float64:
		if c.Type == detect.Real {
			c.append(x)
			return nil
		}
	}
	return fmt.Errorf("column %s: found a %T, expected type %d", c.Name, v, c.Type)
}
