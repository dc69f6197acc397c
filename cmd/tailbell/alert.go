package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"os/user"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/config"
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
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newAlertListCommand(), newAlertShowCommand(), newAlertExportCommand(),
		newActCommand(monitor.Acknowledge, "Say that somebody has seen an alert and deals with it",
			"Says that somebody has seen the alert and deals with it. An alert that has returned\nis closed by it; one that still signals closes once it has returned."),
		newActCommand(monitor.Close, "Close an alert by hand, with the reason",
			"Closes the alert by hand, with the reason. If it still signals, no other alert of the\nseries opens in that direction before as many looks in a row were quiet as the\nindicator's quiet says; the page's Now lists it meanwhile among what signals without\nan alert. To be left in peace for a time and told again, shelve it instead."),
		newActCommand(monitor.Note, "Write a note on an alert",
			"Writes a note on an alert. Its condition does not change."),
		newMarkCommand(), newShelveCommand(),
		newActCommand(monitor.Unshelve, "Take an alert off the shelf before its time is over",
			"Takes the alert off the shelf before its time is over. If it still signals, it waits for\nsomebody to acknowledge it, whatever was acknowledged before."))
	return c
}

func newMarkCommand() *cobra.Command {
	a := acting{act: monitor.Act{Kind: monitor.Mark}}
	var as string
	c := newActing(&a, "Say what an alert turned out to be",
		`Says what the alert turned out to be: real, chance, data error, or change of
definition; none takes a mark back. Trailing baselines leave out whole what was
marked real. An alert that is done can be marked as long as its looks lie inside
the indicator's horizon, or inside the history of its trailing or peers baseline.`)
	c.Flags().StringVar(&as, "as", "", "the `MARK`: real, chance, \"data error\", \"change of definition\" or none; needed")
	c.PreRunE = func(*cobra.Command, []string) error {
		if a.act.Mark = life.Mark(as); as == "none" {
			a.act.Mark = life.NotMarked
			return nil
		}
		if !slices.Contains(life.Marks, a.act.Mark) {
			return &usageError{fmt.Errorf("--as %q: it must be one of %s, or none", as, life.MarkNames)}
		}
		return nil
	}
	return c
}

