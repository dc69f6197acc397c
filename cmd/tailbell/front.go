package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"sync"
	"time"

	"tailbell/ingest/control"
)

// front answers commands for all processes that share the partitions: the owner
// of one certain partition, which asks those that own what a request is about.
type front struct{ d *daemon }

// frontPartition is the partition whose owner answers commands.
const frontPartition = 0

// memberTime is how long an owner is waited for: one that does not answer is
// about to lose what it owns.
const memberTime = 2 * time.Second

// partial is what one process answers for the partitions that it owns.
type partial struct {
	Partitions []int           `json:"partitions"`
	Body       json.RawMessage `json:"body"`
	err        error
}

// memberVerbs are the verbs that the process answers for its own partitions.
func (d *daemon) memberVerbs() map[string]control.Handler {
	verbs := d.verbs()
	verbs[verbTrim] = answer(d.trimOwn)
	for verb, handler := range verbs {
		verbs[verb] = func(ctx context.Context, body []byte) (any, error) {
			p, err := d.partial(ctx, handler, body)
			return p, err
		}
	}
	return verbs
}

func (d *daemon) partial(ctx context.Context, handler control.Handler, body []byte) (p partial, err error) {
	p.Partitions = []int{}
	for _, one := range d.parts.all() { // before, so that none is said to be in the answer that came later
		p.Partitions = append(p.Partitions, one.number)
	}
	result, err := handler(ctx, body)
	if err != nil {
		return p, err
	}
	p.Body, err = json.Marshal(result)
	return p, err
}

// verbs are the verbs for commands.
func (f *front) verbs() map[string]control.Handler {
	verbs := map[string]control.Handler{
		verbStatus:     f.status,
		verbAlert:      f.first(verbAlert),
		verbAct:        answer(f.act),
		verbTryOutlet:  f.first(verbTryOutlet),
		verbSkipStep:   f.first(verbSkipStep),
		verbCopy:       f.first(verbCopy),
		verbDropOutlet: f.dropOutlet,
		verbSetting:    f.setting,
		verbTrim:       answer(f.trim),
	}
	for _, verb := range []string{verbAlerts, verbClock, verbOutlets} {
		verbs[verb] = f.lists(verb)
	}
	for _, verb := range []string{verbRefused, verbExport, verbResend, verbSeries} {
		verbs[verb] = f.ofPartition(verb)
	}
	return verbs
}

// ask asks one process; this one needs no bus for that.
func (f *front) ask(ctx context.Context, member, verb string, body []byte) (p partial) {
	if member == f.d.member.keeper.Name() {
		p, p.err = f.d.partial(ctx, f.d.ownVerb(verb), body)
		return p
	}
	if verb != verbAct && verb != verbResend && verb != verbTryOutlet && verb != verbCopy && verb != verbTrim {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeout(ctx, memberTime)
		defer cancel()
	}
	var arg any
	if body != nil {
		arg = json.RawMessage(body)
	}
	p.err = control.CallMember(ctx, f.d.bus, member, verb, arg, &p)
	return p
}

// ownVerb is what answers a verb for the process's own partitions.
func (d *daemon) ownVerb(verb string) control.Handler {
	if verb == verbTrim {
		return answer(d.trimOwn)
	}
	return d.verbs()[verb]
}

// owners are the processes that own something, this one first.
func (f *front) owners() []string {
	keeper := f.d.member.keeper
	owners := []string{keeper.Name()}
	for n := range f.d.setup.Partitions {
		if owner := keeper.OwnerOf(n); owner != "" && !slices.Contains(owners, owner) {
			owners = append(owners, owner)
		}
	}
	return owners
}

// everyone asks every owner at the same time.
func (f *front) everyone(ctx context.Context, verb string, body []byte) []partial {
	owners := f.owners()
	answers := make([]partial, len(owners))
	var asking sync.WaitGroup
	for i, owner := range owners {
		asking.Go(func() { answers[i] = f.ask(ctx, owner, verb, body) })
	}
	asking.Wait()
	return answers
}

