package main

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/report"
	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/partition"
	"tailbell/monitor/rehearse/plant"
	"tailbell/monitor/store"
)

type reportOptions struct {
	config, html, markdown, title, made string
	rehearsals                          []string
	seed                                uint64
	draws, pictures                     int
	files                               historyFlags
	setup                               *config.Setup
	faults                              int
}

// newReportCommand returns "tailbell report": what a monitor saw, as one file
// for a committee.
func newReportCommand() *cobra.Command {
	var o reportOptions
	c := &cobra.Command{
		Use:   "report [HISTORY...]",
		Short: "Write what was monitored, how, and what was found, as one HTML or Markdown file",
		Long: `Runs the engine over files of history, or reads the store of a daemon that does
not run, and writes a report: what was monitored and how, the baselines and what the
history itself says of them, every alert with its picture, marks and steps, a picture
of each series over its whole history with its critical counts, all series against
the rate of all with exact limits (a funnel plot), rehearsals from the JSON of
"tailbell rehearse", and the digests of data, set-up and program.

Rows that can't be used or are refused are named on standard error and in the report;
the command then fails in the end, as replay does.

The HTML is one file that needs nothing from outside and prints well; Markdown has
words in place of the pictures. Without --html or --markdown, HTML goes to standard
output. The same data, set-up, options and program give the same bytes: no time of
day is in it unless --made gives one.

From a store the pictures go back only as far as the daemon still holds slots in
memory, and what the history itself says of the usual rates as far as the archive
([limits] archive); the report says from when on. A store is one partition: where
the set-up has several, a report is made of files of history only.`,
		Example: `  tailbell report --config quillmere.toml --html report.html history.ndjson
  tailbell report --config quillmere.toml --rehearsal rehearsal.json --html report.html --markdown report.md history.ndjson`,
		RunE: func(c *cobra.Command, args []string) error {
			return o.run(c.Context(), args, c.InOrStdin(), c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	addConfigFlag(c, &o.config)
	o.files.add(c)
	f := c.Flags()
	f.StringVar(&o.html, "html", "", "write HTML to this `FILE`")
	f.StringVar(&o.markdown, "markdown", "", "write Markdown to this `FILE`")
	f.StringVar(&o.title, "title", "", "the `TITLE`; else it names the set-up")
	f.StringVar(&o.made, "made", "", "the `DATE` on which the report is made, to stand in it")
	f.StringSliceVar(&o.rehearsals, "rehearsal", nil, "`FILES` that \"tailbell rehearse --json\" printed")
	f.Uint64Var(&o.seed, "seed", 1, "the seed, a `NUMBER`, of what is simulated of the usual rates")
	f.IntVar(&o.draws, "resamples", 1000, "the `NUMBER` of draws for what the history says of the usual rates; 0 leaves that out")
	f.IntVar(&o.pictures, "pictures", 40, "of how many series of an indicator there are pictures: a `NUMBER`, those with most alerts first")
	return c
}

func (o *reportOptions) run(ctx context.Context, paths []string, stdin io.Reader, stdout, stderr io.Writer) error {
	if o.draws != 0 && (o.draws < 100 || o.draws > 1_000_000) || o.pictures < 0 {
		return &usageError{errors.New("--resamples is 0, or from 100 to 1,000,000; --pictures not negative")}
	}
	var err error
	if o.setup, err = loadSetup(o.config); err != nil {
		return err
	}
	made, err := moment(o.made, time.UTC)
	if err != nil {
		return &usageError{fmt.Errorf("--made: %w", err)}
	}
	rehearsals, err := readRehearsals(o.rehearsals)
	if err != nil {
		return err
	}
	r, err := o.gather(ctx, paths, stdin, stderr)
	if err != nil {
		return err
	}
	r.Program, r.Made, r.Rehearsals, r.Title, r.Remake = version(), made, rehearsals, o.title, o.remake(paths)
	if r.Title == "" {
		r.Title = "What " + o.setup.Name + " monitored, and what was found"
	}
	if err := o.write(r, stdout); err != nil {
		return err
	}
	if o.faults > 0 {
		return errReported
	}
	return nil
}

func (o *reportOptions) gather(ctx context.Context, paths []string, stdin io.Reader, stderr io.Writer) (*report.Report, error) {
	if len(paths) > 0 {
		return o.fromFiles(ctx, paths, stdin, stderr)
	}
	return o.fromStore(ctx, stderr)
}

// fromFiles passes the files through the engine.
func (o *reportOptions) fromFiles(ctx context.Context, paths []string, stdin io.Reader, stderr io.Writer) (*report.Report, error) {
	h, err := o.files.read(ctx, o.setup, paths, stdin, stderr)
	if err != nil {
		return nil, err
	}
	o.faults = h.Counts.Faults
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: o.setup.KeyParts})
	rec := report.NewRecorder(o.setup)
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: o.setup}})
	bar := newBar(stderr, int64(len(h.Entries)), "reporting")
	defer bar.end()
	n := 0
	take := func() error {
		bar.set(int64(n), 0)
		changes := e.Drain()
		return errors.Join(rec.Take(&changes), ctx.Err())
	}
	for m := range h.Messages(1) {
		rec.Play(e, m)
		if n++; n%512 == 0 {
			if err := take(); err != nil {
				return nil, err
			}
		}
	}
	if o.files.until != monitor.Beginning {
		until := o.files.until
		rec.Play(e, monitor.Message{Kind: monitor.Tick, Stored: until, Time: until, HasTime: true})
	}
	if err := take(); err != nil {
		return nil, err
	}
	r, err := o.report(ctx, rec, e, stderr)
	if err != nil {
		return nil, err
	}
	r.Data, r.Rows, r.Faults = digestOf(h), h.Counts.Rows, h.Counts.Faults
	if err := o.unused(r, h, rec.Refused(), stderr); err != nil {
		return nil, err
	}
	for _, path := range paths {
		r.Files = append(r.Files, filepath.Base(path))
	}
	return r, nil
}

