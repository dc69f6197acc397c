package page

import (
	"cmp"
	"context"
	"maps"
	"net/http"
	"slices"
	"sync"
	"time"

	"tailbell/alert/words"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// State is how the machine is doing.
type State struct {
	Connected bool
	Embedded  bool
	Setup     string // digest of the set-up in force
	Troubles  []Trouble
	Parts     []PartState
}

// Trouble is something that keeps the daemon from its work.
type Trouble struct {
	Kind, Text string
	Since      time.Time
	Stops      bool // nothing is read while it stands
}

// PartState is how one partition is doing.
type PartState struct {
	Number        int
	Position, End uint64
	Clock         *time.Time // nil before the first message that tells a time
	History       bool
	Version       int
	Account       monitor.Account
	// Archive says in words since when the archive of slots reaches back, and what was
	// let go; "" where all is kept.
	Archive string
	Outlets []OutletState
	// Owner is the process that owns the partition, where several share them; Here
	// says that it is the one that serves this page. Copy says up to where the last
	// copy of its store on the bus reaches, and when it was made; nil for none.
	Owner        string
	Here         bool
	CopyMade     *time.Time
	CopyPosition uint64
}

// Shared reports whether several processes share the partitions.
func (s *State) Shared() bool {
	return slices.ContainsFunc(s.Parts, func(p PartState) bool { return p.Owner != "" })
}

// Lag is how many messages the partition has yet to commit.
func (s *PartState) Lag() uint64 {
	if s.End < s.Position {
		return 0
	}
	return s.End - s.Position
}

// OutletState is how far an outlet has come: how many steps it was told, how
// many were passed over since it is not told of them, and how many wait.
type OutletState struct {
	Name                           string
	Delivered, PassedOver, Waiting uint64
	Trouble                        string
}

// stateAge is how old a state may be that is shown.
const stateAge = 2 * time.Second

// state asks the machine how it is doing.
func (p *Page) state(ctx context.Context) (*State, error) {
	m := &p.lastState
	m.mu.Lock()
	defer m.mu.Unlock()
	now, commits := p.o.Now(), p.commits.Load()
	switch rest := stateAge - now.Sub(m.at); {
	case m.state == nil || rest <= 0:
		s, err := p.o.State(ctx)
		if err != nil {
			return nil, err
		}
		m.state, m.at, m.commits = s, now, commits
	case m.commits != commits:
		p.owe(rest)
	}
	return m.state, nil
}

type lastState struct {
	mu      sync.Mutex
	state   *State
	at      time.Time
	commits uint64
}

const (
	// refusedRows is how many of the newest refusals are shown.
	refusedRows = 10
	// conditionRows is how many conditions of a kind are shown.
	conditionRows = 60
)

// machineData is the state of the machine.
type machineData struct {
	*State
	Total      monitor.Account
	Reasons    []reasonCount
	Refused    []refusal
	Overdue    []blindness
	OfOverdue  int
	Blind      []blindness
	OfBlind    int
	Series     int
	RefusedAll uint64
	Most       int // lines of conditions
}

// blindness is one condition of a series, in some of its windows.
type blindness struct {
	monitor.Condition
	Windows string // in words
}

// addCondition adds a condition, unless there are enough. The same condition
// of several windows takes one line.
func addCondition(list []blindness, c monitor.Condition) []blindness {
	if n := len(list); n > 0 && list[n-1].Series == c.Series && list[n-1].Text == c.Text && c.Window != "" {
		last := &list[n-1]
		last.Windows += ", " + words.Length(c.Window)
		last.Since = min(last.Since, c.Since)
		return list
	}
	if len(list) == conditionRows {
		return list
	}
	b := blindness{Condition: c}
	if c.Window != "" {
		b.Windows = words.Length(c.Window)
	}
	return append(list, b)
}

type reasonCount struct {
	Reason monitor.Reason
	Count  uint64
}

type refusal struct {
	store.RefusedRow
	Partition int
	At        time.Time
}

// machine shows the state of the machine.
func (p *Page) machine(r *http.Request) (*screen, error) {
	s, err := p.state(r.Context())
	if err != nil {
		return nil, err
	}
	d := &machineData{State: s, Most: conditionRows}
	for i := range s.Parts {
		d.Total = d.Total.Add(s.Parts[i].Account)
	}
	if err := d.addRefused(r.Context(), p); err != nil {
		return nil, err
	}
	g, err := p.glances(r.Context())
	if err != nil {
		return nil, err
	}
	d.Series = len(g.rows)
	for kind, n := range g.counts {
		if kind == monitor.Silent {
			d.OfOverdue += n
		} else {
			d.OfBlind += n
		}
	}
	for _, c := range g.conditions {
		list := &d.Blind
		if c.Kind == monitor.Silent {
			list = &d.Overdue
		}
		*list = addCondition(*list, c)
	}
	return &screen{name: "machine", Title: "The state of the machine", Here: "/machine", Data: d}, nil
}

// addRefused adds the counts by reason, and the newest refusals.
func (d *machineData) addRefused(ctx context.Context, p *Page) error {
	counts := map[monitor.Reason]uint64{}
	for i := range p.o.Parts {
		some, err := p.o.Parts[i].Refusals(ctx, refusedRows)
		if err != nil {
			return err
		}
		for reason, n := range some.Counts {
			counts[reason] += n
			d.RefusedAll += n
		}
		for _, row := range some.Newest {
			d.Refused = append(d.Refused, refusal{row, i, row.Refusal.At.Time()})
		}
	}
	slices.SortStableFunc(d.Refused, func(a, b refusal) int { return cmp.Or(b.At.Compare(a.At), cmp.Compare(b.Number, a.Number)) })
	d.Refused = d.Refused[:min(len(d.Refused), refusedRows)]
	for _, reason := range slices.Sorted(maps.Keys(counts)) {
		d.Reasons = append(d.Reasons, reasonCount{reason, counts[reason]})
	}
	slices.SortStableFunc(d.Reasons, func(a, b reasonCount) int { return cmp.Compare(b.Count, a.Count) })
	return nil
}
