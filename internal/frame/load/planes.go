package load

import (
	"fmt"
	"math"
	"strings"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
)

// companions reads the variance or error and mask extensions, if they are named
// and there. A name may hold {hdu}, which stands for the image's own EXTNAME.
// Of several with one name, that with the image's EXTVER counts.
func companions(f *fits.File, hdu *fits.HDU, out *frame.Frame, kw *Keywords, report *Report) error {
	images := images(f, kw)
	rivals := 0 // images that could claim the same companion, itself included
	for _, h := range images {
		if h.Version == hdu.Version {
			rivals++
		}
	}
	read := func(what, pattern string) (*fits.Image, error) {
		if pattern == "" {
			return nil, nil
		}
		name := strings.ReplaceAll(pattern, "{hdu}", hdu.Name)
		index, wrongVersion := -1, 0
		for i := range f.HDUs() {
			h := &f.HDUs()[i]
			switch {
			case i == hdu.Index || !isImage(h) || !strings.EqualFold(h.Name, name):
			case h.Version != hdu.Version && len(images) > 1:
				wrongVersion = h.Version
			case index < 0 || h.Version == hdu.Version && f.HDUs()[index].Version != hdu.Version:
				index = i
			}
		}
		if index < 0 {
			switch {
			case strings.Contains(pattern, "{hdu}") && hdu.Name == "":
				report.remark(what, "the configuration names the extension %s for the %s, but the image has no EXTNAME", pattern, what)
			case wrongVersion != 0:
				report.remark(what, "%s,%d belongs to another image than %s: not used", name, wrongVersion, place(out.Path, hdu))
			case what == "mask" || kw.Variance != DefaultKeywords().Variance && what == "variance" || what == "error":
				report.remark(what, "the configuration names the extension %s for the %s; the file has none", name, what)
			}
			return nil, nil
		}
		if name == pattern && rivals > 1 {
			report.remark(what, "%s could belong to any of %d images: not used; name the extensions by their images, with {hdu} in the configuration, or number them with EXTVER", name, rivals)
			return nil, nil
		}
		img, err := f.Image(index)
		if err != nil {
			return nil, problem(err)
		}
		if img.Width != out.Image.Width || img.Height != out.Image.Height {
			return nil, frame.Problemf(frame.ProblemUnreadable, "%s: the %s extension %s has %d×%d pixels, the image %d×%d",
				f.Path, what, name, img.Width, img.Height, out.Image.Width, out.Image.Height)
		}
		out.Meta.Origin[what] = name
		return img, nil
	}
	variance, err := read("variance", kw.Variance)
	if err != nil {
		return err
	}
	if variance == nil {
		if variance, err = read("error", kw.Error); err != nil {
			return err
		}
		if variance != nil {
			for p, v := range variance.Pix {
				variance.Pix[p] = v * float32(math.Abs(float64(v))) // a negative error stays invalid
			}
		}
	}
	if variance != nil {
		out.Variance = &frame.Image{Width: variance.Width, Height: variance.Height, Pix: variance.Pix}
		for p, v := range variance.Pix {
			if !(v > 0 && v <= maxFloat32) { // also NaN
				out.Flags.Bits[p] |= frame.NoData
				variance.Pix[p] = nan32
			}
		}
	}
	mask, err := read("mask", kw.Mask)
	if err != nil || mask == nil {
		return err
	}
	if err := applyMask(out, mask, kw); err != nil {
		return frame.Problemf(frame.ProblemUnreadable, "%s: the mask extension %s: %v", f.Path, out.Meta.Origin["mask"], err)
	}
	return nil
}

// exactBits is where whole numbers end to be exact in float32.
const exactBits = 1 << 24

// applyMask turns the bits of a mask into flags. A pixel that is NaN is masked.
// Negative integers are bits in two's complement.
func applyMask(out *frame.Frame, mask *fits.Image, kw *Keywords) error {
	named := uint64(0) // bits that have a flag of their own
	for _, bits := range kw.MaskFlags {
		named |= bits
	}
	user := kw.MaskBits
	if user == 0 {
		user = ^uint64(0)
	}
	user &^= named
	width := uint64(1)<<min(max(mask.BitPix, 8), 63) - 1
	single := kw.MaskBits != 0 || named != 0 // whether single bits matter
	for p, v := range mask.Pix {
		if v == 0 {
			continue
		}
		if !single || v != v {
			out.Flags.Bits[p] |= frame.UserMasked
			continue
		}
		if v >= exactBits || v <= -exactBits {
			return fmt.Errorf("pixel (%d,%d) = %.0f: single bits can be told up to 2^24; use a mask of 16 bits, or no mask_bits and no mask_… in the configuration",
				p%out.Image.Width+1, p/out.Image.Width+1, v)
		}
		bits := uint64(int64(v))
		if v < 0 {
			bits &= width
		}
		for flag, of := range kw.MaskFlags {
			if bits&of != 0 {
				out.Flags.Bits[p] |= flag
			}
		}
		if bits&user != 0 {
			out.Flags.Bits[p] |= frame.UserMasked
		}
	}
	return nil
}
