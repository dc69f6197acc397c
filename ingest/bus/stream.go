package bus

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"slices"
	"strconv"
	"strings"
	"time"

	"github.com/nats-io/nats.go/jetstream"
)

// Keys and values of the streams' metadata.
const (
	metaFormat     = "tailbell-format"
	metaPartitions = "tailbell-partitions"
	metaKeyParts   = "tailbell-key-parts"
	streamFormat   = "1"
)

// inConfig is the input stream as the set-up wants it.
func (b *Bus) inConfig() jetstream.StreamConfig {
	var subjects []string
	for p := range partitions(b.setup) {
		subjects = append(subjects, b.names.inAll(p))
	}
	age := b.setup.Bus.MaxAge
	repeats := inRepeats
	if age > 0 {
		repeats = min(repeats, age)
	}
	return jetstream.StreamConfig{
		Name:               b.names.inStream(),
		Description:        "what is monitored: observations, acts, settings, ticks",
		Subjects:           subjects,
		Retention:          jetstream.LimitsPolicy,
		Discard:            jetstream.DiscardNew,
		Storage:            jetstream.FileStorage,
		MaxBytes:           maxBytes(b.setup),
		MaxAge:             age,
		MaxMsgSize:         int32(min(maxStored(b.setup), 1<<30)),
		Replicas:           max(1, b.setup.Bus.Replicas),
		Duplicates:         repeats,
		AllowDirect:        false, // a direct answer may come from a replica that lags
		AllowAtomicPublish: true,
		Metadata: map[string]string{
			metaFormat:     streamFormat,
			metaPartitions: strconv.Itoa(partitions(b.setup)),
			metaKeyParts:   strconv.Itoa(keyParts(b.setup)),
		},
	}
}

// alertConfig is the stream of alerts as the set-up wants it.
func (b *Bus) alertConfig() jetstream.StreamConfig {
	return jetstream.StreamConfig{
		Name:        b.names.alertStream(),
		Description: "what was found: the steps of alerts, as CloudEvents",
		Subjects:    []string{b.names.alertAll()},
		Retention:   jetstream.LimitsPolicy,
		Discard:     jetstream.DiscardNew,
		Storage:     jetstream.FileStorage,
		MaxBytes:    alertsMaxBytes,
		MaxAge:      alertsMaxAge,
		Replicas:    max(1, b.setup.Bus.Replicas),
		Duplicates:  alertsRepeats,
		Metadata:    map[string]string{metaFormat: streamFormat},
	}
}

// ensureStreams makes missing streams and compares those that exist. Limits of
// our own server follow the set-up; those of a remote one are its keeper's.
func (b *Bus) ensureStreams(ctx context.Context, own bool) error {
	return b.patiently(ctx, func(ctx context.Context) error { return b.seeToStreams(ctx, own) })
}

// fewTries is how often a question is asked of a bus that does not answer, as
// one that has just come up or was cut off for a moment.
const fewTries = 5

// patiently asks again, a few times, while that can help.
func (b *Bus) patiently(ctx context.Context, ask func(context.Context) error) error {
	wait := newBackoff()
	for n := 1; ; n++ {
		before := b.denied.Load()
		try, cancel := context.WithTimeout(ctx, tryTimeout)
		err := b.deniedSince(before, ask(try))
		cancel()
		if err == nil || !passing(err) || n == fewTries || ctx.Err() != nil {
			return err
		}
		if wait.wait(ctx) != nil {
			return err
		}
	}
}

func (b *Bus) seeToStreams(ctx context.Context, own bool) error {
	b.notes = nil
	for _, want := range []jetstream.StreamConfig{b.inConfig(), b.alertConfig()} {
		have, err := b.ensureStream(ctx, want)
		if err != nil {
			return err
		}
		if err := b.accept(want, have); err != nil {
			return err
		}
		if own && limitsDiffer(want, have) {
			have.MaxBytes, have.MaxAge, have.MaxMsgSize = want.MaxBytes, want.MaxAge, want.MaxMsgSize
			have.Duplicates = want.Duplicates
			if _, err := b.js.UpdateStream(ctx, have); err != nil {
				return fmt.Errorf("changing the limits of the stream %s: %w", want.Name, err)
			}
			continue
		}
		b.notes = append(b.notes, harmless(want, have)...)
	}
	return nil
}

// checkStreams compares the streams of a running daemon.
func (b *Bus) checkStreams(ctx context.Context) error {
	for _, want := range []jetstream.StreamConfig{b.inConfig(), b.alertConfig()} {
		s, err := b.js.Stream(ctx, want.Name)
		if err != nil {
			return fmt.Errorf("looking for the stream %s: %w", want.Name, err)
		}
		if err := b.accept(want, s.CachedInfo().Config); err != nil {
			return err
		}
	}
	return nil
}

