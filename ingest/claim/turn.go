package claim

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"hash/fnv"
	"maps"
	"slices"
	"time"

	"tailbell/ingest/bus"
)

// keepPresence is how many spans the bus keeps the entry of a member that is no
// longer there.
const keepPresence = 20

// renew renews the own claims and the member's presence where that is due. b is
// nil if the board could not be read.
func (k *Keeper) renew(ctx context.Context, b *board) error {
	now := k.o.Now()
	var puts []bus.Put
	var of []*held
	var numbers []int
	own := k.own()
	for _, n := range k.owned() {
		h := own[n]
		if !h.lapsed && now >= h.sent+k.o.Span {
			h.lapsed = true
		}
		if now < h.sent+k.o.Span/3 {
			continue
		}
		k.mark(n, h)
		puts = append(puts, put(keyOf(n), h.Holding, h.revision, 0))
		of, numbers = append(of, h), append(numbers, n)
	}
	if b != nil {
		if e, there := b.members[k.name]; there {
			k.presence.revision = max(k.presence.revision, e.revision)
		} else {
			k.presence.revision = 0
		}
	}
	if now >= k.presence.sent+k.o.Span/3 {
		puts = append(puts, k.present())
	}
	if len(puts) == 0 {
		return nil
	}
	var errs []error
	for i, o := range k.o.Board.PutAll(ctx, puts) {
		switch {
		case errors.Is(o.Err, ErrConflict): // what the board says next decides
		case o.Err != nil:
			errs = append(errs, o.Err)
		case i == len(of):
			k.presence.revision, k.presence.sent = o.Revision, now
		default:
			k.renewed(numbers[i], of[i], o.Revision, now)
		}
	}
	return errors.Join(errs...)
}

// present is what says that the member is there.
func (k *Keeper) present() bus.Put {
	p := Presence{Digest: k.o.Digest, Leaving: k.presence.leaving}
	return put(memberKey+k.name, p, k.presence.revision, max(10*time.Second, keepPresence*k.o.Span))
}

// ErrConflict is the bus's.
var ErrConflict = bus.ErrConflict

// mark takes in how far a partition has come.
func (k *Keeper) mark(n int, h *held) {
	if m, ok := k.o.Marks(n); ok {
		h.Position, h.Told, h.Origin, h.Stored = m.Position, m.Told, m.Origin, h.Epoch
	}
}

func (k *Keeper) renewed(n int, h *held, revision uint64, sent time.Duration) {
	k.mu.Lock()
	h.revision, h.sent = revision, sent
	again := h.lapsed
	h.lapsed = false
	k.mu.Unlock()
	if again {
		k.o.Tell(Event{Kind: Renewed, Partition: n})
	}
}

// inForce reports whether the member's set-up is the one in force, and makes it
// so if nobody lives who owns anything under another.
func (k *Keeper) inForce(ctx context.Context, b *board) (bool, error) {
	if b.setting.revision > 0 && b.setting.setting.Digest == k.o.Digest {
		k.wait("")
		return true, nil
	}
	if own := k.owned(); len(own) > 0 { // taken under a set-up that is in force no more
		err := k.release(ctx, own)
		for _, n := range own {
			k.o.Tell(Event{Kind: Lost, Partition: n, Why: "another set-up is in force"})
		}
		if err != nil {
			return false, err
		}
	}
	for _, n := range slices.Sorted(maps.Keys(b.partitions)) {
		e := b.partitions[n]
		if k.taken(&e) && e.holding.Digest != k.o.Digest {
			k.wait(fmt.Sprintf("the member %s owns partition %d under another set-up (%.12s): this one (%.12s) comes into force when no process runs that one any more",
				e.holding.Owner, e.partition, e.holding.Digest, k.o.Digest))
			return false, nil
		}
	}
	o := k.o.Board.PutAll(ctx, []bus.Put{put(settingKey, settingInForce{k.o.Digest}, b.setting.revision, 0)})[0]
	if errors.Is(o.Err, ErrConflict) {
		return false, nil // the next turn sees who was faster
	}
	if o.Err == nil {
		k.wait("")
	}
	return o.Err == nil, o.Err
}

// wait notes why the member takes nothing, "" if it does, and tells of it once.
func (k *Keeper) wait(why string) {
	k.mu.Lock()
	before := k.mu.waits
	k.mu.waits = why
	k.mu.Unlock()
	if why != "" && before == "" {
		k.o.Tell(Event{Kind: Waiting, Why: why})
	}
}

