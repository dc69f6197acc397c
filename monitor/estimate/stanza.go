package estimate

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"tailbell/config"
	"tailbell/monitor"
)

// Stanza is a baseline as it is written in a set-up.
type Stanza struct {
	// Lines are the keys that every set-up takes, without the table's header.
	Lines []string `json:"lines"`
	// Optional are those that some set-ups refuse: spread, strata, delay.
	Optional []Optional `json:"optional,omitempty"`
}

// Optional is a key that may have to stay a comment.
type Optional struct {
	Line string `json:"line"`
	// Doubt, if not "", says of the key why it should not be put in force unseen.
	Doubt string `json:"doubt,omitempty"`
}

// Key is what the line sets.
func (o Optional) Key() string {
	key, _, _ := strings.Cut(o.Line, " ")
	return key
}

// date writes a moment as people read it, with the time if a slot is shorter
// than a day.
func (h *History) date(at monitor.Instant) string {
	in := h.Indicator
	t := at.Time().In(in.Zone)
	if in.Every.Unit < config.Day {
		return t.Format("2006-01-02 15:04")
	}
	return t.Format("2006-01-02")
}

func (a *analysis) stanza(worst *Spread) Stanza {
	p := a.r.Pooled
	last := a.date(a.To - 1) // within the last slot
	version := (a.To - 1).Time().In(a.Indicator.Zone).Format("2006-01-02")
	series := "1 series"
	if n := len(a.Series); n > 1 {
		series = fmt.Sprintf("%d series", n)
	}
	var s Stanza
	if a.o.Pattern != "" {
		s.Lines = append(s.Lines, "series = "+strconv.Quote(a.o.Pattern))
	}
	s.Lines = append(s.Lines,
		`kind = "reference"`,
		fmt.Sprintf("events = %d", p.Events),
		"exposure = "+quoted(p.Exposure),
		"version = "+strconv.Quote(version),
		fmt.Sprintf("source = %q", fmt.Sprintf("%s to %s, %s, data %s", a.date(a.From), last, series, a.Digest[:16])))
	if worst != nil {
		o := Optional{Line: "spread = " + strconv.FormatFloat(worst.Phi, 'f', 2, 64)}
		if _, _, drift := a.drift(); drift {
			o.Doubt = "grows with length, so no constant one describes it"
		}
		s.Optional = append(s.Optional, o)
	}
	for _, e := range a.strataFound() {
		if line, ok := a.strata(e); ok {
			s.Optional = append(s.Optional, Optional{Line: line})
			break
		}
	}
	if line := a.delayLine(); line != "" {
		s.Optional = append(s.Optional, Optional{Line: line})
	}
	return s
}

// quoted writes an exposure so that no digit is lost to a float.
func quoted(exposure string) string {
	if strings.Contains(exposure, ".") {
		return strconv.Quote(exposure)
	}
	return exposure
}

// strata writes the factors of an effect; for a proportion they are factors of
// the odds.
func (a *analysis) strata(e Effect) (string, bool) {
	every := a.Indicator.Every
	within := every.Unit <= config.Day || every == config.Every{N: 1, Unit: config.Month}
	if e.By == HourOfWeek {
		within = every.Unit <= config.Hour
	}
	if !within {
		return "", false // a slot may lie in two strata
	}
	var factors []string
	for _, s := range e.Strata {
		f := s.Factor
		if s.Events == 0 && s.Expected > 0 {
			f = 0.5 / max(s.Expected, 0.5) // none seen is not none ever
		}
		if a.proportion() {
			p := a.r.Pooled.Rate / a.Indicator.Per
			if f*p >= 1 || p >= 1 {
				return "", false
			}
			f = f * (1 - p) / (1 - f*p)
		}
		factors = append(factors, factorText(math.Max(f, 1e-6)))
	}
	return fmt.Sprintf("strata = { by = %q, factors = [%s] }", e.By, strings.Join(factors, ", ")), true
}

// factorText writes a factor with three decimals, or three figures if it is small.
func factorText(f float64) string {
	if f < 0.05 {
		return strconv.FormatFloat(f, 'g', 3, 64)
	}
	return strconv.FormatFloat(f, 'f', 3, 64)
}

// delayLine writes the delay if some events are not known when slots settle.
func (a *analysis) delayLine() string {
	d := a.r.Delay
	if d == nil || len(d.Shares) == 0 || d.F(a.Indicator.Settle) > 0.99 {
		return ""
	}
	var ages, shares []string
	for i, s := range d.Shares {
		f := s.Reported
		if i == len(d.Shares)-1 {
			f = 1
		}
		ages = append(ages, strconv.Quote(s.Age))
		shares = append(shares, strconv.FormatFloat(math.Max(f, 1e-6), 'g', 4, 64))
	}
	return fmt.Sprintf("delay = { ages = [%s], reported = [%s] }", strings.Join(ages, ", "), strings.Join(shares, ", "))
}

// Text writes the stanza under its header. Optional keys for which refused
// gives a reason, and those in doubt, are written as comments with the reason.
func (s *Stanza) Text(header string, refused func(key string) string) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s\n", header)
	for _, line := range s.Lines {
		fmt.Fprintf(&b, "%s\n", line)
	}
	for _, o := range s.Optional {
		why := refused(o.Key())
		if why == "" {
			why = o.Doubt
		}
		if why != "" {
			fmt.Fprintf(&b, "# Not in force: %s %s.\n# %s\n", o.Key(), why, o.Line)
			continue
		}
		fmt.Fprintf(&b, "%s\n", o.Line)
	}
	return b.String()
}