// ensureStream returns the settings of the stream, which it makes if missing.
func (b *Bus) ensureStream(ctx context.Context, want jetstream.StreamConfig) (jetstream.StreamConfig, error) {
	s, err := b.js.Stream(ctx, want.Name)
	if errors.Is(err, jetstream.ErrStreamNotFound) {
		s, err = b.js.CreateStream(ctx, want)
		if errors.Is(err, jetstream.ErrStreamNameAlreadyInUse) {
			s, err = b.js.Stream(ctx, want.Name) // another process was faster
		}
	}
	if err != nil {
		return want, fmt.Errorf("seeing to the stream %s: %w", want.Name, err)
	}
	return s.CachedInfo().Config, nil
}

// accept decides whether the existing stream can be used.
func (b *Bus) accept(want, have jetstream.StreamConfig) error {
	if f := have.Metadata[metaFormat]; f != streamFormat {
		if f == "" {
			return fmt.Errorf("%w: the stream %s exists but was not made by Tailbell: "+
				"give the deployment another name, or remove the stream", ErrStreamDiffers, want.Name)
		}
		return fmt.Errorf("%w: the stream %s has format %s, this program knows %s: "+
			"use the program that made it", ErrStreamDiffers, want.Name, f, streamFormat)
	}
	if want.Name == b.names.inStream() {
		var err error
		if b.layout, err = layoutOf(have.Metadata); err != nil {
			return err
		}
		if into := have.Metadata[metaDividing]; into != "" && !b.divides {
			return fmt.Errorf("%w: the stream %s is being divided into %s partitions: "+
				"go on with \"tailbell partitions divide --into %s\", or give it up with --give-up",
				ErrDividing, want.Name, into, into)
		}
	}
	for _, key := range []string{metaPartitions, metaKeyParts} {
		if have.Metadata[key] != want.Metadata[key] && (key != metaPartitions || !b.divides) {
			return fmt.Errorf("%w: the stream %s has %s = %s, the set-up wants %s: "+
				"change the set-up back, use \"tailbell partitions divide\", or give the deployment another name",
				ErrPartitionsDiffer, want.Name, strings.TrimPrefix(key, "tailbell-"),
				have.Metadata[key], want.Metadata[key])
		}
	}
	if b.divides {
		want.Subjects = have.Subjects
	}
	if faults := harmful(want, have); len(faults) > 0 {
		return fmt.Errorf("%w: the stream %s has %s: change it on the bus, "+
			"or give the deployment another name", ErrStreamDiffers, want.Name, strings.Join(faults, "; "))
	}
	if want.Name == b.names.inStream() {
		b.atomic = have.AllowAtomicPublish
	}
	return nil
}

// harmful names the settings that would lose, change or hide messages.
func harmful(want, have jetstream.StreamConfig) []string {
	var faults []string
	add := func(bad bool, format string, args ...any) {
		if bad {
			faults = append(faults, fmt.Sprintf(format, args...))
		}
	}
	mine, theirs := slices.Sorted(slices.Values(want.Subjects)), slices.Sorted(slices.Values(have.Subjects))
	add(!slices.Equal(mine, theirs), "subjects %v instead of %v", theirs, mine)
	add(have.Retention != want.Retention, "retention %s instead of %s", have.Retention, want.Retention)
	add(have.Discard != want.Discard, "discard %s instead of %s (old messages would vanish unread)",
		have.Discard, want.Discard)
	add(have.Storage != want.Storage, "storage in %s instead of %s", have.Storage, want.Storage)
	add(have.MaxMsgsPerSubject > 0, "a limit of %d messages a subject", have.MaxMsgsPerSubject)
	add(have.NoAck, "acknowledgements switched off")
	add(have.Sealed, "been sealed")
	add(have.Mirror != nil, "a mirror's role")
	add(len(have.Sources) > 0, "other streams as sources")
	add(have.SubjectTransform != nil, "a subject transform")
	add(have.PersistMode == jetstream.AsyncPersistMode,
		"asynchronous persistence (acknowledged messages are lost when the server dies)")
	return faults
}

// limitsDiffer reports whether limits differ that the set-up decides.
func limitsDiffer(want, have jetstream.StreamConfig) bool {
	return have.MaxBytes != want.MaxBytes || have.MaxAge != want.MaxAge ||
		wantSize(want) != wantSize(have) || have.Duplicates != want.Duplicates
}

// wantSize is the limit of a message; the server writes -1 for none.
func wantSize(c jetstream.StreamConfig) int32 {
	if c.MaxMsgSize <= 0 {
		return -1
	}
	return c.MaxMsgSize
}

// harmless names settings that differ, for the record.
func harmless(want, have jetstream.StreamConfig) []string {
	mine, theirs := harmlessSettings(want), harmlessSettings(have)
	var notes []string
	for _, key := range slices.Sorted(maps.Keys(mine)) {
		if mine[key] != theirs[key] {
			notes = append(notes, fmt.Sprintf("the stream %s has %s = %s, the set-up says %s",
				want.Name, key, theirs[key], mine[key]))
		}
	}
	return notes
}

func harmlessSettings(c jetstream.StreamConfig) map[string]string {
	return map[string]string{
		"max bytes":        strconv.FormatInt(c.MaxBytes, 10),
		"max age":          c.MaxAge.String(),
		"max message size": strconv.Itoa(int(wantSize(c))),
		"replicas":         strconv.Itoa(max(1, c.Replicas)),
		"atomic batches":   strconv.FormatBool(c.AllowAtomicPublish),
		"duplicate window": c.Duplicates.String(),
	}
}

