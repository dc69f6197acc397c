package monitor

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// twinStream writes a random stream: a set-up, then messages in which much is
// late, repeated, corrected, moved and wrong, so that many alerts ring.
type twinStream struct {
	t        *testing.T
	rng      *rand.Rand
	engine   *Engine // tells which alerts there are
	messages []Message
	now      Instant
	stanzas  []twinStanza
	series   []string
	rates    map[string]float64 // what each series now runs at, relative to its baseline
	sent     []Observation
	reported map[string]int64 // the last slot reported of each series
	ids      int
	limits   string
	// rearranges says that windows and indicators come and go: the twin does
	// not know of that.
	rearranges bool
}

// twinStanza is a random indicator.
type twinStanza struct {
	name, every, zone, events, exposure, measure, ids string
	since                                             string
	settle, horizon, ahead                            time.Duration
	windows, tails, baseline                          string
	limit                                             string
	quiet                                             int
	slot                                              time.Duration // about
	rate                                              float64       // per unit of exposure
	slots                                             *twinSlots
	out                                               bool // of the set-up
	expect                                            string
}

// twinPaces are families of slots that go well together in one stream, and a
// time in which something happens to their zones.
var twinPaces = []struct {
	every []string
	zone  []string
	begin string
}{
	{[]string{"1d", "1d", "1w"}, []string{"Europe/Berlin", "America/New_York", "UTC"}, "2024-03-15T00:00:00Z"},
	{[]string{"1d"}, []string{"Pacific/Apia", "Australia/Lord_Howe"}, "2011-12-18T00:00:00Z"},
	{[]string{"1h", "30m", "15m"}, []string{"Asia/Kathmandu", "Europe/Berlin", "UTC"}, "2024-10-26T12:00:00Z"},
	{[]string{"1mo", "3mo", "1mo"}, []string{"Europe/Berlin", "UTC"}, "2023-05-01T00:00:00Z"},
}

func newTwinStream(t *testing.T, seed uint64) *twinStream {
	t.Helper()
	g := &twinStream{
		t: t, rng: rand.New(rand.NewPCG(seed, 17)), rates: map[string]float64{}, reported: map[string]int64{},
		engine: New(Partition{Of: 1}),
	}
	pace := twinPaces[g.rng.IntN(len(twinPaces))]
	begin, err := time.Parse(time.RFC3339, pace.begin)
	if err != nil {
		t.Fatal(err)
	}
	for i := range 1 + g.rng.IntN(3) {
		g.stanzas = append(g.stanzas, g.stanza(i, pick(g, pace.every...), pick(g, pace.zone...), begin))
	}
	if g.chance(0.1) {
		g.limits = fmt.Sprintf("[limits]\nmax_series = %d\nmax_ids = %d\n", 2+g.rng.IntN(3), 5+g.rng.IntN(20))
	}
	g.now = InstantOf(begin)
	for i := range g.stanzas {
		for range 1 + g.rng.IntN(2) {
			g.series = append(g.series, fmt.Sprintf("%s/k%d/%s", pick(g, "p", "p", "q"), i, pick(g, "a", "b", "c")))
		}
	}
	return g
}

func pick[E any](g *twinStream, from ...E) E { return from[g.rng.IntN(len(from))] }

func (g *twinStream) chance(p float64) bool { return g.rng.Float64() < p }

// between is a random time of so many slots.
func (g *twinStream) span(slot time.Duration, least, most float64) time.Duration {
	d := time.Duration((least + (most-least)*g.rng.Float64()) * float64(slot))
	if g.chance(0.6) { // whole slots, for edges that coincide
		d = max(slot, d.Round(slot))
	}
	return d.Round(time.Minute)
}

