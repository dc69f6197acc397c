package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"time"

	"github.com/rs/zerolog"
	"github.com/spf13/cobra"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse"
	"tailbell/monitor/rehearse/audit"
	"tailbell/monitor/rehearse/quillmere"
	"tailbell/monitor/store"
)

func newDemoCommand() *cobra.Command {
	var o demoOptions
	c := &cobra.Command{
		Use:   "demo",
		Short: "Run two invented years through the real bus, and hold the account against the publishers' ledger",
		Long: `Runs two invented years of the Quillmere Hospitals and of the payments service
Ferrybill through the real engine: on the embedded bus, with a store on disk.
Excesses are planted in them, and everything that goes wrong in life: late data,
corrections, moves between wards, retractions, a silent feed, rubbish. Alerts are
printed as they arise; at the end stands an account that is held against the
publishers' own ledger, and which planted excesses were found, and how late.

Nothing in it is real. The same seed gives the same alerts to the byte. With
--folder the demo keeps its stream and store there; if it was stopped, even by
kill -9, the same command goes on where it was.`,
		Args: cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			return demo(c.Context(), o, c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	c.Flags().Uint64Var(&o.seed, "seed", 1, "the seed, a `NUMBER`, of everything invented")
	c.Flags().StringVar(&o.folder, "folder", "", "keep stream and store in this `FOLDER`; else they are removed at the end")
	c.Flags().BoolVar(&o.full, "full", false, "print every step of every alert, not only openings")
	c.Flags().BoolVar(&o.asJSON, "json", false, "write alert steps as JSON records, one a line, and the account to standard error")
	c.Flags().StringVar(&o.export, "export", "", "also write the history as newline-delimited JSON to this `FILE`, and beside it the set-up (.toml) and the planted excesses (.known.csv)")
	c.Flags().IntVar(&o.maxBatch, "max-batch", 0, "at most so `MANY` messages in a commit")
	return c
}

type demoOptions struct {
	seed           uint64
	folder, export string
	full, asJSON   bool
	maxBatch       int
}

func demo(ctx context.Context, o demoOptions, stdout, stderr io.Writer) (err error) {
	start := time.Now()
	scenario, err := quillmere.Generate(o.seed)
	if err != nil {
		return err
	}
	setup, err := config.Parse(scenario.Setup, "the demo's set-up")
	if err != nil {
		return err
	}
	if o.export != "" {
		if err := exportScenario(scenario, o.export); err != nil {
			return err
		}
	}
	setup.Folder = o.folder
	if o.folder == "" {
		if setup.Folder, err = os.MkdirTemp("", "tailbell-demo-"); err != nil {
			return err
		}
		defer func() { err = errors.Join(err, os.RemoveAll(setup.Folder)) }()
	}
	account := stdout
	if o.asJSON {
		account = stderr
	}
	if err := say(account, "Two invented years of the Quillmere Hospitals and of Ferrybill, seed %d, on the embedded bus in\n%s\n",
		o.seed, setup.Folder); err != nil {
		return err
	}
	result, err := runDemo(ctx, o, scenario, setup, stdout, stderr)
	if err != nil {
		return err
	}
	return errors.Join(result.print(account, time.Since(start)), result.verdict())
}

// exportScenario writes the history and its set-up for a replay.
func exportScenario(s *rehearse.Scenario, path string) (err error) {
	if err := os.WriteFile(path+".toml", s.Setup, 0o600); err != nil {
		return err
	}
	if err := os.WriteFile(path+".known.csv", []byte(s.Known()), 0o600); err != nil {
		return err
	}
	f, err := os.OpenFile(path, os.O_CREATE|os.O_TRUNC|os.O_WRONLY, 0o600)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	return s.WriteNDJSON(f)
}

// runDemo publishes what the stream does not hold yet, while the daemon reads
// it, and audits what came of it.
func runDemo(ctx context.Context, o demoOptions, s *rehearse.Scenario, setup *config.Setup, stdout, stderr io.Writer) (r *demoResult, err error) {
	var terminal outlet.Outlet = outlet.NewTerminal(stdout, widthOf(stdout), o.asJSON)
	if !o.full && !o.asJSON {
		terminal = openings{terminal}
	}
	d, err := openDaemon(ctx, setup, daemonOptions{
		log: newLog(stderr).Level(zerolog.WarnLevel), terminal: terminal, maxBatch: o.maxBatch,
	})
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, d.close()) }()
	running, stop := context.WithCancel(ctx)
	defer stop()
	stopped := make(chan error, 1)
	go func() { stopped <- d.run(running) }()

	r = &demoResult{scenario: s}
	err = r.play(ctx, d)
	stop()
	if err = errors.Join(err, <-stopped); err != nil {
		return nil, err
	}
	return r, r.readStore(d.parts.get(0).store)
}