// Identity says which stream this is and what it holds. A stream that was made
// anew has another creation time, one that lost its tail an earlier end.
type Identity struct {
	Stream  string
	Created time.Time
	// First and Last are the sequences of the first and last message; of an
	// empty stream First is Last + 1. In a stream that was divided First lies
	// within what its present partitions have.
	First, Last uint64
}

// Identity asks the bus for the identity of the input stream.
func (b *Bus) Identity(ctx context.Context) (Identity, error) {
	var id Identity
	err := b.patiently(ctx, func(ctx context.Context) (err error) {
		id, err = b.identity(ctx, b.names.inStream())
		return err
	})
	return id, err
}

func (b *Bus) identity(ctx context.Context, stream string) (Identity, error) {
	s, err := b.js.Stream(ctx, stream)
	if err != nil {
		return Identity{}, fmt.Errorf("asking for the stream %s: %w", stream, mapped(err))
	}
	info := s.CachedInfo()
	id := Identity{
		Stream:  stream,
		Created: info.Created.UTC(),
		First:   info.State.FirstSeq,
		Last:    info.State.LastSeq,
	}
	if stream == b.names.inStream() {
		id.First = max(id.First, b.layout.begins)
	}
	if info.State.Msgs == 0 {
		id.First = id.Last + 1
	}
	return id, nil
}

// End returns the position of the last message of the input stream now, 0 if
// it has had none.
func (b *Bus) End(ctx context.Context) (uint64, error) {
	id, err := b.Identity(ctx)
	return id.Last, err
}

// EndOf returns the position of the last message of the partition that the
// stream holds now, 0 if it holds none.
func (b *Bus) EndOf(ctx context.Context, partition int) (uint64, error) {
	raw, _, err := b.lastIn(ctx, b.names.inAll(partition), b.names.carriedAll(b.layout.division, partition))
	return raw.Position, err
}

// LastSummary returns the position of the last message that other partitions told
// the partition, 0 if the stream holds none.
func (b *Bus) LastSummary(ctx context.Context, partition int) (uint64, error) {
	raw, _, err := b.lastIn(ctx, b.names.in(partition, Summary), b.names.carried(b.layout.division, partition, Summary))
	return raw.Position, err
}

// At returns the message at a position of the input stream. The error is an
// ErrNoMessage if there is none.
func (b *Bus) At(ctx context.Context, position uint64) (Raw, error) {
	var raw Raw
	err := b.patiently(ctx, func(ctx context.Context) (err error) {
		raw, err = b.at(ctx, b.names.inStream(), position)
		return err
	})
	return raw, err
}

func (b *Bus) at(ctx context.Context, stream string, position uint64) (Raw, error) {
	s, err := b.js.Stream(ctx, stream)
	if err != nil {
		return Raw{}, fmt.Errorf("asking for the stream %s: %w", stream, mapped(err))
	}
	msg, err := s.GetMsg(ctx, position)
	if errors.Is(err, jetstream.ErrMsgNotFound) {
		return Raw{}, fmt.Errorf("%w: %d of %s", ErrNoMessage, position, stream)
	}
	if err != nil {
		return Raw{}, fmt.Errorf("reading message %d: %w", position, mapped(err))
	}
	return b.rawOf(msg), nil
}

// LastSetting returns the partition's last setting; found is false if the
// stream holds none.
func (b *Bus) LastSetting(ctx context.Context, partition int) (raw Raw, found bool, err error) {
	return b.lastIn(ctx, b.names.in(partition, Setting), b.names.carried(b.layout.division, partition, Setting))
}

// lastIn returns the last message of the present partitions on a subject, or
// if there is none the last one that a division carried over.
func (b *Bus) lastIn(ctx context.Context, subject, carried string) (raw Raw, found bool, err error) {
	raw, found, err = b.last(ctx, subject)
	if b.layout.division == 0 || err != nil || found && raw.Position >= b.layout.begins {
		return raw, found, err
	}
	return b.last(ctx, carried)
}

// last returns the last message on a subject of the input stream.
func (b *Bus) last(ctx context.Context, subject string) (raw Raw, found bool, err error) {
	err = b.patiently(ctx, func(ctx context.Context) error {
		raw, found, err = b.lastOf(ctx, subject)
		return err
	})
	return raw, found, err
}

func (b *Bus) lastOf(ctx context.Context, subject string) (Raw, bool, error) {
	s, err := b.js.Stream(ctx, b.names.inStream())
	if err != nil {
		return Raw{}, false, fmt.Errorf("asking for the stream %s: %w", b.names.inStream(), mapped(err))
	}
	msg, err := s.GetLastMsgForSubject(ctx, subject)
	if errors.Is(err, jetstream.ErrMsgNotFound) {
		return Raw{}, false, nil
	}
	if err != nil {
		return Raw{}, false, fmt.Errorf("reading the last message on %s: %w", subject, mapped(err))
	}
	return b.rawOf(msg), true, nil
}
