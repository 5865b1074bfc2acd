package vetting

import (
	"bytes"
	"context"
	"database/sql"
	"fmt"
	"io"
	"log/slog"
	"math"
	"math/rand/v2"
	"net"
	"net/http"
	"net/http/httptest"
	"net/url"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/jackc/pgx/v5"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/realbogus"
)

const scale = 0.8 // arcsec per px of the invented frames

// paint draws a round source on noise.
func paint(r *rand.Rand, flux, noise float64) []float32 {
	const n = detect.StampSize
	out := make([]float32, n*n)
	for j := range n {
		for i := range n {
			d2 := float64((i-n/2)*(i-n/2) + (j-n/2)*(j-n/2))
			out[j*n+i] = float32(flux*math.Exp(-d2/8) + noise*r.NormFloat64())
		}
	}
	return out
}

func newCandidate(id, frame string) detect.Candidate {
	n := math.NaN()
	return detect.Candidate{ID: id, Frame: frame, MidMJD: n, X: n, Y: n, XErr: n, YErr: n, RA: n, Dec: n, Flux: n, FluxErr: n, Mag: n, MagErr: n,
		MagLimit: n, Significance: n, RealProbability: n, ReferenceDistance: n, ReferenceMag: n, FitChi2: n, Length: n, Angle: n}
}

// fill puts three nights of a field and one of another into a catalogue. On each
// frame stand the same five sources and then others, of falling probability.
func fill(t testing.TB, store *catalog.Store, others int) {
	t.Helper()
	r := rand.New(rand.NewPCG(5, 6))
	for k := range 4 {
		rec := catalog.NewFrameRecord(fmt.Sprintf("frame%d", k), catalog.Searched)
		rec.Night, rec.Filter, rec.Field = fmt.Sprintf("2031-03-%02d", 1+k), []string{"g", "r"}[k%2], "A1"
		ra := 150.0
		if k == 3 {
			rec.Field, ra = "B2", 160
		}
		rec.MidMJD, rec.Exposure, rec.Width, rec.Height, rec.FWHM, rec.MagLimit5Sigma = 62900.25+float64(k), 60, 2000, 1500, 3.1, 20.5
		rec.Jacobian = [4]float64{-scale, 0, 0, scale}
		var list []detect.Candidate
		for i := range 5 + others {
			c := newCandidate(fmt.Sprintf("%016x", k<<32|i), rec.Frame)
			c.Filter, c.Night, c.MidMJD = rec.Filter, rec.Night, rec.MidMJD
			c.X, c.Y, c.XErr, c.YErr = 100+50*float64(i%30), 80+40*float64(i/30), 0.1, 0.1
			if i >= 5 {
				c.X += 7 * float64(k)
			}
			c.RA, c.Dec = ra-(c.X-1000)*scale/3600/math.Cos(2*math.Pi/180), 2+(c.Y-750)*scale/3600
			c.Significance, c.Flux, c.FluxErr = 40-float64(i)/4, 4000-30*float64(i), 100
			c.Mag, c.MagErr, c.MagLimit = 18+math.Mod(float64(i)*0.37, 2), 0.05, 20.5
			c.RealProbability, c.Kind = 0.99-0.9*float64(i)/float64(5+others), detect.Kinds[i%3]
			if i >= 5 && i%4 == 1 {
				c.Kind = detect.Artefact
			}
			c.ReferenceDistance, c.ReferenceMag, c.FitChi2 = 1.4, 19.2, 1.1
			if i < 5 {
				c.StampNew, c.StampReference, c.StampDifference = paint(r, 90, 5), paint(r, 30, 1), paint(r, 60, 5)
			}
			f := realbogus.Features{}
			for j := range f {
				f[j] = r.NormFloat64()
			}
			f.Clean()
			c.Features = f[:]
			list = append(list, c)
		}
		if err := store.AddFrame(t.Context(), rec, list); err != nil {
			t.Fatal(err)
		}
	}
}

// bench is a page on a catalogue.
type bench struct {
	testing.TB
	path   string
	store  *catalog.Store
	server *Server
	http   *httptest.Server
	log    *bytes.Buffer
}

func start(t testing.TB, others int) *bench {
	t.Helper()
	return startAt(t, filepath.Join(t.TempDir(), catalog.FileName), others)
}

func startAt(t testing.TB, path string, others int) *bench {
	t.Helper()
	store, err := catalog.Open(t.Context(), path, catalog.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { store.Close() })
	fill(t, store, others)
	return serve(t, store, path)
}

