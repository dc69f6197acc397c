package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"maps"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

func newRefusedResendCommand() *cobra.Command {
	var path string
	o := refusedFilter{}
	c := &cobra.Command{
		Use:   "resend [NUMBER...]",
		Short: "Publish the original bytes of refusals once more, and say what becomes of them",
		Long: `Publishes the original bytes of refusals into the stream once more, one by one, and
says what becomes of each. It is for what was refused because of the set-up or of
the moment (series_full, ids_full, ambiguous, too_far_ahead), and has been mended
since; what can't be understood is refused again. Name refusals by their numbers,
or all of a reason by --reason.

The refusal stays in the list, and nothing keeps it from being sent again: an
observation with an id is counted once all the same, one without twice. The daemon
must run. Set-ups can't be sent again: tailbell run puts them into force.`,
		RunE: func(c *cobra.Command, args []string) error {
			numbers, err := refusalNumbers(args)
			switch {
			case err != nil:
				return &usageError{err}
			case (len(numbers) == 0) == (o.reason == ""):
				return &usageError{errors.New("name refusals by their numbers, or all of a reason by --reason CODE")}
			}
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			if o.reason != "" {
				err := o.each(c, path, func(row *refusedRow) error {
					if !row.Expired {
						numbers = append(numbers, row.Number)
					}
					return nil
				})
				if err != nil {
					return err
				}
			}
			return resendAll(c.Context(), c.OutOrStdout(), setup, o, numbers)
		},
	}
	addConfigFlag(c, &path)
	o.add(c)
	return c
}

func refusalNumbers(args []string) ([]uint64, error) {
	var numbers []uint64
	for _, arg := range args {
		n, err := strconv.ParseUint(arg, 10, 64)
		if err != nil || n == 0 {
			return nil, fmt.Errorf("%q is not the number of a refusal: tailbell refused list shows them", arg)
		}
		numbers = append(numbers, n)
	}
	return numbers, nil
}

func resendAll(ctx context.Context, w io.Writer, setup *config.Setup, o refusedFilter, numbers []uint64) error {
	if len(numbers) == 0 {
		return say(w, "Nothing was refused for the reason %s, or its bytes are not kept any more.", o.reason)
	}
	again := 0
	for i, n := range numbers {
		var r resendReply
		if err := ask(ctx, setup, verbResend, resendRequest{Partition: o.partition, Number: n}, &r); err != nil {
			return fmt.Errorf("refusal %d: %w\n%d of %d were sent before it", n, sayNeverRan(setup, err), i, len(numbers))
		}
		if r.Refused {
			again++
		}
		if err := say(w, "%d: sent again at position %d: %s", n, r.Position, r.Outcome); err != nil {
			return err
		}
	}
	if again == 0 {
		return nil
	}
	if err := say(w, "%d of %d were refused again, under new numbers.", again, len(numbers)); err != nil {
		return err
	}
	return errReported
}

type resendRequest struct {
	Partition int    `json:"partition"`
	Number    uint64 `json:"number"`
}

// resendReply says what became of bytes that were sent again.
type resendReply struct {
	Position uint64 `json:"position"`
	Refused  bool   `json:"refused"`
	Outcome  string `json:"outcome"`
}

// resend publishes a refusal's original bytes, waits until they are committed,
// and says what became of them.
func (d *daemon) resend(ctx context.Context, req resendRequest) (any, error) {
	p, err := d.part(req.Partition)
	if err != nil {
		return nil, err
	}
	row, err := p.store.RefusedOne(req.Number)
	switch {
	case errors.Is(err, store.ErrNotFound):
		return nil, control.Errorf(codeNotFound, "there is no refusal %d, or it is not kept any more: tailbell refused list shows them", req.Number)
	case err != nil:
		return nil, err
	case row.Expired:
		return nil, control.Errorf(codeRefused, "its original bytes are not kept any more")
	}
	out, err := d.again(ctx, &row.Refusal, req.Partition)
	if err != nil {
		return nil, err
	}
	if p, err = d.part(out.Partition); err != nil {
		return nil, err
	}
	var before, after monitor.Account
	if err := p.do(ctx, func(e *monitor.Engine) { before = e.Account() }); err != nil {
		return nil, err
	}
	position, err := d.bus.Publish(ctx, out)
	if err != nil {
		return nil, err
	}
	if err := p.reach(ctx, position); err != nil {
		return nil, fmt.Errorf("it is in the stream at position %d, but was not taken in time: %w", position, err)
	}
	refused, err := p.store.RefusedAt(position)
	if err != nil {
		return nil, err
	}
	if err := p.do(ctx, func(e *monitor.Engine) { after = e.Account() }); err != nil {
		return nil, err
	}
	return resendReply{Position: position, Refused: len(refused) > 0, Outcome: becameOf(out.Kind, refused, before, after)}, nil
}

