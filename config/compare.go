package config

import (
	"fmt"
	"slices"
	"strings"
	"time"
)

// Class says what a change of the set-up means for a running store.
type Class int

// The classes of change, from the least to the most.
const (
	// NextLook is in force from the next look on.
	NextLook Class = iota
	// Filling needs data that were not kept: nothing is looked at until they
	// have come in.
	Filling
	// Restart is in force when the daemon is next started.
	Restart
	// Rebuild contradicts what the store holds: it is refused unless the store
	// is built anew from the stream.
	Rebuild
)

// String returns the class as people read it.
func (c Class) String() string {
	switch c {
	case NextLook:
		return "next look"
	case Filling:
		return "filling"
	case Restart:
		return "restart"
	case Rebuild:
		return "rebuild"
	}
	return fmt.Sprintf("Class(%d)", int(c))
}

// Change is one difference between two set-ups.
type Change struct {
	// Key is the dotted key, an indicator by its name: "indicator[falls].every".
	Key   string
	Class Class
	// Old and New are the values as text; empty where there was or is none.
	Old, New string
	// Effect says in a plain sentence what will happen, where the class alone
	// doesn't.
	Effect string
	// Window is the window that comes in; nil for all other changes.
	Window *Window
}

// String returns the change on one line.
func (c Change) String() string {
	text := fmt.Sprintf("%s: %s -> %s (%s)", c.Key, orNothing(c.Old), orNothing(c.New), c.Class)
	if c.Effect != "" {
		text += ": " + c.Effect
	}
	return text
}

func orNothing(s string) string {
	if s == "" {
		return "nothing"
	}
	return s
}

// Compare returns what changes from one set-up to the next, in the order of
// README.md's tables of keys. Indicators are the same if they have the same
// name. Comments and layout are no changes.
func Compare(old, next *Setup) []Change {
	var c comparison
	c.setup(old, next)
	for i := range old.Indicators {
		before := &old.Indicators[i]
		c.path = "indicator[" + before.Name + "]"
		if after := next.indicator(before.Name); after != nil {
			c.indicator(before, after)
			continue
		}
		c.add(Change{
			Key: c.path, Class: NextLook, Old: before.Title,
			Effect: "its series are no longer monitored, and its alerts close as such",
		})
	}
	for i := range next.Indicators {
		after := &next.Indicators[i]
		if old.indicator(after.Name) == nil {
			c.add(Change{
				Key: "indicator[" + after.Name + "]", Class: Filling, New: after.Title,
				Effect: "its series begin with what arrives from now on, and are looked at when a window is full",
			})
		}
	}
	return c.changes
}

func (s *Setup) indicator(name string) *Indicator {
	for i := range s.Indicators {
		if s.Indicators[i].Name == name {
			return &s.Indicators[i]
		}
	}
	return nil
}

// comparison gathers changes below a path.
type comparison struct {
	changes []Change
	path    string
}

func (c *comparison) add(ch Change) { c.changes = append(c.changes, ch) }

// value compares one key by its text.
func (c *comparison) value(key string, class Class, old, next any, effect string) {
	before, after := fmt.Sprint(old), fmt.Sprint(next)
	if before == after {
		return
	}
	if c.path != "" {
		key = c.path + "." + key
	}
	c.add(Change{Key: key, Class: class, Old: before, New: after, Effect: effect})
}

// outlets are no part of what a store holds: a change is in force when the
// daemon reads the set-up.
func (c *comparison) outlets(a, b []Outlet) {
	named := func(list []Outlet, name string) (o Outlet, found bool) {
		i := slices.IndexFunc(list, func(o Outlet) bool { return o.Name == name })
		if i < 0 {
			return o, false
		}
		return list[i], true
	}
	for _, before := range a {
		c.path = "outlet[" + before.Name + "]"
		after, found := named(b, before.Name)
		if !found {
			c.add(Change{Key: c.path, Class: NextLook, Old: before.Kind.String(), Effect: "what waits for it stays undelivered until it is dropped"})
			continue
		}
		c.value("kind", NextLook, before.Kind, after.Kind, "")
		c.outlet(&before, &after)
	}
	for _, after := range b {
		if _, found := named(a, after.Name); !found {
			c.add(Change{Key: "outlet[" + after.Name + "]", Class: NextLook, New: after.Kind.String(), Effect: "it begins with the oldest step still kept"})
		}
	}
}