func (g *twinStream) stanza(i int, every, zone string, begin time.Time) twinStanza {
	length := map[string]time.Duration{
		"15m": 15 * time.Minute, "30m": 30 * time.Minute, "1h": time.Hour,
		"1d": 24 * time.Hour, "1w": 168 * time.Hour, "1mo": 720 * time.Hour, "3mo": 2160 * time.Hour,
	}
	c := twinStanza{
		name: fmt.Sprintf("k%d", i), every: every, zone: zone, slot: length[every],
		events: pick(g, "each", "counted", "counted"), exposure: pick(g, "clock", "reported", "reported"),
		measure: pick(g, "rate", "rate", "proportion"), ids: pick(g, "kept", "kept", "kept", "none"),
		limit: g.limit(0.15), quiet: 1 + g.rng.IntN(4),
		tails: pick(g, `"upper"`, `"lower"`, `"upper", "lower"`, `"lower", "upper"`),
	}
	if c.measure == "proportion" {
		c.exposure = "reported"
	}
	c.settle = g.span(c.slot, 0, 2)
	if g.chance(0.3) {
		c.settle = 0
	}
	c.horizon = c.settle + g.span(c.slot, 1, pick(g, 3.0, 10, 14))
	c.ahead = g.span(c.slot, 0, 3)
	c.windows, c.baseline = g.windows(every), g.baseline(&c)
	in := g.parse(c.text()).Indicators[0]
	c.slots = newTwinSlots(&in)
	if g.chance(0.15) {
		from := c.slots.start(c.slots.at(InstantOf(begin)) + int64(g.rng.IntN(10)) - 7)
		c.since = from.Time().Format(time.RFC3339)
	}
	return c
}

// limit is a limit on p, or an allowance with that chance.
func (g *twinStream) limit(allowed float64) string {
	if !g.chance(allowed) {
		return fmt.Sprintf("p_limit = %v", pick(g, 0.3, 0.1, 0.05, 0.01))
	}
	text := fmt.Sprintf("allowance = %q", pick(g, "4 in 1d", "2 in 1w", "30 in 1mo", "20 in 1y", "500 in 3mo"))
	if g.chance(0.4) {
		text += fmt.Sprintf("\nallowance_for = \"indicator\"\nreserve = %v", pick(g, 0.1, 0.5, 0.75))
	}
	return text
}

// windows are up to three windows, some with a step.
func (g *twinStream) windows(every string) string {
	var all []string
	used := map[int]bool{}
	for range 1 + g.rng.IntN(3) {
		n := 1 + g.rng.IntN(7)
		if used[n] {
			continue
		}
		used[n] = true
		span := func(n int) string {
			var of int
			var unit string
			if _, err := fmt.Sscanf(every, "%d%s", &of, &unit); err != nil {
				g.t.Fatal(err)
			}
			return fmt.Sprintf("%d%s", n*of, unit)
		}
		if g.chance(0.3) {
			all = append(all, fmt.Sprintf("{ span = %q, step = %q }", span(n), span(1+g.rng.IntN(n))))
			continue
		}
		all = append(all, fmt.Sprintf("%q", span(n)))
	}
	return strings.Join(all, ", ")
}

func (g *twinStream) baseline(c *twinStanza) string {
	margin := ""
	if g.chance(0.3) {
		margin = "margin = 1.25\n"
	}
	switch {
	case c.measure == "proportion" && g.chance(0.5):
		c.rate = 0.2
		return margin + "kind = \"reference\"\nevents = 20\nexposure = 100\n"
	case c.measure == "proportion":
		c.rate = 0.2
		return margin + "kind = \"known\"\nrate = 0.2\n"
	case g.chance(0.4):
		c.rate = 0.125
		return margin + "kind = \"reference\"\nevents = 25\nexposure = 200.0\n"
	}
	c.rate = pick(g, 0.05, 0.125, 0.4)
	return fmt.Sprintf("%skind = \"known\"\nrate = %v\n", margin, c.rate)
}

