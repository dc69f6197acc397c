package config

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"time"
)

// Describe writes in plain sentences what would be monitored and what it may
// cost in memory.
func (s *Setup) Describe(w io.Writer) error {
	var p prose
	p.setup(s)
	for i := range s.Indicators {
		p.indicator(&s.Indicators[i], s.KeyParts)
	}
	p.memory(s)
	if _, err := io.WriteString(w, strings.Join(p.lines, "")); err != nil {
		return fmt.Errorf("describe the set-up: %w", err)
	}
	return nil
}

// prose is a text under construction.
type prose struct{ lines []string }

func (p *prose) line(format string, args ...any) {
	p.lines = append(p.lines, fmt.Sprintf(format+"\n", args...))
}

func (p *prose) setup(s *Setup) {
	p.line("Set-up %s: %s.", s.Name, counted(len(s.Indicators), "indicator"))
	if s.Bus.URL == "" {
		p.line("The bus is embedded; it and the store are kept in %s.", s.Folder)
	} else {
		p.line("The bus is at %s; the store is kept in %s.", s.Bus.URL, s.Folder)
		if s.Bus.Share {
			p.line("Processes share the partitions: one that falls silent for %s loses its own to the others.", elapsed(s.Bus.Claim))
		}
	}
	age := ""
	if s.Bus.MaxAge > 0 {
		age = ", and what is older than " + elapsed(s.Bus.MaxAge) + " is dropped"
	}
	p.line("The stream of observations holds up to %s%s; a full stream refuses what is published.", FormatSize(s.Bus.MaxBytes), age)
	if s.Partitions > 1 {
		first := "first part"
		if s.KeyParts > 1 {
			first = "first " + counted(s.KeyParts, "part")
		}
		p.line("Series are spread over %d partitions by the %s of their names.", s.Partitions, first)
	}
	p.archive(s.Limits.Archive)
	p.page(s.Page)
	p.outlets(s.Outlets)
	if s.History {
		p.line("Time is history time: it moves with the data alone.")
	}
}

func (p *prose) page(page Page) {
	switch {
	case !page.Served():
	case page.Users == "" && page.URL == "" && strings.HasSuffix(page.Listen, ":0"):
		p.line("The page is served to whoever is on this machine, at a free port, which the log of the daemon tells.")
	case page.Users == "":
		p.line("The page is served at %s, to whoever is on this machine.", page.Address())
	default:
		p.line("The page is served at %s, to the users of %s.", page.Address(), page.Users)
	}
}

func (p *prose) indicator(in *Indicator, keyParts int) {
	p.line("")
	p.line("%s (%s, from line %d)", in.Title, in.Name, in.Line)
	patterns := make([]string, len(in.Series))
	for i, q := range in.Series {
		patterns[i] = q.String()
	}
	p.line("  Series: %s.", strings.Join(patterns, ", "))
	if len(in.Sums) > 0 {
		p.line("  Monitored besides, each as a series of its own, are the sums %s.", sumsText(in))
		for _, m := range in.Gathered(keyParts) {
			p.line("  Members of %s may lie in several partitions: what changes in them reaches it at the next boundary of a slot.", m)
		}
	}
	p.counting(in)
	p.slots(in)
	for i := range in.Windows {
		p.window(in, &in.Windows[i])
	}
	p.limit(in)
	for i := range in.Baselines {
		p.baseline(in, i)
	}
	p.across(in, keyParts)
	p.late(in)
}

// across says what partitions tell each other.
func (p *prose) across(in *Indicator, keyParts int) {
	if !in.CountsAcross(keyParts) {
		return
	}
	p.line("  Its series may lie in several partitions: each counts at the first boundary of a day, and what all have counted is in force from the first boundary of the next day on.")
	if in.hasPeers() {
		p.line("    So peers are counted as of the day before; looks that no count serves yet are withheld.")
	}
	if a := in.Allowance; a != nil && a.PerIndicator {
		p.line("    A series that is not yet counted has a hundredth of the reserve, or less where more series are counted: at most two days long.")
	}
}

func (p *prose) counting(in *Indicator) {
	model := "Poisson"
	if in.Measure == Proportion {
		model = "binomial"
	}
	p.line("  Counts %s per %s, a %s (%s).", in.EventNoun, perUnit(in), measureWord(in), model)
	switch in.Exposure {
	case Reported, Census:
		if in.GrainDigits == 0 {
			p.line("  Exposure is reported, in whole %s.", in.Unit)
		} else {
			p.line("  Exposure is reported, and held exactly to %s %s.", grainText(in), in.Unit)
		}
	case Clock:
		p.line("  Exposure comes from the clock: %s in %s, and need not be reported.", ofUnit(in.Clock.Size, in.Unit), elapsed(in.Clock.Per))
	}
	if in.Exposure == Census {
		p.line("  It is a census: the last level reported is carried forward, and shown as provisional, until the next is reported or %s have passed.",
			elapsed(in.CensusExpiry))
	}
	p.adjusted(in)
	switch in.Events {
	case Each:
		p.line("  Each event is a message: a slot without one had none.")
	case Counted:
		p.line("  Events are reported as counts: a slot without a report is missing, not zero.")
	}
	if in.Events == Counted || in.Exposure != Clock {
		p.line("  A look at a window in which anything is missing is withheld, not guessed.")
	}
}

