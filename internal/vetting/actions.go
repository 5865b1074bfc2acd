package vetting

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"net/http"
	"net/url"
	"slices"
	"strings"
	"time"
	"unicode"
	"unicode/utf8"

	"nightsift/catalog"
)

// step is a label given on this page, with what the reviewer had said before.
type step struct {
	label  catalog.Label
	before *catalog.Label
}

const nameCookie = "nightsift_reviewer"

// checkName refuses what is no name of a reviewer.
func checkName(name string) error {
	if strings.TrimSpace(name) != name || name == "" || utf8.RuneCountInString(name) > mostName || !utf8.ValidString(name) || strings.ContainsFunc(name, unicode.IsControl) {
		return malformed(fmt.Sprintf("reviewer %q: expected a name of 1 to %d characters", name, mostName))
	}
	return nil
}

// checkComment cleans a comment.
func checkComment(text string) (string, error) {
	text = strings.TrimSpace(text)
	if utf8.RuneCountInString(text) > mostComment || !utf8.ValidString(text) || strings.ContainsRune(text, 0) {
		return "", malformed(fmt.Sprintf("The comment is too long or no text: expected at most %d characters. Nothing was changed.", mostComment))
	}
	return text, nil
}

// who returns the reviewer of a request: the name that this browser was told,
// else the one that the server was started with.
func (s *Server) who(r *http.Request) string {
	if c, err := r.Cookie(nameCookie); err == nil {
		if name, err := url.QueryUnescape(c.Value); err == nil && checkName(name) == nil {
			return name
		}
	}
	return s.cfg.Reviewer
}

func (s *Server) reviewer(w http.ResponseWriter, r *http.Request) {
	if err := form(r); err != nil {
		s.fail(w, r, err)
		return
	}
	name := strings.TrimSpace(r.PostFormValue("name"))
	if err := checkName(name); err != nil {
		s.fail(w, r, err)
		return
	}
	http.SetCookie(w, &http.Cookie{Name: nameCookie, Value: url.QueryEscape(name), Path: "/", MaxAge: 365 * 86400, HttpOnly: true, SameSite: http.SameSiteStrictMode})
	http.Redirect(w, r, back(r), http.StatusSeeOther)
}

// tick returns the time of a new remark or label: now, but later than any other
// given here, so that of two labels the later one counts.
func (s *Server) tick(after time.Time) time.Time {
	s.mu.Lock()
	defer s.mu.Unlock()
	t := s.now().UTC().Truncate(time.Millisecond)
	for _, other := range []time.Time{after, s.lastTime} {
		if !t.After(other) {
			t = other.Add(time.Millisecond)
		}
	}
	s.lastTime = t
	return t
}

// own returns the label of a reviewer for a candidate that counts, nil for none.
// One that was taken back is returned too.
func (s *Server) own(ctx context.Context, candidate, reviewer string) (*catalog.Label, error) {
	list, err := s.store.Labels(ctx)
	if err != nil {
		return nil, err
	}
	if i := slices.IndexFunc(list, func(l catalog.Label) bool { return l.Candidate == candidate && l.Reviewer == reviewer }); i >= 0 {
		return &list[i], nil
	}
	return nil, nil
}

func (s *Server) label(w http.ResponseWriter, r *http.Request) {
	if err := form(r); err != nil {
		s.fail(w, r, err)
		return
	}
	ctx, who := r.Context(), s.who(r)
	l := catalog.Label{Candidate: r.PostFormValue("candidate"), Reviewer: who}
	comment, err := checkComment(r.PostFormValue("comment"))
	if err != nil {
		s.fail(w, r, err)
		return
	}
	l.Comment = comment
	switch v := r.PostFormValue("verdict"); v {
	case "real", "bogus", "unsure":
		l.Verdict = catalog.Verdict(v)
	case "none":
		l.Verdict, l.Comment = catalog.Unsure, takenBack
	default:
		s.fail(w, r, malformed(fmt.Sprintf("verdict %q: expected real, bogus, unsure or none", v)))
		return
	}
	if l.Verdict == catalog.Unsure && l.Comment == takenBack && r.PostFormValue("verdict") != "none" {
		l.Comment += "." // those words have a meaning of their own
	}
	before, err := s.own(ctx, l.Candidate, who)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	var after time.Time
	if before != nil {
		after = before.Time
	}
	l.Time = s.tick(after)
	if err := s.store.AddLabel(ctx, l); err != nil {
		s.fail(w, r, err)
		return
	}
	if before != nil && isTakenBack(before) {
		before = nil
	}
	s.mu.Lock()
	done := append(s.given[who], step{l, before})
	s.given[who] = done[max(0, len(done)-mostUndo):]
	s.mu.Unlock()
	s.answer(w, r, l.Candidate)
}

