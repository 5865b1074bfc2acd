package survey

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"syscall"
)

// ErrLocked means that another run holds the folder.
var ErrLocked = errors.New("another run holds this folder")

// lockName is the file whose lock a run holds.
const lockName = ".lock"

// The ways to hold a lock.
const (
	exclusive = syscall.LOCK_EX
	shared    = syscall.LOCK_SH
)

// lock keeps two runs from working in one folder. The operating system frees
// it when the process ends, however it ends, so no stale lock can remain.
type lock struct{ file *os.File }

// takeLock takes the lock of a name in a folder at once, or returns ErrLocked.
func takeLock(dir, name string, mode int) (*lock, error) {
	path := filepath.Join(dir, name)
	f, err := os.OpenFile(path, os.O_CREATE|os.O_RDWR, 0o644)
	if err != nil {
		return nil, err
	}
	if err := syscall.Flock(int(f.Fd()), mode|syscall.LOCK_NB); err != nil {
		holder := make([]byte, 64)
		n, _ := f.ReadAt(holder, 0)
		f.Close()
		if errors.Is(err, syscall.EWOULDBLOCK) {
			who, _, _ := strings.Cut(string(holder[:n]), "\n")
			if who == "" {
				who = "unknown"
			}
			return nil, fmt.Errorf("%w: %s is locked by process %s; wait for it to end", ErrLocked, path, who)
		}
		return nil, fmt.Errorf("lock %s: %w", path, err)
	}
	if err := f.Truncate(0); err == nil {
		fmt.Fprintf(f, "%d\n", os.Getpid())
	}
	return &lock{f}, nil
}

// lockFolder waits for the lock of a folder itself. It is held for moments, by
// those who write the folder's tables.
func lockFolder(dir string) (*lock, error) {
	f, err := os.Open(dir)
	if err != nil {
		return nil, err
	}
	for {
		err = syscall.Flock(int(f.Fd()), syscall.LOCK_EX)
		if err == nil {
			return &lock{f}, nil
		}
		if !errors.Is(err, syscall.EINTR) {
			f.Close()
			return nil, fmt.Errorf("lock %s: %w", dir, err)
		}
	}
}

func (l *lock) release() { l.file.Close() }
