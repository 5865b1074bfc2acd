package survey

import (
	"context"
	"fmt"
	"path/filepath"
	"runtime"

	"nightsift/align"
	"nightsift/detect"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/subtract"
)

// Provenance returns the cards that every product carries: program, settings
// and inputs.
func Provenance(version, digest string, n, r *frame.Frame) *fits.Header {
	h := &fits.Header{}
	h.Set("CREATOR", "nightsift "+version, "program")
	h.Set("CONFDIG", digest, "digest of the configuration")
	h.Set("NEWFILE", filepath.Base(n.Path), "new frame")
	h.Set("NEWSHA", n.Checksum, "SHA-256 of the new frame's file")
	h.Set("REFFILE", filepath.Base(r.Path), "reference")
	h.Set("REFFSHA", r.Checksum, "SHA-256 of the reference's file")
	return h
}

// AlignFile runs stage 1 on files and writes the aligned pair.
func AlignFile(ctx context.Context, newPath, refPath, to string, c Config, version string) (*align.Pair, error) {
	k, err := c.LoadKeywords()
	if err != nil {
		return nil, err
	}
	n, err := load.Frame(newPath, k)
	if err != nil {
		return nil, err
	}
	r, err := load.Frame(refPath, k)
	if err != nil {
		return nil, fmt.Errorf("reference %s: %w", refPath, err)
	}
	known, err := c.standardStars()
	if err != nil {
		return nil, err
	}
	p, err := align.Align(ctx, n, r, c.stages(runtime.GOMAXPROCS(0)).align)
	if err != nil {
		return nil, err
	}
	known.mark(p)
	return p, p.WriteCompressed(to, Provenance(version, c.Digest(), n, r), c.compression())
}

// SubtractFile runs stage 2 on a file of stage 1.
func SubtractFile(ctx context.Context, alignedPath, to string, c Config, version string) (*subtract.Difference, error) {
	p, err := align.Read(alignedPath)
	if err != nil {
		return nil, err
	}
	d, err := subtract.Subtract(ctx, p, c.stages(runtime.GOMAXPROCS(0)).subtract)
	if err != nil {
		return nil, err
	}
	return d, d.WriteCompressed(to, Provenance(version, c.Digest(), p.New, p.Reference), c.compression())
}

// DetectFile runs stage 3 on a file of stage 2.
func DetectFile(ctx context.Context, differencePath, to string, c Config) ([]detect.Candidate, error) {
	d, err := subtract.Read(differencePath)
	if err != nil {
		return nil, err
	}
	found, err := detect.Detect(ctx, d, c.stages(runtime.GOMAXPROCS(0)).detect)
	if err != nil {
		return nil, err
	}
	return found, detect.WriteTable(to, found)
}