func (p *prose) slots(in *Indicator) {
	calendar := "the calendar of " + in.ZoneName
	if in.Every.Unit < Day {
		calendar = "the time of " + in.ZoneName
	}
	p.line("  Slots: one every %s, in %s (zone data %s).", spanWords(in.Every), calendar, ZoneDataVersion)
	if in.Since.IsZero() {
		p.line("  A series begins with its first observation.")
	} else {
		p.line("  Series begin at %s.", in.Since.In(in.Zone).Format(time.RFC3339))
	}
}

// looksPerYear is the number of slot looks of a window in 365.2425 days.
func (in *Indicator) looksPerYear(w *Window) float64 {
	return in.slotLength(w.Step).perYear()
}

// chanceSignals bounds the expected number of looks of one series that signal
// in a year though the usual rate holds: looks times limit, over all windows
// and tails.
func (in *Indicator) chanceSignals() float64 {
	looks := 0.0
	for i := range in.Windows {
		if in.Windows[i].Trials == 0 {
			looks += in.looksPerYear(&in.Windows[i])
		}
	}
	return looks * in.PLimit * float64(len(tailWords(in)))
}

func (p *prose) late(in *Indicator) {
	if in.SlotLooks {
		p.line("  A slot is looked at %s. Data may change it up to %s back: looks are then made again, and what is older is refused.",
			afterEnd(in.Settle), elapsed(in.Horizon))
	} else {
		p.line("  Data may change what was counted up to %s back: looks are then made again, and what is older is refused.", elapsed(in.Horizon))
	}
	p.line("  Data further than %s in the future are refused.", elapsed(in.Ahead))
	if in.KeepIDs {
		p.line("  Observation ids are kept as long as data may change, so nothing is counted twice.")
	} else {
		p.line("  Observation ids are not kept: corrections can't be taken, and what is published twice is counted twice.")
	}
	p.expect(in)
	if in.Remind > 0 {
		to := "every outlet"
		if in.RemindTo != "" {
			to = "outlet " + in.RemindTo
		}
		p.line("  While an alert signals and nobody has acknowledged it, %s is told again every %s.", to, elapsed(in.Remind))
	}
	if in.Retire > 0 {
		p.line("  A series of which nothing was heard for %s has ended, as soon as no window and no correction can reach it any more.", elapsed(in.Retire))
	}
}

func afterEnd(settle time.Duration) string {
	if settle == 0 {
		return "as soon as it has ended"
	}
	return elapsed(settle) + " after its end"
}

func (p *prose) memory(s *Setup) {
	m := s.Memory()
	p.line("")
	for i, bytes := range m.Series {
		p.line("Memory: a series of %s takes about %s.", s.Indicators[i].Name, FormatSize(bytes))
	}
	p.line("Memory in all: at most about %s, for %s series (%s) and %s ids (%s); the limit is %s.",
		FormatSize(m.Total), grouped(int64(s.Limits.MaxSeries)), FormatSize(m.AllSeries),
		grouped(int64(s.Limits.MaxIDs)), FormatSize(m.AllIDs), FormatSize(s.Limits.Memory))
}

// counted writes "1 look" or "7 looks".
func counted(n int, noun string) string {
	if n == 1 {
		return "1 " + noun
	}
	return grouped(int64(n)) + " " + noun + "s"
}

// ofUnit writes an exposure with its unit: "1 day", "9,131 days".
func ofUnit(d Decimal, unit string) string {
	text := d.String()
	whole, fraction, point := strings.Cut(text, ".")
	if n, err := strconv.ParseInt(whole, 10, 64); err == nil {
		whole = grouped(n)
	}
	if point {
		whole += "." + fraction
	}
	if text == "1" {
		unit = oneOf(unit)
	}
	return whole + " " + unit
}

// aboutMany writes "about 1 look" or "about 12 looks".
func aboutMany(f float64, noun string) string {
	if text := about(f); text != "1" {
		return "about " + text + " " + noun + "s"
	}
	return "about 1 " + noun
}

// about writes a number with three figures.
func about(f float64) string {
	if f >= 1000 && f < 1e15 {
		digits := math.Pow(10, math.Floor(math.Log10(f))-2)
		return grouped(int64(math.Round(f/digits) * digits))
	}
	return strconv.FormatFloat(f, 'g', 3, 64)
}

// number writes a number as a person would who had typed it.
func number(f float64) string {
	if f < 1e-9 || f >= 1e15 {
		return strconv.FormatFloat(f, 'g', 12, 64)
	}
	f, err := strconv.ParseFloat(strconv.FormatFloat(f, 'g', 12, 64), 64)
	if err != nil {
		return "" // can't be: the text was made from a number
	}
	return strconv.FormatFloat(f, 'f', -1, 64)
}

// elapsed writes an elapsed time in words.
func elapsed(d time.Duration) string {
	const day = 24 * time.Hour
	switch {
	case d > 0 && d%day == 0:
		return counted(int(d/day), "day")
	case d > 0 && d%time.Hour == 0:
		return counted(int(d/time.Hour), "hour")
	case d > 0 && d%time.Minute == 0:
		return counted(int(d/time.Minute), "minute")
	}
	return counted(int(d/time.Second), "second")
}

// spanWords writes a length as it follows "every": "day", "3 months".
func spanWords(e Every) string {
	noun := map[Unit]string{Minute: "minute", Hour: "hour", Day: "day", Week: "week", Month: "month", Year: "year"}[e.Unit]
	switch {
	case e.N == 1:
		return noun
	case e.Unit == Minute && e.N%60 == 0:
		return spanWords(Every{e.N / 60, Hour})
	case e.Unit == Month && e.N%12 == 0:
		return spanWords(Every{e.N / 12, Year})
	}
	return counted(e.N, noun)
}
