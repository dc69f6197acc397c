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
}

// Limits bound what a daemon holds.
type Limits struct {
	MaxSeries       int   // distinct series
	MaxIDs          int   // observation ids kept at once
	MaxMessageBytes int   // one message on the bus
	MaxObservations int   // observations in one message
	Memory          int64 // estimated bytes above which a set-up is refused
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
)

// BaselineKind says how the usual rate is known.
type BaselineKind int

// The kinds of baseline.
const (
	Known     BaselineKind = iota // a stated rate
	Reference                     // M events in exposure F
)

// Baseline is the usual rate that windows are tested against.
type Baseline struct {
	// Series says which series of the indicator it serves; the first baseline
	// whose pattern matches is used.
	Series Pattern
	Kind   BaselineKind
	// Rate per unit of exposure (already divided by the indicator's Per), or
	// the usual proportion; for Known.
	Rate float64
	// Events in Exposure (for a proportion the number of trials); for
	// Reference.
	Events   int64
	Exposure Decimal
	// Margin is the ratio to the baseline (rate ratio; for a proportion under
	// Reference the odds ratio) that is still accepted: 1 means none.
	// Upper tails test ratio <= Margin, lower tails ratio >= 1/Margin.
	Margin float64
	// Version and Source are printed in every alert judged by it.
	Version string
	Source  string
}

// Window is a rolling span of whole slots.
type Window struct {
	// Name is the span as written, e.g. "28d".
	Name string
	// Slots is the length and Step the distance between two looks, in slots.
	Slots int
	Step  int
}

// ClockExposure is Size units of exposure for every Per of elapsed time.
type ClockExposure struct {
	Size Decimal
	Per  time.Duration
}

// Indicator says which series are monitored, and how.
type Indicator struct {
	Name    string
	Series  []Pattern
	Measure Measure
	// Unit names the exposure ("device-days"); Per is the multiple in which
	// rates are shown (1000 for "per 1,000 device-days").
	Unit string
	Per  float64
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
	// GrainDigits is the number of decimal places in which exposure is held
	// exactly: 6 means one millionth. Trials have 0.
	GrainDigits int
	// Settle: how long after its end a slot waits for late data. Horizon: how
	// far back data may change. Ahead: how far in the future it may lie.
	Settle  time.Duration
	Horizon time.Duration
	Ahead   time.Duration
	// KeepIDs is false for ids = "none".
	KeepIDs bool
	// Since, if not zero, is when the series of this indicator begin; else a
	// series begins with its first observation.
	Since time.Time
	// Expect, if not zero, is the longest silence of a series that is not
	// made a condition.
	Expect  time.Duration
	Windows []Window
	Upper   bool
	Lower   bool
	// PLimit is the p-value at or under which a look signals, for each tail.
	PLimit float64
	// Quiet is the number of looks without a signal after which an alert has
	// returned.
	Quiet int
	// Alpha is one minus the confidence of the bounds shown: 0.05 for 95 %.
	Alpha     float64
	Baselines []Baseline
	// Line is where the stanza begins in the file.
	Line int
}

// BaselineFor returns the baseline that serves the series, or nil.
func (in *Indicator) BaselineFor(series string) *Baseline {
	for i := range in.Baselines {
		if in.Baselines[i].Series.Match(series) {
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
