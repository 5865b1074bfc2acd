package main

import (
	"errors"
	"fmt"
	"net"
	"os/user"
	"time"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/internal/survey"
	"nightsift/internal/vetting"
)

func newVet(out *output) *cobra.Command {
	var folder, listen, night, reviewer string
	var hosts []string
	if u, err := user.Current(); err == nil {
		reviewer = u.Username
	}
	cmd := &cobra.Command{
		Use:   "vet --survey DIR",
		Short: "Look at candidates in a browser and say what is real",
		Long: `Serve a local page on which reviewers look at candidates, say real, bogus or
unsure, and see what became of objects. Its address is printed on stdout. Labels
go to the catalogue at once, with the reviewer's name and the time; several
people may work at the same time, also on several machines with a catalogue on
PostgreSQL. The next train uses them.

The page asks for no password: whoever reaches it may label. It listens on this
machine's loopback address unless --listen names another one. From elsewhere an
SSH tunnel leads to it: ssh -L 8033:127.0.0.1:8033 MACHINE. With --listen on another
address, requests must name an IP address, this machine, or a name given with
--host.

It ends with an interrupt (Ctrl-C) or SIGTERM, after what is under way, with exit
code 0: nothing is left to be resumed.`,
		Example: "  nightsift vet --survey my-survey --listen 127.0.0.1:8033 --night 2027-01-05 --reviewer Ada",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			if night != "" {
				if _, err := time.Parse(time.DateOnly, night); err != nil {
					return usagef("--night %s: want the date of the evening, YYYY-MM-DD", night)
				}
			}
			if reviewer == "" {
				return usagef("--reviewer is needed: say whose labels these are")
			}
			return runVet(cmd, out, f, listen, vetting.Config{Survey: f.Config.Survey.Name, Night: night, Reviewer: reviewer, Hosts: hosts, Log: out.lines, Version: version})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&listen, "listen", "127.0.0.1:0", "address and port to listen on; port 0: any free one")
	flags.StringVar(&night, "night", "", "show this night at first, YYYY-MM-DD; empty: all nights")
	flags.StringVar(&reviewer, "reviewer", reviewer, "whose labels these are; each browser may be told another name")
	flags.StringSliceVar(&hosts, "host", nil, "with --listen on another address: a further name under which the page is asked for")
	return cmd
}

func runVet(cmd *cobra.Command, out *output, f *survey.Folder, listen string, cfg vetting.Config) error {
	ctx := cmd.Context()
	// The address first: who asks early waits, and a port that is taken is said
	// before the catalogue is brought up to date.
	l, err := net.Listen("tcp", listen)
	if err != nil {
		return usagef("--listen %s: %v", listen, err)
	}
	defer l.Close()
	if cfg.OnlyLoopback = vetting.Loopback(l.Addr()); !cfg.OnlyLoopback {
		out.lines.Warn("others can reach this page: it asks for no password", "address", l.Addr().String())
	}
	fmt.Fprintf(cmd.OutOrStdout(), "http://%s/\n", l.Addr())

	if cfg.Model, err = f.Config.Model(); err != nil {
		return err
	}
	// Vetting makes no catalogue where there is none; opening one to write would.
	if look, err := f.ReadStore(ctx); err == nil {
		look.Close()
	} else if errors.Is(err, catalog.ErrAbsent) {
		return err
	}
	store, err := f.OpenStore(ctx)
	if err != nil {
		return err
	}
	defer store.Close()
	s, err := vetting.New(store, cfg)
	if err != nil {
		return usagef("%v", err)
	}
	out.lines.Info("vetting: open the address in a browser; Ctrl-C ends it", "survey", cfg.Survey, "reviewer", cfg.Reviewer)
	return s.Serve(ctx, l)
}
