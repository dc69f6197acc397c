// Package ordeal invents the input of an ordeal: a plan of messages with all
// that goes wrong between people and machines, drawn from a seed, which a
// publisher sends while the daemon and the bus are killed, cut off and robbed of
// their disks. What a store must hold in the end follows from the messages
// alone (rehearse.Reckon).
//
// # Model
//
// Two invented sites, one for each of two partitions, or as many as are asked
// for, report every day on three indicators in three wards. Reports are late, corrected, moved between wards,
// retracted, sent again, contradicted, and refused for all sorts of reasons;
// people act on alerts; now and then the set-up changes. Excesses are planted
// often, so that there is something to ring about.
//
// # Caveats
//
// An element that is refused or counted is so whenever it comes within minutes
// of its place in the plan: an element that lies ahead or behind does so by far.
// So a publisher may send a window of messages again as a whole, with what lies
// between.
package ordeal

import (
	"bytes"
	"cmp"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"time"

	"tailbell/config"
	"tailbell/monitor/rehearse"
)

// Kind is what a message carries.
type Kind int

// The kinds of message.
const (
	Observations Kind = iota
	Act
	Setting // the daemon announces it
	Tick    // nothing but its time
)

// Message is one message of a plan.
type Message struct {
	Kind      Kind
	Partition int
	Data      []byte
	Elements  []rehearse.Element
	// Repeatable says that sending it twice changes no more than how many
	// repeats are counted.
	Repeatable bool
	// Setup is the number of the set-up, for a Setting.
	Setup int

	at time.Time
}

// Time is when the message comes about in the plan's own time. A Tick says nothing
// else.
func (m *Message) Time() time.Time { return m.at }

// Plan is what is to be sent, in order. Its first message is a Setting.
type Plan struct {
	Messages []Message
	// Setups are the texts of the set-ups without the line of their folder and
	// what else the caller adds.
	Setups [][]byte
	Rules  []rehearse.Rule
}

// Options say how long a plan is and what it may hold.
type Options struct {
	Days int
	// Settings is how often the set-up changes after the first.
	Settings int
	// IDsOnly leaves out the indicator that keeps no ids.
	IDsOnly bool
	// Sites is how many sites report, over so many Partitions; 0 for the two of
	// Sites, each in a partition of its own. Every site has nine series, or six
	// with IDsOnly.
	Sites, Partitions int
	// Across has slips judged by their peers, and falls by an allowance for all of
	// them, wherever they lie. Every partition hears a Tick each day, and some at the
	// end: those that nobody reports to would have the others wait.
	Across bool
}

const (
	day     = 24 * time.Hour
	horizon = 60 * day
	ahead   = 2 * day
	// spell is the longest time after a report in which something more is said
	// of it: well inside the horizon.
	spell = 8
)

// Sites are the leading name parts, one for each partition.
var Sites = sites()

// sites returns two names that lie in partitions 0 and 1.
func sites() [2]string {
	var found [2]string
	for i := 25; i >= 0; i-- {
		name := "quillmere-" + string(rune('a'+i))
		found[config.PartitionOf(name+"/x", 1, 2)] = name
	}
	return found
}

// Generate draws a plan. The same seed and options give the same plan to the
// byte.
func Generate(seed uint64, o Options) (*Plan, error) {
	zone, err := config.LoadZone("Europe/Berlin")
	if err != nil {
		return nil, fmt.Errorf("the plan lies in Europe/Berlin: %w", err)
	}
	p := &Plan{Rules: []rehearse.Rule{
		{LastPart: "line-infection", Slots: rehearse.Daily, Zone: zone, Grain: rehearse.Millionth, Horizon: horizon, Ahead: ahead},
		{LastPart: "fall", Slots: rehearse.Daily, Zone: zone, Each: true, Grain: rehearse.Millionth, Horizon: horizon, Ahead: ahead},
		{LastPart: "slip", Slots: rehearse.Daily, Zone: zone, NoIDs: true, Grain: rehearse.Millionth, Horizon: horizon, Ahead: ahead},
	}}
	names := Sites[:]
	if o.Sites > 0 {
		names = nil
		for i := range o.Sites {
			names = append(names, fmt.Sprintf("quillmere-%d", i))
		}
	}
	o.Partitions = max(o.Partitions, 2)
	for i := range o.Settings + 1 {
		p.Setups = append(p.Setups, setup(i, &o))
	}
	for _, site := range names {
		partition := config.PartitionOf(site, 1, o.Partitions)
		a := author{r: rehearse.Source(seed, site), site: site, zone: zone, days: o.Days, idsOnly: o.IDsOnly}
		messages, err := a.write(partition)
		if err != nil {
			return nil, err
		}
		p.Messages = append(p.Messages, messages...)
	}
	if o.Across {
		p.Messages = append(p.Messages, ticks(&o, zone)...)
	}
	slices.SortStableFunc(p.Messages, func(a, b Message) int { return a.at.Compare(b.at) })
	r := rehearse.Source(seed, "settings")
	for i := o.Settings; i > 0; i-- {
		place := len(p.Messages)*i/(o.Settings+1) + r.IntN(5)
		p.Messages = slices.Insert(p.Messages, place, Message{Kind: Setting, Setup: i})
	}
	p.Messages = slices.Insert(p.Messages, 0, Message{Kind: Setting})
	return p, nil
}

