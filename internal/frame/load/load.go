// Package load reads a FITS file into a frame.Frame: pixels, flags, world
// coordinates and what the header says about the exposure, each value with its
// origin. Whatever is wrong with a file becomes a *frame.Problem, so that one
// bad file never stops a night.
package load

import (
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strconv"
	"strings"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/wcs"
)

// Frame reads the image of a file. The path may end in [EXTNAME],
// [EXTNAME,version] or [n] (0 is the primary HDU); without it the first
// two-dimensional image counts that is not the variance or mask extension.
//
// Keywords are looked up in the HDU itself and then in the primary HDU, unless
// INHERIT = F. In the frame, NaN, infinite and BLANK pixels are NaN and flagged
// NoData; pixels at or above the saturation level are flagged Saturated, and
// runs of them much longer than the star is wide, Bleed. An integer image
// without a saturation keyword saturates where its type ends, any image where
// its brightest stars end in plateaus. A gain or read noise that no keyword
// tells is estimated from the pixels, if they do tell.
//
// A bad file gives a *frame.Problem; any other error is a mistake in kw.
func Frame(path string, kw Keywords) (*frame.Frame, error) {
	f, _, err := Read(path, kw)
	return f, err
}

// Read is Frame with a report of how the header was understood. The report is
// there as soon as the header could be read, also beside an error.
func Read(path string, kw Keywords) (*frame.Frame, *Report, error) {
	if err := kw.Check(); err != nil {
		return nil, nil, err
	}
	f, err := fits.Open(path)
	if err != nil {
		return nil, nil, problem(err)
	}
	defer f.Close()
	index, name, err := choose(f, &kw)
	if err != nil {
		return nil, nil, err
	}
	digest := make(chan string, 1)
	go func() { digest <- checksum(f.Path) }()

	hdu := &f.HDUs()[index]
	meta := frame.UnknownMeta()
	m := newReader(f, index, &kw, &meta)
	m.readMeta()
	img, err := f.Image(index)
	if err != nil {
		<-digest
		return nil, m.report, problem(err)
	}
	out := frame.New(name, &frame.Image{Width: img.Width, Height: img.Height, Pix: img.Pix})
	out.Path, out.Meta = path, meta

	low, high, good := flagNoData(out)
	where := place(path, hdu)
	if good == 0 {
		err = frame.Problemf(frame.ProblemNoData, "%s: all %d pixels are NaN or blank; nothing to search", where, len(img.Pix))
	} else if low == high {
		err = frame.Problemf(frame.ProblemNoData, "%s: all pixels have the same value %g; nothing to search", where, low)
	}
	if err == nil {
		flagSaturated(out, img.TypeMax, high)
		err = companions(f, hdu, out, &kw, m.report)
	}
	if out.Checksum = <-digest; err != nil {
		return nil, m.report, err
	}
	estimate(out, m.report)
	if out.WCS, err = wcs.FromKeywords(hdu.Header); err != nil {
		// The stars will tell where the frame points.
		out.WCS, out.Meta.Origin["wcs"] = nil, "ignored: "+err.Error()
	}
	return out, m.report, nil
}

// List returns what to put in brackets behind the path for each of the file's
// two-dimensional images, in order: the EXTNAME, or the HDU's number where a
// name is missing or not unique. Variance and mask extensions as named in
// DefaultKeywords are left out. A bad file, also one without any image, gives
// a *frame.Problem.
func List(path string) ([]string, error) { return DefaultKeywords().List(path) }

// List is the function List with other names of variance and mask extensions.
func (kw Keywords) List(path string) ([]string, error) {
	f, err := openHeaders(path)
	if err != nil {
		return nil, problem(err)
	}
	hdus := images(f, &kw)
	if len(hdus) == 0 {
		return nil, notAnImage(f)
	}
	count := map[string]int{}
	for _, h := range f.HDUs() {
		count[strings.ToUpper(h.Name)]++
	}
	var out []string
	for _, h := range hdus {
		// A name that reads as a number would select an HDU by number.
		_, err := strconv.Atoi(h.Name)
		if h.Name == "" || err == nil || strings.ContainsAny(h.Name, "[],") || count[strings.ToUpper(h.Name)] > 1 {
			out = append(out, strconv.Itoa(h.Index))
		} else {
			out = append(out, h.Name)
		}
	}
	return out, nil
}

