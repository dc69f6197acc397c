package main

import (
	"io"

	"github.com/spf13/cobra"

	"tailbell/monitor"
)

func newStatusCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "status",
		Short: "Say how the running daemon is doing: stream, account, conditions, outlets",
		Args:  cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var s statusReply
			if err := ask(c.Context(), setup, verbStatus, nil, &s); err != nil {
				return err
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), s)
			}
			return writeStatus(c.OutOrStdout(), &s)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

func writeStatus(w io.Writer, s *statusReply) error {
	for _, p := range s.Partitions {
		mode, clock := "live", "not set yet"
		if p.History {
			mode = "history time"
		}
		if p.Clock != monitor.Beginning {
			clock = p.Clock.Time().Format("2006-01-02 15:04:05Z")
		}
		if err := say(w, "%s, partition %d: position %d of %d, %s, clock %s, set-up version %d, %d alerts not done",
			s.Name, p.Number, p.Position, p.End, mode, clock, p.Version, p.OpenAlerts); err != nil {
			return err
		}
		if err := writeAccount(w, p.Account); err != nil {
			return err
		}
		for _, o := range p.Outlets {
			if err := say(w, "  outlet %s: %d steps delivered, %d waiting", o.Name, o.Delivered, o.Depth); err != nil {
				return err
			}
		}
		for _, c := range p.Conditions {
			if err := say(w, "  condition: %s %s %s: %s, since %s", c.Series, c.Window, c.Kind, c.Text,
				c.Since.Time().Format("2006-01-02 15:04Z")); err != nil {
				return err
			}
		}
	}
	return nil
}

// writeAccount prints what became of every element.
func writeAccount(w io.Writer, a monitor.Account) error {
	if err := say(w, "  %d elements: %d counted, %d withheld, %d repeats, %d replaced, %d outdated, %d refused, %d unmonitored",
		a.Elements, a.Counted, a.Withheld, a.Repeat, a.Replaced, a.Outdated, a.Refused, a.Unmonitored); err != nil {
		return err
	}
	return say(w, "  %d looks made when due, %d withheld, %d made again because data changed; %d elements came late; %d acts, %d refused",
		a.Looks, a.WithheldLooks, a.Reruns, a.Late, a.Acts, a.ActsRefused)
}