// ticks end each day in every partition, until nothing more is reported.
func ticks(o *Options, zone *time.Location) (all []Message) {
	a := author{zone: zone}
	for n := range o.Days + 8*spell {
		for partition := range o.Partitions {
			all = append(all, Message{Kind: Tick, Partition: partition, Repeatable: true, at: a.date(n).Add(20 * time.Hour)})
		}
	}
	return all
}

// setup is the text of a set-up; they differ in what may change while a store
// runs.
func setup(number int, o *Options) []byte {
	quiet := []int{7, 3, 10}[number%3]
	limit := "p_limit = " + []string{"0.01", "0.002", "0.03"}[number%3]
	const known = "kind = \"known\"\nrate = 10\nversion = \"1\"\nsource = \"invented\"\n"
	var b bytes.Buffer
	fmt.Fprintf(&b, "name = \"ordeal\"\npartitions = %d\n\n[time]\nmode = \"history\"\n\n[limits]\nmax_series = %d\nmax_ids = %d\n",
		o.Partitions, max(200, 12*o.Sites), max(200_000, 10*o.Days*o.Sites))
	limits, baselines := map[string]string{}, map[string]string{}
	if o.Across {
		limits["fall"] = fmt.Sprintf("allowance = \"%d in 1y\"\nallowance_for = \"indicator\"", []int{200, 100, 400}[number%3])
		baselines["slip"] = "kind = \"peers\"\nspan = \"14d\"\nrefresh = \"1w\"\n"
	}
	for _, in := range []struct{ name, events, ids, tails string }{
		{"line-infection", "counted", "kept", `"upper"`},
		{"fall", "each", "kept", `"upper", "lower"`},
		{"slip", "counted", "none", `"upper"`},
	} {
		fmt.Fprintf(&b, `
[[indicator]]
name = %q
series = ["quillmere-*/*/%s"]
unit = "bed-days"
per = 1000
every = "1d"
zone = "Europe/Berlin"
events = %q
ids = %q
settle = "2d"
horizon = "60d"
ahead = "2d"
windows = ["7d", "28d"]
tails = [%s]
%s
quiet = %d

[indicator.baseline]
%s`, in.name, in.name, in.events, in.ids, in.tails, cmp.Or(limits[in.name], limit), quiet, cmp.Or(baselines[in.name], known))
	}
	return b.Bytes()
}

// author writes what one site sends.
type author struct {
	r       *rand.Rand
	site    string
	zone    *time.Location
	days    int
	idsOnly bool
	sent    []rehearse.Element
	acts    []Message
	seconds map[int64]int
}

func (a *author) write(partition int) ([]Message, error) {
	a.seconds = map[int64]int{}
	for ward := range 3 {
		for _, indicator := range []string{"line-infection", "fall", "slip"} {
			if indicator == "slip" && a.idsOnly {
				continue
			}
			a.series(fmt.Sprintf("%s/ward-%d/%s", a.site, ward+1, indicator), indicator)
		}
	}
	for n := 5; n < a.days; n += rehearse.Between(a.r, 1, 4) {
		a.rubbish(n)
	}
	for n := 10; n < a.days; n += rehearse.Between(a.r, 1, 5) {
		if err := a.act(n); err != nil {
			return nil, err
		}
	}
	return a.pack(partition), nil
}

