package main

import (
	"errors"
	"fmt"
	"io"
	"maps"
	"slices"
	"strings"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// census is how many observations of which series the files hold, and the
// set-up under which they will be counted.
type census struct {
	rows  map[string]int
	setup *config.Setup
}

func countSeries(entries []history.Entry) map[string]int {
	d := wire.NewDecoder(wire.Limits{})
	rows := map[string]int{}
	for i := range entries {
		if !entries[i].IsAct {
			rows[d.Observation(entries[i].JSON).Observation.Series]++
		}
	}
	return rows
}

// indicatorsOf returns the indicators that a series belongs to: one, unless
// something is amiss.
func indicatorsOf(setup *config.Setup, series string) []*config.Indicator {
	var list []*config.Indicator
	for i := range setup.Indicators {
		if in := &setup.Indicators[i]; in.Matches(series) {
			list = append(list, in)
		}
	}
	return list
}

// differing returns the series that the set-up in force would not count as the
// other one does: under another indicator, in another unit, or with other ids.
func (c census) differing(other *config.Setup) []string {
	var list []string
	for _, series := range slices.Sorted(maps.Keys(c.rows)) {
		same := slices.EqualFunc(indicatorsOf(c.setup, series), indicatorsOf(other, series), func(a, b *config.Indicator) bool {
			return a.Name == b.Name && a.Unit == b.Unit && a.Measure == b.Measure && a.KeepIDs == b.KeepIDs
		})
		if !same {
			list = append(list, series)
		}
	}
	return list
}

// tell warns of rows that will not be counted whatever they say.
func (c census) tell(w io.Writer) error {
	var none, several []string
	for _, series := range slices.Sorted(maps.Keys(c.rows)) {
		switch len(indicatorsOf(c.setup, series)) {
		case 0:
			none = append(none, series)
		case 1:
		default:
			several = append(several, series)
		}
	}
	var errs []error
	if len(none) > 0 {
		errs = append(errs, say(w, "%s of no indicator, so nothing monitors them: %s.", c.areRows(none), c.name(none)))
	}
	if len(several) > 0 {
		errs = append(errs, say(w, "%s of several indicators at once, so they are refused: %s.", c.areRows(several), c.name(several)))
	}
	return errors.Join(errs...)
}

// areRows is "1 row is", "7 rows are", of these series.
func (c census) areRows(series []string) string {
	n := 0
	for _, s := range series {
		n += c.rows[s]
	}
	return amount(n, "rows") + " " + areIs(n)
}

// name names the first of the series with their rows.
func (c census) name(series []string) string {
	const most = 5
	var names []string
	for i, s := range series {
		if i == most {
			names = append(names, fmt.Sprintf("and %d more series", len(series)-most))
			break
		}
		names = append(names, fmt.Sprintf("%s (%s)", s, amount(c.rows[s], "rows")))
	}
	return strings.Join(names, ", ")
}

// tell says what was published.
func (f *feeding) tell() error {
	how := "no daemon runs: they wait in the stream"
	if f.daemon {
		how = "to the running daemon"
	}
	c := f.h.Counts
	published := amount(c.Observations, "observations")
	if c.Acts > 0 {
		published += " and " + amount(c.Acts, "acts")
	}
	err := say(f.stdout, "%s in %s: %s published (%s), %d not usable.",
		amount(c.Rows, "rows"), amount(c.Files, "files"), published, how, c.Faults)
	if c.OutOfOrder > 0 {
		err = errors.Join(err, say(f.stdout, "%s stood after a later one and %s put in order.", amount(c.OutOfOrder, "rows"), wasMany(c.OutOfOrder)))
	}
	return err
}

func wasMany(n int) string {
	if n == 1 {
		return "was"
	}
	return "were"
}

// became says what became of the rows: the daemon's account now, less the one
// before.
func (f *feeding) became(now *statusReply) error {
	b, a := totalOf(&f.before), totalOf(now)
	elements := a.Elements - b.Elements
	repeats, outdated, refused, unmonitored := a.Repeat-b.Repeat, a.Outdated-b.Outdated, a.Refused-b.Refused, a.Unmonitored-b.Unmonitored
	began := a.Began - b.Began
	parts := []string{words.Whole(elements-repeats-outdated-began-refused-unmonitored) + " counted"}
	add := func(n int64, text string) {
		if n > 0 {
			parts = append(parts, text)
		}
	}
	withheld, replaced := a.Withheld-b.Withheld, a.Replaced-b.Replaced
	add(withheld, words.Whole(withheld)+" more in slots that lack their other side, events or exposure")
	add(replaced, words.Whole(replaced)+" of an earlier revision replaced")
	add(repeats, amount(repeats, "repeats"))
	add(began, amount(began, "readings")+" from which counting begins")
	add(outdated, words.Whole(outdated)+" outdated")
	add(refused, words.Whole(refused)+" refused")
	add(unmonitored, words.Whole(unmonitored)+" unmonitored")
	acts, actsRefused := a.Acts-b.Acts, a.ActsRefused-b.ActsRefused
	add(acts, amount(acts, "acts")+" taken")
	add(actsRefused, amount(actsRefused, "acts")+" refused")
	text := "The daemon has read them: " + strings.Join(parts, ", ") + "."
	if elements != int64(f.h.Counts.Observations) {
		text += " That includes what others published at the same time, and what was sent twice."
	}
	if refused+actsRefused > 0 {
		text += " tailbell refused list says why."
	}
	return say(f.stdout, "%s", text)
}

// totalOf is the account over all partitions.
func totalOf(s *statusReply) monitor.Account {
	var sum monitor.Account
	for i := range s.Partitions {
		sum = sum.Add(s.Partitions[i].Account)
	}
	return sum
}
