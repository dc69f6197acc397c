package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// seriesActing holds the options of a command that acts on series.
type seriesActing struct {
	path              string
	act               monitor.Act
	from, until, span string
	month             string
	zone              *time.Location // of the indicators concerned; nil for several
	zoneName          string         // where it is said, since it follows from the series
	what, side        string
}

const seriesActHelp = "\n\nSERIES is a name, the name of a sum, or a pattern (in quotes) such as 'site/*/fall'.\n" +
	"Dates are in the zone of the indicators concerned. The act goes through the stream, so\n" +
	"the daemon must run; looks inside the horizon follow it at once."

func newSeriesAct(a *seriesActing, use, short, long string) *cobra.Command {
	c := &cobra.Command{
		Use: use + " SERIES...", Short: short, Long: long + seriesActHelp,
		RunE: func(c *cobra.Command, args []string) error {
			return a.runAll(c.Context(), c.OutOrStdout(), args)
		},
	}
	addConfigFlag(c, &a.path)
	c.Flags().StringVar(&a.act.By, "by", "", "the `NAME` of who says so; else what "+byVariable+" says, else the login name, unless that is root")
	why := "the reason, a `TEXT`"
	if a.act.Kind != monitor.SignOff && a.act.Kind != monitor.BackInService {
		why += "; needed"
	}
	c.Flags().StringVar(&a.act.Why, "why", "", why)
	c.Flags().StringVar(&a.from, "from", "", "from this `DATE` on: 2026-03-20, or a time with its offset")
	return c
}

func newResetCommand() *cobra.Command {
	return newSeriesAct(&seriesActing{act: monitor.Act{Kind: monitor.Reset}}, "reset", "Let counts begin again from a date",
		`Lets counts begin again from a date, after a cluster was investigated, so that a long
window does not hide the next one: windows that end later do not reach before the date.
An alert that signals has returned with it.`)
}

func newChangeCommand() *cobra.Command {
	a := &seriesActing{act: monitor.Act{Kind: monitor.Change}}
	c := newSeriesAct(a, "change", "Say that something changed on a date: definition, method, opening, closing, a merge",
		`Says that something changed on a date: the case definition, the method, or that a series
opens or closes. Windows do not reach over a change of definition or method, unless
--straddle says that they may. A series that closes is not looked at from then on, and
nobody waits for its reports; one that opens begins then. What is renamed or merged
goes on as the series --into, which has its earlier counts; several series that are
merged may be named one by one.`)
	c.Flags().StringVar(&a.what, "what", "", "`WHAT` changed: \"case definition\", method, opening, closing, renamed or merged; needed")
	c.Flags().StringVar(&a.act.Into, "into", "", "of what is renamed or merged: the `SERIES` that takes its place")
	c.Flags().BoolVar(&a.act.Straddle, "straddle", false, "windows may reach over it; it is only recorded")
	return c
}

func newOutOfServiceCommand() *cobra.Command {
	a := &seriesActing{act: monitor.Act{Kind: monitor.OutOfService}}
	c := newSeriesAct(a, "out-of-service", "Do not look at series for a time: a drill, a closed ward, a deploy",
		`Takes series out of service for a time, ahead of it or afterwards: their looks are
withheld, which is counted and shown, and the time is left out of later windows.`)
	c.Flags().StringVar(&a.until, "until", "", "up to this `DATE`, not included, or a time with its offset")
	c.Flags().StringVar(&a.span, "for", "", "or for so `LONG` from --from on: 12h, 3d")
	c.MarkFlagsMutuallyExclusive("until", "for")
	return c
}

func newBackInServiceCommand() *cobra.Command {
	return newSeriesAct(&seriesActing{act: monitor.Act{Kind: monitor.BackInService}}, "back-in-service", "End a time out of service earlier",
		"Ends a time out of service earlier than was said. Name the series by the very words by\nwhich it was put out of service.")
}

