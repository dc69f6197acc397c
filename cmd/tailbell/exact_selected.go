package main

import "tailbell/exact"

// selectedBounds are the bounds of a row that was selected among all rows: their
// alpha is the table's times the share of the rows selected, so that of what is
// selected no more than that share of the bounds misses on average (Benjamini
// and Yekutieli 2005).
type selectedBounds struct {
	Alpha      float64  `json:"fcr_alpha"`
	RateLower  *float64 `json:"fcr_rate_lower"`
	RateUpper  *float64 `json:"fcr_rate_upper"`
	RatioLower *float64 `json:"fcr_ratio_lower"`
	RatioUpper *float64 `json:"fcr_ratio_upper"`
	text       []string
}

// selected returns the row's bounds for what was selected; nil for a row that was
// not.
func (t *exactTable) selected(r exactRow, over overAll, i int) (*selectedBounds, error) {
	o := t.options
	if r.ask == nil || !exact.AtMost(over.bh[i], o.alpha) {
		return nil, nil
	}
	o.alpha = over.alpha
	a, err := o.answer(*r.ask)
	if err != nil {
		return nil, err
	}
	values := []float64{a.rateLower * o.per, a.rateUpper * o.per, a.ratioLower, a.ratioUpper}
	b := &selectedBounds{Alpha: o.alpha, text: []string{cell(o.alpha)}}
	for j, to := range []**float64{&b.RateLower, &b.RateUpper, &b.RatioLower, &b.RatioUpper} {
		*to = orNull(values[j])
		b.text = append(b.text, cell(values[j]))
	}
	return b, nil
}

// cells are the bounds as fields of a table.
func (b *selectedBounds) cells() []string {
	if b == nil {
		return make([]string, 5)
	}
	return b.text
}