// unused puts the rows that were not counted into the report, and names those
// that the engine refused; of the others that was said when they were read.
func (o *reportOptions) unused(r *report.Report, h *history.History, refused []monitor.Refusal, stderr io.Writer) error {
	for _, f := range h.Faults {
		r.Unused = append(r.Unused, report.Unused{Place: fmt.Sprintf("%s:%d", filepath.Base(f.File), f.Line), Reason: string(f.Reason), Detail: f.Detail})
	}
	for i := range refused {
		x := &refused[i]
		u := report.Unused{Reason: string(x.Reason), Detail: aboutSeries(x)}
		where := ""
		if at := x.Position - 2; x.Position >= 2 && at < uint64(len(h.Entries)) { // the set-up is 1
			row := &h.Entries[at]
			u.Place = fmt.Sprintf("%s:%d", filepath.Base(row.File), row.Line)
			where = fmt.Sprintf("%s:%d: ", row.File, row.Line)
		}
		r.Unused = append(r.Unused, u)
		if err := say(stderr, "%s%s: %s", where, u.Reason, u.Detail); err != nil {
			return err
		}
	}
	o.faults += len(refused)
	return nil
}

func (o *reportOptions) report(ctx context.Context, rec *report.Recorder, e *monitor.Engine, stderr io.Writer) (*report.Report, error) {
	bar := newBar(stderr, int64(len(o.setup.Indicators)), "estimating")
	defer bar.end()
	return rec.Report(ctx, e, report.Options{
		Seed: o.seed, Draws: o.draws, Pictures: o.pictures, Progress: func(done, total int) { bar.set(int64(done), int64(total)) },
	})
}

// fromStore reads a store at rest.
func (o *reportOptions) fromStore(ctx context.Context, stderr io.Writer) (r *report.Report, err error) {
	if o.setup.Partitions > 1 {
		return nil, errors.New("a report is made of one store, and this set-up has several partitions: give files of history")
	}
	err = lookAside(o.setup, func(st *store.Store) error {
		r, err = o.ofStore(ctx, st, stderr)
		return err
	})
	return r, err
}

