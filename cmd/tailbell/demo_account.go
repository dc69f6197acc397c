package main

import (
	"errors"
	"fmt"
	"io"
	"math"
	"time"

	"tailbell/alert/words"
	"tailbell/monitor/life"
)

// print writes the account of a demo.
func (r *demoResult) print(w io.Writer, took time.Duration) error {
	return errors.Join(r.printElements(w, took), r.printAlerts(w), r.printFindings(w), r.printVerdict(w))
}

func (r *demoResult) printElements(w io.Writer, took time.Duration) error {
	errs := []error{
		say(w, "THE ACCOUNT"),
		say(w, "%s with %s, in %s", amount(len(r.scenario.Messages), "messages"), amount(r.account.Elements, "elements"), took.Round(100*time.Millisecond)),
	}
	if r.resumed > 0 {
		errs = append(errs, say(w, "(of the messages, %d stood in the stream already: the demo went on)", r.resumed))
	}
	errs = append(errs, say(w, "\n%-14s %10s %10s", "", "ledger", "account"))
	for _, c := range r.audit.Classes {
		errs = append(errs, say(w, "%-14s %10s %10s", c.Class, words.Whole(c.Ledger), words.Whole(c.Account)))
	}
	errs = append(errs,
		say(w, "\nIn %s: %s; events and exposure are compared slot by slot.", amount(r.audit.Slots, "slots"), amount(r.audit.Events, "events")),
		say(w, "%s made when due, %s withheld, %s made again because data changed; %s came late.",
			amount(r.account.Looks, "looks"), words.Whole(r.account.WithheldLooks), words.Whole(r.account.Reruns), amount(r.account.Late, "elements")),
		say(w, "%s taken, %d refused.", amount(r.account.Acts, "acts"), r.account.ActsRefused))
	return errors.Join(append(errs, r.printConditions(w))...)
}

// printConditions names the series that have lacked data for long, and counts
// the others: the last days' denominators are always still out.
func (r *demoResult) printConditions(w io.Writer) error {
	const long = 30 * 24 * time.Hour
	var errs []error
	recent, last := 0, ""
	for _, c := range r.conditions {
		switch {
		case c.Since > r.clock.Add(-long):
			recent++
		case c.Series != last:
			last = c.Series
			errs = append(errs, say(w, "Condition: looks at %s are withheld since %s: %s.", c.Series,
				c.Since.Time().Format(time.DateOnly), c.Text))
		}
	}
	return errors.Join(append(errs, say(w, "Beside these, looks at %s are withheld for less than 30 days.", amount(recent, "windows")))...)
}

func (r *demoResult) printAlerts(w io.Writer) error {
	var upper, lower, late int
	steps := map[life.StepKind]int{}
	for i := range r.alerts {
		a := &r.alerts[i]
		if a.Direction == life.Upper {
			upper++
		} else {
			lower++
		}
		if a.Late {
			late++
		}
		for _, s := range a.Steps {
			steps[s.Kind]++
		}
	}
	return say(w, "\n%s: %d upper, %d lower, %d opened late; steps: %d worsened, %d corrected, %d returned, %d withdrawn, %d acknowledged, %d closed.",
		amount(len(r.alerts), "alerts"), upper, lower, late, steps[life.StepWorsened], steps[life.StepCorrected], steps[life.StepReturned],
		steps[life.StepWithdrawn], steps[life.StepAcknowledged], steps[life.StepClosed])
}

func (r *demoResult) printFindings(w io.Writer) error {
	errs := []error{say(w, "\nPLANTED EXCESSES")}
	found, width := 0, 0
	for _, f := range r.audit.Findings {
		width = max(width, len(f.Planted.Series))
	}
	for _, f := range r.audit.Findings {
		what := "not found"
		if f.Found {
			found++
			what = fmt.Sprintf("found after %s (alert %s)", inDays(f.Delay), f.Alert)
		}
		errs = append(errs, say(w, "%-*s %-5s x%-5.3g %s to %s: %s", width, f.Planted.Series, f.Planted.Direction, f.Planted.Ratio,
			f.Planted.From.Format(time.DateOnly), f.Planted.To.Format(time.DateOnly), what))
	}
	return errors.Join(append(errs, say(w, "%d of %d found.", found, len(r.audit.Findings)))...)
}

func inDays(d time.Duration) string {
	if d < 48*time.Hour {
		return amount(int(math.Round(d.Hours())), "hours")
	}
	return amount(int(math.Round(d.Hours()/24)), "days")
}

func (r *demoResult) printVerdict(w io.Writer) error {
	if r.audit.Differing == 0 {
		return say(w, "\nThe account balances: it equals the publishers' ledger in every class, series and slot.")
	}
	errs := []error{say(w, "\nTHE ACCOUNT DOES NOT BALANCE: %d differences, the first of them:", r.audit.Differing)}
	for _, d := range r.audit.Differences {
		errs = append(errs, say(w, "  %s", d))
	}
	return errors.Join(errs...)
}
