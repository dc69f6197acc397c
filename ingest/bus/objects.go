package bus

import (
	"context"
	"errors"
	"fmt"
	"io"
	"strings"
	"time"

	"github.com/nats-io/nats.go/jetstream"
)

// Objects is a store of large values on the bus.
type Objects struct {
	bus    *Bus
	stream string
	store  jetstream.ObjectStore
}

// Errors of objects.
var (
	// ErrNoObject is returned for an object that is not there.
	ErrNoObject = errors.New("there is no such object")
	// ErrObjectDamaged is returned for one of which a part is missing or another.
	ErrObjectDamaged = errors.New("the object is not whole")
)

// objectTime is how long an object may take to come: one of which all parts are
// missing never does.
const objectTime = 30 * time.Second

// Copies returns the object store for copies of stores; it is made if it is
// missing.
func (b *Bus) Copies(ctx context.Context) (*Objects, error) {
	bucket := b.names.copies()
	o := &Objects{bus: b, stream: "OBJ_" + bucket}
	err := b.patiently(ctx, func(ctx context.Context) (err error) {
		o.store, err = b.js.ObjectStore(ctx, bucket)
		if errors.Is(err, jetstream.ErrBucketNotFound) {
			o.store, err = b.js.CreateObjectStore(ctx, jetstream.ObjectStoreConfig{
				Bucket: bucket, Description: "copies of the partitions' stores", Storage: jetstream.FileStorage,
				Replicas: max(1, b.setup.Bus.Replicas), Compression: true, Metadata: map[string]string{metaFormat: streamFormat},
			})
			if errors.Is(err, jetstream.ErrBucketExists) {
				o.store, err = b.js.ObjectStore(ctx, bucket) // another process was faster
			}
		}
		if err != nil {
			return fmt.Errorf("seeing to the object store %s: %w", bucket, mapped(err))
		}
		return nil
	})
	return o, err
}

// Put stores an object with what is to be known of it, in place of the one that
// had its name.
func (o *Objects) Put(ctx context.Context, name string, facts map[string]string, from io.Reader) error {
	before := o.bus.denied.Load()
	meta := jetstream.ObjectMeta{Name: name, Metadata: facts, Opts: &jetstream.ObjectMetaOptions{ChunkSize: objectChunk}}
	if _, err := o.store.Put(ctx, meta, from); err != nil {
		return fmt.Errorf("putting %s into %s: %w", name, o.stream, o.bus.deniedSince(before, mapped(err)))
	}
	// That the parts of the object before could not be removed is no error of the
	// client's.
	if last := o.bus.denied.Load(); last != before && strings.Contains(last.text, o.stream) {
		return fmt.Errorf("putting %s into %s: %w", name, o.stream, notAllowed(last.text, ErrNotAllowed))
	}
	return nil
}

// objectChunk is the size of one message of an object.
const objectChunk = 256 << 10

// Facts returns what is known of an object. The error is an ErrNoObject if it is
// not there.
func (o *Objects) Facts(ctx context.Context, name string) (map[string]string, error) {
	before := o.bus.denied.Load()
	info, err := o.store.GetInfo(ctx, name)
	switch {
	case errors.Is(err, jetstream.ErrObjectNotFound):
		return nil, fmt.Errorf("%w: %s in %s", ErrNoObject, name, o.stream)
	case err != nil:
		return nil, fmt.Errorf("asking for %s in %s: %w", name, o.stream, o.bus.deniedSince(before, mapped(err)))
	}
	return info.Metadata, nil
}

// Get writes an object out. The error is an ErrObjectDamaged if it is not as it
// was put.
func (o *Objects) Get(ctx context.Context, name string, to io.Writer) (err error) {
	before := o.bus.denied.Load()
	within, cancel := context.WithTimeout(ctx, objectTime)
	defer cancel()
	result, err := o.store.Get(within, name)
	if err == nil {
		_, err = io.Copy(to, result)
		err = errors.Join(err, result.Error(), result.Close())
	}
	if err == nil {
		return nil
	}
	late := within.Err() != nil && ctx.Err() == nil && o.bus.Connected()
	if late || errors.Is(err, jetstream.ErrDigestMismatch) || errors.Is(err, jetstream.ErrBadObjectMeta) {
		err = errors.Join(ErrObjectDamaged, err)
	}
	return fmt.Errorf("reading %s from %s: %w", name, o.stream, o.bus.deniedSince(before, mapped(err)))
}

// Delete removes an object.
func (o *Objects) Delete(ctx context.Context, name string) error {
	err := o.store.Delete(ctx, name)
	if err != nil && !errors.Is(err, jetstream.ErrObjectNotFound) {
		return fmt.Errorf("removing %s from %s: %w", name, o.stream, mapped(err))
	}
	return nil
}

// Strays returns the parts in the store that belong to none of the named
// objects: what was on its way when a process died, or is just now.
func (o *Objects) Strays(ctx context.Context, names []string) (map[string]bool, error) {
	s, err := o.bus.js.Stream(ctx, o.stream)
	if err != nil {
		return nil, fmt.Errorf("asking for the stream %s: %w", o.stream, mapped(err))
	}
	prefix := "$O." + o.bus.names.copies() + ".C."
	info, err := s.Info(ctx, jetstream.WithSubjectFilter(prefix+">"))
	if err != nil {
		return nil, fmt.Errorf("listing the parts in %s: %w", o.stream, mapped(err))
	}
	strays := map[string]bool{}
	for subject := range info.State.Subjects {
		strays[subject] = true
	}
	for _, name := range names {
		object, err := o.store.GetInfo(ctx, name)
		if errors.Is(err, jetstream.ErrObjectNotFound) {
			continue
		}
		if err != nil {
			return nil, fmt.Errorf("asking for %s in %s: %w", name, o.stream, mapped(err))
		}
		delete(strays, prefix+object.NUID)
	}
	return strays, nil
}

// Sweep removes strays.
func (o *Objects) Sweep(ctx context.Context, strays map[string]bool) error {
	s, err := o.bus.js.Stream(ctx, o.stream)
	if err != nil {
		return fmt.Errorf("asking for the stream %s: %w", o.stream, mapped(err))
	}
	for subject := range strays {
		if err := s.Purge(ctx, jetstream.WithPurgeSubject(subject)); err != nil {
			return fmt.Errorf("removing parts from %s: %w", o.stream, mapped(err))
		}
	}
	return nil
}
