package life

// Allowance is how many false alerts were accepted when a look fell due, and
// what its limit therefore means in years.
type Allowance struct {
	// Text is the allowance as the set-up states it, e.g. "1 in 5y"; For says
	// whether it is that of each "series" or of the whole "indicator".
	Text string `json:"text"`
	For  string `json:"for"`
	// Assurance is the confidence with which it is kept where the usual rate
	// is estimated; 0 for the average.
	Assurance float64 `json:"assurance,omitempty"`
	// Here is how many false alerts a year (of 365.2425 days) are predicted at
	// most on this series while its usual rate holds, over all its windows and
	// tails.
	Here float64 `json:"false_alerts_a_year"`
	// Series have limits under the same indicator, this one included, and All
	// is the sum of what is predicted for them; both are 0 where not all of
	// them are kept in the same place. Where all share an allowance and may lie
	// in several partitions both are as was counted the day before.
	Series int64   `json:"series,omitempty"`
	All    float64 `json:"false_alerts_a_year_of_all,omitempty"`
}
