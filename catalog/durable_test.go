package catalog

import (
	"bufio"
	"context"
	"database/sql"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"
)

// child is what the test binary does when it runs as a writer to be killed.
func TestMain(m *testing.M) {
	path := os.Getenv("NIGHTSIFT_TEST_CATALOG")
	if path == "" {
		os.Exit(m.Run())
	}
	s, err := Open(ctx, path, DefaultConfig())
	if err != nil {
		fmt.Println("error", err)
		os.Exit(1)
	}
	fmt.Println("open")
	inv := survey(21, 8, 40, 200, 80, 10)
	for k, n := range inv.frames {
		if os.Getenv("NIGHTSIFT_TEST_STOP") == fmt.Sprint(k) {
			// Stop inside the transaction, with everything written but the
			// commit, until killed.
			n.rec.Candidates = len(n.candidates)
			err := s.update(ctx, func(tx *sql.Tx) error {
				if err := s.add(ctx, tx, &n.rec, n.candidates); err != nil {
					return err
				}
				fmt.Println("inside")
				select {}
			})
			fmt.Println("error", err)
			os.Exit(1)
		}
		if err := s.AddFrame(ctx, n.rec, n.candidates); err != nil {
			fmt.Println("error", err)
			os.Exit(1)
		}
		fmt.Println("added", n.rec.Frame)
	}
	fmt.Println("end")
	os.Exit(0)
}

// runAndKill runs the writer until a line of its output matches, or for a
// time, and kills it. It returns the frames that it said were added.
func runAndKill(t *testing.T, path, stop, until string, after time.Duration) (added []string) {
	t.Helper()
	exe, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(exe)
	cmd.Env = append(os.Environ(), "NIGHTSIFT_TEST_CATALOG="+path, "NIGHTSIFT_TEST_STOP="+stop)
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	defer cmd.Wait()
	defer cmd.Process.Kill()
	lines := bufio.NewScanner(out)
	var timer *time.Timer
	for lines.Scan() {
		line := lines.Text()
		if name, ok := strings.CutPrefix(line, "added "); ok {
			added = append(added, name)
		}
		if strings.HasPrefix(line, "error") {
			t.Fatal(line)
		}
		if line == "open" && after > 0 {
			timer = time.AfterFunc(after, func() { cmd.Process.Kill() })
			defer timer.Stop()
		}
		if until != "" && line == until {
			break
		}
	}
	return added
}

// A kill at any instant leaves whole frames only, all that were reported are
// there, and a further run completes the catalogue as if nothing had happened.
func TestKilledWriter(t *testing.T) {
	if testing.Short() {
		t.Skip("starts processes")
	}
	plain := newStore(t)
	inv := survey(21, 8, 40, 200, 80, 10)
	addAll(t, plain, inv.frames)
	want := state(t, plain)

	check := func(path string, added []string) {
		t.Helper()
		s, err := Open(ctx, path, DefaultConfig())
		if err != nil {
			t.Fatal(err)
		}
		defer s.Close()
		healthy(t, s)
		frames, err := s.Frames(ctx, FrameQuery{})
		if err != nil {
			t.Fatal(err)
		}
		there := map[string]bool{}
		for _, f := range frames {
			there[f.Frame] = true
		}
		for _, name := range added {
			if !there[name] {
				t.Errorf("frame %s was reported as added and is gone", name)
			}
		}
		if len(frames) > len(added)+1 {
			t.Errorf("%d frames, but only %d were reported", len(frames), len(added))
		}
	}

	path := filepath.Join(t.TempDir(), FileName)
	added := runAndKill(t, path, "4", "inside", 0)
	if len(added) != 4 {
		t.Fatalf("%d frames before the stop, want 4", len(added))
	}
	check(path, added)
	s := open(t, path)
	if frames, err := s.Frames(ctx, FrameQuery{Frame: "frame004"}); err != nil || len(frames) != 0 {
		t.Errorf("a part of the killed transaction is there: %v, %v", frames, err)
	}
	s.Close()

	r := rand.New(rand.NewPCG(uint64(os.Getpid()), 1)) // the instants cannot be repeated anyway
	for range 4 {
		wait := time.Duration(1+r.IntN(250)) * time.Millisecond
		p := filepath.Join(t.TempDir(), FileName)
		added := runAndKill(t, p, "", "end", wait)
		if _, err := os.Stat(p); errors.Is(err, os.ErrNotExist) {
			continue
		}
		check(p, added)
		path = p
	}
	if added := runAndKill(t, path, "", "end", 0); len(added) != 8 {
		t.Fatalf("the last run added %d frames, want 8", len(added))
	}
	if got := state(t, open(t, path)); got != want {
		t.Errorf("after kills: %s", difference(want, got))
	}
}

// Writers of several Stores take turns, readers see whole frames only.
func TestConcurrentWritersAndReaders(t *testing.T) {
	path := filepath.Join(t.TempDir(), FileName)
	inv := survey(31, 12, 30, 60, 300, -60)
	plain := newStore(t)
	addAll(t, plain, inv.frames)
	want := state(t, plain)

	stores := []*Store{open(t, path), open(t, path)}
	readers, stop := context.WithCancel(ctx)
	var reading, writing sync.WaitGroup
	for _, s := range stores {
		reading.Add(1)
		go func() {
			defer reading.Done()
			for readers.Err() == nil {
				found, err := s.Check(ctx)
				if err != nil || len(found) > 0 {
					t.Errorf("while others write: %v %v", found, err)
					return
				}
				if _, err := s.Sheet(ctx, "candidates"); err != nil {
					t.Error(err)
					return
				}
				time.Sleep(5 * time.Millisecond)
			}
		}()
	}
	for g := range 4 {
		writing.Add(1)
		go func() {
			defer writing.Done()
			for k := range inv.frames {
				if k%4 != g && k != 0 { // all write the first frame
					continue
				}
				if err := stores[g%2].AddFrame(ctx, inv.frames[k].rec, inv.frames[k].candidates); err != nil {
					t.Error(err)
				}
			}
		}()
	}
	writing.Wait()
	stop()
	reading.Wait()
	for _, s := range stores {
		if got := state(t, s); got != want {
			t.Errorf("after concurrent writes: %s", difference(want, got))
		}
	}
}
