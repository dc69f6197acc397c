// Package copies keeps copies of the partitions' stores on the bus, so that
// another process can go on where the owner of a partition has left off.
//
// A partition has a few places; the next copy goes into that of the oldest one. A
// copy carries what says whose it is, how far it reaches, and the digest of the
// whole file: one that does not arrive as it was made is refused, and the one
// before it serves. A copy is a store at an earlier position of the same stream:
// whoever reads the stream on from there comes to the same state.
package copies

import (
	"cmp"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"strconv"
	"time"

	"tailbell/ingest/bus"
)

// Kept is how many copies of a partition are kept.
const Kept = 3

// ErrDamaged is returned for a copy that is not as it was made.
var ErrDamaged = errors.New("the copy is damaged")

// Shelf is where copies lie; a *bus.Objects is one.
type Shelf interface {
	Put(ctx context.Context, name string, facts map[string]string, from io.Reader) error
	Facts(ctx context.Context, name string) (map[string]string, error)
	Get(ctx context.Context, name string, to io.Writer) error
	Delete(ctx context.Context, name string) error
}

// Copy says what a copy holds.
type Copy struct {
	Partition int
	// Position up to which the stream is in it, and Epoch of the owner that made
	// it.
	Position, Epoch uint64
	// Origin says when the input stream was made, Digest is that of the set-up in
	// force, Made when the copy was made by the owner's clock: for people only.
	Origin, Digest string
	Made           time.Time
	// Bytes and SHA256 are those of the file.
	Bytes  int64
	SHA256 string

	place int
}

// layout is the number of the facts' layout.
const layout = "1"

func name(partition, place int) string { return fmt.Sprintf("partition-%d.%d.store", partition, place) }

func (c *Copy) facts() map[string]string {
	return map[string]string{
		"layout": layout, "partition": strconv.Itoa(c.Partition), "position": strconv.FormatUint(c.Position, 10),
		"epoch": strconv.FormatUint(c.Epoch, 10), "origin": c.Origin, "setup": c.Digest, "made": c.Made.UTC().Format(time.RFC3339Nano),
		"bytes": strconv.FormatInt(c.Bytes, 10), "sha256": c.SHA256,
	}
}

// readFacts is the other way round; ok is false for what is not of this layout.
func readFacts(f map[string]string, place int) (c Copy, ok bool) {
	c = Copy{Origin: f["origin"], Digest: f["setup"], SHA256: f["sha256"], place: place}
	errs := make([]error, 5)
	c.Partition, errs[0] = strconv.Atoi(f["partition"])
	c.Position, errs[1] = strconv.ParseUint(f["position"], 10, 64)
	c.Epoch, errs[2] = strconv.ParseUint(f["epoch"], 10, 64)
	c.Bytes, errs[3] = strconv.ParseInt(f["bytes"], 10, 64)
	c.Made, errs[4] = time.Parse(time.RFC3339Nano, f["made"])
	return c, f["layout"] == layout && errors.Join(errs...) == nil
}

// List returns the copies of a partition, those that reach furthest first.
func List(ctx context.Context, from Shelf, partition int) ([]Copy, error) {
	var list []Copy
	for place := range Kept {
		facts, err := from.Facts(ctx, name(partition, place))
		if errors.Is(err, bus.ErrNoObject) {
			continue
		}
		if err != nil {
			return nil, err
		}
		if c, ok := readFacts(facts, place); ok && c.Partition == partition {
			list = append(list, c)
		}
	}
	slices.SortStableFunc(list, func(a, b Copy) int {
		return cmp.Or(cmp.Compare(b.Position, a.Position), cmp.Compare(b.Epoch, a.Epoch), b.Made.Compare(a.Made))
	})
	return list, nil
}

// Save puts a file up as a copy, in the place of the oldest one. Of the copy it
// sets what follows from the file.
func Save(ctx context.Context, to Shelf, file string, c *Copy) error {
	have, err := List(ctx, to, c.Partition)
	if err != nil {
		return err
	}
	c.place = freePlace(have)
	f, err := os.Open(file)
	if err != nil {
		return err
	}
	defer f.Close() //nolint:errcheck // it was only read
	sum := sha256.New()
	if c.Bytes, err = io.Copy(sum, f); err != nil {
		return err
	}
	c.SHA256 = hex.EncodeToString(sum.Sum(nil))
	if _, err := f.Seek(0, io.SeekStart); err != nil {
		return err
	}
	return to.Put(ctx, name(c.Partition, c.place), c.facts(), f)
}

// freePlace is a place without a copy, or that of the last of the list.
func freePlace(have []Copy) int {
	for place := range Kept {
		if !slices.ContainsFunc(have, func(c Copy) bool { return c.place == place }) {
			return place
		}
	}
	return have[len(have)-1].place
}

// Fetch writes a copy into a new file. The error is an ErrDamaged if it is not as
// it was made; then there is no file.
func Fetch(ctx context.Context, from Shelf, c *Copy, file string) (err error) {
	f, err := os.OpenFile(file, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o600)
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			err = errors.Join(err, os.Remove(file))
		}
	}()
	sum := sha256.New()
	count := &counter{w: io.MultiWriter(f, sum)}
	err = from.Get(ctx, name(c.Partition, c.place), count)
	if err = errors.Join(err, f.Sync(), f.Close()); err != nil && !errors.Is(err, bus.ErrObjectDamaged) {
		return err
	}
	if got := hex.EncodeToString(sum.Sum(nil)); err != nil || got != c.SHA256 || count.n != c.Bytes {
		return errors.Join(fmt.Errorf("partition %d, position %d: %w: it has %d bytes of digest %.12s, made were %d of %.12s",
			c.Partition, c.Position, ErrDamaged, count.n, got, c.Bytes, c.SHA256), err)
	}
	return nil
}

// Drop removes a copy.
func Drop(ctx context.Context, from Shelf, c *Copy) error {
	return from.Delete(ctx, name(c.Partition, c.place))
}

type counter struct {
	w io.Writer
	n int64
}

func (c *counter) Write(p []byte) (int, error) {
	n, err := c.w.Write(p)
	c.n += int64(n)
	return n, err
}
