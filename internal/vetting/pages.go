package vetting

import (
	"bytes"
	"errors"
	"fmt"
	"html/template"
	"math"
	"net/http"
	"net/url"
	"slices"
	"strings"
	"time"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/realbogus"
)

// caution stands on every page that shows where something is.
const caution = "Before any telescope is pointed by this page, the sun, horizon and safety limits of the site and the word of its operators come first."

var functions = template.FuncMap{
	"words":     words,
	"objectURL": func(name string) string { return "/object/" + url.PathEscape(name) },
	"candidateURL": func(id string) string {
		return "/candidate/" + url.PathEscape(id)
	},
	"when":   func(t time.Time) string { return t.UTC().Format("2006-01-02 15:04") },
	"number": number,
	"place": func(ra, dec float64) string {
		if !onSky(ra, dec) {
			return "not known"
		}
		return position(ra, dec)
	},
	"caution": func() string { return caution },
	"on":      func(p page, k *card) shown { return shown{p, k} },
}

// page is what every page has.
type page struct {
	Title, Survey, Version string
	Reviewer               string
	Here                   string // address of this page, to come back to
	Undo                   string // what the reviewer's last label was; empty for none
	Data                   any
}

// show writes a page made by a template. Nothing is written before the whole
// page is there.
func (s *Server) show(w http.ResponseWriter, r *http.Request, status int, name, title string, data any) {
	who := s.who(r)
	p := page{Title: title, Survey: s.cfg.Survey, Version: s.cfg.Version, Reviewer: who, Here: r.URL.RequestURI(), Undo: s.lastWords(who), Data: data}
	if r.Method != http.MethodGet {
		p.Here = "/"
	}
	var out bytes.Buffer
	if err := s.pages.ExecuteTemplate(&out, name, p); err != nil {
		s.cfg.Log.Error("vetting page", "path", r.URL.Path, "error", err)
		http.Error(w, "The page could not be made: "+err.Error(), http.StatusInternalServerError)
		return
	}
	w.Header().Set("Content-Type", "text/html; charset=utf-8")
	w.WriteHeader(status)
	w.Write(out.Bytes())
}

// shown is a card on a page.
type shown struct {
	Page page
	*card
}

// choices are the nights and fields that filters offer.
type choices struct {
	until         time.Time
	Nights, Field []string
}

// offered returns the nights and fields of the catalogue, as known a minute ago
// at most.
func (s *Server) offered(r *http.Request) (choices, error) {
	s.mu.Lock()
	c := s.choices
	s.mu.Unlock()
	if s.now().Before(c.until) {
		return c, nil
	}
	frames, err := s.store.Frames(r.Context(), catalog.FrameQuery{Status: catalog.Searched})
	if err != nil {
		return c, err
	}
	nights, fields := map[string]bool{}, map[string]bool{}
	for i := range frames {
		nights[frames[i].Night], fields[frames[i].Field] = true, true
	}
	c = choices{until: s.now().Add(time.Minute)}
	for n := range nights {
		c.Nights = append(c.Nights, n)
	}
	for f := range fields {
		c.Field = append(c.Field, f)
	}
	known := func(list []string) []string { return slices.DeleteFunc(list, func(v string) bool { return v == "" }) }
	c.Nights, c.Field = known(c.Nights), known(c.Field)
	slices.Sort(c.Nights)
	slices.Reverse(c.Nights)
	slices.Sort(c.Field)
	s.mu.Lock()
	s.choices = c
	s.mu.Unlock()
	return c, nil
}

type queueData struct {
	Query            query
	Low, High        string
	Choices          choices
	Kinds            []detect.Kind
	Judgements       []judged
	Orders           []order
	Cards            []*card
	From, To, All    int
	Fresh            int // without a label
	Full             bool
	Deepest          int
	Notes            []string
	Previous, Onward string
	Again            string // the queue begun anew
}

func (s *Server) queuePage(w http.ResponseWriter, r *http.Request) {
	q, err := s.parseQuery(r.URL.Query())
	if err != nil {
		s.fail(w, r, err)
		return
	}
	who := s.who(r)
	found, err := s.find(r.Context(), q, who)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	offered, err := s.offered(r)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	d := queueData{Query: q, Low: number("%g", q.Low), High: number("%g", q.High), Choices: offered, Kinds: detect.Kinds, Judgements: judgements, Orders: orders,
		All: len(found.list), Full: found.full, Notes: found.notes}
	for i := range found.list {
		if len(found.labels[found.list[i].ID]) == 0 {
			d.Fresh++
		}
	}
	from := min(q.At, len(found.list))
	to := min(from+pageSize, len(found.list))
	if d.Cards, err = s.cards(r.Context(), found.list[from:to], found.labels, who); err != nil {
		s.fail(w, r, err)
		return
	}
	d.From, d.To = from+1, to
	if from > 0 {
		d.Previous = q.url(max(0, from-pageSize))
	}
	if to < len(found.list) {
		d.Onward = q.url(to)
	}
	again := q
	again.Begun = s.now()
	d.Again = again.url(0)
	s.show(w, r, http.StatusOK, "queue", "Queue", d)
}