func newAlertListCommand() *cobra.Command {
	var path string
	var asJSON bool
	req := alertsRequest{}
	c := &cobra.Command{
		Use:   "list",
		Short: "List the alerts that are not done (--all: every one), newest first",
		Long: `Lists the alerts that are not done (--all: closed and withdrawn ones too), newest
first. Window, events, expected events and p are those of an alert's strongest look;
times are in its indicator's zone. Late is one that data opened which came after its
look was due. Works without a running daemon too.`,
		RunE: func(c *cobra.Command, _ []string) error {
			if req.Max < 1 {
				return &usageError{fmt.Errorf("--max %d: it must be at least 1", req.Max)}
			}
			if err := config.CheckPattern(req.Series); req.Series != "" && err != nil {
				return &usageError{fmt.Errorf("--series %q: %w", req.Series, err)}
			}
			records := []life.Record{}
			err := askOrLook(c.Context(), path, verbAlerts, req, &records, func(st *store.Store) error {
				rows, err := listAlerts(st, req)
				records = append(records, rows...)
				return err
			})
			if err != nil {
				return err
			}
			// Each partition gave its newest.
			slices.SortStableFunc(records, func(a, b life.Record) int { return b.OpenedAt().Compare(a.OpenedAt()) })
			records = records[:min(len(records), req.Max)]
			if asJSON {
				return writeJSON(c.OutOrStdout(), records)
			}
			return writeAlerts(c.OutOrStdout(), records, req)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&req.All, "all", false, "closed and withdrawn alerts too")
	c.Flags().StringVar(&req.Series, "series", "", "only of series that match this `PATTERN`: a name, or in quotes 'site/*/fall'")
	c.Flags().IntVar(&req.Max, "max", 200, "at most so `MANY`")
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

// tabulate lists alerts with the numbers of their strongest look, times in the
// zone of their indicator.
func tabulate(w io.Writer, records []life.Record) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	rows := [][]string{{"ALERT", "OPENED", "CONDITION", "TAIL", "WINDOW", "EVENTS", "EXPECTED", "P", "SERIES"}}
	for i := range records {
		r := &records[i]
		opened := words.Opened(r)
		if r.Late {
			opened += " late"
		}
		if r.Silence != nil {
			rows = append(rows, []string{r.ID, opened, string(r.Condition), string(r.Direction), "", "", "", "", r.Series})
			continue
		}
		rows = append(rows, []string{
			r.ID, opened, string(r.Condition), string(r.Direction), r.Worst.Window,
			strconv.FormatInt(r.Worst.Events, 10), words.Expected(&r.Worst), words.P(&r.Worst), r.Series,
		})
	}
	for _, row := range rows {
		if _, err := fmt.Fprintln(t, strings.Join(row, "\t")); err != nil {
			return err
		}
	}
	return t.Flush()
}

// writeAlerts lists alerts for people.
func writeAlerts(w io.Writer, records []life.Record, req alertsRequest) error {
	switch {
	case len(records) == 0 && req.Series != "":
		return say(w, "No alerts of series that match %s.", req.Series)
	case len(records) == 0 && !req.All:
		return say(w, "No alerts that are not done.")
	case len(records) == 0:
		return say(w, "No alerts.")
	}
	if err := tabulate(w, records); err != nil {
		return err
	}
	if len(records) >= req.Max {
		return say(w, "Only the newest %d are shown: --max shows more.", req.Max)
	}
	return nil
}

func newAlertShowCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "show ALERT",
		Short: "Show one alert: the sentence, the numbers behind it, and its history",
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
			_, err = io.WriteString(c.OutOrStdout(), words.Record(&record, widthOf(c.OutOrStdout())))
			return err
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

// acting holds the options of a command that acts on an alert.
type acting struct {
	path string
	act  monitor.Act
	span time.Duration // for which it is shelved; 0 if date or act.Until says it
	date string        // up to which it is shelved, "" for none
}

func newActCommand(kind monitor.ActKind, short, long string) *cobra.Command {
	return newActing(&acting{act: monitor.Act{Kind: kind}}, short, long)
}

// newActing returns the command that publishes the act.
func newActing(a *acting, short, long string) *cobra.Command {
	kind := a.act.Kind
	c := &cobra.Command{
		Use:   kind.String() + " ALERT",
		Short: short,
		Long:  long + "\n\nActs go through the stream, so the daemon must run. Who and why are kept with the alert.",
		RunE: func(c *cobra.Command, args []string) error {
			a.act.Alert = args[0]
			if err := a.check(); err != nil {
				return &usageError{err}
			}
			return a.run(c.Context(), c.OutOrStdout())
		},
	}
	addConfigFlag(c, &a.path)
	c.Flags().StringVar(&a.act.By, "by", "", "the `NAME` of who does it; else what "+byVariable+" says, else the login name, unless that is root")
	why := map[monitor.ActKind]string{
		monitor.Acknowledge: "a `TEXT` to go with it",
		monitor.Close:       "the reason, a `TEXT`; needed",
		monitor.Note:        "the note's `TEXT`; needed",
		monitor.Mark:        "the reason, a `TEXT`; needed",
		monitor.Shelve:      "the reason, a `TEXT`; needed",
		monitor.Unshelve:    "a `TEXT` to go with it",
	}
	c.Flags().StringVar(&a.act.Why, "why", "", why[kind])
	return c
}

// byVariable names who acts where --by does not.
const byVariable = "TAILBELL_BY"

// check completes the act, and tells what is missing.
func (a *acting) check() error {
	if a.act.By = strings.TrimSpace(a.act.By); a.act.By == "" {
		a.act.By = strings.TrimSpace(os.Getenv(byVariable))
	}
	if a.act.By == "" {
		a.act.By = loginName()
	}
	a.act.Why = strings.TrimSpace(a.act.Why)
	switch {
	case a.act.By == "":
		return errors.New("--by is missing: say who does it, by --by NAME or in " + byVariable)
	case a.act.Why == "" && a.act.Kind == monitor.Close:
		return errors.New("--why is missing: closing an alert needs a reason")
	case a.act.Why == "" && a.act.Kind == monitor.Mark:
		return errors.New("--why is missing: a mark needs a reason")
	case a.act.Why == "" && a.act.Kind == monitor.Shelve:
		return errors.New("--why is missing: shelving an alert needs a reason")
	case a.act.Why == "" && a.act.Kind == monitor.Note:
		return errors.New("--why is missing: it is the note's text")
	}
	return nil
}

func (a *acting) run(ctx context.Context, w io.Writer) error {
	setup, err := loadSetup(a.path)
	if err != nil {
		return err
	}
	var before, record life.Record // what is left out of an answer stays as it was
	err = ask(ctx, setup, verbAlert, a.act.Alert, &before)
	if errors.Is(err, bus.ErrNoDaemon) {
		return fmt.Errorf("acts go through the stream: %w", sayNeverRan(setup, err))
	}
	if err != nil {
		return err
	}
	if before.Done() && a.act.Kind != monitor.Note && a.act.Kind != monitor.Mark {
		return fmt.Errorf("alert %s is %s already: nothing was done", before.ID, before.Condition)
	}
	if a.act.Kind == monitor.Shelve {
		if err := a.shelveUntil(ctx, setup, &before); err != nil {
			return err
		}
	}
	err = ask(ctx, setup, verbAct, actRequest{wire.EncodeAct(nil, &a.act)}, &record)
	if err != nil {
		return err
	}
	if a.act.Kind == monitor.Mark {
		if record.Mark == life.NotMarked {
			return say(w, "Alert %s has no mark any more (%s).", record.ID, record.Condition)
		}
		return say(w, "Alert %s is marked %s (%s).", record.ID, record.Mark, record.Condition)
	}
	if a.act.Kind == monitor.Note {
		return say(w, "Noted on alert %s (%s).", record.ID, record.Condition)
	}
	if record.Shelf != nil {
		return say(w, "Alert %s is shelved until %s.", record.ID, record.Shelf.Until.In(words.Zone(&record)).Format("2006-01-02 15:04 MST"))
	}
	text := fmt.Sprintf("Alert %s is now %s.", record.ID, record.Condition)
	if a.act.Kind == monitor.Close && !before.Left() {
		text += " " + stillSignals(setup, &record)
	}
	return say(w, "%s", text)
}

// stillSignals says what it means to close an alert by hand that signals.
func stillSignals(setup *config.Setup, r *life.Record) string {
	if r.Direction == life.Silence {
		return "The series is still silent: no other alert says so before it is heard of again."
	}
	quiet := "as many looks in a row are quiet as its indicator asks for"
	for i := range setup.Indicators {
		if in := &setup.Indicators[i]; in.Name == r.Indicator && in.Quiet == 1 {
			quiet = "a look is quiet"
		} else if in.Name == r.Indicator {
			quiet = words.Whole(int64(in.Quiet)) + " looks in a row are quiet"
		}
	}
	return fmt.Sprintf("It still signals: no other alert of %s opens in this direction before %s.", r.Series, quiet)
}

// loginName is who runs the command; "" if that is not known, or everybody's
// root.
func loginName() string {
	u, err := user.Current()
	if err != nil || u.Uid == "0" {
		return ""
	}
	return u.Username
}

func writeJSON(w io.Writer, v any) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(v)
}
