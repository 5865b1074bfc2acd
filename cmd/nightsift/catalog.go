package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"nightsift/internal/survey"
)

func newCatalog(*output) *cobra.Command {
	cmd := &cobra.Command{
		Use:     "catalog",
		Short:   "Stage 4: the catalogue of a survey",
		Example: "  nightsift catalog export --survey my-survey --format csv --what objects",
		Args: func(cmd *cobra.Command, args []string) error {
			if len(args) > 0 {
				return usagef("unknown command %q of catalog", args[0])
			}
			return nil
		},
		RunE: func(cmd *cobra.Command, args []string) error { return cmd.Help() },
	}
	cmd.AddCommand(newCatalogAdd(), newCatalogExport(), newCatalogShow(), newCatalogList(),
		newCatalogLabel(), newCatalogLabels(), newCatalogComment(), newCatalogState(),
		newCatalogMerge(), newCatalogSplit(), newCatalogDecisions(), newCatalogWithdraw(),
		newCatalogCoverage(), newCatalogDepth(), newCatalogAlert(), newCatalogStamp(), newCatalogMatches(),
		newCatalogCheck(), newCatalogRebuild(), newCatalogBackup(), newCatalogRestore())
	return cmd
}

func openSurvey(dir string) (*survey.Folder, error) {
	if dir == "" {
		return nil, usagef("--survey is needed: name the survey folder")
	}
	return survey.OpenFolder(dir)
}

func newCatalogAdd() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:   "add CANDIDATES...",
		Short: "Put tables of candidates into the catalogue",
		Long: `Put tables of candidates into the catalogue, frame by frame. What the catalogue
had of a frame is replaced, so adding twice changes nothing. A run does this by
itself; this command is for tables that were made stage by stage.`,
		Example: "  nightsift catalog add candidates.fits --survey my-survey",
		Args:    cobra.MinimumNArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			for _, path := range args {
				frames, candidates, err := f.AddTable(cmd.Context(), path, version)
				if err != nil {
					return err
				}
				fmt.Fprintf(cmd.OutOrStdout(), "%s: %d candidates of %d frames\n", path, candidates, frames)
			}
			return nil
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}

func newCatalogShow() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:     "show ID",
		Short:   "Show an object with all its detections, or a candidate",
		Example: `  nightsift catalog show "NS J095304.88-082412.1" --survey my-survey`,
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			s, err := f.ReadStore(cmd.Context())
			if err != nil {
				return err
			}
			defer s.Close()
			return s.Show(cmd.Context(), cmd.OutOrStdout(), args[0])
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}
