package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"nightsift/internal/demo"
	"nightsift/internal/survey"
)

func newCheck(*output) *cobra.Command {
	var folder, pictureFile string
	cmd := &cobra.Command{
		Use:   "check [FRAME]...",
		Short: "Test the installation, a survey folder or a frame, and say what is wrong",
		Long: `Without arguments, test the installation. With --survey, look over the folder:
configuration, references, results, catalogue. With frames, say in plain words
what is understood of each: size, header values and the keywords they come from,
what was guessed or estimated, what is missing and what that costs, world
coordinates, sky, stars. With --picture, also paint the frame. Nothing else is
written or changed.

Exit code 1 when something is wrong, 3 when a frame would be set aside.`,
		Example: "  nightsift check new.fits --picture new.png",
		Args:    cobra.ArbitraryArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			var found []survey.Finding
			config := survey.DefaultConfig()
			if folder != "" {
				f, err := survey.OpenFolder(folder)
				if err != nil {
					return err
				}
				config = f.Config
				if len(args) == 0 {
					found = f.Check(cmd.Context(), version)
				}
			} else if len(args) == 0 {
				found = demo.CheckInstallation(cmd.Context(), version)
			}
			w := cmd.OutOrStdout()
			wrong := 0
			for _, f := range found {
				head := "ok   "
				if f.Wrong {
					head = "WRONG"
					wrong++
				}
				fmt.Fprintf(w, "%s  %s: %s", head, f.Place, f.Text)
				if f.Remedy != "" {
					fmt.Fprintf(w, "; %s", f.Remedy)
				}
				fmt.Fprintln(w)
			}
			bad := 0
			frames, err := survey.FramesIn(args, config)
			if err != nil {
				return err
			}
			if pictureFile != "" && len(frames) != 1 {
				return usagef("--picture %s takes exactly one frame, found %d; name one, a mosaic's as FILE.fits[EXTNAME]", pictureFile, len(frames))
			}
			for i, path := range frames {
				if i > 0 {
					fmt.Fprintln(w)
				}
				ok, err := survey.DescribeFrame(w, path, pictureFile, config)
				if err != nil {
					return err
				}
				if !ok {
					bad++
				}
			}
			switch {
			case wrong > 0:
				return fmt.Errorf("%d things are wrong", wrong)
			case bad > 0:
				return errSetAside
			}
			return nil
		},
	}
	cmd.Flags().StringVar(&pictureFile, "picture", "", "write a picture of the one frame to this PNG file")
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder; its configuration also serves for frames")
	return cmd
}
