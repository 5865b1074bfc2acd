package main

import (
	"fmt"
	"text/tabwriter"

	"github.com/spf13/cobra"
)

func newStatus(*output) *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:     "status",
		Short:   "What has run, what is waiting and what was set aside, by night",
		Example: "  nightsift status --survey my-survey",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			nights, err := f.Status(version)
			if err != nil {
				return err
			}
			w := tabwriter.NewWriter(cmd.OutOrStdout(), 0, 0, 2, ' ', tabwriter.AlignRight)
			fmt.Fprintln(w, "night\tsearched\tset aside\tfailed\twaiting\tcandidates\tp ≥ 0.5\t")
			for _, n := range nights {
				fmt.Fprintf(w, "%s\t%d\t%d\t%d\t%d\t%d\t%d\t\n", n.Night, n.Searched, n.SetAside, n.Failed, n.Waiting, n.Candidates, n.Likely)
			}
			if err := w.Flush(); err != nil {
				return err
			}
			for _, n := range nights {
				for _, r := range n.NotSearched {
					fmt.Fprintf(cmd.OutOrStdout(), "\n%s/%s: %s, %s\n  %s\n", n.Night, r.Frame, r.Status, r.Reason, r.Detail)
				}
			}
			return nil
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}