// openings passes on only the steps that open or withdraw an alert.
type openings struct{ outlet.Outlet }

func (o openings) Deliver(ctx context.Context, n *life.Notice) error {
	if n.Step.Kind != life.StepOpened && n.Step.Kind != life.StepWithdrawn {
		return nil
	}
	return o.Outlet.Deliver(ctx, n)
}

// demoResult is what a demo came to.
type demoResult struct {
	scenario *rehearse.Scenario
	resumed  int
	account  monitor.Account
	slots    []monitor.SlotSum
	alerts   []life.Record
	audit    *audit.Result
	// conditions and clock are those at the end.
	conditions []monitor.Condition
	clock      monitor.Instant
}

// play publishes and waits until everything is committed.
func (r *demoResult) play(ctx context.Context, d *daemon) error {
	p := d.parts.get(0)
	end, err := d.bus.EndOf(ctx, 0)
	if err != nil {
		return err
	}
	const settings = 1 // the set-up is the first message of the stream
	r.resumed = int(end) - settings
	messages := r.scenario.Messages[r.resumed:]
	const batch = 200
	for len(messages) > 0 {
		n := min(batch, len(messages))
		if _, err := d.bus.PublishBatch(ctx, outgoing(messages[:n])); err != nil {
			return err
		}
		messages = messages[n:]
	}
	if end, err = d.bus.EndOf(ctx, 0); err != nil {
		return err
	}
	if err := p.reach(ctx, end); err != nil {
		return err
	}
	return p.do(ctx, func(e *monitor.Engine) {
		r.account, r.slots = e.Account(), e.Slots()
		r.conditions, r.clock = e.Conditions(), e.Clock()
	})
}

func outgoing(messages []rehearse.Message) []bus.Outgoing {
	out := make([]bus.Outgoing, len(messages))
	for i, m := range messages {
		out[i] = bus.Outgoing{Partition: m.Partition, Kind: bus.Observation, Data: m.Data, Header: map[string][]string{}}
		if m.Kind == rehearse.Act {
			out[i].Kind = bus.Act
		}
	}
	return out
}

// readStore reads the alerts and the slots that left memory, and audits all.
func (r *demoResult) readStore(st *store.Store) error {
	var past []monitor.SlotSum
	err := st.Archived(func(a monitor.ArchivedSlot) error {
		var s monitor.SlotSum
		if err := json.Unmarshal(a.Data, &s); err != nil {
			return fmt.Errorf("an archived slot can't be read: %w", err)
		}
		past = append(past, s)
		return nil
	})
	if err != nil {
		return err
	}
	rows, err := st.Alerts(store.AlertFilter{}, 0, 100_000)
	if err != nil {
		return err
	}
	for i := range rows {
		r.alerts = append(r.alerts, rows[i].Record)
	}
	r.audit = audit.Compare(r.scenario, r.account, append(past, r.slots...), r.alerts)
	return nil
}

// verdict is an error if the account and the ledger differ.
func (r *demoResult) verdict() error {
	if r.audit.Differing > 0 {
		return fmt.Errorf("the account differs from the ledger in %d places", r.audit.Differing)
	}
	return nil
}
