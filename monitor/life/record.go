// Package life is the life of an alert: a pure state machine, and the record
// that it leaves.
//
// An alert is opened by a look that signals. It may be worsened, has returned
// when enough looks in a row were quiet, is acknowledged by a person, and is
// closed once it has returned and is acknowledged. Data that arrive late can
// open an alert after the fact, correct its evidence, or withdraw it. The
// terms unacknowledged, acknowledged, returned and shelved are those of
// IEC 62682 and ISA-18.2.
//
// A person may shelve an alert until a stated time: it goes on being evaluated
// and recorded, but people are not told. It comes off the shelf by itself when
// the time is over, as a step at that time: unacknowledged if it still signals,
// whatever was acknowledged before, and returned if it does not.
//
// A record holds no wall time, host, partition or batch: the same stream of
// inputs leaves the same records to the byte. A signal is a statistical
// finding: it diagnoses nothing and names no cause.
package life

import "time"

// Condition is where an alert stands.
type Condition string

// The conditions.
const (
	Unacknowledged Condition = "unacknowledged" // signalling, nobody has acknowledged it
	Acknowledged   Condition = "acknowledged"   // signalling, acknowledged
	Returned       Condition = "returned"       // signals no more, not yet acknowledged
	Shelved        Condition = "shelved"        // put aside by a person until a stated time
	Closed         Condition = "closed"         // returned and acknowledged, closed by hand, or no longer monitored
	Withdrawn      Condition = "withdrawn"      // the data were corrected: there was no signal
)

// Direction is the tail in which an alert signals.
type Direction string

// The directions.
const (
	Upper Direction = "upper" // more events than usual
	Lower Direction = "lower" // fewer events than usual
	// Silence is no tail: nothing at all was reported. Such a record has no
	// evidence.
	Silence Direction = "silence"
)

// StepKind says what happened to an alert.
type StepKind string

// The kinds of step.
const (
	StepOpened       StepKind = "opened"
	StepWorsened     StepKind = "worsened"
	StepCorrected    StepKind = "evidence corrected"
	StepReturned     StepKind = "returned"
	StepWithdrawn    StepKind = "withdrawn"
	StepAcknowledged StepKind = "acknowledged"
	StepClosed       StepKind = "closed"
	StepNote         StepKind = "note"
	StepMarked       StepKind = "marked"
	StepShelved      StepKind = "shelved"
	StepUnshelved    StepKind = "unshelved"
)

// Kinds that are no steps of a record: what outlets are told besides.
const (
	StepReminder StepKind = "reminder" // nobody has acknowledged it yet
	StepTest     StepKind = "test"     // a trial of the way out
)

// StepKinds are all kinds of which an outlet may be told, in the order of an
// alert's life.
var StepKinds = []StepKind{
	StepOpened, StepWorsened, StepCorrected, StepReminder, StepAcknowledged, StepShelved, StepUnshelved,
	StepReturned, StepWithdrawn, StepClosed, StepNote, StepMarked,
}

// Mark is what a person says an alert turned out to be.
type Mark string

// The marks. A mark may be changed, and taken back.
const (
	NotMarked    Mark = ""
	MarkReal     Mark = "real"
	MarkChance   Mark = "chance"
	MarkData     Mark = "data error"
	MarkRedefine Mark = "change of definition"
)

// Marks are all marks, in order.
var Marks = []Mark{MarkReal, MarkChance, MarkData, MarkRedefine}

// MarkNames names them all, for messages.
const MarkNames = string(MarkReal + ", " + MarkChance + ", " + MarkData + ", " + MarkRedefine)

// Record is everything that is known of one alert.
type Record struct {
	// ID is short, stable and unique: derived from the series, the direction
	// and the opening look.
	ID        string    `json:"id"`
	Indicator string    `json:"indicator"`
	Title     string    `json:"title"`
	Series    string    `json:"series"`
	Direction Direction `json:"direction"`
	Condition Condition `json:"condition"`
	// Mark is what people say it turned out to be.
	Mark Mark `json:"mark,omitempty"`
	// Shelf says until when it is shelved, nil unless it is.
	Shelf *Shelf `json:"shelf,omitempty"`
	// Number counts the alerts of this series and direction, from 1.
	Number int `json:"number"`
	// Opened is the due time of the opening look. Late says that data which
	// arrived after that look opened it; OpenedAt is then the later moment.
	Opened time.Time `json:"opened"`
	Late   bool      `json:"late"`
	// Zone is the IANA zone in which the indicator keeps its calendar.
	Zone string `json:"zone"`
	// Opening is the evidence that opened it (as corrected since), Worst the
	// strongest so far.
	Opening Evidence `json:"opening,omitzero"`
	Worst   Evidence `json:"worst,omitzero"`
	// Silence says what was expected of a series that is silent, nil else.
	Silence *Heard `json:"silence,omitempty"`
	// Since holds the data after the opening look, free of the choice that
	// the ring made; nil until a later look was made.
	Since *Since `json:"since,omitempty"`
	// IDs are the ids of observations with events in the opening window, up
	// to a cap; MoreIDs counts those beyond it.
	IDs     []string `json:"ids,omitempty"`
	MoreIDs int      `json:"more_ids,omitempty"`
	Steps   []Step   `json:"steps"`
	Caution string   `json:"caution"`
}

