package reference

import (
	"bufio"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/stars"
	"nightsift/internal/wholefile"
)

// part is one frame on the grid, in a file: sky-subtracted counts of the frame
// itself, flags, the variance of its sky on a lattice and its point-spread
// function. The stack reads it by windows, so that memory does not grow with
// the number of frames.
type part struct {
	path string
	partHeader
	variance []float32 // count², on the lattice
	// Offsets in the file: of the stamps of the point-spread function, one for
	// each tile of the stack, and of the planes.
	stamps, pixels, flags int64
}

type partHeader struct {
	Key           string
	Width, Height int
	NX, NY        int     // of the lattice
	FWHM          float64 // px of the grid, at the middle
	Uncertainty   float64 // of the point-spread function, relative, at the middle
	PSFSize       int     // px, side of a stamp
	Covered       float64 // share of the grid
}

const (
	partMagic   = "nightsift part 1\n"
	latticeStep = 32 // px
)

// lattice is the number of nodes along n pixels.
func lattice(n int) int { return (n+latticeStep-1)/latticeStep + 1 }

// keyOf names everything that a part depends on.
func (c *candidate) keyOf(g *grid, anchor *candidate, cfg *Config) string {
	h := sha256.New()
	fmt.Fprintf(h, "%s\n%s\n%s\n%d %d\n", partMagic, c.Pixels, anchor.Pixels, g.width, g.height)
	fmt.Fprintf(h, "%s\n%v\n", c.Checksum, cfg.Keywords) // of the file: its masks and levels count as well
	fmt.Fprintf(h, "%x %x %v %v %v %v\n", c.gain, c.background.MedianSky, cfg.Artefacts, cfg.PSF, cfg.Align.Background, cfg.Align.Stars)
	t := c.transform
	binary.Write(h, binary.LittleEndian, []float64{t.X0, t.Y0, t.HalfX, t.HalfY})
	binary.Write(h, binary.LittleEndian, t.CX)
	binary.Write(h, binary.LittleEndian, t.CY)
	for _, d := range c.defects {
		binary.Write(h, binary.LittleEndian, []int32{d.from, d.to, int32(d.bits)})
	}
	return hex.EncodeToString(h.Sum(nil)[:16])
}

// makePart resamples a candidate, or finds that this was done before.
func (c *candidate) makePart(ctx context.Context, dir string, g *grid, anchor *candidate, cfg *Config) error {
	key := c.keyOf(g, anchor, cfg)
	path := filepath.Join(dir, c.Name+"-"+key+".part")
	if p, err := openPart(path, key); err == nil {
		c.part = p
		return nil
	}
	f, err := c.read(cfg)
	if err != nil {
		return err
	}
	if _, err := stars.EstimateVariance(f, c.background); err != nil {
		return err
	}
	c.background.Subtract(f.Image, f.Image)
	p := &part{path: path, partHeader: partHeader{Key: key, Width: g.width, Height: g.height, NX: lattice(g.width), NY: lattice(g.height)}}
	p.variance = make([]float32, p.NX*p.NY)
	for b := range p.NY {
		for a := range p.NX {
			x, y := 1+float64(a*latticeStep), 1+float64(b*latticeStep)
			u, v := c.transform.Apply(x, y)
			i := min(max(int(math.Round(u))-1, 0), c.Width-1)
			j := min(max(int(math.Round(v))-1, 0), c.Height-1)
			p.variance[b*p.NX+a] = f.Variance.Row(j)[i] * float32(c.transform.Area(min(x, float64(g.width)), min(y, float64(g.height))))
		}
	}
	r, err := align.Resample(ctx, f.Image, f.Variance, f.Flags, c.transform, g.width, g.height, cfg.Workers)
	if err != nil {
		return err
	}
	f = nil
	if g.exact != nil {
		c.cutOutside(r, g)
	}
	covered := 0
	for _, b := range r.Flags.Bits {
		if b&(frame.NoReference|frame.NoData) == 0 {
			covered++
		}
	}
	if p.Covered = float64(covered) / float64(len(r.Flags.Bits)); covered < 4096 {
		return frame.Problemf(frame.ProblemNoOverlap, "%s covers %d pixels of the grid", c.Name, covered)
	}
	model, err := psf.Fit(r.Image, r.Variance, r.Flags, c.placed, c.gain, cfg.PSF)
	if err != nil {
		return fmt.Errorf("point-spread function of %s: %w", c.Name, err)
	}
	x, y := float64(g.width+1)/2, float64(g.height+1)/2
	p.FWHM, p.Uncertainty = model.FWHM(x, y), model.Uncertainty(x, y)
	p.PSFSize = 2*model.Radius() + 1
	if err := p.write(r, model.Render); err != nil {
		return err
	}
	c.part = p
	return nil
}

