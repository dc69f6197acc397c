package main

import (
	"context"
	"errors"
	"fmt"
	"io"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

// newStreamCommand returns "tailbell stream": what is done with the input
// stream as a whole.
func newStreamCommand() *cobra.Command {
	c := &cobra.Command{
		Use:   "stream",
		Short: "Trim the stream to what the kept copies of the stores need",
		RunE:  func(c *cobra.Command, _ []string) error { return c.Help() },
	}
	c.AddCommand(newStreamTrimCommand())
	return c
}

func newStreamTrimCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "trim COPY...",
		Short: "Remove the messages that no kept copy of the stores needs any more",
		Long: `Removes from the stream what lies before the oldest of the copies named: each a
file that "tailbell store copy" made, or a folder of them. Every partition needs at
least one. The copies are checked whole first. Whoever keeps copies names all that
are kept: from any of them a store can then still be rebuilt, and from no older one.

The daemon must run. It removes nothing that it has not stored. The original
observations are gone then; sums, alerts and acts stay in the store.`,
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			return trimStream(c.Context(), c.OutOrStdout(), setup, args)
		},
	}
	addConfigFlag(c, &path)
	return c
}

func trimStream(ctx context.Context, w io.Writer, setup *config.Setup, args []string) error {
	seen := make([]bool, setup.Partitions)
	req := trimRequest{}
	for _, arg := range args {
		files, err := storeFiles(arg)
		if err != nil {
			return err
		}
		for _, file := range files {
			one, stream, err := keptCopy(ctx, setup, file)
			if err != nil {
				return fmt.Errorf("%s: %w\nNothing was trimmed", file, err)
			}
			seen[one.partition] = true
			if req.Stream.Name == "" || one.position < req.Through {
				req.Through, req.Stream = one.position, stream
			}
		}
	}
	for n, ok := range seen {
		if !ok {
			return fmt.Errorf("no copy of partition %d was named: the stream is that of all partitions\nNothing was trimmed", n)
		}
	}
	var reply trimReply
	if err := ask(ctx, setup, verbTrim, req, &reply); err != nil {
		return sayNeverRan(setup, err)
	}
	if reply.Removed == 0 {
		return say(w, "Nothing lies before position %d: the stream begins at %d.", req.Through+1, reply.First)
	}
	return say(w, "%s removed up to position %d; the stream begins at %d.", amount(reply.Removed, "messages"), req.Through, reply.First)
}

// keptCopy checks a copy that is kept.
func keptCopy(ctx context.Context, setup *config.Setup, file string) (one fitCopy, stream store.StreamIdentity, err error) {
	if _, err := store.CheckFile(ctx, file, store.Options{}); err != nil {
		return one, stream, err
	}
	st, err := store.OpenReadOnly(file, store.Options{})
	if err != nil {
		return one, stream, err
	}
	defer func() { err = errors.Join(err, st.Close()) }()
	found := st.Identity()
	if found.Partition >= setup.Partitions || found != identityOf(setup, found.Partition) {
		return one, stream, wrongStore(file, found, identityOf(setup, min(found.Partition, setup.Partitions-1)))
	}
	one = fitCopy{file: file, partition: found.Partition}
	stream, known, err := st.Stream()
	if err == nil && !known {
		err = errors.New("it knows no stream yet")
	}
	if err != nil {
		return one, stream, err
	}
	one.position, err = st.Position()
	return one, stream, err
}

// trimRequest asks to remove what lies up to a position of a stream.
type trimRequest struct {
	Through uint64               `json:"through"`
	Stream  store.StreamIdentity `json:"stream"`
}

type trimReply struct {
	Removed uint64 `json:"removed"`
	First   uint64 `json:"first"`
}

// trim removes messages that every partition has stored.
func (d *daemon) trim(ctx context.Context, req trimRequest) (any, error) {
	if _, err := d.trimOwn(ctx, req); err != nil {
		return nil, err
	}
	return d.trimStream(ctx, req)
}

// trimOwn makes sure that the partitions that are open here can do without what
// is to be removed.
func (d *daemon) trimOwn(ctx context.Context, req trimRequest) (any, error) {
	for _, p := range d.parts.all() {
		position, err := p.store.Position()
		if err != nil {
			return nil, err
		}
		stream, _, err := p.store.Stream()
		if err != nil {
			return nil, err
		}
		if !stream.Equal(req.Stream) {
			return nil, control.Errorf(codeRefused, "the copies are of another stream than partition %d reads: make new ones", p.number)
		}
		if end, err := d.bus.EndOf(ctx, p.number); err != nil || position < req.Through && position < end {
			return nil, errors.Join(err, control.Errorf(codeRefused, "partition %d stands at position %d, before the copies' %d: wait until it has caught up",
				p.number, position, req.Through))
		}
	}
	before, err := d.bus.Identity(ctx)
	if err != nil || req.Through < before.First {
		return nil, err
	}
	if d.setup.Bus.Share {
		for _, p := range d.parts.all() {
			if err := d.member.renewCopies(ctx, p, req.Through); err != nil {
				return nil, err
			}
		}
	}
	// The set-up in force must stay in the stream: the next start compares with
	// it. The engine passes over one that it has.
	for _, p := range d.parts.all() {
		if err := d.keepSetting(ctx, p, req.Through); err != nil {
			return nil, err
		}
	}
	return nil, nil
}

// trimStream removes the messages.
func (d *daemon) trimStream(ctx context.Context, req trimRequest) (any, error) {
	before, err := d.bus.Identity(ctx)
	if err != nil || req.Through < before.First {
		return trimReply{First: before.First}, err
	}
	if err := d.bus.Trim(ctx, req.Through); err != nil {
		return nil, err
	}
	after, err := d.bus.Identity(ctx)
	d.log.Info().Uint64("through", req.Through).Msg("trimmed the stream")
	return trimReply{Removed: after.First - before.First, First: after.First}, err
}

// keepSetting publishes the partition's set-up in force again if its message is
// about to be removed.
func (d *daemon) keepSetting(ctx context.Context, p *part, through uint64) error {
	last, found, err := d.bus.LastSetting(ctx, p.number)
	if err != nil || !found || last.Position > through {
		return err
	}
	position, err := d.bus.Publish(ctx, bus.Outgoing{Partition: p.number, Kind: bus.Setting, Data: last.Data})
	if err != nil {
		return err
	}
	return p.reach(ctx, position)
}