// Heard is what is known of a series that has fallen silent.
type Heard struct {
	// Last is when something of it was last counted, nil if nothing ever was.
	Last *time.Time `json:"last_heard,omitempty"`
	// Within is how long it may be silent.
	Within string `json:"expected_within"`
}

// Shelf says who put an alert aside, until when, and why.
type Shelf struct {
	Until time.Time `json:"until"`
	By    string    `json:"by"`
	Why   string    `json:"why"`
}

// Carrier is a member of a sum with the events that it brings: Events in
// Exposure.
type Carrier struct {
	Series   string `json:"series"`
	Events   int64  `json:"events"`
	Exposure string `json:"exposure"`
}

// Evidence is one look that signals: what was seen, what would be usual, and
// how surprising that is.
type Evidence struct {
	Window string `json:"window"` // the span as configured, e.g. 28d
	// From and To bound the window (half-open) in the indicator's zone; Due
	// is when the look was due.
	From time.Time `json:"from"`
	To   time.Time `json:"to"`
	Due  time.Time `json:"due"`
	// Events in Exposure (exact, in Unit), of which LateEvents events came
	// after the look was due.
	Events   int64  `json:"events"`
	Exposure string `json:"exposure"`
	Unit     string `json:"unit"`
	// Weighted is the exposure with each slot multiplied by the factor of its
	// stratum and by the share of its events that can have been reported; nil
	// where that changes nothing.
	Weighted *float64 `json:"weighted_exposure,omitempty"`
	// Wait is how long the events took, for a look that was made when one came;
	// From and To are then moments, and both ends of the span are told to the
	// second: what came at To counts, what came at From does not.
	Wait *Wait `json:"wait,omitempty"`
	// Provisional is how many slots have an exposure that was carried forward.
	Provisional int64 `json:"provisional_slots,omitempty"`
	LateEvents  int64 `json:"late_events"`
	// SignedOff says that people have declared all counts of the window final;
	// AfterSignOff is how many slots changed after that had been said of them.
	SignedOff    bool  `json:"signed_off,omitempty"`
	AfterSignOff int64 `json:"slots_changed_after_sign_off,omitempty"`
	// Shortened is by how many slots the window is shorter than its span, since
	// it does not reach over a reset or a change.
	Shortened int64 `json:"shortened_slots,omitempty"`
	// Carriers are the members of a sum that had the events, those with the
	// most first, up to a cap; MoreCarriers counts those beyond it.
	Carriers     []Carrier `json:"carriers,omitempty"`
	MoreCarriers int       `json:"more_carriers,omitempty"`
	// EventNoun names the events in the plural, e.g. "line infections".
	EventNoun string `json:"event_noun"`
	// Expected events under the baseline.
	Expected float64 `json:"expected"`
	// Rate is Events / Exposure times Per with exact central bounds at
	// 1-Alpha. Ratio is the ratio to the baseline (odds ratio for a
	// proportion against a reference), with exact bounds; RatioUpper is nil
	// where there is no upper bound.
	Measure    string   `json:"measure"`
	Per        float64  `json:"per"`
	Rate       float64  `json:"rate"`
	RateLower  float64  `json:"rate_lower"`
	RateUpper  float64  `json:"rate_upper"`
	RatioKind  string   `json:"ratio_kind"`
	Ratio      *float64 `json:"ratio"`
	RatioLower float64  `json:"ratio_lower"`
	RatioUpper *float64 `json:"ratio_upper"`
	Alpha      float64  `json:"alpha"`
	// Chosen says that the window was chosen because it rang: its bounds
	// overstate. See Record.Since.
	Chosen bool `json:"chosen_because_it_rang"`
	// Test names the exact test; P and Log10P are its one-sided p-value.
	Test   string  `json:"test"`
	P      float64 `json:"p"`
	Log10P float64 `json:"log10_p"`
	// Critical is the count at which this look signals, AttainedSize the
	// chance of that count under the baseline, Limit the p that was allowed:
	// as stated in the set-up, or as it follows from the Allowance.
	Critical     int64      `json:"critical_count"`
	AttainedSize float64    `json:"attained_size"`
	Limit        float64    `json:"p_limit"`
	Allowance    *Allowance `json:"allowance,omitempty"`
	// Baseline says by which usual rate it was judged.
	Baseline Baseline `json:"baseline"`
	// Setup is the version and digest of the set-up in force.
	SetupVersion int    `json:"setup_version"`
	SetupDigest  string `json:"setup_digest"`
	// Recompute is a command line that gives the same numbers.
	Recompute string `json:"recompute"`
}

// StandardisedRatio is the kind of a ratio of observed to expected events.
const StandardisedRatio = "standardised ratio"

