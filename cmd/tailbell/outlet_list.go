package main

import (
	"fmt"
	"io"
	"strconv"
	"strings"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/store"
)

// outletState is how an outlet of a partition is doing.
type outletState struct {
	Partition int    `json:"partition"`
	Name      string `json:"name"`
	// Kind is that of the set-up, or bus or terminal; "" if the set-up names it
	// no longer.
	Kind string `json:"kind"`
	// Delivered counts the steps that it was told, PassedOver those that the
	// set-up does not tell it, each since they are counted in its store.
	Delivered  uint64 `json:"delivered"`
	PassedOver uint64 `json:"passed_over"`
	// Waiting counts the steps that it is still to be told; AtLeast says that
	// there may be more. First is the key of the first of them.
	Waiting int    `json:"waiting"`
	AtLeast bool   `json:"at_least,omitempty"`
	First   string `json:"first,omitempty"`
	Skipped uint64 `json:"skipped"`
	// Tries failed in a row, the last with Error; the next one is made at Next.
	Tries int        `json:"tries"`
	Error string     `json:"error,omitempty"`
	Next  *time.Time `json:"next,omitempty"`
}

// mostCounted is how many steps are looked at to count those that wait.
const mostCounted = 10_000

func newOutletListCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "list",
		Short: "List the ways out: what waits, what failed, when it is tried again",
		Long: `Lists the ways out with the steps that were delivered, those that were passed over as
the set-up does not tell the outlet of them (history, another indicator), those that
wait, the first of these, the steps that people let go singly, and where something fails: how often in a row,
why, and when it is tried again. Works without a running daemon too, which then
counts steps that an outlet is not told as well.`,
		RunE: func(c *cobra.Command, _ []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			states := []outletState{}
			err = askOrLook(c.Context(), path, verbOutlets, nil, &states, func(st *store.Store) error {
				more, err := outletsAtRest(setup, st)
				states = append(states, more...)
				return err
			})
			if err != nil {
				return err
			}
			if asJSON {
				return writeJSON(c.OutOrStdout(), states)
			}
			return writeOutlets(c.OutOrStdout(), states, setup.Partitions > 1)
		},
	}
	addConfigFlag(c, &path)
	c.Flags().BoolVar(&asJSON, "json", false, "as JSON")
	return c
}

// kindOf is the kind of an outlet, "" if the set-up names it no longer.
func kindOf(setup *config.Setup, name string) string {
	if name == "bus" || name == "terminal" {
		return name
	}
	for i := range setup.Outlets {
		if setup.Outlets[i].Name == name {
			return setup.Outlets[i].Kind.String()
		}
	}
	return ""
}

func outletsAtRest(setup *config.Setup, st *store.Store) ([]outletState, error) {
	outlets, err := st.OutletState()
	if err != nil {
		return nil, err
	}
	var states []outletState
	for _, o := range outlets {
		states = append(states, outletState{
			Partition: st.Identity().Partition, Name: o.Name, Kind: kindOf(setup, o.Name),
			Delivered: o.Told, PassedOver: o.Passed, Waiting: int(o.Depth), Skipped: o.Skipped,
		})
	}
	return states, nil
}

// outlets answers how every outlet is doing.
func (d *daemon) outlets() ([]outletState, error) {
	all := []outletState{}
	for _, p := range d.parts.all() {
		states, err := outletsAtRest(d.setup, p.store)
		if err != nil {
			return nil, err
		}
		for _, s := range states {
			if q := p.queue(s.Name); q != nil {
				if s.Waiting, s.First, s.AtLeast, err = q.Waiting(mostCounted); err != nil {
					return nil, err
				}
				t := q.Trouble()
				if s.Tries, s.Error = t.Tries, t.Error; !t.Next.IsZero() {
					s.Next = &t.Next
				}
			}
			all = append(all, s)
		}
	}
	return all, nil
}

func writeOutlets(w io.Writer, states []outletState, partitions bool) error {
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	rows := [][]string{{"OUTLET", "KIND", "DELIVERED", "PASSED OVER", "WAITING", "FIRST", "SKIPPED", "FAILED", "NEXT TRY"}}
	for i := range states {
		rows = append(rows, states[i].row(partitions))
	}
	for _, row := range rows {
		if _, err := fmt.Fprintln(t, strings.TrimRight(strings.Join(row, "\t"), "\t")); err != nil {
			return err
		}
	}
	if err := t.Flush(); err != nil {
		return err
	}
	for _, s := range states {
		if s.Error == "" {
			continue
		}
		if err := say(w, "%s: %s", s.Name, s.Error); err != nil {
			return err
		}
	}
	return nil
}

// row is the outlet's line in the list.
func (s *outletState) row(partitions bool) []string {
	name, kind, waiting, next, failed := s.Name, s.Kind, strconv.Itoa(s.Waiting), "", ""
	if partitions {
		name = fmt.Sprintf("%s (partition %d)", name, s.Partition)
	}
	if kind == "" {
		kind = "not in the set-up"
	}
	if s.AtLeast {
		waiting += " at least"
	}
	if s.Tries > 0 {
		failed = fmt.Sprintf("%d in a row", s.Tries)
	}
	if s.Next != nil {
		next = s.Next.Format("2006-01-02 15:04:05Z")
	}
	return []string{name, kind, words.Whole(int64(s.Delivered)), words.Whole(int64(s.PassedOver)), waiting, s.First, strconv.FormatUint(s.Skipped, 10), failed, next}
}
