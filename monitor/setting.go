package monitor

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"tailbell/config"
)

// set brings a new set-up into force for the looks that fall due from now on.
// One that the state already built up can't take is refused whole. An indicator
// that it lacks is dismissed; one that it brings begins with what arrives.
func (e *Engine) set(m *Message) {
	next := m.Setting.Setup
	if e.setup != nil {
		if e.setup.Digest == next.Digest {
			return // the same again
		}
		if why := e.unfit(next); why != "" {
			e.account.SettingsRefused++
			e.refuse(m, 0, "", NeedsRebuild, why, next.Text)
			return
		}
	}
	e.archiveBegins() // what the old set-up let go is gone
	from := e.boundaries()
	if why := e.roomFor(next, from); why != "" {
		e.account.SettingsRefused++
		e.refuse(m, 0, "", NeedsRebuild, why, next.Text)
		return
	}
	e.account.Settings++
	e.rouseAll()
	for _, ix := range e.dismissed(next) {
		e.dismiss(ix)
	}
	e.install(next, e.version+1, from, m.HasTime || e.clock == Beginning)
	e.settings = append(e.settings, SettingChange{Version: e.version, Digest: next.Digest, Text: next.Text})
}

// unfit says why the engine can't take the set-up; "" if it can. Of the number
// of partitions its own counts: those of set-ups from before the stream was
// divided were others.
func (e *Engine) unfit(next *config.Setup) string {
	if next.Partitions == max(1, e.partition.Of) {
		return Unfit(e.setup, next)
	}
	return CannotFollow(e.setup, next)
}

// CannotFollow says why no store under the old set-up can take the new one as
// it stands; "" if one can.
func CannotFollow(old, next *config.Setup) string { return obstaclesIn(Obstacles(old, next)) }

// Unfit says why a store under the old set-up can't take the new one; "" if
// it can. The store has the new one's number of partitions.
func Unfit(old, next *config.Setup) string {
	return obstaclesIn(slices.DeleteFunc(Obstacles(old, next), func(o Obstacle) bool { return o.Key == "partitions" }))
}

func obstaclesIn(all []Obstacle) string {
	var keys []string
	for _, o := range all {
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
	return all
}

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

// roomFor says why the windows of the set-up find no places; "" if they do.
func (e *Engine) roomFor(next *config.Setup, from map[string]int64) string {
	for _, ix := range e.indicators {
		for i := range next.Indicators {
			if cfg := &next.Indicators[i]; cfg.Name == ix.cfg.Name {
				if _, ok := ix.arrange(cfg, from[cfg.Name]); !ok {
					return fmt.Sprintf("indicator %q had more than %d different windows since the oldest of its alerts that are still kept: send it again when those are done",
						cfg.Name, maxPlaces)
				}
			}
		}
	}
	return ""
}

// install puts the set-up's indicators to work, each from the given boundary
// on (from the beginning if it is new). timely says that all partitions come to it
// at the same moment of the stream's time.
func (e *Engine) install(next *config.Setup, version int, from map[string]int64, timely bool) {
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
			if len(cfg.Gathered(e.partition.KeyParts)) > 0 {
				e.prepare(ix, e.newLife(cfg.Name, next))
			}
		}
		windows, _ := ix.arrange(cfg, boundary) // there is room: see roomFor
		e.occupy(ix, windows)
		before := ix.cfg
		ix.index, ix.cfg, ix.edges, ix.drawn, ix.total = i, cfg, nil, drawn{epoch: math.MinInt64}, total{}
		if n := len(ix.epochs); n > 0 && ix.epochs[n-1].from >= boundary {
			ix.epochs = ix.epochs[:n-1]
		}
		ix.epochs = append(ix.epochs, epoch{from: boundary, cfg: cfg, version: version, digest: next.Digest, windows: windows})
		ix.measure()
		e.follow(ix)
		e.attend(ix, next, timely)
		switch {
		case ix.started: // settle and horizon may be others
			ix.pass(ix.looked)
		case e.clock != Beginning:
			ix.start(e.clock)
			e.began(ix)
		}
		e.keepArrivals(ix, before)
		e.indicators = append(e.indicators, ix)
		horizon = max(horizon, cfg.Horizon)
	}
	e.ids.configure(horizon, next.Limits.MaxIDs)
	if e.clock != Beginning {
		e.ids.drop(e.clock) // the horizon may be a shorter one
	}
	e.enterExpected()
	e.reschedule()
	e.rewakeAll()
	e.await()
}
