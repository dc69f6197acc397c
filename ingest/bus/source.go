package bus

import (
	"context"
	"crypto/sha256"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/nats-io/nuid"
)

const (
	// pullMessages and pullBytes bound what one request may bring; there is
	// one request at a time, so they bound what waits in memory too.
	pullMessages = 10000
	pullBytes    = 16 * mib
	// pullExpiry is when the bus ends a request that brought too little, and
	// pullBeat how often it says meanwhile that it is there.
	pullExpiry = 30 * time.Second
	pullBeat   = 5 * time.Second
	// silence is how long nothing may come at all before the source starts
	// again.
	silence = 2*pullBeat + time.Second
	// statusRoom is room for what the bus says about one request.
	statusRoom = 64
	// forgotten is when the bus drops a consumer that nobody asks anything.
	forgotten = 5 * time.Minute

	attachTimeout = 5 * time.Second
	// leaveTimeout is how long a source that is closed waits until the bus has
	// forgotten its consumer, which it does by itself in the end. An account that may
	// not ask for that hears no answer.
	leaveTimeout = time.Second
	ackPrefix    = "$JS.ACK."
)

// Missing counts the messages that were removed from the stream before they
// were read: aged out, purged or deleted.
type Missing struct {
	// Messages is how many positions are missing. With several partitions it
	// is an upper bound, since they may have been another's.
	Messages uint64
	// From and To are the first and last position of the latest such gap.
	From, To uint64
}

// Source reads messages in order. It is not for concurrent use.
type Source struct {
	bus    *Bus
	stream string
	filter string
	// carried matches what a division carried over into the partition, up to
	// the position through; "" for nothing.
	carried string
	through uint64
	// whole says that the filter takes every message of the stream, so that
	// positions must not jump.
	whole   bool
	last    uint64    // position of the last message handed out
	created time.Time // of the stream, when first seen
	mark    mark      // of the last message that Next returned
	missing Missing
	states  chan nats.Status

	feed  *feed    // nil when the source has to start (again)
	left  string   // the consumer of the feed before, "" if there is none to delete
	pause *backoff // between starts that brought nothing
}

// mark is how a message is known again: a stream that was rolled back and then
// filled anew has another one at its position.
type mark struct {
	position uint64 // 0 for none
	stored   time.Time
	digest   [sha256.Size]byte
}

func markOf(r *Raw) mark { return mark{r.Position, r.Stored, sha256.Sum256(r.Data)} }

// feed is one consumer on the bus with the subscription that it delivers to.
type feed struct {
	consumer string
	inbox    string
	sub      *nats.Subscription
	msgs     chan *nats.Msg
	held     *nats.Msg // taken from msgs, not yet handed out
	next     uint64    // the consumer sequence expected next
	left     int       // what the request under way may still bring; 0: none is
	request  []byte
}

// Source reads the partition's messages after the given position, 0 for all.
// The error is an ErrBeyondEnd if the position lies past the stream's end.
// Close the source when done.
func (b *Bus) Source(ctx context.Context, partition int, after uint64) (*Source, error) {
	if partition < 0 || partition >= partitions(b.setup) {
		return nil, fmt.Errorf("%w: %d of %d", ErrNoPartition, partition, partitions(b.setup))
	}
	s := &Source{filter: b.names.inAll(partition), whole: partitions(b.setup) == 1, last: max(after, b.layout.begins-1)}
	if b.layout.division > 0 {
		s.carried, s.through = b.names.carriedAll(b.layout.division, partition), b.layout.carried
	}
	return b.startSource(ctx, b.names.inStream(), s)
}

// Summaries reads what other partitions told a partition, and nothing else, after
// the given position. It may be used beside the partition's Source; what it says of
// missing messages means nothing. Close it when done.
func (b *Bus) Summaries(ctx context.Context, partition int, after uint64) (*Source, error) {
	if partition < 0 || partition >= partitions(b.setup) {
		return nil, fmt.Errorf("%w: %d of %d", ErrNoPartition, partition, partitions(b.setup))
	}
	s := &Source{filter: b.names.in(partition, Summary), last: max(after, b.layout.begins-1)}
	if b.layout.division > 0 {
		s.carried, s.through = b.names.carried(b.layout.division, partition, Summary), b.layout.carried
	}
	return b.startSource(ctx, b.names.inStream(), s)
}

