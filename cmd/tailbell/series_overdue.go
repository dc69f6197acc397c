package main

import (
	"cmp"
	"io"
	"slices"
	"time"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/monitor"
)

// overdueRow is a series that should have reported by now.
type overdueRow struct {
	Series    string    `json:"series"`
	Indicator string    `json:"indicator"`
	Since     time.Time `json:"since"`
	Text      string    `json:"text"`
}

func newSeriesOverdueCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "overdue",
		Short: "List the series that should have reported by now",
		Long: `Lists the series that the set-up expects to be heard of (its key expect) and that were not,
those that were silent for longest first, with the names that nobody ever heard of among
them. Times are in the indicator's zone. That nothing was reported says nothing of how many events there were. The daemon must
run. The exit code is 0 whether any are overdue or not.`,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var s statusReply
			if err := ask(c.Context(), setup, verbStatus, nil, &s); err != nil {
				return sayNeverRan(setup, err)
			}
			rows := overdue(&s)
			if asJSON {
				return writeJSON(c.OutOrStdout(), rows)
			}
			return writeOverdue(c.OutOrStdout(), setup, rows)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

// overdue takes the silences from what stands.
func overdue(s *statusReply) []overdueRow {
	rows := []overdueRow{}
	for i := range s.Partitions {
		for _, c := range s.Partitions[i].Conditions {
			if c.Kind == monitor.Silent {
				rows = append(rows, overdueRow{c.Series, c.Indicator, c.Since, c.Text})
			}
		}
	}
	slices.SortFunc(rows, func(a, b overdueRow) int { return cmp.Or(a.Since.Compare(b.Since), cmp.Compare(a.Series, b.Series)) })
	return rows
}

func writeOverdue(w io.Writer, setup *config.Setup, rows []overdueRow) error {
	if len(rows) == 0 {
		return say(w, "Nobody is overdue, as far as the set-up says who must report (key expect).")
	}
	for _, r := range rows {
		if err := say(w, "%s (%s): %s, since %s", r.Series, r.Indicator, r.Text, r.Since.In(zoneNamed(setup, r.Indicator)).Format("2006-01-02 15:04 MST")); err != nil {
			return err
		}
	}
	return say(w, "%s overdue. That nothing was reported is no count of zero.", amount(len(rows), "series")+" "+areIs(len(rows)))
}

// zoneNamed is the zone of an indicator; UTC where the set-up names it no longer.
func zoneNamed(setup *config.Setup, indicator string) *time.Location {
	for i := range setup.Indicators {
		if setup.Indicators[i].Name == indicator {
			return setup.Indicators[i].Zone
		}
	}
	return time.UTC
}
