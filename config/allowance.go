package config

import (
	"errors"
	"fmt"
	"math/big"
	"strconv"
	"strings"
)

// usualReserve is the share of an indicator's allowance that is kept for
// series yet to come unless said otherwise.
const usualReserve = 0.1

// ErrAllowanceSyntax is returned for a text that is no allowance.
var ErrAllowanceSyntax = errors.New(`not a number of false alerts and a span such as "1 in 5y" or "0.5 in 12mo"`)

// ErrAllowanceRange is returned for an allowance of none or of too many.
var ErrAllowanceRange = errors.New("not more than 0 and at most a million false alerts")

// ParseAllowance reads an allowance such as "1 in 5y": the number of false
// alerts, which may have decimals, and the span in which they are accepted. It
// is for each series, on average and without a reserve.
func ParseAllowance(s string) (Allowance, error) {
	alerts, span, found := strings.Cut(s, " in ")
	if !found {
		return Allowance{}, ErrAllowanceSyntax
	}
	d, err := ParseDecimal(alerts)
	if err != nil {
		return Allowance{}, ErrAllowanceSyntax
	}
	every, err := ParseSpan(span)
	if err != nil {
		return Allowance{}, ErrAllowanceSyntax
	}
	f, err := strconv.ParseFloat(d.String(), 64)
	if err != nil || f <= 0 || f > 1e6 {
		return Allowance{}, ErrAllowanceRange
	}
	return Allowance{Alerts: f, Every: every}, nil
}

// String returns the allowance as it is written in a set-up: "1 in 5y".
func (a *Allowance) String() string { return number(a.Alerts) + " in " + a.Every.String() }

// PerYear returns the false alerts accepted in a year of 365.2425 days.
func (a *Allowance) PerYear() float64 { return a.Alerts * a.Every.perYear() }

// readAllowance reads the allowance of an indicator whose baselines are read.
func (s section) readAllowance(in *Indicator) *Allowance {
	n, given, ok := s.get("allowance", textKind)
	if !given {
		for _, key := range []string{"allowance_for", "assurance", "reserve"} {
			if s.has(key) {
				s.fault(key, "means nothing without an allowance", `write e.g. allowance = "1 in 5y", or leave it out`)
			}
		}
		return nil
	}
	if s.has("p_limit") {
		s.fault("allowance", "and p_limit exclude each other: the critical counts follow from the one or from the other", "keep one")
	}
	var a Allowance
	if ok {
		var err error
		if a, err = ParseAllowance(n.text); err != nil {
			s.fault("allowance", fmt.Sprintf("%q is %s", n.text, err), "")
		}
	}
	whom, _ := s.word("allowance_for", 0, "series", "indicator")
	a.PerIndicator = whom == 1
	a.Assurance = s.readAssurance(in)
	a.Reserve = s.readReserve(a.PerIndicator)
	return &a
}

func (s section) readAssurance(in *Indicator) float64 {
	v, given, ok := s.number("assurance")
	if !given || !ok {
		return 0
	}
	if v.Cmp(big.NewRat(1, 2)) < 0 || v.Cmp(big.NewRat(999_999, 1_000_000)) > 0 {
		s.fault("assurance", "is not between 0.5 and 0.999999", "write e.g. 0.9, or leave it out for the average")
		return 0
	}
	if !in.estimated() {
		s.fault("assurance", "means nothing for a known rate: it has no upper bound other than itself", "leave it out")
		return 0
	}
	f, _ := v.Float64()
	return f
}

// estimated reports whether any baseline of the indicator is estimated from
// counts.
func (in *Indicator) estimated() bool {
	for i := range in.Baselines {
		if in.Baselines[i].Kind != Known {
			return true
		}
	}
	return false
}

func (s section) readReserve(perIndicator bool) float64 {
	v, given, ok := s.number("reserve")
	switch {
	case !perIndicator && given:
		s.fault("reserve", "means nothing for an allowance of each series: a new one brings its own", `write allowance_for = "indicator", or leave it out`)
		return 0
	case !perIndicator:
		return 0
	case !given || !ok:
		return usualReserve
	case v.Sign() < 0 || v.Cmp(big.NewRat(9, 10)) > 0:
		s.fault("reserve", "is not between 0 and 0.9", "it is the share of the allowance that is kept for series yet to come, e.g. 0.1")
		return usualReserve
	}
	f, _ := v.Float64()
	return f
}
