package main

import (
	"io"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/wholefile"
)

func newCatalogStamp() *cobra.Command {
	var folder, to string
	var northUp bool
	size := detect.StampSize
	cmd := &cobra.Command{
		Use:   "stamp CANDIDATE_ID|OBJECT",
		Short: "Write what a candidate looks like: new frame, reference, difference",
		Long: `Write the cut-outs of a candidate, or of an object's most significant detection:
as PNG side by side (new frame, reference, difference), or as FITS in three
extensions with world coordinates. New frame and reference have one stretch, so
that equal brightness is equally grey; the difference has its own. Pixels without
a value are black. --north-up turns the PNG so that north is up and east to the
left; FITS keeps its pixels.`,
		Example: `  nightsift catalog stamp "NS J095304.88-082412.1" --survey my-survey --out event.png --north-up
  nightsift catalog stamp 0a47e802c47c65e7 --survey my-survey --out event.fits --size 31`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			asFITS := strings.HasSuffix(to, ".fits")
			switch {
			case !asFITS && !strings.HasSuffix(to, ".png"):
				return usagef("--out %s: want a file name that ends in .png or .fits", to)
			case asFITS && northUp:
				return usagef("--north-up is for .png: the pixels of a FITS stamp stay as they are, its world coordinates say where north is")
			case size < 5 || size > detect.StampSize:
				return usagef("--size %d: want 5 to %d", size, detect.StampSize)
			}
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				stamp, err := s.Stamp(cmd.Context(), args[0], size)
				if err != nil {
					return err
				}
				return wholefile.Write(to, func(w io.Writer) error {
					if asFITS {
						return stamp.EncodeFITS(w)
					}
					return stamp.EncodePNG(w, northUp)
				})
			})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&to, "out", "", "file to write, .png or .fits")
	flags.BoolVar(&northUp, "north-up", false, "north up, east to the left")
	flags.IntVar(&size, "size", size, "side of the cut-outs, pixels of the new frame")
	return cmd
}
