package main

import (
	"errors"
	"fmt"
	"io"
	"strings"
	"time"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/replay"
)

// boundsAlpha is one minus the level of the bounds of alerts a year.
const boundsAlpha = 0.05

// summarise says what a replay came to.
func (o *replayOptions) summarise(w io.Writer, r *replay.Result, took time.Duration) error {
	kinds := map[life.StepKind]int{}
	for i := range r.Steps {
		kinds[r.Steps[i].Step.Kind]++
	}
	c := o.read.Counts
	from := "in " + amount(c.Files, "files")
	if o.stream {
		from = "of the stream"
	}
	err := say(w, "%s %s replayed in %s, %d not usable: %s opened; steps: %d worsened, %d corrected, %d returned, %d withdrawn.",
		amount(c.Rows, "rows"), from, took.Round(time.Millisecond), c.Faults,
		amount(kinds[life.StepOpened], "alerts"), kinds[life.StepWorsened],
		kinds[life.StepCorrected], kinds[life.StepReturned], kinds[life.StepWithdrawn])
	err = errors.Join(err, o.sayRemarks(w), writeAccount(w, r.Account), writeWatches(w, o.setups[0], r), writeChances(w, r))
	return errors.Join(err, writeConditions(w, r.Conditions, zonesOf(o.setups[0])), writeClock(w, r), o.writeRefused(w, r))
}

// sayRemarks counts what is odd about rows.
func (o *replayOptions) sayRemarks(w io.Writer) error {
	var parts []string
	for _, x := range []struct {
		kind        replay.RemarkKind
		nouns, more string
	}{{replay.Gap, "gaps", ""}, {replay.Duplicate, "duplicates", ""}, {replay.OutOfOrder, "rows", " out of order"}, {replay.MixedOffsets, "rows", " with another offset"}} {
		if n := o.remarks.Counts[x.kind]; n > 0 {
			parts = append(parts, amount(n, x.nouns)+x.more)
		}
	}
	if len(parts) == 0 {
		return nil
	}
	return say(w, "  odd, though used: %s", strings.Join(parts, ", "))
}

// writeWatches says, by indicator, what it was looked at and how often it rang.
func writeWatches(w io.Writer, setup *config.Setup, r *replay.Result) error {
	for _, x := range r.Watches(setup, boundsAlpha) {
		if x.Looks == 0 && x.Withheld == 0 {
			if err := say(w, "  %s: nothing was looked at", x.Indicator); err != nil {
				return err
			}
			continue
		}
		text := fmt.Sprintf("  %s: %s over %s: %s made, %s withheld; %s", x.Indicator, amount(x.Series, "series"), years(x.Years),
			amount(x.Looks, "looks"), words.Whole(x.Withheld), amount(x.Alerts, "alerts"))
		if x.AYear.Rate != nil {
			text += fmt.Sprintf(", %s a year (95%% bounds %s to %s), %s a year of one series (%s to %s)",
				short(*x.AYear.Rate), short(*x.AYear.Lower), short(*x.AYear.Upper),
				short(*x.ASeriesYear.Rate), short(*x.ASeriesYear.Lower), short(*x.ASeriesYear.Upper))
		}
		if err := say(w, "%s", text); err != nil {
			return err
		}
	}
	return nil
}

// writeChances says how the p-values of all looks are spread.
func writeChances(w io.Writer, r *replay.Result) error {
	for _, c := range r.Chances {
		tail := "lower"
		if c.Upper {
			tail = "upper"
		}
		if c.Looks == 0 {
			continue
		}
		var parts []string
		for i, level := range monitor.ChanceLevels {
			parts = append(parts, fmt.Sprintf("%s %% at most %g", short(100*float64(c.AtMost[i])/float64(c.Looks)), level))
		}
		if err := say(w, "  %s: of %s, %s tail: %s; their mean is %.10g", c.Indicator, amount(c.Looks, "p-values"), tail,
			strings.Join(parts, ", "), c.Sum/float64(c.Looks)); err != nil {
			return err
		}
	}
	return nil
}

// years is a length of time in years.
func years(y float64) string {
	if n := short(y); n != "1" {
		return n + " years"
	}
	return "1 year"
}

// writeRefused names the first refusals with their places.
func (o *replayOptions) writeRefused(w io.Writer, r *replay.Result) error {
	for i := range r.Refused {
		if i == mostTold {
			return say(w, "  ... and %s more refused", words.Whole(int64(len(r.Refused)-mostTold)))
		}
		x := &r.Refused[i]
		where := ""
		if place, ok := o.tape.Place(x.Position); ok {
			where = fmt.Sprintf("%s:%d: ", place.File, place.Line)
		}
		if err := say(w, "  refused: %s%s: %s", where, x.Reason, aboutSeries(x)); err != nil {
			return err
		}
	}
	return nil
}

// writeConditions names the first conditions that stand at the end.
func writeConditions(w io.Writer, conditions []monitor.Condition, z zones) error {
	const most = 10
	for i, c := range conditions {
		if i == most {
			return say(w, "  ... and %s more", amount(len(conditions)-most, "conditions"))
		}
		if err := writeCondition(w, conditionRowOf(c), z); err != nil {
			return err
		}
	}
	return nil
}

// writeClock says where the replay ended, and what comes next.
func writeClock(w io.Writer, r *replay.Result) error {
	if r.Clock == monitor.Beginning {
		return nil
	}
	text := "  the clock stands at " + wire.FormatTime(r.Clock)
	if r.HasNext {
		text += "; the next looks are due at " + wire.FormatTime(r.NextDue)
	}
	return say(w, "%s", text)
}
