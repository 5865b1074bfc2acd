// Command nightsift turns a night's frames and a deep reference into a short
// list of new sources.
package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

	"nightsift/internal/survey"
)

// version is part of every product; it changes with each release.
const version = "0.1.0"

// The exit codes are a promise to scripts.
const (
	exitDone        = 0   // all frames searched
	exitFailed      = 1   // the job failed
	exitUsage       = 2   // wrong usage or configuration
	exitSetAside    = 3   // finished, but some frames were set aside
	exitLocked      = 4   // another run holds the survey
	exitInterrupted = 130 // resumable
)

const exitHelp = `
Exit codes:
  0    all frames searched
  1    the job failed
  2    wrong usage or configuration
  3    finished, but some frames were set aside (frames.csv says why)
  4    another run holds the survey
  130  interrupted; run the same command again to go on`

// usageError is a mistake on the command line.
type usageError struct{ err error }

func (u usageError) Error() string { return u.err.Error() }
func (u usageError) Unwrap() error { return u.err }

func usagef(format string, args ...any) error { return usageError{fmt.Errorf(format, args...)} }

// errSetAside ends a command whose frames were not all searched.
var errSetAside = errors.New("some frames were set aside")

func main() { os.Exit(execute()) }

func execute() int {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	// A second signal ends the program at once.
	context.AfterFunc(ctx, stop)
	root := newRoot()
	err := root.ExecuteContext(ctx)
	code := exitCode(ctx, err)
	switch {
	case code == exitInterrupted:
		if !errors.Is(err, context.Canceled) {
			fmt.Fprintln(os.Stderr, "nightsift:", err)
		}
		fmt.Fprintln(os.Stderr, "nightsift: interrupted; run the same command again to go on")
	case err != nil && !errors.Is(err, errSetAside):
		fmt.Fprintln(os.Stderr, "nightsift:", err)
		if code == exitUsage {
			fmt.Fprintln(os.Stderr, "See nightsift --help, or --help after a command.")
		}
	}
	return code
}

func exitCode(ctx context.Context, err error) int {
	var usage usageError
	var config *survey.ConfigError
	switch {
	case err == nil:
		return exitDone
	case errors.Is(err, errSetAside):
		return exitSetAside
	case ctx.Err() != nil:
		return exitInterrupted // whatever the interruption has led to
	case errors.Is(err, survey.ErrLocked):
		return exitLocked
	case errors.As(err, &usage), errors.As(err, &config):
		return exitUsage
	default:
		return exitFailed
	}
}

func newRoot() *cobra.Command {
	var out output
	root := &cobra.Command{
		Use:   "nightsift",
		Short: "Find new sources in a night's frames by subtracting a deep reference",
		Long: `nightsift registers frames to a deep reference by their stars, brings both to
a common point-spread function, subtracts, and lists what remains: candidates
with position, brightness, probability and cut-outs.

Start with:
  nightsift demo                      an invented survey, searched and scored
  nightsift run NEW.fits --reference REF.fits --out results
  nightsift init my-survey            a survey folder for the nightly job
` + exitHelp,
		Version:       version,
		SilenceErrors: true,
		SilenceUsage:  true,
		Args: func(cmd *cobra.Command, args []string) error {
			if len(args) > 0 {
				return usagef("unknown command %q", args[0])
			}
			return nil
		},
		RunE: func(cmd *cobra.Command, args []string) error { return cmd.Help() },
	}
	root.PersistentFlags().StringVar(&out.log, "log", "text", "messages on stderr: text or json")
	root.PersistentFlags().BoolVarP(&out.quiet, "quiet", "q", false, "only warnings and errors on stderr")
	root.SetFlagErrorFunc(func(cmd *cobra.Command, err error) error { return usageError{err} })
	root.PersistentPreRunE = func(cmd *cobra.Command, args []string) error { return out.start() }
	root.AddCommand(
		newDemo(&out), newInit(&out), newRun(&out), newAlign(&out), newSubtract(&out), newDetect(&out),
		newCatalog(&out), newLightcurve(&out), newMovers(&out), newReference(&out), newStatus(&out), newCheck(&out), newSimulate(&out), newTrain(&out),
		newEfficiency(&out), newVet(&out),
	)
	for _, c := range root.Commands() {
		wrapArgs(c)
	}
	return root
}

// wrapArgs makes a wrong number of arguments a usage error.
func wrapArgs(c *cobra.Command) {
	if check := c.Args; check != nil {
		c.Args = func(cmd *cobra.Command, args []string) error {
			if err := check(cmd, args); err != nil {
				return usageError{err}
			}
			return nil
		}
	}
	for _, sub := range c.Commands() {
		wrapArgs(sub)
	}
}
