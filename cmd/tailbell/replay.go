package main

import (
	"context"
	"errors"
	"io"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/outlet"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
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
step of every alert: in plain sentences, or with --json as records, one a line.
Nothing is stored and nobody is told.

The clock moves with the rows, so looks that fall due after the last one are not
made; where the history is complete up to a later time, --until TIME makes those
that are due by then.

A row that can't be used is named with its file and line; the rest goes on, and
the exit code is 1. Of rows without an id, equal ones count once a file each: see
"tailbell feed --help" on ids.`,
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
			e, err := replay(c.Context(), setup, h, files.until, outlet.NewTerminal(out, widthOf(out), asJSON), c.ErrOrStderr())
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

// replay runs the engine over a history, and on to the time until which it is
// complete (monitor.Beginning for none), and delivers what it finds.
func replay(ctx context.Context, setup *config.Setup, h *history.History, until monitor.Instant, out outlet.Outlet, stderr io.Writer) (*replayed, error) {
	r := &replayed{engine: monitor.New(monitor.Partition{Of: 1, KeyParts: setup.KeyParts}), kinds: map[life.StepKind]int{}}
	start := time.Now()
	r.engine.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	bar := newBar(stderr, int64(len(h.Entries)), "replaying")
	defer bar.end()
	const batch = 512
	n := 0
	for m := range h.Messages(1) {
		r.engine.Apply(&m)
		if n++; n%batch != 0 {
			continue
		}
		bar.set(int64(n), 0)
		if err := r.deliver(ctx, out); err != nil {
			return nil, err
		}
	}
	if until != monitor.Beginning {
		r.engine.Apply(&monitor.Message{
			Position: r.engine.Position() + 1, Kind: monitor.Tick, Stored: until, Time: until, HasTime: true,
		})
	}
	if err := r.deliver(ctx, out); err != nil {
		return nil, err
	}
	r.took = time.Since(start)
	return r, nil
}

// deliver delivers what the engine has found since the last time.
func (r *replayed) deliver(ctx context.Context, out outlet.Outlet) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	changes := r.engine.Drain()
	r.refused = append(r.refused, changes.Refused...)
	for i := range changes.Steps {
		r.kinds[changes.Steps[i].Step.Kind]++
		if err := out.Deliver(ctx, &changes.Steps[i]); err != nil {
			return err
		}
	}
	return nil
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
	if err := say(w, "%s in %s replayed in %s, %d not usable: %s opened; steps: %d worsened, %d corrected, %d returned, %d withdrawn.",
		amount(h.Counts.Rows, "rows"), amount(h.Counts.Files, "files"), r.took.Round(time.Millisecond), h.Counts.Faults,
		amount(r.kinds[life.StepOpened], "alerts"), r.kinds[life.StepWorsened],
		r.kinds[life.StepCorrected], r.kinds[life.StepReturned], r.kinds[life.StepWithdrawn]); err != nil {
		return err
	}
	if err := errors.Join(writeAccount(w, a), r.writeConditions(w), r.writeClock(w)); err != nil {
		return err
	}
	return r.writeRefused(w)
}

// writeRefused names the first refusals, those that say the same once.
func (r *replayed) writeRefused(w io.Writer) error {
	const most = 20
	times := map[string]int{}
	var texts []string
	for i := range r.refused {
		text := string(r.refused[i].Reason) + ": " + aboutSeries(&r.refused[i])
		if times[text]++; times[text] == 1 {
			texts = append(texts, text)
		}
	}
	named := 0
	for i, text := range texts {
		if i == most {
			return say(w, "  ... and %s more refused", words.Whole(int64(len(r.refused)-named)))
		}
		named += times[text]
		if times[text] > 1 {
			text += " (" + amount(times[text], "times") + ")"
		}
		if err := say(w, "  refused: %s", text); err != nil {
			return err
		}
	}
	return nil
}

// writeConditions names the first conditions that stand at the end.
func (r *replayed) writeConditions(w io.Writer) error {
	const most = 10
	conditions := r.engine.Conditions()
	for i, c := range conditions {
		if i == most {
			return say(w, "  ... and %s more", amount(len(conditions)-most, "conditions"))
		}
		if err := writeCondition(w, conditionRowOf(c)); err != nil {
			return err
		}
	}
	return nil
}

// writeClock says where the replay ended, and what comes next.
func (r *replayed) writeClock(w io.Writer) error {
	if r.engine.Clock() == monitor.Beginning {
		return nil
	}
	text := "  the clock stands at " + wire.FormatTime(r.engine.Clock())
	if due, ok := r.engine.NextDue(); ok {
		text += "; the next looks are due at " + wire.FormatTime(due)
	}
	return say(w, "%s", text)
}
