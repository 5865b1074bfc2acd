package main

import (
	"strings"

	"github.com/spf13/cobra"

	"nightsift/catalog"
)

func newCatalogMatches() *cobra.Command {
	var folder, format, to, cone string
	var q catalog.ObjectQuery
	cmd := &cobra.Command{
		Use:   "matches",
		Short: "List what your own catalogues have at the places of objects",
		Long: `List what the catalogues under [[crossmatch]] in survey.toml have at the places
of objects: the nearest star, variable or active nucleus, and the host galaxy by
directional light radius; with offsets in arcsec and kpc, redshift, and the
absolute magnitude at the peak.`,
		Example: `  nightsift catalog matches --survey my-survey --night 2027-01-05
  nightsift catalog matches --survey my-survey --cone 148.27,-8.40,5 --format votable --out matches.xml`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			as, err := catalog.FindFormat(format)
			if err != nil {
				return usagef("--format: %v", err)
			}
			if to == "" && !as.Text {
				return usagef("--format %s needs --out: it is not text", format)
			}
			if cone != "" {
				if q.Cone, err = catalog.ParseCone(cone); err != nil {
					return usagef("--cone: %v", err)
				}
			}
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			sheet, err := f.MatchSheet(cmd.Context(), q)
			if err != nil {
				return err
			}
			if to == "" {
				return as.Encode(cmd.OutOrStdout(), sheet)
			}
			return as.Write(to, sheet)
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&q.Night, "night", "", "only objects seen in this night, YYYY-MM-DD")
	flags.StringVar(&q.Field, "field", "", "only objects of this field")
	flags.StringVar(&cone, "cone", "", "only objects within RA,DEC,RADIUS (deg, deg, arcsec)")
	flags.StringVar(&format, "format", "csv", "format: "+strings.Join(catalog.FormatNames(), ", "))
	flags.StringVar(&to, "out", "", "file to write; else text goes to stdout")
	return cmd
}