// missing are the partitions for which nobody has answered.
func (f *front) missing(answers []partial) (missing []int) {
	have := make([]bool, f.d.setup.Partitions)
	for _, a := range answers {
		if a.err != nil {
			continue
		}
		for _, n := range a.Partitions {
			have[n] = true
		}
	}
	for n, ok := range have {
		if !ok {
			missing = append(missing, n)
		}
	}
	return missing
}

// frontAgain is how long to wait before it is asked again, while a partition
// moves from one process to another.
const frontAgain = 300 * time.Millisecond

// whole asks everyone, again while a partition is on its way, until all
// partitions are in the answers.
func (f *front) whole(ctx context.Context, verb string, body []byte) ([]partial, error) {
	for {
		answers := f.everyone(ctx, verb, body)
		missing := f.missing(answers)
		if len(missing) == 0 {
			return answers, nil
		}
		select {
		case <-time.After(frontAgain):
			if deadline, ok := ctx.Deadline(); !ok || time.Until(deadline) > time.Second {
				continue
			}
		case <-ctx.Done():
		}
		for _, a := range answers {
			if a.err != nil {
				return nil, fmt.Errorf("a process that owns a part does not answer: %w", a.err)
			}
		}
		return nil, control.Errorf(codeElsewhere, "nobody owns partition %d at present, so that the answer would not be whole: try again", missing[0])
	}
}

// lists puts the lists of all owners together.
func (f *front) lists(verb string) control.Handler {
	return func(ctx context.Context, body []byte) (any, error) {
		answers, err := f.whole(ctx, verb, body)
		if err != nil {
			return nil, err
		}
		all := []json.RawMessage{}
		for _, a := range answers {
			var list []json.RawMessage
			if err := json.Unmarshal(a.Body, &list); err != nil {
				return nil, err
			}
			all = append(all, list...)
		}
		return all, nil
	}
}

// elsewhere reports whether an error only says that another process has it.
func elsewhere(err error) bool {
	var e *control.Error
	return errors.As(err, &e) && (e.Code == codeNotFound || e.Code == codeElsewhere)
}

// first gives the answer of the owner that has what is asked for.
func (f *front) first(verb string) control.Handler {
	return func(ctx context.Context, body []byte) (any, error) {
		owners := f.owners()
		var last error
		for _, owner := range owners {
			a := f.ask(ctx, owner, verb, body)
			if a.err == nil {
				return a.Body, nil
			}
			if !elsewhere(a.err) {
				return nil, a.err
			}
			last = a.err
		}
		if n := f.unowned(); n >= 0 {
			return nil, control.Errorf(codeElsewhere, "%v (nobody owns partition %d at present: try again)", last, n)
		}
		return nil, last
	}
}

// unowned is a partition that nobody owns, -1 if there is none.
func (f *front) unowned() int {
	for n := range f.d.setup.Partitions {
		if f.d.member.keeper.OwnerOf(n) == "" {
			return n
		}
	}
	return -1
}

// ofPartition asks the owner of the partition that a request names.
func (f *front) ofPartition(verb string) control.Handler {
	return answer(func(ctx context.Context, raw json.RawMessage) (any, error) {
		var req struct {
			Partition int `json:"partition"`
		}
		if err := json.Unmarshal(raw, &req); err != nil {
			return nil, control.Errorf(control.BadRequest, "the request can't be read: %v", err)
		}
		return f.owner(ctx, req.Partition, verb, raw)
	})
}

// owner asks the owner of a partition.
func (f *front) owner(ctx context.Context, n int, verb string, body []byte) (any, error) {
	if n < 0 || n >= f.d.setup.Partitions {
		return nil, control.Errorf(codeNotFound, "no partition %d: there are %d", n, f.d.setup.Partitions)
	}
	owner := f.d.member.keeper.OwnerOf(n)
	if owner == "" {
		return nil, control.Errorf(codeElsewhere, "nobody owns partition %d at present: try again", n)
	}
	a := f.ask(ctx, owner, verb, body)
	return a.Body, a.err
}