func (b *Bus) newSource(ctx context.Context, stream, filter string, after uint64, whole bool) (*Source, error) {
	return b.startSource(ctx, stream, &Source{filter: filter, whole: whole, last: after})
}

// startSource starts a source that knows what it reads.
func (b *Bus) startSource(ctx context.Context, stream string, s *Source) (*Source, error) {
	s.bus, s.stream, s.pause = b, stream, newBackoff()
	s.states = b.nc.StatusChanged(nats.CONNECTED)
	if err := s.attach(ctx); err != nil {
		s.bus.nc.RemoveStatusListener(s.states)
		return nil, err
	}
	return s, nil
}

// Position is the position of the last message that Next returned, or that
// after which the source began.
func (s *Source) Position() uint64 { return s.last }

// Missing says what was removed from the stream before it could be read.
func (s *Source) Missing() Missing { return s.missing }

// Next appends messages to dst: it waits until there is at least one, then
// returns what is there, at most limit messages and about maxBytes of data (at
// least one message). It survives reconnects; the error is ctx's, or says
// that the stream can't be read on (ErrBeyondEnd, ErrStreamReplaced,
// ErrClosed), in which case dst has not grown. The messages are the caller's.
func (s *Source) Next(ctx context.Context, dst []Raw, limit, maxBytes int) ([]Raw, error) {
	start := len(dst)
	for {
		if s.feed == nil {
			if err := s.restart(ctx); err != nil {
				return dst, err
			}
		}
		dst = s.drain(dst, max(1, limit), maxBytes)
		if err := s.ask(); err != nil {
			return dst, err
		}
		if len(dst) > start {
			s.mark = markOf(&dst[len(dst)-1])
			return dst, nil
		}
		if s.feed == nil {
			continue
		}
		if err := s.wait(ctx); err != nil {
			return dst, err
		}
	}
}

// drain appends what has arrived.
func (s *Source) drain(dst []Raw, limit, maxBytes int) []Raw {
	size := 0
	for taken := 0; taken < limit && s.feed != nil; {
		msg := s.feed.take()
		if msg == nil {
			break
		}
		if taken > 0 && size+len(msg.Data) > maxBytes {
			s.feed.held = msg
			break
		}
		if raw, ok := s.accept(msg); ok {
			dst = append(dst, raw)
			taken++
			size += len(msg.Data)
		}
	}
	return dst
}

// take returns the next message that has arrived, nil if none has.
func (f *feed) take() *nats.Msg {
	if msg := f.held; msg != nil {
		f.held = nil
		return msg
	}
	select {
	case msg := <-f.msgs:
		return msg
	default:
		return nil
	}
}

// accept checks that msg is the one expected next. What the bus says about the
// request itself is told from messages by its lack of a reply subject: headers
// can't be trusted, a publisher may have set the same.
func (s *Source) accept(msg *nats.Msg) (Raw, bool) {
	if !strings.HasPrefix(msg.Reply, ackPrefix) {
		s.status(msg)
		return Raw{}, false
	}
	meta, err := msg.Metadata()
	if err != nil || meta.Consumer != s.feed.consumer || meta.Sequence.Consumer != s.feed.next ||
		meta.Sequence.Stream <= s.last {
		s.detach()
		return Raw{}, false
	}
	position := meta.Sequence.Stream
	if s.whole {
		s.gap(position)
	}
	s.feed.next++
	s.feed.left--
	s.last = position
	s.pause.tries = 0
	return Raw{
		Position: position,
		Stored:   s.bus.names.stored(msg.Subject, msg.Header, meta.Timestamp),
		Subject:  msg.Subject,
		Header:   msg.Header,
		Data:     msg.Data,
	}, true
}

