package fits

import (
	"bytes"
	"compress/gzip"
	"errors"
	"io"
	"os"
)

// inflate decompresses in steps into memory, and into an unnamed temporary
// file when that grows large.
func (f *File) inflate(r io.Reader) error {
	z, err := gzip.NewReader(r)
	if err != nil {
		return f.formatError(-1, "begins like gzip but is not: %v", err)
	}
	var buf bytes.Buffer
	n, err := io.Copy(&buf, io.LimitReader(z, maxInflatedInRAM))
	if err != nil {
		return f.gzipError(err)
	}
	if n < maxInflatedInRAM {
		f.src = memory{bytes.NewReader(buf.Bytes())}
		return nil
	}
	spool, err := os.CreateTemp("", "inflated-*")
	if err != nil {
		return err
	}
	temporary := &temporaryFile{File: spool}
	os.Remove(spool.Name()) // where the system allows it, so that a kill leaves nothing behind
	if _, err = spool.Write(buf.Bytes()); err != nil {
		temporary.Close()
		return err
	}
	more, err := io.Copy(spool, io.LimitReader(z, maxInflated-n))
	if err != nil {
		temporary.Close()
		return f.gzipError(err)
	}
	if n+more >= maxInflated {
		temporary.Close()
		return f.tooLarge()
	}
	temporary.size = n + more
	f.src = temporary
	return nil
}

func (f *File) gzipError(err error) error {
	var path *os.PathError
	switch {
	case errors.As(err, &path):
		return err
	case errors.Is(err, io.ErrUnexpectedEOF):
		return f.formatError(-1, "truncated: the gzip stream ends too early")
	}
	return f.formatError(-1, "the gzip stream is damaged: %v", err)
}

type temporaryFile disk

func (t *temporaryFile) upTo(n int64) (int64, error) { return disk(*t).upTo(n) }

func (t *temporaryFile) Close() error {
	err := t.File.Close()
	os.Remove(t.Name()) // gone already, as a rule
	return err
}

func (f *File) tooLarge() error {
	return f.unsupported(-1, "inflates to more than %d bytes", maxInflated)
}

// stream is a source that inflates as it is read, from front to back, and keeps
// no more than its last bytes. Reading before them is an error.
type stream struct {
	f      *File
	from   io.Reader
	last   []byte // the bytes before end; capacity 2 × streamStep
	end    int64  // bytes inflated so far
	atEnd  bool   // the stream holds no more
	failed error
}

// streamStep is far more than scan ever steps back.
const streamStep = 1 << 16

func (f *File) newStream(r io.Reader) (*stream, error) {
	z, err := gzip.NewReader(r)
	if err != nil {
		return nil, f.formatError(-1, "begins like gzip but is not: %v", err)
	}
	return &stream{f: f, from: z, last: make([]byte, 0, 2*streamStep)}, nil
}

// upTo inflates until n bytes have passed, or all.
func (s *stream) upTo(n int64) (int64, error) {
	for s.end < n && !s.atEnd && s.failed == nil {
		if len(s.last) == cap(s.last) {
			s.last = append(s.last[:0], s.last[streamStep:]...)
		}
		free := s.last[len(s.last):cap(s.last)]
		got, err := s.from.Read(free[:min(int64(len(free)), n-s.end+blockSize)])
		s.last = s.last[:len(s.last)+got]
		s.end += int64(got)
		switch {
		case err == io.EOF:
			s.atEnd = true
		case err != nil:
			s.failed = s.f.gzipError(err)
		case s.end >= maxInflated:
			s.failed = s.f.tooLarge()
		}
	}
	return min(n, s.end), s.failed
}

func (s *stream) ReadAt(p []byte, offset int64) (int, error) {
	end, err := s.upTo(offset + int64(len(p)))
	if err != nil {
		return 0, err
	}
	start := s.end - int64(len(s.last))
	if offset < start {
		return 0, errors.New("fits: bug: a stream was read backwards")
	}
	if end <= offset {
		return 0, io.EOF
	}
	n := copy(p, s.last[offset-start:])
	if n < len(p) {
		return n, io.EOF
	}
	return n, nil
}

func (s *stream) Close() error { return nil }
