package main

import (
	"fmt"
	"io"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/copies"
	"tailbell/monitor"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// newPartitionsCommand returns "tailbell partitions": the parts into which the
// series of a deployment are divided.
func newPartitionsCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "partitions",
		Short: "List who owns which partition, and how far it is; divide the stream anew",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newPartitionsListCommand(), newPartitionsDivideCommand())
	return c
}

func newPartitionsListCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "list",
		Short: "List the partitions: owner, position, last copy, series, alerts",
		Long: `Lists the partitions: the process that owns each, with its epoch; up to where it has
stored the stream, and how many messages it has yet to store; the last copy of its store
on the bus, where processes share the partitions; how many series it has, and how many
alerts that are not done. A partition that nobody owns rings for nothing.

Works without a running daemon too: then the stores in the folder are read.`,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			var s statusReply
			err = askOrLook(c.Context(), path, verbStatus, nil, &s, func(st *store.Store) error {
				p, err := partAtRest(st)
				s.Partitions = append(s.Partitions, p)
				return err
			})
			if err != nil {
				return err
			}
			rows := partitionRows(setup, &s)
			if asJSON {
				return writeJSON(c.OutOrStdout(), rows)
			}
			return writePartitions(c.OutOrStdout(), rows, time.Now())
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

// partitionRow is a partition as listed.
type partitionRow struct {
	Number int `json:"partition"`
	// Owner is the process that owns it, "" for nobody; Why says more then.
	Owner      string   `json:"owner"`
	Why        string   `json:"why,omitempty"`
	Epoch      uint64   `json:"epoch"`
	Position   uint64   `json:"position"`
	Behind     uint64   `json:"behind"`
	Copy       *copyRow `json:"last_copy,omitempty"`
	Series     int      `json:"series"`
	OpenAlerts int      `json:"open_alerts"`
}

// copyRow is the last copy of a partition's store on the bus: made when, by the
// owner's clock.
type copyRow struct {
	Position uint64    `json:"position"`
	Made     time.Time `json:"made"`
	Bytes    int64     `json:"bytes"`
}

func copyRowOf(c *copies.Copy) *copyRow {
	if c == nil {
		return nil
	}
	return &copyRow{c.Position, c.Made, c.Bytes}
}

// alone is the owner's name where no processes share the partitions, and atRest
// where none runs.
const (
	ownerAlone  = "the daemon"
	ownerAtRest = "no daemon runs"
)

// partAtRest is how a partition stands whose daemon does not run.
func partAtRest(st *store.Store) (s partStatus, err error) {
	s = partStatus{Number: st.Identity().Partition, Owner: ownerAtRest}
	if s.Epoch, err = st.Epoch(); err != nil {
		return s, err
	}
	engine, err := partition.Recover(st)
	if err != nil {
		return s, err
	}
	s.Position, s.Series = engine.Position(), engine.SeriesCount()
	s.End, s.OpenAlerts = s.Position, openAlerts(engine)
	return s, nil
}

// openAlerts is how many alerts are not done.
func openAlerts(e *monitor.Engine) (n int) {
	for _, r := range e.Alerts() {
		if !r.Done() {
			n++
		}
	}
	return n
}

// partitionRows lists all partitions, those without an owner too.
func partitionRows(setup *config.Setup, s *statusReply) []partitionRow {
	rows := make([]partitionRow, setup.Partitions)
	for n := range rows {
		rows[n] = partitionRow{Number: n}
		for _, t := range s.Troubles {
			if t.Partition == n && t.Kind == troubleUnowned {
				rows[n].Why = t.Text
			}
		}
	}
	for i := range s.Partitions {
		p := &s.Partitions[i]
		if p.Number >= len(rows) {
			continue
		}
		row := partitionRow{
			Number: p.Number, Owner: p.Owner, Epoch: p.Epoch, Position: p.Position, Copy: p.Copy, Series: p.Series, OpenAlerts: p.OpenAlerts,
		}
		if p.End > p.Position {
			row.Behind = p.End - p.Position
		}
		rows[p.Number] = row
	}
	return rows
}

func writePartitions(w io.Writer, rows []partitionRow, now time.Time) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	lines := [][]string{{"PARTITION", "OWNER", "EPOCH", "POSITION", "BEHIND", "SERIES", "ALERTS", "LAST COPY"}}
	for i := range rows {
		lines = append(lines, rows[i].line(now))
	}
	for _, line := range lines {
		if _, err := fmt.Fprintln(t, strings.Join(line, "\t")); err != nil {
			return err
		}
	}
	if err := t.Flush(); err != nil {
		return err
	}
	for i := range rows {
		if r := &rows[i]; r.Owner == "" {
			if err := say(w, "partition %d: %s", r.Number, r.Why); err != nil {
				return err
			}
		}
	}
	return nil
}

func (r *partitionRow) line(now time.Time) []string {
	n := func(x uint64) string { return words.Whole(int64(x)) }
	if r.Owner == "" {
		return []string{fmt.Sprint(r.Number), "nobody", "-", "-", "-", "-", "-", "-"}
	}
	last := "-"
	if r.Copy != nil {
		last = fmt.Sprintf("position %s, %s ago", n(r.Copy.Position), duration(max(0, now.Sub(r.Copy.Made)).Truncate(time.Second)))
	}
	return []string{fmt.Sprint(r.Number), r.Owner, n(r.Epoch), n(r.Position), n(r.Behind), n(uint64(r.Series)), n(uint64(r.OpenAlerts)), last}
}