// undo takes back the reviewer's last label given on this page. Their verdict
// before it counts again; where there was none, the candidate is without.
func (s *Server) undo(w http.ResponseWriter, r *http.Request) {
	if err := form(r); err != nil {
		s.fail(w, r, err)
		return
	}
	who := s.who(r)
	s.mu.Lock()
	done := s.given[who]
	var last step
	if len(done) > 0 {
		last = done[len(done)-1]
		s.given[who] = done[:len(done)-1]
	}
	s.mu.Unlock()
	if len(done) == 0 {
		s.fail(w, r, &problem{http.StatusConflict, "There is no label of " + who + " to undo since this page was started. A verdict can be changed or taken back at its candidate."})
		return
	}
	l := catalog.Label{Candidate: last.label.Candidate, Reviewer: who, Verdict: catalog.Unsure, Comment: takenBack}
	if last.before != nil {
		l.Verdict, l.Comment = last.before.Verdict, last.before.Comment
	}
	l.Time = s.tick(last.label.Time)
	if err := s.store.AddLabel(r.Context(), l); err != nil {
		s.mu.Lock()
		s.given[who] = append(s.given[who], last)
		s.mu.Unlock()
		s.fail(w, r, err)
		return
	}
	s.answer(w, r, l.Candidate)
}

// lastWords says what an undo would take back.
func (s *Server) lastWords(who string) string {
	s.mu.Lock()
	defer s.mu.Unlock()
	done := s.given[who]
	if len(done) == 0 {
		return ""
	}
	return labelWords(&done[len(done)-1].label)
}

func labelWords(l *catalog.Label) string {
	verdict := string(l.Verdict)
	if isTakenBack(l) {
		verdict = takenBack
	}
	return verdict + ", " + l.Candidate
}

// answer ends an action on a candidate: for the script with the labels of the
// candidate as they are now, else with the page from which it came.
func (s *Server) answer(w http.ResponseWriter, r *http.Request, candidate string) {
	if !scripted(r) {
		http.Redirect(w, r, back(r), http.StatusSeeOther)
		return
	}
	labels, err := s.labels(r.Context())
	if err != nil {
		s.fail(w, r, err)
		return
	}
	who := s.who(r)
	k := &card{Labels: labels[candidate], Disputed: disputed(labels[candidate])}
	h := w.Header()
	h.Set("X-Vet-Candidate", url.PathEscape(candidate))
	h.Set("X-Vet-Verdict", "")
	for i := range k.Labels {
		if k.Labels[i].Reviewer == who {
			h.Set("X-Vet-Verdict", string(k.Labels[i].Verdict))
		}
	}
	h.Set("X-Vet-Undo", url.PathEscape(s.lastWords(who)))
	h.Set("Content-Type", "text/html; charset=utf-8")
	var out bytes.Buffer
	if err := s.pages.ExecuteTemplate(&out, "labels", k); err != nil {
		s.fail(w, r, err)
		return
	}
	w.Write(out.Bytes())
}

// remark stores a comment on an object, a new state, or both.
func (s *Server) remark(w http.ResponseWriter, r *http.Request) {
	if err := form(r); err != nil {
		s.fail(w, r, err)
		return
	}
	m, err := s.said(r)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	m.State = catalog.State(r.PostFormValue("state"))
	object := r.PostFormValue("object")
	switch {
	case m.State != "" && !slices.Contains(catalog.States, m.State):
		err = malformed(fmt.Sprintf("state %q: expected one of %v", m.State, catalog.States))
	case m.State != "":
		err = s.store.SetState(r.Context(), object, m)
	case m.Comment == "":
		err = malformed("Neither a state nor a comment was given: nothing was changed.")
	default:
		err = s.store.AddComment(r.Context(), object, m)
	}
	if err != nil {
		s.fail(w, r, err)
		return
	}
	http.Redirect(w, r, back(r), http.StatusSeeOther)
}

func (s *Server) said(r *http.Request) (catalog.Remark, error) {
	comment, err := checkComment(r.PostFormValue("comment"))
	return catalog.Remark{Author: s.who(r), Time: s.tick(time.Time{}), Comment: comment}, err
}

// decide joins two objects, parts detections from one, or ends such a decision.
func (s *Server) decide(w http.ResponseWriter, r *http.Request) {
	if err := form(r); err != nil {
		s.fail(w, r, err)
		return
	}
	m, err := s.said(r)
	if err != nil {
		s.fail(w, r, err)
		return
	}
	ctx, object, to := r.Context(), r.PostFormValue("object"), back(r)
	if _, err := s.store.Object(ctx, object); err != nil {
		s.fail(w, r, err)
		return
	}
	switch what := r.PostFormValue("what"); what {
	case "merge":
		var merged catalog.Object
		if merged, err = s.store.Merge(ctx, object, strings.TrimSpace(r.PostFormValue("other")), m); err == nil {
			to = "/object/" + url.PathEscape(merged.Name)
		}
	case "split":
		_, err = s.store.Split(ctx, object, r.PostForm["part"], m)
	case "withdraw":
		err = s.store.Withdraw(ctx, r.PostFormValue("decision"), m)
	default:
		err = malformed(fmt.Sprintf("what %q: expected merge, split or withdraw", what))
	}
	var said *problem
	if err != nil && !errors.Is(err, catalog.ErrNotFound) && !errors.As(err, &said) {
		s.cfg.Log.Warn("vetting page", "path", r.URL.Path, "error", err)
		err = &problem{http.StatusConflict, "Nothing was changed: " + err.Error()}
	}
	if err != nil {
		s.fail(w, r, err)
		return
	}
	http.Redirect(w, r, to, http.StatusSeeOther)
}
