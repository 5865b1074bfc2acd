package catalog

import (
	"context"
	"database/sql"
	"fmt"
	"io"
	"net"
	"net/url"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"nightsift/detect"
)

// Sixteen writers at once, each with its own connection, some with the same
// frames, lose and double nothing: the catalogue is the one that a single writer
// makes.
func TestManyWritersOnServer(t *testing.T) {
	const writers = 16
	inv := survey(31, 32, 15, 20, 300, -60)
	plain := newStore(t)
	addAll(t, plain, inv.frames)
	want := state(t, plain)
	place := newSchema(t)
	var work sync.WaitGroup
	for g := range writers {
		work.Go(func() {
			s, err := Open(ctx, place, DefaultConfig()) // all make the tables
			if err != nil {
				t.Error(err)
				return
			}
			defer s.Close()
			for k := range inv.frames {
				if k%writers != g && k%8 != g { // two write every eighth frame, all read
					continue
				}
				if err := s.AddFrame(ctx, inv.frames[k].rec, inv.frames[k].candidates); err != nil {
					t.Error(err)
				}
				if err := s.AddLabel(ctx, Label{Candidate: inv.frames[k].candidates[0].ID, Verdict: Real, Reviewer: "Ada", Time: at(g)}); err != nil {
					t.Error(err)
				}
			}
		})
	}
	work.Wait()
	s := open(t, place)
	if got := state(t, s); got != want {
		t.Errorf("after %d writers: %s", writers, difference(want, got))
	}
	healthy(t, s)
	labels, err := s.Labels(ctx)
	if err != nil || len(labels) != len(inv.frames) {
		t.Errorf("%d labels, %v, want %d", len(labels), err, len(inv.frames))
	}
}

// cutter passes bytes on to the server and can break all connections.
type cutter struct {
	net.Listener
	mu    sync.Mutex
	open  map[net.Conn]bool
	limit int // bytes from the client after which a connection breaks; 0: none
}

func newCutter(t *testing.T, place string) (*cutter, string) {
	t.Helper()
	u, err := url.Parse(place)
	if err != nil {
		t.Fatal(err)
	}
	q := u.Query()
	network, address := "tcp", u.Host
	if dir := q.Get("host"); dir != "" {
		network, address = "unix", filepath.Join(dir, ".s.PGSQL.5432")
	}
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	c := &cutter{Listener: l, open: map[net.Conn]bool{}}
	go func() {
		for {
			client, err := l.Accept()
			if err != nil {
				return
			}
			server, err := net.Dial(network, address)
			if err != nil {
				client.Close()
				continue
			}
			c.mu.Lock()
			c.open[client], c.open[server] = true, true
			limit := c.limit
			c.mu.Unlock()
			shut := func() { client.Close(); server.Close() }
			go func() {
				defer shut()
				if limit > 0 {
					io.CopyN(server, client, int64(limit))
					return
				}
				io.Copy(server, client)
			}()
			go func() { defer shut(); io.Copy(client, server) }()
		}
	}()
	t.Cleanup(func() { l.Close(); c.cut(0) })
	q.Del("host")
	q.Set("sslmode", "disable")
	u.Host, u.RawQuery = l.Addr().String(), q.Encode()
	return c, u.String()
}

// cut breaks every connection; later ones break after limit bytes.
func (c *cutter) cut(limit int) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.limit = limit
	for conn := range c.open {
		conn.Close()
	}
	clear(c.open)
}

