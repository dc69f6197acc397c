package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/change"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// settingRow is the set-up in force in one partition.
type settingRow struct {
	Partition int    `json:"partition"`
	Version   int    `json:"version"`
	Digest    string `json:"digest"`
	Text      []byte `json:"text,omitempty"` // of the first only
	// Kept says by indicator how far back slots are known.
	Kept map[string]monitor.Kept `json:"kept,omitempty"`
}

// settingsReply is the set-up in force, and the alerts that live under it.
type settingsReply struct {
	Settings []settingRow   `json:"settings"`
	Alerts   []change.Alert `json:"alerts"` // not done
	More     bool           `json:"more"`   // there are further ones
}

// setting tells the set-ups in force.
func (d *daemon) setting(ctx context.Context, _ []byte) (any, error) {
	r := &settingsReply{}
	for _, p := range d.parts.all() {
		var kept map[string]monitor.Kept
		err := p.do(ctx, func(e *monitor.Engine) { kept = e.Kept() })
		if err == nil {
			err = r.add(p.number, p.store, kept)
		}
		if err != nil {
			return nil, err
		}
	}
	return r, nil
}

// least is what all partitions know, by indicator.
func (r *settingsReply) least() map[string]monitor.Kept {
	all := map[string]monitor.Kept{}
	for _, s := range r.Settings {
		for name, k := range s.Kept {
			if known, ok := all[name]; !ok || k.From > known.From {
				all[name] = k
			}
		}
	}
	return all
}

// add adds what one partition's store holds. One without a set-up adds
// nothing.
func (r *settingsReply) add(partition int, st *store.Store, kept map[string]monitor.Kept) error {
	settings, err := st.Settings()
	if err != nil || len(settings) == 0 {
		return err
	}
	last := settings[len(settings)-1]
	row := settingRow{Partition: partition, Version: last.Version, Digest: last.Digest, Kept: kept}
	if len(r.Settings) == 0 {
		row.Text = last.Text
	}
	r.Settings = append(r.Settings, row)
	records, err := listAlerts(st, alertsRequest{Max: diffAlerts + 1 - len(r.Alerts)})
	for i := range records {
		if r.More = len(r.Alerts) == diffAlerts; r.More {
			break
		}
		r.Alerts = append(r.Alerts, change.AlertOf(&records[i]))
	}
	return err
}

// diffAlerts is for how many alerts a difference is told.
const diffAlerts = 1000

// diffReply is what "config diff --json" prints.
type diffReply struct {
	// InForce and Next are the digests; InForce is "" where nothing has run.
	InForce string `json:"in_force"`
	Version int    `json:"version"`
	Next    string `json:"next"`
	*change.Plan
	// Notes are about the comparison itself.
	Notes []string `json:"notes"`
}

func newConfigDiffCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "diff [FILE]",
		Short: "Say beforehand what a changed set-up would mean for the running daemon and its alerts",
		Long: `Compares the set-up in FILE (tailbell.toml, unless another is named) with the one
that is in force in the running daemon, or in its store if none runs, and says what
would change: from the next look on, once data have come in, and when a new window
would be full; with the next start; what a running store can't take; and what would
become of each alert that is not done. Nothing is changed.

The daemon is found by FILE's own name, folder and bus; if FILE changes those, give
the old set-up as --config. A changed set-up comes into force when the daemon is
started with it. The exit code is 0 if the store can take it, 1 if it can't.`,
		RunE: func(c *cobra.Command, args []string) error {
			file := setupNamed(args)
			if path == "" {
				path = file
			}
			reply, err := diffSetup(c.Context(), file, path)
			if err != nil {
				return err
			}
			if asJSON {
				err = writeJSON(c.OutOrStdout(), reply)
			} else {
				err = writeDiff(c.OutOrStdout(), reply)
			}
			if err == nil && !reply.Fits {
				return errReported
			}
			return err
		},
	}
	c.Flags().StringVar(&path, "config", "", "the set-up's `FILE` by which the daemon is found (default: FILE itself)")
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

