package load

import (
	"os"
	"sync"

	"nightsift/internal/fits"
)

// recent holds the headers of the file that was looked at last. A plan asks for
// the list of a mosaic's chips and then for each of them, and a compressed file
// must be inflated to its end each time.
var recent struct {
	sync.Mutex
	info os.FileInfo
	file fits.File
}

// openHeaders reads the headers of a file, unless it still knows them. They
// are shared: nobody may change them.
func openHeaders(name string) (*fits.File, error) {
	path, selector := fits.SplitName(name)
	info, err := os.Stat(path)
	if err != nil {
		return fits.OpenHeaders(name) // it says what is wrong
	}
	recent.Lock()
	f, known := recent.file, recent.info
	recent.Unlock()
	if known == nil || !os.SameFile(known, info) || known.Size() != info.Size() || !known.ModTime().Equal(info.ModTime()) {
		opened, err := fits.OpenHeaders(path)
		if err != nil {
			return nil, err
		}
		f = *opened
		recent.Lock()
		recent.file, recent.info = f, info
		recent.Unlock()
	}
	f.Path, f.Selected = path, -1
	if selector != "" {
		f.Selected, err = f.Find(selector)
	}
	return &f, err
}
