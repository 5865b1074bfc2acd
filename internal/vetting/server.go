// Package vetting is a local page on which reviewers look at candidates and say
// what is real. What they say goes into the catalogue at once.
//
// # Who may use it
//
// The page asks nobody for a password: whoever reaches its address may label,
// under any name. So it belongs on the loopback address, which only users of the
// same machine reach; from elsewhere an SSH tunnel leads to it. Against pages of
// others in the reviewer's own browser there are three fences: requests must name
// a host that is meant (no other name can be bound to this address), requests
// that change something must come from the page itself (net/http's
// CrossOriginProtection), and the browser is told to load nothing from
// anywhere else.
//
// # Place in a queue
//
// A queue shows first what nobody had judged when it was begun. Later labels do
// not move anything, so that its pages stay what they are while reviewers work;
// a new queue begins with each fresh visit.
package vetting

import (
	"context"
	"embed"
	"errors"
	"html/template"
	"log/slog"
	"net"
	"net/http"
	"net/netip"
	"os"
	"slices"
	"strings"
	"sync"
	"time"

	"nightsift/catalog"
	"nightsift/internal/realbogus"
)

//go:embed page.html vet.css vet.js
var assets embed.FS

// Config says what is shown and to whom. The zero value is not meaningful.
type Config struct {
	Survey   string           // name of the survey
	Night    string           // shown at first, YYYY-MM-DD; empty for all
	Reviewer string           // who labels, until the page is told another name
	Model    *realbogus.Model // for the order in which labels teach most; nil for none
	// Hosts are names under which the page may be asked for, besides IP addresses
	// and the names of this machine.
	Hosts []string
	// OnlyLoopback refuses requests for addresses other than loopback ones.
	OnlyLoopback bool
	Log          *slog.Logger
	Version      string
}

// Limits of what a request may bring.
const (
	mostBody    = 64 << 10 // bytes
	mostHeader  = 32 << 10
	mostComment = 2000 // characters
	mostName    = 80
	mostUndo    = 200 // labels that can be taken back, of each reviewer
)

// Server shows the catalogue's candidates and stores labels. It may be used by
// many goroutines.
type Server struct {
	store *catalog.Store
	cfg   Config
	pages *template.Template
	now   func() time.Time

	mu       sync.Mutex
	given    map[string][]step   // by reviewer: labels given here, the last one last
	known    map[string]features // by candidate
	choices  choices
	lastTime time.Time
}

// New returns a server on an open catalogue, which must be opened for writing.
func New(store *catalog.Store, cfg Config) (*Server, error) {
	if err := checkName(cfg.Reviewer); err != nil {
		return nil, err
	}
	pages, err := template.New("").Funcs(functions).ParseFS(assets, "page.html")
	if err != nil {
		return nil, err
	}
	return &Server{store: store, cfg: cfg, pages: pages, now: time.Now, given: map[string][]step{}, known: map[string]features{}}, nil
}

// Handler returns the pages behind their fences.
func (s *Server) Handler() http.Handler {
	mux := http.NewServeMux()
	mux.HandleFunc("GET /{$}", s.queuePage)
	mux.HandleFunc("GET /candidate/{id}", s.candidatePage)
	mux.HandleFunc("GET /objects", s.objectsPage)
	mux.HandleFunc("GET /object/{name}", s.objectPage)
	mux.HandleFunc("POST /label", s.label)
	mux.HandleFunc("POST /undo", s.undo)
	mux.HandleFunc("POST /reviewer", s.reviewer)
	mux.HandleFunc("POST /remark", s.remark)
	mux.HandleFunc("POST /decide", s.decide)
	for name, kind := range map[string]string{"vet.css": "text/css; charset=utf-8", "vet.js": "text/javascript; charset=utf-8"} {
		mux.HandleFunc("GET /"+name, func(w http.ResponseWriter, r *http.Request) {
			data, err := assets.ReadFile(name)
			if err != nil {
				http.Error(w, err.Error(), http.StatusInternalServerError)
				return
			}
			w.Header().Set("Content-Type", kind)
			w.Write(data)
		})
	}
	mux.HandleFunc("/", func(w http.ResponseWriter, r *http.Request) { s.fail(w, r, missing("no page "+r.URL.Path)) })

	cross := http.NewCrossOriginProtection()
	cross.SetDenyHandler(http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		http.Error(w, "This request came from another page than this one: nothing was changed.", http.StatusForbidden)
	}))
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		h := w.Header()
		h.Set("Content-Security-Policy", "default-src 'none'; img-src data:; style-src 'self'; script-src 'self'; connect-src 'self'; form-action 'self'; base-uri 'none'; frame-ancestors 'none'")
		h.Set("X-Content-Type-Options", "nosniff")
		h.Set("Referrer-Policy", "same-origin")
		h.Set("Cache-Control", "no-store")
		if !s.meant(r.Host) {
			http.Error(w, "This page does not answer to the host named in the request. Start nightsift vet with --host to allow a name.", http.StatusMisdirectedRequest)
			return
		}
		r.Body = http.MaxBytesReader(w, r.Body, mostBody)
		cross.Handler(mux).ServeHTTP(w, r)
	})
}

