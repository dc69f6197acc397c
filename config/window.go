package config

import (
	"fmt"
	"strings"
)

// readWindows reads the windows of an indicator.
func (s section) readWindows(every Every) []Window {
	items, given := s.list("windows", maxWindows)
	if !given {
		s.fault("windows", "is missing: over which spans are events counted?", `write e.g. windows = ["28d"]`)
	}
	var windows []Window
	for i, n := range items {
		w, ok := s.readWindow(n, s.item("windows", i), every)
		if !ok {
			continue
		}
		for _, other := range windows {
			if other.Slots == w.Slots && other.Trials == w.Trials {
				s.add(n, s.item("windows", i), fmt.Sprintf("%q is as long as %q", w.Name, other.Name), "keep one")
			}
		}
		windows = append(windows, w)
	}
	return windows
}

// readWindow reads one window: a span, so many trials, or a table with a span and
// a step.
func (s section) readWindow(n *node, key string, every Every) (Window, bool) {
	w := Window{Step: 1}
	span, step := n, (*node)(nil)
	switch n.kind {
	case textKind:
		if trials, problem, ok := parseTrials(n.text); ok {
			if problem != "" {
				s.add(n, key, fmt.Sprintf("%q %s", n.text, problem), `write e.g. "200 trials"`)
			}
			return Window{Name: n.text, Step: 1, Trials: trials}, problem == ""
		}
	case tableKind:
		t := section{s.collector, n, key}
		t.strict("a window")
		span, step = n.fields["span"], n.fields["step"]
		if span == nil {
			t.fault("span", "is missing: how long is the window?", `write e.g. { span = "84d", step = "7d" }`)
			return w, false
		}
		key = t.key("span")
	case listKind, wholeKind, pointKind, truthKind, dateKind, timeKind:
		s.add(n, key, fmt.Sprintf("is %s where a span is wanted", n.kind), `write "28d" or { span = "84d", step = "7d" }`)
		return w, false
	}
	var ok bool
	w.Name = span.text
	if w.Slots, ok = s.slots(span, key, every); !ok || step == nil {
		return w, ok
	}
	key = strings.TrimSuffix(key, "span") + "step"
	if w.Step, ok = s.slots(step, key, every); !ok {
		return w, false
	}
	if w.Step > w.Slots {
		s.add(step, key, fmt.Sprintf("%s is longer than the window, %s: some events would never be looked at", step.text, span.text),
			"make it as long as the window or shorter")
		return w, false
	}
	return w, true
}

// slots reads a span and counts it in slots.
func (c *collector) slots(n *node, key string, every Every) (int, bool) {
	if n.kind != textKind {
		c.wrongKind(n, key, textKind)
		return 0, false
	}
	span, err := ParseSpan(n.text)
	if err != nil {
		c.add(n, key, fmt.Sprintf("%q is %s", n.text, err), "")
		return 0, false
	}
	if every.N == 0 {
		return 0, false // every is at fault, and reported
	}
	slots, problem := slotsOf(span, every)
	if problem == "" && slots > maxSlots {
		problem = fmt.Sprintf("%s is more than %s slots of %s", span, grouped(maxSlots), every)
	}
	if problem != "" {
		c.add(n, key, problem, "write "+spansFor(every))
		return 0, false
	}
	return slots, true
}

// spansFor says which spans are whole numbers of slots.
func spansFor(every Every) string {
	switch every.Unit {
	case Minute, Hour:
		return fmt.Sprintf("a multiple of %s in m, h, d (24 hours) or w", every)
	case Day:
		return `days or weeks, e.g. "28d" or "4w"`
	case Week:
		return `weeks, e.g. "12w" or "84d"`
	case Month:
		if every.N == 1 {
			return `months or years, e.g. "12mo" or "1y"`
		}
		return `a multiple of 3mo in mo or y, e.g. "12mo"`
	case Year:
		return `years, e.g. "5y"`
	}
	return ""
}
