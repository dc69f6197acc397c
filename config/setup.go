// Package config turns a TOML file into one validated, immutable set-up.
//
// The set-up says which series are monitored and how: slots, windows, tails,
// baselines and limits. Everything that the rest of the program needs to know
// is resolved here (defaults filled in, zones loaded, spans counted in slots),
// so that no other package ever looks at the text again.
//
// A set-up is never changed once parsed. The same text gives the same set-up
// on every machine; its digest names it in the stream, the store and in every
// alert record.
package config

import "time"

// Setup is one validated set-up. Treat it as immutable.
type Setup struct {
	// Name names the deployment: its streams on the bus and its store.
	Name string
	// Folder holds the store, the lock and the embedded bus; absolute, or
	// relative to the working folder (Load resolves it against the file's).
	Folder string
	// History keeps the daemon in history time: its clock moves only with the
	// data ([time] mode = "history"). Otherwise it goes live once it has read
	// what the stream held at the start.
	History bool
	Bus     Bus
	Limits  Limits
	// Partitions is the number of partitions, 1 by default; KeyParts is how
	// many leading name parts decide a series' partition, 1 by default.
	Partitions int
	KeyParts   int
	Indicators []Indicator
	// Outlets are the ways out beside the bus and the terminal.
	Outlets []Outlet
	// Page is where people look and act; see Page.Served.
	Page Page
	// Text is the file as read and Digest the lower-case hex SHA-256 of it.
	Text   []byte
	Digest string
}

// Bus says which message bus to use.
type Bus struct {
	// URL of a remote bus; empty means the embedded one.
	URL string
	// Credentials is a credentials file, User and PasswordFile an account,
	// and CA, Cert, Key are PEM files for TLS. Files only, never secrets.
	Credentials  string
	User         string
	PasswordFile string
	CA           string
	Cert         string
	Key          string
	// MaxBytes and MaxAge limit the input stream; a full stream refuses what
	// is published (discard new). MaxAge 0 means no limit by age.
	MaxBytes int64
	MaxAge   time.Duration
	// Replicas of the streams on a remote cluster (1 when embedded).
	Replicas int
	// Share lets several processes of the deployment share its partitions. Claim
	// is how long a process's claim on a partition holds that is not renewed, and
	// CopyEvery how often the copy of a partition's store on the bus is made
	// anew; 0 when embedded.
	Share     bool
	Claim     time.Duration
	CopyEvery time.Duration
}

// Limits bound what a daemon holds.
type Limits struct {
	MaxSeries       int   // distinct series
	MaxIDs          int   // observation ids kept at once
	MaxMessageBytes int   // one message on the bus
	MaxObservations int   // observations in one message
	Memory          int64 // estimated bytes above which a set-up is refused
	// Archive is how long slots that no look needs any more are archived, in days
	// at least; N is 0 where all are.
	Archive Every
}

// Measure says what the events are counted against.
type Measure int

// The two measures.
const (
	Rate       Measure = iota // events per exposure, Poisson
	Proportion                // events in trials, binomial
)

// Events says what silence about events means.
type Events int

// The two ways in which events are reported.
const (
	Each    Events = iota // a message per event: silence is zero
	Counted               // counts are reported: silence is missing
)

// Exposure says where the exposure comes from.
type Exposure int

// The sources of exposure that a set-up can name.
const (
	Reported Exposure = iota // observations carry it
	Clock                    // elapsed time times a declared size
	Census                   // the last level that was reported, carried forward
)

// BaselineKind says how the usual rate is known.
type BaselineKind int

// The kinds of baseline.
const (
	Known     BaselineKind = iota // a stated rate
	Reference                     // M events in exposure F
	Trailing                      // what the series itself counted before, a gap away
	Peers                         // what all other series of the indicator counted
)

// Baseline is the usual rate that windows are tested against.
type Baseline struct {
	// Series says which series of the indicator it serves; the first baseline
	// whose pattern matches and that is valid is used.
	Series Pattern
	// Sums, if not zero, says which sums of the indicator it serves, instead of
	// series; a sum is served by the first that serves it by either.
	Sums Pattern
	// From and To bound its validity, zero for open: it judges the windows
	// whose last moment lies in [From, To), so those that end after From and
	// not after To.
	From, To time.Time
	Kind     BaselineKind
	// Rate per unit of exposure (already divided by the indicator's Per), or
	// the usual proportion; for Known.
	Rate float64
	// Events in Exposure (for a proportion the number of trials); for
	// Reference.
	Events   int64
	Exposure Decimal
	// SpanSlots is the length of the history that is counted, in slots; for
	// Trailing and Peers.
	SpanSlots int
	// GapSlots is the guard gap between that history and the window, in slots,
	// so that what is tested is no part of what is usual; for Trailing. It is
	// the longest window unless set.
	GapSlots int
	// Refresh says how often the history is counted anew: 1d, 1w, 1mo, 3mo or
	// 1y, never shorter than a slot; for Trailing and Peers.
	Refresh Every
	// MinEvents is how many events the history must hold: with fewer a look is
	// withheld; for Trailing and Peers.
	MinEvents int64
	// Spread is phi, the variance of the count in a slot over that of the
	// model: over the mean for a rate (negative binomial, constant phi), over
	// the binomial's variance for a proportion (beta-binomial). 1 means none.
	Spread float64
	// Strata, if not nil, are factors of the usual rate by the time of week or
	// year.
	Strata *Strata
	// Delay, if not nil, is how late events are reported.
	Delay *Delay
	// Margin is the ratio to the baseline (rate ratio; for a proportion that
	// is not Known the odds ratio) that is still accepted: 1 means none.
	// Upper tails test ratio <= Margin, lower tails ratio >= 1/Margin.
	Margin float64
	// Version and Source are printed in every alert judged by it.
	Version string
	Source  string
}

