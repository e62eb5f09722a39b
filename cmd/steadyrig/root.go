package main

import (
	"fmt"
	"strings"

	"github.com/spf13/cobra"

	"steadyrig/design"
)

const rootLong = `steadyrig takes closed-loop logs of a rig that cannot be left open loop and
gives a plant model with bounds, an inner loop that stabilises, an outer loop
that meets the spec, and a proof of both in the sampled loop that will run.

Start with "steadyrig demo", or with "steadyrig new LOG.csv" on a log of your
own.

Exit status: 0 done; 1 a fault in the tool; 2 the call or an input file is
wrong; 3 the data or the physics say no; 130 interrupted.`

// newRoot builds the commands afresh: flags of a used tree keep their values.
func newRoot(a *app) *cobra.Command {
	root := &cobra.Command{
		Use:           "steadyrig",
		Short:         "From closed-loop logs of an unstable rig to two proven loops",
		Long:          rootLong,
		Version:       strings.TrimPrefix(a.tool, "steadyrig "),
		SilenceUsage:  true,
		SilenceErrors: true,
		Args: func(cmd *cobra.Command, args []string) error {
			if len(args) > 0 {
				return unknownCommand(cmd, args[0])
			}
			return nil
		},
		RunE: func(cmd *cobra.Command, args []string) error { return cmd.Help() },
		PersistentPreRun: func(cmd *cobra.Command, args []string) {
			a.quiet, _ = cmd.Flags().GetBool("quiet") // false where a command has none
		},
	}
	// The template of the library lets flags run as wide as they are.
	root.SetUsageTemplate(strings.ReplaceAll(root.UsageTemplate(), "FlagUsages |", fmt.Sprintf("FlagUsagesWrapped %d |", pageWidth)))
	root.CompletionOptions.DisableDefaultCmd = true
	root.SuggestionsMinimumDistance = 2
	root.SetFlagErrorFunc(func(cmd *cobra.Command, err error) error {
		return callErrorf("%w; see %s --help", err, cmd.CommandPath())
	})
	root.SetHelpCommand(&cobra.Command{
		Use:   "help [command]",
		Short: "Say what a command does",
		RunE: func(cmd *cobra.Command, args []string) error {
			about, rest, err := cmd.Root().Find(args)
			if err != nil || len(rest) > 0 {
				return unknownCommand(cmd.Root(), strings.Join(args, " "))
			}
			return about.Help()
		},
	})
	root.AddCommand(
		newNew(a),
		newRun(a),
		newAudit(a),
		newFit(a),
		newTable(a),
		newDesign(a),
		newVerify(a),
		newRecheck(a),
		newSimulate(a),
		newWatch(a),
		newDemo(a),
		newHistory(a),
	)
	return root
}

func unknownCommand(root *cobra.Command, word string) error {
	hint := "see steadyrig --help"
	if near := root.SuggestionsFor(word); len(near) > 0 {
		hint = "did you mean " + strings.Join(near, " or ") + "?"
	}
	return callErrorf("there is no command %q; %s", word, hint)
}

// A settings holds the flags that every command takes.
type settings struct {
	json  bool
	out   string
	dir   string
	quiet bool
	force bool
	seed  uint64
	exact bool

	noHistory bool

	referee bool // the other methods of a fit see all rows

	inner, outer string // forms asked for
}

// defaultSeed serves where --seed is not given, so that a call without it can be repeated, too.
const defaultSeed = 1

// add adds the flags that every command takes; out says what --out names here.
func (s *settings) add(cmd *cobra.Command, out string) {
	f := cmd.Flags()
	f.SortFlags = false
	f.BoolVar(&s.json, "json", false, "print the result as one JSON document")
	f.StringVar(&s.out, "out", "", out)
	f.BoolVar(&s.quiet, "quiet", false, "no progress and no warnings on standard error")
	f.BoolVar(&s.force, "force", false, "write over files that exist")
}

// addSeed adds --seed to a command that draws random numbers.
func (s *settings) addSeed(cmd *cobra.Command) {
	cmd.Flags().Uint64Var(&s.seed, "seed", defaultSeed, "seed of all random draws")
}

// addForms adds --inner and --outer to a command that designs.
func (s *settings) addForms(cmd *cobra.Command) {
	f := cmd.Flags()
	f.StringVar(&s.inner, "inner", "", "form of the inner controller: "+strings.Join(design.InnerForms(), ", ")+" (default: the simplest that does)")
	f.StringVar(&s.outer, "outer", "", "form of the outer controller: "+strings.Join(design.OuterForms(), ", ")+" (default: the simplest that does)")
}

// checkForms refuses a form that there is not, before any work.
func (s *settings) checkForms() error {
	if err := s.design().Check(); err != nil {
		return callErrorf("%w", err)
	}
	return nil
}

func (s *settings) design() design.Options {
	return design.Options{Seed: s.seed, Inner: s.inner, Outer: s.outer}
}

// addReferee adds --referee to a command that fits.
func (s *settings) addReferee(cmd *cobra.Command) {
	cmd.Flags().BoolVar(&s.referee, "referee", false, "check a long log by the other methods on all of its rows, not on some of them")
}

// addExact adds --exact to a command that fits.
func (s *settings) addExact(cmd *cobra.Command) {
	cmd.Flags().BoolVar(&s.exact, "exact", false, "add intervals of the poles that matter that hold for logs of any length")
}

// wants returns a check of the number of arguments; what names them in words. most < 0: no upper limit.
func wants(least, most int, what string) cobra.PositionalArgs {
	return func(cmd *cobra.Command, args []string) error {
		if len(args) >= least && (most < 0 || len(args) <= most) {
			return nil
		}
		got := "none was given"
		switch n := len(args); {
		case n == 1:
			got = "one was given"
		case n > 1:
			got = fmt.Sprintf("%d were given", n)
		}
		return callErrorf("%s wants %s, %s; see %s --help", cmd.Name(), what, got, cmd.CommandPath())
	}
}
