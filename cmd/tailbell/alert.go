package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os/user"
	"text/tabwriter"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

func newAlertCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "alert",
		Short: "List and show alerts, and say what was done about them",
		Args:  cobra.NoArgs,
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newAlertListCommand(), newAlertShowCommand(),
		newActCommand(monitor.Acknowledge, "Say that somebody has seen an alert and deals with it"),
		newActCommand(monitor.Close, "Close an alert by hand, with the reason"),
		newActCommand(monitor.Note, "Write a note on an alert"))
	return c
}

func newAlertListCommand() *cobra.Command {
	var path string
	var asJSON bool
	req := alertsRequest{}
	c := &cobra.Command{
		Use:   "list",
		Short: "List the alerts that are not done (--all: every one), newest first",
		Args:  cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			var records []life.Record
			err := askOrLook(c.Context(), path, verbAlerts, req, &records, func(st *store.Store) error {
				rows, err := listAlerts(st, req)
				records = append(records, rows...)
				return err
			})
			if err != nil {
				return err
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), records)
			}
			return tabulate(c.OutOrStdout(), records)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&req.All, "all", false, "closed and withdrawn alerts too")
	c.Flags().StringVar(&req.Series, "series", "", "only this `SERIES`")
	c.Flags().IntVar(&req.Max, "max", 200, "at most so many")
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

func tabulate(w io.Writer, records []life.Record) error {
	if len(records) == 0 {
		return say(w, "No alerts.")
	}
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	rows := [][]any{{"ALERT", "OPENED", "CONDITION", "TAIL", "EVENTS", "EXPECTED", "P", "SERIES"}}
	for i := range records {
		r := &records[i]
		rows = append(rows, []any{
			r.ID, r.Opened.Format("2006-01-02 15:04Z"), r.Condition, r.Direction, r.Worst.Events,
			fmt.Sprintf("%.2f", r.Worst.Expected), fmt.Sprintf("%.2g", r.Worst.P), r.Series,
		})
	}
	for _, row := range rows {
		for i, cell := range row {
			end := "\t"
			if i == len(row)-1 {
				end = "\n"
			}
			if _, err := fmt.Fprint(t, cell, end); err != nil {
				return err
			}
		}
	}
	return t.Flush()
}

func newAlertShowCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "show ALERT",
		Short: "Show one alert: the sentence, the numbers behind it, and its history",
		Args:  cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			var record life.Record
			found := false
			err := askOrLook(c.Context(), path, verbAlert, args[0], &record, func(st *store.Store) error {
				row, err := st.Alert(args[0])
				if errors.Is(err, store.ErrNotFound) {
					return nil
				}
				record, found = row.Record, true
				return err
			})
			if err != nil {
				return err
			}
			if record.ID == "" && !found {
				return fmt.Errorf("no alert %q: tailbell alert list shows them", args[0])
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), record)
			}
			return say(c.OutOrStdout(), "%s", words.Record(&record, widthOf(c.OutOrStdout())))
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

func newActCommand(kind monitor.ActKind, short string) *cobra.Command {
	var path string
	act := monitor.Act{Kind: kind}
	c := &cobra.Command{
		Use:   kind.String() + " ALERT",
		Short: short,
		Args:  cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			act.Alert = args[0]
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var record life.Record
			err = ask(c.Context(), setup, verbAct, actRequest{wire.EncodeAct(nil, &act)}, &record)
			if errors.Is(err, bus.ErrNoDaemon) {
				return fmt.Errorf("%w: acts go through the stream: start tailbell run first", err)
			}
			if err != nil {
				return err
			}
			return say(c.OutOrStdout(), "Alert %s is now %s.", record.ID, record.Condition)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().StringVar(&act.By, "by", loginName(), "the `NAME` of who does it")
	c.Flags().StringVar(&act.Why, "why", "", "the reason, or the note's text")
	return c
}

// loginName is who runs the command, "" if that is not known.
func loginName() string {
	u, err := user.Current()
	if err != nil {
		return ""
	}
	return u.Username
}

func writeJSON(w io.Writer, v any) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(v)
}
