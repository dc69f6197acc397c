package claim

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"
	"sync"
	"time"

	"tailbell/ingest/bus"
)

// Options are those of one member.
type Options struct {
	Board Board
	// Folder names the member's folder, and Start this start of it: together they
	// are the member's name. The process holds the folder's lock, so that an
	// earlier start on the folder is dead for certain.
	Folder, Start string
	// Digest of the member's set-up.
	Digest     string
	Partitions int
	// Span is how long a claim holds that is not renewed.
	Span time.Duration
	// Alone has the member take every partition, and fail if another one owns
	// any.
	Alone bool
	// Now is the time since some moment by a clock that never goes back.
	Now func() time.Duration
	// Local is the epoch of the store that the folder has of a partition, 0 for
	// none. Partitions whose last owner it was are taken first.
	Local func(partition int) uint64
	// Marks say how far an owned partition has come; false while it is not open.
	Marks func(partition int) (Marks, bool)
	// Tell is told what happens. It must not block, nor call the keeper.
	Tell func(Event)
}

// Marks say how far a partition has come.
type Marks struct {
	Position uint64
	Told     map[string]uint64
	Origin   string
}

// EventKind is what happened.
type EventKind int

// The kinds of event.
const (
	// Won: the partition is the member's now.
	Won EventKind = iota
	// Lost: it is no longer. Nothing may be done with it any more.
	Lost
	// Surplus: another member is to have it: hand it over, then Release it.
	Surplus
	// Renewed: the claim had run out, and nobody took the partition meanwhile.
	Renewed
	// Waiting: the member takes nothing, of no partition, and why.
	Waiting
)

// Event is something that happened to a partition.
type Event struct {
	Kind      EventKind
	Partition int
	Claim     Holding // of Won: with the marks of the owner before
	Why       string  // of Lost and Waiting
}

// ErrOwned is returned when a member that works alone finds another one at work.
var ErrOwned = errors.New("another process owns what this one needs")

// held is a claim of the member's own.
type held struct {
	Holding
	revision uint64
	sent     time.Duration // when the last write was sent that was acknowledged
	leaving  bool          // it is being handed over
	lapsed   bool
}

// sight is when a revision of an entry was first seen, and how many others were
// seen before it.
type sight struct {
	revision uint64
	at       time.Duration
	before   int
}

// Keeper keeps the claims of one member.
type Keeper struct {
	o    Options
	name string
	// turns is held through every round of reading and writing.
	turns    sync.Mutex
	started  time.Duration
	seen     map[string]sight
	presence struct {
		revision uint64
		sent     time.Duration
		leaving  bool
	}

	mu struct {
		sync.Mutex
		own   map[int]*held
		last  *board
		waits string
	}
}

// NewKeeper returns the keeper of a member that owns nothing yet.
func NewKeeper(o Options) *Keeper {
	if o.Local == nil {
		o.Local = func(int) uint64 { return 0 }
	}
	if o.Marks == nil {
		o.Marks = func(int) (Marks, bool) { return Marks{}, false }
	}
	k := &Keeper{o: o, name: o.Folder + "-" + o.Start, seen: map[string]sight{}, started: o.Now()}
	k.mu.own = map[int]*held{}
	k.mu.last = &board{}
	k.presence.sent = o.Now() - o.Span
	return k
}

// Name is the member's name.
func (k *Keeper) Name() string { return k.name }

// Every is how often a Turn is due.
func (k *Keeper) Every() time.Duration { return k.o.Span / 6 }

// Release gives a partition up: whoever has room for it takes it at once. Nothing
// may be done with it any more by then. After an error it is given up all the
// same, but the others wait until the claim has run out.
func (k *Keeper) Release(ctx context.Context, partition int) error {
	k.turns.Lock()
	defer k.turns.Unlock()
	return k.release(ctx, []int{partition})
}

// Leave says that the member takes nothing any more, so that the others may have
// more. What it owns it keeps until Release.
func (k *Keeper) Leave(ctx context.Context) error {
	k.turns.Lock()
	defer k.turns.Unlock()
	now := k.o.Now()
	k.presence.leaving = true
	o := k.o.Board.PutAll(ctx, []bus.Put{k.present()})[0]
	if o.Err == nil {
		k.presence.revision, k.presence.sent = o.Revision, now
		return nil
	}
	k.presence.sent = now - k.o.Span // the next turn says it
	if errors.Is(o.Err, ErrConflict) {
		return nil
	}
	return o.Err
}

