// Package wholefile writes files that are either whole or absent.
//
// The bytes go to a temporary file in the same folder; it is flushed, counted,
// synced and closed, renamed over the final name, and the folder is synced. A
// reader therefore sees the old file or the new one and nothing between, even
// after a power cut. When anything fails, also by a panic, the temporary file
// is removed and the old file stays as it was.
//
// A process that is killed leaves its temporary file behind; IsTemporary tells
// such names and Clean removes the old ones.
package wholefile

import (
	"bufio"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"time"
)

// suffix ends the name of every temporary file.
const suffix = ".partial"

// bufferSize is the size of the write buffer; larger writes pass it by.
const bufferSize = 1 << 18

// file is what Write needs of an open file.
type file interface {
	io.Writer
	Sync() error
	Close() error
	Stat() (fs.FileInfo, error)
}

// system is the set of operations that can fail. Tests replace it to fail one
// after the other.
type system interface {
	Create(path string) (file, error)
	Rename(from, to string) error
	Remove(path string) error
	SyncFolder(path string) error
}

// disk is the real system.
type disk struct{}

func (disk) Create(path string) (file, error) {
	return os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o666)
}
func (disk) Rename(from, to string) error { return os.Rename(from, to) }
func (disk) Remove(path string) error     { return os.Remove(path) }

func (disk) SyncFolder(path string) error {
	d, err := os.Open(path)
	if err != nil {
		return err
	}
	err = d.Sync()
	if errors.Is(err, syscall.EINVAL) || errors.Is(err, errors.ErrUnsupported) {
		err = nil // some network file systems cannot sync a folder
	}
	return errors.Join(err, d.Close())
}

// Write creates or replaces the file at path with what fill writes. The writer
// given to fill is buffered. When fill returns an error or panics, path stays
// as it was; the error is returned with the path before it, and errors.Is and
// errors.As see through. A symbolic link is followed: the file it names is
// replaced.
//
// Calls for different paths may run concurrently. Of two concurrent calls for
// one path, one wins whole.
func Write(path string, fill func(io.Writer) error) error {
	return write(disk{}, path, fill)
}

// WriteBytes is Write for content at hand.
func WriteBytes(path string, content []byte) error {
	return Write(path, func(w io.Writer) error {
		_, err := w.Write(content)
		return err
	})
}

func write(sys system, path string, fill func(io.Writer) error) (err error) {
	final := path
	if real, err := filepath.EvalSymlinks(path); err == nil {
		final = real
	}
	if info, err := os.Stat(final); err == nil && info.IsDir() {
		return fmt.Errorf("%s: cannot write a file: a folder has this name", path)
	}
	folder, base := filepath.Split(final)
	if folder == "" {
		folder = "."
	}
	temporary, out, err := create(sys, folder, base)
	if err != nil {
		return fmt.Errorf("%s: cannot write: %w", path, err)
	}
	closed, done := false, false
	defer func() {
		if done {
			return
		}
		// An error or a panic on its way up: leave no trace.
		if !closed {
			out.Close()
		}
		sys.Remove(temporary)
	}()

	count := &counter{w: out}
	buffer := bufio.NewWriterSize(count, bufferSize)
	if err := fill(buffer); err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	if err := buffer.Flush(); err != nil {
		return fmt.Errorf("%s: cannot write: %w", path, err)
	}
	info, err := out.Stat()
	if err != nil {
		return fmt.Errorf("%s: cannot write: %w", path, err)
	}
	if info.Size() != count.n {
		return fmt.Errorf("%s: the file system holds %d bytes, %d were written", path, info.Size(), count.n)
	}
	if err := out.Sync(); err != nil {
		return fmt.Errorf("%s: cannot write: %w", path, err)
	}
	closed = true
	if err := out.Close(); err != nil {
		return fmt.Errorf("%s: cannot write: %w", path, err)
	}
	if err := sys.Rename(temporary, final); err != nil {
		return fmt.Errorf("%s: cannot write: %w", path, err)
	}
	done = true
	if err := sys.SyncFolder(folder); err != nil {
		return fmt.Errorf("%s: written, but its folder cannot be synced: %w", path, err)
	}
	return nil
}

// create opens a temporary file for base in folder. The random part keeps
// concurrent writers apart; it never reaches a product.
func create(sys system, folder, base string) (string, file, error) {
	const stem = 200 // leaves room for the rest within the 255 bytes of a name
	if len(base) > stem {
		base = base[:stem]
	}
	var err error
	for range 100 {
		name := filepath.Join(folder, "."+base+"."+strconv.FormatUint(rand.Uint64(), 36)+suffix)
		var f file
		if f, err = sys.Create(name); err == nil {
			return name, f, nil
		}
		if !errors.Is(err, fs.ErrExist) {
			break
		}
	}
	return "", nil, err
}

type counter struct {
	w io.Writer
	n int64
}

func (c *counter) Write(p []byte) (int, error) {
	n, err := c.w.Write(p)
	c.n += int64(n)
	return n, err
}

// IsTemporary reports whether a file name is that of a file being written, or
// left behind by a killed process. Such files are never input.
func IsTemporary(name string) bool {
	base := filepath.Base(name)
	return strings.HasPrefix(base, ".") && strings.HasSuffix(base, suffix)
}

// Clean removes from a folder (not from the folders in it) the temporary files
// that nobody has written to for the given time, and returns their number. Use
// an age well above the longest pause of a live writer.
func Clean(folder string, age time.Duration) (int, error) {
	entries, err := os.ReadDir(folder)
	if err != nil {
		return 0, err
	}
	limit, removed := time.Now().Add(-age), 0
	for _, e := range entries {
		if !e.Type().IsRegular() || !IsTemporary(e.Name()) {
			continue
		}
		info, err := e.Info()
		if err != nil || info.ModTime().After(limit) {
			continue
		}
		if err := os.Remove(filepath.Join(folder, e.Name())); err == nil {
			removed++
		} else if !errors.Is(err, fs.ErrNotExist) {
			return removed, err
		}
	}
	return removed, nil
}
