package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor"
)

func newSeriesCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "series",
		Short: "List series, and say what holds for them from a date on",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newSeriesListCommand(), newSeriesOverdueCommand(), newResetCommand(), newChangeCommand(), newOutOfServiceCommand(),
		newBackInServiceCommand(), newSignOffCommand())
	return c
}

func newSeriesListCommand() *cobra.Command {
	var path string
	var most int
	var asJSON, retired bool
	c := &cobra.Command{
		Use:   "list [PATTERN]",
		Short: "List series and sums: when they begin, when they were heard, what people said of them",
		Long: `Lists the series and sums that match the pattern (all without one), by name: when they
begin, when something was last counted, whether they are open, closed or out of service,
up to when their counts are signed off, and below it what else people said of it. Times are in
the indicator's zone. With --retired those that have ended instead, since nothing was heard
of them for as long as the set-up's retire says, as far as they are remembered. The daemon must run.`,
		RunE: func(c *cobra.Command, args []string) error {
			pattern := "**"
			if len(args) > 0 {
				pattern = args[0]
			}
			if err := config.CheckPattern(pattern); err != nil {
				return &usageError{fmt.Errorf("%q: %w", pattern, err)}
			}
			if most < 1 {
				return &usageError{fmt.Errorf("--max %d: it must be at least 1", most)}
			}
			list, more, err := listSeries(c.Context(), path, seriesRequest{Pattern: pattern, Retired: retired}, most)
			switch {
			case err != nil:
				return err
			case asJSON:
				return writeJSON(c.OutOrStdout(), list)
			case len(list) == 0:
				return say(c.OutOrStdout(), "No series match %s.", pattern)
			}
			if err := tabulateSeries(c.OutOrStdout(), list); err != nil {
				return err
			}
			if more {
				return say(c.OutOrStdout(), "Only %d are shown: --max shows more, a pattern fewer.", most)
			}
			return nil
		},
	}
	addConfigFlag(c, &path)
	c.Flags().IntVar(&most, "max", 200, "at most so `MANY`")
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	c.Flags().BoolVar(&retired, "retired", false, "those that have ended")
	return c
}

// listSeries asks all partitions, and says whether there are more.
func listSeries(ctx context.Context, path string, req seriesRequest, most int) (list []monitor.Listed, more bool, err error) {
	setup, err := loadSetup(path)
	if err != nil {
		return nil, false, err
	}
	list = []monitor.Listed{}
	for n := range setup.Partitions {
		req.Partition, req.From = n, 0
		for req.From >= 0 {
			var r seriesReply
			if err := ask(ctx, setup, verbSeries, req, &r); err != nil {
				if errors.Is(err, bus.ErrNoDaemon) {
					err = sayNeverRan(setup, err)
				}
				return nil, false, err
			}
			if list = append(list, r.Series...); len(list) > most {
				return list[:most], true, nil
			}
			req.From = r.Next
		}
	}
	slices.SortStableFunc(list, func(a, b monitor.Listed) int { return strings.Compare(a.Series, b.Series) })
	return list, false, nil
}

func tabulateSeries(w io.Writer, list []monitor.Listed) error {
	var table bytes.Buffer
	t := tabwriter.NewWriter(&table, 0, 0, 2, ' ', 0)
	rows := [][]string{{"SERIES", "BEGINS", "HEARD", "CONDITION", "SIGNED OFF"}}
	for i := range list {
		l := &list[i]
		name := l.Series
		if l.Members > 0 {
			name += " (sum of " + strconv.Itoa(l.Members) + ")"
		}
		rows = append(rows, []string{name, dayOf(l.Begins), heardAt(l.Heard), conditionOf(l), signedOff(l)})
	}
	for _, row := range rows {
		if _, err := fmt.Fprintln(t, strings.Join(row, "\t")); err != nil {
			return err
		}
	}
	if err := t.Flush(); err != nil {
		return err
	}
	return withActs(w, strings.Split(strings.TrimRight(table.String(), "\n"), "\n"), list)
}

// withActs writes the lines of a table of series, and below each what people
// said of it.
func withActs(w io.Writer, lines []string, list []monitor.Listed) error {
	for i, line := range lines {
		if _, err := fmt.Fprintln(w, strings.TrimRight(line, " ")); err != nil {
			return err
		}
		if i == 0 { // the head
			continue
		}
		for _, a := range list[i-1].Acts {
			if _, err := fmt.Fprintf(w, "    %s %s\n", a.At.Format(time.DateOnly), a.What); err != nil {
				return err
			}
		}
	}
	return nil
}

func conditionOf(l *monitor.Listed) string {
	if l.Retired != nil {
		return l.Condition + " " + heardAt(l.Retired)
	}
	if l.Until != nil {
		return l.Condition + " until " + dayOf(l.Until)
	}
	return l.Condition
}

// signedOff says up to when the counts are final, sides apart if they differ.
func signedOff(l *monitor.Listed) string {
	switch {
	case l.Events == nil && l.Exposure == nil:
		return "-"
	case l.Events != nil && l.Exposure != nil && l.Events.Equal(*l.Exposure):
		return "before " + dayOf(l.Events)
	}
	var sides []string
	if l.Events != nil {
		sides = append(sides, "events before "+dayOf(l.Events))
	}
	if l.Exposure != nil {
		sides = append(sides, "exposure before "+dayOf(l.Exposure))
	}
	return strings.Join(sides, ", ")
}

func dayOf(t *time.Time) string {
	if t == nil {
		return "-"
	}
	return t.Format(time.DateOnly)
}

func heardAt(t *time.Time) string {
	if t == nil {
		return "-"
	}
	return t.Format("2006-01-02 15:04")
}
