package main

import (
	"context"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"text/tabwriter"

	"tailbell/alert/words"
	"tailbell/monitor/rehearse/plant"
	"tailbell/monitor/replay"
	"tailbell/monitor/replay/compare"
)

// compare plays the history under each set-up and holds them side by side.
func (o *replayOptions) compare(ctx context.Context) error {
	episodes, err := o.readKnown()
	if err != nil {
		return err
	}
	var played []compare.Played
	refused := 0
	for i, setup := range o.setups {
		r, _, err := o.play(ctx, setup, fmt.Sprintf("replaying %d of %d", i+1, len(o.setups)))
		if err != nil {
			return err
		}
		refused += len(r.Refused)
		if len(r.Refused) > 0 {
			if err := say(o.err, "Under %s:", o.configs[i]); err != nil {
				return err
			}
			if err := o.writeRefused(o.err, r); err != nil {
				return err
			}
		}
		played = append(played, compare.Played{Name: o.nameOf(i), Setup: setup, Result: r})
	}
	c := compare.Of(played, episodes, 1-boundsAlpha)
	if o.json {
		err = writeJSON(o.out, c)
	} else {
		err = o.tellComparison(c)
	}
	if err != nil {
		return err
	}
	if refused > 0 {
		return errReported
	}
	return o.verdict(&replay.Result{})
}

// nameOf is a set-up's file without its folder, where that tells it apart.
func (o *replayOptions) nameOf(i int) string {
	base := filepath.Base(o.configs[i])
	for k, other := range o.configs {
		if k != i && filepath.Base(other) == base {
			return o.configs[i]
		}
	}
	return base
}

// readKnown reads the known episodes; nil without a file of them.
func (o *replayOptions) readKnown() (_ []plant.Episode, err error) {
	if o.known == "" {
		return nil, nil
	}
	f, err := os.Open(o.known)
	if err != nil {
		return nil, fmt.Errorf("--known: %w", err)
	}
	defer f.Close() //nolint:errcheck // it was only read
	read, err := o.files.readOptions()
	if err != nil {
		return nil, err
	}
	zone := read.Zone
	if zone == nil {
		zone = o.setups[0].Indicators[0].Zone
	}
	episodes, err := plant.ReadKnown(f, zone)
	if err != nil {
		return nil, fmt.Errorf("--known %s: %w", o.known, err)
	}
	for i := range episodes {
		episodes[i].From, episodes[i].To = episodes[i].From.In(zone), episodes[i].To.In(zone)
	}
	return append([]plant.Episode{}, episodes...), nil
}

// tellComparison prints a comparison.
func (o *replayOptions) tellComparison(c *compare.Comparison) error {
	t := tabwriter.NewWriter(o.out, 0, 8, 2, ' ', 0)
	p := &printer{w: t}
	p.f("%s in %s, under %s:\n\n", amount(o.read.Counts.Rows, "rows"), amount(o.read.Counts.Files, "files"), amount(len(c.Sides), "set-ups"))
	p.sides(c)
	p.f("\n")
	for i := range c.Pairs {
		p.pair(&c.Pairs[i])
	}
	p.spans(c)
	p.episodes(c)
	p.dates(c, o.zones())
	p.f("\nMore alerts are not better, nor fewer: which of them were real, the history does not say.\n%s\n", words.Caution)
	if p.err != nil {
		return p.err
	}
	return t.Flush()
}

// zones are those in which the set-ups' indicators keep their calendars.
func (o *replayOptions) zones() []string {
	var list []string
	for _, setup := range o.setups {
		for i := range setup.Indicators {
			if name := setup.Indicators[i].ZoneName; !slices.Contains(list, name) {
				list = append(list, name)
			}
		}
	}
	return list
}

// printer writes until something fails.
type printer struct {
	w   io.Writer
	err error
}

func (p *printer) f(format string, args ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format, args...)
	}
}

