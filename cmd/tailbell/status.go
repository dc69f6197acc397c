package main

import (
	"fmt"
	"io"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/monitor"
)

func newStatusCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "status",
		Short: "Say how the running daemon is doing: stream, account, conditions, outlets",
		Long: `Says how the running daemon is doing, partition by partition: how far it has read
its stream, its clock, what became of every element of the stream and of every
look, how many alert steps wait for each outlet, and the conditions: windows whose
looks are withheld and why, and series that have fallen silent. What belongs to an
indicator is told in its zone, as its alerts are; other times in the zone that all
indicators have, or in UTC if they have several.`,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var s statusReply
			if err := ask(c.Context(), setup, verbStatus, nil, &s); err != nil {
				return sayNeverRan(setup, err)
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), s)
			}
			return writeStatus(c.OutOrStdout(), &s, zonesOf(setup))
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

func writeStatus(w io.Writer, s *statusReply, z zones) error {
	for i := range s.Partitions {
		if err := writePartition(w, s.Name, &s.Partitions[i], z); err != nil {
			return err
		}
	}
	for _, t := range s.Troubles {
		if err := writeTrouble(w, &t, z); err != nil {
			return err
		}
	}
	if !s.Connected {
		return say(w, "The bus is away; the daemon waits for it.")
	}
	return nil
}

func writeTrouble(w io.Writer, t *trouble, z zones) error {
	where := "all partitions"
	if t.Partition != everyPartition {
		where = fmt.Sprintf("partition %d", t.Partition)
	}
	since := ""
	if !t.Since.IsZero() {
		since = ", since " + z.stamp(t.Since)
	}
	return say(w, "trouble in %s: %s: %s%s", where, t.Kind, t.Text, since)
}

func writePartition(w io.Writer, name string, p *partStatus, z zones) error {
	mode, clock := "live", "not set yet"
	if p.History {
		mode = "history time"
	}
	if len(p.WaitsFor) > 0 {
		mode += fmt.Sprintf(" (waits for what %s %s)", partitionsNamed(p.WaitsFor), countVerb(p.WaitsFor))
	}
	if p.Clock != nil {
		clock = z.stamp(*p.Clock)
	}
	if err := say(w, "%s, partition %d: position %d of %d, %s, clock %s, set-up version %d, %s not done",
		name, p.Number, p.Position, p.End, mode, clock, p.Version, amount(p.OpenAlerts, "alerts")); err != nil {
		return err
	}
	if err := say(w, "  %s monitored%s", amount(p.Series, "series"), endedOf(p.Account)); err != nil {
		return err
	}
	if err := writeAccount(w, p.Account); err != nil {
		return err
	}
	if p.Archive.From != nil {
		if err := say(w, "  archive: %s", &p.Archive); err != nil {
			return err
		}
	}
	if refused := p.Account.Refused + p.Account.ActsRefused + p.Account.SettingsRefused + p.Account.Rejected; refused > 0 {
		if err := say(w, "  tailbell refused list says what was refused, and why"); err != nil {
			return err
		}
	}
	for _, o := range p.Outlets {
		if err := say(w, "  outlet %s: %s delivered, %s passed over, %s waiting",
			o.Name, amount(o.Delivered, "steps"), words.Whole(int64(o.PassedOver)), words.Whole(int64(o.Waiting))); err != nil {
			return err
		}
	}
	for _, c := range p.Conditions {
		if err := writeCondition(w, c, z); err != nil {
			return err
		}
	}
	if p.MoreConditions > 0 {
		return say(w, "  and %s more", amount(p.MoreConditions, "conditions"))
	}
	return nil
}

// partitionsNamed names partitions: "partition 1", "partitions 0, 2".
func partitionsNamed(all []int) string {
	var names []string
	for _, n := range all {
		names = append(names, fmt.Sprint(n))
	}
	if len(all) == 1 {
		return "partition " + names[0]
	}
	return "partitions " + strings.Join(names, ", ")
}

func countVerb(all []int) string {
	if len(all) == 1 {
		return "counts"
	}
	return "count"
}

// endedOf says how many series have ended, nothing if none did.
func endedOf(a monitor.Account) string {
	if a.Retired+a.Returned == 0 {
		return ""
	}
	return fmt.Sprintf("; %s have ended, since nothing was heard of them, %s came back (tailbell series list --retired)",
		words.Whole(a.Retired), words.Whole(a.Returned))
}

func writeCondition(w io.Writer, c conditionRow, z zones) error {
	about := []string{c.Series, c.Window, string(c.Kind)}
	if c.Window == "" {
		about = []string{c.Series, string(c.Kind)}
	}
	return say(w, "  condition: %s: %s, since %s", strings.Join(about, " "), c.Text, z.stampOf(c.Indicator, c.Since))
}

// amount writes a number of things: "1 alert", "2 alerts".
func amount[N ~int | ~int64 | ~uint64](n N, nouns string) string {
	return words.Amount(int64(n), nouns)
}

// areIs is the verb after so many things.
func areIs(n int) string {
	if n == 1 {
		return "is"
	}
	return "are"
}

// writeAccount prints what became of every element.
func writeAccount(w io.Writer, a monitor.Account) error {
	n := words.Whole
	if err := say(w, "  %s: %s counted, %s withheld, %s, %s replaced, %s outdated, %s refused, %s unmonitored",
		amount(a.Elements, "elements"), n(a.Counted), n(a.Withheld), amount(a.Repeat, "repeats"), n(a.Replaced), n(a.Outdated), n(a.Refused), n(a.Unmonitored)); err != nil {
		return err
	}
	if a.Began+a.Gaps > 0 {
		if err := say(w, "  %s of counters from which counting begins; %s after a gap too long to place what came in it",
			amount(a.Began, "readings"), n(a.Gaps)); err != nil {
			return err
		}
	}
	return say(w, "  %s made when due, %s withheld, %s made again because data changed; %s came late; %s, %s refused",
		amount(a.Looks, "looks"), n(a.WithheldLooks), n(a.Reruns), amount(a.Late, "elements"), amount(a.Acts, "acts"), n(a.ActsRefused))
}