// date is the midnight that begins day n.
func (a *author) date(n int) time.Time { return time.Date(2025, 1, 1+n, 0, 0, 0, 0, a.zone) }

// morning is the next free second on the morning of day n.
func (a *author) morning(n int) time.Time {
	t := a.date(n).Add(8 * time.Hour)
	a.seconds[int64(n)]++
	return t.Add(time.Duration(a.seconds[int64(n)]) * time.Second)
}

func (a *author) send(e *rehearse.Element, n int) {
	e.Sent = a.morning(n)
	if e.Reported.IsZero() {
		e.Reported = e.Sent
	}
	a.sent = append(a.sent, *e)
}

// series writes the reports of one series, an excess now and then.
func (a *author) series(name, indicator string) {
	until, factor := 0, 1.0
	for n := range a.days {
		if n >= until {
			until, factor = n+rehearse.Between(a.r, 10, 40), []float64{1, 1, 4, 0.2, 8}[a.r.IntN(5)]
		}
		beds := rehearse.Amount(rehearse.Between(a.r, 180, 320)) * rehearse.Tenth
		events := rehearse.Poisson(a.r, 0.01*factor*float64(beds)/float64(rehearse.One))
		a.report(a.element(name, n, "e"), n, beds)
		if indicator != "fall" {
			e := a.element(name, n, "n")
			e.Events, e.HasEvents = events, true
			a.report(e, n, 0)
			continue
		}
		for i := range events {
			e := a.element(name, n, fmt.Sprint("f", i))
			e.Start = a.date(n).Add(time.Duration(rehearse.Between(a.r, 0, 22*60)) * time.Minute)
			e.End, e.Events, e.HasEvents = e.Start, 1, true
			a.report(e, n, 0)
		}
	}
}

func (a *author) element(series string, n int, what string) rehearse.Element {
	e := rehearse.Element{Series: series, Start: a.date(n), End: a.date(n + 1)}
	if !strings.HasSuffix(series, "/slip") {
		_, rest, _ := strings.Cut(series, "/")
		e.ID, e.Revision = fmt.Sprintf("%s-%d-%s", strings.ReplaceAll(rest, "/", "-"), n, what), 1
	}
	return e
}

// report sends an element about day n, mostly the next morning, and perhaps
// more about it later.
func (a *author) report(e rehearse.Element, n int, exposure rehearse.Amount) {
	if exposure > 0 {
		e.Exposure, e.HasExposure = exposure, true
	}
	when := n + 1
	if a.r.IntN(12) == 0 {
		when += rehearse.Between(a.r, 1, spell)
	}
	if a.r.IntN(60) == 0 {
		return // never said
	}
	a.send(&e, when)
	if e.ID == "" {
		return
	}
	switch a.r.IntN(40) {
	case 0, 1:
		a.again(e, when)
	case 2, 3, 4:
		a.corrected(e, when)
	case 5:
		a.moved(e, when)
	case 6:
		a.retracted(e, when)
	case 7:
		a.contradicted(e, when)
	}
}

func (a *author) later(when int) int { return when + rehearse.Between(a.r, 0, spell) }

func (a *author) again(e rehearse.Element, when int) { a.send(&e, a.later(when)) }

func (a *author) differ(e *rehearse.Element) {
	if e.HasExposure {
		e.Exposure += rehearse.Amount(rehearse.Between(a.r, 1, 30))
		return
	}
	if e.Start.Equal(e.End) {
		e.Start = e.Start.Add(time.Minute)
		e.End = e.Start
		return
	}
	e.Events += int64(rehearse.Between(a.r, 1, 2))
}

// corrected sends higher revisions, and at times an old one after them.
func (a *author) corrected(e rehearse.Element, when int) {
	old := e
	for range rehearse.Between(a.r, 1, 3) {
		e.Revision += int64(rehearse.Between(a.r, 1, 2))
		a.differ(&e)
		when = a.later(when)
		e.Reported = time.Time{}
		a.send(&e, when)
	}
	if a.r.IntN(2) == 0 {
		a.send(&old, a.later(when))
	}
}

func (a *author) moved(e rehearse.Element, when int) {
	e.Revision++
	e.Series = strings.Replace(e.Series, "ward-1", "ward-2", 1)
	e.Reported = time.Time{}
	a.send(&e, a.later(when))
}