// row writes one line of a table.
func (p *printer) row(head string, c *compare.Comparison, cell func(*compare.Side) string) {
	p.f("  %s", head)
	for i := range c.Sides {
		p.f("\t%s", cell(&c.Sides[i]))
	}
	p.f("\n")
}

// sides writes what each set-up came to.
func (p *printer) sides(c *compare.Comparison) {
	p.row("", c, func(s *compare.Side) string { return s.Name })
	p.row("looks made", c, func(s *compare.Side) string { return words.Whole(s.Total.Looks) })
	p.row("looks a year", c, func(s *compare.Side) string { return perhaps(s.LooksAYear) })
	p.row("looks withheld", c, func(s *compare.Side) string { return words.Whole(s.Total.Withheld) })
	p.row("alerts", c, func(s *compare.Side) string { return words.Whole(int64(s.Total.Alerts)) })
	p.row("alerts a year (95% bounds)", c, func(s *compare.Side) string { return bounded(&s.Total.AYear) })
	p.row("a year of one series", c, func(s *compare.Side) string { return bounded(&s.Total.ASeriesYear) })
	p.row("of them opened late", c, func(s *compare.Side) string { return words.Whole(int64(s.Total.Late)) })
	p.row("withdrawn, as data were corrected", c, func(s *compare.Side) string { return words.Whole(int64(s.Total.Withdrawn)) })
	p.row("spans found", c, func(s *compare.Side) string { return words.Whole(int64(s.Found)) })
	p.row("of them found by no other", c, func(s *compare.Side) string { return words.Whole(int64(s.Alone)) })
	if c.Episodes == nil {
		return
	}
	p.row("known episodes found", c, func(s *compare.Side) string {
		return words.Whole(int64(*s.Episodes)) + " of " + words.Whole(int64(len(c.Episodes)))
	})
	p.row("alerts in no known episode", c, func(s *compare.Side) string { return words.Whole(int64(*s.Unexplained)) })
}

func perhaps(x *float64) string {
	if x == nil {
		return "-"
	}
	return grouped(*x)
}

// grouped is short with the digits of large numbers in groups.
func grouped(x float64) string {
	if a := math.Abs(x); a >= 1000 && a < 1e12 {
		return words.Whole(int64(math.Round(x)))
	}
	return short(x)
}

func bounded(r *replay.PerYear) string {
	if r.Rate == nil {
		return "-"
	}
	return fmt.Sprintf("%s (%s to %s)", grouped(*r.Rate), grouped(*r.Lower), grouped(*r.Upper))
}

// pair writes how a set-up differs from the first.
func (p *printer) pair(x *compare.Pair) {
	p.f("%s beside %s: both found %s, only %s found %s, only %s %s (a split as uneven has the exact chance %s if both are as good).\n", x.Other, x.First,
		amount(x.Both, "spans"), x.First, words.Whole(int64(x.OnlyFirst)), x.Other, words.Whole(int64(x.OnlyOther)), short(x.AloneP))
	switch {
	case x.NeitherEpisodes == nil:
	case *x.NeitherEpisodes == 0:
		p.f("No known episode was found by neither.\n")
	default:
		p.f("Neither found %s.\n", amount(*x.NeitherEpisodes, "known episodes"))
	}
	if x.Both > 0 {
		p.f("Of those that both found %s was earlier in %s, at the same time in %s, later in %s (exact p %s of the sign test): by a median of %s days, %s to %s.\n",
			x.Other, words.Whole(int64(x.Earlier)), words.Whole(int64(x.Same)), words.Whole(int64(x.Later)), short(x.DelayP),
			grouped(*x.DelayMedian), grouped(*x.DelayLeast), grouped(*x.DelayMost))
	}
	if x.Ratio == nil && x.RatioLower == nil {
		return
	}
	upper := "no bound"
	if x.RatioUpper != nil {
		upper = grouped(*x.RatioUpper)
	}
	p.f("Alerts a year: %s times as many (exact 95%% bounds %s to %s, as if over histories of their own).\n", perhaps(x.Ratio), grouped(*x.RatioLower), upper)
}
