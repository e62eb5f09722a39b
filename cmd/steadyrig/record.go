package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/history"
)

// addHistory adds --no-history to a command whose results the rig's history keeps.
func (s *settings) addHistory(cmd *cobra.Command) {
	cmd.Flags().BoolVar(&s.noHistory, "no-history", false, "do not add the result to the rig's history")
}

// record adds entries to the history beside a rig file. A history that cannot be written is no reason to lose the
// result: it costs a warning.
func (a *app) record(s *settings, rig string, entries ...history.Entry) {
	if s.noHistory || rig == "-" {
		return
	}
	for i := range entries {
		entries[i].Made, entries[i].Tool, entries[i].Command = a.made(), a.tool, a.command()
	}
	path := history.Path(rig)
	if err := history.Append(path, entries...); err != nil {
		a.warn(s, []string{fmt.Sprintf("%s: the result is not in the history: %v", path, plainPathError(err))})
	}
}