// retracted takes an element back, at times twice or not for good.
func (a *author) retracted(e rehearse.Element, when int) {
	gone := rehearse.Element{Series: e.Series, ID: e.ID, Revision: e.Revision + 1, Retracted: true}
	when = a.later(when)
	a.send(&gone, when)
	switch a.r.IntN(3) {
	case 0:
		a.send(&gone, a.later(when))
	case 1:
		e.Revision += 2
		e.Reported = time.Time{}
		a.send(&e, a.later(when))
	}
}

func (a *author) contradicted(e rehearse.Element, when int) {
	a.differ(&e)
	e.Reported = time.Time{}
	a.send(&e, a.later(when))
}

// rubbish sends what must be refused, or what nobody watches.
func (a *author) rubbish(n int) {
	e := a.element(a.site+"/ward-1/line-infection", n, "rubbish")
	e.Events, e.HasEvents = 1, true
	switch a.r.IntN(7) {
	case 0:
		e.Raw, e.Fault, e.Alone = []byte("ward sheet, page 2 of 3"), "not_json", true
	case 1:
		e.Raw, e.Fault = fmt.Appendf(nil, `{"series":%q,"at":"2025-13-01T00:00:00Z","events":1}`, e.Series), "bad_time"
	case 2:
		e.Raw, e.Fault = fmt.Appendf(nil, `{"series":%q,"at":"2025-01-01T00:00:00Z","events":-1}`, e.Series), "bad_events"
	case 3: // far behind
		e.Start, e.End = e.Start.AddDate(-5, 0, 0), e.End.AddDate(-5, 0, 0)
	case 4: // far ahead
		e.Start, e.End = e.Start.AddDate(20, 0, 0), e.End.AddDate(20, 0, 0)
	case 5:
		e.Retracted, e.HasEvents, e.Events, e.ID = true, false, 0, e.ID+"-never"
	case 6:
		e.Series = a.site + "/ward-1/needle-injury"
	}
	a.send(&e, n)
}

// act lets a person do something about an alert that may or may not be there.
func (a *author) act(n int) error {
	at := a.date(n).Add(10 * time.Hour)
	fields := map[string]string{
		"act": []string{"acknowledge", "note", "close", "forget"}[a.r.IntN(4)], "by": "T. Averin",
		"series":    fmt.Sprintf("%s/ward-%d/%s", a.site, 1+a.r.IntN(3), []string{"line-infection", "fall"}[a.r.IntN(2)]),
		"direction": "upper", "why": "looked into", "at": at.Format(time.RFC3339),
	}
	data, err := json.Marshal(fields)
	if err != nil {
		return err
	}
	a.acts = append(a.acts, Message{Kind: Act, Data: data, at: at})
	return nil
}

// pack puts the elements into messages of random size and form, in the order
// of sending.
func (a *author) pack(partition int) []Message {
	slices.SortStableFunc(a.sent, func(x, y rehearse.Element) int { return cmp.Or(x.Sent.Compare(y.Sent)) })
	var messages []Message
	for rest := a.sent; len(rest) > 0; {
		n := 1
		for most := []int{1, 3, 12, 40}[a.r.IntN(4)]; n < most && n < len(rest); n++ {
			if rest[0].Alone || rest[n].Alone || (rest[n].ID == "") != (rest[0].ID == "") || rest[n].Sent.Day() != rest[0].Sent.Day() {
				break
			}
		}
		messages = append(messages, a.message(rest[:n]))
		rest = rest[n:]
	}
	messages = append(messages, a.acts...)
	for i := range messages {
		messages[i].Partition = partition
	}
	slices.SortStableFunc(messages, func(x, y Message) int { return x.at.Compare(y.at) })
	return messages
}

func (a *author) message(elements []rehearse.Element) Message {
	lines := make([][]byte, len(elements))
	for i := range elements {
		lines[i] = elements[i].JSON()
	}
	m := Message{Elements: elements, Repeatable: elements[0].ID != "" || elements[0].Fault != "", at: elements[len(elements)-1].Sent}
	switch {
	case len(lines) == 1:
		m.Data = lines[0]
	case a.r.IntN(2) == 0:
		m.Data = slices.Concat([]byte{'['}, bytes.Join(lines, []byte{','}), []byte{']'})
	default:
		m.Data = append(bytes.Join(lines, []byte{'\n'}), '\n')
	}
	return m
}