func serve(t testing.TB, store *catalog.Store, path string) *bench {
	t.Helper()
	model, err := realbogus.Shipped()
	if err != nil {
		t.Fatal(err)
	}
	var log bytes.Buffer
	s, err := New(store, Config{Survey: "Marrow Ridge", Reviewer: "Ada", Model: model, OnlyLoopback: true, Log: slog.New(slog.NewTextHandler(&log, nil)), Version: "test"})
	if err != nil {
		t.Fatal(err)
	}
	h := httptest.NewServer(s.Handler())
	t.Cleanup(h.Close)
	return &bench{t, path, store, s, h, &log}
}

// get fetches a page.
func (b *bench) get(path string, want int) string {
	b.Helper()
	answer, err := http.Get(b.http.URL + path)
	if err != nil {
		b.Fatal(err)
	}
	defer answer.Body.Close()
	text, err := io.ReadAll(answer.Body)
	if err != nil {
		b.Fatal(err)
	}
	if answer.StatusCode != want {
		b.Fatalf("GET %s: %d, want %d\n%.600s", path, answer.StatusCode, want, text)
	}
	return string(text)
}

// post sends a form as the reviewer's browser would, and does not follow where
// the answer leads.
func (b *bench) post(path, reviewer string, form url.Values, more func(*http.Request)) (*http.Response, string) {
	b.Helper()
	r, err := http.NewRequest("POST", b.http.URL+path, strings.NewReader(form.Encode()))
	if err != nil {
		b.Fatal(err)
	}
	r.Header.Set("Content-Type", "application/x-www-form-urlencoded")
	r.Header.Set("Sec-Fetch-Site", "same-origin")
	if reviewer != "" {
		r.AddCookie(&http.Cookie{Name: nameCookie, Value: url.QueryEscape(reviewer)})
	}
	if more != nil {
		more(r)
	}
	client := http.Client{CheckRedirect: func(*http.Request, []*http.Request) error { return http.ErrUseLastResponse }}
	answer, err := client.Do(r)
	if err != nil {
		b.Fatal(err)
	}
	defer answer.Body.Close()
	text, err := io.ReadAll(answer.Body)
	if err != nil {
		b.Fatal(err)
	}
	return answer, string(text)
}

func (b *bench) label(reviewer, candidate, verdict, comment string) {
	b.Helper()
	answer, text := b.post("/label", reviewer, url.Values{"candidate": {candidate}, "verdict": {verdict}, "comment": {comment}, "back": {"/?order=time"}}, nil)
	if answer.StatusCode != http.StatusSeeOther || answer.Header.Get("Location") != "/?order=time" {
		b.Fatalf("label: %d to %q\n%.500s", answer.StatusCode, answer.Header.Get("Location"), text)
	}
}

// said returns the labels that count as the catalogue has them.
func (b *bench) said() map[string]string {
	b.Helper()
	list, err := b.store.Labels(b.Context())
	if err != nil {
		b.Fatal(err)
	}
	out := map[string]string{}
	for _, l := range list {
		out[l.Candidate+" "+l.Reviewer] = strings.TrimSpace(string(l.Verdict) + " " + l.Comment)
	}
	return out
}

var cardID = regexp.MustCompile(`data-id="([0-9a-f]+)"`)

// ids returns the candidates on a page in their order.
func ids(page string) []string {
	var list []string
	for _, m := range cardID.FindAllStringSubmatch(page, -1) {
		list = append(list, m[1])
	}
	return list
}

func name(frame, i int) string { return fmt.Sprintf("%016x", frame<<32|i) }

// walk follows the links to the next page and returns all candidates and pages.
func (b *bench) walk(path string) (all []string, pages int) {
	b.Helper()
	next := regexp.MustCompile(`rel="next" href="([^"]+)"`)
	for path != "" {
		page := b.get(path, 200)
		all, path = append(all, ids(page)...), ""
		if pages++; pages > 50 {
			b.Fatal("the pages do not end")
		}
		if m := next.FindStringSubmatch(page); m != nil {
			path = strings.ReplaceAll(m[1], "&amp;", "&")
		}
	}
	return all, pages
}

