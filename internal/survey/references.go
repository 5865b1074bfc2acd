package survey

import (
	"context"
	"errors"
	"sync"

	"nightsift/align"
	"nightsift/internal/frame/load"
)

// referenceCache keeps prepared references in memory between the frames that
// share one. The least recently used is dropped once more than most are held
// and nobody uses it.
type referenceCache struct {
	mu       sync.Mutex
	most     int
	clock    int
	entries  map[string]*referenceEntry
	keywords load.Keywords
	config   align.Config
}

type referenceEntry struct {
	ready chan struct{}
	value *align.PreparedReference
	err   error
	users int
	used  int
}

func newReferenceCache(most int, keywords load.Keywords, config align.Config) *referenceCache {
	return &referenceCache{most: max(1, most), entries: map[string]*referenceEntry{}, keywords: keywords, config: config}
}

// get returns the prepared reference of a file and a function to call when it
// is no longer used. A reference that cannot be prepared gives the same error
// to every frame that asks for it.
func (c *referenceCache) get(ctx context.Context, path string) (*align.PreparedReference, func(), error) {
	c.mu.Lock()
	e := c.entries[path]
	mine := e == nil
	if mine {
		e = &referenceEntry{ready: make(chan struct{})}
		c.entries[path] = e
	}
	e.users++
	c.clock++
	e.used = c.clock
	c.mu.Unlock()
	release := func() {
		c.mu.Lock()
		defer c.mu.Unlock()
		e.users--
		c.shrink()
	}
	if mine {
		c.prepare(e, path)
	}
	select {
	case <-e.ready:
	case <-ctx.Done():
		release()
		return nil, nil, ctx.Err()
	}
	if e.err != nil {
		release()
		return nil, nil, e.err
	}
	return e.value, release, nil
}

// prepare fills an entry and wakes those who wait for it, even after a panic,
// which is passed on.
func (c *referenceCache) prepare(e *referenceEntry, path string) {
	defer close(e.ready)
	e.err = errors.New("preparing it ended in a fault of the program")
	f, err := load.Frame(path, c.keywords)
	if err == nil {
		e.value, err = align.Prepare(f, c.config)
	}
	e.err = err
}

// shrink drops what is over the limit. The caller holds the lock.
func (c *referenceCache) shrink() {
	for {
		oldest, held := "", 0
		for path, e := range c.entries {
			if e.value == nil {
				continue
			}
			held++
			if e.users == 0 && (oldest == "" || e.used < c.entries[oldest].used) {
				oldest = path
			}
		}
		if oldest == "" || held <= c.most {
			return
		}
		delete(c.entries, oldest)
	}
}