// diffSetup compares the set-up in file with the one in force in the daemon,
// or the store, that the set-up in path leads to.
func diffSetup(ctx context.Context, file, path string) (*diffReply, error) {
	loaded, err := loadSetup(file)
	if err != nil {
		return nil, err
	}
	// Paths are compared as they are written, which is how the stream has them.
	next, err := config.Parse(loaded.Text, file)
	if err != nil {
		return nil, err
	}
	reply := &diffReply{Next: next.Digest, Plan: &change.Plan{Fits: true, Changes: []change.Change{}, Alerts: []change.Fate{}}, Notes: []string{}}
	current, err := loadSetup(path)
	if err != nil {
		return nil, err
	}
	if _, err := os.Stat(storePath(current, 0)); errors.Is(err, fs.ErrNotExist) && !current.Bus.Share {
		reply.Notes = append(reply.Notes, "nothing has run yet in "+current.Folder+": the first run takes the set-up as it is")
		return reply, nil
	}
	var have settingsReply
	err = askOrLook(ctx, path, verbSetting, nil, &have, func(st *store.Store) error {
		e, err := partition.Recover(st)
		if err != nil {
			return err
		}
		return have.add(st.Identity().Partition, st, e.Kept())
	})
	if err != nil {
		return nil, err
	}
	if len(have.Settings) == 0 {
		reply.Notes = append(reply.Notes, "no set-up is in force yet in "+current.Folder+": the next run takes this one as it is")
		return reply, nil
	}
	first := have.Settings[0]
	for _, s := range have.Settings[1:] {
		if s.Digest != first.Digest {
			reply.Notes = append(reply.Notes, fmt.Sprintf("partition %d is under another set-up (%.12s) than partition %d (%.12s), which is compared", s.Partition, s.Digest, first.Partition, first.Digest))
		}
	}
	if have.More {
		reply.Notes = append(reply.Notes, fmt.Sprintf("only the newest %d alerts are looked at", diffAlerts))
	}
	old, err := config.Parse(first.Text, "the set-up in force")
	if err != nil {
		return nil, fmt.Errorf("the set-up in force was written for another version of this program, which must compare it: %w", err)
	}
	reply.InForce, reply.Version, reply.Plan = first.Digest, first.Version, change.Of(old, next, have.Alerts)
	reply.TellFull(next, have.least())
	return reply, nil
}

// diffHeadings head the classes of change, in the order in which they are
// told.
var diffHeadings = []struct{ class, heading string }{
	{config.NextLook.String(), "In force from the next look on:"},
	{config.Filling.String(), "In force when enough data have come in:"},
	{config.Restart.String(), "No matter of the store, in force with the start:"},
}

// writeDiff tells a difference to people.
func writeDiff(w io.Writer, d *diffReply) error {
	var b strings.Builder
	line := func(format string, args ...any) { fmt.Fprintf(&b, format+"\n", args...) }
	for _, note := range d.Notes {
		line("Note: %s.", note)
	}
	switch d.InForce {
	case "":
		return writeText(w, b.String())
	case d.Next:
		line("This is the set-up in force (version %d, %.12s): nothing changes.", d.Version, d.InForce)
		return writeText(w, b.String())
	}
	line("In force is version %d (%.12s).", d.Version, d.InForce)
	var refused []change.Change
	told := map[string][]change.Change{}
	for _, ch := range d.Changes {
		if ch.Refused != "" {
			refused = append(refused, ch)
			continue
		}
		told[ch.Class] = append(told[ch.Class], ch)
	}
	writeChanges(&b, "The running store can't take:", refused)
	if !d.Fits && len(told) > 0 {
		line("\nWithout that, the rest would be:")
	}
	for _, h := range diffHeadings {
		writeChanges(&b, h.heading, told[h.class])
	}
	if len(d.Alerts) > 0 {
		line("\nAlerts that are not done:")
	}
	for _, a := range d.Alerts {
		line("  %s %s, %s, %s: %s", a.ID, a.Series, a.Direction, a.Condition, a.Text)
	}
	line("")
	switch {
	case !d.Fits:
		line("The store can't take this set-up: a daemon that is started with it says so and ends, and\nnothing of it comes into force. Keep the old values, or begin anew with another folder and name.")
	case len(d.Changes) == 0:
		line("Nothing changes but how the file is written. Alerts will name version %d.", d.Version+1)
	default:
		line("The store can take this set-up: start the daemon with it. Alerts keep the evidence that they have.")
	}
	return writeText(w, b.String())
}

func writeChanges(b *strings.Builder, heading string, changes []change.Change) {
	if len(changes) == 0 {
		return
	}
	fmt.Fprintf(b, "\n%s\n", heading)
	for _, ch := range changes {
		fmt.Fprintf(b, "  %s", ch.Key)
		if ch.Old != "" || ch.New != "" {
			fmt.Fprintf(b, ": %s -> %s", orNothing(ch.Old), orNothing(ch.New))
		}
		for _, text := range []string{ch.Effect, ch.Refused} {
			if text != "" {
				fmt.Fprintf(b, ": %s", text)
			}
		}
		fmt.Fprintln(b)
	}
}

func orNothing(s string) string {
	if s == "" {
		return "nothing"
	}
	return s
}

func writeText(w io.Writer, text string) error {
	_, err := io.WriteString(w, text)
	return err
}