func (o *reportOptions) ofStore(ctx context.Context, st *store.Store, stderr io.Writer) (*report.Report, error) {
	rec := report.NewRecorder(o.setup)
	var changes monitor.Changes
	err := st.Archived(func(a monitor.ArchivedSlot) error {
		changes.Archived = append(changes.Archived, a)
		return nil
	})
	if err != nil {
		return nil, err
	}
	e, err := partition.Recover(st)
	if err != nil {
		return nil, err
	}
	rows, err := st.Alerts(store.AlertFilter{}, 0, math.MaxInt32)
	if err != nil {
		return nil, err
	}
	for i := range rows {
		changes.Alerts = append(changes.Alerts, rows[i].Record)
	}
	if err := rec.Take(&changes); err != nil {
		return nil, err
	}
	slots := e.Slots()
	sum := sha256.New()
	if err := errors.Join(json.NewEncoder(sum).Encode(slots), json.NewEncoder(sum).Encode(changes.Alerts)); err != nil {
		return nil, err
	}
	for i := range slots {
		rec.Meet(slots[i].Series)
	}
	r, err := o.report(ctx, rec, e, stderr)
	if err != nil {
		return nil, err
	}
	r.Data, r.Files = hex.EncodeToString(sum.Sum(nil)), []string{"the store at position " + fmt.Sprint(e.Position())}
	r.Begins, err = archiveBegins(st)
	return r, err
}

// readRehearsals reads what "tailbell rehearse --json" printed.
func readRehearsals(paths []string) ([]*plant.Report, error) {
	var list []*plant.Report
	for _, path := range paths {
		text, err := os.ReadFile(path)
		if err != nil {
			return nil, err
		}
		d := json.NewDecoder(bytes.NewReader(text))
		d.DisallowUnknownFields()
		var r plant.Report
		if err := d.Decode(&r); err != nil || r.Indicator == "" || len(r.Setups) == 0 || r.Check() != nil {
			return nil, fmt.Errorf("--rehearsal %s: it is not what \"tailbell rehearse --json\" prints: %w", path, errors.Join(err, r.Check()))
		}
		list = append(list, &r)
	}
	return list, nil
}

// remake is the command that makes the report again.
func (o *reportOptions) remake(paths []string) string {
	words := []string{"tailbell report --config", quoted(filepath.Base(o.config))}
	if o.config == "" {
		words = []string{"tailbell report"}
	}
	add := func(option, value string) {
		if value != "" {
			words = append(words, option, quoted(value))
		}
	}
	add("--format", strings.TrimSuffix(o.files.format, "auto"))
	add("--series", o.files.series)
	add("--zone", o.files.zone)
	add("--ignore", strings.Join(o.files.ignore, ","))
	add("--until", o.files.untilText)
	add("--title", o.title)
	add("--made", o.made)
	for _, path := range o.rehearsals {
		add("--rehearsal", filepath.Base(path))
	}
	words = append(words, fmt.Sprintf("--seed %d --resamples %d --pictures %d", o.seed, o.draws, o.pictures))
	for _, path := range paths {
		words = append(words, quoted(filepath.Base(path)))
	}
	return strings.Join(words, " ")
}

// quoted writes a word for a shell.
func quoted(s string) string {
	if s != "" && strings.Trim(s, "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-_./:,+") == "" {
		return s
	}
	return "'" + strings.ReplaceAll(s, "'", `'\''`) + "'"
}

// write writes the report in the forms that were asked for.
func (o *reportOptions) write(r *report.Report, stdout io.Writer) error {
	if o.html == "" && o.markdown == "" {
		return r.HTML(stdout)
	}
	for _, form := range []struct {
		path  string
		write func(io.Writer) error
	}{{o.html, r.HTML}, {o.markdown, r.Markdown}} {
		if form.path == "" {
			continue
		}
		var b bytes.Buffer
		if err := form.write(&b); err != nil {
			return err
		}
		if err := os.WriteFile(form.path, b.Bytes(), 0o644); err != nil { //nolint:gosec // a report is made to be shown
			return err
		}
	}
	return nil
}
