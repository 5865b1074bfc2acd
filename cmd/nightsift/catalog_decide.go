package main

import (
	"fmt"
	"os/user"
	"time"

	"github.com/spf13/cobra"

	"nightsift/catalog"
)

// said holds the flags of what people say: who and why.
type said struct{ folder, by, comment string }

func (s *said) flags(cmd *cobra.Command, comment bool) *cobra.Command {
	name := ""
	if u, err := user.Current(); err == nil {
		name = u.Username
	}
	cmd.Flags().StringVar(&s.folder, "survey", "", "survey folder")
	cmd.Flags().StringVar(&s.by, "by", name, "who says it")
	if comment {
		cmd.Flags().StringVar(&s.comment, "comment", "", "why")
	}
	return cmd
}

func (s *said) remark() catalog.Remark {
	return catalog.Remark{Author: s.by, Time: time.Now(), Comment: s.comment}
}

func newCatalogLabel() *cobra.Command {
	var s said
	cmd := &cobra.Command{
		Use:   "label CANDIDATE real|bogus|unsure",
		Short: "Store a verdict on a candidate",
		Long: `Store a verdict on a candidate. It stays when the frame is processed again, with
the candidate of the same identifier or at the same place. Of several verdicts
of one person the latest counts.`,
		Example: `  nightsift catalog label 3f2a09bc51d7e846 bogus --by Ada --comment "ghost of a bright star" --survey my-survey`,
		Args:    cobra.ExactArgs(2),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, s.folder, true, func(store *catalog.Store) error {
				return store.AddLabel(cmd.Context(), catalog.Label{Candidate: args[0], Verdict: catalog.Verdict(args[1]), Reviewer: s.by, Time: time.Now(), Comment: s.comment})
			})
		},
	}
	return s.flags(cmd, true)
}

func newCatalogLabels() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:     "labels",
		Short:   "List the verdicts that count",
		Example: "  nightsift catalog labels --survey my-survey",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, folder, false, func(store *catalog.Store) error {
				list, err := store.Labels(cmd.Context())
				if err != nil {
					return err
				}
				return catalog.ListLabels(cmd.OutOrStdout(), list)
			})
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}

func newCatalogComment() *cobra.Command {
	var s said
	cmd := &cobra.Command{
		Use:     "comment OBJECT TEXT",
		Short:   "Store a comment on an object",
		Example: `  nightsift catalog comment "NS J095304.88-082412.1" "host at z = 0.03" --by Ada --survey my-survey`,
		Args:    cobra.ExactArgs(2),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, s.folder, true, func(store *catalog.Store) error {
				r := s.remark()
				r.Comment = args[1]
				return store.AddComment(cmd.Context(), args[0], r)
			})
		},
	}
	return s.flags(cmd, false)
}

func newCatalogState() *cobra.Command {
	var s said
	cmd := &cobra.Command{
		Use:   "state OBJECT new|watched|confirmed|rejected|gone",
		Short: "Say where an object stands in its life",
		Long: `Say where an object stands:
  new        nobody has decided anything; so every object begins
  watched    of interest, to be looked at again
  confirmed  what it is has been settled
  rejected   nothing real, or of no interest
  gone       faded, no longer expected on new frames
Earlier states stay in the object's list of remarks.`,
		Example: `  nightsift catalog state "NS J095304.88-082412.1" confirmed --comment "spectrum of type Ia" --by Ada --survey my-survey`,
		Args:    cobra.ExactArgs(2),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, s.folder, true, func(store *catalog.Store) error {
				r := s.remark()
				r.State = catalog.State(args[1])
				return store.SetState(cmd.Context(), args[0], r)
			})
		},
	}
	return s.flags(cmd, true)
}

func newCatalogMerge() *cobra.Command {
	var s said
	cmd := &cobra.Command{
		Use:   "merge OBJECT OBJECT",
		Short: "Decide that two objects are one",
		Long: `Decide that two objects are one. The decision holds for all later frames and
reruns until it is withdrawn; both names lead to the object.`,
		Example: `  nightsift catalog merge "NS J095304.88-082412.1" "NS J095304.95-082412.9" --by Ada --survey my-survey`,
		Args:    cobra.ExactArgs(2),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, s.folder, true, func(store *catalog.Store) error {
				o, err := store.Merge(cmd.Context(), args[0], args[1], s.remark())
				if err != nil {
					return err
				}
				return catalog.ListObjects(cmd.OutOrStdout(), []catalog.Object{o})
			})
		},
	}
	return s.flags(cmd, true)
}

func newCatalogSplit() *cobra.Command {
	var s said
	cmd := &cobra.Command{
		Use:   "split OBJECT CANDIDATE...",
		Short: "Decide that some detections of an object belong to another one",
		Long: `Decide that the named candidates belong to another object than the other
detections of OBJECT. The decision holds for all later frames and reruns until it
is withdrawn; new detections join the nearer one.`,
		Example: `  nightsift catalog split "NS J095304.88-082412.1" 3f2a09bc51d7e846 9d01c77a3be2450f --by Ada --survey my-survey`,
		Args:    cobra.MinimumNArgs(2),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, s.folder, true, func(store *catalog.Store) error {
				list, err := store.Split(cmd.Context(), args[0], args[1:], s.remark())
				if err != nil {
					return err
				}
				return catalog.ListObjects(cmd.OutOrStdout(), list)
			})
		},
	}
	return s.flags(cmd, true)
}

func newCatalogDecisions() *cobra.Command {
	var folder string
	cmd := &cobra.Command{
		Use:     "decisions",
		Short:   "List merges and splits",
		Example: "  nightsift catalog decisions --survey my-survey",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, folder, false, func(store *catalog.Store) error {
				list, err := store.Decisions(cmd.Context())
				if err != nil {
					return err
				}
				return catalog.ListDecisions(cmd.OutOrStdout(), list)
			})
		},
	}
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder")
	return cmd
}

func newCatalogWithdraw() *cobra.Command {
	var s said
	cmd := &cobra.Command{
		Use:     "withdraw DECISION",
		Short:   "End a merge or a split",
		Long:    `End a merge or a split: objects are formed as if it had not been made. It stays in the list of decisions.`,
		Example: "  nightsift catalog withdraw 5b1c9e0f77a2d4385b1c9e0f --by Ada --survey my-survey",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			return withStore(cmd, s.folder, true, func(store *catalog.Store) error {
				if err := store.Withdraw(cmd.Context(), args[0], s.remark()); err != nil {
					return err
				}
				fmt.Fprintf(cmd.OutOrStdout(), "%s is withdrawn\n", args[0])
				return nil
			})
		},
	}
	return s.flags(cmd, false)
}