func (c *twinStanza) text() string {
	var b strings.Builder
	fmt.Fprintf(&b, "[[indicator]]\nname = %q\nseries = [\"*/%s/*\"]\nunit = \"units\"\nevery = %q\nzone = %q\n", c.name, c.name, c.every, c.zone)
	fmt.Fprintf(&b, "events = %q\nexposure = %q\nmeasure = %q\nids = %q\n", c.events, c.exposure, c.measure, c.ids)
	if c.exposure == "clock" {
		size := map[string]float64{"15m": 48, "30m": 24, "1h": 12, "1d": 0.5, "1w": 0.07, "1mo": 0.017, "3mo": 0.006}[c.every]
		fmt.Fprintf(&b, "clock = { size = %v, per = \"1h\" }\n", size) // about 12 a slot
	}
	if c.since != "" {
		fmt.Fprintf(&b, "since = %q\n", c.since)
	}
	fmt.Fprintf(&b, "settle = %q\nhorizon = %q\nahead = %q\n", minutes(c.settle), minutes(c.horizon), minutes(c.ahead))
	b.WriteString(c.expect)
	fmt.Fprintf(&b, "windows = [%s]\ntails = [%s]\n%s\nquiet = %d\n[indicator.baseline]\n%s", c.windows, c.tails, c.limit, c.quiet, c.baseline)
	return b.String()
}

func minutes(d time.Duration) string {
	if d >= 600_000*time.Minute {
		return fmt.Sprintf("%dh", int(d/time.Hour))
	}
	return fmt.Sprintf("%dm", int(d/time.Minute))
}

func (g *twinStream) parse(stanzas string) *config.Setup {
	text := "name = \"twin\"\nfolder = \"x\"\n[time]\nmode = \"history\"\n" + g.limits + stanzas
	s, err := config.Parse([]byte(text), "set-up")
	if err != nil {
		g.t.Fatalf("%v\n%s", err, text)
	}
	return s
}

func (g *twinStream) setup() *config.Setup {
	var b strings.Builder
	for i := range g.stanzas {
		if !g.stanzas[i].out {
			b.WriteString(g.stanzas[i].text())
		}
	}
	return g.parse(b.String())
}

func (g *twinStream) add(m Message) {
	m.Position, m.Stored = uint64(len(g.messages)+1), g.now
	g.messages = append(g.messages, m)
	g.engine.Apply(&g.messages[len(g.messages)-1])
}

// write writes a stream of so many messages.
func (g *twinStream) write(n int) []Message {
	if g.chance(0.1) { // a clock before any set-up
		g.add(Message{Kind: Tick, HasTime: true, Time: g.now - Instant(g.rng.IntN(1e12))})
	}
	g.add(Message{Kind: SettingMessage, Setting: Setting{Setup: g.setup()}})
	slot := g.stanzas[0].slot
	for _, c := range g.stanzas {
		slot = min(slot, c.slot)
	}
	for len(g.messages) < n {
		g.pass(slot)
		switch x := g.rng.Float64(); {
		case x < 0.50:
			g.report()
		case x < 0.60:
			g.items(g.one())
		case x < 0.82:
			g.items(g.again())
		case x < 0.92:
			g.act()
		case x < 0.97:
			g.add(Message{Kind: Tick, HasTime: g.chance(0.9), Time: g.now})
		case x < 0.985, g.rearranges && x < 0.99:
			c := &g.stanzas[g.rng.IntN(len(g.stanzas))]
			g.change(c)
			g.add(Message{Kind: SettingMessage, Setting: Setting{Setup: g.setup()}})
		case x < 0.99:
			g.add(Message{Kind: Live})
		default:
			g.add(Message{Kind: Rejected, Items: []Item{{Reason: NotJSON, Detail: "x", Raw: []byte("{")}}})
		}
	}
	return g.messages
}

// change changes what a running store can take.
func (g *twinStream) change(c *twinStanza) {
	c.limit, c.quiet = g.limit(0.3), 1+g.rng.IntN(4)
	if g.rearranges {
		g.rearrange(c)
	}
	switch g.rng.IntN(6) {
	case 0:
		c.settle = min(g.span(c.slot, 0, 3), c.horizon)
	case 1:
		c.horizon = max(c.settle, time.Minute, c.horizon-g.span(c.slot, 0, 3))
	case 2:
		c.tails = pick(g, `"upper"`, `"lower"`, `"upper", "lower"`)
	case 3:
		c.baseline = g.baseline(c)
	}
}