func TestOrdersAndPages(t *testing.T) {
	b := start(t, 4) // 9 a frame
	keys := map[string]func(c *detect.Candidate) float64{
		"probability": func(c *detect.Candidate) float64 { return -c.RealProbability },
		"brightness":  func(c *detect.Candidate) float64 { return c.Mag },
		"time":        func(c *detect.Candidate) float64 { return -c.MidMJD },
	}
	list, err := b.store.Candidates(t.Context(), catalog.CandidateQuery{})
	if err != nil || len(list) != 36 {
		t.Fatalf("%d candidates, %v", len(list), err)
	}
	byID := map[string]*detect.Candidate{}
	for i := range list {
		byID[list[i].ID] = &list[i]
	}
	for order, key := range keys {
		all, pages := b.walk("/?order=" + order)
		if pages != 3 || len(all) != 36 {
			t.Errorf("%s: %d candidates on %d pages, want 36 on 3", order, len(all), pages)
		}
		if sorted := slices.Clone(all); len(slices.Compact(slices.Sorted(slices.Values(sorted)))) != len(all) {
			t.Errorf("%s: candidates stand there twice", order)
		}
		if !slices.IsSortedFunc(all, func(a, c string) int { return rising(key(byID[a]), key(byID[c])) }) {
			t.Errorf("%s: %v", order, all)
		}
	}

	// The order of teaching is that of the function made for it.
	all, _ := b.walk("/?order=teaching&night=2031-03-02")
	model, err := realbogus.Shipped()
	if err != nil {
		t.Fatal(err)
	}
	var pool []detect.Candidate
	for i := range list {
		if list[i].Night == "2031-03-02" {
			pool = append(pool, list[i])
		}
	}
	slices.SortFunc(pool, func(a, c detect.Candidate) int {
		return rising(math.Abs(a.RealProbability-0.5), math.Abs(c.RealProbability-0.5))
	})
	var features []realbogus.Features
	for i := range pool {
		c, err := b.store.Candidate(t.Context(), pool[i].ID)
		if err != nil {
			t.Fatal(err)
		}
		features = append(features, realbogus.Features(c.Features))
	}
	var want []string
	for _, i := range realbogus.TeachingOrder(model, features, 10*pageSize) {
		want = append(want, pool[i].ID)
	}
	if !slices.Equal(all, want) {
		t.Errorf("teaching: %v, want %v", all, want)
	}
}

func TestFilters(t *testing.T) {
	b := start(t, 4)
	for _, c := range []struct {
		path string
		want int
	}{
		{"/?night=2031-03-02", 9}, {"/?field=B2", 9}, {"/?field=nowhere", 0}, {"/?field=%27%3B--", 0}, {"/?kind=artefact", 4},
		{"/?low=0.75", 12}, {"/?low=0.75&high=0.9", 8}, {"/?judged=no", 36}, {"/?judged=yes", 0}, {"/?at=1000", 0},
	} {
		if all, _ := b.walk(c.path); len(all) != c.want {
			t.Errorf("%s: %d candidates, want %d", c.path, len(all), c.want)
		}
	}
	for _, bad := range []string{"/?night=yesterday", "/?kind=x", "/?low=2", "/?low=NaN", "/?high=x", "/?order=x", "/?judged=x", "/?at=-1", "/?at=x", "/?begun=x",
		"/?begun=99999999999999999", "/objects?state=x", "/objects?low=-1", "/?field=%00"} {
		b.get(bad, 400)
	}
	for _, gone := range []string{"/candidate/0", "/candidate/%27%20OR%201=1", "/object/nothing", "/object/%00", "/nothing", "/vet.css/x"} {
		b.get(gone, 404)
	}
	if b.log.Len() > 0 {
		t.Errorf("a user's mistake was logged as ours:\n%s", b.log)
	}
}

