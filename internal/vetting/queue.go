package vetting

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"net/url"
	"slices"
	"strconv"
	"strings"
	"time"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/realbogus"
)

// order is a way to sort a queue.
type order struct {
	Name, Words string
	sql         string // of view_candidates, which comes first
	compare     func(a, b *detect.Candidate) int
}

// orders that a reviewer may choose. The first is the one used where none is
// named.
var orders = []order{
	{"probability", "most probable", "real_probability DESC NULLS LAST", func(a, b *detect.Candidate) int {
		return rising(-a.RealProbability, -b.RealProbability)
	}},
	{"brightness", "brightest", "mag NULLS LAST, abs(significance) DESC NULLS LAST", func(a, b *detect.Candidate) int {
		return cmp.Or(rising(a.Mag, b.Mag), rising(-math.Abs(a.Significance), -math.Abs(b.Significance)))
	}},
	{"time", "newest", "mid_mjd DESC NULLS LAST", func(a, b *detect.Candidate) int { return rising(-a.MidMJD, -b.MidMJD) }},
	{"teaching", "teaches the model most", "abs(real_probability - 0.5) NULLS LAST", func(a, b *detect.Candidate) int {
		return rising(math.Abs(a.RealProbability-0.5), math.Abs(b.RealProbability-0.5))
	}},
}

// rising compares numbers, unknown ones last.
func rising(a, b float64) int {
	switch {
	case math.IsNaN(a) || math.IsNaN(b):
		return cmp.Compare(indicator(math.IsNaN(a)), indicator(math.IsNaN(b)))
	default:
		return cmp.Compare(a, b)
	}
}

func indicator(b bool) int {
	if b {
		return 1
	}
	return 0
}

// judged is a choice of candidates by their labels.
type judged struct {
	Name, Words string
	takes       func(labels []catalog.Label, reviewer string) bool
}

var judgements = []judged{
	{"", "labelled or not", func([]catalog.Label, string) bool { return true }},
	{"no", "without a label", func(l []catalog.Label, _ string) bool { return len(l) == 0 }},
	{"yes", "with a label", func(l []catalog.Label, _ string) bool { return len(l) > 0 }},
	{"mine", "labelled by me", by},
	{"others", "not labelled by me", func(l []catalog.Label, who string) bool { return !by(l, who) }},
	{"disputed", "labelled real and bogus", func(l []catalog.Label, _ string) bool { return disputed(l) }},
}

func by(labels []catalog.Label, reviewer string) bool {
	return slices.ContainsFunc(labels, func(l catalog.Label) bool { return l.Reviewer == reviewer })
}

func disputed(labels []catalog.Label) bool {
	has := func(v catalog.Verdict) bool {
		return slices.ContainsFunc(labels, func(l catalog.Label) bool { return l.Verdict == v })
	}
	return has(catalog.Real) && has(catalog.Bogus)
}

// query is what a queue shows and where in it a page begins.
type query struct {
	Night, Field, Kind, Judged, Order string
	Low, High                         float64 // of the probability; NaN for no bound
	At                                int     // rank of the first one shown, from 0
	Begun                             time.Time
}

const (
	pageSize = 12
	// deepest is how many candidates without a label a queue holds. Beyond them
	// filters lead.
	deepest = 5000
	// mostTeaching is how many of them take part where the order needs their
	// features.
	mostTeaching = 1500
)

// parseQuery reads a query from a URL. What is not understood is an error: a
// filter that does nothing would mislead.
func (s *Server) parseQuery(v url.Values) (query, error) {
	q := query{Night: v.Get("night"), Field: v.Get("field"), Kind: v.Get("kind"), Judged: v.Get("judged"), Order: cmp.Or(v.Get("order"), orders[0].Name)}
	if !v.Has("night") {
		q.Night = s.cfg.Night
	}
	if q.Night != "" {
		if _, err := time.Parse(time.DateOnly, q.Night); err != nil {
			return q, malformed(fmt.Sprintf("night %q: expected the date of the evening, YYYY-MM-DD", q.Night))
		}
	}
	if strings.ContainsRune(q.Field, 0) || len(q.Field) > 500 {
		return q, malformed("field: expected a name")
	}
	if q.Kind != "" && !slices.Contains(detect.Kinds, detect.Kind(q.Kind)) {
		return q, malformed(fmt.Sprintf("kind %q: expected one of %v", q.Kind, detect.Kinds))
	}
	if !slices.ContainsFunc(judgements, func(j judged) bool { return j.Name == q.Judged }) {
		return q, malformed(fmt.Sprintf("judged %q: expected no, yes, mine, others or disputed", q.Judged))
	}
	if !slices.ContainsFunc(orders, func(o order) bool { return o.Name == q.Order }) {
		return q, malformed(fmt.Sprintf("order %q: expected probability, brightness, time or teaching", q.Order))
	}
	for name, to := range map[string]*float64{"low": &q.Low, "high": &q.High} {
		*to = math.NaN()
		if text := strings.TrimSpace(v.Get(name)); text != "" {
			x, err := strconv.ParseFloat(text, 64)
			if err != nil || !(x >= 0 && x <= 1) {
				return q, malformed(fmt.Sprintf("%s %q: expected a probability, 0 to 1", name, text))
			}
			*to = x
		}
	}
	if text := v.Get("at"); text != "" {
		n, err := strconv.Atoi(text)
		if err != nil || n < 0 {
			return q, malformed(fmt.Sprintf("at %q: expected a rank, 0 or more", text))
		}
		q.At = n
	}
	q.Begun = s.now()
	if text := v.Get("begun"); text != "" {
		ms, err := strconv.ParseInt(text, 10, 64)
		if err != nil || ms < 0 || ms > q.Begun.UnixMilli()+86400_000 {
			return q, malformed(fmt.Sprintf("begun %q: expected a time in milliseconds", text))
		}
		q.Begun = time.UnixMilli(ms)
	}
	return q, nil
}