// pass lets some time pass, often to a moment at which something falls due.
func (g *twinStream) pass(slot time.Duration) {
	g.now = g.now.Add(time.Duration(g.rng.Float64() * 1.1 * float64(slot)))
	if g.chance(0.02) {
		g.now = g.now.Add(slot * time.Duration(g.rng.IntN(12)))
	}
	if g.chance(0.5) {
		c := pick(g, g.stanzas...)
		g.now = max(g.now, c.slots.start(c.slots.at(g.now)+int64(g.rng.IntN(2))).Add(pick(g, 0, c.settle)))
	}
	g.now -= g.now % 1000
}

// items adds a message of observations.
func (g *twinStream) items(all ...Observation) {
	m := Message{Kind: Observations, HasTime: g.chance(0.6), Time: g.now}
	for _, o := range all {
		it := Item{Observation: o}
		if g.chance(0.01) {
			it = Item{Observation: Observation{Series: o.Series}, Reason: BadEvents, Detail: "x", Raw: []byte("1")}
		}
		m.Items = append(m.Items, it)
	}
	g.add(m)
}

// report reports the slots that ended since the last report, for most series.
func (g *twinStream) report() {
	var all []Observation
	for _, name := range g.series {
		c := g.stanzaOf(name)
		ended := c.slots.at(g.now) - 1
		from := ended
		if last, ok := g.reported[name]; ok {
			from = max(last+1, ended-4)
		}
		g.reported[name] = ended
		for slot := from; slot <= ended; slot++ {
			if g.chance(0.97) {
				all = append(all, g.observation(name, slot-ended-1)...)
			}
		}
		if g.chance(0.08) {
			g.rates[name] = pick(g, 0.0, 0.3, 1, 3, 5)
		}
	}
	g.items(all...)
}

func (g *twinStream) stanzaOf(name string) *twinStanza {
	for i := range g.stanzas {
		if strings.Split(name, "/")[1] == g.stanzas[i].name {
			return &g.stanzas[i]
		}
	}
	return &g.stanzas[0] // unmonitored
}

// observation is a sound report of the slot so many slots from now.
func (g *twinStream) observation(name string, offset int64) []Observation {
	c := g.stanzaOf(name)
	slot := c.slots.at(g.now) + offset
	o := Observation{Series: name, Start: c.slots.start(slot), End: c.slots.start(slot + 1)}
	if o.Start == o.End {
		return nil
	}
	rate, ok := g.rates[name]
	if !ok {
		rate = 1
	}
	exposure := 4 + g.rng.IntN(12)
	if c.exposure == "reported" {
		o.HasExposure, o.Exposure = true, config.Decimal{Coef: uint64(exposure)}
		if c.measure == "rate" && g.chance(0.3) {
			o.Exposure = config.Decimal{Coef: uint64(exposure)*1000 + 333, Digits: 3}
		}
	}
	o.Events = g.poisson(rate * c.rate * float64(exposure))
	if c.measure == "proportion" {
		o.Events = min(o.Events, int64(exposure))
	}
	o.HasEvents = o.Events > 0 || c.events == "counted" || !o.HasExposure || g.chance(0.3)
	if g.chance(0.7) {
		g.ids++
		o.ID = fmt.Sprint(g.ids)
	}
	if g.chance(0.2) {
		o.Reported, o.HasReported = g.now, true
	}
	g.sent = append(g.sent, o)
	return []Observation{o}
}

func (g *twinStream) poisson(mean float64) int64 {
	var n int64
	for t := g.rng.ExpFloat64(); t < mean; t += g.rng.ExpFloat64() {
		n++
	}
	return n
}

