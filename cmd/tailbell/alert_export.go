package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// exportRequest asks for the alerts of a partition after a number, oldest first.
type exportRequest struct {
	Partition int    `json:"partition"`
	After     uint64 `json:"after"`
}

// exportRow is an alert with its number.
type exportRow struct {
	Number uint64      `json:"number"`
	Record life.Record `json:"record"`
}

const (
	// exportAlerts and exportBytes bound a part of an export.
	exportAlerts = 100
	exportBytes  = 512 << 10
)

func newAlertExportCommand() *cobra.Command {
	var path, format, series string
	c := &cobra.Command{
		Use:   "export",
		Short: "Write out the whole record of all alerts, with every step and act",
		Long: `Writes the whole record of all alerts, done or not, oldest first: as CSV one line for
every step and act, with who, when and why; as JSON the records themselves, evidence
and all. Times are UTC. Works without a running daemon too.`,
		RunE: func(c *cobra.Command, _ []string) error {
			out, err := words.NewExporter(format, c.OutOrStdout())
			if err != nil {
				return &usageError{fmt.Errorf("--format: %w", err)}
			}
			if err := config.CheckPattern(series); series != "" && err != nil {
				return &usageError{fmt.Errorf("--series %q: %w", series, err)}
			}
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			pattern := config.NewPattern(series)
			err = exportAll(c.Context(), setup, func(r *life.Record) error {
				if series != "" && r.Series != series && !pattern.Match(r.Series) {
					return nil
				}
				return out.Write(r)
			})
			if err != nil {
				return err
			}
			return out.End()
		},
	}
	addConfigFlag(c, &path)
	c.Flags().StringVar(&format, "format", "csv", "the `FORM`: csv or json")
	c.Flags().StringVar(&series, "series", "", "only of series that match this `PATTERN`: a name, or in quotes 'site/*/fall'")
	return c
}

// exportAll hands over every alert of every partition.
func exportAll(ctx context.Context, setup *config.Setup, use func(*life.Record) error) error {
	for n := range setup.Partitions {
		err := exportPages(func(after uint64) (rows []exportRow, err error) {
			err = ask(ctx, setup, verbExport, exportRequest{n, after}, &rows)
			return rows, err
		}, use)
		if errors.Is(err, bus.ErrNoDaemon) && n == 0 {
			return lookAside(setup, func(st *store.Store) error {
				return exportPages(func(after uint64) ([]exportRow, error) { return exportPart(st, after) }, use)
			})
		}
		if err != nil {
			return err
		}
	}
	return nil
}

// exportPages hands over what the pages hold.
func exportPages(page func(after uint64) ([]exportRow, error), use func(*life.Record) error) error {
	for after := uint64(0); ; {
		rows, err := page(after)
		if err != nil || len(rows) == 0 {
			return err
		}
		for i := range rows {
			if err := use(&rows[i].Record); err != nil {
				return err
			}
			after = rows[i].Number
		}
	}
}

// export answers the next alerts of a partition.
func (d *daemon) export(_ context.Context, req exportRequest) (any, error) {
	p, err := d.part(req.Partition)
	if err != nil {
		return nil, err
	}
	return exportPart(p.store, req.After)
}

// exportPart returns the alerts after a number that one reply holds.
func exportPart(st *store.Store, after uint64) ([]exportRow, error) {
	rows, err := st.Alerts(store.AlertFilter{}, after, exportAlerts)
	if err != nil {
		return nil, err
	}
	list, size := []exportRow{}, 0
	for i := range rows {
		data, err := json.Marshal(&rows[i].Record)
		if err != nil {
			return nil, fmt.Errorf("encoding alert %s: %w", rows[i].Record.ID, err)
		}
		if size += len(data); size > exportBytes && len(list) > 0 {
			break
		}
		list = append(list, exportRow{rows[i].Number, rows[i].Record})
	}
	return list, nil
}
