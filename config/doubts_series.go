package config

import (
	"fmt"
	"strings"
)

// retiresFirst finds silences of which nobody would be told, since the series has
// ended by then: those named in full do not end.
func (d *doubts) retiresFirst(in *Indicator, i int) {
	if in.Retire == 0 {
		return
	}
	for j := range in.Expect {
		e := &in.Expect[j]
		if e.Series.Exact() || e.Within < in.Retire || e.Within.Hours() <= in.heldHours() {
			continue
		}
		d.at(in, i, "expect", fmt.Sprintf("a series that was not heard of for %s has ended (retire) before it would be called silent after %s: nobody is told",
			FormatDuration(in.Retire), FormatDuration(e.Within)), "make retire longer than the silence, or name the series that must report in full: those do not end")
		return
	}
}

// lonelySums finds sums that have no more than one member each, whatever reports:
// every alert of them would be that of the member again.
func (d *doubts) lonelySums(in *Indicator, i int) {
	for _, m := range in.Sums {
		var all []Pattern
		for _, p := range in.Series {
			if _, both := overlap(p, m.pattern); both {
				all = append(all, p)
			}
		}
		if len(all) == 1 && m.alone(all[0]) {
			d.at(in, i, "sums", fmt.Sprintf("each sum %q has one series only, %s: both would ring for the same counts", m.text, all[0]),
				"leave the sum out, or give the indicator a pattern for further series")
		}
	}
}

// alone reports whether the sum has one member for each of its names, if all its
// members match the pattern.
func (m Sum) alone(p Pattern) bool {
	of, parts := strings.Split(m.text, "/"), strings.Split(p.text, "/")
	if len(of) != len(parts) || strings.Contains(m.text, "**") || strings.Contains(p.text, "**") {
		return false
	}
	for i := range of {
		if !kept(of[i]) && strings.Contains(of[i], "*") && strings.Contains(parts[i], "*") {
			return false
		}
	}
	return true
}
