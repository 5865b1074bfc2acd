package catalog

import (
	"context"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"sync/atomic"
	"testing"

	"github.com/jackc/pgx/v5"
)

// postgres names the environment variable with the URL of a server on which
// tests may make and drop schemas.
const postgres = "NIGHTSIFT_TEST_POSTGRES"

// kinds are the stores on which every test of what a catalogue does must pass.
var kinds = []struct {
	name string
	make func(t testing.TB) (place string)
}{
	{"SQLite", func(t testing.TB) string { return filepath.Join(t.TempDir(), FileName) }},
	{"PostgreSQL", newSchema},
}

// onEachStore runs a test on each kind of store. newStore, called with the
// test's t, gives the one that is due.
func onEachStore(t *testing.T, test func(t *testing.T)) {
	for _, k := range kinds {
		t.Run(k.name, test)
	}
}

var schemas atomic.Int64

// newSchema makes an empty schema on the server and returns the URL to it.
func newSchema(t testing.TB) string {
	t.Helper()
	place := os.Getenv(postgres)
	if place == "" {
		if os.Getenv("CI") == "true" {
			t.Fatalf("%s names no server: test.sh must start one", postgres)
		}
		t.Skipf("%s names no server; ./test.sh starts one", postgres)
	}
	name := fmt.Sprintf("test_%d_%d", os.Getpid(), schemas.Add(1))
	administer(t, "CREATE SCHEMA "+name)
	t.Cleanup(func() { administer(t, "DROP SCHEMA "+name+" CASCADE") })
	u, err := url.Parse(place)
	if err != nil {
		t.Fatal(err)
	}
	q := u.Query()
	q.Set("search_path", name)
	u.RawQuery = q.Encode()
	return u.String()
}

// administer runs statements on the server outside any Store.
func administer(t testing.TB, statements ...string) {
	t.Helper()
	c, err := pgx.Connect(context.Background(), os.Getenv(postgres))
	if err != nil {
		t.Fatalf("%s: %v", postgres, err)
	}
	defer c.Close(context.Background())
	for _, q := range statements {
		if _, err := c.Exec(context.Background(), q); err != nil {
			t.Fatalf("%s: %v", q, err)
		}
	}
}

// newPlace returns an unused place for a catalogue: of the kind that the test's
// name says, a file by default.
func newPlace(t testing.TB) string {
	t.Helper()
	for _, k := range kinds {
		if strings.Contains(t.Name()+"/", "/"+k.name+"/") {
			return k.make(t)
		}
	}
	return kinds[0].make(t)
}

// newStore opens a new catalogue that does not wait for the disk.
func newStore(t testing.TB) *Store {
	t.Helper()
	s := open(t, newPlace(t))
	if !s.server {
		if _, err := s.writer.Exec("PRAGMA synchronous = OFF"); err != nil {
			t.Fatal(err)
		}
	}
	return s
}