func TestLabelsCountAtOnceAndStay(t *testing.T) {
	b := start(t, 4)
	first := b.get("/", 200)
	order := ids(first)
	if !strings.Contains(first, "no label yet") || len(order) != pageSize {
		t.Fatalf("%d cards", len(order))
	}
	b.label("", order[0], "real", "")
	b.label("", order[1], "bogus", "a <b>ghost</b> & more")
	b.label("Grace", order[1], "real", "")
	want := map[string]string{order[0] + " Ada": "real", order[1] + " Ada": "bogus a <b>ghost</b> & more", order[1] + " Grace": "real"}
	if got := b.said(); fmt.Sprint(got) != fmt.Sprint(want) {
		t.Errorf("labels %v, want %v", got, want)
	}
	page := b.get("/candidate/"+order[1], 200)
	if !strings.Contains(page, "Reviewers disagree") || !strings.Contains(page, "a &lt;b&gt;ghost&lt;/b&gt; &amp; more") || strings.Contains(page, "<b>ghost") {
		t.Error("the candidate's page does not show what was said, or not safely")
	}
	for path, n := range map[string]int{"/?judged=yes": 2, "/?judged=no": 34, "/?judged=mine": 2, "/?judged=others": 34, "/?judged=disputed": 1} {
		if all, _ := b.walk(path); len(all) != n {
			t.Errorf("%s: %d, want %d", path, len(all), n)
		}
	}

	// A fresh queue has them last; one begun before does not move.
	all, _ := b.walk("/")
	if slices.Index(all, order[0]) < 34 || slices.Index(all, order[1]) < 34 {
		t.Error("candidates with a label do not come last")
	}
	begun := time.Now().Add(-time.Hour).UnixMilli()
	for _, path := range []string{"/?begun=%d", "/?begun=%d&judged=no"} {
		if again := ids(b.get(fmt.Sprintf(path, begun), 200)); !slices.Equal(again, order) {
			t.Errorf("a queue begun before the labels moved: %v", again)
		}
	}

	// Another start of the page on the same file.
	b.http.Close()
	b.store.Close()
	store, err := catalog.Open(t.Context(), b.path, catalog.DefaultConfig())
	if err != nil {
		t.Fatal(err)
	}
	defer store.Close()
	b2 := serve(t, store, b.path)
	if got := b2.said(); fmt.Sprint(got) != fmt.Sprint(want) {
		t.Errorf("after a restart: %v, want %v", got, want)
	}
}

func TestUndo(t *testing.T) {
	b := start(t, 0)
	id, other := name(0, 0), name(0, 1)
	undo := func(who string, want int) string {
		t.Helper()
		answer, text := b.post("/undo", who, url.Values{"back": {"/"}}, nil)
		if answer.StatusCode != want {
			t.Fatalf("undo: %d, want %d\n%.300s", answer.StatusCode, want, text)
		}
		return text
	}
	undo("", 409)
	b.label("", id, "real", "first")
	b.label("", id, "bogus", "")
	b.label("Grace", other, "real", "")
	b.label("", other, "unsure", "")
	if !strings.Contains(b.get("/", 200), "unsure, "+other) {
		t.Error("the page does not say what undo would take back")
	}
	undo("", 303)
	undo("", 303)
	got := b.said()
	if got[id+" Ada"] != "real first" || got[other+" Ada"] != "unsure taken back" || got[other+" Grace"] != "real" {
		t.Errorf("after two: %v", got)
	}
	undo("", 303)
	undo("", 409)
	if all, _ := b.walk("/?judged=yes"); !slices.Equal(all, []string{other}) {
		t.Errorf("with a label: %v, want Grace's only", all)
	}
	// Without a memory of it, a verdict is taken back at its candidate.
	b.label("Grace", other, "none", "")
	if all, _ := b.walk("/?judged=yes"); len(all) > 0 {
		t.Errorf("with a label: %v, want none", all)
	}
	undo("Grace", 303)
	if got := b.said(); got[other+" Grace"] != "real" {
		t.Errorf("after undoing the taking back: %v", got)
	}
}

func TestScriptGetsPartsAndTexts(t *testing.T) {
	b := start(t, 0)
	scripted := func(r *http.Request) { r.Header.Set("X-Vet", "1") }
	id := name(1, 2)
	answer, text := b.post("/label", "Grace Ö", url.Values{"candidate": {id}, "verdict": {"bogus"}}, scripted)
	h := answer.Header
	if answer.StatusCode != 200 || h.Get("X-Vet-Candidate") != id || h.Get("X-Vet-Verdict") != "bogus" || !strings.Contains(text, "Grace Ö") || strings.Contains(text, "<html") {
		t.Errorf("%d %v\n%s", answer.StatusCode, h, text)
	}
	if last, err := url.PathUnescape(h.Get("X-Vet-Undo")); err != nil || last != "bogus, "+id {
		t.Errorf("undo: %q, %v", last, err)
	}
	answer, text = b.post("/label", "", url.Values{"candidate": {"nothing"}, "verdict": {"real"}}, scripted)
	if answer.StatusCode != 404 || strings.Contains(text, "<") || !strings.Contains(text, "nothing") {
		t.Errorf("%d %q", answer.StatusCode, text)
	}
}

