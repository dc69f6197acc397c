package config

import (
	"fmt"
	"strings"
)

func (c *comparison) looks(a, b *Indicator) {
	class, effect := NextLook, ""
	if b.ArrivalLooks && !a.ArrivalLooks {
		class, effect = Filling, "the moments of events are kept from now on: at arrival a window is looked at once it is full"
	}
	c.value("looks", class, strings.Join(lookWords(a), ", "), strings.Join(lookWords(b), ", "), effect)
}

func lookWords(in *Indicator) []string {
	var words []string
	if in.SlotLooks {
		words = append(words, "slot")
	}
	if in.ArrivalLooks {
		words = append(words, "arrival")
	}
	return words
}

func (c *comparison) allowance(a, b *Allowance) {
	var before, after string
	if a != nil {
		before = fmt.Sprintf("%v in %s", a.Alerts, a.Every)
	}
	if b != nil {
		after = fmt.Sprintf("%v in %s", b.Alerts, b.Every)
	}
	c.value("allowance", NextLook, before, after, "critical counts are computed anew")
	if a == nil || b == nil {
		return
	}
	c.value("allowance_for", NextLook, whomWord(a), whomWord(b), "")
	c.value("assurance", NextLook, unlessZero(a.Assurance), unlessZero(b.Assurance), "")
	c.value("reserve", NextLook, unlessZero(a.Reserve), unlessZero(b.Reserve), "")
}

func whomWord(a *Allowance) string {
	if a.PerIndicator {
		return "indicator"
	}
	return "series"
}

// unlessZero writes a number, and nothing for 0.
func unlessZero(f float64) string {
	if f == 0 {
		return ""
	}
	return fmt.Sprint(f)
}
