// Package fits reads and writes FITS files (FITS Standard 4.0): images as
// float32 planes, cubes, flag planes and binary tables. Images compressed in
// tiles (section 10 of the standard) are read like plain ones, under the header
// that they had.
//
// Reading distrusts the file. Every size is compared with the bytes that are
// there before memory is asked for; a wrong file gives a *FormatError, a valid
// one that needs something not done here an *UnsupportedError, both with file,
// HDU and keyword. Malformed header cards are tolerated and listed by
// Header.Warnings. Files compressed with gzip are recognised by their content.
//
// Writing goes through internal/wholefile: a file is whole or absent. Every
// HDU carries CHECKSUM and DATASUM (appendix J of the standard). The bytes
// depend on nothing but the arguments: no date is added.
//
// Pixels are decoded and encoded here, in large chunks. The rarely met table
// columns of variable length are decoded by github.com/astrogo/fitsio, on a
// table rebuilt from checked sizes.
//
// Pixel (x,y) in FITS counting, the first being (1,1), is element
// (y-1)*Width + (x-1) of a plane.
package fits

import (
	"errors"
	"fmt"
)

// FormatError reports that a file is not what it claims to be: not FITS,
// truncated, or with a keyword that contradicts the standard.
type FormatError struct {
	Path string
	HDU  int // counted from 0, the primary; -1 when no HDU is concerned
	Msg  string

	cause error
}

// ErrNoHDU is wrapped by the error about a name in brackets that no HDU has.
var ErrNoHDU = errors.New("no such HDU")

// Unwrap returns ErrNoHDU or nil.
func (e *FormatError) Unwrap() error { return e.cause }

func (e *FormatError) Error() string { return place(e.Path, e.HDU) + e.Msg }

// UnsupportedError reports a file that is valid but needs something that this
// package does not do.
type UnsupportedError struct {
	Path string
	HDU  int
	Msg  string
}

func (e *UnsupportedError) Error() string { return place(e.Path, e.HDU) + "not supported: " + e.Msg }

func place(path string, hdu int) string {
	if hdu < 0 {
		return path + ": "
	}
	return fmt.Sprintf("%s[%d]: ", path, hdu)
}