func TestStrangeRequestsAreRefused(t *testing.T) {
	b := start(t, 0)
	id := name(0, 0)
	good := url.Values{"candidate": {id}, "verdict": {"real"}}
	with := func(key, value string) url.Values {
		v := url.Values{"candidate": {id}, "verdict": {"real"}}
		v.Set(key, value)
		return v
	}
	for what, c := range map[string]struct {
		path   string
		form   url.Values
		more   func(*http.Request)
		status int
	}{
		"other site":            {"/label", good, func(r *http.Request) { r.Header.Set("Sec-Fetch-Site", "cross-site") }, 403},
		"other port":            {"/undo", nil, func(r *http.Request) { r.Header.Set("Sec-Fetch-Site", "same-site") }, 403},
		"other origin":          {"/label", good, func(r *http.Request) { r.Header.Del("Sec-Fetch-Site"); r.Header.Set("Origin", "http://evil.test") }, 403},
		"other origin, remark":  {"/remark", good, func(r *http.Request) { r.Header.Del("Sec-Fetch-Site"); r.Header.Set("Origin", "null") }, 403},
		"name bound to us":      {"/label", good, func(r *http.Request) { r.Host = "evil.test" }, 421},
		"address not loopback":  {"/label", good, func(r *http.Request) { r.Host = "192.0.2.7:80" }, 421},
		"no host":               {"/label", good, func(r *http.Request) { r.Host = ":80" }, 421},
		"too large":             {"/label", with("comment", strings.Repeat("x", mostBody)), nil, 413},
		"long comment":          {"/label", with("comment", strings.Repeat("x", mostComment+1)), nil, 400},
		"zero in the comment":   {"/label", with("comment", "a\x00b"), nil, 400},
		"no text":               {"/label", with("comment", "\xff\xfe"), nil, 400},
		"no verdict":            {"/label", with("verdict", ""), nil, 400},
		"other verdict":         {"/label", with("verdict", "maybe"), nil, 400},
		"other candidate":       {"/label", with("candidate", "x' OR '1'='1"), nil, 404},
		"no candidate":          {"/label", with("candidate", ""), nil, 404},
		"name of two lines":     {"/reviewer", url.Values{"name": {"Ada\nReal"}}, nil, 400},
		"no name":               {"/reviewer", url.Values{"name": {"  "}}, nil, 400},
		"state of no object":    {"/remark", url.Values{"object": {"x"}, "state": {"watched"}}, nil, 404},
		"no such state":         {"/remark", url.Values{"object": {id}, "state": {"x"}}, nil, 400},
		"nothing said":          {"/remark", url.Values{"object": {id}}, nil, 400},
		"no decision":           {"/decide", url.Values{"object": {id}}, nil, 400},
		"merge with itself":     {"/decide", url.Values{"object": {id}, "what": {"merge"}, "other": {id}}, nil, 409},
		"split of nothing":      {"/decide", url.Values{"object": {id}, "what": {"split"}}, nil, 409},
		"withdrawal of nothing": {"/decide", url.Values{"object": {id}, "what": {"withdraw"}, "decision": {"x"}}, nil, 404},
	} {
		answer, text := b.post(c.path, "", c.form, c.more)
		if answer.StatusCode != c.status {
			t.Errorf("%s: %d, want %d\n%.300s", what, answer.StatusCode, c.status, text)
		}
	}
	if got := b.said(); len(got) > 0 {
		t.Errorf("something was stored: %v", got)
	}
	if answer, err := http.Get(b.http.URL + "/label"); err != nil || answer.StatusCode == 200 {
		t.Errorf("a label can be given by following a link: %v %v", answer.StatusCode, err)
	}
	answer, err := http.Get(b.http.URL + "/")
	if err != nil {
		t.Fatal(err)
	}
	if csp := answer.Header.Get("Content-Security-Policy"); !strings.Contains(csp, "default-src 'none'") || !strings.Contains(csp, "frame-ancestors 'none'") {
		t.Errorf("policy %q", csp)
	}
	for _, to := range []string{"//evil.test/", "http://evil.test/", "/\\evil.test", "javascript:alert(1)", "x", ""} {
		answer, _ := b.post("/reviewer", "", url.Values{"name": {"Grace"}, "back": {to}}, nil)
		if answer.Header.Get("Location") != "/" {
			t.Errorf("back %q leads to %q", to, answer.Header.Get("Location"))
		}
	}
}

