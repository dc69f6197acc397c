package main

import (
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

func newRefusedCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "refused",
		Short: "List what was refused and why, export it, or send it again",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newRefusedListCommand(), newRefusedShowCommand(), newRefusedExportCommand(), newRefusedResendCommand())
	return c
}

// askRefused returns refusals of a partition.
func askRefused(c *cobra.Command, path string, req refusedRequest) ([]refusedRow, error) {
	setup, err := loadSetup(path)
	if err != nil {
		return nil, err
	}
	if req.Partition < 0 || req.Partition >= setup.Partitions {
		return nil, &usageError{fmt.Errorf("--partition %d: there %s %s, numbered from 0",
			req.Partition, areIs(setup.Partitions), amount(setup.Partitions, "partitions"))}
	}
	rows := []refusedRow{}
	err = askOrLook(c.Context(), path, verbRefused, req, &rows, func(st *store.Store) error {
		if st.Identity().Partition != req.Partition {
			return nil
		}
		var err error
		rows, err = listRefused(st, req)
		return err
	})
	return rows, err
}

func newRefusedListCommand() *cobra.Command {
	var path string
	var asJSON bool
	req := refusedRequest{}
	c := &cobra.Command{
		Use:   "list",
		Short: "List refusals in stream order: number, position, what it was, reason, what is wrong",
		Long: `Lists what was refused, in the order of the stream: the refusal's number, the
position of its message and the element in it, whether it was data, an act or a
set-up, the reason's code and what is wrong. Works without a running daemon too.`,
		RunE: func(c *cobra.Command, _ []string) error {
			if req.Max < 1 {
				return &usageError{fmt.Errorf("--max %d: it must be at least 1", req.Max)}
			}
			rows, err := askRefused(c, path, req)
			if err != nil {
				return err
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), rows)
			}
			return writeRefused(c.OutOrStdout(), rows, req)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().IntVar(&req.Partition, "partition", 0, "of this partition, by its `NUMBER` from 0")
	c.Flags().Uint64Var(&req.After, "after", 0, "only those after this `NUMBER`")
	c.Flags().IntVar(&req.Max, "max", 100, "at most so `MANY`")
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON, original bytes in base64")
	return c
}

func writeRefused(w io.Writer, rows []refusedRow, req refusedRequest) error {
	switch {
	case len(rows) == 0 && req.After > 0:
		return say(w, "Nothing was refused after number %d.", req.After)
	case len(rows) == 0:
		return say(w, "Nothing was refused.")
	}
	if err := say(w, "%6s  %-10s %-6s %-18s %s", "NUMBER", "POSITION", "WHAT", "REASON", "WHAT IS WRONG"); err != nil {
		return err
	}
	for i := range rows {
		r := &rows[i].Refusal
		at := fmt.Sprintf("%d.%d", r.Position, r.Index)
		if err := say(w, "%6d  %-10s %-6s %-18s %s", rows[i].Number, at, whatRefused(r), r.Reason, aboutSeries(r)); err != nil {
			return err
		}
	}
	if len(rows) >= req.Max {
		return say(w, "--after %d shows what follows.", rows[len(rows)-1].Number)
	}
	return nil
}

// aboutSeries is what is wrong, after the series unless it names that itself.
func aboutSeries(r *monitor.Refusal) string {
	if r.Series == "" || strings.Contains(r.Detail, r.Series) {
		return r.Detail
	}
	return r.Series + ": " + r.Detail
}

// whatRefused says what was refused, by the reason, which most often tells.
func whatRefused(r *monitor.Refusal) string {
	switch {
	case slices.Contains([]monitor.Reason{monitor.BadAct, monitor.NoSuchAlert, monitor.NotAllowed}, r.Reason), wire.IsAct(r.Raw):
		return "act"
	case slices.Contains([]monitor.Reason{monitor.BadSetting, monitor.NeedsRebuild}, r.Reason):
		return "set-up"
	}
	return "data"
}

func newRefusedShowCommand() *cobra.Command {
	var path string
	var partition int
	c := &cobra.Command{
		Use:   "show NUMBER",
		Short: "Show one refusal with its original bytes",
		RunE: func(c *cobra.Command, args []string) error {
			number, err := strconv.ParseUint(args[0], 10, 64)
			if err != nil || number == 0 {
				return &usageError{fmt.Errorf("%q is not the number of a refusal: tailbell refused list shows them", args[0])}
			}
			rows, err := askRefused(c, path, refusedRequest{Partition: partition, After: number - 1, Max: 1})
			if err != nil {
				return err
			}
			if len(rows) == 0 || rows[0].Number != number {
				return fmt.Errorf("there is no refusal %d, or it is not kept any more: tailbell refused list shows them", number)
			}
			r := &rows[0]
			raw := strings.ToValidUTF8(string(r.Refusal.Raw), "\uFFFD")
			if r.Expired {
				raw = "(not kept any more)"
			}
			return say(c.OutOrStdout(), "%s refused: %s\nat position %d, element %d\n%s\n\n%s",
				whatRefused(&r.Refusal), r.Refusal.Reason, r.Refusal.Position, r.Refusal.Index, aboutSeries(&r.Refusal), raw)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().IntVar(&partition, "partition", 0, "of this partition, by its `NUMBER` from 0")
	return c
}
