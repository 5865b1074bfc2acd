package fits

// Section reads a rectangle of the two-dimensional image of HDU i: width ×
// height pixels of which the first is the FITS pixel (x0,y0). Only its rows are
// read from the file, of a compressed image the tiles that they cross. A rectangle that is not
// wholly on the image is an error.
func (f *File) Section(i, x0, y0, width, height int) (*Image, error) {
	h := &f.hdus[i]
	if h.Kind != ImageData && h.Kind != CompressedImage || h.Depth > 1 {
		return nil, f.formatError(i, "kind %s, NAXISn = %v: want a two-dimensional image", h.Kind, h.Axes)
	}
	if x0 < 1 || y0 < 1 || width < 1 || height < 1 || width > h.Width-x0+1 || height > h.Height-y0+1 {
		return nil, f.formatError(i, "is %d×%d pixels: there is no section of %d×%d at (%d,%d)", h.Width, h.Height, width, height, x0, y0)
	}
	s, err := f.scaling(h)
	if err != nil {
		return nil, err
	}
	img := &Image{Header: h.Header, Width: width, Height: height, BitPix: h.BitPix, TypeMax: s.typeMax(h.BitPix), Pix: make([]float32, width*height)}
	if h.Kind == CompressedImage {
		plane, err := f.decompress(h, 0, 1, y0-1, y0-1+height, s)
		if err != nil {
			return nil, err
		}
		for j := range height {
			at := (y0-1+j)*h.Width + x0 - 1
			copy(img.Pix[j*width:(j+1)*width], plane[at:at+width])
		}
		return img, nil
	}
	for j := range height {
		if err := f.decode(img.Pix[j*width:(j+1)*width], h, int64(y0-1+j)*int64(h.Width)+int64(x0-1), s); err != nil {
			return nil, err
		}
	}
	return img, nil
}