func TestHosts(t *testing.T) {
	closed, open := Server{cfg: Config{OnlyLoopback: true}}, Server{cfg: Config{Hosts: []string{"vet.example"}}}
	for _, c := range []struct {
		host         string
		closed, open bool
	}{
		{"127.0.0.1:80", true, true}, {"localhost:1", true, true}, {"LOCALHOST", true, true}, {"[::1]:80", true, true}, {"[::1]", true, true}, {"localhost.:80", true, true},
		{"192.0.2.1:80", false, true}, {"[2001:db8::1]:80", false, true}, {"vet.example:80", false, true},
		{"evil.test", false, false}, {"127.0.0.1.evil.test", false, false}, {"localhost.evil.test:80", false, false}, {"", false, false},
	} {
		if got := closed.meant(c.host); got != c.closed {
			t.Errorf("on loopback, %q: %v", c.host, got)
		}
		if got := open.meant(c.host); got != c.open {
			t.Errorf("on another address, %q: %v", c.host, got)
		}
	}
}

func TestObjects(t *testing.T) {
	b := start(t, 0)
	page := b.get("/objects", 200)
	links := regexp.MustCompile(`href="(/object/[^"]+)"`).FindAllStringSubmatch(page, -1)
	if len(links) != 6 || !strings.Contains(page, caution) {
		t.Fatalf("%d objects, caution %v", len(links), strings.Contains(page, caution))
	}
	o, err := b.store.Object(t.Context(), name(0, 0))
	if err != nil {
		t.Fatal(err)
	}
	at := "/object/" + url.PathEscape(o.Name)
	answer, _ := b.post("/remark", "Grace", url.Values{"object": {o.Name}, "state": {"watched"}, "comment": {"on a spiral arm"}, "back": {at}}, nil)
	if answer.StatusCode != 303 || answer.Header.Get("Location") != at {
		t.Fatalf("%d to %s", answer.StatusCode, answer.Header.Get("Location"))
	}
	b.post("/remark", "", url.Values{"object": {o.Name}, "comment": {"host at z = 0.03"}}, nil)
	page = b.get(at, 200)
	for _, want := range []string{"watched", "on a spiral arm", "Grace", "host at z = 0.03", caution, "3 detections in 3 nights", name(0, 0), name(1, 0), name(2, 0)} {
		if !strings.Contains(page, want) {
			t.Errorf("the object's page does not say %q", want)
		}
	}
	if n := strings.Count(page, "data:image/png"); n != 9 {
		t.Errorf("%d cut-outs, want 9", n)
	}
	if page := b.get("/candidate/"+name(2, 0), 200); !strings.Contains(page, name(1, 0)) || !strings.Contains(page, "log sn") {
		t.Error("the candidate's page lacks its object's history or its features")
	}

	answer, text := b.post("/decide", "", url.Values{"object": {o.Name}, "what": {"split"}, "part": {name(2, 0)}, "comment": {"two stars"}, "back": {at}}, nil)
	if answer.StatusCode != 303 {
		t.Fatalf("split: %d\n%.400s", answer.StatusCode, text)
	}
	page = b.get("/object/"+name(2, 0), 200)
	id := regexp.MustCompile(`name="decision" value="([0-9a-f]+)"`).FindStringSubmatch(page)
	if id == nil || !strings.Contains(page, "two stars") || !strings.Contains(page, "1 detection in 1 night") {
		t.Fatal("the split is not shown")
	}
	parted, err := b.store.Object(t.Context(), name(2, 0))
	if err != nil {
		t.Fatal(err)
	}
	answer, text = b.post("/decide", "", url.Values{"object": {parted.Name}, "what": {"merge"}, "other": {name(0, 0)}}, nil)
	if answer.StatusCode != 303 {
		t.Fatalf("merge: %d\n%.400s", answer.StatusCode, text)
	}
	if page := b.get(answer.Header.Get("Location"), 200); !strings.Contains(page, "3 detections in 3 nights") {
		t.Error("the merge is not shown")
	}
}

var dataURI = regexp.MustCompile(`data:[^"]*`)