type feature struct{ Name, Value, Meaning string }

type candidateData struct {
	Card     *card
	Near     []detection // other candidates within a few arcsec that are not of its object
	Features []feature
	Strange  string // why features have no names
}

// nearby [arcsec] is how far from a candidate others are listed.
const nearby = 5

func (s *Server) candidatePage(w http.ResponseWriter, r *http.Request) {
	ctx, id := r.Context(), r.PathValue("id")
	c, err := s.store.Candidate(ctx, id)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	labels, err := s.labels(ctx)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	cards, err := s.cards(ctx, []detect.Candidate{c}, labels, s.who(r))
	if err != nil {
		s.fail(w, r, err)
		return
	}
	d := candidateData{Card: cards[0]}
	if onSky(c.RA, c.Dec) {
		near, err := s.store.Candidates(ctx, catalog.CandidateQuery{Cone: &catalog.Cone{RA: c.RA, Dec: c.Dec, Radius: nearby}})
		if err != nil {
			d.Card.Gaps = append(d.Card.Gaps, "what else was found here: "+err.Error())
		}
		for i := range near {
			if n := &near[i]; n.ID != c.ID && len(d.Near) < 50 {
				d.Near = append(d.Near, detectionOf(&catalog.Member{Candidate: *n, Forms: true}))
			}
		}
	}
	named := len(c.Features) == realbogus.Count
	if !named && len(c.Features) > 0 {
		d.Strange = fmt.Sprintf("The %d features were stored by another version, whose names this one does not know; its own has %d.", len(c.Features), realbogus.Count)
	}
	for i, v := range c.Features {
		f := feature{Name: fmt.Sprint(i + 1), Value: number("%.3f", v)}
		if named {
			f.Name, f.Meaning = words(realbogus.Descriptions[i].Name), realbogus.Descriptions[i].Meaning
		}
		d.Features = append(d.Features, f)
	}
	s.show(w, r, http.StatusOK, "candidate", "Candidate "+c.ID, d)
}

type objectsData struct {
	Night, State, Least string
	Choices             choices
	States              []catalog.State
	Objects             []catalog.Object
	From, To, All       int
	Previous, Onward    string
}

const objectsPageSize = 100

func (s *Server) objectsPage(w http.ResponseWriter, r *http.Request) {
	v := r.URL.Query()
	d := objectsData{Night: v.Get("night"), State: v.Get("state"), Least: v.Get("low"), States: catalog.States}
	q, err := s.parseQuery(url.Values{"night": {d.Night}, "low": {d.Least}, "at": {v.Get("at")}})
	if err == nil && d.State != "" && !slices.Contains(catalog.States, catalog.State(d.State)) {
		err = malformed(fmt.Sprintf("state %q: expected one of %v", d.State, catalog.States))
	}
	if err != nil {
		s.fail(w, r, err)
		return
	}
	ask := catalog.ObjectQuery{Night: d.Night, State: catalog.State(d.State)}
	if q.Low > 0 {
		ask.MinProbability = q.Low
	}
	list, err := s.store.Objects(r.Context(), ask)
	if err == nil {
		d.Choices, err = s.offered(r)
	}
	if err != nil {
		s.fail(w, r, err)
		return
	}
	slices.SortStableFunc(list, func(a, b catalog.Object) int { return rising(-a.RealProbability, -b.RealProbability) })
	from := min(q.At, len(list))
	to := min(from+objectsPageSize, len(list))
	d.Objects, d.From, d.To, d.All = list[from:to], from+1, to, len(list)
	link := func(at int) string {
		return "/objects?" + url.Values{"night": {d.Night}, "state": {d.State}, "low": {d.Least}, "at": {fmt.Sprint(at)}}.Encode()
	}
	if from > 0 {
		d.Previous = link(max(0, from-objectsPageSize))
	}
	if to < len(list) {
		d.Onward = link(to)
	}
	s.show(w, r, http.StatusOK, "objects", "Objects", d)
}

