package main

import (
	"context"
	"errors"
	"io"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

func newReplayCommand() *cobra.Command {
	var path string
	var asJSON bool
	var files historyFlags
	c := &cobra.Command{
		Use:   "replay FILE...",
		Short: "Say what the monitor would have done over files of history",
		Long: `Runs the same engine as the daemon over CSV or newline-delimited JSON files,
without a bus and without a store, at their own report times, and prints every
step of every alert: in plain sentences, or with --json as records, one a line.`,
		Args: cobra.MinimumNArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			h, err := files.read(c.Context(), setup, args, c.InOrStdin(), c.ErrOrStderr())
			if err != nil {
				return err
			}
			out := c.OutOrStdout()
			e, err := replay(c.Context(), setup, h, outlet.NewTerminal(out, widthOf(out), asJSON), c.ErrOrStderr())
			if err != nil {
				return err
			}
			summary := out
			if asJSON {
				summary = c.ErrOrStderr()
			}
			err = summarise(summary, e, h)
			if h.Counts.Faults > 0 {
				err = errors.Join(err, errReported)
			}
			return err
		},
	}
	addConfigFlag(c, &path)
	files.add(c)
	c.Flags().BoolVar(&asJSON, "json", false, "write alert steps as JSON records, one a line")
	return c
}

// replay runs the engine over a history and delivers what it finds.
func replay(ctx context.Context, setup *config.Setup, h *history.History, out outlet.Outlet, stderr io.Writer) (*replayed, error) {
	r := &replayed{engine: monitor.New(monitor.Partition{Of: 1, KeyParts: setup.KeyParts}), kinds: map[life.StepKind]int{}}
	start := time.Now()
	r.engine.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	bar := newBar(stderr, int64(len(h.Entries)), "replaying")
	defer bar.end()
	n := 0
	for m := range h.Messages(1) {
		r.engine.Apply(&m)
		if n++; n%512 != 0 && n != len(h.Entries) {
			continue
		}
		bar.set(int64(n), 0)
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		changes := r.engine.Drain()
		r.refused = append(r.refused, changes.Refused...)
		for i := range changes.Steps {
			r.kinds[changes.Steps[i].Step.Kind]++
			if err := out.Deliver(ctx, &changes.Steps[i]); err != nil {
				return nil, err
			}
		}
	}
	r.took = time.Since(start)
	return r, nil
}

// replayed is what a replay came to.
type replayed struct {
	engine  *monitor.Engine
	kinds   map[life.StepKind]int
	refused []monitor.Refusal
	took    time.Duration
}

func summarise(w io.Writer, r *replayed, h *history.History) error {
	a := r.engine.Account()
	if err := say(w, "%d rows replayed in %s: %d alerts opened, %d steps worsened, %d corrected, %d returned, %d withdrawn.",
		h.Counts.Rows, r.took.Round(time.Millisecond), r.kinds[life.StepOpened], r.kinds[life.StepWorsened],
		r.kinds[life.StepCorrected], r.kinds[life.StepReturned], r.kinds[life.StepWithdrawn]); err != nil {
		return err
	}
	if err := writeAccount(w, a); err != nil {
		return err
	}
	const most = 20
	for i, refusal := range r.refused {
		if i == most {
			return say(w, "  ... and %d more refused", len(r.refused)-most)
		}
		if err := say(w, "  refused: %s %s: %s", refusal.Series, refusal.Reason, refusal.Detail); err != nil {
			return err
		}
	}
	return nil
}
