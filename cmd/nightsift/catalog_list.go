package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"nightsift/catalog"
)

// withStore opens the catalogue of a survey for a task: to write, or to read.
func withStore(cmd *cobra.Command, folder string, write bool, do func(*catalog.Store) error) error {
	f, err := openSurvey(folder)
	if err != nil {
		return err
	}
	open := f.ReadStore
	if write {
		open = f.OpenStore
	}
	s, err := open(cmd.Context())
	if err != nil {
		return err
	}
	defer s.Close()
	return do(s)
}

func newCatalogList() *cobra.Command {
	var folder, what, cone string
	var night, field, state, where string
	var probability float64
	cmd := &cobra.Command{
		Use:   "list",
		Short: "List objects, candidates or frames",
		Long: `List objects, candidates or frames for people to read; for programs there is
export. All filters must hold together. A cone lists the nearest first.`,
		Example: `  nightsift catalog list --survey my-survey --night 2027-01-05 --state new --min-probability 0.8
  nightsift catalog list --survey my-survey --cone 150.1,2.2,30
  nightsift catalog list --survey my-survey --where "nights >= 2 AND peak_mag < 19"`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			var circle *catalog.Cone
			if cone != "" {
				var err error
				if circle, err = catalog.ParseCone(cone); err != nil {
					return usagef("--cone: %v", err)
				}
			}
			if what != "objects" && what != "candidates" && what != "frames" {
				return usagef("--what %s: want objects, candidates or frames", what)
			}
			if what == "frames" && (cone != "" || state != "" || probability > 0) {
				return usagef("--what frames takes --night, --field and --where")
			}
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				w := cmd.OutOrStdout()
				switch what {
				case "candidates":
					list, err := s.Candidates(cmd.Context(), catalog.CandidateQuery{Night: night, Field: field, State: catalog.State(state),
						MinProbability: probability, Cone: circle, Condition: where})
					if err != nil {
						return err
					}
					return catalog.ListCandidates(w, list)
				case "frames":
					list, err := s.Frames(cmd.Context(), catalog.FrameQuery{Night: night, Field: field, Condition: where})
					if err != nil {
						return err
					}
					return catalog.ListFrames(w, list)
				}
				list, err := s.Objects(cmd.Context(), catalog.ObjectQuery{Night: night, Field: field, State: catalog.State(state),
					MinProbability: probability, Cone: circle, Condition: where})
				if err != nil {
					return err
				}
				return catalog.ListObjects(w, list)
			})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&what, "what", "objects", "table: objects, candidates or frames")
	flags.StringVar(&night, "night", "", "detected in this night (YYYY-MM-DD)")
	flags.StringVar(&field, "field", "", "detected on a frame of this field")
	flags.StringVar(&state, "state", "", "state of the object: new, watched, confirmed, rejected, gone")
	flags.Float64Var(&probability, "min-probability", 0, "least real_probability")
	flags.StringVar(&cone, "cone", "", "circle RA,DEC,RADIUS: degrees, degrees, arcseconds")
	flags.StringVar(&where, "where", "", "condition in SQL on view_objects, view_candidates or view_frames")
	return cmd
}

func newCatalogCheck() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:   "check",
		Short: "Check that the catalogue is whole and its objects are right",
		Long: `Check the catalogue: its file, the references between its tables, and whether
its objects are those that its candidates and the decisions about them give.
Nothing is changed.`,
		Example: "  nightsift catalog check --survey my-survey",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				found, err := s.Check(cmd.Context())
				if err != nil {
					return err
				}
				for _, f := range found {
					fmt.Fprintln(cmd.OutOrStdout(), f)
				}
				if len(found) > 0 {
					return fmt.Errorf("%d things are wrong in %s", len(found), s.Path())
				}
				fmt.Fprintln(cmd.OutOrStdout(), s.Path()+": sound")
				return nil
			})
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}

func newCatalogRebuild() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:   "rebuild",
		Short: "Form all objects anew from the candidates and the decisions about them",
		Long: `Form all objects anew from the candidates and the decisions about them. Names,
labels, states and comments stay. It is needed only when "catalog check" says so.`,
		Example: "  nightsift catalog rebuild --survey my-survey",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, folder, true, func(s *catalog.Store) error { return s.Rebuild(cmd.Context()) })
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}

func newCatalogBackup() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:   "backup FILE",
		Short: "Copy the catalogue as it is now to a file, also while it is in use",
		Long: `Copy the whole catalogue, as it is at one instant, to an SQLite file, which is
itself a catalogue. Runs may go on meanwhile. An existing file is replaced when
the copy is complete.`,
		Example: "  nightsift catalog backup /backup/catalog.sqlite --survey my-survey",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, folder, false, func(s *catalog.Store) error { return s.Backup(cmd.Context(), args[0]) })
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}

func newCatalogRestore() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:   "restore FILE",
		Short: "Fill an empty catalogue from a backup",
		Long: `Fill the survey's catalogue from a backup, or from the SQLite file of another
survey. It must be empty: move the old one away, or name a new one in
survey.toml. This is also the way from SQLite to PostgreSQL.`,
		Example: "  nightsift catalog restore /backup/catalog.sqlite --survey my-survey",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, folder, true, func(s *catalog.Store) error { return s.Restore(cmd.Context(), args[0]) })
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}