type objectData struct {
	Object      catalog.Object
	FormerNames []string
	Facts       []fact
	Detections  []*memberCard
	Left        int // detections that are not shown
	Remarks     []catalog.Remark
	Decisions   []catalog.Decision
	States      []catalog.State
	Troubles    []string
}

type memberCard struct {
	*card
	Joined     bool
	ChiSquare  string
	FalseMatch string
	Forms      bool
}

// mostMembers of an object are shown with their cut-outs, the latest ones.
const mostMembers = 60

func (s *Server) objectPage(w http.ResponseWriter, r *http.Request) {
	ctx := r.Context()
	o, err := s.store.Object(ctx, r.PathValue("name"))
	if err != nil {
		s.fail(w, r, err)
		return
	}
	d := objectData{Object: o, States: catalog.States}
	// What cannot be read is said; the rest is shown.
	try := func(what string, err error) {
		if err != nil {
			d.Troubles = append(d.Troubles, what+" cannot be read: "+err.Error())
		}
	}
	members, err := s.store.Members(ctx, o)
	try("detections", err)
	d.FormerNames, err = s.store.FormerNames(ctx, o)
	try("former names", err)
	d.Remarks, err = s.store.Remarks(ctx, o)
	try("comments", err)
	decisions, err := s.store.Decisions(ctx)
	try("decisions", err)
	labels, err := s.labels(ctx)
	try("labels", err)
	var history catalog.History
	if len(members) > 0 {
		history, err = s.store.History(ctx, o)
		try("searches", err)
	}
	d.Facts = objectFacts(&o, &history)
	about := map[string]bool{o.Name: true}
	for _, n := range d.FormerNames {
		about[n] = true
	}
	for i := range members {
		about[members[i].ID] = true
	}
	for _, c := range decisions {
		if slices.ContainsFunc(c.About, func(n string) bool { return about[n] }) {
			d.Decisions = append(d.Decisions, c)
		}
	}
	d.Left = max(0, len(members)-mostMembers)
	members = members[d.Left:]
	list := make([]detect.Candidate, len(members))
	for i := range members {
		list[i] = members[i].Candidate
	}
	cards, err := s.cards(ctx, list, labels, s.who(r))
	if err != nil {
		s.fail(w, r, err)
		return
	}
	for i := len(members) - 1; i >= 0; i-- {
		m := &members[i]
		d.Detections = append(d.Detections, &memberCard{card: cards[i], Joined: !m.Forms, Forms: m.Forms,
			ChiSquare: number("%.1f", m.ChiSquare), FalseMatch: number("%.2g", m.FalseMatch)})
	}
	s.show(w, r, http.StatusOK, "object", o.Name, d)
}

func objectFacts(o *catalog.Object, h *catalog.History) []fact {
	var list []fact
	add := func(name, value string) {
		if value != "" {
			list = append(list, fact{name, value})
		}
	}
	add("position", fmt.Sprintf("%s ± %s″, %s″", position(o.RA, o.Dec), number("%.2f", o.RAErr), number("%.2f", o.DecErr)))
	add("in degrees", degrees(o.RA, o.Dec))
	add("kind", words(string(o.Kind)))
	add("detections", historyWords(o))
	add("filters", o.Filters)
	add("best probability", number("%.3f", o.RealProbability))
	if h.Searches > 0 {
		add("searched here", fmt.Sprintf("%s, %d before the first detection, %d after the last", count(h.Searches, "frame"), h.Before, h.Since))
	}
	if m := h.LastMissed; m != nil {
		add("last not seen", strings.TrimSpace(fmt.Sprintf("%s %s", when(m.MidMJD), m.Filter))+", 5σ limit "+number("%.2f", m.MagLimit5Sigma)+" mag")
	}
	if finite(h.Rise) && h.Rise != 0 {
		add("rise", withError("%.2f", h.Rise, h.RiseErr)+" mag a day to the brightest")
	}
	if finite(h.RiseLimit) {
		add("rise before", "at least "+number("%.2f", math.Abs(h.RiseLimit))+" mag a day")
	}
	return list
}

// back returns the page to go to after an action: one of this server's.
func back(r *http.Request) string {
	to := r.PostFormValue("back")
	if u, err := url.Parse(to); err != nil || u.Scheme != "" || u.Host != "" || !strings.HasPrefix(to, "/") || strings.HasPrefix(to, "//") || strings.ContainsAny(to, "\\\r\n") {
		return "/"
	}
	return to
}

// form reads the fields of a request that changes something.
func form(r *http.Request) error {
	if err := r.ParseForm(); err != nil {
		var large *http.MaxBytesError
		if errors.As(err, &large) {
			return err
		}
		return malformed("The form cannot be read: " + err.Error())
	}
	return nil
}