// again is the message that holds a refusal's bytes once more. Its headers are
// those of the message that it was in, where the stream still has that.
func (d *daemon) again(ctx context.Context, r *monitor.Refusal, partition int) (bus.Outgoing, error) {
	out := bus.Outgoing{Partition: partition, Kind: bus.Observation, Data: r.Raw}
	switch raw, err := d.bus.At(ctx, r.Position); {
	case errors.Is(err, bus.ErrNoMessage):
	case err != nil:
		return out, err
	case bytes.Contains(raw.Data, r.Raw):
		out.Header = keptHeaders(raw.Header, r, len(raw.Data))
	}
	d.route(&out, whatRefused(r))
	if whatRefused(r) == "set-up" {
		return out, control.Errorf(codeRefused, "it is a set-up: mend the file and start tailbell run with it")
	}
	return out, nil
}

// keptHeaders are the headers that still hold for the bytes of a refusal: the
// history time, and for a whole message what says its form.
func keptHeaders(header map[string][]string, r *monitor.Refusal, length int) map[string][]string {
	kept := maps.Clone(header)
	maps.DeleteFunc(kept, func(name string, _ []string) bool {
		switch name = strings.ToLower(name); {
		case name == strings.ToLower(wire.TimeHeader):
			return r.Reason == monitor.BadHeader
		case name == strings.ToLower(wire.ContentTypeHeader), strings.HasPrefix(name, "ce-"):
			return len(r.Raw) != length
		}
		return true
	})
	return kept
}

// route sends what can be understood to its own partition: a stray is refused
// where it was.
func (d *daemon) route(out *bus.Outgoing, what string) {
	decoder := wire.NewDecoder(wire.Limits{})
	if what == "act" {
		out.Kind = bus.Act
		act, reason, _ := decoder.Act(out.Data)
		switch {
		case reason != "":
		case act.Alert == "":
			out.Partition = d.numberOf(act.Series)
		default:
			if _, p, err := d.find(act.Alert); err == nil {
				out.Partition = p.number
			}
		}
		return
	}
	if item := decoder.Observation(bytes.Clone(out.Data)); item.Reason == "" {
		out.Partition = d.numberOf(item.Observation.Series)
	}
}

// becameOf says what became of a message, by the account before and after it.
func becameOf(kind bus.Kind, refused []store.RefusedRow, before, after monitor.Account) string {
	if n := len(refused); n > 0 {
		r := &refused[0].Refusal
		text := fmt.Sprintf("refused, %s: %s", r.Reason, aboutSeries(r))
		if n > 1 {
			text += fmt.Sprintf(" (and %d more)", n-1)
		}
		return text
	}
	switch {
	case kind == bus.Act:
		return "the act was taken"
	case after.Elements-before.Elements != 1:
		return "understood; it came together with others, so see tailbell status for what they became"
	case after.Repeat > before.Repeat:
		return "a repeat of what was counted already"
	case after.Outdated > before.Outdated:
		return "outdated: a higher revision, or a later reading, is counted"
	case after.Began > before.Began:
		return "a reading from which counting begins"
	case after.Unmonitored > before.Unmonitored:
		return "unmonitored: no indicator takes its series"
	case after.Withheld > before.Withheld:
		return "counted; its slot still lacks events or exposure"
	}
	return "counted"
}
