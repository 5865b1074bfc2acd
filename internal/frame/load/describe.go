package load

import (
	"strings"

	"nightsift/internal/frame"
)

// Description is what a file's headers say about one frame, without its
// pixels.
type Description struct {
	Name          string // as Frame names it
	Width, Height int    // px
	Meta          frame.Meta
}

// Describe reads only the headers of a frame. It takes the same paths as Frame
// and gives the same name and values; a bad file gives a *frame.Problem.
func Describe(path string, kw Keywords) (*Description, error) {
	if err := kw.Check(); err != nil {
		return nil, err
	}
	f, err := openHeaders(path)
	if err != nil {
		return nil, problem(err)
	}
	index, name, err := choose(f, &kw)
	if err != nil {
		return nil, err
	}
	hdu := &f.HDUs()[index]
	d := &Description{Name: name, Width: hdu.Width, Height: hdu.Height, Meta: frame.UnknownMeta()}
	newReader(f, index, &kw, &d.Meta).readMeta()
	return d, nil
}

// IsFrameName reports whether a file's name has an ending of FITS images.
func IsFrameName(name string) bool {
	name = strings.ToLower(name)
	for _, packed := range []string{".gz", ".fz"} {
		name = strings.TrimSuffix(name, packed)
	}
	for _, ending := range []string{".fits", ".fit", ".fts"} {
		if strings.HasSuffix(name, ending) && len(name) > len(ending) {
			return true
		}
	}
	return false
}