func (c *comparison) setup(a, b *Setup) {
	c.value("name", Rebuild, a.Name, b.Name, "another name is another deployment, with its own streams and store")
	c.value("folder", Restart, a.Folder, b.Folder, "the store must be moved there first")
	c.value("partitions", Rebuild, a.Partitions, b.Partitions, "\"tailbell partitions divide\" carries the stream over, while no daemon runs")
	c.value("key_parts", Rebuild, a.KeyParts, b.KeyParts, "")
	c.value("time.mode", Restart, modeWord(a), modeWord(b), "")
	c.path = "bus"
	c.value("url", Restart, a.Bus.URL, b.Bus.URL, "")
	c.value("credentials", Restart, a.Bus.Credentials, b.Bus.Credentials, "")
	c.value("user", Restart, a.Bus.User, b.Bus.User, "")
	c.value("password_file", Restart, a.Bus.PasswordFile, b.Bus.PasswordFile, "")
	c.value("ca", Restart, a.Bus.CA, b.Bus.CA, "")
	c.value("cert", Restart, a.Bus.Cert, b.Bus.Cert, "")
	c.value("key", Restart, a.Bus.Key, b.Bus.Key, "")
	c.value("max_bytes", Restart, exactSize(a.Bus.MaxBytes), exactSize(b.Bus.MaxBytes), "")
	c.value("max_age", Restart, FormatDuration(a.Bus.MaxAge), FormatDuration(b.Bus.MaxAge), "")
	c.value("replicas", Restart, a.Bus.Replicas, b.Bus.Replicas, "")
	c.value("share", Restart, a.Bus.Share, b.Bus.Share, "")
	c.value("claim", Restart, FormatDuration(a.Bus.Claim), FormatDuration(b.Bus.Claim), "")
	c.value("copy_every", Restart, FormatDuration(a.Bus.CopyEvery), FormatDuration(b.Bus.CopyEvery), "")
	c.page(a.Page, b.Page)
	c.outlets(a.Outlets, b.Outlets)
	c.path = "limits"
	c.value("max_series", NextLook, a.Limits.MaxSeries, b.Limits.MaxSeries, "")
	c.value("max_ids", NextLook, a.Limits.MaxIDs, b.Limits.MaxIDs, "")
	c.value("max_message", Restart, exactSize(int64(a.Limits.MaxMessageBytes)), exactSize(int64(b.Limits.MaxMessageBytes)), "")
	c.value("max_observations", NextLook, a.Limits.MaxObservations, b.Limits.MaxObservations, "")
	c.value("memory", NextLook, exactSize(a.Limits.Memory), exactSize(b.Limits.Memory), "")
	c.archive(a.Limits.Archive, b.Limits.Archive)
	c.path = ""
}

// page is no part of what a store holds. Who the users are is no part of the
// set-up: that is in force at once.
func (c *comparison) page(a, b Page) {
	c.path = "page"
	c.value("listen", Restart, a.Listen, b.Listen, "")
	c.value("url", Restart, a.URL, b.URL, "")
	c.value("users", Restart, a.Users, b.Users, "")
	c.value("cert", Restart, a.Cert, b.Cert, "")
	c.value("key", Restart, a.Key, b.Key, "")
}

func modeWord(s *Setup) string {
	if s.History {
		return "history"
	}
	return "live"
}

func (c *comparison) indicator(a, b *Indicator) {
	c.value("title", NextLook, a.Title, b.Title, "")
	c.value("noun", NextLook, a.EventNoun, b.EventNoun, "")
	c.series(a, b)
	c.value("sums", Rebuild, sumsText(a), sumsText(b), "")
	c.value("measure", Rebuild, measureWord(a), measureWord(b), "")
	c.value("unit", NextLook, a.Unit, b.Unit, "a name only: exposure that was counted is not converted")
	c.value("per", NextLook, a.Per, b.Per, "")
	c.value("expected", NextLook, a.Expected, b.Expected, "a name only: exposure that was counted is not converted")
	c.value("every", Rebuild, a.Every, b.Every, "")
	c.value("zone", Rebuild, a.ZoneName, b.ZoneName, "")
	c.value("events", Rebuild, eventsWord(a), eventsWord(b), "")
	c.value("exposure", Rebuild, exposureWord(a), exposureWord(b), "")
	c.value("clock", Rebuild, clockText(a), clockText(b), "")
	c.value("settle", NextLook, FormatDuration(a.Settle), FormatDuration(b.Settle), "")
	c.value("follow_up", NextLook, FormatDuration(a.FollowUp), FormatDuration(b.FollowUp), "")
	c.horizon(a, b)
	c.value("ahead", NextLook, FormatDuration(a.Ahead), FormatDuration(b.Ahead), "")
	c.value("grain", Rebuild, grainText(a), grainText(b), "")
	c.value("ids", Rebuild, idsWord(a), idsWord(b), "")
	c.value("expires", NextLook, expiryText(a), expiryText(b), "")
	c.value("since", Rebuild, sinceText(a), sinceText(b), "")
	c.value("expect", NextLook, expectText(a), expectText(b), "")
	c.value("remind", NextLook, FormatDuration(a.Remind), FormatDuration(b.Remind), "")
	c.value("remind_to", NextLook, a.RemindTo, b.RemindTo, "")
	c.value("retire", NextLook, FormatDuration(a.Retire), FormatDuration(b.Retire), "")
	c.windows(a, b)
	c.looks(a, b)
	c.value("tails", NextLook, strings.Join(tailWords(a), ", "), strings.Join(tailWords(b), ", "), "")
	c.value("p_limit", NextLook, unlessZero(a.PLimit), unlessZero(b.PLimit), "")
	c.allowance(a.Allowance, b.Allowance)
	c.value("quiet", NextLook, a.Quiet, b.Quiet, "")
	c.value("alpha", NextLook, a.Alpha, b.Alpha, "")
	c.baselines(a, b)
}