func (k *Keeper) release(ctx context.Context, numbers []int) error {
	own := k.own()
	var puts []bus.Put
	for _, n := range numbers {
		h := own[n]
		if h == nil {
			continue
		}
		k.mark(n, h)
		free := h.Holding
		free.Owner = ""
		puts = append(puts, put(keyOf(n), free, h.revision, 0))
	}
	k.mu.Lock()
	for _, n := range numbers {
		delete(k.mu.own, n) // before anybody may take it
	}
	k.mu.Unlock()
	if len(puts) == 0 {
		return nil
	}
	var errs []error
	for _, o := range k.o.Board.PutAll(ctx, puts) {
		if o.Err != nil && !errors.Is(o.Err, ErrConflict) {
			errs = append(errs, o.Err)
		}
	}
	return errors.Join(errs...)
}

// Raise makes the epoch of an owned partition at least so high, where epochs
// were given out that the board has forgotten, and returns it.
func (k *Keeper) Raise(ctx context.Context, partition int, atLeast uint64) (uint64, error) {
	k.turns.Lock()
	defer k.turns.Unlock()
	h := k.own()[partition]
	if h == nil {
		return 0, fmt.Errorf("partition %d: %w", partition, ErrStale)
	}
	if h.Epoch >= atLeast {
		return h.Epoch, nil
	}
	raised, now := h.Holding, k.o.Now()
	raised.Epoch = atLeast
	o := k.o.Board.PutAll(ctx, []bus.Put{put(keyOf(partition), raised, h.revision, 0)})[0]
	if o.Err != nil {
		return 0, o.Err
	}
	h.Holding = raised
	k.renewed(partition, h, o.Revision, now)
	return atLeast, nil
}

// Run makes turns until ctx ends, and one as soon as somebody else's claim has run
// out. Errors of the bus are told and waited out; the
// error is an ErrOwned if a member that works alone finds another one.
func (k *Keeper) Run(ctx context.Context, failed func(error)) error {
	tick := time.NewTicker(k.Every())
	defer tick.Stop()
	for {
		err := k.Turn(ctx)
		switch {
		case ctx.Err() != nil:
			return nil
		case errors.Is(err, ErrOwned):
			return err
		case err != nil:
			failed(err)
		}
		expiry := time.NewTimer(k.untilExpiry())
		select {
		case <-tick.C:
		case <-expiry.C:
		case <-ctx.Done():
			return nil
		}
		expiry.Stop()
	}
}

// untilExpiry is how long it takes until the next claim of another member runs out,
// if that comes before the next turn, else as long as that takes.
func (k *Keeper) untilExpiry() time.Duration {
	k.turns.Lock()
	defer k.turns.Unlock()
	k.mu.Lock()
	last := k.mu.last
	k.mu.Unlock()
	next, now := k.Every(), k.o.Now()
	wait := func(key, owner string) {
		if s, seen := k.seen[key]; seen && owner != "" && owner != k.name {
			if left := s.at + k.o.Span - now; left > 0 {
				next = min(next, left)
			}
		}
	}
	for n, e := range last.partitions {
		wait(keyOf(n), e.holding.Owner)
	}
	for name := range last.members { // how much is anybody's share
		wait(memberKey+name, name)
	}
	return next
}

// Turn looks at the board once, renews what is owned and takes what is due.
func (k *Keeper) Turn(ctx context.Context) error {
	k.turns.Lock()
	defer k.turns.Unlock()
	ctx, cancel := context.WithTimeout(ctx, k.o.Span/2)
	defer cancel()
	entries, err := k.o.Board.All(ctx)
	if err != nil {
		return errors.Join(err, k.renew(ctx, nil)) // a write may pass where a read does not
	}
	b, err := readBoard(entries)
	if err != nil {
		return err
	}
	k.look(b)
	k.settle(b)
	if err := k.renew(ctx, b); err != nil {
		return err
	}
	in, err := k.inForce(ctx, b)
	if err != nil || !in {
		return err
	}
	if k.o.Alone {
		return k.takeAll(ctx, b)
	}
	return k.share(ctx, b)
}