// status takes in what the bus says about the request under way.
func (s *Source) status(msg *nats.Msg) {
	switch msg.Header.Get("Status") {
	case "100": // idle, but there
	case "404", "408":
		s.feed.left = 0
	case "409":
		text := strings.ToLower(msg.Header.Get("Description"))
		if strings.Contains(text, "batch completed") || strings.Contains(text, "exceeds maxbytes") {
			s.feed.left = 0
			return
		}
		s.detach()
	default:
		s.detach()
	}
}

// gap counts the positions between the last message and this one.
func (s *Source) gap(position uint64) {
	if position <= s.last+1 {
		return
	}
	missing := position - s.last - 1 - s.bus.layout.empty(s.last+1, position-1)
	if missing > 0 {
		s.missing.Messages += missing
		s.missing.From, s.missing.To = s.last+1, position-1
	}
}

// ask sends the next request if none is under way.
func (s *Source) ask() error {
	f := s.feed
	if f == nil || f.left > 0 {
		return nil
	}
	subject := "$JS.API.CONSUMER.MSG.NEXT." + s.stream + "." + f.consumer
	err := s.bus.nc.PublishRequest(subject, f.inbox, f.request)
	if errors.Is(err, nats.ErrConnectionClosed) || errors.Is(err, nats.ErrConnectionDraining) {
		return fmt.Errorf("reading the stream %s: %w", s.stream, mapped(err))
	}
	if err == nil {
		f.left = pullMessages
	} else {
		s.detach() // and try again from the start
	}
	return nil
}

// wait waits for a message, or for a reason to start again.
func (s *Source) wait(ctx context.Context) error {
	timer := time.NewTimer(silence)
	defer timer.Stop()
	select {
	case msg := <-s.feed.msgs:
		s.feed.held = msg
	case <-s.states: // back again after a break
		s.detach()
	case <-timer.C:
		s.detach()
	case <-s.bus.closed:
		return fmt.Errorf("reading the stream %s: %w", s.stream, ErrClosed)
	case <-ctx.Done():
		return ctx.Err()
	}
	return nil
}

// restart attaches again, after a pause if that has not helped before.
func (s *Source) restart(ctx context.Context) error {
	if s.pause.tries > 0 {
		if err := s.pause.wait(ctx); err != nil {
			return err
		}
	} else {
		s.pause.tries = 1
	}
	return s.attach(ctx)
}

// attach makes a consumer that goes on after the last message, trying until it
// succeeds, the stream proves to be unusable, or ctx ends.
func (s *Source) attach(ctx context.Context) error {
	wait := newBackoff()
	for {
		err := s.tryAttach(ctx)
		if err == nil {
			return nil
		}
		if errors.Is(err, ErrBeyondEnd) || errors.Is(err, ErrStreamReplaced) {
			return err
		}
		if errors.Is(err, ErrNotAllowed) && s.left != "" {
			err = nats.ErrTimeout // it was allowed before, and may be so again
		}
		if err := s.bus.again(ctx, wait, err); err != nil {
			return fmt.Errorf("reading the stream %s: %w", s.stream, err)
		}
	}
}

func (s *Source) tryAttach(ctx context.Context) error {
	ctx, cancel := context.WithTimeout(ctx, attachTimeout)
	defer cancel()
	if err := s.compare(ctx); err != nil {
		return err
	}
	f := &feed{
		consumer: "source-" + nuid.Next(),
		inbox:    s.bus.nc.NewInbox(),
		msgs:     make(chan *nats.Msg, pullMessages+statusRoom),
		next:     1,
	}
	before := s.bus.denied.Load()
	var err error
	f.request, err = json.Marshal(map[string]int64{
		"batch": pullMessages, "max_bytes": max(pullBytes, 2*s.bus.nc.MaxPayload()),
		"expires": int64(pullExpiry), "idle_heartbeat": int64(pullBeat),
	})
	if err != nil {
		return fmt.Errorf("encoding a request: %w", err)
	}
	filter, filters := s.filter, []string(nil)
	if s.last < s.through {
		filter, filters = "", []string{s.filter, s.carried}
	}
	_, err = s.bus.js.CreateConsumer(ctx, s.stream, jetstream.ConsumerConfig{
		Name:              f.consumer,
		DeliverPolicy:     jetstream.DeliverByStartSequencePolicy,
		OptStartSeq:       s.last + 1,
		AckPolicy:         jetstream.AckNonePolicy,
		MaxDeliver:        1,
		FilterSubject:     filter,
		FilterSubjects:    filters,
		InactiveThreshold: forgotten,
		Replicas:          1,
		MemoryStorage:     true,
	})
	if err != nil {
		return s.bus.deniedSince(before, err)
	}
	if err := s.forget(ctx); err != nil {
		s.bus.log.Debug().Err(err).Msg("starting to read again")
	}
	s.left = f.consumer
	f.sub, err = s.bus.nc.ChanSubscribe(f.inbox, f.msgs)
	if err != nil {
		return err
	}
	s.feed = f
	return nil
}

