package main

import (
	"context"

	"github.com/spf13/cobra"
)

// newClockCommand returns "tailbell clock": what a person says about the bus's
// clock.
func newClockCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "clock",
		Short: "Say that the bus's clock is right after it has leapt",
		Args:  cobra.NoArgs,
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newClockAcceptCommand())
	return c
}

func newClockAcceptCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "accept",
		Short: "Let a held intake go on: the bus's clock is right",
		Long: `Lets the intake go on that is held because the bus stored a message more than an
hour after the one before it, and more than an hour ahead of the daemon's clock.

The partition's clock never goes back: every look that lies before the leap is
made now, and data of the time between are late, or refused if they lie beyond
the horizon. If it is the bus's clock that is wrong, set it right instead; the
daemon goes on by itself once its own clock has got there.`,
		Args: cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var held []heldRow
			if err := ask(c.Context(), setup, verbClock, nil, &held); err != nil {
				return sayNeverRan(setup, err)
			}
			if len(held) == 0 {
				return say(c.OutOrStdout(), "No intake is held.")
			}
			for _, h := range held {
				if err := say(c.OutOrStdout(), "Partition %d goes on: %s.", h.Partition, h.Text); err != nil {
					return err
				}
			}
			return nil
		},
	}
	addConfigFlag(c, &path)
	return c
}

// heldRow is an intake that was let go on.
type heldRow struct {
	Partition int    `json:"partition"`
	Text      string `json:"text"`
}

// acceptClock lets every held intake go on.
func (d *daemon) acceptClock(context.Context, []byte) (any, error) {
	rows := []heldRow{}
	for _, p := range d.parts.all() {
		h := p.intake.Held()
		if h == nil || !p.intake.Accept(h.Position) {
			continue
		}
		d.log.Warn().Int("partition", p.number).Uint64("position", h.Position).Msg("the bus's clock was accepted")
		rows = append(rows, heldRow{p.number, h.String()})
	}
	return rows, nil
}