// A connection that breaks inside a transaction leaves no half frame; the
// frame goes in by another try.
func TestLostConnection(t *testing.T) {
	place := newSchema(t)
	proxy, through := newCutter(t, place)
	s := open(t, through)
	inv := survey(7, 3, 10, 20, 60, 60)
	addAll(t, s, inv.frames[:1])

	// Break inside: all is written but the commit.
	tries := 0
	err := s.transact(ctx, true, func(tx *sql.Tx) error {
		n := inv.frames[1]
		n.rec.Candidates = len(n.candidates)
		if err := s.add(ctx, tx, &n.rec, n.candidates); err != nil {
			return err
		}
		if tries++; tries == 1 {
			proxy.cut(0)
		}
		return nil
	})
	if err != nil || tries != 2 {
		t.Errorf("%d tries, %v, want success with the second", tries, err)
	}
	healthy(t, s)
	// Between two transactions.
	proxy.cut(0)
	addAll(t, s, inv.frames[2:])
	// In the middle of the stream, at many places: none leaves a part.
	direct := open(t, place)
	for limit := 3000; limit < 60000; limit += 9001 {
		proxy.cut(limit)
		c, cancel := context.WithTimeout(ctx, 300*time.Millisecond)
		n := inv.frames[0]
		n.rec.Frame = fmt.Sprint("cut", limit)
		list := make([]detect.Candidate, len(n.candidates))
		for i := range list {
			list[i] = n.candidates[i]
			list[i].ID, list[i].Frame = identifier(limit, i), ""
		}
		err := s.AddFrame(c, n.rec, list)
		cancel()
		frames, ferr := direct.Frames(ctx, FrameQuery{Frame: n.rec.Frame})
		if ferr != nil || len(frames) > 1 || err == nil && len(frames) != 1 {
			t.Errorf("cut after %d bytes: %v; %d frames, %v", limit, err, len(frames), ferr)
		}
		healthy(t, direct)
	}
	proxy.cut(0)
	plain := newStore(t)
	addAll(t, plain, inv.frames)
	for _, f := range func() []FrameRecord { l, _ := direct.Frames(ctx, FrameQuery{}); return l }() {
		if strings.HasPrefix(f.Frame, "cut") {
			if _, err := s.RemoveFrame(ctx, f.Frame); err != nil {
				t.Fatal(err)
			}
		}
	}
	if want, got := state(t, plain), state(t, direct); got != want {
		t.Errorf("after all cuts: %s", difference(want, got))
	}
	// For good: a sentence, in time.
	proxy.Close()
	proxy.cut(0)
	c, cancel := context.WithTimeout(ctx, time.Second)
	defer cancel()
	if err := s.AddFrame(c, inv.frames[0].rec, nil); err == nil || !strings.Contains(err.Error(), "does not answer") {
		t.Errorf("without a server: %v", err)
	}
}

func TestServerErrorsSayWhatToDo(t *testing.T) {
	place := newSchema(t)
	s := open(t, place)
	addAll(t, s, survey(1, 1, 3, 3, 1, 1).frames)
	want := state(t, s)
	with := func(change func(*url.URL, url.Values)) string {
		u, err := url.Parse(place)
		if err != nil {
			t.Fatal(err)
		}
		q := u.Query()
		change(u, q)
		u.RawQuery = q.Encode()
		return u.String()
	}
	refused := func(name, place, sentence string) {
		t.Helper()
		for kind, open := range map[string]func(context.Context, string, Config) (*Store, error){"writing": Open, "reading": OpenReadOnly} {
			s, err := open(ctx, place, DefaultConfig())
			if err == nil {
				err = s.AddFrame(ctx, NewFrameRecord("x", Searched), nil)
				s.Close()
				if kind == "reading" {
					continue
				}
			}
			if err == nil || !strings.Contains(err.Error(), sentence) || strings.Contains(err.Error(), "secret") {
				t.Errorf("%s, for %s: %v; want a sentence with %q", name, kind, err, sentence)
			}
		}
	}
	refused("no database", with(func(u *url.URL, _ url.Values) { u.Path = "/nothing" }), "no such database")
	refused("no schema", with(func(_ *url.URL, q url.Values) { q.Set("search_path", "nothing") }), "no schema")
	refused("no user", with(func(u *url.URL, _ url.Values) { u.User = url.UserPassword("nobody", "secret") }), "refuses this user")
	refused("nonsense", "postgres://a:secret@b:c:d/x", "not understood")
	refused("read-only", with(func(_ *url.URL, q url.Values) { q.Set("default_transaction_read_only", "on") }), "read-only")
	if _, err := OpenReadOnly(ctx, newSchema(t), DefaultConfig()); err == nil || !strings.Contains(err.Error(), ErrAbsent.Error()) {
		t.Errorf("no catalogue: %v", err)
	}
	foreign := newSchema(t)
	u, _ := url.Parse(foreign)
	administer(t, "CREATE TABLE "+u.Query().Get("search_path")+".frames (cats INT)")
	refused("foreign", foreign, "another program")
	if got := state(t, s); got != want {
		t.Errorf("changed: %s", difference(want, got))
	}
	if _, err := s.writer.Exec("UPDATE catalogue_version SET version = version + 1"); err != nil {
		t.Fatal(err)
	}
	refused("newer", place, "newer version")
}

