package monitor

import (
	"math"
	"slices"
	"strings"
	"time"

	"tailbell/config"
)

// set brings a new set-up into force for the looks that fall due from now on.
// One that the state already built up can't take is refused whole.
func (e *Engine) set(m *Message) {
	next := m.Setting.Setup
	if e.setup != nil {
		if e.setup.Digest == next.Digest {
			return // the same again
		}
		if why := unfit(e.setup, next); why != "" {
			e.account.SettingsRefused++
			e.refuse(m, 0, "", NeedsRebuild, why, next.Text)
			return
		}
	}
	e.account.Settings++
	e.install(next, e.version+1, e.boundaries())
	e.settings = append(e.settings, SettingChange{Version: e.version, Digest: next.Digest, Text: next.Text})
}

// Unfit says why a store under the old set-up can't take the new one; "" if
// it can.
func Unfit(old, next *config.Setup) string { return unfit(old, next) }

func unfit(old, next *config.Setup) string {
	var keys []string
	for _, o := range Obstacles(old, next) {
		keys = append(keys, o.Why)
	}
	if len(keys) == 0 {
		return ""
	}
	return "the running store can't take this change: " + strings.Join(keys, "; ")
}

// Obstacle is one change that a running store can't take.
type Obstacle struct {
	Key string // as config.Change has it
	Why string
}

// Obstacles lists the changes that a store under the old set-up can't take.
func Obstacles(old, next *config.Setup) []Obstacle {
	var all []Obstacle
	for _, c := range config.Compare(old, next) {
		if c.Class == config.Rebuild {
			all = append(all, Obstacle{c.Key, c.String()})
		}
	}
	return append(all, unkept(old, next)...)
}

// unkept lists the changes of smaller class that the state can't follow yet:
// it knows windows by their place in the list, and series by their indicator.
func unkept(old, next *config.Setup) []Obstacle {
	var all []Obstacle
	for i := range old.Indicators {
		before := &old.Indicators[i]
		at := slices.IndexFunc(next.Indicators, func(in config.Indicator) bool { return in.Name == before.Name })
		switch {
		case at < 0:
			key := "indicator[" + before.Name + "]"
			all = append(all, Obstacle{key, key + " is gone"})
		case !slices.EqualFunc(before.Windows, next.Indicators[at].Windows, sameWindow):
			key := "indicator[" + before.Name + "].windows"
			all = append(all, Obstacle{key, key + " are others, or in another order"})
		}
	}
	return all
}

func sameWindow(a, b config.Window) bool { return a.Slots == b.Slots && a.Step == b.Step }

// boundaries returns, by indicator name, the first boundary that falls due
// from now on.
func (e *Engine) boundaries() map[string]int64 {
	from := map[string]int64{}
	for _, ix := range e.indicators {
		if from[ix.cfg.Name] = math.MinInt64; ix.started && len(ix.epochs) > 0 {
			from[ix.cfg.Name] = ix.looked + 1
		}
	}
	return from
}

// install puts the set-up's indicators to work, each from the given boundary
// on (from the beginning if it is new).
func (e *Engine) install(next *config.Setup, version int, from map[string]int64) {
	e.setup, e.version = next, version
	old := map[string]*indicator{}
	for _, ix := range e.indicators {
		old[ix.cfg.Name] = ix
	}
	e.indicators = nil
	var horizon time.Duration
	for i := range next.Indicators {
		cfg := &next.Indicators[i]
		ix := old[cfg.Name]
		boundary, known := from[cfg.Name]
		if !known {
			boundary = math.MinInt64
		}
		if ix == nil {
			ix = newIndicator(i, cfg)
			if e.clock != Beginning {
				ix.start(e.clock)
			}
		}
		ix.index, ix.cfg, ix.edges, ix.drawn, ix.total = i, cfg, nil, drawn{epoch: math.MinInt64}, total{}
		if n := len(ix.epochs); n > 0 && ix.epochs[n-1].from >= boundary {
			ix.epochs = ix.epochs[:n-1]
		}
		ix.epochs = append(ix.epochs, epoch{from: boundary, cfg: cfg, version: version, digest: next.Digest})
		if ix.started { // settle and horizon may be others
			ix.pass(ix.looked)
		}
		e.indicators = append(e.indicators, ix)
		horizon = max(horizon, cfg.Horizon)
	}
	e.ids.configure(horizon, next.Limits.MaxIDs)
	e.reschedule()
	e.rewakeAll()
}