// meant reports whether a request's Host header names this server. A page of
// somebody else can have its name lead to this address, but it cannot have its
// requests carry another name than its own; an IP address is no name.
func (s *Server) meant(host string) bool {
	name := host
	if h, _, err := net.SplitHostPort(host); err == nil {
		name = h
	}
	name = strings.ToLower(strings.TrimSuffix(strings.Trim(name, "[]"), "."))
	if ip, err := netip.ParseAddr(name); err == nil {
		return !s.cfg.OnlyLoopback || ip.IsLoopback()
	}
	if name == "localhost" || slices.ContainsFunc(s.cfg.Hosts, func(h string) bool { return strings.EqualFold(h, name) }) {
		return true
	}
	if s.cfg.OnlyLoopback {
		return false
	}
	own, err := os.Hostname()
	if err != nil || name == "" {
		return false
	}
	short, _, _ := strings.Cut(own, ".")
	return strings.EqualFold(name, own) || strings.EqualFold(name, short)
}

// Loopback reports whether an address on which a server listens can only be
// reached from the same machine.
func Loopback(a net.Addr) bool {
	ip, err := netip.ParseAddrPort(a.String())
	return err == nil && ip.Addr().Unmap().IsLoopback()
}

// Serve answers requests until the context ends, then finishes those under way
// and returns nil. The listener is closed.
func (s *Server) Serve(ctx context.Context, l net.Listener) error {
	// Requests under way may finish after the context has ended.
	base := context.WithoutCancel(ctx)
	server := &http.Server{
		Handler:           s.Handler(),
		ReadHeaderTimeout: 5 * time.Second,
		ReadTimeout:       30 * time.Second,
		WriteTimeout:      2 * time.Minute,
		IdleTimeout:       2 * time.Minute,
		MaxHeaderBytes:    mostHeader,
		BaseContext:       func(net.Listener) context.Context { return base },
		ErrorLog:          slog.NewLogLogger(s.cfg.Log.Handler(), slog.LevelWarn),
	}
	stopped := make(chan error, 1)
	stop := context.AfterFunc(ctx, func() {
		patience, cancel := context.WithTimeout(base, 5*time.Second)
		defer cancel()
		stopped <- errors.Join(server.Shutdown(patience), server.Close())
	})
	err := server.Serve(l)
	if stop() { // it ended by itself
		return err
	}
	if err := <-stopped; err != nil && !errors.Is(err, context.DeadlineExceeded) {
		return err
	}
	return nil
}

// problem is an error with the status that the answer has.
type problem struct {
	status int
	text   string
}

func (p *problem) Error() string { return p.text }

func missing(text string) error   { return &problem{http.StatusNotFound, text} }
func malformed(text string) error { return &problem{http.StatusBadRequest, text} }

// fail answers with an error: as a page, or as plain text to the page's script.
func (s *Server) fail(w http.ResponseWriter, r *http.Request, err error) {
	var p *problem
	var large *http.MaxBytesError
	status, text := http.StatusInternalServerError, err.Error()
	switch {
	case errors.As(err, &p):
		status = p.status
	case errors.As(err, &large):
		status, text = http.StatusRequestEntityTooLarge, "The request is too large: nothing was changed."
	case errors.Is(err, catalog.ErrNotFound):
		status = http.StatusNotFound
	case r.Context().Err() != nil:
		return // nobody waits any more
	default:
		s.cfg.Log.Error("vetting page", "path", r.URL.Path, "error", err)
	}
	if scripted(r) {
		http.Error(w, text, status)
		return
	}
	s.show(w, r, status, "failed", text, text)
}

// scripted reports whether the page's script asks, which wants parts of pages.
func scripted(r *http.Request) bool { return r.Header.Get("X-Vet") != "" }