// Baseline names the usual rate in a record.
type Baseline struct {
	Kind string `json:"kind"`
	// Rate is the usual rate times Per, or the usual proportion.
	Rate float64 `json:"rate"`
	// Events in Exposure, for a reference.
	Events   int64   `json:"events,omitempty"`
	Exposure string  `json:"exposure,omitempty"`
	Margin   float64 `json:"margin"`
	// Weighted is the exposure with the factors of the strata, where there
	// are any.
	Weighted *float64 `json:"weighted_exposure,omitempty"`
	// From and To bound the history that was counted, for trailing and peers;
	// LeftOut slots of it were marked real.
	From    *time.Time `json:"from,omitempty"`
	To      *time.Time `json:"to,omitempty"`
	LeftOut int64      `json:"slots_left_out,omitempty"`
	// Peers other series were counted, which differ Between times as much as
	// chance alone would make them (variance over mean).
	Peers   int64    `json:"peers,omitempty"`
	Between *float64 `json:"between,omitempty"`
	// Spread is the variance of a slot's count over that of the model.
	Spread float64 `json:"spread,omitempty"`
	// Strata says by what the usual rate is multiplied, Delay that recent
	// slots are thinned by what can have been reported.
	Strata string `json:"strata,omitempty"`
	Delay  bool   `json:"delay,omitempty"`
	// First is the first trailing reference, where this one is a later one: a
	// slow creep shows against it.
	First   *Comparator `json:"first_reference,omitempty"`
	Version string      `json:"version,omitempty"`
	Source  string      `json:"source,omitempty"`
}

// Comparator is an older reference beside the one in force.
type Comparator struct {
	Events   int64     `json:"events"`
	Exposure string    `json:"exposure"`
	From     time.Time `json:"from"`
	To       time.Time `json:"to"`
	// Ratio of the window's rate to this reference's, with exact bounds (for
	// a proportion the odds ratio).
	Ratio      *float64 `json:"ratio"`
	RatioLower float64  `json:"ratio_lower"`
	RatioUpper *float64 `json:"ratio_upper"`
}

// Since is the data after the opening look.
type Since struct {
	From      time.Time `json:"from"`
	To        time.Time `json:"to"`
	Events    int64     `json:"events"`
	Exposure  string    `json:"exposure"`
	Rate      float64   `json:"rate"`
	RateLower float64   `json:"rate_lower"`
	RateUpper *float64  `json:"rate_upper"` // nil where there is no bound (no exposure)
}

// Step is one thing that happened to an alert.
type Step struct {
	Number int       `json:"number"` // from 1
	Kind   StepKind  `json:"kind"`
	At     time.Time `json:"at"` // event time: a look's due time or the partition's clock
	By     string    `json:"by,omitempty"`
	Why    string    `json:"why,omitempty"`
	// Mark is the mark that was set; "" for one taken back.
	Mark Mark `json:"mark,omitempty"`
	// Until is the time up to which it was shelved.
	Until *time.Time `json:"until,omitempty"`
	// Evidence of the look that made the step, where there is one.
	Evidence *Evidence `json:"evidence,omitempty"`
	// Condition after the step.
	Condition Condition `json:"condition"`
}

// Notice is one step of one alert as outlets deliver it: the record as it
// stood after the step, its earlier steps without their evidence. Key is its
// idempotency key.
type Notice struct {
	Key    string `json:"key"`
	Step   Step   `json:"step"`
	Record Record `json:"record"`
	// To names the one outlet that a reminder is meant for; "" for all.
	To string `json:"to,omitempty"`
	// History says that the step was taken in history time: nobody could have
	// acted on it.
	History bool `json:"history,omitempty"`
}

// Quiet reports whether people need not be told: it happened to an alert on
// the shelf.
func (n *Notice) Quiet() bool {
	return n.Step.Condition == Shelved && n.Step.Kind != StepShelved
}

// OpenedAt is the moment at which the alert opened, in event time: that of its
// first step. For one that late data opened it is after Opened. A record
// without its steps gives Opened.
func (r *Record) OpenedAt() time.Time {
	if len(r.Steps) > 0 && r.Steps[0].Kind == StepOpened {
		return r.Steps[0].At
	}
	return r.Opened
}

// Acknowledged reports whether somebody has acknowledged the alert since it
// last began, or came back from the shelf, signalling.
func (r *Record) Acknowledged() bool {
	for i := len(r.Steps) - 1; i >= 0; i-- {
		switch s := &r.Steps[i]; {
		case s.Kind == StepAcknowledged:
			return true
		case s.Kind == StepUnshelved && s.Condition == Unacknowledged:
			return false
		}
	}
	return false
}

// Left reports whether the alert has stopped signalling, on the shelf too.
func (r *Record) Left() bool {
	for i := len(r.Steps) - 1; i >= 0; i-- {
		if r.Steps[i].Kind == StepReturned {
			return true
		}
	}
	return r.Done() || r.Condition == Returned
}

// Done reports whether nothing can happen to the alert any more but what the
// engine does to data inside the horizon.
func (r *Record) Done() bool {
	return r.Condition == Closed || r.Condition == Withdrawn
}