// look notes which revisions are new. It is called after the board was read: an
// entry's span begins no earlier than it was written.
func (k *Keeper) look(b *board) {
	now := k.o.Now()
	note := func(key string, revision uint64) {
		s, known := k.seen[key]
		switch {
		case !known:
			k.seen[key] = sight{revision, now, 0}
		case revision > s.revision:
			k.seen[key] = sight{revision, now, s.before + 1}
		}
	}
	for n, e := range b.partitions {
		note(keyOf(n), e.revision)
	}
	for name, e := range b.members {
		note(memberKey+name, e.revision)
	}
	k.mu.Lock()
	k.mu.last = b
	k.mu.Unlock()
}

func keyOf(partition int) string { return fmt.Sprintf("%s%d", partitionKey, partition) }

// silent reports whether no new revision of an entry was seen for a span.
func (k *Keeper) silent(key string) bool { return k.o.Now()-k.seen[key].at >= k.o.Span }

// dead reports whether the owner of an entry is an earlier start on the own
// folder, whose lock this process holds. One message of it may still have been
// under way. Where entries go on to change, the folder is a copy of another one
// that is in use.
func (k *Keeper) dead(key, owner string) bool {
	return owner != k.name && strings.HasPrefix(owner, k.o.Folder+"-") && k.seen[key].before <= 1
}

// taken reports whether a partition is owned by another member that may live.
func (k *Keeper) taken(e *entry) bool {
	owner, key := e.holding.Owner, keyOf(e.partition)
	return owner != "" && owner != k.name && !k.silent(key) && !k.dead(key, owner)
}

// settle takes in what the board says of the own claims. One whose
// acknowledgement was lost is none: it is taken once more, with another epoch.
func (k *Keeper) settle(b *board) {
	own := k.own()
	for _, n := range k.owned() {
		h := own[n]
		e, there := b.partitions[n]
		switch {
		case !there:
			h.revision = 0 // if the bucket was made anew, the next renewal founds it again
		case e.holding.Owner == k.name && e.holding.Epoch == h.Epoch:
			h.revision = max(h.revision, e.revision) // a write whose acknowledgement was lost
		case e.revision > h.revision || h.lapsed:
			k.drop(n, fmt.Sprintf("the member %q took it with epoch %d", e.holding.Owner, e.holding.Epoch))
		}
	}
}

func (k *Keeper) own() map[int]*held {
	k.mu.Lock()
	defer k.mu.Unlock()
	own := make(map[int]*held, len(k.mu.own))
	for n, h := range k.mu.own {
		own[n] = h
	}
	return own
}

func (k *Keeper) owned() []int {
	k.mu.Lock()
	defer k.mu.Unlock()
	var list []int
	for n := range k.mu.own {
		list = append(list, n)
	}
	slices.Sort(list)
	return list
}

func (k *Keeper) drop(n int, why string) {
	k.mu.Lock()
	delete(k.mu.own, n)
	k.mu.Unlock()
	k.o.Tell(Event{Kind: Lost, Partition: n, Why: why})
}

func (k *Keeper) win(n int, h *held) {
	k.mu.Lock()
	k.mu.own[n] = h
	k.mu.Unlock()
	k.o.Tell(Event{Kind: Won, Partition: n, Claim: h.Holding})
}

// Owns reports whether the member believes to own a partition; see Holds.
func (k *Keeper) Owns(partition int) bool {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.mu.own[partition] != nil
}

// Holds reports whether the claim on a partition holds at this moment. It is
// asked right before anything that another owner must not do too.
func (k *Keeper) Holds(partition int) bool {
	k.mu.Lock()
	defer k.mu.Unlock()
	h := k.mu.own[partition]
	return h != nil && k.o.Now() < h.sent+k.o.Span
}

// Waits says why the member takes nothing, "" if it does.
func (k *Keeper) Waits() string {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.mu.waits
}

// Rows is what the board said of the partitions last.
func (k *Keeper) Rows() []Row {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.mu.last.rows()
}

// OwnerOf is the member that owned a partition when the board was last read, ""
// for none.
func (k *Keeper) OwnerOf(partition int) string {
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.mu.own[partition] != nil {
		return k.name
	}
	if owner := k.mu.last.partitions[partition].holding.Owner; owner != k.name {
		return owner
	}
	return ""
}
