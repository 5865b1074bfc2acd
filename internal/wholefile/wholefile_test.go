package wholefile

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

// faulty fails the n-th operation, counted from 1, once or from then on.
type faulty struct {
	disk
	n, count int
	forever  bool
	failed   string // the first operation that failed
}

var errFault = errors.New("injected fault")

func (f *faulty) strike(op string) error {
	f.count++
	if f.count == f.n || f.forever && f.count > f.n {
		if f.failed == "" {
			f.failed = op
		}
		return fmt.Errorf("%s: %w", op, errFault)
	}
	return nil
}

func (f *faulty) Create(path string) (file, error) {
	if err := f.strike("create"); err != nil {
		return nil, err
	}
	inner, err := f.disk.Create(path)
	return &faultyFile{inner, f}, err
}
func (f *faulty) Rename(from, to string) error {
	if err := f.strike("rename"); err != nil {
		return err
	}
	return f.disk.Rename(from, to)
}
func (f *faulty) Remove(path string) error {
	if err := f.strike("remove"); err != nil {
		return err
	}
	return f.disk.Remove(path)
}
func (f *faulty) SyncFolder(path string) error {
	if err := f.strike("sync folder"); err != nil {
		return err
	}
	return f.disk.SyncFolder(path)
}

type faultyFile struct {
	file
	f *faulty
}

func (w *faultyFile) Write(p []byte) (int, error) {
	if err := w.f.strike("write"); err != nil {
		n, _ := w.file.Write(p[:len(p)/2]) // a full disk takes a part
		return n, err
	}
	return w.file.Write(p)
}
func (w *faultyFile) Sync() error {
	if err := w.f.strike("sync"); err != nil {
		return err
	}
	return w.file.Sync()
}
func (w *faultyFile) Stat() (fs.FileInfo, error) {
	if err := w.f.strike("stat"); err != nil {
		return nil, err
	}
	return w.file.Stat()
}
func (w *faultyFile) Close() error {
	err := w.file.Close()
	if f := w.f.strike("close"); f != nil {
		return f
	}
	return err
}

// TestEveryFault fails the 1st, 2nd, 3rd … operation until a run meets no
// fault. Whatever fails, the file is the old one or the new one.
func TestEveryFault(t *testing.T) {
	before, after := []byte("old content"), bytes.Repeat([]byte("new "), 200_000)
	for _, forever := range []bool{false, true} {
		seen := map[string]bool{}
		for n := 1; ; n++ {
			folder := t.TempDir()
			path := filepath.Join(folder, "a.fits")
			if err := os.WriteFile(path, before, 0o644); err != nil {
				t.Fatal(err)
			}
			sys := &faulty{n: n, forever: forever}
			err := write(sys, path, func(w io.Writer) error {
				for rest := after; len(rest) > 0; rest = rest[min(len(rest), 1000):] {
					if _, err := w.Write(rest[:min(len(rest), 1000)]); err != nil {
						return err
					}
				}
				return nil
			})
			got, readErr := os.ReadFile(path)
			if readErr != nil {
				t.Fatal(readErr)
			}
			seen[sys.failed] = true
			switch {
			case sys.failed == "":
				if err != nil || !bytes.Equal(got, after) {
					t.Fatalf("no fault met, yet err = %v and %d bytes", err, len(got))
				}
			case !errors.Is(err, errFault):
				t.Fatalf("operation %d (%s) failed and the error is %v", n, sys.failed, err)
			case sys.failed == "sync folder":
				if !bytes.Equal(got, after) {
					t.Fatalf("after a failed sync of the folder the file is not the new one")
				}
			case !bytes.Equal(got, before):
				t.Fatalf("operation %d (%s) failed and the old file is gone", n, sys.failed)
			}
			entries, _ := os.ReadDir(folder)
			if len(entries) != 1 && !forever {
				t.Fatalf("operation %d (%s) failed: folder holds %v", n, sys.failed, entries)
			}
			if sys.failed == "" {
				break
			}
		}
		for _, op := range []string{"create", "write", "stat", "sync", "close", "rename", "sync folder"} {
			if !seen[op] {
				t.Errorf("the operation %q was never made to fail", op)
			}
		}
	}
}