// compare checks that the stream is still the one that was read so far, and
// that it reaches at least as far.
func (s *Source) compare(ctx context.Context) error {
	id, err := s.bus.identity(ctx, s.stream)
	if err != nil {
		return err
	}
	if s.created.IsZero() {
		s.created = id.Created
	}
	if !id.Created.Equal(s.created) {
		return fmt.Errorf("%w: %s was made at %s, what was read so far at %s", ErrStreamReplaced,
			s.stream, id.Created.Format(time.RFC3339), s.created.Format(time.RFC3339))
	}
	if s.last > id.Last {
		return &BeyondEndError{Stream: s.stream, After: s.last, End: id.Last}
	}
	if err := s.recognise(ctx, id.First); err != nil {
		return err
	}
	if !s.whole && id.First > s.last+1 {
		s.gap(id.First)
		s.last = id.First - 1
	}
	return nil
}

// recognise checks that the last message that Next returned still stands where
// it did, unless it was removed.
func (s *Source) recognise(ctx context.Context, first uint64) error {
	if s.mark.position < max(first, 1) {
		return nil
	}
	have, err := s.bus.at(ctx, s.stream, s.mark.position)
	if errors.Is(err, ErrNoMessage) {
		return nil
	}
	if err != nil {
		return err
	}
	if !have.Stored.Equal(s.mark.stored) || sha256.Sum256(have.Data) != s.mark.digest {
		return fmt.Errorf("%w: at position %d of %s stands another message than was read, stored at %s instead of %s",
			ErrStreamReplaced, s.mark.position, s.stream, have.Stored.Format(time.RFC3339Nano), s.mark.stored.Format(time.RFC3339Nano))
	}
	return nil
}

// forget deletes the consumer that was left. If that fails, because the bus is
// away or has forgotten it already, the bus drops it after a while by itself.
func (s *Source) forget(ctx context.Context) error {
	if s.left == "" {
		return nil
	}
	err := s.bus.js.DeleteConsumer(ctx, s.stream, s.left)
	s.left = ""
	if err != nil && !errors.Is(err, jetstream.ErrConsumerNotFound) {
		return fmt.Errorf("leaving the stream %s: %w", s.stream, mapped(err))
	}
	return nil
}

// detach gives the feed up; the next start goes on after the last message.
func (s *Source) detach() {
	if err := s.feed.sub.Unsubscribe(); err != nil {
		s.bus.log.Debug().Err(err).Msg("leaving a subscription")
	}
	s.feed = nil
}

// Close ends the source.
func (s *Source) Close() error {
	s.bus.nc.RemoveStatusListener(s.states)
	if s.bus.nc.IsClosed() {
		return nil
	}
	if s.feed != nil {
		s.detach()
	}
	if !s.bus.nc.IsConnected() {
		return nil // the bus forgets the consumer by itself
	}
	ctx, cancel := context.WithTimeout(context.Background(), leaveTimeout)
	defer cancel()
	err := s.forget(ctx)
	if passing(err) {
		s.bus.log.Debug().Err(err).Msg("closing a source while the bus is away")
		return nil
	}
	return err
}
