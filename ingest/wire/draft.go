package wire

import (
	"strings"

	"tailbell/monitor"
)

// member is a field of an observation, as a bit.
type member uint

const (
	hasID member = 1 << iota
	hasSeries
	hasStart
	hasEnd
	hasAt
	hasEvents
	hasExposure
	hasRevision
	hasReported
	hasRetracted
	hasTotal
	hasExposureTotal
	hasSince
)

// memberOf returns the bit of a field's name, or 0.
func memberOf(name []byte) member {
	switch string(name) {
	case "id":
		return hasID
	case "series":
		return hasSeries
	case "start":
		return hasStart
	case "end":
		return hasEnd
	case "at":
		return hasAt
	case "events":
		return hasEvents
	case "exposure":
		return hasExposure
	case "revision":
		return hasRevision
	case "reported":
		return hasReported
	case "retracted":
		return hasRetracted
	case "total":
		return hasTotal
	case "exposure_total":
		return hasExposureTotal
	case "since":
		return hasSince
	}
	return 0
}

// draft is an observation while its fields are read.
type draft struct {
	o    *monitor.Observation
	seen member
	// at is the field of this name; start and end go to o.
	at monitor.Instant
	// id and series are texts within the message; they are copied at the end.
	id, series []byte
}

func (w *draft) has(m member) bool { return w.seen&m != 0 }

// isReading reports whether there are fields that only a reading of counters has.
func (w *draft) isReading() bool { return w.seen&(hasTotal|hasExposureTotal|hasSince) != 0 }

// finish checks what the fields say together, and completes the observation.
func (w *draft) finish() *fault {
	if !w.has(hasSeries) {
		return refuse(monitor.BadSeries, "the field series is missing; it names the stream of counts")
	}
	var f *fault
	switch {
	case w.o.Retracted:
		f = w.finishRetraction()
	case w.isReading():
		f = w.finishReading()
	default:
		f = w.finishReport()
	}
	if f != nil {
		return f
	}
	w.o.HasEvents = w.seen&(hasEvents|hasTotal) != 0
	w.o.HasExposure = w.seen&(hasExposure|hasExposureTotal) != 0
	w.o.HasReported = w.has(hasReported)
	w.copyTexts()
	return nil
}

func (w *draft) finishRetraction() *fault {
	const carries = "a retraction carries id, series, revision and, if you like, reported"
	switch {
	case !w.has(hasID):
		return refuse(monitor.BadID, "the field id is missing; %s", carries)
	case !w.has(hasRevision) || w.o.Revision == 0:
		return refuse(monitor.BadRevision, "a retraction needs a revision above that of what it retracts, so at least 1; %s", carries)
	case w.seen&(hasStart|hasEnd|hasAt) != 0:
		return refuse(monitor.BadInterval, "a retraction has no interval; %s", carries)
	case w.has(hasEvents):
		return refuse(monitor.BadEvents, "a retraction has no events; %s", carries)
	case w.has(hasExposure):
		return refuse(monitor.BadExposure, "a retraction has no exposure; %s", carries)
	case w.isReading():
		return refuse(monitor.BadReading, "a retraction has no totals; %s", carries)
	}
	return nil
}

// finishReading completes a reading of counters.
func (w *draft) finishReading() *fault {
	const carries = "a reading carries series, at, total or exposure_total or both and, if you like, since and reported"
	switch {
	case w.seen&(hasTotal|hasExposureTotal) == 0:
		return refuse(monitor.BadReading, "since says when the counting of totals began, but there is none; %s", carries)
	case w.seen&(hasEvents|hasExposure) != 0:
		return refuse(monitor.BadReading, "totals and counts of an interval are given at once; %s", carries)
	case w.seen&(hasID|hasRevision) != 0:
		return refuse(monitor.BadReading, "a reading has no id and no revision, since the next one makes up for it; %s", carries)
	case w.seen&(hasStart|hasEnd|hasAt) != hasAt:
		return refuse(monitor.BadReading, "totals are those of an instant; %s", carries)
	case w.has(hasSince) && w.o.Since > w.at:
		return refuse(monitor.BadReading, "since must not be after at: counting can't have begun later than it was read")
	}
	w.o.Start, w.o.End, w.o.Instant = w.at, w.at, true
	w.o.Reading, w.o.HasSince = true, w.has(hasSince)
	return nil
}

func (w *draft) finishReport() *fault {
	if w.has(hasRevision) && !w.has(hasID) {
		return refuse(monitor.BadRevision, "the field revision needs an id; give the id that it revises, or leave revision out")
	}
	if f := w.finishInterval(); f != nil {
		return f
	}
	if w.seen&(hasEvents|hasExposure) == 0 {
		return refuse(monitor.NothingReported, "neither events nor exposure is given; give at least one, zero included")
	}
	return nil
}

func (w *draft) finishInterval() *fault {
	const forms = "give start and end, or at for an instant"
	switch uint(w.seen & (hasStart | hasEnd | hasAt)) {
	case uint(hasStart | hasEnd):
		if w.o.End <= w.o.Start {
			return refuse(monitor.BadInterval, "end must be after start, by a microsecond or more; for an instant use at")
		}
		return nil
	case uint(hasAt):
		w.o.Start, w.o.End, w.o.Instant = w.at, w.at, true
		return nil
	case 0:
		return refuse(monitor.BadInterval, "no interval is given; %s", forms)
	case uint(hasStart):
		return refuse(monitor.BadInterval, "start is given without end; %s", forms)
	case uint(hasEnd):
		return refuse(monitor.BadInterval, "end is given without start; %s", forms)
	}
	return refuse(monitor.BadInterval, "an instant and an interval are given at once; %s", forms)
}

// copyTexts moves series and id out of the message, in one piece of memory.
func (w *draft) copyTexts() {
	if len(w.id) == 0 {
		w.o.Series = string(w.series)
		return
	}
	var both strings.Builder
	both.Grow(len(w.series) + len(w.id))
	both.Write(w.series)
	both.Write(w.id)
	w.o.Series, w.o.ID = both.String()[:len(w.series)], both.String()[len(w.series):]
}
