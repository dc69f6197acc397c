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

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/synadia-io/orbit.go/jetstreamext"
)

// ErrTrimmed is returned by Divide when the stream no longer holds all that
// the present partitions were told.
var ErrTrimmed = errors.New("the stream no longer holds everything from its beginning")

// Division carries the messages of the input stream over into another number
// of partitions. They are published again, behind those that are there, on
// subjects of their own, and say when they were first stored. While that goes
// on nobody can publish: the subjects of the partitions, old and new, are
// closed, but for what the old ones still have to tell each other until Begin.
// Finish opens the new ones, at which moment the new partitions begin; GiveUp
// takes back what was carried and opens the old ones. In between a process may
// die: Divide goes on where it stood.
type Division struct {
	bus      *Bus
	into     int
	division uint64
	begins   uint64 // the first position of what is carried over
	last     uint64 // the position of the last message that is stored
}

// Divide begins to divide the stream, or goes on with a division that broke
// off. The bus must have been opened with ToDivide, and nobody may be reading:
// the caller sees to that. The account of a remote bus must be allowed to
// change the stream.
//
// The error is an ErrTrimmed if messages were removed from the stream: what is
// gone can't be carried over. It is an ErrDividing if a division into another
// number is under way.
func (b *Bus) Divide(ctx context.Context, into int) (*Division, error) {
	d := &Division{bus: b, into: into, division: b.layout.division + 1}
	info, err := d.info(ctx)
	if err != nil {
		return nil, err
	}
	if under := info.Config.Metadata[metaDividing]; under != "" && under != strconv.Itoa(into) {
		return nil, fmt.Errorf("%w into %s partitions: go on with that, or give it up with --give-up", ErrDividing, under)
	}
	if err := b.whole(&info.State); err != nil {
		return nil, err
	}
	if info.Config.Metadata[metaDividing] == "" {
		info, err = d.change(ctx, info, func(c *jetstream.StreamConfig) {
			c.Subjects = []string{b.names.carriedIn(d.division) + ">", b.names.summaries()}
			c.Metadata[metaDividing] = strconv.Itoa(into)
		})
		if err != nil {
			return nil, err
		}
	}
	return d, d.stand(info)
}

// stand notes where what is carried over begins, if that is known, and ends.
func (d *Division) stand(info *jetstream.StreamInfo) (err error) {
	first := info.Config.Metadata[metaDividingFirst]
	if first == "" {
		return nil
	}
	if d.begins, err = strconv.ParseUint(first, 10, 64); err != nil {
		return fmt.Errorf("%w: its metadata can't be read: %w", ErrStreamDiffers, err)
	}
	d.last = info.State.LastSeq
	return nil
}

// Begun reports whether the old partitions have ended: whatever they had to tell
// each other is in the stream.
func (d *Division) Begun() bool { return d.begins > 0 }

// Begin ends the old partitions where the stream ends, unless that was done: what
// is carried over begins there.
func (d *Division) Begin(ctx context.Context) error {
	if d.Begun() {
		return nil
	}
	info, err := d.info(ctx)
	if err != nil {
		return err
	}
	info, err = d.change(ctx, info, func(c *jetstream.StreamConfig) {
		c.Subjects = []string{d.bus.names.carriedIn(d.division) + ">"}
	})
	if err != nil {
		return err
	}
	// Now the end stands fast.
	first := strconv.FormatUint(info.State.LastSeq+1, 10)
	info, err = d.change(ctx, info, func(c *jetstream.StreamConfig) { c.Metadata[metaDividingFirst] = first })
	if err != nil {
		return err
	}
	return d.stand(info)
}

// whole reports whether the stream still has every message of its partitions.
func (b *Bus) whole(state *jetstream.StreamState) error {
	if state.FirstSeq > b.layout.begins {
		return fmt.Errorf("%w: it begins at position %d, and what came before was trimmed or has expired", ErrTrimmed, state.FirstSeq)
	}
	empty := b.layout.empty(state.FirstSeq, state.LastSeq)
	if gone := uint64(state.NumDeleted); gone > empty {
		return fmt.Errorf("%w: %d messages were deleted from within it", ErrTrimmed, gone-empty)
	}
	return nil
}

func (d *Division) info(ctx context.Context) (info *jetstream.StreamInfo, err error) {
	err = d.bus.patiently(ctx, func(ctx context.Context) error {
		s, err := d.bus.js.Stream(ctx, d.bus.names.inStream())
		if err != nil {
			return fmt.Errorf("asking for the stream %s: %w", d.bus.names.inStream(), mapped(err))
		}
		info = s.CachedInfo()
		return nil
	})
	return info, err
}