func newSignOffCommand() *cobra.Command {
	a := &seriesActing{act: monitor.Act{Kind: monitor.SignOff}}
	c := newSeriesAct(a, "sign-off", "Say that the counts of a time are final",
		`Says that the counts of a time are final: alerts and the page tell whether a window
rests on them. Corrections are still taken, and are told as such.`)
	c.Flags().StringVar(&a.until, "until", "", "up to this `DATE`, not included, or a time with its offset")
	c.Flags().StringVar(&a.month, "month", "", "or a whole `MONTH`: 2026-03")
	c.Flags().StringVar(&a.side, "side", "both", "the `SIDE` that is final: events, exposure or both")
	c.MarkFlagsMutuallyExclusive("month", "from")
	c.MarkFlagsMutuallyExclusive("month", "until")
	return c
}

// runAll says the same of several series, one after the other. None is said
// unless all can be read.
func (a *seriesActing) runAll(ctx context.Context, w io.Writer, series []string) error {
	setup, err := loadSetup(a.path)
	if err != nil {
		return err
	}
	acts := make([]seriesActing, len(series))
	for i, name := range series {
		acts[i] = *a
		acts[i].act.Series = name
		if err := acts[i].complete(ctx, setup); err != nil {
			return &usageError{err}
		}
		data := wire.EncodeAct(nil, &acts[i].act)
		if _, reason, detail := wire.NewDecoder(wire.Limits{}).Act(data); reason != "" {
			return &usageError{errors.New(strings.ReplaceAll(detail, "the field ", "--"))}
		}
	}
	for i := range acts {
		if err := acts[i].run(ctx, w, setup); err != nil {
			return err
		}
	}
	return nil
}

func (a *seriesActing) run(ctx context.Context, w io.Writer, setup *config.Setup) error {
	data := wire.EncodeAct(nil, &a.act)
	var r seriesActReply
	err := ask(ctx, setup, verbAct, actRequest{data}, &r)
	if errors.Is(err, bus.ErrNoDaemon) {
		return fmt.Errorf("acts go through the stream: %w", sayNeverRan(setup, err))
	}
	if err != nil {
		return err
	}
	return say(w, "%s%s.", a.told(r.Series), toldLeft(r.Left))
}

// complete reads the options that are not read yet.
func (a *seriesActing) complete(ctx context.Context, setup *config.Setup) error {
	if a.act.By = strings.TrimSpace(a.act.By); a.act.By == "" {
		a.act.By = strings.TrimSpace(os.Getenv(byVariable))
	}
	if a.act.By == "" {
		a.act.By = loginName()
	}
	if a.act.By == "" {
		return errors.New("--by is missing: say who says so, by --by NAME or in " + byVariable)
	}
	a.act.Why = strings.TrimSpace(a.act.Why)
	if err := config.CheckPattern(a.act.Series); err != nil {
		return fmt.Errorf("%q: %w", a.act.Series, err)
	}
	a.act.What, a.act.Side = monitor.ChangeKind(a.what), monitor.Side(a.side)
	zone, name, err := zoneAmong(setup, a.act.Series)
	if err == nil && zone == nil && a.needsZone() {
		zone, name, err = zoneOfKnown(ctx, a.path, setup, a.act.Series)
		a.zoneName = name
	}
	if err != nil {
		return err
	}
	a.zone = zone
	if a.month != "" && zone == nil {
		return fmt.Errorf("--month %q: the series are in several zones, so say --from and --until with their offsets: 2026-03-01T00:00:00+01:00", a.month)
	}
	if a.month != "" {
		begin, err := time.ParseInLocation("2006-01", a.month, zone)
		if err != nil {
			return fmt.Errorf("--month %q: write it like 2026-03", a.month)
		}
		a.act.From, a.act.Until = monitor.InstantOf(begin), monitor.InstantOf(begin.AddDate(0, 1, 0))
		return nil
	}
	if a.from == "" {
		return errors.New("--from is missing: say from when, as 2026-03-20")
	}
	if a.act.From, err = dateIn(zone, name, "--from", a.from); err != nil {
		return err
	}
	switch {
	case a.span != "":
		span, err := spanOf(a.span)
		if err != nil {
			return err
		}
		a.act.Until = a.act.From.Add(span)
	case a.until != "":
		a.act.Until, err = dateIn(zone, name, "--until", a.until)
	case a.act.Kind == monitor.OutOfService || a.act.Kind == monitor.SignOff:
		return errors.New("--until is missing: say up to when, as 2026-04-01 (not included)")
	}
	return err
}

