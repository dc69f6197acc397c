package main

import (
	"fmt"
	"io"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/monitor/store"
)

func newRefusedCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "refused",
		Short: "List what was refused, and why",
		Args:  cobra.NoArgs,
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newRefusedListCommand(), newRefusedShowCommand())
	return c
}

// askRefused returns refusals of a partition.
func askRefused(c *cobra.Command, path string, req refusedRequest) ([]refusedRow, error) {
	var rows []refusedRow
	err := askOrLook(c.Context(), path, verbRefused, req, &rows, func(st *store.Store) error {
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
		Short: "List refusals in stream order: number, position, reason, what is wrong",
		Args:  cobra.NoArgs,
		RunE: func(c *cobra.Command, _ []string) error {
			rows, err := askRefused(c, path, req)
			if err != nil {
				return err
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), rows)
			}
			return writeRefused(c.OutOrStdout(), rows)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().IntVar(&req.Partition, "partition", 0, "of this partition")
	c.Flags().Uint64Var(&req.After, "after", 0, "only those after this number")
	c.Flags().IntVar(&req.Max, "max", 100, "at most so many")
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON, original bytes in base64")
	return c
}

func writeRefused(w io.Writer, rows []refusedRow) error {
	if len(rows) == 0 {
		return say(w, "Nothing was refused.")
	}
	for _, r := range rows {
		at := fmt.Sprintf("%d.%d", r.Refusal.Position, r.Refusal.Index)
		if err := say(w, "%6d  %-10s %-18s %s", r.Number, at, r.Refusal.Reason, r.Refusal.Detail); err != nil {
			return err
		}
	}
	return nil
}

func newRefusedShowCommand() *cobra.Command {
	var path string
	var partition int
	var number uint64
	c := &cobra.Command{
		Use:   "show NUMBER",
		Short: "Show one refusal with its original bytes",
		Args:  cobra.ExactArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			if _, err := fmt.Sscan(args[0], &number); err != nil || number == 0 {
				return &usageError{fmt.Errorf("%q is not the number of a refusal: tailbell refused list shows them", args[0])}
			}
			rows, err := askRefused(c, path, refusedRequest{Partition: partition, After: number - 1, Max: 1})
			if err != nil {
				return err
			}
			if len(rows) == 0 || rows[0].Number != number {
				return fmt.Errorf("there is no refusal %d, or it is not kept any more", number)
			}
			r := &rows[0]
			raw := strings.ToValidUTF8(string(r.Refusal.Raw), "\uFFFD")
			if r.Expired {
				raw = "(not kept any more)"
			}
			return say(c.OutOrStdout(), "%s\nat position %d, element %d\n%s\n\n%s",
				r.Refusal.Reason, r.Refusal.Position, r.Refusal.Index, r.Refusal.Detail, raw)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().IntVar(&partition, "partition", 0, "of this partition")
	return c
}