func TestFillFails(t *testing.T) {
	folder := t.TempDir()
	path := filepath.Join(folder, "new.csv")
	cause := errors.New("no rows")
	err := Write(path, func(w io.Writer) error {
		io.WriteString(w, "half a file")
		return cause
	})
	if !errors.Is(err, cause) || !strings.HasPrefix(err.Error(), path) {
		t.Errorf("error = %v, want %v with the path before it", err, cause)
	}
	empty(t, folder)
}

func TestFillPanics(t *testing.T) {
	folder := t.TempDir()
	func() {
		defer func() {
			if r := recover(); r != "bug" {
				t.Errorf("recovered %v, want the panic of fill", r)
			}
		}()
		Write(filepath.Join(folder, "new.csv"), func(w io.Writer) error {
			w.Write(make([]byte, 1<<20))
			panic("bug")
		})
	}()
	empty(t, folder)
}

func empty(t *testing.T, folder string) {
	t.Helper()
	entries, err := os.ReadDir(folder)
	if err != nil || len(entries) != 0 {
		t.Errorf("folder holds %v (%v), want nothing", entries, err)
	}
}

func TestUnwritable(t *testing.T) {
	folder := t.TempDir()
	if err := Write(filepath.Join(folder, "absent", "a"), nothing); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("folder missing: %v", err)
	}
	if err := Write(folder, nothing); err == nil || !strings.Contains(err.Error(), "folder has this name") {
		t.Errorf("path is a folder: %v", err)
	}
	// A file where a folder should be fails for root as well.
	plain := filepath.Join(folder, "plain")
	if err := os.WriteFile(plain, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	if err := Write(filepath.Join(plain, "a"), nothing); err == nil {
		t.Error("wrote below a plain file")
	}
	if os.Geteuid() != 0 {
		closed := filepath.Join(folder, "closed")
		if err := os.Mkdir(closed, 0o500); err != nil {
			t.Fatal(err)
		}
		if err := Write(filepath.Join(closed, "a"), nothing); !errors.Is(err, fs.ErrPermission) {
			t.Errorf("folder without permission: %v", err)
		}
	}
}

func nothing(io.Writer) error { return nil }

func TestReplacesAndFollowsLinks(t *testing.T) {
	folder := t.TempDir()
	target, link := filepath.Join(folder, "target"), filepath.Join(folder, "link")
	if err := WriteBytes(target, []byte("one")); err != nil {
		t.Fatal(err)
	}
	if err := os.Symlink("target", link); err != nil {
		t.Skip("no symbolic links here:", err)
	}
	if err := WriteBytes(link, []byte("two")); err != nil {
		t.Fatal(err)
	}
	if got, _ := os.ReadFile(target); string(got) != "two" {
		t.Errorf("target holds %q, want %q", got, "two")
	}
	if info, err := os.Lstat(link); err != nil || info.Mode()&fs.ModeSymlink == 0 {
		t.Errorf("the link is gone: %v %v", info, err)
	}
}

func TestLongName(t *testing.T) {
	path := filepath.Join(t.TempDir(), strings.Repeat("n", 250))
	if err := WriteBytes(path, []byte("x")); err != nil {
		t.Fatal(err)
	}
}

func TestClean(t *testing.T) {
	folder := t.TempDir()
	path := filepath.Join(folder, "a.fits")
	var left string
	// What a killed process leaves: the temporary file as it was in mid-write.
	err := Write(path, func(w io.Writer) error {
		entries, _ := os.ReadDir(folder)
		left = entries[0].Name()
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if !IsTemporary(left) || IsTemporary(path) || IsTemporary(".hidden") || IsTemporary("a.partial") {
		t.Errorf("IsTemporary is wrong about %q or its look-alikes", left)
	}
	stale, fresh := filepath.Join(folder, left), filepath.Join(folder, "."+left)
	for _, p := range []string{stale, fresh} {
		if err := os.WriteFile(p, []byte("half"), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	old := time.Now().Add(-48 * time.Hour)
	if err := os.Chtimes(stale, old, old); err != nil {
		t.Fatal(err)
	}
	if n, err := Clean(folder, 24*time.Hour); n != 1 || err != nil {
		t.Errorf("Clean removed %d (%v), want 1", n, err)
	}
	if _, err := os.Stat(fresh); err != nil {
		t.Error("Clean removed a fresh file:", err)
	}
	if _, err := os.Stat(path); err != nil {
		t.Error("Clean removed a product:", err)
	}
}