// zoneAmong is the zone of the indicators that monitor what matches, nil if they
// have several.
func zoneAmong(setup *config.Setup, pattern string) (*time.Location, string, error) {
	var zone *time.Location
	name, several, found := "", false, false
	for i := range setup.Indicators {
		in := &setup.Indicators[i]
		if !in.MayMatch(config.NewPattern(pattern)) {
			continue
		}
		several = several || found && in.ZoneName != name
		zone, name, found = in.Zone, in.ZoneName, true
	}
	switch {
	case !found:
		return nil, "", fmt.Errorf("no indicator monitors %q: see its patterns in the set-up", pattern)
	case several:
		return nil, "", nil
	}
	return zone, name, nil
}

// needsZone reports whether a date is given without its offset.
func (a *seriesActing) needsZone() bool {
	for _, text := range []string{a.from, a.until} {
		if _, err := wire.ParseTime(text); text != "" && err != nil {
			return true
		}
	}
	return a.month != ""
}

// mostKnown is how many series are looked at for their zone.
const mostKnown = 20_000

// zoneOfKnown is the zone of the series that match by now, where indicators of
// several zones may have some; nil if they have several, too, or there are none.
func zoneOfKnown(ctx context.Context, path string, setup *config.Setup, pattern string) (zone *time.Location, name string, err error) {
	list, more, err := listSeries(ctx, path, seriesRequest{Pattern: pattern}, mostKnown)
	if err != nil || more {
		return nil, "", err
	}
	for i := range list {
		at := slices.IndexFunc(setup.Indicators, func(in config.Indicator) bool { return in.Name == list[i].Indicator })
		if at < 0 || zone != nil && setup.Indicators[at].ZoneName != name {
			return nil, "", nil
		}
		zone, name = setup.Indicators[at].Zone, setup.Indicators[at].ZoneName
	}
	return zone, name, nil
}

// dateIn reads a date in the zone, or a time with its offset.
func dateIn(zone *time.Location, name, option, text string) (monitor.Instant, error) {
	if at, err := wire.ParseTime(text); err == nil {
		return at, nil
	}
	if zone == nil {
		return 0, fmt.Errorf("%s %q: the series are in several zones, so write a time with its offset: 2026-03-20T00:00:00+01:00", option, text)
	}
	date, err := time.ParseInLocation(time.DateOnly, text, zone)
	if err != nil {
		return 0, fmt.Errorf("%s %q: write a date in %s, 2026-03-20, or a time with its offset", option, text, name)
	}
	return monitor.InstantOf(date), nil
}

// told says what was done.
func (a *seriesActing) told(series int) string {
	who := a.act.Series + " (no series yet)"
	switch {
	case series == 1:
		who = a.act.Series
		if config.IsSum(who) {
			who += " (1 series)"
		}
	case series > 1:
		who = fmt.Sprintf("%s (%d series)", a.act.Series, series)
	}
	from, until := a.from, a.until
	if a.span != "" {
		until = a.endOfSpan()
	}
	span := from + " to " + until
	if a.month != "" {
		span = a.month
	}
	if a.zoneName != "" {
		from, span = from+" ("+a.zoneName+")", span+" ("+a.zoneName+")"
	}
	switch a.act.Kind { //nolint:exhaustive // the others are acts on alerts
	case monitor.Reset:
		return "Counts of " + who + " begin again from " + from
	case monitor.OutOfService:
		return who + " out of service from " + span
	case monitor.BackInService:
		return who + " back in service from " + from
	case monitor.SignOff:
		sides := map[monitor.Side]string{monitor.BothSides: "events and exposure", monitor.EventsSide: "events", monitor.ExposureSide: "exposure"}
		return who + ": " + sides[a.act.Side] + " of " + span + " signed off"
	}
	what := a.what
	if a.act.Into != "" {
		what += " into " + a.act.Into
	}
	return who + ": " + what + " from " + from + " recorded"
}

// endOfSpan writes up to when a span is, as a date where one begins then.
func (a *seriesActing) endOfSpan() string {
	until := a.act.Until.Time()
	if a.zone != nil {
		until = until.In(a.zone)
	}
	if h, m, s := until.Clock(); h+m+s == 0 {
		return until.Format(time.DateOnly)
	}
	return until.Format(time.RFC3339)
}
