package bus

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/synadia-io/orbit.go/jetstreamext"
)

// Entry is a value of a bucket.
type Entry struct {
	Key   string
	Value []byte
	// Revision grows with every value that is put into the bucket.
	Revision uint64
}

// Put is a value that is to be put.
type Put struct {
	Key   string
	Value []byte
	// Revision is that of the value that it follows, 0 where there is none. It
	// is put only then.
	Revision uint64
	// Keep is how long the bucket keeps it, 0 for ever: a time of the bus.
	Keep time.Duration
}

// Outcome is what became of a Put. An error that is no ErrConflict leaves open
// whether the value was put.
type Outcome struct {
	Revision uint64
	Err      error
}

// ErrConflict is returned when something was stored that does not follow what
// was expected there: somebody else was faster.
var ErrConflict = errors.New("somebody else has written there")

// Bucket is a small key-value bucket on the bus, which has one value a key.
// Every value is put by compare-and-swap.
type Bucket struct {
	bus    *Bus
	js     jetstream.JetStream // which forgets what is not acknowledged
	stream string
	prefix string // of the subjects, with the dot
}

// Claims returns the bucket in which processes say what they own; it is made if
// it is missing.
func (b *Bus) Claims(ctx context.Context) (*Bucket, error) {
	js, err := jetstream.New(b.nc, jetstream.WithPublishAsyncTimeout(tryTimeout))
	if err != nil {
		return nil, err
	}
	c := &Bucket{b, js, b.names.claimStream(), b.names.claimPrefix()}
	want := b.claimConfig()
	err = b.patiently(ctx, func(ctx context.Context) error {
		have, err := b.ensureStream(ctx, want)
		if err != nil {
			return err
		}
		if !have.AllowMsgTTL || !have.AllowDirect || have.MaxMsgsPerSubject != 1 {
			return fmt.Errorf("%w: the bucket of claims, %s, has other settings than Tailbell gives it: "+
				"delete it while nothing runs, and it is made anew", ErrStreamDiffers, want.Name)
		}
		if have.Replicas != want.Replicas {
			b.log.Warn().Str("stream", want.Name).Int("replicas", have.Replicas).Int("wanted", want.Replicas).Msg("the bucket of claims has other replicas than the set-up says")
		}
		return nil
	})
	return c, err
}

// claimConfig is the bucket of claims: that which the bus's own clients make,
// with lives for single values.
func (b *Bus) claimConfig() jetstream.StreamConfig {
	return jetstream.StreamConfig{
		Name:                   b.names.claimStream(),
		Description:            "which process owns which partition",
		Subjects:               []string{b.names.claimPrefix() + ">"},
		Storage:                jetstream.FileStorage,
		Replicas:               max(1, b.setup.Bus.Replicas),
		MaxMsgsPerSubject:      1,
		Discard:                jetstream.DiscardNew,
		MaxMsgSize:             mib,
		MaxBytes:               claimsMaxBytes,
		Duplicates:             2 * time.Minute,
		AllowRollup:            true,
		DenyDelete:             true,
		AllowDirect:            true,
		AllowMsgTTL:            true,
		SubjectDeleteMarkerTTL: time.Minute,
		Metadata:               map[string]string{metaFormat: streamFormat},
	}
}

// claimsMaxBytes bounds the bucket of claims.
const claimsMaxBytes = 64 * mib

// All returns every value. A replica of the bus may answer that has not heard of
// the latest ones.
func (c *Bucket) All(ctx context.Context) ([]Entry, error) {
	before := c.bus.denied.Load()
	entries, err := c.all(ctx)
	if err != nil {
		return nil, fmt.Errorf("reading the bucket %s: %w", c.stream, c.bus.deniedSince(before, mapped(err)))
	}
	return entries, nil
}

func (c *Bucket) all(ctx context.Context) ([]Entry, error) {
	const most = 10_000
	messages, err := jetstreamext.GetLastMsgsFor(ctx, c.bus.js, c.stream, []string{c.prefix + ">"}, jetstreamext.GetLastMsgsBatchSize(most))
	if err != nil {
		return nil, err
	}
	var entries []Entry
	complete := false
	for m, err := range messages {
		if errors.Is(err, jetstreamext.ErrNoMessages) {
			return nil, nil
		}
		if err != nil {
			return nil, err
		}
		complete = m.Header.Get("Nats-Num-Pending") == "0"
		if m.Header.Get(jetstream.MarkerReasonHeader) != "" || m.Header.Get("KV-Operation") != "" {
			continue // the value before it is gone
		}
		entries = append(entries, Entry{strings.TrimPrefix(m.Subject, c.prefix), m.Data, m.Sequence})
	}
	if !complete {
		return nil, errors.Join(nats.ErrTimeout, ctx.Err())
	}
	return entries, nil
}

// PutAll puts values, each by compare-and-swap, at the same time, and returns
// what became of each.
func (c *Bucket) PutAll(ctx context.Context, puts []Put) []Outcome {
	before := c.bus.denied.Load()
	outcomes := make([]Outcome, len(puts))
	acks := make([]jetstream.PubAckFuture, len(puts))
	for i := range puts {
		acks[i], outcomes[i].Err = c.start(&puts[i])
	}
	for i, ack := range acks {
		if ack == nil {
			continue
		}
		select {
		case a := <-ack.Ok():
			outcomes[i].Revision = a.Sequence
		case err := <-ack.Err():
			outcomes[i].Err = conflicting(err)
		case <-ctx.Done():
			outcomes[i].Err = ctx.Err()
		}
	}
	for i := range outcomes {
		if err := outcomes[i].Err; err != nil {
			outcomes[i].Err = fmt.Errorf("putting %s into %s: %w", puts[i].Key, c.stream, c.bus.deniedSince(before, err))
		}
	}
	return outcomes
}

func (c *Bucket) start(p *Put) (jetstream.PubAckFuture, error) {
	opts := []jetstream.PublishOpt{jetstream.WithExpectLastSequencePerSubject(p.Revision), jetstream.WithRetryAttempts(0)}
	if p.Keep > 0 {
		opts = append(opts, jetstream.WithMsgTTL(p.Keep))
	}
	return c.js.PublishMsgAsync(&nats.Msg{Subject: c.prefix + p.Key, Data: p.Value, Header: nats.Header{}}, opts...)
}

// conflicting makes an ErrConflict of what the bus says of a message that does
// not follow.
func conflicting(err error) error {
	if code := codeOf(err); code == jetstream.JSErrCodeStreamWrongLastSequence || code == jetstream.JSErrCodeStreamWrongLastSequenceConstant {
		return fmt.Errorf("%w: %w", ErrConflict, err)
	}
	if errors.Is(err, jetstream.ErrAsyncPublishTimeout) {
		return errors.Join(nats.ErrTimeout, err)
	}
	return mapped(err)
}

// Passing reports whether an error of the bus may pass, so that trying again can
// help.
func Passing(err error) bool { return passing(err) }
