package main

import (
	"strings"

	"github.com/spf13/cobra"

	"nightsift/catalog"
)

func newCatalogExport() *cobra.Command {
	var folder, format, to string
	var describe bool
	var q catalog.Selection
	cmd := &cobra.Command{
		Use:   "export",
		Short: "Write candidates, objects, frames or light curves as a table",
		Long: `Write a table of the catalogue: candidates, objects, frames, or light curves,
which have the detections of one object (or of all that pass the filters) and the
searched frames that show nothing at its place. All filters must hold together.
Rows have a fixed order: equal catalogues give equal tables, with identical rows
in every format. Text formats go to stdout when no file is named.

Units, descriptions and content descriptors of the columns are within ecsv, fits,
votable and parquet; for the others --describe writes them as a table.`,
		Example: `  nightsift catalog export --survey my-survey --format votable --what objects --out objects.xml
  nightsift catalog export --survey my-survey --night 2027-01-05 --min-probability 0.8 --where "mag < 19" --format jsonl
  nightsift catalog export --survey my-survey --what lightcurve --object "NS J095304.88-082412.1" --format ecsv
  nightsift catalog export --survey my-survey --what objects --describe`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := catalog.FindFormat(format)
			if err != nil {
				return usagef("--format: %v", err)
			}
			if err := q.Check(); err != nil {
				return usagef("%v", err)
			}
			if to == "" && !f.Text {
				return usagef("--format %s needs --out: it is not text", format)
			}
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				sheet, err := s.Select(cmd.Context(), q)
				if err != nil {
					return err
				}
				if describe {
					sheet = sheet.Describe()
				}
				if to == "" {
					return f.Encode(cmd.OutOrStdout(), sheet)
				}
				return f.Write(to, sheet)
			})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&format, "format", "csv", "format: "+strings.Join(catalog.FormatNames(), ", "))
	flags.StringVar(&q.Table, "what", "candidates", "table: "+strings.Join(catalog.Exports, ", "))
	flags.StringVar(&q.Object, "object", "", "the only object of --what lightcurve: name, former name, or a candidate of it")
	flags.StringVar(&q.Night, "night", "", "detected, or for frames taken, in this night (YYYY-MM-DD)")
	flags.StringVar(&q.Field, "field", "", "on a frame of this field")
	flags.Float64Var(&q.MinProbability, "min-probability", 0, "least real_probability")
	flags.StringVar((*string)(&q.State), "state", "", "state of the object: new, watched, confirmed, rejected, gone")
	flags.StringVar(&q.Condition, "where", "", "condition in SQL on view_candidates, view_frames, or (objects, lightcurve) view_objects")
	flags.BoolVar(&describe, "describe", false, "write the columns with types, units and descriptions instead of the rows")
	flags.StringVar(&to, "out", "", "file to write")
	return cmd
}
