package plant

import (
	"cmp"
	"context"
	"fmt"
	"runtime"
	"slices"
	"sync"

	"tailbell/config"
	"tailbell/monitor"
)

// Rehearsal is ready to run. Create it with Plan.Invent or Plan.Observe.
type Rehearsal struct {
	plan     *Plan
	grounds  grounds
	invented *invented
	real     *real
}

// prepare fails where the first history can't be made.
func (r *Rehearsal) prepare() error {
	_, err := r.grounds.ground(0)
	return err
}

// outcomes is what came of one history, by set-up.
type outcomes struct {
	series  string
	alerts  []int64 // false alerts of invented histories
	years   float64
	found   [][]outcome // by set-up and ratio
	chance  [][]outcome // without an excess: by set-up and direction (upper, lower)
	refused int64
}

// Run runs all histories and reports.
func (r *Rehearsal) Run(ctx context.Context) (*Report, error) {
	p := r.plan
	setups := make([]*config.Setup, len(p.Setups))
	for i := range setups {
		s, err := p.alone(i)
		if err != nil {
			return nil, err
		}
		setups[i] = s
	}
	runs := make([]outcomes, p.Histories)
	err := each(ctx, p, func(i int) error {
		t, err := r.one(setups, i)
		runs[i] = t
		return err
	})
	if err != nil {
		return nil, err
	}
	return r.report(ctx, runs)
}

// one runs one history through every set-up, without an excess and with each.
func (r *Rehearsal) one(setups []*config.Setup, number int) (outcomes, error) {
	g, err := r.grounds.ground(number)
	if err != nil {
		return outcomes{}, err
	}
	t := outcomes{series: g.series, years: float64(g.until-g.judged) / 1e6 / Year.Seconds()}
	in := &setups[0].Indicators[0]
	for s := range setups {
		control, err := r.control(setups[s], s, g)
		if err != nil {
			return t, err
		}
		cfg := &setups[s].Indicators[0]
		t.alerts = append(t.alerts, control.falseAlerts(g.judged))
		t.chance = append(t.chance, []outcome{control.outcomeOf(cfg, "upper", g.from, g.to), control.outcomeOf(cfg, "lower", g.from, g.to)})
		t.found = append(t.found, nil)
	}
	for i, ratio := range r.plan.Ratios {
		rng := r.plan.source(uint64(number)<<8 | uint64(i+1))
		arrivals := g.plant(in, r.plan.Shape, ratio, rng)
		for s := range setups {
			until := min(g.until, r.lastLook(&setups[s].Indicators[0], g))
			x := judge(setups[s], g.series, arrivals, g.from, g.to, until)
			if err := r.refusals(x); err != nil {
				return t, err
			}
			t.refused += x.refusedPlanted
			t.found[s] = append(t.found[s], x.outcomeOf(&setups[s].Indicators[0], directionOf(ratio), g.from, g.to))
		}
	}
	return t, nil
}

// refusals fails where invented data were refused: then set-up and plan don't
// fit each other.
func (r *Rehearsal) refusals(x *run) error {
	if r.real == nil && x.refused != "" {
		return fmt.Errorf("%w: %s", ErrRefused, x.refused)
	}
	return nil
}

// control is the run without an excess. A real history was run as a whole.
func (r *Rehearsal) control(setup *config.Setup, number int, g *ground) (*run, error) {
	if r.real != nil {
		i, _ := slices.BinarySearchFunc(r.real.all, g.series, func(p *past, name string) int { return cmp.Compare(p.name, name) })
		return &r.real.all[i].control[number], nil
	}
	x := judge(setup, g.series, g.base, g.from, g.to, g.until.Add(setup.Indicators[0].Settle))
	return x, r.refusals(x)
}

// lastLook is when the last look falls due whose window still holds some of the
// excess.
func (r *Rehearsal) lastLook(in *config.Indicator, g *ground) monitor.Instant {
	longest := 0
	for i := range in.Windows {
		longest = max(longest, in.Windows[i].Slots)
	}
	if r.invented != nil {
		longest = max(longest, r.invented.trialSlots(in))
	}
	cal := monitor.NewCalendar(in.Every, in.Zone)
	return cal.Start(cal.Slot(g.to) + int64(longest) + 1).Add(in.Settle)
}

// each calls do for every history, on several processors. The error is that of
// the history with the lowest number among those that failed.
func each(ctx context.Context, p *Plan, do func(i int) error) error {
	workers := p.Workers
	if workers <= 0 {
		workers = runtime.GOMAXPROCS(0)
	}
	var mu sync.Mutex
	next, done, failed, failure := 0, 0, p.Histories, error(nil)
	take := func() (int, bool) {
		mu.Lock()
		defer mu.Unlock()
		if next == p.Histories || failure != nil || ctx.Err() != nil {
			return 0, false
		}
		next++
		return next - 1, true
	}
	finish := func(i int, err error) {
		mu.Lock()
		defer mu.Unlock()
		if err != nil && i < failed {
			failed, failure = i, err
		}
		if done++; p.Progress != nil {
			p.Progress(done)
		}
	}
	var all sync.WaitGroup
	for range min(workers, p.Histories) {
		all.Go(func() {
			for i, more := take(); more; i, more = take() {
				finish(i, do(i))
			}
		})
	}
	all.Wait()
	if failure != nil {
		return failure
	}
	return ctx.Err()
}

func sortArrivals(list []arrival) {
	slices.SortStableFunc(list, func(a, b arrival) int { return cmp.Compare(a.at, b.at) })
}
