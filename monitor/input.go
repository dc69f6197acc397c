package monitor

import (
	"tailbell/config"
	"tailbell/monitor/life"
)

// Message is one message of a partition's stream, decoded. The stream of
// messages is the only input of an Engine.
type Message struct {
	// Position is the message's sequence in the stream, from 1.
	Position uint64
	// Stored is when the bus stored it.
	Stored Instant
	// Time is the history time given in its header, if HasTime.
	Time    Instant
	HasTime bool
	// Carried says that a division carried it over from partitions that had it before:
	// what others tell of its time stands in the stream, too.
	Carried bool
	// Exactly one of the following is set, according to Kind.
	Kind    Kind
	Items   []Item
	Act     Act
	Setting Setting
	Summary *Summary
}

// Kind is the kind of a message.
type Kind int

// The kinds of message.
const (
	// Observations carries observations, some of them perhaps refused by the
	// decoder.
	Observations Kind = iota
	// ActMessage carries something that a person did.
	ActMessage
	// SettingMessage carries a new set-up.
	SettingMessage
	// Tick carries nothing but its time, so that looks fall due in silence.
	Tick
	// Live is a tick that ends history time for good.
	Live
	// SummaryMessage carries what another partition has to tell to gathered sums.
	SummaryMessage
	// Rejected is a message that as a whole could not be understood; its one
	// item is the refusal.
	Rejected
)

// Item is one element of a message: an observation, or the reason why it is
// none. Raw holds the element's own bytes, kept only if it is refused.
type Item struct {
	Observation Observation
	Reason      Reason // "" if the observation was understood
	Detail      string // what is wrong and how to mend it
	Raw         []byte
}

// Observation is so many events and so much exposure of a series over an
// interval. Absent is not zero. If it is a Reading of counters, it is of an instant,
// and both are what was counted so far.
type Observation struct {
	Series string
	// ID with Revision names the observation under the series' leading name
	// part; "" for none.
	ID        string
	Revision  int64
	Retracted bool
	// Start and End bound the half-open interval; both are equal for an
	// instant.
	Start, End  Instant
	Instant     bool
	Events      int64
	HasEvents   bool
	Exposure    config.Decimal
	HasExposure bool
	// Reading says that events and exposure are totals up to the instant, since
	// Since, if HasSince.
	Reading  bool
	Since    Instant
	HasSince bool
	// Reported is when it became known, if HasReported.
	Reported    Instant
	HasReported bool
}

// HistoryTime is when the observation becomes known to a replay: its reported
// time, else the end of its interval.
func (o *Observation) HistoryTime() Instant {
	if o.HasReported {
		return o.Reported
	}
	return o.End
}

// timeOf is when an observation of the message became known, in history time;
// Beginning if nothing says so.
func (m *Message) timeOf(o *Observation) Instant {
	switch {
	case m.HasTime:
		return m.Time
	case o.HasReported || !o.Retracted:
		return o.HistoryTime()
	}
	return Beginning
}

// Reason is a stable code that says why something was refused.
type Reason string

// Reasons given by the decoder.
const (
	NotJSON         Reason = "not_json"         // not a JSON value, array of values or lines of values
	NotUTF8         Reason = "not_utf8"         // text that is not UTF-8
	TooLarge        Reason = "too_large"        // message or element over the size limit
	TooDeep         Reason = "too_deep"         // nesting deeper than the contract has
	TooMany         Reason = "too_many"         // more observations in a message than the limit
	NotObject       Reason = "not_object"       // an element that is no JSON object
	DuplicateField  Reason = "duplicate_field"  // a field given twice
	UnknownField    Reason = "unknown_field"    // a field that the contract lacks
	BadSeries       Reason = "bad_series"       // no series, or not a valid name
	BadID           Reason = "bad_id"           // id empty, too long or with control characters
	BadRevision     Reason = "bad_revision"     // revision without id, or not a whole number from 0
	BadTime         Reason = "bad_time"         // not RFC 3339 with an offset, or out of range
	BadInterval     Reason = "bad_interval"     // no interval, both forms, or an end that is not after its start
	BadEvents       Reason = "bad_events"       // not a whole number from 0
	BadExposure     Reason = "bad_exposure"     // not a decimal number from 0 that can be held exactly
	NothingReported Reason = "nothing_reported" // neither events nor exposure
	BadReading      Reason = "bad_reading"      // totals beside what does not go with them
	BadEnvelope     Reason = "bad_envelope"     // a CloudEvent that breaks its specification
	BadAct          Reason = "bad_act"          // an act that can't be understood
	BadSetting      Reason = "bad_setting"      // a set-up that doesn't validate
	BadSubject      Reason = "bad_subject"      // a subject that means nothing here
	BadHeader       Reason = "bad_header"       // a header that can't be understood
	BadSummary      Reason = "bad_summary"      // a summary of a partition that can't be understood, or is not for this one
)