// choose returns the HDU to read and the name of its frame: that of the file,
// with the HDU's where one of several images was asked for.
func choose(f *fits.File, kw *Keywords) (index int, name string, err error) {
	hdus := images(f, kw)
	name = Stem(f.Path)
	if f.Selected < 0 {
		if len(hdus) == 0 {
			return 0, "", notAnImage(f)
		}
		return hdus[0].Index, name, nil
	}
	h := &f.HDUs()[f.Selected]
	if !isImage(h) {
		return 0, "", frame.Problemf(frame.ProblemNotAnImage, "%s holds no two-dimensional image (%s)", place(f.Path, h), describe(h))
	}
	if len(hdus) > 1 {
		suffix := label(h)
		for _, other := range hdus {
			if other.Index != h.Index && safe(label(other)) == safe(suffix) {
				suffix = strconv.Itoa(h.Index) // names of frames must differ
			}
		}
		name += "_" + safe(suffix)
	}
	return f.Selected, name, nil
}

// CompanionCard is true in the header of an image that belongs to another one
// of its file and is no frame of its own.
const CompanionCard = "NOTFRAME"

// images returns the two-dimensional images but for variance and mask and what
// says of itself that it is no frame.
func images(f *fits.File, kw *Keywords) []*fits.HDU {
	var out []*fits.HDU
	for i := range f.HDUs() {
		h := &f.HDUs()[i]
		companion, _ := h.Header.Bool(CompanionCard)
		if isImage(h) && !companion && !kw.companion(h.Name) {
			out = append(out, h)
		}
	}
	return out
}

func isImage(h *fits.HDU) bool {
	return h.Kind == fits.ImageData || h.Kind == fits.CompressedImage && h.Depth == 1 && len(h.Axes) > 1
}

func notAnImage(f *fits.File) error {
	var parts []string
	for i := range f.HDUs() {
		if i == 10 {
			parts = append(parts, "…")
			break
		}
		parts = append(parts, describe(&f.HDUs()[i]))
	}
	return frame.Problemf(frame.ProblemNotAnImage, "%s holds no two-dimensional image; its HDUs are: %s", f.Path, strings.Join(parts, ", "))
}

func describe(h *fits.HDU) string {
	s := h.Kind.String()
	if len(h.Axes) > 0 {
		s += fmt.Sprintf(" of axes %v", h.Axes)
	}
	return s
}

func label(h *fits.HDU) string {
	switch {
	case h.Name == "":
		return strconv.Itoa(h.Index)
	case h.Version != 1:
		return h.Name + "_" + strconv.Itoa(h.Version)
	}
	return h.Name
}

func place(path string, h *fits.HDU) string {
	if file, selector := fits.SplitName(path); selector != "" {
		path = file
	}
	return path + "[" + label(h) + "]"
}

// Stem returns the name of a file without folder, .gz or .fz, and .fits, .fit
// or .fts. It is safe as the name of a folder.
func Stem(path string) string {
	path, _ = fits.SplitName(path)
	base := filepath.Base(path)
	for _, endings := range [][]string{{".gz", ".fz"}, {".fits", ".fit", ".fts"}} {
		for _, e := range endings {
			if n := len(base) - len(e); n > 0 && strings.EqualFold(base[n:], e) {
				base = base[:n]
			}
		}
	}
	return safe(base)
}

// safe replaces what is unwelcome in the name of a file.
func safe(s string) string {
	s = strings.Map(func(r rune) rune {
		if r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || strings.ContainsRune("._-+", r) || r > 127 {
			return r
		}
		return '-'
	}, s)
	if strings.Trim(s, ".") == "" {
		return "frame" + s
	}
	return s
}

// problem turns an error of fits into the frame's fault.
func problem(err error) error {
	var format *fits.FormatError
	var unsupported *fits.UnsupportedError
	advice := "check the file, or copy it again"
	switch {
	case errors.As(err, &unsupported):
		return frame.Problemf(frame.ProblemUnreadable, "%v", err)
	case errors.Is(err, fits.ErrNoHDU):
		advice = "check the name in brackets"
	case errors.Is(err, os.ErrNotExist):
		advice = "check the name"
	case errors.Is(err, os.ErrPermission):
		advice = "check the permissions"
	case !errors.As(err, &format):
		advice = "check the disk"
	}
	return frame.Problemf(frame.ProblemUnreadable, "%v; %s", err, advice)
}

// checksum returns the SHA-256 of a file's bytes, "" if it cannot be read.
func checksum(path string) string {
	file, err := os.Open(path)
	if err != nil {
		return ""
	}
	defer file.Close()
	h := sha256.New()
	if _, err := io.CopyBuffer(h, file, make([]byte, 1<<18)); err != nil {
		return ""
	}
	return hex.EncodeToString(h.Sum(nil))
}