// url returns the address of the queue from a rank on.
func (q query) url(at int) string {
	v := url.Values{"begun": {strconv.FormatInt(q.Begun.UnixMilli(), 10)}, "night": {q.Night}, "order": {q.Order}}
	if at > 0 {
		v.Set("at", strconv.Itoa(at))
	}
	for name, text := range map[string]string{"field": q.Field, "kind": q.Kind, "judged": q.Judged} {
		if text != "" {
			v.Set(name, text)
		}
	}
	for name, x := range map[string]float64{"low": q.Low, "high": q.High} {
		if !math.IsNaN(x) {
			v.Set(name, strconv.FormatFloat(x, 'g', -1, 64))
		}
	}
	return "/?" + v.Encode()
}

// quoted writes a text for a condition in SQL.
func quoted(text string) string { return "'" + strings.ReplaceAll(text, "'", "''") + "'" }

// oneOf is the condition that a column has one of some values.
func oneOf(column string, values []string) string {
	q := make([]string, len(values))
	for i, v := range values {
		q[i] = quoted(v)
	}
	return column + " IN (" + strings.Join(q, ", ") + ")"
}

// takenBack is the comment of a label that stands for none: what a reviewer
// once said stays in the catalogue, and what counts is the latest.
const takenBack = "taken back"

func isTakenBack(l *catalog.Label) bool {
	return l.Verdict == catalog.Unsure && l.Comment == takenBack
}

// labels returns the labels that count, by candidate.
func (s *Server) labels(ctx context.Context) (map[string][]catalog.Label, error) {
	list, err := s.store.Labels(ctx)
	if err != nil {
		return nil, err
	}
	of := map[string][]catalog.Label{}
	for _, l := range list {
		if l.Candidate != "" && !isTakenBack(&l) {
			of[l.Candidate] = append(of[l.Candidate], l)
		}
	}
	return of, nil
}

// queue is what a query gives.
type queue struct {
	list   []detect.Candidate
	labels map[string][]catalog.Label // that count now
	full   bool                       // more candidates match than the queue holds
	notes  []string                   // what a reviewer should know of the list
}