// Reasons given by the engine.
const (
	Ambiguous       Reason = "ambiguous"         // a series of two indicators
	Stray           Reason = "stray"             // a series of another partition
	Conflict        Reason = "conflict"          // same id and revision, other content
	NoSuchID        Reason = "no_such_id"        // a retraction of something never counted
	IDsFull         Reason = "ids_full"          // no room for another id
	SeriesFull      Reason = "series_full"       // no room for another series
	BeyondHorizon   Reason = "beyond_horizon"    // lies further back than data may change
	TooFarAhead     Reason = "too_far_ahead"     // lies further in the future than is allowed
	SpansSlots      Reason = "spans_slots"       // events or trials over several slots
	InstantExposure Reason = "instant_exposure"  // exposure over an instant
	NeedsInstant    Reason = "needs_instant"     // events over an interval, where looks are made at their instants
	FinerThanGrain  Reason = "finer_than_grain"  // exposure with more decimals than are held
	ExposureNotUsed Reason = "exposure_not_used" // exposure for an indicator that takes it from the clock
	TooBig          Reason = "too_big"           // a sum that would not fit
	NoSuchAlert     Reason = "no_such_alert"     // an act on an alert that is unknown or done
	NoSuchSeries    Reason = "no_such_series"    // an act on series that are unknown
	NotAllowed      Reason = "not_allowed"       // an act that the alert's condition doesn't allow
	NeedsRebuild    Reason = "needs_rebuild"     // a set-up that a running store can't take
	SeriesClosed    Reason = "series_closed"     // a count of a time for which its series was closed
	NeedsCounted    Reason = "needs_counted"     // totals of events, where silence is zero
	SummaryGap      Reason = "summary_gap"       // a summary of a partition before this one never came
)

// Act is something a person did.
type Act struct {
	Kind ActKind
	// Alert is the alert's id; or Series and Direction name the alert of that
	// series which is not done.
	Alert     string
	Series    string
	Direction life.Direction
	Mark      life.Mark // what a mark says; "" takes it back
	By        string    // who
	Why       string    // the reason, or the note's text
	Until     Instant   // when what was shelved comes back, or where a span ends
	// The rest is of acts on series: Series is a pattern then. From is when
	// it begins to hold, What a change is, and Side the side that is final.
	// Straddle says that windows may reach over the change.
	From     Instant
	What     ChangeKind
	Into     string // the series that takes their place
	Side     Side
	Straddle bool
	// At is the act's own time, used in history time; if HasAt.
	At    Instant
	HasAt bool
	// Raw holds the original bytes, kept only if the act is refused.
	Raw []byte
}

// ActKind is the kind of an act.
type ActKind int

// The kinds of act.
const (
	Acknowledge ActKind = iota
	Close
	Note
	Mark
	Shelve
	Unshelve
)

// The kinds of act on series: they hold from a date on, or for a span.
const (
	Reset         ActKind = iota + 16 // counts begin again
	Change                            // something else was counted from then on
	OutOfService                      // not looked at for a span
	BackInService                     // earlier than was said
	SignOff                           // the counts of a span are final
)

// SeriesActKinds are all kinds of act on series.
var SeriesActKinds = []ActKind{Reset, Change, OutOfService, BackInService, SignOff}

// OnSeries reports whether the act is on series rather than on an alert.
func (k ActKind) OnSeries() bool { return k >= Reset }

// ChangeKind says what changed.
type ChangeKind string

// The kinds of change.
const (
	CaseDefinition ChangeKind = "case definition" // what counts as an event
	Method         ChangeKind = "method"          // how it is found or counted
	Opening        ChangeKind = "opening"         // the series begins
	Closing        ChangeKind = "closing"         // the series ends
	Renamed        ChangeKind = "renamed"         // it goes on under another name
	Merged         ChangeKind = "merged"          // several go on as one
)

// ChangeKinds are all kinds of change.
var ChangeKinds = []ChangeKind{CaseDefinition, Method, Opening, Closing, Renamed, Merged}

// Side is a side of a count, or both.
type Side string

// The sides.
const (
	BothSides    Side = "both"
	EventsSide   Side = "events"
	ExposureSide Side = "exposure"
)

// Sides are all that can be signed off.
var Sides = []Side{BothSides, EventsSide, ExposureSide}

// ActKinds are all kinds of act on an alert.
var ActKinds = []ActKind{Acknowledge, Close, Note, Mark, Shelve, Unshelve}

// String returns the kind as written in messages.
func (k ActKind) String() string {
	switch k {
	case Acknowledge:
		return "acknowledge"
	case Close:
		return "close"
	case Note:
		return "note"
	case Mark:
		return "mark"
	case Shelve:
		return "shelve"
	case Unshelve:
		return "unshelve"
	case Reset:
		return "reset"
	case Change:
		return "change"
	case OutOfService:
		return "out of service"
	case BackInService:
		return "back in service"
	case SignOff:
		return "sign off"
	}
	return "unknown act"
}

// Setting is a new set-up.
type Setting struct {
	Setup *config.Setup
}
