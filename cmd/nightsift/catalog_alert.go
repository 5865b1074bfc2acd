package main

import (
	"time"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/internal/astro"
	"nightsift/internal/voevent"
	"nightsift/internal/wholefile"
)

func newCatalogAlert() *cobra.Command {
	var folder, to, date, authority, contact, email string
	var supersedes []string
	var test bool
	cmd := &cobra.Command{
		Use:   "alert OBJECT",
		Short: "Write a VOEvent packet about an object",
		Long: `Write a VOEvent 2.0 packet about an object, given by its name or a candidate of
it: position with its error (ICRS), time of the first detection, magnitudes, the
last frame without it, all detections. Nothing is sent anywhere. The packet says
that the limits of each site (sun, horizon, weather, safety) and its operators
come first. A rejected object is not announced.

Identifiers begin with the authority that the survey has registered in the
Virtual Observatory; without --authority one that ends in .invalid is made up.
The identifier ends in the number of detections; --supersedes names packets that
this one replaces.`,
		Example: `  nightsift catalog alert "NS J095304.88-082412.1" --survey my-survey --out event.xml
  nightsift catalog alert "NS J095304.88-082412.1" --survey my-survey --out event.xml --authority marrow-ridge.example --contact "A. Person"`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			now := float64(time.Now().UnixMilli())/86400000 + 40587
			if date != "" {
				var err error
				if now, err = astro.ParseDate(date); err != nil {
					return usagef("--date: %v", err)
				}
			}
			if to == "" {
				return usagef("--out is needed: name the file to write")
			}
			if authority != "" {
				if err := voevent.CheckIVORN("ivo://"+authority, false); err != nil {
					return usagef("--authority: %v", err)
				}
			}
			for _, s := range supersedes {
				if err := voevent.CheckIVORN(s, true); err != nil {
					return usagef("--supersedes: %v", err)
				}
			}
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				a := f.AlertSettings(version)
				a.Authority, a.ContactName, a.ContactEmail, a.Date, a.Test, a.Supersedes = authority, contact, email, astro.MJDToISO(now), test, supersedes
				packet, err := s.Alert(cmd.Context(), args[0], a)
				if err != nil {
					return err
				}
				return wholefile.Write(to, packet.Encode)
			})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&to, "out", "", "file to write, XML")
	flags.StringVar(&authority, "authority", "", "registered authority of the survey")
	flags.StringVar(&contact, "contact", "", "name of the person to ask")
	flags.StringVar(&email, "email", "", "address of the person to ask")
	flags.StringVar(&date, "date", "", "date of the packet, UTC; now if not given")
	flags.StringArrayVar(&supersedes, "supersedes", nil, "identifier of a packet that this one replaces")
	flags.BoolVar(&test, "test", false, "mark the packet as a test")
	return cmd
}