// find returns the candidates of a query in their order: those without a label
// when it was begun first.
func (s *Server) find(ctx context.Context, q query, reviewer string) (*queue, error) {
	labels, err := s.labels(ctx)
	if err != nil {
		return nil, err
	}
	before := map[string][]catalog.Label{}
	for id, list := range labels {
		for _, l := range list {
			if !l.Time.After(q.Begun) {
				before[id] = append(before[id], l)
			}
		}
	}
	o := orders[slices.IndexFunc(orders, func(o order) bool { return o.Name == q.Order })]
	taken := judgements[slices.IndexFunc(judgements, func(j judged) bool { return j.Name == q.Judged })].takes

	var conditions []string
	and := func(format string, values ...any) { conditions = append(conditions, fmt.Sprintf(format, values...)) }
	if q.Night != "" {
		and("night = %s", quoted(q.Night))
	}
	if q.Field != "" {
		and("field = %s", quoted(q.Field))
	}
	if q.Kind != "" {
		and("kind = %s", quoted(q.Kind))
	}
	if !math.IsNaN(q.Low) {
		and("real_probability >= %g", q.Low)
	}
	if !math.IsNaN(q.High) {
		and("real_probability <= %g", q.High)
	}
	switch q.Judged {
	case "yes", "mine", "disputed":
		and("verdicts > 0") // the rest would only fill the queue
	}
	if len(conditions) == 0 {
		and("1 = 1")
	}
	out := &queue{labels: labels}
	holds := deepest
	if q.Order == "teaching" {
		holds = mostTeaching
	}
	// Among so many there are enough without a label, if there are any more.
	most := holds + len(before)
	among := func(more string) string {
		return fmt.Sprintf("candidate_id IN (SELECT candidate_id FROM view_candidates WHERE %s%s ORDER BY %s, candidate_id LIMIT %d)",
			strings.Join(conditions, " AND "), more, o.sql, most+1)
	}
	list, err := s.store.Candidates(ctx, catalog.CandidateQuery{Condition: among("")})
	if err != nil && !catalog.IsServer(s.store.Path()) && ctx.Err() == nil {
		// A row with text where a number belongs spoils the whole answer.
		if list2, err2 := s.store.Candidates(ctx, catalog.CandidateQuery{Condition: sound + among(" AND "+sound+"1 = 1")}); err2 == nil {
			list, err = list2, nil
			out.notes = append(out.notes, "Rows of the catalogue with text where a number belongs are left out here: the file is damaged. Run nightsift catalog check, or process their frames again.")
		}
	}
	if err != nil {
		return nil, err
	}
	slices.SortStableFunc(list, func(a, b detect.Candidate) int { return cmp.Or(o.compare(&a, &b), cmp.Compare(a.ID, b.ID)) })
	if out.full = len(list) > most; out.full {
		list = list[:most]
	}
	list = slices.DeleteFunc(list, func(c detect.Candidate) bool { return !taken(before[c.ID], reviewer) })
	slices.SortStableFunc(list, func(a, b detect.Candidate) int {
		return cmp.Compare(indicator(len(before[a.ID]) > 0), indicator(len(before[b.ID]) > 0))
	})
	if q.Order == "teaching" {
		fresh, _ := slices.BinarySearchFunc(list, 1, func(c detect.Candidate, one int) int {
			return cmp.Compare(indicator(len(before[c.ID]) > 0), one)
		})
		if err := s.teach(ctx, list[:fresh], out); err != nil {
			return nil, err
		}
	}
	out.list = list
	return out, nil
}

// sound is a condition that holds for rows of an SQLite file of which no number
// is a text; it goes on with AND.
var sound = func() string {
	var b strings.Builder
	for _, c := range detect.Columns {
		if c.Type != detect.Text {
			fmt.Fprintf(&b, "typeof(%s) IN ('real', 'integer', 'null') AND ", c.Name)
		}
	}
	return b.String()
}()

// features are those of a candidate, and what tells that they are still those.
type features struct {
	significance, probability float64
	values                    realbogus.Features
}

const mostKnown = 20000 // features kept, 264 bytes each

// teach sorts a list by how much a label would teach the model. Candidates
// without features go last.
func (s *Server) teach(ctx context.Context, list []detect.Candidate, out *queue) error {
	if s.cfg.Model == nil {
		out.notes = append(out.notes, "There is no model: the order is by how near to ½ the probability is.")
		return nil
	}
	values := make([]realbogus.Features, 0, len(list))
	var with, without []detect.Candidate
	for i := range list {
		f, ok, err := s.featuresOf(ctx, &list[i])
		if err != nil {
			return err
		}
		if ok {
			values, with = append(values, f), append(with, list[i])
		} else {
			without = append(without, list[i])
		}
	}
	if n := len(without); n > 0 {
		out.notes = append(out.notes, fmt.Sprintf("%d candidates stand at the end: no features of this version's model are stored with them.", n))
	}
	for k, i := range realbogus.TeachingOrder(s.cfg.Model, values, 10*pageSize) {
		list[k] = with[i]
	}
	copy(list[len(with):], without)
	return nil
}

// featuresOf returns what the model sees of a candidate; ok is false where that
// is not stored, or is that of another version.
func (s *Server) featuresOf(ctx context.Context, c *detect.Candidate) (f realbogus.Features, ok bool, err error) {
	s.mu.Lock()
	known, there := s.known[c.ID]
	s.mu.Unlock()
	if there && known.significance == c.Significance && known.probability == c.RealProbability {
		return known.values, true, nil
	}
	full, err := s.store.Candidate(ctx, c.ID)
	if errors.Is(err, catalog.ErrNotFound) || err == nil && len(full.Features) != len(f) {
		return f, false, nil // its frame was processed again meanwhile, or by another version
	}
	if err != nil {
		return f, false, err
	}
	copy(f[:], full.Features)
	f.Clean() // damaged values must not reach the trees
	s.mu.Lock()
	defer s.mu.Unlock()
	if len(s.known) >= mostKnown {
		clear(s.known)
	}
	s.known[c.ID] = features{c.Significance, c.RealProbability, f}
	return f, true, nil
}