// takeAll takes every partition for a member that works alone, in order: of two
// that start at once, only one gets the first.
func (k *Keeper) takeAll(ctx context.Context, b *board) error {
	for n := range k.o.Partitions {
		if k.Owns(n) {
			continue
		}
		if e, there := b.partitions[n]; there && k.taken(&e) {
			if k.seen[keyOf(n)].before == 0 {
				return nil // it lives, or the span will tell
			}
			return fmt.Errorf("%w: the member %s owns partition %d and renews its claim. Another tailbell run works for this deployment on this bus: "+
				"stop it, or write share = true under [bus] in the set-up of both", ErrOwned, e.holding.Owner, n)
		}
		if err := k.take(ctx, b, []int{n}); err != nil {
			return err
		}
		if !k.Owns(n) {
			return nil // another one was faster: the next turn shows which
		}
	}
	return nil
}

// share takes the member's share, and gives up what is more. Those who start
// together see each other first; what was left behind on the own folder is gone
// on with at once.
func (k *Keeper) share(ctx context.Context, b *board) error {
	own := k.owned()
	most := k.most(b)
	if extra := len(own) - most; extra > 0 {
		k.giveUp(own, extra)
		return nil
	}
	early := k.o.Now()-k.started < k.o.Span/2
	var free []int
	for n := range k.o.Partitions {
		e, there := b.partitions[n]
		if k.Owns(n) || there && k.taken(&e) {
			continue
		}
		if !early || there && k.dead(keyOf(n), e.holding.Owner) {
			free = append(free, n)
		}
	}
	slices.SortFunc(free, func(x, y int) int { return cmp.Compare(k.rank(b, x), k.rank(b, y)) })
	return k.take(ctx, b, free[:min(len(free), most-len(own))])
}

// most is how many partitions the member may have.
func (k *Keeper) most(b *board) int {
	members := 1
	for name, e := range b.members {
		if name != k.name && !k.silent(memberKey+name) && !k.dead(memberKey+name, name) && e.presence.Digest == k.o.Digest && !e.presence.Leaving {
			members++
		}
	}
	return (k.o.Partitions + members - 1) / members
}

// giveUp asks to hand over so many partitions more than are being handed over
// already.
func (k *Keeper) giveUp(own []int, extra int) {
	k.mu.Lock()
	var ask []int
	for _, n := range own {
		if k.mu.own[n].leaving {
			extra--
		}
	}
	for i := len(own) - 1; i >= 0 && extra > 0; i-- {
		if h := k.mu.own[own[i]]; !h.leaving {
			h.leaving = true
			ask = append(ask, own[i])
			extra--
		}
	}
	k.mu.Unlock()
	for _, n := range ask {
		k.o.Tell(Event{Kind: Surplus, Partition: n})
	}
}

// rank orders what is free: first what the own folder has a store of, then in an
// order of the member's own, so that members rarely want the same.
func (k *Keeper) rank(b *board, n int) uint64 {
	if local := k.o.Local(n); local > 0 && local == b.partitions[n].holding.Stored {
		return 0
	}
	h := fnv.New64a()
	fmt.Fprintf(h, "%s %d", k.name, n) //nolint:errcheck // a hash never fails
	return max(1, h.Sum64())
}

// take claims partitions.
func (k *Keeper) take(ctx context.Context, b *board, numbers []int) error {
	if len(numbers) == 0 || k.presence.leaving {
		return nil
	}
	now := k.o.Now()
	puts := make([]bus.Put, len(numbers))
	claims := make([]*held, len(numbers))
	for i, n := range numbers {
		before := b.partitions[n]
		h := &held{Holding: before.holding, sent: now}
		h.Owner, h.Digest = k.name, k.o.Digest
		if before.revision == 0 { // from before there were claims
			h.Stored = k.o.Local(n)
			h.Epoch = h.Stored
		}
		h.Epoch++
		claims[i] = h
		puts[i] = put(keyOf(n), h.Holding, before.revision, 0)
	}
	var errs []error
	for i, o := range k.o.Board.PutAll(ctx, puts) {
		n := numbers[i]
		switch {
		case o.Err == nil:
			claims[i].revision = o.Revision
			k.win(n, claims[i])
		case !errors.Is(o.Err, ErrConflict):
			errs = append(errs, o.Err)
		}
	}
	return errors.Join(errs...)
}
