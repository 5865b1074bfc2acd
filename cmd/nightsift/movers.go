package main

import (
	"fmt"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/internal/survey"
)

func newMovers(*output) *cobra.Command {
	var folder, night, since, to, format, exchange string
	cmd := &cobra.Command{
		Use:   "movers",
		Short: "List what moves in a night: known minor planets and tracklets",
		Long: `List the detections of a night that belong to a known minor planet or to a
tracklet. Minor planets are those of the file that elements names under
[minor_planets] in survey.toml; their places are computed for the middle of each
exposure and the survey's site. --exchange writes the same detections in the
standard form for the exchange of astrometry (ADES, PSV).

With --since the tracklets of all nights from that one to --night are joined
instead, those of no known minor planet: a row for each tracklet of a track that
one body may have made.`,
		Example: `  nightsift movers --survey my-survey --night 2026-12-01 --exchange movers.psv
  nightsift movers --survey my-survey --since 2026-11-27 --night 2026-12-01`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			form, err := catalog.FindFormat(format)
			if err != nil {
				return usagef("--format: %v", err)
			}
			for _, d := range [][2]string{{"--night", night}, {"--since", since}} {
				if _, err := time.Parse(time.DateOnly, d[1]); err != nil && (d[1] != "" || d[0] == "--night") {
					return usagef("%s %q: want the date of an evening, YYYY-MM-DD", d[0], d[1])
				}
			}
			switch {
			case since > night:
				return usagef("--since %s is after --night %s", since, night)
			case to == "" && !form.Text:
				return usagef("--format %s needs --out: it is not text", format)
			}
			if since != "" {
				if exchange != "" {
					return usagef("--exchange goes with a single night")
				}
				sheet, err := f.TrackSheet(since, night)
				if err != nil {
					return err
				}
				if to == "" {
					return form.Encode(cmd.OutOrStdout(), sheet)
				}
				return form.Write(to, sheet)
			}
			list, err := f.NameMovers(night)
			if err != nil {
				return err
			}
			if exchange != "" {
				if err := f.WriteMovers(exchange, list); err != nil {
					return err
				}
			}
			if to == "" {
				return form.Encode(cmd.OutOrStdout(), survey.MoverSheet(list))
			}
			if err := form.Write(to, survey.MoverSheet(list)); err != nil {
				return err
			}
			known := 0
			for i := range list {
				if list[i].Known {
					known++
				}
			}
			fmt.Fprintf(cmd.OutOrStdout(), "%d detections of movers, %d of known minor planets\n", len(list), known)
			return nil
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&night, "night", "", "date of the evening, YYYY-MM-DD")
	flags.StringVar(&since, "since", "", "first of several nights whose tracklets are joined, YYYY-MM-DD")
	flags.StringVar(&to, "out", "", "file to write; else csv goes to stdout")
	flags.StringVar(&format, "format", "csv", "format: "+strings.Join(catalog.FormatNames(), ", "))
	flags.StringVar(&exchange, "exchange", "", "file to write in the exchange form of astrometry")
	return cmd
}
