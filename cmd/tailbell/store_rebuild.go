package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor/store"
)

func newStoreRebuildCommand() *cobra.Command {
	var path string
	c := &cobra.Command{
		Use:   "rebuild COPY",
		Short: "Put a copy in the place of a store; the next start reads on from it",
		Long: `Puts COPY, a file or a folder of files that "tailbell store copy" made, in the
place of the stores of the set-up, while no daemon runs. The next "tailbell run"
reads the stream on from the copy's position and comes to the same state as the
store that was lost. Steps of alerts from after the copy are delivered once more,
under the same keys.

It is refused, and nothing changes, if the copy is damaged or of another
deployment, if the stream is another one, or no longer reaches back to the copy's
position. What stood in the copy's place is kept beside it, under a name that ends
in .aside-1 and so on: remove it when all is well.`,
		RunE: func(c *cobra.Command, args []string) error {
			setup, err := loadSetup(path)
			if err != nil {
				return err
			}
			return rebuildStores(c.Context(), c.OutOrStdout(), setup, args[0])
		},
	}
	addConfigFlag(c, &path)
	return c
}

// rebuildStores puts copies in place, all that were given or, if one of them
// does not fit, none.
func rebuildStores(ctx context.Context, w io.Writer, setup *config.Setup, from string) (err error) {
	if setup.Bus.Share {
		return errors.New("processes share the partitions (share = true under [bus]): each goes on from the copies on the bus by itself, and a store put in place here would be put aside as not the last owner's")
	}
	files, err := storeFiles(from)
	if err != nil {
		return err
	}
	b, err := bus.Open(ctx, setup, bus.WithoutListener())
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, b.Close()) }()
	var fit []fitCopy
	for _, file := range files {
		one, err := checkCopy(ctx, b, setup, file)
		if err != nil {
			return fmt.Errorf("%s: %w\nNothing was changed", file, err)
		}
		for _, other := range fit {
			if other.partition == one.partition {
				return fmt.Errorf("%s and %s are both of partition %d: name one of them\nNothing was changed", other.file, file, one.partition)
			}
		}
		fit = append(fit, one)
	}
	for _, one := range fit {
		if err := one.install(w, setup); err != nil {
			return err
		}
	}
	return nil
}

// fitCopy is a copy that fits the set-up and its stream.
type fitCopy struct {
	file          string
	partition     int
	position, end uint64
}

// checkCopy checks a copy whole, whose it is, and that the stream goes on from
// it.
func checkCopy(ctx context.Context, b *bus.Bus, setup *config.Setup, file string) (one fitCopy, err error) {
	if _, err := store.CheckFile(ctx, file, store.Options{}); err != nil {
		return one, err
	}
	st, err := store.OpenReadOnly(file, store.Options{})
	if err != nil {
		return one, err
	}
	defer func() { err = errors.Join(err, st.Close()) }()
	found := st.Identity()
	if found.Partition >= setup.Partitions || found != identityOf(setup, found.Partition) {
		return one, wrongStore(file, found, identityOf(setup, min(found.Partition, setup.Partitions-1)))
	}
	one = fitCopy{file: file, partition: found.Partition}
	if one.position, err = st.Position(); err != nil {
		return one, err
	}
	_, known, err := st.Stream()
	if err != nil {
		return one, err
	}
	if !known {
		return one, errors.New("it knows no stream yet, so that nothing can be said of it: to begin anew, move the store away instead")
	}
	diff, err := intake.Compare(ctx, b, st)
	if err != nil {
		return one, err
	}
	if diff != nil {
		return one, diff
	}
	id, err := b.Identity(ctx)
	if err != nil {
		return one, err
	}
	one.end = id.Last
	if id.First > one.position+1 {
		return one, fmt.Errorf("it stands at position %d, but the stream begins at %d: what lies between (%s) was trimmed or has expired; take a newer copy",
			one.position, id.First, amount(id.First-one.position-1, "messages"))
	}
	return one, nil
}

// install puts the copy in place.
func (one fitCopy) install(w io.Writer, setup *config.Setup) (err error) {
	place := storePath(setup, one.partition)
	draft := place + ".rebuild"
	if err := os.Remove(draft); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err // one that broke off before
	}
	st, err := store.OpenReadOnly(one.file, store.Options{})
	if err != nil {
		return err
	}
	_, err = st.CompactTo(draft)
	if err = errors.Join(err, st.Close()); err != nil {
		return err
	}
	aside, err := freeName(place + ".aside-")
	if err != nil {
		return err
	}
	_, statErr := os.Lstat(place)
	if err := store.ReplaceWith(draft, place, aside); err != nil {
		return err
	}
	if err := say(w, "Partition %d stands at position %d again; the stream reaches to %d. tailbell run reads on from there.",
		one.partition, one.position, one.end); err != nil || statErr != nil {
		return err
	}
	return say(w, "The store that stood there is now %s.", aside)
}

// freeName returns the first of PREFIX1, PREFIX2 ... that is not taken.
func freeName(prefix string) (string, error) {
	for n := 1; ; n++ {
		name := fmt.Sprintf("%s%d", prefix, n)
		if _, err := os.Lstat(name); errors.Is(err, fs.ErrNotExist) {
			return name, nil
		} else if err != nil {
			return "", err
		}
	}
}
