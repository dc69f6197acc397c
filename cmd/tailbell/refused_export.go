package main

import (
	"encoding/json"
	"errors"
	"unicode/utf8"

	"github.com/spf13/cobra"

	"tailbell/ingest/control"
	"tailbell/monitor"
)

func newRefusedExportCommand() *cobra.Command {
	var path string
	o := refusedFilter{}
	c := &cobra.Command{
		Use:   "export",
		Short: "Write refusals with their original bytes, one JSON object a line",
		Long: `Writes refusals with their original bytes, in the order of the stream, one JSON
object a line: original holds the bytes if they are text in UTF-8, else
original_base64 does; neither stands where they are not kept any more. Works
without a running daemon too. Original bytes may hold what no other part of
Tailbell keeps: handle the file accordingly.`,
		RunE: func(c *cobra.Command, _ []string) error {
			lines := json.NewEncoder(c.OutOrStdout())
			lines.SetEscapeHTML(false)
			return o.each(c, path, func(row *refusedRow) error { return lines.Encode(exportOf(o.partition, row)) })
		},
	}
	addConfigFlag(c, &path)
	o.add(c)
	return c
}

// exportedRefusal is a line of an export.
type exportedRefusal struct {
	Number    uint64         `json:"number"`
	Partition int            `json:"partition"`
	Position  uint64         `json:"position"`
	Element   int            `json:"element"`
	What      string         `json:"what"`
	Series    string         `json:"series,omitempty"`
	Reason    monitor.Reason `json:"reason"`
	Detail    string         `json:"detail"`
	Expired   bool           `json:"expired,omitempty"`
	Original  *string        `json:"original,omitempty"`
	Base64    []byte         `json:"original_base64,omitempty"`
}

func exportOf(partition int, row *refusedRow) exportedRefusal {
	r := &row.Refusal
	e := exportedRefusal{
		Number: row.Number, Partition: partition, Position: r.Position, Element: r.Index,
		What: whatRefused(r), Series: r.Series, Reason: r.Reason, Detail: r.Detail, Expired: row.Expired,
	}
	switch text := string(r.Raw); {
	case row.Expired:
	case utf8.ValidString(text):
		e.Original = &text
	default:
		e.Base64 = r.Raw
	}
	return e
}

// refusedFilter says which refusals are meant.
type refusedFilter struct {
	partition int
	after     uint64
	reason    string
}

func (o *refusedFilter) add(c *cobra.Command) {
	c.Flags().IntVar(&o.partition, "partition", 0, "of this partition, by its `NUMBER` from 0")
	c.Flags().Uint64Var(&o.after, "after", 0, "only those after this `NUMBER`")
	c.Flags().StringVar(&o.reason, "reason", "", "only those of this reason's `CODE`")
}

// mostAtOnce is how many refusals are asked for at a time, fewer if they are
// large.
const mostAtOnce = 200

// each calls use for the refusals that are meant, in order.
func (o *refusedFilter) each(c *cobra.Command, path string, use func(*refusedRow) error) error {
	req := refusedRequest{Partition: o.partition, After: o.after, Max: mostAtOnce}
	for {
		rows, err := askRefused(c, path, req)
		var answer *control.Error
		if errors.As(err, &answer) && answer.Code == control.ReplyTooLarge && req.Max > 1 {
			req.Max /= 2
			continue
		}
		if err != nil {
			return err
		}
		for i := range rows {
			if o.reason != "" && string(rows[i].Refusal.Reason) != o.reason {
				continue
			}
			if err := use(&rows[i]); err != nil {
				return err
			}
		}
		if len(rows) < req.Max {
			return nil
		}
		req.After = rows[len(rows)-1].Number
	}
}
