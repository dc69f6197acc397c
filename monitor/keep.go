package monitor

import (
	"time"

	"tailbell/config"
)

// archiveBegins returns when the archive begins under all set-ups that were in
// force, nil while all is kept. A clock that moves on never takes it back, so it
// makes no difference how often it is asked under one set-up.
func (e *Engine) archiveBegins() *Instant {
	if e.setup != nil && e.clock != Beginning {
		e.archiveFrom = max(e.archiveFrom, ArchiveFrom(e.setup.Limits.Archive, e.clock))
	}
	if e.archiveFrom == Beginning {
		return nil
	}
	from := e.archiveFrom
	return &from
}

// ArchiveFrom returns when the archive begins that is kept for so long, as of an
// instant: the beginning of the day (UTC) that lies so many days, weeks, months or
// years back. The 31st of a month has the last day of shorter ones before it.
// Beginning stands for an archive of which all is kept.
func ArchiveFrom(keep config.Every, now Instant) Instant {
	year, month, day := now.Time().UTC().Date()
	switch keep.Unit {
	case config.Day, config.Week:
		days := keep.N
		if keep.Unit == config.Week {
			days *= 7
		}
		day -= days
	case config.Month, config.Year:
		months := keep.N
		if keep.Unit == config.Year {
			months *= 12
		}
		last := time.Date(year, month-time.Month(months)+1, 0, 0, 0, 0, 0, time.UTC).Day()
		month, day = month-time.Month(months), min(day, last)
	case config.Minute, config.Hour:
		return Beginning
	}
	if keep.N == 0 {
		return Beginning
	}
	return InstantOf(time.Date(year, month, day, 0, 0, 0, 0, time.UTC))
}

// Kept says how far back the engine knows the slots of an indicator: From is when
// the earliest of them begins, as of the clock At.
type Kept struct {
	From, At Instant
}

// Kept returns that of every indicator that has begun to look.
func (e *Engine) Kept() map[string]Kept {
	all := map[string]Kept{}
	for _, ix := range e.indicators {
		if ix.started && ix.kept != never {
			all[ix.cfg.Name] = Kept{ix.cal.Start(ix.kept), e.clock}
		}
	}
	return all
}

// FirstFull returns when the first window ends that lies whole in what is kept, if
// the window comes into force now, and false for one of the last trials, of which
// that can't be told. For series that began later it is later.
func (k Kept) FirstFull(in *config.Indicator, w *config.Window) (Instant, bool) {
	if w.Trials > 0 {
		return 0, false
	}
	cal := NewCalendar(in.Every, in.Zone)
	boundary := cal.Slot(k.From) + int64(w.Slots)
	boundary += floorMod(cal.phase()-boundary, int64(w.Step))
	return cal.Start(boundary), true
}