// one is an odd observation: late, early, half, long, momentary or wrong.
func (g *twinStream) one() Observation {
	name := pick(g, g.series...)
	if g.chance(0.05) {
		name = "p/nobody/x"
	}
	c := g.stanzaOf(name)
	offset := -int64(g.rng.IntN(int(c.horizon/c.slot)+4)) + 1
	if g.chance(0.05) {
		offset = 4
	}
	made := g.observation(name, offset)
	if len(made) == 0 {
		return g.one()
	}
	o := made[0]
	half := (o.End - o.Start) / 2
	half -= half % 1000
	switch g.rng.IntN(12) {
	case 0:
		o.End, o.Instant, o.HasExposure, o.Exposure = o.Start, true, g.chance(0.1), config.Decimal{}
		o.HasEvents = true
	case 1:
		o.Start += half
	case 2:
		o.End -= half
	case 3, 4: // exposure over several slots
		if o.HasExposure {
			o.End += Instant(g.rng.IntN(3))*(o.End-o.Start) + 1000*1000
			o.Start -= Instant(g.rng.IntN(3)) * 7 * 60 * 1e6
			if o.HasEvents = g.chance(0.1); !o.HasEvents {
				o.Events = 0
			}
		}
	case 5: // one side only
		if o.HasExposure = o.HasExposure && g.chance(0.5); !o.HasExposure {
			o.Exposure, o.HasEvents = config.Decimal{}, true
		} else if o.Events = 0; o.HasEvents {
			o.HasEvents = false
		}
	case 6: // events without exposure
		if o.HasExposure {
			o.Exposure, o.Events, o.HasEvents = config.Decimal{}, 1, true
		}
	case 7: // more events than trials
		o.Events, o.HasEvents = 20, true
	case 8:
		o.HasExposure, o.Exposure = true, config.Decimal{Coef: 1, Digits: uint8(g.rng.IntN(9))}
	case 9:
		o.Events, o.HasEvents = o.Events+int64(g.rng.IntN(6)), true
	}
	g.sent[len(g.sent)-1] = o
	return o
}

// again says something about an id that was named before.
func (g *twinStream) again() Observation {
	if len(g.sent) == 0 {
		return g.one()
	}
	n := min(len(g.sent), 25)
	o := g.sent[len(g.sent)-1-g.rng.IntN(n)]
	if g.chance(0.02) {
		o.ID = "unknown"
	}
	o.HasReported = g.chance(0.5)
	if o.Reported = 0; o.HasReported {
		o.Reported = g.now
	}
	switch g.rng.IntN(9) {
	case 0: // a repeat
	case 1: // a conflict
		o.Events, o.HasEvents = o.Events+1, true
	case 2: // outdated
		o.Revision--
	case 3, 4:
		o = Observation{Series: o.Series, ID: o.ID, Revision: o.Revision + 1, Retracted: true, Reported: o.Reported, HasReported: o.HasReported}
		if o.ID == "" {
			return g.one()
		}
	case 5: // moved
		o.Revision++
		site := twinSite(o.Series)
		if o.Series = pick(g, g.series...); g.chance(0.1) {
			o.Series = site + "/nobody/x"
		}
	default:
		o.Revision++
		o.Events, o.HasEvents = max(0, o.Events+int64(g.rng.IntN(9))-4), true
		if o.Instant && o.HasExposure {
			o.HasExposure = false
		}
	}
	if o.Start != 0 {
		g.sent = append(g.sent, o)
	}
	return o
}

// act is something that a person does, at times to nothing.
func (g *twinStream) act() {
	a := Act{Kind: pick(g, Acknowledge, Close, Note), By: "A. Nurse", Why: "seen", At: g.now, HasAt: g.chance(0.5), Raw: []byte("{}")}
	alerts := g.engine.Alerts()
	if len(alerts) > 0 && g.chance(0.5) {
		a.Alert = pick(g, alerts...).ID
	} else if a.Series, a.Direction = pick(g, g.series...), pick(g, life.Upper, life.Lower); g.chance(0.02) {
		a.Alert = "nothing"
	}
	g.add(Message{Kind: ActMessage, Act: a, HasTime: g.chance(0.3), Time: g.now})
}