// cutOutside flags what a polynomial has brought in from beyond the frame.
func (c *candidate) cutOutside(r *frame.Frame, g *grid) {
	const step = 16
	for j0 := 0; j0 < g.height; j0 += step {
		for i0 := 0; i0 < g.width; i0 += step {
			u, v, ok := g.exact(float64(i0)+step/2+0.5, float64(j0)+step/2+0.5)
			if ok && !c.Anchor {
				u, v = c.pair.Transform.Apply(u, v)
			}
			if ok && u > -2*step && v > -2*step && u < float64(c.Width)+2*step && v < float64(c.Height)+2*step {
				continue
			}
			for j := j0; j < min(j0+step, g.height); j++ {
				row := r.Flags.Row(j)
				for i := i0; i < min(i0+step, g.width); i++ {
					row[i] = frame.NoReference
				}
			}
		}
	}
}

// layOut sets the offsets that follow a header of n bytes.
func (p *part) layOut(n int) {
	p.stamps = int64(len(partMagic)+4+n) + 4*int64(len(p.variance))
	p.pixels = p.stamps + 4*int64(len(tiling(p.Width, p.Height))*p.PSFSize*p.PSFSize)
	p.flags = p.pixels + 4*int64(p.Width*p.Height)
}

func (p *part) write(r *frame.Frame, render func(dst []float32, x, y, dx, dy float64)) error {
	return wholefile.Write(p.path, func(out io.Writer) error {
		w := bufio.NewWriterSize(out, 1<<20)
		head, err := json.Marshal(p.partHeader)
		if err != nil {
			return err
		}
		w.WriteString(partMagic)
		var size [4]byte
		binary.LittleEndian.PutUint32(size[:], uint32(len(head)))
		w.Write(size[:])
		w.Write(head)
		p.layOut(len(head))
		row := make([]byte, 4*p.Width)
		floats := func(v []float32) {
			for len(v) > 0 {
				n := min(len(v), p.Width)
				for i, x := range v[:n] {
					binary.LittleEndian.PutUint32(row[4*i:], math.Float32bits(x))
				}
				w.Write(row[:4*n])
				v = v[n:]
			}
		}
		floats(p.variance)
		stamp := make([]float32, p.PSFSize*p.PSFSize)
		for _, t := range tiling(p.Width, p.Height) {
			render(stamp, t.x, t.y, 0, 0)
			floats(stamp)
		}
		floats(r.Image.Pix)
		for j := range p.Height {
			for i, b := range r.Flags.Row(j) {
				binary.LittleEndian.PutUint16(row[2*i:], uint16(b))
			}
			w.Write(row[:2*p.Width])
		}
		return w.Flush() // and with it any error of the writes before
	})
}

var errNoPart = errors.New("no such part")