// Rows of which something is missing or broken are shown with what is there.
func TestDamagedRowsAreShown(t *testing.T) {
	b := start(t, 1)
	db, err := sql.Open("sqlite", "file:"+b.path)
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	do := func(query string) {
		t.Helper()
		if _, err := db.Exec(query); err != nil {
			t.Fatal(query, err)
		}
	}
	do("DELETE FROM stamps WHERE candidate_id = '" + name(0, 0) + "'")
	do("UPDATE stamps SET stamp_new = x'0102030405', stamp_reference = NULL, features = x'00' WHERE candidate_id = '" + name(0, 1) + "'")
	do("UPDATE stamps SET stamp_difference = zeroblob(10404), features = x'000000000000f87f000000000000f07f' WHERE candidate_id = '" + name(0, 2) + "'")
	do(`UPDATE candidates SET mag = NULL, flux = NULL, significance = NULL, real_probability = NULL, kind = NULL, ra_deg = NULL, dec_deg = NULL, mid_mjd = 1e300,
		x_px = NULL, reference_distance_arcsec = 9e999, flags = -1, object = NULL, night = NULL, filter = NULL WHERE candidate_id = '` + name(0, 3) + "'")
	do("UPDATE candidates SET real_probability = 7, ra_deg = 1e9, kind = 'strange<i>' WHERE candidate_id = '" + name(0, 4) + "'")
	do("UPDATE frames SET xi_x = 0, xi_y = 0, eta_x = 9e999, eta_y = 0 WHERE frame = 'frame0'")
	for _, order := range orders {
		all, _ := b.walk("/?order=" + order.Name)
		if len(all) != 24 {
			t.Errorf("%s: %d candidates, want 24", order.Name, len(all))
		}
	}
	for i, wants := range [][]string{
		{"no cut-out stored", "no features"},
		{"cut-out damaged: 1 pixels, expected 2601", "cut-out reference"},
		{"stored by another version", "unknown"},
		{"kind not known", "Not in the catalogue", "significance", "position", "brightness"},
		{"strange&lt;i&gt;"},
	} {
		page := b.get("/candidate/"+name(0, i), 200)
		for _, want := range wants {
			if !strings.Contains(page, want) {
				t.Errorf("candidate %d: the page does not say %q", i, want)
			}
		}
		page = dataURI.ReplaceAllString(page, "")
		if strings.Contains(page, "NaN") || strings.Contains(page, "Inf") {
			t.Errorf("candidate %d: an unknown number is shown as one", i)
		}
	}
	b.get("/objects", 200)
	b.get("/object/"+name(0, 1), 200)

	// A text where a number belongs makes the row unreadable, not the page.
	do("UPDATE candidates SET mag = 'bright' WHERE candidate_id = '" + name(1, 1) + "'")
	page := b.get("/?judged=no", 200)
	if !strings.Contains(page, "left out here") {
		t.Error("the page does not tell of the row that it cannot show")
	}
	if all, _ := b.walk("/"); len(all) != 23 {
		t.Errorf("%d candidates, want 23", len(all))
	}
	for _, path := range []string{"/object/" + name(1, 1), "/candidate/" + name(0, 1)} {
		if page := b.get(path, 200); !strings.Contains(page, "cannot be read") || !strings.Contains(page, "column mag") {
			t.Errorf("%s does not tell what cannot be read", path)
		}
	}
	if page := b.get("/candidate/"+name(1, 1), 500); !strings.Contains(page, "column mag") {
		t.Error("a candidate that cannot be read is not explained")
	}
}

func TestReviewersAtTheSameTime(t *testing.T) {
	b := start(t, 4)
	var wait sync.WaitGroup
	for k := range 4 {
		wait.Go(func() {
			who := fmt.Sprintf("reviewer %d", k)
			for i := range 9 {
				form := url.Values{"candidate": {name(0, i)}, "verdict": {[]string{"real", "bogus"}[(i+k)%2]}, "back": {"/"}}
				if answer, text := b.post("/label", who, form, nil); answer.StatusCode != 303 {
					t.Errorf("%s: %d\n%.300s", who, answer.StatusCode, text)
				}
			}
			if answer, _ := b.post("/undo", who, nil, nil); answer.StatusCode != 303 {
				t.Errorf("%s: undo %d", who, answer.StatusCode)
			}
		})
	}
	for range 2 {
		b.get("/?order=teaching", 200)
	}
	wait.Wait()
	got := b.said()
	if len(got) != 36 {
		t.Fatalf("%d labels, want 36", len(got))
	}
	for k := range 4 {
		for i := range 9 {
			want := []string{"real", "bogus"}[(i+k)%2]
			if i == 8 {
				want = "unsure taken back"
			}
			if v := got[fmt.Sprintf("%s reviewer %d", name(0, i), k)]; v != want {
				t.Errorf("candidate %d of reviewer %d: %q, want %q", i, k, v, want)
			}
		}
	}
}

