package data_test

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/fittest/spoilt"
)

// A good log spoilt in every way at random places: it is named, by a Flaw or by an error, in 95 of 100 logs and more.
// The table lists what was said of each kind, and how often.
func TestCorruptedLogs(t *testing.T) {
	const rows = 4000
	logs := logsPerRig(t, 1)
	all, allNamed := 0, 0
	for _, c := range spoilt.Ways() {
		t.Run(c.Name, func(t *testing.T) {
			said := map[string]int{}
			named := 0
			for seed := range uint64(logs) {
				log, file, err := c.Make(rows, seed)
				if err != nil {
					t.Fatal(err)
				}
				rig, err := data.ReadRig(strings.NewReader(file), "rig.toml")
				if err != nil {
					t.Fatalf("%s, seed %d: %v", c.Name, seed, err)
				}
				exp, err := data.ReadLog(strings.NewReader(log), "log.csv", rig)
				var flaws []string
				yes := c.Named(exp, err)
				if err != nil {
					var fault *data.ParseError
					if !errors.As(err, &fault) || strings.ContainsAny(err.Error(), "\n\r") || !strings.HasPrefix(err.Error(), "log.csv: ") {
						t.Fatalf("%s, seed %d: no error of one line: %v", c.Name, seed, err)
					}
					if !yes {
						flaws = []string{"error: " + err.Error()}
					}
				} else {
					data.CheckExperiment(t, exp)
					flaws = names(exp.Flaws)
				}
				for _, f := range flaws {
					said[f]++
				}
				if yes {
					named++
				} else {
					t.Logf("%s, seed %d: %q", c.Name, seed, flaws)
				}
			}
			all += logs
			allNamed += named
			var list []string
			for f, n := range said {
				if f != c.Want {
					list = append(list, fmt.Sprintf("%s %d", f, n))
				}
			}
			slices.Sort(list)
			t.Logf("%-30s %3d of %3d named; also %s", c.Name, named, logs, strings.Join(list, ", "))
			if float64(named) < 0.95*float64(logs) {
				t.Errorf("%s: named in %d of %d logs", c.Name, named, logs)
			}
		})
	}
	t.Logf("%d of %d named", allNamed, all)
}