// StrataBy says by what strata are told apart.
type StrataBy int

// The ways to tell strata apart, all by the local time at which a slot begins.
const (
	ByHourOfWeek StrataBy = iota // 168, from Monday 00:00
	ByWeekday                    // 7, from Monday
	ByMonth                      // 12, from January
)

// Strata multiply the usual rate, or the odds of the usual proportion, slot by
// slot.
type Strata struct {
	By StrataBy
	// Factors are greater than 0: one for each stratum.
	Factors []float64
}

// Delay is the distribution of how late events become known: the share
// Reported[i] of a slot's events is known at the age Ages[i] after its end.
// Ages increase and begin at 0 or more; shares never fall, and the last is 1.
type Delay struct {
	Ages     []time.Duration
	Reported []float64
}

// Allowance is how many false alerts are accepted: Alerts in every Every, on
// each series or over the whole indicator.
type Allowance struct {
	Alerts       float64
	Every        Every
	PerIndicator bool
	// Assurance is the confidence at which an estimated baseline is taken from
	// its upper bound; 0 takes the average over its uncertainty.
	Assurance float64
	// Reserve is the share that is kept for series yet to come; with
	// PerIndicator only.
	Reserve float64
}

// Window is a rolling span of whole slots, or the last so many trials.
type Window struct {
	// Name is the span as written, e.g. "28d" or "200 trials".
	Name string
	// Slots is the length and Step the distance between two looks, in slots; 0 and 1
	// of the last trials.
	Slots int
	Step  int
	// Trials, if not 0, makes it the last so many trials of a proportion, looked at
	// when events come.
	Trials int64
}

// ClockExposure is Size units of exposure for every Per of elapsed time.
type ClockExposure struct {
	Size Decimal
	Per  time.Duration
}

// Indicator says which series are monitored, and how.
type Indicator struct {
	Name   string
	Series []Pattern
	// Sums are monitored besides, each as a series of its own.
	Sums    []Sum
	Measure Measure
	// Unit names the exposure ("device-days"); Per is the multiple in which
	// rates are shown (1000 for "per 1,000 device-days").
	Unit string
	Per  float64
	// Expected says that the exposure is the number of events that a model of
	// risks lets expect: the rate is observed over expected.
	Expected bool
	// EventNoun names an event in the plural ("line infections"); Title is
	// the indicator's name for people. Both default to Name.
	EventNoun string
	Title     string
	Every     Every
	Zone      *time.Location
	ZoneName  string
	Events    Events
	Exposure  Exposure
	Clock     ClockExposure
	// CensusExpiry is how long a level is carried forward, with Census: after
	// it the exposure is missing.
	CensusExpiry time.Duration
	// GrainDigits is the number of decimal places in which exposure is held
	// exactly: 6 means one millionth. Trials have 0.
	GrainDigits int
	// Settle: how long after its end a slot waits for late data. Horizon: how
	// far back data may change. Ahead: how far in the future it may lie.
	Settle  time.Duration
	Horizon time.Duration
	// FollowUp, if not zero, is how long after its trial an event may come to
	// light; it counts in the trial's slot.
	FollowUp time.Duration
	Ahead    time.Duration
	// KeepIDs is false for ids = "none".
	KeepIDs bool
	// Since, if not zero, is when the series of this indicator begin; else a
	// series begins with its first observation.
	Since time.Time
	// Expect says how long which series may be silent, in order: the first that
	// matches counts.
	Expect []Expectation
	// Remind, if not zero, is how long an alert that nobody acknowledges may
	// signal before the outlet RemindTo (all, if empty) is told again, and
	// again after as much time.
	Remind   time.Duration
	RemindTo string
	// Retire, if not zero, is how long nothing may be heard of a series before it
	// has ended, once nothing of it is left in memory.
	Retire  time.Duration
	Windows []Window
	// SlotLooks are made when slots have settled, ArrivalLooks at each event.
	// At least one is true.
	SlotLooks    bool
	ArrivalLooks bool
	Upper        bool
	Lower        bool
	// PLimit is the p-value at or under which a look signals, for each tail; 0
	// with an Allowance, from which critical counts follow instead.
	PLimit    float64
	Allowance *Allowance
	// Quiet is the number of looks without a signal after which an alert has
	// returned.
	Quiet int
	// Alpha is one minus the confidence of the bounds shown: 0.05 for 95 %.
	Alpha     float64
	Baselines []Baseline
	// Line is where the stanza begins in the file.
	Line int
}

// BaselineAt returns the baseline that judges a window of the series that ends
// at boundary: the first that serves the series and is valid then. It returns
// nil where there is none, and the look is withheld.
func (in *Indicator) BaselineAt(series string, boundary time.Time) *Baseline {
	for i := range in.Baselines {
		b := &in.Baselines[i]
		if b.holds(boundary) && b.Serves(series) {
			return b
		}
	}
	return nil
}

// holds reports whether the baseline is valid for a window that ends at
// boundary.
func (b *Baseline) holds(boundary time.Time) bool {
	return (b.From.IsZero() || boundary.After(b.From)) && (b.To.IsZero() || !boundary.After(b.To))
}

// BaselineFor returns the first baseline that serves the series at any time,
// or nil.
func (in *Indicator) BaselineFor(series string) *Baseline {
	for i := range in.Baselines {
		if in.Baselines[i].Serves(series) {
			return &in.Baselines[i]
		}
	}
	return nil
}

// Matches reports whether one of the indicator's patterns matches the series.
func (in *Indicator) Matches(series string) bool {
	for _, p := range in.Series {
		if p.Match(series) {
			return true
		}
	}
	return false
}