// The same on a server, whose SQL is another one.
func TestOnPostgreSQL(t *testing.T) {
	place := os.Getenv("NIGHTSIFT_TEST_POSTGRES")
	if place == "" {
		if os.Getenv("CI") == "true" {
			t.Fatal("NIGHTSIFT_TEST_POSTGRES names no server: test.sh must start one")
		}
		t.Skip("NIGHTSIFT_TEST_POSTGRES names no server; ./test.sh starts one")
	}
	schema := fmt.Sprintf("vetting_%d", os.Getpid())
	administer := func(statement string) {
		t.Helper()
		c, err := pgx.Connect(context.Background(), place)
		if err != nil {
			t.Fatal(err)
		}
		defer c.Close(context.Background())
		if _, err := c.Exec(context.Background(), statement); err != nil {
			t.Fatalf("%s: %v", statement, err)
		}
	}
	administer("CREATE SCHEMA " + schema)
	t.Cleanup(func() { administer("DROP SCHEMA " + schema + " CASCADE") })
	u, err := url.Parse(place)
	if err != nil {
		t.Fatal(err)
	}
	q := u.Query()
	q.Set("search_path", schema)
	u.RawQuery = q.Encode()
	b := startAt(t, u.String(), 3)
	for _, o := range orders {
		if all, _ := b.walk("/?order=" + o.Name); len(all) != 32 {
			t.Errorf("%s: %d candidates, want 32", o.Name, len(all))
		}
	}
	if all, _ := b.walk("/?night=2031-03-02&field=A1&kind=faded&low=0.3&high=1"); len(all) != 1 {
		t.Errorf("filtered: %v, want one", all)
	}
	if all, _ := b.walk("/?field=a%3F%27%5C%24%3B--"); len(all) > 0 {
		t.Errorf("of a field that is none: %v", all)
	}
	b.label("", name(0, 0), "real", `it's "one"? \ $1`)
	b.label("Grace", name(0, 0), "bogus", "")
	if page := b.get("/?judged=disputed", 200); !slices.Equal(ids(page), []string{name(0, 0)}) {
		t.Error("a disputed label is not found")
	}
	b.get("/object/"+name(0, 0), 200)
	b.get("/objects?night=2031-03-01&low=0.5&state=new", 200)
}

func TestServeEndsWithItsContext(t *testing.T) {
	b := start(t, 0)
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	if !Loopback(l.Addr()) || Loopback(&net.TCPAddr{IP: net.IPv4zero, Port: 80}) || Loopback(&net.TCPAddr{IP: net.ParseIP("192.0.2.1")}) {
		t.Error("loopback addresses are not told from others")
	}
	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- b.server.Serve(ctx, l) }()
	answer, err := http.Get("http://" + l.Addr().String() + "/objects")
	if err != nil || answer.StatusCode != 200 {
		t.Fatal(answer, err)
	}
	answer.Body.Close()
	cancel()
	select {
	case err := <-ended:
		if err != nil {
			t.Error(err)
		}
	case <-time.After(20 * time.Second):
		t.Fatal("it does not end")
	}
}

// Pages ask nothing of other servers.
func TestPagesAreComplete(t *testing.T) {
	b := start(t, 0)
	outside := regexp.MustCompile(`(?i)(?:src|href|url\(|@import)\s*[="'(]*\s*(https?:)?//`)
	for _, path := range []string{"/", "/objects", "/candidate/" + name(0, 0), "/object/" + name(0, 0), "/vet.css", "/vet.js"} {
		page := b.get(path, 200)
		if m := outside.FindString(page); m != "" {
			t.Errorf("%s asks for %s", path, m)
		}
		if !strings.HasPrefix(path, "/vet") && !strings.Contains(page, caution) {
			t.Errorf("%s comes without the caution", path)
		}
	}
	if _, err := New(b.store, Config{Reviewer: "a\nb"}); err == nil {
		t.Error("a reviewer of two lines is taken")
	}
}

func BenchmarkQueue(b *testing.B) {
	s := start(b, 5000)
	for _, o := range orders {
		b.Run(o.Name, func(b *testing.B) {
			for b.Loop() {
				s.get("/?order="+o.Name, 200)
			}
		})
	}
}