func (c *comparison) series(a, b *Indicator) {
	var gone, come []string
	for _, p := range a.Series {
		if !slices.Contains(b.Series, p) {
			gone = append(gone, p.String())
		}
	}
	for _, p := range b.Series {
		if !slices.Contains(a.Series, p) {
			come = append(come, p.String())
		}
	}
	switch {
	case len(come) > 0:
		c.value("series", Filling, strings.Join(gone, ", "), strings.Join(come, ", "), "series that are newly matched begin with what arrives from now on; one that is known already stays with its indicator")
	case len(gone) > 0:
		c.value("series", NextLook, strings.Join(gone, ", "), "", "a series that is known already stays with its indicator; one that comes is no longer monitored")
	}
}

func (c *comparison) horizon(a, b *Indicator) {
	class, effect := NextLook, "older data are refused from now on"
	if b.Horizon > a.Horizon {
		class, effect = Filling, "what the shorter horizon has given up stays so: the longer one is in full force once its own length has passed"
	}
	c.value("horizon", class, FormatDuration(a.Horizon), FormatDuration(b.Horizon), effect)
}

func (c *comparison) windows(a, b *Indicator) {
	for _, w := range a.Windows {
		switch after := windowOf(b, &w); {
		case after == nil:
			c.value("windows", NextLook, windowText(&w), "", "it is looked at no longer, and has no say any more in whether an alert still signals")
		case after.Step != w.Step:
			c.value("windows", NextLook, windowText(&w), windowText(after), "its looks begin anew: until the first of them it has no say in whether an alert still signals")
		default:
			c.value("windows", NextLook, windowText(&w), windowText(after), "")
		}
	}
	for _, w := range b.Windows {
		if windowOf(a, &w) == nil {
			c.value("windows", Filling, "", windowText(&w), "it is looked at once what is kept and what comes fill it")
			c.changes[len(c.changes)-1].Window = &w
		}
	}
}

// windowOf is the window of the same length, nil if there is none.
func windowOf(in *Indicator, w *Window) *Window {
	for i := range in.Windows {
		if in.Windows[i].Slots == w.Slots && in.Windows[i].Trials == w.Trials {
			return &in.Windows[i]
		}
	}
	return nil
}

func windowText(w *Window) string {
	if w.Trials > 0 {
		return "the last " + w.Name
	}
	if w.Step == 1 {
		return w.Name + ", a look every slot"
	}
	return fmt.Sprintf("%s, a look every %d slots", w.Name, w.Step)
}

func measureWord(in *Indicator) string {
	if in.Measure == Proportion {
		return "proportion"
	}
	return "rate"
}

func eventsWord(in *Indicator) string {
	if in.Events == Counted {
		return "counted"
	}
	return "each"
}

func exposureWord(in *Indicator) string {
	switch in.Exposure {
	case Reported:
		return "reported"
	case Clock:
		return "clock"
	case Census:
		return "census"
	}
	return ""
}

func expiryText(in *Indicator) string {
	if in.Exposure != Census {
		return ""
	}
	return FormatDuration(in.CensusExpiry)
}

func idsWord(in *Indicator) string {
	if in.KeepIDs {
		return "kept"
	}
	return "none"
}

func tailWords(in *Indicator) []string {
	var words []string
	if in.Upper {
		words = append(words, "upper")
	}
	if in.Lower {
		words = append(words, "lower")
	}
	return words
}

func clockText(in *Indicator) string {
	if in.Exposure != Clock {
		return ""
	}
	return fmt.Sprintf("%s in %s", in.Clock.Size, FormatDuration(in.Clock.Per))
}

func grainText(in *Indicator) string {
	return Decimal{Coef: 1, Digits: uint8(in.GrainDigits)}.String()
}

func sinceText(in *Indicator) string {
	if in.Since.IsZero() {
		return ""
	}
	return in.Since.UTC().Format(time.RFC3339Nano)
}