// openPart reads all but the planes of a part. Anything unexpected means that
// there is none.
func openPart(path, key string) (*part, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	in := bufio.NewReaderSize(f, 1<<16)
	magic := make([]byte, len(partMagic)+4)
	if _, err := io.ReadFull(in, magic); err != nil || string(magic[:len(partMagic)]) != partMagic {
		return nil, errNoPart
	}
	n := binary.LittleEndian.Uint32(magic[len(partMagic):])
	if n > 1<<16 {
		return nil, errNoPart
	}
	head := make([]byte, n)
	if _, err := io.ReadFull(in, head); err != nil {
		return nil, errNoPart
	}
	p := &part{path: path}
	if json.Unmarshal(head, &p.partHeader) != nil || p.Key != key || p.NX != lattice(p.Width) || p.NY != lattice(p.Height) || p.PSFSize < 3 || p.PSFSize > tileSide {
		return nil, errNoPart
	}
	p.variance = make([]float32, p.NX*p.NY)
	if binary.Read(in, binary.LittleEndian, p.variance) != nil {
		return nil, errNoPart
	}
	p.layOut(len(head))
	if info, err := f.Stat(); err != nil || info.Size() != p.flags+2*int64(p.Width*p.Height) {
		return nil, errNoPart
	}
	return p, nil
}

// stamp reads the point-spread function at the middle of a tile.
func (p *part) stamp(f io.ReaderAt, tile int) ([]float32, error) {
	out := make([]float32, p.PSFSize*p.PSFSize)
	bytes := make([]byte, 4*len(out))
	if _, err := f.ReadAt(bytes, p.stamps+int64(tile*len(bytes))); err != nil {
		return nil, fmt.Errorf("%s: %w", p.path, err)
	}
	for i := range out {
		out[i] = math.Float32frombits(binary.LittleEndian.Uint32(bytes[4*i:]))
	}
	return out, nil
}

// varianceAt interpolates the variance of the sky [count²] at a pixel (0-based).
func (p *part) varianceAt(i, j int) float32 {
	a, b := min(max(i, 0)/latticeStep, p.NX-2), min(max(j, 0)/latticeStep, p.NY-2)
	fx, fy := float32(i-a*latticeStep)/latticeStep, float32(j-b*latticeStep)/latticeStep
	fx, fy = min(max(fx, 0), 1), min(max(fy, 0), 1)
	v := p.variance[b*p.NX+a:]
	w := p.variance[(b+1)*p.NX+a:]
	return (v[0]*(1-fx)+v[1]*fx)*(1-fy) + (w[0]*(1-fx)+w[1]*fx)*fy
}

// window reads the pixels [x0, x0+side) × [y0, y0+side) of both planes; what is
// outside the grid is 0 and NoReference. scratch is used for the bytes.
func (p *part) window(f io.ReaderAt, pix []float32, flags []frame.Flag, x0, y0, side int, scratch []byte) error {
	a, b := max(x0, 0), min(x0+side, p.Width)
	for j := range side {
		row, bits := pix[j*side:(j+1)*side], flags[j*side:(j+1)*side]
		y := y0 + j
		if y < 0 || y >= p.Height || a >= b {
			clear(row)
			for i := range bits {
				bits[i] = frame.NoReference
			}
			continue
		}
		at := int64(y)*int64(p.Width) + int64(a)
		bytes := scratch[:4*(b-a)]
		if _, err := f.ReadAt(bytes, p.pixels+4*at); err != nil {
			return fmt.Errorf("%s: %w", p.path, err)
		}
		for i := range side {
			if x := x0 + i; x < a || x >= b {
				row[i], bits[i] = 0, frame.NoReference
			}
		}
		for i := range b - a {
			row[a-x0+i] = math.Float32frombits(binary.LittleEndian.Uint32(bytes[4*i:]))
		}
		bytes = scratch[:2*(b-a)]
		if _, err := f.ReadAt(bytes, p.flags+2*at); err != nil {
			return fmt.Errorf("%s: %w", p.path, err)
		}
		for i := range b - a {
			bits[a-x0+i] = frame.Flag(binary.LittleEndian.Uint16(bytes[2*i:]))
		}
	}
	return nil
}