// Steps are undone together when one fails, and bring older tables forward.
func TestMigrationsOnServer(t *testing.T) {
	place := newSchema(t)
	s := open(t, place)
	addAll(t, s, survey(1, 2, 5, 5, 1, 1).frames)
	good := append(append([]string(nil), migrations...), "ALTER TABLE frames ADD COLUMN humidity REAL", "UPDATE frames SET humidity = 0.5")
	bad := append(append([]string(nil), migrations...), good[len(migrations)], "UPDATE nothing SET x = 1")
	if err := migrateServer(ctx, s.writer, bad); err == nil {
		t.Fatal("a failing step passed")
	}
	if v, err := serverVersion(ctx, s.writer); v != len(migrations) || err != nil {
		t.Fatalf("schema %d after a failed step, want %d; %v", v, len(migrations), err)
	}
	if err := migrateServer(ctx, s.writer, good); err != nil {
		t.Fatal(err)
	}
	var n int
	if err := s.writer.QueryRow("SELECT count(*) FROM frames WHERE humidity = 0.5").Scan(&n); err != nil || n != 2 {
		t.Fatalf("%d frames after the steps, want 2; %v", n, err)
	}
}

// A file that cannot be written, a full disk, a lock that does not end.
func TestFileErrorsSayWhatToDo(t *testing.T) {
	s := newStore(t)
	inv := survey(3, 2, 20, 200, 10, 10)
	addAll(t, s, inv.frames[:1])
	want := state(t, s)
	expect := func(name string, err error, sentence string) {
		t.Helper()
		if err == nil || !strings.Contains(err.Error(), sentence) || !strings.Contains(err.Error(), s.path) {
			t.Errorf("%s: %v; want a sentence with %q", name, err, sentence)
		}
		if got := state(t, s); got != want {
			t.Fatalf("%s: changed the catalogue: %s", name, difference(want, got))
		}
	}
	add := func() error { return s.AddFrame(ctx, inv.frames[1].rec, inv.frames[1].candidates) }
	set := func(pragma string) {
		t.Helper()
		if _, err := s.writer.Exec(pragma); err != nil {
			t.Fatal(err)
		}
	}
	var pages int
	if err := s.writer.QueryRow("PRAGMA page_count").Scan(&pages); err != nil {
		t.Fatal(err)
	}
	set(fmt.Sprint("PRAGMA max_page_count = ", pages+2)) // as a full disk does
	expect("full", add(), "no space left")
	set("PRAGMA max_page_count = 1000000")
	set("PRAGMA query_only = 1")
	expect("read-only", add(), "cannot be written")
	set("PRAGMA query_only = 0")
	other := open(t, s.place)
	held, err := other.writer.Begin()
	if err != nil {
		t.Fatal(err)
	}
	set("PRAGMA busy_timeout = 20")
	expect("locked", add(), "another program holds it")
	held.Rollback()
	if err := add(); err != nil {
		t.Error(err)
	}
	healthy(t, s)
	if _, err := Open(ctx, filepath.Join(t.TempDir(), "absent", "catalog.sqlite"), DefaultConfig()); err == nil || !strings.Contains(err.Error(), "folder exists") {
		t.Errorf("no folder: %v", err)
	}
}

// A disk that is really full: a small file system in memory, where this machine
// lets us make one.
func TestFullDisk(t *testing.T) {
	dir := t.TempDir()
	if os.Getuid() != 0 || exec.Command("mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", dir).Run() != nil {
		t.Skip("no file system may be mounted here; TestFileErrorsSayWhatToDo limits the file instead")
	}
	defer exec.Command("umount", dir).Run()
	s := open(t, filepath.Join(dir, FileName))
	inv := survey(3, 40, 20, 300, 10, 10)
	var err error
	n := 0
	for ; n < len(inv.frames) && err == nil; n++ {
		err = s.AddFrame(ctx, inv.frames[n].rec, inv.frames[n].candidates)
	}
	if err == nil || !strings.Contains(err.Error(), "catalogue "+s.path) {
		t.Fatalf("%d frames on a disk of 1 MB: %v", n, err)
	}
	t.Log(err)
	frames, ferr := s.Frames(ctx, FrameQuery{})
	if ferr != nil || len(frames) != n-1 {
		t.Errorf("%d frames, %v, want the %d that were added", len(frames), ferr, n-1)
	}
	healthy(t, s)
	s.Close()
}