// change changes the stream's settings, and says how it stands then.
func (d *Division) change(ctx context.Context, info *jetstream.StreamInfo, edit func(*jetstream.StreamConfig)) (*jetstream.StreamInfo, error) {
	next := info.Config
	next.Metadata = maps.Clone(next.Metadata)
	maps.DeleteFunc(next.Metadata, func(key, _ string) bool { return strings.HasPrefix(key, "_nats.") })
	edit(&next)
	err := d.bus.patiently(ctx, func(ctx context.Context) error {
		if _, err := d.bus.js.UpdateStream(ctx, next); err != nil {
			return fmt.Errorf("changing the stream %s: %w", next.Name, mapped(err))
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	return d.info(ctx)
}

// Number counts the divisions of the stream, this one included.
func (d *Division) Number() uint64 { return d.division }

// Before is the last position of the old partitions.
func (d *Division) Before() uint64 { return d.begins - 1 }

// Carried is how many messages were carried over so far, without those that the
// new partitions told each other.
func (d *Division) Carried(ctx context.Context) (int, error) {
	told := uint64(0)
	err := d.bus.patiently(ctx, func(ctx context.Context) error {
		s, err := d.bus.js.Stream(ctx, d.bus.names.inStream())
		if err != nil {
			return fmt.Errorf("asking for the stream %s: %w", d.bus.names.inStream(), mapped(err))
		}
		info, err := s.Info(ctx, jetstream.WithSubjectFilter(d.bus.names.carriedIn(d.division)+"*."+Summary.String()))
		if err != nil {
			return fmt.Errorf("asking what is in the stream %s: %w", d.bus.names.inStream(), mapped(err))
		}
		told = 0
		for _, n := range info.State.Subjects {
			told += n
		}
		return nil
	})
	return int(d.last + 1 - d.begins - told), err
}

// Carry stores messages in order, each exactly once, as if they had been stored
// at the times given. Partitions are the new ones.
func (d *Division) Carry(ctx context.Context, msgs []Outgoing, stored []time.Time) error {
	for done := 0; done < len(msgs); {
		chunk, size := []*nats.Msg(nil), 0
		for i := done; i < len(msgs) && len(chunk) < batchMessages; i++ {
			msg, err := d.message(&msgs[i], stored[i])
			if err != nil {
				return err
			}
			if size += msg.Size(); len(chunk) > 0 && size > batchBytes {
				break
			}
			chunk = append(chunk, msg)
		}
		if err := d.carry(ctx, chunk); err != nil {
			return fmt.Errorf("carrying messages over: %w", err)
		}
		done += len(chunk)
	}
	return nil
}

func (d *Division) message(out *Outgoing, stored time.Time) (*nats.Msg, error) {
	if out.Partition < 0 || out.Partition >= d.into {
		return nil, fmt.Errorf("%w: %d of %d", ErrNoPartition, out.Partition, d.into)
	}
	header := nats.Header{}
	for key, values := range out.Header {
		// What was a command to the bus when it was first published is none now.
		if !strings.EqualFold(key, StoredHeader) && !strings.HasPrefix(strings.ToLower(key), "nats-") {
			header[key] = values
		}
	}
	header.Set(StoredHeader, stored.UTC().Format(time.RFC3339Nano))
	return &nats.Msg{Subject: d.bus.names.carried(d.division, out.Partition, out.Kind), Header: header, Data: out.Data}, nil
}

// carry stores a chunk. An acknowledgement that was lost is made good by
// looking at how far the stream reaches: nobody else publishes into it.
func (d *Division) carry(ctx context.Context, chunk []*nats.Msg) error {
	wait := newBackoff()
	for start := d.last; ; {
		rest := chunk[d.last-start:]
		if len(rest) == 0 {
			return nil
		}
		try, cancel := context.WithTimeout(ctx, tryTimeout)
		err := d.try(try, rest)
		cancel()
		if err == nil {
			d.last += uint64(len(rest))
			continue
		}
		info, infoErr := d.info(ctx)
		if infoErr != nil {
			return errors.Join(err, infoErr)
		}
		end := info.State.LastSeq
		if end < start || end > start+uint64(len(chunk)) {
			return fmt.Errorf("the stream ends at position %d, not between %d and %d: somebody else changes it", end, start, start+uint64(len(chunk)))
		}
		moved := end > d.last
		d.last = end
		if code := codeOf(err); moved || code == codeBatchOff || code == jetstream.JSErrCodeStreamWrongLastSequence {
			d.bus.atomic = d.bus.atomic && code != codeBatchOff
			continue
		}
		if err := d.bus.again(ctx, wait, err); err != nil {
			return err
		}
	}
}

// try publishes messages, each only in its place.
func (d *Division) try(ctx context.Context, msgs []*nats.Msg) error {
	for i, msg := range msgs {
		msg.Header.Del(jetstream.ExpectedLastSeqHeader)
		if i == 0 || !d.bus.atomic {
			msg.Header.Set(jetstream.ExpectedLastSeqHeader, strconv.FormatUint(d.last+uint64(i), 10))
		}
	}
	if len(msgs) == 1 || !d.bus.atomic {
		for _, msg := range plain(msgs) {
			if _, err := d.bus.js.PublishMsg(ctx, msg, jetstream.WithRetryAttempts(0)); err != nil {
				return err
			}
		}
		return nil
	}
	_, err := jetstreamext.PublishMsgBatch(ctx, d.bus.js, msgs, atOnce)
	return err
}

// Source reads what was carried over into a new partition, from the position
// after on.
func (d *Division) Source(ctx context.Context, partition int, after uint64) (*Source, error) {
	if partition < 0 || partition >= d.into {
		return nil, fmt.Errorf("%w: %d of %d", ErrNoPartition, partition, d.into)
	}
	return d.bus.newSource(ctx, d.bus.names.inStream(), d.bus.names.carriedAll(d.division, partition), max(after, d.begins-1), false)
}

// Summaries reads what new partitions told a new partition, and nothing else, from
// the position after on.
func (d *Division) Summaries(ctx context.Context, partition int, after uint64) (*Source, error) {
	if partition < 0 || partition >= d.into {
		return nil, fmt.Errorf("%w: %d of %d", ErrNoPartition, partition, d.into)
	}
	return d.bus.newSource(ctx, d.bus.names.inStream(), d.bus.names.carried(d.division, partition, Summary), max(after, d.begins-1), false)
}

// EndOf returns the position of the last message carried over into a new
// partition, 0 if there is none.
func (d *Division) EndOf(ctx context.Context, partition int) (uint64, error) {
	raw, _, err := d.bus.last(ctx, d.bus.names.carriedAll(d.division, partition))
	return raw.Position, err
}

// LastSummary returns the position of the last message that new partitions told a
// new partition, 0 if there is none.
func (d *Division) LastSummary(ctx context.Context, partition int) (uint64, error) {
	raw, _, err := d.bus.last(ctx, d.bus.names.carried(d.division, partition, Summary))
	return raw.Position, err
}

// Finish puts the new partitions in the place of the old ones, in one change of
// the stream.
func (d *Division) Finish(ctx context.Context) error {
	info, err := d.info(ctx)
	if err != nil {
		return err
	}
	_, err = d.change(ctx, info, func(c *jetstream.StreamConfig) {
		c.Subjects = nil
		for p := range d.into {
			c.Subjects = append(c.Subjects, d.bus.names.inAll(p))
		}
		delete(c.Metadata, metaDividing)
		delete(c.Metadata, metaDividingFirst)
		c.Metadata[metaPartitions] = strconv.Itoa(d.into)
		c.Metadata[metaDivision] = strconv.FormatUint(d.division, 10)
		c.Metadata[metaBegins] = strconv.FormatUint(d.begins, 10)
		c.Metadata[metaCarried] = strconv.FormatUint(info.State.LastSeq, 10)
	})
	return err
}

// GiveUpDivision removes what a division that broke off has carried over, and
// opens the old partitions again. It does nothing if none is under way.
func (b *Bus) GiveUpDivision(ctx context.Context) (removed int, err error) {
	d := &Division{bus: b, division: b.layout.division + 1}
	info, err := d.info(ctx)
	if err != nil || info.Config.Metadata[metaDividing] == "" {
		return 0, err
	}
	first := info.Config.Metadata[metaDividingFirst]
	hole := ""
	if first != "" {
		if d.begins, err = strconv.ParseUint(first, 10, 64); err != nil {
			return 0, fmt.Errorf("%w: its metadata can't be read: %w", ErrStreamDiffers, err)
		}
		if info.State.LastSeq >= d.begins {
			removed = int(info.State.LastSeq + 1 - d.begins)
			hole = fmt.Sprintf("%d-%d", d.begins, info.State.LastSeq)
		}
	}
	err = b.patiently(ctx, func(ctx context.Context) error {
		s, err := b.js.Stream(ctx, b.names.inStream())
		if err != nil {
			return err
		}
		return s.Purge(ctx, jetstream.WithPurgeSubject(b.names.carriedIn(d.division)+">"))
	})
	if err != nil {
		return 0, fmt.Errorf("removing what was carried over: %w", mapped(err))
	}
	_, err = d.change(ctx, info, func(c *jetstream.StreamConfig) {
		c.Subjects = slices.Clone(b.inConfig().Subjects)
		delete(c.Metadata, metaDividing)
		delete(c.Metadata, metaDividingFirst)
		if holes := strings.Fields(c.Metadata[metaHoles]); hole != "" && !slices.Contains(holes, hole) {
			c.Metadata[metaHoles] = strings.Join(append(holes, hole), " ")
		}
	})
	return removed, err
}

// PartitionsOf asks the bus into how many partitions the input stream is
// divided, whatever the set-up says, and into how many a division that is under
// way divides it; 0 for none.
func PartitionsOf(ctx context.Context, b *Bus) (now, dividing int, err error) {
	d := &Division{bus: b}
	info, err := d.info(ctx)
	if err != nil {
		return 0, 0, err
	}
	if now, err = strconv.Atoi(info.Config.Metadata[metaPartitions]); err != nil {
		return 0, 0, fmt.Errorf("%w: its metadata can't be read: %w", ErrStreamDiffers, err)
	}
	if text := info.Config.Metadata[metaDividing]; text != "" {
		dividing, err = strconv.Atoi(text)
	}
	return now, dividing, err
}
