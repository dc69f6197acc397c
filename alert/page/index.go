package page

import (
	"cmp"
	"context"
	"slices"
	"strings"
	"sync"
	"time"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

const (
	// glancesAtOnce is how many series are read between two messages.
	glancesAtOnce = 200
	// restAfter times what building the index took is waited before the next,
	// so that it takes a small share of the engines' time.
	restAfter = 15
	// restAtLeast is the least time between two of them.
	restAtLeast = 2 * time.Second
	// indexPatience is how long a request waits for an index that is being
	// built anew before it takes the one before.
	indexPatience = 400 * time.Millisecond
	// maxConditions is how many conditions the index keeps.
	maxConditions = 2000
	// maxUnalerted is how many series that signal without an alert it keeps.
	maxUnalerted = 60
)

// row is one series in the index.
type row struct {
	name, indicator, window string
	folded                  string // the name in lower case
	status                  string
	end                     time.Time
	events                  int64
	expected, log10p        float64
	critical                int64
	hasCritical             bool
	made, signals           bool
	provisional             bool
	direction               life.Direction
	conditions              int
}

// glances is the index as it was at one moment. It does not change.
type glances struct {
	at      time.Time
	took    time.Duration
	commits uint64
	rows    []row   // by name
	order   []int32 // of rows, the strongest evidence first
	// conditions are the first maxConditions by series; counts counts all by
	// kind.
	conditions []monitor.Condition
	counts     map[monitor.ConditionKind]int
	signals    int
	// unalerted are the first maxUnalerted series that signal without an alert,
	// of so many in all.
	unalerted   []unalerted
	ofUnalerted int

	setup  *config.Setup // in force
	groups sync.Map      // prefix -> []group
}

// index keeps the latest glances.
type index struct {
	mu       sync.Mutex
	now      *glances
	building bool
	wake     chan struct{} // closed when a build ends
}

// glances returns the index, at most a little older than what is committed.
func (p *Page) glances(ctx context.Context) (*glances, error) {
	x := &p.index
	x.mu.Lock()
	now, commits := x.now, p.commits.Load()
	if now != nil {
		rest := max(restAtLeast, restAfter*now.took) - p.o.Now().Sub(now.at)
		if now.commits == commits || rest > 0 {
			x.mu.Unlock()
			if now.commits != commits {
				p.owe(rest)
			}
			return now, nil
		}
	}
	if !x.building {
		x.building = true
		p.work.Go(func() { p.build(commits) })
	}
	wake := x.wake
	x.mu.Unlock()
	var late <-chan time.Time
	if now != nil {
		timer := time.NewTimer(indexPatience)
		defer timer.Stop()
		late = timer.C
	}
	select {
	case <-wake:
	case <-late:
		p.owe(now.took)
	case <-ctx.Done():
		return nil, ctx.Err()
	}
	x.mu.Lock()
	defer x.mu.Unlock()
	if x.now == nil {
		return nil, &problem{503, "The list of series could not be read.", "Try again in a moment."}
	}
	return x.now, nil
}

// build makes the index anew.
func (p *Page) build(commits uint64) {
	began := p.o.Now()
	g, err := p.read()
	if err == nil {
		g.at, g.commits = p.o.Now(), commits
		g.took = g.at.Sub(began)
	} else if p.ctx.Err() == nil {
		p.o.Failed(err)
	}
	x := &p.index
	x.mu.Lock()
	if err == nil {
		x.now = g
	}
	x.building = false
	close(x.wake)
	x.wake = make(chan struct{})
	x.mu.Unlock()
}

// read glances at every series, in pieces.
func (p *Page) read() (*glances, error) {
	g := &glances{counts: map[monitor.ConditionKind]int{}}
	for i := range p.o.Parts {
		for next, more := 0, true; more; {
			some, err := p.o.Parts[i].Glances(p.ctx, next, glancesAtOnce)
			if err != nil {
				return nil, err
			}
			if next == 0 {
				g.setup = some.Setup
				g.rows = slices.Grow(g.rows, some.Of)
			}
			for j := range some.Series {
				g.add(some.Series[j])
			}
			next = some.Next
			more = next > 0
		}
	}
	slices.SortFunc(g.rows, func(a, b row) int { return strings.Compare(a.name, b.name) })
	g.order = make([]int32, len(g.rows))
	for i := range g.order {
		g.order[i] = int32(i)
	}
	slices.SortStableFunc(g.order, func(a, b int32) int {
		x, y := &g.rows[a], &g.rows[b]
		if x.signals != y.signals {
			if x.signals {
				return -1
			}
			return 1
		}
		return cmp.Compare(x.log10p, y.log10p)
	})
	return g, nil
}

func (g *glances) add(s monitor.Glance) {
	v := &s.Look
	tail := &v.Upper
	if s.Direction == life.Lower {
		tail = &v.Lower
	}
	r := row{
		name: s.Series, folded: strings.ToLower(s.Series), indicator: s.Indicator, window: v.Window, status: v.Status, end: v.End,
		events: v.Events, expected: v.Expected, log10p: s.Log10P, critical: tail.Critical, hasCritical: tail.HasCritical,
		made: v.Made, signals: s.Signals, provisional: v.Provisional > 0, direction: s.Direction, conditions: len(s.Conditions),
	}
	if r.folded == r.name {
		r.folded = r.name // one text in memory
	}
	if r.signals {
		g.signals++
	}
	g.rows = append(g.rows, r)
	if len(s.Unalerted) > 0 {
		g.addUnalerted(&s)
	}
	for _, c := range s.Conditions {
		g.counts[c.Kind]++
		if len(g.conditions) < maxConditions {
			g.conditions = append(g.conditions, c)
		}
	}
}

// placeOf is a series in words: where, and what is counted there.
func (g *glances) placeOf(series, indicator string) string {
	if g.setup == nil {
		return series
	}
	for i := range g.setup.Indicators {
		if in := &g.setup.Indicators[i]; in.Name == indicator {
			return placeOf(series, in) + ": " + in.EventNoun
		}
	}
	return series
}

func placeOf(series string, in *config.Indicator) string {
	return words.Place(&life.Record{Series: series, Indicator: in.Name, Title: in.Title, Opening: life.Evidence{EventNoun: in.EventNoun}})
}
